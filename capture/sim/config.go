// Package sim is the simulated bench: receiver audio of known truth. It serves
// as the daemon's default input, for trying things out without a radio, and as
// the source of scenes whose answer is known.
//
// The carrier reaches the receiver over a two-path HF channel after Watterson
// and ITU-R F.1487: each path multiplies the modulated carrier by a complex
// Gaussian process with a Gaussian Doppler spectrum, the second path delayed
// against the first. The local reaches it over a wire. Signs follow the
// project's model: upper sideband tone = rf - dial, lower sideband tone =
// dial - rf; a sample clock with fractional error e takes Rate*(1+e) samples a
// true second.
package sim

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
)

// Version grows whenever the same seed and configuration begin to give other
// sound.
const Version = 2

// Config describes a scene. New fills in defaults for zero values where the
// comment names one. Times are true seconds from the start; a tone outside of
// the band of the samples is not heard. Levels are those at the receiver's
// output before gain control.
type Config struct {
	Rate     float64 `json:"rate"`     // nominal samples a second, 10 to 384000; default 48000
	Seed     uint64  `json:"seed"`     // 0: chosen at random and told by Seed
	Hookup   string  `json:"hookup"`   // two-tone (default), mixer, quadrature
	Sideband string  `json:"sideband"` // usb (default), lsb
	Baseband bool    `json:"baseband"` // quadrature: both tones in the receiver's baseband instead of the beat
	Carrier  float64 `json:"carrier_hz"`
	Local    float64 `json:"local_hz"` // nominal, as heard; defaults 10e6
	Tone     float64 `json:"tone_hz"`  // audio pitch of the carrier; default 1000

	Offset         float64 `json:"offset_hz"`        // local's error at RF at the start
	Drift          float64 `json:"drift_hz_per_s"`   // of the local
	LocalWhiteFM   float64 `json:"local_white_fm"`   // Allan deviation of the local at 1 s, white FM
	LocalFlickerFM float64 `json:"local_flicker_fm"` // the floor of flicker FM, 1 s to 10000 s
	LocalWalkFM    float64 `json:"local_walk_fm"`    // at 1 s, random walk FM
	ReceiverDrift  float64 `json:"receiver_drift_hz_per_min"`
	ReceiverWander float64 `json:"receiver_wander_hz"` // rms of its slow coming and going over hours, bounded where drift is not

	CarrierDBFS float64    `json:"carrier_dbfs"`     // default -20
	LocalDBFS   float64    `json:"local_dbfs"`       // default -18
	CarrierCN0  float64    `json:"carrier_cn0_dbhz"` // of the unfaded carrier; default 55
	Passband    [2]float64 `json:"passband_hz"`      // of the receiver, for noise and programme; default 300 to 2700
	White       bool       `json:"white"`            // no such filter; so always for mixer and quadrature

	Channel   string  `json:"channel"`       // steady (default), quiet, moderate, disturbed, custom; rice:K is custom with RiceK, and quiet's paths unless it says
	SpreadHz  float64 `json:"spread_hz"`     // custom: rms Doppler width of each path, half the "Doppler spread" of F.1487; up to 15
	PathDelay float64 `json:"path_delay_s"`  // custom: of the second path, to the nearest sample
	PathShift float64 `json:"path_shift_hz"` // custom: mean Doppler of the second path
	RiceK     float64 `json:"rice_k"`        // power of a steady part over that of the fading parts, any channel but steady

	SecondPulses bool    `json:"second_pulses"` // 5 cycles of 1000 Hz on every second of the carrier's time
	Tones        bool    `json:"tones"`         // 500 and 600 Hz in alternate minutes
	Subcarrier   bool    `json:"subcarrier"`    // 100 Hz, keyed
	Speech       bool    `json:"speech"`        // speech-like noise at the end of every minute
	Depth        float64 `json:"depth"`         // scales all modulation; default 1

	AGC       bool    `json:"agc"`
	AGCAttack float64 `json:"agc_attack_s"` // default 0.005
	AGCDecay  float64 `json:"agc_decay_s"`  // default 0.5
	DC        float64 `json:"dc"`           // offset of a mixer's or quadrature input, full scale 1

	ClockError float64 `json:"clock_error"`  // e, a fraction
	DropEvery  float64 `json:"drop_every_s"` // mean time between drop-outs, 0: none
	DropFor    float64 `json:"drop_for_s"`   // their length; default 0.2

	Pace     bool    `json:"-"`          // at the pace of the clock, else as fast as possible
	Duration float64 `json:"duration_s"` // 0: endless

	CarrierAway [][2]float64 `json:"carrier_away,omitempty"` // from, to, s
	LocalAway   [][2]float64 `json:"local_away,omitempty"`
	Retunes     []Step       `json:"retunes,omitempty"` // of the receiver
	Trims       []Turn       `json:"trims,omitempty"`   // of the local
	Spurs       []Spur       `json:"spurs,omitempty"`
}

