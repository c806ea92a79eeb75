package dsp

import (
	"math"
	"math/cmplx"
)

// readingAtRest says what is known of a beat too slow for windows of seconds.
func (s *single) readingAtRest(t, end float64) Reading {
	r := Blank(t, Searching)
	r.PhaseRun = s.count.run
	r.Why = "no tone stands out of the noise"
	if !s.rest.held {
		if s.rest.seen {
			r.State, r.Why = Merged, s.rest.why
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
	if !s.rest.held {
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
