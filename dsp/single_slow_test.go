package dsp

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/optimize"
)

// slowScene is a slow beat beside the input's own offset, in white noise.
type slowScene struct {
	hookup  Hookup
	rate    float64
	seconds float64
	f       float64                    // Hz; its sign tells the sense of rotation
	turns   func(t float64) float64    // cycles at t; nil: f*t
	amp     float64                    // default 0.1
	offset  complex128                 // of the input
	cn0     float64                    // dB-Hz
	phase   float64                    // turns
	extra   func(t float64) complex128 // whatever else is in the input
	seed    uint64
}

// samples makes one plane for a mixer, I and Q for quadrature.
func (s *slowScene) samples() [][]float32 {
	if s.amp == 0 {
		s.amp = 0.1
	}
	r := rand.New(rand.NewPCG(s.seed, 17))
	n := int(s.rate * s.seconds)
	sigma := s.sigma()
	out := [][]float32{make([]float32, n)}
	if s.hookup == Quadrature {
		out = append(out, make([]float32, n))
	}
	for i := range n {
		t := float64(i) / s.rate
		turns := s.f * t
		if s.turns != nil {
			turns = s.turns(t)
		}
		sin, cos := math.Sincos(2 * math.Pi * frac(turns+s.phase))
		v := complex(s.amp*cos, s.amp*sin) + s.offset
		if s.extra != nil {
			v += s.extra(t)
		}
		out[0][i] = float32(real(v) + sigma*r.NormFloat64())
		if s.hookup == Quadrature {
			out[1][i] = float32(imag(v) + sigma*r.NormFloat64())
		}
	}
	return out
}

// sigma is the noise in one component: C/N0 is A^2/N0 for I and Q, A^2/2/N0 for
// real input, N0 one-sided.
func (s *slowScene) sigma() float64 {
	return s.amp * math.Sqrt(s.rate/2/math.Pow(10, s.cn0/10)/map[bool]float64{true: 1, false: 2}[s.hookup == Quadrature])
}

// bound returns the Cramer-Rao bound on the frequency for from..to seconds of
// the scene, Hz: from the information matrix of amplitude, phase, frequency and
// offset, written out sample by sample and inverted by gonum.
func (s *slowScene) bound(from, to float64) float64 {
	const rate = 4.0 // the integral needs no more
	p := 4
	if s.hookup == Quadrature {
		p = 5
	}
	info := mat.NewSymDense(p, nil)
	add := func(d []float64) {
		for i := range p {
			for j := i; j < p; j++ {
				info.SetSym(i, j, info.At(i, j)+d[i]*d[j]*s.rate/rate)
			}
		}
	}
	half := (to - from) / 2
	for i := range int((to - from) * rate) {
		t := (float64(i)+0.5)/rate - half
		sin, cos := math.Sincos(2 * math.Pi * (s.f*(t+half+from) + s.phase))
		// amplitude/A, phase, frequency * half, offset
		add([]float64{s.amp * cos, -s.amp * sin, -s.amp * sin * t / half, 1, 0}[:p])
		if s.hookup == Quadrature {
			add([]float64{s.amp * sin, s.amp * cos, s.amp * cos * t / half, 0, 1})
		}
	}
	var inv mat.Dense
	if err := inv.Inverse(info); err != nil {
		return math.Inf(1)
	}
	return math.Sqrt(inv.At(2, 2)) * s.sigma() / (2 * math.Pi * half)
}

// figures gathers errors over their bounds and over their uncertainties.
type figures struct {
	n, none, in2, wrong int
	e2, b2, q2, z2      float64
}

func (f *figures) add(err, bound, u float64) {
	f.n++
	f.e2 += err * err
	f.b2 += bound * bound
	f.q2 += err * err / bound / bound
	f.z2 += err * err / u / u
	if math.Abs(err) <= 2*u {
		f.in2++
	}
}

func (f *figures) String() string {
	n := float64(f.n)
	return fmt.Sprintf("rms %8.3g mHz, bound %8.3g mHz, rms(error/bound) %.2f, within 2u %5.1f %%, rms(error/u) %.2f, none %d, wrong signs %d",
		1e3*math.Sqrt(f.e2/n), 1e3*math.Sqrt(f.b2/n), f.ratio(), 100*f.cover(), math.Sqrt(f.z2/n), f.none, f.wrong)
}

func (f *figures) ratio() float64 { return math.Sqrt(f.q2 / float64(f.n)) }
func (f *figures) cover() float64 { return float64(f.in2) / float64(f.n) }

