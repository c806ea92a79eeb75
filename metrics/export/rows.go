package export

import (
	"context"
	"encoding/json"
	"fmt"
	"io"
	"strings"
	"time"

	"offbeat/dsp"
	"offbeat/metrics/journal"
)

// readingColumns are the header of readings as CSV: the keys of a reading's
// JSON, with the unit of t.
var readingColumns = []string{"time", "bench", "t_s", "state", "beat_hz", "beat_u_hz", "beat_abs_hz", "error_hz", "offset", "offset_u",
	"carrier_tone_hz", "local_tone_hz", "carrier_dbfs", "local_dbfs", "carrier_cn0_dbhz", "local_cn0_dbhz", "spread_hz", "span_s",
	"phase_cycles", "phase_run", "input_dbfs", "clipped_samples", "flags"}

// Readings writes the readings bench by bench, each in order of time, and
// returns how many. A line of JSON has the keys of a reading, and "time" (the
// middle of its second) and "bench" before them.
func Readings(ctx context.Context, w io.Writer, q Query, f Format) (int64, error) {
	l := newLines(w)
	if f == CSV {
		l.header(readingColumns...)
	}
	return l.done(q.benches(func(bench string) error {
		name, err := json.Marshal(bench)
		if err != nil {
			return err
		}
		return q.Journal.Readings(ctx, bench, q.From, q.To, func(row journal.Row) error {
			if f == CSV {
				l.reading(bench, &row)
				return l.end("\r\n")
			}
			l.buf = append(l.buf, `{"time":"`...)
			l.buf = row.At.UTC().AppendFormat(l.buf, TimeLayout)
			l.buf = append(l.buf, `","bench":`...)
			l.buf = append(append(l.buf, name...), ',')
			brace := len(l.buf)
			l.buf = row.Reading.AppendJSON(l.buf)
			l.buf = append(l.buf[:brace], l.buf[brace+1:]...) // its { is there already
			return l.end("\n")
		})
	}))
}

func (l *lines) reading(bench string, row *journal.Row) {
	r := &row.Reading
	l.time(row.At)
	l.text(bench)
	l.numbers(r.T)
	l.text(string(r.State))
	l.numbers(r.Beat, r.BeatU, r.BeatAbs, r.Error, r.Offset, r.OffsetU, r.CarrierTone, r.LocalTone,
		r.CarrierDBFS, r.LocalDBFS, r.CarrierCN0, r.LocalCN0, r.SpreadHz, r.Span, r.Phase)
	l.counts(r.PhaseRun)
	l.numbers(r.InputDBFS)
	l.counts(r.Clipped)
	l.next()
	for i, flag := range r.Flags {
		if i > 0 {
			l.buf = append(l.buf, ' ')
		}
		l.buf = append(l.buf, flag...)
	}
}

// minuteJSON is a minute as a line of JSON. Frequencies, levels and C/N0 are
// means of its seconds; carrier_hz and local_hz are nominal.
type minuteJSON struct {
	Time         string         `json:"time"`
	Bench        string         `json:"bench"`
	Seconds      int            `json:"seconds"`
	Usable       int            `json:"usable_seconds"`
	Carrier      dsp.Num        `json:"carrier_hz"`
	Local        dsp.Num        `json:"local_hz"`
	Beat         dsp.Num        `json:"beat_hz"`
	BeatMin      dsp.Num        `json:"beat_min_hz"`
	BeatMax      dsp.Num        `json:"beat_max_hz"`
	BeatAbs      dsp.Num        `json:"beat_abs_hz"`
	BeatU        dsp.Num        `json:"beat_u_hz"`
	CarrierTone  dsp.Num        `json:"carrier_tone_hz"`
	LocalTone    dsp.Num        `json:"local_tone_hz"`
	CarrierDBFS  dsp.Num        `json:"carrier_dbfs"`
	LocalDBFS    dsp.Num        `json:"local_dbfs"`
	CarrierCN0   dsp.Num        `json:"carrier_cn0_dbhz"`
	LocalCN0     dsp.Num        `json:"local_cn0_dbhz"`
	SpreadHz     dsp.Num        `json:"spread_hz"`
	InputDBFS    dsp.Num        `json:"input_dbfs"`
	FirstPhase   dsp.Num        `json:"first_phase_cycles"`
	FirstPhaseAt *string        `json:"first_phase_time"`
	LastPhase    dsp.Num        `json:"last_phase_cycles"`
	LastPhaseAt  *string        `json:"last_phase_time"`
	FirstRun     int            `json:"first_phase_run"`
	LastRun      int            `json:"last_phase_run"`
	Clipped      int            `json:"clipped_samples"`
	States       map[string]int `json:"state_seconds"`
	Flags        map[string]int `json:"flag_seconds"`
}

