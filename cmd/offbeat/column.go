package main

import (
	"bufio"
	"bytes"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"
)

// column says which numbers of a text are meant.
type column struct {
	name string // of a CSV column, or its number from 1; empty: one number a line
	time string // likewise, of the column with times; empty: evenly spaced
}

// numbers is a column as it was read.
type numbers struct {
	values []float64 // NaN: missing
	times  []float64 // seconds from 1970 or from anywhere; nil: evenly spaced
	notes  []string  // what was odd, a clear line each
}

// missingWords stand for a missing value, in any case.
var missingWords = []string{"", "nan", "na", "n/a", "null", "none", "-"}

// longestLine is more than any sane line.
const longestLine = 1 << 20

// columnReader reads a column line by line.
type columnReader struct {
	column
	at, timeAt int // index of the columns; -1: not yet known
	separator  byte
	line       int
	out        numbers
	odd        oddities
}

// oddities counts what is noted in one line at the end.
type oddities struct {
	text, infinite, short, times    int
	firstText, firstShort, firstBad string
}

// readColumn reads numbers: one a line, or a column of a table with a header or
// without. Lines that begin with # and empty lines are left out; the table's
// separator is the first of tab, semicolon and comma that the first line holds,
// else space. What is not a number counts as missing, so that the others stay in
// their places, and is noted.
func readColumn(r io.Reader, c column) (numbers, error) {
	p := &columnReader{column: c, at: -1, timeAt: -1}
	in := bufio.NewReaderSize(r, 64<<10)
	var long []byte
	for {
		part, err := in.ReadSlice('\n')
		if errors.Is(err, bufio.ErrBufferFull) {
			if long = append(long, part...); len(long) > longestLine {
				return p.out, fmt.Errorf("line %d is longer than a million characters: this is not a column of numbers", p.line+1)
			}
			continue
		}
		if err != nil && !errors.Is(err, io.EOF) {
			return p.out, err
		}
		line := part
		if long != nil {
			line, long = append(long, part...), nil
		}
		p.line++
		if bytes.IndexByte(line, 0) >= 0 {
			return p.out, fmt.Errorf("line %d holds binary data: a column of numbers is text", p.line)
		}
		if p.line == 1 {
			line = bytes.TrimPrefix(line, []byte("\xef\xbb\xbf"))
		}
		if line = bytes.TrimSpace(line); len(line) > 0 && line[0] != '#' {
			if bad := p.take(string(line)); bad != nil {
				return p.out, bad
			}
		}
		if err != nil {
			return p.end()
		}
	}
}

// take reads a line that is neither empty nor a comment.
func (p *columnReader) take(line string) error {
	if p.name == "" && p.time == "" {
		return p.single(line)
	}
	if p.separator == 0 {
		p.separator = ' '
		for _, s := range "\t;," {
			if strings.ContainsRune(line, s) {
				p.separator = byte(s)
				break
			}
		}
	}
	fields := splitFields(line, p.separator)
	if p.at < 0 {
		header, err := p.find(fields)
		if err != nil || header {
			return err
		}
	}
	if p.time != "" {
		t, err := parseWhen(field(fields, p.timeAt))
		if err != nil {
			if p.odd.times++; p.odd.times == 1 {
				p.odd.firstBad = fmt.Sprintf("line %d: %s", p.line, quoted(field(fields, p.timeAt)))
			}
			return nil
		}
		p.out.times = append(p.out.times, t)
	}
	if p.at >= len(fields) {
		if p.odd.short++; p.odd.short == 1 {
			p.odd.firstShort = fmt.Sprint("line ", p.line)
		}
	}
	p.add(field(fields, p.at))
	return nil
}

// single reads a line of one number.
func (p *columnReader) single(line string) error {
	if _, ok := parseCell(line); ok {
		p.add(line)
		return nil
	}
	if n := len(strings.FieldsFunc(line, func(r rune) bool { return strings.ContainsRune(",; \t", r) })); n > 1 {
		return fmt.Errorf("line %d holds %d columns (%s): say which with --column", p.line, n, quoted(line))
	}
	p.add(line)
	return nil
}

// find finds the columns in the first line and reports whether that is a header.
func (p *columnReader) find(fields []string) (header bool, err error) {
	name := p.name
	if name == "" {
		name = "2" // --time alone: the usual pair
		if len(fields) == 1 {
			return false, fmt.Errorf("line %d holds one column: with --time say which holds the numbers by --column", p.line)
		}
	}
	var named [2]bool
	for i, want := range []string{name, p.time} {
		if want == "" {
			continue
		}
		at := slices.IndexFunc(fields, func(f string) bool { return f == want })
		if at < 0 {
			at = slices.IndexFunc(fields, func(f string) bool { return strings.EqualFold(f, want) })
		}
		named[i] = at >= 0
		if n, bad := strconv.Atoi(want); at < 0 && bad == nil && n >= 1 && n <= 10000 {
			if at = n - 1; at >= len(fields) {
				return false, fmt.Errorf("there is no column %d: line %d has %d", n, p.line, len(fields))
			}
		}
		if at < 0 {
			return false, fmt.Errorf("there is no column %s: line %d has %s", quoted(want), p.line, columnNames(fields))
		}
		if i == 0 {
			p.at = at
		} else {
			p.timeAt = at
		}
	}
	if named[0] || named[1] {
		return true, nil
	}
	_, number := parseCell(fields[p.at])
	return !number, nil
}

