package main

import (
	"fmt"
	"io"
	"math"
	"strings"

	"offbeat/dsp"
)

// writeSummary says in words what the run was worth.
func writeSummary(w io.Writer, s *dsp.Summary, cfg dsp.Config) {
	line := func(head, format string, args ...any) {
		fmt.Fprintf(w, "%-12s%s\n", head, fmt.Sprintf(format, args...))
	}
	line("Heard", "%s, of which %s usable%s", length(s.Seconds), length(s.UsableSeconds), stateList(s))
	abs, beat := float64(s.BeatAbs), float64(s.Beat)
	switch {
	case math.IsNaN(abs):
		line("Result", "none: %s", strings.TrimPrefix(s.Method, "nothing usable: "))
		return
	case math.IsNaN(beat):
		line("Beat", "%s (k = 2), size only: %s", unsigned(abs, 2*float64(s.BeatU)), whyUnsigned(cfg))
		line("Offset", "%s in size", strings.TrimPrefix(offsetWithU(abs/local(cfg), 2*float64(s.BeatU)/local(cfg)), "+"))
		line("Method", "%s", s.Method)
		writeClock(line, s, cfg)
		writeStability(w, s)
		return
	}
	writeVerdict(line, s, cfg)
	line("Method", "%s", s.Method)
	writeClock(line, s, cfg)
	if len(s.Budget) > 0 {
		fmt.Fprintln(w, "\nWhere the uncertainty comes from (standard uncertainty of the offset):")
		for _, b := range s.Budget {
			fmt.Fprintf(w, "  %9.2g  %s  %s\n", b.U, b.Type, b.Source)
		}
	}
	writeStability(w, s)
}

// writeVerdict says how far off the local is and what to do about it.
func writeVerdict(line func(head, format string, args ...any), s *dsp.Summary, cfg dsp.Config) {
	k := float64(s.K)
	line("Beat", "%s (k = 2, as received)", withU(float64(s.Beat), 2*float64(s.BeatU), "Hz"))
	errHz, expanded := float64(s.Error), float64(s.OffsetExpanded)
	if cfg.SetOff() != 0 {
		line("Error", "%s, after a set-off of %+g Hz", withU(errHz, expanded*local(cfg), "Hz"), cfg.SetOff())
	}
	line("Offset", "%s (k = %g, against the carrier as sent)", offsetWithU(float64(s.Offset), expanded), k)
	side, trim := "high", "down"
	if errHz < 0 {
		side, trim = "low", "up"
	}
	if math.Abs(float64(s.Offset)) <= expanded {
		line("In words", "the local is right as far as this run can tell: within %s of the carrier", spoken(expanded+math.Abs(float64(s.Offset))))
	} else {
		line("In words", "the local is %s by %s: trim it %s by %s at %s", side, spoken(math.Abs(float64(s.Offset))), trim,
			unsigned(math.Abs(errHz), expanded*local(cfg)), hertz(local(cfg)))
	}
	if d := float64(s.DriftPerDay); !math.IsNaN(d) && d != 0 {
		line("Drift", "%+.2g a day over this run", d)
	}
	if v := float64(s.SpreadHz); !math.IsNaN(v) && v > 0 {
		line("Spread", "the carrier is smeared by %.2g Hz (rms)", v)
	}
}

// writeClock says what was found of the sample clock.
func writeClock(line func(head, format string, args ...any), s *dsp.Summary, cfg dsp.Config) {
	e, u := float64(s.ClockPPM), float64(s.ClockUPPM)
	if math.IsNaN(e) {
		return
	}
	use := "taken into account"
	if cfg.SampleRateError != 0 || cfg.SampleRateErrorU != 0 {
		use = fmt.Sprintf("the stated %+g ppm was used", cfg.SampleRateError*1e6)
	}
	side := "fast"
	if e < 0 {
		side = "slow"
	}
	line("Clock", "the sample clock is %s by %s (k = 2), from %s; %s", side, strings.TrimPrefix(withU(math.Abs(e), 2*u, "ppm"), "+"), s.ClockFrom, use)
}

// whyUnsigned says why it is not known which of the two is high.
func whyUnsigned(cfg dsp.Config) string {
	if cfg.Hookup == dsp.Mixer {
		return "a mixer does not tell which of the two is high"
	}
	return "not known which tone is the local's; say where it is with --local-tone"
}

func local(cfg dsp.Config) float64 {
	if cfg.Local == 0 {
		return cfg.Carrier
	}
	return cfg.Local
}

// unsigned is withU for a size.
func unsigned(v, u float64) string { return strings.TrimPrefix(withU(v, u, "Hz"), "+") }

// spoken writes a fraction as people say it.
func spoken(y float64) string {
	switch a := math.Abs(y); {
	case a >= 1e-6:
		return fmt.Sprintf("%.3g parts in a million", y*1e6)
	case a >= 1e-9:
		return fmt.Sprintf("%.3g parts in a thousand million (1e-9)", y*1e9)
	}
	return fmt.Sprintf("%.3g parts in 1e12", y*1e12)
}

// stateList tells how the seconds were spent.
func stateList(s *dsp.Summary) string {
	var parts []string
	for _, st := range dsp.States {
		if t := s.StateSeconds[st]; t > 0 {
			parts = append(parts, fmt.Sprintf("%s %s", st, length(t)))
		}
	}
	if len(parts) == 0 {
		return ""
	}
	return " (" + strings.Join(parts, ", ") + ")"
}

func writeStability(w io.Writer, s *dsp.Summary) {
	if len(s.Stability) == 0 {
		return
	}
	fmt.Fprintln(w, "\nStability (overlapping Allan deviation, limits 68 %):")
	for _, p := range s.Stability {
		limits := ""
		if !math.IsNaN(float64(p.Low)) && !math.IsNaN(float64(p.High)) {
			limits = fmt.Sprintf("  %.2g to %.2g", float64(p.Low), float64(p.High))
		}
		fmt.Fprintf(w, "  %8s s  %9.3g%s\n", number(p.Tau), p.Adev, limits)
	}
}
