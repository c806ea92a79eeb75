package main

import (
	"io"
	"math/rand/v2"
	"os"
	"strings"
	"testing"
)

// Every row is made, played and judged, and no claim about two tones that are
// there may be wrong. How good the figures are takes more scenes and more time
// than a test has; how rare wrong claims are, too: the scenes are the same ones
// every time, but with OFFBEAT_LONG set others.
func TestRows(t *testing.T) {
	const (
		scenes  = 2
		seconds = 40 // of a scene at the most
	)
	seed := uint64(1480)
	if os.Getenv("OFFBEAT_LONG") != "" {
		seed = rand.Uint64() >> 32
	}
	t.Logf("seed %d", seed)
	names := map[string]bool{}
	for _, w := range table() {
		if names[w.name] {
			t.Errorf("%s: there are two rows of this name", w.name)
		}
		names[w.name] = true
		t.Run(w.name, func(t *testing.T) {
			t.Parallel()
			make, judge := w.make, w.judge
			w.share = 0
			w.make = func(r *rand.Rand) scene {
				s := make(r)
				s.sim.Duration = min(s.sim.Duration, seconds)
				return s
			}
			judged := 0
			w.judge = func(all []played) []figure {
				judged = len(all)
				for i := range all {
					checkSeconds(t, &all[i])
					if !strings.HasPrefix(w.name, "no carrier") { // noise may be the carrier there
						checkClaims(t, &all[i])
					}
				}
				return judge(all)
			}
			if _, n := w.run(seed, scenes, 1, 0, false, io.Discard); n == 0 || judged != scenes {
				t.Errorf("seed %d: %d figures of %d scenes", seed, n, judged)
			}
			if w.worse == nil {
				t.Error("nothing says which of its scenes are the worst")
			}
		})
	}
}

// checkSeconds wants a reading and a truth for every second.
func checkSeconds(t *testing.T, p *played) {
	if len(p.readings) != int(p.sim.Duration) || len(p.truth) != len(p.readings) {
		t.Errorf("%g s gave %d readings and %d truths: %+v", p.sim.Duration, len(p.readings), len(p.truth), p.sim)
		return
	}
	for i, r := range p.readings {
		if r.T != p.truth[i].T {
			t.Errorf("reading of %g s beside the truth of %g s", r.T, p.truth[i].T)
		}
	}
}

// checkClaims refuses a wrong sign or identity.
func checkClaims(t *testing.T, p *played) {
	for i, r := range p.readings {
		if p.misled && (p.settledAt == 0 || i < p.settledAt) {
			continue
		}
		if u := p.truthAt(i); p.mistaken(i) {
			t.Errorf("at %g s %s, beat %g, truth %g (%g received), carrier %g (%g), local %g (%g): %s: %+v local tone %g", r.T, r.State, r.Beat,
				u.Beat, u.Received, r.CarrierTone, u.CarrierTone, r.LocalTone, u.LocalTone, r.Why, p.sim, p.cfg.LocalTone)
			return
		}
	}
}

// A figure misses its limit on the side that it should, and when it is not known.
func TestMissed(t *testing.T) {
	for _, c := range []struct {
		f    figure
		want bool
	}{
		{most("a", 1, 2, ""), false}, {most("a", 3, 2, ""), true}, {most("a", rms(nil), 2, ""), true},
		{least("a", 3, 2, ""), false}, {least("a", 1, 2, ""), true}, {least("a", rms(nil), 2, ""), true},
		{told("a", 1, ""), false},
	} {
		if got := c.f.missed(); got != c.want {
			t.Errorf("%+v: missed %v", c.f, got)
		}
	}
}
