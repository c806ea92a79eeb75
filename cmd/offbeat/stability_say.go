package main

import (
	"errors"
	"fmt"
	"math"
	"strings"
	"time"

	"offbeat/dsp"
	"offbeat/dsp/stability"
)

type num = dsp.Num

const day = 86400.0

// verdict is the summary of a row. It is the object of --json. Drifts are of
// frequency a day, whatever the unit of the numbers.
type verdict struct {
	Kind     string  `json:"kind"`
	Tau0     num     `json:"tau0_s"`
	Readings int     `json:"readings"` // known
	Missing  int     `json:"missing"`
	Breaks   int     `json:"breaks"` // of the count of phase
	Seconds  num     `json:"seconds"`
	Begin    *string `json:"begin"` // of a journal's span
	Mean     num     `json:"mean_frequency"`

	Drift       num              `json:"drift_per_day"`
	DriftU      num              `json:"drift_u_per_day"`
	DriftNoise  *string          `json:"drift_noise"`
	DriftMethod string           `json:"drift_method"`
	Significant bool             `json:"drift_significant"` // beyond two of its u
	Drifts      map[string]num   `json:"drift_estimates_per_day"`
	Ageing      *ageingSaid      `json:"ageing"`
	AgeingWhy   string           `json:"ageing_refused,omitempty"`
	Settling    *settlingSaid    `json:"settling"`
	Outliers    []outlierSaid    `json:"outliers"` // marked, not left out; the first 100
	OutlierN    int              `json:"outlier_count"`
	Confidence  float64          `json:"confidence"`
	Notes       []string         `json:"notes"`
	Why         string           `json:"nothing_because,omitempty"`
	drift       *stability.Drift // in numbers of dsp/stability
}

type ageingSaid struct {
	Law   string `json:"law"`
	A     num    `json:"a"`
	B     num    `json:"b_per_day"`
	BLow  num    `json:"b_low_per_day"`
	BHigh num    `json:"b_high_per_day"`
	C     num    `json:"c"`
	RMS   num    `json:"rms"`
	Line  num    `json:"rms_of_a_line"`
	Now   num    `json:"slope_at_the_end_per_day"`
}

type settlingSaid struct {
	Warm  bool `json:"warmed_up"` // the first third drifts more than the last, beyond doubt
	Still bool `json:"still_settling"`
	Early num  `json:"first_third_per_hour"`
	Late  num  `json:"last_third_per_hour"`
	U     num  `json:"u_per_hour"`
}

type outlierSaid struct {
	Reading int `json:"reading"` // from 1; of phases: the later of two
	T       num `json:"t_s"`
	Value   num `json:"frequency"`
}

const mostOutliers = 100

// summarise judges the row as a whole.
func (j *judging) summarise() *verdict {
	r := j.row
	y := r.asFrequency()
	known := r.known()
	s := &verdict{Kind: "frequency", Tau0: num(r.tau0), Readings: known, Missing: len(r.values) - known, Confidence: j.confidence,
		Seconds: num(float64(len(y)) * r.tau0), Outliers: []outlierSaid{}}
	if r.phase {
		s.Kind = "phase"
	}
	if !r.begin.IsZero() {
		at := r.begin.Format(time.RFC3339)
		s.Begin = &at
	}
	for i := 1; i < len(r.run); i++ {
		if r.run[i] != r.run[i-1] {
			s.Breaks++
		}
	}
	s.Mean = num(meanOf(y))
	s.saydrift(stability.DriftOf(j.x, j.run, r.tau0))
	s.sayAgeing(y, r.tau0)
	if w, ok := stability.SettlingOf(j.x, j.run, r.tau0); ok {
		s.Settling = &settlingSaid{w.Warm, w.Still, num(w.Early * 3600), num(w.Late * 3600), num(w.U * 3600)}
	}
	for _, i := range stability.Outliers(y, 5) {
		if s.OutlierN++; s.OutlierN <= mostOutliers {
			o := outlierSaid{Reading: i + 1, T: num(float64(i) * r.tau0), Value: num(y[i])}
			if r.phase {
				o.Reading++
			}
			s.Outliers = append(s.Outliers, o)
		}
	}
	s.Why = j.why(s)
	s.Notes = append([]string{}, r.notes...)
	return s
}

