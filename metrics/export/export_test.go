package export

import (
	"bytes"
	"context"
	"encoding/csv"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"offbeat/dsp"
	"offbeat/metrics/journal"
)

var (
	begin   = time.Date(2030, 1, 2, 22, 0, 0, 500e6, time.UTC)
	forever = time.Date(9999, 1, 1, 0, 0, 0, 0, time.UTC)
	ctx     = context.Background()
)

// open makes a journal that fill fills, and returns its path.
func open(t testing.TB, fill func(*journal.Journal)) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "j.sqlite")
	j, err := journal.Open(path, journal.Options{Waiting: 4 << 20})
	if err != nil {
		t.Fatal(err)
	}
	fill(j)
	if err := j.Close(); err != nil {
		t.Fatal(err)
	}
	return path
}

// all is a query for everything in a journal.
func all(t testing.TB, path string, benches ...string) Query {
	t.Helper()
	r, err := journal.OpenReadOnly(path)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { r.Close() })
	return Query{Journal: r, Benches: benches, To: forever}
}

func at(i int) time.Time { return begin.Add(time.Duration(i) * time.Second) }

// anything is a reading with random values, each unknown at times. Levels are
// hundredths of a decibel, as the journal keeps them.
func anything(r *rand.Rand, i int) dsp.Reading {
	g := dsp.Blank(float64(i)+0.5, dsp.States[r.IntN(len(dsp.States))])
	number := func() float64 { return r.NormFloat64() * math.Pow(10, float64(r.IntN(24)-12)) }
	for _, p := range []*float64{&g.Beat, &g.BeatU, &g.BeatAbs, &g.CarrierTone, &g.LocalTone, &g.SpreadHz, &g.Phase} {
		if r.IntN(4) > 0 {
			*p = number()
		}
	}
	for _, p := range []*float64{&g.CarrierDBFS, &g.LocalDBFS, &g.CarrierCN0, &g.LocalCN0, &g.InputDBFS} {
		if r.IntN(4) > 0 {
			*p = float64(r.IntN(20000)-12000) / 100
		}
	}
	if r.IntN(4) > 0 {
		g.Span = float64(r.IntN(256000)) / 1000
	}
	g.PhaseRun, g.Clipped = r.IntN(100), r.IntN(48000)
	for _, f := range dsp.Flags {
		if r.IntN(3) == 0 {
			g.Flags = append(g.Flags, f)
		}
	}
	return g
}

// random fills a journal with readings of two benches, the set-up of one of
// which changes; it has gaps, and more rows than a page and than a chunk.
func random(t testing.TB) (path string, rows map[string][]journal.Row) {
	seed := uint64(time.Now().UnixNano())
	t.Logf("seed %d", seed)
	r := rand.New(rand.NewPCG(seed, 4))
	rows = map[string][]journal.Row{}
	path = open(t, func(j *journal.Journal) {
		for _, bench := range []string{"counter", "generator"} {
			setup := &journal.Setup{Hookup: "two-tone", Sideband: "usb", CarrierHz: 10e6, LocalHz: 10e6, Input: `a "test", with \ and more`}
			j.Setup(bench, *setup)
			i := 0
			for n := range map[string]int{"counter": chunkRows + 1, "generator": 200}[bench] + r.IntN(400) {
				if n == 2000 && bench == "counter" {
					setup = &journal.Setup{Hookup: "two-tone", Sideband: "lsb", CarrierHz: 5e6, LocalHz: 5e6 + 100, Input: "another"}
					j.Setup(bench, *setup)
				}
				if i++; r.IntN(200) == 0 {
					i += r.IntN(30)
				}
				g := anything(r, i)
				j.Append(bench, at(i), g)
				rows[bench] = append(rows[bench], journal.Row{At: at(i), Setup: setup, Reading: g})
			}
		}
	})
	for _, list := range rows {
		for i := range list { // what the journal derives, by its own account
			g := &list[i].Reading
			if s := list[i].Setup; !math.IsNaN(g.Beat) {
				g.BeatAbs = math.Abs(g.Beat)
				g.Error = g.Beat - (s.LocalHz - s.CarrierHz)
				g.Offset, g.OffsetU = g.Error/s.LocalHz, g.BeatU/s.LocalHz
			}
		}
	}
	return path, rows
}

func equal(a, b dsp.Reading) bool { return fmt.Sprintf("%+v", a) == fmt.Sprintf("%+v", b) }