// runSlow plays a scene and returns its readings and their summary.
func runSlow(t testing.TB, s *slowScene, cfg Config) ([]Reading, Summary) {
	t.Helper()
	cfg.Rate, cfg.Hookup, cfg.Wired = s.rate, s.hookup, true
	sum := NewSummer(cfg)
	rs := play(t, cfg, s.samples()...)
	for _, r := range rs {
		sum.Add(r)
	}
	return rs, sum.Summary()
}

// Slow beats reach the bound of the model that is fitted (rms of error over
// bound at most 1.3), the truth lies within 2u in 90 to 98 %, and the sign is
// never wrong: of quadrature from +-1 mHz, also in a third of a turn, of a mixer
// never stated. The summary is held to it where its phases have several cycles.
func TestSlowFigures(t *testing.T) {
	seed, scenes := uint64(20), 20
	if long() {
		seed, scenes = uint64(time.Now().UnixNano()), 200
	}
	for _, c := range []struct {
		hookup  Hookup
		lo, hi  float64 // mHz
		minutes float64
		summary bool
	}{
		{Quadrature, 1, 1, 5, false}, {Quadrature, 1, 1, 30, false}, {Quadrature, 3, 3, 5, false}, {Quadrature, 10, 10, 5, false},
		{Quadrature, 30, 30, 5, false}, {Quadrature, 30, 30, 30, true}, {Quadrature, 30, 375, 5, true},
		{Mixer, 1, 1, 20, false}, {Mixer, 1, 1, 30, false}, {Mixer, 3, 3, 10, false}, {Mixer, 10, 10, 5, false},
		{Mixer, 30, 30, 5, false}, {Mixer, 30, 30, 30, true}, {Mixer, 30, 375, 5, true},
	} {
		t.Run(fmt.Sprintf("%s %g-%g mHz, %g min", c.hookup, c.lo, c.hi, c.minutes), func(t *testing.T) {
			t.Parallel()
			scenes := scenes
			if !long() && c.minutes > 5 {
				scenes = 5 // those cost most
			}
			var last, all figures
			r := rand.New(rand.NewPCG(seed, uint64(c.lo*c.minutes)))
			for k := range scenes {
				s := &slowScene{hookup: c.hookup, rate: 10, seconds: 60 * c.minutes, cn0: 40 + 20*r.Float64(), phase: r.Float64(), seed: seed + uint64(k)}
				s.f = 1e-3 * c.lo * math.Pow(c.hi/c.lo, r.Float64())
				s.offset = complex(0.05*(2*r.Float64()-1), 0)
				if c.hookup == Quadrature {
					s.offset *= cmplx.Rect(1, 2*math.Pi*r.Float64())
					if k%2 == 1 {
						s.f = -s.f
					}
				}
				slowFigures(t, s, &last, &all)
			}
			t.Logf("seed %d, %d scenes, limit 1.30", seed, scenes)
			t.Logf("last reading: %v", &last)
			t.Logf("summary:      %v", &all)
			// Few scenes scatter: three standard deviations of an rms and of a share.
			n := math.Sqrt(float64(scenes))
			bad := func(f *figures) bool {
				return f.ratio() > 1.3+2.1/n*b2f(!long()) || f.cover() < 0.9-0.65/n || long() && f.cover() > 0.98+0.4/n
			}
			if last.none > 0 || last.wrong > 0 || bad(&last) {
				t.Errorf("last reading: %v", &last)
			}
			if c.summary && bad(&all) {
				t.Errorf("summary: %v", &all)
			}
		})
	}
}

func b2f(b bool) float64 {
	if b {
		return 1
	}
	return 0
}

func slowFigures(t *testing.T, s *slowScene, last, all *figures) {
	rs, sum := runSlow(t, s, Config{})
	bound := s.bound(0, s.seconds)
	for _, r := range rs {
		if s.hookup == Mixer && !math.IsNaN(r.Beat) || s.hookup == Quadrature && r.Beat*s.f < 0 {
			last.wrong++
			t.Logf("seed %d: sign: %s", s.seed, describe(r))
			break
		}
	}
	r := rs[len(rs)-1]
	if math.IsNaN(r.BeatAbs) {
		last.none++
		t.Logf("seed %d: none: %s", s.seed, r.Why)
		return
	}
	e, m := r.BeatAbs-math.Abs(s.f), float64(sum.BeatAbs)-math.Abs(s.f)
	if s.hookup == Quadrature {
		e, m = r.Beat-s.f, float64(sum.Beat)-s.f
	}
	last.add(e, bound, r.BeatU)
	all.add(m, bound, float64(sum.BeatU))
}

