package dsp

import (
	"fmt"
	"math"
	"strings"
	"testing"
)

// ask begins a step on tones that have been held for a while and waits until the
// user is asked to do something.
func (r *rig) ask(s Step, after float64) {
	r.t.Helper()
	r.play(after)
	if err := r.b.Ask(s); err != nil {
		r.t.Fatalf("%v: %s", err, describe(*r.last()))
	}
	if p := r.stage(15, Waiting); p.Stage != Waiting || !(p.Left > 50) {
		r.t.Fatalf("%+v", p)
	}
}

// pull pulls the wire when asked to, leaves it out as long as asked for, and puts
// it back, as often as asked for.
func (r *rig) pull(v *voice) Progress {
	r.t.Helper()
	for range 5 {
		r.play(1.7)
		was := v.amp
		v.amp *= 0.001
		p := r.stage(80, Back)
		v.amp = was
		if p.Over() {
			return p
		}
		if p = r.stage(80, Waiting); p.Over() {
			return p
		}
	}
	r.t.Fatalf("it asks for ever: %+v", r.b.Progress())
	return Progress{}
}

// The wire settles which tone is the local's, whatever was thought of it before,
// in either sideband, at unlike levels and under gain control, which lets the
// other tone rise when the local goes.
func TestPullWireSettles(t *testing.T) {
	sidebands(t, func(t *testing.T, side Sideband, s float64) {
		for _, c := range []struct {
			name  string
			hint  float64 // of the local's tone, 0: none
			sep   float64
			local float64 // dB by the carrier
			agc   bool
			carr  func(float64) (float64, float64)
			least int // seconds of 20 that must be apart afterwards
		}{
			{"bare", 0, 3.7, 0, false, nil, 17},
			{"wrong hint", 400.3, 3.7, 0, false, nil, 17},
			{"right hint", 404, 3.7, 0, false, nil, 17},
			{"close", 0, -2.2, 0, false, nil, 17},
			{"far, two bands", 860, 460, 6, false, nil, 17},
			{"weak local, gain control", 0, -5, -10, true, nil, 17},
			{"strong local, gain control", 0, 5, 14, true, nil, 17},
			{"strong local, gain control, fading", 0, 5, 10, true, fading(0.1, 11), 17},
			{"fading", 0, 5, 0, false, fading(0.05, 12), 17},
			{"fading, wrong hint", 400.3, 5, 0, false, fading(0.1, 13), 17},
			{"fading widely", 0, -6, 0, false, fading(0.4, 14), 5},
		} {
			t.Run(c.name, func(t *testing.T) {
				t.Parallel()
				r := newRig(t, Config{Sideband: side, LocalTone: c.hint}, c.sep, 55, 21)
				r.agc, r.carrier.fn = c.agc, c.carr
				r.local.amp *= math.Pow(10, c.local/20)
				for try := 0; ; try++ { // a carrier may fade just as it is begun
					r.until(60, func() bool { return r.b.Ask(PullWire) == nil })
					if r.stage(70, Waiting).Stage == Waiting {
						break
					}
					if try == 5 {
						t.Fatalf("%+v", r.b.Progress())
					}
				}
				if p := r.pull(r.local); p.Stage != Settled || !strings.Contains(p.Text, fmt.Sprintf("%.0f", r.local.f)) {
					t.Fatalf("%+v: %s", p, describe(*r.last()))
				}
				n := len(r.rs)
				r.play(20)
				apart := 0
				for _, x := range r.rs[n:] {
					if x.Beat*c.sep*s < 0 || x.LocalTone > 0 && math.Abs(x.LocalTone-r.local.f) > 1 {
						t.Fatalf("wrong: %s", describe(x))
					}
					if x.State == Apart && !math.IsNaN(x.Beat) {
						apart++
						if !strings.Contains(x.Why, "the local: it vanished when the wire was pulled") {
							t.Error(describe(x))
						}
					}
				}
				if apart < c.least {
					t.Errorf("only %d s of 20 are apart: %s", apart, describe(*r.last()))
				}
			})
		}
	})
}

