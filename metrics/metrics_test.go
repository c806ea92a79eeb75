package metrics

import (
	"bytes"
	"flag"
	"io"
	"math"
	"net/http"
	"net/http/httptest"
	"os"
	"os/exec"
	"regexp"
	"strings"
	"sync"
	"testing"
	"time"

	"github.com/prometheus/client_golang/prometheus/testutil"

	"offbeat/dsp"
)

var update = flag.Bool("update", false, "rewrite testdata/metrics.txt")

// fixed is an exporter in a fixed state at a fixed time.
func fixed() (*Exporter, *Bench, *time.Time) {
	now := time.Date(2030, 1, 2, 3, 4, 5, 0, time.UTC)
	e := newExporter(BuildInfo{"1.0", "abc", "go1.26"}, func() time.Time { return now })
	b := e.Bench("counter", BenchInfo{"two-tone", "usb", 10e6, 10e6, "simulated bench"}, "overflow", "stalled")
	r := dsp.Blank(0.5, dsp.Searching)
	b.Reading(r)
	r = dsp.Blank(1.5, dsp.Apart)
	r.Beat, r.BeatAbs, r.BeatU, r.Error, r.Offset, r.OffsetU = 3.25, 3.25, 0.001, 3.25, 3.25e-7, 1e-10
	r.CarrierTone, r.LocalTone, r.CarrierDBFS, r.LocalDBFS, r.CarrierCN0, r.LocalCN0 = 1000, 1003.25, -20, -18, 55, 57
	r.Span, r.InputDBFS, r.Clipped, r.PhaseRun = 1, -12, 3, 2
	r.ClockError, r.ClockErrorU = 23.5e-6, 1.5e-7
	r.Flags = []dsp.Flag{dsp.Clipped}
	b.Reading(r)
	b.Samples(96000, 1)
	b.Gap("overflow", 480)
	e.Reload(true)
	e.Reload(false)
	e.Journal(func() JournalStats {
		return JournalStats{Committed: 2, Pending: 1, Errors: 4, Bytes: 4096, LastCommit: now.Add(-time.Second)}
	})
	return e, b, &now
}

func scrape(t testing.TB, h http.Handler, accept string) string {
	t.Helper()
	req := httptest.NewRequest("GET", "/metrics", nil)
	if accept != "" {
		req.Header.Set("Accept", accept)
	}
	w := httptest.NewRecorder()
	h.ServeHTTP(w, req)
	if w.Code != 200 {
		t.Fatal(w.Code, w.Body.String())
	}
	return w.Body.String()
}

func TestGolden(t *testing.T) {
	e, _, _ := fixed()
	got := scrape(t, e.Handler(), "")
	const file = "testdata/metrics.txt"
	if *update {
		if err := os.WriteFile(file, []byte(got), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	if got != string(want) {
		t.Errorf("the exposition differs from %s (-update rewrites it):\n%s", file, got)
	}
}

// What is not known is absent; what is old is absent too, and says so.
func TestAbsentNotStale(t *testing.T) {
	e, b, now := fixed()
	beat := regexp.MustCompile(`(?m)^offbeat_beat_hertz\{`)
	if !beat.MatchString(scrape(t, e.Handler(), "")) {
		t.Fatal("no beat while it is known")
	}
	*now = now.Add(StaleAfter + time.Millisecond)
	old := scrape(t, e.Handler(), "")
	for _, g := range gauges {
		name := regexp.MustCompile(`fqName: "([^"]+)"`).FindStringSubmatch(g.desc.String())[1]
		if strings.Contains(old, "\n"+name+"{") {
			t.Errorf("%s still there %v after the last reading", name, StaleAfter)
		}
	}
	if !strings.Contains(old, `offbeat_bench_up{bench="counter"} 0`) || strings.Contains(old, "offbeat_state{") {
		t.Error("a bench without readings does not say so")
	}
	b.Reading(dsp.Blank(2.5, dsp.Lone))
	lone := scrape(t, e.Handler(), "")
	if beat.MatchString(lone) || strings.Contains(lone, "NaN") || !strings.Contains(lone, `offbeat_state{bench="counter",state="lone"} 1`) {
		t.Errorf("after a reading without a beat:\n%s", lone)
	}
	e.Remove("counter")
	if strings.Contains(scrape(t, e.Handler(), ""), `bench="counter"`) {
		t.Error("a removed bench is still there")
	}
}

// Every value of a reading and every state, flag and cause has its series.
func TestEveryValueAppears(t *testing.T) {
	e, b, _ := fixed()
	r := dsp.Reading{State: dsp.Apart, Flags: dsp.Flags}
	r.SpreadHz = math.Pi
	b.Reading(r)
	text := scrape(t, e.Handler(), "")
	for _, g := range gauges {
		name := regexp.MustCompile(`fqName: "([^"]+)"`).FindStringSubmatch(g.desc.String())[1]
		if !strings.Contains(text, "\n"+name+"{") {
			t.Errorf("%s is missing", name)
		}
	}
	for _, s := range dsp.States {
		if !strings.Contains(text, `offbeat_readings_total{bench="counter",state="`+string(s)+`"}`) {
			t.Errorf("state %s is missing", s)
		}
	}
	for _, f := range dsp.Flags {
		if !strings.Contains(text, `offbeat_flag{bench="counter",flag="`+string(f)+`"} 1`) {
			t.Errorf("flag %s is missing", f)
		}
	}
}

func TestLint(t *testing.T) {
	e, _, _ := fixed()
	problems, err := testutil.GatherAndLint(e.reg)
	if err != nil {
		t.Fatal(err)
	}
	for _, p := range problems {
		t.Errorf("%s: %s", p.Metric, p.Text)
	}
	promtool, err := exec.LookPath("promtool")
	if err != nil {
		t.Skip("SKIPPED: promtool (Debian package prometheus) is not installed: names are not checked by it")
	}
	cmd := exec.Command(promtool, "check", "metrics")
	cmd.Stdin = strings.NewReader(scrape(t, e.Handler(), ""))
	if out, err := cmd.CombinedOutput(); err != nil || len(bytes.TrimSpace(out)) > 0 {
		t.Errorf("promtool check metrics: %v\n%s", err, out)
	}
}

func TestOpenMetrics(t *testing.T) {
	e, _, _ := fixed()
	text := scrape(t, e.Handler(), "application/openmetrics-text; version=1.0.0")
	if !strings.HasSuffix(text, "# EOF\n") {
		t.Error("not OpenMetrics")
	}
}

// Scrapes and readings do not disturb each other (run with -race).
func TestConcurrent(t *testing.T) {
	e, b, _ := fixed()
	var wg sync.WaitGroup
	for range 4 {
		wg.Add(2)
		go func() {
			defer wg.Done()
			for range 50 {
				w := httptest.NewRecorder()
				e.Handler().ServeHTTP(w, httptest.NewRequest("GET", "/metrics", nil))
				io.Copy(io.Discard, w.Body)
			}
		}()
		go func() {
			defer wg.Done()
			for i := range 500 {
				b.Reading(dsp.Blank(float64(i), dsp.Lone))
				b.Samples(100, 0)
				b.Gap("stalled", 1)
			}
		}()
	}
	wg.Wait()
	if got := b.samples; got != 96000+4*500*100 {
		t.Errorf("%v samples", got)
	}
}
