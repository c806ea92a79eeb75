package journal

import (
	"context"
	"database/sql"
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"time"

	"offbeat/dsp"
)

// Row is a reading as it was stored.
type Row struct {
	At                 time.Time
	Reading            dsp.Reading
	CarrierHz, LocalHz float64 // nominal, the local as heard
}

// EventRow is an event as it was stored.
type EventRow struct {
	Bench      string // empty: of the daemon
	At         time.Time
	Kind, Text string
	Data       json.RawMessage // nil: none
}

// Reader reads a journal, also while it is written.
type Reader struct{ db *sql.DB }

func openReader(abs string) (*sql.DB, error) {
	db, err := sql.Open("sqlite", dsn(abs, "mode=ro", "_pragma=busy_timeout(5000)", "_pragma=query_only(1)"))
	if err == nil {
		db.SetMaxOpenConns(4)
	}
	return db, err
}

// OpenReadOnly opens an existing journal for reading only.
func OpenReadOnly(path string) (*Reader, error) {
	if _, err := os.Stat(path); err != nil {
		return nil, explain(path, err)
	}
	abs, err := filepath.Abs(path)
	if err != nil {
		return nil, err
	}
	db, err := openReader(abs)
	if err != nil {
		return nil, explain(path, err)
	}
	var have int
	if err := db.QueryRow("PRAGMA user_version").Scan(&have); err != nil {
		db.Close()
		return nil, explain(path, err)
	}
	if have == 0 || have > len(migrations) {
		db.Close()
		return nil, fmt.Errorf("journal %s: not an offbeat journal that this version can read (schema %d)", path, have)
	}
	return &Reader{db}, nil
}

// Close closes the reader.
func (r *Reader) Close() error { return r.db.Close() }

// Reader returns the journal's own reading side; it closes with the journal.
func (j *Journal) Reader() *Reader { return &Reader{j.ro} }

// Benches returns the names of all benches that ever were.
func (r *Reader) Benches(ctx context.Context) ([]string, error) {
	rows, err := r.db.QueryContext(ctx, "SELECT name FROM benches ORDER BY name")
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	var out []string
	for rows.Next() {
		var s string
		if err := rows.Scan(&s); err != nil {
			return nil, err
		}
		out = append(out, s)
	}
	return out, rows.Err()
}

const selectReadings = `SELECT r.t, r.state, r.flags, r.beat, r.beat_u, r.beat_abs, r.carrier_tone, r.local_tone, r.carrier_cdb, r.local_cdb,
	r.carrier_cn0, r.local_cn0, r.spread, r.span_ms, r.phase, r.run, r.input_cdb, r.clipped, r.sound_ms, s.carrier_hz, s.local_hz
	FROM readings r JOIN benches b ON b.id = r.bench JOIN setups s ON s.id = r.setup
	WHERE b.name = ? AND r.t >= ? AND r.t < ? ORDER BY r.t`

// Readings calls yield for each reading of a bench in from <= time < to, in
// order of time, until it returns an error.
func (r *Reader) Readings(ctx context.Context, bench string, from, to time.Time, yield func(Row) error) error {
	rows, err := r.db.QueryContext(ctx, selectReadings, bench, from.UnixMilli(), to.UnixMilli())
	if err != nil {
		return err
	}
	defer rows.Close()
	for rows.Next() {
		var t, sound int64
		var state, flags int
		var n [15]sql.NullFloat64
		var out Row
		g := &out.Reading
		var fc, fl float64
		if err := rows.Scan(&t, &state, &flags, &n[0], &n[1], &n[2], &n[3], &n[4], &n[5], &n[6], &n[7], &n[8], &n[9], &n[10], &n[11],
			&g.PhaseRun, &n[12], &g.Clipped, &sound, &fc, &fl); err != nil {
			return err
		}
		v := func(i int, scale float64) float64 {
			if !n[i].Valid {
				return math.NaN()
			}
			return n[i].Float64 / scale
		}
		out.At = time.UnixMilli(t).UTC()
		out.CarrierHz, out.LocalHz = fc, fl
		g.T = float64(sound) / 1000
		if state >= 0 && state < len(dsp.States) {
			g.State = dsp.States[state]
		}
		for i, f := range dsp.Flags {
			if flags>>i&1 == 1 {
				g.Flags = append(g.Flags, f)
			}
		}
		g.Beat, g.BeatU, g.BeatAbs = v(0, 1), v(1, 1), v(2, 1)
		g.Error, g.Offset, g.OffsetU = math.NaN(), math.NaN(), math.NaN()
		if n[0].Valid {
			g.BeatAbs = math.Abs(g.Beat)
			g.Error = g.Beat - (fl - fc)
			g.Offset, g.OffsetU = g.Error/fl, g.BeatU/fl
		}
		g.CarrierTone, g.LocalTone = v(3, 1), v(4, 1)
		g.CarrierDBFS, g.LocalDBFS, g.CarrierCN0, g.LocalCN0 = v(5, 100), v(6, 100), v(7, 100), v(8, 100)
		g.SpreadHz, g.Span, g.Phase, g.InputDBFS = v(9, 1), v(10, 1000), v(11, 1), v(12, 100)
		g.ClockError, g.ClockErrorU = math.NaN(), math.NaN() // not kept
		if err := yield(out); err != nil {
			return err
		}
	}
	return rows.Err()
}

// Events returns the events in from <= time < to, in order of time; of one
// bench and of the daemon, or of all with bench empty.
func (r *Reader) Events(ctx context.Context, bench string, from, to time.Time) ([]EventRow, error) {
	rows, err := r.db.QueryContext(ctx, `SELECT coalesce(b.name, ''), e.at, e.kind, e.text, e.data FROM events e LEFT JOIN benches b ON b.id = e.bench
		WHERE e.at >= ? AND e.at < ? AND (? = '' OR e.bench IS NULL OR b.name = ?) ORDER BY e.at, e.id`, from.UnixMilli(), to.UnixMilli(), bench, bench)
	if err != nil {
		return nil, err
	}
	defer rows.Close()
	var out []EventRow
	for rows.Next() {
		var e EventRow
		var at int64
		var data sql.NullString
		if err := rows.Scan(&e.Bench, &at, &e.Kind, &e.Text, &data); err != nil {
			return nil, err
		}
		e.At = time.UnixMilli(at).UTC()
		if data.Valid {
			e.Data = json.RawMessage(data.String)
		}
		out = append(out, e)
	}
	return out, rows.Err()
}
