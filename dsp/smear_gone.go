package dsp

import (
	"math"
	"math/cmplx"
)

// gone reports whether a line found over a long span is not there any more: the
// sound before it went, or before the dial was moved, would show it for as long as
// the span lasts. In the latest seconds it must not be far below its level by more
// than smear and noise explain.
func (s *smear) gone(b *band, h *hit, x *seek) bool {
	f := h.m.when(x.end)
	d := (f - x.haze.mu) / x.haze.sigma
	dense := x.haze.n0 + x.haze.power/(math.Sqrt(2*math.Pi)*x.haze.sigma)*math.Exp(-d*d/2)
	a := h.m.amp * b.gain(f-b.centre)
	for span := 2.0; span <= h.span/2 && span <= 16; span *= 2 {
		s.slow.fetch(&s.st, x.end, span, f, int(span*25))
		if s.st.valid < 0.9 {
			return false
		}
		var y complex128
		e, q, qq := chirped(-h.m.c*span/2, h.m.c, s.st.t0, s.st.dt)
		for _, z := range s.st.z {
			y += z * cmplx.Conj(e)
			e *= q
			q *= qq
		}
		left := a - cmplx.Abs(y)/float64(len(s.st.z))
		if left > 0.7*a && left*left*span > 12*dense {
			return true
		}
	}
	return false
}
