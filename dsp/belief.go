package dsp

import (
	"math"
	"math/cmplx"
)

const (
	beliefSeconds = 40   // for how long after the tones parted the sum is kept open
	beliefLeast   = 3    // seconds of both tones before any name is given
	carrierSlack  = 0.02 // Hz: what gain control and programme do to a second's carrier
	localSlack    = 0.03 // Hz: how unevenly a hand turns a trimmer from second to second
	levelSay      = 4.0  // log-odds that levels alone may give
	provenSay     = 8.0  // and a carrier's own marks: sidebands in pairs, fading
)

// belief sums up, second by second after two tones parted that may have passed
// through each other, which of them is the carrier. Either way round has its
// own prediction of the carrier, going on from where the carrier was known,
// and of the local, which may be turned but not unevenly; what each second
// shows counts by Student's density of three degrees of freedom, so that no
// second settles it against all others.
type belief struct {
	on     bool
	since  float64    // s
	n      int        // seconds added
	odds   float64    // log-odds for track 0 being the carrier and track 1 the local, by motion
	ratio  float64    // mean level of track 0 over that of track 1, dB
	c      [2]anchor  // the carrier's path if it is track k
	f      [2]float64 // where track k was
	slope  [2]float64 // how it moved, Hz/s
	at     [2]float64 // when
	points [2]int     // seconds in a row that showed it
	seen   float64    // when it was last asked, s
	next   float64    // when a fit over a long span will have half of it new, s
}

// student returns the log of Student's density of three degrees of freedom, but
// for a constant.
func student(d, scale float64) float64 {
	x := d / scale
	return -math.Log(scale) - 2*math.Log1p(x*x/3)
}

// begin starts the sum from what is known of the carrier; one that is going on
// for tones seen a moment ago is kept.
func (b *belief) begin(a anchor, mid float64) {
	if b.on && b.n > 0 && mid-b.seen < 4 {
		b.points = [2]int{}
		return
	}
	*b = belief{on: true, since: mid, c: [2]anchor{a, a}}
}

// align puts the sum into the order of the tones as they are numbered now.
func (b *belief) align(f0, f1 float64) {
	if b.at[0] == 0 || b.at[1] == 0 {
		return
	}
	if math.Abs(f1-b.f[0])+math.Abs(f0-b.f[1]) < math.Abs(f0-b.f[0])+math.Abs(f1-b.f[1]) {
		b.swap()
	}
}

// swap exchanges the tracks.
func (b *belief) swap() {
	b.odds, b.ratio = -b.odds, -b.ratio
	b.c[0], b.c[1] = b.c[1], b.c[0]
	b.f[0], b.f[1] = b.f[1], b.f[0]
	b.slope[0], b.slope[1] = b.slope[1], b.slope[0]
	b.at[0], b.at[1] = b.at[1], b.at[0]
	b.points[0], b.points[1] = b.points[1], b.points[0]
}

// asCarrier returns the log-density of tone k at f, were it the carrier.
func (b *belief) asCarrier(k int, mid, f, u, span float64) float64 {
	a := &b.c[k]
	want, v := a.when(mid)
	scatter, slack := a.scatter, carrierSlack/math.Sqrt(span) // it was learned where the carrier was known
	a.scatter /= math.Sqrt(span)
	l := student(f-want, math.Sqrt(v*v+u*u+a.scatter*a.scatter+slack*slack))
	a.add(mid, f, math.Hypot(u, slack))
	a.scatter = scatter
	return l
}

// asLocal returns the log-density of tone k at f, were it the local.
func (b *belief) asLocal(k int, mid, f, u float64) float64 {
	dt := mid - b.at[k]
	if b.points[k] == 0 || dt > 3 {
		b.points[k] = 0
		return student(0, 3) // it may be anywhere about the carrier
	}
	if b.points[k] == 1 {
		return student(f-b.f[k]-b.c[k].slope*dt, math.Hypot(0.3*dt, u))
	}
	return student(f-b.f[k]-b.slope[k]*dt, math.Hypot(localSlack*dt, 3*u))
}

// add takes in what span seconds around mid say. A tone that was not there from
// end to end says nothing.
func (b *belief) add(tr *[2]track, mid, span float64) {
	b.align(tr[0].f, tr[1].f)
	for k := range tr {
		t := &tr[k]
		if !t.live || !t.whole || t.at != mid || b.at[k] == mid {
			continue
		}
		d := b.asCarrier(k, mid, t.f, t.uf, span) - b.asLocal(k, mid, t.f, t.uf)
		if k == 1 {
			d = -d
		}
		b.odds += max(-10, min(10, d))
		if b.points[k] > 0 {
			b.slope[k] = (t.f - b.f[k]) / (mid - b.at[k])
		}
		b.f[k], b.at[k] = t.f, mid
		b.points[k]++
	}
	if tr[0].whole && tr[1].whole && tr[0].at == mid && tr[1].at == mid {
		b.n++
		b.ratio += (20*math.Log10(tr[0].amp/tr[1].amp) - b.ratio) / float64(b.n)
	}
}

