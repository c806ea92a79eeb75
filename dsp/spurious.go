package dsp

import "math"

// What an ordinary receiver adds of its own to the tones off the air: mains hum
// and its multiples, and the harmonics of whatever is loud. Neither is ever
// taken for the carrier.

var mains = [2]float64{50, 60} // Hz; networks keep to within 0.2 Hz of it (common practice)

// rung returns the frequency of the line that convicts the one at f of being
// mains hum: it lies on a multiple, and the multiple below it, or the next but
// one, where only even ones are strong, is not much weaker; where that is not
// heard, the one above. NaN: it is not hum. power gives that of the sound near a
// frequency, NaN where it is not known.
func rung(f float64, power func(f float64) float64) float64 {
	for _, nominal := range mains {
		m := math.Round(f / nominal)
		if m < 3 || math.Abs(f-m*nominal) > min(0.2*m, 5)+0.3 {
			continue
		}
		own, base := power(f), f/m
		if power(f-base) > own/4 {
			return f - base
		}
		if power(f-2*base) > own/2 {
			return f - 2*base
		}
		if math.IsNaN(power(f-base)) && power(f+base) > own/16 {
			return f + base
		}
	}
	return math.NaN()
}

// distorted reports whether f is within tolerance of a harmonic of a line at g,
// second to ninth, folded back at half the rate of real samples as clipping and
// gain control leave it.
func distorted(f, g, rate, tolerance float64) bool {
	for h := 2.0; h <= 9; h++ {
		v := math.Mod(h*g, rate)
		if v > rate/2 {
			v = rate - v
		}
		if math.Abs(f-v) < tolerance {
			return true
		}
	}
	return false
}

// spurious reports whether a line at f, convicted by a rung or not, is to be
// left alone as hum: the rung is not where the local was said to be. A declared
// set-off may be a multiple of the mains frequency; but then the pair is known
// by its distance.
func (e *twoTone) spurious(rung float64) bool {
	local := math.Abs(rung-e.hint()) < 3
	for k := range e.tr {
		local = local || e.local == k && math.Abs(rung-e.tr[k].f) < 3
	}
	return !math.IsNaN(rung) && !local && math.Abs(e.cfg.SetOff()) < 10 && !e.cfg.Wired
}
