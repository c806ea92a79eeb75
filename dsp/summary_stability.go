package dsp

import (
	"math"

	"offbeat/dsp/stability"
)

// stability returns the overlapping Allan deviation of the offset at every
// octave of tau that the run allows.
func (s *Summer) stability() []StabilityPoint {
	out := []StabilityPoint{}
	x := make([]float64, len(s.phase))
	for i, p := range s.phase {
		x[i] = p / s.cfg.Local
	}
	for m := 1; 3*m < len(x); m *= 2 {
		a, n := stability.Overlapping(x, s.run, float64(s.tau0), m)
		if n < 2 || !(a > 0) {
			continue
		}
		p := StabilityPoint{Tau: float64(m * s.tau0), Adev: a, N: n, Low: Num(math.NaN()), High: Num(math.NaN())}
		noise, ok := stability.Identify(x, s.run, m)
		if !ok && len(out) > 0 { // too few points: the noise of the tau before, or white FM
			noise, ok = stability.Noise(0), true
		}
		if ok {
			lo, hi := stability.Limits(a, stability.EDF(noise, n+2*m, m), 0.6827)
			p.Low, p.High = Num(lo), Num(hi)
		}
		out = append(out, p)
	}
	return out
}

// drift returns the slope of the offset per day by least squares, NaN unless
// it exceeds twice its own uncertainty.
func (s *Summer) drift() float64 {
	var n, mt, mb, xx, xy float64
	for i, b := range s.beat {
		if math.IsNaN(b) {
			continue
		}
		n++
		dt := float64(i*s.tau0) - mt
		mt += dt / n
		mb += (b - mb) / n
		xx += dt * (float64(i*s.tau0) - mt)
		xy += dt * (b - mb)
	}
	if n < 60 || xx == 0 {
		return math.NaN()
	}
	slope := xy / xx
	var rr, r1, last float64
	have := false
	for i, b := range s.beat {
		if math.IsNaN(b) {
			have = false
			continue
		}
		d := b - mb - slope*(float64(i*s.tau0)-mt)
		rr += d * d
		if have {
			r1 += d * last
		}
		last, have = d, true
	}
	rho := max(0, min(0.99, r1/rr))
	u := math.Sqrt(rr / (n - 2) / xx * (1 + rho) / (1 - rho)) // neighbours that resemble each other count for less
	if !(math.Abs(slope) > 2*u) {
		return math.NaN()
	}
	return slope * 86400 / s.cfg.Local * s.clock.scale(&s.cfg)
}
