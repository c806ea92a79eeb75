package dsp

import (
	"fmt"
	"math"
	"os"
	"testing"
)

func show(r Reading) {
	fmt.Printf("%5.1f %-9s %.6f u %.6f |%.4f| C %.3f %.2f dB %.2f  L %.3f %.2f dB %.2f  ph %.4f run %d %v %s\n", r.T, r.State, r.Beat, r.BeatU, r.BeatAbs, r.CarrierTone, r.CarrierDBFS, r.CarrierCN0, r.LocalTone, r.LocalDBFS, r.LocalCN0, r.Phase, r.PhaseRun, r.Flags, r.Why)
}

func TestTry(t *testing.T) {
	if os.Getenv("TRY") == "" {
		t.Skip()
	}
	away := func(a, b float64) func(float64) (float64, float64) {
		return func(t float64) (float64, float64) {
			if t >= a && t < b {
				return 0, 0
			}
			return 1, 0
		}
	}
	fmt.Println("enter/leave")
	s := scene{rate: 8000, seconds: 40, carrier: 1000.3, local: 1003.5, cn0: 50, seed: 1, carrFn: away(10.4, 18.7), localFn: away(24.35, 31.2)}
	for _, r := range play(t, Config{Rate: 8000, LocalTone: 1003}, s.samples()) {
		show(r)
	}
	fmt.Println("retune at 10.4 by +70, at 20.6 by -400")
	jump := func(t float64) (float64, float64) {
		p := 0.0
		if t > 10.4 {
			p += 70 * (t - 10.4)
		}
		if t > 20.6 {
			p -= 400 * (t - 20.6)
		}
		return 1, p
	}
	s = scene{rate: 8000, seconds: 30, carrier: 1000.3, local: 1003.5, cn0: 50, seed: 1, carrFn: jump, localFn: jump}
	for _, r := range play(t, Config{Rate: 8000, LocalTone: 1003}, s.samples()) {
		show(r)
	}
	fmt.Println("trim through zero 5 to -4 in 30 s")
	trim := func(t float64) (float64, float64) {
		if t < 5 {
			return 1, 0
		}
		u := min(t-5, 30)
		p := -0.3 * u * u / 2
		if t > 35 {
			p += -9 * (t - 35)
		}
		return 1, p
	}
	s = scene{rate: 8000, seconds: 50, carrier: 1000.3, local: 1005.3, cn0: 50, seed: 1, ampL: 0.15, localFn: trim}
	for _, r := range play(t, Config{Rate: 8000, LocalTone: 1003}, s.samples()) {
		show(r)
	}
}

func TestAccuracy(t *testing.T) {
	for _, rate := range []float64{8000, 48000} {
		for _, cn0 := range []float64{35, 45, 55, 70} {
			var se, su float64
			n := 0
			for seed := range uint64(6) {
				sep := 4.0 + float64(seed)*1.37
				s := scene{rate: rate, seconds: 22, carrier: 900.3 + float64(seed)*17.77, cn0: cn0, seed: seed + 10}
				s.local = s.carrier + sep
				for _, r := range play(t, Config{Rate: rate, LocalTone: s.local}, s.samples()) {
					if math.IsNaN(r.Beat) {
						if r.T > 2 {
							t.Logf("%v %v: %v %v", rate, cn0, r.T, r.Why)
						}
						continue
					}
					se += (r.Beat - sep) * (r.Beat - sep)
					su += r.BeatU * r.BeatU
					n++
				}
			}
			b := math.Sqrt2 * bound(cn0, 1)
			t.Logf("%6.0f Hz %2.0f dB-Hz: n %d rms %.3e bound %.3e ratio %.3f u ratio %.3f", rate, cn0, n, math.Sqrt(se/float64(n)), b, math.Sqrt(se/float64(n))/b, math.Sqrt(su/float64(n))/b)
		}
	}
}
