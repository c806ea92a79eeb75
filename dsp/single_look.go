package dsp

import (
	"math"
	"math/cmplx"
	"slices"
)

const wanderMost = 3.2 // beside: the mean of eight exponentials exceeds this once in a million

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
	if q := c.beside(); q > wanderMost {
		c.red = max(c.red, q)
	}
}

// beside returns the density of the residual in the eight nearest places beside
// the line that the fit leaves alone, over that of the noise: what a beat that is
// none, or none so steady, leaves there.
func (c *circleFit) beside() float64 {
	sum := 0.0
	for k := range 8 {
		f := c.x.f + (float64(k/2)+1.5)*float64(1-2*(k&1))/c.span()
		e, q := cmplx.Rect(1, -2*math.Pi*f*c.t0), cmplx.Rect(1, -2*math.Pi*f*c.dt)
		var y complex128
		for _, r := range c.r {
			y += r * e
			e *= q
		}
		sum += real(y)*real(y) + imag(y)*imag(y)
	}
	n := float64(c.n)
	if c.complex {
		n *= 2
	}
	return sum / 8 / (n * c.s2 * c.grey)
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
	return math.Sqrt(p / all), d2/max(1, n)/2/c.near > v*max(0.7, 1-5/math.Sqrt(all))
}

// stands returns the motion that the fit explains over its uncertainty: the
// square root of the energy that the beat takes from a point at rest, over the
// noise's standard deviation.
func (c *circleFit) stands() float64 {
	var m complex128
	var p float64
	for i, z := range c.z {
		if c.ok[i] {
			m += z
			p += real(z)*real(z) + imag(z)*imag(z)
		}
	}
	p -= real(m*cmplx.Conj(m)) / float64(c.n)
	return math.Sqrt(max(0, p-c.rss) / (c.s2 * c.grey * c.red))
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
