package dsp

import (
	"math"
	"math/cmplx"
)

const (
	localSpan   = 32.0  // the longest stretch over which the local's line is fitted, s
	phasorRate  = 10    // phasors of the carrier kept a second
	phasorSpan  = 120   // s
	spreadLeast = 0.015 // Hz: a narrower carrier is a line
)

// model is a line as it runs on: phase in turns at time at, frequency in audio
// Hz, chirp, amplitude by full scale.
type model struct {
	at, phase, f, c, amp float64
}

// turnsAt returns the phase at time t.
func (m *model) turnsAt(t float64) float64 {
	d := t - m.at
	return m.phase + m.f*d + m.c*d*d/2
}

// smear looks at a carrier that fades. The local's line, which does not, is
// fitted over many seconds and taken away; what is left is seen in the local's
// own frame, where the receiver's drift is gone, and its mean frequency is the
// centre of gravity of its power: the pulse-pair mean of Zrnic (J. Appl.
// Meteorol. 1977) and Doviak & Zrnic, here as the first moment of the
// periodogram, free of the noise's own bias.
type smear struct {
	slow *slow
	win  window

	span  float64 // stretch of the local's last fit, s; 0: none
	loc   model
	lever float64 // share of the density at the local's frequency that its fit took away in the latest second, 1/s

	mean   float64 // carrier - local in the audio, Hz, smoothed
	beat   float64 // the same in the latest second alone, NaN: not known
	u      float64 // its standard uncertainty as received, Hz
	power  float64 // of the carrier in the latest second, full scale 1
	phase  float64 // carrier - local at the second's middle, turns
	sigma  float64 // rms Doppler width, Hz; NaN: not known
	slowly float64 // power of the carrier over some twenty seconds

	ring [phasorRate * phasorSpan]complex128 // of the carrier by the local, turned back by ref*t; 0: none
	n    int64                               // number of the next one
	ref  float64
	dft  []complex128
}

func newSmear(s *slow) *smear {
	return &smear{slow: s, beat: math.NaN(), sigma: math.NaN()}
}

// forget starts afresh, as when the pair is lost.
func (s *smear) forget() {
	s.span, s.beat, s.sigma, s.slowly = 0, math.NaN(), math.NaN(), 0
	s.ring = [len(s.ring)]complex128{}
}

// follow fits the local's line over the longest stretch up to end that it runs
// through undisturbed. guess is where it is now. It returns false when none
// of a second or more does.
func (s *smear) follow(b *band, end float64, guess model) bool {
	try := min(2*max(s.span, 1), localSpan)
	if s.span == 0 {
		s.loc = guess
	}
	for ; try >= 1; try /= 2 {
		start := s.loc
		if try == 1 && math.Abs(guess.f-s.loc.f) > 0.2 {
			start = guess
		}
		if m, ok := s.fitLocal(b, end, try, start); ok {
			s.loc, s.span = m, try
			return true
		}
	}
	s.span = 0
	return false
}

// fitLocal fits phase, frequency, chirp and amplitude of one line over the span
// that ends at end, by Gauss-Newton steps on the phase and amplitude of the
// sound against the model.
func (s *smear) fitLocal(b *band, end, span float64, m model) (model, bool) {
	end = min(end, s.slow.upto())
	mid := end - span/2
	if s.slow.open(&s.win, mid, span, 0) < 0.9 {
		return m, false
	}
	w := &s.win
	s.taper(span)
	osc := func(t float64) float64 { return b.oscillator(t) + (s.slow.centre-b.centre)*t }
	f := m.f + m.c*(mid-m.at) - s.slow.centre
	c := m.c
	var a complex128
	if span <= 4 {
		f = s.nearest(f, 1.5/span)
	}
	f0 := f
	for range 5 {
		var df, dc float64
		a, df, dc = s.step(f, c)
		f += df
		c += dc
		if math.Abs(f-f0) > 2/span || math.IsNaN(f) {
			return m, false
		}
		if math.Abs(df)*span < 1e-5 && math.Abs(dc)*span*span < 1e-5 {
			break
		}
	}
	if a == 0 || !s.steady(a, f, c, span) {
		return m, false
	}
	ph := cphase(a) + osc(mid)
	s.lever = leverage(span)
	return model{mid, ph, f + s.slow.centre, c, cmplx.Abs(a) / b.gain(f+s.slow.centre-b.centre)}, w.used > 0
}

