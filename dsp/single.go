package dsp

import (
	"math"
	"math/cmplx"
)

const (
	maxSpan  = 8.0  // the longest window a slow beat is given, s
	cycles   = 3.0  // how many cycles of the beat a window must hold where an offset or an image lies beside it
	slowBand = 20.0 // beats below this are looked for in the band around 0 Hz, Hz
)

// single holds the one tone of a mixer's or of a quadrature input: the beat
// itself, beside the input's own offset and, for real input, its image.
type single struct {
	cfg  *Config
	plan *plan
	raw  *raw
	acq  *acquirer
	slow *acquirer
	lens *lens
	gl   *lens

	zero  *band // around 0 Hz, always there
	tone  *band // where the tone is: zero, or a band of its own
	t     track
	count phaseCount
	from  float64 // sound before this is of no use: a gap, or a jump
	torn  int     // seconds in a row that the tone was not there from end to end of its window
	x, q  []float32
	rest  *resting // the beat when it is too slow for windows of seconds
}

func newSingle(cfg *Config, p *plan, r *raw) *single {
	iq := cfg.Hookup == Quadrature
	s := &single{cfg: cfg, plan: p, raw: r, lens: newLens(p, iq), gl: newLens(p, iq),
		acq: newAcquirer(cfg.Rate, cfg.SearchLow, cfg.SearchHigh, iq), rest: newResting(cfg, p)}
	s.zero = newBand(p, 0, iq, 0, int((maxSpan+3)*p.outRate()))
	lo, hi, n := 0.0, min(slowBand, 0.45*p.outRate()), 64
	if iq {
		lo = -hi
	}
	for float64(n) < maxSpan*p.outRate() {
		n *= 2
	}
	s.slow = newAcquirerN(p.outRate(), lo, hi, iq, n)
	return s
}

func (s *single) push(x, q []float32) {
	s.zero.push(x, q)
	if s.tone != nil && s.tone != s.zero {
		s.tone.push(x, q)
	}
}

func (s *single) gap(next int64) {
	s.zero.restart(next)
	if s.tone != nil && s.tone != s.zero {
		s.tone.restart(next)
	}
	s.from = float64(next) / s.cfg.Rate
	if !s.rest.held { // a slow beat is known well enough to be counted on
		s.count.broken()
	}
}

// span returns the window for a beat of f Hz, or 0 when none would do.
func (s *single) span(f float64) float64 {
	need := max(1, 24/s.plan.outRate())
	if s.tone == s.zero {
		need = max(need, cycles/max(math.Abs(f), 1e-9))
	}
	for t := 1.0; t <= maxSpan; t *= 2 {
		if t >= need*0.999 {
			return t
		}
	}
	return 0
}

func (s *single) second(i int64) Reading {
	end := float64(i + 1)
	s.rest.ring.advance(s.zero)
	jumped := false
	switch {
	case s.rest.held:
		jumped = s.followSlow(end)
	case s.t.live && s.span(s.t.predict(end-0.5)) == 0:
		s.rest.enter(end, maxSpan)
		s.t = track{}
	case s.t.live && (!s.hold(end) || s.gaveUp()):
		s.t = track{}
		s.count.broken()
		s.from = max(s.from, end-1)
		s.rest.start = max(s.rest.start, end-1)
		jumped = true
	}
	if !s.t.live && !s.rest.held {
		s.begin(end)
		s.beginResting()
		jumped = jumped && (s.t.live || s.rest.known)
	} else if s.t.live && i%8 == 7 {
		s.beginResting()
	}
	t := float64(i) + 0.5
	r := Reading{}
	if s.t.live {
		r = s.reading(t)
	} else {
		r = s.readingAtRest(t, end)
	}
	if jumped {
		r.flag(Retuned)
	}
	return r
}

// gaveUp reports whether a slow beat has not been in one piece for so long that
// it is better looked for anew: the trimmer may have left it anywhere.
func (s *single) gaveUp() bool {
	if s.torn++; s.t.whole {
		s.torn = 0
	}
	return s.torn > 3 && s.tone == s.zero && math.Abs(s.t.f) < 1.5
}

// followSlow follows a slow beat, and leaves it to windows of seconds when it
// became faster. It reports whether the trimmer was turned.
func (s *single) followSlow(end float64) bool {
	jumped := s.rest.follow()
	switch {
	case s.rest.held && math.Abs(s.rest.fit.x.f) > handOver:
		s.rest.held = false
	case s.rest.held:
		return false
	case jumped:
		s.count.broken()
		s.from = max(s.from, min(s.rest.start, end-1))
	}
	return jumped
}

