package dsp

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/optimize"
)

// Goertzel at any frequency equals the sum it stands for, term by term (Sysel &
// Rajmic 2012 give 1e-13 for such a comparison).
func TestGoertzel(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 1))
	for range 200 {
		x := make([]complex128, 1+r.IntN(300))
		for i := range x {
			x[i] = complex(r.NormFloat64(), r.NormFloat64())
		}
		a := 2 * math.Pi * (r.Float64() - 0.5)
		var want complex128
		for n, v := range x {
			want += v * cmplx.Rect(1, -a*float64(n))
		}
		if got := goertzel(x, a); cmplx.Abs(got-want) > 1e-9*float64(len(x)) {
			t.Fatalf("%d samples at %g: %v, want %v", len(x), a, got, want)
		}
	}
}

// The search's interpolation has the bias published for its window and method:
// at most 3.2e-3 bins for a parabola through the logarithms of a
// Blackman-Harris window without zero padding (N = 1024; computed with NumPy),
// and hardly anything in level.
func TestSearchBias(t *testing.T) {
	a := newAcquirerN(1024, 100, 400, false, 1024)
	worst, level := 0.0, 0.0
	for k := range 101 {
		f := 200 + float64(k)/100 - 0.5
		x := make([]float32, 1024)
		for i := range x {
			x[i] = float32(0.5 * math.Cos(2*math.Pi*f*float64(i)/1024+1))
		}
		got := a.search(x, nil)
		if len(got) != 1 {
			t.Fatalf("%g: %d lines", f, len(got))
		}
		worst = max(worst, math.Abs(got[0].f-f))
		level = max(level, math.Abs(20*math.Log10(got[0].amp/0.5)))
	}
	t.Logf("bias at most %.2e bins, level within %.3f dB", worst, level)
	if worst > 3.3e-3 || worst < 2.5e-3 {
		t.Errorf("bias %.2e bins, published 3.20e-3", worst)
	}
	if level > 0.05 {
		t.Errorf("level off by %.3f dB", level)
	}
}

// slowFit minimises the squared residual of two lines with sloping amplitudes
// over their frequencies by Nelder and Mead (gonum), the amplitudes solved by
// QR for every trial: variable projection, the slow and obvious way.
func slowFit(z []complex128, w []float64, t0, dt, f1, f2 float64) (float64, float64) {
	n := len(z)
	cost := func(f []float64) float64 {
		// Real form: columns e, je, te, jte for each line.
		a := mat.NewDense(2*n, 8, nil)
		b := mat.NewVecDense(2*n, nil)
		for i := range n {
			t := t0 + float64(i)*dt
			s := math.Sqrt(w[i])
			for k := range 2 {
				sin, cos := math.Sincos(2 * math.Pi * f[k] * t)
				a.SetRow(2*i, row(a.RawRowView(2*i), 4*k, s*cos, -s*sin, s*t*cos, -s*t*sin))
				a.SetRow(2*i+1, row(a.RawRowView(2*i+1), 4*k, s*sin, s*cos, s*t*sin, s*t*cos))
			}
			b.SetVec(2*i, s*real(z[i]))
			b.SetVec(2*i+1, s*imag(z[i]))
		}
		var x, r mat.VecDense
		if err := x.SolveVec(a, b); err != nil {
			return math.Inf(1)
		}
		r.MulVec(a, &x)
		r.SubVec(b, &r)
		// Only the slope's part in phase with the line is the model's; the part
		// in quadrature is a frequency, driven to zero at the minimum.
		pen := 0.0
		for k := range 2 {
			am := complex(x.AtVec(4*k), x.AtVec(4*k+1))
			sl := complex(x.AtVec(4*k+2), x.AtVec(4*k+3))
			pen += math.Pow(imag(sl/am), 2)
		}
		return pen
	}
	res, err := optimize.Minimize(optimize.Problem{Func: cost}, []float64{f1, f2}, &optimize.Settings{
		Converger: &optimize.FunctionConverge{Absolute: 1e-18, Iterations: 200}}, &optimize.NelderMead{SimplexSize: 0.01})
	if err != nil && res == nil {
		panic(err)
	}
	return res.X[0], res.X[1]
}

