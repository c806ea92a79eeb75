package stability

import "math"

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
// lag-1 autocorrelation (W. J. Riley and C. A. Greenhall, Power law noise
// identification using the lag 1 autocorrelation, EFTF 2004; SP 1065 section
// 5.5.2): decimate by m, remove a quadratic, difference until stationary. It
// takes the longest run, leaves out what a missing value touches, and reports
// false when fewer than 30 points are there.
func Identify(x []float64, run []int32, m int) (Noise, bool) {
	a, ok := Alpha(x, run, m)
	if !ok {
		return 0, false
	}
	return Noise(max(-2, min(2, math.Round(a)))), true
}

// Alpha is the estimate behind Identify before rounding.
func Alpha(x []float64, run []int32, m int) (float64, bool) {
	if m < 1 {
		return 0, false
	}
	lo, hi := longestRun(x, run)
	var z []float64
	known := 0
	for i := lo; i < hi; i += m {
		z = append(z, x[i])
		if !math.IsNaN(x[i]) {
			known++
		}
	}
	if known < 30 {
		return 0, false
	}
	removeQuadratic(z)
	const dmax = 2
	for d := 0; ; d++ {
		r, ok := lag1(z)
		if !ok {
			return 0, false
		}
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

// longestRun returns the longest stretch without a change of run.
func longestRun(x []float64, run []int32) (lo, hi int) {
	if run == nil {
		return 0, len(x)
	}
	start := 0
	for i := 1; i <= len(x); i++ {
		if i == len(x) || run[i] != run[i-1] {
			if i-start > hi-lo {
				lo, hi = start, i
			}
			start = i
		}
	}
	return lo, hi
}

// lag1 returns the lag-1 autocorrelation of what is known of z; false where
// there is none: too few neighbours, or nothing but rounding.
func lag1(z []float64) (float64, bool) {
	mean, n := average(z)
	var a, b float64
	pairs := 0
	for i, v := range z {
		if math.IsNaN(v) {
			continue
		}
		b += (v - mean) * (v - mean)
		if i > 0 && !math.IsNaN(z[i-1]) {
			a += (v - mean) * (z[i-1] - mean)
			pairs++
		}
	}
	if pairs < 10 || !(b > 0) {
		return 0, false
	}
	// With gaps there are fewer pairs than the row has neighbours.
	return a / b * float64(n-1) / float64(pairs), true
}

// removeQuadratic subtracts the least-squares quadratic of what is known and
// returns its coefficients over a row from -1 to 1. Values that are as small as
// their own rounding become 0.
func removeQuadratic(z []float64) [3]float64 {
	c := float64(len(z)-1) / 2
	h := max(c, 1)
	var s [5]float64 // sums of powers of t
	var b [3]float64
	most := 0.0
	for i, v := range z {
		if math.IsNaN(v) {
			continue
		}
		most = max(most, math.Abs(v))
		t := (float64(i) - c) / h
		p := 1.0
		for k := range s {
			s[k] += p
			if k < 3 {
				b[k] += p * v
			}
			p *= t
		}
	}
	q := solve3([3][4]float64{{s[0], s[1], s[2], b[0]}, {s[1], s[2], s[3], b[1]}, {s[2], s[3], s[4], b[2]}})
	for i := range z {
		t := (float64(i) - c) / h
		z[i] -= q[0] + t*(q[1]+t*q[2])
		if math.Abs(z[i]) < 1e-14*most {
			z[i] = 0
		}
	}
	return q
}

// solve3 solves three linear equations by elimination with pivoting; a
// direction that is not determined gets 0.
func solve3(a [3][4]float64) (q [3]float64) {
	scale := 0.0
	for i := range a {
		for j := range 3 {
			scale = max(scale, math.Abs(a[i][j]))
		}
	}
	for k := range a {
		p := k
		for i := k + 1; i < 3; i++ {
			if math.Abs(a[i][k]) > math.Abs(a[p][k]) {
				p = i
			}
		}
		a[k], a[p] = a[p], a[k]
		if math.Abs(a[k][k]) <= 1e-14*scale {
			a[k] = [4]float64{}
			a[k][k] = 1
			continue
		}
		for i := k + 1; i < 3; i++ {
			f := a[i][k] / a[k][k]
			for j := k; j < 4; j++ {
				a[i][j] -= f * a[k][j]
			}
		}
	}
	for k := 2; k >= 0; k-- {
		q[k] = a[k][3]
		for j := k + 1; j < 3; j++ {
			q[k] -= a[k][j] * q[j]
		}
		q[k] /= a[k][k]
	}
	return q
}
