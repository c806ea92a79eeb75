package main

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"math"
	"os"
	"os/signal"
	"path/filepath"
	"runtime"
	"strings"
	"sync"
	"syscall"
	"time"

	"offbeat/capture"
	"offbeat/dsp"
	"offbeat/metrics"
	"offbeat/metrics/journal"
	"offbeat/metrics/web"
)

var runCommand = &command{
	name: "run", short: "the daemon: benches, journal, metrics and the page",
	run: runDaemon,
	help: `Usage: offbeat run [flags]

Follows one bench or many, keeps every reading in the journal, and serves the
page, /metrics, /healthz and /readyz. Without a configuration and an input it
runs one simulated bench, to look around.

  --config FILE         the benches and everything else, in YAML
  --listen HOST:PORT    where the page and the metrics are (default 127.0.0.1:9471)
  --journal FILE        where readings are kept (default: the state directory of
                        the service, or of the user)
  --web-config FILE     TLS and passwords for the page
  --insecure            allow --listen beyond this machine without those

One bench without a configuration:
  --input sim           a simulated bench (the default)
          sound         the default sound card
          sound:NAME    the card with NAME in its name: offbeat inputs lists them
          pipe:PATH     samples from a FIFO
          FILE          a recording, played as if it were live
  --name NAME           what the bench is called (default: bench)

and what is in its audio, as for offbeat measure:
  --hookup two-tone|mixer|quadrature   --sideband usb|lsb   --carrier FREQ
  --local FREQ   --harmonic N   --set-off FREQ   --local-tone HZ
  --search LOW-HIGH   --wired   --channel N
  --sample-rate-error PPM   --sample-rate-error-u PPM
  --format s16le|s24le|s32le|f32le   --rate N   --channels N

Signals: SIGHUP reads the configuration again and keeps the old one if the new
is bad; SIGTERM and SIGINT end the daemon with everything written, a second one
at once. The log goes to standard error.
`,
}

// The bounds of an orderly end.
const (
	drainTime = 5 * time.Second // for the last readings
	flushTime = 8 * time.Second // for the journal
)

// daemon is one run of `offbeat run`.
type daemon struct {
	std    stdio
	log    *slog.Logger
	path   string // of the configuration; empty: none
	cfg    *config
	over   func(*config) // puts the flags over a configuration
	meters *metrics.Exporter
	book   *journal.Journal
	house  *house

	mu    sync.Mutex
	desks map[string]*desk
}

func runDaemon(ctx context.Context, c *command, args []string, std stdio) error {
	d := &daemon{std: std, desks: map[string]*desk{}}
	if err := d.configure(c, args); err != nil {
		return err
	}
	// Signals count from here on: one that comes while starting is not lost.
	signals := make(chan os.Signal, 4)
	signal.Notify(signals, syscall.SIGINT, syscall.SIGTERM, syscall.SIGHUP)
	defer signal.Stop(signals)

	d.log = slog.New(slog.NewTextHandler(std.err, nil))
	version, revision := buildVersion()
	d.meters = metrics.New(metrics.BuildInfo{Version: version, Revision: revision, GoVersion: runtime.Version()})
	server, err := web.Listen(web.Config{Listen: d.cfg.Listen, WebConfigFile: d.cfg.WebConfig, Insecure: d.cfg.Insecure, Log: d.log},
		web.Handlers{Metrics: d.meters.Handler(), Page: web.Page(d.meters, version), API: web.API(d), Health: d.health, Ready: d.ready})
	if err != nil {
		return err
	}
	if d.book, err = openBook(d.cfg, d.log); err != nil {
		server.Close()
		return err
	}
	d.meters.Journal(bookStats(d.book))
	serving, stopServing := context.WithCancel(context.Background())
	defer stopServing()
	served := make(chan error, 1)
	go func() { served <- server.Serve(serving) }()

	d.log.Info("start", "version", version, "revision", revision, "benches", len(d.cfg.Benches))
	d.book.Event("", time.Now(), journal.Start, "offbeat "+version, nil)
	houseCtx, stopHouse := context.WithCancel(context.Background())
	defer stopHouse()
	d.house = newHouse(houseCtx, openWith(d.log), d.log, d.engage, d.dismiss)
	d.house.apply(d.cfg.Benches)
	fmt.Fprintf(std.out, "page     %s/\nmetrics  %s/metrics\njournal  %s\n", server.URL(), server.URL(), d.cfg.Journal)

	err = d.attend(ctx, signals, served)
	signal.Stop(signals) // from here the next signal ends the process at once
	stopHouse()
	ended := d.end()
	stopServing()
	within(4*time.Second, func() { <-served })
	d.log.Info("ended")
	if err == nil {
		err = ended
	}
	return err
}

