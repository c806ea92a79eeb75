package dsp

import (
	"math"
	"math/cmplx"
)

const (
	closeTones = 2.5 // Hz: nearer than this the span has to grow beyond a second
	spans      = 9   // 1, 2, 4 ... 256 s
	fineGrain  = 256 // samples of a stretch
)

// fitted is a pair of lines over one span, in audio Hz about its own middle.
type fitted struct {
	two
	ok        bool
	mid, span float64
	centre    float64
	u, uc, ul float64 // standard uncertainties of fl-fc, fc, fl, Hz
	uchirp    float64
	own, ownC float64 // of fc and chirp by the stretch alone
	level     float64 // of the ratio of the amplitudes, relative
	noise     float64 // density that they rest on
}

// sep returns local - carrier in the audio at time t, Hz.
func (x *fitted) sep(t float64) float64 { return x.fl - x.fc + x.cl*(t-x.mid) }

// carrier and local return the tones at time t, audio Hz.
func (x *fitted) carrier(t float64) float64 { return x.centre + x.fc + x.c*(t-x.mid) }
func (x *fitted) local(t float64) float64   { return x.centre + x.fl + (x.c+x.cl)*(t-x.mid) }

// beatTurns returns the phase of local - carrier at time t, turns.
func (x *fitted) beatTurns(t float64) float64 {
	d := t - x.mid
	return cphase(x.b) - cphase(x.a) + (x.fl-x.fc)*d + x.cl*d*d/2
}

// pair fits two tones that are close to each other jointly, over spans from one
// second to some minutes, and takes the span that says most: the one with the
// least uncertainty, in which what the model leaves unexplained counts as noise.
type pair struct {
	slow *slow
	fit  pairFitter
	st   stretch
	sol  [spans]fitted
	best int     // index of the span taken last, -1: none
	lean float64 // log-odds that a fresh solution's carrier is the carrier, before it was turned the likelier way round
}

// expect is what is known before the fit.
type expect struct {
	end        float64 // s
	anchor     *anchor
	ampC, ampL float64 // levels, 0: not known
	centre     float64 // audio Hz around which to look
	floor      float64 // density of the noise
	since      float64 // when the tones met, s: before that the local was elsewhere
	smear      float64 // rms width of the carrier's fading part, Hz; 0: it stands still
	haze       float64 // density of that part at its middle
	leaning    func(f, amp [2]float64, at, span, uf, ul float64) float64
}

// spanFits reports whether two lines can stand for a fading carrier and a local
// over a span: either so short that the fading is slow, and then far enough
// apart for it not to pass for the other line, or so long that its smear has
// become noise around a steady part.
func (x *expect) spanFits(span, sep float64) bool {
	switch {
	case x.smear == 0:
		return true
	case span*x.smear < 0.3:
		return math.Abs(sep)*span > 1.5
	}
	return span*x.smear > 2.5
}

// noise returns the density against which a span's lines stand.
func (x *expect) noise(span float64) float64 {
	if span*x.smear > 2.5 {
		return x.floor + x.haze
	}
	return x.floor
}

func newPair(s *slow) *pair { return &pair{slow: s, best: -1} }

func (p *pair) forget() {
	for k := range p.sol {
		p.sol[k].ok = false
	}
	p.best = -1
}

// solve fits every span that the sound allows and returns the best, or nil.
// fresh says that it was found anew and not by following.
func (p *pair) solve(x *expect) (best *fitted, fresh bool) {
	old := p.sol
	any := false
	for k := range p.sol {
		any = any || old[k].ok
	}
	p.best = -1
	grain := fineGrain
	if math.Abs(x.anchor.slope) > 1e-3 { // a drifting tone must not notice the averaging
		grain *= 2
	}
	for k := range p.sol {
		span := float64(int(1) << k)
		p.sol[k].ok = false
		var start *fitted
		switch {
		case old[k].ok:
			start = &old[k]
		case k > 0 && p.sol[k-1].ok:
			start = &p.sol[k-1]
		case k > 0 && old[k-1].ok:
			start = &old[k-1]
		}
		if start == nil && (any || k == 0 || k > 7 || k > 2 && x.end-span < x.since-1) || !x.spanFits(span, 4) {
			continue
		}
		p.slow.fetch(&p.st, x.end, span, x.centre, grain)
		if p.st.valid < 0.97 {
			break
		}
		if start != nil {
			p.warm(k, span, start, x)
		} else {
			p.cold(k, span, x)
			fresh = fresh || p.sol[k].ok
		}
		if p.sol[k].ok && (p.best < 0 || p.sol[k].u < p.sol[p.best].u) {
			p.best = k
		}
	}
	if p.best < 0 {
		return nil, false
	}
	return &p.sol[p.best], fresh
}

