package dsp

import (
	"math"
	"math/bits"
	"math/cmplx"

	blas "gonum.org/v1/gonum/blas/gonum"
)

const (
	bandRate = 400.0 // target rate of a band's output, complex samples per second
	bandHalf = 140.0 // half-width that a band keeps flat and free of aliases at the target rate, Hz
	bandAtt  = 96.0  // dB of rejection
	combs    = 4     // boxcars in the first stage
)

// plan is the pair of decimation filters for one sample rate. It is immutable
// and may be shared.
type plan struct {
	rate   float64
	d1, d2 int
	h1     []float64 // first stage, at the input rate, not yet modulated
	h2     []float32 // second stage, at rate/d1
	h2f    []float64
	half   float64 // usable half-width, Hz
	gains  []float64
}

const gainSteps = 256 // of the table of gains, over half the output rate

// newPlan chooses the two decimations for a sample rate: an output rate near
// bandRate and an intermediate rate of a few kilohertz, where the comb's nulls
// are wide enough and the second filter is still short.
func newPlan(rate float64) *plan {
	p := &plan{rate: rate, d1: 1, d2: 1}
	best := math.Inf(1)
	for d2 := 1; d2 <= 12; d2++ {
		for _, d1 := range []int{int(rate / bandRate / float64(d2)), int(rate/bandRate/float64(d2)) + 1} {
			if d1 < 1 {
				continue
			}
			mid := rate / float64(d1)
			cost := math.Abs(math.Log(mid / float64(d2) / bandRate))
			cost += 0.02 * math.Abs(math.Log(mid/2400))
			if mid < 2300 && d1 > 1 {
				cost++
			}
			if cost < best {
				best, p.d1, p.d2 = cost, d1, d2
			}
		}
	}
	if rate < 1.5*bandRate {
		p.d1, p.d2 = 1, 1
	}
	out := p.outRate()
	mid := rate / float64(p.d1)
	p.half = min(bandHalf, 0.35*out)
	p.h1 = boxcars(p.d1, combs)
	stop := out - p.half
	if p.d2 == 1 {
		stop = 0.5 * out
		p.half = min(bandHalf, 0.4*out)
	}
	p.h2f = kaiserLowpass(p.half/mid, min(stop, 0.499*mid)/mid, bandAtt)
	if p.d1 == 1 && p.d2 == 1 {
		p.h2f = []float64{1} // a slow input is only shifted: every sample counts
	}
	for _, v := range p.h2f {
		p.h2 = append(p.h2, float32(v))
	}
	for i := range gainSteps + 1 {
		p.gains = append(p.gains, p.exactGain(float64(i)*p.outRate()/2/gainSteps))
	}
	return p
}

func (p *plan) outRate() float64 { return p.rate / float64(p.d1*p.d2) }

// reach is how many input samples a filter output looks to either side, at
// most.
func (p *plan) reach() int { return len(p.h1)/2 + p.padded() - len(p.h1) + p.d1*(len(p.h2)/2) }

// padded is the length of the first filter with zeros up to the stride of the
// vector code, which multiplies sixteen at a time. At low rates, where a sample
// is worth waiting for, there are none.
func (p *plan) padded() int {
	if len(p.h1) < 32 {
		return len(p.h1)
	}
	return (len(p.h1) + 15) &^ 15
}

// gain returns the amplitude response at an offset from the band's centre, Hz,
// interpolated in a table (good to 1e-6 where the response is flat).
func (p *plan) gain(off float64) float64 {
	x := math.Abs(off) / p.outRate() * 2 * gainSteps
	i := int(x)
	if i >= len(p.gains)-1 {
		return p.exactGain(off)
	}
	return p.gains[i] + (x-float64(i))*(p.gains[i+1]-p.gains[i])
}

// exactGain is what gain interpolates.
func (p *plan) exactGain(off float64) float64 {
	return gainAt(p.h1, off/p.rate) * gainAt(p.h2f, off*float64(p.d1)/p.rate)
}

