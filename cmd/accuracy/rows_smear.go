package main

import (
	"fmt"
	"math"
	"math/rand/v2"

	"offbeat/capture/sim"
)

const (
	smearSigma = 0.1 // rms, Hz: F.1487's "Doppler spread" of 0.2 Hz
	phantom    = 1.0 // Hz: so far off is a tone that is not there, not an error
)

// intoSmear is a local that is trimmed from 4 Hz into the carrier's smear and
// rests there for ten minutes.
func intoSmear(r *rand.Rand) scene {
	from, sep := either(r)*4, either(r)*(0.05+0.05*r.Float64())
	s := base(r, from)
	s.sim.CarrierCN0 = 60
	s.fade(smearSigma, 0)
	s.sim.LocalDBFS = s.sim.CarrierDBFS + 3*(2*r.Float64()-1)
	s.sim.Trims = []sim.Turn{{At: 60, By: sep - from, Over: 15}}
	s.note, s.from = sep, 75
	s.sim.Duration = s.from + 600
	return s
}

// restMean returns the mean of the readings at rest, weighted by the carrier's
// power, which is what the spread's limit is the limit of; and their number.
// Only those within reach of the beat as sent count.
func (p *played) restMean(reach float64) (mean float64, n int) {
	var w, wf float64
	for _, r := range p.readings {
		if r.T > p.from && math.Abs(r.Beat-p.note) < reach {
			k := math.Pow(10, (r.CarrierDBFS-r.LocalDBFS)/10)
			w += k
			wf += k * r.Beat
			n++
		}
	}
	return wf / w, n
}

// judgeSmear; only coverage is bounded where what can be had is only told.
func judgeSmear(all []played, bounded bool) []figure {
	var over, near, e errs
	var seconds, spans []float64
	wrong, late, rest, phantoms, haunted := 0, 0, 0, 0, 0
	for i := range all {
		p := &all[i]
		mean, n := p.restMean(math.Inf(1))
		m, k := p.restMean(phantom)
		if phantoms += n - k; n > k {
			haunted++
		}
		if k > 0 {
			near.add((m-p.note)/spreadLimit(smearSigma, float64(k)), 1)
		}
		if n > 0 {
			limit := spreadLimit(smearSigma, float64(n))
			over.add((mean-p.note)/limit, 1)
			e.add(mean-p.note, limit)
			if mean*p.note < 0 {
				wrong++
			}
		}
		seconds = append(seconds, float64(n))
		for k, r := range p.readings {
			if r.T < p.from {
				continue
			}
			rest++
			if !math.IsNaN(r.Beat) {
				spans = append(spans, r.Span)
				if r.Beat*p.truthAt(k).Beat < 0 {
					late++
				}
			}
		}
	}
	name := "rms error / limit of the seconds given"
	f := told(name, over.rms(), "")
	if bounded {
		f = most(name, over.rms(), 1.4, "")
	}
	return []figure{
		f,
		least("truth within 2u of that limit", over.within(2), 85, "%"),
		most("seconds at rest that are off by more than 1 Hz", float64(phantoms), 0, ""),
		told("such scenes", float64(haunted), ""),
		told("rms error / limit without those", near.rms(), ""),
		told("truth within 2u without those", near.within(2), "%"),
		told("scenes with a mean at rest", percent(e.n(), len(all)), "%"),
		told("median of the seconds given, of 600", median(seconds), "s"),
		told("median span of a reading at rest", median(spans), "s"),
		told("rms error of the mean", e.rms()*1e3, "mHz"),
		told("scenes whose mean has the wrong sign", float64(wrong), ""),
		told("seconds of the other sign than the beat as sent", percent(late, rest), "%"),
	}
}

func judgeRice(all []played) []figure {
	var e errs
	for i := range all {
		p := &all[i]
		e.add(float64(p.summary.Beat)-p.sim.Offset, float64(p.summary.BeatU))
	}
	return []figure{
		least("means given", percent(e.n(), len(all)), 100, "%"),
		most("median u / rms error", e.medianU()/e.rms(), 1.5, ""),
		least("truth within 2u", e.within(2), 90, "%"),
		told("rms error", e.rms()*1e3, "mHz"),
		told("rms(error/u)", e.honest(), ""),
		told("rms error / limit of a Rayleigh carrier as wide", e.rms()/spreadLimit(smearSigma, all[0].sim.Duration), ""),
	}
}

func smearRows() []row {
	var rows []row
	add := func(name string, bounded bool, change func(r *rand.Rand, s *scene)) {
		rows = append(rows, row{name: name, share: 0.5,
			make: func(r *rand.Rand) scene {
				s := intoSmear(r)
				change(r, &s)
				return s
			},
			judge: func(all []played) []figure { return judgeSmear(all, bounded) },
			worse: func(p *played) float64 {
				mean, n := p.restMean(math.Inf(1))
				if n == 0 {
					return math.Inf(1)
				}
				return math.Abs(mean-p.note) / spreadLimit(smearSigma, float64(n))
			}})
	}
	add("inside the smear", true, func(*rand.Rand, *scene) {})
	add("inside the smear, drift 0.2 Hz/min", true, func(r *rand.Rand, s *scene) { s.sim.ReceiverDrift = 0.2 * either(r) })
	add("inside the smear, gain control", false, func(_ *rand.Rand, s *scene) { s.sim.AGC = true })
	add("inside the smear, local 10 dB weaker", false, func(_ *rand.Rand, s *scene) { s.sim.LocalDBFS = s.sim.CarrierDBFS - 10 })
	for _, k := range []float64{4, 20} {
		for _, minutes := range []float64{2, 10} {
			rows = append(rows, row{name: fmt.Sprintf("Rice %g, %g min", k, minutes),
				make: func(r *rand.Rand) scene {
					s := base(r, either(r)*(4+4*r.Float64()))
					s.fade(smearSigma, 0)
					s.sim.RiceK = k
					s.sim.Duration = 60 * minutes
					return s
				},
				judge: judgeRice,
				worse: func(p *played) float64 {
					d := math.Abs(float64(p.summary.Beat)-p.sim.Offset) / float64(p.summary.BeatU)
					if math.IsNaN(d) {
						return math.Inf(1)
					}
					return d
				}})
		}
	}
	return rows
}
