package dsp

import (
	"encoding/json"
	"math"
	"math/rand/v2"
	"strings"
	"testing"
	"time"
)

// run is one bench with its summer and all its readings.
type run struct {
	*Bench
	sum *Summer
	all []Reading
}

func newRun(t *testing.T, cfg Config) *run {
	t.Helper()
	r := &run{}
	cfg.OnReading = func(x Reading) { r.all, r.sum = append(r.all, x), r.summer(); r.sum.Add(x) }
	b, err := New(cfg)
	if err != nil {
		t.Fatal(err)
	}
	r.Bench = b
	return r
}

func (r *run) summer() *Summer {
	if r.sum == nil {
		r.sum = NewSummer(r.Config())
	}
	return r.sum
}

func (r *run) last() *Reading { return &r.all[len(r.all)-1] }

// found checks that a run that was told nothing of its clock found e, that the
// readings at the end and the summary of all of it are right by it, and that both
// say what they rest on.
func (r *run) found(t *testing.T, e, most, beat float64, words string) {
	t.Helper()
	x, s := r.last(), r.sum.Summary()
	t.Logf("e %+.3f ppm, error %+.3f, u %.3f, %s", x.ClockError*1e6, (x.ClockError-e)*1e6, x.ClockErrorU*1e6, x.ClockFrom)
	t.Logf("beat of the last reading off by %+.3f mHz, u %.3f; of the run by %+.3f mHz, u %.3f; %s",
		(x.BeatAbs-beat)*1e3, math.Hypot(x.BeatU, beat*x.ClockErrorU)*1e3, (float64(s.BeatAbs)-beat)*1e3, math.Hypot(float64(s.BeatU), beat*x.ClockErrorU)*1e3, s.Method)
	if !(math.Abs(x.ClockError-e) <= min(most, 3*x.ClockErrorU)) || !(x.ClockErrorU <= most) || !strings.HasPrefix(x.ClockFrom, words) {
		t.Errorf("the clock: %+.3f ppm, u %.3f, %s; it is %+.3f", x.ClockError*1e6, x.ClockErrorU*1e6, x.ClockFrom, e*1e6)
	}
	if !(math.Abs(x.BeatAbs-beat) <= 3*math.Hypot(x.BeatU, beat*x.ClockErrorU)) {
		t.Errorf("the last reading: %.6f Hz, u %.6f; the beat is %g", x.BeatAbs, x.BeatU, beat)
	}
	if !(math.Abs(float64(s.BeatAbs)-beat) <= 3*math.Hypot(float64(s.BeatU), beat*x.ClockErrorU)) {
		t.Errorf("the run: %.6f Hz, u %.6f; the beat is %g", s.BeatAbs, s.BeatU, beat)
	}
	if float64(s.ClockPPM) != ppm(x.ClockError) || float64(s.ClockUPPM) != ppm(x.ClockErrorU) || s.ClockFrom != x.ClockFrom {
		t.Errorf("the summary's clock: %v, u %v, %s", s.ClockPPM, s.ClockUPPM, s.ClockFrom)
	}
	for _, l := range s.Budget {
		if strings.HasPrefix(l.Source, "sample clock") {
			want := beat * x.ClockErrorU / r.Config().Local
			if l.Source != "sample clock, from "+x.ClockFrom || math.Abs(l.U/want-1) > 0.01 {
				t.Errorf("budget: %s %g, want %g", l.Source, l.U, want)
			}
		}
	}
	if c := r.Config(); c.SampleRateError != 0 {
		t.Errorf("Config tells %g as if that had been stated", c.SampleRateError)
	}
}

