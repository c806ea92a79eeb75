package dsp

import (
	"math"
	"math/cmplx"
)

const (
	// Two tones closer than this are not told apart in a second: at 1.5 cycles
	// of difference the joint bound is still within 1.23 of the single one in
	// the worst phase, at 1.0 it is 2.5 times that (facts of the two-tone
	// information matrix). New tones have to be further apart to be taken up.
	holdApart  = 1.6
	takeApart  = 2.0
	pull       = 140.0 // how far a beat may lie from its set-off when nothing was told of the tones, Hz
	strangeFor = 60.0  // for how long after a pair was held only a tone about where it was is taken for its lost one, s
	hintReach  = 30.0  // how far from where it was said to be a local is looked for, Hz
	nearLevel  = 0.003 // of a loud far tone's power, that a near one must have
	partReach  = 12.0  // how far from each other merged tones come up again, Hz
	loud       = 100.0 // C/N0, Hz, above which one second is proof enough of a tone
)

// pairMemory is what is remembered of the two tones once they were known.
type pairMemory struct {
	known          bool
	crossed        bool    // the sign of their difference may have changed since
	at             float64 // s
	carrier, local float64 // Hz
	ampC, ampL     float64
	evC, evL       evidence
	seconds        int // in which both were there
}

// twoTone holds the carrier's tone and the local's.
type twoTone struct {
	cfg  *Config
	plan *plan
	raw  *raw
	acq  *acquirer
	lens *lens
	gl   *lens

	bands    []*band
	tr       [2]track
	asked    bool // the hint has had its say
	local    int  // index of the local's track, -1: not known
	merged   bool
	met      float64 // since when, s
	torn     int     // seconds in a row in which one of two near tones was there in part
	missed   int     // seconds in a row without any tone while merged
	jumped   bool
	alone    int // seconds since only one tone has been held
	memory   pairMemory
	word     word // what the user said or showed of them
	step     step
	cand     float64 // a possible second tone, Hz, and how often it was seen in a row
	candN    int
	count    phaseCount
	last     int64 // the last second looked at
	avoid    []float64
	slow     *slow
	sm       *smear
	pair     *pair
	anchor   anchor
	belief   belief
	zero     nearZero
	trusted  anchor  // the carrier's path as it was when the tones were last well apart and known
	sure     bool    // which of two close tones is which
	closest  *fitted // what the joint fit of close tones says in this second, nil: nothing
	spotted  int     // how often in a row a line was seen to stand still beside a smear, and where
	spotAt   float64
	hidden   bool // the local's line is somewhere in the smear
	hits     int  // how often in a row it was found there again, and where
	hitAt    float64
	gone     int     // seconds in a row in which no line of its level stood anywhere
	lostLine int     // seconds for which the local's line has not been found in the smear
	focus    float64 // where lines are looked for, audio Hz; 0: everywhere
	third    float64 // a tone near one of two far apart, and how often it was seen in a row
	thirdN   int
	goneN    int // seconds in a row in which one of two close tones was not there
	smeared  int // seconds in a row in which the carrier was smeared as a path does it
	dim      int // seconds in a row without the carrier's power beside the local
}

func newTwoTone(cfg *Config, p *plan, r *raw) *twoTone {
	iq := cfg.Hookup == Quadrature
	s := newSlow(p)
	return &twoTone{cfg: cfg, plan: p, raw: r, local: -1, last: -1,
		acq:  newAcquirer(cfg.Rate, cfg.SearchLow, cfg.SearchHigh, iq),
		lens: newLens(p, iq), gl: newLens(p, iq), slow: s, sm: newSmear(s), pair: newPair(s)}
}

func (e *twoTone) push(x, q []float32) {
	for _, b := range e.bands {
		b.push(x, q)
	}
}

func (e *twoTone) gap(next int64) {
	for _, b := range e.bands {
		b.restart(next)
	}
	e.count.broken()
}

// held returns how many tones are held.
func (e *twoTone) held() int {
	n := 0
	for i := range e.tr {
		if e.tr[i].live {
			n++
		}
	}
	return n
}

