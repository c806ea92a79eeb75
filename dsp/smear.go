package dsp

import (
	"math"
	"math/cmplx"
)

const (
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

const homeSpan = 100.0 // s over which a smeared carrier's place is averaged

// home is a smeared carrier's mean place in the audio, weighted by its power:
// one that is taken along by the receiver's drift alone.
type home struct {
	at, f, w float64 // s, audio Hz, weight in seconds of ordinary power; 0: not known
	misses   int
}

// add takes the carrier's frequency f at time t, of a power by the usual one.
func (h *home) add(t, f, power, slope, far float64) {
	if h.w > 0 && t-h.at < 300 {
		h.f, h.w = h.when(t, slope), h.w*math.Exp(-(t-h.at)/homeSpan)
		if h.misses++; math.Abs(f-h.f) < far {
			h.misses = 0
		}
		if h.misses >= 3 { // the receiver was tuned
			h.w = 0
		} else if h.misses > 0 {
			power = 0
		}
	} else {
		h.w = 0
	}
	h.at = t
	if h.w == 0 {
		h.misses = 0
		h.f, h.w = f, max(power, 0.1)
		return
	}
	power = min(power, 3)
	h.w += power
	h.f += (f - h.f) * power / h.w
}

func (h *home) when(t, slope float64) float64 { return h.f + slope*(t-h.at) }

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

	search search

	span          float64 // stretch of the local's last fit, s; 0: none
	loc           model
	turns         bool    // seen from a local that turns, the carrier's smear cannot be measured
	still         int     // seconds since it did
	absent, could int     // spans in which no line of the local's level stands anywhere, of those in which one would show
	seen          float64 // when the local's line was last seen, s
	turned        bool    // and whether it was being turned then
	bends         bool    // the line found is being turned
	inside        bool    // the line was found within the smear
	gain          gain    // of the receiver
	flat          bool    // loc's amplitude is that at gain 1
	learnt        float64 // when the drift was last learnt from a long span, s
	dense         float64 // density of the smear at its middle, as reckoned with
	rest          anchor  // the local's own frequency, and with it the receiver's drift
	home          home    // where the carrier stands on the whole
	lever         float64 // share of the density at the local's frequency that its fit took away in the latest second, 1/s
	info          float64 // log-likelihood that the line of that fit is worth

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
	s.home, s.seen = home{}, 0
	s.ring = [len(s.ring)]complex128{}
}

// needs returns for how long a local of the given level, |z|, has to rest in the
// middle of the smear for its line to stand twenty times above it, s; NaN for
// longer than is listened to.
func (s *smear) needs(amp float64) float64 {
	if t := 20 * s.dense / (amp * amp); t <= longSpan {
		return max(10, math.Ceil(t/10)*10)
	}
	return math.NaN()
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
