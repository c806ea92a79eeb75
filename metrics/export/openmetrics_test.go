package export

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"net/http/httptest"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"
	"time"

	"offbeat/dsp"
	"offbeat/metrics"
	"offbeat/metrics/journal"
)

func openMetricsOf(t testing.TB, q Query, opt Options) string {
	t.Helper()
	if opt.Dir == "" {
		opt.Dir = t.TempDir()
	}
	var out bytes.Buffer
	if _, err := OpenMetrics(ctx, &out, q, opt); err != nil {
		t.Fatal(err)
	}
	if left, err := os.ReadDir(opt.Dir); err != nil || len(left) > 0 {
		t.Errorf("left behind: %v %v", left, err)
	}
	return out.String()
}

// Of the same reading the live exposition and the history say the same, line by
// line: names, types, help, labels and values.
func TestSameAsLive(t *testing.T) {
	r := dsp.Blank(0.5, dsp.Apart)
	r.Beat, r.BeatAbs, r.BeatU, r.Error, r.Offset, r.OffsetU = 3.25, 3.25, 0.001, 3.25, 3.25/10e6, 0.001/10e6
	r.CarrierTone, r.LocalTone, r.CarrierDBFS, r.LocalDBFS, r.CarrierCN0, r.LocalCN0 = 1000, 1003.25, -20.25, -18.5, 55.5, 57.75
	r.SpreadHz, r.Span, r.InputDBFS = 0.0625, 1, -12.5
	r.Flags = []dsp.Flag{dsp.Spread, dsp.Unproven}
	setup := journal.Setup{Hookup: "two-tone", Sideband: "usb", CarrierHz: 10e6, LocalHz: 10e6, Input: `a "test"`}
	e := metrics.New(metrics.BuildInfo{})
	e.Bench("counter", metrics.BenchInfo{Hookup: setup.Hookup, Sideband: setup.Sideband, CarrierHz: setup.CarrierHz, LocalHz: setup.LocalHz, Input: setup.Input}).Reading(r)
	path := open(t, func(j *journal.Journal) {
		j.Setup("counter", setup)
		j.Append("counter", begin, r)
	})
	text := openMetricsOf(t, all(t, path, "counter"), Options{})

	req := httptest.NewRequest("GET", "/metrics", nil)
	req.Header.Set("Accept", "application/openmetrics-text; version=1.0.0")
	w := httptest.NewRecorder()
	e.Handler().ServeHTTP(w, req)
	// A line as set of labels and a value; the live ones have no time.
	parts := regexp.MustCompile(`[{},]+`)
	normal := func(line string) string {
		f := parts.Split(line, -1)
		if len(f) > 2 {
			slices.Sort(f[1 : len(f)-1])
		}
		return strings.Replace(strings.Join(f, "|"), "e+06", "000000", 1)
	}
	var live, history []string
	families := map[string]bool{}
	for line := range strings.Lines(text) {
		line = strings.TrimSpace(line)
		if name, ok := strings.CutPrefix(line, "# TYPE "); ok {
			families[strings.Fields(name)[0]] = true
		}
		switch {
		case line == "# EOF", strings.HasPrefix(line, "# UNIT "):
		case strings.HasPrefix(line, "#"):
			history = append(history, line)
		default:
			sample, ok := strings.CutSuffix(line, " 1893621600.500")
			if !ok {
				t.Errorf("not at the time of the reading: %s", line)
			}
			history = append(history, normal(sample))
		}
	}
	for line := range strings.Lines(w.Body.String()) {
		line = strings.TrimSpace(line)
		name := strings.FieldsFunc(strings.TrimPrefix(strings.TrimPrefix(line, "# TYPE "), "# HELP "), func(r rune) bool { return r == ' ' || r == '{' })[0]
		if !families[name] {
			continue
		}
		if line = strings.TrimSuffix(line, ".0"); !strings.HasPrefix(line, "#") {
			line = normal(line)
		}
		live = append(live, line)
	}
	slices.Sort(live)
	slices.Sort(history)
	if len(live) < 60 || !slices.Equal(live, history) {
		t.Errorf("live:\n%s\nhistory:\n%s", strings.Join(live, "\n"), strings.Join(history, "\n"))
	}
	if m := regexp.MustCompile(`# UNIT offbeat_(\S+) (\S+)`).FindAllStringSubmatch(text, -1); len(m) < 10 {
		t.Errorf("units: %v", m)
	}
}

// sample is a line of the reference parser.
type sample struct {
	Name   string
	Labels map[string]string
	Value  float64
	Time   float64
}