// seed starts from two tones that have been followed second by second.
func (p *pair) seed(c, l *track) {
	p.forget()
	y := fitted{ok: true, mid: c.at, span: 1}
	y.fc, y.fl, y.c = c.f, l.f, c.c
	y.cl = l.c - c.c
	p.sol[0] = y
}

// warm follows a solution into the stretch.
func (p *pair) warm(k int, span float64, from *fitted, x *expect) {
	t := two{c: from.c}
	t.fc, t.fl = from.carrier(p.st.mid)-p.st.centre, from.local(p.st.mid)-p.st.centre
	p.settle(k, span, t, from.cl, x)
}

// settle fits from t, over a short span also with a local that turns, and keeps
// the better one where it stands up.
func (p *pair) settle(k int, span float64, t two, cl float64, x *expect) {
	free := freeChirp
	y, data := p.try(span, t, free, x)
	if span <= 4 {
		t.cl = cl
		z, turned := p.try(span, t, free|freeTurn, x)
		v := max(z.noise, x.noise(span)) / p.st.dt
		if z.ok && (!y.ok || data-turned > 12*v) {
			y = z
		}
	}
	if !y.ok && span >= 8 && x.smear == 0 {
		y = p.blindly(span, t, x)
	}
	p.sol[k] = y
}

// blindly fits the phase of the sound alone, as a gain control leaves nothing
// else: with two close tones it follows their envelope. To first order that
// makes both sides of the stronger tone alike, so the other side is tried too,
// and what is not plainly worse there does not count.
func (p *pair) blindly(span float64, t two, x *expect) fitted {
	p.fit.blind = true
	defer func() { p.fit.blind = false }()
	t.cl = 0
	y, rss := p.try(span, t, freeChirp, x)
	m := t
	if cmplx.Abs(t.a) > cmplx.Abs(t.b) {
		m.fl = 2*t.fc - t.fl
	} else {
		m.fc = 2*t.fl - t.fc
	}
	z, other := p.try(span, m, freeChirp, x)
	if other < rss {
		y, z, rss, other = z, y, other, rss
	}
	if !y.ok || other-rss < 12*max(y.noise, x.floor)/p.st.dt {
		y.ok = false
	}
	return y
}

// try runs the fit from t; ok tells whether it stands up. It also returns the
// power of the residual.
func (p *pair) try(span float64, t two, free int, x *expect) (fitted, float64) {
	pr := prior{ufc: math.Inf(1), uc: math.Inf(1)}
	if x.anchor.known {
		f, u := x.anchor.when(p.st.mid)
		c, us := x.anchor.drift(p.st.mid)
		pr = prior{f - p.st.centre, math.Hypot(u, x.anchor.scatter/math.Sqrt(span)), c, us, x.noise(span)}
	}
	p.fit.prior = pr
	t, _ = p.fit.amplitudes(&p.st, t)
	t, ok := p.fit.run(&p.st, t, free, 8, 3/span)
	if !ok {
		return fitted{}, math.Inf(1)
	}
	all, beside := p.fit.leftOver(&p.st, &t)
	floor := x.noise(span)
	n := max(all, beside, floor)
	// What the model does not explain is no noise and does not average: the more
	// there is of it, the less the fit is believed.
	n *= math.Sqrt(n / floor)
	y := fitted{two: t, mid: p.st.mid, span: span, centre: p.st.centre, noise: n}
	y.u, y.uc, y.ul = p.fit.errors(&p.st, n)
	// A drifting tone slides along the filters' flanks.
	y.u = math.Hypot(y.u, 3e-3*math.Abs(t.c))
	y.uchirp = p.fit.chirpError(&p.st, n)
	y.level = p.fit.levelError(&p.st, &t, n)
	data := p.fit.data
	// A carrier elsewhere than foretold, or one that bends otherwise than the
	// receiver drifts, is some other line: a local that turns, for one.
	y.ok = p.stands(&y, x) && !(math.Abs(t.fc-pr.fc) > 6*math.Hypot(pr.ufc, y.uc)) && !(math.Abs(t.c-pr.c) > 6*math.Hypot(pr.uc, y.uchirp))
	y.own, y.ownC = math.Inf(1), math.Inf(1)
	if y.ok && p.fit.alone(&p.st, &t, free) {
		_, y.own, _ = p.fit.errors(&p.st, n)
		y.ownC = p.fit.chirpError(&p.st, n)
	}
	return y, data
}