// taper gives the window's old end a quarter of the span to fade in and the new
// one up to a second: there the fit must still hold, and there the carrier's
// smear must not leak into the line.
func (s *smear) taper(span float64) {
	w := &s.win
	in, out := span/4, min(1, span/4)
	w.used = 0
	for i := range w.z {
		t := w.t0 + float64(i)*w.dt
		g := 1.0
		if e := t + w.half; e < in {
			g *= 0.5 - 0.5*math.Cos(math.Pi*e/in)
		}
		if e := w.half - t; e < out {
			g *= 0.5 - 0.5*math.Cos(math.Pi*e/out)
		}
		if !w.ok[i] {
			g = 0
		}
		w.w[i] = g
		w.used += g * w.dt
	}
}

// nearest returns the strongest frequency within reach of f in the window.
func (s *smear) nearest(f, reach float64) float64 {
	best, at := 0.0, f
	for k := -6; k <= 6; k++ {
		g := f + float64(k)/6*reach
		if p := energyAt(s.win.z, &s.win, g); p > best {
			best, at = p, g
		}
	}
	return at
}

// step returns the amplitude at f, c and the corrections of both.
func (s *smear) step(f, c float64) (a complex128, df, dc float64) {
	w := &s.win
	var sw float64
	e, q, qq := chirped(f, c, w.t0, w.dt)
	s.dft = resize(s.dft, len(w.z))
	for i, z := range w.z {
		v := z * cmplx.Conj(e)
		s.dft[i] = v
		a += v * complex(w.w[i], 0)
		sw += w.w[i]
		e *= q
		q *= qq
	}
	if sw == 0 || a == 0 {
		return 0, math.NaN(), 0
	}
	a /= complex(sw, 0)
	var m [5]float64
	var r [3]float64
	inv := 1 / a
	for i, v := range s.dft {
		u := (w.t0 + float64(i)*w.dt) / w.half
		y := imag(v*inv) * w.w[i]
		r[0] += y
		r[1] += y * u
		r[2] += y * u * u
		g := w.w[i]
		for k := range m {
			m[k] += g
			g *= u
		}
	}
	x := solve3([3][3]float64{{m[0], m[1], m[2]}, {m[1], m[2], m[3]}, {m[2], m[3], m[4]}}, r)
	return a, x[1] / (2 * math.Pi * w.half), x[2] / (math.Pi * w.half * w.half)
}

// chirped returns exp(j(2 pi f t + pi c t^2)) at t0 and the factors by which it
// goes on by steps of dt.
func chirped(f, c, t0, dt float64) (e, q, qq complex128) {
	return cmplx.Rect(1, 2*math.Pi*f*t0+math.Pi*c*t0*t0),
		cmplx.Rect(1, 2*math.Pi*f*dt+math.Pi*c*dt*(2*t0+dt)),
		cmplx.Rect(1, 2*math.Pi*c*dt*dt)
}

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

// steady reports whether the window's line runs through it undisturbed: eighths
// of it agree in phase.
func (s *smear) steady(a complex128, f, c, span float64) bool {
	w := &s.win
	var part [8]complex128
	var weight [8]float64
	for i, v := range s.dft { // of the last step: turned back by the line
		k := min(7, i*8/len(s.dft))
		part[k] += v * complex(w.w[i], 0)
		weight[k] += w.w[i]
	}
	var sum complex128
	var power float64
	for k := range part {
		if weight[k] == 0 {
			continue
		}
		d := part[k] / a
		sum += d
		power += real(d*cmplx.Conj(d)) / weight[k]
	}
	var all float64
	for _, v := range weight {
		all += v
	}
	coherent := real(sum*cmplx.Conj(sum)) / all / power
	return coherent > 0.75
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
