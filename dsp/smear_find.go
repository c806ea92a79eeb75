package dsp

import (
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/dsp/fourier"
)

const (
	longSpan  = 384.0 // the longest stretch over which the local's line is fitted, s
	crowdSpan = 128.0 // over which the smear's power is taken, s
	farReach  = 10.0  // how far from the carrier a lost local is looked for, Hz
	farSpan   = 16.0  // the longest stretch that takes, s: beyond, it is in the smear
	unlike    = 8.0   // log-likelihood by which a part of the span may speak against the line
	telling   = 16.0  // log-likelihood that the latest seconds must be able to give to be asked
	steps     = 0.35  // of the search, by the resolution 1/span
	turnMost  = 0.6   // the fastest turn of a trimmer, Hz/s
)

// ladder is the spans that are tried, s: in the smear it is the longest that
// count, and a finer step finds the line sooner.
var ladder = [...]float64{2, 4, 8, 16, 32, 48, 64, 96, 128, 192, 256, longSpan}

// seek says where to look for the local's line.
type seek struct {
	end       float64 // s
	haze      haze    // mu in audio Hz at end
	amp       float64 // the local's level, |z|, and the range it may lie in
	lo, hi    float64
	f, reach  float64 // expected at end, audio Hz, and how far from there to look
	held      bool    // the line was there a second ago: another place must be plainly better
	uf        float64 // how well f is known then
	slope, us float64 // the receiver's drift
	since     float64 // when the line was last seen
	was, wasU float64 // where it would be now if it rests since then, audio Hz; NaN: it was being turned
}

// hit is a line found over one span.
type hit struct {
	m           model
	span        float64
	turn        float64 // by how much it bends more than the receiver drifts, Hz/s
	score, next float64 // log-likelihood gain, and that of the best other place
	info        float64 // the gain that a line of the level expected would give
}

// at returns the frequency at time t and its uncertainty there.
func (h *hit) at(t float64) (f, u float64) {
	return h.m.when(t), h.m.uf * widen(t-h.m.at, h.span)
}

// widen returns by how much a frequency is less known d from the middle of its
// span than there: with the chirp free, nearly fourfold at its ends, the root of
// one plus 60 (d/span)^2 of the least-squares parabola of phase.
func widen(d, span float64) float64 { return math.Sqrt(1 + 60*d*d/max(1, span*span)) }

// search scores all frequencies of a whitened stretch at once: the matched sum
// for lines of one chirp is the Fourier transform of what the filter lets
// through, turned back by that chirp. It holds one plan for each length, and
// allocates nothing once it has them.
type search struct {
	plans [14]*fourier.CmplxFFT
	in    []complex128
	out   []complex128
	h2    []float64 // |h|^2 of the filter at every bin
	best  []float64 // score of the best chirp at every bin
}

// size returns the plan that resolves n samples finely enough.
func (q *search) size(n int) (*fourier.CmplxFFT, int) {
	k := 6
	for float64(int(1)<<k)*steps < float64(n) && k < len(q.plans)-1 {
		k++
	}
	if q.plans[k] == nil {
		q.plans[k] = fourier.NewCmplxFFT(1 << k)
	}
	return q.plans[k], 1 << k
}

// filter computes the whitening filter's response at every bin.
func (q *search) filter(w *whitener, n int) *fourier.CmplxFFT {
	plan, size := q.size(n)
	q.in, q.out = resize(q.in, size), resize(q.out, size)
	if cap(q.h2) < size {
		q.h2, q.best = make([]float64, size), make([]float64, size)
	}
	q.h2, q.best = q.h2[:size], q.best[:size]
	clear(q.in)
	for k := 0; k <= w.n; k++ {
		q.in[k] = w.a[k]
	}
	plan.Coefficients(q.out, q.in)
	for i, v := range q.out {
		q.h2[i] = real(v)*real(v) + imag(v)*imag(v)
		q.best[i] = math.Inf(-1)
	}
	return plan
}

