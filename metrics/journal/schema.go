package journal

import (
	"context"
	"database/sql"
	"fmt"

	"offbeat/dsp"
)

// migrations lead from each version of the schema to the next; PRAGMA
// user_version says how many have been applied. Never change one that has been
// released: append.
var migrations = []string{
	// 1: readings and events. Levels and C/N0 are hundredths of a dB, spans
	// milliseconds: a reading takes about 100 bytes. What a reading derives from
	// the nominal frequencies (error, offset) is in the view.
	`CREATE TABLE benches (id INTEGER PRIMARY KEY, name TEXT NOT NULL UNIQUE);
	 CREATE TABLE setups (id INTEGER PRIMARY KEY, bench INTEGER NOT NULL REFERENCES benches, at INTEGER NOT NULL,
	   hookup TEXT NOT NULL, sideband TEXT NOT NULL, carrier_hz REAL NOT NULL, local_hz REAL NOT NULL, input TEXT NOT NULL);
	 CREATE TABLE readings (bench INTEGER NOT NULL, t INTEGER NOT NULL, setup INTEGER NOT NULL, state INTEGER NOT NULL, flags INTEGER NOT NULL,
	   beat REAL, beat_u REAL, beat_abs REAL, carrier_tone REAL, local_tone REAL,
	   carrier_cdb INTEGER, local_cdb INTEGER, carrier_cn0 INTEGER, local_cn0 INTEGER,
	   spread REAL, span_ms INTEGER, phase REAL, run INTEGER NOT NULL, input_cdb INTEGER, clipped INTEGER NOT NULL, sound_ms INTEGER NOT NULL,
	   PRIMARY KEY (bench, t)) WITHOUT ROWID;
	 CREATE TABLE events (id INTEGER PRIMARY KEY, bench INTEGER, at INTEGER NOT NULL, kind TEXT NOT NULL, text TEXT NOT NULL, data TEXT);
	 CREATE INDEX events_at ON events (at);
	 CREATE TABLE meta (key TEXT PRIMARY KEY, value TEXT NOT NULL) WITHOUT ROWID;
	 CREATE TABLE states (id INTEGER PRIMARY KEY, name TEXT NOT NULL);
	 CREATE TABLE flags (bit INTEGER PRIMARY KEY, name TEXT NOT NULL);`,
	// 2: minutes, into which old seconds are thinned, and a view for people.
	`CREATE TABLE minutes (bench INTEGER NOT NULL, t INTEGER NOT NULL, setup INTEGER NOT NULL, n INTEGER NOT NULL, usable INTEGER NOT NULL,
	   beat_mean REAL, beat_min REAL, beat_max REAL, beat_abs_mean REAL, beat_u REAL, carrier_tone REAL, local_tone REAL,
	   carrier_cdb INTEGER, local_cdb INTEGER, carrier_cn0 INTEGER, local_cn0 INTEGER, spread REAL,
	   first_phase REAL, first_phase_t INTEGER, last_phase REAL, last_phase_t INTEGER, first_run INTEGER, last_run INTEGER,
	   input_cdb INTEGER, clipped INTEGER NOT NULL, states TEXT NOT NULL, flags TEXT NOT NULL,
	   PRIMARY KEY (bench, t)) WITHOUT ROWID;
	 CREATE VIEW readable AS SELECT b.name AS bench, strftime('%Y-%m-%dT%H:%M:%f', r.t/1000.0, 'unixepoch') || 'Z' AS time, s.name AS state,
	   r.beat AS beat_hz, r.beat_u AS beat_u_hz, r.beat - (u.local_hz - u.carrier_hz) AS error_hz,
	   (r.beat - (u.local_hz - u.carrier_hz)) / u.local_hz AS offset, r.beat_u / u.local_hz AS offset_u,
	   r.carrier_tone AS carrier_tone_hz, r.local_tone AS local_tone_hz, r.carrier_cdb/100.0 AS carrier_dbfs, r.local_cdb/100.0 AS local_dbfs,
	   r.carrier_cn0/100.0 AS carrier_cn0_dbhz, r.local_cn0/100.0 AS local_cn0_dbhz, r.phase AS phase_cycles, r.run AS phase_run,
	   (SELECT group_concat(name, ' ') FROM flags f WHERE r.flags >> f.bit & 1) AS flags
	   FROM readings r JOIN benches b ON b.id = r.bench JOIN setups u ON u.id = r.setup JOIN states s ON s.id = r.state;`,
}

// migrate brings the schema to the newest version.
func migrate(ctx context.Context, db *sql.DB, path string) error {
	var have int
	if err := db.QueryRowContext(ctx, "PRAGMA user_version").Scan(&have); err != nil {
		return err
	}
	if have > len(migrations) {
		return fmt.Errorf("journal %s: written by a newer offbeat (schema %d, this one knows %d): upgrade, or choose another file", path, have, len(migrations))
	}
	for v := have; v < len(migrations); v++ {
		tx, err := db.BeginTx(ctx, nil)
		if err != nil {
			return err
		}
		_, err = tx.ExecContext(ctx, migrations[v]+fmt.Sprintf("PRAGMA user_version = %d;", v+1))
		if err == nil {
			err = names(ctx, tx)
		}
		if err == nil {
			err = tx.Commit()
		}
		if err != nil {
			tx.Rollback()
			return fmt.Errorf("bringing the schema from version %d to %d: %w", v, v+1, err)
		}
	}
	return nil
}

// names writes the numbers of states and flags beside their names, for readers
// that have only SQLite.
func names(ctx context.Context, tx *sql.Tx) error {
	for i, s := range dsp.States {
		if _, err := tx.ExecContext(ctx, "INSERT OR REPLACE INTO states VALUES (?, ?)", i, string(s)); err != nil {
			return err
		}
	}
	for i, f := range dsp.Flags {
		if _, err := tx.ExecContext(ctx, "INSERT OR REPLACE INTO flags VALUES (?, ?)", i, string(f)); err != nil {
			return err
		}
	}
	return nil
}
