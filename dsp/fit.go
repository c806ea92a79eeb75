package dsp

import (
	"math"
	"math/cmplx"
)

// line is one spectral line in a window, t in seconds from the window's middle:
//
//	a (1 + g t) exp(j (2 pi f t + pi c t^2))
//
// A line with ghost set is a nuisance: its frequency is given (or tied to
// another line's image) and only its amplitude is fitted.
type line struct {
	a     complex128
	g     float64 // relative amplitude slope, 1/s
	f     float64 // Hz in the band
	c     float64 // Hz/s
	uf    float64 // standard uncertainty of f for noise of density 1 (per Hz)
	ghost bool
	image int // for a ghost: 1 + index of the line whose image about foldAt it is; 0: f is fixed
}

// window is a stretch of a band's output with its weights. t counts from the
// middle, in seconds; unusable samples have weight 0.
type window struct {
	z      []complex128
	ok     []bool
	w      []float64
	t0, dt float64 // time of z[0], spacing
	half   float64 // half the nominal span, s: scales the polynomials
	used   float64 // sum of the weights * dt: the seconds that count
}

const (
	maxLines = 5
	maxCols  = 3*2 + 3
)

// fitter solves for the lines in a window by Gauss-Newton steps on the weighted
// non-linear least squares problem. In every step each line contributes the
// complex columns e, t e and (with chirp) t^2 e, e its present exponential: the
// imaginary parts of the coefficients over a move frequency and chirp, the real
// parts amplitude and its slope, so that a fading line leans on no model of its
// fading. For one line in white noise that is the maximum-likelihood estimate
// and reaches the bound of Rife & Boorstyn (IEEE Trans. IT-20, 1974); for two
// the joint bound. A fitter is reused, allocates nothing in the steady state
// and is not safe for concurrent use.
type fitter struct {
	r    []complex128 // residual of the last pass
	gram [maxCols][maxCols]complex128
	rhs  [maxCols]complex128
	sol  [maxCols]complex128
	inv  [maxCols]complex128
	low  [maxCols][maxCols]complex128
}

// run makes at most iters steps of the given order (0: amplitudes, 1: and
// frequencies, 2: and chirps) and returns false when it runs away. foldAt is
// the band frequency of true 0 Hz, about which images mirror.
func (ft *fitter) run(win *window, lines []line, order, iters int, foldAt float64) bool {
	limit := 1.5 / win.half
	var start [maxLines]float64
	for i := range lines {
		start[i] = lines[i].f
	}
	for range iters {
		cols := ft.accumulate(win, lines, order)
		if !ft.solve(cols) {
			return false
		}
		moved := ft.update(win, lines, order, foldAt)
		for i := range lines {
			if !lines[i].ghost && math.Abs(lines[i].f-start[i]) > limit {
				return false
			}
		}
		if moved < 1e-4/win.half { // what is left is of the order of its square
			break
		}
	}
	return true
}

// columns of line l at the given order.
func (l *line) cols(order int) int {
	if l.ghost {
		return 1
	}
	return order + 1
}