// configure makes the configuration of the flags and the file.
func (d *daemon) configure(c *command, args []string) error {
	f := newFlags(c.name)
	one := settings{Name: "bench", Input: inputSpec{Kind: kindSimulate, Sim: defaultSim}}
	var listen, book, webConfig string
	insecure := false
	f.measurement(&one)
	spec := one.Input
	quantity(f, &spec, "input", parseInput)
	quantity(f, &one.Name, "name", parseName)
	quantity(f, &d.path, "config", parseWords)
	quantity(f, &listen, "listen", parseAddress)
	quantity(f, &book, "journal", parseWords)
	quantity(f, &webConfig, "web-config", parseWords)
	f.BoolVar(&insecure, "insecure", false, "")
	files, err := f.parse(args)
	if err != nil {
		return err
	}
	if len(files) > 0 {
		return fmt.Errorf("%s: say --config FILE for a configuration or --input FILE for a recording", quoted(files[0]))
	}
	d.over = func(c *config) {
		if listen != "" {
			c.Listen = listen
		}
		if book != "" {
			c.Journal = book
		}
		if webConfig != "" {
			c.WebConfig = webConfig
		}
		c.Insecure = c.Insecure || insecure
	}
	if d.path == "" {
		spec.Encoding, spec.Channels = one.Input.Encoding, one.Input.Channels
		if one.Input.Rate != 0 {
			spec.Rate = one.Input.Rate
		}
		one.Input = spec
		if spec.Kind == kindSimulate && !f.given("local-tone") {
			one.LocalTone = demoLocalTone(&one)
		}
		if spec.Kind == kindSimulate && !f.given("name") {
			one.Name = "counter"
		}
		d.cfg, err = configOfOne(one)
	} else {
		for _, name := range f.seen {
			switch name {
			case "config", "listen", "journal", "web-config", "insecure":
			default:
				return fmt.Errorf("--%s describes a bench: with --config it stands in the file", name)
			}
		}
		if d.cfg, err = loadConfig(d.path); err != nil {
			err = &configError{err}
		}
	}
	if err != nil {
		return err
	}
	d.over(d.cfg)
	if err := d.cfg.checkListen(); err != nil {
		return fmt.Errorf("--listen: %w", err)
	}
	return nil
}

// configError says that the configuration file is at fault, not the usage.
type configError struct{ error }

// demoLocalTone tells the simulated bench which tone is the local's, as the user
// of a real one would.
func demoLocalTone(s *settings) float64 {
	tone, off := 1000.0, defaultSim.Offset+s.heard()-s.carrier()
	switch {
	case s.Hookup == dsp.Mixer || s.Hookup == dsp.Quadrature:
		return 0
	case s.Sideband == dsp.Lower:
		return tone - off
	}
	return tone + off
}

// configOfOne makes the configuration of a single bench described by flags.
func configOfOne(s settings) (*config, error) {
	if bad := s.Input.check(); bad != nil {
		return nil, bad.asFlag()
	}
	if bad := s.check(); bad != nil {
		return nil, bad.asFlag()
	}
	if s.Input.Kind == kindSimulate {
		s.Input.Sim.Rate = s.Input.Rate
		s.Input.Sim.follow(&s)
		if err := s.Input.Sim.check(); err != nil {
			return nil, err
		}
	}
	return &config{Listen: defaultListen, Benches: []settings{s}}, nil
}

// attend answers signals until the daemon is to end.
func (d *daemon) attend(ctx context.Context, signals <-chan os.Signal, served <-chan error) error {
	for {
		select {
		case <-ctx.Done():
			return nil
		case err := <-served:
			return err
		case s := <-signals:
			if s != syscall.SIGHUP {
				d.log.Info("ending", "signal", s.String())
				return nil
			}
			d.reload()
		}
	}
}

