package main

import (
	"math"
	"math/rand/v2"

	"offbeat/capture/sim"
)

// throughZero turns the trimmer from 3 to 6 Hz on one side to 2 to 5 Hz on the
// other in 20 to 50 s.
func throughZero(r *rand.Rand) scene {
	side := either(r)
	from, to := side*(3+3*r.Float64()), -side*(2+3*r.Float64())
	lead, over := 20+10*r.Float64(), 20+30*r.Float64()
	s := base(r, from)
	s.sim.Trims = []sim.Turn{{At: lead, By: to - from, Over: over}}
	s.sim.Duration = lead + over + 40
	return s
}

// toZeroAndBack turns it to zero beat, lets it rest for 10 s and turns it back.
func toZeroAndBack(r *rand.Rand) scene {
	side := either(r)
	from, to := side*(3+3*r.Float64()), side*(2+3*r.Float64())
	lead, over := 20+10*r.Float64(), 10+15*r.Float64()
	s := base(r, from)
	s.sim.Trims = []sim.Turn{{At: lead, By: -from, Over: over}, {At: lead + over + 10, By: to, Over: over}}
	s.sim.Duration = lead + 2*over + 50
	return s
}

// judgeZero asks for the right sign wherever the beat is clear of zero, and
// for the state apart soon after the tones have parted.
func judgeZero(all []played, within, share float64) []figure {
	wrong, seconds, back, givenTurn, turnSecs := 0, 0, 0, 0, 0
	var turning errs
	var waits []float64
	for i := range all {
		p := &all[i]
		bad := false
		moved := p.sim.Trims
		near, left, found := math.NaN(), math.NaN(), math.NaN()
		for k, r := range p.readings {
			t := p.truthAt(k)
			if !math.IsNaN(r.Beat) && r.Beat*t.Beat < 0 && math.Abs(t.Beat) > 0.7 {
				seconds++
				bad = true
			}
			if math.Abs(t.Beat) < 0.7 {
				near, left, found = r.T, math.NaN(), math.NaN()
			}
			if !math.IsNaN(near) && math.IsNaN(left) && math.Abs(t.Beat) > 2 {
				left = r.T
			}
			if !math.IsNaN(left) && math.IsNaN(found) && r.State == "apart" && !math.IsNaN(r.Beat) {
				found = r.T
			}
			for _, m := range moved {
				if r.T > m.At+0.5 && r.T < m.At+m.Over-0.5 {
					turnSecs++
					if !math.IsNaN(r.Beat) {
						givenTurn++
						turning.add(r.Beat-t.Received, r.BeatU)
					}
				}
			}
		}
		if bad {
			wrong++
		}
		wait := found - left
		if math.IsNaN(wait) {
			wait = 999
		}
		waits = append(waits, wait)
		if wait <= within {
			back++
		}
	}
	return []figure{
		most("scenes with a wrong sign beyond 0.7 Hz", float64(wrong), 0, ""),
		told("such seconds", float64(seconds), ""),
		most("seconds said to be nearer zero beat than they are", float64(tooNear(all)), 0, ""),
		least("apart again in time", percent(back, len(all)), share, "%"),
		told("median wait after 2 Hz", median(waits), "s"),
		most("median error while it turns", turning.medianSize()*1e3, 50, "mHz"),
		told("seconds of turning with a beat", percent(givenTurn, turnSecs), "%"),
		told("error within 2u while it turns", turning.within(2), "%"),
	}
}

func zeroRows() []row {
	var rows []row
	add := func(name string, make func(r *rand.Rand) scene, change func(r *rand.Rand, s *scene), within, share float64) {
		rows = append(rows, row{name: name,
			make: func(r *rand.Rand) scene {
				s := make(r)
				change(r, &s)
				return s
			},
			judge: func(all []played) []figure { return judgeZero(all, within, share) },
			worse: func(p *played) float64 {
				n := 0.0
				for k, r := range p.readings {
					t := p.truthAt(k)
					if !math.IsNaN(r.Beat) && r.Beat*t.Beat < 0 && math.Abs(t.Beat) > 0.7 {
						n += 10
					}
					if math.IsNaN(r.Beat) {
						n += 0.1
					}
				}
				return n
			}})
	}
	all := func(r *rand.Rand, s *scene) {
		s.sim.CarrierCN0 = 52
		s.sim.SecondPulses, s.sim.Tones, s.sim.Subcarrier = true, true, true
		s.sim.ReceiverDrift = 6*r.Float64() - 3
		if r.IntN(2) == 0 {
			s.fade(0.1, 0)
			s.sim.RiceK = 4
		}
		s.sim.AGC = r.IntN(2) == 0
	}
	hard := func(r *rand.Rand, s *scene) {
		all(r, s)
		s.sim.CarrierCN0 = 40 + 15*r.Float64()
		s.sim.RiceK = 0
		s.fade(math.Pow(10, r.Float64()-1), 0)
		s.sim.LocalDBFS = s.sim.CarrierDBFS + 10*(2*r.Float64()-1)
	}
	add("through zero", throughZero, all, 8, 100)
	add("to zero and back", toZeroAndBack, all, 8, 100)
	add("through zero, Rayleigh", throughZero, hard, 20, 98)
	add("to zero and back, Rayleigh", toZeroAndBack, hard, 20, 98)
	return rows
}
