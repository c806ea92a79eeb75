package dsp

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"
)

func cosine(n int, rate, f, amp, turn float64) []float32 {
	x := make([]float32, n)
	for i := range x {
		_, fr := math.Modf(f * float64(i) / rate)
		x[i] = float32(amp * math.Cos(2*math.Pi*(fr+turn)))
	}
	return x
}

// A tone keeps its amplitude and its phase at the sample that the output
// belongs to, at every rate: the definition of a band, checked sample by sample.
func TestBandKeepsAmplitudeAndPhase(t *testing.T) {
	for _, rate := range []float64{10, 100, 500, 1000, 8000, 11025, 16000, 22050, 44100, 48000, 96000, 192000, 1e6} {
		p := newPlan(rate)
		t.Run(fmt.Sprintf("%g Hz: %d x %d -> %.1f Hz, +-%.0f Hz", rate, p.d1, p.d2, p.outRate(), p.half), func(t *testing.T) {
			if p.outRate() > 700 || (rate > 2000 && (p.outRate() < 330 || p.outRate() > 470)) {
				t.Fatalf("output rate %v", p.outRate())
			}
			f0 := min(1000, 0.21*rate)
			x := cosine(int(rate*1.5)+40, rate, f0+0.3*p.half, 0.5, 0.123)
			q := cosine(len(x), rate, f0+0.3*p.half, 0.5, 0.123-0.25)
			for _, iq := range []bool{false, true} {
				b := newBand(p, f0, iq, 0, 4096)
				r := rand.New(rand.NewPCG(1, 2))
				for i := 0; i < len(x); {
					n := min(len(x)-i, 1+r.IntN(3000))
					b.push(x[i:i+n], q[i:i+n])
					i += n
				}
				seen := 0
				for k := int64(0); k < b.next; k++ {
					i := k & int64(len(b.z)-1)
					if !b.ok[i] {
						continue
					}
					seen++
					ph := (f0+0.3*p.half)*float64(b.sampleOf(k))/rate + 0.123 - b.phaseAt(b.sampleOf(k))
					want := cmplx.Rect(0.5*p.gain(f0+0.3*p.half-b.centre), 2*math.Pi*ph)
					got := b.z[i]
					if !iq && p.d1*p.d2 == 1 { // the image at -f stays in a slow real input
						im := -(f0+0.3*p.half)*float64(b.sampleOf(k))/rate - 0.123 - b.phaseAt(b.sampleOf(k))
						got -= cmplx.Rect(0.5, 2*math.Pi*im)
					}
					if cmplx.Abs(got-want) > 5e-6 {
						t.Fatalf("iq %v output %d: %v, want %v", iq, k, got, want)
					}
				}
				if seen < int(0.8*1.5*p.outRate())-10 {
					t.Fatalf("only %d outputs", seen)
				}
			}
		})
	}
}

// What lies outside is at least 90 dB down wherever it would fold onto the
// +-140 Hz that are used.
func TestBandRejects(t *testing.T) {
	for _, rate := range []float64{8000, 16000, 44100, 48000, 96000, 192000} {
		p := newPlan(rate)
		worst := -300.0
		for off := 0.0; off < rate/2; off += 1 {
			folded := math.Abs(off - p.outRate()*math.Round(off/p.outRate()))
			if off < p.outRate()/2 || folded > p.half {
				continue
			}
			worst = max(worst, 20*math.Log10(math.Abs(p.exactGain(off))+1e-16))
		}
		t.Logf("%6.0f Hz: %.1f dB", rate, worst)
		if worst > -90 {
			t.Errorf("%g Hz: only %.1f dB", rate, worst)
		}
	}
}

func TestBandMarksGaps(t *testing.T) {
	p := newPlan(48000)
	b := newBand(p, 1000, false, 0, 4096)
	x := cosine(48000, 48000, 1010, 0.5, 0)
	b.push(x[:20000], nil)
	b.restart(30000)
	b.push(x[30000:], nil)
	_, z, ok := b.window(0, 47999, nil, nil)
	for i := range z {
		s := int64(i * 120)
		clean := s >= int64(p.reach()) && s+int64(p.reach()) < 20000 || s-int64(p.reach()) >= 30000 && s+int64(p.reach()) < 48000
		if ok[i] != clean {
			t.Fatalf("output at %d: ok %v, want %v", s, ok[i], clean)
		}
		if ok[i] && math.Abs(cmplx.Abs(z[i])-0.5*p.gain(1010-b.centre)) > 1e-5 {
			t.Fatalf("output at %d: %v", s, z[i])
		}
	}
}

func TestBandAllocatesNothing(t *testing.T) {
	b := newBand(newPlan(48000), 1000, false, 0, 4096)
	x := cosine(4800, 48000, 1010, 0.5, 0)
	b.push(x, nil)
	if n := testing.AllocsPerRun(50, func() { b.push(x, nil) }); n != 0 {
		t.Errorf("%v allocations a block", n)
	}
}

func BenchmarkBand(b *testing.B) {
	for _, rate := range []float64{8000, 44100, 48000, 192000} {
		b.Run(fmt.Sprint(rate), func(b *testing.B) {
			bd := newBand(newPlan(rate), 1000, false, 0, 4096)
			x := cosine(16384, rate, 1010, 0.5, 0)
			b.ReportAllocs()
			for b.Loop() {
				bd.push(x, nil)
			}
			b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(b.N)/16384, "ns/sample")
		})
	}
}
