package dsp

import (
	"math"
	"math/cmplx"
	"slices"
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
	c.z, c.ok, c.n, c.step = c.z[:0], c.ok[:0], 0, step
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

// wander measures by how much the residual is not the noise that its neighbours
// differ by. Where it resembles its neighbours more than noise does (von
// Neumann's ratio) it is taken for a first-order process, whose density at 0 Hz
// is (1+rho)/(1-rho) times that of white noise of the same variance. Where its
// variance exceeds what the median of the differences says, something stands out
// of the noise: a step near an end, a click.
func (c *circleFit) wander() {
	var d2, s2 float64
	c.tmp = c.tmp[:0]
	for i := 1; i < len(c.r); i++ {
		if c.ok[i] && c.ok[i-1] {
			p, q := c.r[i-1], c.r[i]
			d := q - p
			v := real(d)*real(d) + imag(d)*imag(d)
			d2 += v
			s2 += (real(q)*real(q) + imag(q)*imag(q) + real(p)*real(p) + imag(p)*imag(p)) / 2
			c.tmp = append(c.tmp, v)
		}
	}
	n := float64(len(c.tmp))
	c.red = 1
	if s2 < c.floor()*n || n < 4 {
		return
	}
	share := 0.4549 // the median of chi-squared of one degree of freedom over its mean
	slack := 8 / math.Sqrt(n)
	if c.complex {
		share, n = math.Ln2, 2*n // and of two
	}
	if like := d2 / (2 * s2) / c.near; like < 1-4/math.Sqrt(n) {
		c.red = (2 - like) / max(like, 1e-6)
	}
	slices.Sort(c.tmp)
	quiet := c.tmp[len(c.tmp)/2] / share / (2 * c.near)
	if more := s2 / float64(len(c.tmp)) / max(quiet, 1e-300); more > 1+slack {
		c.red = max(c.red, more)
	}
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

// scan returns the frequency among lo, lo+by, ... hi (and a few near 0) at which a circle takes
// most of the window's power: the periodogram with the offset fitted beside the
// line (Zechmeister & Kuerster, A&A 496, 2009; from memory), or with the offset
// known.
func (c *circleFit) scan(lo, hi, by float64) float64 {
	var mean complex128
	n := float64(c.n)
	if c.prior {
		mean = c.priorOff
	} else {
		for _, z := range c.z {
			mean += z / complex(n, 0)
		}
	}
	best, at := -1.0, 0.0
	look := func(f float64) {
		e, q := cmplx.Rect(1, -2*math.Pi*f*c.t0), cmplx.Rect(1, -2*math.Pi*f*c.dt)
		var y, s, d complex128
		for i, z := range c.z {
			if c.ok[i] {
				y += (z - mean) * e
				s += e
				d += e * e
			}
			e *= q
		}
		if p := c.taken(y, s, d); p > best {
			best, at = p, f
		}
	}
	for f := lo; f <= hi; f += by {
		if math.Abs(f) > by/2 || c.prior {
			look(f)
		}
	}
	for f := by / 2; c.complex && f > by/10; f /= 2 { // a small part of a turn
		look(f)
		look(-f)
	}
	return at
}

// taken is the power that a line takes, from the sums of z e, e and e^2.
func (c *circleFit) taken(y, s, d complex128) float64 {
	n := float64(c.n)
	if c.complex {
		w := n
		if !c.prior {
			w -= (real(s)*real(s) + imag(s)*imag(s)) / n
		}
		if w < 1e-5*n {
			return -1
		}
		return (real(y)*real(y) + imag(y)*imag(y)) / w
	}
	cc, ss, cs := (n+real(d))/2-real(s)*real(s)/n, (n-real(d))/2-imag(s)*imag(s)/n, imag(d)/2-real(s)*imag(s)/n
	det := cc*ss - cs*cs
	if det < 1e-8*n*n {
		return -1
	}
	return (real(y)*real(y)*ss - 2*real(y)*imag(y)*cs + imag(y)*imag(y)*cc) / det
}

// level returns the rms level of the window, and whether it stands still: what
// it wanders is not more than its noise from sample to sample.
func (c *circleFit) level() (rms float64, still bool) {
	var m complex128
	var p, d2, n float64
	for i, z := range c.z {
		if c.ok[i] {
			m += z
			p += real(z)*real(z) + imag(z)*imag(z)
			if i > 0 && c.ok[i-1] {
				d := z - c.z[i-1]
				d2 += real(d)*real(d) + imag(d)*imag(d)
				n++
			}
		}
	}
	all := float64(c.n)
	v := p/all - real(m*cmplx.Conj(m))/all/all
	return math.Sqrt(p / all), d2/max(1, n)/2/c.near > v*max(0.5, 1-5/math.Sqrt(all))
}

// drift fits a straight line: where the point is in the window's middle, how
// fast it moves, per second, and the standard uncertainty of that.
func (c *circleFit) drift() (at, v complex128, uv float64) {
	var tt, t1, rr float64
	n := float64(c.n)
	for i, z := range c.z {
		if c.ok[i] {
			t := c.t0 + float64(i)*c.dt
			at += z
			v += z * complex(t, 0)
			tt += t * t
			t1 += t
		}
	}
	at /= complex(n, 0)
	tt -= t1 * t1 / n
	v = (v - at*complex(t1, 0)) / complex(tt, 0)
	for i, z := range c.z {
		if c.ok[i] {
			r := z - at - v*complex(c.t0+float64(i)*c.dt-t1/n, 0)
			rr += real(r)*real(r) + imag(r)*imag(r)
		}
	}
	return at, v, math.Sqrt(rr / (2*n - 4) / tt * c.grey)
}

// change looks for a change near the window's end (or near its beginning):
// over stretches of the residual from there the sums along the beat's phase,
// its amplitude and the offset, each over its standard deviation for noise of
// the given density. It returns the largest and where its stretch ends, s from
// the window's middle.
func (c *circleFit) change(density float64, beginning bool) (worst, at float64) {
	x := &c.x
	var s, w [4]float64
	next, sd, n := max(1, 2*c.dt), math.Sqrt(density/c.dt), len(c.r)
	for k := range n / 2 {
		i := n - 1 - k
		if beginning {
			i = k
		}
		if !c.ok[i] {
			continue
		}
		t := c.t0 + float64(i)*c.dt
		e := cmplx.Rect(1, 2*math.Pi*x.f*t+math.Pi*x.c*t*t+cmplx.Phase(x.a))
		r := c.r[i]
		if c.complex {
			p := r * cmplx.Conj(e)
			for j, v := range [4]float64{real(p), imag(p), real(r), imag(r)} {
				s[j] += v
				w[j]++
			}
		} else {
			for j, d := range [3]float64{real(e), -imag(e), 1} {
				s[j] += real(r) * d
				w[j] += d * d
			}
		}
		if l := float64(k+1) * c.dt; l >= next {
			next *= 1.4
			for j := range s {
				if w[j] > 1 {
					if v := math.Abs(s[j]) / sd / math.Sqrt(w[j]); v > worst {
						worst, at = v, t
					}
				}
			}
		}
	}
	return worst, at
}
