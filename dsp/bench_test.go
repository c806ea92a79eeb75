package dsp

import (
	"math"
	"math/rand/v2"
	"strings"
	"testing"
)

// An hour of receiver noise gives no reading with a beat, and hardly a tone.
func TestNoiseHour(t *testing.T) {
	const rate = 8000
	r := rand.New(rand.NewPCG(11, 12))
	var beats, tones, n int
	b, err := New(Config{Rate: rate, OnReading: func(r Reading) {
		n++
		if !math.IsNaN(r.BeatAbs) {
			beats++
			t.Errorf("a beat in noise: %s", describe(r))
		}
		if r.State != Searching {
			tones++
		}
	}})
	if err != nil {
		t.Fatal(err)
	}
	// 300 to 2700 Hz, as a receiver passes it: two resonant high- and low-passes
	// (bilinear, second order), the second hour's worth seeded differently.
	hp, lp := biquad(300, rate, true), biquad(2700, rate, false)
	x := make([]float32, rate)
	ch := [][]float32{x}
	for range 3600 {
		for i := range x {
			x[i] = float32(0.1 * lp(lp(hp(hp(r.NormFloat64())))))
		}
		b.Samples(ch)
	}
	t.Logf("%d readings, %d with a beat, %d with a tone", n, beats, tones)
	if n < 3598 || tones > 3 {
		t.Errorf("%d readings, %d with a tone", n, tones)
	}
}

// biquad is a second-order Butterworth section by the bilinear transform.
func biquad(f, rate float64, high bool) func(float64) float64 {
	k := math.Tan(math.Pi * f / rate)
	d := 1 + math.Sqrt2*k + k*k
	b0, b1 := k*k/d, 2*k*k/d
	if high {
		b0, b1 = 1/d, -2/d
	}
	a1, a2 := 2*(k*k-1)/d, (1-math.Sqrt2*k+k*k)/d
	var x1, x2, y1, y2 float64
	return func(x float64) float64 {
		y := b0*x + b1*x1 + b0*x2 - a1*y1 - a2*y2
		x2, x1, y2, y1 = x1, x, y1, y
		return y
	}
}

// Exactly one reading for each second, whatever the rate, the hook-up and the
// sizes of the blocks; and the same readings.
func TestOneReadingASecond(t *testing.T) {
	for _, rate := range []float64{10, 11.5, 100, 1000, 8000, 11025, 44100, 48000} {
		for _, h := range Hookups {
			s := scene{rate: rate, seconds: 13, carrier: 0.21 * rate, local: 0.21*rate + min(4, 0.1*rate), cn0: 60, seed: 2}
			if rate > 8000 {
				s.carrier, s.local = 1000, 1004
			}
			x := s.samples()
			cfg := Config{Rate: rate, Hookup: h, LocalTone: s.local}
			first := play(t, cfg, x, x)
			if len(first) != 13 {
				t.Fatalf("%g Hz %s: %d readings of 13 s", rate, h, len(first))
			}
			for i, r := range first {
				if r.T != float64(i)+0.5 {
					t.Errorf("%g Hz %s: reading %d at %g", rate, h, i, r.T)
				}
			}
			var second []Reading
			cfg.OnReading = func(r Reading) { second = append(second, r) }
			b, err := New(cfg)
			if err != nil {
				t.Fatal(err)
			}
			for i := range x {
				b.Samples([][]float32{x[i : i+1], x[i : i+1]})
			}
			b.Finish()
			for i := range first {
				// The same but for rounding: sums run in another order.
				a, b := first[i], second[i]
				same := a.State == b.State && math.Abs(a.InputDBFS-b.InputDBFS) < 1e-6 && a.PhaseRun == b.PhaseRun &&
					math.IsNaN(a.Beat) == math.IsNaN(b.Beat) && math.IsNaN(a.BeatAbs) == math.IsNaN(b.BeatAbs) &&
					!(math.Abs(a.BeatAbs-b.BeatAbs) > 1e-6) && !(math.Abs(a.Phase-b.Phase) > 1e-6) && a.Has(Retuned) == b.Has(Retuned)
				if !same {
					t.Fatalf("%g Hz %s: block sizes matter:\n%s\n%s", rate, h, describe(first[i]), describe(second[i]))
				}
			}
		}
	}
}

// A gap is data: the seconds go on, those it touches carry no beat, and the
// beat comes back within three seconds with the right value and a broken phase.
func TestGaps(t *testing.T) {
	for _, at := range []float64{10, 10.02, 10.5, 10.97} {
		for _, length := range []float64{0.001, 0.3, 1, 5.25, 600} {
			s := scene{rate: 8000, seconds: 30, carrier: 1000, local: 1003.3, cn0: 55, seed: 3}
			x := s.samples()
			var rs []Reading
			b, err := New(Config{Rate: 8000, LocalTone: 1003, OnReading: func(r Reading) { rs = append(rs, r) }})
			if err != nil {
				t.Fatal(err)
			}
			cut, lost := int(at*8000), int(length*8000)
			b.Samples([][]float32{x[:cut]})
			b.Gap(int64(lost))
			b.Samples([][]float32{x[cut:]}) // what comes after is another stretch of the same sound
			b.Finish()
			if want := int(30 + length); len(rs) < want-1 || len(rs) > want+1 {
				t.Fatalf("gap of %g s at %g: %d readings", length, at, len(rs))
			}
			for i, r := range rs {
				touches := r.T+0.5 > at && r.T-0.5 < at+length
				if r.T != float64(i)+0.5 {
					t.Fatalf("reading %d at %g", i, r.T)
				}
				if touches != r.Has(Gap) && lost >= 8 {
					t.Errorf("gap of %g s at %g: %s", length, at, describe(r))
				}
				if touches && !math.IsNaN(r.BeatAbs) {
					t.Errorf("gap of %g s at %g: beat in it: %s", length, at, describe(r))
				}
				if r.T-0.5 > at+length+3 && (math.Abs(r.Beat-3.3) > 0.005 || r.PhaseRun == 0) {
					t.Errorf("gap of %g s at %g: not back: %s", length, at, describe(r))
				}
				if !math.IsNaN(r.Beat) && math.Abs(r.Beat-3.3) > 0.01 {
					t.Errorf("gap of %g s at %g: wrong: %s", length, at, describe(r))
				}
			}
		}
	}
}

