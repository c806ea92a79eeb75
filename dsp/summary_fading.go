package dsp

import (
	"math"
	"math/cmplx"
)

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

// coherent looks for one line in the carrier as seen from the local: the
// frequency at which the phasors of all seconds add up best, each run of
// unbroken phase by itself. Deep fades weigh little, and slip no cycle. It is
// taken only where most of the power stands in that line; its uncertainty comes
// from the phase that is left, by its density near frequency zero.
func (s *Summer) coherent() (mean, u float64, ok bool) {
	z := make([]complex128, len(s.phase))
	var power, w, wf float64
	for i, p := range s.phase {
		if a := s.level[i]; a > 0 && !math.IsNaN(p) {
			z[i] = cmplx.Rect(a, 2*math.Pi*(p-math.Floor(p)))
			power += a * a
			w += s.w[i]
			wf += s.wf[i]
		}
	}
	if power == 0 {
		return 0, 0, false
	}
	longest := 0
	s.eachRun(func(lo, hi int) { longest = max(longest, hi-lo) })
	if longest < 20 {
		return 0, 0, false
	}
	f := s.climb(z, wf/w, float64(longest))
	share, sxx := 0.0, 0.0
	q := make([]float64, 0, len(z))
	s.eachRun(func(lo, hi int) {
		sum := s.sum(z, lo, hi, f)
		n := 0.0
		for i := lo; i < hi; i++ {
			if z[i] != 0 {
				n++
			}
		}
		if n < 3 || sum == 0 {
			return
		}
		share += real(sum*cmplx.Conj(sum)) / n
		b := sum / complex(n, 0)
		mid := float64(lo+hi-1) / 2
		for i := lo; i < hi; i++ {
			d := 0.0
			if z[i] != 0 {
				d = imag(z[i] / b * s.turnBack(i, f))
			}
			q = append(q, d)
			sxx += (float64(i) - mid) * (float64(i) - mid)
		}
	})
	dt := float64(s.tau0)
	if share < 0.6*power || len(q) < 20 {
		return 0, 0, false
	}
	u = math.Sqrt(density0(q, 3, 12)/(sxx*dt*dt)) / (2 * math.Pi)
	return f, u, true
}

func (s *Summer) turnBack(i int, f float64) complex128 {
	x := f * float64(i*s.tau0)
	return cmplx.Rect(1, -2*math.Pi*(x-math.Floor(x)))
}

func (s *Summer) sum(z []complex128, lo, hi int, f float64) complex128 {
	y := complex(0, 0)
	e, q := s.turnBack(lo, f), s.turnBack(1, f)
	for i := lo; i < hi; i++ {
		y += z[i] * e
		e *= q
	}
	return y
}

// climb returns the frequency near f0 at which the runs add up best.
func (s *Summer) climb(z []complex128, f0, longest float64) float64 {
	score := func(f float64) float64 {
		v := 0.0
		s.eachRun(func(lo, hi int) {
			y := s.sum(z, lo, hi, f)
			v += (real(y)*real(y) + imag(y)*imag(y)) / float64(hi-lo)
		})
		return v
	}
	step := 0.3 / (longest * float64(s.tau0))
	best, at := 0.0, f0
	for k := -60; k <= 60; k++ {
		if v := score(f0 + float64(k)*step); v > best {
			best, at = v, f0+float64(k)*step
		}
	}
	for range 14 { // the top by halving steps of a parabola's width
		step /= 2
		for _, f := range [2]float64{at - step, at + step} {
			if v := score(f); v > best {
				best, at = v, f
			}
		}
	}
	return at
}