// why says what stood in the way of some or all deviations.
func (j *judging) why(s *verdict) string {
	some, zero, longest := false, true, 0
	for _, r := range j.rows {
		if r.N > 0 {
			some, longest = true, max(longest, r.M)
			zero = zero && r.Oadev == 0
		}
	}
	least := 2
	if j.row.phase {
		least = 3
	}
	switch {
	case some && zero:
		j.row.note("all readings are alike: their deviations are 0, without limits")
	case some && s.Missing+s.Breaks > 0 && longest*8 < len(j.x) && !j.listed():
		j.row.note("gaps and breaks leave no difference at averaging times beyond %s s", number(float64(longest)*j.row.tau0))
	case !some && s.Readings < least:
		return fmt.Sprintf("%s holds %s: %d are the least for a deviation", j.row.name, plural(s.Readings, "usable reading"), least)
	case !some && j.listed():
		return fmt.Sprintf("%s: the averaging times are too long for it", j.row.name)
	case !some:
		return fmt.Sprintf("%s: gaps leave no two neighbouring differences", j.row.name)
	}
	return ""
}

func (s *verdict) saydrift(d stability.Drift) {
	s.drift = &d
	s.Drift, s.DriftU, s.DriftMethod, s.Significant = num(d.Best*day), num(d.U*day), d.Method, d.Significant()
	if !math.IsNaN(d.U) {
		name := d.Noise.String()
		s.DriftNoise = &name
	}
	s.Drifts = map[string]num{
		"least_squares": num(d.LeastSquares * day), "bisection": num(d.Bisection * day), "first_difference": num(d.FirstDifference * day),
		"quadratic": num(d.Quadratic * day), "mean_second_difference": num(d.SecondDifference * day), "three_point": num(d.ThreePoint * day),
	}
}

// sayAgeing fits the logarithmic law to 512 means at most.
func (s *verdict) sayAgeing(y []float64, tau0 float64) {
	t, mean := stability.Blocks(y, tau0, 512)
	a, err := stability.FitAgeing(t, mean)
	if err != nil {
		s.AgeingWhy = err.Error()
		if errors.Is(err, stability.ErrFew) {
			s.AgeingWhy = "too few readings for a law of ageing"
		}
		return
	}
	s.Ageing = &ageingSaid{Law: "a ln(b t + 1) + c, t in days from the start", A: num(a.A), B: num(a.B * day), BLow: num(a.BLow * day), BHigh: num(a.BHigh * day),
		C: num(a.C), RMS: num(a.RMS), Line: num(a.Line), Now: num(a.Slope(float64(len(y))*tau0) * day)}
}

// meanOf is the mean of what is known.
func meanOf(y []float64) float64 {
	mean, n := 0.0, 0.0
	for _, v := range y {
		if !math.IsNaN(v) {
			n++
			mean += (v - mean) / n
		}
	}
	if n == 0 {
		return math.NaN()
	}
	return mean
}

// writeHead says what was read.
func (j *judging) writeHead() {
	r := j.row
	what := "frequency"
	if r.phase {
		what = "phase"
	}
	known := r.known()
	fmt.Fprintf(j.out, "%s: %s, %s s apart", r.name, plural(known, what), number(r.tau0))
	if n := len(r.values) - known; n > 0 {
		fmt.Fprintf(j.out, ", %d missing", n)
	}
	if !r.begin.IsZero() {
		fmt.Fprintf(j.out, ", from %s", r.begin.Format(time.RFC3339))
	}
	fmt.Fprintf(j.out, "\n\n%10s %9s  %-21s %-15s%8s  %9s %9s %9s %9s %9s %9s\n", "tau, s", "oadev", fmt.Sprintf("limits %.4g %%", j.confidence*100), "noise", "n",
		"adev", "mdev", "tdev, s", "hdev", "ohdev", "totdev")
}

