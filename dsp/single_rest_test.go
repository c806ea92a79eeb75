package dsp

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"
)

// slowPath makes the phase of a beat whose frequency goes in straight lines
// through the given points (s, mHz).
func slowPath(points ...[2]float64) (turns, f func(t float64) float64) {
	f = func(t float64) float64 {
		for i := 1; i < len(points); i++ {
			if p, q := points[i-1], points[i]; t <= q[0] {
				return 1e-3 * (p[1] + (q[1]-p[1])*(t-p[0])/(q[0]-p[0]))
			}
		}
		return 1e-3 * points[len(points)-1][1]
	}
	turns = func(t float64) float64 {
		sum := 0.0
		for i := 1; i < len(points) && points[i-1][0] < t; i++ {
			from, to := points[i-1][0], min(t, points[i][0])
			sum += (f(from+1e-9) + f(to)) / 2 * (to - from)
		}
		return sum
	}
	return turns, f
}

// bounded returns the X of "within +-X Hz" or "beyond +-X Hz" of a reading that
// has no beat, NaN if there is none.
func bounded(r Reading) float64 {
	for _, w := range []string{"within ±%g Hz", "beyond ±%g Hz"} {
		if i := strings.Index(r.Why, w[:6]); i >= 0 {
			var x float64
			if n, _ := fmt.Sscanf(r.Why[i:], w, &x); n == 1 {
				return x
			}
		}
	}
	return math.NaN()
}

// A trimmer turned through everything: from a beat that windows of seconds hold
// down to millihertz, through zero to the other side, to standstill, and back.
// Every number is of the span it speaks of, no sign is wrong, what is said
// without a number is true, the phase of one run is counted right, and the beat
// is there again within so many seconds of every rest.
func TestSlowTrim(t *testing.T) {
	path := [][2]float64{{0, 1500}, {10, 1500}, {30, 500}, {50, 20}, {110, 20}, {120, 0}, {200, 0}, {210, -6}, {300, -6}, {305, 25}, {400, 25}, {410, 700}, {440, 700}, {450, 60}, {520, 60}}
	for _, c := range []struct {
		hookup Hookup
		rate   float64
		rests  [][2]float64 // when the trimmer came to rest, and how long it took at most
	}{
		{Quadrature, 25, [][2]float64{{50, 20}, {120, 12}, {210, 12}, {305, 14}, {410, 14}, {450, 16}}},
		{Quadrature, 1000, [][2]float64{{50, 20}, {120, 12}, {210, 12}, {305, 14}, {410, 14}, {450, 16}}},
		{Mixer, 25, [][2]float64{{50, 59}, {305, 60}, {410, 14}, {450, 30}}},
		{Mixer, 1000, [][2]float64{{50, 59}, {305, 60}, {410, 14}, {450, 30}}},
	} {
		for seed := range uint64(4) {
			turns, f := slowPath(path...)
			s := &slowScene{hookup: c.hookup, rate: c.rate, seconds: 520, turns: turns, cn0: 50, phase: 0.2 + 0.17*float64(seed), seed: seed, offset: 0.03}
			if c.hookup == Quadrature {
				s.offset = 0.02 - 0.02i
			}
			rs, _ := runSlow(t, s, Config{})
			retuned := 0
			for _, r := range rs {
				if r.Has(Retuned) {
					retuned++
				}
				truth, least := math.Inf(-1), math.Inf(1) // over the span, or the last seconds
				for x := r.T + 0.5 - max(8, nan0(r.Span)) - 2; x <= r.T+0.5; x += 0.25 {
					truth, least = max(truth, f(x)), min(least, f(x))
				}
				if c.hookup == Mixer {
					truth, least = max(math.Abs(truth), math.Abs(least)), math.Min(math.Abs(truth), math.Abs(least))
				}
				switch b := bounded(r); {
				case !math.IsNaN(r.BeatAbs):
					v := r.Beat
					if c.hookup == Mixer {
						v = r.BeatAbs
					}
					if math.IsNaN(v) || v > truth+5*r.BeatU || v < least-5*r.BeatU {
						t.Errorf("%s at %g, seed %d: %.6f..%.6f Hz, read %s", c.hookup, c.rate, seed, least, truth, describe(r))
					}
				case !math.IsNaN(b) && math.Abs(f(r.T-10)) > b && math.Abs(f(r.T+0.5)) > b:
					t.Errorf("%s at %g, seed %d, %.1f s: beat %.5f Hz, said %q", c.hookup, c.rate, seed, r.T, f(r.T), r.Why)
				}
			}
			for _, rest := range c.rests {
				if r := rs[int(rest[0]+rest[1])]; math.IsNaN(r.BeatAbs) || math.Abs(r.BeatAbs-math.Abs(f(r.T))) > 5*r.BeatU {
					t.Errorf("%s at %g, seed %d: %.0f s after the trimmer stopped at %.0f s: %s", c.hookup, c.rate, seed, rest[1], rest[0], describe(r))
				}
			}
			if retuned < 2 {
				t.Errorf("%s at %g, seed %d: %d readings flagged", c.hookup, c.rate, seed, retuned)
			}
			slowPhases(t, rs, turns, c.hookup == Mixer)
		}
	}
}