// reference parses with the reference implementation of the format, the
// OpenMetrics parser of Python's prometheus_client (0.16 when this was
// written), which refuses what is interleaved, out of order, or wrong in type
// or unit.
func reference(t *testing.T, text string) (out []sample) {
	t.Helper()
	python := ""
	for _, p := range []string{"python3", "/usr/bin/python3"} { // Debian's own may stand behind another
		if exec.Command(p, "-c", "import prometheus_client.openmetrics.parser").Run() == nil {
			python = p
		}
	}
	if python == "" {
		t.Skip("SKIPPED: python3-prometheus-client (Debian package) is not installed: the reference parser did not see the OpenMetrics text")
	}
	const program = `
import json, sys
from prometheus_client.openmetrics.parser import text_string_to_metric_families
for f in text_string_to_metric_families(sys.stdin.read()):
    assert f.type == "gauge" and f.documentation.endswith("."), f
    for s in f.samples:
        ts = s.timestamp
        print(json.dumps({"Name": s.name, "Labels": s.labels, "Value": s.value, "Time": float(ts)}))
`
	cmd := exec.Command(python, "-c", program)
	cmd.Stdin = strings.NewReader(text)
	var errs bytes.Buffer
	cmd.Stderr = &errs
	raw, err := cmd.Output()
	if err != nil {
		t.Fatalf("the reference parser refuses it: %v\n%s", err, errs.String())
	}
	for line := range bytes.Lines(raw) {
		var s sample
		if err := json.Unmarshal(line, &s); err != nil {
			t.Fatal(err)
		}
		out = append(out, s)
	}
	return out
}

// The reference parser finds every value that the journal has, and nothing
// else. What there should be is made here from the journal's rows, value by
// value.
func TestReferenceParser(t *testing.T) {
	path, rows := random(t)
	text := openMetricsOf(t, all(t, path, "counter", "generator"), Options{Labels: [][2]string{{"job", `of"f\beat`}}})
	want := map[string]float64{}
	for bench, list := range rows {
		for i := range list {
			g, s := &list[i].Reading, list[i].Setup
			put := func(name, labels string, v float64, at time.Time) {
				if !math.IsNaN(v) {
					want[fmt.Sprintf("%s %s %s %d", name, bench, labels, at.UnixMilli())] = v
				}
			}
			for name, v := range map[string]float64{"beat_hertz": g.Beat, "beat_abs_hertz": g.BeatAbs, "beat_uncertainty_hertz": g.BeatU, "error_hertz": g.Error,
				"offset_ratio": g.Offset, "offset_uncertainty_ratio": g.OffsetU, "doppler_spread_hertz": g.SpreadHz, "span_seconds": g.Span, "input_level_dbfs": g.InputDBFS} {
				put(name, "", v, list[i].At)
			}
			for tone, v := range map[string][3]float64{"carrier": {g.CarrierTone, g.CarrierDBFS, g.CarrierCN0}, "local": {g.LocalTone, g.LocalDBFS, g.LocalCN0}} {
				put("tone_frequency_hertz", tone, v[0], list[i].At)
				put("tone_level_dbfs", tone, v[1], list[i].At)
				put("tone_carrier_to_noise_density_dbhz", tone, v[2], list[i].At)
			}
			for _, state := range dsp.States {
				put("state", string(state), map[bool]float64{true: 1}[g.State == state], list[i].At)
			}
			for _, flag := range dsp.Flags {
				put("flag", string(flag), map[bool]float64{true: 1}[slices.Contains(g.Flags, flag)], list[i].At)
			}
			put("bench_info", s.Sideband+s.Input, 1, list[i].At)
			put("bench_up", "", 1, list[i].At)
			if i > 0 && list[i].At.Sub(list[i-1].At) > 5*time.Second {
				put("bench_up", "", 0, list[i-1].At.Add(5*time.Second))
			}
		}
	}
	got := reference(t, text)
	for _, s := range got {
		label := s.Labels["tone"] + s.Labels["state"] + s.Labels["flag"] + s.Labels["sideband"] + s.Labels["input"]
		key := fmt.Sprintf("%s %s %s %d", strings.TrimPrefix(s.Name, "offbeat_"), s.Labels["bench"], label, int64(math.Round(s.Time*1000)))
		if v, ok := want[key]; !ok || v != s.Value || s.Labels["job"] != `of"f\beat` {
			t.Fatalf("%+v is not in the journal: %s %v %v", s, key, v, ok)
		}
		delete(want, key)
	}
	if len(want) > 0 {
		for k := range want {
			t.Fatalf("%d values are missing, such as %s", len(want), k)
		}
	}
	t.Logf("%d samples", len(got))
}