func (j *judging) writeRow(r *tauRow) {
	limits, noise := "-", "-"
	if !math.IsNaN(float64(r.Low)) {
		limits = short(r.Low) + " … " + short(r.High)
	}
	if r.Noise != nil {
		if noise = *r.Noise; r.Assumed {
			noise += "?"
		}
	}
	fmt.Fprintf(j.out, "%10s %9s  %-21s %-15s%8d  %9s %9s %9s %9s %9s %9s\n", number(float64(r.Tau)), short(r.Oadev), limits, noise, r.N,
		short(r.Adev), short(r.Mdev), short(r.Tdev), short(r.Hdev), short(r.Ohdev), short(r.Totdev))
}

// short writes a deviation with three digits.
func short(v num) string {
	if f := float64(v); !math.IsNaN(f) {
		return fmt.Sprintf("%.2e", f)
	}
	return "-"
}

// writeSummary says in words what the row is worth.
func (j *judging) writeSummary(s *verdict) {
	line := func(head, format string, args ...any) {
		fmt.Fprintf(j.out, "%-12s%s\n", head, fmt.Sprintf(format, args...))
	}
	fmt.Fprintln(j.out)
	if m := float64(s.Mean); !math.IsNaN(m) {
		line("Mean", "%s", strings.TrimPrefix(fmt.Sprintf("%+.7g", m), "+"))
	}
	switch d, u := float64(s.Drift), float64(s.DriftU); {
	case math.IsNaN(d):
	case math.IsNaN(u):
		line("Drift", "%+.3g a day (%s); too few readings to say how sure that is", d, s.DriftMethod)
	default:
		sure := "not beyond the noise"
		if s.Significant {
			sure = "beyond the noise"
		}
		line("Drift", "%s a day (k = 2, %s, noise %s): %s", anyWithU(d, 2*u), s.DriftMethod, *s.DriftNoise, sure)
	}
	switch w := s.Settling; {
	case w == nil || !w.Warm:
	case w.Still:
		line("Warm-up", "still settling, %+.2g an hour in the last third, after %+.2g in the first (u %.2g)", float64(w.Late), float64(w.Early), float64(w.U))
	default:
		line("Warm-up", "it has settled: %+.2g an hour in the first third, %+.2g in the last (u %.2g)", float64(w.Early), float64(w.Late), float64(w.U))
	}
	if a := s.Ageing; a != nil {
		line("Ageing", "%.4g ln(%.4g t + 1) %+.4g, t in days; at the end %+.3g a day", float64(a.A), float64(a.B), float64(a.C), float64(a.Now))
	} else if s.Significant {
		line("Ageing", "no law: %s", s.AgeingWhy)
	}
	if s.OutlierN > 0 {
		var which []string
		for i, o := range s.Outliers {
			if i == 5 {
				which = append(which, "…")
				break
			}
			which = append(which, fmt.Sprint(o.Reading))
		}
		line("Stand out", "%s, none left out: reading %s", plural(s.OutlierN, "frequency"), strings.Join(which, ", "))
	}
	for _, r := range j.rows {
		if r.Assumed {
			line("", "? too few points to tell the noise: that of a shorter averaging time is assumed")
			break
		}
	}
	for _, n := range s.Notes {
		line("Note", "%s", oneLine(n))
	}
}

// anyWithU writes fractions with a power of ten and larger numbers plainly.
func anyWithU(v, u float64) string {
	if max(math.Abs(v), u) < 1e-3 {
		return offsetWithU(v, u)
	}
	return "(" + strings.TrimSpace(withU(v, u, "")) + ")"
}

// plural writes a number of things.
func plural(n int, what string) string {
	if n == 1 {
		return "1 " + what
	}
	if stem, y := strings.CutSuffix(what, "y"); y {
		return fmt.Sprintf("%d %sies", n, stem)
	}
	return fmt.Sprintf("%d %ss", n, what)
}
