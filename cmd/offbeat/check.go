package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"math"
	"net/http"
	"os"
	"path/filepath"
	"time"

	"offbeat/capture"
	"offbeat/dsp"
	"offbeat/metrics/web"
)

var checkCommand = &command{
	name: "check", short: "configuration and inputs, before anything runs",
	run: check,
	help: `Usage: offbeat check [flags]

Takes the flags of offbeat run (see offbeat help run), reads the configuration,
opens every input for a moment, and looks whether the journal can be written and
the port is free. One line each: ok, or problem and what to do. Nothing is
recorded and nothing that runs is disturbed, but a FIFO or a card that another
program holds may be busy.

  --config FILE         the configuration to check

Exit codes: 0 all is well; 1 there is a problem; 2 bad usage.
`,
}

// listening is how long an input has to deliver samples.
const listening = 1500 * time.Millisecond

// checking prints findings.
type checking struct {
	w        io.Writer
	problems int
}

func (c *checking) ok(what, format string, args ...any) {
	fmt.Fprintf(c.w, "ok       %-14s %s\n", what, oneLine(fmt.Sprintf(format, args...)))
}

func (c *checking) problem(what string, err error) {
	c.problems++
	fmt.Fprintf(c.w, "problem  %-14s %s\n", what, oneLine(err.Error()))
}

func check(ctx context.Context, c *command, args []string, std stdio) error {
	ctx, cancel := interruptible(ctx)
	defer cancel()
	d := &daemon{std: std}
	k := &checking{w: std.out}
	err := d.configure(c, args)
	var bad *configError
	switch {
	case errors.As(err, &bad):
		k.problem("configuration", err)
		return k.result()
	case err != nil:
		return err
	case d.path != "":
		k.ok("configuration", "%s: %d benches", d.path, len(d.cfg.Benches))
	default:
		k.ok("configuration", "none; one bench from the flags")
	}
	k.inputs(ctx, d.cfg.Benches)
	k.journal(d.cfg.Journal)
	server, err := web.Listen(web.Config{Listen: d.cfg.Listen, WebConfigFile: d.cfg.WebConfig, Insecure: d.cfg.Insecure}, web.Handlers{Metrics: http.NotFoundHandler()})
	if err != nil {
		k.problem("page", err)
	} else {
		server.Close()
		k.ok("page", "%s is free", d.cfg.Listen)
	}
	return k.result()
}

func (k *checking) result() error {
	if k.problems > 0 {
		return &exitError{code: exitNothing}
	}
	return nil
}

// inputs opens every input once, for the channels of all its benches.
func (k *checking) inputs(ctx context.Context, benches []settings) {
	var order []inputSpec
	channels := map[inputSpec][]int{}
	names := map[inputSpec]string{}
	for i := range benches {
		b := &benches[i]
		if channels[b.Input] == nil {
			order = append(order, b.Input)
			names[b.Input] = b.Name
		} else {
			names[b.Input] += ", " + b.Name
		}
		channels[b.Input] = union(channels[b.Input], b.channels())
	}
	for _, in := range order {
		format, level, err := k.input(ctx, in, channels[in])
		if err == nil {
			err = suits(benches, in, format.Rate)
		}
		switch {
		case err != nil:
			k.problem("input", fmt.Errorf("%s: %w", names[in], err))
		case math.IsNaN(level):
			k.ok("input", "%s: %s, %s: open, but nothing arrives yet", names[in], in.String(), hertz(format.Rate))
		default:
			k.ok("input", "%s: %s, %s, %s, level %.0f dBFS", names[in], in.String(), format.Encoding, hertz(format.Rate), level)
		}
	}
}

// suits asks the signal processing whether it can work at the input's rate.
func suits(benches []settings, in inputSpec, rate float64) error {
	for i := range benches {
		if benches[i].Input == in {
			if _, err := dsp.New(benches[i].config(rate)); err != nil {
				return err
			}
		}
	}
	return nil
}

// input listens for a moment. The level is NaN if no sample came.
func (k *checking) input(ctx context.Context, in inputSpec, channels []int) (capture.Format, float64, error) {
	in.Play = false
	f := newFeed(in, openWith(nil))
	src, err := f.openOne(ctx, channels)
	if err != nil {
		return capture.Format{}, 0, err
	}
	defer src.Close()
	format := src.Format()
	sum, n := 0.0, 0
	var b capture.Block
	for end := time.Now().Add(listening); ctx.Err() == nil && time.Now().Before(end) && float64(n) < format.Rate/2; {
		err := src.Read(&b)
		if err == io.EOF {
			break
		}
		if err != nil {
			return format, 0, err
		}
		for _, v := range b.Ch[0] {
			sum += float64(v) * float64(v)
		}
		n += b.Len()
	}
	if n == 0 && in.Kind == kindRecording {
		return format, 0, fmt.Errorf("%s: holds no samples", &in)
	}
	if n == 0 {
		return format, math.NaN(), nil
	}
	return format, 10 * math.Log10(max(2*sum/float64(n), 1e-12)), nil
}

// journal looks whether the journal could be written, without making it.
func (k *checking) journal(path string) {
	if path == "" {
		var err error
		if path, err = defaultJournal(); err != nil {
			k.problem("journal", err)
			return
		}
	}
	if err := writable(path); err != nil {
		k.problem("journal", err)
		return
	}
	k.ok("journal", "%s can be written", path)
}

// writable reports why a file could not be written. A directory that is missing
// would be made, so the nearest one that is there counts.
func writable(path string) error {
	info, err := os.Stat(path)
	switch {
	case err == nil && info.IsDir():
		return fmt.Errorf("%s: a directory: name a file in it", path)
	case err == nil:
		f, err := os.OpenFile(path, os.O_RDWR, 0)
		if err != nil {
			return err
		}
		return f.Close()
	case !errors.Is(err, fs.ErrNotExist):
		return err
	}
	dir, err := filepath.Abs(filepath.Dir(path))
	if err != nil {
		return err
	}
	for {
		if _, err = os.Stat(dir); err == nil || !errors.Is(err, fs.ErrNotExist) || dir == filepath.Dir(dir) {
			break
		}
		dir = filepath.Dir(dir)
	}
	if err != nil {
		return err
	}
	probe, err := os.CreateTemp(dir, ".offbeat-check-*")
	if err != nil {
		return fmt.Errorf("%s: its directory cannot be written: %w", path, err)
	}
	probe.Close()
	return os.Remove(probe.Name())
}
