package dsp

import (
	"math"
	"math/cmplx"
)

// stretch is sound of the slow ring, once more averaged down: sample i lies at
// t0 + i dt seconds from mid and has weight w[i], 0 where it is missing.
type stretch struct {
	z           []complex128
	w           []float64
	t0, dt      float64
	mid, half   float64
	centre      float64 // audio Hz of 0 Hz
	valid, used float64 // share of real samples, and their seconds
}

// fetch loads the span that ends at end, turned down by centre (audio Hz), in
// about n samples, each the mean of several.
func (s *slow) fetch(st *stretch, end, span, centre float64, n int) {
	end = min(end, s.upto())
	k := max(1, int(span*s.rate/float64(n)))
	m1 := int64(math.Floor(end*s.rate)) + 1
	count := int(span * s.rate / float64(k))
	m0 := m1 - int64(count*k)
	st.z, st.w = resize(st.z, count), resize(st.w, count)
	st.dt = float64(k) / s.rate
	st.half = float64(count) * st.dt / 2
	st.mid = s.time(m0) - 0.5/s.rate + st.half
	st.t0 = 0.5*st.dt - st.half
	st.centre = centre
	off := centre - s.centre
	e := turn(off, s.time(m0))
	q := cmplx.Rect(1, -2*math.Pi*off/s.rate)
	have := 0
	mask := int64(len(s.z) - 1)
	for i := range st.z {
		var y complex128
		ok := 0
		for j := range k {
			m := m0 + int64(i*k+j)
			if m >= 0 && m < s.next && m >= s.next-int64(len(s.z)) && s.ok[m&mask] {
				y += s.z[m&mask] * e
				ok++
			}
			e *= q
		}
		st.z[i], st.w[i] = 0, 0
		if ok == k {
			st.z[i], st.w[i] = y/complex(float64(k), 0), 1
			have++
		}
	}
	st.valid = float64(have) / float64(max(1, count))
	st.used = float64(have) * st.dt
}

// two is a pair of lines about a stretch's middle: both bend by the common
// chirp c of the receiver, the local by cl more, and the carrier's amplitude
// slopes by g:
//
//	(1 + g t) a exp(j2pi(fc t + c t^2/2)) + b exp(j2pi(fl t + (c+cl) t^2/2))
type two struct {
	a, b   complex128
	fc, fl float64 // Hz from the stretch's centre
	c, cl  float64 // Hz/s
	g      float64 // 1/s
}

// How much of the model is free besides both lines' amplitudes and frequencies.
const (
	freeChirp = 1 << iota // c
	freeTurn              // cl: the trimmer turns
	freeSlope             // g
)

const pairCols = 9

// pairFitter fits two lines jointly by damped Gauss-Newton steps on the
// non-linear least squares problem, in real form; see Rife & Boorstyn 1976 for
// the joint bound that this reaches. It allocates nothing in the steady state.
type pairFitter struct {
	prior prior
	blind bool // to size: a gain control has been at it, only the phase of the sound counts
	m     [pairCols][pairCols]float64
	rhs   [pairCols]float64
	low   [pairCols][pairCols]float64
	n     int
	r     []complex128
	rss   float64 // with the prior's part
	data  float64 // of the residual alone
}

// prior is what is known of a stretch's carrier beforehand: its frequency (from
// the stretch's centre) and the chirp, with standard uncertainties; +Inf: nothing.
// noise is the density of the noise against which that counts.
type prior struct {
	fc, ufc, c, uc, noise float64
}

// weigh adds the prior to the normal equations at x.
func (p *pairFitter) weigh(st *stretch, x *two, free int) {
	v := p.prior.noise / st.dt / 2
	add := func(i int, is, want, u, unit float64) {
		if w := v / (u * u * unit * unit); w > 0 && !math.IsInf(w, 0) {
			d := (want - is) * unit
			p.m[i][i] += w
			p.rhs[i] += w * d
			p.rss += w * d * d
		}
	}
	add(2, x.fc, p.prior.fc, p.prior.ufc, 2*math.Pi*st.half)
	if free&freeChirp != 0 {
		add(6, x.c, p.prior.c, p.prior.uc, math.Pi*st.half*st.half)
	}
}