func nan0(v float64) float64 {
	if math.IsNaN(v) {
		return 0
	}
	return v
}

// slowPhases checks that the phase of each run grows as the beat's does; of a
// mixer's, only where that kept its sense.
func slowPhases(t *testing.T, rs []Reading, turns func(float64) float64, size bool) {
	t.Helper()
	off, run := math.NaN(), -1
	for _, r := range rs {
		if math.IsNaN(r.Phase) || size && r.T > 115 && r.T < 303 {
			continue
		}
		d := r.Phase - turns(r.T)
		if r.PhaseRun != run {
			run, off = r.PhaseRun, d
		}
		if math.Abs(d-off) > 0.06 {
			t.Errorf("at %.1f s the phase is off by %.3f cycles: %s", r.T, d-off, describe(r))
			run = -1
		}
	}
}

// A local that drifts: the span shrinks until the drift does not show, every
// reading is the mean over its span within what it says, and neither the input's
// offset nor the beat's sign is mistaken for it.
func TestSlowDrift(t *testing.T) {
	for _, c := range []struct {
		hookup   Hookup
		from, to float64 // mHz in 900 s
	}{
		{Quadrature, 10, 11}, {Quadrature, 10, 20}, {Quadrature, 4, -4}, {Quadrature, 1, 1.2}, {Mixer, 10, 11}, {Mixer, 10, 20}, {Mixer, 30, 25},
	} {
		var n, in4, given float64
		turns, f := slowPath([2]float64{0, c.from}, [2]float64{900, c.to})
		for seed := range uint64(3) {
			s := &slowScene{hookup: c.hookup, rate: 10, seconds: 900, turns: turns, cn0: 50, phase: 0.31 * float64(seed), seed: seed, offset: 0.04}
			rs, _ := runSlow(t, s, Config{})
			for _, r := range rs[200:] {
				n++
				v := r.Beat
				if c.hookup == Mixer {
					v = r.BeatAbs
				}
				if math.IsNaN(v) {
					continue
				}
				given++
				if math.Abs(v-f(r.T+0.5-r.Span/2)) < 4*r.BeatU {
					in4++
				}
				if c.hookup == Quadrature && r.Beat*f(r.T) < 0 && math.Abs(f(r.T)) > 1e-3 {
					t.Errorf("%g to %g mHz: wrong sign, %s", c.from, c.to, describe(r))
				}
			}
		}
		t.Logf("%s %g to %g mHz: a number in %.1f %%, %.1f %% of them within 4u", c.hookup, c.from, c.to, 100*given/n, 100*in4/given)
		if given < 0.9*n || in4 < 0.98*given {
			t.Errorf("%s %g to %g mHz: a number in %.1f %%, %.1f %% of them within 4u", c.hookup, c.from, c.to, 100*given/n, 100*in4/given)
		}
	}
}