// What is exported as CSV reads back as what was put into the journal, bit for
// bit. The reader is the standard library's.
func TestCSVRoundTrip(t *testing.T) {
	path, rows := random(t)
	var out bytes.Buffer
	n, err := Readings(ctx, &out, all(t, path, "counter", "generator"), CSV)
	if err != nil || int(n) != len(rows["counter"])+len(rows["generator"]) {
		t.Fatal(n, err)
	}
	if lines := bytes.Count(out.Bytes(), []byte("\r\n")); lines != int(n)+1 || lines != bytes.Count(out.Bytes(), []byte("\n")) {
		t.Errorf("%d lines end as RFC 4180 asks, of %d", lines, n+1)
	}
	got, err := csv.NewReader(&out).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	column := map[string]int{}
	for i, name := range got[0] {
		column[name] = i
	}
	i := 0
	for _, bench := range []string{"counter", "generator"} {
		for _, want := range rows[bench] {
			i++
			field := func(name string) string { return got[i][column[name]] }
			num := func(name string) float64 {
				if field(name) == "" {
					return math.NaN()
				}
				v, err := strconv.ParseFloat(field(name), 64)
				if err != nil {
					t.Fatal(err)
				}
				return v
			}
			g := dsp.Blank(num("t_s"), dsp.State(field("state")))
			g.Beat, g.BeatU, g.BeatAbs, g.Error = num("beat_hz"), num("beat_u_hz"), num("beat_abs_hz"), num("error_hz")
			g.Offset, g.OffsetU, g.CarrierTone, g.LocalTone = num("offset"), num("offset_u"), num("carrier_tone_hz"), num("local_tone_hz")
			g.CarrierDBFS, g.LocalDBFS, g.CarrierCN0, g.LocalCN0 = num("carrier_dbfs"), num("local_dbfs"), num("carrier_cn0_dbhz"), num("local_cn0_dbhz")
			g.SpreadHz, g.Span, g.Phase, g.InputDBFS = num("spread_hz"), num("span_s"), num("phase_cycles"), num("input_dbfs")
			g.PhaseRun, g.Clipped = int(num("phase_run")), int(num("clipped_samples"))
			for _, f := range strings.Fields(field("flags")) {
				g.Flags = append(g.Flags, dsp.Flag(f))
			}
			when, err := time.Parse(time.RFC3339, field("time"))
			if err != nil || !when.Equal(want.At) || field("bench") != bench || !equal(g, want.Reading) {
				t.Fatalf("row %d of %s at %v (%v):\n%+v\n%+v", i, bench, when, err, g, want.Reading)
			}
		}
	}
}

// A line of JSON has the fixed keys of a reading and reads back as it.
func TestJSONLinesRoundTrip(t *testing.T) {
	path, rows := random(t)
	var out bytes.Buffer
	if _, err := Readings(ctx, &out, all(t, path, "generator", "counter"), JSONLines); err != nil {
		t.Fatal(err)
	}
	lines := bytes.Split(bytes.TrimSuffix(out.Bytes(), []byte("\n")), []byte("\n"))
	i := 0
	for _, bench := range []string{"generator", "counter"} {
		for _, want := range rows[bench] {
			var head struct{ Time, Bench string }
			var g dsp.Reading
			if err := errors.Join(json.Unmarshal(lines[i], &head), json.Unmarshal(lines[i], &g)); err != nil {
				t.Fatalf("%v: %s", err, lines[i])
			}
			if len(g.Flags) == 0 {
				g.Flags = nil
			}
			if when, err := time.Parse(time.RFC3339, head.Time); err != nil || !when.Equal(want.At) || head.Bench != bench || !equal(g, want.Reading) {
				t.Fatalf("line %d: %s\n%+v\n%+v", i, lines[i], g, want.Reading)
			}
			i++
		}
	}
	if i != len(lines) {
		t.Errorf("%d lines, want %d", len(lines), i)
	}
	var keys map[string]any
	json.Unmarshal(lines[0], &keys)
	for _, k := range []string{"t", "state", "beat_hz", "beat_u_hz", "beat_abs_hz", "error_hz", "offset", "offset_u", "carrier_tone_hz", "local_tone_hz",
		"carrier_dbfs", "local_dbfs", "carrier_cn0_dbhz", "local_cn0_dbhz", "spread_hz", "span_s", "phase_cycles", "flags"} {
		if _, ok := keys[k]; !ok {
			t.Errorf("the key %s of the contract is missing", k)
		}
	}
}