// What does not show which tone is the local's is told so, and why.
func TestPullWireFails(t *testing.T) {
	for _, c := range []struct {
		name string
		act  func(r *rig)
		want string
	}{
		{"nothing goes", func(r *rig) {}, "no tone went within 60 s"},
		{"both go", func(r *rig) { r.local.amp, r.carrier.amp = 0, 0 }, "both tones went"},
		{"it stays away", func(r *rig) { r.local.amp = 0 }, "did not come back within 60 s"},
		{"it is hardly pulled", func(r *rig) { r.local.amp *= 0.2 }, "no tone went within 60 s"},
		{"another comes back", func(r *rig) {
			r.local.amp = 0
			r.stage(20, Back)
			r.local.amp, r.local.f = 0.05, r.local.f+6
		}, "a tone came at 410.3 Hz, not at 404.3 Hz"},
		{"it comes back weaker", func(r *rig) {
			r.local.amp = 0
			r.stage(20, Back)
			r.local.amp = 0.05 * 0.3
		}, "came back -1"},
	} {
		t.Run(c.name, func(t *testing.T) {
			t.Parallel()
			r := newRig(t, Config{}, 4, 55, 31)
			r.ask(PullWire, 25)
			r.play(2)
			c.act(r)
			r.until(150, func() bool { p := r.b.Progress(); return p.Over() })
			if p := r.b.Progress(); p.Stage != Failed || !strings.Contains(p.Text, c.want) || !math.IsNaN(p.Left) {
				t.Errorf("%+v, want %q", p, c.want)
			}
			r.carrier.amp, r.local.amp = 0.05, 0.05
			r.play(8)
			if x := r.last(); x.State != Unsure && x.State != Lone {
				t.Errorf("a step that failed changed something: %s", describe(*x))
			}
		})
	}
}

// A second's drop of a steady tone, and one deep fade of a tone that may fade, are
// not enough: it is asked for again.
func TestPullWireAgain(t *testing.T) {
	for _, c := range []struct {
		name string
		held float64 // s that the tones were held before
		away float64
		pull int
	}{{"too short", 30, 1.6, 2}, {"not known to stand still", 5, 8, 2}, {"known to stand still", 30, 5, 1}} {
		r := newRig(t, Config{}, 4, 55, 41)
		r.ask(PullWire, c.held)
		r.play(1.2)
		r.local.amp = 0
		r.play(c.away)
		r.local.amp = 0.05
		r.play(8)
		p := r.b.Progress()
		if again := p.Stage == Waiting && strings.Contains(p.Text, "again"); again != (c.pull == 2) {
			t.Errorf("%s: %+v", c.name, p)
		}
		if c.pull == 2 {
			if p = r.pull(r.local); p.Stage != Settled {
				t.Errorf("%s: %+v", c.name, p)
			}
		}
		r.play(3)
		r.wantBeat(4)
	}
}

// Fades alone, with nobody at the wire, do not settle anything.
func TestFadesPullNoWire(t *testing.T) {
	for seed := range uint64(6) {
		for _, sigma := range []float64{0.03, 0.1, 0.3} {
			r := newRig(t, Config{LocalTone: 405.3}, 5, 55, 50+seed)
			r.carrier.fn = fading(sigma, 60+seed)
			if !r.until(60, func() bool { return r.b.Ask(PullWire) == nil }) {
				t.Fatal(describe(*r.last()))
			}
			r.until(400, func() bool { p := r.b.Progress(); return p.Over() })
			if p := r.b.Progress(); p.Stage == Settled {
				t.Errorf("sigma %g, seed %d: %+v", sigma, seed, p)
			}
		}
	}
}

// A step can be given up, needs two tones apart, and is replaced by the next.
func TestStepBegins(t *testing.T) {
	r := newRig(t, Config{}, 4, 55, 71)
	if err := r.b.Ask(PullWire); err == nil || !strings.Contains(err.Error(), "needs both tones") {
		t.Error(err)
	}
	r.play(5)
	if err := r.b.Ask("turn-knob"); err == nil {
		t.Error("a step that there is not")
	}
	r.ask(MoveDial, 0)
	r.ask(PullWire, 0)
	if p := r.b.Progress(); p.Step != PullWire {
		t.Errorf("%+v", p)
	}
	r.b.Cancel()
	if p := r.b.Progress(); p.Stage != Cancelled || !p.Over() {
		t.Errorf("%+v", p)
	}
	r.b.Cancel() // once more: no matter
	for r.local.f > 401 {
		r.local.f -= 0.1
		r.play(0.5)
	}
	if err := r.b.Ask(PullWire); err == nil || !strings.Contains(err.Error(), "too close") {
		t.Error(err)
	}
	weak := newRig(t, Config{}, 4, 26, 72)
	if !weak.until(60, func() bool { return weak.b.Ask(PullWire) == nil }) {
		t.Skip("too weak to be held at all")
	}
	if p := weak.stage(70, Waiting); p.Stage != Failed {
		t.Errorf("%+v", p)
	}
}