// score adds the lines of chirp c (Hz/s) with amplitudes as x allows to the
// scores in reach of f0. It returns the best of this chirp within near of f0.
func (q *search) score(plan *fourier.CmplxFFT, w *whitener, c float64, x *seek, f0, reach, near float64) (f, best float64) {
	st := w.stretch
	clear(q.in)
	n := 0
	if c == 0 {
		copy(q.in, w.v)
		for _, v := range w.v {
			if v != 0 {
				n++
			}
		}
	} else {
		e, r, rr := chirped(0, c, st.t0, st.dt)
		for i, v := range w.v {
			if v != 0 {
				q.in[i] = v * cmplx.Conj(e)
				n++
			}
			e *= r
			r *= rr
		}
	}
	plan.Coefficients(q.out, q.in)
	best = math.Inf(-1)
	unit := 1 / (float64(len(q.in)) * st.dt)
	for k := int(math.Ceil((f0 - reach) / unit)); float64(k)*unit <= f0+reach; k++ {
		i := k & (len(q.in) - 1)
		h2 := q.h2[i]
		v := q.out[i]
		m := math.Sqrt((real(v)*real(v)+imag(v)*imag(v))*h2) / w.err
		g := float64(n) * h2 / w.err
		a := max(x.lo, min(x.hi, m/g))
		s := 2*a*m - a*a*g
		q.best[i] = max(q.best[i], s)
		if s > best && math.Abs(float64(k)*unit-f0) <= near {
			f, best = float64(k)*unit, s
		}
	}
	return f, best
}

// rival returns the best score within reach of f0 that is farther than guard
// from f.
func (q *search) rival(dt, f, guard, f0, reach float64) float64 {
	unit := 1 / (float64(len(q.in)) * dt)
	next := 0.0
	for k := int(math.Ceil((f0 - reach) / unit)); float64(k)*unit <= f0+reach; k++ {
		if math.Abs(float64(k)*unit-f) > guard {
			next = max(next, q.best[k&(len(q.in)-1)])
		}
	}
	return next
}

// find looks for the local's line over spans from 2 s up and takes the one that
// gains most by it.
func (s *smear) find(b *band, x *seek) bool {
	var best hit
	s.absent, s.could = 0, 0
	x.haze.power = s.crowd(x)
	s.dense = x.haze.power / (math.Sqrt(2*math.Pi) * x.haze.sigma)
	for _, span := range ladder {
		if math.IsNaN(x.was) && span > x.end-x.since+1 { // it was being turned then
			break
		}
		if x.held && s.inside && s.info*span < telling/4*s.span { // far too short
			continue
		}
		h, ok := s.try(b, span, x)
		if !ok {
			continue
		}
		if best.span > 0 {
			f1, u1 := best.at(x.end)
			f2, u2 := h.at(x.end)
			// The latest seconds know better, if they know.
			moved := math.Abs(f1-f2) > 4*math.Hypot(u1, u2)+1e-3
			if h.score < best.score || moved && best.score > 100 {
				continue
			}
		}
		best = h
	}
	// In the middle of the smear only a line that rests can be told from its tops.
	s.inside = best.span > 0 && math.Abs(best.m.when(x.end)-x.haze.mu) < 2.5*x.haze.sigma
	if best.span == 0 || s.inside && (best.span < 8 || !(s.steady < 0.4 || math.IsNaN(s.steady) && s.sigma > 0.15)) {
		s.span = 0
		return false
	}
	s.moving(best.span <= 4)
	s.bends = best.turn != 0
	s.loc, s.span, s.flat = best.m, best.span, true
	s.lever, s.info = leverage(best.span), best.info
	return true
}