// accumulate builds the normal equations at the present lines and leaves the
// residual in ft.r.
func (ft *fitter) accumulate(win *window, lines []line, order int) int {
	if cap(ft.r) < len(win.z) {
		ft.r = make([]complex128, len(win.z))
	}
	ft.r = ft.r[:len(win.z)]
	var e, q, qq [maxLines]complex128
	var b [maxLines][3]complex128
	var cross [maxLines * (maxLines - 1) / 2][5]complex128
	var own [5]float64
	for k := range lines {
		l := &lines[k]
		e[k] = cmplx.Rect(1, 2*math.Pi*l.f*win.t0+math.Pi*l.c*win.t0*win.t0)
		q[k] = cmplx.Rect(1, 2*math.Pi*l.f*win.dt+math.Pi*l.c*win.dt*(2*win.t0+win.dt))
		qq[k] = cmplx.Rect(1, 2*math.Pi*l.c*win.dt*win.dt)
	}
	n := len(lines)
	for i, z := range win.z {
		t := win.t0 + float64(i)*win.dt
		u := t / win.half
		w := win.w[i]
		r := z
		for k := range n {
			r -= lines[k].a * e[k] * complex(1+lines[k].g*t, 0)
		}
		if !win.ok[i] {
			r = 0
		}
		ft.r[i] = r
		if w != 0 {
			u2 := u * u
			p := w
			for j := range own {
				own[j] += p
				p *= u
			}
			wr := r * complex(w, 0)
			ci := 0
			for k := range n {
				re, im := real(e[k]), imag(e[k])
				v := complex(re*real(wr)+im*imag(wr), re*imag(wr)-im*real(wr))
				b[k][0] += v
				b[k][1] += complex(real(v)*u, imag(v)*u)
				b[k][2] += complex(real(v)*u2, imag(v)*u2)
				for l := k + 1; l < n; l++ {
					x := complex(w*(re*real(e[l])+im*imag(e[l])), w*(re*imag(e[l])-im*real(e[l])))
					c := &cross[ci]
					for j := range c {
						c[j] += x
						x = complex(real(x)*u, imag(x)*u)
					}
					ci++
				}
			}
		}
		for k := range n {
			e[k] *= q[k]
			if lines[k].c != 0 {
				q[k] *= qq[k]
			}
		}
	}
	return ft.assemble(lines, order, &own, &b, &cross)
}

func (ft *fitter) assemble(lines []line, order int, own *[5]float64, b *[maxLines][3]complex128, cross *[maxLines * (maxLines - 1) / 2][5]complex128) int {
	at, ci := 0, 0
	var first [maxLines]int
	for k := range lines {
		first[k] = at
		at += lines[k].cols(order)
	}
	for k := range lines {
		nk := lines[k].cols(order)
		for i := range nk {
			ft.rhs[first[k]+i] = b[k][i]
			for j := range nk {
				ft.gram[first[k]+i][first[k]+j] = complex(own[i+j], 0)
			}
		}
		for l := k + 1; l < len(lines); l++ {
			for i := range nk {
				for j := range lines[l].cols(order) {
					v := cross[ci][i+j]
					ft.gram[first[k]+i][first[l]+j] = v
					ft.gram[first[l]+j][first[k]+i] = cmplx.Conj(v)
				}
			}
			ci++
		}
	}
	return at
}

// solve factors the Hermitian Gram matrix (Cholesky) and solves for ft.sol.
func (ft *fitter) solve(n int) bool {
	for i := range n {
		for j := 0; j <= i; j++ {
			s := ft.gram[i][j]
			for k := range j {
				s -= ft.low[i][k] * cmplx.Conj(ft.low[j][k])
			}
			if i == j {
				if real(s) <= 1e-12*real(ft.gram[i][i]) {
					return false
				}
				ft.low[i][i] = complex(math.Sqrt(real(s)), 0)
			} else {
				ft.low[i][j] = s / ft.low[j][j]
			}
		}
	}
	copy(ft.sol[:n], ft.rhs[:n])
	ft.backSolve(&ft.sol, n)
	return true
}

func (ft *fitter) backSolve(x *[maxCols]complex128, n int) {
	for i := range n {
		for k := range i {
			x[i] -= ft.low[i][k] * x[k]
		}
		x[i] /= ft.low[i][i]
	}
	for i := n - 1; i >= 0; i-- {
		for k := i + 1; k < n; k++ {
			x[i] -= cmplx.Conj(ft.low[k][i]) * x[k]
		}
		x[i] /= ft.low[i][i]
	}
}

