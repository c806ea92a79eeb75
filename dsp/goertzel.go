package dsp

import (
	"math"
	"math/cmplx"
)

// goertzel returns the sum over n of x[n] exp(-j a n) for an angle a in
// radians a sample that need not belong to any bin, by the second-order
// recursion with real coefficients (Goertzel 1958; at fractional bins Sysel &
// Rajmic, EURASIP J. Adv. Signal Process. 2012:56). Two real multiplications
// a sample for complex x.
func goertzel(x []complex128, a float64) complex128 {
	if len(x) == 0 {
		return 0
	}
	sin, cos := math.Sincos(a)
	c := 2 * cos
	var r1, r2, i1, i2 float64
	for _, v := range x {
		r1, r2 = real(v)+c*r1-r2, r1
		i1, i2 = imag(v)+c*i1-i2, i1
	}
	// y = s1 - exp(-ja) s2, turned back by the length.
	y := complex(r1, i1) - complex(cos, -sin)*complex(r2, i2)
	return y * cmplx.Rect(1, -a*float64(len(x)-1))
}