func (e *twoTone) second(i int64) Reading {
	mid := float64(i) + 0.5
	e.jumped = false
	e.last = i
	e.closest = nil
	spread := e.isSpread() && e.followSpread(mid)
	if spread && e.hidden {
		return e.reading(mid)
	}
	if !spread && e.closeBy(mid) && e.followClose(mid) && e.sure && !e.oneGone(mid) {
		if math.Abs(e.closest.sep(mid)) > holdApart && e.closest.span <= 8 {
			e.fade(mid) // is it a carrier that fades?
		}
		return e.reading(mid)
	}
	if e.held() > 0 && !spread {
		e.follow(mid)
	}
	if e.held() == 0 {
		e.begin(i, mid)
	} else if e.held() == 1 && !e.merged {
		if e.alone++; e.alone%5 == 0 || e.wantsFar() {
			e.lookFar(i, mid)
		}
	} else {
		e.alone = 0
		if e.held() == 2 && !e.merged && !spread {
			e.nearer(mid)
		}
	}
	e.identify(mid)
	switch {
	case e.local < 0 || e.merged || e.sm.slowly == 0 && e.held() == 1:
		e.keepSlow()
		e.spot(mid)
	case !spread:
		e.fade(mid)
	}
	return e.reading(mid)
}

// follow looks at the second around mid with the tones that are held.
func (e *twoTone) follow(mid float64) {
	for _, b := range e.bands {
		l := e.lens
		l.open(b, mid, 1, edge)
		if l.valid < 0.3 {
			e.miss(b)
			continue
		}
		var own [2]int
		n := 0
		for k := range e.tr {
			if t := &e.tr[k]; t.live && t.band == b {
				own[n] = k
				n++
				l.add(t.predict(mid)-b.centre, t.c)
			}
		}
		switch {
		case n == 2:
			e.followBoth(b, mid, own)
		case n == 1 && e.merged:
			e.followMerged(b, mid, own[0])
		case n == 1:
			e.followOne(b, mid, own[0])
		}
	}
	e.release()
}

// followBoth follows two tones in one band.
func (e *twoTone) followBoth(b *band, mid float64, own [2]int) {
	l := e.lens
	if math.Abs(l.lines[0].f-l.lines[1].f) >= holdApart && l.solve(b, true) &&
		math.Abs(l.lines[0].f-l.lines[1].f) >= holdApart {
		e.take(b, mid, own[0], 0)
		e.take(b, mid, own[1], 1)
		if e.tr[own[0]].whole && e.tr[own[1]].whole {
			return
		}
	}
	// Something jumped, left, or came too close: look afresh.
	old := [2]track{e.tr[own[0]], e.tr[own[1]]}
	want := [2]float64{old[0].predict(mid), old[1].predict(mid)}
	close := math.Min(math.Abs(want[0]-want[1]), math.Abs(old[0].f-old[1].f)) < holdApart+1
	if close && e.followTorn(b, mid, own, old, want) {
		return
	}
	l.lines = l.lines[:0]
	n := e.scan(b, 2)
	if n == 2 && !e.stranger(b, want) && e.followJump(b, mid, own, old, want) {
		return
	}
	e.tr[own[0]], e.tr[own[1]] = old[0], old[1]
	if close && n > 0 && !e.leftOne(b, old, want) {
		e.merge(mid, own)
		return
	}
	if n == 0 {
		e.miss(b)
		return
	}
	// One is left, if it lies where one was; otherwise nothing is.
	e.miss(b)
	for j, k := range own {
		for ln := range l.lines {
			if math.Abs(l.lines[ln].f+b.centre-want[j]) < 0.5 {
				e.take(b, mid, k, ln)
			}
		}
	}
}

