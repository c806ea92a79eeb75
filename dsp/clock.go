package dsp

import (
	"fmt"
	"math"
	"slices"
	"time"
)

// clock estimates e, the fractional error of the sample clock (true rate =
// nominal rate * (1+e)), from the carrier's second pulses and from the host's
// clock, as far as either is there.
//
// Both give points (t, x): t is nominal time, samples over the nominal rate, and
// x by how much nominal time has run ahead of true time, plus a constant. At
// true time T, t = T*(1+e), so that x = t - T + const has the slope
// b = e/(1+e), and e = b/(1-b).
//
// It is not safe for concurrent use. push allocates nothing once the tones are
// told and the greatest block has been seen.
type clock struct {
	rate   float64
	n      int64   // samples on the time line so far
	pulses *pulses // nil: not looked for
	host   host

	words    string // of the estimate, made anew when the sources say something new
	wordsFor [2]told
	apart    bool // the sources contradict each other
}

const (
	clockRange  = 1000e-6 // the greatest |e| looked for
	clockGood   = 20e-6   // an estimate with a greater u is none
	clockWander = 0.05e-6 // random walk of e, in an hour: 0.1 ppm in 4 h, as a crystal's does with the room (common practice)
	hostRate    = 0.05e-6 // what a disciplined host clock's own rate is off by (from memory)
	pathDelay   = 0.3e-3  // by how much an HF path's delay changes over a span, s (from memory)
	keepMinutes = 360     // points kept by either
)

// newClock returns a clock for real or complex samples at a nominal rate.
func newClock(rate float64, isComplex bool) *clock {
	return &clock{rate: rate, pulses: newPulses(rate, isComplex)}
}

// push takes the next samples; q is nil for real input.
func (c *clock) push(x, q []float32) {
	if c.pulses != nil {
		c.pulses.push(c.n, x, q)
	}
	c.n += int64(len(x))
}

// gap says that samples are missing; the next one has number next.
func (c *clock) gap(next int64) {
	c.n = next
	if c.pulses != nil {
		c.pulses.gap(next)
	}
}

// tones tells where the steady tones are now, Hz of audio, carrier and local
// first: pulses are looked for 1000 to 1500 Hz to either side of these two, and
// nowhere near any. For the output of an AM detector or a mixer, tell 0. An empty
// list leaves what was told before.
func (c *clock) tones(hz ...float64) {
	if c.pulses != nil {
		c.pulses.aim(hz)
	}
}

// mark says that the host's clock showed at when sample n had just arrived.
// Arrival may be late by anything, never early.
func (c *clock) mark(n int64, at time.Time) { c.host.mark(float64(n)/c.rate, at) }

// estimate returns e and its standard uncertainty u, both fractions, and in words
// where they come from. ok is false while u exceeds 20 ppm or too little is
// known; how then says why if two sources contradict each other.
//
// Sources that agree within three sigma are combined by weight. If they do not,
// one of them is wrong and nothing in the sound tells which: the host's clock may
// run free though it is said to be disciplined, and what looks like second pulses
// may be some machine nearby. The middle is given, with half the difference in u
// (a quantity known to be one of two values, GUM 4.3.7 in kind): both lie within u.
func (c *clock) estimate() (e, u float64, how string, ok bool) {
	now := float64(c.n) / c.rate
	var p, h told
	if h = c.host.told.when(now); c.pulses != nil {
		p = c.pulses.told.when(now)
	}
	apart := false
	switch {
	case p.ok && h.ok:
		d, ud := p.e-h.e, math.Hypot(p.u, h.u)
		if apart = math.Abs(d) > 3*ud; apart {
			e, u = (p.e+h.e)/2, math.Hypot(d/2, ud)
			break
		}
		w := h.u * h.u / (ud * ud)
		e, u = w*p.e+(1-w)*h.e, p.u*h.u/ud
	case p.ok:
		e, u = p.e, p.u
	case h.ok:
		e, u = h.e, h.u
	default:
		e, u = math.NaN(), math.NaN()
	}
	how = c.from(p, h, apart)
	if !(u <= clockGood) {
		return math.NaN(), math.NaN(), how, false
	}
	return e, u, how, true
}

// from says in words what the estimate rests on.
func (c *clock) from(p, h told, apart bool) string {
	key := [2]told{p, h}
	key[0].u, key[1].u = 0, 0 // grows all the time
	if key == c.wordsFor && apart == c.apart {
		return c.words
	}
	switch c.wordsFor, c.apart = key, apart; {
	case p.ok && h.ok:
		c.words = fmt.Sprintf("second pulses over %s and host clock over %s", spanWords(p.span), spanWords(h.span))
		if apart {
			c.words += fmt.Sprintf(", which disagree: %+.2f and %+.2f ppm", p.e*1e6, h.e*1e6)
		}
	case p.ok:
		c.words = "second pulses over " + spanWords(p.span)
	case h.ok:
		c.words = "host clock over " + spanWords(h.span)
	default:
		c.words = ""
	}
	return c.words
}

