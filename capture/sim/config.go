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
	"fmt"
	"math"
	"strconv"
	"strings"
)

// Config describes a scene. New fills in defaults for zero values where the
// comment names one.
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

	CarrierDBFS float64    `json:"carrier_dbfs"`     // default -20
	LocalDBFS   float64    `json:"local_dbfs"`       // default -18
	CarrierCN0  float64    `json:"carrier_cn0_dbhz"` // of the unfaded carrier; default 55
	Passband    [2]float64 `json:"passband_hz"`      // of the receiver, for the noise; default 300 to 2700
	White       bool       `json:"white"`            // noise over the whole band instead

	Channel   string  `json:"channel"`   // steady (default), quiet, moderate, disturbed, custom
	SpreadHz  float64 `json:"spread_hz"` // custom: rms Doppler width of each path (half the "Doppler spread" of F.1487)
	PathDelay float64 `json:"path_delay_s"`
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
type Step struct{ At, By float64 }

// Turn moves the local by By Hz at RF, evenly over Over seconds from At on.
type Turn struct{ At, By, Over float64 }

// Spur is a steady tone of the receiver's own, or hum.
type Spur struct{ Hz, DBFS float64 }

// Default is the demonstration: bench "counter" of the workshop at Skerrow hears
// the 10 MHz demo carrier by one quiet hop; its local is a little high.
func Default() Config {
	return Config{Seed: 1480, Offset: 3.2, Drift: 2e-7, LocalWhiteFM: 2e-11, LocalFlickerFM: 3e-12, LocalWalkFM: 2e-13,
		Channel: "quiet", RiceK: 4, ReceiverDrift: 0.02, SecondPulses: true, Tones: true, Subcarrier: true, Speech: true}
}

// presets are the mid-latitude rows of ITU-R F.1487: delay between the paths,
// s, and Doppler spread, Hz, which is twice the rms width.
var presets = map[string][2]float64{
	"steady":    {0, 0},
	"quiet":     {0.5e-3, 0.1},
	"moderate":  {1e-3, 0.5},
	"disturbed": {2e-3, 1},
}

// Channels lists the names of channels.
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
	}
	if p, ok := presets[c.Channel]; ok {
		c.PathDelay, c.SpreadHz, c.PathShift = p[0], p[1]/2, 0
	}
	if c.Hookup != "two-tone" {
		c.White = true // a mixer's output or an IQ baseband has no receiver's audio filter
	}
	return c.check()
}

func (c *Config) check() error {
	in := func(what string, v, lo, hi float64) error {
		if !(v >= lo && v <= hi) {
			return fmt.Errorf("simulated bench: %s %g: must be %g to %g", what, v, lo, hi)
		}
		return nil
	}
	for _, x := range []struct {
		what      string
		v, lo, hi float64
	}{
		{"rate", c.Rate, 10, 384000}, {"offset", c.Offset, -1e5, 1e5}, {"clock error", c.ClockError, -0.01, 0.01},
		{"carrier", c.Carrier, 1, 1e12}, {"local", c.Local, 1, 1e12}, {"carrier level", c.CarrierDBFS, -140, 0}, {"local level", c.LocalDBFS, -140, 0},
		{"C/N0", c.CarrierCN0, -20, 160}, {"spread", c.SpreadHz, 0, 5}, {"path delay", c.PathDelay, 0, 0.02}, {"depth", c.Depth, 0, 1},
		{"rice k", c.RiceK, 0, 1e9}, {"duration", c.Duration, 0, 1e9}, {"AGC attack", c.AGCAttack, 1e-4, 10}, {"AGC decay", c.AGCDecay, 1e-4, 100},
		{"drop-out length", c.DropFor, 0, 1e5}, {"drop-out interval", c.DropEvery, 0, 1e9}, {"drift", c.Drift, -1, 1}, {"receiver drift", c.ReceiverDrift, -1e3, 1e3},
		{"dc", c.DC, -1, 1},
	} {
		if err := in(x.what, x.v, x.lo, x.hi); err != nil {
			return err
		}
	}
	switch {
	case c.Hookup != "two-tone" && c.Hookup != "mixer" && c.Hookup != "quadrature":
		return fmt.Errorf("simulated bench: hook-up %q: must be two-tone, mixer or quadrature", c.Hookup)
	case c.Sideband != "usb" && c.Sideband != "lsb":
		return fmt.Errorf("simulated bench: sideband %q: must be usb or lsb", c.Sideband)
	case presets[c.Channel] == [2]float64{} && c.Channel != "steady" && c.Channel != "custom":
		return fmt.Errorf("simulated bench: channel %q: must be %s", c.Channel, strings.Join(Channels, ", "))
	case c.Hookup == "two-tone" && !(c.Tone > 0 && c.Tone < c.Rate/2):
		return fmt.Errorf("simulated bench: tone %s Hz: must lie below half the sample rate, %g Hz", strconv.FormatFloat(c.Tone, 'g', -1, 64), c.Rate/2)
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

func amplitude(dBFS float64) float64 { return math.Pow(10, dBFS/20) }
