package dsp

import (
	"math"
	"math/cmplx"
)

const (
	longSpan    = 128.0 // the longest stretch over which the local's line is fitted, s
	phasorRate  = 10    // phasors of the carrier kept a second
	phasorSpan  = 120   // s
	spreadLeast = 0.015 // Hz: a narrower carrier is a line
)

// model is a line as it runs on: phase in turns at time at, frequency in audio
// Hz, chirp, amplitude by full scale.
type model struct {
	at, phase, f, c, amp float64
	uf                   float64 // of f, Hz
}

// turnsAt returns the phase at time t.
func (m *model) turnsAt(t float64) float64 {
	d := t - m.at
	return m.phase + m.f*d + m.c*d*d/2
}

func (m *model) when(t float64) float64 { return m.f + m.c*(t-m.at) }

// smear looks at a carrier that fades. The local's line, which does not, is
// found by generalised least squares in the carrier's own smear, over as many
// seconds as that takes, and taken away; what is left is seen in the local's
// frame, where the receiver's drift is gone, and its mean frequency is the
// centre of gravity of its power: the pulse-pair mean of Zrnic (J. Appl.
// Meteorol. 1977) and Doviak & Zrnic, here as the first moment of the
// periodogram, free of the noise's own bias.
type smear struct {
	slow  *slow
	st    stretch
	white whitener

	span  float64 // stretch of the local's last fit, s; 0: none
	loc   model
	turns bool    // seen from a local that turns, the carrier's smear cannot be measured
	still int     // seconds since it did
	lever float64 // share of the density at the local's frequency that its fit took away in the latest second, 1/s

	mean   float64 // carrier - local in the audio, Hz, smoothed
	beat   float64 // the same in the latest second alone, NaN: not known
	u      float64 // its standard uncertainty as received, Hz
	power  float64 // of the carrier in the latest second, |z|^2
	powerU float64
	phase  float64 // carrier - local at the second's middle, turns
	sigma  float64 // rms Doppler width, Hz; NaN: not known
	steady float64 // share of the carrier's power in one line, 0 to 1; NaN: not known
	slowly float64 // power of the carrier over some twenty seconds

	ring   [phasorRate * phasorSpan]complex128 // of the carrier by the local, turned back by ref*t; 0: none
	n      int64                               // number of the next one
	ref    float64
	dft    []complex128
	shaded []complex128 // dft under the window's weights
}

func newSmear(s *slow) *smear {
	return &smear{slow: s, beat: math.NaN(), sigma: math.NaN(), steady: math.NaN()}
}

// forget starts afresh, as when the pair is lost.
func (s *smear) forget() {
	s.span, s.beat, s.sigma, s.slowly, s.steady = 0, math.NaN(), math.NaN(), 0, math.NaN()
	s.ring = [len(s.ring)]complex128{}
}

// seek says where to look for the local's line.
type seek struct {
	end       float64 // s
	haze      haze    // mu in audio Hz at end
	amp       float64 // the local's level, |z|, and the range it may lie in
	lo, hi    float64
	f, reach  float64 // expected at end, audio Hz, and how far from there to look
	slope, us float64 // the receiver's drift
}

// hit is a line found over one span.
type hit struct {
	m           model
	span        float64
	turn        float64 // by how much it bends more than the receiver drifts, Hz/s
	score, next float64 // log-likelihood gain, and that of the best other place
}

// at returns the frequency at time t and its uncertainty there.
func (h *hit) at(t float64) (f, u float64) {
	return h.m.when(t), h.m.uf * (1 + 2*math.Abs(t-h.m.at)/h.span)
}

// find looks for the local's line over spans from 2 s up and takes the longest
// whose answer the shorter ones do not contradict.
func (s *smear) find(b *band, x *seek) bool {
	var best hit
	for span := 2.0; span <= longSpan; span *= 2 {
		h, ok := s.try(b, span, 0, x)
		if span <= 4 {
			if t, turns := s.turning(b, span, x); turns && (!ok || t.score > h.score+4) {
				h, ok = t, true
			}
		}
		if !ok {
			if best.span > 0 && span > 4*best.span {
				break
			}
			continue
		}
		if best.span > 0 {
			f1, u1 := best.at(x.end)
			f2, u2 := h.at(x.end)
			if math.Abs(f1-f2) > 4*math.Hypot(u1, u2)+1e-3 {
				continue
			}
		}
		best = h
	}
	// In the middle of the smear only a line that rests can be told from its tops.
	inside := math.Abs(best.m.when(x.end)-x.haze.mu) < 2.5*x.haze.sigma
	if best.span == 0 || inside && (best.span < 8 || !(s.steady < 0.4 || math.IsNaN(s.steady) && s.sigma > 0.15)) {
		s.span = 0
		return false
	}
	if s.gone(b, &best, x) {
		s.span = 0
		return false
	}
	s.moving(best.span <= 4)
	s.loc, s.span = best.m, best.span
	s.lever = leverage(best.span)
	return true
}