// With an interval its last reading stays, and gaps are still told.
func TestEvery(t *testing.T) {
	path := open(t, func(j *journal.Journal) {
		for i := range 100 {
			if i >= 31 && i < 47 {
				continue
			}
			r := dsp.Blank(float64(i)+0.5, dsp.Lone)
			r.BeatAbs = float64(i)
			j.Append("counter", at(i), r)
		}
	})
	text := openMetricsOf(t, all(t, path, "counter"), Options{Every: 10 * time.Second})
	var beats, ups []string
	for line := range strings.Lines(text) {
		f := strings.Fields(line)
		switch {
		case strings.HasPrefix(line, "offbeat_beat_abs_hertz{"):
			beats = append(beats, f[1])
		case strings.HasPrefix(line, "offbeat_bench_up{"):
			ups = append(ups, f[1]+"@"+strings.TrimPrefix(f[2], "18936216"))
		}
	}
	if got := strings.Join(beats, " "); got != "9 19 29 30 49 59 69 79 89 99" {
		t.Errorf("kept: %s", got)
	}
	if got := strings.Join(ups, " "); got != "1@09.500 1@19.500 1@29.500 1@30.500 0@35.500 1@49.500 1@59.500 1@69.500 1@79.500 1@89.500 1@99.500" {
		t.Errorf("up: %s", got)
	}
}

func TestAppendSeconds(t *testing.T) {
	for ms, want := range map[int64]string{0: "0.000", 5: "0.005", 1893553445501: "1893553445.501", -1500: "-1.500"} {
		if got := string(appendSeconds(nil, ms)); got != want {
			t.Errorf("%d: %s, want %s", ms, got, want)
		}
	}
}

// A temporary file that cannot be made, or grows beyond its disk, is one clear
// line.
func TestSpoolTrouble(t *testing.T) {
	path, _ := random(t)
	q := all(t, path, "counter")
	var out bytes.Buffer
	_, err := OpenMetrics(ctx, &out, q, Options{Dir: filepath.Join(t.TempDir(), "none")})
	if !errors.Is(err, os.ErrNotExist) || !strings.Contains(err.Error(), "let TMPDIR name a directory with room") || out.Len() > 0 {
		t.Errorf("%v, %d bytes", err, out.Len())
	}
	dir := t.TempDir()
	if text, err := exec.Command("mount", "-t", "tmpfs", "-o", "size=64k", "tmpfs", dir).CombinedOutput(); err != nil {
		t.Skipf("SKIPPED: no small file system can be mounted here, so a full disk was not tried: %s", text)
	}
	defer exec.Command("umount", "-l", dir).Run()
	_, err = OpenMetrics(ctx, &out, q, Options{Dir: dir})
	if err == nil || !strings.Contains(err.Error(), "no space left on device") || out.Len() > 0 {
		t.Errorf("%v, %d bytes", err, out.Len())
	}
}

// BenchmarkExport writes a million readings in each format.
func BenchmarkExport(b *testing.B) {
	const n = 1_000_000
	path := open(b, func(j *journal.Journal) { Fill(j, n) })
	q := all(b, path, "counter")
	for name, write := range map[string]func() error{
		"csv":         func() error { _, err := Readings(ctx, count{}, q, CSV); return err },
		"jsonl":       func() error { _, err := Readings(ctx, count{}, q, JSONLines); return err },
		"openmetrics": func() error { _, err := OpenMetrics(ctx, count{}, q, Options{Dir: b.TempDir()}); return err },
	} {
		b.Run(name, func(b *testing.B) {
			for b.Loop() {
				if err := write(); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(n*b.N)/b.Elapsed().Seconds(), "rows/s")
		})
	}
}

type count struct{}

func (count) Write(p []byte) (int, error) { return len(p), nil }

// Fill puts plausible readings of one bench into a journal.
func Fill(j *journal.Journal, n int) {
	j.Setup("counter", journal.Setup{Hookup: "two-tone", Sideband: "usb", CarrierHz: 10e6, LocalHz: 10e6, Input: "a test"})
	for i := range n {
		r := dsp.Blank(float64(i)+0.5, dsp.Apart)
		r.Beat = 3.2 + 1e-3*math.Sin(float64(i))
		r.BeatU, r.CarrierTone, r.LocalTone = 0.00123+1e-9*float64(i), 1000.123456+1e-4*float64(i), 1003.323456
		r.CarrierDBFS, r.LocalDBFS, r.CarrierCN0, r.LocalCN0 = -20.12, -18.34, 55.67, 57.01
		r.Span, r.Phase, r.InputDBFS = 1, 3.2*float64(i)+0.25, -12.5
		r.Flags = []dsp.Flag{dsp.Unproven}
		j.Append("counter", at(i), r)
	}
}
