package dsp

import "math"

// The dial: what comes in through the aerial socket moves by as much as the dial.
// Hum stays where it is, and a birdie of the receiver's oscillators moves by
// another multiple, or the other way.
const (
	dialLeast = 4.0 // Hz: less is not told from drift and fading
	dialStays = 0.5 // Hz within which a tone has not moved
	dialRest  = 3   // seconds in a row after which the tones rest again
)

// dial is what the move-dial step keeps.
type dial struct {
	last   [2]float64 // where the tones were a second ago, in order of frequency
	begun  bool       // something has moved
	unlike int        // seconds in a row at rest that were neither one nor the other
	hidden int        // seconds in a row in which the bench had lost the local in the smear
	alone  bool       // only one tone was heard last
}

func (s *step) watchDial(e *twoTone, mid float64) {
	d := &s.dial
	if d.hidden++; !e.hidden {
		d.hidden = 0
	}
	if s.stage != Steadying && d.hidden >= 2 { // it looks where they were before
		e.afresh()
		d.hidden = 0
	}
	now, amp, ok := e.bothTones(mid)
	d.alone = e.held() == 1
	switch {
	case !ok:
		s.n = 0
		s.startMoving(mid)
	case s.stage == Steadying:
		s.steadyDial(mid, now, amp)
	default:
		s.restDial(e, mid, now)
	}
	if ok {
		d.last = now
	}
	if s.over() || mid <= s.until {
		return
	}
	switch {
	case s.stage == Steadying:
		s.end(Failed, "the two tones did not stand for %d s on end: begin again when they do", steadyFor)
	case d.alone:
		s.end(Failed, "only one tone is heard since the dial was moved: put it back, and begin again with a smaller move")
	case !d.begun:
		s.end(Failed, "no tone moved within %.0f s: begin again", stepPatience)
	case ok:
		s.end(Failed, "moved by less than %g Hz, or by as much as the tones are apart, the dial shows nothing: begin again with another move", dialLeast)
	default:
		s.end(Failed, "the tones were lost when the dial was moved: put it back, and begin again with a smaller move")
	}
}

// bothTones returns the tones that are held from end to end of the second around
// mid, in order of frequency.
func (e *twoTone) bothTones(mid float64) (f, amp [2]float64, ok bool) {
	a, b := &e.tr[0], &e.tr[1]
	if e.held() < 2 || e.merged || e.hidden || !a.whole || !b.whole || a.at != mid || b.at != mid {
		return f, amp, false
	}
	if a.f > b.f {
		a, b = b, a
	}
	return [2]float64{a.f, b.f}, [2]float64{a.amp, b.amp}, true
}

func (s *step) startMoving(mid float64) {
	if s.stage == Waiting {
		s.dial.begun = true
		s.next(Away, mid, stepPatience, "leave the dial where it is now")
	}
}

func (s *step) steadyDial(mid float64, now, amp [2]float64) {
	if s.n > 0 && !s.near(now, s.dial.last) {
		s.n = 0
	}
	s.n++
	for i := range s.tones {
		s.tones[i].f, s.tones[i].loud = now[i], amp[i]
	}
	if s.n >= steadyFor {
		s.next(Waiting, mid, stepPatience, "move the receiver's dial a little, by 5 to 50 Hz, and leave it there")
	}
}

// near reports whether the tones are where they were a second ago.
func (s *step) near(a, b [2]float64) bool {
	by := 0.3 + 2*s.wire.spread
	return math.Abs(a[0]-b[0]) < by && math.Abs(a[1]-b[1]) < by
}

