package export

import (
	"context"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"offbeat/metrics"
	"offbeat/metrics/journal"
)

// Options of OpenMetrics.
type Options struct {
	Every  time.Duration // keep the last reading of each such interval; 0: all
	Labels [][2]string   // names and values, on every series: job, instance
	Dir    string        // for the temporary file
}

// OpenMetrics writes the readings as OpenMetrics 1.0 text with times, for back-
// filling, and returns how many samples. Names and labels are those of the live
// exposition.
//
// The format wants all samples of a series together and all series of a family
// together, whereas the journal has them second by second. One pass over the
// journal therefore fills a temporary file, column by column, from which the
// series are written one after another: some 270 bytes a reading, a ninth of
// what is written. That is faster than reading the journal once for each of the
// thirty series, and no series tells of a second that another does not know.
//
// A value that is not known is absent. A bench is down from metrics.StaleAfter
// after a reading on, if none follows: at that time offbeat_bench_up has a 0.
func OpenMetrics(ctx context.Context, w io.Writer, q Query, opt Options) (int64, error) {
	o, err := newOpenMetrics(opt)
	if err != nil {
		return 0, err
	}
	defer o.spool.close()
	if err := q.benches(func(bench string) error { return o.read(ctx, q, bench) }); err != nil {
		return 0, err
	}
	return o.write(ctx, newLines(w))
}

type openMetrics struct {
	opt      Options
	families []metrics.Family
	of       []metrics.Series // of columns from firstSeries on
	infos    []metrics.BenchInfo
	spool    *spool
	benches  []section
	row      []float64
	times    []float64 // of the chunk being written
	values   []float64
}

// section is what the spool holds of a bench.
type section struct {
	bench  string
	chunks []chunk
	known  []int  // of each column: how many values are not NaN
	infos  []bool // which of openMetrics.infos it had
}

// The columns of the spool.
const (
	columnTime  = iota // Unix ms
	columnUp           // 0 or 1
	columnInfo         // index into openMetrics.infos
	firstSeries        // one for each series of metrics.History
)

func newOpenMetrics(opt Options) (*openMetrics, error) {
	o := &openMetrics{opt: opt, families: metrics.History()}
	for _, f := range o.families {
		o.of = append(o.of, f.Series...)
	}
	o.row = make([]float64, firstSeries+len(o.of))
	var err error
	o.spool, err = newSpool(opt.Dir, len(o.row))
	return o, err
}

// read puts the readings of a bench into the spool.
func (o *openMetrics) read(ctx context.Context, q Query, bench string) error {
	s := section{bench: bench, known: make([]int, len(o.row))}
	add := func() error {
		for i, v := range o.row {
			if !math.IsNaN(v) {
				s.known[i]++
			}
		}
		return o.spool.add(o.row)
	}
	var last journal.Row // not added yet: a later one of its interval may take its place
	have := false
	addLast := func() error {
		o.fill(&s, &last)
		return add()
	}
	err := q.Journal.Readings(ctx, bench, q.From, q.To, func(row journal.Row) error {
		if have && o.interval(row.At) != o.interval(last.At) {
			if err := addLast(); err != nil {
				return err
			}
		}
		if have && row.At.Sub(last.At) > metrics.StaleAfter {
			o.down(last.At.Add(metrics.StaleAfter))
			if err := add(); err != nil {
				return err
			}
		}
		last, have = row, true
		return nil
	})
	if err == nil && have {
		err = addLast()
	}
	if err != nil {
		return err
	}
	s.chunks, err = o.spool.cut()
	o.benches = append(o.benches, s)
	return err
}

// interval numbers the interval that a time lies in.
func (o *openMetrics) interval(t time.Time) int64 {
	every := max(o.opt.Every.Milliseconds(), 1)
	ms := t.UnixMilli()
	n := ms / every
	if ms%every < 0 {
		n--
	}
	return n
}

// fill makes the row of a reading.
func (o *openMetrics) fill(s *section, row *journal.Row) {
	info := metrics.BenchInfo{Hookup: row.Setup.Hookup, Sideband: row.Setup.Sideband, CarrierHz: row.Setup.CarrierHz, LocalHz: row.Setup.LocalHz, Input: row.Setup.Input}
	n := slices.Index(o.infos, info)
	if n < 0 {
		n = len(o.infos)
		o.infos = append(o.infos, info)
	}
	for len(s.infos) <= n {
		s.infos = append(s.infos, false)
	}
	s.infos[n] = true
	o.row[columnTime], o.row[columnUp], o.row[columnInfo] = float64(row.At.UnixMilli()), 1, float64(n)
	for i, series := range o.of {
		o.row[firstSeries+i] = series.Of(&row.Reading)
	}
}

