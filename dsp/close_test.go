package dsp

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// Two lines far closer than a second could tell: the joint fit's errors are
// those of the information matrix (computed here afresh, by gonum), and its
// stated u says so.
func TestPairFitReachesJointBound(t *testing.T) {
	const n, dt, sigma = 256, 0.25, 0.02
	r := rand.New(rand.NewPCG(4, 4))
	for _, sep := range []float64{0.02, 0.05, 0.3} {
		st := stretch{dt: dt, half: n * dt / 2, t0: dt/2 - n*dt/2, valid: 1, used: n * dt, z: make([]complex128, n), w: make([]float64, n)}
		var sumQ, sumU float64
		const runs = 150
		for range runs {
			phase := 2 * math.Pi * r.Float64()
			fisher := mat.NewSymDense(7, nil)
			for i := range n {
				x := st.t0 + float64(i)*dt
				a, b := cmplx.Rect(1, 2*math.Pi*0.1*x), cmplx.Rect(0.7, 2*math.Pi*(0.1+sep)*x+phase)
				st.z[i] = a + b + complex(r.NormFloat64(), r.NormFloat64())*sigma
				st.w[i] = 1
				u := x / st.half
				col := [7]complex128{a, a * 1i, a * complex(0, u), b, b * 1i, b * complex(0, u), (a + b) * complex(0, u*u)}
				for j := range col {
					for k := j; k < 7; k++ {
						fisher.SetSym(j, k, fisher.At(j, k)+real(cmplx.Conj(col[j])*col[k])/(sigma*sigma))
					}
				}
			}
			var c mat.Dense
			if err := c.Inverse(fisher); err != nil {
				t.Fatal(err)
			}
			bound := math.Sqrt(c.At(2, 2)+c.At(5, 5)-2*c.At(2, 5)) / (2 * math.Pi * st.half)
			var p pairFitter
			p.prior = prior{ufc: math.Inf(1), uc: math.Inf(1)}
			x, ok := p.run(&st, two{a: 1, b: cmplx.Rect(0.7, phase), fc: 0.1, fl: 0.1 + sep}, freeChirp, 12, 1)
			if !ok {
				t.Fatal("no fit")
			}
			u, _, _ := p.errors(&st, 2*sigma*sigma*dt)
			sumQ += math.Pow((x.fl-x.fc-sep)/bound, 2)
			sumU += u / bound
		}
		rms, mean := math.Sqrt(sumQ/runs), sumU/runs
		t.Logf("%g Hz apart: rms error / bound %.3f, u / bound %.3f", sep, rms, mean)
		if rms < 0.85 || rms > 1.15 || mean < 0.95 || mean > 1.05 {
			t.Errorf("%g Hz apart: rms error / bound %.3f, u / bound %.3f", sep, rms, mean)
		}
	}
}

// What the filter lets through of a haze made by Cholesky's factor of its
// covariance (the slow way, by gonum) is white and as strong as it says; a line
// in it comes out with the variance that the filter tells.
func TestWhitener(t *testing.T) {
	const n, dt = 300, 0.2
	h := haze{power: 1, sigma: 0.2, mu: 0.3, n0: 1e-3}
	cov := mat.NewSymDense(2*n, nil) // real form of a circular process
	for i := range n {
		for k := range n {
			tau := float64(i-k) * dt
			v := cmplx.Rect(h.power*math.Exp(-2*math.Pi*math.Pi*h.sigma*h.sigma*tau*tau), 2*math.Pi*h.mu*tau) / 2
			if i == k {
				v += complex((h.n0/dt+3e-4*h.power)/2, 0)
			}
			if k >= i {
				cov.SetSym(i, k, real(v))
				cov.SetSym(n+i, n+k, real(v))
			}
			cov.SetSym(i, n+k, -imag(v))
		}
	}
	var chol mat.Cholesky
	if !chol.Factorize(cov) {
		t.Fatal("covariance")
	}
	var low mat.TriDense
	chol.LTo(&low)
	r := rand.New(rand.NewPCG(8, 8))
	st := stretch{dt: dt, half: n * dt / 2, t0: dt/2 - n*dt/2, z: make([]complex128, n), w: make([]float64, n)}
	var w whitener
	w.set(h, dt, maxOrder)
	var power, lag, count float64
	var q2, g float64
	const runs = 40
	for range runs {
		white := mat.NewVecDense(2*n, nil)
		for i := range 2 * n {
			white.SetVec(i, r.NormFloat64())
		}
		var x mat.VecDense
		x.MulVec(&low, white)
		for i := range n {
			st.z[i], st.w[i] = complex(x.AtVec(i), x.AtVec(n+i)), 1
		}
		w.take(&st)
		for i := w.n + 1; i < n; i++ {
			power += real(w.v[i] * cmplx.Conj(w.v[i]))
			lag += real(w.v[i] * cmplx.Conj(w.v[i-1]))
			count++
		}
		q, gain := w.match(0.5, 0)
		q2 += real(q * cmplx.Conj(q))
		g = gain
	}
	t.Logf("power let through / told %.3f, likeness of neighbours %.3f, variance of the matched sum / told %.2f", power/count/w.err, lag/power, q2/runs/g)
	if d := power/count/w.err - 1; math.Abs(d) > 0.1 || math.Abs(lag/power) > 0.06 {
		t.Errorf("not white: power %.3f of what was told, neighbours alike by %.3f", 1+d, lag/power)
	}
	if v := q2 / runs / g; v < 0.6 || v > 1.5 {
		t.Errorf("matched sum's variance is %.2f of what was told", v)
	}
}

// The slow ring holds a tone at its level and phase, also when its centre moves.
func TestSlowRing(t *testing.T) {
	s := scene{rate: 8000, seconds: 8, carrier: 1003, ampL: 1e-9}
	p := newPlan(8000)
	b := newBand(p, 990, false, 0, 1024)
	ring := newSlow(p)
	ring.aim(1000)
	x := s.samples()
	for i := 0; i < len(x); i += 4000 {
		if i == 32000 {
			ring.aim(1006)
		}
		b.push(x[i:i+4000], nil)
		ring.advance(b)
	}
	var st stretch
	ring.fetch(&st, 7.5, 6, 1003, 100)
	if st.valid < 0.99 {
		t.Fatalf("only %.2f of the stretch is there", st.valid)
	}
	for i, z := range st.z {
		if math.Abs(cmplx.Abs(z)/b.gain(13)-0.1) > 1e-4 || cmplx.Abs(z-st.z[0]) > 1e-5 {
			t.Fatalf("sample %d: %v after %v", i, z, st.z[0])
		}
	}
}