// update moves the lines by the solution and returns the largest change of a
// frequency, Hz.
func (ft *fitter) update(win *window, lines []line, order int, foldAt float64) float64 {
	at, moved := 0, 0.0
	for k := range lines {
		l := &lines[k]
		l.a += ft.sol[at]
		if l.ghost {
			at++
			continue
		}
		if order >= 1 && l.a != 0 {
			rho := ft.sol[at+1] / l.a
			// A step of more than a quarter turn at the edge is cut short.
			lim := 0.5 * math.Pi
			df := max(-lim, min(lim, imag(rho))) / (2 * math.Pi * win.half)
			l.f += df
			l.g = max(-2/win.half, min(2/win.half, l.g+max(-0.5, min(0.5, real(rho)))/win.half))
			moved = max(moved, math.Abs(df))
		}
		if order >= 2 && l.a != 0 {
			rho := ft.sol[at+2] / l.a
			l.c += max(-2, min(2, imag(rho))) / (math.Pi * win.half * win.half)
		}
		at += order + 1
	}
	for k := range lines {
		if im := lines[k].image; im > 0 {
			lines[k].f = 2*foldAt - lines[im-1].f
		}
	}
	return moved
}

// bent reports whether the step of order 2 just solved shows that the chirp of
// some line is wrong: its correction exceeds four times its uncertainty, the
// residual taken as noise.
func (ft *fitter) bent(win *window, lines []line, n int) bool {
	var rr, ww float64
	for i, r := range ft.r {
		rr += win.w[i] * (real(r)*real(r) + imag(r)*imag(r))
		ww += win.w[i]
	}
	at := 0
	for k := range lines {
		if !lines[k].ghost {
			ft.unit(at+2, n)
			a := lines[k].a
			rho := ft.sol[at+2] / a
			if imag(rho)*imag(rho) > 16*real(ft.inv[at+2])*rr/ww/2/real(a*cmplx.Conj(a)) {
				return true
			}
		}
		at += lines[k].cols(2)
	}
	return false
}

// uncertainty fills uf of every line, and returns that of the difference of
// the first two when there are two (else 0): standard uncertainties in Hz for
// white noise whose density is 1 per Hz on the scale of |z|^2, from the
// inverse Gram matrix of the last step. The weights taper the edges, so the
// noise enters as w^2; taper is the single line's exact factor for that.
func (ft *fitter) uncertainty(win *window, lines []line, order int) float64 {
	if order < 1 {
		return math.NaN()
	}
	n := 0
	for k := range lines {
		n += lines[k].cols(order)
	}
	taper := win.taper()
	scale := taper / (2 * win.dt) // noise variance per sample of one quadrature: density/(2 dt)
	var idx, real1 [2]int
	m, at := 0, 0
	for k := range lines {
		if !lines[k].ghost {
			ft.unit(at+1, n)
			v := real(ft.inv[at+1]) * scale / (real(lines[k].a)*real(lines[k].a) + imag(lines[k].a)*imag(lines[k].a))
			lines[k].uf = math.Sqrt(max(v, 0)) / (2 * math.Pi * win.half)
			if m < 2 {
				idx[m], real1[m] = at+1, k
				m++
			}
		}
		at += lines[k].cols(order)
	}
	if m < 2 {
		return 0
	}
	// Cov(Im(alpha/a), Im(beta/b)) = Re(C conj(1/b) (1/a)) / 2 for circular noise.
	ft.unit(idx[1], n)
	a, b := lines[real1[0]].a, lines[real1[1]].a
	cov := real(ft.inv[idx[0]]/(a*cmplx.Conj(b))) * scale / math.Pow(2*math.Pi*win.half, 2)
	va, vb := lines[real1[0]].uf, lines[real1[1]].uf
	return math.Sqrt(max(va*va+vb*vb-2*cov, 0.2*(va*va+vb*vb)))
}

// unit leaves column i of the inverse Gram matrix in ft.inv.
func (ft *fitter) unit(i, n int) {
	for k := range n {
		ft.inv[k] = 0
	}
	ft.inv[i] = 1
	ft.backSolve(&ft.inv, n)
}

// taper returns how much the weights raise the variance of a single line's
// frequency over what the same Gram matrix says: sum w^2 t^2 / sum w t^2.
func (win *window) taper() float64 {
	var a, b float64
	for i, w := range win.w {
		t := win.t0 + float64(i)*win.dt
		a += w * w * t * t
		b += w * t * t
	}
	if b == 0 {
		return 1
	}
	return a / b
}

// cphase returns the phase of z in turns.
func cphase(z complex128) float64 { return math.Atan2(imag(z), real(z)) / (2 * math.Pi) }
