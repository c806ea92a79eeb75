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
	"time"

	"golang.org/x/term"

	"offbeat/capture"
	"offbeat/dsp"
)

var measureCommand = &command{
	name: "measure", short: "one recording or pipe: the beat, second by second, and a summary",
	run: measure,
	help: `Usage: offbeat measure [flags] FILE
       … | offbeat measure [flags] -

Reads a recording (WAV or FLAC) or raw samples from a file or a pipe, follows
the tones of the carrier and of the local oscillator, and says how far the local
is off: row by row, then in a summary with its uncertainty. Ctrl-C ends a pipe
and gives the summary of what was heard.

What is in the audio:
  --hookup two-tone     carrier and local as two tones of an SSB receiver (default)
           mixer        one tone at |local − carrier|: no sign
           quadrature   two channels, I and Q
  --sideband usb|lsb    the receiver's sideband (default usb); lsb on quadrature:
                        the rotation is reversed
  --carrier FREQ        nominal carrier (default 10MHz)
  --local FREQ          nominal local oscillator (default: carrier / harmonic)
  --harmonic N          the local's N-th harmonic is heard (default 1)
  --set-off FREQ        the local is tuned this much aside of the carrier on
                        purpose: 100Hz, -1kHz
  --local-tone HZ       roughly where the local's tone is at the start: tells
                        which of two tones it is
  --search LOW-HIGH     look for tones here only, in Hz: 800-1500
  --wired               the carrier is a house reference on a wire: it does not fade
  --channel N           channel of the input, from 1 (default 1; quadrature: 1,2)
  --sample-rate-error PPM
                        by how much the sample clock is fast, if it is known; else
                        it is found from second pulses, where there are any
  --sample-rate-error-u PPM
                        standard uncertainty of that

Raw samples, which have no header:
  --format s16le|s24le|s32le|f32le
  --rate N              samples a second, 10 to 1000000
  --channels N          interleaved channels (default 1)

What is printed:
  --json                one object a line: a reading for each second, then the
                        summary; what is not known is null
  --every N             a row of the table for every N seconds (default: about two
                        dozen rows in all)

Frequencies take Hz, kHz or MHz: 10e6, 10MHz, "10 MHz". Fractions take ppm or
ppb; a bare number is ppm.

Exit codes: 0 read to the end; 1 nothing usable, the summary says why; 2 bad
usage or unreadable input.
`,
}

// measuring is one run of measure: the listener of its only bench.
type measuring struct {
	set     settings
	out     *bufio.Writer
	json    bool
	every   int
	cancel  context.CancelFunc
	name    string
	live    *liveLine // nil: not on a terminal
	format  capture.Format
	summer  *dsp.Summer
	line    []byte // of the last reading, for its space
	table   *table
	failed  error // of the input
	written error // of the output
}

func measure(ctx context.Context, c *command, args []string, std stdio) error {
	m := &measuring{}
	f := newFlags(c.name)
	f.measurement(&m.set)
	f.BoolVar(&m.json, "json", false, "")
	quantity(f, &m.every, "every", parseCount)
	files, err := f.parse(args)
	if err != nil {
		return err
	}
	if err := m.input(files); err != nil {
		return err
	}
	if m.json && m.every > 0 {
		return errors.New("--every is for the table: --json prints every second")
	}
	m.out = bufio.NewWriterSize(std.out, 64<<10)
	if file, ok := std.out.(*os.File); ok && !m.json && term.IsTerminal(int(file.Fd())) {
		m.live = &liveLine{w: m.out}
	}
	ctx, m.cancel = interruptible(ctx)
	defer m.cancel()
	note, err := m.listen(ctx)
	if err != nil {
		return err
	}
	if note != "" {
		fmt.Fprintf(std.err, "offbeat measure: note: %s\n", oneLine(note))
	}
	return m.conclude(std.out)
}

// input makes the input of the only argument.
func (m *measuring) input(files []string) error {
	switch {
	case len(files) == 0:
		return errors.New("which recording? Give a FILE, or - for standard input")
	case len(files) > 1:
		return fmt.Errorf("one recording at a time: %s is one too many", quoted(files[1]))
	}
	m.set.Input.Kind, m.set.Input.Path, m.name = kindRecording, files[0], files[0]
	if files[0] == "-" {
		m.name = "standard input"
	}
	if bad := m.set.Input.check(); bad != nil {
		return bad.asFlag()
	}
	if bad := m.set.check(); bad != nil {
		return bad.asFlag()
	}
	return nil
}

// listen reads the input to its end.
func (m *measuring) listen(ctx context.Context) (note string, err error) {
	b := newBench(m.set, m, false)
	f := newFeed(m.set.Input, openWith(nil))
	f.add(b.ear)
	done := make(chan struct{})
	go func() {
		defer close(done)
		f.run(ctx)
	}()
	b.run(nil)
	<-done
	if m.written != nil {
		return f.note, fmt.Errorf("writing the output: %w", m.written)
	}
	if m.summer == nil && m.failed == nil {
		m.failed = fmt.Errorf("%s: nothing was read", m.name)
	}
	if m.summer == nil {
		return f.note, m.failed
	}
	return f.note, nil
}

// conclude prints the summary and chooses the exit code.
func (m *measuring) conclude(stdout io.Writer) error {
	sum := m.summer.Summary()
	usable := !math.IsNaN(float64(sum.BeatAbs))
	if m.json {
		m.encode(struct {
			Summary dsp.Summary `json:"summary"`
		}{sum})
	} else {
		m.live.clear()
		m.table.end(m.out)
		writeSummary(m.out, &sum, m.set.config(m.format.Rate))
	}
	if err := m.out.Flush(); err != nil {
		return fmt.Errorf("writing the output: %w", err)
	}
	switch {
	case m.failed != nil:
		return m.failed
	case !usable:
		return &exitError{code: exitNothing}
	}
	return nil
}

func (m *measuring) opened(f capture.Format, cfg dsp.Config) {
	if m.summer != nil {
		return
	}
	m.format = f
	m.summer = dsp.NewSummer(cfg)
	if m.json {
		return
	}
	seconds := 0.0
	if f.Frames > 0 {
		seconds = float64(f.Frames) / f.Rate
	}
	m.table = newTable(m.every, seconds)
	m.live.expect(seconds)
	writeHead(m.out, m.name, &m.set, f, cfg, seconds)
}

func (m *measuring) reading(_ time.Time, r dsp.Reading) {
	m.summer.Add(r)
	if m.json {
		m.line = append(r.AppendJSON(m.line[:0]), '\n')
		_, err := m.out.Write(m.line)
		m.check(err)
		return
	}
	if m.table.full(&r) {
		m.live.clear()
		m.table.row(m.out)
	}
	m.live.show(&r)
}

// encode writes one object on a line.
func (m *measuring) encode(v any) {
	line, err := json.Marshal(v)
	if err == nil {
		m.out.Write(line)
		err = m.out.WriteByte('\n')
	}
	m.check(err)
}

// check stops the work when nobody can read the output any more.
func (m *measuring) check(err error) {
	if err != nil && m.written == nil {
		m.written = err
		m.cancel()
	}
}

func (m *measuring) idle() { m.check(m.out.Flush()) }

func (m *measuring) trouble(err error) {
	if err != nil && m.failed == nil {
		m.failed = err
	}
	m.cancel()
}

func (m *measuring) samples(int, int)                      {}
func (m *measuring) gap(time.Time, capture.Cause, int64)   {}
func (m *measuring) glimpse(time.Time, dsp.Glimpse)        {}
func (m *measuring) back(at time.Time, gone time.Duration) {}
