package dsp

import "math"

// byPower returns the mean beat weighted by the carrier's power, second by
// second: over the whole run that is the pulse-pair mean of the carrier's
// Doppler spectrum (Zrnic 1977; Doviak & Zrnic). Its uncertainty comes from the
// run itself: the density at frequency zero of what every second adds, by a few
// sine tapers (Riedel & Sidorenko, IEEE Trans. SP-43, 1995; from memory), so
// that neighbours that resemble each other count for less.
func (s *Summer) byPower() (mean, u float64, ok bool) {
	var w, wf, n float64
	for i := range s.w {
		if s.w[i] > 0 {
			w += s.w[i]
			wf += s.wf[i]
			n++
		}
	}
	if n < 10 {
		return 0, 0, false
	}
	mean = wf / w
	g := make([]float64, len(s.w))
	for i := range g {
		g[i] = s.wf[i] - mean*s.w[i]
	}
	// The fading's own width says how far the density is flat, and by itself what
	// the mean of a Gaussian spectrum is worth: few tapers are scattered, a
	// formula is blind, so both are heard.
	span := float64(len(g) * s.tau0)
	width := s.spread / max(1, float64(s.spreadN))
	k := int(max(6, min(float64(len(g))/4, 0.6*width*span)))
	v := density0(g, 1, k) * float64(len(g)) / (w * w)
	seen := span * n / float64(len(g))
	known := width / (4 * math.Sqrt(math.Pi) * seen)
	const weight = 12
	return mean, 1.1 * math.Sqrt((2*float64(k)*v+weight*max(known, v/4))/(2*float64(k)+weight)), true
}

// density0 returns the density of g around frequency zero, per sample, as the
// mean over sine tapers first..last.
func density0(g []float64, first, last int) float64 {
	sum := 0.0
	n := float64(len(g) + 1)
	for k := first; k <= last; k++ {
		y := 0.0
		// sin(pi k (i+1)/n) by recursion
		c := 2 * math.Cos(math.Pi*float64(k)/n)
		a, b := 0.0, math.Sin(math.Pi*float64(k)/n)
		for _, v := range g {
			y += v * b
			a, b = b, c*b-a
		}
		sum += y * y * 2 / n
	}
	return sum / float64(last-first+1)
}