// trust keeps the carrier's path while both tones are known and so far apart
// that neither can be taken for the other.
func (e *twoTone) trust() {
	if e.local < 0 || e.merged || e.hidden || e.belief.on || e.held() < 2 {
		return
	}
	clear := 1.0
	if e.sm.sigma > spreadLeast {
		clear += 4 * e.sm.sigma
	}
	if math.Abs(e.tr[0].f-e.tr[1].f) < clear {
		return
	}
	a := e.anchor
	if e.sm.sigma > spreadLeast {
		a.scatter = max(a.scatter, e.sm.sigma)
	}
	if a.n < anchorKnown { // few seconds show neither how it fades nor how it drifts
		a = anchor{known: true, at: a.at, hz: a.hz, p00: 0.1, p11: firstDrift * firstDrift, scatter: max(a.scatter, 0.3), n: a.n}
	}
	e.trusted = a
}

// weigh adds the second around mid to the belief in who is who, and changes the
// tones' names when it says so: it takes them away on any doubt and gives them
// only on certainty.
func (e *twoTone) weigh(mid float64) {
	b := &e.belief
	known := e.local >= 0
	b.seen = mid
	b.add(&e.tr, mid, 1)
	odds := e.odds()
	switch {
	case b.n == 0:
	case e.local < 0 && b.n < beliefLeast:
	case e.local < 0 && odds > sureEnough:
		e.local = 1
	case e.local < 0 && odds < -sureEnough:
		e.local = 0
	case e.local == 1 && odds < 0, e.local == 0 && odds > 0:
		e.local = -1
		e.count.broken()
		return
	}
	if e.local >= 0 && !known {
		scatter := e.anchor.scatter
		e.anchor = b.c[1-e.local]
		e.anchor.scatter = scatter
	}
	if e.local >= 0 {
		b.on = mid-b.since < beliefSeconds
	}
}

// weighClose does the same for a fit of close tones, whose first line goes by
// the name of carrier. It returns false when that is not, or not yet, certain.
func (e *twoTone) weighClose(y *fitted, mid float64) bool {
	b := &e.belief
	b.seen = mid
	if at := y.mid; at >= b.next || y.span <= 2 {
		var tr [2]track
		tr[0] = track{live: true, whole: true, at: at, f: y.carrier(at), uf: y.uc, amp: cmplx.Abs(y.a)}
		tr[1] = track{live: true, whole: true, at: at, f: y.local(at), uf: y.ul, amp: cmplx.Abs(y.b)}
		b.add(&tr, at, y.span)
		if b.next = at + y.span/2; y.span >= 8 {
			// At rest later fits say the same again: where the carrier was headed is
			// evidence once.
			b.next = math.Inf(1)
		}
	} else {
		b.align(y.carrier(at), y.local(at))
	}
	odds := b.odds + e.byLevel()
	switch {
	case odds < -sureEnough:
		b.swap()
		e.pair.swap()
		return true
	case e.sure:
		return odds > 0
	}
	return odds > sureEnough
}

// byLevel returns the log-odds by the levels alone.
func (e *twoTone) byLevel() float64 {
	b, m := &e.belief, &e.memory
	if !m.known || b.n == 0 {
		return 0
	}
	most := levelSay
	if e.sm.sigma > spreadLeast {
		most = 1 // the level of a carrier that fades says little
	}
	was := 20 * math.Log10(m.ampC/m.ampL)
	v := 4 + m.evC.varies
	return max(-most, min(most, ((-b.ratio-was)*(-b.ratio-was)-(b.ratio-was)*(b.ratio-was))/(2*v)))
}

// odds returns the log-odds for track 0 being the carrier: by motion, levels,
// and the marks that only a carrier has.
func (e *twoTone) odds() float64 {
	sum := e.belief.odds + e.byLevel()
	if _, proven := e.tr[0].ev.carrierLike(&e.tr[1].ev); proven && e.tr[0].ev.seconds >= 5 && e.tr[1].ev.seconds >= 5 {
		sum += provenSay
	} else if _, proven := e.tr[1].ev.carrierLike(&e.tr[0].ev); proven && e.tr[0].ev.seconds >= 5 && e.tr[1].ev.seconds >= 5 {
		sum -= provenSay
	}
	switch e.byJitter() {
	case 1:
		sum += provenSay
	case 0:
		sum -= provenSay
	}
	return sum
}
