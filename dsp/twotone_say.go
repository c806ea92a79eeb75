package dsp

import (
	"fmt"
	"math"
)

// identify settles which tone is the local's, where that can be known: by the
// set-off, by what is remembered of the pair, by the hint.
func (e *twoTone) identify(mid float64) {
	e.watch()
	if e.held() == 2 && !e.merged {
		a, b := &e.tr[0], &e.tr[1]
		if !a.whole || !b.whole {
			return
		}
		switch {
		case e.belief.on:
			unknown := e.local < 0
			if e.weigh(mid); unknown && e.local >= 0 {
				e.word.local = ""
			}
		case e.local < 0:
			e.local = e.recognise(mid)
		}
		defer e.trust()
		if e.local >= 0 && e.isSpread() {
			e.remember(mid)
		} else if e.local >= 0 && math.Hypot(a.uf, b.uf) < 0.1 {
			c, l := &e.tr[1-e.local], &e.tr[e.local]
			if m := &e.memory; m.known && math.Abs((l.f-c.f)-(m.local-m.carrier)) > hintReach {
				e.memory.seconds, e.smeared = 0, 0
				e.memory.evC, e.memory.evL = evidence{}, evidence{}
				e.sm.forget() // another tone than the one that was the carrier
			}
			// A tone that came back goes on with the evidence it had.
			for _, x := range []struct {
				t   *track
				was evidence
			}{{c, e.memory.evC}, {l, e.memory.evL}} {
				if x.t.ev.seconds < x.was.seconds {
					x.t.ev = x.was
				}
			}
			e.anchor.add(mid, c.f, c.uf)
			e.memory = pairMemory{known: true, at: mid, carrier: c.f, local: l.f, ampC: c.amp, ampL: l.amp,
				evC: c.ev, evL: l.ev, seconds: e.memory.seconds + 1}
		}
		return
	}
	if e.held() == 1 && !e.merged && e.memory.known && e.local >= 0 {
		// The one that is held carries the memory along: a retuned receiver
		// moves both.
		for k := range e.tr {
			if t := &e.tr[k]; t.live && t.whole {
				m := &e.memory
				was := m.carrier
				if k == e.local {
					was = m.local
				}
				m.carrier += t.f - was
				m.local += t.f - was
			}
		}
	}
	if e.held() == 0 {
		e.local = -1
	}
}

// watch counts for how long the carrier has been smeared as Doppler does it:
// noise through a narrow filter looks like one that is smeared more widely than
// ordinary paths do, and a weak steady line is narrow only by what of it stands
// in one line.
func (e *twoTone) watch() {
	if e.sm.sigma >= 2*spreadLeast && e.sm.sigma < widestPath && e.sm.steady < 0.9 {
		e.smeared++
	} else {
		e.smeared = 0
	}
}

// whichIsLocal returns the index of the local's track, or -1.
func (e *twoTone) whichIsLocal(mid float64) int {
	f := [2]float64{e.tr[0].f, e.tr[1].f}
	diff := f[1] - f[0]
	if d0 := e.cfg.sign() * e.cfg.SetOff(); math.Abs(d0) >= 10 {
		switch {
		case math.Abs(diff-d0) < 0.5*math.Abs(d0):
			return 1
		case math.Abs(-diff-d0) < 0.5*math.Abs(d0):
			return 0
		}
		return -1
	}
	if k := e.byJitter(); k >= 0 {
		e.asked = true
		return k
	}
	if m := &e.memory; m.known && !m.crossed {
		return e.byMemory(mid, diff)
	}
	if hint := e.cfg.LocalTone; hint != 0 && !e.asked {
		e.asked = true // it speaks of the start: later the tones have moved
		d := [2]float64{math.Abs(f[0] - hint), math.Abs(f[1] - hint)}
		switch {
		case d[0] < 0.75*d[1]:
			return 0
		case d[1] < 0.75*d[0]:
			return 1
		}
	}
	return -1
}

