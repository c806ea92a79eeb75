package main

import (
	"errors"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"github.com/goccy/go-yaml/ast"

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
	Baseband                          bool    // quadrature: both tones, not the beat
	Tone, Offset                      float64 // Hz
	ReceiverDrift, ReceiverWander     float64 // Hz a minute, Hz
	DriftPerDay                       float64 // of the local, a fraction
	WhiteFM, FlickerFM, WalkFM        float64
	CarrierDBFS, LocalDBFS, CN0       float64
	Passband                          [2]float64 // Hz
	White                             bool       // no passband
	Fading                            string     // of fadings, or rice:K
	SpreadHz, PathDelay, PathShift    float64    // Hz, s, Hz
	RiceK, Depth                      float64
	Pulses, Tones, Subcarrier, Speech bool
	AGC                               bool
	AGCAttack, AGCDecay               float64 // s
	DC                                float64 // full scale 1
	ClockError                        float64 // a fraction
	DropEvery, DropFor, Duration      float64 // s
	CarrierAway, LocalAway            string  // these as canonical text
	Trims, Retunes, Spurs             string
}

// defaultSim is the demonstration.
var defaultSim = fromScene(sim.Default())

// fromScene keeps what a simSpec can say of a scene.
func fromScene(c sim.Config) simSpec {
	s := simSpec{Seed: c.Seed, Hookup: dsp.Hookup(c.Hookup), Sideband: dsp.Sideband(c.Sideband), Rate: c.Rate, Carrier: c.Carrier, Local: c.Local,
		Baseband: c.Baseband, Tone: c.Tone, Offset: c.Offset, ReceiverDrift: c.ReceiverDrift, ReceiverWander: c.ReceiverWander,
		WhiteFM: c.LocalWhiteFM, FlickerFM: c.LocalFlickerFM, WalkFM: c.LocalWalkFM,
		CarrierDBFS: c.CarrierDBFS, LocalDBFS: c.LocalDBFS, CN0: c.CarrierCN0, Passband: c.Passband, White: c.White,
		Fading: c.Channel, SpreadHz: c.SpreadHz, PathDelay: c.PathDelay, PathShift: c.PathShift, RiceK: c.RiceK, Depth: c.Depth,
		Pulses: c.SecondPulses, Tones: c.Tones, Subcarrier: c.Subcarrier, Speech: c.Speech,
		AGC: c.AGC, AGCAttack: c.AGCAttack, AGCDecay: c.AGCDecay, DC: c.DC, ClockError: c.ClockError,
		DropEvery: c.DropEvery, DropFor: c.DropFor, Duration: c.Duration,
		CarrierAway: awayItem.text(c.CarrierAway), LocalAway: awayItem.text(c.LocalAway),
		Trims: trimItem.text(c.Trims), Retunes: retuneItem.text(c.Retunes), Spurs: spurItem.text(c.Spurs)}
	s.DriftPerDay = c.Drift * 86400 / s.heard()
	return s
}

// scene returns the scene for the simulator.
func (s *simSpec) scene() sim.Config {
	return sim.Config{Seed: s.Seed, Hookup: string(s.Hookup), Sideband: string(s.Sideband), Rate: s.Rate, Carrier: s.Carrier, Local: s.Local,
		Baseband: s.Baseband, Tone: s.Tone, Offset: s.Offset, Drift: s.DriftPerDay * s.heard() / 86400,
		ReceiverDrift: s.ReceiverDrift, ReceiverWander: s.ReceiverWander,
		LocalWhiteFM: s.WhiteFM, LocalFlickerFM: s.FlickerFM, LocalWalkFM: s.WalkFM,
		CarrierDBFS: s.CarrierDBFS, LocalDBFS: s.LocalDBFS, CarrierCN0: s.CN0, Passband: s.Passband, White: s.White,
		Channel: s.Fading, SpreadHz: s.SpreadHz, PathDelay: s.PathDelay, PathShift: s.PathShift, RiceK: s.RiceK, Depth: s.Depth,
		SecondPulses: s.Pulses, Tones: s.Tones, Subcarrier: s.Subcarrier, Speech: s.Speech,
		AGC: s.AGC, AGCAttack: s.AGCAttack, AGCDecay: s.AGCDecay, DC: s.DC, ClockError: s.ClockError,
		DropEvery: s.DropEvery, DropFor: s.DropFor, Duration: s.Duration,
		CarrierAway: awayItem.known(s.CarrierAway), LocalAway: awayItem.known(s.LocalAway),
		Trims: trimItem.known(s.Trims), Retunes: retuneItem.known(s.Retunes), Spurs: spurItem.known(s.Spurs)}
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
	s.Baseband = b.Hookup == dsp.Quadrature && b.LocalTone != 0
}

