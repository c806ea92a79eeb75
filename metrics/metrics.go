// Package metrics exposes readings to Prometheus. A value that is not known now
// is absent from the exposition, never stale: gauges are made afresh from the
// last reading at every scrape, and a bench that has given no reading for a few
// seconds gives no value.
//
// All metrics begin with offbeat_ and use base units (hertz, seconds, ratios).
// Everything here is safe for concurrent use.
package metrics

import (
	"math"
	"net/http"
	"slices"
	"sync"
	"time"

	"github.com/prometheus/client_golang/prometheus"
	"github.com/prometheus/client_golang/prometheus/collectors"
	"github.com/prometheus/client_golang/prometheus/promhttp"

	"offbeat/dsp"
	"offbeat/dsp/stability"
)

// BuildInfo says which program this is.
type BuildInfo struct {
	Version, Revision, GoVersion string
}

// BenchInfo says what a bench compares.
type BenchInfo struct {
	Hookup, Sideband   string
	CarrierHz, LocalHz float64 // nominal, the local as heard
	Input              string
}

// JournalStats is what the journal says of itself. Times may be zero.
type JournalStats struct {
	Committed  int64 // rows that are safe on disk
	Pending    int64 // rows that wait in memory
	Dropped    int64 // rows given up because too many waited
	Errors     int64 // failed attempts to write
	Bytes      int64 // size of the file with its log
	LastCommit time.Time
}

// StaleAfter is how long a reading stands for now. Readings come once a second.
const StaleAfter = 5 * time.Second

// Exporter holds the metrics of one daemon in a registry of its own.
type Exporter struct {
	reg     *prometheus.Registry
	now     func() time.Time
	mu      sync.Mutex
	benches map[string]*Bench
	journal func() JournalStats
	reload  struct {
		any, ok bool
		at      time.Time
	}
}

// New returns an Exporter with the build's own metrics and those of the Go
// runtime and of the process.
func New(build BuildInfo) *Exporter {
	e := newExporter(build, time.Now)
	e.reg.MustRegister(collectors.NewGoCollector(), collectors.NewProcessCollector(collectors.ProcessCollectorOpts{}))
	return e
}

func newExporter(build BuildInfo, now func() time.Time) *Exporter {
	e := &Exporter{reg: prometheus.NewRegistry(), now: now, benches: map[string]*Bench{}}
	info := prometheus.NewGauge(prometheus.GaugeOpts{Name: "offbeat_build_info", Help: "Always 1; which program this is.",
		ConstLabels: prometheus.Labels{"version": build.Version, "revision": build.Revision, "goversion": build.GoVersion}})
	info.Set(1)
	e.reg.MustRegister(info, e)
	return e
}

// Bench is the metrics of one bench.
type Bench struct {
	info BenchInfo
	now  func() time.Time

	mu        sync.Mutex
	last      dsp.Reading
	at        time.Time // when last came, monotonic
	readings  map[dsp.State]float64
	flagged   map[dsp.Flag]float64
	samples   float64
	lost      float64
	nonFinite float64
	clipped   float64
	breaks    float64
	gaps      map[string]float64
	run       int
	allan     *allan
}

// Bench adds a bench, or returns the one of that name with new particulars.
// causes are the causes of gaps to show from the start, at 0.
func (e *Exporter) Bench(name string, info BenchInfo, causes ...string) *Bench {
	e.mu.Lock()
	defer e.mu.Unlock()
	b := e.benches[name]
	if b == nil {
		b = &Bench{now: e.now, readings: map[dsp.State]float64{}, flagged: map[dsp.Flag]float64{}, gaps: map[string]float64{}}
		e.benches[name] = b
	}
	b.mu.Lock()
	defer b.mu.Unlock()
	if b.allan == nil || info.CarrierHz != b.info.CarrierHz || info.LocalHz != b.info.LocalHz {
		b.allan = newAllan(info.LocalHz)
	}
	b.info = info
	for _, c := range causes {
		b.gaps[c] += 0
	}
	return b
}

// Remove takes a bench and all its metrics away.
func (e *Exporter) Remove(name string) {
	e.mu.Lock()
	defer e.mu.Unlock()
	delete(e.benches, name)
}

// Reload tells how a reading of the configuration went.
func (e *Exporter) Reload(ok bool) {
	e.mu.Lock()
	defer e.mu.Unlock()
	e.reload.any, e.reload.ok = true, ok
	if ok {
		e.reload.at = e.now()
	}
}

// Journal makes f the source of the journal's metrics. f is called at every
// scrape, from any goroutine.
func (e *Exporter) Journal(f func() JournalStats) {
	e.mu.Lock()
	defer e.mu.Unlock()
	e.journal = f
}

// Handler serves the metrics, as OpenMetrics to who asks for it.
func (e *Exporter) Handler() http.Handler {
	return promhttp.HandlerFor(e.reg, promhttp.HandlerOpts{EnableOpenMetrics: true, MaxRequestsInFlight: 8, Timeout: 10 * time.Second})
}

// Reading takes the reading of a second.
func (b *Bench) Reading(r dsp.Reading) {
	b.mu.Lock()
	defer b.mu.Unlock()
	b.last, b.at = r, b.now()
	b.last.Flags = append([]dsp.Flag(nil), r.Flags...)
	b.readings[r.State]++
	for _, f := range r.Flags {
		b.flagged[f]++
	}
	b.clipped += float64(r.Clipped)
	if r.PhaseRun > b.run {
		b.breaks += float64(r.PhaseRun - b.run)
	}
	b.run = r.PhaseRun
	b.allan.add(&r)
}

// Stability returns what the bench's readings so far say of its stability, one
// for each octave of tau; the limits are for 68 %.
func (b *Bench) Stability() []stability.State {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.allan.r.States(nil, oneSigma)
}

// Samples counts n samples that arrived, nonFinite of them unusable.
func (b *Bench) Samples(n, nonFinite int) {
	b.mu.Lock()
	b.samples += float64(n)
	b.nonFinite += float64(nonFinite)
	b.mu.Unlock()
}

// Gap counts a gap of n samples.
func (b *Bench) Gap(cause string, n int64) {
	b.mu.Lock()
	b.gaps[cause]++
	b.lost += float64(n)
	b.mu.Unlock()
}

// Last returns the last reading and how long ago it came; false if none did.
func (b *Bench) Last() (r dsp.Reading, age time.Duration, ok bool) {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.last, b.now().Sub(b.at), !b.at.IsZero()
}

// Info returns what the bench compares.
func (b *Bench) Info() BenchInfo {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.info
}

// Names returns the names of the benches, sorted.
func (e *Exporter) Names() []string {
	e.mu.Lock()
	defer e.mu.Unlock()
	var names []string
	for n := range e.benches {
		names = append(names, n)
	}
	slices.Sort(names)
	return names
}

// Of returns the bench of that name, or nil.
func (e *Exporter) Of(name string) *Bench {
	e.mu.Lock()
	defer e.mu.Unlock()
	return e.benches[name]
}

func known(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }
