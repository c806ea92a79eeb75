package main

import (
	"fmt"
	"math"
	"math/rand/v2"

	"offbeat/capture/sim"
)

// trimTo is a scene that rests at 4 Hz, is trimmed to sep, and rests again for
// rest seconds.
func trimTo(r *rand.Rand, sep, rest float64) scene {
	from := either(r) * (3.5 + r.Float64())
	s := base(r, from)
	s.sim.CarrierCN0 = 60
	lead, over := 15+10*r.Float64(), 10+20*r.Float64()
	sep *= either(r)
	s.sim.Trims = []sim.Turn{{At: lead, By: sep - from, Over: over}}
	s.sim.Duration = lead + over + rest
	s.note = sep
	s.from = lead + over
	return s
}

// judgeRest looks at the readings at rest.
func judgeRest(all []played, bounded bool) []figure {
	var last, every, ratio errs
	wrong, given, right, n, far, signs := 0, 0, 0, 0, 0, 0
	for i := range all {
		p := &all[i]
		bad := false
		for _, r := range p.readings {
			t := p.truthAt(int(r.T))
			if !math.IsNaN(r.Beat) && r.Beat*t.Beat < 0 && math.Abs(t.Beat) > 0 {
				signs++
				bad = true
			}
			if r.T < p.from+5 || math.IsNaN(r.Beat) {
				continue
			}
			every.add(r.Beat-p.note, r.BeatU)
			if math.Abs(r.Beat-p.note) > 4*r.BeatU {
				far++
			}
		}
		if bad {
			wrong++
		}
		n++
		r := p.readings[len(p.readings)-1]
		if !math.IsNaN(r.Beat) {
			given++
			last.add(r.Beat-p.note, r.BeatU)
			ratio.add((r.Beat-p.note)/twoBound(p, r.Span), r.BeatU)
			if math.Abs(r.Beat-p.note) < 0.01 {
				right++
			}
		}
	}
	f := []figure{
		least("right to 10 mHz at the end", percent(right, n), 90, "%"),
		told("a number at the end", percent(given, n), "%"),
		told("rms error at the end", last.rms()*1e3, "mHz"),
		most("scenes with a wrong sign", float64(wrong), 0, ""),
		told("seconds with a wrong sign", float64(signs), ""),
		most("readings at rest beyond 4u", percent(far, every.n()), 1, "%"),
		told("readings at rest within 2u", every.within(2), "%"),
		most("seconds said to be nearer zero beat than they are", float64(tooNear(all)), 0, ""),
	}
	if bounded {
		f = append(f, most("rms error at the end", last.rms()*1e3, 0.1, "mHz"), most("rms error / joint bound of its span", ratio.rms(), 1.5, ""))
	}
	return f
}

// tooNear counts the seconds whose bound of a beat not measured yet is wrong. A
// local that is being turned has a second's grace.
func tooNear(all []played) int {
	n := 0
	for i := range all {
		for k, r := range all[i].readings {
			t := all[i].truthAt(k)
			was := all[i].truthAt(max(0, k-1))
			is := min(math.Abs(t.Beat), math.Abs(t.Received), math.Abs(was.Beat), math.Abs(was.Received))
			if is > r.BeatWithin {
				n++
			}
		}
	}
	return n
}

func closeRows() []row {
	var rows []row
	worse := func(p *played) float64 {
		d := 0.0
		for i, r := range p.readings {
			if t := p.truthAt(i); !math.IsNaN(r.Beat) && r.Beat*t.Beat < 0 {
				d += 100
			}
		}
		r := p.readings[len(p.readings)-1]
		if math.IsNaN(r.Beat) {
			return d + 10
		}
		return d + math.Abs(r.Beat-p.note)
	}
	add := func(name string, seps []float64, bounded bool, change func(r *rand.Rand, s *scene)) {
		rows = append(rows, row{name: name, worse: worse,
			make: func(r *rand.Rand) scene {
				s := trimTo(r, seps[r.IntN(len(seps))], 180)
				change(r, &s)
				return s
			},
			judge: func(all []played) []figure { return judgeRest(all, bounded) }})
	}
	seps := []float64{0.02, 0.05, 0.2, 0.5}
	level := func(r *rand.Rand, s *scene) { s.sim.LocalDBFS = s.sim.CarrierDBFS + 6*(2*r.Float64()-1) }
	for _, sep := range seps {
		add(fmt.Sprintf("close %g Hz, steady", sep), []float64{sep}, true, level)
	}
	agc := func(s *scene) { s.sim.AGC = true }
	programme := func(s *scene) {
		s.sim.SecondPulses, s.sim.Tones, s.sim.Subcarrier, s.sim.Speech = true, true, true, true
	}
	drift := func(r *rand.Rand, s *scene) { s.sim.ReceiverDrift = 0.3 * either(r) }
	// A fading carrier is heard for a good minute first: before that nobody can
	// know how much of it stands still.
	rice := func(s *scene) {
		s.fade(0.1, 0)
		s.sim.RiceK = 4
		s.sim.Trims[0].At += 60
		s.sim.Duration += 60
		s.from += 60
	}
	add("close, gain control", seps, false, func(r *rand.Rand, s *scene) { level(r, s); agc(s) })
	add("close, programme", seps, false, func(r *rand.Rand, s *scene) { level(r, s); programme(s) })
	add("close, drift 0.3 Hz/min", seps, false, func(r *rand.Rand, s *scene) { level(r, s); drift(r, s) })
	add("close, Rice 4 at 0.1 Hz", seps, false, func(r *rand.Rand, s *scene) { level(r, s); rice(s) })
	add("close, equal levels", seps, false, func(r *rand.Rand, s *scene) {})
	add("close, all together", seps, false, func(r *rand.Rand, s *scene) { agc(s); programme(s); drift(r, s); rice(s) })
	return rows
}

// twoBound is the Cramer-Rao bound on the difference of two close lines, for
// amplitudes, phases, frequencies and one common chirp, over the span that ends
// with the scene.
func twoBound(p *played, span float64) float64 {
	const n = 400
	sep := p.note
	a := math.Pow(10, (p.sim.CarrierDBFS)/20)
	b := math.Pow(10, (p.sim.LocalDBFS)/20)
	n0 := a * a / math.Pow(10, p.sim.CarrierCN0/10) // density of |z|^2
	mid := p.sim.Duration - span/2
	phase := 2 * math.Pi * phaseAt(p, mid)
	return crb(a, b, 2*math.Pi*sep, phase, span, n0, n)
}

// phaseAt returns the beat's phase in turns, from the truth of the nearest
// second.
func phaseAt(p *played, t float64) float64 {
	i := max(0, min(len(p.truth)-1, int(t)))
	k := p.truth[i]
	return k.Phase + k.Beat*(t-k.T)
}
