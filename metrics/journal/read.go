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
	At      time.Time
	Setup   *Setup // what the bench compared; shared, not to be changed
	Reading dsp.Reading
}

// EventRow is an event as it was stored.
type EventRow struct {
	Bench      string // empty: of the daemon
	At         time.Time
	Kind, Text string
	Data       json.RawMessage // nil: none
}

// Reader reads a journal, also while it is written. It is safe for concurrent
// use. It reads page by page: while the caller works on a page nothing is held,
// so that a slow caller never keeps the writer's log from being folded in.
type Reader struct {
	db     *sql.DB
	path   string
	schema int
}

// pageRows is how many rows are read at a time.
const pageRows = 1024

func openReader(abs string, options ...string) (*sql.DB, error) {
	db, err := sql.Open("sqlite", dsn(abs, append(options, "mode=ro", "_pragma=busy_timeout(5000)", "_pragma=query_only(1)")...))
	if err == nil {
		db.SetMaxOpenConns(4)
	}
	return db, err
}

// OpenReadOnly opens an existing journal for reading only.
func OpenReadOnly(path string) (*Reader, error) {
	info, err := os.Stat(path)
	if err != nil {
		return nil, explain(path, err)
	}
	if info.IsDir() {
		return nil, fmt.Errorf("journal %s: a directory: name a file in it", path)
	}
	abs, err := filepath.Abs(path)
	if err != nil {
		return nil, err
	}
	db, have, err := openSchema(abs)
	if err != nil && atRest(abs) {
		// A file in WAL mode can be read only where its index can be made
		// beside it. On a read-only medium nobody writes: none is needed.
		db, have, err = openSchema(abs, "immutable=1")
	}
	if err != nil {
		return nil, explain(path, err)
	}
	switch {
	case have > len(migrations):
		err = fmt.Errorf("journal %s: written by a newer offbeat (schema %d, this one knows %d): upgrade, or choose another file with --journal", path, have, len(migrations))
	case have == 0:
		err = fmt.Errorf("journal %s: it is not an offbeat journal: choose another file with --journal", path)
	}
	if err != nil {
		db.Close()
		return nil, err
	}
	return &Reader{db, path, have}, nil
}

// openSchema opens a database for reading and asks for its schema's version.
func openSchema(abs string, options ...string) (*sql.DB, int, error) {
	db, err := openReader(abs, options...)
	if err != nil {
		return nil, 0, err
	}
	var have int
	if err := db.QueryRow("PRAGMA user_version").Scan(&have); err != nil {
		db.Close()
		return nil, 0, err
	}
	return db, have, nil
}

// atRest reports whether no log lies beside a journal: it was closed in order.
func atRest(abs string) bool {
	info, err := os.Stat(abs + "-wal")
	return err != nil || info.Size() == 0
}

// explain words an error of the database, but not one of the context.
func (r *Reader) explain(ctx context.Context, err error) error {
	if err == nil || ctx.Err() != nil {
		return ctx.Err()
	}
	return explain(r.path, err)
}

// Close closes the reader.
func (r *Reader) Close() error { return r.db.Close() }

// Reader returns the journal's own reading side; it closes with the journal.
func (j *Journal) Reader() *Reader { return &Reader{j.ro, j.path, len(migrations)} }

// Benches returns the names of all benches that ever were.
func (r *Reader) Benches(ctx context.Context) ([]string, error) {
	var out []string
	err := r.each(ctx, func(rows *sql.Rows) error {
		var s string
		err := rows.Scan(&s)
		out = append(out, s)
		return err
	}, "SELECT name FROM benches ORDER BY name")
	return out, err
}

// each runs a query and calls scan for each of its rows.
func (r *Reader) each(ctx context.Context, scan func(*sql.Rows) error, query string, args ...any) error {
	rows, err := r.db.QueryContext(ctx, query, args...)
	if err != nil {
		return r.explain(ctx, err)
	}
	defer rows.Close()
	for rows.Next() {
		if err := scan(rows); err != nil {
			return r.explain(ctx, err)
		}
	}
	return r.explain(ctx, rows.Err())
}

// Extent returns the times of the first and the last reading of a bench in
// from <= time < to; ok is false if there is none.
func (r *Reader) Extent(ctx context.Context, bench string, from, to time.Time) (first, last time.Time, ok bool, err error) {
	return r.extent(ctx, "readings", bench, from, to)
}

func (r *Reader) extent(ctx context.Context, table, bench string, from, to time.Time) (first, last time.Time, ok bool, err error) {
	const one = "(SELECT r.t FROM %s r JOIN benches b ON b.id = r.bench WHERE b.name = ?1 AND r.t >= ?2 AND r.t < ?3 ORDER BY r.t %s LIMIT 1)"
	err = r.each(ctx, func(rows *sql.Rows) error {
		var a, b sql.NullInt64
		err := rows.Scan(&a, &b)
		first, last, ok = time.UnixMilli(a.Int64).UTC(), time.UnixMilli(b.Int64).UTC(), a.Valid && b.Valid
		return err
	}, "SELECT "+fmt.Sprintf(one, table, "")+", "+fmt.Sprintf(one, table, "DESC"), bench, from.UnixMilli(), to.UnixMilli())
	return first, last, ok, err
}

// setups are those a reader has met, by their number.
type setups map[int64]*Setup

