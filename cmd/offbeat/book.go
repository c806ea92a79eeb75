package main

import (
	"fmt"
	"log/slog"
	"os"

	"offbeat/metrics"
	"offbeat/metrics/journal"
)

// openBook opens the journal of a configuration and fills its path in.
func openBook(c *config, log *slog.Logger) (*journal.Journal, error) {
	if c.Journal == "" {
		path, err := defaultJournal()
		if err != nil {
			return nil, err
		}
		c.Journal = path
	}
	if info, err := os.Stat(c.Journal); err == nil && info.IsDir() {
		return nil, fmt.Errorf("journal %s: a directory: name a file in it", c.Journal)
	}
	return journal.Open(c.Journal, journal.Options{ThinAfter: c.ThinAfter, Log: log})
}

// bookStats words the journal's figures for the metrics.
func bookStats(j *journal.Journal) func() metrics.JournalStats {
	return func() metrics.JournalStats {
		s := j.Stats()
		return metrics.JournalStats{Committed: s.Committed, Pending: s.Pending, Dropped: s.Dropped, Errors: s.Errors, Bytes: s.Bytes, LastCommit: s.LastCommit}
	}
}

// bookTrouble says what is wrong with the journal now.
func bookTrouble(j *journal.Journal) (lines []string) {
	if s := j.Stats(); s.LastError != "" {
		lines = append(lines, fmt.Sprintf("the journal %s cannot be written: %s; %d rows wait in memory", j.Path(), oneLine(s.LastError), s.Pending))
	}
	return lines
}
