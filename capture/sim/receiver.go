package sim

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
)

// receiver is what the sound meets after the aerial: noise, tones of its own,
// gain control, an offset, and full scale.
type receiver struct {
	noise         *rand.Rand
	sigma         float64
	filter        []biquad // of the noise
	spurs         []spur
	agc           bool
	level         float64 // gain control's detector
	attack, decay float64
	dc            float32
}

type spur struct {
	amp   float64
	phase uint64
	pitch pitch
}

// wander is the slow coming and going of the receiver's dial: a Gaussian process
// with a spectrum 1/7200 Hz wide, taken from its value at the start.
type wander struct {
	p     *path
	scale float64
	start float64
}

func newWander(c *Config) *wander {
	w := &wander{p: newPath(1.0/7200, c.Seed, 601), scale: c.ReceiverWander}
	w.start = real(w.p.at(0).v)
	return w
}

// at returns Hz; t never goes back. The difference of two values has twice the
// power of one, of which the process's real part has half: its rms is scale.
func (w *wander) at(t float64) float64 {
	if w.scale == 0 {
		return 0
	}
	return w.scale * (real(w.p.at(t).v) - w.start)
}

// newReceiver scales the noise so that C/N0 is as asked at the carrier's pitch,
// whatever the filter does there: C/N0 = (A^2/2) / N0 with N0 = 2 sigma^2 / rate
// for real samples; A^2 and the same density a component for I and Q.
func newReceiver(c *Config) *receiver {
	rate := c.Rate * (1 + c.ClockError)
	r := &receiver{noise: rand.New(rand.NewPCG(c.Seed, 401)), agc: c.AGC, dc: float32(c.DC)}
	a := amplitude(c.CarrierDBFS)
	r.sigma = math.Sqrt(a * a / math.Pow(10, c.CarrierCN0/10) * rate / 4)
	if c.Hookup == "quadrature" {
		r.sigma *= math.Sqrt2
	}
	if !c.White {
		for range 2 {
			r.filter = append(r.filter, newBiquad(c.Passband[0]/rate, math.Sqrt2/2, true), newBiquad(c.Passband[1]/rate, math.Sqrt2/2, false))
		}
		h := 1.0
		for i := range r.filter {
			h *= cmplx.Abs(r.filter[i].response(c.Tone / rate))
		}
		r.sigma /= max(h, 1e-3)
	}
	for _, s := range c.Spurs {
		r.spurs = append(r.spurs, spur{amp: amplitude(s.DBFS), pitch: pitchOf(s.Hz, rate)})
	}
	r.attack = 1 - math.Exp(-1/(rate*c.AGCAttack))
	r.decay = 1 - math.Exp(-1/(rate*c.AGCDecay))
	return r
}

// hear turns what arrives, one or two planes, into what is delivered.
func (r *receiver) hear(ch [][]float32) {
	for k, x := range ch {
		for i := range x {
			v := r.sigma * r.noise.NormFloat64()
			for j := range r.filter { // never with two planes
				v = r.filter[j].next(v)
			}
			x[i] += float32(v)
		}
		for j := range r.spurs {
			s := &r.spurs[j]
			rot, e := cmplx.Rect(1, angle(uint64(s.pitch.part))), cmplx.Rect(s.amp, angle(s.phase)-math.Pi/2*float64(k))
			for i := range x {
				x[i] += float32(real(e))
				e *= rot
			}
		}
	}
	for j := range r.spurs {
		r.spurs[j].phase += uint64(r.spurs[j].pitch.part) * uint64(len(ch[0]))
	}
	if r.agc {
		r.control(ch)
	}
	for _, x := range ch {
		for i, v := range x {
			x[i] = max(-1, min(1, v+r.dc))
		}
	}
}

