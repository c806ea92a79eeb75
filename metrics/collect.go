package metrics

import (
	"strconv"

	"github.com/prometheus/client_golang/prometheus"

	"offbeat/dsp"
)

// metric is a description that still knows what it was made of.
type metric struct {
	*prometheus.Desc
	name, help string
	labels     []string
}

func desc(name, help string, labels ...string) metric {
	name = "offbeat_" + name
	return metric{prometheus.NewDesc(name, help, labels, nil), name, help, labels}
}

// gauges are the values of a reading. Each is absent while it is not known.
var gauges = []struct {
	desc metric
	tone string // label value, or none
	of   func(r *dsp.Reading) float64
}{
	{desc("beat_hertz", "Local minus carrier at radio frequency; positive: the local is high.", "bench"), "", func(r *dsp.Reading) float64 { return r.Beat }},
	{desc("beat_abs_hertz", "Size of the beat, known also where its sign is not.", "bench"), "", func(r *dsp.Reading) float64 { return r.BeatAbs }},
	{desc("beat_within_hertz", "What a beat too slow to be measured yet is known to stay below.", "bench"), "", func(r *dsp.Reading) float64 { return r.BeatWithin }},
	{desc("beat_uncertainty_hertz", "Standard uncertainty of the beat as received in its span.", "bench"), "", func(r *dsp.Reading) float64 { return r.BeatU }},
	{desc("error_hertz", "Beat minus the declared set-off: what has to be trimmed away.", "bench"), "", func(r *dsp.Reading) float64 { return r.Error }},
	{desc("offset_ratio", "Error over the local's frequency: the fractional frequency offset.", "bench"), "", func(r *dsp.Reading) float64 { return r.Offset }},
	{desc("offset_uncertainty_ratio", "Standard uncertainty of the offset as received in its span.", "bench"), "", func(r *dsp.Reading) float64 { return r.OffsetU }},
	{toneFrequency, "carrier", func(r *dsp.Reading) float64 { return r.CarrierTone }},
	{toneFrequency, "local", func(r *dsp.Reading) float64 { return r.LocalTone }},
	{toneLevel, "carrier", func(r *dsp.Reading) float64 { return r.CarrierDBFS }},
	{toneLevel, "local", func(r *dsp.Reading) float64 { return r.LocalDBFS }},
	{toneCN0, "carrier", func(r *dsp.Reading) float64 { return r.CarrierCN0 }},
	{toneCN0, "local", func(r *dsp.Reading) float64 { return r.LocalCN0 }},
	{desc("doppler_spread_hertz", "Root-mean-square Doppler width of the carrier.", "bench"), "", func(r *dsp.Reading) float64 { return r.SpreadHz }},
	{desc("span_seconds", "How much sound the beat rests on.", "bench"), "", func(r *dsp.Reading) float64 { return r.Span }},
	{desc("sample_clock_error_ratio", "By how much the sample clock was found to be fast, a fraction.", "bench"), "", func(r *dsp.Reading) float64 { return r.ClockError }},
	{desc("sample_clock_error_uncertainty_ratio", "Standard uncertainty of the sample clock's error.", "bench"), "", func(r *dsp.Reading) float64 { return r.ClockErrorU }},
	{desc("input_level_dbfs", "Root-mean-square level of the input, in decibels of a full-scale sine.", "bench"), "", func(r *dsp.Reading) float64 { return r.InputDBFS }},
}

var (
	toneFrequency = desc("tone_frequency_hertz", "Frequency of a tone in the audio.", "bench", "tone")
	toneLevel     = desc("tone_level_dbfs", "Level of a tone, in decibels of a full-scale sine.", "bench", "tone")
	toneCN0       = desc("tone_carrier_to_noise_density_dbhz", "Power of a tone over the noise power in one hertz, in dB-Hz.", "bench", "tone")

	descUp       = desc("bench_up", "1 while the bench gives a reading a second; 0: its values are absent.", "bench")
	descInfo     = desc("bench_info", "Always 1; what the bench compares.", "bench", "hookup", "sideband", "input", "carrier_hertz", "local_hertz")
	descState    = desc("state", "1 for the state of the last reading, 0 for the others.", "bench", "state")
	descFlag     = desc("flag", "1 for each reason to trust the last reading less.", "bench", "flag")
	descLast     = desc("last_reading_timestamp_seconds", "When the last reading came, seconds since 1970.", "bench")
	descReadings = desc("readings_total", "Readings by state.", "bench", "state")
	descFlagged  = desc("flagged_readings_total", "Readings by flag.", "bench", "flag")
	descSamples  = desc("samples_total", "Samples that arrived.", "bench")
	descLost     = desc("lost_samples_total", "Samples that are missing from the time line.", "bench")
	descGaps     = desc("gaps_total", "Gaps by cause.", "bench", "cause")
	descClipped  = desc("clipped_samples_total", "Samples at or beyond full scale.", "bench")
	descBad      = desc("nonfinite_samples_total", "Samples that were not a number or infinite, taken as 0.", "bench")
	descAllan    = desc("allan_deviation_ratio", "Overlapping Allan deviation of the offset at averaging time tau, seconds, since the bench began to listen.", "bench", "tau")
	descAllanLow = desc("allan_deviation_low_ratio", "Lower 68 % confidence limit of the Allan deviation.", "bench", "tau")
	descAllanTop = desc("allan_deviation_high_ratio", "Upper 68 % confidence limit of the Allan deviation.", "bench", "tau")
	descBreaks   = desc("phase_breaks_total", "How often the count of the beat's cycles lost continuity.", "bench")

	descCommitted  = desc("journal_committed_rows_total", "Rows of the journal that are safe on disk.")
	descPending    = desc("journal_pending_rows", "Rows that wait in memory to be written.")
	descDropped    = desc("journal_dropped_rows_total", "Rows given up because too many waited.")
	descJErrors    = desc("journal_errors_total", "Failed attempts to write the journal.")
	descBytes      = desc("journal_size_bytes", "Size of the journal with its write-ahead log.")
	descLastCommit = desc("journal_last_commit_timestamp_seconds", "When the journal last committed, seconds since 1970.")

	descReloadOK = desc("config_last_reload_successful", "1 if the last reading of the configuration succeeded, else 0.")
	descReloadAt = desc("config_last_reload_success_timestamp_seconds", "When the configuration was last read successfully, seconds since 1970.")
)

