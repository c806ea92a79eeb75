package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"syscall"
	"time"

	"offbeat/metrics/export"
	"offbeat/metrics/journal"
)

var exportCommand = &command{
	name: "export", short: "the journal as CSV, JSON Lines or OpenMetrics",
	run: exportJournal,
	help: `Usage: offbeat export [flags]

Writes what the journal holds, also while a daemon writes it. All times are in
UTC.

  --journal FILE        the journal (default: where offbeat run keeps it)
  --bench NAME          only this bench; may be given more than once
  --from TIME, --to TIME
                        from the first time on, up to but not at the second
  --what readings       a row a second (default)
         minutes        what is left of seconds that have grown old
         events         notes, turns of the trimmer, gaps, starts and stops
  --format csv          RFC 4180, a header with units; not known is empty (default)
           jsonl        one JSON object a line; not known is null
           openmetrics  the metrics of /metrics with times, for back-filling
  -o FILE               write to a file, not to standard output
  --force               overwrite the file if it exists

Of openmetrics only:
  --every TIME          keep the last reading of each such interval: 10s
  --label NAME=VALUE    put a label on every series; may be given more than once.
                        Prometheus labels what it scrapes with job and instance:
                        with the same labels the history joins it

A TIME of --from and --to is 2030-01-02 (its beginning), 2030-01-02T03:04:05Z,
"2030-01-02 03:04", "yesterday 18:00", today, now, or -12h for 12 hours ago. What
has no zone is in UTC.

To fill a night into Prometheus, make blocks of it and move them into its
storage, where it finds them within a minute or so:
  offbeat export --from "yesterday 18:00" --to "today 06:00" \
      --format openmetrics --label job=offbeat \
      --label instance=127.0.0.1:9471 -o night.om
  promtool tsdb create-blocks-from openmetrics night.om blocks

Exit codes: 0 written; 1 nothing in that span, which is said; 2 bad usage or an
unreadable journal.
`,
}

// exporting is one run of export.
type exporting struct {
	path     string // of the journal
	q        export.Query
	what     string
	format   string
	opt      export.Options
	out      string // file; empty: standard output
	force    bool
	from, to bool // said
}

const (
	whatReadings, whatMinutes, whatEvents = "readings", "minutes", "events"
	formatOpenMetrics                     = "openmetrics"
)

func exportJournal(ctx context.Context, c *command, args []string, std stdio) (err error) {
	e := &exporting{what: whatReadings, format: string(export.CSV), q: export.Query{To: time.Date(9999, 1, 1, 0, 0, 0, 0, time.UTC)}}
	if err := e.configure(c, args, time.Now()); err != nil {
		return err
	}
	if e.q.Journal, err = journal.OpenReadOnly(e.path); err != nil {
		return err
	}
	defer e.q.Journal.Close()
	// Without this, a reader that has seen enough would end the process with
	// a signal before temporary files are gone.
	pipe := make(chan os.Signal, 1)
	signal.Notify(pipe, syscall.SIGPIPE)
	defer signal.Stop(pipe)
	ctx, cancel := interruptible(ctx)
	defer cancel()

	if err = e.choose(ctx); err == nil {
		err = e.find(ctx, std.err)
	}
	if err == nil {
		err = e.write(ctx, std.out)
	}
	switch {
	case err == nil, errors.Is(err, syscall.EPIPE):
		return nil // done, or whoever reads it has seen enough
	case ctx.Err() != nil && e.out != "":
		return errors.New("interrupted; nothing was kept")
	case ctx.Err() != nil:
		return errors.New("interrupted")
	}
	return err
}

