package main

import (
	"math"
	"math/rand/v2"
)

// setOff of the local from the carrier, Hz: a sample clock 150 ppm off makes
// 15 mHz of it.
const setOff = 100

func judgeClock(all []played) []figure {
	var clock, e, start errs
	n := 0
	for i := range all {
		p := &all[i]
		e.add(float64(p.summary.Beat)-setOff-p.sim.Offset, float64(p.summary.BeatU))
		last := p.readings[len(p.readings)-1]
		clock.add(last.ClockError-p.sim.ClockError, last.ClockErrorU)
		for _, r := range p.readings {
			if !math.IsNaN(r.ClockError) {
				start.add(r.T, 1)
				break
			}
		}
		if math.Abs(last.ClockError-p.sim.ClockError) <= 0.5e-6 {
			n++
		}
	}
	worst := func(d []float64) (v float64) {
		for _, x := range d {
			v = max(v, math.Abs(x))
		}
		return v
	}
	return []figure{
		least("clock known to 0.5 ppm at the end", percent(n, len(all)), 100, "%"),
		told("worst error of the clock", worst(clock.d)*1e6, "ppm"),
		told("median u of the clock", clock.medianU()*1e6, "ppm"),
		told("rms(error/u) of the clock", clock.honest(), ""),
		told("median time until it is told", median(start.d), "s"),
		least("means given", percent(e.n(), len(all)), 100, "%"),
		most("worst error of the mean", worst(e.d)*1e3, 0.1, "mHz"),
		told("rms error of the mean", e.rms()*1e3, "mHz"),
		told("rms(error/u) of the mean", e.honest(), ""),
	}
}

func clockRows() []row {
	return []row{{name: "set-off 100 Hz, clock 150 ppm off, 2 h", share: 0.05,
		make: func(r *rand.Rand) scene {
			s := base(r, either(r)*3*r.Float64())
			s.sim.White = false
			s.sim.ClockError = 150e-6 * either(r)
			s.sim.Local = 10e6 + setOff
			s.cfg.Local = s.sim.Local
			s.cfg.LocalTone += s.sign() * setOff
			s.sim.SecondPulses = true
			s.sim.Duration = 7200
			return s
		},
		judge: judgeClock,
		worse: func(p *played) float64 { return math.Abs(float64(p.summary.Beat) - setOff - p.sim.Offset) }}}
}
