package dsp

import (
	"fmt"
	"math"
	"math/cmplx"
)

const (
	handOver   = 0.45 // a beat faster than this is left to windows of seconds, Hz
	slowLeast  = 8.0  // the shortest span of a slow beat, s
	fitPoints  = 1024 // block means of a long fit, about
	scanMost   = 128  // block means of a search
	shorter    = 0.8 // the next shorter piece of sound in which a beat is looked for
	leastTurn  = 0.06 // the part of a turn from which quadrature is believed
	shakyAmp   = 0.1  // the relative uncertainty of the level up to which a fit stands by itself
	steadyPart = 0.2  // of one second's noise: how well the offset must be known for its phase
	jumpSigma  = 6.0  // a change of the trimmer stands this far out of the noise
	bendSigma  = 4.5  // and a drift this far
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
	drifts   bool // the fit has a chirp
	steadied bool // the phase was handed out a second ago
	due      int  // seconds to the next search

	known  bool // the offset, from the latest fit that stood by itself
	off    complex128
	offVar float64
	amp    float64
	noise  float64 // density of one component, see circleFit.density; 0: not known

	seen bool   // while nothing is held: something stands or moves at 0 Hz
	why  string // and what that may be
}

func newResting(cfg *Config, p *plan) *resting {
	return &resting{cfg: cfg, ring: newRing(p), fit: circleFit{complex: cfg.Hookup == Quadrature}}
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
	return math.Abs(s.fit.sol[i]) > bendSigma*math.Sqrt(s.fit.variance(w))
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

// search looks for a slow beat in the sound since start: in all of it, else in
// ever shorter pieces of its end, as the trimmer may have been turning.
func (s *resting) search() {
	all := min(s.ring.upto()-s.start, ringSpan)
	if s.due--; s.due > 0 && all > 32 {
		return // a little more sound says little more
	}
	s.due = int(min(all/32, 4))
	if all < slowLeast {
		s.seen, s.why = s.known, "listening for a slow beat"
		return
	}
	s.drifts = false
	said := false
	for part := all; part >= slowLeast; part *= shorter {
		if s.held = s.try(part); s.held {
			s.start = s.ring.upto() - part
			s.follow() // at full resolution, with all its doubts
			return
		}
		// What can be said rests on the longest piece that one setting explains.
		last, one := part*shorter < slowLeast, s.oneSetting()
		if !said && (one || last) {
			if s.explain(part); last && !one {
				s.why = "what moves around 0 Hz is not one steady beat: let the trimmer rest"
			}
			said = true
		}
	}
}

// oneSetting reports whether the fit leaves nothing but noise.
func (s *resting) oneSetting() bool {
	late, _ := s.fit.change(s.fit.density(), false)
	return s.fit.red == 1 && late < jumpSigma-1
}

// try fits a beat to the latest span seconds and reports whether it can be
// defended.
func (s *resting) try(span float64) bool {
	end := s.ring.upto()
	k := s.step(span, 0, scanMost)
	c := &s.fit
	c.x, c.prior = circle{}, false
	if !c.load(s.ring, end-span, end, k) {
		return false
	}
	by := 1 / (6 * span)
	top := min(0.9*ringHalf, 0.35/c.dt)
	lo := 2 * by
	if c.complex {
		lo = -by * math.Floor(top/by)
	}
	c.x.f = c.scan(lo, top, by)
	if s.passes() {
		return true
	}
	if !s.known || !c.complex {
		return false
	}
	keep := *c
	s.remember(circle{})
	c.x.f = c.scan(lo, top, by)
	if c.run(1) && s.recognised() && c.red == 1 && c.u(pTurn) < 0.02 {
		return true
	}
	c.x, c.prior, c.s2, c.na, c.low, c.red = keep.x, false, keep.s2, keep.na, keep.low, keep.red
	return false
}

// passes fits from x on and reports whether the result can be defended: there
// is enough of the turn for level and offset to be told apart, and the rest is
// noise, if need be with a drift of the beat.
func (s *resting) passes() bool {
	c := &s.fit
	if !c.run(1) {
		return false
	}
	least := 1.0
	if c.complex {
		least = leastTurn
	}
	if s.clean(least) {
		return true
	}
	// A drift can make a beat of any smooth curve: it takes more turns.
	x := c.x
	if math.Abs(x.f)*c.span() > 2*least && c.uAmp() < 3*shakyAmp*cmplx.Abs(x.a) && c.run(2) && math.Abs(c.x.c)*c.half < 0.5*math.Abs(c.x.f) && s.clean(2.5*least) {
		s.drifts = true
		return true
	}
	if c.x != x {
		c.x = x
		c.run(1) // for what is said of it
	}
	return false
}

// clean reports whether the fit has turned at least so much, tells level and
// offset apart, and leaves noise.
func (s *resting) clean(least float64) bool {
	c := &s.fit
	a, turned := cmplx.Abs(c.x.a), math.Abs(c.x.f)*c.span()
	if turned < least || c.span() < 0.9*slowLeast || math.Abs(c.x.f) > handOver || c.uAmp() > shakyAmp*a {
		return false
	}
	if s.known && turned < 3 && !s.recognised() {
		return false // the end of a turn of the trimmer can look like a small beat
	}
	if s.noise > 0 && c.density() > 4*s.noise {
		return false // less than all of it is one setting of the trimmer
	}
	rms := math.Sqrt(c.rss / float64(c.n))
	return c.red == 1 || turned > 3 && rms < 0.2*a
}

// explain says what is known while no number can be defended, and whether
// there is anything at all. The fit of try is still there.
func (s *resting) explain(span float64) {
	c := &s.fit
	level, still := c.level()
	most := 1.2 / span // a faster one would have been told
	// More than a sound card's own offset, which stays below -60 dBFS (common
	// practice), must stand or move at 0 Hz.
	s.seen = s.known || level > 1e-3
	if !s.seen {
		return
	}
	if math.Abs(c.x.f) > handOver {
		s.why = "listening to a faster beat"
		return
	}
	if c.complex {
		s.why = s.explainTurn(span, still)
		return
	}
	a, f := cmplx.Abs(c.x.a), math.Abs(c.x.f)
	switch more := 1/f - span; {
	case still:
		s.why = fmt.Sprintf("no beat beyond ±%.2g Hz: slower, at rest, or none at all", most)
	case c.red == 1 && f > 0.2/span && c.uAmp() < 3*shakyAmp*a && more > 0:
		s.why = fmt.Sprintf("the level turns slowly: within ±%.2g Hz, about %.0f s more are needed", most, math.Ceil(more))
	default:
		s.why = fmt.Sprintf("the level moves: within ±%.2g Hz, a whole cycle is needed", most)
	}
}

// explainTurn bounds the beat of quadrature by how far its point has moved,
// which takes a guess of its circle: at least half of what stands at 0 Hz.
func (s *resting) explainTurn(span float64, still bool) string {
	c := &s.fit
	at, v, uv := c.drift()
	within := min((cmplx.Abs(v)+2*uv)/(math.Pi*max(cmplx.Abs(at), 1e-9)), 1/span) // a whole turn would have been seen
	if still {
		return fmt.Sprintf("at rest within ±%.2g Hz, if no more than half of what stands at 0 Hz is the input's offset; or no beat at all", within)
	}
	more := 0.0
	if rel := c.uAmp() / cmplx.Abs(c.x.a); rel > shakyAmp && rel < 3 {
		more = span * (math.Pow(rel/shakyAmp, 0.4) - 1)
	}
	more = max(more, leastTurn/math.Abs(c.x.f)-span)
	if c.red > 1 || !(more > 0 && more < ringSpan) {
		return fmt.Sprintf("it turns slowly: within ±%.2g Hz, more of a turn is needed to tell the beat from the input's offset", within)
	}
	return fmt.Sprintf("it turns slowly: within ±%.2g Hz, about %.0f s more are needed to tell the beat from the input's offset", within, math.Ceil(more))
}

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