// restDial looks at two tones that are held while a move is waited for.
func (s *step) restDial(e *twoTone, mid float64, now [2]float64) {
	was := [2]float64{s.tones[0].f, s.tones[1].f}
	stays := dialStays + 2*s.wire.spread
	if math.Abs(now[0]-was[0]) < stays && math.Abs(now[1]-was[1]) < stays {
		// Where they were, but for the receiver's drift.
		for i := range s.tones {
			s.tones[i].f += max(-0.1, min(0.1, now[i]-was[i]))
		}
		s.n = 0
		return
	}
	s.startMoving(mid)
	if s.n > 0 && !s.near(now, s.dial.last) {
		s.n, s.dial.unlike = 0, 0
	}
	if s.n++; s.n < dialRest {
		return
	}
	s.judgeDial(e, was, now, stays)
}

// judgeDial says what the move shows, if it does.
func (s *step) judgeDial(e *twoTone, was, now [2]float64, stays float64) {
	by := (now[0] - was[0] + now[1] - was[1]) / 2
	alike := math.Abs((now[1]-now[0])-(was[1]-was[0])) < stays && math.Abs(by) > dialLeast
	stayed, at := -1, -1 // which tone stayed, and which of the present ones it is
	for i := range was {
		for k := range now {
			if math.Abs(now[k]-was[i]) < stays && math.Abs(now[1-k]-was[1-i]) > dialLeast {
				stayed, at = i, k
			}
		}
	}
	switch {
	case alike && stayed >= 0:
		s.text = "moved by as much as the tones are apart: move it a little further, by another amount"
	case alike:
		s.movedAlike(e, by)
	case stayed >= 0:
		s.oneStayed(e, stayed, at, now)
	case math.Abs(now[0]-was[0]) < dialLeast && math.Abs(now[1]-was[1]) < dialLeast:
		s.text = "that was not enough: move the dial a little further"
	default:
		if s.dial.unlike++; s.dial.unlike >= 3 { // not a turn of the knob that was just under way
			s.movedUnlike(e, was, now)
		}
	}
}

func (s *step) movedAlike(e *twoTone, by float64) {
	if e.local < 0 && s.local >= 0 { // lost on the way, but known again
		e.assign(e.ordered(s.local))
	}
	e.slow.forget() // what was heard before lies elsewhere
	t := &e.word
	t.moved, t.astray, t.doubt = true, false, ""
	s.end(Settled, "both tones moved by %+.1f Hz with the dial: both come in through the aerial socket", by)
}

// ordered returns the index of the track of the lower (0) or higher (1) tone.
func (e *twoTone) ordered(i int) int {
	if e.tr[0].f > e.tr[1].f {
		return 1 - i
	}
	return i
}

// oneStayed lets go of a tone that did not move with the dial, for good.
func (s *step) oneStayed(e *twoTone, stayed, at int, now [2]float64) {
	f := now[at]
	k := e.ordered(at)
	local := s.local >= 0 && s.local != stayed
	word := e.word.local
	e.word.lost()
	e.word.refuse(f)
	e.tr[k].live, e.tr[k].whole, e.tr[k].tail = false, false, false
	e.count.broken()
	e.unlearn()
	e.memory, e.local = pairMemory{}, -1
	if local {
		e.local, e.word.local = 1-k, word
	}
	s.end(Settled, "the tone at %.1f Hz stayed where it was: it is hum or a birdie, not on the air, and is refused", f*(1+e.cfg.SampleRateError))
}

func (s *step) movedUnlike(e *twoTone, was, now [2]float64) {
	e.word.moved = false
	e.word.doubt = "the tones moved by unlike amounts with the dial: one of them is a birdie of the receiver"
	s.end(Settled, "the tones moved by %+.1f Hz and %+.1f Hz: one of them is a birdie of the receiver, and no beat is given; pull the wire to see which is the local's",
		now[0]-was[0], now[1]-was[1])
}

// afresh looks for both tones anew, as after a start, but knows the pair again.
func (e *twoTone) afresh() {
	e.hidden, e.merged, e.lostLine, e.dim, e.local = false, false, 0, 0, -1
	e.count.broken()
	e.sm.forget()
	for k := range e.tr {
		e.tr[k].live = false
	}
	e.release()
}