// followTorn looks whether one of two near tones has left while the other
// stays: that is no meeting of the two. It reports whether it is so, or may be
// because one of them came or went within this second.
func (e *twoTone) followTorn(b *band, mid float64, own [2]int, old [2]track, want [2]float64) bool {
	l := e.lens
	if math.Abs(want[0]-want[1]) < 0.8*holdApart {
		return false
	}
	l.lines = l.lines[:0]
	for i := range 2 {
		l.add(want[i]-b.centre, old[i].c)
	}
	if !l.fit.run(&l.win, l.lines, 0, 1, -b.centre) {
		return false
	}
	var r [2]float64
	for i := range 2 {
		r[i] = cmplx.Abs(l.lines[i].a) / b.gain(l.lines[i].f) / old[i].amp
	}
	gone := 0
	if r[1] < r[0] {
		gone = 1
	}
	stays := 1 - gone
	if r[gone] > 0.75 || r[stays] < 0.6 {
		e.torn = 0
		return false
	}
	e.tr[own[0]], e.tr[own[1]] = old[0], old[1]
	if r[gone] > 0.15 { // it went, or faded, or they draw near: the next second tells
		if e.torn++; e.torn > 2 {
			e.torn = 0
			return false
		}
		e.tr[own[0]].whole, e.tr[own[1]].whole = false, false
		return true
	}
	e.torn = 0
	l.lines = append(l.lines[:0], l.lines[stays])
	if !l.solve(b, true) || math.Abs(l.lines[0].f+b.centre-want[stays]) > 0.3 {
		return false
	}
	e.miss(b)
	e.take(b, mid, own[stays], 0)
	return true
}

// followJump takes up two lines found afresh where both are there from end to
// end, and reports whether they are.
func (e *twoTone) followJump(b *band, mid float64, own [2]int, old [2]track, want [2]float64) bool {
	l := e.lens
	swap, sure := match(want, [2]float64{l.lines[0].f + b.centre, l.lines[1].f + b.centre})
	k0, k1 := own[0], own[1]
	for i := range 2 { // a tone that jumped is as loud as it was, or it is another
		o := i
		if swap {
			o = 1 - i
		}
		x := &l.lines[i]
		if r := cmplx.Abs(x.a) / b.gain(x.f) / old[o].amp; math.Abs(x.f+b.centre-want[o]) > 1 && (r < 0.3 || r > 3.3) {
			return false
		}
	}
	if swap {
		k0, k1 = k1, k0
	}
	e.take(b, mid, k0, 0)
	e.take(b, mid, k1, 1)
	if !e.tr[k0].whole || !e.tr[k1].whole {
		return false
	}
	e.jumped = true
	e.count.broken()
	if !sure {
		e.local = -1
	}
	return true
}

// match says how found tones belong to wanted ones: swap when found[0] is
// want[1]; sure when the answer is beyond doubt: one of the two stayed where
// it was, or both moved by the same amount.
func match(want, found [2]float64) (swap, sure bool) {
	straight := [2]float64{found[0] - want[0], found[1] - want[1]}
	crossed := [2]float64{found[1] - want[0], found[0] - want[1]}
	cost := func(d [2]float64) float64 {
		stay := min(math.Abs(d[0]), math.Abs(d[1]))
		return min(stay, math.Abs(d[0]-d[1]))
	}
	a, b := cost(straight), cost(crossed)
	if a > b {
		return true, b < 0.4 && a > 3*b+0.4
	}
	return false, a < 0.4 && b > 3*a+0.4
}

// merge holds both tones as one.
func (e *twoTone) merge(mid float64, own [2]int) {
	e.merged, e.candN, e.missed, e.met = true, 0, 0, mid
	e.count.broken()
	a, b := &e.tr[own[0]], &e.tr[own[1]]
	a.f, a.c, a.at = (a.f+b.f)/2, 0, mid
	a.live, a.tail, a.whole = true, true, false
	b.live = false
}

// followMerged waits for the tones to come apart again.
func (e *twoTone) followMerged(b *band, mid float64, k int) {
	l := e.lens
	l.lines = l.lines[:0]
	t := &e.tr[k]
	was := *t
	n := e.scan(b, 2)
	t.tail, t.whole, t.at = true, false, mid
	if n == 0 || math.Abs(l.lines[0].f+b.centre-was.f) > 6 {
		if e.missed++; e.missed >= 2 {
			t.tail = false
		}
		e.candN = 0
		return
	}
	e.missed = 0
	if n == 2 && math.Abs(l.lines[1].f-l.lines[0].f) > partReach {
		n = 1 // no tone leaves another by so much at once: it is part of its modulation, or a stranger
	}
	if n == 2 {
		e.take(b, mid, k, 0)
		e.sight(b, mid, k, 1)
		if !e.merged {
			return
		}
		t.tail, t.live = true, true
	} else {
		e.candN = 0
		t.f = l.lines[0].f + b.centre
	}
	t.c, t.at = 0, mid
}

