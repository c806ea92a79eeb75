package dsp

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"
)

// Two tones at rest too close to be told apart: what is said of their beat
// holds in every scene (any phase between them, any levels, a drifting receiver,
// with gain control and without), and narrows as they rest.
func TestNearZero(t *testing.T) {
	seed := rand.Uint64()
	t.Logf("seed %d", seed)
	r := rand.New(rand.NewPCG(seed, 1))
	narrow, n := 0, 0
	for range 60 {
		s := newSlow(newPlan(8000))
		s.centre = 1000
		d := 0.02 * math.Pow(10, -2*r.Float64()) * float64(1-2*r.IntN(2))
		ratio, phase := math.Pow(10, -r.Float64()), 2*math.Pi*r.Float64()
		drift, off, agc := 0.005*r.NormFloat64(), r.Float64()-0.5, r.IntN(2) == 0
		rest := 20 + 180*r.Float64()
		sigma := math.Sqrt(s.rate/math.Pow(10, 5.5)) / math.Sqrt2
		for m := range int64(rest * s.rate) {
			x := s.time(m)
			z := 1 + cmplx.Rect(ratio, 2*math.Pi*d*x+phase)
			if agc {
				z /= complex(max(cmplx.Abs(z), 0.05), 0)
			}
			z *= cmplx.Rect(1, 2*math.Pi*(off*x+drift*x*x/2))
			s.put(z+complex(r.NormFloat64(), r.NormFloat64())*complex(sigma, 0), true)
		}
		var x nearZero
		var st stretch
		amps := [2]float64{1, ratio}
		if r.IntN(2) == 0 {
			amps = [2]float64{ratio, 1}
		}
		got := x.bound(s, &st, s.upto(), 1000.1, amps[0], amps[1])
		if got < math.Abs(d) {
			t.Errorf("beat %.5f Hz, said to be within %.5f; levels 1:%.2f, %.0f s, gain control %v", d, got, ratio, rest, agc)
		}
		if ratio > 0.7 {
			continue // two tones as loud as each other show themselves only where they cancel
		}
		n++
		if got*rest < 5 {
			narrow++
		}
	}
	t.Logf("within five cycles of the rest in %d of %d", narrow, n)
	if narrow < n*8/10 {
		t.Errorf("only %d of %d bounds were within five cycles of the rest", narrow, n)
	}
}

// A local that begins to move ends what a long rest had shown.
func TestNearZeroEndsWhenItMoves(t *testing.T) {
	r := rand.New(rand.NewPCG(3, 3))
	for _, moved := range []float64{0, 2} {
		s := newSlow(newPlan(8000))
		s.centre = 1000
		sigma := math.Sqrt(s.rate/1e6) / math.Sqrt2
		const rest = 120
		phase := 0.0
		for m := range int64((rest + moved) * s.rate) {
			x := s.time(m)
			if x > rest {
				phase += 2 * math.Pi * 0.3 * (x - rest) / s.rate
			}
			s.put(1+cmplx.Rect(0.7, phase)+complex(r.NormFloat64(), r.NormFloat64())*complex(sigma, 0), true)
		}
		var x nearZero
		var st stretch
		got := x.bound(s, &st, s.upto(), 1000, 1, 0.7)
		if now := 0.3 * max(0, moved-0.5); got < now || moved == 0 && !(got < 0.011) {
			t.Errorf("%g s after it began to move: within %g Hz, is %g", moved, got, now)
		}
	}
}
