package main

import (
	"math"
	"strings"
	"testing"
	"time"
)

func TestQuantities(t *testing.T) {
	cases := []struct {
		parse func(string) (float64, error)
		in    string
		want  float64
		bad   string // part of the error
	}{
		{parseHertz, "10e6", 10e6, ""},
		{parseHertz, "10MHz", 10e6, ""},
		{parseHertz, "10 MHz", 10e6, ""},
		{parseHertz, " 4.996 MHz ", 4.996e6, ""},
		{parseHertz, "1kHz", 1000, ""},
		{parseHertz, "100Hz", 100, ""},
		{parseHertz, "-0.5", -0.5, ""},
		{parseHertz, "+.5kHz", 500, ""},
		{parseHertz, "5mHz", 0.005, ""},
		{parseHertz, "3µHz", 3e-6, ""},
		{parseHertz, "1.5e3kHz", 1.5e6, ""},
		{parseHertz, "2.5GHz", 2.5e9, ""},
		{parseHertz, "10mhz", 0, `unknown unit "mhz"`},
		{parseHertz, "10 M Hz", 0, "unknown unit"},
		{parseHertz, "10e", 0, `unknown unit "e"`},
		{parseHertz, "1e999", 0, "out of range"},
		{parseHertz, "1e99999999999999999999", 0, "out of range"},
		{parseHertz, "inf", 0, "not a number"},
		{parseHertz, "NaN", 0, "not a number"},
		{parseHertz, "0x10", 0, `unknown unit "x10"`},
		{parseHertz, "1_000", 0, `unknown unit "_000"`},
		{parseHertz, "", 0, "not a number"},
		{parseHertz, "-", 0, "not a number"},
		{parseHertz, ".", 0, "not a number"},
		{parseHertz, "10 ppm", 0, "unknown unit"},
		{parsePPM, "12.5", 1.25e-5, ""},
		{parsePPM, "12.5ppm", 1.25e-5, ""},
		{parsePPM, "-3ppb", -3e-9, ""},
		{parsePPM, "-3 ppb", -3e-9, ""},
		{parsePPM, "1%", 0, "unknown unit"},
		{parseFraction, "12.5ppm", 1.25e-5, ""},
		{parseFraction, "12.5", 0, `"12.5" has no unit: write the number with its unit, ppm or ppb`},
		{parseDecibel, "-20", -20, ""},
		{parseDecibel, "-20 dB", -20, ""},
		{parseNumber, "3", 3, ""},
		{parseNumber, "3Hz", 0, "unknown unit"},
	}
	for _, c := range cases {
		got, err := c.parse(c.in)
		if c.bad == "" && (err != nil || got != c.want) {
			t.Errorf("%q: got %v, %v; want %v", c.in, got, err, c.want)
		}
		if c.bad != "" && (err == nil || !strings.Contains(err.Error(), c.bad)) {
			t.Errorf("%q: got %v, error %v; want an error with %q", c.in, got, err, c.bad)
		}
	}
}

func TestSpans(t *testing.T) {
	for in, want := range map[string]time.Duration{
		"90d": 90 * 24 * time.Hour, "36h": 36 * time.Hour, "15min": 15 * time.Minute, "2.5 s": 2500 * time.Millisecond, "0s": 0,
		"90": -1, "d": -1, "-1d": -1, "1e9d": -1, "1m": -1, "": -1, "1h30min": -1,
	} {
		got, err := parseSpan(in)
		if want < 0 && err == nil || want >= 0 && (err != nil || got != want) {
			t.Errorf("%q: got %v, %v", in, got, err)
		}
	}
}

func TestRanges(t *testing.T) {
	for in, want := range map[string][2]float64{
		"800-1500": {800, 1500}, "0.8kHz-1.5kHz": {800, 1500}, "-500-500": {-500, 500}, "-500--100": {-500, -100},
		"1e-3-2": {0.001, 2}, "800 - 1500": {800, 1500},
	} {
		low, high, err := parseRange(in)
		if err != nil || low != want[0] || high != want[1] {
			t.Errorf("%q: got %v to %v, %v", in, low, high, err)
		}
	}
	for _, in := range []string{"", "-", "800", "800-", "-800", "a-b", "1e-3", "800-1500-2000", "800..1500"} {
		if low, high, err := parseRange(in); err == nil {
			t.Errorf("%q: got %v to %v, want an error", in, low, high)
		}
	}
}

func FuzzQuantity(f *testing.F) {
	for _, s := range []string{"10e6", "10 MHz", "-3ppb", "12.5ppm", "90d", "800-1500", "1e-3-2", "NaN", "1e400", "\x80", "5µHz"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, s string) {
		for _, parse := range []func(string) (float64, error){parseHertz, parsePPM, parseFraction, parseDecibel, parseNumber} {
			v, err := parse(s)
			checkParsed(t, s, err, v)
		}
		d, err := parseSpan(s)
		if checkParsed(t, s, err, float64(d)); err == nil && d < 0 {
			t.Errorf("%q: negative span %v", s, d)
		}
		low, high, err := parseRange(s)
		checkParsed(t, s, err, low, high)
	})
}

// checkParsed asserts a finite number or an error on one line.
func checkParsed(t *testing.T, in string, err error, v ...float64) {
	t.Helper()
	if err != nil {
		if m := err.Error(); strings.ContainsAny(m, "\n\r") || len(m) > 400 {
			t.Errorf("%q: the error is not one short line: %q", in, m)
		}
		return
	}
	for _, x := range v {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			t.Errorf("%q: got %v", in, x)
		}
	}
}
