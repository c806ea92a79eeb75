package dsp

import (
	"math"
	"slices"
)

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
		if e.humAt(b, f) || len(l.lines) > 0 && !e.standsAlone(b, f) {
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

// scanNear is scan, but prefers a second line near audio frequency f: where one
// of the tones is, the other is likelier to be near it than far from it, however
// loud a birdie may be there. What is weaker than nearLevel may be a part of the
// far one's programme.
func (e *twoTone) scanNear(b *band, want int, f float64) int {
	l := e.lens
	n := e.scan(b, want)
	if n != 2 || want != 2 {
		return n
	}
	far := 0
	if math.Abs(l.lines[1].f+b.centre-f) > math.Abs(l.lines[0].f+b.centre-f) {
		far = 1
	}
	if math.Abs(l.lines[0].f-l.lines[1].f) < hintReach || math.Abs(l.lines[1-far].f+b.centre-f) > hintReach || math.Abs(e.cfg.SetOff()) >= 10 {
		return n
	}
	if e.another(b, l.lines[1-far].f) {
		// The far one stays in the fit, lest it disturbs the others.
		l.lines[far], l.lines[2] = l.lines[2], l.lines[far]
		if l.solve(b, true) {
			return 2
		}
		l.lines = l.lines[:0]
	} else if len(l.lines) > 2 {
		l.lines = l.lines[:2] // the far one it is
		if l.solve(b, true) {
			return 2
		}
		l.lines = l.lines[:0]
	}
	if len(l.lines) < 2 {
		return e.scan(b, want)
	}
	return n
}

// another looks for a third line in the lens near band frequency f.
func (e *twoTone) another(b *band, f float64) bool {
	l := e.lens
	have := len(l.lines)
	e.focus = f + b.centre
	n := e.scan(b, have+1)
	e.focus = 0
	if n <= have {
		return false
	}
	loudest := 0.0
	for _, x := range l.lines[:have] {
		loudest = max(loudest, power(x.a))
	}
	return power(l.lines[have].a) > nearLevel*loudest
}

// range_ returns the part of band b in which tones are looked for, Hz in the
// band.
func (e *twoTone) range_(b *band) (lo, hi float64) {
	lo, hi = max(-b.half, e.cfg.SearchLow-b.centre), min(b.half, e.cfg.SearchHigh-b.centre)
	if f := e.focus; f != 0 {
		lo, hi = max(lo, f-hintReach-b.centre), min(hi, f+hintReach-b.centre)
	}
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
		hint := e.hint()
		told := hint != 0 && e.local < 0
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

// humAt reports whether the peak at band frequency f is to be left alone as
// mains hum.
func (e *twoTone) humAt(b *band, f float64) bool {
	l := e.lens
	at := f + b.centre
	m := &e.memory
	if at < 0 || math.Abs(at-e.hint()) < 3 || m.known && min(math.Abs(at-m.carrier), math.Abs(at-m.local)) < 3 {
		return false
	}
	return e.spurious(rung(at, func(g float64) float64 {
		if math.Abs(g-b.centre) > b.half {
			return math.NaN()
		}
		return energyAt(l.win.z, &l.win, g-b.centre)
	}))
}

// begin searches the whole input for the tones and, where it finds some, takes
// them up from the sound that is kept.
func (e *twoTone) begin(i int64, mid float64) {
	e.stray()
	centres, _ := e.choose(e.heard(mid))
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
		n := 0
		if h := e.hint(); h != 0 && want == 2 && math.Abs(h-b.centre) < b.half+hintReach {
			n = e.scanNear(b, want, h)
		} else {
			n = e.scan(b, want)
		}
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

// heard returns the lines in the latest sound, hum left out where it is not the
// local that was told of or a tone that is remembered.
func (e *twoTone) heard(mid float64) []found {
	x, q := e.raw.tail(int64(math.Ceil((mid+0.5+edge)*e.cfg.Rate)), e.acq.need())
	return slices.DeleteFunc(e.acq.search(x, q), func(l found) bool {
		m := &e.memory
		known := math.Abs(l.f-e.hint()) < 3 || m.known && min(math.Abs(l.f-m.carrier), math.Abs(l.f-m.local)) < 3
		return !known && e.spurious(l.rung)
	})
}

// hint returns where the local was said to be at the start, as long as that
// counts, or 0.
func (e *twoTone) hint() float64 {
	if e.asked {
		return 0
	}
	return e.cfg.LocalTone
}

// choose picks the one or two tones that are wanted from the lines found, and
// the centres of the one or two bands in which they are followed.
func (e *twoTone) choose(lines []found) (centres, tones []float64) {
	if lines = e.word.without(lines); len(lines) == 0 {
		return nil, nil
	}
	s, d0 := e.cfg.sign(), e.cfg.SetOff()
	if hint := e.hint(); hint != 0 {
		near := -1
		for k, l := range lines {
			if math.Abs(l.f-hint) < hintReach && (near < 0 || math.Abs(l.f-hint) < math.Abs(lines[near].f-hint)) {
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
	if hint := e.hint(); hint != 0 {
		for k := range e.tr {
			far = far || e.tr[k].live && math.Abs(e.tr[k].f-hint) > 0.5*e.plan.half
		}
	}
	return far || e.memory.known && math.Abs(e.memory.carrier-e.memory.local) > 0.5*e.plan.half
}

// lookFar searches the whole input for a better pair than the single tone that
// is held, and changes over when it finds one.
func (e *twoTone) lookFar(i int64, mid float64) {
	lines := e.heard(mid)
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
	// A tone that is known is not given up for a louder one.
	m := &e.memory
	known := e.local >= 0 || m.known && min(math.Abs(one.f-m.local), math.Abs(one.f-m.carrier)) < 3
	louder := lines[0].amp > 2*one.amp && !known
	if len(tones) == 2 && same && apart || !same && (louder || !known && len(tones) == 2 && one.amp < 0.3*lines[0].amp) {
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

// nearer looks, while two tones far apart are held neither of which is known to
// be off the air, for a third one near one of them: where a carrier comes back
// beside its local, the pair was a local and a birdie.
func (e *twoTone) nearer(mid float64) {
	a, b := &e.tr[0], &e.tr[1]
	if math.Abs(a.f-b.f) < hintReach || math.Abs(e.cfg.SetOff()) >= 10 || e.cfg.Wired {
		e.thirdN = 0
		return
	}
	if e.local >= 0 {
		if _, proven := e.tr[1-e.local].ev.carrierLike(&e.tr[e.local].ev); proven {
			return
		}
	}
	for k := range e.tr {
		t := &e.tr[k]
		if k == 1-e.local || !t.whole || t.at != mid {
			continue // a birdie's neighbour is nothing to us
		}
		l := e.lens
		l.open(t.band, mid, 1, edge)
		for _, o := range []*track{t, &e.tr[1-k]} {
			if o.band == t.band {
				l.add(o.f-o.band.centre, o.c)
			}
		}
		have := len(l.lines)
		if !l.solve(t.band, false) {
			continue
		}
		if !e.another(t.band, t.f-t.band.centre) {
			continue
		}
		f := l.lines[have].f + t.band.centre
		if e.thirdN == 0 || math.Abs(f-e.third) > 1 {
			e.thirdN = 0
		}
		e.third = f
		if e.thirdN++; e.thirdN >= 3 {
			e.dropFar(k)
		}
		return
	}
	e.thirdN = 0
}

// dropFar lets go of the tone that is not track k, and of what was made of it.
func (e *twoTone) dropFar(k int) {
	e.thirdN, e.candN = 0, 0
	e.tr[1-k] = track{}
	e.count.broken()
	e.memory = pairMemory{}
	e.anchor.forget()
	e.sm.forget()
	e.jumped = true
}

// isLine reports whether line ln of the lens, just taken, is narrower than noise
// through a narrow filter, of which only a peak was fitted. A carrier smeared by
// more than a path does is followed otherwise.
func (e *twoTone) isLine(ln int) bool {
	l := e.lens
	return power(l.lines[ln].a)*l.win.used/1.5 > 8*l.spec.beside(l.lines[ln].f, 1.2, 4)
}

// stranger reports whether, of two lines just found where two tones were wanted,
// one is a tone that was held and the other lies far from both: not the other
// tone, which is in a fade, but what was beside them all the time.
func (e *twoTone) stranger(b *band, want [2]float64) bool {
	for i := range 2 {
		near := func(k int) float64 {
			f := e.lens.lines[k].f + b.centre
			return min(math.Abs(f-want[0]), math.Abs(f-want[1]))
		}
		if near(i) < 0.5 && near(1-i) > hintReach {
			return true
		}
	}
	return false
}

// misplaced reports whether a tone at f, audio Hz, seen beside track k, cannot be the
// one that was held with it a while ago: it lies far from where that would be.
func (e *twoTone) misplaced(f, mid float64, k int) bool {
	m := &e.memory
	if !m.known || m.seconds < 10 || e.local < 0 || e.merged || mid-m.at > strangeFor || math.Abs(e.cfg.SetOff()) >= 10 {
		return false
	}
	want := m.carrier
	if k != e.local {
		want = m.local
	}
	return math.Abs(f-want) > hintReach
}
