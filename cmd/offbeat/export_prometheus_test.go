package main

import (
	"math"
	"os/exec"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"offbeat/dsp"
	"offbeat/metrics/journal"
	"offbeat/metrics/promtest"
)

// night fills a journal with the readings of bench counter, a second apart from
// a time on: a drifting beat, a minute without the carrier, a gap of a minute.
func night(t testing.TB, path string, from time.Time, seconds int) map[int64]dsp.Reading {
	t.Helper()
	j, err := journal.Open(path, journal.Options{Waiting: 4 << 20})
	if err != nil {
		t.Fatal(err)
	}
	j.Setup("counter", journal.Setup{Hookup: "two-tone", Sideband: "usb", CarrierHz: 10e6, LocalHz: 10e6, Input: "simulated bench"})
	rows := map[int64]dsp.Reading{}
	for i := range seconds {
		if i >= 1000 && i < 1060 {
			continue
		}
		r := dsp.Blank(float64(i)+0.5, dsp.Apart)
		r.Beat, r.BeatU = 3.2+1e-5*float64(i)+1e-3*math.Sin(float64(i)), 0.00123
		if i >= 2000 && i < 2060 {
			r = dsp.Blank(float64(i)+0.5, dsp.Lone)
		}
		r.LocalTone, r.LocalDBFS, r.Span = 1003.2, -18.25, 1
		at := from.Add(time.Duration(i) * time.Second)
		j.Append("counter", at, r)
		rows[at.UnixMilli()] = r
	}
	j.Event("counter", from, journal.Note, "the night begins", nil)
	if err := j.Close(); err != nil {
		t.Fatal(err)
	}
	return rows
}

// The night of a journal is exported, made into blocks by the real promtool, and
// a real Prometheus, which scrapes the live daemon too, answers over both: the
// history has the journal's values and is the same series as the live one.
func TestBackfillJoinsTheLiveSeries(t *testing.T) {
	promtool, err := exec.LookPath("promtool")
	if err != nil {
		t.Skip("SKIPPED: promtool (Debian package prometheus) is not installed: no history was filled into a real Prometheus")
	}
	dir := t.TempDir()
	book := filepath.Join(dir, "a.sqlite")
	from := time.Now().Add(-5 * time.Hour).Truncate(time.Second).Add(512 * time.Millisecond)
	const seconds = 3600
	rows := night(t, book, from, seconds)
	live := start(t, "--journal", filepath.Join(dir, "b.sqlite")) // bench counter again, from now on
	defer live.stop()
	target := strings.Trim(strings.TrimPrefix(live.page, "http://"), "/")

	file, data := filepath.Join(dir, "night.om"), filepath.Join(dir, "data")
	if code, _, errs := runMain("export", "--journal", book, "--format", "openmetrics", "--label", "job=offbeat", "--label", "instance="+target, "-o", file); code != 0 {
		t.Fatal(code, errs)
	}
	if out, err := exec.Command(promtool, "tsdb", "create-blocks-from", "openmetrics", file, data).CombinedOutput(); err != nil {
		t.Fatalf("promtool refuses the export: %v\n%s", err, out)
	}
	p := promtest.StartOn(t, data, target)
	p.Wait(t, `offbeat_beat_hertz{bench="counter"}`, 40*time.Second)

	one := func(expr string, at time.Time) (float64, bool) {
		got, err := p.QueryAt(expr, at)
		if err != nil || len(got) > 1 {
			t.Fatalf("%s: %+v %v", expr, got, err)
		}
		if len(got) == 0 {
			return 0, false
		}
		return got[0].Value, true
	}
	checked := 0
	for i := 0; i < seconds; i += 97 {
		at := from.Add(time.Duration(i) * time.Second)
		want, ok := rows[at.UnixMilli()]
		got, found := one(`last_over_time(offbeat_beat_hertz{bench="counter"}[1s])`, at)
		if found != (ok && !math.IsNaN(want.Beat)) || found && got != want.Beat {
			t.Errorf("second %d: the journal has %v (%v), Prometheus answers %v (%v)", i, want.Beat, ok, got, found)
		}
		checked++
	}
	// Each reading is there once, and at its own millisecond.
	end := from.Add(seconds * time.Second)
	known, sum := 0, 0.0
	for _, r := range rows {
		if !math.IsNaN(r.Beat) {
			known++
			sum += r.Beat
		}
	}
	if n, _ := one(`count_over_time(offbeat_beat_hertz[2h])`, end); int(n) != known {
		t.Errorf("%v beats in Prometheus, %d in the journal", n, known)
	}
	if mean, _ := one(`avg_over_time(offbeat_beat_hertz[2h])`, end); math.Abs(mean-sum/float64(known)) > 1e-12 {
		t.Errorf("the mean beat is %v in Prometheus, %v in the journal", mean, sum/float64(known))
	}
	if got, _ := one(`max_over_time(timestamp(offbeat_bench_up)[2h:1s])`, end); math.Abs(got-float64(end.Add(-time.Second).UnixMilli())/1000) > 1e-6 {
		t.Errorf("the last time is %v, want %v", got, end.Add(-time.Second))
	}
	if up, ok := one(`offbeat_bench_up`, from.Add(1030*time.Second)); !ok || up != 0 {
		t.Errorf("in the gap the bench is %v", up)
	}
	if lone, _ := one(`sum_over_time(offbeat_state{state="lone"}[2h])`, end); lone != 60 {
		t.Errorf("%v seconds lone, want 60", lone)
	}
	// History and present are one series.
	got, err := p.QueryAt(`count_over_time(offbeat_beat_hertz[6h])`, time.Now())
	if err != nil || len(got) != 1 || got[0].Value <= float64(known) {
		t.Errorf("over night and present: %+v %v; the night alone has %d", got, err, known)
	}
	t.Logf("%d seconds compared, %d beats", checked, known)
}
