package dsp

import (
	"math"
	"slices"
)

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
