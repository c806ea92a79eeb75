package dsp

import (
	"fmt"
	"testing"
)

// In the steady state, both tones held, a block costs no allocation.
func TestBenchAllocatesNothing(t *testing.T) {
	for _, glimpses := range []bool{false, true} {
		s := scene{rate: 48000, seconds: 4, carrier: 1000.3, local: 1003.5, cn0: 55, seed: 1}
		x := s.samples()
		cfg := Config{Rate: 48000, LocalTone: 1003, OnReading: func(Reading) {}}
		if glimpses {
			cfg.OnGlimpse = func(Glimpse) {}
		}
		b, err := New(cfg)
		if err != nil {
			t.Fatal(err)
		}
		b.Samples([][]float32{x})
		// Whole seconds of the same sound again: phases jump, tones stay.
		ch := [][]float32{x[:48000]}
		b.Samples(ch)
		b.Samples(ch)
		n := testing.AllocsPerRun(20, func() { b.Samples(ch) })
		t.Logf("glimpses %v: %v allocations a second of sound", glimpses, n)
		if n > 2 {
			t.Errorf("glimpses %v: %v allocations a second of sound", glimpses, n)
		}
	}
}

func BenchmarkBench(b *testing.B) {
	for _, rate := range []float64{8000, 48000, 192000} {
		for _, glimpses := range []bool{false, true} {
			b.Run(fmt.Sprintf("%gHz/glimpses=%v", rate, glimpses), func(b *testing.B) {
				s := scene{rate: rate, seconds: 10, carrier: 1000, local: 1004, cn0: 55, seed: 1}
				x := s.samples()
				n := 0
				cfg := Config{Rate: rate, LocalTone: 1004, OnReading: func(r Reading) {
					if r.State == Apart {
						n++
					}
				}}
				if glimpses {
					cfg.OnGlimpse = func(Glimpse) {}
				}
				bn, err := New(cfg)
				if err != nil {
					b.Fatal(err)
				}
				bn.Samples([][]float32{x})
				ch := [][]float32{nil}
				b.ReportAllocs()
				for b.Loop() {
					for i := 0; i < len(x); i += 16384 {
						ch[0] = x[i:min(len(x), i+16384)]
						bn.Samples(ch)
					}
				}
				if n < 10 {
					b.Fatal("no tones")
				}
				b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/10/1000, "us/second")
				b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/10/rate, "ns/sample")
			})
		}
	}
}