// slowCircle minimises the squared residual over the frequency by a fine grid
// and then by Nelder and Mead (gonum), amplitude and offset solved by QR at
// every trial: the slow and obvious way.
func slowCircle(c *circleFit) float64 {
	cost := func(f float64) float64 {
		p, rows := 3, 1
		if c.complex {
			p, rows = 4, 2
		}
		a, b := mat.NewDense(rows*len(c.z), p, nil), mat.NewVecDense(rows*len(c.z), nil)
		for i, z := range c.z {
			sin, cos := math.Sincos(2 * math.Pi * f * (c.t0 + float64(i)*c.dt))
			a.SetRow(rows*i, []float64{cos, -sin, 1, 0}[:p])
			b.SetVec(rows*i, real(z))
			if c.complex {
				a.SetRow(rows*i+1, []float64{sin, cos, 0, 1})
				b.SetVec(rows*i+1, imag(z))
			}
		}
		var x, r mat.VecDense
		if x.SolveVec(a, b) != nil {
			return math.Inf(1)
		}
		r.MulVec(a, &x)
		r.SubVec(b, &r)
		return mat.Dot(&r, &r)
	}
	best, at := math.Inf(1), 0.0
	for k := -120; k <= 120; k++ {
		if f := float64(k) / 20 / c.span(); k != 0 && (c.complex || k > 4) {
			if v := cost(f); v < best {
				best, at = v, f
			}
		}
	}
	res, err := optimize.Minimize(optimize.Problem{Func: func(x []float64) float64 { return cost(at * x[0]) }}, []float64{1},
		&optimize.Settings{Converger: &optimize.FunctionConverge{Absolute: 1e-15, Iterations: 60}}, &optimize.NelderMead{SimplexSize: 0.02})
	if err != nil && res == nil {
		panic(err)
	}
	return at * res.X[0]
}

// The fit agrees with the slow one to a small part of its uncertainty, and that
// is the bound's.
func TestSlowOracle(t *testing.T) {
	r := rand.New(rand.NewPCG(2, 2))
	for k := range 24 {
		s := &slowScene{hookup: []Hookup{Mixer, Quadrature}[k%2], rate: 10, seconds: 120, cn0: 40 + 20*r.Float64(), phase: r.Float64(), seed: uint64(k), offset: 0.03}
		turned := 1.1 + 3*r.Float64()
		if s.hookup == Quadrature {
			turned = 0.2 + 3*r.Float64()
			s.offset = 0.03 - 0.01i
		}
		s.f = turned / s.seconds
		cfg := Config{Rate: s.rate, Hookup: s.hookup}
		b, err := New(cfg)
		if err != nil {
			t.Fatal(err)
		}
		b.Samples(s.samples())
		e := b.eng.(*single)
		e.rest.ring.advance(e.zero)
		if e.rest.start = 0; !e.rest.try(s.seconds - 2) {
			t.Fatalf("scene %d, %.2f turns: %s", k, turned, e.rest.why)
		}
		c := &e.rest.fit
		u, f := c.u(pTurn), slowCircle(c)
		bound := s.bound(c.mid-c.half, c.mid+c.half)
		if math.Abs(c.x.f-f) > 0.02*u || u/bound < 0.75 || u/bound > 1.3 {
			t.Errorf("scene %d, %s, %.2f turns: fit %.9f, slow %.9f, u %.2e, bound %.2e", k, s.hookup, turned, c.x.f, f, u, bound)
		}
	}
}

// What the ring's filter does to the noise is known: the density that the
// residual's variance stands for is the input's, for every length of block.
func TestRingNoise(t *testing.T) {
	for _, rate := range []float64{10, 25, 1000} {
		s := &slowScene{hookup: Quadrature, rate: rate, seconds: 2000, amp: 1e-6, cn0: 0, seed: 4}
		if rate > 100 {
			s.seconds = 400
		}
		p := newPlan(rate)
		z, rg := newBand(p, 0, true, 0, int(p.outRate()*4)), newRing(p)
		for x := s.samples(); len(x[0]) > 0; x[0], x[1] = x[0][int(rate):], x[1][int(rate):] {
			z.push(x[0][:int(rate)], x[1][:int(rate)])
			rg.advance(z)
		}
		want := s.sigma() * s.sigma() / rate
		for k := range ringSteps - 1 {
			c := &circleFit{complex: true}
			c.load(rg, 5, s.seconds-5, k)
			c.x = circle{f: 0.1}
			if !c.run(0) {
				t.Fatal("no fit")
			}
			n := 2 * float64(c.n)
			if q := c.density() / want; math.Abs(q-1) > 5*math.Sqrt(2/n) {
				t.Errorf("%g/s, blocks of %d: density %.3f of the input's", rate, 1<<k, q)
			}
		}
	}
}

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
