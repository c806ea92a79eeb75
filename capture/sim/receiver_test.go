package sim

import (
	"math"
	"math/cmplx"
	"testing"
)

// The receiver passes the programme's sidebands in its passband and holds back
// those beyond 0 Hz, in both sidebands alike.
func TestOppositeSideband(t *testing.T) {
	const rate = 8000
	for _, sb := range []string{"usb", "lsb"} {
		c := Config{Rate: rate, Sideband: sb, Tone: 1000}
		if err := c.complete(); err != nil {
			t.Fatal(err)
		}
		audible := map[float64]float64{} // by audio frequency, dB
		for _, f := range []float64{100, 200, 500, 1000, 1200, 1500, 2000, 2500} {
			m := make([]complex128, 2*rate)
			for i := range m {
				m[i] = complex(1+0.5*math.Cos(2*math.Pi*f*float64(i)/rate), 0)
			}
			newOneSide(&c, 1.0/rate).pass(m)
			pair := complex(1, 0)
			for _, side := range []float64{f, -f} {
				var sum complex128
				for i := rate; i < 2*rate; i++ {
					e := m[i]
					if sb == "lsb" {
						e = cmplx.Conj(e)
					}
					sum += e * cmplx.Rect(1, -2*math.Pi*side*float64(i)/rate)
				}
				pair *= sum
				audible[1000+side] = 20 * math.Log10(cmplx.Abs(sum)/rate/0.25)
			}
			// Amplitude modulation stays that: both sidebands turn about the carrier.
			if turn := cmplx.Phase(pair); f <= 200 && math.Abs(turn) > 0.12 {
				t.Errorf("%s: sidebands at +-%g Hz turned by %.3f", sb, f, turn)
			}
		}
		for f, db := range audible {
			if f >= 500 && f <= 2500 && math.Abs(db) > 0.5 || f <= -200 && db > -25 || f <= -1000 && db > -55 {
				t.Errorf("%s: sideband at %g Hz of audio passes with %.1f dB", sb, f, db)
			}
		}
	}
}

// A tone outside of the samples' band is filtered off, not folded into it.
func TestBand(t *testing.T) {
	for _, c := range []struct {
		cfg  Config
		fold float64
	}{{Config{Rate: 8000, Sideband: "lsb", Offset: 1300}, 300}, {Config{Rate: 8000, Offset: 3400}, 3600},
		{Config{Rate: 100, Hookup: "mixer", Offset: 70}, 30}, {Config{Rate: 8000, Hookup: "quadrature", Baseband: true, Offset: -5500}, 3500}} {
		c.cfg.Seed, c.cfg.Duration, c.cfg.CarrierCN0, c.cfg.White = 1, 3, 160, true
		_, ch, truth := all(t, c.cfg)
		if a := cmplx.Abs(line(ch[0], c.cfg.Rate, c.fold)); a > 1e-5 || truth[1].Local || math.Abs(truth[1].Beat-c.cfg.Offset) > 1e-6 {
			t.Errorf("%+v: %.2g at %g Hz, truth %+v", c.cfg.Hookup, a, c.fold, truth[1])
		}
	}
}

// Gain control brings either tone alone to its level, I and Q alike, and full
// scale is full scale.
func TestGainControl(t *testing.T) {
	for _, level := range []float64{-50, -30, -6} {
		_, ch, _ := all(t, Config{Rate: 8000, Hookup: "quadrature", CarrierDBFS: level, CarrierCN0: 140, Offset: 7, AGC: true, Seed: 1, Duration: 6})
		for i := 40000; i < len(ch[0]); i++ {
			if a := math.Hypot(float64(ch[0][i]), float64(ch[1][i])); math.Abs(a-0.25) > 0.0025 {
				t.Fatalf("%g dBFS: amplitude %.4f", level, a)
			}
		}
	}
	// A loud local that goes leaves the carrier to rise again within some decays.
	_, ch, _ := all(t, Config{Rate: 8000, CarrierDBFS: -40, LocalDBFS: -10, Offset: 50, CarrierCN0: 90, White: true, AGC: true, Seed: 1, Duration: 8, LocalAway: [][2]float64{{3, 99}}})
	with, without := cmplx.Abs(line(ch[0][:24000], 8000, 1000)), cmplx.Abs(line(ch[0][48000:], 8000, 1000))
	if without < 0.2 || without > 0.26 || with > 0.02 {
		t.Errorf("carrier at %.4f beside the local, %.4f alone", with, without)
	}
	_, ch, _ = all(t, Config{Rate: 8000, CarrierDBFS: -1, LocalDBFS: -1, Seed: 1, Duration: 2})
	full := 0
	for _, v := range ch[0] {
		if v == 1 || v == -1 {
			full++
		} else if math.Abs(float64(v)) > 1 {
			t.Fatalf("sample %g beyond full scale", v)
		}
	}
	if full == 0 {
		t.Error("two loud tones do not reach full scale")
	}
}

