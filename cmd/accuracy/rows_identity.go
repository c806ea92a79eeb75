package main

import (
	"math"
	"math/rand/v2"

	"offbeat/dsp"
)

// programmed puts a programme on the carrier, heard through the receiver's
// ordinary filter.
func (s *scene) programmed() {
	s.sim.SecondPulses, s.sim.Tones, s.sim.Subcarrier, s.sim.Speech = true, true, true, true
}

// unhinted is a fading carrier and a local of which nothing was told.
func unhinted(r *rand.Rand) scene {
	s := base(r, either(r)*(3+9*r.Float64()))
	s.cfg.LocalTone = 0
	s.sim.White = false
	s.sim.CarrierCN0 = 50 + 10*r.Float64()
	s.sim.LocalDBFS = s.sim.CarrierDBFS + 10*(2*r.Float64()-1)
	s.fade(0.05*math.Pow(10, r.Float64()), 0)
	if r.IntN(2) == 0 {
		s.sim.RiceK = 4
	}
	if r.IntN(2) == 0 {
		s.programmed()
	}
	s.sim.AGC = r.IntN(2) == 0
	s.sim.Duration = 60
	return s
}

// swapped says that reading i takes one tone for the other: each nearer to where
// the other one is.
func (p *played) swapped(i int) bool {
	r, t := &p.readings[i], p.truthAt(i)
	return math.Abs(r.CarrierTone-t.LocalTone) < math.Abs(r.CarrierTone-t.CarrierTone) &&
		math.Abs(r.LocalTone-t.CarrierTone) < math.Abs(r.LocalTone-t.LocalTone)
}

// mistaken says that reading i claims a wrong identity: tones swapped, or a
// sign against the beat as sent and as received, where that exceeds 1 Hz and
// both tones are there: a claim about tones that are not is judged elsewhere.
func (p *played) mistaken(i int) bool {
	r, t := &p.readings[i], p.truthAt(i)
	if !t.Carrier || !t.Local || !(math.Abs(t.Beat) > 1) {
		return false
	}
	return r.Beat*t.Beat < 0 && r.Beat*t.Received < 0 || r.State == dsp.Apart && p.swapped(i)
}

func (p *played) mistakes() (n int) {
	for i := range p.readings {
		if p.mistaken(i) {
			n++
		}
	}
	return n
}

// identifiedBy says that one of the last three readings before a time is apart.
func (p *played) identifiedBy(time float64) bool {
	for i := range p.readings {
		if r := &p.readings[i]; r.T < time && r.T > time-3 && r.State == dsp.Apart && !p.mistaken(i) {
			return true
		}
	}
	return false
}

func judgeIdentity(all []played) []figure {
	wrong, scenes, known, unsure, late := 0, 0, 0, 0, 0
	var size errs
	for i := range all {
		p := &all[i]
		n := p.mistakes()
		wrong += n
		if n > 0 {
			scenes++
		}
		switch {
		case p.identifiedBy(30):
			known++
		case len(p.readings) >= 30 && p.readings[29].State == dsp.Unsure:
			unsure++
		}
		if p.identifiedBy(60) {
			late++
		}
		for k, r := range p.readings {
			if !math.IsNaN(r.Beat) {
				size.add(r.Beat-p.truthAt(k).Received, r.BeatU)
			}
		}
	}
	return []figure{
		most("seconds with a wrong identity", float64(wrong), 0, ""),
		told("such scenes", float64(scenes), ""),
		least("identified at 30 s", percent(known, len(all)), 92, "%"),
		told("unsure at 30 s", percent(unsure, len(all)), "%"),
		told("identified at 60 s", percent(late, len(all)), "%"),
		told("median error of a second's beat as received", size.medianSize()*1e3, "mHz"),
	}
}

// judgeBare asks two bare steady tones to stay unsure, with the right size.
func judgeBare(all []played) []figure {
	var size errs
	seconds, unsure, signed := 0, 0, 0
	for i := range all {
		p := &all[i]
		for k, r := range p.readings {
			if !math.IsNaN(r.Beat) {
				signed++
			}
			if r.T < 5 {
				continue
			}
			seconds++
			if r.State == dsp.Unsure && !math.IsNaN(r.BeatAbs) {
				unsure++
				size.add(r.BeatAbs-math.Abs(p.truthAt(k).Beat), r.BeatU)
			}
		}
	}
	return []figure{
		most("readings with a sign", float64(signed), 0, ""),
		least("seconds unsure, with a size", percent(unsure, seconds), 100, "%"),
		told("rms error of the size", size.rms()*1e3, "mHz"),
		least("size within 4u", size.within(4), 99, "%"),
		told("size within 2u", size.within(2), "%"),
	}
}

func identityRows() []row {
	return []row{
		{name: "no hint, fading", make: unhinted, judge: judgeIdentity,
			worse: func(p *played) float64 {
				v := 100 * float64(p.mistakes())
				if !p.identifiedBy(30) {
					v++
				}
				return v
			}},
		{name: "no hint, bare steady tones",
			make: func(r *rand.Rand) scene {
				s := base(r, either(r)*(3+9*r.Float64()))
				s.cfg.LocalTone = 0
				s.sim.CarrierCN0 = 50 + 10*r.Float64()
				s.sim.LocalDBFS = s.sim.CarrierDBFS + 10*(2*r.Float64()-1)
				s.sim.Duration = 60
				return s
			},
			judge: judgeBare,
			worse: func(p *played) (n float64) {
				for _, r := range p.readings {
					if r.T >= 5 && r.State != dsp.Unsure {
						n++
					}
				}
				return n
			}},
	}
}
