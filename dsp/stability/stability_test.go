package stability

import (
	"math"
	"testing"
)

// lehmer is the 1000-point test set of SP 1065 section 12.4 (p. 108): the
// minimal-standard generator of Park and Miller, as frequency.
func lehmer() (y, x []float64) {
	n := int64(1234567890)
	x = []float64{0}
	for range 1000 {
		y = append(y, float64(n)/2147483647)
		x = append(x, x[len(x)-1]+y[len(y)-1])
		n = 16807 * n % 2147483647
	}
	return y, x
}

// nbs14 is the nine-frequency set of NBS Monograph 140, Annex 8.E, as phase
// (SP 1065 Table 29, p. 107).
func nbs14() []float64 {
	x := []float64{0}
	for _, y := range []float64{892, 809, 823, 798, 671, 644, 883, 903, 677} {
		x = append(x, x[len(x)-1]+y)
	}
	return x
}

func near(t *testing.T, what string, got, want, rel float64) {
	t.Helper()
	if !(math.Abs(got-want) <= rel*math.Abs(want)) {
		t.Errorf("%s: %.9g, want %.9g", what, got, want)
	}
}

// A gap or a break takes out exactly the differences that touch it: the slow
// way round is to list the triples.
func TestGapsAndBreaks(t *testing.T) {
	_, x := lehmer()
	x = x[:200]
	run := make([]int32, len(x))
	for i := 90; i < len(x); i++ {
		run[i] = 1
		x[i] += 0.37
	}
	x[40], x[41], x[150] = math.NaN(), math.NaN(), math.NaN()
	for _, m := range []int{1, 3, 8, 40} {
		sum, n := 0.0, 0
		for i := range x {
			j, k := i+m, i+2*m
			if k >= len(x) || i < 90 && k >= 90 || math.IsNaN(x[i]+x[j]+x[k]) {
				continue
			}
			d := (x[k] - x[j]) - (x[j] - x[i])
			sum += d * d
			n++
		}
		got, gn := Overlapping(x, run, 2, m)
		if gn != n {
			t.Errorf("m %d: %d terms, want %d", m, gn, n)
		}
		near(t, "gappy", got, math.Sqrt(sum/float64(n)/2)/(2*float64(m)), 1e-12)
	}
}

func TestLimits(t *testing.T) {
	// SP 1065 Table 32 (p. 109), 95 %; printed from an approximation of
	// chi-squared, hence 1e-3. Then the exact values (SciPy 1.10).
	lo, hi := Limits(9.159953e-02, 146.177, 0.95)
	near(t, "low, print", lo, 8.223942e-2, 1e-3)
	near(t, "high, print", hi, 1.035201e-1, 1e-3)
	near(t, "low", lo, 8.219489e-2, 1e-6)
	near(t, "high", hi, 1.034536e-1, 1e-6)
	lo, hi = Limits(9.159953e-02, 146.177, 0.683)
	near(t, "low 68", lo, 8.667789e-2, 1e-6)
	near(t, "high 68", hi, 9.746678e-2, 1e-6)
}

// Lag-1 identification of the test set: alpha before rounding, by NumPy.
func TestAlpha(t *testing.T) {
	_, x := lehmer()
	for _, c := range []struct {
		m    int
		want float64
	}{{1, .054855}, {2, .058516}, {4, .106632}, {8, .398089}, {16, -.303941}, {32, .110082}} {
		got, ok := Alpha(x, nil, c.m)
		if !ok || math.Abs(got-c.want) > 2e-5 {
			t.Errorf("m %d: %v %v, want %v", c.m, got, ok, c.want)
		}
	}
	if _, ok := Identify(x[:50], nil, 2); ok {
		t.Error("25 points are too few")
	}
}
