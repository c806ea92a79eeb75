package dsp

import (
	"math"
	"math/cmplx"
)

const (
	maxOrder   = 64
	phaseSlack = 0.3 // rad by which a line may run out of phase over a span
)

// haze is what lies around a line as Gaussian noise: a carrier smeared by
// fading (power, rms width and middle of a Gaussian Doppler spectrum) and white
// noise of density n0. A narrow haze stands for a carrier that hardly fades.
type haze struct {
	power, sigma, mu float64 // |z|^2; Hz; Hz from the stretch's centre
	n0               float64
}

// whitener is the prediction-error filter of a haze: generalised least squares
// for one line in it comes down to a periodogram of what the filter lets
// through. Levinson's recursion on the haze's autocorrelation gives the filter.
type whitener struct {
	a       [maxOrder + 1]complex128
	r       [maxOrder + 1]complex128
	n       int
	err     float64 // power of what is let through
	v       []complex128
	q       []complex128 // running sums, of bears
	g       []float64
	dt      float64
	stretch *stretch
}

// set makes the filter for samples dt apart.
func (w *whitener) set(h haze, dt float64, order int) {
	w.n = min(order, maxOrder)
	w.dt = dt
	floor := h.n0/dt + 3e-4*h.power
	for k := range w.n + 1 {
		t := float64(k) * dt
		g := h.power * math.Exp(-2*math.Pi*math.Pi*h.sigma*h.sigma*t*t)
		w.r[k] = cmplx.Rect(g, 2*math.Pi*h.mu*t)
	}
	w.r[0] += complex(floor, 0)
	w.a = [maxOrder + 1]complex128{1}
	w.err = real(w.r[0])
	for m := 1; m <= w.n; m++ {
		var acc complex128
		for k := range m {
			acc += w.a[k] * w.r[m-k]
		}
		kappa := -acc / complex(w.err, 0)
		var b [maxOrder + 1]complex128
		for k := 0; k <= m; k++ {
			b[k] = w.a[k] + kappa*cmplx.Conj(w.a[m-k])
		}
		w.a = b
		w.err *= 1 - (real(kappa)*real(kappa) + imag(kappa)*imag(kappa))
	}
}

// take filters a stretch.
func (w *whitener) take(st *stretch) {
	w.stretch = st
	w.v = resize(w.v, len(st.z))
	for i := range st.z {
		w.v[i] = 0
		if i < w.n {
			continue
		}
		ok := true
		var y complex128
		for k := 0; k <= w.n; k++ {
			y += w.a[k] * st.z[i-k]
			ok = ok && st.w[i-k] != 0
		}
		if ok {
			w.v[i] = y
		}
	}
}

// gain returns the filter's response at f.
func (w *whitener) gain(f float64) complex128 {
	q := cmplx.Rect(1, -2*math.Pi*f*w.dt)
	var y complex128
	for k := w.n; k >= 0; k-- {
		y = y*q + w.a[k]
	}
	return y
}

// match returns the matched sum for a line at f with chirp c, and how much of
// it one unit of amplitude would give: likelihood gain 2 Re(conj(b) q) - |b|^2 g.
func (w *whitener) match(f, c float64) (q complex128, g float64) {
	st := w.stretch
	t := st.t0 + float64(w.n)*st.dt
	e, r, rr := chirped(f, c, t, st.dt)
	bends := math.Abs(c)*st.half > 0.05
	h := w.gain(f)
	var sum complex128
	for i := w.n; i < len(w.v); i++ {
		if bends && (i-w.n)%8 == 0 {
			h = w.gain(f + c*(st.t0+float64(i)*st.dt))
		}
		if w.v[i] != 0 {
			if bends {
				sum += w.v[i] * cmplx.Conj(e*h)
				g += real(h)*real(h) + imag(h)*imag(h)
			} else {
				sum += w.v[i] * cmplx.Conj(e)
				g++
			}
		}
		e *= r
		r *= rr
	}
	if !bends {
		sum *= cmplx.Conj(h)
		g *= real(h)*real(h) + imag(h)*imag(h)
	}
	return sum / complex(w.err, 0), g / w.err
}

// power returns the matched sum's g for a line at f that rests.
func (w *whitener) power(f float64) float64 {
	n := 0
	for _, v := range w.v {
		if v != 0 {
			n++
		}
	}
	h := w.gain(f)
	return float64(n) * (real(h)*real(h) + imag(h)*imag(h)) / w.err
}

// score returns the log-likelihood gained by a line at f, chirp c, of an
// amplitude between lo and hi, and that line's complex amplitude.
func (w *whitener) score(f, c, lo, hi float64) (gain float64, b complex128) {
	q, g := w.match(f, c)
	m := cmplx.Abs(q)
	if g == 0 || m == 0 {
		return 0, 0
	}
	a := max(lo, min(hi, m/g))
	return 2*a*m - a*a*g, q * complex(a/m, 0)
}

