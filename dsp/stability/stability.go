// Package stability says what a row of readings is worth: the Allan family of
// deviations with their confidence, the kind of noise behind them, drift and
// ageing, and marks on what stands out.
//
// Phase x is in seconds (or any unit: the deviations then come per second of
// that unit), evenly spaced by tau0 seconds; m is the averaging factor, tau =
// m*tau0. A missing value is NaN, and a break of continuity is a change of run:
// no difference is ever taken across a break, nor one that needs a missing
// value. Frequency y is dimensionless, y = dx/dt; Phase makes x of it. Functions
// are pure and may be called concurrently; a Running may not.
//
// References are to W. J. Riley, Handbook of Frequency Stability Analysis, NIST
// Special Publication 1065, 2008.
package stability

import "math"

// Deviation is one of the Allan family.
type Deviation int

// The deviations, and the sections of SP 1065 that define them.
const (
	Allan               Deviation = iota // 5.2.2, positions a tau apart
	OverlappingAllan                     // 5.2.4
	ModifiedAllan                        // 5.2.5
	TimeDeviation                        // 5.2.6, in seconds
	Hadamard                             // 5.2.8, positions a tau apart
	OverlappingHadamard                  // 5.2.9
	TotalDeviation                       // 5.2.11, the row reflected at both ends
)

// Deviations lists them all.
var Deviations = []Deviation{Allan, OverlappingAllan, ModifiedAllan, TimeDeviation, Hadamard, OverlappingHadamard, TotalDeviation}

// String names the deviation shortly.
func (d Deviation) String() string {
	return [...]string{"adev", "oadev", "mdev", "tdev", "hdev", "ohdev", "totdev"}[d]
}

// Of returns the deviation of phase x at averaging factor m, and the number of
// terms that entered; NaN and 0 when there is none. run, if not nil, numbers the
// stretches within which phase is continuous.
func (d Deviation) Of(x []float64, run []int32, tau0 float64, m int) (dev float64, n int) {
	if m < 1 || m >= len(x) {
		return math.NaN(), 0
	}
	tau := float64(m) * tau0
	var sum float64
	scale := 2 * tau * tau
	switch d {
	case Allan:
		sum, n = second(x, run, m, m)
	case OverlappingAllan:
		sum, n = second(x, run, m, 1)
	case ModifiedAllan, TimeDeviation:
		sum, n = modified(x, run, m)
		scale *= float64(m) * float64(m)
		if d == TimeDeviation {
			scale *= 3 / (tau * tau)
		}
	case Hadamard:
		sum, n = third(x, run, m, m)
		scale *= 3
	case OverlappingHadamard:
		sum, n = third(x, run, m, 1)
		scale *= 3
	case TotalDeviation:
		sum, n = total(x, run, m)
	}
	if n == 0 {
		return math.NaN(), 0
	}
	return math.Sqrt(sum / (scale * float64(n))), n
}

// Overlapping returns the overlapping Allan deviation: OverlappingAllan.Of.
func Overlapping(x []float64, run []int32, tau0 float64, m int) (adev float64, n int) {
	return OverlappingAllan.Of(x, run, tau0, m)
}

// second returns the sum of squares of the second differences of x over m, at
// every step-th position, and how many there are.
func second(x []float64, run []int32, m, step int) (sum float64, n int) {
	if 2*m >= len(x) {
		return 0, 0
	}
	if run == nil && step == 1 {
		if sum = secondWhole(x, m); !math.IsNaN(sum) {
			return sum, len(x) - 2*m
		}
		sum = 0
	}
	for i := 0; i+2*m < len(x); i += step {
		if run != nil && (run[i] != run[i+m] || run[i] != run[i+2*m]) {
			continue
		}
		if d := (x[i+2*m] - x[i+m]) - (x[i+m] - x[i]); !math.IsNaN(d) {
			sum += d * d
			n++
		}
	}
	return sum, n
}

// secondWhole is second at every position of a row without runs; NaN if a value
// is missing. Four sums keep the adder busy.
func secondWhole(x []float64, m int) float64 {
	n := len(x) - 2*m
	a, b, c := x[:n], x[m:m+n], x[2*m:2*m+n]
	var s0, s1, s2, s3 float64
	i := 0
	for ; i+4 <= n; i += 4 {
		a, b, c := a[i:i+4:i+4], b[i:i+4:i+4], c[i:i+4:i+4]
		d0 := (c[0] - b[0]) - (b[0] - a[0])
		d1 := (c[1] - b[1]) - (b[1] - a[1])
		d2 := (c[2] - b[2]) - (b[2] - a[2])
		d3 := (c[3] - b[3]) - (b[3] - a[3])
		s0 += d0 * d0
		s1 += d1 * d1
		s2 += d2 * d2
		s3 += d3 * d3
	}
	for ; i < n; i++ {
		d := (c[i] - b[i]) - (b[i] - a[i])
		s0 += d * d
	}
	return (s0 + s1) + (s2 + s3)
}

