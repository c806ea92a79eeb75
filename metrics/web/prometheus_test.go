package web

import (
	"strings"
	"testing"
	"time"

	"offbeat/dsp"
	"offbeat/metrics"
	"offbeat/metrics/promtest"
)

// A real Prometheus scrapes the server and answers; what is not known has no
// series.
func TestRealPrometheus(t *testing.T) {
	e := metrics.New(metrics.BuildInfo{})
	b := e.Bench("counter", metrics.BenchInfo{Hookup: "two-tone", Sideband: "usb", CarrierHz: 10e6, LocalHz: 10e6, Input: "a test"}, "overflow")
	stop := make(chan struct{})
	done := make(chan struct{})
	go func() {
		defer close(done)
		for i := 0; ; i++ {
			r := dsp.Blank(float64(i)+0.5, dsp.Apart)
			r.Beat, r.BeatU, r.Offset = 3.25, 0.001, 3.25e-7
			b.Reading(r)
			select {
			case <-stop:
				return
			case <-time.After(500 * time.Millisecond):
			}
		}
	}()
	defer func() { close(stop); <-done }()
	wrong := []string{}
	url := serve(t, Config{Listen: "127.0.0.1:0"}, handlers(e, &wrong))
	p := promtest.Start(t, strings.TrimPrefix(url, "http://"))
	got := p.Wait(t, `offbeat_beat_hertz{bench="counter"}`, 30*time.Second)
	if len(got) != 1 || got[0].Value != 3.25 {
		t.Errorf("%+v", got)
	}
	if got := p.Wait(t, `count(offbeat_state{bench="counter"} == 1)`, 10*time.Second); got[0].Value != 1 {
		t.Errorf("states: %+v", got)
	}
	if got, err := p.Query("offbeat_error_hertz"); err != nil || len(got) != 0 {
		t.Errorf("a value that is not known: %+v %v", got, err)
	}
}
