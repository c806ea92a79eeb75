package journal

import (
	"context"
	"database/sql"
	"encoding/json"
	"fmt"
	"time"

	"offbeat/dsp"
)

// Minute is what is left of a minute's readings once they have grown old. A
// number that is not known is NaN.
type Minute struct {
	At              time.Time // its beginning
	Setup           *Setup    // of its last reading; shared, not to be changed
	Seconds, Usable int       // readings in it; those with a beat or its size

	Beat, BeatMin, BeatMax float64 // mean and extremes, Hz
	BeatAbs                float64 // mean size, Hz
	BeatU                  float64 // root mean square of the u of its readings, Hz
	CarrierTone, LocalTone float64 // these and the following are means
	CarrierDBFS, LocalDBFS float64
	CarrierCN0, LocalCN0   float64
	SpreadHz, InputDBFS    float64

	FirstPhase, LastPhase     float64 // cycles
	FirstPhaseAt, LastPhaseAt time.Time
	FirstRun, LastRun         int // of the phase

	Clipped int            // samples
	States  map[string]int // readings in each state
	Flags   map[string]int // readings with each flag
}

const selectMinutes = `SELECT m.t, m.setup, m.n, m.usable, m.beat_mean, m.beat_min, m.beat_max, m.beat_abs_mean, m.beat_u, m.carrier_tone, m.local_tone,
	m.carrier_cdb, m.local_cdb, m.carrier_cn0, m.local_cn0, m.spread, m.input_cdb,
	m.first_phase, m.last_phase, coalesce(m.first_phase_t, 0), coalesce(m.last_phase_t, 0), m.first_run, m.last_run, m.clipped, m.states, m.flags
	FROM minutes m JOIN benches b ON b.id = m.bench
	WHERE b.name = ? AND m.t >= ? AND m.t < ? ORDER BY m.t LIMIT ?`

// Minutes calls yield for each minute of a bench that begins in from <= time <
// to and whose readings were thinned, in order of time, until it returns an
// error.
func (r *Reader) Minutes(ctx context.Context, bench string, from, to time.Time, yield func(Minute) error) error {
	if r.schema < 2 { // older than thinning
		return nil
	}
	known := setups{}
	return pages(from, func(next int64, page []Minute) ([]Minute, error) {
		err := r.each(ctx, func(rows *sql.Rows) error {
			m, err := r.minute(ctx, rows, known)
			page = append(page, m)
			return err
		}, selectMinutes, bench, next, to.UnixMilli(), pageRows)
		return page, err
	}, func(m Minute) time.Time { return m.At }, yield)
}

// MinutesExtent returns the times of the first and the last minute of a bench
// in from <= time < to; ok is false if there is none.
func (r *Reader) MinutesExtent(ctx context.Context, bench string, from, to time.Time) (first, last time.Time, ok bool, err error) {
	if r.schema < 2 {
		return
	}
	return r.extent(ctx, "minutes", bench, from, to)
}

// minute makes a Minute of a row of selectMinutes.
func (r *Reader) minute(ctx context.Context, rows *sql.Rows, known setups) (m Minute, err error) {
	var t, setup, first, last int64
	var states, flags string
	var n [15]sql.NullFloat64
	dst := []any{&t, &setup, &m.Seconds, &m.Usable}
	for i := range n {
		dst = append(dst, &n[i])
	}
	if err := rows.Scan(append(dst, &first, &last, &m.FirstRun, &m.LastRun, &m.Clipped, &states, &flags)...); err != nil {
		return m, err
	}
	if m.Setup, err = known.get(ctx, r, setup); err != nil {
		return m, err
	}
	m.At = time.UnixMilli(t).UTC()
	for i, to := range []*float64{&m.Beat, &m.BeatMin, &m.BeatMax, &m.BeatAbs, &m.BeatU, &m.CarrierTone, &m.LocalTone,
		&m.CarrierDBFS, &m.LocalDBFS, &m.CarrierCN0, &m.LocalCN0, &m.SpreadHz, &m.InputDBFS, &m.FirstPhase, &m.LastPhase} {
		*to = scaled(n[i], 1)
	}
	for _, level := range []*float64{&m.CarrierDBFS, &m.LocalDBFS, &m.CarrierCN0, &m.LocalCN0, &m.InputDBFS} {
		*level /= 100
	}
	if n[13].Valid {
		m.FirstPhaseAt, m.LastPhaseAt = time.UnixMilli(first).UTC(), time.UnixMilli(last).UTC()
	}
	if m.States, err = tally(states, dsp.States); err == nil {
		m.Flags, err = tally(flags, dsp.Flags)
	}
	return m, err
}

// tally reads an array of counts, one for each of all, which may have grown
// since it was written.
func tally[T ~string](text string, all []T) (map[string]int, error) {
	var counts []int
	if err := json.Unmarshal([]byte(text), &counts); err != nil {
		return nil, fmt.Errorf("malformed counts of a minute: %w", err)
	}
	out := map[string]int{}
	for i, c := range counts {
		if i < len(all) && c > 0 {
			out[string(all[i])] = c
		}
	}
	return out, nil
}