// byMemory recognises the pair by its difference, which a retuned receiver does
// not change, in sign and size, and by its levels.
func (e *twoTone) byMemory(mid, diff float64) int {
	m := &e.memory
	was := m.local - m.carrier
	slack := 0.5 + 0.01*math.Min(mid-m.at, 300)
	fits := func(l int) bool {
		d := diff
		if l == 0 {
			d = -diff
		}
		return math.Abs(d-was) < slack && math.Abs(20*math.Log10(e.tr[l].amp/m.ampL)) < 10
	}
	switch a, b := fits(0), fits(1); {
	case a && !b:
		return 0
	case b && !a:
		return 1
	}
	return -1
}

// reading says what the last second said.
func (e *twoTone) reading(mid float64) Reading {
	r := Blank(mid, Searching)
	r.PhaseRun = e.count.run
	if e.jumped {
		r.flag(Retuned)
	}
	scale := 1 + e.cfg.SampleRateError
	switch held := e.held(); {
	case e.closest != nil:
		e.sayClose(&r, mid, scale)
	case held == 0:
		r.Why = "no tone stands out of the noise"
	case e.merged:
		r.State = Merged
		r.Why = "the tones are closer than the sound at rest so far can tell apart"
		if e.hidden {
			r.Why = e.hiddenWhy()
		}
		e.sayNear(&r, mid, scale)
	case held == 1:
		e.sayLone(&r, scale)
	default:
		e.sayBoth(&r, mid, scale)
	}
	e.mark(&r)
	e.step.second(e, mid)
	return r
}

func (e *twoTone) sayLone(r *Reading, scale float64) {
	r.State = Lone
	for k := range e.tr {
		t := &e.tr[k]
		if !t.live {
			continue
		}
		switch {
		case e.local == k:
			e.sayTone(t, &r.LocalTone, &r.LocalDBFS, &r.LocalCN0, scale)
			r.Why = fmt.Sprintf("only the local's tone, at %.2f Hz", t.f*scale)
		case e.local == 1-k:
			e.sayTone(t, &r.CarrierTone, &r.CarrierDBFS, &r.CarrierCN0, scale)
			r.Why = fmt.Sprintf("only the carrier's tone, at %.2f Hz", t.f*scale)
		default:
			r.Why = fmt.Sprintf("one tone, at %.2f Hz, not known whose", t.f*scale)
		}
	}
}

func (e *twoTone) sayTone(t *track, f, level, cn0 *float64, scale float64) {
	*f = t.f * scale
	*level = 20 * math.Log10(t.amp)
	*cn0 = 10 * math.Log10(t.cn0())
}

func (e *twoTone) sayBoth(r *Reading, mid, scale float64) {
	a, b := &e.tr[0], &e.tr[1]
	whole := a.whole && b.whole && a.at == mid && b.at == mid
	u := math.Hypot(a.uf, b.uf) * scale
	r.Why = "two tones, not known which is the local's"
	r.State = Unsure
	if e.local >= 0 {
		r.State = Apart
		a, b = &e.tr[1-e.local], &e.tr[e.local]
		e.sayTone(a, &r.CarrierTone, &r.CarrierDBFS, &r.CarrierCN0, scale)
		e.sayTone(b, &r.LocalTone, &r.LocalDBFS, &r.LocalCN0, scale)
		r.Why = ""
		why, proven := a.ev.carrierLike(&b.ev)
		if !proven && e.smeared >= smearedTime {
			why, proven = "its tone is smeared by Doppler, the other stands still", true
		}
		if proven {
			r.Why = "the carrier: " + why
		} else if !e.cfg.Wired {
			r.flag(Unproven)
		}
		if !math.IsNaN(e.sm.sigma) {
			r.SpreadHz = e.sm.sigma
			if e.sm.sigma >= spreadLeast {
				r.flag(Spread)
			}
		}
		if a.ev.faded && !e.cfg.Wired {
			r.flag(Faded)
		}
	} else if !e.cfg.Wired {
		r.flag(Unproven)
	}
	if !whole {
		r.Why = "a tone was not there, or jumped, within this second"
		return
	}
	r.BeatAbs, r.BeatU, r.Span = math.Abs(b.f-a.f)*scale, u, 1
	if e.local < 0 {
		return
	}
	s := e.cfg.sign()
	if sm := e.sm; sm.sigma >= spreadLeast && !math.IsNaN(sm.beat) {
		// Of a carrier that fades within the second, the mean weighted by power.
		r.BeatU, r.BeatAbs = sm.u*scale, math.Abs(sm.beat)*scale
		u = r.BeatU
		r.Beat = -s * sm.beat * scale
	} else {
		r.Beat = s * (b.f - a.f) * scale
	}
	r.Error = r.Beat - e.cfg.SetOff()
	r.Offset = r.Error / e.cfg.Local
	r.OffsetU = u / e.cfg.Local
	r.Phase = e.count.next(mid, s*(b.phase-a.phase), s*(b.f-a.f), u)
	r.PhaseRun = e.count.run
}

