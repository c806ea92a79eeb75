package main

import (
	"strings"
	"testing"
	"time"

	"offbeat/metrics/promtest"
)

// A real Prometheus scrapes the running daemon and answers a query with the
// beat of the simulated bench; promtool-clean names are checked in metrics.
func TestPrometheusScrapesTheDaemon(t *testing.T) {
	r := start(t, "--journal", t.TempDir()+"/a.sqlite")
	defer r.stop()
	p := promtest.Start(t, strings.Trim(strings.TrimPrefix(r.page, "http://"), "/"))
	got := p.Wait(t, `offbeat_beat_hertz{bench="counter"}`, 40*time.Second)
	if len(got) != 1 || got[0].Value < 3 || got[0].Value > 3.4 {
		t.Errorf("the beat of the simulated bench, 3.2 Hz, is answered as %+v", got)
	}
	if got := p.Wait(t, `offbeat_state{bench="counter",state="apart"} == 1`, 10*time.Second); len(got) != 1 {
		t.Errorf("%+v", got)
	}
}
