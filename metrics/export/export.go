// Package export writes what a journal holds as CSV, as JSON Lines and as
// OpenMetrics with times.
//
// Memory stays flat however much there is: the journal is read page by page and
// rows leave as they come. Only whole rows are handed to the writer. OpenMetrics
// wants every series in one piece, so it goes through a temporary file, see
// OpenMetrics.
package export

import (
	"context"
	"encoding/json"
	"io"
	"math"
	"strconv"
	"strings"
	"time"

	"offbeat/metrics/journal"
)

// Query is which part of a journal is wanted.
type Query struct {
	Journal  *journal.Reader
	Benches  []string  // in the order in which they are written
	From, To time.Time // From <= time < To
}

// Format is how rows are written.
type Format string

// The formats of tables.
const (
	CSV       Format = "csv"   // RFC 4180, with a header; what is not known is empty
	JSONLines Format = "jsonl" // one object a line; what is not known is null
)

// TimeLayout is how times are written: RFC 3339 in UTC, to the millisecond.
const TimeLayout = "2006-01-02T15:04:05.000Z"

// blockBytes is about how much is handed to the writer at a time.
const blockBytes = 64 << 10

// lines gathers rows and hands them on, only whole ones. Its fields append to
// the row at hand; end ends it.
type lines struct {
	w   io.Writer
	buf []byte
	col int // of the row at hand
	n   int64
}

func newLines(w io.Writer) *lines { return &lines{w: w, buf: make([]byte, 0, blockBytes+4096)} }

// header writes the row of names of a CSV file. It does not count.
func (l *lines) header(names ...string) {
	for _, n := range names {
		l.text(n)
	}
	l.buf, l.col = append(l.buf, "\r\n"...), 0
}

func (l *lines) next() {
	if l.col++; l.col > 1 {
		l.buf = append(l.buf, ',')
	}
}

// text writes a field of CSV, quoted where RFC 4180 asks for it.
func (l *lines) text(s string) {
	l.next()
	if !strings.ContainsAny(s, "\",\r\n") {
		l.buf = append(l.buf, s...)
		return
	}
	l.buf = append(l.buf, '"')
	l.buf = append(l.buf, strings.ReplaceAll(s, `"`, `""`)...)
	l.buf = append(l.buf, '"')
}

// numbers writes fields of CSV that read back as the same doubles.
func (l *lines) numbers(values ...float64) {
	for _, v := range values {
		l.next()
		if !math.IsNaN(v) && !math.IsInf(v, 0) {
			l.buf = strconv.AppendFloat(l.buf, v, 'g', -1, 64)
		}
	}
}

func (l *lines) counts(values ...int) {
	for _, v := range values {
		l.next()
		l.buf = strconv.AppendInt(l.buf, int64(v), 10)
	}
}

// time writes a field of CSV; the zero time is not known.
func (l *lines) time(t time.Time) {
	l.next()
	if !t.IsZero() {
		l.buf = t.UTC().AppendFormat(l.buf, TimeLayout)
	}
}

// end ends a row.
func (l *lines) end(newline string) error {
	l.buf, l.col = append(l.buf, newline...), 0
	l.n++
	if len(l.buf) < blockBytes {
		return nil
	}
	return l.flush()
}

func (l *lines) flush() error {
	if len(l.buf) == 0 {
		return nil
	}
	_, err := l.w.Write(l.buf)
	l.buf = l.buf[:0]
	return err
}

// done hands on what is left, unless there was an error, and says how many rows
// were written.
func (l *lines) done(err error) (int64, error) {
	if e := l.flush(); err == nil {
		err = e
	}
	return l.n, err
}

// object appends v as a line of JSON.
func (l *lines) object(v any) error {
	b, err := json.Marshal(v)
	if err != nil {
		return err
	}
	l.buf = append(l.buf, b...)
	return l.end("\n")
}

// benches calls f for each bench in order.
func (q *Query) benches(f func(bench string) error) error {
	for _, b := range q.Benches {
		if err := f(b); err != nil {
			return err
		}
	}
	return nil
}

// wants reports whether an event of a bench, or of the daemon, is asked for.
func (q *Query) wants(bench string) bool {
	for _, b := range q.Benches {
		if b == bench {
			return true
		}
	}
	return bench == ""
}

// Events writes the events of the benches and of the daemon, in order of time,
// and returns how many. Their data is JSON, in CSV too.
func Events(ctx context.Context, w io.Writer, q Query, f Format) (int64, error) {
	l := newLines(w)
	if f == CSV {
		l.header("time", "bench", "kind", "text", "data")
	}
	return l.done(q.Journal.EachEvent(ctx, q.From, q.To, func(e journal.EventRow) error {
		if !q.wants(e.Bench) {
			return nil
		}
		if f == CSV {
			l.time(e.At)
			for _, s := range []string{e.Bench, e.Kind, e.Text, string(e.Data)} {
				l.text(s)
			}
			return l.end("\r\n")
		}
		data := any(e.Data)
		if e.Data == nil {
			data = nil
		} else if !json.Valid(e.Data) { // not by this program, but nothing is left out
			data = string(e.Data)
		}
		var bench *string
		if e.Bench != "" {
			bench = &e.Bench
		}
		return l.object(struct {
			Time  string  `json:"time"`
			Bench *string `json:"bench"`
			Kind  string  `json:"kind"`
			Text  string  `json:"text"`
			Data  any     `json:"data"`
		}{e.At.UTC().Format(TimeLayout), bench, e.Kind, e.Text, data})
	}))
}
