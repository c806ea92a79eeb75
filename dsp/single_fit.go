package dsp

import (
	"math"
	"math/cmplx"
)

// circle is a slow beat in a window, t in seconds from the window's middle:
//
//	a exp(j (2 pi f t + pi c t^2)) + off
//
// or, of a mixer, the real part of that. It is what is left to be told when
// the beat turns so slowly that the input's own offset looks much like it.
type circle struct {
	a, off complex128
	f      float64 // Hz
	c      float64 // Hz/s
}

// The parameters of a circle, in the order of the normal equations. Turn and
// bend are the phases that frequency and chirp make at the window's edge, times
// |a|, so that all columns are of the size of 1.
const (
	pRe = iota
	pIm
	pOffRe
	pOffIm
	pTurn
	pBend
	nPar
)

// circleFit fits a circle to a window by Gauss-Newton steps on the joint least
// squares of all its parameters, halved where they overshoot: for white noise
// the maximum-likelihood estimate, whose covariance is the inverse of the
// information matrix (Rife & Boorstyn, IEEE Trans. IT-20, 1974, for the line
// alone). The offset may be known beforehand. A fit is reused, allocates
// nothing in the steady state and is not safe for concurrent use.
type circleFit struct {
	complex bool
	z       []complex128
	ok      []bool
	t0, dt  float64 // time of z[0] from the window's middle, spacing, s
	mid     float64 // time of the middle, s
	half    float64 // half the window's length, s
	n       int     // samples that are there
	step    int     // log2 of the ring's samples in a block mean
	near    float64 // expected 1 - correlation of neighbours, noise alone
	grey    float64 // density at 0 Hz over what the variance says

	prior    bool
	priorOff complex128
	priorVar float64 // of its real and of its imaginary part

	x      circle
	r      []complex128 // residual at x
	rss    float64
	s2     float64 // variance of the noise in one component
	red    float64 // by how much the residual's wandering raises the variance of slow parameters over s2, >= 1
	tmp    []float64
	h, low [nPar][nPar]float64
	g, sol [nPar]float64
	act    [nPar]int // the parameters fitted
	na     int
}

// load takes from..to (s) of the ring in block means of 2^step samples. It
// reports whether enough of them are there.
func (c *circleFit) load(r *ring, from, to float64, step int) bool {
	m := int64(1) << step
	b0, b1 := ceilDiv(int64(math.Ceil(from/r.dt)), m), floorDiv(int64(math.Floor(to/r.dt))+1, m)
	c.z, c.ok, c.n, c.step, c.red = c.z[:0], c.ok[:0], 0, step, math.Inf(1)
	c.dt = r.dt * float64(m)
	for b := b0; b < b1; b++ {
		var sum complex128
		all := true
		for i := b * m; i < (b+1)*m; i++ {
			z, ok := r.have(i)
			sum += z
			all = all && ok
		}
		if !all {
			sum = 0
		} else {
			c.n++
		}
		c.z, c.ok = append(c.z, sum/complex(float64(m), 0)), append(c.ok, all)
	}
	n := float64(len(c.z))
	c.half = n / 2 * c.dt
	c.t0 = -(n - 1) / 2 * c.dt
	c.mid = r.time(b0*m) + float64(m-1)/2*r.dt - c.t0
	c.near, c.grey = r.near[step], r.grey[step]
	return c.n >= 12 && float64(c.n) > 0.5*n
}

// span returns the length of the window, s.
func (c *circleFit) span() float64 { return 2 * c.half }

// choose sets the parameters that are fitted: order 0 amplitude and offset, 1
// and the frequency, 2 and the chirp.
func (c *circleFit) choose(order int) {
	c.na = 0
	add := func(p int) { c.act[c.na] = p; c.na++ }
	add(pRe)
	add(pIm)
	add(pOffRe)
	if c.complex {
		add(pOffIm)
	}
	if order >= 1 {
		add(pTurn)
	}
	if order >= 2 {
		add(pBend)
	}
}

// dof returns the degrees of freedom of the residual.
func (c *circleFit) dof() float64 {
	n := float64(c.n)
	if c.complex {
		n *= 2
	}
	return max(1, n-float64(c.na))
}

