package stability

import (
	"math"
	"slices"
)

// Outliers returns the indices of the frequencies that lie more than k robust
// standard deviations off the middle: the median absolute deviation over 0.6745
// (SP 1065 section 10.11). A drift must not make the ends stand out, so a line
// is taken off first, through the medians of the first and the last third (the
// resistant line of Tukey). Where more than half of the row is alike to the last
// digit, the mean absolute deviation takes the place of the median one (times
// 1.2533, common practice). Nothing is dropped: they are marks.
func Outliers(y []float64, k float64) []int {
	r := levelled(y)
	size := make([]float64, 0, len(r))
	mid := median(r)
	sum := 0.0
	for _, v := range r {
		if !math.IsNaN(v) {
			size = append(size, math.Abs(v-mid))
			sum += math.Abs(v - mid)
		}
	}
	if len(size) < 5 {
		return nil
	}
	sigma := median(size) / 0.6745
	if sigma <= 1e-12*math.Abs(mid) {
		sigma = 1.2533 * sum / float64(len(size))
	}
	var out []int
	for i, v := range r {
		if math.Abs(v-mid) > k*sigma && sigma > 0 {
			out = append(out, i)
		}
	}
	return out
}

// levelled returns y less the resistant line.
func levelled(y []float64) []float64 {
	third := len(y) / 3
	r := slices.Clone(y)
	if third < 5 {
		return r
	}
	a, b := median(y[:third]), median(y[len(y)-third:])
	slope := (b - a) / float64(len(y)-third)
	if math.IsNaN(slope) {
		return r
	}
	for i := range r {
		r[i] -= slope * (float64(i) - float64(len(y)-1)/2)
	}
	return r
}

// median returns the median of what is known of y; NaN of nothing.
func median(y []float64) float64 {
	s := make([]float64, 0, len(y))
	for _, v := range y {
		if !math.IsNaN(v) {
			s = append(s, v)
		}
	}
	if len(s) == 0 {
		return math.NaN()
	}
	slices.Sort(s)
	return (s[(len(s)-1)/2] + s[len(s)/2]) / 2
}
