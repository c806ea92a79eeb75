package main

import (
	"bufio"
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"strconv"
	"strings"
	"time"

	"offbeat/dsp/stability"
)

var stabilityCommand = &command{
	name: "stability", short: "how stable a column of numbers or a night of the journal was",
	run: judgeStability,
	help: `Usage: offbeat stability --kind phase|frequency [flags] FILE
       … | offbeat stability --kind phase|frequency [flags] -
       offbeat stability --bench NAME [flags]

Reads phases or frequencies and gives the Allan family of deviations for a row of
averaging times, the kind of noise, drift and ageing, and marks what stands out.

Numbers from a file or a pipe, one a line, or a column of a table:
  --kind phase          seconds by which the clock is early
         frequency      fractional frequency, or hertz: the deviations have its unit
  --rate HZ             numbers a second (default 1)
  --interval TIME       or how far they are apart: 10s, 1d
  --column NAME         of a table with a header, or N, from 1
  --time NAME           column with their times, in seconds or as
                        2006-01-02T15:04:05Z: they are put in order and into place
  Lines that begin with # and empty lines are left out. What is missing is nan, -
  or an empty cell; what is not a number counts as missing.

Readings of a journal, one a second:
  --bench NAME          which bench (needless where there is only one)
  --journal FILE        (default: the daemon's own)
  --from TIME, --to TIME
                        2006-01-02T15:04:05Z, or 2006-01-02 15:04 in UTC
  --kind phase          of the beat, counted (default); frequency: offsets second
                        by second

What is computed:
  --taus 1,10,100       averaging times in seconds, or octave (default), decade, all
  --confidence PERCENT  of the limits (default 68.27)

What is printed:
  --json                one object a line: one for each averaging time, then the
                        summary; what is not known is null
  --plot FILE           a picture of the Allan deviation, FILE.svg or FILE.png

No difference is taken across a missing frequency, nor across a break of the
count of phase; a missing phase costs only the differences that need it.

Exit codes: 0 done; 1 nothing could be computed; 2 bad usage or unreadable input.
`,
}

// judging is one run of stability.
type judging struct {
	column     column
	span       span
	kind       string
	tau0       float64 // 0: not said
	taus       string
	confidence float64
	json       bool
	plot       string

	row  *row
	x    []float64
	run  []int32
	rows []tauRow
	out  *bufio.Writer
}

// tauRow is what is known of one averaging time. It is the object of --json.
type tauRow struct {
	Tau     num     `json:"tau_s"`
	M       int     `json:"m"`
	N       int     `json:"n"` // terms of oadev
	Adev    num     `json:"adev"`
	Oadev   num     `json:"oadev"`
	Mdev    num     `json:"mdev"`
	Tdev    num     `json:"tdev"`
	Hdev    num     `json:"hdev"`
	Ohdev   num     `json:"ohdev"`
	Totdev  num     `json:"totdev"`
	Noise   *string `json:"noise"`
	Assumed bool    `json:"noise_assumed"` // from the averaging time before: too few points
	EDF     num     `json:"edf"`
	Low     num     `json:"low"` // limits of oadev
	High    num     `json:"high"`

	TotalEDF  num `json:"totdev_edf"`  // of the total variance
	TotalBias num `json:"totdev_bias"` // what it is expected to be over the Allan variance; not taken off
}

func judgeStability(ctx context.Context, c *command, args []string, std stdio) error {
	j := &judging{taus: "octave", confidence: 0.6827}
	files, err := j.flags(c, args)
	if err != nil {
		return err
	}
	ctx, cancel := interruptible(ctx)
	defer cancel()
	if j.row, err = j.read(ctx, files, std.in); err != nil {
		return err
	}
	j.x, j.run = j.row.asPhase()
	ms, err := chooseTaus(j.taus, len(j.x), j.row.tau0)
	if err != nil {
		return fmt.Errorf("--taus: %w", err)
	}
	j.out = bufio.NewWriterSize(std.out, 64<<10)
	if !j.json {
		j.writeHead()
	}
	for _, m := range ms {
		if ctx.Err() != nil {
			j.row.note("interrupted: averaging times from %s s on were left out", number(float64(m)*j.row.tau0))
			break
		}
		j.add(m)
	}
	s := j.summarise()
	if j.json {
		j.encode(map[string]any{"summary": s})
	} else {
		j.writeSummary(s)
	}
	if err := j.out.Flush(); err != nil {
		return fmt.Errorf("writing the output: %w", err)
	}
	return j.conclude(s, std.err)
}