// band shifts one region of the input to 0 Hz and decimates it:
//
//	z[k] = g * sum over n of x[n] h(s(k)-n) exp(-j 2 pi nu n),   s(k) = k*D
//
// with the filters of its plan and g = 2 for real input, so that
// A cos(2 pi f n/rate + phi) becomes A exp(j(2 pi (f/rate - nu) s(k) + phi)),
// and g = 1 for complex input. z[k] belongs to input sample s(k) exactly: the
// filters' delay is accounted for. Output is kept in a ring of the last keep
// samples; those that touch a gap are marked. Not safe for concurrent use; the
// steady state allocates nothing.
type band struct {
	*plan
	step    uint64  // nu in 2^-64 turns a sample
	centre  float64 // nu*rate, Hz, exact to 2^-64 of the rate
	complex bool

	hi, hq []float32 // first stage, modulated
	in     [2][]float32
	inAt   int64 // input index of in[0][0]
	mid    [2][]float32
	midAt  int64 // index of mid[0][0] at the intermediate rate
	rot    complex128
	rotInc complex128
	next1  int64 // next intermediate sample to be made
	next   int64 // next output to be made

	z  []complex128
	ok []bool
}

// newBand makes a band centred on f Hz whose input starts at sample start.
func newBand(p *plan, f float64, isComplex bool, start int64, keep int) *band {
	b := &band{plan: p, complex: isComplex}
	frac := f / p.rate
	frac -= math.Floor(frac)
	b.step = uint64(frac*(1<<63)) << 1
	b.centre = float64(int64(b.step)) / (1 << 63) / 2 * p.rate
	if !isComplex && b.centre < 0 {
		b.centre += p.rate
	}
	c := len(p.h1) / 2
	g := 2.0
	if isComplex {
		g = 1
	}
	b.hi, b.hq = make([]float32, p.padded()), make([]float32, p.padded())
	for i, v := range p.h1 {
		s, co := math.Sincos(-2 * math.Pi * turns(uint64(int64(i-c))*b.step))
		b.hi[i], b.hq[i] = float32(g*v*co), float32(g*v*s)
	}
	n := 1
	for n < keep {
		n *= 2
	}
	b.z, b.ok = make([]complex128, n), make([]bool, n)
	b.rotInc = cmplx.Rect(1, -2*math.Pi*turns(uint64(p.d1)*b.step))
	b.restart(start)
	return b
}

// turns converts a phase in 2^-64 turns to turns in [-1/2, 1/2).
func turns(p uint64) float64 { return float64(int64(p)) / (1 << 63) / 2 }

// phaseAt returns the phase of the band's oscillator at input sample n, in
// turns modulo 1, exact to 2^-53.
func (b *band) phaseAt(n int64) float64 {
	_, lo := bits.Mul64(uint64(n), b.step)
	return turns(lo)
}

// oscillator returns the phase of the band's oscillator at time mid (s), turns.
func (b *band) oscillator(mid float64) float64 {
	n := int64(math.Floor(mid * b.rate))
	return b.phaseAt(n) + b.centre*(mid-float64(n)/b.rate)
}

// restart begins anew at input sample start, as after a gap; outputs in
// between are marked as missing.
func (b *band) restart(start int64) {
	c1, d1 := int64(len(b.h1)/2), int64(b.d1)
	c2, d2 := int64(len(b.h2)/2), int64(b.d2)
	b.in[0], b.in[1] = b.in[0][:0], b.in[1][:0]
	b.next1 = ceilDiv(start+c1, d1)
	b.inAt, b.rot = start, 0
	b.mid[0], b.mid[1] = b.mid[0][:0], b.mid[1][:0]
	b.midAt = b.next1
	to := ceilDiv(b.next1+c2, d2)
	if b.next > to || to-b.next > int64(len(b.z)) {
		b.next = to - int64(len(b.z))
	}
	for ; b.next < to; b.next++ {
		i := b.next & int64(len(b.z)-1)
		b.z[i], b.ok[i] = 0, false
	}
}

