package dsp

import (
	"fmt"
	"math"
	"time"
)

// Mark says that the host's clock showed at when sample n, on the bench's own
// time line, had just arrived. Arrivals may be late by anything, never early.
// Call it about once a second, from the goroutine that calls Samples, and only
// while the host's clock is disciplined: what it says is believed.
func (b *Bench) Mark(n int64, at time.Time) { b.clock.mark(n, at) }

// readClock looks at the sample clock before a reading is made. Where nothing
// was stated of it, what was found is used from now on.
func (b *Bench) readClock() clockSay {
	e, u, from, _ := b.clock.estimate()
	c := clockSay{e: math.Round(e*1e12) / 1e12, u: u, from: from, apart: b.clock.apart} // as JSON keeps it
	b.cfg.SampleRateError = c.scale(&b.given) - 1
	return c
}

// tellTones tells the clock where the tones are. One that is not heard for now is
// still kept clear of.
func (b *Bench) tellTones(r *Reading) {
	scale := 1 + b.cfg.SampleRateError
	for i, f := range [2]float64{r.CarrierTone, r.LocalTone} {
		if !math.IsNaN(f) {
			b.tones[i] = f / scale
		}
	}
	if !math.IsNaN(b.tones[0]) && !math.IsNaN(b.tones[1]) {
		b.clock.tones(b.tones[0], b.tones[1])
	}
}

// statedLeast is taken for the uncertainty of a stated sample-rate error that came
// without one, when it is held against what was found.
const statedLeast = 1e-6

// clockStated says whether the sample clock's error was stated.
func (c *Config) clockStated() bool { return c.SampleRateError != 0 || c.SampleRateErrorU != 0 }

// clockSay is what is found of the sample clock: NaN where nothing is.
type clockSay struct {
	e, u  float64
	from  string
	apart bool // the sources contradict each other
}

var noClock = clockSay{e: math.NaN(), u: math.NaN()}

// scale returns 1 + e: beats per true second over beats per nominal one. What was
// stated counts for more than what was found.
func (c clockSay) scale(cfg *Config) float64 {
	if cfg.clockStated() || math.IsNaN(c.e) {
		return 1 + cfg.SampleRateError
	}
	return 1 + c.e
}

// against says whether what was found contradicts what was stated.
func (c clockSay) against(cfg *Config) bool {
	u := cfg.SampleRateErrorU
	if u == 0 {
		u = statedLeast
	}
	return cfg.clockStated() && math.Abs(c.e-cfg.SampleRateError) > 3*math.Hypot(c.u, u)
}

// uncertainty returns the standard uncertainty of the scale; where nothing is
// known, the allowance for that.
func (c clockSay) uncertainty(cfg *Config) (u float64, known bool) {
	off := math.Abs(c.e - cfg.SampleRateError)
	switch {
	case c.against(cfg):
		return max(cfg.SampleRateErrorU, off), true
	case cfg.SampleRateErrorU != 0:
		return cfg.SampleRateErrorU, true
	case math.IsNaN(c.e):
		return clockAllowance / math.Sqrt(3), false
	case cfg.clockStated():
		return math.Hypot(off, c.u), true
	}
	return c.u, true
}

// source says in words what the uncertainty of the scale rests on.
func (c clockSay) source(cfg *Config) string {
	switch {
	case c.against(cfg):
		return fmt.Sprintf("sample clock, as stated, but it is %+.2f ppm by %s", c.e*1e6, c.from)
	case cfg.SampleRateErrorU != 0:
		return "sample clock, as stated"
	case !math.IsNaN(c.e) && cfg.clockStated():
		return "sample clock, as stated, borne out by " + c.from
	case !math.IsNaN(c.e):
		return "sample clock, from " + c.from
	case c.from != "":
		return fmt.Sprintf("sample clock, within %g ppm: %s", clockAllowance*1e6, c.from)
	}
	if cfg.clockStated() {
		return fmt.Sprintf("sample clock, no uncertainty stated: within %g ppm", clockAllowance*1e6)
	}
	return fmt.Sprintf("sample clock, nothing stated: within %g ppm", clockAllowance*1e6)
}

// say puts the clock into a reading.
func (c clockSay) say(r *Reading, cfg *Config) {
	r.ClockError, r.ClockErrorU, r.ClockFrom = c.e, c.u, c.from
	if u, known := c.uncertainty(cfg); known && !math.IsNaN(r.OffsetU) {
		r.OffsetU = math.Hypot(r.OffsetU, r.Beat*u/cfg.Local)
	}
	if !c.apart && !c.against(cfg) {
		return
	}
	if r.Why != "" {
		r.Why += "; "
	}
	if c.against(cfg) {
		r.Why += fmt.Sprintf("the sample clock is stated as %+.2f ppm, but is %+.2f by %s", cfg.SampleRateError*1e6, c.e*1e6, c.from)
	} else {
		r.Why += "the sample clock: " + c.from
	}
}