// configure reads the flags.
func (e *exporting) configure(c *command, args []string, now time.Time) error {
	f := newFlags(c.name)
	instant := func(s string) (time.Time, error) { return parseTime(s, now) }
	quantity(f, &e.path, "journal", parseWords)
	quantity(f, &e.q.From, "from", instant)
	quantity(f, &e.q.To, "to", instant)
	quantity(f, &e.what, "what", func(s string) (string, error) { return oneOf(s, []string{whatReadings, whatMinutes, whatEvents}) })
	quantity(f, &e.format, "format", func(s string) (string, error) {
		return oneOf(s, []string{string(export.CSV), string(export.JSONLines), formatOpenMetrics})
	})
	quantity(f, &e.opt.Every, "every", func(s string) (time.Duration, error) {
		d, err := parseSpan(s)
		if err == nil && d < time.Second {
			err = fmt.Errorf("%s: must be at least 1s", quoted(s))
		}
		return d, err
	})
	quantity(f, &e.out, "o", parseWords)
	f.BoolVar(&e.force, "force", false, "")
	f.Func("bench", "", func(s string) error {
		name, err := parseName(s)
		if err == nil && !slices.Contains(e.q.Benches, name) {
			e.q.Benches = append(e.q.Benches, name)
		}
		return err
	})
	f.Func("label", "", e.label)
	files, err := f.parse(args)
	if err != nil {
		return err
	}
	e.from, e.to = f.given("from"), f.given("to")
	if e.path == "" {
		if e.path, err = defaultJournal(); err != nil {
			return err
		}
	}
	switch {
	case len(files) > 0:
		return fmt.Errorf("%s: say -o FILE for the output or --journal FILE for the journal", quoted(files[0]))
	case !e.q.From.Before(e.q.To):
		return fmt.Errorf("--from %s is not before --to %s", e.q.From.Format(export.TimeLayout), e.q.To.Format(export.TimeLayout))
	case e.format == formatOpenMetrics && e.what != whatReadings:
		return fmt.Errorf("--format openmetrics is for readings: write the %s as csv or jsonl", e.what)
	case e.format != formatOpenMetrics && e.opt.Every > 0:
		return fmt.Errorf("--every is for --format openmetrics: %s has every row", e.format)
	case e.format != formatOpenMetrics && len(e.opt.Labels) > 0:
		return errors.New("--label is for --format openmetrics")
	case e.force && e.out == "":
		return errors.New("--force is for -o FILE")
	}
	e.opt.Dir = spoolDir(e.out)
	return nil
}

// ownLabels are those that the series have anyway, and what Prometheus keeps
// for itself.
var (
	labelName = regexp.MustCompile(`^[a-zA-Z_][a-zA-Z0-9_]*$`)
	ownLabels = []string{"bench", "tone", "state", "flag", "hookup", "sideband", "input", "carrier_hertz", "local_hertz"}
)

func (e *exporting) label(s string) error {
	name, value, ok := strings.Cut(s, "=")
	if !ok || !labelName.MatchString(name) || strings.HasPrefix(name, "__") {
		return fmt.Errorf("%s: must be NAME=VALUE, a name of letters, digits and underscores: job=offbeat", quoted(s))
	}
	if slices.Contains(ownLabels, name) {
		return fmt.Errorf("%s: the series have a label %s of their own", quoted(s), name)
	}
	if _, err := parseWords(value); err != nil {
		return fmt.Errorf("%s: the value %w", quoted(s), err)
	}
	for _, l := range e.opt.Labels {
		if l[0] == name {
			return fmt.Errorf("%s: the label %s was given before", quoted(s), name)
		}
	}
	e.opt.Labels = append(e.opt.Labels, [2]string{name, value})
	return nil
}

// spoolDir chooses where a large temporary file goes: beside the output, else
// where TMPDIR says, else /var/tmp, for /tmp is memory on many systems.
func spoolDir(out string) string {
	if info, err := os.Stat(filepath.Dir(out)); out != "" && err == nil && info.IsDir() && !strings.HasPrefix(out, "/dev/") {
		return filepath.Dir(out)
	}
	if dir := os.Getenv("TMPDIR"); dir != "" {
		return dir
	}
	if info, err := os.Stat("/var/tmp"); err == nil && info.IsDir() {
		return "/var/tmp"
	}
	return os.TempDir()
}

// choose checks the benches asked for, or takes all.
func (e *exporting) choose(ctx context.Context) error {
	have, err := e.q.Journal.Benches(ctx)
	if err != nil {
		return err
	}
	if len(e.q.Benches) == 0 {
		e.q.Benches = have
	}
	for _, b := range e.q.Benches {
		if !slices.Contains(have, b) {
			if len(have) == 0 {
				return fmt.Errorf("--bench %s: the journal %s holds no bench yet", b, e.path)
			}
			return fmt.Errorf("--bench %s: the journal %s holds %s", b, e.path, andList(have))
		}
	}
	return nil
}

func andList(names []string) string { return strings.Replace(orList(names), " or ", " and ", 1) }

