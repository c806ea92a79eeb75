package dsp

import "math"

// boxcars returns the impulse response of p boxcars of length d in cascade (a
// comb-and-integrator decimator written out), normalised to unit gain at 0 Hz.
// Its length is p*(d-1)+1, odd when p is even. The nulls lie at the multiples
// of rate/d, exactly where decimation by d folds onto 0 Hz, so a band narrow
// against rate/d is protected by about p*20*log10((rate/d)/f) dB at offset f
// (Hogenauer, IEEE Trans. ASSP-29, 1981).
func boxcars(d, p int) []float64 {
	h := []float64{1}
	for range p {
		next := make([]float64, len(h)+d-1)
		for i, v := range h {
			for j := range d {
				next[i+j] += v / float64(d)
			}
		}
		h = next
	}
	return h
}

// kaiserLowpass returns a linear-phase lowpass of odd length with unit gain at
// 0 Hz: flat to pass, at least att dB down from stop on. pass and stop are
// fractions of the sample rate. Length and beta follow Kaiser's formulas
// (Oppenheim & Schafer, Discrete-Time Signal Processing, section 7.5; from
// memory).
func kaiserLowpass(pass, stop, att float64) []float64 {
	n := int(math.Ceil((att - 8) / (2.285 * 2 * math.Pi * (stop - pass))))
	n |= 1
	n = max(n, 3)
	beta := 0.1102 * (att - 8.7)
	cut := (pass + stop) / 2
	h := make([]float64, n)
	sum := 0.0
	for i := range h {
		x := float64(i - n/2)
		s := 2 * cut
		if x != 0 {
			s = math.Sin(2*math.Pi*cut*x) / (math.Pi * x)
		}
		r := 2 * x / float64(n-1)
		h[i] = s * besselI0(beta*math.Sqrt(max(0, 1-r*r))) / besselI0(beta)
		sum += h[i]
	}
	for i := range h {
		h[i] /= sum
	}
	return h
}

// besselI0 is the modified Bessel function of the first kind, order zero, by
// its power series; exact to rounding for the arguments of a Kaiser window.
func besselI0(x float64) float64 {
	sum, term := 1.0, 1.0
	for k := 1; term > sum*1e-17; k++ {
		term *= (x / 2 / float64(k)) * (x / 2 / float64(k))
		sum += term
	}
	return sum
}

// gainAt returns the amplitude response of the symmetric filter h at f, a
// fraction of its sample rate.
func gainAt(h []float64, f float64) float64 {
	g := 0.0
	for i, v := range h {
		g += v * math.Cos(2*math.Pi*f*float64(i-len(h)/2))
	}
	return g
}
