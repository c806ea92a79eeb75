package main

import (
	"math"
	"math/rand/v2"

	"offbeat/capture/sim"
	"offbeat/dsp"
)

// Speech without a carrier is not among these scenes: the simulated bench
// modulates a carrier only.

// The kinds of sound that is no carrier.
type clutter func(r *rand.Rand, s *scene, cn0 float64)

// ringing is noise through a filter lo to hi Hz wide around where the carrier
// would be. Up to 85 Hz it is the fading part of a path, which is nothing but
// noise of a Gaussian spectrum; wider, noise through the receiver's own filter.
// cn0 is the carrier's, dB-Hz; below 0 there is no carrier.
func ringing(lo, hi float64) clutter {
	return func(r *rand.Rand, s *scene, cn0 float64) {
		const fwhm = 2.355 // of a Gaussian by its rms width
		w := lo * math.Pow(hi/lo, r.Float64())
		carrier := cn0 >= 0
		if !carrier {
			cn0 = 35 + 20*r.Float64() // that of the local, at equal levels
		}
		if w > 85 {
			s.sim.White, s.sim.CarrierCN0 = false, cn0
			s.sim.Passband = [2]float64{s.sim.Tone - w/2, s.sim.Tone + w/2}
			s.sim.LocalDBFS = s.sim.CarrierDBFS
			if !carrier {
				s.sim.CarrierAway = always
			}
			return
		}
		s.fade(min(15, w/fwhm), max(0, w-15*fwhm))
		s.sim.CarrierDBFS, s.sim.CarrierCN0 = -60, 50+10*math.Log10(w) // the path's power; the filter stops 50 dB
		line := s.sim.CarrierDBFS - 10*math.Log10(w) + cn0
		s.sim.LocalDBFS = line
		if carrier { // steady in it: the path's steady part
			s.sim.RiceK = math.Pow(10, cn0/10) / w
			up := 10 * math.Log10(1+s.sim.RiceK)
			s.sim.CarrierDBFS += up
			s.sim.CarrierCN0 += up
			s.sim.CarrierDBFS, s.sim.LocalDBFS = s.sim.CarrierDBFS-10, s.sim.LocalDBFS-10
		}
	}
}

// spurious puts steady tones of the receiver's own beside noise, and a carrier
// of one quiet hop when there is one.
func spurious(r *rand.Rand, s *scene, cn0 float64) {
	s.sim.White = false
	s.sim.CarrierCN0 = cn0
	if cn0 < 0 {
		s.sim.CarrierAway = always
		s.sim.CarrierCN0 = 40 + 20*r.Float64()
		return
	}
	s.fade(0.05, 0)
	s.sim.RiceK = 4
}

// birdies: one or two steady tones anywhere.
func birdies(r *rand.Rand, s *scene, cn0 float64) {
	spurious(r, s, cn0)
	for range 1 + r.IntN(2) {
		s.sim.Spurs = append(s.sim.Spurs, sim.Spur{Hz: 300 + 2400*r.Float64(), DBFS: -40 + 20*r.Float64()})
	}
}

// hum: multiples of the mains frequency, which is off by up to 0.05 Hz, falling
// by about 3 dB from one to the next.
func hum(r *rand.Rand, s *scene, cn0 float64) {
	spurious(r, s, cn0)
	mains := 50.0 + 10*float64(r.IntN(2)) + 0.05*(2*r.Float64()-1)
	for k := 1; k <= 20; k++ {
		s.sim.Spurs = append(s.sim.Spurs, sim.Spur{Hz: float64(k) * mains, DBFS: -20 - 3*float64(k) + 6*r.Float64()})
	}
}

// always is longer than any scene.
var always = [][2]float64{{0, 1e9}}

// nothing is a scene without a carrier; in half of them the local is heard, and
// in half a hint was given.
func nothing(r *rand.Rand, kind clutter) scene {
	s := base(r, either(r)*(3+6*r.Float64()))
	if r.IntN(2) == 0 {
		s.sim.LocalAway = always
	}
	if r.IntN(2) == 0 {
		s.cfg.LocalTone = 0
	}
	kind(r, &s, -1)
	s.sim.AGC = r.IntN(2) == 0
	s.sim.Duration = 1800
	return s
}

// beats counts the readings with a beat, its size included, those of them that
// are not flagged unproven, and those with a sign.
func (p *played) beats() (all, bold, signed int) {
	for _, r := range p.readings {
		if math.IsNaN(r.BeatAbs) && math.IsNaN(r.Beat) {
			continue
		}
		all++
		if !r.Has(dsp.Unproven) {
			bold++
		}
		if !math.IsNaN(r.Beat) {
			signed++
		}
	}
	return all, bold, signed
}

