package main

import (
	"fmt"
	"math"
	"strconv"
	"strings"
	"time"
)

// decimals returns how many decimals show two significant digits of u, after
// rounding: 0.0996 is 0.10. It may be negative for u >= 100.
func decimals(u float64) int {
	e := int(math.Floor(math.Log10(u)))
	if math.Round(u*math.Pow10(1-e)) >= 100 {
		e++
	}
	return 1 - e
}

// fixed writes v rounded to a number of decimals, which may be negative.
func fixed(v float64, dec int) string {
	if dec < 0 {
		p := math.Pow10(-dec)
		return strconv.FormatFloat(math.Round(v/p)*p, 'f', 0, 64)
	}
	return strconv.FormatFloat(v, 'f', dec, 64)
}

// signed is fixed with a + before what is not negative, and no -0.
func signed(v float64, dec int) string {
	s := fixed(v, dec)
	if strings.Trim(s, "-0.") == "" {
		s = strings.TrimPrefix(s, "-")
	}
	if s[0] != '-' {
		s = "+" + s
	}
	return s
}

// withU writes a value and its uncertainty, the latter to two significant
// digits and the former to the same decimal, as in the GUM (JCGM 100:2008,
// 7.2.6).
func withU(v, u float64, unit string) string {
	if !(u > 0) || math.IsInf(u, 0) {
		return fmt.Sprintf("%+.6g %s", v, unit)
	}
	d := decimals(u)
	return fmt.Sprintf("%s ± %s %s", signed(v, d), fixed(u, d), unit)
}

// offsetWithU writes a fractional offset and its uncertainty with one common
// power of ten.
func offsetWithU(y, u float64) string {
	if !(u > 0) || math.IsInf(u, 0) {
		return fmt.Sprintf("%+.3e", y)
	}
	e := int(math.Floor(math.Log10(max(math.Abs(y), u))))
	p := math.Pow10(e)
	d := max(decimals(u/p), 0)
	return fmt.Sprintf("(%s ± %s) × 1e%d", signed(y/p, d), fixed(u/p, d), e)
}

// clock writes seconds as h:mm:ss.
func clock(t float64) string {
	s := int64(t)
	return fmt.Sprintf("%d:%02d:%02d", s/3600, s/60%60, s%60)
}

// length writes a length of time for people.
func length(seconds float64) string {
	d := time.Duration(seconds * float64(time.Second))
	switch {
	case d < time.Minute:
		return number(math.Round(seconds*10)/10) + " s"
	case d < time.Hour:
		return fmt.Sprintf("%d min %d s", int(d.Minutes()), int(d.Seconds())%60)
	}
	return fmt.Sprintf("%d h %d min", int(d.Hours()), int(d.Minutes())%60)
}