// A local set aside by 100 Hz, a clock off by 150 ppm: by the nominal clock the
// beat is 15 mHz wrong. Second pulses put it right, for the whole run, without a
// word from anybody. What is stated is kept, and told to be wrong if it is.
func TestBenchFindsClock(t *testing.T) {
	t.Parallel()
	const e, beat = 150e-6, 100.0
	seconds, most := 1500.0, 0.6e-6
	if long() {
		seconds, most = 7200, 0.4e-6
	}
	s := ticking{rate: 4000, e: e, tone: 600, beat: beat, pulse: 1000, cn0: 50, seed: 3}
	cfg := Config{Rate: s.rate, Local: 10e6 + beat, LocalTone: s.tone + beat}
	right, wrong := cfg, cfg
	right.SampleRateError, right.SampleRateErrorU = 150.1e-6, 0.2e-6
	wrong.SampleRateError, wrong.SampleRateErrorU = 100e-6, 0.2e-6
	untold, told, misled := newRun(t, cfg), newRun(t, right), newRun(t, wrong)
	s.play(seconds, func(x []float32, n int64) {
		for _, r := range []*run{untold, told, misled} {
			if n > 1000*4000 && r.n < 1000*4000 { // this block is lost, and counted
				r.Gap(int64(len(x)))
				continue
			}
			r.Samples([][]float32{x})
		}
	})
	untold.found(t, e, most, beat, "second pulses over ")
	if got := float64(untold.sum.Summary().BeatAbs) - beat; long() && math.Abs(got) > 0.1e-3 {
		t.Errorf("the beat is off by %+.3f mHz", got*1e3)
	}
	if x := untold.all[100]; !math.IsNaN(x.ClockError) || math.Abs(x.Beat-beat/(1+e)) > 0.003 {
		t.Errorf("before anything is known: %s, clock %g", describe(x), x.ClockError)
	}
	x := untold.last()
	if want := math.Hypot(x.BeatU, beat*x.ClockErrorU) / (10e6 + beat); math.Abs(x.OffsetU/want-1) > 1e-6 {
		t.Errorf("u of the offset %g, want %g", x.OffsetU, want)
	}
	for _, c := range []struct {
		*run
		why, source string
		u           float64
	}{
		{told, "", "sample clock, as stated", 0.2e-6},
		{misled, "the sample clock is stated as +100.00 ppm, but is +1", "sample clock, as stated, but it is +1", 50e-6},
	} {
		x, sum := c.last(), c.sum.Summary()
		if d := x.Beat - beat*(1+c.given.SampleRateError)/(1+e); math.Abs(d) > 4*x.BeatU || c.Config().SampleRateError != c.given.SampleRateError {
			t.Errorf("stated %g: the reading is by another clock: %s", c.given.SampleRateError, describe(*x))
		}
		if d := float64(sum.Beat) - beat*(1+c.given.SampleRateError)/(1+e); math.Abs(d) > 4*float64(sum.BeatU) {
			t.Errorf("stated %g: the summary is by another clock: %v", c.given.SampleRateError, sum.Beat)
		}
		l := sum.Budget[1]
		if !strings.Contains(x.Why, c.why) || c.why == "" && strings.Contains(x.Why, "clock") || !strings.HasPrefix(l.Source, c.source) ||
			c.why == "" && l.Source != c.source || math.Abs(l.U/(beat*c.u/10e6)-1) > 0.03 {
			t.Errorf("stated %g: why %q, budget %q %g", c.given.SampleRateError, x.Why, l.Source, l.U)
		}
	}
}

// A mixer's output holds no pulses: there the host's clock alone tells, from
// arrivals that are late by whatever.
func TestBenchFindsClockByMarks(t *testing.T) {
	t.Parallel()
	const rate, e, beat = 1000.0, -150e-6, 100.0
	r := rand.New(rand.NewPCG(31, 1))
	b := newRun(t, Config{Rate: rate, Hookup: Mixer, Local: 10e6 + beat})
	start := time.Date(2026, 3, 1, 22, 0, 0, 0, time.UTC)
	x := make([]float32, 1000)
	for n := int64(0); n < 1200*1000; n += 1000 {
		for i := range x {
			t := float64(n+int64(i)) / (rate * (1 + e))
			x[i] = float32(0.1*math.Cos(2*math.Pi*frac(beat*t)) + 0.002*r.NormFloat64())
		}
		b.Mark(n, start.Add(time.Duration((float64(n)/(rate*(1+e))+0.03*r.Float64())*1e9)))
		b.Samples([][]float32{x})
	}
	b.found(t, e, 3e-6, beat, "host clock over ")
	if x := b.all[60]; !math.IsNaN(x.ClockError) || x.ClockFrom != "" {
		t.Errorf("after a minute: %g, %q", x.ClockError, x.ClockFrom)
	}
}

