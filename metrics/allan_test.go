package metrics

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"offbeat/dsp"
	"offbeat/dsp/stability"
)

// What is exposed is the deviation of the phases that the readings gave: with a
// gap, a break, a turn of the trimmer and a new beginning, none of which may
// enter.
func TestAllanDeviation(t *testing.T) {
	e, _, _ := fixed()
	b := e.Bench("other", BenchInfo{"two-tone", "usb", 10e6, 10e6, "test"})
	rng := rand.New(rand.NewPCG(24, 1))
	var x []float64
	var run []int32
	phase, part := 0.0, int32(0)
	second := 0.5
	for i := range 3000 {
		r := dsp.Blank(second, dsp.Apart)
		second++
		phase += 3.2 + 1e-3*rng.NormFloat64()
		r.Phase = phase
		switch i {
		case 700: // the phase loses count
			phase += 1000
			r.Phase, part = phase, part+1
		case 1200: // the trimmer is turned
			phase += 50
			r.Phase, part = phase, part+1
			r.Flags = []dsp.Flag{dsp.Retuned}
		case 1500:
			r.Phase = math.NaN()
		case 1800: // 40 seconds without a reading
			second += 40
			r.T += 40
			for range 40 {
				x, run = append(x, math.NaN()), append(run, part)
			}
		case 2100: // the input was opened anew
			second, part = 1.5, part+1
			r.T = 0.5
		}
		if i >= 700 {
			r.PhaseRun = 1
		}
		b.Reading(r)
		x, run = append(x, r.Phase/10e6), append(run, part)
	}
	text := scrape(t, e.Handler(), "")
	for m := 1; m <= 16; m *= 2 {
		want, _ := stability.Overlapping(x, run, 1, m)
		var got, low, high float64
		for _, line := range strings.Split(text, "\n") {
			fmt.Sscanf(line, fmt.Sprintf(`offbeat_allan_deviation_ratio{bench="other",tau="%d"} %%g`, m), &got)
			fmt.Sscanf(line, fmt.Sprintf(`offbeat_allan_deviation_low_ratio{bench="other",tau="%d"} %%g`, m), &low)
			fmt.Sscanf(line, fmt.Sprintf(`offbeat_allan_deviation_high_ratio{bench="other",tau="%d"} %%g`, m), &high)
		}
		if math.Abs(got/want-1) > 1e-9 || !(low < got && got < high && low > got/2) {
			t.Errorf("tau %d: %g from %g to %g, want %g", m, got, low, high, want)
		}
	}
	if n := len(b.Stability()); n < 9 {
		t.Errorf("%d octaves of 3000 seconds", n)
	}
	// The same bench against another carrier begins anew; the same again does not.
	e.Bench("other", BenchInfo{"two-tone", "usb", 10e6, 10e6, "another input"})
	if b.Stability() == nil {
		t.Error("forgotten without a reason")
	}
	e.Bench("other", BenchInfo{"two-tone", "usb", 5e6, 5e6, "another input"})
	if b.Stability() != nil {
		t.Error("a deviation of another carrier")
	}
}