// beginResting looks for a beat that is slower than windows of seconds can
// hold. A tone that is held stays unless what moves around 0 Hz is stronger.
func (s *single) beginResting() {
	if s.t.live && (s.tone == s.zero && math.Abs(s.t.f) < slowBand || s.rest.swing() < 2*s.t.amp) {
		return
	}
	s.rest.search()
	if s.rest.held && s.t.live {
		s.t = track{}
		s.count.broken()
	}
}

// hold follows the tone through the second that ends at end.
func (s *single) hold(end float64) bool {
	f := s.t.predict(end - 0.5)
	span := s.span(f)
	if span == 0 {
		return false
	}
	if end-span < s.from-0.01 { // not enough sound since the gap: wait
		if end-s.from > maxSpan {
			return false
		}
		s.t.whole = false
		return true
	}
	return s.look(end-span/2, span, f)
}

// look fits the tone near f in the window and takes it up.
func (s *single) look(mid, span, f float64) bool {
	l := s.lens
	l.open(s.tone, mid, span, min(edge, span/2))
	if l.valid < 0.8 {
		s.t.whole = false
		return s.t.live
	}
	l.add(f-s.tone.centre, s.t.c)
	if s.tone == s.zero && math.Abs(f) < slowBand {
		l.lines = append(l.lines, line{f: -s.tone.centre, ghost: true})
	}
	ok := l.solve(s.tone, true)
	l.lines = l.lines[:1]
	if !ok || math.Abs(l.lines[0].f+s.tone.centre-f) > 2/span {
		return false
	}
	if !s.cfg.signed() && l.lines[0].f+s.tone.centre < 0 {
		return false
	}
	l.take(&s.t, s.tone, mid, 0)
	return s.t.tail
}

// signed reports whether the input tells the sign of the beat by itself.
func (c *Config) signed() bool { return c.Hookup == Quadrature }

// begin searches for the strongest tone.
func (s *single) begin(end float64) {
	x, q := s.raw.tail(int64(math.Ceil((end+edge)*s.cfg.Rate)), s.acq.need())
	best := found{}
	bin := s.acq.rate / float64(s.acq.n)
	for _, l := range s.acq.search(x, q) {
		if math.Abs(l.f) > 3.5*bin {
			best = l
			break
		}
	}
	if l := s.beginSlow(end); l.amp > best.amp {
		best = l
	}
	if best.amp == 0 {
		return
	}
	s.tone = s.zero
	if math.Abs(best.f) > 0.8*s.plan.half && s.plan.d1*s.plan.d2 > 1 {
		s.tone = newBand(s.plan, best.f, s.cfg.Hookup == Quadrature, s.raw.first(), int((maxSpan+3)*s.plan.outRate()))
		s.raw.prime(s.tone)
	}
	span := s.span(best.f)
	if span == 0 {
		return
	}
	s.t = track{}
	if end-span < s.from-0.01 || !s.look(end-span/2, span, best.f) || !s.t.whole {
		s.t = track{}
	}
}

// beginSlow searches the band around 0 Hz.
func (s *single) beginSlow(end float64) found {
	l := s.lens
	n := s.slow.n
	span := min(float64(n)/s.plan.outRate(), maxSpan)
	if end-span < s.from {
		return found{}
	}
	l.open(s.zero, end-span/2, span, 0)
	if l.valid < 0.99 {
		return found{}
	}
	s.x, s.q = resize(s.x, n), resize(s.q, n)
	for i := range s.x {
		s.x[i], s.q[i] = 0, 0
	}
	// A stretch shorter than the transform is laid in its middle of zeros,
	// without its mean, under the transform's own window.
	var mean complex128
	for _, z := range l.win.z {
		mean += z / complex(float64(len(l.win.z)), 0)
	}
	off := max(0, (n-len(l.win.z))/2)
	for i, z := range l.win.z {
		if off+i < n {
			s.x[off+i], s.q[off+i] = float32(real(z-mean)), float32(imag(z-mean))
		}
	}
	bin := s.plan.outRate() / float64(n)
	for _, f := range s.slow.search(s.x, s.q) {
		if math.Abs(f.f) > 3.5*bin {
			if s.cfg.Hookup != Quadrature {
				f.amp /= 2 // the band has doubled real input already
			}
			return f
		}
	}
	return found{}
}

