package main

import (
	"fmt"
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/mat"

	"offbeat/dsp"
)

// slowBeat is a beat of lo to hi mHz beside the input's offset, for some minutes.
func slowBeat(r *rand.Rand, hookup string, lo, hi, minutes float64) scene {
	var s scene
	s.sim.Hookup, s.cfg.Hookup = hookup, dsp.Hookup(hookup)
	s.sim.Rate, s.sim.CarrierDBFS = 100, -20
	s.sim.Offset = 1e-3 * lo * math.Pow(hi/lo, r.Float64()) * either(r)
	s.sim.Sideband, s.cfg.Sideband = "usb", dsp.Upper
	if r.IntN(2) == 1 {
		s.sim.Sideband, s.cfg.Sideband = "lsb", dsp.Lower
	}
	s.sim.CarrierCN0 = 40 + 20*r.Float64()
	s.sim.DC = 0.05 * (2*r.Float64() - 1)
	s.sim.Duration = 60 * minutes
	return s
}

// offsetBound is the Cramer-Rao bound on the frequency of one line beside an
// unknown offset over the whole scene, Hz: from the information matrix of
// amplitude, phase, frequency and offset, the sum over samples written out and
// inverted by gonum. A mixer's line is real.
func (p *played) offsetBound() float64 {
	const rate = 4.0 // the sums need no more points than this a second
	n := 4
	if p.cfg.Hookup == dsp.Quadrature {
		n = 5
	}
	amp, half := math.Pow(10, p.sim.CarrierDBFS/20), p.sim.Duration/2
	sigma2 := amp * amp / math.Pow(10, p.sim.CarrierCN0/10) * rate / 4 // of a component, at this rate
	if n == 5 {
		sigma2 *= 2
	}
	info := mat.NewSymDense(n, nil)
	add := func(d ...float64) {
		for i := range n {
			for j := i; j < n; j++ {
				info.SetSym(i, j, info.At(i, j)+d[i]*d[j]/sigma2)
			}
		}
	}
	for i := range int(p.sim.Duration * rate) {
		t := (float64(i)+0.5)/rate - half
		sin, cos := math.Sincos(2 * math.Pi * phaseAt(p, t+half))
		add(amp*cos, -amp*sin, -amp*sin*t/half, 1, 0)
		if n == 5 {
			add(amp*sin, amp*cos, amp*cos*t/half, 0, 1)
		}
	}
	var c mat.Dense
	if c.Inverse(info) != nil {
		return math.Inf(1)
	}
	return math.Sqrt(c.At(2, 2)) / (2 * math.Pi * half)
}

// restError is the last reading's error: in size where there is no sign.
func (p *played) restError() float64 {
	r := p.readings[len(p.readings)-1]
	if p.cfg.Hookup == dsp.Mixer {
		return r.BeatAbs - math.Abs(p.sim.Offset)
	}
	return r.Beat - p.sim.Offset
}

// falseSigns counts signs where there are none, or wrong ones.
func (p *played) falseSigns() (n int) {
	for _, r := range p.readings {
		if r.Beat*p.sim.Offset < 0 || p.cfg.Hookup == dsp.Mixer && !math.IsNaN(r.Beat) {
			n++
		}
	}
	return n
}

func judgeSingle(all []played) []figure {
	var e, over errs
	signs := 0
	for i := range all {
		p := &all[i]
		r := p.readings[len(p.readings)-1]
		e.add(p.restError(), r.BeatU)
		over.add(p.restError()/p.offsetBound(), 1)
		signs += p.falseSigns()
	}
	return []figure{
		least("a number at the end", percent(e.n(), len(all)), 100, "%"),
		most("rms of error / bound at the end", over.rms(), 1.3, ""),
		most("wrong signs, or signs where there are none", float64(signs), 0, ""),
		told("truth within 2u", e.within(2), "%"),
		told("rms(error/u)", e.honest(), ""),
		told("rms error", e.rms()*1e6, "uHz"),
	}
}

// singleRows: a mixer's beat needs more than a turn before its level tells the
// frequency from the offset, so the slowest are given the time for it.
func singleRows() []row {
	var rows []row
	for _, c := range []struct {
		hookup          string
		lo, hi, minutes float64
	}{
		{"mixer", 10, 30, 5}, {"mixer", 3, 30, 10}, {"mixer", 1, 3, 30}, {"mixer", 3, 30, 30},
		{"quadrature", 1, 3, 5}, {"quadrature", 3, 30, 5}, {"quadrature", 1, 30, 10}, {"quadrature", 1, 30, 30},
	} {
		rows = append(rows, row{name: fmt.Sprintf("%s %g to %g mHz, %g min", c.hookup, c.lo, c.hi, c.minutes), share: 0.5,
			make:  func(r *rand.Rand) scene { return slowBeat(r, c.hookup, c.lo, c.hi, c.minutes) },
			judge: judgeSingle,
			worse: func(p *played) float64 {
				d := math.Abs(p.restError())/p.offsetBound() + 100*float64(p.falseSigns())
				if math.IsNaN(d) {
					return math.Inf(1)
				}
				return d
			}})
	}
	return rows
}