// A spur stands where it is asked for, as strong as asked for.
func TestSpurs(t *testing.T) {
	_, ch, _ := all(t, Config{Rate: 8000, White: true, CarrierCN0: 160, Seed: 1, Duration: 4, Spurs: []Spur{{50, -40}, {1234.5, -60}}})
	for f, db := range map[float64]float64{50: -40, 1234.5: -60} {
		if got := 20 * math.Log10(cmplx.Abs(line(ch[0], 8000, f))); math.Abs(got-db) > 0.01 {
			t.Errorf("%g Hz: %.3f dBFS, want %g", f, got, db)
		}
	}
}

// The receiver's wander begins at 0, stays within its bounds over a month, is
// slow, and moves both tones alike; the truth tells of it.
func TestWander(t *testing.T) {
	c := Config{ReceiverWander: 2, Seed: 8}
	w := newWander(&c)
	last, sum := w.at(0), 0.0
	if last != 0 {
		t.Errorf("begins at %g", last)
	}
	const n = 30 * 1440
	for i := range n {
		f := w.at(60 * float64(i+1))
		if math.Abs(f-last) > 1 {
			t.Fatalf("from %.3f to %.3f Hz within a minute", last, f)
		}
		last = f
		sum += (f + c.ReceiverWander*w.start) * (f + c.ReceiverWander*w.start)
	}
	if rms := math.Sqrt(sum / n); math.Abs(rms/math.Sqrt2-1) > 0.15 { // about its own mean
		t.Errorf("rms %.3f Hz", rms)
	}
	_, ch, truth := all(t, Config{Rate: 1000, Tone: 200, Offset: 40, White: true, CarrierCN0: 160, Seed: 3, Duration: 600, ReceiverWander: 2})
	for _, i := range []int{0, 300, 599} {
		x := ch[0][i*1000 : (i+1)*1000]
		// freq tells tones 2 Hz apart from each other only by where it looks.
		if c, l := freq(x, 1000, math.Round(truth[i].CarrierTone)), freq(x, 1000, math.Round(truth[i].LocalTone)); math.Abs(c-truth[i].CarrierTone) > 1e-3 || math.Abs(l-truth[i].LocalTone) > 1e-3 {
			t.Errorf("second %d: tones at %.4f and %.4f, truth says %.4f and %.4f", i, c, l, truth[i].CarrierTone, truth[i].LocalTone)
		}
	}
	widest := 0.0
	for _, tr := range truth {
		widest = max(widest, math.Abs(tr.CarrierTone-200))
	}
	if widest < 0.1 || widest > 2 {
		t.Errorf("in ten minutes it moved by up to %.3f Hz", widest)
	}
}

// White noise is white and as strong at every rate: its power is N0 rate/2, and
// neighbouring samples have nothing in common.
func TestNoiseAtEveryRate(t *testing.T) {
	for _, c := range []Config{{Rate: 10, Hookup: "mixer"}, {Rate: 1000}, {Rate: 44100}, {Rate: 192000}, {Rate: 384000, ClockError: -0.01}} {
		c.White, c.CarrierCN0, c.Seed, c.Duration = true, 50, 3, 200000/c.Rate
		c.Tone, c.CarrierAway, c.LocalAway = 200, [][2]float64{{0, 1e9}}, [][2]float64{{0, 1e9}}
		_, ch, _ := all(t, c)
		var power, next, n float64
		for i, v := range ch[0][1:] {
			power += float64(v) * float64(v)
			next += float64(v) * float64(ch[0][i])
			n++
		}
		want := 0.1 * 0.1 / 2 / 1e5 * c.Rate * (1 + c.ClockError) / 2
		if db := 10 * math.Log10(power/n/want); math.Abs(db) > 0.06 || math.Abs(next/power) > 0.01 {
			t.Errorf("rate %g: power off by %.3f dB, neighbours alike by %.4f", c.Rate, db, next/power)
		}
	}
}
