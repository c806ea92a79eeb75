// Package stability says what a row of phase readings is worth: Allan
// deviations with their confidence, and the kind of noise behind them.
//
// Phase x is in seconds (or any unit: the deviations then come per second of
// that unit), evenly spaced by tau0 seconds. A missing value is NaN, and a
// break of continuity is a change of run: no difference is ever taken across
// either. References are to W. J. Riley, Handbook of Frequency Stability
// Analysis, NIST Special Publication 1065, 2008.
package stability

import (
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// Overlapping returns the overlapping Allan deviation of phase x at averaging
// time m*tau0 (SP 1065 section 5.2.4), and the number of second differences
// that entered; NaN and 0 when there is none. run, if not nil, numbers the
// stretches within which phase is continuous.
func Overlapping(x []float64, run []int32, tau0 float64, m int) (adev float64, n int) {
	sum := 0.0
	for i := 0; i+2*m < len(x); i++ {
		if run != nil && (run[i] != run[i+m] || run[i] != run[i+2*m]) {
			continue
		}
		d := x[i+2*m] - 2*x[i+m] + x[i]
		if math.IsNaN(d) {
			continue
		}
		sum += d * d
		n++
	}
	if n == 0 {
		return math.NaN(), 0
	}
	tau := float64(m) * tau0
	return math.Sqrt(sum / (2 * tau * tau * float64(n))), n
}

// Noise is the exponent alpha of a power-law spectrum of fractional frequency:
// 2 white PM, 1 flicker PM, 0 white FM, -1 flicker FM, -2 random walk FM.
type Noise int

// String names the noise.
func (a Noise) String() string {
	switch {
	case a >= 2:
		return "white pm"
	case a == 1:
		return "flicker pm"
	case a == 0:
		return "white fm"
	case a == -1:
		return "flicker fm"
	}
	return "random walk fm"
}

// Identify returns the noise type of phase x at averaging factor m by the
// lag-1 autocorrelation (Riley & Greenhall, EFTF 2004; SP 1065 section 5.5.2):
// decimate by m, remove a quadratic, difference until stationary. It takes the
// longest unbroken stretch and reports false when fewer than 30 points are left
// there.
func Identify(x []float64, run []int32, m int) (Noise, bool) {
	a, ok := Alpha(x, run, m)
	if !ok {
		return 0, false
	}
	return Noise(max(-2, min(2, math.Round(a)))), true
}

// Alpha is the estimate behind Identify before rounding.
func Alpha(x []float64, run []int32, m int) (float64, bool) {
	lo, hi := longest(x, run)
	var z []float64
	for i := lo; i < hi; i += m {
		z = append(z, x[i])
	}
	if len(z) < 30 {
		return 0, false
	}
	removeQuadratic(z)
	const dmax = 2
	for d := 0; ; d++ {
		r := lag1(z)
		delta := r / (1 + r)
		if delta < 0.25 || d >= dmax {
			return -2*(delta+float64(d)) + 2, true
		}
		for i := range len(z) - 1 {
			z[i] = z[i+1] - z[i]
		}
		z = z[:len(z)-1]
	}
}

// longest returns the longest stretch without NaN or change of run.
func longest(x []float64, run []int32) (lo, hi int) {
	start := 0
	for i := 0; i <= len(x); i++ {
		if i == len(x) || math.IsNaN(x[i]) || run != nil && i > start && run[i] != run[i-1] {
			if i-start > hi-lo {
				lo, hi = start, i
			}
			start = i
			if i < len(x) && math.IsNaN(x[i]) {
				start = i + 1
			}
		}
	}
	return lo, hi
}

func lag1(z []float64) float64 {
	mean := 0.0
	for _, v := range z {
		mean += v / float64(len(z))
	}
	var a, b float64
	for i, v := range z {
		b += (v - mean) * (v - mean)
		if i > 0 {
			a += (v - mean) * (z[i-1] - mean)
		}
	}
	if b == 0 {
		return 0
	}
	return a / b
}

// removeQuadratic subtracts the least-squares quadratic, by orthogonal
// polynomials on the centred grid.
func removeQuadratic(z []float64) {
	n := float64(len(z))
	c := (n - 1) / 2
	q0 := (n*n - 1) / 12
	var s0, s1, s2, n1, n2 float64
	for i, v := range z {
		t := float64(i) - c
		p := t*t - q0
		s0 += v
		s1 += v * t
		s2 += v * p
		n1 += t * t
		n2 += p * p
	}
	for i := range z {
		t := float64(i) - c
		z[i] -= s0/n + s1/n1*t + s2/n2*(t*t-q0)
	}
}

// EDF returns the equivalent degrees of freedom of the overlapping Allan
// variance of n phase points at averaging factor m (SP 1065 Table 5).
func EDF(a Noise, n, m int) float64 {
	N, M := float64(n), float64(m)
	var e float64
	switch a {
	case 2:
		e = (N + 1) * (N - 2*M) / (2 * (N - M))
	case 1:
		e = math.Exp(math.Sqrt(math.Log((N-1)/(2*M)) * math.Log((2*M+1)*(N-1)/4)))
	case 0:
		e = (3*(N-1)/(2*M) - 2*(N-2)/N) * 4 * M * M / (4*M*M + 5)
	case -1:
		if m == 1 {
			e = 2 * (N - 2) * (N - 2) / (2.3*N - 4.9)
		} else {
			e = 5 * N * N / (4 * M * (N + 3*M))
		}
	default:
		e = (N - 2) / M * ((N-1)*(N-1) - 3*M*(N-1) + 4*M*M) / ((N - 3) * (N - 3))
	}
	return max(e, 1)
}

// Limits returns the confidence limits of a deviation with edf equivalent
// degrees of freedom at probability p, by chi-squared (SP 1065 section 5.3.1):
// sigma*sqrt(edf/chi2((1+p)/2)) and sigma*sqrt(edf/chi2((1-p)/2)).
func Limits(sigma, edf, p float64) (low, high float64) {
	c := distuv.ChiSquared{K: edf}
	return sigma * math.Sqrt(edf/c.Quantile((1+p)/2)), sigma * math.Sqrt(edf/c.Quantile((1-p)/2))
}
