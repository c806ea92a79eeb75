package sim

import (
	"math"
	"math/cmplx"
)

// step is what is constant, or sampled once, in a step of sound.
type step struct {
	n              int64 // samples
	carrier, beat  pitch
	hearC, hearL   bool
	retuned        bool
	before, after  gain    // the carrier's fading at both ends
	start, halfway float64 // samples from the first one: the grid's point, and the middle of the second
}

// make makes the next step of sound.
func (b *Bench) make() {
	c := &b.cfg
	end := int64(math.Ceil(b.gridSample(b.k+1) - 1e-6))
	t, dt := float64(b.n+end)/2*b.dts, float64(end-b.n)*b.dts // the step's middle and length
	s := step{n: end - b.n, before: b.g[0][0].plus(b.g[0][1]), after: b.g[1][0].plus(b.g[1][1]), start: b.gridSample(b.k) - float64(b.n)}
	s.halfway = b.gridSample(b.k-b.k%int64(b.parts)) + c.Rate/2 - float64(b.n)

	beat := c.Local - c.Carrier + b.loc.step(t) + b.Trimmed()
	common := c.ReceiverDrift*t/60 + b.wander.at(t)
	for _, r := range c.Retunes {
		if t >= r.At {
			common += r.By
			s.retuned = s.retuned || t-dt < r.At
		}
	}
	s.carrier, s.beat = pitchOf(c.Tone+common, b.rate), pitchOf(beat, b.rate)
	s.hearC, s.hearL = !inside(c.CarrierAway, t), !inside(c.LocalAway, t)
	if b.product() {
		s.hearL = s.hearL && math.Abs(beat*b.dts) < 0.5
	} else {
		s.hearC = s.hearC && b.audible(c.Tone+common)
		s.hearL = s.hearL && b.audible(c.Tone+common+b.sign*beat)
	}

	for i := range b.planar {
		b.planar[i] = b.out[i][:s.n]
	}
	if b.prog.on {
		copy(b.m, b.m[b.made:b.made+b.late])
		b.made = int(s.n)
		b.prog.fill(b.m[b.late:b.late+b.made], float64(b.n)*b.dts)
	}
	b.sound(&s)
	b.rec.hear(b.planar[:b.planes])

	if t, done := b.book.add(&s, b); done {
		b.mu.Lock()
		t.Trimmed = b.trimmed
		b.truth = t
		b.mu.Unlock()
		if b.told != nil {
			b.told(t)
		}
	}
	b.pc += uint64(s.carrier.part) * uint64(s.n)
	b.pb += uint64(s.beat.part) * uint64(s.n)
	b.n = end
	b.k++
	b.g[0], b.g[1] = b.g[1], b.ch.at(b.gridTime(b.k+1))
	b.left = b.planar
}

// product says that the sound is the beat itself, not two tones.
func (b *Bench) product() bool { return b.cfg.Hookup != "two-tone" && !b.cfg.Baseband }

// audible says whether a tone lies in the band of the samples: what does not is
// filtered off before sampling, and is not folded into it.
func (b *Bench) audible(hz float64) bool {
	f := hz * b.dts
	return f < 0.5 && (f > 0 || b.planes == 2 && f > -0.5)
}

func inside(spans [][2]float64, t float64) bool {
	for _, s := range spans {
		if t >= s[0] && t < s[1] {
			return true
		}
	}
	return false
}

// cubic is Hermite's: it has the values and the slopes asked for at 0 and 1. Its
// error is below (w dt)^4/384 of a line that turns by w dt in the step.
type cubic [4]complex128

func newCubic(g, h gain, dt float64) cubic {
	m, n, d := g.slope*complex(dt, 0), h.slope*complex(dt, 0), h.v-g.v
	return cubic{g.v, m, 3*d - 2*m - n, m + n - 2*d}
}

func (q *cubic) at(u float64) complex128 {
	return complex(real(q[0])+u*(real(q[1])+u*(real(q[2])+u*real(q[3]))),
		imag(q[0])+u*(imag(q[1])+u*(imag(q[2])+u*imag(q[3]))))
}

// sound writes carrier and local, without noise, to the planes.
func (b *Bench) sound(s *step) {
	c := &b.cfg
	ac, al := amplitude(c.CarrierDBFS), amplitude(c.LocalDBFS)
	if !s.hearC {
		ac = 0
	}
	if !s.hearL {
		al = 0
	}
	rotB, eb := cmplx.Rect(1, angle(uint64(s.beat.part))), cmplx.Rect(1, angle(b.pb))
	rotC, ec := cmplx.Rect(1, angle(uint64(s.carrier.part))), cmplx.Rect(1, angle(b.pc))
	product, lower := b.product(), b.sign < 0
	if product && !s.hearL {
		ac = 0
	}
	dt := b.gridTime(1)
	q1, q2 := newCubic(b.g[0][0], b.g[1][0], dt), newCubic(b.g[0][1], b.g[1][1], dt)
	du := float64(b.parts) / c.Rate
	x, y := b.planar[0], b.planar[1]
	for i := range x {
		env := b.m[b.late+i]
		if b.ch.two {
			u := (float64(i) - s.start) * du
			env = q1.at(u)*env + q2.at(u)*b.m[i]
		}
		beat := eb
		if lower {
			env, beat = cmplx.Conj(env), cmplx.Conj(eb)
		}
		var z complex128
		if product {
			z = complex(ac, 0) * cmplx.Conj(env) * beat
		} else {
			z = ec * (complex(ac, 0)*env + complex(al, 0)*beat)
		}
		x[i], y[i] = float32(real(z)), float32(imag(z))
		eb *= rotB
		ec *= rotC
	}
}
