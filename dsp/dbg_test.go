package dsp

import "testing"

func TestDbg(t *testing.T) {
	s := scene{rate: 8000, seconds: 12, carrier: 900.3, local: 904.3, cn0: 70, seed: 10}
	for _, r := range play(t, Config{Rate: 8000, LocalTone: 904.3}, s.samples()) {
		show(r)
	}
}
