// Package journal is the durable store of readings and events: one SQLite file
// in WAL mode, one writer, readable by any SQLite tool while it is written.
//
// A reading is acknowledged once it is committed (Stats.Committed), which
// happens every second; with synchronous=FULL it then survives a kill and a
// loss of power. While the disk refuses, readings wait in bounded memory and
// are written when it comes back. Seconds older than Options.ThinAfter become
// minutes, never silently.
package journal

import (
	"context"
	"database/sql"
	"encoding/json"
	"errors"
	"fmt"
	"log/slog"
	"net/url"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"time"

	"golang.org/x/sys/unix"
	_ "modernc.org/sqlite"

	"offbeat/dsp"
)

// The kinds of events.
const (
	Start   = "start"
	Stop    = "stop"
	Gap     = "gap"
	Note    = "note"
	AsFound = "as-found"
	AsLeft  = "as-left"
	Turn    = "turn"
	Thinned = "thinned"
	Restart = "restart" // the daemon did not end cleanly; data tells the extent
	Reload  = "reload"
	// Identity: the user said which tone is which, or a guided step began or ended.
	Identity = "identity"
	Trouble  = "journal" // of the journal itself
)

// Options of a journal. Zero values mean the defaults.
type Options struct {
	Every     time.Duration // between commits; default 1 s, at most 2 s
	ThinAfter time.Duration // age at which seconds become minutes; 0: 400 days; negative: never
	Waiting   int           // rows that may wait in memory while the disk refuses; default 64 * 1024, about 18 hours of one bench
	Log       *slog.Logger
}

// Setup is what a bench compares; readings refer to it.
type Setup struct {
	Hookup, Sideband   string
	CarrierHz, LocalHz float64 // nominal, the local as heard
	Input              string
}

// Stats is what the journal says of itself.
type Stats struct {
	Appended   int64 // rows taken
	Committed  int64 // rows safe on disk
	Pending    int64 // rows waiting
	Dropped    int64 // rows given up because too many waited
	Errors     int64 // failed attempts to write
	LastError  string
	LastCommit time.Time
	Bytes      int64 // of the file and its log
}

// Journal is an open journal. Its methods are safe for concurrent use, and
// Append and Event never wait for the disk.
type Journal struct {
	path string
	opt  Options
	db   *sql.DB // the writer's only connection
	ro   *sql.DB
	lock *os.File

	mu      sync.Mutex
	queue   []row
	stats   Stats
	missed  int64 // dropped since the last gap event
	setups  map[string]Setup
	closing bool
	kick    chan chan error
	done    chan struct{}
	ids     map[string][2]int64 // bench and setup, of the writer
}

// row is a reading, an event or a setup on its way to the disk.
type row struct {
	bench      string
	at         time.Time
	reading    *dsp.Reading
	kind, text string
	data       []byte
	setup      *Setup
}

// Open opens or creates the journal and starts its writer. Each way to fail is
// one line that says what, where and what to do.
func Open(path string, opt Options) (*Journal, error) {
	if opt.Every <= 0 || opt.Every > 2*time.Second {
		opt.Every = time.Second
	}
	if opt.ThinAfter == 0 {
		opt.ThinAfter = 400 * 24 * time.Hour
	}
	if opt.Waiting <= 0 {
		opt.Waiting = 64 << 10
	}
	if opt.Log == nil {
		opt.Log = slog.New(slog.DiscardHandler)
	}
	if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
		return nil, explain(path, err)
	}
	lock, err := seize(path)
	if err != nil {
		return nil, err
	}
	j := &Journal{path: path, opt: opt, lock: lock, setups: map[string]Setup{}, kick: make(chan chan error), done: make(chan struct{}),
		ids: map[string][2]int64{}}
	if err := j.begin(); err != nil {
		j.release()
		return nil, explain(path, err)
	}
	go j.write()
	return j, nil
}

// seize takes the lock that keeps a second writer away. Readers do not need it.
func seize(path string) (*os.File, error) {
	f, err := os.OpenFile(path+".lock", os.O_CREATE|os.O_RDWR, 0o644)
	if err != nil {
		return nil, explain(path, err)
	}
	if err := unix.Flock(int(f.Fd()), unix.LOCK_EX|unix.LOCK_NB); err != nil {
		f.Close()
		if errors.Is(err, unix.EWOULDBLOCK) {
			return nil, fmt.Errorf("journal %s: another offbeat is writing it: stop that one or choose another file with --journal", path)
		}
		return nil, explain(path, err)
	}
	return f, nil
}

func dsn(path string, options ...string) string {
	u := url.URL{Scheme: "file", OmitHost: true, Path: path}
	return u.String() + "?" + strings.Join(options, "&")
}