var minuteColumns = []string{"time", "bench", "seconds", "usable_seconds", "carrier_hz", "local_hz", "beat_hz", "beat_min_hz", "beat_max_hz",
	"beat_abs_hz", "beat_u_hz", "carrier_tone_hz", "local_tone_hz", "carrier_dbfs", "local_dbfs", "carrier_cn0_dbhz", "local_cn0_dbhz",
	"spread_hz", "input_dbfs", "first_phase_cycles", "first_phase_time", "last_phase_cycles", "last_phase_time", "first_phase_run",
	"last_phase_run", "clipped_samples", "state_seconds", "flag_seconds"}

// Minutes writes the minutes into which old readings were thinned, bench by
// bench, each in order of time, and returns how many.
func Minutes(ctx context.Context, w io.Writer, q Query, f Format) (int64, error) {
	l := newLines(w)
	if f == CSV {
		l.header(minuteColumns...)
	}
	return l.done(q.benches(func(bench string) error {
		return q.Journal.Minutes(ctx, bench, q.From, q.To, func(m journal.Minute) error {
			if f == CSV {
				l.minute(bench, &m)
				return l.end("\r\n")
			}
			n := func(v float64) dsp.Num { return dsp.Num(v) }
			return l.object(minuteJSON{m.At.UTC().Format(TimeLayout), bench, m.Seconds, m.Usable, n(m.Setup.CarrierHz), n(m.Setup.LocalHz),
				n(m.Beat), n(m.BeatMin), n(m.BeatMax), n(m.BeatAbs), n(m.BeatU), n(m.CarrierTone), n(m.LocalTone),
				n(m.CarrierDBFS), n(m.LocalDBFS), n(m.CarrierCN0), n(m.LocalCN0), n(m.SpreadHz), n(m.InputDBFS),
				n(m.FirstPhase), known(m.FirstPhaseAt), n(m.LastPhase), known(m.LastPhaseAt), m.FirstRun, m.LastRun, m.Clipped, m.States, m.Flags})
		})
	}))
}

func (l *lines) minute(bench string, m *journal.Minute) {
	l.time(m.At)
	l.text(bench)
	l.counts(m.Seconds, m.Usable)
	l.numbers(m.Setup.CarrierHz, m.Setup.LocalHz, m.Beat, m.BeatMin, m.BeatMax, m.BeatAbs, m.BeatU, m.CarrierTone, m.LocalTone,
		m.CarrierDBFS, m.LocalDBFS, m.CarrierCN0, m.LocalCN0, m.SpreadHz, m.InputDBFS, m.FirstPhase)
	l.time(m.FirstPhaseAt)
	l.numbers(m.LastPhase)
	l.time(m.LastPhaseAt)
	l.counts(m.FirstRun, m.LastRun, m.Clipped)
	l.text(tally(m.States, dsp.States))
	l.text(tally(m.Flags, dsp.Flags))
}

// tally writes counts as "apart:54 lone:6".
func tally[T ~string](counts map[string]int, order []T) string {
	var parts []string
	for _, name := range order {
		if n := counts[string(name)]; n > 0 {
			parts = append(parts, fmt.Sprintf("%s:%d", name, n))
		}
	}
	return strings.Join(parts, " ")
}

// known writes a time, or nil where it is not known.
func known(t time.Time) *string {
	if t.IsZero() {
		return nil
	}
	s := t.UTC().Format(TimeLayout)
	return &s
}