func row(r []float64, at int, v ...float64) []float64 {
	copy(r[at:], v)
	return r
}

// The fit agrees with the slow one to a small part of its own uncertainty.
func TestFitAgainstSlowOracle(t *testing.T) {
	r := rand.New(rand.NewPCG(9, 9))
	p := newPlan(8000)
	for k := range 12 {
		sep := 2 + 4*r.Float64()
		s := scene{rate: 8000, seconds: 3, carrier: 1000 + r.Float64(), cn0: 45 + 20*r.Float64(), seed: uint64(k), ampL: 0.03 + 0.1*r.Float64()}
		s.local = s.carrier + sep
		s.carrFn = func(t float64) (float64, float64) { return 1 + 0.2*(t-1.5), 0 }
		b := newBand(p, 1001, false, 0, 4096)
		b.push(s.samples(), nil)
		l := newLens(p, false)
		l.open(b, 1.5, 1, edge)
		l.add(s.carrier-b.centre+0.1, 0)
		l.add(s.local-b.centre-0.1, 0)
		if !l.solve(b, false) {
			t.Fatal("no fit")
		}
		f1, f2 := slowFit(l.win.z, l.win.w, l.win.t0, l.win.dt, l.lines[0].f+0.01, l.lines[1].f-0.01)
		u := bound(s.cn0, 1)
		if math.Abs(l.lines[0].f-f1) > 0.02*u || math.Abs(l.lines[1].f-f2) > 0.02*u {
			t.Errorf("scene %d, %.2f Hz apart: fit %.7f %.7f, slow %.7f %.7f (bound %.1e)", k, sep, l.lines[0].f, l.lines[1].f, f1, f2, u)
		}
	}
}

// The kept uncertainty of two close lines is that of the information matrix:
// against the spread of many noise realisations.
func TestUncertaintyOfCloseLines(t *testing.T) {
	p := newPlan(8000)
	r := rand.New(rand.NewPCG(5, 5))
	for _, sep := range []float64{1.7, 2.3, 4} {
		var se, su float64
		const n = 300
		for range n {
			l := newLens(p, false)
			l.win = window{t0: -0.55, dt: 1 / 400.0, half: 0.5}
			ph := r.Float64()
			for i := range 441 {
				t := l.win.t0 + float64(i)*l.win.dt
				z := cmplx.Rect(1, 2*math.Pi*(10*t+0.3)) + cmplx.Rect(0.7, 2*math.Pi*((10+sep)*t+ph))
				z += complex(r.NormFloat64(), r.NormFloat64()) * complex(0.05, 0)
				w := 1.0
				if a := math.Abs(t); a > 0.45 {
					w = 0.5 - 0.5*math.Sin(math.Pi/2*min(1, (a-0.5)/0.05))
				}
				l.win.z, l.win.w, l.win.ok = append(l.win.z, z), append(l.win.w, w), append(l.win.ok, true)
			}
			b := newBand(p, 1000, false, 0, 64)
			l.add(10.05, 0)
			l.add(10+sep-0.05, 0)
			if !l.solve(b, false) {
				t.Fatal("no fit")
			}
			d := l.lines[1].f - l.lines[0].f - sep
			density := 2 * 0.05 * 0.05 * l.win.dt
			se += d * d
			su += l.diffU * l.diffU * density
		}
		t.Logf("%.1f Hz apart: u/rms %.3f", sep, math.Sqrt(su/se))
		if q := math.Sqrt(su / se); q < 0.87 || q > 1.15 {
			t.Errorf("%.1f Hz apart: u/rms %.3f", sep, q)
		}
	}
}