// Describe implements prometheus.Collector.
func (e *Exporter) Describe(ch chan<- *prometheus.Desc) {
	for _, g := range gauges {
		ch <- g.desc.Desc
	}
	for _, d := range []metric{descUp, descInfo, descState, descFlag, descLast, descReadings, descFlagged, descSamples, descLost,
		descGaps, descClipped, descBad, descBreaks, descAllan, descAllanLow, descAllanTop, descCommitted, descPending, descDropped, descJErrors, descBytes, descLastCommit,
		descReloadOK, descReloadAt} {
		ch <- d.Desc
	}
}

// Collect implements prometheus.Collector.
func (e *Exporter) Collect(ch chan<- prometheus.Metric) {
	for _, name := range e.Names() {
		if b := e.Of(name); b != nil {
			b.collect(ch, name)
		}
	}
	e.mu.Lock()
	journal, reload := e.journal, e.reload
	e.mu.Unlock()
	if journal != nil {
		s := journal()
		counter(ch, descCommitted, float64(s.Committed))
		gauge(ch, descPending, float64(s.Pending))
		counter(ch, descDropped, float64(s.Dropped))
		counter(ch, descJErrors, float64(s.Errors))
		gauge(ch, descBytes, float64(s.Bytes))
		if !s.LastCommit.IsZero() {
			gauge(ch, descLastCommit, float64(s.LastCommit.UnixMilli())/1e3)
		}
	}
	if reload.any {
		gauge(ch, descReloadOK, one(reload.ok))
		if !reload.at.IsZero() {
			gauge(ch, descReloadAt, float64(reload.at.UnixMilli())/1e3)
		}
	}
}

func (b *Bench) collect(ch chan<- prometheus.Metric, name string) {
	b.mu.Lock()
	defer b.mu.Unlock()
	gauge(ch, descInfo, 1, append([]string{name}, b.info.values()...)...)
	up := !b.at.IsZero() && b.now().Sub(b.at) < StaleAfter
	gauge(ch, descUp, one(up), name)
	if !b.at.IsZero() {
		gauge(ch, descLast, float64(b.at.UnixMilli())/1e3, name)
	}
	if up {
		for _, g := range gauges {
			if v := g.of(&b.last); known(v) {
				if g.tone == "" {
					gauge(ch, g.desc, v, name)
				} else {
					gauge(ch, g.desc, v, name, g.tone)
				}
			}
		}
		for _, s := range dsp.States {
			gauge(ch, descState, one(s == b.last.State), name, string(s))
		}
		for _, f := range dsp.Flags {
			gauge(ch, descFlag, one(b.last.Has(f)), name, string(f))
		}
	}
	for _, s := range dsp.States {
		counter(ch, descReadings, b.readings[s], name, string(s))
	}
	for _, f := range dsp.Flags {
		counter(ch, descFlagged, b.flagged[f], name, string(f))
	}
	for c, n := range b.gaps {
		counter(ch, descGaps, n, name, c)
	}
	counter(ch, descSamples, b.samples, name)
	counter(ch, descLost, b.lost, name)
	counter(ch, descClipped, b.clipped, name)
	counter(ch, descBad, b.nonFinite, name)
	counter(ch, descBreaks, b.breaks, name)
	for _, s := range b.allan.r.States(nil, oneSigma) {
		tau := plain(s.Tau)
		gauge(ch, descAllan, s.Dev, name, tau)
		if known(s.Low) && known(s.High) {
			gauge(ch, descAllanLow, s.Low, name, tau)
			gauge(ch, descAllanTop, s.High, name, tau)
		}
	}
}

func gauge(ch chan<- prometheus.Metric, d metric, v float64, labels ...string) {
	ch <- prometheus.MustNewConstMetric(d.Desc, prometheus.GaugeValue, v, labels...)
}

func counter(ch chan<- prometheus.Metric, d metric, v float64, labels ...string) {
	ch <- prometheus.MustNewConstMetric(d.Desc, prometheus.CounterValue, v, labels...)
}

func one(b bool) float64 {
	if b {
		return 1
	}
	return 0
}

// values are those of descInfo's labels beside bench.
func (i BenchInfo) values() []string {
	return []string{i.Hookup, i.Sideband, i.Input, plain(i.CarrierHz), plain(i.LocalHz)}
}

func plain(hz float64) string { return strconv.FormatFloat(hz, 'f', -1, 64) }
