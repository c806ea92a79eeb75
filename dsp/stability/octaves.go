package stability

import (
	"math"
	"runtime"
	"sync"
	"sync/atomic"
)

// Point is a deviation at one averaging factor.
type Point struct {
	M   int
	Tau float64 // s
	Dev float64
	N   int // terms
}

// Octaves returns the deviation d at m = 1, 2, 4 … while there are terms. The
// overlapping Allan deviation of a row without gaps and breaks, all octaves in
// one pass, takes a small part of the time that the taus one by one do, and uses
// all processors; what it gives does not depend on their number.
func Octaves(d Deviation, x []float64, run []int32, tau0 float64) []Point {
	var sums []float64
	if d == OverlappingAllan && run == nil {
		sums = secondOctaves(x)
	}
	var out []Point
	for k, m := 0, 1; m < len(x); k, m = k+1, 2*m {
		p := Point{M: m, Tau: float64(m) * tau0}
		if k < len(sums) && !math.IsNaN(sums[k]) {
			p.N = len(x) - 2*m
			p.Dev = math.Sqrt(sums[k] / (2 * p.Tau * p.Tau * float64(p.N)))
		} else {
			p.Dev, p.N = d.Of(x, run, tau0, m)
		}
		if p.N == 0 {
			break
		}
		out = append(out, p)
	}
	return out
}

// chunk is how many positions are worked off at a time: a few octaves of them
// stay in the cache.
const chunk = 1 << 14

// secondOctaves returns the sum of squares of all second differences of x at
// m = 1, 2, 4 …, while there is one; NaN where a value is missing.
func secondOctaves(x []float64) []float64 {
	octaves := 0
	for 2<<octaves < len(x) {
		octaves++
	}
	parts := make([][]float64, (len(x)+chunk-1)/chunk)
	var next atomic.Int64
	var wait sync.WaitGroup
	for range runtime.GOMAXPROCS(0) {
		wait.Go(func() {
			for c := int(next.Add(1)) - 1; c < len(parts); c = int(next.Add(1)) - 1 {
				part := make([]float64, octaves)
				lo := c * chunk
				for k := 0; k < octaves; k += 4 {
					secondOfFour(x, lo, min(lo+chunk, len(x)), k, part[k:])
				}
				parts[c] = part
			}
		})
	}
	wait.Wait()
	sums := make([]float64, octaves)
	for _, part := range parts {
		for k, v := range part {
			sums[k] += v
		}
	}
	return sums
}

// secondOfFour adds the squares of the second differences at positions lo to hi
// of the octaves k to k+3, as far as there are any, to sum. With the first
// differences e(m) = x[i+m] - x[i], half the second is e(2m)/2 - e(m): an octave
// costs one value more. (Halving goes through the multiplier: adders are short.)
func secondOfFour(x []float64, lo, hi, k int, sum []float64) {
	m := 1 << k
	all := max(lo, min(hi, len(x)-16*m)) // up to here all four exist
	if n := all - lo; n > 0 && len(sum) >= 4 {
		a, b, c, d, e, f := x[lo:all], x[lo+m:][:n], x[lo+2*m:][:n], x[lo+4*m:][:n], x[lo+8*m:][:n], x[lo+16*m:][:n]
		var s0, s1, s2, s3 float64
		for i, v := range a {
			e0, e1, e2, e3, e4 := b[i]-v, c[i]-v, d[i]-v, e[i]-v, f[i]-v
			d0, d1, d2, d3 := .5*e1-e0, .5*e2-e1, .5*e3-e2, .5*e4-e3
			s0 += d0 * d0
			s1 += d1 * d1
			s2 += d2 * d2
			s3 += d3 * d3
		}
		sum[0] += 4 * s0
		sum[1] += 4 * s1
		sum[2] += 4 * s2
		sum[3] += 4 * s3
	} else {
		all = lo
	}
	for j := 0; j < min(4, len(sum)); j, m = j+1, 2*m {
		if end := min(hi, len(x)-2*m); end > all {
			sum[j] += secondWhole(x[all:end+2*m], m)
		}
	}
}