// spanWords says a time in s as people would.
func spanWords(s float64) string {
	if s < 3570 {
		return fmt.Sprintf("%.0f min", s/60)
	}
	return fmt.Sprintf("%.1f h", s/3600)
}

// told is what one source says of e.
type told struct {
	e, u float64
	span float64 // s
	at   float64 // of its latest point, nominal s
	ok   bool
}

// when returns what it says at a later time: the clock may have wandered since.
func (x told) when(t float64) told {
	if x.ok {
		x.u = math.Hypot(x.u, wander(t-x.at))
		x.ok = x.u <= clockGood
	}
	return x
}

// wander is what e may have changed by in a time, s.
func wander(s float64) float64 { return clockWander * math.Sqrt(max(0, s)/3600) }

// spot is a point of a trend.
type spot struct {
	t, x, s float64 // nominal time, s; reading, s; its standard deviation, s
}

// trend fits a straight line of slope b to points that may jump, once or often,
// to another level: a host's clock that is set, samples lost uncounted, another
// path of propagation. Between jumps the line is robust against stray points
// (Tukey's biweight; iterated weights after Beaton & Tukey, Technometrics 1974,
// from memory).
type trend struct {
	period float64 // of x, 0 for none: differences are taken modulo it
	jump   float64 // the least change of level that is taken for a jump, s

	b, u  float64 // slope, and its standard uncertainty from the scatter
	level float64 // of x - b*(t-at) lately
	at    float64 // s
	used  int     // points
	steps int     // jumps
	sets  int     // those of them that are less than two seconds,
	setBy float64 // and their sum, s

	run  []int // of each point: which stretch it belongs to, -1: stray
	r, w []float64
	e    []float64
	abs  []float64
}

// wrapped returns d modulo the period, nearest to 0.
func (tr *trend) wrapped(d float64) float64 {
	if tr.period > 0 {
		d -= tr.period * math.Round(d/tr.period)
	}
	return d
}

// fit fits p, in order of time, from a first guess of the slope that is right to
// some tens of ppm. It reports whether there is a line.
func (tr *trend) fit(p []spot, b float64) bool {
	if len(p) < 3 {
		return false
	}
	n := len(p)
	tr.run, tr.r, tr.w = resize(tr.run, n), resize(tr.r, n), resize(tr.w, n)
	tr.e, tr.abs = resize(tr.e, n), resize(tr.abs, n)
	tr.b, tr.at = b, p[n-1].t
	for pass := range 2 {
		tol := tr.jump
		if pass == 0 {
			tol *= 2
		}
		tr.stretches(p, tol)
		for i := range tr.w {
			tr.w[i] = 0
			if tr.run[i] >= 0 {
				tr.w[i] = 1 / (p[i].s * p[i].s)
			}
		}
		for range 4 {
			if !tr.solve(p) {
				return false
			}
			tr.reweigh(p)
		}
	}
	return tr.solve(p) && tr.scatter(p)
}

// stretches levels the points against the slope as it is, tells each which
// stretch between jumps it belongs to, and unwraps them. Off the present level by
// more than tol, with the next two beside it, is a jump; otherwise it is a stray.
func (tr *trend) stretches(p []spot, tol float64) {
	run, k := 0, 0
	var level float64
	off := func(i int, from float64) float64 { return tr.wrapped(p[i].x - tr.b*(p[i].t-tr.at) - from) }
	tr.steps, tr.sets, tr.setBy = 0, 0, 0
	for i := range p {
		if k == 0 {
			level = off(i, 0)
		}
		d := off(i, level)
		room := tol
		if i > 0 {
			room += 2e-6 * (p[i].t - p[i-1].t)
		}
		if math.Abs(d) > room {
			here := level + d
			if i+2 >= len(p) || math.Abs(off(i+1, here)) > room || math.Abs(off(i+2, here)) > room {
				tr.run[i], tr.r[i] = -1, here
				continue
			}
			run++
			tr.steps++
			if math.Abs(d) < 2 {
				tr.sets++
				tr.setBy += d
			}
			level, d, k = here, 0, 0
		}
		tr.run[i], tr.r[i] = run, level+d
		k++
		level += d / float64(min(k, 4))
	}
}

