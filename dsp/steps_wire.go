package dsp

import "math"

// The wire: a tone that goes when the coupling wire is pulled and comes back with
// it is the local's. A carrier can go as well, in a fade; but a deep fade is
// short and does not come when it is called. Of Rayleigh fading of rms width
// sigma, a fade of 18 dB lasts 0.036/sigma in the mean (S. O. Rice, Bell Syst.
// Tech. J. 1948: (exp(r^2)-1)/(2 sqrt(pi) sigma r), r = 0.126), and few last
// five times that. So a tone that is not known to stand still has to go twice,
// or for very long.
const (
	goneBy      = 18.0 // dB below what it was: it has gone
	weakerBy    = 6.0  // dB within which a tone is still the same
	fadeBy      = 15.0 // dB that the other one may fade meanwhile, if it is not known to stand still
	pullAtLeast = 3.0  // s
)

// wire is what the pull-wire step keeps.
type wire struct {
	spread float64 // of the carrier, Hz; 0: not known
	gone   int     // which tone went, -1: none yet
	away   float64 // for how many seconds it has been away
	longed bool    // one absence was so long that no second one is needed
	pulls  int
	other  int // seconds in a row in which another tone was in its place
}

// needs returns for how long a tone has to be away, s, and how often.
func (s *step) needs(k int) (seconds float64, pulls int) {
	switch {
	case s.tones[k].still:
		return pullAtLeast, 1
	case s.wire.spread == 0:
		return 4, 2
	}
	return min(10, max(pullAtLeast, 0.2/s.wire.spread)), 2
}

func (s *step) gone(k int) bool {
	t := &s.tones[k]
	return !t.there || t.drop() > goneBy
}

// present reports whether tone k is what it was, or fades a little.
func (s *step) present(k int) bool {
	t := &s.tones[k]
	return t.there && (t.drop() < weakerBy || !t.still && t.drop() < fadeBy)
}

func (s *step) watchWire(e *twoTone, mid float64) {
	if !s.listen(e, mid) {
		return
	}
	if s.stage == Steadying {
		s.steadyWire(mid)
		return
	}
	if s.gone(0) && s.gone(1) {
		least := pullAtLeast
		if !s.tones[0].still || !s.tones[1].still { // one pulled, one in a fade
			least = 6
		}
		if s.both++; float64(s.both) >= least {
			s.end(Failed, "both tones went: that is the aerial or the receiver, not the wire; see that both are heard and begin again")
		}
		return
	}
	s.both = 0
	switch s.stage {
	case Waiting:
		s.waitForPull(mid)
	case Away:
		s.waitAway(mid)
	case Back:
		s.waitForReturn(e, mid)
	}
}

func (s *step) steadyWire(mid float64) {
	a, b := &s.tones[0], &s.tones[1]
	if !a.there || !b.there {
		s.n, a.base, b.base = 0, 0, 0
	} else {
		s.n++
		for i := range s.tones {
			t := &s.tones[i]
			t.base += (t.power - t.base) / float64(s.n)
		}
	}
	switch {
	case s.n >= steadyFor && 10*math.Log10(min(a.base, b.base)) < least1s:
		weak := a
		if b.base < a.base {
			weak = b
		}
		s.end(Failed, "the tone at %.1f Hz is too weak to be seen to go: %.0f dB-Hz, where %.0f are needed", weak.f, 10*math.Log10(weak.base), least1s)
	case s.n >= steadyFor:
		s.next(Waiting, mid, stepPatience, "pull the coupling wire now, and leave it out until told otherwise")
	case mid > s.until:
		s.end(Failed, "the two tones did not stand for %d s on end: begin again when they do", steadyFor)
	}
}

func (s *step) waitForPull(mid float64) {
	for k := range s.tones {
		if s.gone(k) && s.present(1-k) {
			s.wire.away = 0
			seconds, _ := s.needs(k)
			if s.wire.gone != k { // now the other one: what went before was a fade, or this is
				s.wire.pulls, s.wire.longed = 0, false
			}
			s.wire.gone = k
			s.next(Away, mid, seconds, "the tone at %.1f Hz has gone: leave the wire out", s.tones[k].f)
			s.waitAway(mid)
			return
		}
	}
	if s.present(0) && s.present(1) { // levels wander: what counts is the latest
		for i := range s.tones {
			s.tones[i].base += 0.1 * (s.tones[i].power - s.tones[i].base)
		}
	}
	if mid > s.until {
		s.end(Failed, "no tone went within %.0f s: is this the local's wire, and is it pulled far enough? Begin again", stepPatience)
	}
}