// check asks the simulator whether it can make the scene, after what is better
// said in the words of the flags and the keys.
func (s *simSpec) check() error {
	const who = "simulated bench: fading "
	rice, paths := strings.HasPrefix(s.Fading, "rice:"), s.PathDelay != 0 || s.PathShift != 0
	switch own := s.SpreadHz != 0 || paths; {
	case rice && s.RiceK != 0:
		return fmt.Errorf("%s%s names the Rice factor, and a rice k is given beside it: leave one of them out", who, s.Fading)
	case slices.Contains(fadings, s.Fading) && s.Fading != "custom" && own:
		return fmt.Errorf("%s%s has its own spread and paths: leave out spread, path delay and path shift, or say fading custom", who, s.Fading)
	case s.SpreadHz == 0 && (s.Fading == "custom" || (rice || s.Fading == "") && paths):
		return errors.New(who + "over paths of its own needs a spread above 0, such as 0.1Hz")
	case s.Fading == "" && s.RiceK != 0 && !own:
		return errors.New(who + "is steady, which has no rice k: say fading quiet, or leave it out")
	}
	_, err := sim.New(s.scene())
	return err
}

// simFields is the keys of a simulated input, and with dashes the flags of
// simulate: how each is read into a simSpec. Where join is not empty, a list in
// the configuration is read as its items with join between.
var simFields = []struct {
	key  string
	set  func(s *simSpec, text string) error
	join string
}{
	{"seed", into(func(s *simSpec) *uint64 { return &s.Seed }, parseSeed), ""},
	{"rate", into(func(s *simSpec) *float64 { return &s.Rate }, parseRate), ""},
	{"tone", into(func(s *simSpec) *float64 { return &s.Tone }, notZero(parseHertz)), ""},
	{"offset", into(func(s *simSpec) *float64 { return &s.Offset }, parseHertz), ""},
	{"drift_per_day", into(func(s *simSpec) *float64 { return &s.DriftPerDay }, parseFraction), ""},
	{"white_fm", into(func(s *simSpec) *float64 { return &s.WhiteFM }, parseNumber), ""},
	{"flicker_fm", into(func(s *simSpec) *float64 { return &s.FlickerFM }, parseNumber), ""},
	{"walk_fm", into(func(s *simSpec) *float64 { return &s.WalkFM }, parseNumber), ""},
	{"receiver_drift", into(func(s *simSpec) *float64 { return &s.ReceiverDrift }, parseHertz), ""},
	{"receiver_wander", into(func(s *simSpec) *float64 { return &s.ReceiverWander }, parseHertz), ""},
	{"carrier_level", into(func(s *simSpec) *float64 { return &s.CarrierDBFS }, notZero(parseDecibel)), ""},
	{"local_level", into(func(s *simSpec) *float64 { return &s.LocalDBFS }, notZero(parseDecibel)), ""},
	{"carrier_cn0", into(func(s *simSpec) *float64 { return &s.CN0 }, notZero(parseDecibel)), ""},
	{"passband", setPassband, "-"},
	{"fading", setFading, ""},
	{"spread", into(func(s *simSpec) *float64 { return &s.SpreadHz }, parseHertz), ""},
	{"path_delay", into(func(s *simSpec) *float64 { return &s.PathDelay }, parseMoment), ""},
	{"path_shift", into(func(s *simSpec) *float64 { return &s.PathShift }, parseHertz), ""},
	{"rice_k", into(func(s *simSpec) *float64 { return &s.RiceK }, parseNumber), ""},
	{"depth", into(func(s *simSpec) *float64 { return &s.Depth }, notZero(parseNumber)), ""},
	{"pulses", into(func(s *simSpec) *bool { return &s.Pulses }, parseBool), ""},
	{"tones", into(func(s *simSpec) *bool { return &s.Tones }, parseBool), ""},
	{"subcarrier", into(func(s *simSpec) *bool { return &s.Subcarrier }, parseBool), ""},
	{"speech", into(func(s *simSpec) *bool { return &s.Speech }, parseBool), ""},
	{"agc", into(func(s *simSpec) *bool { return &s.AGC }, parseBool), ""},
	{"agc_attack", into(func(s *simSpec) *float64 { return &s.AGCAttack }, notZero(parseMoment)), ""},
	{"agc_decay", into(func(s *simSpec) *float64 { return &s.AGCDecay }, notZero(parseMoment)), ""},
	{"dc", into(func(s *simSpec) *float64 { return &s.DC }, parseNumber), ""},
	{"clock_error", into(func(s *simSpec) *float64 { return &s.ClockError }, parsePPM), ""},
	{"drop_every", into(func(s *simSpec) *float64 { return &s.DropEvery }, parseSeconds), ""},
	{"drop_for", into(func(s *simSpec) *float64 { return &s.DropFor }, notZero(parseSeconds)), ""},
	{"trim", listed(func(s *simSpec) *string { return &s.Trims }, trimItem), ","},
	{"retune", listed(func(s *simSpec) *string { return &s.Retunes }, retuneItem), ","},
	{"carrier_away", listed(func(s *simSpec) *string { return &s.CarrierAway }, awayItem), ","},
	{"local_away", listed(func(s *simSpec) *string { return &s.LocalAway }, awayItem), ","},
	{"spur", listed(func(s *simSpec) *string { return &s.Spurs }, spurItem), ","},
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
		t, err := simText(n, f.key, f.join, f.set)
		if err != nil {
			return err
		}
		if t == "" && isList(n) {
			continue
		}
		if err = f.set(&in.Sim, t); err != nil {
			return faultAt(n, "%s: %s", f.key, err)
		}
	}
	return nil
}