func TestSilenceAndClipping(t *testing.T) {
	s := scene{rate: 8000, seconds: 20, carrier: 1000, local: 1003.3, cn0: 55, seed: 3, ampC: 0.6, ampL: 0.5}
	x := s.samples()
	for i := range x[:5*8000] {
		x[i] = 0
	}
	for i, v := range x[12*8000 : 13*8000] {
		x[12*8000+i] = max(-0.7, min(0.7, v)) / 0.7
	}
	for _, r := range play(t, Config{Rate: 8000, LocalTone: 1003}, x) {
		switch {
		case r.T < 5 && (r.State != Silent || r.InputDBFS > -100):
			t.Errorf("zeros: %s", describe(r))
		case r.T > 8 && r.State != Apart:
			t.Errorf("signal: %s", describe(r))
		case r.T == 12.5 && (!r.Has(Clipped) || r.Clipped < 100):
			t.Errorf("clipped: %s", describe(r))
		case r.T != 12.5 && r.T < 18 && r.T > 6 && r.Has(Clipped):
			// the sum of both tones reaches 1.1 now and then
			if r.Clipped == 0 {
				t.Errorf("not clipped: %s", describe(r))
			}
		}
	}
}

// Every value that cannot be meant is refused in one line that says what is
// allowed.
func TestConfigErrors(t *testing.T) {
	for _, c := range []struct {
		cfg  Config
		want string
	}{
		{Config{}, "sample rate 0 Hz: must be 10 Hz to 1 MHz"},
		{Config{Rate: math.NaN()}, "sample rate NaN Hz: must be 10 Hz to 1 MHz"},
		{Config{Rate: 48000, Hookup: "x"}, `hook-up "x": must be two-tone, mixer or quadrature`},
		{Config{Rate: 48000, Sideband: "am"}, `sideband "am": must be usb or lsb`},
		{Config{Rate: 48000, Carrier: -1}, "carrier -1 Hz: must be above 0"},
		{Config{Rate: 48000, Local: math.Inf(1)}, "local +Inf Hz: must be above 0"},
		{Config{Rate: 8000, LocalTone: 4000}, "local tone 4000 Hz: must lie below half the sample rate, 4000 Hz"},
		{Config{Rate: 8000, SampleRateError: 0.02}, "sample-rate error 20000 ppm: must be within 10000 ppm"},
		{Config{Rate: 8000, SampleRateErrorU: -1}, "uncertainty of the sample rate -1e+06 ppm: must be 0 to 10000 ppm"},
		{Config{Rate: 8000, SearchLow: 500, SearchHigh: 400}, "search from 500 to 400 Hz: must lie between 0 and half the sample rate, 4000 Hz"},
	} {
		_, err := New(c.cfg)
		if err == nil || err.Error() != c.want || strings.Contains(err.Error(), "\n") {
			t.Errorf("%+v: %v, want %q", c.cfg, err, c.want)
		}
	}
}

// Glimpses come ten times a second, rest on sound not older than 0.3 s, and
// tell the beat while a trimmer turns.
func TestGlimpses(t *testing.T) {
	trim := func(t float64) (float64, float64) { return 1, 0.25 * t * t / 2 }
	s := scene{rate: 8000, seconds: 20, carrier: 1000, local: 1004, cn0: 55, seed: 3, localFn: trim}
	x := s.samples()
	var fed float64
	var got []float64
	n := 0
	b, err := New(Config{Rate: 8000, LocalTone: 1004, OnGlimpse: func(g Glimpse) {
		n++
		if fed-g.Upto > 0.2 {
			t.Errorf("at %.2f s a glimpse of the sound up to %.2f s", fed, g.Upto)
		}
		if fed < 4 {
			return
		}
		truth := 4 + 0.25*g.T
		got = append(got, g.Beat-truth)
		if math.Abs(g.Beat-truth) > 0.05 {
			t.Errorf("%+v: truth %.3f", g, truth)
		}
	}})
	if err != nil {
		t.Fatal(err)
	}
	for i := 0; i < len(x); i += 400 {
		fed = float64(i+400) / 8000
		b.Samples([][]float32{x[i : i+400]})
	}
	if n != 200 || len(got) < 155 {
		t.Errorf("%d glimpses in 20 s, %d with a beat", n, len(got))
	}
	var se float64
	for _, d := range got {
		se += d * d
	}
	t.Logf("%d glimpses, rms error %.2g Hz", len(got), math.Sqrt(se/float64(len(got))))
}
