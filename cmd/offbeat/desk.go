package main

import (
	"fmt"
	"log/slog"
	"sync"
	"time"

	"offbeat/capture"
	"offbeat/dsp"
	"offbeat/metrics"
	"offbeat/metrics/journal"
)

// inputKind is the kind of events about an input: it listens, failed, ended.
const inputKind = "input"

// keeper is where a desk writes down what must not be lost.
type keeper interface {
	Append(bench string, at time.Time, r dsp.Reading)
	Event(bench string, at time.Time, kind, text string, data any)
}

// desk is the listener of one bench of the daemon: it passes readings on to the
// journal and the metrics, and complaints to the log, each once.
type desk struct {
	name  string
	input string
	log   *slog.Logger
	keep  keeper
	meter *metrics.Bench

	// Of the bench's goroutine:
	lost    map[capture.Cause]int64 // since the latest reading
	stalled bool
	missing int64 // since it stalled
	rate    float64
	runBase int // added to the numbers of phase runs in the journal
	lastRun int

	errands errands // to the bench's goroutine

	mu       sync.Mutex
	progress dsp.Progress // of the guided step
	failing  string       // why no samples come; empty: they do, or may
	since    time.Time
	ended    bool
	readAt   time.Time // host time of the latest reading
}

func (d *desk) opened(f capture.Format, cfg dsp.Config) {
	d.rate = f.Rate
	d.log.Info("listening", "input", d.input, "format", f.Encoding, "rate", f.Rate)
	// Runs of phase of one opening must not seem to go on from another.
	d.runBase = max(int(time.Now().Unix()), d.lastRun+1)
	d.event(time.Now(), inputKind, fmt.Sprintf("%s, %s, %s", d.input, f.Encoding, hertz(f.Rate)))
	d.status("", false)
}

func (d *desk) samples(n, nonFinite int) { d.meter.Samples(n, nonFinite) }

// gap counts what is missing. It goes on the time line once a second at most,
// and an outage only when it begins and ends.
func (d *desk) gap(at time.Time, cause capture.Cause, n int64) {
	if cause == capture.Stalled {
		d.missing += n
		if !d.stalled {
			d.stalled = true
			d.log.Warn("no samples arrive", "input", d.input)
			d.event(at, journal.Gap, "no samples arrive from "+d.input)
		}
		return
	}
	d.meter.Gap(string(cause), n)
	if d.lost == nil {
		d.lost = map[capture.Cause]int64{}
	}
	d.lost[cause] += n
}

func (d *desk) reading(at time.Time, r dsp.Reading) {
	d.meter.Reading(r)
	r.PhaseRun += d.runBase
	d.lastRun = r.PhaseRun
	d.keep.Append(d.name, at, r)
	d.noteGaps(at)
	d.mu.Lock()
	d.readAt = time.Now()
	d.mu.Unlock()
}

// noteGaps puts the gaps since the last reading on the time line.
func (d *desk) noteGaps(at time.Time) {
	for _, cause := range capture.Causes {
		if n := d.lost[cause]; n > 0 {
			text := fmt.Sprintf("%d samples lost (%s)", n, length(float64(n)/d.rate))
			d.log.Warn("samples lost", "cause", cause, "samples", n)
			d.keep.Event(d.name, at, journal.Gap, string(cause)+": "+text, map[string]any{"cause": cause, "samples": n})
		}
	}
	clear(d.lost)
}

func (d *desk) back(at time.Time, missing time.Duration) {
	d.meter.Gap(string(capture.Stalled), d.missing) // one gap, however long
	d.stalled, d.missing = false, 0
	d.log.Info("samples arrive again", "input", d.input, "missing", missing.Round(10*time.Millisecond))
	d.event(at, journal.Gap, fmt.Sprintf("samples arrive again after about %s", length(missing.Seconds()+patience.Seconds())))
	d.status("", false)
}

// trouble says once what is wrong with the input, not at every attempt.
func (d *desk) trouble(err error) {
	d.noteGaps(time.Now())
	if err == nil {
		d.log.Info("the input has ended", "input", d.input)
		d.event(time.Now(), inputKind, d.input+" has ended")
		d.status("", true)
		return
	}
	d.mu.Lock()
	known := d.failing == err.Error()
	d.mu.Unlock()
	if known {
		return
	}
	d.log.Error("the input failed", "error", oneLine(err.Error()))
	d.event(time.Now(), inputKind, "failed: "+oneLine(err.Error()))
	d.status(oneLine(err.Error()), false)
}

func (d *desk) glimpse(time.Time, dsp.Glimpse) {}
func (d *desk) idle()                          {}

func (d *desk) event(at time.Time, kind, text string) { d.keep.Event(d.name, at, kind, text, nil) }

func (d *desk) status(failing string, ended bool) {
	d.mu.Lock()
	defer d.mu.Unlock()
	d.failing, d.ended, d.since = failing, ended, time.Now()
}

// unready says why the bench gives no readings now; empty: it does, or its
// recording has been read to its end.
func (d *desk) unready(now time.Time) string {
	d.mu.Lock()
	defer d.mu.Unlock()
	switch {
	case d.ended:
		return ""
	case d.failing != "":
		return d.failing
	case d.readAt.IsZero():
		return "no reading yet from " + d.input
	case now.Sub(d.readAt) > metrics.StaleAfter:
		return fmt.Sprintf("no reading for %s from %s", length(now.Sub(d.readAt).Truncate(time.Second).Seconds()), d.input)
	}
	return ""
}