// Step moves both tones by By Hz of audio at time At.
type Step struct {
	At float64 `json:"at_s"`
	By float64 `json:"by_hz"`
}

// Turn moves the local by By Hz at RF, evenly over Over seconds from At on.
type Turn struct {
	At   float64 `json:"at_s"`
	By   float64 `json:"by_hz"`
	Over float64 `json:"over_s"`
}

// Spur is a steady tone of the receiver's own, or hum.
type Spur struct {
	Hz   float64 `json:"hz"`
	DBFS float64 `json:"dbfs"`
}

// Default is the demonstration: bench "counter" of the workshop at Skerrow hears
// the 10 MHz demo carrier by one quiet hop; its local is a little high. Its
// receiver drifts slowly enough for the tones to stay in the passband for a year.
func Default() Config {
	return Config{Seed: 1480, Offset: 3.2, Drift: 2e-7, LocalWhiteFM: 2e-11, LocalFlickerFM: 3e-12, LocalWalkFM: 2e-13,
		Channel: "quiet", RiceK: 4, ReceiverDrift: 0.002, ReceiverWander: 1.5, SecondPulses: true, Tones: true, Subcarrier: true, Speech: true}
}

// presets are the mid-latitude rows of ITU-R F.1487: delay between the paths,
// s, and Doppler spread, Hz, which is twice the rms width.
var presets = map[string][2]float64{
	"steady":    {0, 0},
	"quiet":     {0.5e-3, 0.1},
	"moderate":  {1e-3, 0.5},
	"disturbed": {2e-3, 1},
}

// Channels lists the names of channels; rice:K is one more, for any number K.
var Channels = []string{"steady", "quiet", "moderate", "disturbed", "custom"}

func (c *Config) complete() error {
	def := func(v *float64, d float64) {
		if *v == 0 {
			*v = d
		}
	}
	def(&c.Rate, 48000)
	def(&c.Carrier, 10e6)
	def(&c.Local, c.Carrier)
	def(&c.Tone, 1000)
	def(&c.CarrierDBFS, -20)
	def(&c.LocalDBFS, -18)
	def(&c.CarrierCN0, 55)
	def(&c.Depth, 1)
	def(&c.AGCAttack, 0.005)
	def(&c.AGCDecay, 0.5)
	def(&c.DropFor, 0.2)
	if c.Passband == [2]float64{} {
		c.Passband = [2]float64{300, 2700}
	}
	if c.Hookup == "" {
		c.Hookup = "two-tone"
	}
	if c.Sideband == "" {
		c.Sideband = "usb"
	}
	if c.Channel == "" {
		c.Channel = "steady"
		if c.SpreadHz != 0 || c.PathDelay != 0 || c.PathShift != 0 {
			c.Channel = "custom"
		}
	}
	if k, ok := strings.CutPrefix(c.Channel, "rice:"); ok {
		v, err := strconv.ParseFloat(k, 64)
		if err != nil || c.RiceK != 0 && c.RiceK != v {
			return fmt.Errorf("simulated bench: channel %q: must be rice: and one number, such as rice:4, and no other Rice factor beside it", c.Channel)
		}
		c.Channel, c.RiceK = "custom", v
		if c.SpreadHz == 0 && c.PathDelay == 0 && c.PathShift == 0 {
			c.PathDelay, c.SpreadHz = presets["quiet"][0], presets["quiet"][1]/2
		}
	}
	if p, ok := presets[c.Channel]; ok {
		want := [3]float64{p[1] / 2, p[0], 0}
		if got := [3]float64{c.SpreadHz, c.PathDelay, c.PathShift}; got != want && got != [3]float64{} {
			return fmt.Errorf("simulated bench: channel %s sets spread, path delay and path shift itself: leave them out, or choose channel custom", c.Channel)
		}
		c.SpreadHz, c.PathDelay, c.PathShift = want[0], want[1], want[2]
	}
	if c.Hookup != "two-tone" {
		c.White = true // a mixer's output or an IQ baseband has no receiver's audio filter
	}
	return c.check()
}

