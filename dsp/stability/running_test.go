package stability

import (
	"math"
	"math/rand/v2"
	"testing"
)

// gappyWalk is n phases with missing ones, breaks, and an outage.
func gappyWalk(rng *rand.Rand, n int) (x []float64, run []int32) {
	x, run = make([]float64, n), make([]int32, n)
	for i := 1; i < n; i++ {
		run[i] = run[i-1]
		x[i] = x[i-1] + rng.NormFloat64() + 3
		if rng.IntN(n/4) == 0 {
			run[i]++
			x[i] -= 1e4
		}
	}
	for i := range x {
		if rng.IntN(50) == 0 || i > n/3 && i < n/3+n/50 {
			x[i] = math.NaN()
		}
	}
	return x, run
}

// At every moment a Running equals the batch computation over all phases so far
// with the same positions.
func TestRunningIsTheBatch(t *testing.T) {
	rng := rand.New(rand.NewPCG(16, 2))
	const n, octaves = 5000, 14
	x, run := gappyWalk(rng, n)
	r := NewRunning(0.5, octaves)
	done := 0
	for i := range x {
		r.Add(x[i], run[i])
		if i != n-1 && rng.IntN(500) > 0 {
			continue
		}
		got := r.States(nil, 0.6827)
		for k := range octaves {
			m := 1 << k
			stride := max(1, m/16)
			sum, terms := 0.0, 0
			for a := 0; a+2*m <= i; a += stride {
				if run[a] != run[a+m] || run[a] != run[a+2*m] || math.IsNaN(x[a]+x[a+m]+x[a+2*m]) {
					continue
				}
				d := (x[a+2*m] - x[a+m]) - (x[a+m] - x[a])
				sum += d * d
				terms++
			}
			if terms == 0 {
				continue
			}
			if len(got) == 0 || got[0].Tau != float64(m)/2 || got[0].N != int64(terms) {
				t.Fatalf("after %d phases, m %d: %d terms by the batch, %+v", i+1, m, terms, got)
			}
			near(t, "running", got[0].Dev, math.Sqrt(sum/2/float64(terms))/(float64(m)/2), 1e-12)
			got = got[1:]
			done++
		}
		if len(got) > 0 {
			t.Fatalf("octaves too many: %+v", got)
		}
	}
	if done < 50 {
		t.Fatalf("only %d comparisons", done)
	}
}

// Up to tau = 16 every position is taken: then it is the overlapping deviation.
func TestRunningIsOverlapping(t *testing.T) {
	_, x := lehmer()
	r := NewRunning(1, 24)
	for _, v := range x {
		r.Add(v, 0)
	}
	for _, s := range r.States(nil, 0.6827) {
		dev, n := Overlapping(x, nil, 1, int(s.Tau))
		if s.Tau <= 16 {
			near(t, "dev", s.Dev, dev, 1e-12)
			near(t, "edf", s.EDF, EDF(0, len(x), int(s.Tau)), 1e-12)
			if int(s.N) != n || s.Noise != 0 {
				t.Errorf("tau %g: %+v, want %d terms of white fm", s.Tau, s, n)
			}
		} else if n >= 20 {
			near(t, "dev of fewer positions", s.Dev, dev, 0.1)
			near(t, "edf of fewer positions", s.EDF, EDF(0, len(x), int(s.Tau)), 0.1)
		}
		if !(s.Low < s.Dev && s.Dev < s.High) {
			t.Errorf("limits: %+v", s)
		}
	}
}

// Skip is so many missing phases, however long the outage.
func TestRunningSkips(t *testing.T) {
	rng := rand.New(rand.NewPCG(3, 3))
	for _, gap := range []int64{1, 7, 64, 700, 5000, 12345} {
		a, b := NewRunning(1, 6), NewRunning(1, 6)
		s := 0.0
		for i := range int64(3000) {
			s += rng.NormFloat64()
			a.Add(s, 0)
			b.Add(s, 0)
			if i == 1000 {
				a.Skip(gap)
				for range gap {
					b.Add(math.NaN(), 0)
				}
			}
		}
		for k, s := range a.States(nil, 0.6827) {
			if w := b.States(nil, 0.6827)[k]; s != w {
				t.Errorf("gap %d: %+v, want %+v", gap, s, w)
			}
		}
	}
}

// The noise types of long rows of simulated noise, and that a constant or a
// drift has none.
func TestRunningNoise(t *testing.T) {
	rng := rand.New(rand.NewPCG(5, 5))
	for a, step := range map[Noise]func() func() float64{
		2: func() func() float64 { return rng.NormFloat64 },
		0: func() func() float64 {
			s := 0.0
			return func() float64 { s += rng.NormFloat64(); return s }
		},
		-2: func() func() float64 {
			s, y := 0.0, 0.0
			return func() float64 { y += rng.NormFloat64(); s += y; return s }
		},
	} {
		r, next := NewRunning(1, 20), step()
		for range 20000 {
			r.Add(next(), 0)
		}
		for _, s := range r.States(nil, 0.6827) {
			if s.Tau <= 128 && s.Noise != a {
				t.Errorf("%v at tau %g is called %v", a, s.Tau, s.Noise)
			}
		}
	}
	r := NewRunning(1, 8)
	for i := range 500 {
		r.Add(float64(i), 0)
	}
	for _, s := range r.States(nil, 0.6827) {
		if s.Dev != 0 || !math.IsNaN(s.Low) {
			t.Errorf("a constant frequency: %+v", s)
		}
	}
}

func TestRunningAllocatesNothing(t *testing.T) {
	r := NewRunning(1, 24)
	x := 0.0
	if n := testing.AllocsPerRun(10000, func() { x++; r.Add(x, 0) }); n != 0 {
		t.Errorf("%v allocations a phase", n)
	}
}

func BenchmarkRunning(b *testing.B) {
	r := NewRunning(1, 24)
	x := 0.0
	for b.Loop() {
		x += 1.5
		r.Add(x, 0)
	}
}

func BenchmarkOverlapping(b *testing.B) {
	x := make([]float64, 1_000_001)
	for i := range x {
		x[i] = float64(i * i % 1009)
	}
	b.SetBytes(8 * int64(len(x)))
	for b.Loop() {
		Octaves(OverlappingAllan, x, nil, 1)
	}
}
