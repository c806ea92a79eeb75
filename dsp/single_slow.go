package dsp

import (
	"math"
	"math/cmplx"
)

const (
	handOver    = 0.45 // a beat faster than this is left to windows of seconds, Hz
	slowLeast   = 8.0  // the shortest span of a slow beat, s
	fitPoints   = 1024 // block means of a long fit, about
	scanMost    = 128  // block means of a search
	shorter     = 0.8  // the next shorter piece of sound in which a beat is looked for
	foretell    = 0.1  // part of its span for which a new beat must hold before it is told
	leastTurn   = 0.06 // the part of a turn from which quadrature is believed
	shakyAmp    = 0.1  // the relative uncertainty of the level up to which a fit stands by itself
	steadyPart  = 0.2  // of one second's noise: how well the offset must be known for its phase
	clearMotion = 60.0 // how far the motion of a new beat stands out of the noise: an input's own wandering must not pass
	jumpSigma   = 6.0  // a change of the trimmer stands this far out of the noise
	bendSigma   = 4.5  // and a drift this far
)

// resting follows a beat too slow for windows of seconds, down to standstill:
// that of quadrature in phase, as a point on its circle about the input's own
// offset; that of a mixer in level, as a sinusoid about it. Its span grows as
// long as one steady frequency explains what is heard, up to an hour.
type resting struct {
	cfg  *Config
	ring *ring
	fit  circleFit

	start    float64 // sound before this belongs to another setting of the trimmer, s
	held     bool
	proven   float64 // from when on what is held may be told: after it foretold a little, s
	drifts   bool    // the fit has a chirp
	steadied bool    // the phase was handed out a second ago
	due      int     // seconds to the next search

	known  bool // the offset, from the latest fit that stood by itself
	off    complex128
	offVar float64
	amp    float64
	noise  float64 // density of one component, see circleFit.density; 0: not known

	seen   bool    // while nothing is held: something stands or moves at 0 Hz
	why    string  // and what that may be
	within float64 // a beat there is slower than this, Hz; NaN: not known
}

func newResting(cfg *Config, p *plan) *resting {
	s := &resting{cfg: cfg, ring: newRing(p), fit: circleFit{complex: cfg.Hookup == Quadrature}}
	const most = 2*fitPoints + 8
	s.fit.z, s.fit.ok, s.fit.r = make([]complex128, 0, most), make([]bool, 0, most), make([]complex128, 0, most)
	s.fit.tmp = make([]float64, 0, most)
	return s
}

// step returns the block length, as a power of two of the ring's samples, for
// about n points over span seconds of a beat of f Hz, which must not turn by
// more than a tenth in a block.
func (s *resting) step(span, f float64, n int) int {
	k := 0
	for k < ringSteps-1 && span/s.ring.dt/float64(int(1)<<k) > float64(n) && math.Abs(f)*s.ring.dt*float64(int(2)<<k) < 0.1 {
		k++
	}
	return k
}

// load takes the sound from start on, as much of it as a fit takes.
func (s *resting) load() bool {
	end, f := s.ring.upto(), s.fit.x.f
	span := min(end-s.start, ringSpan)
	k := s.step(span, f, fitPoints)
	span = min(span, 2*fitPoints*s.ring.dt*float64(int(1)<<k))
	ph := s.fit.at
	mid := s.fit.mid
	a, c := s.fit.x.a, s.fit.x.c
	turn0 := ph(mid)
	if !s.fit.load(s.ring, end-span, end, k) {
		return false
	}
	dt := s.fit.mid - mid
	s.fit.x.a = cmplx.Rect(cmplx.Abs(a), 2*math.Pi*(turn0+f*dt+c*dt*dt/2))
	s.fit.x.f = f + c*dt
	return true
}

// solve fits at the given order: by itself where the level, and with it the
// offset, comes out well; else, for quadrature, with the offset remembered.
func (s *resting) solve(order int) bool {
	x := s.fit.x
	s.fit.prior = false
	if s.fit.run(order) && s.fit.uAmp() < shakyAmp*cmplx.Abs(s.fit.x.a) {
		return true
	}
	if !s.known || !s.fit.complex {
		return false
	}
	s.remember(x)
	return s.fit.run(order) && s.recognised()
}

// remember makes the fit start from x with the offset known.
func (s *resting) remember(x circle) {
	s.fit.x = x
	s.fit.x.off = s.off
	s.fit.prior, s.fit.priorOff, s.fit.priorVar = true, s.off, s.offVar
}

// recognised reports whether the level is roughly what it was when the offset
// was learnt.
func (s *resting) recognised() bool {
	r := cmplx.Abs(s.fit.x.a) / s.amp
	return r > 0.5 && r < 2
}

// least is the shortest span that a beat of f Hz is given.
func (s *resting) least(f float64) float64 {
	need := 1.2 / max(math.Abs(f), 1e-6)
	if s.fit.complex {
		need /= 3
		if s.known {
			need = 0
		}
	}
	return max(slowLeast, need)
}