// conclude draws the picture and chooses the exit code.
func (j *judging) conclude(s *verdict, stderr io.Writer) error {
	for _, n := range j.row.notes {
		if j.json {
			fmt.Fprintf(stderr, "offbeat stability: note: %s\n", oneLine(n))
		}
	}
	drawn := 0
	for _, r := range j.rows {
		if r.N > 0 {
			drawn++
		}
	}
	if drawn == 0 {
		return &exitError{exitNothing, s.Why}
	}
	if j.plot != "" {
		if err := drawPlot(j.plot, j.row, j.rows, j.confidence); err != nil {
			return fmt.Errorf("--plot: %w", err)
		}
	}
	return nil
}

// flags reads the command line.
func (j *judging) flags(c *command, args []string) (files []string, err error) {
	f := newFlags(c.name)
	rate, interval := 0.0, time.Duration(0)
	quantity(f, &j.kind, "kind", func(s string) (string, error) { return oneOf(s, []string{"phase", "frequency"}) })
	quantity(f, &rate, "rate", func(s string) (float64, error) {
		v, err := parseHertz(s)
		if err == nil && !(v >= 1e-9 && v <= 1e9) {
			err = fmt.Errorf("%s: must be 1e-9 Hz to 1e9 Hz", quoted(s))
		}
		return v, err
	})
	quantity(f, &interval, "interval", func(s string) (time.Duration, error) {
		d, err := parseSpan(s)
		if err == nil && d <= 0 {
			err = fmt.Errorf("%s: must be more than 0", quoted(s))
		}
		return d, err
	})
	quantity(f, &j.column.name, "column", parseWords)
	quantity(f, &j.column.time, "time", parseWords)
	quantity(f, &j.span.bench, "bench", parseName)
	quantity(f, &j.span.path, "journal", parseWords)
	j.span.to = openEnd
	quantity(f, &j.span.from, "from", parseInstant)
	quantity(f, &j.span.to, "to", parseInstant)
	quantity(f, &j.taus, "taus", func(s string) (string, error) { _, err := chooseTaus(s, 2, 0); return s, err })
	quantity(f, &j.confidence, "confidence", parseConfidence)
	quantity(f, &j.plot, "plot", parsePicture)
	f.BoolVar(&j.json, "json", false, "")
	if files, err = f.parse(args); err != nil {
		return nil, err
	}
	return files, j.sort(f, files, rate, interval)
}

// sort tells a column from a journal and refuses what does not go together.
func (j *judging) sort(f *flags, files []string, rate float64, interval time.Duration) error {
	ofJournal := ""
	for _, name := range []string{"journal", "bench", "from", "to"} {
		if f.given(name) {
			ofJournal = name
		}
	}
	switch {
	case len(files) > 1:
		return fmt.Errorf("one file at a time: %s is one too many", quoted(files[1]))
	case len(files) == 1 && ofJournal != "":
		return fmt.Errorf("--%s is for the journal, %s is a file of numbers: give one of them", ofJournal, quoted(files[0]))
	case len(files) == 0 && ofJournal == "":
		return errors.New("which numbers? Give a FILE, - for standard input, or --bench NAME for the journal")
	case rate != 0 && interval != 0:
		return errors.New("--rate and --interval say the same: give one of them")
	}
	if len(files) == 1 {
		if j.kind == "" {
			return errors.New("say what the numbers are: --kind phase or --kind frequency")
		}
		if j.tau0 = interval.Seconds(); rate != 0 {
			j.tau0 = 1 / rate
		}
		return nil
	}
	for _, name := range []string{"rate", "interval", "column", "time"} {
		if f.given(name) {
			return fmt.Errorf("--%s is for a column of numbers: a journal has a reading a second", name)
		}
	}
	if !j.span.from.Before(j.span.to) {
		return fmt.Errorf("--from %s is not before --to %s", j.span.from.Format(time.RFC3339), j.span.to.Format(time.RFC3339))
	}
	if j.span.path == "" {
		path, err := defaultJournal()
		if err != nil {
			return err
		}
		j.span.path = path
	}
	return nil
}

// read reads the numbers.
func (j *judging) read(ctx context.Context, files []string, stdin io.Reader) (*row, error) {
	if len(files) == 0 {
		return fromJournal(ctx, j.span, j.kind != "frequency")
	}
	r := &row{name: files[0], phase: j.kind == "phase"}
	in := stdin
	if files[0] == "-" {
		r.name = "standard input"
	} else {
		f, err := os.Open(files[0])
		if err != nil {
			return nil, fileError(files[0], err)
		}
		defer f.Close()
		in = f
	}
	n, err := readColumn(in, j.column)
	if err != nil {
		return nil, fmt.Errorf("%s: %w", r.name, fileError("", err))
	}
	r.notes = n.notes
	if len(n.values) == 0 {
		return nil, fmt.Errorf("%s: there is no number in it%s", r.name, because(n.notes))
	}
	if n.times != nil {
		if err := r.spread(n, j.tau0); err != nil {
			return nil, err
		}
	} else {
		r.values, r.tau0 = n.values, j.tau0
		if r.tau0 == 0 {
			r.tau0 = 1
		}
	}
	if r.known() == 0 {
		return nil, fmt.Errorf("%s: there is no number in it%s", r.name, because(r.notes))
	}
	return r, nil
}