// Only what lies in the span comes, its end excluded.
func TestSpan(t *testing.T) {
	path := open(t, func(j *journal.Journal) {
		for i := range 5000 {
			j.Append("counter", at(i), dsp.Blank(float64(i)+0.5, dsp.Silent))
		}
	})
	q := all(t, path, "counter")
	q.From, q.To = at(100), at(4200)
	var out bytes.Buffer
	if n, err := Readings(ctx, &out, q, JSONLines); err != nil || n != 4100 {
		t.Error(n, err)
	}
	if s := out.String(); !strings.HasPrefix(s, `{"time":"2030-01-02T22:01:40.500Z","bench":"counter","t":100.5,"state":"silent","beat_hz":null,`) ||
		!strings.Contains(s, `"t":4199.5`) || strings.Contains(s, `"t":4200.5`) {
		t.Errorf("%.200s", s)
	}
}

// Events with everything that needs quoting.
func TestEvents(t *testing.T) {
	texts := []string{"", "plain", `say "so"`, "a,b", "two\nlines", "two\r\nlines", "größer → µHz", `back\slash`}
	path := open(t, func(j *journal.Journal) {
		for i, s := range texts {
			j.Event([]string{"counter", ""}[i%2], at(i), journal.Note, s, map[string]any{"text": s, "n": i})
		}
		j.Event("counter", at(100), journal.Turn, "+1/8", nil)
		j.Event("generator", at(101), journal.Note, "of another bench", nil)
	})
	var table, objects bytes.Buffer
	q := all(t, path, "counter")
	n, err := Events(ctx, &table, q, CSV)
	if err != nil || int(n) != len(texts)+1 {
		t.Fatal(n, err)
	}
	if n, err := Events(ctx, &objects, q, JSONLines); err != nil || int(n) != len(texts)+1 {
		t.Fatal(n, err)
	}
	rows, err := csv.NewReader(&table).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	lines := strings.Split(strings.TrimSuffix(objects.String(), "\n"), "\n")
	for i, want := range append(slices.Clone(texts), "+1/8") {
		var o struct {
			Time, Kind, Text string
			Bench            *string
			Data             *struct{ Text string }
		}
		if err := json.Unmarshal([]byte(lines[i]), &o); err != nil {
			t.Fatal(err)
		}
		row := rows[i+1]
		// The standard library's reader turns \r\n within quotes into \n.
		if row[3] != strings.ReplaceAll(want, "\r\n", "\n") || o.Text != want || o.Kind != row[2] {
			t.Errorf("%q came back as %q and %q", want, row[3], o.Text)
		}
		if (o.Bench == nil) != (row[1] == "") || o.Time != row[0] {
			t.Errorf("%v %v", o, row)
		}
		if want == "+1/8" {
			if o.Data != nil || row[4] != "" {
				t.Errorf("no data came back as %v and %q", o.Data, row[4])
			}
			continue
		}
		var data struct{ Text string }
		if err := json.Unmarshal([]byte(row[4]), &data); err != nil || data.Text != want || o.Data.Text != want {
			t.Errorf("data of %q: %v %q", want, err, row[4])
		}
	}
}

// failing takes some bytes, then fails; it remembers what it took.
type failing struct {
	bytes.Buffer
	left int
}

func (f *failing) Write(p []byte) (int, error) {
	if f.left -= len(p); f.left < 0 {
		return 0, io.ErrClosedPipe
	}
	return f.Buffer.Write(p)
}

// An output that fails, and a context that ends, stop the work at once, with
// whole rows only.
func TestStops(t *testing.T) {
	path, _ := random(t)
	q := all(t, path, "counter", "generator")
	done, cancel := context.WithCancel(ctx)
	cancel()
	for name, write := range map[string]func(context.Context, io.Writer) (int64, error){
		"csv":   func(c context.Context, w io.Writer) (int64, error) { return Readings(c, w, q, CSV) },
		"jsonl": func(c context.Context, w io.Writer) (int64, error) { return Readings(c, w, q, JSONLines) },
		"openmetrics": func(c context.Context, w io.Writer) (int64, error) {
			return OpenMetrics(c, w, q, Options{Dir: t.TempDir()})
		},
	} {
		f := &failing{left: 300_000}
		if _, err := write(ctx, f); !errors.Is(err, io.ErrClosedPipe) {
			t.Errorf("%s: %v", name, err)
		}
		if f.Len() == 0 || !bytes.HasSuffix(f.Bytes(), []byte("\n")) {
			t.Errorf("%s: the last row is half written", name)
		}
		if _, err := write(done, io.Discard); !errors.Is(err, context.Canceled) {
			t.Errorf("%s: %v", name, err)
		}
	}
}