// normal builds the normal equations at x; r keeps the residual.
func (p *pairFitter) normal(st *stretch, x *two, free int) {
	p.n = 6
	ci, li, gi := -1, -1, -1
	if free&freeChirp != 0 {
		ci = p.n
		p.n++
	}
	if free&freeTurn != 0 {
		li = p.n
		p.n++
	}
	if free&freeSlope != 0 {
		gi = p.n
		p.n++
	}
	n := p.n
	for i := range n {
		p.rhs[i] = 0
		for j := range n {
			p.m[i][j] = 0
		}
	}
	p.r = resize(p.r, len(st.z))
	e1, q1, s1 := chirped(x.fc, x.c, st.t0, st.dt)
	e2, q2, s2 := chirped(x.fl, x.c+x.cl, st.t0, st.dt)
	p.rss = 0
	var col [pairCols]complex128
	for i, z := range st.z {
		t := st.t0 + float64(i)*st.dt
		u := t / st.half
		ca, lb := x.a*e1, x.b*e2
		shaped := ca * complex(1+x.g*t, 0)
		r := z - shaped - lb
		if st.w[i] == 0 {
			r = 0
		}
		p.r[i] = r
		if st.w[i] != 0 {
			if !p.blind {
				p.rss += real(r)*real(r) + imag(r)*imag(r)
			}
			grow := e1 * complex(1+x.g*t, 0)
			col[0], col[1] = grow, grow*1i
			col[2] = shaped * complex(0, u)
			col[3], col[4] = e2, e2*1i
			col[5] = lb * complex(0, u)
			if ci >= 0 {
				col[ci] = (shaped + lb) * complex(0, u*u)
			}
			if li >= 0 {
				col[li] = lb * complex(0, u*u)
			}
			if gi >= 0 {
				col[gi] = ca * complex(u, 0)
			}
			if p.blind {
				p.addBlind(i, z, shaped+lb, &col)
			} else {
				for j := range n {
					a, b := real(col[j]), imag(col[j])
					p.rhs[j] += a*real(r) + b*imag(r)
					for k := 0; k <= j; k++ {
						p.m[j][k] += a*real(col[k]) + b*imag(col[k])
					}
				}
			}
		}
		e1 *= q1
		q1 *= s1
		e2 *= q2
		q2 *= s2
	}
	if p.blind {
		p.holdScale(x)
	}
	p.data = p.rss
	p.weigh(st, x, free)
}

// addBlind adds sample z to the normal equations where its size is some unknown
// gain: what counts is its part at right angles to the model m.
func (p *pairFitter) addBlind(i int, z, m complex128, col *[pairCols]complex128) {
	size := cmplx.Abs(m)
	if size == 0 {
		p.r[i] = 0
		return
	}
	unit := m / complex(size, 0)
	q := z * cmplx.Conj(unit)
	gain := real(q) / size
	p.r[i] = complex(0, imag(q)) * unit
	p.rss += imag(q) * imag(q)
	var y [pairCols]float64
	for j := range p.n {
		y[j] = gain * imag(col[j]*cmplx.Conj(unit))
		p.rhs[j] += y[j] * imag(q)
		for k := 0; k <= j; k++ {
			p.m[j][k] += y[j] * y[k]
		}
	}
}

// holdScale keeps the carrier's amplitude where it is: of both together the
// phase of the sound knows only the ratio.
func (p *pairFitter) holdScale(x *two) {
	a := [2]float64{real(x.a), imag(x.a)}
	w := 1e3 * (p.m[0][0] + p.m[1][1] + p.m[3][3]) / (a[0]*a[0] + a[1]*a[1])
	for j := range 2 {
		for k := 0; k <= j; k++ {
			p.m[j][k] += w * a[j] * a[k]
		}
	}
}

// factor makes the Cholesky factor of the normal matrix with its diagonal
// raised by damp.
func (p *pairFitter) factor(damp float64) bool {
	for i := range p.n {
		for j := 0; j <= i; j++ {
			s := p.m[i][j]
			if i == j {
				s *= 1 + damp
			}
			for k := range j {
				s -= p.low[i][k] * p.low[j][k]
			}
			if i == j {
				if s <= 1e-13*p.m[i][i] || p.m[i][i] == 0 {
					return false
				}
				p.low[i][i] = math.Sqrt(s)
			} else {
				p.low[i][j] = s / p.low[j][j]
			}
		}
	}
	return true
}

