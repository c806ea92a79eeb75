package dsp

import (
	"math"
	"slices"
	"sort"

	"github.com/mjibson/go-dsp/fft"
	blas "gonum.org/v1/gonum/blas/gonum"
)

// found is a spectral line that the search found.
type found struct {
	f    float64 // Hz; negative only for complex input
	amp  float64 // amplitude of the tone, full scale 1
	cn0  float64 // tone power over noise power in 1 Hz, a ratio
	rung float64 // where the line is by which it is known as mains hum, Hz; NaN: it is none
}

// A line must stand falseAlarm times above the noise around it, as power in
// one bin. Noise in one bin is exponentially distributed, so the chance that
// one bin of a search reaches that by itself is exp(-falseAlarm): below 1e-7
// for all the bins of a second of 48 kHz sound together. Two seconds in a row
// are asked for besides.
const falseAlarm = 27

// acquirer finds lines anywhere in the input: one Blackman-Harris windowed FFT
// (four terms, sidelobes at -92 dB: Harris, Proc. IEEE 66, 1978) over the
// latest second and a half to three seconds, with the peak interpolated by a
// parabola through the logarithms (Gasior & Gonzalez, CERN AB-Note-2004-021:
// at most 3.2e-3 bins of bias with this window). It runs only while a tone is
// wanted; go-dsp's FFT allocates and starts goroutines.
type acquirer struct {
	rate    float64 // after decimation
	d       int
	h       []float32 // lowpass before the decimation, at the input rate
	n       int
	lo, hi  float64
	complex bool
	win     []float64
	sum     float64 // of win
	sum2    float64 // of win squared
	z       []complex128
	p       []float64
	tmp     []float64
}

// newAcquirer searches lo..hi in input at the given rate, first decimated as
// far as hi allows.
func newAcquirer(rate, lo, hi float64, isComplex bool) *acquirer {
	top := max(math.Abs(lo), hi)
	d := max(1, int(rate/(2.4*top)))
	n := 64
	for float64(n) < 1.3*rate/float64(d) {
		n *= 2
	}
	a := newAcquirerN(rate/float64(d), lo, hi, isComplex, n)
	if d > 1 {
		a.d = d
		for _, v := range kaiserLowpass(top/rate, (a.rate-top)/rate, bandAtt) {
			a.h = append(a.h, float32(v))
		}
	}
	return a
}

// newAcquirerN looks at n samples, a power of two, without decimation.
func newAcquirerN(rate, lo, hi float64, isComplex bool, n int) *acquirer {
	return &acquirer{rate: rate, n: n, lo: lo, hi: hi, complex: isComplex, d: 1}
}

// need returns how many input samples a search looks at.
func (a *acquirer) need() int { return (a.n-1)*a.d + max(1, len(a.h)) }

// ready makes the window and the space, which an input that is never searched
// does not need.
func (a *acquirer) ready() {
	if a.win != nil {
		return
	}
	a.win = make([]float64, a.n)
	for i := range a.win { // periodic form
		t := 2 * math.Pi * float64(i) / float64(a.n)
		c := math.Cos(t)
		c2 := 2*c*c - 1
		a.win[i] = 0.35875 - 0.48829*c + 0.14128*c2 - 0.01168*(2*c*c2-c)
		a.sum += a.win[i]
		a.sum2 += a.win[i] * a.win[i]
	}
	a.z, a.p = make([]complex128, a.n), make([]float64, a.n)
}

// search returns the lines in the latest need() samples of x (and q for complex
// input), strongest first, at most 12. With fewer samples it returns nil.
func (a *acquirer) search(x, q []float32) []found {
	if len(x) < a.need() {
		return nil
	}
	a.ready()
	a.load(x[len(x)-a.need():], 1)
	if a.complex {
		a.load(q[len(q)-a.need():], 1i)
	}
	var mean complex128
	for _, v := range a.z {
		mean += v
	}
	mean /= complex(float64(a.n), 0)
	for i := range a.z {
		a.z[i] = (a.z[i] - mean) * complex(a.win[i], 0)
	}
	for i, v := range fft.FFT(a.z) {
		a.p[i] = real(v)*real(v) + imag(v)*imag(v)
	}
	return a.lines()
}

// load decimates x into z, multiplied by unit; 1 replaces what was there and
// 1i adds to it.
func (a *acquirer) load(x []float32, unit complex128) {
	var dot blas.Implementation
	for i := range a.z {
		v := float64(x[i*a.d])
		if a.d > 1 {
			v = float64(dot.Sdot(len(a.h), a.h, 1, x[i*a.d:i*a.d+len(a.h)], 1))
		}
		if unit == 1 {
			a.z[i] = complex(v, 0)
		} else {
			a.z[i] += complex(0, v)
		}
	}
}