func ceilDiv(a, b int64) int64 { return -floorDiv(-a, b) }

func floorDiv(a, b int64) int64 {
	q := a / b
	if a%b != 0 && (a < 0) != (b < 0) {
		q--
	}
	return q
}

// push takes the next input samples; q is nil for real input.
func (b *band) push(x, q []float32) {
	b.in[0] = append(b.in[0], x...)
	if b.complex {
		b.in[1] = append(b.in[1], q...)
	}
	var dot blas.Implementation
	c1, n1 := int64(len(b.h1)/2), len(b.hi)
	from := int(b.next1*int64(b.d1) - c1 - b.inAt)
	for ; from+n1 <= len(b.in[0]); from += b.d1 {
		if b.next1&63 == 0 || b.rot == 0 { // the recursion is set right now and then
			b.rot = cmplx.Rect(1, -2*math.Pi*b.phaseAt(b.next1*int64(b.d1)))
		}
		w := b.in[0][from : from+n1]
		yi, yq := float64(dot.Sdot(n1, w, 1, b.hi, 1)), float64(dot.Sdot(n1, w, 1, b.hq, 1))
		if b.complex {
			v := b.in[1][from : from+n1]
			yi -= float64(dot.Sdot(n1, v, 1, b.hq, 1))
			yq += float64(dot.Sdot(n1, v, 1, b.hi, 1))
		}
		re, im := real(b.rot), imag(b.rot)
		b.mid[0] = append(b.mid[0], float32(yi*re-yq*im))
		b.mid[1] = append(b.mid[1], float32(yi*im+yq*re))
		b.rot *= b.rotInc
		b.next1++
	}
	from = min(max(from, 0), len(b.in[0]))
	b.in[0] = b.in[0][:copy(b.in[0], b.in[0][from:])]
	if b.complex {
		b.in[1] = b.in[1][:copy(b.in[1], b.in[1][from:])]
	}
	b.inAt += int64(from)
	b.second()
}

// second runs the second stage over what the first has made.
func (b *band) second() {
	var dot blas.Implementation
	n2, c2 := len(b.h2), int64(len(b.h2)/2)
	from := int(b.next*int64(b.d2) - c2 - b.midAt)
	for ; from+n2 <= len(b.mid[0]); from += b.d2 {
		i := b.next & int64(len(b.z)-1)
		b.z[i] = complex(float64(dot.Sdot(n2, b.mid[0][from:from+n2], 1, b.h2, 1)),
			float64(dot.Sdot(n2, b.mid[1][from:from+n2], 1, b.h2, 1)))
		b.ok[i] = true
		b.next++
	}
	from = min(max(from, 0), len(b.mid[0]))
	for i := range b.mid {
		b.mid[i] = b.mid[i][:copy(b.mid[i], b.mid[i][from:])]
	}
	b.midAt += int64(from)
}

// sampleOf returns the input sample that output k belongs to.
func (b *band) sampleOf(k int64) int64 { return k * int64(b.d1*b.d2) }

// window copies the outputs that belong to input samples from..to (inclusive)
// into dst and their validity into ok, and returns the index of the first.
// Outputs not made yet, or no longer kept, come out as 0 and invalid.
func (b *band) window(from, to int64, dst []complex128, ok []bool) (int64, []complex128, []bool) {
	d := int64(b.d1 * b.d2)
	k0, k1 := ceilDiv(from, d), floorDiv(to, d)
	dst, ok = dst[:0], ok[:0]
	for k := k0; k <= k1; k++ {
		if k >= b.next || k < b.next-int64(len(b.z)) {
			dst, ok = append(dst, 0), append(ok, false)
			continue
		}
		i := k & int64(len(b.z)-1)
		dst, ok = append(dst, b.z[i]), append(ok, b.ok[i])
	}
	return k0, dst, ok
}
