package dsp

import (
	"fmt"
	"math"
)

const (
	nearTones  = 12.0 // tones closer than this share the slow ring, Hz
	wideSpread = 0.05 // Hz: a carrier wider than this is not followed as a line
)

// fade looks at the carrier's fading once both tones are known: the local's
// line is taken away, and the carrier is what is left beside it.
func (e *twoTone) fade(mid float64) {
	e.sm.beat = math.NaN()
	if e.merged || e.held() == 0 || !e.tr[e.local].live {
		e.keepSlow()
		return
	}
	l, c := &e.tr[e.local], &e.tr[1-e.local]
	e.advance(l, c)
	if !l.whole || l.at != mid || !e.memory.known {
		return
	}
	guess := model{l.at, l.phase, l.f, l.c, l.amp, l.uf}
	slope, us := e.drift(mid)
	dt := mid - e.sm.loc.at
	turning := dt > 5 || math.Abs(guess.f-e.sm.loc.f-slope*dt) > 0.008+5*l.uf+3*us*dt
	e.sm.loc, e.sm.span, e.sm.lever, e.sm.flat = guess, 1, 0, false
	e.sm.moving(turning)
	e.sm.rest.follow(mid, l.f, l.uf)
	e.sm.seen, e.sm.turned = mid+0.5, turning
	if turning {
		e.sm.note(nil, mid)
		if c.live {
			e.sm.mean = c.f - l.f
		}
		return
	}
	gone := !c.live
	if gone { // in a fade, or gone: is there power where it should be?
		if c.band == nil || c.band != l.band {
			return
		}
		c.f, _ = e.anchor.when(mid)
	}
	e.lookBeside(c, mid)
	if gone && math.IsNaN(e.sm.beat) && !(e.sm.sigma > 0.03) {
		// It went away: what its coming and going looks like is no fading.
		e.sm.sigma = math.NaN()
		e.sm.ring = [len(e.sm.ring)]complex128{}
	}
	if gone && !math.IsNaN(e.sm.beat) && e.sm.power > 8*e.sm.powerU {
		c.live, c.tail, c.whole, c.at = true, true, false, mid
		c.f = l.f + e.sm.beat
	}
}

// keepSlow keeps the slow ring going around whatever is held.
func (e *twoTone) keepSlow() {
	if len(e.bands) != 1 {
		return
	}
	sum, n := 0.0, 0.0
	for k := range e.tr {
		if e.tr[k].live {
			sum += e.tr[k].f
			n++
		}
	}
	if n > 0 {
		e.slow.aim(sum / n)
	}
	e.slow.advance(e.bands[0])
}

// drift returns how fast the receiver drifts at time t, Hz/s, and how well that
// is known: by the carrier, or better by the local, which does not fade.
func (e *twoTone) drift(t float64) (slope, u float64) {
	slope, u = e.anchor.drift(t)
	if r := &e.sm.rest; r.known {
		if s, us := r.drift(t); us < u || e.sm.sigma > wideSpread && us < 10*driftWalk*math.Sqrt(longSpan) {
			return s, us
		}
	}
	return slope, u
}

// learnDrift takes the receiver's drift from the local's line in the smear, known
// to us before. Fits of long spans share most of their seconds: one counts only
// half a span after the last.
func (e *twoTone) learnDrift(mid, us float64) {
	sm := e.sm
	switch {
	case sm.span == 8 || sm.span == 16:
		sm.rest.follow(mid, sm.loc.when(mid), sm.loc.uf)
	case sm.span > 64 && sm.info > 3*telling && mid-sm.learnt > sm.span/2:
		own := math.Sqrt(60) * sm.loc.uf / sm.span
		sm.learnt = mid
		sm.rest.set(mid, sm.loc.when(mid), 4*sm.loc.uf, sm.loc.c, us*own/math.Hypot(us, own), sm.span)
	}
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
	n0 := e.noiseBeside(ln, b, e.sm.loc.f+want)
	e.sm.gain.hear(mid, n0)
	if e.sm.span == 1 && e.sm.clear() {
		e.sm.gain.learn(e.sm.loc.amp)
	}
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
		if e.sm.slowly > 0 {
			slope, _ := e.drift(mid)
			f, far := e.sm.loc.when(mid)+e.sm.beat, 1.0
			if e.sm.sigma > 0.1 {
				far = 10 * e.sm.sigma
			}
			e.sm.home.add(mid, f, e.sm.power/e.sm.slowly, slope, far)
		}
	}
	g := b.gain(e.sm.loc.f + want - b.centre)
	a2 := e.sm.loc.amp * e.sm.loc.amp
	if w := e.sm.width(n0 / (g * g) * phasorRate / a2); !math.IsNaN(w) && !e.sm.turns && e.sm.clear() {
		e.sm.sigma = w
	}
	if e.sm.n%(5*phasorRate) == 0 && e.sm.clear() {
		// A local drawing near spoils it: a carrier known to stand still for the
		// most part is taken for a smear only beside a local at rest.
		share := e.sm.inOneLine(n0 / (g * g) * phasorRate / a2)
		if !(e.sm.steady >= 0.5 && share < 0.5) || e.sm.still > 30 {
			e.sm.steady = share
		}
	}
}