// stands reports whether a fit can be defended: both lines well above what is
// left, at levels like those remembered, and apart by several times the
// uncertainty.
func (p *pair) stands(y *fitted, x *expect) bool {
	a, b := cmplx.Abs(y.a), cmplx.Abs(y.b)
	d := math.Abs(y.fl - y.fc)
	weak := min(a, b)
	if weak*weak*p.st.used < 20*y.noise || y.u > 0.2*d || d*y.span < 0.2 || !x.spanFits(y.span, d) {
		return false
	}
	like := func(v, was float64) bool { return was == 0 || v > 0.4*was && v < 2.5*was }
	if !(like(a, x.ampC) && like(b, x.ampL) || like(b, x.ampC) && like(a, x.ampL)) {
		return false
	}
	return p.fit.recent(&p.st, &y.two, max(1, y.span/32)) < 4
}

// cold looks for two lines without a start: the strongest and what is left
// beside it, and pairs closer than the span resolves.
func (p *pair) cold(k int, span float64, x *expect) {
	lo, hi := -4.0, 4.0
	lim := 0.4 / p.st.dt
	lo, hi = max(lo, -lim), min(hi, lim)
	base := two{c: x.anchor.slope}
	p.fit.r = append(p.fit.r[:0], p.st.z...)
	f1, _ := p.peak(lo, hi, base.c, math.NaN(), 0)
	base.fc = f1
	one := base
	one.a = p.project(f1, base.c)
	p.subtract(one.a, f1, base.c)
	f2, _ := p.peak(lo, hi, base.c, f1, 0.8/span)
	best, bestRSS := two{}, math.Inf(1)
	try := func(fc, fl float64) {
		t := two{fc: fc, fl: fl, c: x.anchor.slope}
		t, rss := p.fit.amplitudes(&p.st, t)
		if rss < bestRSS {
			best, bestRSS = t, rss
		}
	}
	try(f1, f2)
	for _, w := range [...]float64{0.25, 0.5, 0.75, 1} {
		for _, m := range [...]float64{-0.5, -0.25, 0, 0.25, 0.5} {
			try(f1+(m-w/2)/span, f1+(m+w/2)/span)
		}
	}
	// First without what is expected of the carrier, to see which line it is.
	known := x.anchor.known
	x.anchor.known = false
	p.settle(k, span, best, 0, x)
	x.anchor.known = known
	y := p.sol[k]
	if !y.ok {
		return
	}
	p.lean = x.leaning([2]float64{y.carrier(y.mid), y.local(y.mid)}, [2]float64{cmplx.Abs(y.a), cmplx.Abs(y.b)}, y.mid, y.span, max(y.uc, y.ul), y.level)
	if p.lean < 0 {
		p.swap()
		y = p.sol[k]
	}
	p.settle(k, span, y.two, y.cl, x)
}

// peak returns the strongest frequency of the residual turned back by chirp c,
// at least guard from avoid.
func (p *pair) peak(lo, hi, c, avoid, guard float64) (f, density float64) {
	step := 0.25 / p.st.half
	for g := lo; g <= hi; g += step {
		if math.Abs(g-avoid) < guard {
			continue
		}
		if d := p.tilted(g, c); d > density {
			f, density = g, d
		}
	}
	return f, density
}

func (p *pair) tilted(f, c float64) float64 {
	y := p.project(f, c)
	return (real(y)*real(y) + imag(y)*imag(y)) * p.st.used
}

// project returns the amplitude of one line at f in the residual.
func (p *pair) project(f, c float64) complex128 {
	var y complex128
	n := 0.0
	e, q, qq := chirped(f, c, p.st.t0, p.st.dt)
	for i, v := range p.fit.r {
		y += v * cmplx.Conj(e)
		n += p.st.w[i]
		e *= q
		q *= qq
	}
	return y / complex(max(n, 1), 0)
}

func (p *pair) subtract(a complex128, f, c float64) {
	e, q, qq := chirped(f, c, p.st.t0, p.st.dt)
	for i := range p.fit.r {
		if p.st.w[i] != 0 {
			p.fit.r[i] -= a * e
		}
		e *= q
		q *= qq
	}
}

// swap exchanges carrier and local in all solutions.
func (p *pair) swap() {
	for k := range p.sol {
		s := &p.sol[k]
		s.a, s.b = s.b, s.a
		s.fc, s.fl = s.fl, s.fc
		s.uc, s.ul = s.ul, s.uc
		s.c, s.cl = s.c+s.cl, -s.cl
	}
}