// reading says what the last second said of a tone that windows of seconds
// hold. The level and C/N0 of the beat note stand in the carrier's columns: that
// is whose strength they follow.
func (s *single) reading(t float64) Reading {
	r := Blank(t, Apart)
	r.PhaseRun = s.count.run
	r.CarrierDBFS = 20 * math.Log10(s.t.amp)
	r.CarrierCN0 = 10 * math.Log10(s.t.cn0())
	if !s.t.whole {
		r.Why = "the beat was not there, or jumped, within the span"
		return r
	}
	f := s.t.f
	sign := s.say(&r, f, s.t.uf, 2*s.lens.win.half)
	dt := t - s.t.at
	ph := s.t.phase + f*dt + s.t.c*dt*dt/2 + s.lens.latest()
	r.Phase = s.count.next(t, sign*ph, sign*(f+s.t.c*dt), s.t.uf)
	r.PhaseRun = s.count.run
	return r
}

// latest returns by how many turns the first line's phase in the last second of
// a longer window differs from the fit's: windows overlap, seconds do not, and
// whoever regresses the phase wants noise that is new in every second.
func (l *lens) latest() float64 {
	if l.win.half < 1 {
		return 0
	}
	x := &l.lines[0]
	sum, n := 0.0, 0.0
	for i, r := range l.fit.r {
		t := l.win.t0 + float64(i)*l.win.dt
		if t < l.win.half-1 || t >= l.win.half || !l.win.ok[i] {
			continue
		}
		m := x.a * cmplx.Rect(1, 2*math.Pi*x.f*t+math.Pi*x.c*t*t)
		sum += imag(r * cmplx.Conj(m))
		n++
	}
	if n == 0 {
		return 0
	}
	return sum / n / (real(x.a)*real(x.a) + imag(x.a)*imag(x.a)) / (2 * math.Pi)
}

// say fills in the beat of f +- u Hz, with its sign where that is known, and
// returns the sign that its phase counts with.
func (s *single) say(r *Reading, f, u, span float64) float64 {
	scale := 1 + s.cfg.SampleRateError
	sign, d0 := s.cfg.sign(), s.cfg.SetOff()
	r.BeatAbs, r.BeatU, r.Span = math.Abs(f)*scale, u*scale, span
	known := s.cfg.signed()
	if !known {
		sign = 1
		r.Why = "one tone at the size of the beat: this hook-up has no sign"
		if math.Abs(d0) >= 1 && math.Abs(math.Abs(f)-math.Abs(d0)) < 0.5*math.Abs(d0) {
			known, sign = true, math.Copysign(1, d0)
			r.Why = "sign from the set-off"
		}
	}
	if known {
		r.Beat = sign * f * scale
		r.Error = r.Beat - d0
		r.Offset = r.Error / s.cfg.Local
		r.OffsetU = r.BeatU / s.cfg.Local
	}
	return sign
}

func (s *single) glimpse(from, upto float64, g *Glimpse) {
	if !s.t.live {
		s.glimpseAtRest(from, upto, g)
		return
	}
	g.State = Apart
	span := max(upto-from, min(maxSpan, cycles/max(math.Abs(s.t.f), 1e-9)), 24/s.plan.outRate())
	if s.tone != s.zero {
		span = upto - from
	}
	if upto-span < s.from {
		return
	}
	mid := upto - span/2
	l := s.gl
	l.open(s.tone, mid, span, 0)
	l.add(s.t.predict(mid)-s.tone.centre, 0)
	if s.tone == s.zero && math.Abs(s.t.f) < slowBand {
		l.lines = append(l.lines, line{f: -s.tone.centre, ghost: true})
	}
	if l.valid < 0.95 || !l.solve(s.tone, false) {
		return
	}
	x := &l.lines[0]
	if r := math.Hypot(real(x.a), imag(x.a)) / s.tone.gain(x.f) / s.t.amp; r < 0.3 || r > 3 {
		return
	}
	f := (x.f + s.tone.centre) * (1 + s.cfg.SampleRateError) * s.cfg.sign()
	g.T, g.BeatAbs, g.BeatU = mid, math.Abs(f), x.uf*math.Sqrt(s.t.noise)
	if s.cfg.signed() {
		g.Beat = f
	}
	ph := s.cfg.sign() * (cphase(x.a) + s.tone.oscillator(mid) + (x.f+s.tone.centre)*(upto-mid))
	g.Turn = ph - math.Floor(ph)
}