// find says what is missing from the span, and fails if that is all.
func (e *exporting) find(ctx context.Context, notes io.Writer) error {
	if e.what == whatEvents {
		return e.findEvents(ctx)
	}
	extent, other := e.q.Journal.Extent, e.q.Journal.MinutesExtent
	hint := "from %s to %s the seconds of %s were thinned to minutes: --what minutes has them"
	if e.what == whatMinutes {
		extent, other = other, extent
		hint = "from %s to %s there are the seconds of %s themselves: --what readings has them"
	}
	var said, empty []string
	for _, b := range e.q.Benches {
		_, _, ok, err := extent(ctx, b, e.q.From, e.q.To)
		if err != nil {
			return err
		}
		if !ok {
			empty = append(empty, b)
		}
		first, last, also, err := other(ctx, b, e.q.From, e.q.To)
		if err != nil {
			return err
		}
		if also && (e.what == whatReadings || !ok) {
			said = append(said, fmt.Sprintf(hint, first.Format(time.RFC3339), last.Format(time.RFC3339), b))
		}
	}
	if len(empty) == len(e.q.Benches) {
		return &exitError{code: exitNothing, msg: strings.Join(append([]string{e.nothing(ctx, empty)}, said...), "; ")}
	}
	if len(empty) > 0 {
		said = append(said, fmt.Sprintf("no %s of %s %s", e.what, orList(empty), e.span()))
	}
	for _, s := range said {
		fmt.Fprintf(notes, "offbeat export: note: %s\n", s)
	}
	return nil
}

func (e *exporting) findEvents(ctx context.Context) error {
	found := errors.New("found")
	err := e.q.Journal.EachEvent(ctx, e.q.From, e.q.To, func(ev journal.EventRow) error {
		if ev.Bench == "" || slices.Contains(e.q.Benches, ev.Bench) {
			return found
		}
		return nil
	})
	if err == nil {
		return &exitError{code: exitNothing, msg: fmt.Sprintf("the journal %s holds no events %s", e.path, e.span())}
	}
	if err == found {
		return nil
	}
	return err
}

// nothing says that the span is empty, and what there is.
func (e *exporting) nothing(ctx context.Context, benches []string) string {
	if len(benches) == 0 {
		return fmt.Sprintf("the journal %s holds no readings yet", e.path)
	}
	s := fmt.Sprintf("the journal %s holds no %s of %s", e.path, e.what, orList(benches))
	if e.from || e.to {
		s += " " + e.span()
	}
	extent := e.q.Journal.Extent
	if e.what == whatMinutes {
		extent = e.q.Journal.MinutesExtent
	}
	for _, b := range benches {
		first, last, ok, err := extent(ctx, b, time.Time{}, time.Date(9999, 1, 1, 0, 0, 0, 0, time.UTC))
		if err == nil && ok {
			s += fmt.Sprintf("; those of %s go from %s to %s", b, first.Format(time.RFC3339), last.Format(time.RFC3339))
		}
	}
	return s
}

// span words the span.
func (e *exporting) span() string {
	var parts []string
	if e.from {
		parts = append(parts, "from "+e.q.From.Format(time.RFC3339))
	}
	if e.to {
		parts = append(parts, "before "+e.q.To.Format(time.RFC3339))
	}
	if len(parts) == 0 {
		return "at all"
	}
	return strings.Join(parts, " and ")
}

// write writes the rows to where they are wanted.
func (e *exporting) write(ctx context.Context, stdout io.Writer) error {
	if e.out == "" {
		return outputError(e.rows(ctx, stdout))
	}
	return intoFile(e.out, e.force, func(w io.Writer) error { return outputError(e.rows(ctx, w)) })
}

func (e *exporting) rows(ctx context.Context, w io.Writer) (err error) {
	switch {
	case e.format == formatOpenMetrics:
		_, err = export.OpenMetrics(ctx, w, e.q, e.opt)
	case e.what == whatEvents:
		_, err = export.Events(ctx, w, e.q, export.Format(e.format))
	case e.what == whatMinutes:
		_, err = export.Minutes(ctx, w, e.q, export.Format(e.format))
	default:
		_, err = export.Readings(ctx, w, e.q, export.Format(e.format))
	}
	return err
}

// outputError words an error of the output; those of the journal and of the
// temporary file say themselves what they are.
func outputError(err error) error {
	var pe *os.PathError
	if errors.As(err, &pe) && pe.Op == "write" {
		return fmt.Errorf("writing the output: %w", err)
	}
	return err
}
