package dsp

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"
)

// rayleigh returns the gain of a path that fades with a Gaussian Doppler spectrum
// of rms width sigma, of mean power 1: the sum of many rays (Clarke's model with
// a Gaussian instead of a ring of angles).
func rayleigh(r *rand.Rand, sigma float64) func(t float64) complex128 {
	const rays = 48
	var f, ph [rays]float64
	for k := range f {
		f[k], ph[k] = sigma*r.NormFloat64(), r.Float64()
	}
	return func(t float64) complex128 {
		var g complex128
		for k := range f {
			g += cmplx.Rect(1, 2*math.Pi*frac(f[k]*t+ph[k]))
		}
		return g / complex(math.Sqrt(rays), 0)
	}
}

// hazy is a stretch of a smeared carrier of unit power, and a line of amplitude
// amp at f between the shares from and to of it.
func hazy(r *rand.Rand, n int, dt, sigma, f, amp, from, to float64) *stretch {
	st := &stretch{dt: dt, half: float64(n) * dt / 2, t0: dt/2 - float64(n)*dt/2, valid: 1, used: float64(n) * dt, z: make([]complex128, n), w: make([]float64, n)}
	g, ph := rayleigh(r, sigma), r.Float64()
	for i := range st.z {
		t := st.t0 + float64(i)*dt
		st.w[i] = 1
		st.z[i] = g(t) + complex(r.NormFloat64(), r.NormFloat64())*complex(1e-3, 0)
		if u := float64(i) / float64(n); u >= from && u < to {
			st.z[i] += cmplx.Rect(amp, 2*math.Pi*(f*t+ph))
		}
	}
	return st
}

// A line is borne out by a span in which it stands from end to end, and by none
// in which it came late or left early: that has the gain of the seconds
// in which it stood, but is no line that is there now.
func TestLineIsBorneOut(t *testing.T) {
	const n, dt, sigma, f = 1200, 0.2, 0.1, 0.08
	for _, c := range []struct {
		name        string
		at          float64 // of the line
		from, to    float64
		least, most int // of 60
	}{
		{"there throughout", f, 0, 1, 54, 60},
		{"left in the last quarter", f, 0, 0.7, 0, 3},
		{"came after the first quarter", f, 0.3, 1, 0, 3},
		{"outside the smear, throughout", 1.5, 0, 1, 58, 60},
		{"outside the smear, left two seconds ago", 1.5, 0, 1 - 2/(n*dt), 0, 0},
	} {
		r := rand.New(rand.NewPCG(3, 11))
		kept := 0
		for range 60 {
			st := hazy(r, n, dt, sigma, c.at, 1.4, c.from, c.to)
			var w whitener
			w.set(haze{power: 1.3, sigma: 1.25*sigma + 0.02, n0: 2e-6 * dt}, dt, 40)
			w.take(st)
			f, ch, _, b := w.refine(c.at, 0, 0, 1e-6)
			if b != 0 && w.bears(f, ch, b) {
				kept++
			}
		}
		t.Logf("%s: %d of 60", c.name, kept)
		if kept < c.least || kept > c.most {
			t.Errorf("%s: borne out in %d of 60, want %d to %d", c.name, kept, c.least, c.most)
		}
	}
}

// The search by Fourier transform scores every frequency as the matched sum does,
// one by one.
func TestSearchScoresAsTheMatchedSum(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 5))
	const n, dt = 500, 0.25
	st := hazy(r, n, dt, 0.1, 0.3, 0.7, 0, 1)
	st.w[77], st.z[77] = 0, 0 // a gap
	var w whitener
	w.set(haze{power: 1, sigma: 0.12, mu: 0.05, n0: 1e-5}, dt, 30)
	w.take(st)
	var q search
	x := &seek{lo: 0.4, hi: 1.1}
	plan := q.filter(&w, n)
	f, best := q.score(plan, &w, 0, x, 0, 1, 1)
	unit := 1 / (float64(len(q.in)) * dt)
	most := 0.0
	for k := -int(1 / unit); float64(k)*unit <= 1; k++ {
		want, _ := w.score(float64(k)*unit, 0, x.lo, x.hi)
		got := q.best[k&(len(q.in)-1)]
		if want != 0 && math.Abs(got-want) > 1e-6*math.Max(1, math.Abs(want)) {
			t.Fatalf("at %.4f Hz %.6f, the matched sum gives %.6f", float64(k)*unit, got, want)
		}
		most = max(most, want)
	}
	if math.Abs(best-most) > 1e-6*most || math.Abs(f-0.3) > 1.0/(n*dt) {
		t.Errorf("best %.3f at %.4f Hz, want %.3f at 0.3 Hz", best, f, most)
	}
}

