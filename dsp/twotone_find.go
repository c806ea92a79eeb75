package dsp

import "math"

// scan looks for lines in the lens's window afresh, strongest first, until
// there are want of them, each fitted together with those before and cleaned
// away before the next is looked for. Lines already in the lens stay. What
// comes in mirrored pairs about a line is its modulation, not a tone; what
// lies a multiple of the mains frequency aside is hum. It returns the number
// of lines.
func (e *twoTone) scan(b *band, want int) int {
	l := e.lens
	if len(l.lines) == 0 {
		l.fit.r = append(l.fit.r[:0], l.win.z...)
	}
	var no [8]float64
	refused := e.word.inBand(no[:0], b)
	for tries := 0; len(l.lines) < want && tries < 8; tries++ {
		e.avoid = append(l.freqs(e.avoid[:0]), refused...)
		l.specOf = -1
		l.spec.take(l.win.z)
		n0 := l.spec.noise(0, b.half, b.half, 4, e.avoid)
		if math.IsNaN(n0) {
			n0 = l.spec.noise(0, b.rate, b.rate, 0, nil)
		}
		l.spec.take(l.fit.r)
		lo, hi := e.range_(b)
		f, p := l.spec.peak(lo, hi, 1.5, e.avoid)
		if p < 16*n0 || p == 0 {
			break
		}
		if len(l.lines) > 0 && !e.standsAlone(b, f) {
			refused = append(refused, f)
			if len(refused) == cap(refused) {
				break
			}
			continue
		}
		kept := len(l.lines)
		l.add(f, 0)
		ok := l.solve(b, true)
		if ok && kept == 1 && math.Abs(l.lines[0].f-l.lines[1].f) < takeApart {
			ok = false
		}
		if ok {
			x := &l.lines[kept]
			a2 := real(x.a)*real(x.a) + imag(x.a)*imag(x.a)
			ok = a2*l.win.used > 16*n0
		}
		if !ok {
			l.lines = l.lines[:kept]
			if kept > 0 && !l.solve(b, true) {
				l.lines = l.lines[:0]
			}
			break
		}
	}
	return len(l.lines)
}

// range_ returns the part of band b in which tones are looked for, Hz in the
// band.
func (e *twoTone) range_(b *band) (lo, hi float64) {
	lo, hi = max(-b.half, e.cfg.SearchLow-b.centre), min(b.half, e.cfg.SearchHigh-b.centre)
	return lo, hi
}

// standsAlone reports whether a peak of the residual at f is a tone of its own
// and not the modulation of the line that is there.
func (e *twoTone) standsAlone(b *band, f float64) bool {
	l := e.lens
	for i := range l.lines {
		x := &l.lines[i]
		d := math.Abs(f - x.f)
		if d0 := math.Abs(e.cfg.SetOff()); d0 >= 10 && math.Abs(d-d0) < 5 {
			continue
		}
		hint := e.cfg.LocalTone
		told := hint != 0 && !e.asked && e.local < 0
		if told && math.Abs(f+b.centre-hint) < 2 {
			continue
		}
		// Where the local was said to be here, or the pair is remembered at
		// this distance, the other tone may well lie where hum would.
		expected := told && math.Abs(x.f+b.centre-hint) < 2 ||
			e.memory.known && math.Abs(d-math.Abs(e.memory.local-e.memory.carrier)) < 2
		for _, hum := range []float64{50, 60} {
			m := math.Round(d / hum)
			if m >= 1 && math.Abs(d-m*hum) < 0.5 && !expected {
				return false
			}
		}
		mirror := 2*x.f - f
		if math.Abs(mirror) < b.half && energyAt(l.fit.r, &l.win, mirror) > 0.4*energyAt(l.fit.r, &l.win, f) {
			return false
		}
	}
	return true
}

// begin searches the whole input for the tones and, where it finds some, takes
// them up from the sound that is kept.
func (e *twoTone) begin(i int64, mid float64) {
	x, q := e.raw.tail(int64(math.Ceil((mid+0.5+edge)*e.cfg.Rate)), e.acq.need())
	e.stray()
	centres, _ := e.choose(e.acq.search(x, q))
	if len(centres) == 0 {
		return
	}
	e.bands = e.bands[:0]
	for _, f := range centres {
		b := newBand(e.plan, f, e.cfg.Hookup == Quadrature, e.raw.first(), int(2.6*e.plan.outRate()))
		e.raw.prime(b)
		e.bands = append(e.bands, b)
	}
	e.tr = [2]track{}
	e.local, e.candN = -1, 0
	for k, b := range e.bands {
		l := e.lens
		l.open(b, mid, 1, edge)
		if l.valid < 0.7 {
			continue
		}
		want := 2
		if len(e.bands) == 2 {
			want = 1
		}
		n := e.scan(b, want)
		if n >= 1 {
			e.take(b, mid, k, 0)
		}
		if n == 2 {
			e.sight(b, mid, 0, 1)
		}
	}
	e.jumped = e.memory.known
	e.release()
}