func isList(n ast.Node) bool { _, ok := n.(*ast.SequenceNode); return ok }

// simText returns the text of one value, or of a list where there may be one. An
// item that is wrong by itself is complained of where it stands.
func simText(n ast.Node, key, join string, set func(*simSpec, string) error) (string, error) {
	if join == "" || !isList(n) {
		return text(n, key)
	}
	items, err := list(n, key)
	if err != nil {
		return "", err
	}
	if join == "-" && len(items) != 2 {
		return "", faultAt(n, "%s: must be two frequencies, [LOW, HIGH]", key)
	}
	var all []string
	for _, item := range items {
		t, err := text(item, key)
		if err != nil {
			return "", faultAt(item, "%s: every item must be one value, on one line and without a space after a colon", key)
		}
		if join == "," {
			if err := set(new(simSpec), t); err != nil {
				return "", faultAt(item, "%s: %s", key, err)
			}
		}
		all = append(all, t)
	}
	return strings.Join(all, join), nil
}

// fadings is the names of sim.Channels; rice:K is one more, for any number K.
var fadings = sim.Channels

// setFading reads a name of fadings or rice:K, which brings its Rice factor.
func setFading(s *simSpec, text string) error {
	if k, ok := strings.CutPrefix(text, "rice:"); ok {
		v, err := parseNumber(k)
		if err != nil || v < 0 {
			return fmt.Errorf("%s: must be rice: and a number from 0, such as rice:4", quoted(text))
		}
		s.Fading, s.RiceK = "rice:"+exactly(math.Abs(v)), 0
		return nil
	}
	if !slices.Contains(fadings, text) {
		return fmt.Errorf("%s: must be %s", quoted(text), orList(append(slices.Clone(fadings), "rice:K with a number K")))
	}
	s.Fading = text
	return nil
}

// setPassband reads LOW-HIGH in hertz, or none.
func setPassband(s *simSpec, text string) error {
	if strings.TrimSpace(text) == "none" {
		s.Passband, s.White = [2]float64{}, true
		return nil
	}
	low, high, err := parseRange(text)
	if err != nil || !(low > 0 && low < high) {
		return fmt.Errorf("%s: must rise from above 0 Hz, such as 300-2700, or be none", quoted(text))
	}
	s.Passband, s.White = [2]float64{low, high}, false
	return nil
}

// notZero refuses 0 where the simulator takes it for "not given".
func notZero(parse func(string) (float64, error)) func(string) (float64, error) {
	return func(s string) (float64, error) {
		v, err := parse(s)
		if err == nil && v == 0 {
			err = fmt.Errorf("%s: 0 would stand for the default: leave it out, or give another value", quoted(s))
		}
		return v, err
	}
}

var momentUnits = []unit{{"ms", -3}, {"s", 0}}

// parseMoment reads a short time, which must say its unit: "5ms", "0.5s".
func parseMoment(s string) (float64, error) { return parseQuantity(s, momentUnits, noBare) }

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
