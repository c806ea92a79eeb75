package dsp

import (
	"math"
	"math/rand/v2"
	"testing"
)

// Mains hum is known by the rung below it; a carrier on a multiple that stands
// well above its neighbours, or off all multiples, is not hum.
func TestRung(t *testing.T) {
	ladder := func(base, tilt float64, also map[float64]float64) func(float64) float64 {
		return func(f float64) float64 {
			p := 1e-12
			if m := math.Round(f / base); m >= 1 && math.Abs(f-m*base) < 0.5 {
				p = math.Pow(10, -tilt*m/10)
			}
			for g, v := range also {
				if math.Abs(f-g) < 0.5 {
					p = max(p, v)
				}
			}
			return p
		}
	}
	for _, c := range []struct {
		name  string
		f     float64
		power func(float64) float64
		want  float64
	}{
		{"tenth multiple of 50.02", 500.2, ladder(50.02, 3, nil), 450.18},
		{"ninth of 59.95", 539.55, ladder(59.95, 3, nil), 479.6},
		{"even ones only", 600, ladder(100, 2, nil), 500},
		{"a carrier on a rung", 1000, ladder(50, 3, map[float64]float64{1000: 1e-3}), math.NaN()},
		{"a carrier beside the rungs", 1012, ladder(50, 3, map[float64]float64{1012: 1e-6}), math.NaN()},
		{"a carrier and no hum", 1000, ladder(1e9, 3, map[float64]float64{1000: 1}), math.NaN()},
		{"a programme of 100 Hz", 1000, ladder(1e9, 3, map[float64]float64{1000: 1, 900: 0.1, 1100: 0.1}), math.NaN()},
	} {
		got := rung(c.f, c.power)
		if math.IsNaN(got) != math.IsNaN(c.want) || math.Abs(got-c.want) > 1e-6 {
			t.Errorf("%s: rung %g, want %g", c.name, got, c.want)
		}
	}
}

// A harmonic is where sampling folds it: by counting periods, sample by sample.
func TestDistorted(t *testing.T) {
	const rate, n = 8000, 8000
	r := rand.New(rand.NewPCG(7, 7))
	for range 20 {
		g := 300 + 1500*r.Float64()
		h := 2 + r.IntN(8)
		// Where does cos(2 pi h g t), sampled, have its peak below half the rate?
		best, at := 0.0, 0.0
		for f := 1.0; f < rate/2; f++ {
			var re, im float64
			for i := range 800 {
				s, c := math.Sincos(2 * math.Pi * f * float64(i) / rate)
				v := math.Cos(2 * math.Pi * float64(h) * g * float64(i) / rate)
				re += v * c
				im += v * s
			}
			if p := re*re + im*im; p > best {
				best, at = p, f
			}
		}
		if !distorted(at, g, rate, 6) {
			t.Errorf("harmonic %d of %g Hz is at %g Hz: not known", h, g, at)
		}
	}
	if distorted(1234, 1000, rate, 1) {
		t.Error("1234 Hz is taken for a harmonic of 1000 Hz")
	}
}

// Sidebands that both tones carry by their levels are gain control's and prove
// nothing; noise whose level jumps from second to second does not fade.
func TestNotProven(t *testing.T) {
	agc := func(t float64) (float64, float64) { return 1 + 0.3*math.Sin(2*math.Pi*93*t), 0 }
	for _, c := range []struct {
		name        string
		carr, local func(float64) (float64, float64)
		proven      bool
	}{
		{"sidebands of one", agc, nil, true},
		{"sidebands of both", agc, agc, false},
		{"sidebands of the local", nil, agc, false},
		{"noise 3 Hz wide", fading(1.3, 5), nil, false},
	} {
		s := scene{rate: 2000, seconds: 120, carrier: 407, local: 411.5, cn0: 55, seed: 3, carrFn: c.carr, localFn: c.local}
		proven := 0
		rs := play(t, Config{Rate: 2000, LocalTone: 411.5}, s.samples())
		for _, r := range rs[10:] {
			if r.State == Apart && !r.Has(Unproven) {
				proven++
			}
		}
		t.Logf("%s: of %d s %d proven", c.name, len(rs)-10, proven)
		if c.proven != (proven > 90) || !c.proven && proven > 0 {
			t.Errorf("%s: %d seconds proven", c.name, proven)
		}
	}
}
