package main

import (
	"context"
	"database/sql"
	"math"
	"testing"
	"time"

	"offbeat/metrics/journal"
)

// stored is a reading found in a journal.
type stored struct {
	bench string
	at    int64 // Unix ms
	beat  float64
	known bool
}

// readJournal returns all readings, bench by bench, in order of time.
func readJournal(t *testing.T, path string) (rows []stored) {
	t.Helper()
	r, err := journal.OpenReadOnly(path)
	if err != nil {
		t.Fatal(err)
	}
	defer r.Close()
	benches, err := r.Benches(context.Background())
	if err != nil {
		t.Fatal(err)
	}
	for _, b := range benches {
		err := r.Readings(context.Background(), b, time.Unix(0, 0), time.Now().Add(time.Hour), func(row journal.Row) error {
			rows = append(rows, stored{b, row.At.UnixMilli(), row.Reading.Beat, !math.IsNaN(row.Reading.Beat)})
			return nil
		})
		if err != nil {
			t.Fatal(err)
		}
	}
	return rows
}

// lockDatabase makes a journal and holds its write lock, as another program
// might, until the test ends.
func lockDatabase(t *testing.T, path string) {
	t.Helper()
	j, err := journal.Open(path, journal.Options{})
	if err != nil {
		t.Fatal(err)
	}
	if err := j.Close(); err != nil {
		t.Fatal(err)
	}
	db, err := sql.Open("sqlite", path)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { db.Close() })
	db.SetMaxOpenConns(1)
	if _, err := db.Exec("BEGIN IMMEDIATE"); err != nil {
		t.Fatal(err)
	}
}
