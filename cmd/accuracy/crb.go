package main

import (
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/mat"
)

// crb is the Cramer-Rao bound, Hz, on the difference in frequency of two
// complex lines of amplitudes a and b, w rad/s apart, with the given difference
// of phase in the middle of span seconds, in white noise of density n0 on the
// scale of |z|^2: from the Fisher information of amplitudes, phases, frequencies
// and a common chirp, summed over n points.
func crb(a, b, w, phase, span, n0 float64, n int) float64 {
	f := mat.NewSymDense(7, nil)
	dt := span / float64(n)
	for i := range n {
		t := (float64(i)+0.5)*dt - span/2
		u := 2 * t / span
		x, y := complex(a, 0), cmplx.Rect(b, w*t+phase)
		col := [7]complex128{x, x * 1i, x * complex(0, u), y, y * 1i, y * complex(0, u), (x + y) * complex(0, u*u)}
		for j := range col {
			for k := j; k < 7; k++ {
				f.SetSym(j, k, f.At(j, k)+real(cmplx.Conj(col[j])*col[k])*2*dt/n0)
			}
		}
	}
	var c mat.Dense
	if err := c.Inverse(f); err != nil {
		return math.Inf(1)
	}
	v := c.At(2, 2) + c.At(5, 5) - 2*c.At(2, 5)
	return math.Sqrt(v) / (math.Pi * span)
}