// refine improves f and c by Gauss-Newton steps on the phase; the chirp is held
// near c0 with uncertainty uc. It returns the line's complex amplitude (free),
// and the uncertainty of f.
func (w *whitener) refine(f, c, c0, uc float64) (f1, c1, uf float64, b complex128) {
	st := w.stretch
	f0 := f
	for range 4 {
		q, g := w.match(f, c)
		if g == 0 || q == 0 {
			return f, c, math.Inf(1), 0
		}
		b = q / complex(g, 0)
		h := w.gain(f)
		e, r, rr := chirped(f, c, st.t0, st.dt)
		var m [5]float64
		var y [3]float64
		k := cmplx.Conj(h) / (b * complex(real(h)*real(h)+imag(h)*imag(h), 0))
		for i := range w.v {
			if i >= w.n && w.v[i] != 0 {
				u := (st.t0 + float64(i)*st.dt) / st.half
				d := imag(w.v[i] * cmplx.Conj(e) * k)
				y[0] += d
				y[1] += d * u
				y[2] += d * u * u
				p := 1.0
				for j := range m {
					m[j] += p
					p *= u
				}
			}
			e *= r
			r *= rr
		}
		// Per unit of weight: |b|^2 |h|^2 / err, twice that of one quadrature.
		weight := 2 * (real(b)*real(b) + imag(b)*imag(b)) * (real(h)*real(h) + imag(h)*imag(h)) / w.err
		unit := math.Pi * st.half * st.half
		pc := 1 / (uc * uc * unit * unit) / weight
		y[2] += pc * (c0 - c) * unit
		mat := [3][3]float64{{m[0], m[1], m[2]}, {m[1], m[2], m[3]}, {m[2], m[3], m[4] + pc}}
		x := solve3(mat, y)
		df := x[1] / (2 * math.Pi * st.half)
		c += x[2] / unit
		f += df
		if math.Abs(f-f0) > 1/st.half || math.IsNaN(f) {
			return f0, c0, math.Inf(1), 0
		}
		v := solve3(mat, [3]float64{0, 1, 0})
		uf = math.Sqrt(max(0, v[1])/weight) / (2 * math.Pi * st.half)
		if math.Abs(df)*st.half < 1e-5 {
			break
		}
	}
	return f, c, uf, b
}

// bears reports whether every part of the stretch that could contradict a line
// of complex amplitude b bears it out: no first nor last seconds speak plainly
// against it, and the latest that can tell speak for it. A line that has left,
// or that stood elsewhere at first, has the long span's whole gain from seconds
// in which it was there; each sample's log-likelihood tells (Page's cumulative
// sum, Biometrika 1954, from memory). A gain control that halves the line's level
// for a while does not make a part speak against it.
func (w *whitener) bears(f, c float64, b complex128) bool {
	m := cmplx.Abs(b)
	if m == 0 || len(w.v) == 0 {
		return false
	}
	st := w.stretch
	unit := b / complex(m, 0)
	h := w.gain(f)
	bends := math.Abs(c)*st.half > 0.05
	e, r, rr := chirped(f, c, st.t0, st.dt)
	w.q, w.g = resize(w.q, len(w.v)+1), resize(w.g, len(w.v)+1)
	w.q[0], w.g[0] = 0, 0
	for i, v := range w.v {
		if bends && i%8 == 0 {
			h = w.gain(f + c*(st.t0+float64(i)*st.dt))
		}
		q, g := complex128(0), 0.0
		if v != 0 {
			q = v * cmplx.Conj(e*h*unit) / complex(w.err, 0)
			g = (real(h)*real(h) + imag(h)*imag(h)) / w.err
		}
		w.q[i+1], w.g[i+1] = w.q[i]+q, w.g[i]+g
		e *= r
		r *= rr
	}
	// The gain of part i..j, what the line would gain there, and whether it stands
	// there in phase.
	part := func(i, j int) (gain, most float64, inPhase bool) {
		q, g := w.q[j]-w.q[i], w.g[j]-w.g[i]
		if g <= 0 {
			return 0, 0, true
		}
		most = m * m * g
		return 2*m*real(q) - most, most, most < telling ||
			math.Abs(cmplx.Phase(q)) < phaseSlack+3.5/math.Sqrt(2*most)
	}
	n := len(w.v)
	least := min(n, int(math.Ceil(1/st.dt)))
	asked := false
	for k := least; k <= n; k++ {
		head, _, headIn := part(0, k)
		tail, most, tailIn := part(n-k, n)
		if head < -unlike || tail < -unlike || !headIn || !tailIn {
			return false
		}
		if !asked && most > telling {
			if tail <= 0 {
				return false
			}
			asked = true
		}
	}
	return true
}