func (s setups) get(ctx context.Context, r *Reader, id int64) (*Setup, error) {
	if known := s[id]; known != nil {
		return known, nil
	}
	var u Setup
	err := r.db.QueryRowContext(ctx, "SELECT hookup, sideband, carrier_hz, local_hz, input FROM setups WHERE id = ?", id).
		Scan(&u.Hookup, &u.Sideband, &u.CarrierHz, &u.LocalHz, &u.Input)
	if err != nil {
		return nil, fmt.Errorf("setup %d, which a reading refers to: %w", id, err)
	}
	s[id] = &u
	return &u, nil
}

const selectReadings = `SELECT r.t, r.setup, r.state, r.flags, r.beat, r.beat_u, r.beat_abs, r.carrier_tone, r.local_tone, r.carrier_cdb, r.local_cdb,
	r.carrier_cn0, r.local_cn0, r.spread, r.span_ms, r.phase, r.run, r.input_cdb, r.clipped, r.sound_ms
	FROM readings r JOIN benches b ON b.id = r.bench
	WHERE b.name = ? AND r.t >= ? AND r.t < ? ORDER BY r.t LIMIT ?`

// Readings calls yield for each reading of a bench in from <= time < to, in
// order of time, until it returns an error.
func (r *Reader) Readings(ctx context.Context, bench string, from, to time.Time, yield func(Row) error) error {
	known := setups{}
	return pages(from, func(next int64, page []Row) ([]Row, error) {
		err := r.each(ctx, func(rows *sql.Rows) error {
			row, err := r.row(ctx, rows, known)
			page = append(page, row)
			return err
		}, selectReadings, bench, next, to.UnixMilli(), pageRows)
		return page, err
	}, func(row Row) time.Time { return row.At }, yield)
}

// pages yields rows, which get reads a page at a time from a time (Unix ms) on.
func pages[T any](from time.Time, get func(next int64, page []T) ([]T, error), at func(T) time.Time, yield func(T) error) error {
	next, page := from.UnixMilli(), []T(nil)
	for {
		var err error
		if page, err = get(next, page[:0]); err != nil {
			return err
		}
		for _, row := range page {
			if err := yield(row); err != nil {
				return err
			}
		}
		if len(page) < pageRows {
			return nil
		}
		next = at(page[len(page)-1]).UnixMilli() + 1
	}
}

// row makes a Row of a row of selectReadings.
func (r *Reader) row(ctx context.Context, rows *sql.Rows, known setups) (out Row, err error) {
	var t, setup, sound int64
	var state, flags int
	var n [13]sql.NullFloat64
	g := &out.Reading
	if err := rows.Scan(&t, &setup, &state, &flags, &n[0], &n[1], &n[2], &n[3], &n[4], &n[5], &n[6], &n[7], &n[8], &n[9], &n[10], &n[11],
		&g.PhaseRun, &n[12], &g.Clipped, &sound); err != nil {
		return out, err
	}
	if out.Setup, err = known.get(ctx, r, setup); err != nil {
		return out, err
	}
	v := func(i int, scale float64) float64 { return scaled(n[i], scale) }
	out.At = time.UnixMilli(t).UTC()
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
		g.Error = g.Beat - (out.Setup.LocalHz - out.Setup.CarrierHz)
		g.Offset, g.OffsetU = g.Error/out.Setup.LocalHz, g.BeatU/out.Setup.LocalHz
	}
	g.CarrierTone, g.LocalTone = v(3, 1), v(4, 1)
	g.CarrierDBFS, g.LocalDBFS, g.CarrierCN0, g.LocalCN0 = v(5, 100), v(6, 100), v(7, 100), v(8, 100)
	g.SpreadHz, g.Span, g.Phase, g.InputDBFS = v(9, 1), v(10, 1000), v(11, 1), v(12, 100)
	g.BeatWithin, g.ClockError, g.ClockErrorU = math.NaN(), math.NaN(), math.NaN() // not kept
	return out, nil
}

func scaled(n sql.NullFloat64, scale float64) float64 {
	if !n.Valid {
		return math.NaN()
	}
	return n.Float64 / scale
}

// Events returns the events in from <= time < to, in order of time; of one
// bench and of the daemon, or of all with bench empty.
func (r *Reader) Events(ctx context.Context, bench string, from, to time.Time) (out []EventRow, err error) {
	err = r.EachEvent(ctx, from, to, func(e EventRow) error {
		if bench == "" || e.Bench == "" || e.Bench == bench {
			out = append(out, e)
		}
		return nil
	})
	return out, err
}

// EachEvent calls yield for each event in from <= time < to, in order of time,
// until it returns an error.
func (r *Reader) EachEvent(ctx context.Context, from, to time.Time, yield func(EventRow) error) error {
	at, id := from.UnixMilli(), int64(-1)
	for {
		var page []EventRow
		err := r.each(ctx, func(rows *sql.Rows) error {
			var e EventRow
			var data sql.NullString
			if err := rows.Scan(&id, &e.Bench, &at, &e.Kind, &e.Text, &data); err != nil {
				return err
			}
			e.At = time.UnixMilli(at).UTC()
			if data.Valid {
				e.Data = json.RawMessage(data.String)
			}
			page = append(page, e)
			return nil
		}, `SELECT e.id, coalesce(b.name, ''), e.at, e.kind, e.text, e.data FROM events e LEFT JOIN benches b ON b.id = e.bench
			WHERE (e.at, e.id) > (?, ?) AND e.at < ? ORDER BY e.at, e.id LIMIT ?`, at, id, to.UnixMilli(), pageRows)
		if err != nil {
			return err
		}
		for _, e := range page {
			if err := yield(e); err != nil {
				return err
			}
		}
		if len(page) < pageRows {
			return nil
		}
	}
}