func because(notes []string) string {
	if len(notes) == 0 {
		return ""
	}
	return ": " + notes[0]
}

// fileError drops the operation and the name that the system's errors repeat.
func fileError(name string, err error) error {
	var p *os.PathError
	if errors.As(err, &p) {
		err = p.Err
	}
	if name == "" {
		return err
	}
	return fmt.Errorf("%s: %w", name, err)
}

// chooseTaus returns the averaging factors that the words mean for n phases.
// With tau0 0 it only checks the words.
func chooseTaus(words string, n int, tau0 float64) (ms []int, err error) {
	step := map[string]int{"octave": 2, "decade": 10}[words]
	switch {
	case words == "all":
		for m := 1; 2*m < n; m++ {
			ms = append(ms, m)
		}
		return ms, nil
	case step > 0:
		for m := 1; 2*m < n; m *= step {
			ms = append(ms, m)
		}
		return ms, nil
	}
	for _, w := range strings.Split(words, ",") {
		digits, rest := splitNumber(strings.TrimSpace(w))
		tau, err := strconv.ParseFloat(digits, 64)
		if err != nil || rest != "" || !(tau > 0) {
			return nil, fmt.Errorf("%s: averaging times are octave, decade, all, or seconds with commas between: 1,10,100", quoted(w))
		}
		if tau0 == 0 {
			continue
		}
		m := math.Round(tau / tau0)
		if m < 1 || m > 1e12 || math.Abs(m*tau0-tau) > 1e-6*tau {
			return nil, fmt.Errorf("%s s is not a whole number of readings %s s apart", quoted(w), number(tau0))
		}
		ms = append(ms, int(m))
	}
	return ms, nil
}

// listed reports whether the averaging times were listed one by one.
func (j *judging) listed() bool { return j.taus != "octave" && j.taus != "decade" && j.taus != "all" }

// add computes an averaging time and prints it, if there is anything, or if it
// was asked for.
func (j *judging) add(m int) {
	r := tauRow{Tau: num(float64(m) * j.row.tau0), M: m, EDF: num(math.NaN()), Low: num(math.NaN()), High: num(math.NaN()),
		TotalEDF: num(math.NaN()), TotalBias: num(math.NaN())}
	for d, at := range map[stability.Deviation]*num{
		stability.Allan: &r.Adev, stability.ModifiedAllan: &r.Mdev, stability.TimeDeviation: &r.Tdev, stability.Hadamard: &r.Hdev,
		stability.OverlappingHadamard: &r.Ohdev, stability.TotalDeviation: &r.Totdev,
	} {
		v, _ := d.Of(j.x, j.run, j.row.tau0, m)
		*at = num(v)
	}
	v, n := stability.Overlapping(j.x, j.run, j.row.tau0, m)
	r.Oadev, r.N = num(v), n
	j.limits(&r)
	if n == 0 && !j.listed() {
		return
	}
	j.rows = append(j.rows, r)
	if j.json {
		j.encode(r)
	} else {
		j.writeRow(&r)
	}
}

// limits tells the kind of noise and the confidence limits. Where too few points
// are left, the noise of the averaging time before is assumed.
func (j *judging) limits(r *tauRow) {
	if r.N == 0 || !(r.Oadev > 0) {
		return
	}
	a, ok := stability.Identify(j.x, j.run, r.M)
	if !ok {
		for m := r.M / 2; m >= 1 && !ok; m /= 2 {
			a, ok = stability.Identify(j.x, j.run, m)
		}
		r.Assumed = ok
	}
	if !ok {
		return
	}
	name := a.String()
	r.Noise = &name
	edf := stability.EDF(a, r.N+2*r.M, r.M)
	low, high := stability.Limits(float64(r.Oadev), edf, j.confidence)
	r.EDF, r.Low, r.High = num(edf), num(low), num(high)
	r.TotalEDF, r.TotalBias = num(stability.TotalDeviation.EDF(a, len(j.x), r.M)), num(stability.TotalBias(a, len(j.x), r.M))
}

// encode writes one object on a line.
func (j *judging) encode(v any) {
	line, err := json.Marshal(v)
	if err == nil {
		j.out.Write(append(line, '\n'))
	}
}

// parseConfidence reads a probability in per cent.
func parseConfidence(s string) (float64, error) {
	number, rest := splitNumber(strings.TrimSpace(s))
	v, err := strconv.ParseFloat(number, 64)
	if rest = strings.TrimSpace(rest); err != nil || rest != "" && rest != "%" || !(v > 1 && v < 99.99) {
		return 0, fmt.Errorf("%s: must be per cent, more than 1 and less than 99.99", quoted(s))
	}
	return v / 100, nil
}