// reload reads the configuration again. A bad one changes nothing.
func (d *daemon) reload() {
	if d.path == "" {
		d.log.Warn("there is no configuration to read again: this daemon was started without --config")
		return
	}
	c, err := loadConfig(d.path)
	if err == nil {
		d.over(c)
		err = c.checkListen()
	}
	if err != nil {
		d.log.Error("the configuration is bad; the old one stays", "error", oneLine(err.Error()))
		d.meters.Reload(false)
		d.book.Event("", time.Now(), journal.Reload, "refused: "+oneLine(err.Error()), nil)
		return
	}
	if c.Journal == "" {
		c.Journal, _ = defaultJournal()
	}
	for what, changed := range map[string]bool{
		"listen": c.Listen != d.cfg.Listen, "web_config": c.WebConfig != d.cfg.WebConfig, "journal": c.Journal != d.cfg.Journal || c.ThinAfter != d.cfg.ThinAfter,
	} {
		if changed {
			d.log.Warn("this change needs a restart", "key", what)
		}
	}
	d.house.apply(c.Benches)
	d.cfg.Benches = c.Benches
	d.meters.Reload(true)
	d.log.Info("the configuration was read again", "benches", len(c.Benches))
	d.book.Event("", time.Now(), journal.Reload, fmt.Sprintf("%d benches", len(c.Benches)), nil)
}

// engage makes the listener of a bench.
func (d *daemon) engage(s settings) listener {
	cfg := s.config(48000)
	if cfg.Hookup == "" {
		cfg.Hookup = dsp.TwoTone
	}
	if cfg.Sideband == "" {
		cfg.Sideband = dsp.Upper
	}
	var causes []string
	for _, c := range capture.Causes {
		causes = append(causes, string(c))
	}
	k := &desk{name: s.Name, input: s.Input.String(), log: d.log.With("bench", s.Name), keep: d.book, errands: make(errands)}
	k.progress.Stage, k.progress.Left = dsp.NoStep, math.NaN()
	k.meter = d.meters.Bench(s.Name, metrics.BenchInfo{Hookup: string(cfg.Hookup), Sideband: string(cfg.Sideband),
		CarrierHz: cfg.Carrier, LocalHz: cfg.Local, Input: k.input}, causes...)
	d.book.Setup(s.Name, journal.Setup{Hookup: string(cfg.Hookup), Sideband: string(cfg.Sideband), CarrierHz: cfg.Carrier, LocalHz: cfg.Local, Input: k.input})
	d.mu.Lock()
	defer d.mu.Unlock()
	d.desks[s.Name] = k
	return k
}

func (d *daemon) dismiss(name string) {
	d.mu.Lock()
	delete(d.desks, name)
	d.mu.Unlock()
	d.meters.Remove(name)
}

// ready says which benches give no readings now, and why.
func (d *daemon) ready() (why []string) {
	d.mu.Lock()
	defer d.mu.Unlock()
	for _, name := range d.meters.Names() {
		if k := d.desks[name]; k != nil {
			if s := k.unready(time.Now()); s != "" {
				why = append(why, name+": "+s)
			}
		}
	}
	return why
}

// health says what is wrong with the daemon itself.
func (d *daemon) health() []string { return bookTrouble(d.book) }

// end waits, within bounds, for the last readings and for the journal.
func (d *daemon) end() error {
	if !within(drainTime, d.house.wait) {
		d.log.Error("a bench does not end; its last reading may be missing")
	}
	d.book.Event("", time.Now(), journal.Stop, "the daemon ended", nil)
	var err error
	if !within(flushTime, func() { err = d.book.Close() }) {
		err = errors.New("journal: it could not be written to the end in time")
	}
	if err != nil {
		return &exitError{exitNothing, err.Error()}
	}
	return nil
}

// within runs f and reports whether it returned in time.
func within(d time.Duration, f func()) bool {
	done := make(chan struct{})
	go func() { defer close(done); f() }()
	select {
	case <-done:
		return true
	case <-time.After(d):
		return false
	}
}

// defaultJournal returns the journal in the state directory of the service or
// of the user.
func defaultJournal() (string, error) {
	if dir := os.Getenv("STATE_DIRECTORY"); dir != "" {
		dir, _, _ = strings.Cut(dir, ":") // systemd lists several so
		return filepath.Join(dir, "offbeat.sqlite"), nil
	}
	if dir := os.Getenv("XDG_STATE_HOME"); filepath.IsAbs(dir) {
		return filepath.Join(dir, "offbeat", "offbeat.sqlite"), nil
	}
	home, err := os.UserHomeDir()
	if err != nil || home == "" {
		return "", errors.New("there is no home directory to keep the journal in: say --journal FILE")
	}
	return filepath.Join(home, ".local", "state", "offbeat", "offbeat.sqlite"), nil
}
