package dsp

import (
	"fmt"
	"math"
	"time"
)

// clock estimates e, the fractional error of the sample clock (true rate =
// nominal rate * (1+e)), from the carrier's second pulses and from the host's
// clock, as far as either is there.
//
// Both give points (t, x): t is nominal time, samples over the nominal rate, and
// x by how much nominal time has run ahead of true time, plus a constant. At
// true time T, t = T*(1+e), so that x = t - T + const has the slope
// b = e/(1+e), and e = b/(1-b).
//
// It is not safe for concurrent use. push allocates nothing once the tones are
// told and the greatest block has been seen.
type clock struct {
	rate   float64
	n      int64   // samples on the time line so far
	pulses *pulses // nil: not looked for
	host   host

	words    string // of the estimate, made anew when the sources say something new
	wordsFor [2]told
	apart    bool // the sources contradict each other
}

const (
	clockRange  = 1000e-6 // the greatest |e| looked for
	clockGood   = 20e-6   // an estimate with a greater u is none
	clockWander = 0.05e-6 // random walk of e, in an hour: 0.1 ppm in 4 h, as a crystal's does with the room (common practice)
	hostRate    = 0.05e-6 // what a disciplined host clock's own rate is off by (from memory)
	pathDelay   = 0.3e-3  // by how much an HF path's delay changes over a span, s (from memory)
	keepMinutes = 360     // points kept by either
)

// newClock returns a clock for real or complex samples at a nominal rate.
func newClock(rate float64, isComplex bool) *clock {
	return &clock{rate: rate, pulses: newPulses(rate, isComplex)}
}

// push takes the next samples; q is nil for real input.
func (c *clock) push(x, q []float32) {
	if c.pulses != nil {
		c.pulses.push(c.n, x, q)
	}
	c.n += int64(len(x))
}

// gap says that samples are missing; the next one has number next.
func (c *clock) gap(next int64) {
	c.n = next
	if c.pulses != nil {
		c.pulses.gap(next)
	}
}

// tones tells where the steady tones are now, Hz of audio, carrier and local
// first: pulses are looked for 1000 to 1500 Hz to either side of these two, and
// nowhere near any. For the output of an AM detector or a mixer, tell 0. An empty
// list leaves what was told before.
func (c *clock) tones(hz ...float64) {
	if c.pulses != nil {
		c.pulses.aim(hz)
	}
}

// mark says that the host's clock showed at when sample n had just arrived.
// Arrival may be late by anything, never early.
func (c *clock) mark(n int64, at time.Time) { c.host.mark(float64(n)/c.rate, at) }

// estimate returns e and its standard uncertainty u, both fractions, and in words
// where they come from. ok is false while u exceeds 20 ppm or too little is
// known; how then says why if two sources contradict each other.
//
// Sources that agree within three sigma are combined by weight. If they do not,
// one of them is wrong and nothing in the sound tells which: the host's clock may
// run free though it is said to be disciplined, and what looks like second pulses
// may be some machine nearby. The middle is given, with half the difference in u
// (a quantity known to be one of two values, GUM 4.3.7 in kind): both lie within u.
func (c *clock) estimate() (e, u float64, how string, ok bool) {
	now := float64(c.n) / c.rate
	var p, h told
	if h = c.host.told.when(now); c.pulses != nil {
		p = c.pulses.told.when(now)
	}
	apart := false
	switch {
	case p.ok && h.ok:
		d, ud := p.e-h.e, math.Hypot(p.u, h.u)
		if apart = math.Abs(d) > 3*ud; apart {
			e, u = (p.e+h.e)/2, math.Hypot(d/2, ud)
			break
		}
		w := h.u * h.u / (ud * ud)
		e, u = w*p.e+(1-w)*h.e, p.u*h.u/ud
	case p.ok:
		e, u = p.e, p.u
	case h.ok:
		e, u = h.e, h.u
	default:
		e, u = math.NaN(), math.NaN()
	}
	how = c.from(p, h, apart)
	if !(u <= clockGood) {
		return math.NaN(), math.NaN(), how, false
	}
	return e, u, how, true
}

// from says in words what the estimate rests on.
func (c *clock) from(p, h told, apart bool) string {
	key := [2]told{p, h}
	key[0].u, key[1].u = 0, 0 // grows all the time
	if key == c.wordsFor && apart == c.apart {
		return c.words
	}
	switch c.wordsFor, c.apart = key, apart; {
	case p.ok && h.ok:
		c.words = fmt.Sprintf("second pulses over %s and host clock over %s", spanWords(p.span), spanWords(h.span))
		if apart {
			c.words += fmt.Sprintf(", which disagree: %+.2f and %+.2f ppm", p.e*1e6, h.e*1e6)
		}
	case p.ok:
		c.words = "second pulses over " + spanWords(p.span)
	case h.ok:
		c.words = "host clock over " + spanWords(h.span)
	default:
		c.words = ""
	}
	return c.words
}

// spanWords says a time in s as people would.
func spanWords(s float64) string {
	if s < 3570 {
		return fmt.Sprintf("%.0f min", s/60)
	}
	return fmt.Sprintf("%.1f h", s/3600)
}

// told is what one source says of e.
type told struct {
	e, u float64
	span float64 // s
	at   float64 // of its latest point, nominal s
	ok   bool
}

// when returns what it says at a later time: the clock may have wandered since.
func (x told) when(t float64) told {
	if x.ok {
		x.u = math.Hypot(x.u, wander(t-x.at))
		x.ok = x.u <= clockGood
	}
	return x
}

// wander is what e may have changed by in a time, s.
func wander(s float64) float64 { return clockWander * math.Sqrt(max(0, s)/3600) }