// judgeNothing: no beat at all, or one that is flagged unproven; and the local
// held as the lone tone that it is wherever nothing is flagged.
func judgeNothing(all []played) []figure {
	hours := 0.0
	total, bold, signed, scenes, told0, held, seconds, flagged, takenFor := 0, 0, 0, 0, 0, 0, 0, 0, 0
	for i := range all {
		p := &all[i]
		hours += float64(len(p.readings)) / 3600
		n, b, s := p.beats()
		total, bold, signed = total+n, bold+b, signed+s
		if b > 0 {
			scenes++
		}
		if n > 0 {
			told0++
		}
		if len(p.sim.LocalAway) > 0 {
			continue
		}
		for k, r := range p.readings {
			if r.T < 5 {
				continue
			}
			seconds++
			switch {
			case r.State == dsp.Lone && math.IsNaN(r.CarrierTone) && !(math.Abs(r.LocalTone-p.truthAt(k).LocalTone) > 1):
				held++
			case r.Has(dsp.Unproven) && !(math.Abs(r.LocalTone-p.truthAt(k).LocalTone) > 1):
				flagged++
			}
			if math.Abs(r.CarrierTone-p.truthAt(k).LocalTone) < 1 {
				takenFor++
			}
		}
	}
	perHundred := func(n int) float64 { return 100 * float64(n) / hours }
	return []figure{
		told("sound", hours, "h"),
		most("beats not flagged unproven, in 100 h", perHundred(bold), 0, ""),
		told("such scenes", float64(scenes), ""),
		told("beats flagged unproven, in 100 h", perHundred(total-bold), ""),
		told("such scenes", float64(told0), ""),
		told("beats with a sign, in 100 h", perHundred(signed), ""),
		least("local held as lone, of seconds not flagged", percent(held, seconds-flagged), 95, "%"),
		told("local held as lone, of all seconds", percent(held, seconds), "%"),
		told("seconds in which it is taken for the carrier", float64(takenFor), ""),
	}
}

// judgeFound: the real carrier is found beside all that, and nothing else is
// taken for it.
func judgeFound(all []played) []figure {
	found, other, scenes, seconds, given, signs := 0, 0, 0, 0, 0, 0
	for i := range all {
		p := &all[i]
		ok, bad := false, false
		for k, r := range p.readings {
			t := p.truthAt(k)
			seconds++
			if math.IsNaN(r.Beat) {
				continue
			}
			given++
			right := !(math.Abs(r.CarrierTone-t.CarrierTone) > 3) && math.Abs(r.Beat-t.Received) < max(1, 5*r.BeatU)
			if !right {
				other++
				bad = true
			}
			if p.mistaken(k) {
				signs++
			}
			ok = ok || right && r.T < 30 && r.State == dsp.Apart
		}
		if ok {
			found++
		}
		if bad {
			scenes++
		}
	}
	return []figure{
		least("the carrier found in 30 s", percent(found, len(all)), 100, "%"),
		most("seconds with another beat than its", float64(other), 0, ""),
		told("such scenes", float64(scenes), ""),
		most("seconds with a wrong identity", float64(signs), 0, ""),
		told("seconds with a beat", percent(given, seconds), "%"),
	}
}

// nothingRows play a hundred hours for 200 scenes.
func nothingRows() []row {
	var rows []row
	kinds := []struct {
		name   string
		kind   clutter
		narrow bool
	}{
		{"noise, filter 10 to 400 Hz", ringing(10, 400), false},
		{"noise, filter 2 to 5 Hz", ringing(2, 5), true},
		{"birdies", birdies, false},
		{"hum", hum, false},
	}
	for _, k := range kinds {
		rows = append(rows, row{name: "no carrier: " + k.name, share: 0.25,
			make:  func(r *rand.Rand) scene { return nothing(r, k.kind) },
			judge: judgeNothing,
			worse: func(p *played) float64 {
				n, bold, _ := p.beats()
				return float64(n + 10*bold)
			}})
	}
	for _, k := range kinds {
		if k.narrow {
			continue // as narrow as that, noise is the carrier's own fading
		}
		rows = append(rows, row{name: "a carrier after all: " + k.name, share: 0.5,
			make: func(r *rand.Rand) scene {
				s := base(r, either(r)*(3+6*r.Float64()))
				k.kind(r, &s, 50+10*r.Float64())
				s.sim.AGC = r.IntN(2) == 0
				s.sim.Duration = 120
				return s
			},
			judge: judgeFound,
			worse: func(p *played) (n float64) {
				for i, r := range p.readings {
					if !math.IsNaN(r.Beat) && !(math.Abs(r.Beat-p.truthAt(i).Received) < 1) {
						n++
					}
				}
				if !p.identifiedBy(30) {
					n += 0.5
				}
				return n
			}})
	}
	return rows
}
