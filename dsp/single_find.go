package dsp

import (
	"math"
	"math/cmplx"
)

// search looks for a slow beat in the sound since start: in all of it, else in
// ever shorter pieces of its end, as the trimmer may have been turning.
func (s *resting) search() {
	all := min(s.ring.upto()-s.start, ringSpan)
	if s.due--; s.due > 0 && all > 32 {
		return // a little more sound says little more
	}
	s.due = int(min(all/32, 4))
	s.within = math.NaN()
	if all < slowLeast {
		s.seen, s.why = s.known, "listening for a slow beat"
		return
	}
	s.drifts = false
	for part := all; part >= slowLeast; part *= shorter {
		if !s.fit.load(s.ring, s.ring.upto()-part, s.ring.upto(), s.step(part, 0, scanMost)) {
			continue
		}
		if _, still := s.fit.level(); still && !(s.known && s.fit.complex) {
			s.explain(part)
			return
		}
		if s.held = s.try(); s.held {
			s.start = s.ring.upto() - part
			s.proven = s.ring.upto() + foretell*part
			s.follow() // at full resolution, with all its doubts
			return
		}
		// What can be said rests on the longest piece that one setting explains.
		if s.oneSetting() {
			s.explain(part)
			return
		}
	}
	if s.fit.n > 0 {
		s.explain(slowLeast)
		s.why, s.within = "what moves around 0 Hz is not one steady beat: let the trimmer rest", math.NaN()
	}
}

// oneSetting reports whether the fit leaves nothing but noise.
func (s *resting) oneSetting() bool {
	late, _ := s.fit.change(s.fit.density(), false)
	return s.fit.red == 1 && late < jumpSigma-1
}

// try fits a beat to the window that is loaded and reports whether it can be
// defended.
func (s *resting) try() bool {
	c := &s.fit
	c.x, c.prior = circle{}, false
	by := 1 / (6 * c.span())
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
	if turned < least || c.span() < 0.9*slowLeast || math.Abs(c.x.f) > handOver || c.uAmp() > shakyAmp*a || c.stands() < clearMotion {
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