// try scores every frequency within reach over one span and refines the best.
func (s *smear) try(b *band, span float64, x *seek) (hit, bool) {
	var out hit
	centre, reach := x.f, x.reach
	if !x.held && span > farSpan {
		centre, reach = x.haze.mu, min(reach, 4*x.haze.sigma+0.5)
	}
	half := math.Abs(x.haze.mu-centre) + reach + 3.5*x.haze.sigma + 0.5
	rate := min(s.slow.rate, max(2.2*half, 32/span))
	n := int(span * rate)
	st := &s.st
	s.slow.fetch(st, x.end, span, centre, n)
	if st.valid < 0.95 || len(st.z) < 24 {
		return out, false
	}
	d := x.end - st.mid
	s.gain.flatten(st)
	s.straighten(x.slope)
	h := x.haze
	h.mu -= x.slope*d + centre
	order := int(min(maxOrder, max(8, 1.2/(max(h.sigma, 1e-3)*st.dt)), float64(len(st.z)/4)))
	w := &s.white
	w.set(h, st.dt, order)
	w.take(st)
	f0 := x.f - x.slope*d - centre // in the middle, if it is at x.f in the end
	reach += 1.5 / span
	plan := s.search.filter(w, len(st.z))
	at, bend, cells := s.scan(plan, span, f0, reach, x, &out)
	out.next = s.search.rival(st.dt, at, 1.6/span, f0, reach)
	out.info = x.amp * x.amp * w.power(at)
	if span > farSpan && span <= crowdSpan && out.info > 3*telling {
		s.could++
		if out.score <= 0 && out.next <= 0 {
			s.absent++
		}
	}
	if out.info < telling { // the smear's own tops reach as high
		return out, false
	}
	stays := x.held && out.turn == 0 && out.score >= 6 && out.next <= out.score+4
	plain := out.score >= 8+math.Log(cells) && out.score-out.next >= 6
	if !stays && !plain {
		return out, false
	}
	uc := math.Hypot(x.us, 1e-6)
	c0 := 0.0
	if out.turn != 0 {
		c0, uc = out.turn, 0.3/(span*span)
	}
	f, c, uf, amp := w.refine(at, bend, c0, uc)
	if amp == 0 || math.Abs(f-at) > 1/span {
		return out, false
	}
	if d := math.Abs(f - f0 + c*d); !plain && d > 4*math.Hypot(x.uf, 4*uf)+1e-3 {
		return out, false
	}
	// A line of the local's level gains what it is worth, give or take the level.
	level, most := cmplx.Abs(amp)/x.amp, 2/math.Sqrt(2*out.info)
	if level < 0.65-most || level > 1.5+most || out.score < 0.3*out.info-6 {
		return out, false
	}
	// It cannot have rested here for longer than since it was seen elsewhere.
	if span > x.end-x.since+1 && !(math.Abs(f+c*d+x.slope*d+centre-x.was) < 4*math.Hypot(x.wasU, 4*uf)+2e-3) {
		return out, false
	}
	if !w.bears(f, c, amp) {
		return out, false
	}
	m := &out.m
	m.at, m.f, m.c, m.uf = st.mid, f+centre, c+x.slope, uf
	m.amp = cmplx.Abs(amp) / b.gain(f+centre-b.centre)
	osc := b.oscillator(m.at) + (s.slow.centre-b.centre)*m.at
	m.phase = cphase(amp) + osc + frac1((centre-s.slow.centre)*m.at)
	out.span = span
	return out, true
}

// scan runs through the chirps that a line may have beyond the receiver's
// drift: what the drift leaves open, and over a short span those of a local that
// is being turned. It returns where the best line is, its chirp, and how many
// independent places there were; score and turn go into out.
func (s *smear) scan(plan *fourier.CmplxFFT, span, f0, reach float64, x *seek, out *hit) (at, bend, cells float64) {
	w := &s.white
	cells = max(2, 2*reach*span)
	near, best := reach, math.Inf(-1)
	if x.held { // first where it should be
		near = min(reach, 4*x.uf+0.5/span)
	}
	step := 2.4 / (span * span) // moves the ends by 0.3 turns
	k := min(8, int(math.Ceil(2*x.us/step-0.5)))
	for j := -k; j <= k; j++ {
		f, g := s.search.score(plan, w, float64(j)*step, x, f0, reach, near)
		if g > best {
			best, at, bend = g, f, float64(j)*step
		}
	}
	out.score = best
	cells *= float64(2*k + 1)
	if span > 4 {
		return at, bend, cells
	}
	step = 0.25 / (span * span)
	k = int(turnMost / step)
	for j := -k; j <= k; j++ {
		c := float64(j) * step
		if j == 0 {
			continue
		}
		if f, g := s.search.score(plan, w, c, x, f0, reach, reach); g > best+4 && g > out.score {
			out.score, out.turn, at, bend = g, c, f, c
		}
	}
	if out.turn != 0 {
		cells *= float64(2*k + 1)
	}
	return at, bend, cells
}

// straighten takes the receiver's drift out of the stretch, about its middle.
func (s *smear) straighten(slope float64) {
	if slope == 0 {
		return
	}
	st := &s.st
	e, q, qq := chirped(0, slope, st.t0, st.dt)
	for i := range st.z {
		st.z[i] *= cmplx.Conj(e)
		e *= q
		q *= qq
	}
}

// crowd returns the power of the smear to reckon with: what is there besides
// the local's and the noise's, over as long as can be, for a short span in a fade
// knows nothing of the peaks to come.
func (s *smear) crowd(x *seek) float64 {
	st, was := &s.st, x.haze.power
	const rate = 12
	s.slow.fetch(st, x.end, crowdSpan, x.haze.mu, crowdSpan*rate)
	s.gain.flatten(st)
	p, have := 0.0, 0.0
	for i, z := range st.z {
		p += real(z)*real(z) + imag(z)*imag(z)
		have += st.w[i]
	}
	p = p/max(1, have) - x.amp*x.amp - x.haze.n0/st.dt
	p = max(0.3*was, min(3*was, p))
	have *= st.dt
	return 1.3 * (20*was + have*p) / (20 + have)
}