func (p *pairFitter) backSolve(x *[pairCols]float64) {
	for i := range p.n {
		for k := range i {
			x[i] -= p.low[i][k] * x[k]
		}
		x[i] /= p.low[i][i]
	}
	for i := p.n - 1; i >= 0; i-- {
		for k := i + 1; k < p.n; k++ {
			x[i] -= p.low[k][i] * x[k]
		}
		x[i] /= p.low[i][i]
	}
}

// moved returns x after the step d.
func (p *pairFitter) moved(st *stretch, x two, d *[pairCols]float64, free int) two {
	x.a += complex(d[0], d[1])
	x.fc += d[2] / (2 * math.Pi * st.half)
	x.b += complex(d[3], d[4])
	x.fl += d[5] / (2 * math.Pi * st.half)
	at := 6
	if free&freeChirp != 0 {
		x.c += d[at] / (math.Pi * st.half * st.half)
		at++
	}
	if free&freeTurn != 0 {
		x.cl += d[at] / (math.Pi * st.half * st.half)
		at++
	}
	if free&freeSlope != 0 {
		x.g += d[at] / st.half
	}
	return x
}

// run fits from x and returns the solution; false when it runs away. Both
// frequencies stay within reach Hz of where they began.
func (p *pairFitter) run(st *stretch, x two, free, iters int, reach float64) (two, bool) {
	start := x
	damp := 1e-6
	p.normal(st, &x, free)
	for range iters {
		before := p.rss
		if !p.factor(damp) {
			return x, false
		}
		d := p.rhs
		p.backSolve(&d)
		// No step turns a line by more than a third of a turn at the edge.
		if lim := 2.0; math.Abs(d[2]) > lim || math.Abs(d[5]) > lim {
			g := lim / max(math.Abs(d[2]), math.Abs(d[5]))
			for i := range p.n {
				d[i] *= g
			}
		}
		y := p.moved(st, x, &d, free)
		if math.Abs(y.fc-start.fc) > reach || math.Abs(y.fl-start.fl) > reach || math.IsNaN(y.fc+y.fl) {
			return x, false
		}
		p.normal(st, &y, free)
		if p.rss > before*1.0000001 {
			damp = max(damp*30, 1e-4)
			if damp > 1e6 {
				break
			}
			p.normal(st, &x, free)
			continue
		}
		x = y
		damp = max(damp/10, 1e-9)
		if math.Abs(d[2])+math.Abs(d[5]) < 1e-6 || before-p.rss < 1e-9*p.rss {
			break
		}
	}
	return x, p.factor(0)
}

// amplitudes solves for both amplitudes at given frequencies and chirps.
func (p *pairFitter) amplitudes(st *stretch, x two) (two, float64) {
	e1, q1, s1 := chirped(x.fc, x.c, st.t0, st.dt)
	e2, q2, s2 := chirped(x.fl, x.c+x.cl, st.t0, st.dt)
	var m, zz float64
	var x12, r1, r2 complex128
	for i, z := range st.z {
		if st.w[i] != 0 {
			m++
			x12 += cmplx.Conj(e1) * e2
			r1 += cmplx.Conj(e1) * z
			r2 += cmplx.Conj(e2) * z
			zz += real(z)*real(z) + imag(z)*imag(z)
		}
		e1 *= q1
		q1 *= s1
		e2 *= q2
		q2 *= s2
	}
	det := m*m - real(x12*cmplx.Conj(x12))
	if det < 1e-9*m*m {
		return x, zz
	}
	x.a = (complex(m, 0)*r1 - x12*r2) / complex(det, 0)
	x.b = (complex(m, 0)*r2 - cmplx.Conj(x12)*r1) / complex(det, 0)
	x.g = 0
	return x, zz - real(cmplx.Conj(x.a)*r1+cmplx.Conj(x.b)*r2)
}