// solve improves the slope by weighted least squares, with a level of its own for
// every stretch, and leaves the residuals in e.
func (tr *trend) solve(p []spot) bool {
	var num, sxx float64
	for from := 0; from < len(p); {
		to := tr.stretchEnd(from)
		sw, st, sr := tr.sums(p, from, to)
		if sw > 0 {
			for i := from; i < to; i++ {
				if tr.w[i] > 0 {
					dt := p[i].t - st
					num += tr.w[i] * dt * (tr.r[i] - sr)
					sxx += tr.w[i] * dt * dt
				}
			}
		}
		from = to
	}
	if !(sxx > 0) {
		return false
	}
	db := num / sxx
	for i := range p { // the levels stay as they are in time tr.at
		tr.r[i] -= db * (p[i].t - tr.at)
	}
	tr.b += db
	tr.u = 1 / math.Sqrt(sxx)
	for from := 0; from < len(p); {
		to := tr.stretchEnd(from)
		_, _, sr := tr.sums(p, from, to)
		for i := from; i < to; i++ {
			tr.e[i] = tr.r[i] - sr
		}
		from = to
	}
	return true
}

// stretchEnd returns the end of the stretch that begins at from; strays belong to
// what is around them.
func (tr *trend) stretchEnd(from int) int {
	run := -1
	for i := from; i < len(tr.run); i++ {
		if tr.run[i] >= 0 && run >= 0 && tr.run[i] != run {
			return i
		}
		run = max(run, tr.run[i])
	}
	return len(tr.run)
}

// sums returns the sum of weights of points from..to, and the means of t and r.
func (tr *trend) sums(p []spot, from, to int) (sw, t, r float64) {
	for i := from; i < to; i++ {
		sw += tr.w[i]
		t += tr.w[i] * (p[i].t - tr.at)
		r += tr.w[i] * tr.r[i]
	}
	if sw > 0 {
		t, r = t/sw, r/sw
	}
	return sw, t + tr.at, r
}

// reweigh gives the points their weights by the residuals.
func (tr *trend) reweigh(p []spot) {
	tr.abs = tr.abs[:0]
	for i := range p {
		if tr.run[i] >= 0 {
			tr.abs = append(tr.abs, math.Abs(tr.e[i])/p[i].s)
		}
	}
	slices.Sort(tr.abs)
	scale := max(0.1, 1.4826*tr.abs[len(tr.abs)/2])
	for i := range p {
		tr.w[i] = 0
		if v := tr.e[i] / p[i].s / (5 * scale); tr.run[i] >= 0 && math.Abs(v) < 1 {
			tr.w[i] = (1 - v*v) * (1 - v*v) / (p[i].s * p[i].s)
		}
	}
}

// scatter turns u, so far that of points as good as they say, into what the
// scatter about the line shows. Neighbours may err alike (fading, a busy host, a
// host's clock that wanders): so means over 1, 2, 4, 8... points are looked at,
// and the one that shows most scatter for its length counts. It also finds the
// level at the end.
func (tr *trend) scatter(p []spot) bool {
	tr.used = 0
	for i := range p {
		if tr.w[i] > 0 {
			tr.used++
		}
	}
	free := tr.used - 2 - tr.steps
	if free < 1 {
		return false
	}
	worst := 0.3
	for m := 1; m == 1 || tr.used/m >= 6; m *= 2 {
		var chi, sw, sr float64
		groups, k := 0, 0
		for i := range p {
			if tr.w[i] > 0 {
				sw += tr.w[i]
				sr += tr.w[i] * tr.e[i]
				k++
			}
			if k == m {
				chi += sr * sr / sw
				groups++
				sw, sr, k = 0, 0, 0
			}
		}
		nu := max(1, float64(groups)-2)
		if m == 1 {
			nu = float64(free)
		}
		student := 1 + 0.55/nu + 0.29/(nu*nu) // at 68 %: 1.84, 1.34, 1.12 for 1, 2, 5 (table of the GUM, G.2)
		worst = max(worst, chi/nu*student*student)
	}
	tr.u *= math.Sqrt(worst)

	var sw, sr float64
	last := slices.Max(tr.run)
	for i, k := len(p)-1, 0; i >= 0 && k < 10; i-- {
		if tr.run[i] == last && tr.w[i] > 0 {
			sw += tr.w[i]
			sr += tr.w[i] * tr.r[i]
			k++
		}
	}
	if sw > 0 {
		tr.level = sr / sw
	}
	return sw > 0
}

// when returns the trend's x at time t.
func (tr *trend) when(t float64) float64 { return tr.level + tr.b*(t-tr.at) }