// What is said of the clock, by what was stated and what was found.
func TestClockSaid(t *testing.T) {
	const m = 1e-6
	some := func(e, u float64) clockSay { return clockSay{e: e * m, u: u * m, from: "second pulses over 2.0 h"} }
	torn := noClock
	torn.from, torn.apart = "second pulses over 2.0 h and host clock over 2.0 h, which disagree: +10.00 and +80.00 ppm", true
	for _, c := range []struct {
		e, u   float64 // stated, ppm
		found  clockSay
		scale  float64 // ppm
		want   float64 // u, ppm
		known  bool
		source string
		why    string
	}{
		{0, 0, noClock, 0, 100 / math.Sqrt(3), false, "sample clock, nothing stated: within 100 ppm", ""},
		{0, 0, torn, 0, 100 / math.Sqrt(3), false, "sample clock, within 100 ppm: " + torn.from, "the sample clock: " + torn.from},
		{0, 0, some(30, 0.3), 30, 0.3, true, "sample clock, from second pulses over 2.0 h", ""},
		{20, 0.5, noClock, 20, 0.5, true, "sample clock, as stated", ""},
		{20, 0.5, some(20.4, 0.3), 20, 0.5, true, "sample clock, as stated", ""},
		{20, 0.5, some(30, 0.3), 20, 10, true, "sample clock, as stated, but it is +30.00 ppm by second pulses over 2.0 h", "the sample clock is stated as +20.00 ppm, but is +30.00 by second pulses over 2.0 h"},
		{20, 0, noClock, 20, 100 / math.Sqrt(3), false, "sample clock, no uncertainty stated: within 100 ppm", ""},
		{20, 0, some(20.4, 0.3), 20, 0.5, true, "sample clock, as stated, borne out by second pulses over 2.0 h", ""},
		{0, 0.5, some(0.4, 0.3), 0, 0.5, true, "sample clock, as stated", ""},
	} {
		cfg := Config{Local: 10e6, SampleRateError: c.e * m, SampleRateErrorU: c.u * m}
		u, known := c.found.uncertainty(&cfg)
		r := Blank(0.5, Apart)
		r.Beat, r.OffsetU, r.Why = 100, 0, "x"
		c.found.say(&r, &cfg)
		why := strings.TrimPrefix(strings.TrimPrefix(r.Why, "x"), "; ")
		if math.Abs(c.found.scale(&cfg)-1-c.scale*m) > 1e-15 || math.Abs(u-c.want*m) > 1e-12 || known != c.known ||
			c.found.source(&cfg) != c.source || why != c.why || known && math.Abs(r.OffsetU/(100*u/10e6)-1) > 1e-9 || !known && r.OffsetU != 0 {
			t.Errorf("%g (%g) ppm stated, %+v found: scale %g, u %g, %v, %q, %q, offset %g", c.e, c.u, c.found, c.found.scale(&cfg), u, known, c.found.source(&cfg), why, r.OffsetU)
		}
	}
}

// The clock survives the trip through JSON, and null stays unknown.
func TestClockJSON(t *testing.T) {
	for _, e := range []float64{math.NaN(), 0, 150.123456e-6, -3e-6} {
		r := Blank(0.5, Apart)
		r.ClockError, r.ClockErrorU = e, math.Abs(e)/100
		if !math.IsNaN(e) {
			r.ClockFrom = "host clock over 10 min"
		}
		line := r.AppendJSON(nil)
		var back Reading
		if err := json.Unmarshal(line, &back); err != nil {
			t.Fatal(err)
		}
		if math.IsNaN(e) != strings.Contains(string(line), `"clock_error_ppm":null,"clock_error_u_ppm":null`) || math.IsNaN(e) != math.IsNaN(back.ClockError) ||
			math.Abs(back.ClockError-e) > 1e-12 || math.Abs(back.ClockErrorU-r.ClockErrorU) > 1e-12 || back.ClockFrom != r.ClockFrom {
			t.Errorf("%g: %s, read back as %+v", e, line, back)
		}
	}
}
