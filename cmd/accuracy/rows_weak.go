package main

import (
	"fmt"
	"math"
	"math/rand/v2"
)

func judgeWeak(all []played, given float64) []figure {
	var e, over errs
	seconds, n, wrong := 0, 0, 0
	for i := range all {
		p := &all[i]
		e.add(float64(p.summary.Beat)-p.sim.Offset, float64(p.summary.BeatU))
		over.add((float64(p.summary.Beat)-p.sim.Offset)/lineBound(p.sim.CarrierCN0, p.sim.Duration), 1)
		for _, r := range p.readings {
			n++
			if !math.IsNaN(r.Beat) {
				seconds++
				if r.Beat*p.sim.Offset < 0 {
					wrong++
				}
			}
		}
	}
	return []figure{
		least("means given", percent(e.n(), len(all)), given, "%"),
		least("rms(error/u)", e.honest(), 0.7, ""),
		most("rms(error/u)", e.honest(), 1.3, ""),
		told("rms error", e.rms()*1e3, "mHz"),
		told("rms error / the line's bound over the scene", over.rms(), ""),
		told("truth within 2u", e.within(2), "%"),
		told("seconds with a beat", percent(seconds, n), "%"),
		most("seconds with a wrong sign", float64(wrong), 0, ""),
	}
}

// awayFrom and awayTo are when one of the tones is not there, s.
const awayFrom, awayTo = 60.0, 120.0

// absence returns the seconds with a beat while one of the tones is away, the
// first three not counted, and how long it takes until there is one again.
func (p *played) absence() (meanwhile int, wait float64) {
	wait = math.Inf(1)
	for _, r := range p.readings {
		switch known := !math.IsNaN(r.Beat); {
		case known && r.T > awayFrom+3 && r.T < awayTo:
			meanwhile++
		case known && r.T > awayTo:
			wait = min(wait, r.T+0.5-awayTo)
		}
	}
	return meanwhile, wait
}

func judgeAway(all []played) []figure {
	var e, waits errs
	meanwhile, scenes, back, wrong := 0, 0, 0, 0
	for i := range all {
		p := &all[i]
		n, found := p.absence()
		wrong += p.mistakes()
		meanwhile += n
		if n > 0 {
			scenes++
		}
		if found <= 10 {
			back++
		}
		waits.add(found, 1)
		e.add(float64(p.summary.Beat)-p.sim.Offset, float64(p.summary.BeatU))
	}
	return []figure{
		most("seconds with a beat meanwhile, after 3 s", float64(meanwhile), 0, ""),
		told("such scenes", float64(scenes), ""),
		most("seconds with a wrong identity", float64(wrong), 0, ""),
		least("back within 10 s", percent(back, len(all)), 100, "%"),
		told("median wait", median(waits.d), "s"),
		least("means given", percent(e.n(), len(all)), 100, "%"),
		least("mean within 2u", e.within(2), 90, "%"),
		told("rms error", e.rms()*1e3, "mHz"),
		told("rms(error/u)", e.honest(), ""),
	}
}

func weakRows() []row {
	var rows []row
	meanOff := func(p *played) float64 {
		d := math.Abs(float64(p.summary.Beat)-p.sim.Offset) / float64(p.summary.BeatU)
		if math.IsNaN(d) {
			return math.Inf(1)
		}
		return d
	}
	for _, c := range []struct{ cn0, given float64 }{{30, 100}, {25, 100}, {20, 50.1}} {
		rows = append(rows, row{name: fmt.Sprintf("weak %g dB-Hz", c.cn0),
			make: func(r *rand.Rand) scene {
				s := base(r, either(r)*(2+6*r.Float64()))
				s.sim.CarrierCN0 = c.cn0
				s.sim.LocalDBFS = s.sim.CarrierDBFS + 10 + 10*r.Float64()
				s.sim.Duration = 120
				return s
			},
			judge: func(all []played) []figure { return judgeWeak(all, c.given) },
			worse: meanOff})
	}
	for _, carrier := range []bool{true, false} {
		for _, fading := range []bool{false, true} {
			name := "local away a minute, steady"
			if carrier {
				name = "carrier away a minute, steady"
			}
			if fading {
				name = name[:len(name)-len("steady")] + "Rice 4"
			}
			rows = append(rows, row{name: name,
				make: func(r *rand.Rand) scene {
					s := base(r, either(r)*(2+6*r.Float64()))
					if fading { // F.1487's quiet paths
						s.fade(0.05, 0)
						s.sim.PathDelay, s.sim.RiceK = 0.0005, 4
					}
					away := [][2]float64{{awayFrom, awayTo}}
					if carrier {
						s.sim.CarrierAway = away
					} else {
						s.sim.LocalAway = away
					}
					s.sim.Duration = 180
					return s
				},
				judge: judgeAway,
				worse: func(p *played) float64 {
					n, wait := p.absence()
					v := meanOff(p) + 100*float64(n+p.mistakes())
					if wait > 10 {
						v += 50
					}
					return v
				}})
		}
	}
	return rows
}