// add takes a cell as the next value.
func (p *columnReader) add(cell string) {
	v, ok := parseCell(cell)
	if !ok {
		v = math.NaN()
		if p.odd.text++; p.odd.text == 1 {
			p.odd.firstText = fmt.Sprintf("line %d: %s", p.line, quoted(cell))
		}
	}
	if math.IsInf(v, 0) {
		v = math.NaN()
		p.odd.infinite++
	}
	p.out.values = append(p.out.values, v)
}

// end words what was odd.
func (p *columnReader) end() (numbers, error) {
	note := func(n int, format string, args ...any) {
		if n > 0 {
			p.out.notes = append(p.out.notes, fmt.Sprintf(format, args...))
		}
	}
	o := &p.odd
	note(o.text, "%s is not a number and counts as missing%s", o.firstText, others(o.text))
	note(o.infinite, "%s counted as missing", plural(o.infinite, "infinite value"))
	note(o.short, "%s has no such column and counts as missing%s", o.firstShort, others(o.short))
	note(o.times, "%s is not a time (seconds, or 2006-01-02T15:04:05Z): the line was left out%s", o.firstBad, others(o.times))
	return p.out, nil
}

// others says that there were more of a kind.
func others(n int) string {
	if n < 2 {
		return ""
	}
	return fmt.Sprintf("; %d such lines in all", n)
}

// parseCell reads a decimal number or a word for a missing one.
func parseCell(s string) (float64, bool) {
	s = strings.TrimSpace(s)
	for _, w := range missingWords {
		if strings.EqualFold(s, w) {
			return math.NaN(), true
		}
	}
	number, rest := splitNumber(s)
	if rest != "" || number == "" {
		switch strings.ToLower(strings.TrimLeft(s, "+-")) {
		case "inf", "infinity":
			return math.Inf(1), true
		}
		return 0, false
	}
	v, err := strconv.ParseFloat(number, 64)
	return v, err == nil || math.IsInf(v, 0)
}

// field returns a field, or nothing where the line is too short.
func field(fields []string, i int) string {
	if i >= len(fields) {
		return ""
	}
	return fields[i]
}

// splitFields splits a line of a table. A field may stand in double quotes, a
// quote within them doubled (RFC 4180, but a record is one line). Spaces count as
// one separator.
func splitFields(line string, separator byte) []string {
	if separator == ' ' {
		return strings.Fields(line)
	}
	var out []string
	for {
		line = strings.TrimLeft(line, " ")
		var f string
		if strings.HasPrefix(line, `"`) {
			f, line = cutQuoted(line[1:])
		}
		i := strings.IndexByte(line, separator)
		if i < 0 {
			return append(out, f+strings.TrimSpace(line))
		}
		out = append(out, f+strings.TrimSpace(line[:i]))
		line = line[i+1:]
	}
}

// cutQuoted cuts the text up to the closing quote, or all without one.
func cutQuoted(s string) (text, rest string) {
	var b strings.Builder
	for {
		i := strings.IndexByte(s, '"')
		if i < 0 {
			return b.String() + s, ""
		}
		b.WriteString(s[:i])
		if s = s[i+1:]; !strings.HasPrefix(s, `"`) {
			return b.String(), s
		}
		b.WriteByte('"')
		s = s[1:]
	}
}

// columnNames lists the columns of a header for an error.
func columnNames(fields []string) string {
	const most = 12
	var names []string
	for i, f := range fields {
		if i == most {
			names = append(names, "…")
			break
		}
		names = append(names, quoted(f))
	}
	return strings.Join(names, ", ")
}

// whenLayouts are the times that are understood; those without a zone are UTC.
var whenLayouts = []string{time.RFC3339Nano, "2006-01-02T15:04:05", "2006-01-02 15:04:05Z07:00", "2006-01-02 15:04:05", "2006-01-02T15:04", "2006-01-02 15:04", "2006-01-02"}

// parseWhen reads a time, in seconds: a number or a date.
func parseWhen(s string) (float64, error) {
	if v, ok := parseCell(s); ok && !math.IsNaN(v) && !math.IsInf(v, 0) {
		return v, nil
	}
	t, err := parseInstant(s)
	if err != nil {
		return 0, err
	}
	return float64(t.Unix()) + float64(t.Nanosecond())/1e9, nil
}

// parseInstant reads a date and time.
func parseInstant(s string) (time.Time, error) {
	s = strings.TrimSpace(s)
	for _, l := range whenLayouts {
		if t, err := time.Parse(l, s); err == nil {
			return t.UTC(), nil
		}
	}
	return time.Time{}, fmt.Errorf("%s: write a time as 2006-01-02T15:04:05Z, or 2006-01-02 15:04 in UTC", quoted(s))
}