// turning looks for a line that bends, as a local under trim does.
func (s *smear) turning(b *band, span float64, x *seek) (hit, bool) {
	var best hit
	found := false
	for k := -8; k <= 8; k++ {
		c := float64(k) * 0.25 / (span * span)
		if k == 0 || math.Abs(c) > 0.6 {
			continue
		}
		if h, ok := s.try(b, span, c, x); ok && h.score > best.score {
			best, found = h, true
		}
	}
	return best, found
}

// try scores every frequency within reach over one span and refines the best.
func (s *smear) try(b *band, span, turn float64, x *seek) (hit, bool) {
	half := math.Abs(x.haze.mu-x.f) + x.reach + 3.5*x.haze.sigma + 0.5
	rate := min(s.slow.rate, 2.2*half)
	n := int(span * rate)
	if n > 2048 {
		return hit{}, false
	}
	centre := x.f
	s.slow.fetch(&s.st, x.end, span, centre, n)
	if s.st.valid < 0.95 || len(s.st.z) < 24 {
		return hit{}, false
	}
	d := x.end - s.st.mid
	h := x.haze
	h.mu = x.haze.mu - x.slope*d - centre
	order := int(min(maxOrder, max(8, 1.2/(max(h.sigma, 1e-3)*s.st.dt)), float64(len(s.st.z)/4)))
	s.white.set(h, s.st.dt, order)
	s.white.take(&s.st)
	c := x.slope + turn
	f0 := -c * d // expected in the middle, if it is at x.f in the end
	step := 0.35 / span
	reach := x.reach + 1.5/span
	var out hit
	at := 0.0
	scores := s.dft[:0]
	for f := f0 - reach; f <= f0+reach; f += step {
		g, _ := s.white.score(f, c, x.lo, x.hi)
		scores = append(scores, complex(f, g))
		if g > out.score {
			out.score, at = g, f
		}
	}
	for _, v := range scores {
		if math.Abs(real(v)-at) > 1.6/span {
			out.next = max(out.next, imag(v))
		}
	}
	s.dft = scores
	cells := math.Log(max(2, 2*reach*span))
	if turn != 0 {
		cells += math.Log(17)
	}
	if out.score < 8+cells || out.score-out.next < 6 {
		return out, false
	}
	uc := math.Hypot(x.us, 1e-6)
	if turn != 0 {
		uc = 0.3 / (span * span)
	}
	f, c2, uf, amp := s.white.refine(at, c, c, uc)
	if amp == 0 || math.Abs(f-at) > 1/span {
		return out, false
	}
	m := &out.m
	m.at, m.f, m.c, m.uf = s.st.mid, f+centre, c2, uf
	m.amp = cmplx.Abs(amp) / b.gain(f+centre-b.centre)
	osc := b.oscillator(m.at) + (s.slow.centre-b.centre)*m.at
	m.phase = cphase(amp) + osc + frac1((centre-s.slow.centre)*m.at)
	out.span, out.turn = span, turn
	return out, true
}

// needs returns for how long a local of the given level has to rest in the middle
// of the smear for its line to stand twenty times above it, s.
func (s *smear) needs(amp float64) float64 {
	dense := s.slowly / (math.Sqrt(2*math.Pi) * max(s.sigma, 1e-3))
	t := 8.0
	for t < 300 && t*amp*amp < 20*dense {
		t *= 1.25
	}
	return math.Ceil(t/10) * 10
}

// moving keeps account of whether the local is being turned.
func (s *smear) moving(turns bool) {
	s.still++
	if turns {
		s.still = 0
	}
	s.turns = s.still < 3 && !math.IsNaN(s.sigma)
}

func frac1(v float64) float64 { return v - math.Floor(v) }

// solve3 solves a symmetric positive system of three.
func solve3(m [3][3]float64, r [3]float64) [3]float64 {
	for i := range 3 {
		for k := i + 1; k < 3; k++ {
			g := m[k][i] / m[i][i]
			for j := i; j < 3; j++ {
				m[k][j] -= g * m[i][j]
			}
			r[k] -= g * r[i]
		}
	}
	for i := 2; i >= 0; i-- {
		for j := i + 1; j < 3; j++ {
			r[i] -= m[i][j] * r[j]
		}
		r[i] /= m[i][i]
	}
	return r
}

// chirped returns exp(j(2 pi f t + pi c t^2)) at t0 and the factors by which it
// goes on by steps of dt.
func chirped(f, c, t0, dt float64) (e, q, qq complex128) {
	return cmplx.Rect(1, 2*math.Pi*f*t0+math.Pi*c*t0*t0),
		cmplx.Rect(1, 2*math.Pi*f*dt+math.Pi*c*dt*(2*t0+dt)),
		cmplx.Rect(1, 2*math.Pi*c*dt*dt)
}

// leverage returns the density-to-power factor of a line's fit (amplitude,
// phase, frequency, chirp) in the last second of its span: half the sum of
// (2k+1) P_k(u)^2 over the span, the Legendre form of a polynomial fit's
// leverage.
func leverage(span float64) float64 {
	sum := 0.0
	const n = 10
	for i := range n {
		u := 1 - (float64(i)+0.5)/n*2/span
		u = max(-1, u)
		p := (3*u*u - 1) / 2
		sum += 1 + 1 + 3*u*u + 5*p*p
	}
	return sum / n / 2 / span
}