// third is second for third differences.
func third(x []float64, run []int32, m, step int) (sum float64, n int) {
	for i := 0; i+3*m < len(x); i += step {
		if run != nil && (run[i] != run[i+m] || run[i] != run[i+2*m] || run[i] != run[i+3*m]) {
			continue
		}
		if d := x[i+3*m] - 3*(x[i+2*m]-x[i+m]) - x[i]; !math.IsNaN(d) {
			sum += d * d
			n++
		}
	}
	return sum, n
}

// modified returns the sum of squares of m-fold sums of second differences, and
// their number. The sum slides along every unbroken stretch by third
// differences; its rounding is carried along (Neumaier's compensated sum).
func modified(x []float64, run []int32, m int) (sum float64, n int) {
	eachStretch(x, run, func(lo, hi int) {
		x := x[lo:hi]
		if len(x) < 3*m {
			return
		}
		var s, c float64
		add := func(v float64) {
			t := s + v
			if math.Abs(s) >= math.Abs(v) {
				c += (s - t) + v
			} else {
				c += (v - t) + s
			}
			s = t
		}
		for i := range m {
			add((x[i+2*m] - x[i+m]) - (x[i+m] - x[i]))
		}
		sum += (s + c) * (s + c)
		n++
		for i := 0; i+3*m < len(x); i++ {
			add(x[i+3*m] - 3*(x[i+2*m]-x[i+m]) - x[i])
			sum += (s + c) * (s + c)
			n++
		}
	})
	return sum, n
}

// total returns the sum of squares of second differences centred on the row's
// inner points, where the row goes on beyond its ends as its reflection:
// x*[-j] = 2x[0] - x[j] (SP 1065 section 5.2.11), and their number. What lies
// beyond an end belongs to the run of that end.
func total(x []float64, run []int32, m int) (sum float64, n int) {
	lo, hi := 0, len(x)-1
	for lo < hi && math.IsNaN(x[lo]) {
		lo++
	}
	for hi > lo && math.IsNaN(x[hi]) {
		hi--
	}
	if m >= hi-lo+1 {
		return 0, 0
	}
	same := func(i, j int) bool { return run == nil || run[i] == run[j] }
	at := func(i, mid int) float64 {
		switch {
		case i < lo:
			if i = 2*lo - i; i <= hi && same(i, lo) && same(lo, mid) {
				return 2*x[lo] - x[i]
			}
		case i > hi:
			if i = 2*hi - i; i >= lo && same(i, hi) && same(hi, mid) {
				return 2*x[hi] - x[i]
			}
		case same(i, mid):
			return x[i]
		}
		return math.NaN()
	}
	for i := lo + 1; i < hi; i++ {
		if d := (at(i+m, i) - x[i]) - (x[i] - at(i-m, i)); !math.IsNaN(d) {
			sum += d * d
			n++
		}
	}
	return sum, n
}

// eachStretch calls f for every stretch without NaN or change of run.
func eachStretch(x []float64, run []int32, f func(lo, hi int)) {
	for lo := 0; lo < len(x); {
		if math.IsNaN(x[lo]) {
			lo++
			continue
		}
		hi := lo + 1
		for hi < len(x) && !math.IsNaN(x[hi]) && (run == nil || run[hi] == run[lo]) {
			hi++
		}
		f(lo, hi)
		lo = hi
	}
}

// Phase returns the phase of frequency y, one point more than y has, and its
// runs, nil if no value is missing. The phase lost in a gap is not known: a new
// run begins after it, and points between two missing values are NaN.
//
// The mean of y is taken off first, which no deviation sees: a row of ten
// million points then stays small, and the running sum carries its rounding
// along, so every point is right to the rounding of its own size.
func Phase(y []float64, tau0 float64) (x []float64, run []int32) {
	mean, known := average(y)
	x = make([]float64, len(y)+1)
	if known < len(y) {
		run = make([]int32, len(y)+1)
	}
	var s, c float64
	for i, v := range y {
		if math.IsNaN(v) {
			if i == 0 || math.IsNaN(y[i-1]) {
				x[i] = math.NaN()
			}
			run[i+1] = run[i] + 1
			x[i+1] = s + c
			if i == len(y)-1 {
				x[i+1] = math.NaN()
			}
			continue
		}
		v = (v - mean) * tau0
		t := s + v
		if math.Abs(s) >= math.Abs(v) {
			c += (s - t) + v
		} else {
			c += (v - t) + s
		}
		s = t
		x[i+1] = s + c
		if run != nil {
			run[i+1] = run[i]
		}
	}
	return x, run
}

// average returns the mean of what is known of y, and how much that is.
func average(y []float64) (mean float64, known int) {
	for _, v := range y {
		if !math.IsNaN(v) {
			known++
			mean += (v - mean) / float64(known)
		}
	}
	return mean, known
}

// Frequency returns the frequency of phase x, one point less; NaN across gaps
// and breaks.
func Frequency(x []float64, run []int32, tau0 float64) []float64 {
	if len(x) < 2 {
		return nil
	}
	y := make([]float64, len(x)-1)
	for i := range y {
		y[i] = (x[i+1] - x[i]) / tau0
		if run != nil && run[i] != run[i+1] {
			y[i] = math.NaN()
		}
	}
	return y
}