// follow takes the beat through another second. jumped: the trimmer was turned,
// or the input jumped; nothing is held then. Where the beat drifts the span is
// cut until that no longer shows, or until it could not be shorter; then the
// drift is part of the fit.
func (s *resting) follow() (jumped bool) {
	for range 4 {
		if s.held = s.load() && s.straighten(); !s.held {
			return false
		}
		noise := s.noise
		if noise == 0 {
			noise = s.fit.density()
		}
		if late, from := s.fit.change(noise, false); late > jumpSigma {
			s.start, s.held = s.fit.mid+from, false
			return true
		}
		cut := s.fit.mid - s.fit.half
		if early, upto := s.fit.change(noise, true); early > jumpSigma {
			cut = s.fit.mid + upto // what was before the trimmer came to rest
		} else if !s.drifts {
			s.learn()
			return false
		} else {
			cut += 0.2 * s.fit.span()
		}
		if s.ring.upto()-cut < s.least(s.fit.x.f) {
			return false
		}
		s.start = cut
	}
	return false
}

// straighten fits without a drift if that will do, else with one.
func (s *resting) straighten() bool {
	if s.drifts {
		if s.solve(2) && math.Abs(s.fit.x.c) > bendSigma*s.fit.u(pBend) {
			return true
		}
		s.drifts, s.fit.x.c = false, 0
	}
	if s.solve(1) && !s.bent() {
		return true
	}
	s.drifts = s.solve(2)
	return s.drifts
}

// bent reports whether the beat drifts within the window.
func (s *resting) bent() bool {
	s.fit.choose(2)
	defer func() { s.fit.choose(1); s.fit.factor() }()
	if !s.fit.newton() {
		return false
	}
	i := s.fit.na - 1
	var w [nPar]float64
	w[pBend] = 1
	return math.Abs(s.fit.sol[i]) > bendSigma*math.Sqrt(s.fit.variance(w)/s.fit.red) // red with the drift, if there is one
}

// learn keeps what a good fit tells of the input.
func (s *resting) learn() {
	d := s.fit.density()
	if s.noise == 0 || s.fit.n < 200 {
		s.noise = d
	} else {
		s.noise += 0.1 * (d - s.noise)
	}
	if s.fit.prior || s.fit.red > 1 {
		return
	}
	a := cmplx.Abs(s.fit.x.a)
	s.known, s.off, s.amp = true, s.fit.x.off, a
	s.offVar = 4*s.fit.uOff()*s.fit.uOff() + 1e-6*a*a // an offset wanders a little
}

// enter takes over a beat that became too slow for windows of seconds.
func (s *resting) enter(end, span float64) {
	s.start = max(s.start, end-span)
	s.search()
}

// swing returns how far what stands around 0 Hz has moved in the latest minute:
// the amplitude that a beat would have for that.
func (s *resting) swing() float64 {
	var m complex128
	var p, n float64
	for k := range int64(64 / s.ring.dt) {
		if z, ok := s.ring.have(s.ring.next - 1 - k); ok {
			m += z
			p += real(z)*real(z) + imag(z)*imag(z)
			n++
		}
	}
	if n < 32 {
		return 0
	}
	v := max(0, p/n-real(m*cmplx.Conj(m))/n/n)
	if !s.fit.complex {
		v *= 2
	}
	return math.Sqrt(v)
}

// told reports whether there is a beat that may be told.
func (s *resting) told() bool { return s.held && s.ring.upto() >= s.proven }

// phaseAt returns the phase of the beat at time t near the end of the sound, in
// turns, and whether it can be handed out. It is the phase of the fit, moved by
// what the latest whole second says alone, so that the noise of one phase is
// that of its own second: what a regression over many of them wants. A mixer's
// level tells nothing of the phase near its turning points; the correction is
// weighted so that it is right in the mean over a cycle.
func (s *resting) phaseAt(t, end float64) (turns float64, ok bool) {
	c := &s.fit
	a := cmplx.Abs(c.x.a) / s.ring.gain(c.x.f, c.step)
	to := end - s.ring.lag()
	m0, m1 := int64(math.Floor((to-1)/s.ring.dt)), int64(math.Floor(to/s.ring.dt))
	sum, n := 0.0, 0.0
	for m := m0 + 1; m <= m1; m++ {
		z, have := s.ring.have(m)
		if !have {
			continue
		}
		e := cmplx.Rect(1, 2*math.Pi*c.at(s.ring.time(m)))
		r := z - c.x.off - e*complex(a, 0)
		if c.complex {
			sum += imag(r * cmplx.Conj(e))
		} else {
			sum -= 2 * real(r) * imag(e)
		}
		n++
	}
	if n < 0.9*float64(m1-m0) || n == 0 {
		return c.at(t), false
	}
	return c.at(t) + sum/n/a/(2*math.Pi), s.steady()
}

// steady reports whether level and offset are known so well that they do not
// stand out of the noise of one second's phase; once they were, a little less
// will do.
func (s *resting) steady() bool {
	c := &s.fit
	part := steadyPart
	if s.steadied {
		part = 1
	}
	wrong := c.uOff()
	if !c.complex {
		wrong = max(wrong, c.uAmp())
	}
	s.steadied = s.held && wrong < part*math.Sqrt(c.density())
	return s.steadied
}