// followOne follows the only tone held in a band and looks for another beside
// it.
func (e *twoTone) followOne(b *band, mid float64, k int) {
	l := e.lens
	t := &e.tr[k]
	was := *t
	fitted := l.solve(b, true)
	if fitted {
		e.take(b, mid, k, 0)
	}
	lost := !fitted || !t.whole
	if lost {
		l.lines = l.lines[:0]
	}
	need := 2
	if e.otherBand(b) {
		need = 1
	}
	n := 0
	if lost {
		n = e.scan(b, need)
	} else {
		n = e.scanNear(b, need, t.f)
	}
	if n == 0 || (n == 1 && !lost) {
		if n == 0 {
			*t = was
			t.whole, t.tail, t.seen = false, false, 0
		}
		e.candN = 0
		return
	}
	pick, other := 0, 1
	if lost {
		want := was.predict(mid)
		if n == 2 && math.Abs(l.lines[1].f+b.centre-want) < math.Abs(l.lines[0].f+b.centre-want) {
			pick, other = 1, 0
		}
		if f := l.lines[pick].f + b.centre; math.Abs(f-want) > 0.5 {
			// It moved: the same tone only if it is as loud as before.
			if a := cmplx.Abs(l.lines[pick].a); a < 0.5*was.amp || a > 2*was.amp {
				*t = was
				t.whole, t.tail, t.seen = false, false, 0
				return
			}
			e.jumped = true
			e.local = -1
			*t = track{}
		}
	}
	e.take(b, mid, k, pick)
	if n == 2 {
		e.sight(b, mid, k, other)
	}
}

// otherBand reports whether the second tone lives, or is to live, elsewhere.
func (e *twoTone) otherBand(b *band) bool { return len(e.bands) > 1 }

// sight counts how often a second tone beside track k was seen in a row, and
// takes it up when that is enough.
func (e *twoTone) sight(b *band, mid float64, k, ln int) {
	f := e.lens.lines[ln].f + b.centre
	if e.misplaced(f, mid, k) {
		e.candN = 0
		return
	}
	if e.candN > 0 && math.Abs(f-e.cand) > 2 {
		e.candN = 0
	}
	e.cand = f
	e.candN++
	o := 1 - k
	was := e.tr[o]
	e.tr[o] = track{live: true, band: b}
	if mid-was.at < 10 && math.Abs(f-was.f) < 1 { // it is back: what was seen of it still counts
		e.tr[o].ev, e.tr[o].jit = was.ev, was.jit
	}
	e.take(b, mid, o, ln)
	t := &e.tr[o]
	enough := e.candN >= 2 || (!e.merged && t.cn0() > loud)
	if !e.isLine(ln) || !t.whole || !e.tr[k].whole || !enough {
		e.tr[o] = was
		e.tr[o].live = false
		return
	}
	e.candN = 0
	if e.merged {
		e.unmerge(mid, k)
	}
}

// unmerge tells which tone is which after they were merged: the carrier is the
// anchor, for it moves slowly. Where that does not settle it, nobody knows.
func (e *twoTone) unmerge(mid float64, k int) {
	e.merged = false
	e.jumped = true
	a, b := &e.tr[0], &e.tr[1]
	e.local = -1
	e.memory.crossed = true // the tones may have passed through each other
	// What either track was before is another tone's.
	a.ev, b.ev, a.jit, b.jit = evidence{}, evidence{}, jitter{}, jitter{}
	if e.memory.known {
		e.belief.begin(e.trusted, mid)
	}
}

// take moves track k to line ln of the lens.
func (e *twoTone) take(b *band, mid float64, k, ln int) { e.lens.take(&e.tr[k], b, mid, ln) }

// release lets go of tones that are no longer there.
func (e *twoTone) release() {
	for k := range e.tr {
		t := &e.tr[k]
		if t.live && !t.tail {
			t.live, t.seen = false, 0
			e.count.broken()
		}
	}
	if e.held() == 0 {
		e.bands = e.bands[:0]
		e.merged = false
		e.candN = 0
	}
}

// miss says that band b had too little sound.
func (e *twoTone) miss(b *band) {
	for k := range e.tr {
		if t := &e.tr[k]; t.band == b {
			t.whole, t.tail = false, false
		}
	}
}