// begin opens the database, brings it up to date and notes how it was left.
func (j *Journal) begin() error {
	ctx := context.Background()
	abs, err := filepath.Abs(j.path)
	if err != nil {
		return err
	}
	db, err := sql.Open("sqlite", dsn(abs, "_pragma=busy_timeout(2000)", "_pragma=journal_mode(WAL)", "_pragma=synchronous(FULL)", "_txlock=immediate"))
	if err != nil {
		return err
	}
	db.SetMaxOpenConns(1)
	j.db = db
	if err := migrate(ctx, db, j.path); err != nil {
		return err
	}
	if j.ro, err = openReader(abs); err != nil {
		return err
	}
	var clean string
	err = db.QueryRowContext(ctx, "SELECT value FROM meta WHERE key = 'clean'").Scan(&clean)
	if err != nil && !errors.Is(err, sql.ErrNoRows) {
		return err
	}
	if clean == "0" {
		var last sql.NullInt64
		if err := db.QueryRowContext(ctx, "SELECT max(t) FROM (SELECT max(t) AS t FROM readings GROUP BY bench)").Scan(&last); err != nil {
			return err
		}
		now := time.Now()
		data := map[string]any{"to": now.UTC().Format(time.RFC3339)}
		if last.Valid {
			data["from"] = time.UnixMilli(last.Int64).UTC().Format(time.RFC3339)
		}
		j.Event("", now, Restart, "the last run did not end cleanly", data)
	}
	_, err = db.ExecContext(ctx, "INSERT OR REPLACE INTO meta VALUES ('clean', '0')")
	return err
}

func (j *Journal) release() {
	if j.db != nil {
		j.db.Close()
	}
	if j.ro != nil {
		j.ro.Close()
	}
	j.lock.Close()
}

// explain makes one line of an error of the file system or of SQLite.
func explain(path string, err error) error {
	if strings.HasPrefix(err.Error(), "journal ") {
		return err
	}
	text := strings.Join(strings.Fields(err.Error()), " ")
	var pe *os.PathError
	if errors.As(err, &pe) {
		text = pe.Err.Error()
	}
	hint := "choose another file with --journal"
	switch {
	case strings.Contains(text, "not a database"), strings.Contains(text, "malformed"):
		hint = "it is not an offbeat journal, or it is damaged: move it aside or choose another file with --journal"
	case strings.Contains(text, "permission denied"), strings.Contains(text, "readonly"), strings.Contains(text, "read-only"):
		hint = "make it writable or choose another file with --journal"
	case strings.Contains(text, "full"), strings.Contains(text, "no space"):
		hint = "free some space"
	}
	return fmt.Errorf("journal %s: %s: %s", path, text, hint)
}

// Setup tells what a bench compares from now on.
func (j *Journal) Setup(bench string, s Setup) {
	j.put(row{bench: bench, at: time.Now(), setup: &s})
}

// Append takes a reading. at is the time of the middle of its second.
func (j *Journal) Append(bench string, at time.Time, r dsp.Reading) {
	j.put(row{bench: bench, at: at, reading: &r})
}

// Event takes a mark on the time line. bench may be empty: of the daemon. data
// is kept as JSON; nil: none.
func (j *Journal) Event(bench string, at time.Time, kind, text string, data any) {
	var raw []byte
	if data != nil {
		var err error
		if raw, err = json.Marshal(data); err != nil {
			raw, _ = json.Marshal(map[string]string{"unmarshalable": err.Error()})
		}
	}
	j.put(row{bench: bench, at: at, kind: kind, text: text, data: raw})
}

func (j *Journal) put(r row) {
	j.mu.Lock()
	defer j.mu.Unlock()
	if j.closing || len(j.queue) >= j.opt.Waiting {
		j.stats.Dropped++
		j.missed++
		return
	}
	j.stats.Appended++
	j.queue = append(j.queue, r)
}

// Stats returns the present figures.
func (j *Journal) Stats() Stats {
	j.mu.Lock()
	s := j.stats
	s.Pending = int64(len(j.queue))
	j.mu.Unlock()
	for _, f := range []string{j.path, j.path + "-wal"} {
		if fi, err := os.Stat(f); err == nil {
			s.Bytes += fi.Size()
		}
	}
	return s
}

// Path returns where the journal lies.
func (j *Journal) Path() string { return j.path }

// Flush commits what waits, or says why it cannot.
func (j *Journal) Flush(ctx context.Context) error {
	answer := make(chan error, 1)
	select {
	case j.kick <- answer:
	case <-j.done:
		return errors.New("journal: closed")
	case <-ctx.Done():
		return ctx.Err()
	}
	select {
	case err := <-answer:
		return err
	case <-ctx.Done():
		return ctx.Err()
	}
}

// Close commits what waits and closes the file. It gives up on a disk that
// refuses, and says what that cost.
func (j *Journal) Close() error {
	j.mu.Lock()
	if j.closing {
		j.mu.Unlock()
		<-j.done
		return nil
	}
	j.closing = true
	j.mu.Unlock()
	answer := make(chan error, 1)
	j.kick <- answer
	err := <-answer
	close(j.kick)
	<-j.done
	if err == nil {
		_, err = j.db.Exec("INSERT OR REPLACE INTO meta VALUES ('clean', '1'); PRAGMA wal_checkpoint(TRUNCATE)")
	}
	left := len(j.queue)
	j.release()
	if err != nil {
		return fmt.Errorf("%w (%d rows were not written)", explain(j.path, err), left)
	}
	return nil
}
