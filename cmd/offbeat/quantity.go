package main

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
)

// unit is a unit's name and its power of ten.
type unit struct {
	name  string
	power int
}

// Units are case-sensitive: mHz and MHz are nine powers of ten apart.
var (
	hertzUnits    = []unit{{"Hz", 0}, {"kHz", 3}, {"MHz", 6}, {"GHz", 9}, {"mHz", -3}, {"uHz", -6}, {"µHz", -6}}
	fractionUnits = []unit{{"ppm", -6}, {"ppb", -9}}
	decibelUnits  = []unit{{"dB", 0}}
)

// parseQuantity reads a decimal number and a unit, with or without a space
// between: "10e6", "10MHz", "-3 ppb". A bare number has the power of ten bare;
// noBare refuses it.
func parseQuantity(s string, units []unit, bare int) (float64, error) {
	number, rest := splitNumber(strings.TrimSpace(s))
	rest = strings.TrimSpace(rest)
	if number == "" {
		return 0, fmt.Errorf("%s is not a number%s", quoted(s), withUnits(units, bare))
	}
	power := bare
	if rest != "" {
		power = noBare
		for _, u := range units {
			if u.name == rest {
				power = u.power
			}
		}
		if power == noBare {
			return 0, fmt.Errorf("%s: unknown unit %s: write the number%s", quoted(s), quoted(rest), withUnits(units, bare))
		}
	} else if bare == noBare {
		return 0, fmt.Errorf("%s has no unit: write the number%s", quoted(s), withUnits(units, bare))
	}
	v, err := scaled(number, power)
	if err != nil {
		return 0, fmt.Errorf("%s is out of range", quoted(s))
	}
	return v, nil
}

const noBare = math.MinInt // as the power of a bare number: the unit must be written

// withUnits lists what may follow a number, for an error.
func withUnits(units []unit, bare int) string {
	var names []string
	for _, u := range units {
		if u.name != "uHz" && u.name != "µHz" && u.name != "mHz" {
			names = append(names, u.name)
		}
	}
	if len(names) == 0 {
		return ""
	}
	if bare == noBare {
		return " with its unit, " + orList(names)
	}
	return ", alone or with a unit, " + orList(names)
}

// splitNumber cuts the longest leading decimal number off s: no hexadecimal,
// no underscores, no Inf, no NaN.
func splitNumber(s string) (number, rest string) {
	i, digits := 0, 0
	if i < len(s) && (s[i] == '+' || s[i] == '-') {
		i++
	}
	run := func() {
		for i < len(s) && s[i] >= '0' && s[i] <= '9' {
			i++
			digits++
		}
	}
	run()
	if i < len(s) && s[i] == '.' {
		i++
		run()
	}
	if digits == 0 {
		return "", s
	}
	if i < len(s) && (s[i] == 'e' || s[i] == 'E') {
		mark := i
		i++
		if i < len(s) && (s[i] == '+' || s[i] == '-') {
			i++
		}
		digits = 0
		if run(); digits == 0 {
			i = mark
		}
	}
	return s[:i], s[i:]
}

// scaled reads number times ten to the power, rounded once: 12.5 with -6 is
// the double nearest 1.25e-5.
func scaled(number string, power int) (float64, error) {
	mantissa, exponent := number, 0
	if i := strings.IndexAny(number, "eE"); i >= 0 {
		e, err := strconv.Atoi(number[i+1:])
		if err != nil || e > 400 || e < -400 {
			return 0, strconv.ErrRange
		}
		mantissa, exponent = number[:i], e
	}
	return strconv.ParseFloat(mantissa+"e"+strconv.Itoa(exponent+power), 64)
}

// parseHertz reads a frequency in hertz: "10e6", "10MHz", "100 Hz".
func parseHertz(s string) (float64, error) { return parseQuantity(s, hertzUnits, 0) }

// parsePPM reads a fraction; a bare number is in parts per million.
func parsePPM(s string) (float64, error) { return parseQuantity(s, fractionUnits, -6) }

// parseFraction reads a fraction that must say its unit: "12.5ppm", "-3ppb".
func parseFraction(s string) (float64, error) { return parseQuantity(s, fractionUnits, noBare) }

// parseDecibel reads a ratio or a level in decibels, "-20" or "-20 dB".
func parseDecibel(s string) (float64, error) { return parseQuantity(s, decibelUnits, 0) }

// parseNumber reads a plain number.
func parseNumber(s string) (float64, error) { return parseQuantity(s, nil, 0) }

// parseSpan reads a length of time: "90d", "36h", "15min", "2.5s".
func parseSpan(s string) (time.Duration, error) {
	const allowed = "a length of time is a number with s, min, h or d: 90d"
	number, rest := splitNumber(strings.TrimSpace(s))
	if number == "" {
		return 0, fmt.Errorf("%s: %s", quoted(s), allowed)
	}
	seconds := map[string]float64{"s": 1, "min": 60, "h": 3600, "d": 86400}[strings.TrimSpace(rest)]
	if seconds == 0 {
		return 0, fmt.Errorf("%s: %s", quoted(s), allowed)
	}
	v, err := scaled(number, 0)
	// A century is more than anyone means and far from what overflows.
	if err != nil || v < 0 || v*seconds > 36525*86400 {
		return 0, fmt.Errorf("%s: a length of time must be 0 to 36525d", quoted(s))
	}
	return time.Duration(math.Round(v * seconds * 1e9)), nil
}

// parseRange reads LOW-HIGH in hertz: "800-1500", "0.8kHz-1.5kHz". LOW may be
// negative (quadrature): "-500-500".
func parseRange(s string) (low, high float64, err error) {
	t := strings.TrimSpace(s)
	for i := 1; i < len(t); i++ {
		// The dash of an exponent, 1e-3, is not the one between.
		if t[i] != '-' || t[i-1] == 'e' || t[i-1] == 'E' || strings.TrimSpace(t[:i]) == "" {
			continue
		}
		if low, err = parseHertz(t[:i]); err != nil {
			break
		}
		if high, err = parseHertz(t[i+1:]); err != nil {
			break
		}
		return low, high, nil
	}
	return 0, 0, fmt.Errorf("%s is not a range: write LOW-HIGH in Hz, such as 800-1500", quoted(s))
}

// quoted shows what the user wrote, short and on one line.
func quoted(s string) string {
	const most = 60
	s = strings.ToValidUTF8(s, "?")
	if len(s) > most {
		cut := most
		for cut > 0 && s[cut]&0xc0 == 0x80 {
			cut--
		}
		s = s[:cut] + "…"
	}
	return strconv.Quote(s)
}

// orList joins names as in "a, b or c".
func orList(names []string) string {
	switch len(names) {
	case 0:
		return ""
	case 1:
		return names[0]
	}
	return strings.Join(names[:len(names)-1], ", ") + " or " + names[len(names)-1]
}