// A smeared carrier's place is the mean by power, goes along with the receiver's
// drift, forgets a stray second and begins anew where the receiver was tuned.
func TestHome(t *testing.T) {
	var h home
	r := rand.New(rand.NewPCG(8, 8))
	const drift = 0.003
	var last float64
	for s := range 200 {
		last = float64(s) + 0.5
		f := 1000 + drift*last + 0.1*r.NormFloat64()
		if s == 150 {
			f += 3
		}
		h.add(last, f, 1, drift, 1)
	}
	if d := h.when(last+60, drift) - (1000 + drift*(last+60)); math.Abs(d) > 0.03 {
		t.Errorf("a minute later off by %.3f Hz", d)
	}
	for s := range 5 {
		h.add(last+1+float64(s), 1020, 1, 0, 1)
	}
	if math.Abs(h.f-1020) > 1e-9 {
		t.Errorf("after tuning at %.3f, want 1020", h.f)
	}
}

// trimmed is a local that rests 4 Hz from a Rayleigh carrier for a minute, is
// trimmed in 15 s to sep and rests there.
func trimmed(seed uint64, sep, seconds float64) scene {
	g := rayleigh(rand.New(rand.NewPCG(seed, 21)), 0.1)
	s := scene{rate: 4000, seconds: seconds, carrier: 1000, local: 1004, cn0: 60, seed: seed}
	s.carrFn = func(t float64) (float64, float64) {
		v := g(t)
		return cmplx.Abs(v), cphase(v)
	}
	s.localFn = func(t float64) (float64, float64) { // the turning, integrated
		by, u := sep-4, max(0, min(15, t-60))
		turns := by / 15 * u * u / 2
		return 1, turns + by*max(0, t-75)
	}
	return s
}

// A local trimmed into the carrier's smear is claimed nowhere but where it is:
// from two seconds after the turning ends on, not at its old place.
func TestNoPhantomAfterATrim(t *testing.T) {
	for seed := uint64(1); seed <= 3; seed++ {
		s := trimmed(seed, -0.07, 240)
		given, off := 0, 0
		b, err := New(Config{Rate: s.rate, LocalTone: 1004, OnReading: func(r Reading) {
			if r.T < 77 || math.IsNaN(r.Beat) {
				return
			}
			given++
			if math.Abs(r.LocalTone-(s.carrier-0.07)) > 0.03 {
				off++
			}
		}})
		if err != nil {
			t.Fatal(err)
		}
		b.Samples([][]float32{s.samples()})
		b.Finish()
		t.Logf("seed %d: %d readings at rest, the local elsewhere in %d", seed, given, off)
		if given < 60 {
			t.Errorf("seed %d: only %d readings at rest of 163", seed, given)
		}
		if off > 0 {
			t.Errorf("seed %d: the local claimed elsewhere in %d readings", seed, off)
		}
	}
}

// BenchmarkInsideTheSmear is the cost of a second of sound while the local is
// looked for and held inside the smear, or too weak to be found there.
func BenchmarkInsideTheSmear(b *testing.B) {
	for _, c := range []struct {
		name  string
		level float64
	}{{"held", 0.1}, {"hidden", 0.02}} {
		b.Run(c.name, func(b *testing.B) {
			s := trimmed(1, -0.07, 400)
			s.ampL = c.level
			x := s.samples()
			bn, err := New(Config{Rate: s.rate, LocalTone: 1004, OnReading: func(Reading) {}})
			if err != nil {
				b.Fatal(err)
			}
			lead := 200 * int(s.rate)
			bn.Samples([][]float32{x[:lead]})
			at := lead
			b.ReportAllocs()
			for b.Loop() {
				if at+int(s.rate) > len(x) {
					b.StopTimer()
					bn, _ = New(Config{Rate: s.rate, LocalTone: 1004, OnReading: func(Reading) {}})
					bn.Samples([][]float32{x[:lead]})
					at = lead
					b.StartTimer()
				}
				bn.Samples([][]float32{x[at : at+int(s.rate)]})
				at += int(s.rate)
			}
		})
	}
}