// Nothing to be found: noise with and without an offset, hum, an input's level
// that wanders like a random walk or settles like a warming converter. No slow
// beat is told of any of them.
func TestSlowNothing(t *testing.T) {
	scenes := 1
	if long() {
		scenes = 100
	}
	for _, hookup := range []Hookup{Mixer, Quadrature} {
		for _, kind := range []string{"noise", "walk", "warming"} {
			told, seconds := 0, 0
			for seed := range uint64(scenes) {
				r := rand.New(rand.NewPCG(seed, 5))
				s := &slowScene{hookup: hookup, rate: 10, seconds: 900, amp: 1e-9, offset: 0.05 + 0.02i, seed: seed}
				s.noise = 0.1 * math.Sqrt(s.rate/2/1e5) // that of a beat of 50 dB-Hz
				var walk complex128
				size := s.noise * math.Pow(10, -1+2*r.Float64()) / math.Sqrt(s.rate)
				s.extra = func(t float64) complex128 {
					switch kind {
					case "walk":
						walk += complex(size*r.NormFloat64(), size*r.NormFloat64())
					case "warming":
						walk = complex(300*size*math.Exp(-t/200), -150*size*math.Exp(-t/300))
					}
					return walk
				}
				rs, _ := runSlow(t, s, Config{})
				for _, r := range rs {
					seconds++
					if !math.IsNaN(r.BeatAbs) {
						told++
						if told == 1 {
							t.Logf("%s, %s, seed %d: %s", hookup, kind, seed, describe(r))
						}
					}
				}
			}
			t.Logf("%s, %s: a beat told in %d of %d s", hookup, kind, told, seconds)
			if told > 0 {
				t.Errorf("%s, %s: a beat told in %d of %d s", hookup, kind, told, seconds)
			}
		}
	}
}

// At standstill from the beginning no number can be given, but what is said
// narrows with time, and is true.
func TestSlowStandstill(t *testing.T) {
	for _, hookup := range []Hookup{Mixer, Quadrature} {
		s := &slowScene{hookup: hookup, rate: 10, seconds: 400, f: 0, cn0: 50, phase: 0.1, offset: 0.03, seed: 3}
		rs, _ := runSlow(t, s, Config{})
		var at [3]float64
		for i, sec := range []int{20, 100, 399} {
			r := rs[sec]
			at[i] = bounded(r)
			if r.State != Merged || !math.IsNaN(r.BeatAbs) || math.IsNaN(at[i]) {
				t.Errorf("%s: %s", hookup, describe(r))
			}
		}
		t.Logf("%s: within %g, %g, %g Hz: %s", hookup, at[0], at[1], at[2], rs[399].Why)
		if !(at[1] < at[0]/3 && at[2] < at[1]/2.5) {
			t.Errorf("%s: within %g, %g, %g Hz", hookup, at[0], at[1], at[2])
		}
	}
}

// A gap of some seconds, a reversed sideband, a sample clock that is off and a
// set-off that is not met: the beat goes on, signed as it should be.
func TestSlowGap(t *testing.T) {
	s := &slowScene{hookup: Quadrature, rate: 1000, seconds: 300, f: 0.012, cn0: 50, offset: 0.03i, seed: 9}
	ch := s.samples()
	var rs []Reading
	b, err := New(Config{Rate: 1000, Hookup: Quadrature, Sideband: Lower, SampleRateError: 1e-3, OnReading: func(r Reading) { rs = append(rs, r) }})
	if err != nil {
		t.Fatal(err)
	}
	const from, n = 150300, 6400
	b.Samples([][]float32{ch[0][:from], ch[1][:from]})
	b.Gap(n)
	b.Samples([][]float32{ch[0][from+n:], ch[1][from+n:]})
	b.Finish()
	if len(rs) != 300 {
		t.Fatalf("%d readings", len(rs))
	}
	for i, r := range rs {
		switch {
		case i < 90:
		case i >= 150 && i <= 157 && math.IsNaN(r.Beat):
		case math.Abs(r.Beat+0.012*1.001) > 4*r.BeatU || r.BeatU > 1e-5:
			t.Errorf("%s", describe(r))
		case !math.IsNaN(r.Phase) && (r.PhaseRun != rs[120].PhaseRun || math.Abs(r.Phase-rs[120].Phase+0.012*(r.T-rs[120].T)) > 0.01):
			t.Errorf("phase: %s", describe(r))
		}
	}
}

