package dsp

import "math"

const (
	nearTones  = 12.0 // tones closer than this share the slow ring, Hz
	wideSpread = 0.08 // Hz: a carrier wider than this is not followed as a line
)

// fade looks at the carrier's fading once both tones are known: the local's
// line is followed over many seconds, and the carrier is what is left beside it.
func (e *twoTone) fade(mid float64) {
	if e.local < 0 || e.merged || !e.tr[e.local].live {
		if e.local < 0 || e.held() == 0 {
			e.sm.forget()
		}
		e.sm.beat = math.NaN()
		return
	}
	l, c := &e.tr[e.local], &e.tr[1-e.local]
	if !c.live {
		e.sm.beat = math.NaN()
		return
	}
	if !l.whole || l.at != mid {
		e.sm.beat = math.NaN()
		e.advance(l, c)
		return
	}
	guess := model{l.at, l.phase, l.f, l.c, l.amp}
	e.advance(l, c)
	turning := math.Abs(guess.f-e.sm.loc.f-e.anchor.slope*(mid-e.sm.loc.at)) > 0.008+5*l.uf
	e.sm.loc, e.sm.span, e.sm.lever = guess, 1, 0
	if turning {
		e.sm.beat = math.NaN()
		e.sm.note(nil, mid)
		e.sm.mean = c.f - l.f
		return
	}
	e.lookBeside(c, mid)
}

// near reports whether both tones fit into the slow ring.
func (e *twoTone) near(c, l *track) bool {
	return c.band == l.band && math.Abs(c.f-l.f) < nearTones
}

// advance keeps the slow ring going: around both tones, or the local alone.
func (e *twoTone) advance(l, c *track) {
	want := l.f
	if e.near(c, l) {
		want = (c.f + l.f) / 2
	}
	e.slow.aim(want)
	e.slow.advance(l.band)
}

// lookBeside measures the carrier beside the local's line in the second around
// mid, and takes its track along where it is not followed as a line.
func (e *twoTone) lookBeside(c *track, mid float64) {
	ln, b := e.lens, c.band
	ln.open(b, mid, 1, edge)
	want := c.f - e.sm.loc.f
	if e.sm.slowly > 0 {
		want = e.sm.mean
	}
	n0 := e.noiseBeside(ln, b, e.sm.loc.f+want, mid)
	e.sm.look(ln, b, mid, want, n0)
	if !math.IsNaN(e.sm.beat) {
		w := 0.1
		if e.sm.slowly > 0 {
			w = min(1, 0.1*e.sm.power/e.sm.slowly)
		}
		if !(e.sm.slowly > 0) || math.Abs(e.sm.beat-e.sm.mean) > 3 {
			w = 1
		}
		e.sm.mean += w * (e.sm.beat - e.sm.mean)
	}
	g := b.gain(e.sm.loc.f + want - b.centre)
	a2 := e.sm.loc.amp * e.sm.loc.amp
	e.sm.sigma = e.sm.width(n0 / (g * g) * phasorRate / a2)
}

// noiseBeside returns the density of the noise around f, with both tones and
// their skirts left out.
func (e *twoTone) noiseBeside(ln *lens, b *band, f, mid float64) float64 {
	e.sm.frame(&ln.win, b, mid)
	guard := 5.0
	if !math.IsNaN(e.sm.sigma) {
		guard += 4 * e.sm.sigma
	}
	ln.spec.take(ln.win.z)
	ln.specOf = -1
	e.avoid = append(e.avoid[:0], e.sm.loc.f-b.centre, f-b.centre)
	n0 := ln.spec.noise(f-b.centre, 60, b.half, guard, e.avoid)
	if math.IsNaN(n0) {
		n0 = ln.spec.noise(f-b.centre, b.rate, b.rate, 0, e.avoid)
	}
	return n0
}

// isSpread reports whether the carrier is too wide to be followed as a line.
func (e *twoTone) isSpread() bool {
	return e.local >= 0 && !e.merged && e.sm.span >= 2 && e.sm.sigma > wideSpread && e.sm.slowly > 0
}

// followSpread follows the local's line and the carrier's power beside it
// through the second around mid. It returns false when the line is lost.
func (e *twoTone) followSpread(mid float64) bool {
	l, c := &e.tr[e.local], &e.tr[1-e.local]
	if !e.near(c, l) {
		return false
	}
	e.advance(l, c)
	if !e.sm.follow(l.band, mid+0.5, e.sm.loc) {
		return false
	}
	m := &e.sm.loc
	d := mid - m.at
	if r := m.amp / l.amp; r < 0.5 || r > 2 {
		return false
	}
	l.f, l.c, l.at, l.amp = m.f+m.c*d, m.c, mid, m.amp
	l.phase = m.turnsAt(mid)
	l.whole, l.tail = true, true
	l.seen++
	e.lookBeside(c, mid)
	if math.IsNaN(e.sm.beat) {
		if e.dim++; e.dim > 20 || e.sm.span < 2 {
			return false
		}
		c.whole = false
		return true
	}
	e.dim = 0
	c.f, c.c, c.at = l.f+e.sm.beat, l.c, mid
	g := c.band.gain(c.f - c.band.centre)
	c.amp = math.Sqrt(e.sm.power) / g
	c.phase = l.phase + e.sm.phase
	c.uf = e.sm.u
	c.whole, c.tail = true, true
	c.seen++
	return true
}
