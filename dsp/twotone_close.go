package dsp

import (
	"math"
	"math/cmplx"
)

const sureEnough = 6.0 // log-odds that settle which tone is which

// closeBy reports whether the two known tones are too close for one second.
func (e *twoTone) closeBy(mid float64) bool {
	if !e.memory.known || math.Abs(e.cfg.SetOff()) >= 10 || e.held() == 0 {
		return false
	}
	if e.merged {
		return true
	}
	a, b := &e.tr[0], &e.tr[1]
	return e.local >= 0 && a.live && b.live && a.band == b.band && math.Abs(a.predict(mid)-b.predict(mid)) < closeTones
}

// followClose fits both tones over as long a span as says most about them. It
// returns false when no fit stands up.
func (e *twoTone) followClose(mid float64) bool {
	t := &e.tr[0]
	if !t.live {
		t = &e.tr[1]
	}
	b := t.band
	centre := t.f
	if e.held() == 2 {
		centre = (e.tr[0].predict(mid) + e.tr[1].predict(mid)) / 2
	}
	e.slow.aim(centre)
	e.slow.advance(b)
	g := b.gain(centre - b.centre)
	x := expect{end: mid + 0.5, anchor: &e.anchor, leaning: e.leaning, centre: centre, ampC: e.memory.ampC * g, ampL: e.memory.ampL * g, floor: t.noise * g * g, since: e.met}
	if sm := e.sm; sm.sigma > spreadLeast && !(sm.steady > 0.97) {
		steady := sm.steady
		if math.IsNaN(steady) {
			steady = 0.5
		}
		x.smear = sm.sigma / math.Sqrt(1-steady)
		x.haze = (1 - steady) * x.ampC * x.ampC / (math.Sqrt(2*math.Pi) * x.smear)
	}
	if !e.merged { // they have names
		c, l := &e.tr[1-e.local], &e.tr[e.local]
		if e.pair.best < 0 { // until now they were followed second by second
			e.pair.seed(c, l)
		} else if y := &e.pair.sol[e.pair.best]; math.Abs(y.carrier(c.at)-l.f) < math.Abs(y.carrier(c.at)-c.f) {
			e.pair.swap()
		}
		e.sure = true
	}
	y, fresh := e.pair.solve(&x)
	if y == nil {
		e.sure = false
		return false
	}
	if fresh {
		e.sure = math.Abs(e.pair.lean) >= sureEnough && y.span >= 8
		e.belief.begin(e.trusted, mid)
	}
	if e.belief.on {
		e.sure = e.weighClose(y, mid) || fresh && e.sure
		e.belief.on = !e.sure || mid-e.belief.since < beliefSeconds
	}
	if !e.sure && (fresh && y.span >= 8 || !e.belief.on) {
		e.pair.forget() // a longer span may tell
	}
	if e.local == 0 { // the fit's first line goes by track 0
		e.tr[0], e.tr[1] = e.tr[1], e.tr[0]
	}
	e.local = 1
	e.takeClose(y, b, mid, g)
	return true
}

// takeClose moves both tracks to the fit.
func (e *twoTone) takeClose(y *fitted, b *band, mid, g float64) {
	e.closest = y
	if !e.sure {
		return
	}
	if e.merged {
		e.count.broken()
		e.jumped = true
	}
	e.merged = false
	c, l := &e.tr[1-e.local], &e.tr[e.local]
	for _, t := range []*track{c, l} {
		if !t.live {
			noise, ev := t.noise, t.ev
			*t = track{noise: noise, ev: ev}
			if !(noise > 0) {
				t.noise = y.noise / (g * g)
			}
		}
		t.live, t.band, t.at, t.whole, t.tail, t.c = true, b, mid, true, true, y.c
		t.seen++
	}
	c.f, l.f = y.carrier(mid), y.local(mid)
	l.c += y.cl
	c.amp, l.amp = cmplx.Abs(y.a)/g, cmplx.Abs(y.b)/g
	c.uf, l.uf = y.uc, y.ul
	at := b.oscillator(y.mid) + frac1((e.slow.centre-b.centre)*y.mid) + frac1((y.centre-e.slow.centre)*y.mid)
	d := mid - y.mid
	c.phase = at + cphase(y.a) + (y.centre+y.fc)*d + y.c*d*d/2
	l.phase = at + cphase(y.b) + (y.centre+y.fl)*d + (y.c+y.cl)*d*d/2
	if _, u := e.anchor.when(y.mid); y.own < u || !e.anchor.known {
		e.anchor.set(y.mid, y.carrier(y.mid), math.Hypot(y.own, e.anchor.scatter/math.Sqrt(y.span)), y.c, max(y.ownC, 1e-6), y.span)
	}
	m := &e.memory
	m.at, m.carrier, m.local = mid, c.f, l.f
	m.seconds++
	e.trust()
}

// leaning returns the log-odds that tone 0 is the carrier and tone 1 the local
// and not the other way round: by where the carrier was headed at time at, and
// by the levels. uf is the uncertainty of the tones themselves, level that of
// the ratio of their amplitudes, span what they rest on.
func (e *twoTone) leaning(f, amp [2]float64, at, span, uf, level float64) float64 {
	sum := 0.0
	if e.anchor.known {
		want, u := e.anchor.when(at)
		u = math.Sqrt(u*u + uf*uf + e.anchor.scatter*e.anchor.scatter/span + 1e-6)
		d0, d1 := (f[0]-want)/u, (f[1]-want)/u
		if min(math.Abs(d0), math.Abs(d1)) < 6 {
			sum += max(-20, min(20, (d1*d1-d0*d0)/2))
		}
	}
	m := &e.memory
	if m.known {
		was := 20 * math.Log10(m.ampC/m.ampL)
		is := 20 * math.Log10(amp[0]/amp[1])
		v, most := 4+m.evC.varies+75*level*level, 4.0
		if e.sm.sigma > spreadLeast {
			most = 1 // the level of a carrier that fades says little
		}
		sum += max(-most, min(most, ((-is-was)*(-is-was)-(is-was)*(is-was))/(2*v)))
	}
	return sum
}

// sayClose puts the fit's numbers into the reading.
func (e *twoTone) sayClose(r *Reading, mid, scale float64) {
	y := e.closest
	r.Span = y.span
	s := e.cfg.sign()
	d := y.sep(mid)
	if y.cl != 0 && math.Abs(d) < max(4*y.u, 0.6*math.Abs(y.cl)) {
		r.State, r.Span = Merged, math.NaN()
		r.Why = "the local passes through zero beat"
		return
	}
	r.BeatAbs, r.BeatU = math.Abs(d)*scale, y.u*scale
	if !e.sure {
		r.State = Unsure
		r.Why = "two tones close together, not known on which side the local is"
		return
	}
	r.State = Apart
	c, l := &e.tr[1-e.local], &e.tr[e.local]
	e.sayTone(c, &r.CarrierTone, &r.CarrierDBFS, &r.CarrierCN0, scale)
	e.sayTone(l, &r.LocalTone, &r.LocalDBFS, &r.LocalCN0, scale)
	r.Beat = s * d * scale
	r.Error = r.Beat - e.cfg.SetOff()
	r.Offset = r.Error / e.cfg.Local
	r.OffsetU = r.BeatU / e.cfg.Local
	r.Phase = e.count.next(mid, s*y.beatTurns(mid), s*d, y.u)
	r.PhaseRun = e.count.run
	if !e.cfg.Wired {
		if _, proven := e.memory.evC.carrierLike(&e.memory.evL); !proven {
			r.flag(Unproven)
		}
	}
}
