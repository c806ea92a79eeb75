package main

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"offbeat/dsp"
)

// settings is one bench as the user describes it, by flags or by a
// configuration file. The zero value of a field is its default.
type settings struct {
	Name             string
	Input            inputSpec
	Channels         []int // of the input, 1-based; empty: 1, or 1 and 2 for quadrature
	Hookup           dsp.Hookup
	Sideband         dsp.Sideband
	Carrier          float64 // Hz
	Local            float64 // nominal of the oscillator itself, Hz; default carrier / harmonic
	Harmonic         int     // which harmonic of it is heard
	SetOff           float64 // how far aside of the carrier it is tuned on purpose, Hz
	LocalTone        float64 // Hz
	SampleRateError  float64 // a fraction
	SampleRateErrorU float64
	SearchLow        float64 // Hz
	SearchHigh       float64
	Wired            bool
}

// fieldError says which field of the settings cannot be meant, by its name in
// the configuration file.
type fieldError struct{ field, msg string }

func (e *fieldError) Error() string { return e.field + ": " + e.msg }

// asFlag words e for the command line.
func (e *fieldError) asFlag() error {
	return fmt.Errorf("--%s: %s", strings.ReplaceAll(e.field, "_", "-"), e.msg)
}

const maxChannels = 64

// check refuses what no sample rate could make right.
func (s *settings) check() *fieldError {
	bad := func(field, format string, args ...any) *fieldError {
		return &fieldError{field, fmt.Sprintf(format, args...)}
	}
	switch {
	case s.Carrier != 0 && !(s.Carrier >= 1 && s.Carrier <= 1e12):
		return bad("carrier", "%s: must be 1 Hz to 1000 GHz", hertz(s.Carrier))
	case s.Local != 0 && !(s.Local >= 1 && s.Local <= 1e12):
		return bad("local", "%s: must be 1 Hz to 1000 GHz", hertz(s.Local))
	case s.Harmonic < 0 || s.Harmonic > 10000:
		return bad("harmonic", "%d: must be 1 to 10000", s.Harmonic)
	case math.Abs(s.SampleRateError) > 0.01:
		return bad("sample_rate_error", "%s ppm: must be within ±10000 ppm", number(s.SampleRateError*1e6))
	case s.SampleRateErrorU < 0 || s.SampleRateErrorU > 0.01:
		return bad("sample_rate_error_u", "%s ppm: must be 0 to 10000 ppm", number(s.SampleRateErrorU*1e6))
	case s.SearchLow != 0 || s.SearchHigh != 0:
		if s.SearchLow >= s.SearchHigh {
			return bad("search", "%s to %s: the first must be below the second", hertz(s.SearchLow), hertz(s.SearchHigh))
		}
	}
	if err := s.checkChannels(); err != nil {
		return err
	}
	if d := s.heard() - s.carrier(); math.Abs(d) >= 500e3 {
		near := math.Round(s.carrier() / s.local())
		hint := ""
		if near >= 2 && near != float64(s.harmonic()) && math.Abs(near*s.local()-s.carrier()) < 500e3 {
			hint = fmt.Sprintf("; is its harmonic %g meant?", near)
		}
		return bad("local", "harmonic %d of %s lies %s from the carrier, too far to be heard beside it%s",
			s.harmonic(), hertz(s.local()), hertz(math.Abs(d)), hint)
	}
	return nil
}

func (s *settings) checkChannels() *fieldError {
	for _, c := range s.Channels {
		if c < 1 || c > maxChannels {
			return &fieldError{"channel", fmt.Sprintf("%d: channels are counted from 1, to %d at most", c, maxChannels)}
		}
	}
	switch n := len(s.Channels); {
	case n == 0:
	case s.Hookup == dsp.Quadrature && (n != 2 || s.Channels[0] == s.Channels[1]):
		return &fieldError{"channel", fmt.Sprintf("%s: quadrature needs two different channels, I and Q: 1,2", channelList(s.Channels))}
	case s.Hookup != dsp.Quadrature && n != 1:
		return &fieldError{"channel", fmt.Sprintf("%s: this hook-up takes one channel", channelList(s.Channels))}
	}
	return nil
}

func (s *settings) carrier() float64 {
	if s.Carrier == 0 {
		return 10e6
	}
	return s.Carrier
}

func (s *settings) harmonic() int { return max(s.Harmonic, 1) }

func (s *settings) local() float64 {
	if s.Local == 0 {
		return s.carrier() / float64(s.harmonic())
	}
	return s.Local
}

// heard returns fL: where the local is heard when it is right.
func (s *settings) heard() float64 {
	if s.Local == 0 {
		return s.carrier() + s.SetOff
	}
	return float64(s.harmonic())*s.Local + s.SetOff
}

// channels returns the channels of the input that the bench listens to,
// 1-based.
func (s *settings) channels() []int {
	switch {
	case len(s.Channels) > 0:
		return s.Channels
	case s.Hookup == dsp.Quadrature:
		return []int{1, 2}
	}
	return []int{1}
}

// config returns what the signal processing is told at this sample rate.
func (s *settings) config(rate float64) dsp.Config {
	return dsp.Config{
		Rate: rate, Hookup: s.Hookup, Sideband: s.Sideband, Carrier: s.carrier(), Local: s.heard(), LocalTone: s.LocalTone,
		SampleRateError: s.SampleRateError, SampleRateErrorU: s.SampleRateErrorU,
		SearchLow: s.SearchLow, SearchHigh: s.SearchHigh, Wired: s.Wired,
	}
}

