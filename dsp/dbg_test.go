package dsp

import (
	"encoding/json"
	"fmt"
	"math"
	"testing"
)

func TestDbg(t *testing.T) {
	for _, cn0 := range []float64{35, 50, 70} {
		var se, su, n float64
		for seed := range uint64(30) {
			s := scene{rate: 8000, seconds: 60, carrier: 1000.3, local: 1004.5 + float64(seed)*.3, cn0: cn0, seed: seed}
			rs := play(t, Config{Rate: 8000, LocalTone: s.local}, s.samples())
			sm := NewSummer(Config{Rate: 8000})
			for _, r := range rs {
				sm.Add(r)
			}
			x := sm.Summary()
			if seed == 0 {
				j, _ := json.Marshal(x)
				fmt.Println(string(j))
			}
			d := float64(x.Beat) - (s.local - s.carrier)
			se += d * d
			su += float64(x.BeatU * x.BeatU)
			n++
		}
		b := bound(cn0, 60) * math.Sqrt2
		fmt.Println(cn0, "rms", math.Sqrt(se/n), "bound", b, "ratio", math.Sqrt(se/n)/b, "u", math.Sqrt(su/n)/b)
	}
}
