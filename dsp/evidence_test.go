package dsp

import (
	"math"
	"math/rand/v2"
	"testing"
)

// fading makes a Rayleigh carrier with a Gaussian Doppler spectrum of rms width
// sigma as a sum of many sinusoids with normally distributed frequencies.
func fading(sigma float64, seed uint64) func(t float64) (amp, turns float64) {
	r := rand.New(rand.NewPCG(seed, 77))
	const n = 40
	var f, p [n]float64
	for i := range f {
		f[i], p[i] = sigma*r.NormFloat64(), r.Float64()
	}
	last := 0.0
	return func(t float64) (float64, float64) {
		var re, im float64
		for i := range f {
			s, c := math.Sincos(2 * math.Pi * (f[i]*t + p[i]))
			re += c
			im += s
		}
		ph := math.Atan2(im, re) / (2 * math.Pi)
		last = ph
		return math.Hypot(re, im) / math.Sqrt(n), last
	}
}

// A bare steady tone is never taken for proven; a fading one and one with a
// programme are. Through fades no beat is far from what is received.
func TestEvidence(t *testing.T) {
	programme := func(t float64) (float64, float64) { return 1 + 0.3*math.Sin(2*math.Pi*100*t), 0 }
	for _, c := range []struct {
		name   string
		carr   func(float64) (float64, float64)
		proven bool
	}{
		{"steady", nil, false},
		{"programme", programme, true},
		{"fading 0.05 Hz", fading(0.05, 1), true},
		{"fading 0.2 Hz", fading(0.2, 2), true},
	} {
		s := scene{rate: 2000, seconds: 180, carrier: 400, local: 404.5, cn0: 55, seed: 1, carrFn: c.carr}
		rs := play(t, Config{Rate: 2000, LocalTone: 404.5}, s.samples())
		proven, faded, with, far := 0, 0, 0, 0
		for _, r := range rs[40:] {
			if r.State == Apart && !r.Has(Unproven) {
				proven++
			}
			if r.Has(Faded) {
				faded++
			}
			if !math.IsNaN(r.Beat) {
				with++
				if math.Abs(r.Beat-4.5) > 1.2 {
					far++
				}
				if r.Beat < 0 {
					t.Errorf("%s: wrong sign: %s", c.name, describe(r))
				}
			}
		}
		t.Logf("%s: of 140 s %d with a beat, %d proven, %d faded, %d far off", c.name, with, proven, faded, far)
		if c.proven != (proven > 90) || !c.proven && proven > 0 || far > 0 {
			t.Errorf("%s: %d seconds proven, %d far off", c.name, proven, far)
		}
	}
}
