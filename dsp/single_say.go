package dsp

import (
	"fmt"
	"math"
	"math/cmplx"
)

// readingAtRest says what is known of a beat too slow for windows of seconds.
func (s *single) readingAtRest(t, end float64) Reading {
	r := Blank(t, Searching)
	r.PhaseRun = s.count.run
	r.Why = "no tone stands out of the noise"
	if !s.rest.told() {
		if s.rest.seen {
			r.State, r.Why, r.BeatWithin = Merged, s.rest.why, s.rest.within*(1+s.cfg.SampleRateError)
		}
		if s.rest.held {
			r.Why = fmt.Sprintf("a beat about %.2g Hz shows: %.0f s more to be sure of it", math.Abs(s.rest.fit.x.f), math.Ceil(s.rest.proven-s.rest.ring.upto()))
		}
		return r
	}
	c := &s.rest.fit
	r.State, r.Why = Apart, ""
	a := cmplx.Abs(c.x.a)
	r.CarrierDBFS = 20 * math.Log10(a/s.rest.ring.gain(c.x.f, c.step))
	// Per hertz: both components of complex noise; of real noise, one side of zero.
	r.CarrierCN0 = 10 * math.Log10(a*a/2/c.density())
	if !c.complex {
		r.CarrierCN0 -= 10 * math.Log10(2)
	}
	// The beat of the middle of the span, if that ended with this second.
	f := c.x.f + c.x.c*(t+0.5-c.half-c.mid)
	sign := s.say(&r, f, c.u(pTurn), c.span())
	if f < 0 && !s.cfg.signed() {
		sign = -sign
	}
	if ph, ok := s.rest.phaseAt(t, end); ok {
		r.Phase = s.count.next(t, sign*ph, sign*(c.x.f+c.x.c*(t-c.mid)), c.u(pTurn))
	}
	r.PhaseRun = s.count.run
	return r
}

// glimpseAtRest points the beat hand by the latest moments and says the beat as
// the long fit has it, unless the hand shows that it is no longer so.
func (s *single) glimpseAtRest(from, upto float64, g *Glimpse) {
	if !s.rest.told() {
		if s.rest.known {
			g.State = Merged
		}
		return
	}
	c := &s.rest.fit
	g.State = Merged
	l := s.gl
	l.open(s.zero, (from+upto)/2, upto-from, 0)
	if l.valid < 0.95 {
		return
	}
	var z complex128
	for _, v := range l.win.z {
		z += v / complex(float64(len(l.win.z)), 0)
	}
	if !c.complex {
		z /= 2
	}
	mid := (from + upto) / 2
	want := cmplx.Rect(cmplx.Abs(c.x.a), 2*math.Pi*c.at(mid))
	far := z - c.x.off - want
	if !c.complex {
		far = complex(real(far), 0)
	}
	if cmplx.Abs(far) > 0.4*cmplx.Abs(want)+5*math.Sqrt(2*c.density()/(upto-from)) {
		return
	}
	g.State, g.T = Apart, mid
	f, sign := c.x.f+c.x.c*(mid-c.mid), s.cfg.sign()
	scale := 1 + s.cfg.SampleRateError
	g.BeatAbs, g.BeatU = math.Abs(f)*scale, c.u(pTurn)*scale
	ph := c.at(upto)
	if c.complex {
		g.Beat = sign * f * scale
		ph = cphase(z-c.x.off) + f*(upto-mid)
	}
	ph *= sign
	g.Turn = ph - math.Floor(ph)
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
	if !still && math.Abs(c.x.f) > handOver && c.uAmp() < 0.3*cmplx.Abs(c.x.a) {
		s.why = "listening to a faster beat"
		return
	}
	s.within = most
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
	s.within = within
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
