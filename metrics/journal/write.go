package journal

import (
	"context"
	"database/sql"
	"fmt"
	"math"
	"time"

	"offbeat/dsp"
)

const (
	batch    = 4096             // rows in one transaction at most
	retryMax = 30 * time.Second // between attempts while the disk refuses
	thinning = time.Hour        // between looks for what has grown old
)

// write is the only writer.
func (j *Journal) write() {
	defer close(j.done)
	tick := time.NewTicker(j.opt.Every)
	defer tick.Stop()
	wait, due := time.Duration(0), time.Time{}
	nextThin := time.Now().Add(10 * time.Second)
	for {
		var answer chan error
		select {
		case <-tick.C:
			if time.Now().Before(due) {
				continue
			}
		case a, ok := <-j.kick:
			if !ok {
				return
			}
			answer = a
		}
		err := j.commitAll()
		if err != nil {
			if wait *= 2; wait == 0 {
				wait = j.opt.Every
			}
			wait = min(wait, retryMax)
			due = time.Now().Add(wait)
		} else {
			wait, due = 0, time.Time{}
			if answer == nil && time.Now().After(nextThin) {
				nextThin = time.Now().Add(thinning)
				j.thin(time.Now())
			}
		}
		if answer != nil {
			answer <- err
		}
	}
}

// commitAll writes everything that waits, a batch at a time.
func (j *Journal) commitAll() error {
	for {
		j.mu.Lock()
		if j.missed > 0 && len(j.queue) < j.opt.Waiting {
			j.queue = append(j.queue, row{at: time.Now(), kind: Gap,
				text: fmt.Sprintf("%d rows were given up: too many waited for the disk", j.missed), data: fmt.Appendf(nil, `{"rows":%d}`, j.missed)})
			j.missed = 0
			j.stats.Appended++
		}
		n := min(len(j.queue), batch)
		rows := j.queue[:n:n]
		j.mu.Unlock()
		if n == 0 {
			return nil
		}
		err := j.commit(rows)
		j.mu.Lock()
		if err != nil {
			j.stats.Errors++
			first := j.stats.LastError == ""
			j.stats.LastError = err.Error()
			j.mu.Unlock()
			if first {
				j.opt.Log.Error("journal cannot be written; readings wait in memory", "file", j.path, "error", err)
			}
			return err
		}
		j.queue = append(j.queue[:0:0], j.queue[n:]...)
		if j.stats.LastError != "" {
			j.opt.Log.Info("journal is written again", "file", j.path)
		}
		j.stats.LastError = ""
		j.stats.Committed += int64(n)
		j.stats.LastCommit = time.Now()
		j.mu.Unlock()
	}
}

const insertReading = `INSERT INTO readings VALUES (?,?,?,?,?,?,?,?,?,?,?,?,?,?,?,?,?,?,?,?,?) ON CONFLICT DO NOTHING`

// commit writes rows in one transaction.
func (j *Journal) commit(rows []row) (err error) {
	ctx, cancel := context.WithTimeout(context.Background(), 30*time.Second)
	defer cancel()
	tx, err := j.db.BeginTx(ctx, nil)
	if err != nil {
		return err
	}
	defer func() {
		if err != nil {
			tx.Rollback()
			clear(j.ids) // what the transaction had made of them is gone
		}
	}()
	put, err := tx.PrepareContext(ctx, insertReading)
	if err != nil {
		return err
	}
	defer put.Close()
	for _, r := range rows {
		switch {
		case r.setup != nil:
			err = j.putSetup(ctx, tx, r.bench, r.at, *r.setup)
		case r.reading != nil:
			err = j.putReading(ctx, tx, put, r)
		default:
			err = j.putEvent(ctx, tx, r)
		}
		if err != nil {
			return err
		}
	}
	return tx.Commit()
}

func (j *Journal) bench(ctx context.Context, tx *sql.Tx, name string) (int64, error) {
	if _, err := tx.ExecContext(ctx, "INSERT OR IGNORE INTO benches (name) VALUES (?)", name); err != nil {
		return 0, err
	}
	var id int64
	err := tx.QueryRowContext(ctx, "SELECT id FROM benches WHERE name = ?", name).Scan(&id)
	return id, err
}