func (c *Config) check() error {
	switch {
	case c.Hookup != "two-tone" && c.Hookup != "mixer" && c.Hookup != "quadrature":
		return fmt.Errorf("simulated bench: hook-up %q: must be two-tone, mixer or quadrature", c.Hookup)
	case c.Baseband && c.Hookup != "quadrature":
		return fmt.Errorf("simulated bench: baseband with hook-up %s: only quadrature has one", c.Hookup)
	case c.Sideband != "usb" && c.Sideband != "lsb":
		return fmt.Errorf("simulated bench: sideband %q: must be usb or lsb", c.Sideband)
	case !slices.Contains(Channels, c.Channel):
		return fmt.Errorf("simulated bench: channel %q: must be %s", c.Channel, strings.Join(Channels, ", "))
	}
	if err := c.checkRanges(); err != nil {
		return err
	}
	switch low := c.Baseband && c.Tone > -c.Rate/2; {
	case c.Channel == "custom" && c.SpreadHz == 0:
		return errors.New("simulated bench: channel custom without a spread: set one above 0 Hz, or choose channel steady")
	case (c.Hookup == "two-tone" || c.Baseband) && !(c.Tone < c.Rate/2 && (c.Tone > 0 || low)):
		return fmt.Errorf("simulated bench: tone %g Hz: must lie below half the sample rate, %g Hz", c.Tone, c.Rate/2)
	case !c.White && !(c.Passband[0] > 0 && c.Passband[0] < c.Passband[1]):
		return fmt.Errorf("simulated bench: passband %g to %g Hz: must rise from above 0", c.Passband[0], c.Passband[1])
	}
	if !c.White && c.Passband[1] > 0.45*c.Rate {
		c.Passband[1] = 0.45 * c.Rate
		if c.Passband[0] >= c.Passband[1] {
			c.White = true
		}
	}
	return nil
}

// checkRanges refuses every number that is out of its range or not finite.
func (c *Config) checkRanges() error {
	type number struct {
		what      string
		v, lo, hi float64
	}
	all := []number{
		{"rate", c.Rate, 10, 384000}, {"carrier", c.Carrier, 1, 1e12}, {"local", c.Local, 1, 1e12}, {"tone", c.Tone, -1e6, 1e6},
		{"offset", c.Offset, -1e5, 1e5}, {"drift", c.Drift, -1, 1}, {"receiver drift", c.ReceiverDrift, -1e3, 1e3}, {"receiver wander", c.ReceiverWander, 0, 1e3},
		{"white FM", c.LocalWhiteFM, 0, 1e-3}, {"flicker FM", c.LocalFlickerFM, 0, 1e-3}, {"walk FM", c.LocalWalkFM, 0, 1e-3},
		{"carrier level", c.CarrierDBFS, -140, 0}, {"local level", c.LocalDBFS, -140, 0}, {"C/N0", c.CarrierCN0, -20, 160},
		{"passband", c.Passband[0], 0, 1e6}, {"passband", c.Passband[1], 0, 1e6},
		{"spread", c.SpreadHz, 0, 15}, {"path delay", c.PathDelay, 0, 0.02}, {"path shift", c.PathShift, -50, 50}, {"rice k", c.RiceK, 0, 1e9},
		{"depth", c.Depth, 0, 1}, {"AGC attack", c.AGCAttack, 1e-4, 10}, {"AGC decay", c.AGCDecay, 1e-4, 100}, {"dc", c.DC, -1, 1},
		{"clock error", c.ClockError, -0.01, 0.01}, {"drop-out interval", c.DropEvery, 0, 1e9}, {"drop-out length", c.DropFor, 0, 3600},
		{"duration", c.Duration, 0, 1e9},
	}
	const ever = 1e10
	for _, s := range append(slices.Clone(c.CarrierAway), c.LocalAway...) {
		all = append(all, number{"time away, from", s[0], 0, ever}, number{"time away, to", s[1], s[0], ever})
	}
	for _, s := range c.Retunes {
		all = append(all, number{"time of a retune", s.At, 0, ever}, number{"retune", s.By, -1e6, 1e6})
	}
	for _, s := range c.Trims {
		all = append(all, number{"time of a turn", s.At, 0, ever}, number{"turn", s.By, -1e6, 1e6}, number{"length of a turn", s.Over, 0, ever})
	}
	for _, s := range c.Spurs {
		all = append(all, number{"spur", s.Hz, -c.Rate / 2, c.Rate / 2}, number{"spur level", s.DBFS, -200, 0})
	}
	for _, x := range all {
		if !(x.v >= x.lo && x.v <= x.hi) {
			return fmt.Errorf("simulated bench: %s %g: must be %g to %g", x.what, x.v, x.lo, x.hi)
		}
	}
	return nil
}

func amplitude(dBFS float64) float64 { return math.Pow(10, dBFS/20) }