// phaseCount keeps the beat's phase continuous from second to second.
type phaseCount struct {
	run   int
	held  bool
	phase float64 // cycles
	beat  float64 // cycles per nominal second
	at    float64
}

// broken says that continuity is lost.
func (c *phaseCount) broken() {
	if c.held {
		c.held = false
		c.run++
	}
}

// next takes the phase modulo 1 and the beat at time at and returns the phase
// in cycles. Over a pause of some seconds the count goes on only where the
// beats on both sides leave no doubt of the number of cycles between.
func (c *phaseCount) next(at, turns, beat, u float64) float64 {
	turns -= math.Floor(turns)
	if c.held {
		dt := at - c.at
		doubt := (math.Abs(beat-c.beat)/2 + 3*u) * dt
		if dt > 1.5 && doubt > 0.25 || dt > 10 {
			c.broken()
		} else {
			want := c.phase + (beat+c.beat)/2*dt
			p := turns + math.Round(want-turns)
			if math.Abs(p-want) > 0.35 {
				c.broken()
			} else {
				c.phase, c.beat, c.at = p, beat, at
				return p
			}
		}
	}
	c.held, c.phase, c.beat, c.at = true, turns, beat, at
	return turns
}

// glimpse fits both tones over the latest sound, long enough for them to be
// told apart.
func (e *twoTone) glimpse(from, upto float64, g *Glimpse) {
	if e.held() < 2 || e.merged || len(e.bands) != 1 {
		if e.merged {
			g.State = Merged
		} else if e.held() == 1 {
			g.State = Lone
		}
		return
	}
	a, b := &e.tr[0], &e.tr[1]
	g.State = Unsure
	if e.local >= 0 {
		g.State = Apart
		a, b = &e.tr[1-e.local], &e.tr[e.local]
	}
	if e.word.doubt != "" {
		return
	}
	span := max(upto-from, min(1, 2.5/math.Abs(a.f-b.f)))
	mid := upto - span/2
	bd := e.bands[0]
	l := e.gl
	l.open(bd, mid, span, 0)
	l.add(a.predict(mid)-bd.centre, 0)
	l.add(b.predict(mid)-bd.centre, 0)
	if l.valid < 0.95 || !l.solve(bd, false) {
		return
	}
	for i, t := range []*track{a, b} {
		x := &l.lines[i]
		if r := math.Hypot(real(x.a), imag(x.a)) / bd.gain(x.f) / t.amp; r < 0.3 || r > 3 {
			return
		}
	}
	scale := (1 + e.cfg.SampleRateError) * e.cfg.sign()
	beat := (l.lines[1].f - l.lines[0].f) * scale
	g.T, g.BeatAbs = mid, math.Abs(beat)
	g.BeatU = l.diffU * math.Sqrt(max(a.noise, b.noise))
	if e.local >= 0 {
		g.Beat = beat
		ph := e.cfg.sign() * (cphase(l.lines[1].a) - cphase(l.lines[0].a) + (l.lines[1].f-l.lines[0].f)*(upto-mid))
		g.Turn = ph - math.Floor(ph)
	}
}
