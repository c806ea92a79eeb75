package dsp

import (
	"fmt"
	"math"
	"math/rand/v2"
	"testing"
)

// iq makes I and Q of a beat, with the offsets and the noise of a real input.
func iq(rate, seconds, f, cn0 float64, seed uint64) (x, q []float32) {
	r := rand.New(rand.NewPCG(seed, 3))
	sigma := math.Sqrt(0.01 * rate / math.Pow(10, cn0/10) / 2)
	for i := range int(rate * seconds) {
		s, c := math.Sincos(2 * math.Pi * frac(f*float64(i)/rate+0.1))
		x = append(x, float32(0.1*c+0.03+sigma*r.NormFloat64()))
		q = append(q, float32(0.1*s-0.02+sigma*r.NormFloat64()))
	}
	return x, q
}

// Quadrature: sign from the rotation, counterclockwise is high, the other way
// round for a reversed spectrum; one-second readings within 1.1 of the bound.
func TestQuadrature(t *testing.T) {
	for _, c := range []struct{ rate, f float64 }{{10, 0.8}, {10, -2.2}, {100, 3.2}, {8000, -3.2}, {8000, 12.3}, {48000, -103.7}, {48000, 3703.2}} {
		for _, sb := range []Sideband{Upper, Lower} {
			t.Run(fmt.Sprintf("%g Hz at %g/s %s", c.f, c.rate, sb), func(t *testing.T) {
				x, q := iq(c.rate, 60, c.f, 50, 1)
				want := c.f
				if sb == Lower {
					want = -want
				}
				singleTone(t, Config{Rate: c.rate, Hookup: Quadrature, Sideband: sb}, want, want, x, q)
			})
		}
	}
}

// Mixer: only the size, unless a set-off gives the sign.
func TestMixer(t *testing.T) {
	for _, c := range []struct{ rate, f, setOff float64 }{
		{10, 0.8, 0}, {10, 2.2, 0}, {100, 3.2, 0}, {8000, 0.9, 0}, {8000, 3.2, 0}, {48000, 12.3, 0}, {8000, 103.2, 100}, {8000, 97.1, -100}, {48000, 703.2, 700},
	} {
		t.Run(fmt.Sprintf("%g Hz at %g/s", c.f, c.rate), func(t *testing.T) {
			s := scene{rate: c.rate, seconds: 60, carrier: c.f, ampL: 1e-9, cn0: 50, seed: 4}
			x := s.samples()
			for i := range x {
				x[i] += 0.05
			}
			beat := math.NaN()
			if c.setOff != 0 {
				beat = math.Copysign(c.f, c.setOff)
			}
			singleTone(t, Config{Rate: c.rate, Hookup: Mixer, Local: 10e6 + c.setOff}, c.f, beat, x)
		})
	}
}

// singleTone checks every reading after the first ten: beat as wanted (NaN: no
// sign), rms within 1.25 of the bound for its span, honest u, running phase.
func singleTone(t *testing.T, cfg Config, f, beat float64, ch ...[]float32) {
	t.Helper()
	rs := play(t, cfg, ch...)
	var se, su, n, span float64
	for _, r := range rs[10:] {
		if r.State != Apart || math.IsNaN(r.BeatAbs) || math.IsNaN(r.Beat) != math.IsNaN(beat) {
			t.Fatal(describe(r))
		}
		if !math.IsNaN(beat) && (r.Beat*beat < 0 || cfg.Local != 0 && math.Abs(r.Error-(r.Beat-(cfg.Local-10e6))) > 1e-9) {
			t.Fatal(describe(r))
		}
		d := r.BeatAbs - math.Abs(f)
		se += d * d
		su += r.BeatU * r.BeatU
		span += r.Span
		n++
		slack := 2.0
		if cfg.Rate < 50 {
			slack = 6 // the noise beside the tone is a handful of bins
		}
		if math.Abs(r.CarrierDBFS+20) > 0.5 || math.Abs(r.CarrierCN0-50) > slack {
			t.Fatal(describe(r))
		}
	}
	span /= n
	b := bound(50, span)
	ratio, uRatio := math.Sqrt(se/n)/b, math.Sqrt(su/se)
	t.Logf("span %.0f s: rms %.2g Hz, bound %.2g Hz, ratio %.2f, u/rms %.2f", span, math.Sqrt(se/n), b, ratio, uRatio)
	if ratio > 1.35 || uRatio < 0.7 || uRatio > 1.6 {
		t.Errorf("ratio %.2f, u/rms %.2f", ratio, uRatio)
	}
	grew := rs[59].Phase - rs[20].Phase
	want := math.Abs(f) * 39
	if !math.IsNaN(beat) {
		want = beat * 39
	}
	if rs[59].PhaseRun != rs[20].PhaseRun || math.Abs(grew-want) > 0.02 {
		t.Errorf("phase grew by %.3f cycles in 39 s, want %.3f (runs %d, %d)", grew, want, rs[20].PhaseRun, rs[59].PhaseRun)
	}
}

// A receiver's baseband with both tones, told roughly where the local is.
func TestQuadratureBaseband(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 8))
	var x, q []float32
	for i := range 12 * 48000 {
		s1, c1 := math.Sincos(2 * math.Pi * frac(-1200.3*float64(i)/48000))
		s2, c2 := math.Sincos(2 * math.Pi * frac(-1203.9*float64(i)/48000))
		x = append(x, float32(0.1*c1+0.08*c2+0.01*r.NormFloat64()))
		q = append(q, float32(0.1*s1+0.08*s2+0.01*r.NormFloat64()))
	}
	for _, rd := range play(t, Config{Rate: 48000, Hookup: Quadrature, LocalTone: -1204}, x, q)[3:] {
		if rd.State != Apart || math.Abs(rd.Beat+3.6) > 0.01 || math.Abs(rd.CarrierTone+1200.3) > 0.01 {
			t.Fatal(describe(rd))
		}
	}
}