// accumulate builds the normal equations of all parameters at x, and leaves
// the residual in r and its sum of squares in rss.
func (c *circleFit) accumulate() {
	c.r = resize(c.r, len(c.z))
	c.h, c.g, c.rss = [nPar][nPar]float64{}, [nPar]float64{}, 0
	x := &c.x
	e := cmplx.Rect(1, 2*math.Pi*x.f*c.t0+math.Pi*x.c*c.t0*c.t0)
	q := cmplx.Rect(1, 2*math.Pi*x.f*c.dt+math.Pi*x.c*c.dt*(2*c.t0+c.dt))
	qq := cmplx.Rect(1, 2*math.Pi*x.c*c.dt*c.dt)
	unit := complex(1, 0)
	if m := cmplx.Abs(x.a); m > 0 {
		unit = x.a / complex(m, 0)
	}
	unit *= 1i
	for i, z := range c.z {
		if c.ok[i] {
			u := (c.t0 + float64(i)*c.dt) / c.half
			d := unit * e
			r := z - x.a*e - x.off
			j := [nPar]float64{real(e), -imag(e), 1, 0, u * real(d), u * u * real(d)}
			c.row(&j, real(r))
			if c.complex {
				j = [nPar]float64{imag(e), real(e), 0, 1, u * imag(d), u * u * imag(d)}
				c.row(&j, imag(r))
			} else {
				r = complex(real(r), 0)
			}
			c.r[i] = r
		} else {
			c.r[i] = 0
		}
		e *= q
		if x.c != 0 {
			q *= qq
		}
	}
}

func (c *circleFit) row(j *[nPar]float64, r float64) {
	c.rss += r * r
	for k := range nPar {
		c.g[k] += j[k] * r
		for l := 0; l <= k; l++ {
			c.h[k][l] += j[k] * j[l]
		}
	}
}

// floor is the least variance of the noise that is believed: rounding of the
// samples, where the input carries no noise at all.
func (c *circleFit) floor() float64 {
	return 1e-14 * (real(c.x.a*cmplx.Conj(c.x.a)) + real(c.x.off*cmplx.Conj(c.x.off)) + 1e-12)
}

// noise takes s2 from the residual.
func (c *circleFit) noise() { c.s2 = max(c.rss/c.dof(), c.floor()) }

// weight is what the knowledge of the offset counts beside one sample.
func (c *circleFit) weight() float64 { return c.s2 * c.grey / c.priorVar }

// density is the noise of one component: its variance times seconds.
func (c *circleFit) density() float64 { return c.s2 * c.grey * c.red * c.dt }

// cost is the sum of squares with what is known of the offset.
func (c *circleFit) cost() float64 {
	if !c.prior {
		return c.rss
	}
	d := c.x.off - c.priorOff
	return c.rss + c.weight()*(real(d)*real(d)+imag(d)*imag(d))
}

// factor takes the Cholesky factor of the chosen part of the normal matrix; it
// reports false where that is singular.
func (c *circleFit) factor() bool {
	for i := range c.na {
		for j := 0; j <= i; j++ {
			s := c.h[c.act[i]][c.act[j]]
			if i == j && c.prior && (c.act[i] == pOffRe || c.act[i] == pOffIm) {
				s += c.weight()
			}
			for k := range j {
				s -= c.low[i][k] * c.low[j][k]
			}
			if i == j {
				if !(s > 1e-13*c.h[c.act[i]][c.act[i]]) {
					return false
				}
				c.low[i][i] = math.Sqrt(s)
			} else {
				c.low[i][j] = s / c.low[j][j]
			}
		}
	}
	return true
}

// back replaces v by the solution of the factored equations.
func (c *circleFit) back(v *[nPar]float64) {
	for i := range c.na {
		for k := range i {
			v[i] -= c.low[i][k] * v[k]
		}
		v[i] /= c.low[i][i]
	}
	for i := c.na - 1; i >= 0; i-- {
		for k := i + 1; k < c.na; k++ {
			v[i] -= c.low[k][i] * v[k]
		}
		v[i] /= c.low[i][i]
	}
}

// newton returns the step from the normal equations.
func (c *circleFit) newton() bool {
	if !c.factor() {
		return false
	}
	for i := range c.na {
		c.sol[i] = c.g[c.act[i]]
		if c.prior {
			d := c.priorOff - c.x.off
			switch c.act[i] {
			case pOffRe:
				c.sol[i] += c.weight() * real(d)
			case pOffIm:
				c.sol[i] += c.weight() * imag(d)
			}
		}
	}
	c.back(&c.sol)
	return true
}

