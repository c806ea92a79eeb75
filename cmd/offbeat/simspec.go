package main

import (
	"fmt"
	"strconv"
	"strings"

	"offbeat/capture/sim"
	"offbeat/dsp"
)

// simSpec is the part of a simulated scene that can be asked for by flags and
// in a configuration. It is comparable, as inputSpec has to be.
type simSpec struct {
	Seed                              uint64
	Hookup                            dsp.Hookup
	Sideband                          dsp.Sideband
	Rate, Carrier, Local              float64 // Hz; the local as heard, without its error
	Tone, Offset, ReceiverDrift       float64 // Hz, Hz, Hz a minute
	DriftPerDay                       float64 // of the local, a fraction
	WhiteFM, FlickerFM, WalkFM        float64
	CarrierDBFS, LocalDBFS, CN0       float64
	Fading                            string
	RiceK, Depth                      float64
	Pulses, Tones, Subcarrier, Speech bool
	AGC                               bool
	ClockError                        float64 // a fraction
	DropEvery, DropFor, Duration      float64 // s
}

// defaultSim is the demonstration.
var defaultSim = fromScene(sim.Default())

// fromScene keeps what a simSpec can say of a scene.
func fromScene(c sim.Config) simSpec {
	s := simSpec{Seed: c.Seed, Hookup: dsp.Hookup(c.Hookup), Sideband: dsp.Sideband(c.Sideband), Rate: c.Rate, Carrier: c.Carrier, Local: c.Local,
		Tone: c.Tone, Offset: c.Offset, ReceiverDrift: c.ReceiverDrift, WhiteFM: c.LocalWhiteFM, FlickerFM: c.LocalFlickerFM, WalkFM: c.LocalWalkFM,
		CarrierDBFS: c.CarrierDBFS, LocalDBFS: c.LocalDBFS, CN0: c.CarrierCN0, Fading: c.Channel, RiceK: c.RiceK, Depth: c.Depth,
		Pulses: c.SecondPulses, Tones: c.Tones, Subcarrier: c.Subcarrier, Speech: c.Speech, AGC: c.AGC, ClockError: c.ClockError,
		DropEvery: c.DropEvery, DropFor: c.DropFor, Duration: c.Duration}
	s.DriftPerDay = c.Drift * 86400 / s.heard()
	return s
}

// scene returns the scene for the simulator.
func (s *simSpec) scene() sim.Config {
	return sim.Config{Seed: s.Seed, Hookup: string(s.Hookup), Sideband: string(s.Sideband), Rate: s.Rate, Carrier: s.Carrier, Local: s.Local,
		Tone: s.Tone, Offset: s.Offset, Drift: s.DriftPerDay * s.heard() / 86400, ReceiverDrift: s.ReceiverDrift,
		LocalWhiteFM: s.WhiteFM, LocalFlickerFM: s.FlickerFM, LocalWalkFM: s.WalkFM,
		CarrierDBFS: s.CarrierDBFS, LocalDBFS: s.LocalDBFS, CarrierCN0: s.CN0, Channel: s.Fading, RiceK: s.RiceK, Depth: s.Depth,
		SecondPulses: s.Pulses, Tones: s.Tones, Subcarrier: s.Subcarrier, Speech: s.Speech, AGC: s.AGC, ClockError: s.ClockError,
		DropEvery: s.DropEvery, DropFor: s.DropFor, Duration: s.Duration}
}

func (s *simSpec) heard() float64 {
	switch {
	case s.Local != 0:
		return s.Local
	case s.Carrier != 0:
		return s.Carrier
	}
	return 10e6
}

func (s *simSpec) rate() float64 {
	if s.Rate == 0 {
		return 48000
	}
	return s.Rate
}

// follow makes the scene that of a bench: its hook-up, carrier and local.
func (s *simSpec) follow(b *settings) {
	s.Hookup, s.Sideband, s.Carrier, s.Local = b.Hookup, b.Sideband, b.carrier(), b.heard()
	if b.Hookup == dsp.Quadrature && b.LocalTone != 0 {
		s.Tone = 0 // the beat itself is in I and Q
	}
}