// errors returns the standard uncertainties of fl-fc, fc and fl (Hz) for noise
// of the given density (|z|^2 per Hz) after run.
func (p *pairFitter) errors(st *stretch, density float64) (diff, uc, ul float64) {
	v := density / st.dt / 2 / math.Pow(2*math.Pi*st.half, 2)
	var d [pairCols]float64
	d[2] = 1
	p.backSolve(&d)
	cc, cl := d[2], d[5]
	d = [pairCols]float64{}
	d[5] = 1
	p.backSolve(&d)
	ll := d[5]
	return math.Sqrt(max(0, v*(cc+ll-2*cl))), math.Sqrt(max(0, v*cc)), math.Sqrt(max(0, v*ll))
}

// levelError returns the relative uncertainty of the ratio of both amplitudes
// for noise of the given density.
func (p *pairFitter) levelError(st *stretch, x *two, density float64) float64 {
	v := density / st.dt / 2
	sum := 0.0
	for _, i := range [2]int{0, 3} {
		a := x.a
		if i == 3 {
			a = x.b
		}
		for j := range 2 { // half of what moves either part moves the size
			var d [pairCols]float64
			d[i+j] = 1
			p.backSolve(&d)
			sum += d[i+j] * v / 2 / (real(a)*real(a) + imag(a)*imag(a))
		}
	}
	return math.Sqrt(2 * sum)
}

// alone forgets the prior: the errors told next are those of the stretch by
// itself. It returns false where that says nothing.
func (p *pairFitter) alone(st *stretch, x *two, free int) bool {
	p.prior = prior{ufc: math.Inf(1), uc: math.Inf(1)}
	p.normal(st, x, free)
	return p.factor(0)
}

// chirpError is the same for the common chirp, Hz/s, when it was free.
func (p *pairFitter) chirpError(st *stretch, density float64) float64 {
	var d [pairCols]float64
	d[6] = 1
	p.backSolve(&d)
	return math.Sqrt(density/st.dt/2*d[6]) / (math.Pi * st.half * st.half)
}

// leftOver returns the density of the residual: its mean over the whole
// stretch's bandwidth, and the mean beside both lines, where what the model does
// not explain gathers.
func (p *pairFitter) leftOver(st *stretch, x *two) (all, beside float64) {
	all = p.data / (float64(len(p.r)) - float64(p.n)/2) * st.dt / max(st.valid, 0.1)
	if p.blind {
		all *= 2 // only one of two quadratures was counted
	}
	step := 0.5 / st.half // one resolution
	n := 0.0
	for _, f := range [2]float64{x.fc, x.fl} {
		for _, k := range [6]float64{-3.5, -2.5, -1.5, 1.5, 2.5, 3.5} {
			g := f + k*step
			if math.Abs(g)*st.dt > 0.45 {
				continue
			}
			beside += p.density(st, g)
			n++
		}
	}
	beside /= max(n, 1)
	if p.blind {
		beside *= 2
	}
	return all, beside
}

// recent returns the mean power of the residual in the last seconds of the
// stretch over that of the whole, where it looks like one of the lines gone
// another way; a burst of noise counts as nothing.
func (p *pairFitter) recent(st *stretch, x *two, seconds float64) float64 {
	k := max(4, int(seconds/st.dt))
	if 3*k > len(p.r) || p.data == 0 {
		return 0
	}
	at := len(p.r) - k
	t := st.t0 + float64(at)*st.dt
	q := cmplx.Rect(1, -2*math.Pi*((x.fc+x.fl)/2+x.c*t)*st.dt)
	e := complex(1, 0)
	var last, n float64
	var sum complex128
	for i := at; i < len(p.r); i++ {
		last += real(p.r[i])*real(p.r[i]) + imag(p.r[i])*imag(p.r[i])
		sum += p.r[i] * e
		e *= q
		n += st.w[i]
	}
	if n == 0 || real(sum)*real(sum)+imag(sum)*imag(sum) < 0.4*n*last {
		return 0
	}
	return last / n / (p.data / (st.used / st.dt))
}

// density of the residual at f, by the periodogram.
func (p *pairFitter) density(st *stretch, f float64) float64 {
	var y complex128
	e := cmplx.Rect(1, -2*math.Pi*f*st.t0)
	q := cmplx.Rect(1, -2*math.Pi*f*st.dt)
	for _, v := range p.r {
		y += v * e
		e *= q
	}
	return (real(y)*real(y) + imag(y)*imag(y)) * st.dt * st.dt / max(st.used, 1e-9)
}
