package sim

import (
	"math"
	"math/cmplx"
)

// turns converts a frequency in turns a sample to the integer step.
func turns(f float64) uint64 { return uint64(int64((f-math.Round(f))*(1<<62))) << 2 }

// angle returns the phase p in radians.
func angle(p uint64) float64 { return float64(int64(p)) / (1 << 63) * math.Pi }

// make makes the next step of sound.
func (b *Bench) make() {
	c := &b.cfg
	t := float64(b.n) * b.dts
	dt := float64(b.step) * b.dts
	fl := b.loc.step(t) + b.Trimmed()
	beat := c.Local - c.Carrier + fl
	common := c.ReceiverDrift * t / 60
	retuned := false
	for _, r := range c.Retunes {
		if t >= r.At {
			common += r.By
			retuned = retuned || t-dt < r.At
		}
	}
	stepC, stepB := turns((c.Tone+common)*b.dts), turns(beat*b.dts)
	hearC, hearL := !inside(c.CarrierAway, t), !inside(c.LocalAway, t)

	copy(b.m, b.m[b.step:])
	if b.prog.on {
		b.prog.fill(b.m[b.late:], t)
	}
	b.sound(stepC, stepB, hearC, hearL)
	b.finish(t)

	h0, h1 := b.g[1][0]+b.g[1][1], b.g[2][0]+b.g[2][1]
	if t, done := b.book.add(entry{beat: beat, stepB: stepB, stepC: stepC, h0: h0, h1: h1, carrier: hearC, local: hearL, retuned: retuned}, b); done {
		b.mu.Lock()
		b.truth = t
		b.mu.Unlock()
	}
	b.pc += stepC * uint64(b.step)
	b.pb += stepB * uint64(b.step)
	b.n += int64(b.step)
	copy(b.g[:], b.g[1:])
	if b.ch.two {
		b.g[3][0], b.g[3][1] = b.ch.at(float64(b.n)*b.dts + 2*dt)
	}
	b.left = b.out
}

func inside(spans [][2]float64, t float64) bool {
	for _, s := range spans {
		if t >= s[0] && t < s[1] {
			return true
		}
	}
	return false
}

// cubic is a Catmull-Rom piece through the middle two of four values.
func cubic(p0, p1, p2, p3 complex128, u float64) complex128 {
	c := func(v float64) complex128 { return complex(v, 0) }
	a := -0.5*p0 + 1.5*p1 - 1.5*p2 + 0.5*p3
	b := p0 - 2.5*p1 + 2*p2 - 0.5*p3
	d := 0.5 * (p2 - p0)
	return ((a*c(u)+b)*c(u)+d)*c(u) + p1
}

// sound writes carrier and local, without noise, to the planes.
func (b *Bench) sound(stepC, stepB uint64, hearC, hearL bool) {
	c := &b.cfg
	ac, al := amplitude(c.CarrierDBFS), amplitude(c.LocalDBFS)
	if !hearC {
		ac = 0
	}
	if !hearL {
		al = 0
	}
	rotB := cmplx.Rect(1, angle(stepB))
	eb := cmplx.Rect(1, angle(b.pb))
	rotC := cmplx.Rect(1, angle(stepC))
	ec := cmplx.Rect(1, angle(b.pc))
	steady := !b.ch.two
	var env complex128
	two := c.Hookup == "two-tone" || c.Baseband
	for i := range b.out[0] {
		if steady {
			env = complex(real(b.g[1][0])*b.m[b.late+i], 0)
		} else {
			u := float64(i) / float64(b.step)
			g1 := cubic(b.g[0][0], b.g[1][0], b.g[2][0], b.g[3][0], u)
			g2 := cubic(b.g[0][1], b.g[1][1], b.g[2][1], b.g[3][1], u)
			env = g1*complex(b.m[b.late+i], 0) + g2*complex(b.m[i], 0)
		}
		var z complex128
		beat := eb
		if b.sign < 0 {
			env, beat = cmplx.Conj(env), cmplx.Conj(eb)
		}
		if two {
			z = ec * (complex(ac, 0)*env + complex(al, 0)*beat)
		} else {
			z = complex(ac, 0) * cmplx.Conj(env) * beat
			if !hearL {
				z = 0
			}
		}
		b.out[0][i], b.out[1][i] = float32(real(z)), float32(imag(z))
		eb *= rotB
		ec *= rotC
	}
}

// finish adds the receiver: noise, spurs, gain control, offset.
func (b *Bench) finish(t float64) {
	c := &b.cfg
	planes := 1
	if c.Hookup == "quadrature" {
		planes = 2
	}
	for k := range planes {
		x := b.out[k]
		for i := range x {
			v := b.sigma * b.noise.NormFloat64()
			if k == 0 {
				for j := range b.filter {
					v = b.filter[j].next(v)
				}
			}
			x[i] += float32(v)
		}
		for _, s := range c.Spurs {
			a := amplitude(s.DBFS)
			for i := range x {
				_, f := math.Modf(s.Hz * (t + float64(i)*b.dts))
				x[i] += float32(a * math.Cos(2*math.Pi*(f-0.25*float64(k))))
			}
		}
		if c.AGC && k == 0 {
			const target = 0.25
			for i, v := range x {
				d := math.Abs(float64(v)) - b.level
				if d > 0 {
					b.level += b.attack * d
				} else {
					b.level += b.decay * d
				}
				x[i] = v * float32(target/max(b.level, 1e-4))
			}
		}
		if c.DC != 0 {
			for i := range x {
				x[i] += float32(c.DC)
			}
		}
	}
}