func (s *step) waitAway(mid float64) {
	w := &s.wire
	k := w.gone
	seconds, pulls := s.needs(k)
	switch {
	case s.gone(k):
		s.n = 0
		if s.present(1 - k) {
			w.away++
		}
	default:
		if s.n++; s.n >= 2 {
			s.next(Waiting, mid, stepPatience, "the tone at %.1f Hz came back too soon: pull the wire again and leave it out", s.tones[k].f)
			return
		}
	}
	s.left = max(0, seconds-w.away)
	if w.away >= seconds {
		w.longed = pulls > 1 && w.spread > 0 && w.away >= 6/w.spread
		s.next(Back, mid, stepPatience, "put the wire back as it was")
	} else if mid > s.until+stepPatience {
		s.end(Failed, "the other tone did not stay what it was while the wire was out: begin again")
	}
}

func (s *step) waitForReturn(e *twoTone, mid float64) {
	w := &s.wire
	k := w.gone
	t := &s.tones[k]
	if s.gone(k) {
		s.n = 0
		w.away++
		w.longed = w.longed || w.spread > 0 && w.away >= 6/w.spread
		s.strange(e)
	} else {
		w.other = 0
		off := t.drop()
		switch {
		case math.Abs(off) <= weakerBy:
			s.n++
		default:
			s.n = 0
			s.text = "it is back, but not as loud as before: lay the wire as it was"
		}
		if s.n >= 3 && s.present(1-k) {
			s.returned(e, mid)
			return
		}
	}
	switch {
	case s.over():
	case mid > s.until && s.gone(k):
		s.end(Failed, "the tone at %.1f Hz did not come back within %.0f s: begin again when both are heard", t.f, stepPatience)
	case mid > s.until:
		s.end(Failed, "the tone at %.1f Hz came back %+.0f dB from what it was: begin again with the wire as it shall stay", t.f, -t.drop())
	}
}

// strange ends the step where something else than what went has come.
func (s *step) strange(e *twoTone) {
	w := &s.wire
	want, stays := s.tones[w.gone].f, s.tones[1-w.gone].f
	new := math.NaN()
	if e.held() == 2 && !e.merged {
		for i := range e.tr {
			t, o := &e.tr[i], &e.tr[1-i]
			if t.whole && o.whole && math.Abs(o.f-stays) < 0.8 && math.Abs(t.f-want) > 0.7 && math.Abs(t.f-stays) > holdApart {
				new = t.f
			}
		}
	}
	if math.IsNaN(new) {
		w.other = 0
		return
	}
	if w.other++; w.other >= 3 {
		s.end(Failed, "a tone came at %.1f Hz, not at %.1f Hz where one went: that shows nothing; begin again with the trimmer left alone", new, want)
	}
}

// returned counts a pull, and settles which tone is the local's when they are
// enough.
func (s *step) returned(e *twoTone, mid float64) {
	w := &s.wire
	w.pulls++
	if _, pulls := s.needs(w.gone); w.pulls < pulls && !w.longed {
		s.next(Waiting, mid, stepPatience, "once more, as this tone may fade: pull the wire again, and leave it out until told otherwise")
		return
	}
	l, c := e.trackAt(s.tones[w.gone].f), e.trackAt(s.tones[1-w.gone].f)
	if e.merged || e.hidden || l < 0 || c < 0 || l == c {
		if !e.seat(&s.tones, mid) {
			return // the bench will find them; a little patience
		}
		l = w.gone
	}
	e.asked = true
	e.assign(l)
	e.slow.forget() // a line that was away for a while must not be looked for there
	e.word.local = "it vanished when the wire was pulled"
	s.end(Settled, "the tone at %.1f Hz is the local's: it went with the wire and came back with it", e.tr[l].f*(1+e.cfg.SampleRateError))
}
