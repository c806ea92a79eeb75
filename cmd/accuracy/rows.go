package main

import (
	"fmt"
	"math"
	"math/rand/v2"

	"offbeat/capture/sim"
	"offbeat/dsp"
)

// table lists the rows in the order of the work at the bench: first what a
// resting pair gives, then what turning it does, then what can go wrong.
func table() []row {
	var t []row
	t = append(t, closeRows()...)
	t = append(t, zeroRows()...)
	t = append(t, fadingRows()...)
	t = append(t, smearRows()...)
	t = append(t, identityRows()...)
	t = append(t, stepRows()...)
	t = append(t, nothingRows()...)
	t = append(t, weakRows()...)
	t = append(t, clockRows()...)
	t = append(t, singleRows()...)
	return t
}

// base is a scene with the tones at a random pitch, in either sideband, at sep
// Hz of beat, and a hint that is off by up to a third of the separation.
func base(r *rand.Rand, sep float64) scene {
	s := scene{sim: sim.Config{Rate: 8000, White: true, Tone: 600 + 1200*r.Float64(), Offset: sep, Sideband: "usb", CarrierCN0: 55,
		CarrierDBFS: -26, LocalDBFS: -26}}
	s.cfg.Sideband = dsp.Upper
	if r.IntN(2) == 1 {
		s.sim.Sideband, s.cfg.Sideband = "lsb", dsp.Lower
	}
	s.cfg.LocalTone = s.sim.Tone + s.sign()*sep + math.Abs(sep)/3*(2*r.Float64()-1)
	return s
}

func either(r *rand.Rand) float64 { return float64(2*r.IntN(2) - 1) }

// fade gives the carrier a Rayleigh path of rms width sigma, or two paths the
// second of which is shifted.
func (s *scene) fade(sigma, shift float64) {
	s.sim.Channel, s.sim.SpreadHz, s.sim.PathDelay, s.sim.PathShift = "custom", sigma, 0.001, shift
}

func fadingRows() []row {
	var rows []row
	for _, sigma := range []float64{0.1, 0.5, 1} {
		for _, lop := range []bool{false, true} {
			for _, long := range []float64{120, 1800} {
				name := fmt.Sprintf("fading %g Hz, %g min", sigma, long/60)
				if lop {
					name = fmt.Sprintf("fading %g Hz lopsided, %g min", sigma, long/60)
				}
				share := 0.0
				rows = append(rows, row{name: name, share: share,
					make: func(r *rand.Rand) scene {
						s := base(r, either(r)*(2+6*r.Float64()))
						shift := 0.0
						if lop {
							shift = 2 * sigma
						}
						s.fade(sigma, shift)
						s.sim.Duration = long
						s.note = shift / 2
						return s
					},
					judge: func(all []played) []figure { return judgeMean(all, sigma, long, lop) },
					worse: func(p *played) float64 {
						d := math.Abs(float64(p.summary.Beat) - (p.sim.Offset - p.note))
						if math.IsNaN(d) {
							return math.Inf(1)
						}
						return d
					},
				})
			}
		}
	}
	return rows
}

// judgeMean compares the run's mean with the middle of the spectrum received.
func judgeMean(all []played, sigma, long float64, lop bool) []figure {
	var e, realised, path, missing, measured errs
	wrong, usable := 0, 0
	width := sigma
	limit := spreadLimit(sigma, long)
	if lop { // the spectrum's own limit: integral f^2 S^2 over (integral S)^2
		limit = lopsidedLimit(sigma, 2*sigma, long)
	}
	for i := range all {
		p := &all[i]
		var pw, pf float64
		for _, t := range p.truth {
			w := math.Pow(10, t.CarrierDBFS/10)
			pw += w
			pf += w * t.Received
		}
		e.add(float64(p.summary.Beat)-(p.sim.Offset-p.note), float64(p.summary.BeatU))
		realised.add(float64(p.summary.Beat)-pf/pw, float64(p.summary.BeatU))
		path.add(pf/pw-(p.sim.Offset-p.note), 1)
		var hw, hf float64
		for k, r := range p.readings {
			if t := p.truthAt(k); !math.IsNaN(r.Beat) {
				w := math.Pow(10, t.CarrierDBFS/10)
				hw += w
				hf += w * t.Received
			}
		}
		missing.add(hf/hw-pf/pw, 1)
		measured.add(float64(p.summary.Beat)-hf/hw, 1)
		for _, r := range p.readings {
			if !math.IsNaN(r.Beat) {
				usable++
				if r.Beat*p.sim.Offset < 0 {
					wrong++
				}
			}
		}
	}
	n := len(all)
	return []figure{
		least("means given", percent(e.n(), n), 100, "%"),
		most("rms error / limit of the spread", e.rms()/limit, 1.1, ""),
		told("limit of the spread", limit*1e3, "mHz"),
		told("rms of the realised mean itself / limit", path.rms()/limit, ""),
		told("rms by seconds that are missing / limit", missing.rms()/limit, ""),
		told("rms by readings that are off / limit", measured.rms()/limit, ""),
		told("rms error about the realised mean / limit", realised.rms()/limit, ""),
		least("truth within 2u", e.within(2), 92, "%"),
		most("truth within 2u", e.within(2), 98, "%"),
		most("median u / limit", e.medianU()/limit, 1.2, ""),
		told("seconds with a beat", percent(usable, n*int(long)), "%"),
		told("seconds of the other sign than the beat as sent", float64(wrong), ""),
		told("rms width told / true", medianSpread(all)/width, ""),
	}
}

func medianSpread(all []played) float64 {
	var v []float64
	for i := range all {
		for _, r := range all[i].readings {
			if !math.IsNaN(r.SpreadHz) {
				v = append(v, r.SpreadHz)
			}
		}
	}
	return median(v)
}

// lopsidedLimit is the pulse-pair limit sqrt(integral (f-mu)^2 S^2 df / T) /
// integral S df for two equal Gaussians of width sigma, shift apart; for one it
// is sqrt(sigma/(4 sqrt(pi) T)).
func lopsidedLimit(sigma, shift, span float64) float64 {
	var a, b float64
	h := sigma / 50
	for f := -8 * sigma; f <= shift+8*sigma; f += h {
		s := math.Exp(-f*f/(2*sigma*sigma)) + math.Exp(-(f-shift)*(f-shift)/(2*sigma*sigma))
		a += (f - shift/2) * (f - shift/2) * s * s * h
		b += s * h
	}
	return math.Sqrt(a/span) / b
}