// power at bin k, which may be negative.
func (a *acquirer) at(k int) float64 { return a.p[((k%a.n)+a.n)%a.n] }

func (a *acquirer) lines() []found {
	bin := a.rate / float64(a.n)
	k0, k1 := int(math.Ceil(a.lo/bin)), int(math.Floor(a.hi/bin))
	if !a.complex {
		k0, k1 = max(k0, 3), min(k1, a.n/2-3)
	}
	if k1-k0 < 8 {
		return nil
	}
	var out []found
	floor := 0.0
	for k := k0; k <= k1; k++ {
		if (k-k0)%64 == 0 { // a quick look first: most bins are far from being a line
			floor = max(a.median(k, min(k+63, k1)), 1e-300)
		}
		p := a.at(k)
		if p < 8*floor || p <= a.at(k-1) || p < a.at(k+1) {
			continue
		}
		noise := a.background(k, bin)
		if p < falseAlarm*noise {
			continue
		}
		l, c, r := math.Log(a.at(k-1)+1e-300), math.Log(p), math.Log(a.at(k+1)+1e-300)
		d := 0.5 * (l - r) / (l - 2*c + r)
		peak := math.Exp(c - 0.25*(l-r)*d)
		amp := math.Sqrt(peak) / a.sum
		if !a.complex {
			amp *= 2
		}
		// Density of the analytic signal: 4 (real) or 1 (complex) times p/(rate*sum2).
		density := noise / (a.rate * a.sum2)
		if !a.complex {
			density *= 4
		}
		line := found{(float64(k) + d) * bin, amp, amp * amp / max(density, 1e-300), math.NaN()}
		if !a.complex {
			line.rung = rung(line.f, a.around)
		}
		out = append(out, line)
	}
	sort.Slice(out, func(i, j int) bool { return out[i].amp > out[j].amp })
	return a.thin(out, bin)
}

// around returns the power of the strongest of the three bins nearest to f, NaN
// beside the spectrum of real samples.
func (a *acquirer) around(f float64) float64 {
	k := int(math.Round(f / a.rate * float64(a.n)))
	if k < 1 || k > a.n/2-2 {
		return math.NaN()
	}
	return max(a.at(k-1), a.at(k), a.at(k+1))
}

// median of the power in bins from..to.
func (a *acquirer) median(from, to int) float64 {
	a.tmp = a.tmp[:0]
	for k := from; k <= to; k++ {
		a.tmp = append(a.tmp, a.at(k))
	}
	slices.Sort(a.tmp)
	return a.tmp[len(a.tmp)/2]
}

// thin drops what is the skirt of a stronger line or a harmonic of one (a
// receiver's own distortion) and keeps the strongest dozen.
func (a *acquirer) thin(in []found, bin float64) []found {
	var out []found
next:
	for _, l := range in {
		if l.amp < 3e-5*in[0].amp {
			break // the window's own sidelobes
		}
		for _, s := range out {
			if math.Abs(l.f-s.f) < 4.5*bin && l.amp < 0.5*s.amp {
				continue next
			}
			if !a.complex && l.amp < 0.15*s.amp && distorted(l.f, s.f, a.rate*float64(a.d), bin) {
				continue next
			}
		}
		out = append(out, l)
		if len(out) == 12 {
			break
		}
	}
	return out
}

// background is the mean noise power per bin around bin k: the largest of the
// medians over three rings around it. The nearest ring keeps the humps of
// noise through a narrow filter, and of a tone that began within the window,
// from passing for lines.
func (a *acquirer) background(k int, bin float64) float64 {
	rings := [3][2]float64{{2.2, 5}, {5, 20}, {20, 60}}
	most := 0.0
	for _, r := range rings {
		v := a.tmp[:0]
		from, to := max(4, int(math.Ceil(r[0]/bin))), max(9, int(r[1]/bin))
		for d := from; d <= to; d++ {
			for _, kk := range [2]int{k - d, k + d} {
				if !a.complex && (kk < 1 || kk >= a.n/2) {
					continue
				}
				v = append(v, a.at(kk))
			}
		}
		if len(v) < 6 {
			continue
		}
		slices.Sort(v)
		a.tmp = v
		most = max(most, v[len(v)/2]/math.Ln2)
	}
	return most
}

func resize[T any](s []T, n int) []T {
	if cap(s) < n {
		return make([]T, n)
	}
	return s[:n]
}