// control brings the peaks of the sum, noise and all, to a quarter of full
// scale: quickly down, slowly up again. Both planes have one gain.
func (r *receiver) control(ch [][]float32) {
	const target = 0.25
	for i := range ch[0] {
		v := math.Abs(float64(ch[0][i]))
		if len(ch) == 2 {
			v = math.Hypot(v, float64(ch[1][i]))
		}
		if d := v - r.level; d > 0 {
			r.level += r.attack * d
		} else {
			r.level += r.decay * d
		}
		g := float32(target / max(r.level, 1e-4))
		for _, x := range ch {
			x[i] *= g
		}
	}
}

// biquad is a second-order low-pass or high-pass section by the bilinear
// transform.
type biquad struct {
	b0, b1, a1, a2 float64
	x1, x2, y1, y2 float64
}

// newBiquad returns the section with corner f, a fraction of the rate below 1/2,
// and quality q: sqrt(1/2) is Butterworth's of second order.
func newBiquad(f, q float64, high bool) biquad {
	k := math.Tan(math.Pi * f)
	d := 1 + k/q + k*k
	s := biquad{b0: k * k / d, b1: 2 * k * k / d, a1: 2 * (k*k - 1) / d, a2: (1 - k/q + k*k) / d}
	if high {
		s.b0, s.b1 = 1/d, -2/d
	}
	return s
}

func (q *biquad) next(x float64) float64 {
	y := q.b0*x + q.b1*q.x1 + q.b0*q.x2 - q.a1*q.y1 - q.a2*q.y2
	q.x2, q.x1, q.y2, q.y1 = q.x1, x, q.y1, y
	return y
}

// response returns the section's response at f, a fraction of the rate.
func (q *biquad) response(f float64) complex128 {
	z := cmplx.Rect(1, -2*math.Pi*f)
	return (complex(q.b0, 0) + complex(q.b1, 0)*z + complex(q.b0, 0)*z*z) / (1 + complex(q.a1, 0)*z + complex(q.a2, 0)*z*z)
}

// oneSide is the receiver's filter as the carrier's modulation meets it: it
// passes lo to hi Hz of audio and holds back the opposite sideband, which would
// otherwise fold about 0 Hz. It is a Butterworth low-pass of tenth order, moved
// to the middle of the passband, and 1 at the carrier, so that the carrier need
// not pass through it.
type oneSide struct {
	phase uint64
	pitch pitch // of the passband's middle, from the carrier
	part  [2][5]biquad
	unity complex128
}

// newOneSide returns nil where there is no such filter, or where the carrier
// lies outside of it.
func newOneSide(c *Config, dt float64) *oneSide {
	if c.White || c.Hookup != "two-tone" {
		return nil
	}
	middle := (c.Passband[0]+c.Passband[1])/2 - c.Tone
	if c.Sideband == "lsb" {
		middle = -middle
	}
	f := &oneSide{pitch: pitchOf(middle, 1/dt)}
	h := complex(1, 0)
	for i := range f.part[0] {
		q := newBiquad((c.Passband[1]-c.Passband[0])/2*dt, 1/(2*math.Cos(math.Pi*(2*float64(i)+1)/20)), false)
		f.part[0][i], f.part[1][i] = q, q
		h *= q.response(-middle * dt)
	}
	if cmplx.Abs(h) < 0.5 {
		return nil
	}
	f.unity = 1 / h
	return f
}

// pass filters the modulation m - 1 in place.
func (f *oneSide) pass(m []complex128) {
	const tiny = 1e-25 // keeps the filter's tail from becoming slow subnormal numbers
	e, rot := cmplx.Rect(1, -angle(f.phase)), cmplx.Rect(1, -angle(uint64(f.pitch.part)))
	for i := range m {
		v := (real(m[i]) - 1) + tiny
		x, y := v*real(e), v*imag(e)
		for j := range f.part[0] {
			x, y = f.part[0][j].next(x), f.part[1][j].next(y)
		}
		m[i] = 1 + complex(x, y)*cmplx.Conj(e)*f.unity
		e *= rot
	}
	f.phase += uint64(f.pitch.part) * uint64(len(m))
}
