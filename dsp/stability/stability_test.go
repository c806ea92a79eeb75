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

func TestPublishedOverlapping(t *testing.T) {
	y, x := lehmer()
	near(t, "y0", y[0], 0.5748904732, 1e-10)
	for _, c := range []struct {
		x    []float64
		m    int
		want float64
		n    int
	}{ // SP 1065 Tables 30 and 31
		{x, 1, 2.922319e-01, 999}, {x, 10, 9.159953e-02, 981}, {x, 100, 3.241343e-02, 801},
		{nbs14(), 1, 91.22945, 8}, {nbs14(), 2, 85.95287, 6},
	} {
		got, n := Overlapping(c.x, nil, 1, c.m)
		near(t, "oadev", got, c.want, 1e-6)
		if n != c.n {
			t.Errorf("m %d: %d terms, want %d", c.m, n, c.n)
		}
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

// SP 1065 Table 5 by another engine (values computed with NumPy; order white
// PM, flicker PM, white FM, flicker FM, random walk FM).
func TestEDF(t *testing.T) {
	for _, c := range []struct {
		n, m int
		want [5]float64
	}{
		{1001, 1, [5]float64{500.4990, 610.4141, 665.7796, 868.8091, 1000.0030}},
		{1001, 10, [5]float64{495.9445, 326.6242, 146.1768, 121.4841, 97.3319}},
		{1001, 100, [5]float64{445.3951, 64.9710, 13.0024, 9.6272, 7.4223}},
		{64, 4, [5]float64{30.333333, 24.469989, 20.115942, 16.842105, 13.650497}},
	} {
		for i, want := range c.want {
			near(t, "edf", EDF(Noise(2-i), c.n, c.m), want, 1e-5)
		}
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