// down makes the row that says that a bench is down.
func (o *openMetrics) down(at time.Time) {
	for i := range o.row {
		o.row[i] = math.NaN()
	}
	o.row[columnTime], o.row[columnUp] = float64(at.UnixMilli()), 0
}

// series is a series to be written: a column of a bench's section.
type series struct {
	*section
	column int
	labels [][2]string
	only   float64 // NaN: all values; else a 1 wherever the column has this
}

// write writes the families one after another.
func (o *openMetrics) write(ctx context.Context, l *lines) (int64, error) {
	var infos, ups []series
	for i := range o.benches {
		s := &o.benches[i]
		for n, has := range s.infos {
			if has {
				infos = append(infos, series{s, columnInfo, o.infos[n].Labels(), float64(n)})
			}
		}
		ups = append(ups, series{s, columnUp, nil, math.NaN()})
	}
	err := o.family(ctx, l, metrics.InfoFamily(), infos)
	if err == nil {
		err = o.family(ctx, l, metrics.UpFamily(), ups)
	}
	column := firstSeries
	for _, f := range o.families {
		var all []series
		for i := range o.benches {
			for n, one := range f.Series {
				all = append(all, series{&o.benches[i], column + n, one.Labels, math.NaN()})
			}
		}
		column += len(f.Series)
		if err == nil {
			err = o.family(ctx, l, f, all)
		}
	}
	if err == nil {
		l.buf = append(l.buf, "# EOF\n"...)
	}
	return l.done(err)
}

// family writes a family, if any of its values is known.
func (o *openMetrics) family(ctx context.Context, l *lines, f metrics.Family, all []series) error {
	all = slices.DeleteFunc(all, func(s series) bool { return s.known[s.column] == 0 })
	if len(all) == 0 {
		return nil
	}
	l.buf = append(l.buf, "# HELP "+f.Name+" "+escape(f.Help)+"\n# TYPE "+f.Name+" gauge\n"...)
	if f.Unit != "" {
		l.buf = append(l.buf, "# UNIT "+f.Name+" "+f.Unit+"\n"...)
	}
	for _, s := range all {
		head := f.Name + `{bench="` + escape(s.bench) + `"`
		for _, label := range slices.Concat(s.labels, o.opt.Labels) {
			head += "," + label[0] + `="` + escape(label[1]) + `"`
		}
		if err := o.samples(ctx, l, head+"} ", s); err != nil {
			return err
		}
	}
	return nil
}

// samples writes the samples of a series. Times are in seconds with
// milliseconds, which Prometheus reads back to the millisecond (until 2038: from
// then on its arithmetic is one short for some).
func (o *openMetrics) samples(ctx context.Context, l *lines, head string, s series) (err error) {
	for _, c := range s.chunks {
		if ctx.Err() != nil {
			return ctx.Err()
		}
		if o.times, err = o.spool.column(c, columnTime, o.times); err != nil {
			return err
		}
		if o.values, err = o.spool.column(c, s.column, o.values); err != nil {
			return err
		}
		for i, v := range o.values {
			if math.IsNaN(v) || math.IsInf(v, 0) {
				continue
			}
			if !math.IsNaN(s.only) {
				if v != s.only {
					continue
				}
				v = 1
			}
			l.buf = append(l.buf, head...)
			l.buf = append(strconv.AppendFloat(l.buf, v, 'g', -1, 64), ' ')
			l.buf = appendSeconds(l.buf, int64(o.times[i]))
			if err := l.end("\n"); err != nil {
				return err
			}
		}
	}
	return nil
}

// appendSeconds writes Unix milliseconds as seconds, without a detour over
// floating point.
func appendSeconds(dst []byte, ms int64) []byte {
	if ms < 0 {
		dst, ms = append(dst, '-'), -ms
	}
	dst = append(strconv.AppendInt(dst, ms/1000, 10), '.')
	ms %= 1000
	return append(dst, byte('0'+ms/100), byte('0'+ms/10%10), byte('0'+ms%10))
}

// escape escapes a label's value or a help text as OpenMetrics has it.
var escape = strings.NewReplacer(`\`, `\\`, `"`, `\"`, "\n", `\n`).Replace
