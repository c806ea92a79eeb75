package dsp

import (
	"math"
	"math/rand/v2"
	"testing"
)

// scene is receiver audio of known truth, made sample by sample with no filter
// in between: the independent side of the tests of this package.
type scene struct {
	rate    float64
	seconds float64
	carrier float64 // tone, Hz
	local   float64
	ampC    float64
	ampL    float64
	cn0     float64 // dB-Hz of each tone at its amplitude, by the louder one
	seed    uint64
	carrFn  func(t float64) (amp, turns float64) // modulation of the carrier
	localFn func(t float64) (amp, turns float64)
}

func (s scene) samples() []float32 {
	if s.ampC == 0 {
		s.ampC = 0.1
	}
	if s.ampL == 0 {
		s.ampL = 0.1
	}
	r := rand.New(rand.NewPCG(s.seed, 7))
	n := int(math.Round(s.rate * s.seconds))
	sigma := 0.0
	if s.cn0 != 0 {
		a := max(s.ampC, s.ampL)
		sigma = math.Sqrt(a * a / 2 * s.rate / 2 / math.Pow(10, s.cn0/10))
	}
	pc, pl := r.Float64(), r.Float64()
	x := make([]float32, n)
	for i := range x {
		t := float64(i) / s.rate
		ac, tc := 1.0, 0.0
		if s.carrFn != nil {
			ac, tc = s.carrFn(t)
		}
		al, tl := 1.0, 0.0
		if s.localFn != nil {
			al, tl = s.localFn(t)
		}
		v := s.ampC * ac * math.Cos(2*math.Pi*(frac(s.carrier*t)+pc+tc))
		v += s.ampL * al * math.Cos(2*math.Pi*(frac(s.local*t)+pl+tl))
		if sigma > 0 {
			v += sigma * r.NormFloat64()
		}
		x[i] = float32(v)
	}
	return x
}

func frac(v float64) float64 { return v - math.Floor(v) }

// play runs samples through a Bench in uneven blocks and returns its readings.
func play(t testing.TB, cfg Config, ch ...[]float32) []Reading {
	t.Helper()
	var out []Reading
	cfg.OnReading = func(r Reading) { out = append(out, r) }
	b, err := New(cfg)
	if err != nil {
		t.Fatal(err)
	}
	r := rand.New(rand.NewPCG(3, uint64(len(ch[0]))))
	for i := 0; i < len(ch[0]); {
		n := min(len(ch[0])-i, 1+r.IntN(5000))
		part := make([][]float32, len(ch))
		for k := range ch {
			part[k] = ch[k][i : i+n]
		}
		b.Samples(part)
		i += n
	}
	b.Finish()
	return out
}

// bound is the Rife-Boorstyn bound on the frequency of one line, Hz:
// sqrt(6)/(2 pi) / (sqrt(C/N0) T^1.5).
func bound(cn0dB, span float64) float64 {
	return math.Sqrt(6) / (2 * math.Pi) / math.Sqrt(math.Pow(10, cn0dB/10)) / math.Pow(span, 1.5)
}
