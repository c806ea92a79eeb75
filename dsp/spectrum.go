package dsp

import (
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/dsp/fourier"
)

// spectrum is the Hann-windowed periodogram of a stretch of a band's output,
// as a power density: |z|^2 per Hz. It is reused and allocates nothing in the
// steady state. (go-dsp's FFT serves the search; here, once a second on the
// decimated band, gonum's plan costs no garbage.)
type spectrum struct {
	n    int
	rate float64
	plan *fourier.CmplxFFT
	win  []float64
	in   []complex128
	out  []complex128
	p    []float64 // density at bin i <-> frequency freq(i)
	tmp  []float64
}

func newSpectrum(rate float64) *spectrum {
	n := 16
	for float64(n) < 1.2*rate {
		n *= 2
	}
	s := &spectrum{n: n, rate: rate, plan: fourier.NewCmplxFFT(n)}
	s.win, s.in, s.out, s.p = make([]float64, n), make([]complex128, n), make([]complex128, n), make([]float64, n)
	for i := range s.win {
		s.win[i] = 0.5 - 0.5*math.Cos(2*math.Pi*(float64(i)+0.5)/float64(n))
	}
	return s
}

// take computes the periodogram of z: its last n samples, or all of them with
// the window fitted to their length and zeros behind.
func (s *spectrum) take(z []complex128) {
	if len(z) > s.n {
		z = z[len(z)-s.n:]
	}
	sum2 := 0.0
	for i := range s.in {
		s.in[i] = 0
		if i < len(z) {
			w := s.win[i]
			if len(z) < s.n {
				w = 0.5 - 0.5*math.Cos(2*math.Pi*(float64(i)+0.5)/float64(len(z)))
			}
			s.in[i] = z[i] * complex(w, 0)
			sum2 += w * w
		}
	}
	s.plan.Coefficients(s.out, s.in)
	g := 1 / (s.rate * max(sum2, 1e-300))
	for i, v := range s.out {
		s.p[i] = (real(v)*real(v) + imag(v)*imag(v)) * g
	}
}

// bin returns the bin nearest to f Hz, modulo n.
func (s *spectrum) bin(f float64) int {
	k := int(math.Round(f / s.rate * float64(s.n)))
	return ((k % s.n) + s.n) % s.n
}

func (s *spectrum) freq(i int) float64 {
	if i >= s.n/2 {
		i -= s.n
	}
	return float64(i) * s.rate / float64(s.n)
}

// noise returns the density of the noise around f within +-reach, from the
// median of the bins that are at least guard Hz from every frequency in avoid:
// lines and their skirts do not enter. NaN when too few bins are left.
func (s *spectrum) noise(f, reach, half, guard float64, avoid []float64) float64 {
	s.tmp = s.tmp[:0]
	guard = max(guard, 4*s.rate/float64(s.n))
next:
	for i := range s.p {
		g := s.freq(i)
		if math.Abs(g-f) > reach || math.Abs(g) > half {
			continue
		}
		for _, a := range avoid {
			if math.Abs(g-a) < guard {
				continue next
			}
		}
		s.tmp = append(s.tmp, s.p[i])
	}
	if len(s.tmp) < 5 {
		return math.NaN()
	}
	slices.Sort(s.tmp)
	return s.tmp[len(s.tmp)/2] / math.Ln2
}

// peak returns the frequency of the largest bin within +-half that is not
// within guard of avoid, interpolated by a parabola through the logarithms,
// and its density; 0 density when there is none.
func (s *spectrum) peak(lo, hi, guard float64, avoid []float64) (f, density float64) {
	best := -1
	step := s.rate / float64(s.n)
next:
	for i, p := range s.p {
		g := s.freq(i)
		if g < lo || g > hi || (best >= 0 && p <= s.p[best]) {
			continue
		}
		if (g-step < lo && s.p[(i+s.n-1)%s.n] > p) || (g+step > hi && s.p[(i+1)%s.n] > p) {
			continue // the skirt of one that lies beyond
		}
		for _, a := range avoid {
			if math.Abs(g-a) < guard {
				continue next
			}
		}
		best = i
	}
	if best < 0 {
		return 0, 0
	}
	l, c, r := math.Log(s.p[(best+s.n-1)%s.n]+1e-300), math.Log(s.p[best]+1e-300), math.Log(s.p[(best+1)%s.n]+1e-300)
	d := 0.0
	if den := l - 2*c + r; den < 0 {
		d = max(-0.5, min(0.5, 0.5*(l-r)/den))
	}
	return s.freq(best) + d*s.rate/float64(s.n), s.p[best]
}

// energyAt returns |sum w z exp(-j 2 pi f t)|^2 / sum w^2 / rate: the density
// that a matched filter at f sees in the window's residual.
func energyAt(r []complex128, win *window, f float64) float64 {
	var sum complex128
	var w2 float64
	e := cmplx.Rect(1, -2*math.Pi*f*win.t0)
	q := cmplx.Rect(1, -2*math.Pi*f*win.dt)
	for i, v := range r {
		sum += complex(win.w[i], 0) * v * e
		w2 += win.w[i] * win.w[i]
		e *= q
	}
	if w2 == 0 {
		return 0
	}
	return (real(sum)*real(sum) + imag(sum)*imag(sum)) / w2 * win.dt
}

// beside returns the mean density between near and far Hz on both sides of f,
// or 0 when no bin lies there.
func (s *spectrum) beside(f, near, far float64) float64 {
	sum, n := 0.0, 0
	bin := s.rate / float64(s.n)
	for d := math.Ceil(near / bin); d <= far/bin; d++ {
		sum += s.p[s.bin(f+d*bin)] + s.p[s.bin(f-d*bin)]
		n += 2
	}
	if n == 0 {
		return 0
	}
	return sum / float64(n)
}