// check asks the simulator whether it can make the scene.
func (s *simSpec) check() error {
	_, err := sim.New(s.scene())
	return err
}

// simFields is the keys of a simulated input, and with dashes the flags of
// simulate: how each is read into a simSpec.
var simFields = []struct {
	key string
	set func(s *simSpec, text string) error
}{
	{"seed", into(func(s *simSpec) *uint64 { return &s.Seed }, parseSeed)},
	{"rate", into(func(s *simSpec) *float64 { return &s.Rate }, parseRate)},
	{"tone", into(func(s *simSpec) *float64 { return &s.Tone }, parseHertz)},
	{"offset", into(func(s *simSpec) *float64 { return &s.Offset }, parseHertz)},
	{"drift_per_day", into(func(s *simSpec) *float64 { return &s.DriftPerDay }, parseFraction)},
	{"white_fm", into(func(s *simSpec) *float64 { return &s.WhiteFM }, parseNumber)},
	{"flicker_fm", into(func(s *simSpec) *float64 { return &s.FlickerFM }, parseNumber)},
	{"walk_fm", into(func(s *simSpec) *float64 { return &s.WalkFM }, parseNumber)},
	{"receiver_drift", into(func(s *simSpec) *float64 { return &s.ReceiverDrift }, parseHertz)},
	{"carrier_level", into(func(s *simSpec) *float64 { return &s.CarrierDBFS }, parseDecibel)},
	{"local_level", into(func(s *simSpec) *float64 { return &s.LocalDBFS }, parseDecibel)},
	{"carrier_cn0", into(func(s *simSpec) *float64 { return &s.CN0 }, parseDecibel)},
	{"fading", into(func(s *simSpec) *string { return &s.Fading }, parseFading)},
	{"rice_k", into(func(s *simSpec) *float64 { return &s.RiceK }, parseNumber)},
	{"depth", into(func(s *simSpec) *float64 { return &s.Depth }, parseNumber)},
	{"pulses", into(func(s *simSpec) *bool { return &s.Pulses }, parseBool)},
	{"tones", into(func(s *simSpec) *bool { return &s.Tones }, parseBool)},
	{"subcarrier", into(func(s *simSpec) *bool { return &s.Subcarrier }, parseBool)},
	{"speech", into(func(s *simSpec) *bool { return &s.Speech }, parseBool)},
	{"agc", into(func(s *simSpec) *bool { return &s.AGC }, parseBool)},
	{"clock_error", into(func(s *simSpec) *float64 { return &s.ClockError }, parsePPM)},
	{"drop_every", into(func(s *simSpec) *float64 { return &s.DropEvery }, parseSeconds)},
	{"drop_for", into(func(s *simSpec) *float64 { return &s.DropFor }, parseSeconds)},
}

func into[T any](field func(*simSpec) *T, parse func(string) (T, error)) func(*simSpec, string) error {
	return func(s *simSpec, text string) error {
		v, err := parse(text)
		if err == nil {
			*field(s) = v
		}
		return err
	}
}

var simKeys = func() (keys []string) {
	for _, f := range simFields {
		keys = append(keys, f.key)
	}
	return keys
}()

// readSim reads the keys of a simulated input.
func readSim(m *mapping, in *inputSpec) error {
	in.Sim, in.Rate = defaultSim, 0
	for _, f := range simFields {
		n := m.value[f.key]
		if n == nil {
			continue
		}
		t, err := text(n, f.key)
		if err == nil {
			if err = f.set(&in.Sim, t); err != nil {
				err = faultAt(n, "%s: %s", f.key, err)
			}
		}
		if err != nil {
			return err
		}
	}
	return nil
}

func parseFading(s string) (string, error) {
	return oneOf(s, []string{"steady", "quiet", "moderate", "disturbed"})
}

func parseSeed(s string) (uint64, error) {
	n, err := strconv.ParseUint(strings.TrimSpace(s), 10, 64)
	if err != nil {
		return 0, fmt.Errorf("%s: must be a whole number from 0; 0 is a new one every time", quoted(s))
	}
	return n, nil
}

func parseSeconds(s string) (float64, error) {
	d, err := parseSpan(s)
	return d.Seconds(), err
}