// choose fits the latest points of p over spans of all, half and a quarter of
// it, and returns what the one says that knows most about e at the end:
// long spans have little scatter, short ones have wandered less. extra is the
// source's own uncertainty over a span, s. The trend is left fitted to it.
//
// A clock that is set right by a little again and again keeps no time of its own
// between: by what it is set, over the time, is a part of u.
func (tr *trend) choose(p []spot, b float64, extra func(span float64) float64) told {
	best, from, astray := told{u: math.Inf(1)}, 0, 0.0
	try := func(i int) (told, bool) {
		if !tr.fit(p[i:], b) {
			return told{}, false
		}
		span := p[len(p)-1].t - p[i].t
		scale := 1 / (1 - tr.b)
		if i == 0 && tr.period == 0 && tr.sets >= 2 {
			astray = tr.setBy / span
		}
		u := math.Sqrt(sq(tr.u) + sq(extra(span)) + sq(wander(span)) + sq(astray))
		return told{tr.b * scale, u * scale * scale, span, p[len(p)-1].t, true}, true
	}
	for k := 1; k <= 4; k *= 2 {
		i := 0
		for i < len(p) && p[len(p)-1].t-p[i].t > (p[len(p)-1].t-p[0].t)/float64(k)+1 {
			i++
		}
		if k > 1 && len(p)-i < 20 {
			break
		}
		if x, ok := try(i); ok && x.u < best.u {
			best, from = x, i
		}
	}
	if best.ok {
		try(from)
	}
	return best
}

func sq(v float64) float64 { return v * v }

// host fits the host's clock: points (t, x) with x = t - host time, which late
// arrivals only lower. The upper hull of a minute's points holds its earliest
// arrival for whatever slope (Moon, Skelly & Towsley, INFOCOM 1999, from memory,
// fit a line to such a hull); the line goes through the minutes' earliest.
type host struct {
	began time.Time
	told  told
	trend trend
	hulls []hull // of the latest minutes
	now   hull
	spots []spot
}

// hull is the upper convex hull of a minute's points.
type hull struct {
	minute float64
	k      int
	t, x   [24]float64
}

// add adds a point later than all before.
func (h *hull) add(t, x float64) {
	for h.k >= 2 {
		a, b := h.k-2, h.k-1
		if (h.x[b]-h.x[a])*(t-h.t[a]) > (x-h.x[a])*(h.t[b]-h.t[a]) {
			break
		}
		h.k--
	}
	if h.k == len(h.t) {
		h.k--
	}
	h.t[h.k], h.x[h.k] = t, x
	h.k++
}

// highest returns the point that is farthest above a line of slope b.
func (h *hull) highest(b float64) (t, x float64) {
	j := 0
	for i := 1; i < h.k; i++ {
		if h.x[i]-h.x[j] > b*(h.t[i]-h.t[j]) {
			j = i
		}
	}
	return h.t[j], h.x[j]
}

// mark takes one arrival: nominal time t, s, and what the host's clock showed.
func (h *host) mark(t float64, at time.Time) {
	at = at.Round(0) // the clock on the wall: a step of it is to be seen
	if h.began.IsZero() {
		h.began = at
		h.trend.jump = 0.015
		h.hulls, h.spots = make([]hull, 0, keepMinutes), make([]spot, 0, keepMinutes)
	}
	if h.now.k > 0 && !(t > h.now.t[h.now.k-1]) {
		return
	}
	if m := math.Floor(t / 60); m != h.now.minute {
		if h.now.k > 0 {
			h.close()
		}
		h.now = hull{minute: m}
	}
	h.now.add(t, t-at.Sub(h.began).Seconds())
}

// close ends a minute.
func (h *host) close() {
	if len(h.hulls) == keepMinutes {
		h.hulls = h.hulls[:copy(h.hulls, h.hulls[1:])]
	}
	h.hulls = append(h.hulls, h.now)
	if len(h.hulls) < 3 {
		return
	}
	b := h.trend.b
	if !h.told.ok {
		b = h.guess()
	}
	for range 3 {
		h.gather(b)
		h.told = h.trend.choose(h.spots, b, func(float64) float64 { return hostRate })
		if !h.told.ok {
			return
		}
		b = h.trend.b
	}
	h.told.ok = h.told.u <= clockGood
}

// gather makes a point of every minute for a slope b.
func (h *host) gather(b float64) {
	h.spots = h.spots[:0]
	for i := range h.hulls {
		t, x := h.hulls[i].highest(b)
		h.spots = append(h.spots, spot{t, x, 1e-3})
	}
}

// guess returns the slope, to 5 ppm, for which neighbouring minutes differ least,
// jumps counting no more than 30 ms.
func (h *host) guess() float64 {
	best, least := 0.0, math.Inf(1)
	for b := -clockRange; b <= clockRange+1e-9; b += 10e-6 {
		h.gather(b)
		sum := 0.0
		for i := 1; i < len(h.spots); i++ {
			p, q := h.spots[i-1], h.spots[i]
			sum += min(0.03, math.Abs(q.x-p.x-b*(q.t-p.t)))
		}
		if sum < least {
			best, least = b, sum
		}
	}
	return best
}
