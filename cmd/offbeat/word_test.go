package main

import (
	"context"
	"io"
	"math"
	"net/http"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"offbeat/dsp"
	"offbeat/metrics/journal"
	"offbeat/metrics/web"
)

// post sends JSON to the daemon.
func (r *running) post(path, body string) (code int, answer string) {
	r.t.Helper()
	resp, err := http.Post(strings.TrimSuffix(r.page, "/")+path, "application/json", strings.NewReader(body))
	if err != nil {
		r.t.Fatal(err)
	}
	defer resp.Body.Close()
	b, err := io.ReadAll(resp.Body)
	if err != nil {
		r.t.Fatal(err)
	}
	return resp.StatusCode, string(b)
}

// The user's word given over HTTP turns the beat of a bench that knew nothing,
// and is in the journal; so are the beginning and the end of a guided step.
func TestDaemonWord(t *testing.T) {
	path := filepath.Join(t.TempDir(), "a.sqlite")
	r := start(t, "--journal", path, "--input", tone(t, "bare.wav", 120), "--name", "bare")
	const id, step = "/api/v1/benches/bare/identity", "/api/v1/benches/bare/step"
	says := func(what string, code int, answer string, wantCode int, want string) {
		t.Helper()
		if code != wantCode || !strings.Contains(answer, want) {
			t.Errorf("%s: %d %s; want %d, %s", what, code, answer, wantCode, want)
		}
	}
	beat := func(sign float64) func() bool {
		return func() bool {
			v, ok := r.value(`offbeat_beat_hertz{bench="bare"}`)
			return ok && math.Abs(v-sign*3.2) < 0.05
		}
	}
	r.until("two tones", func() bool { v, _ := r.value(`offbeat_readings_total{bench="bare",state="unsure"}`); return v > 0 })
	code, answer := r.post(id, `{"local_tone_hz":1200}`)
	says("far", code, answer, 409, "no tone within 3 Hz of 1200 Hz")
	code, answer = r.post(id, `{"local_tone_hz":1003.4}`)
	says("local", code, answer, 200, "local's tone is the one at 1003.20 Hz")
	r.until("the beat as told", beat(1))
	code, answer = r.post(id, `{"swap":true}`)
	says("swap", code, answer, 200, "local's tone is the one at 1000.00 Hz")
	r.until("the beat the other way", beat(-1))
	code, answer = r.get(step)
	says("no step", code, answer, 200, `"stage":"none"`)
	code, answer = r.post(step, `{"step":"pull-wire"}`)
	says("begin", code, answer, 200, `"stage":"steadying"`)
	r.until("the call to pull", func() bool {
		_, s := r.get(step)
		return strings.Contains(s, `"stage":"waiting"`) && strings.Contains(s, "pull the coupling wire")
	})
	code, answer = r.post(step, `{"step":"cancel"}`)
	says("cancel", code, answer, 200, `"stage":"cancelled"`)
	code, answer = r.post("/api/v1/benches/counter/step", `{"step":"cancel"}`)
	says("another bench", code, answer, 404, "no bench")
	r.stop()

	j, err := journal.OpenReadOnly(path)
	if err != nil {
		t.Fatal(err)
	}
	defer j.Close()
	events, err := j.Events(context.Background(), "bare", time.Unix(0, 0), time.Now().Add(time.Hour))
	if err != nil {
		t.Fatal(err)
	}
	var got []string
	for _, e := range events {
		if e.Kind == journal.Identity {
			got = append(got, e.Text+" "+string(e.Data))
		}
	}
	want := []string{`1003.20 Hz, the carrier's the one at 1000.00 Hz {"claim":"local","hz":1003.4}`, `{"claim":"swap"}`,
		`pull-wire: leave everything as it is`, `pull-wire: given up {"step":"pull-wire","stage":"cancelled"}`}
	for i, w := range want {
		if i >= len(got) || !strings.Contains(got[i], w) {
			t.Fatalf("events %q, want %q", got, want)
		}
	}
	if len(got) != len(want) {
		t.Errorf("events %q, want %q", got, want)
	}
}

// A bench that hears nothing, or has gone, says so and is not waited for.
func TestWordWithoutBench(t *testing.T) {
	c := make(errands)
	go func() { (<-c)(nil) }()
	if err := c.do(func(*dsp.Bench) error { t.Error("there is no bench"); return nil }); err != web.ErrBusy {
		t.Error(err)
	}
	if err := c.do(func(*dsp.Bench) error { t.Error("nobody is there"); return nil }); err != web.ErrBusy {
		t.Error(err)
	}
}