// noiseBeside returns the density of the noise around f, with both tones and
// their skirts left out.
func (e *twoTone) noiseBeside(ln *lens, b *band, f float64) float64 {
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

// isSpread reports whether the carrier is too wide to be followed as a line. How
// much of it stands still takes half a minute to know: until then only a wide
// one is taken for a smear.
func (e *twoTone) isSpread() bool {
	if e.local < 0 || !e.hidden && e.held() == 0 || !(e.sm.slowly > 0) {
		return false
	}
	if math.IsNaN(e.sm.steady) {
		return e.sm.sigma > 2.5*wideSpread
	}
	return e.sm.sigma > wideSpread && e.sm.steady < 0.5
}

// followSpread finds the local's line in the carrier's smear and measures the
// carrier's power beside it, in the second around mid. It returns false when
// this is not its business any more.
func (e *twoTone) followSpread(mid float64) bool {
	l, c := &e.tr[e.local], &e.tr[1-e.local]
	if l.band == nil || !e.hidden && !e.merged && !e.near(c, l) {
		e.hidden = false
		return false
	}
	b := l.band
	e.advance(l, c)
	end := mid + 0.5
	if e.hidden {
		ln := e.lens
		ln.open(b, mid, 1, edge)
		e.sm.gain.hear(mid, e.noiseBeside(ln, b, e.sm.home.f))
	}
	x := e.seekLocal(b, l, end)
	if !e.sm.find(b, &x) || !e.trusts(&x) {
		return e.hide(b, l, mid)
	}
	if e.lostLine > 0 {
		e.count.broken()
		e.jumped = true
	}
	e.sm.seen, e.sm.turned = end, e.sm.bends
	m := &e.sm.loc
	if e.hidden {
		e.sm.mean = x.haze.mu - m.when(end)
	}
	e.lostLine, e.hits, e.gone, e.hidden, e.merged = 0, 0, 0, false, false
	l.live, l.band = true, b
	l.f, l.c, l.at, l.amp, l.uf = m.when(mid), m.c, mid, m.amp*e.sm.gain.at(mid), m.uf
	l.phase = m.turnsAt(mid)
	l.whole, l.tail = true, true
	l.seen++
	e.learnDrift(mid, x.us)
	e.takeSmeared(c, l, b, x.haze.mu, mid)
	return true
}

// seekLocal says where the local's line is to be looked for.
func (e *twoTone) seekLocal(b *band, l *track, end float64) seek {
	g := b.gain(l.f - b.centre)
	x := seek{end: end, amp: e.memory.ampL * g}
	if e.sm.gain.on {
		x.amp = e.sm.gain.level() * g
	}
	x.slope, x.us = e.drift(end)
	carrier, _ := e.anchor.when(end)
	if h := &e.sm.home; h.w > 0 {
		carrier = h.when(end, x.slope)
	}
	x.lo, x.hi = 0.6*x.amp, 1.6*x.amp
	// A little more smear than was seen: its skirts must not pass for the line.
	x.haze = haze{e.sm.slowly, 1.25*e.sm.sigma + 0.02, carrier, max(l.noise*g*g, 1e-12*x.amp*x.amp)}
	x.f, x.reach, x.held = e.sm.loc.when(end), 0.7, true
	x.uf = e.sm.loc.uf * widen(end-e.sm.loc.at, e.sm.span)
	x.since, x.was, x.wasU = e.sm.seen, x.f, x.uf+2*x.us*(end-e.sm.seen)
	if e.sm.turned {
		x.was = math.NaN()
	}
	if e.sm.span == 0 { // anywhere about the carrier
		x.f, x.reach, x.held = carrier, farReach, false
	}
	return x
}

// trusts reports whether the line just found is to be believed: not one that
// turns close to the smear, and after it was lost only one that was found again
// from second to second: twice if it has rested for some, oftener if not.
func (e *twoTone) trusts(x *seek) bool {
	m := &e.sm.loc
	at := m.when(x.end)
	short := e.sm.span < 8
	if short && math.Abs(at-x.haze.mu) < 1+4*e.sm.sigma {
		e.hits = 0
		return false
	}
	if !e.hidden {
		return true
	}
	if math.Abs(m.when(x.end-1)-e.hitAt) > 0.1 {
		e.hits = 0
	}
	e.hitAt = at
	e.hits++
	return e.hits >= 4 || e.hits >= 2 && !short
}

// hide says that the local's line is somewhere in the smear. For a while it is
// looked for there; then both tones are looked for afresh.
func (e *twoTone) hide(b *band, l *track, mid float64) bool {
	if !e.hidden {
		e.count.broken()
		e.hidden, e.hits = true, 0
	}
	e.sm.span, e.sm.beat = 0, math.NaN()
	e.sm.moving(true)
	e.merged = true
	e.lostLine++
	ln := e.lens
	ln.open(b, mid, 1, edge)
	power := 0.0
	for i, z := range ln.win.z {
		power += ln.win.w[i] * (real(z)*real(z) + imag(z)*imag(z))
	}
	power *= ln.win.dt / max(ln.win.used, 1e-9)
	if power < 0.2*e.sm.slowly {
		e.dim++
	} else {
		e.dim = 0
	}
	if e.sm.could > 0 && e.sm.absent == e.sm.could {
		e.gone++
	} else {
		e.gone = 0
	}
	if e.lostLine > 1200 || e.dim > 5 || e.gone > 20 {
		e.hidden, e.merged, e.local, e.lostLine, e.dim, e.gone = false, false, -1, 0, 0, 0
		e.sm.forget()
		e.memory.known = false
		for k := range e.tr {
			e.tr[k].live = false
		}
		return false
	}
	l.live, l.at, l.whole, l.tail = true, mid, false, true
	l.f, _ = e.anchor.when(mid)
	return true
}

// takeSmeared measures the carrier beside the local's line and moves its track.
func (e *twoTone) takeSmeared(c, l *track, b *band, carrier, mid float64) {
	if !c.live {
		*c = track{noise: c.noise, ev: c.ev}
	}
	c.band, c.live = b, true
	c.f, c.at = carrier, mid
	e.lookBeside(c, mid)
	c.tail, c.whole = true, false
	if e.sm.turns && math.Abs(l.f-carrier) < 1+4*e.sm.sigma {
		// What a moving line leaves behind would pull the smear beside it.
		e.sm.beat = math.NaN()
	}
	if math.IsNaN(e.sm.beat) {
		if e.dim++; e.dim > 20 {
			c.live = false
		}
		return
	}
	e.dim = 0
	c.f, c.c, c.at = l.f+e.sm.beat, l.c, mid
	c.amp = math.Sqrt(e.sm.power) / b.gain(c.f-b.centre)
	if !(c.noise > 0) {
		c.noise = l.noise
	}
	c.phase = l.phase + e.sm.phase
	c.uf = e.sm.u
	c.whole = true
	c.seen++
}

// remember takes the pair along while the carrier is smeared. The local's level
// is what its line is known by: it may follow only slowly, and only what a long
// span has shown, lest it wanders off with a peak of the smear.
func (e *twoTone) remember(mid float64) {
	c, l, m := &e.tr[1-e.local], &e.tr[e.local], &e.memory
	m.at, m.carrier, m.local = mid, c.f, l.f
	m.seconds++
	m.ampC += 0.05 * (c.amp - m.ampC)
	if r := l.amp / m.ampL; e.sm.info > 4*telling && r > 0.85 && r < 1.18 && !e.sm.gain.on {
		m.ampL += 0.05 * (l.amp - m.ampL)
	}
	if !math.IsNaN(e.sm.beat) {
		e.anchor.add(mid, c.f, math.Hypot(c.uf, 0.001))
	}
}

// hiddenWhy says what a local that is lost in the carrier's smear needs.
func (e *twoTone) hiddenWhy() string {
	if t := e.sm.needs(e.memory.ampL); !math.IsNaN(t) {
		return fmt.Sprintf("the local is somewhere in the carrier's smear: needs about %.0f s at rest", t)
	}
	return fmt.Sprintf("the local is somewhere in the carrier's smear and too weak for its middle: needs more than %.0f s at rest, a louder local, or a beat of more than %.1f Hz", longSpan, 4*e.sm.sigma)
}