// A beat of 0.2 Hz turned up to 0.7 Hz and back is handed from the long fits to
// windows of seconds and back without a break of its phase, and at no frequency
// between is there a hole.
func TestSlowHandOver(t *testing.T) {
	for _, hookup := range []Hookup{Mixer, Quadrature} {
		turns, _ := slowPath([2]float64{0, 200}, [2]float64{60, 200}, [2]float64{160, 700}, [2]float64{200, 700}, [2]float64{300, 200}, [2]float64{360, 200})
		s := &slowScene{hookup: hookup, rate: 50, seconds: 360, turns: turns, cn0: 55, offset: 0.02, seed: 2}
		rs, _ := runSlow(t, s, Config{})
		none := 0
		for _, r := range rs[20:] {
			if math.IsNaN(r.BeatAbs) {
				none++
			}
		}
		t.Logf("%s: no number in %d of %d s", hookup, none, len(rs)-20)
		if none > 40 {
			t.Errorf("%s: no number in %d of %d s", hookup, none, len(rs)-20)
		}
		slowPhases(t, rs, turns, false)
	}
}

// The glimpse points the beat hand by the latest moments and goes quiet when
// the trimmer is turned, rather than telling the old beat.
func TestSlowGlimpse(t *testing.T) {
	for _, hookup := range []Hookup{Mixer, Quadrature} {
		turns, f := slowPath([2]float64{0, 30}, [2]float64{100, 30}, [2]float64{100.5, 150}, [2]float64{140, 150})
		s := &slowScene{hookup: hookup, rate: 1000, seconds: 140, turns: turns, cn0: 55, offset: 0.02, seed: 2}
		told, stale := 0, 0
		runSlow(t, s, Config{OnGlimpse: func(g Glimpse) {
			if math.IsNaN(g.BeatAbs) {
				return
			}
			told++
			if d := g.Turn - turns(g.Upto); math.Abs(d-math.Round(d)) > 0.05 && (g.Upto < 100 || g.Upto > 112) {
				t.Errorf("%s at %.1f s: the hand stands at %.3f, the phase at %.3f", hookup, g.Upto, g.Turn, frac(turns(g.Upto)))
			}
			if math.Abs(g.BeatAbs-f(g.Upto)) > 0.01 {
				stale++
			}
		}})
		t.Logf("%s: %d glimpses, %d of an old beat", hookup, told, stale)
		if told < 500 || stale > 40 {
			t.Errorf("%s: %d glimpses, %d of an old beat", hookup, told, stale)
		}
	}
}

// While a slow beat is held, a second of sound costs no allocation.
func TestSlowAllocatesNothing(t *testing.T) {
	for _, hookup := range []Hookup{Mixer, Quadrature} {
		s := &slowScene{hookup: hookup, rate: 1000, seconds: 150, f: 0.02, cn0: 55, offset: 0.02, seed: 2}
		ch := s.samples()
		held := 0
		b, err := New(Config{Rate: 1000, Hookup: hookup, OnGlimpse: func(Glimpse) {}, OnReading: func(r Reading) {
			if r.State == Apart {
				held++
			}
		}})
		if err != nil {
			t.Fatal(err)
		}
		part := make([][]float32, len(ch))
		next := 0
		feed := func(n int) {
			for k := range ch {
				part[k] = ch[k][next : next+n]
			}
			next += n
			b.Samples(part)
		}
		feed(110000)
		was := held
		n := testing.AllocsPerRun(30, func() { feed(1000) })
		t.Logf("%s: %v allocations a second of sound", hookup, n)
		if n > 0 || held-was < 30 {
			t.Errorf("%s: %v allocations a second of sound, %d readings", hookup, n, held-was)
		}
	}
}

// What an hour of a slow beat costs, and what looking for one does.
func BenchmarkSlow(b *testing.B) {
	for _, c := range []struct {
		name   string
		hookup Hookup
		f      float64
	}{{"mixer held", Mixer, 0.02}, {"quadrature held", Quadrature, 0.02}, {"mixer sought", Mixer, 0.0002}} {
		b.Run(c.name, func(b *testing.B) {
			s := &slowScene{hookup: c.hookup, rate: 10, seconds: 3600, f: c.f, cn0: 55, offset: 0.02, seed: 2}
			ch := s.samples()
			for b.Loop() {
				bn, err := New(Config{Rate: 10, Hookup: c.hookup})
				if err != nil {
					b.Fatal(err)
				}
				bn.Samples(ch)
			}
			b.ReportMetric(float64(b.Elapsed().Microseconds())/float64(b.N)/s.seconds, "us/second")
		})
	}
}