// equal reports whether two descriptions are of the same bench, set up alike.
func (s *settings) equal(o *settings) bool {
	a, b := *s, *o
	sameChannels := slices.Equal(a.Channels, b.Channels)
	a.Channels, b.Channels = nil, nil
	return sameChannels && a.same(&b)
}

func (s *settings) same(o *settings) bool {
	return s.Name == o.Name && s.Input == o.Input && s.Hookup == o.Hookup && s.Sideband == o.Sideband &&
		s.Carrier == o.Carrier && s.Local == o.Local && s.Harmonic == o.Harmonic && s.SetOff == o.SetOff &&
		s.LocalTone == o.LocalTone && s.SampleRateError == o.SampleRateError && s.SampleRateErrorU == o.SampleRateErrorU &&
		s.SearchLow == o.SearchLow && s.SearchHigh == o.SearchHigh && s.Wired == o.Wired
}

// measurement defines the flags that describe what is in the audio; measure
// and run share them.
func (f *flags) measurement(s *settings) {
	quantity(f, &s.Hookup, "hookup", parseHookup)
	quantity(f, &s.Sideband, "sideband", parseSideband)
	quantity(f, &s.Carrier, "carrier", parseHertz)
	quantity(f, &s.Local, "local", parseHertz)
	quantity(f, &s.Harmonic, "harmonic", parseCount)
	quantity(f, &s.SetOff, "set-off", parseHertz)
	quantity(f, &s.LocalTone, "local-tone", parseHertz)
	quantity(f, &s.SampleRateError, "sample-rate-error", parsePPM)
	quantity(f, &s.SampleRateErrorU, "sample-rate-error-u", parsePPM)
	quantity(f, &s.Channels, "channel", parseChannels)
	f.Func("search", "", func(v string) (err error) {
		s.SearchLow, s.SearchHigh, err = parseRange(v)
		return err
	})
	f.BoolVar(&s.Wired, "wired", false, "")
	quantity(f, &s.Input.Encoding, "format", parseEncoding)
	quantity(f, &s.Input.Rate, "rate", parseRate)
	quantity(f, &s.Input.Channels, "channels", parseCount)
}

func parseHookup(s string) (dsp.Hookup, error) { return oneOf(s, dsp.Hookups) }
func parseSideband(s string) (dsp.Sideband, error) {
	return oneOf(s, []dsp.Sideband{dsp.Upper, dsp.Lower})
}
func parseEncoding(s string) (string, error) { return oneOf(s, encodings) }

// encodings of raw input.
var encodings = []string{"s16le", "s24le", "s32le", "f32le"}

// oneOf accepts one of the allowed words.
func oneOf[T ~string](s string, allowed []T) (T, error) {
	var names []string
	for _, a := range allowed {
		if string(a) == s {
			return a, nil
		}
		names = append(names, string(a))
	}
	return "", fmt.Errorf("%s: must be %s", quoted(s), orList(names))
}

// parseCount reads a whole number from 1.
func parseCount(s string) (int, error) {
	n, err := strconv.Atoi(strings.TrimSpace(s))
	if err != nil || n < 1 || n > 1e6 {
		return 0, fmt.Errorf("%s: must be a whole number from 1", quoted(s))
	}
	return n, nil
}

// parseRate reads a sample rate.
func parseRate(s string) (float64, error) {
	v, err := parseHertz(s)
	if err == nil && !(v >= 10 && v <= 1e6) {
		err = fmt.Errorf("%s: a sample rate must be 10 Hz to 1 MHz", quoted(s))
	}
	return v, err
}

// parseChannels reads "2" or "3,4".
func parseChannels(s string) ([]int, error) {
	var list []int
	for _, part := range strings.Split(s, ",") {
		n, err := strconv.Atoi(strings.TrimSpace(part))
		if err != nil || n < 1 || n > maxChannels {
			return nil, fmt.Errorf("%s: channels are counted from 1, to %d at most, such as 2 or 3,4", quoted(s), maxChannels)
		}
		list = append(list, n)
	}
	if len(list) > 2 {
		return nil, fmt.Errorf("%s: at most two channels, I and Q", quoted(s))
	}
	return list, nil
}

func channelList(c []int) string {
	var s []string
	for _, n := range c {
		s = append(s, strconv.Itoa(n))
	}
	return strings.Join(s, ",")
}

// number writes v to twelve digits at most, without an exponent where people
// would not.
func number(v float64) string {
	v, _ = strconv.ParseFloat(strconv.FormatFloat(v, 'g', 12, 64), 64)
	if a := math.Abs(v); a != 0 && (a < 1e-4 || a >= 1e15) {
		return strconv.FormatFloat(v, 'g', 6, 64)
	}
	return strconv.FormatFloat(v, 'f', -1, 64)
}

// hertz writes a frequency with the unit that suits it.
func hertz(v float64) string {
	switch a := math.Abs(v); {
	case a >= 1e6:
		return number(v/1e6) + " MHz"
	case a >= 1e4:
		return number(v/1e3) + " kHz"
	}
	return number(v) + " Hz"
}