// move returns x after the given share of the step.
func (c *circleFit) move(x circle, share float64) circle {
	amp := cmplx.Abs(x.a)
	for i := range c.na {
		s := share * c.sol[i]
		switch c.act[i] {
		case pRe:
			x.a += complex(s, 0)
		case pIm:
			x.a += complex(0, s)
		case pOffRe:
			x.off += complex(s, 0)
		case pOffIm:
			x.off += complex(0, s)
		case pTurn:
			if amp > 0 {
				x.f += max(-1, min(1, s/amp)) / (2 * math.Pi * c.half)
			}
		case pBend:
			if amp > 0 {
				x.c += max(-1, min(1, s/amp)) / (math.Pi * c.half * c.half)
			}
		}
	}
	return x
}

// run fits from x on and leaves the normal equations, their factor, the
// residual and the noise at the solution. Amplitude and offset are solved anew
// for every frequency that is tried (variable projection: Golub & Pereyra, SIAM
// J. Numer. Anal. 10, 1973), for while the beat has turned little they hang
// together with it so closely that joint steps get nowhere. It reports false
// where the equations are singular or the steps do not settle.
func (c *circleFit) run(order int) bool {
	c.red = 1
	if !c.settle(order) {
		c.red = math.Inf(1)
		return false
	}
	c.wander()
	return true
}

func (c *circleFit) settle(order int) bool {
	c.accumulate()
	c.noise()
	if !c.linear() {
		return false
	}
	c.choose(order)
	for range 20 {
		if !c.newton() {
			return false
		}
		was, cost, step := c.x, c.cost(), c.move(c.x, 1)
		share := 1.0
		for ; share > 1e-3; share /= 3 {
			c.x = was
			c.x.f += share * (step.f - was.f)
			c.x.c += share * (step.c - was.c)
			if !c.linear() {
				return false
			}
			if c.cost() <= cost*(1+1e-12) {
				break
			}
		}
		c.noise()
		c.choose(order)
		if !c.factor() {
			return false
		}
		// The step still to come is of the order of this one's square.
		df := math.Abs(c.x.f - was.f)
		if order == 0 || df*c.half < 1e-7 || share == 1 && df < 0.01*c.u(pTurn) {
			return true
		}
	}
	return false
}

// linear solves for amplitude and offset at the frequency and chirp of x and
// leaves the normal equations there.
func (c *circleFit) linear() bool {
	c.choose(0)
	c.accumulate()
	if !c.newton() {
		return false
	}
	c.x = c.move(c.x, 1)
	c.accumulate()
	return true
}

// variance returns the variance of the combination w of the fitted parameters.
func (c *circleFit) variance(w [nPar]float64) float64 {
	var v [nPar]float64
	for i := range c.na {
		v[i] = w[c.act[i]]
	}
	was := v
	c.back(&v)
	sum := 0.0
	for i := range c.na {
		sum += was[i] * v[i]
	}
	return sum * c.s2 * c.grey * c.red
}

// u returns the standard uncertainty of frequency (pTurn, Hz) or chirp (pBend,
// Hz/s).
func (c *circleFit) u(p int) float64 {
	var w [nPar]float64
	w[p] = 1
	per := 2 * math.Pi * c.half
	if p == pBend {
		per = math.Pi * c.half * c.half
	}
	return math.Sqrt(max(0, c.variance(w))) / per / max(cmplx.Abs(c.x.a), 1e-300)
}

// uAmp returns the standard uncertainty of |a|.
func (c *circleFit) uAmp() float64 {
	m := max(cmplx.Abs(c.x.a), 1e-300)
	var w [nPar]float64
	w[pRe], w[pIm] = real(c.x.a)/m, imag(c.x.a)/m
	return math.Sqrt(max(0, c.variance(w)))
}

// uOff returns the standard uncertainty of the offset, the larger of its two
// parts' for complex input.
func (c *circleFit) uOff() float64 {
	var re, im [nPar]float64
	re[pOffRe], im[pOffIm] = 1, 1
	v := c.variance(re)
	if c.complex {
		v = max(v, c.variance(im))
	}
	return math.Sqrt(max(0, v))
}

// at returns the phase of the circle at time t, turns.
func (c *circleFit) at(t float64) float64 {
	dt := t - c.mid
	return cphase(c.x.a) + c.x.f*dt + c.x.c*dt*dt/2
}