// putSetup stores a setup unless it is that of before.
func (j *Journal) putSetup(ctx context.Context, tx *sql.Tx, bench string, at time.Time, s Setup) error {
	id, err := j.bench(ctx, tx, bench)
	if err != nil {
		return err
	}
	var setup int64
	var was Setup
	err = tx.QueryRowContext(ctx, "SELECT id, hookup, sideband, carrier_hz, local_hz, input FROM setups WHERE bench = ? ORDER BY id DESC LIMIT 1", id).
		Scan(&setup, &was.Hookup, &was.Sideband, &was.CarrierHz, &was.LocalHz, &was.Input)
	if err != nil && err != sql.ErrNoRows {
		return err
	}
	if err != nil || was != s {
		res, err := tx.ExecContext(ctx, "INSERT INTO setups (bench, at, hookup, sideband, carrier_hz, local_hz, input) VALUES (?,?,?,?,?,?,?)",
			id, at.UnixMilli(), s.Hookup, s.Sideband, s.CarrierHz, s.LocalHz, s.Input)
		if err != nil {
			return err
		}
		if setup, err = res.LastInsertId(); err != nil {
			return err
		}
	}
	j.ids[bench] = [2]int64{id, setup}
	return nil
}

// lastSetup finds the setup that a bench had before.
func (j *Journal) lastSetup(ctx context.Context, tx *sql.Tx, bench string) error {
	id, err := j.bench(ctx, tx, bench)
	if err != nil {
		return err
	}
	var setup int64
	err = tx.QueryRowContext(ctx, "SELECT id FROM setups WHERE bench = ? ORDER BY id DESC LIMIT 1", id).Scan(&setup)
	if err == sql.ErrNoRows {
		return j.putSetup(ctx, tx, bench, time.Now(), Setup{"two-tone", "usb", 10e6, 10e6, "not told"})
	}
	j.ids[bench] = [2]int64{id, setup}
	return err
}

func (j *Journal) putReading(ctx context.Context, tx *sql.Tx, put *sql.Stmt, w row) error {
	if _, ok := j.ids[w.bench]; !ok {
		if err := j.lastSetup(ctx, tx, w.bench); err != nil {
			return err
		}
	}
	id, r := j.ids[w.bench], w.reading
	abs := r.BeatAbs
	if !math.IsNaN(r.Beat) {
		abs = math.NaN() // it is the beat's size: not kept twice
	}
	t := w.at.UnixMilli()
	// Two readings at one millisecond (the host's clock was set back): the
	// later one moves on until there is room, none is lost.
	for range 100000 {
		res, err := put.ExecContext(ctx, id[0], t, id[1], index(dsp.States, r.State), bits(r.Flags),
			real64(r.Beat), real64(r.BeatU), real64(abs), real64(r.CarrierTone), real64(r.LocalTone),
			centi(r.CarrierDBFS, 100), centi(r.LocalDBFS, 100), centi(r.CarrierCN0, 100), centi(r.LocalCN0, 100),
			real64(r.SpreadHz), centi(r.Span, 1000), real64(r.Phase), r.PhaseRun, centi(r.InputDBFS, 100), r.Clipped, int64(math.Round(r.T*1000)))
		if err != nil {
			return err
		}
		if n, err := res.RowsAffected(); err != nil || n == 1 {
			return err
		}
		t++
	}
	return fmt.Errorf("no room for a reading of %s at %v", w.bench, w.at)
}

func (j *Journal) putEvent(ctx context.Context, tx *sql.Tx, w row) error {
	var bench any
	if w.bench != "" {
		id, err := j.bench(ctx, tx, w.bench)
		if err != nil {
			return err
		}
		bench = id
	}
	var data any
	if w.data != nil {
		data = string(w.data)
	}
	_, err := tx.ExecContext(ctx, "INSERT INTO events (bench, at, kind, text, data) VALUES (?,?,?,?,?)", bench, w.at.UnixMilli(), w.kind, w.text, data)
	return err
}

func index[T comparable](all []T, v T) int {
	for i, x := range all {
		if x == v {
			return i
		}
	}
	return -1
}

func bits(flags []dsp.Flag) int {
	b := 0
	for _, f := range flags {
		if i := index(dsp.Flags, f); i >= 0 {
			b |= 1 << i
		}
	}
	return b
}

func real64(v float64) any {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return nil
	}
	return v
}

func centi(v, scale float64) any {
	if math.IsNaN(v) || math.IsInf(v, 0) {
		return nil
	}
	return int64(math.Round(v * scale))
}