// choose picks the one or two tones that are wanted from the lines found, and
// the centres of the one or two bands in which they are followed.
func (e *twoTone) choose(lines []found) (centres, tones []float64) {
	if lines = e.word.without(lines); len(lines) == 0 {
		return nil, nil
	}
	s, d0 := e.cfg.sign(), e.cfg.SetOff()
	if hint := e.cfg.LocalTone; hint != 0 && !e.asked {
		near := -1
		for k, l := range lines {
			if math.Abs(l.f-hint) < 30 && (near < 0 || math.Abs(l.f-hint) < math.Abs(lines[near].f-hint)) {
				near = k
			}
		}
		if near >= 0 {
			return e.bandsFor(lines[near].f, partner(lines, near, lines[near].f-s*d0))
		}
	}
	// Without a hint the pair must lie where the set-off says; of several, the
	// strongest.
	far := s * d0
	if m := &e.memory; m.known { // or where it was
		far = m.local - m.carrier
	}
	best, at := 0.0, -1
	var with *found
	for k, c := range lines {
		p := partner(lines, k, c.f+far)
		if p == nil || math.Abs(p.f-c.f-far) > pull {
			continue
		}
		if v := c.amp * p.amp; v > best {
			best, at, with = v, k, p
		}
	}
	if at >= 0 && best > 0.01*lines[0].amp*lines[0].amp {
		return e.bandsFor(lines[at].f, with)
	}
	return e.bandsFor(lines[0].f, nil)
}

// partner returns the line that goes with line k: the strongest within pull of
// want; failing that, the strongest of all others.
func partner(lines []found, k int, want float64) *found {
	var far *found
	for j := range lines {
		if j == k {
			continue
		}
		if math.Abs(lines[j].f-want) < pull {
			return &lines[j]
		}
		if far == nil {
			far = &lines[j]
		}
	}
	return far
}

// bandsFor returns one centre between two tones when a band holds both, else
// one for each.
func (e *twoTone) bandsFor(f float64, p *found) (centres, tones []float64) {
	switch {
	case p == nil:
		return []float64{f}, []float64{f}
	case math.Abs(p.f-f) < 1.8*e.plan.half:
		return []float64{(f + p.f) / 2}, []float64{f, p.f}
	default:
		return []float64{f, p.f}, []float64{f, p.f}
	}
}

// wantsFar reports whether the missing tone has to be looked for outside the
// band of the one that is held.
func (e *twoTone) wantsFar() bool {
	far := math.Abs(e.cfg.SetOff()) > 0.5*e.plan.half
	if hint := e.cfg.LocalTone; hint != 0 && !e.asked {
		for k := range e.tr {
			far = far || e.tr[k].live && math.Abs(e.tr[k].f-hint) > 0.5*e.plan.half
		}
	}
	return far || e.memory.known && math.Abs(e.memory.carrier-e.memory.local) > 0.5*e.plan.half
}

// lookFar searches the whole input for a better pair than the single tone that
// is held, and changes over when it finds one.
func (e *twoTone) lookFar(i int64, mid float64) {
	x, q := e.raw.tail(int64(math.Ceil((mid+0.5+edge)*e.cfg.Rate)), e.acq.need())
	lines := e.acq.search(x, q)
	if len(lines) < 2 {
		return
	}
	_, tones := e.choose(lines)
	held := 0
	if !e.tr[0].live {
		held = 1
	}
	one := e.tr[held]
	same := false  // the tone that is held is one of those wanted
	apart := false // and the other lies beyond its band
	for _, f := range tones {
		same = same || math.Abs(f-one.f) < 3
		apart = apart || math.Abs(f-one.band.centre) > one.band.half
	}
	louder := lines[0].amp > 2*one.amp
	if len(tones) == 2 && same && apart || !same && (louder || len(tones) == 2 && one.amp < 0.3*lines[0].amp) {
		local := e.local
		e.restartWith(i, mid)
		if t := &e.tr[0]; e.held() == 1 && t.live && local >= 0 && math.Abs(t.f-one.f) < 1 {
			e.local = (local + held) % 2 // nothing won, nothing lost: it is track 0 now
		}
	}
}

// restartWith begins afresh, forgetting the tone that is held but not what is
// remembered of the pair.
func (e *twoTone) restartWith(i int64, mid float64) {
	e.tr = [2]track{}
	e.count.broken()
	e.begin(i, mid)
}
