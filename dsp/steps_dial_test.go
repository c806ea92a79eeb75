package dsp

import (
	"math"
	"strings"
	"testing"
)

// turnDial moves voices by Hz within some seconds, 0: at once.
func (r *rig) turnDial(by, within float64, voices ...*voice) {
	steps := max(1, int(within*20))
	for range steps {
		for _, v := range voices {
			v.f += by / float64(steps)
		}
		if within > 0 {
			r.play(0.05)
		}
	}
}

// Both tones move with the dial: the carrier is on the air, and that is known as
// long as the pair is; not of another pair.
func TestMoveDialProves(t *testing.T) {
	sidebands(t, func(t *testing.T, side Sideband, s float64) {
		for _, c := range []struct {
			name       string
			hint       float64
			by, within float64
			carr       func(float64) (float64, float64)
			agc        bool
		}{
			{"hinted, at once", 404, 20, 0, nil, false},
			{"hinted, slowly", 404, -35, 2.5, nil, false},
			{"little", 404, 5.5, 0.3, nil, false},
			{"far", 404, 50, 1, nil, true},
			{"no hint", 0, 17, 0.4, nil, false},
			{"fading", 404, 20, 0.5, fading(0.1, 5), true},
			{"fading widely", 404, -25, 0.5, fading(0.3, 6), false},
		} {
			t.Run(c.name, func(t *testing.T) {
				t.Parallel()
				r := newRig(t, Config{Sideband: side, LocalTone: c.hint}, 3.7, 55, 81)
				r.carrier.fn, r.agc = c.carr, c.agc
				r.play(20)
				if !r.until(60, func() bool { return r.b.Ask(MoveDial) == nil }) {
					t.Fatal(describe(*r.last()))
				}
				if p := r.stage(70, Waiting); p.Stage != Waiting {
					t.Fatalf("%+v", p)
				}
				r.play(2.2)
				r.turnDial(c.by, c.within, r.carrier, r.local)
				if p := r.stage(80, Settled); p.Stage != Settled || !strings.Contains(p.Text, "both tones moved") {
					t.Fatalf("%+v: %s", p, describe(*r.last()))
				}
				n := len(r.rs)
				r.play(15)
				proven := 0
				for _, x := range r.rs[n:] {
					if x.Beat*s < 0 {
						t.Fatalf("wrong: %s", describe(x))
					}
					if x.State == Apart && x.Has(Unproven) {
						t.Errorf("not proven: %s", describe(x))
					}
					if (x.State == Apart || c.hint == 0 && x.State == Unsure) && !x.Has(Unproven) {
						proven++
					}
				}
				least := 12
				if c.name == "fading widely" { // such a tone is not always held
					least = 5
				}
				if proven < least {
					t.Errorf("only %d s of 15 are proven: %s", proven, describe(*r.last()))
				}
				if c.hint == 0 || c.carr != nil {
					return
				}
				if w := r.last().Why; w != "the carrier: it moved with the dial" {
					t.Error(w)
				}
				r.carrier.amp, r.local.amp = 0, 0
				r.play(6)
				r.carrier.amp, r.local.amp = 0.05, 0.05
				r.play(6)
				if x := r.last(); x.State != Apart || x.Has(Unproven) {
					t.Errorf("the same pair again: %s", describe(*x))
				}
				r.carrier.amp, r.local.amp = 0, 0
				r.play(6)
				r.carrier.amp, r.local.amp, r.local.f = 0.05, 0.05, r.local.f+9
				r.play(8)
				if x := r.last(); !x.Has(Unproven) {
					t.Errorf("another pair: %s", describe(*x))
				}
			})
		}
	})
}

// A tone that stays is hum: it is let go of for good, and the real carrier found.
func TestMoveDialHum(t *testing.T) {
	for _, known := range []bool{false, true} {
		r := newRig(t, Config{}, 5, 55, 91) // what stands as carrier is hum
		if known {
			r.play(5)
			r.declare(LocalIs, 405.3)
		}
		r.ask(MoveDial, 5)
		r.play(1.3)
		r.turnDial(21, 0.5, r.local)
		if p := r.stage(60, Settled); p.Stage != Settled || !strings.Contains(p.Text, "400.3 Hz stayed") {
			t.Fatalf("%+v", p)
		}
		n := len(r.rs)
		r.play(20)
		for _, x := range r.rs[n:] {
			if x.State != Lone || !math.IsNaN(x.BeatAbs) || known == math.IsNaN(x.LocalTone) || !strings.Contains(x.Why, "refused") {
				t.Fatalf("local known %v: %s", known, describe(x))
			}
		}
		carrier := &voice{f: r.local.f - 6, amp: 0.05}
		r.more = append(r.more, carrier)
		r.play(12)
		if x := r.last(); math.Abs(x.BeatAbs-6) > 0.05 || known && math.Abs(x.Beat-6) > 0.05 {
			t.Errorf("the real carrier is there now: %s", describe(*x))
		}
		r.declare(Forget, 0)
		if len(r.b.eng.(*twoTone).word.refused) != 0 {
			t.Error("refused for ever")
		}
	}
}

// Tones that move by unlike amounts: one is a birdie of the receiver, and no beat
// is given until the dial shows otherwise.
func TestMoveDialBirdie(t *testing.T) {
	for _, factor := range []float64{-1, 2, 3} {
		r := newRig(t, Config{LocalTone: 407}, 7, 55, 92)
		r.ask(MoveDial, 5)
		r.play(1.3)
		r.turnDial(13, 0, r.local)
		r.carrier.f += factor * 13
		if p := r.stage(80, Settled); p.Stage != Settled || !strings.Contains(p.Text, "birdie") {
			t.Fatalf("%g: %+v", factor, p)
		}
		n := len(r.rs)
		r.play(10)
		for _, x := range r.rs[n:] {
			if !math.IsNaN(x.BeatAbs) || !strings.Contains(x.Why, "birdie") || !x.Has(Unproven) {
				t.Fatalf("%g: %s", factor, describe(x))
			}
		}
		r.ask(MoveDial, 0)
		r.play(1.3)
		r.turnDial(-15, 0, r.local, r.carrier) // it was a slip
		if p := r.stage(60, Settled); p.Stage != Settled {
			t.Fatalf("%+v", p)
		}
		r.play(3)
		if x := r.last(); math.IsNaN(x.BeatAbs) || x.State == Apart && x.Has(Unproven) {
			t.Errorf("%g: %s", factor, describe(*x))
		}
	}
}

// What shows nothing is told so.
func TestMoveDialFails(t *testing.T) {
	for _, c := range []struct {
		name        string
		act         func(r *rig)
		want, after string
	}{
		{"not moved", func(r *rig) {}, "no tone moved within 60 s", ""},
		{"hardly moved", func(r *rig) { r.turnDial(2, 0, r.carrier, r.local) }, "moved by less than 4 Hz", "further"},
		{"by as much as they are apart", func(r *rig) { r.turnDial(6, 0, r.carrier, r.local) }, "as much as the tones are apart", "by another amount"},
		{"out of hearing", func(r *rig) { r.carrier.amp, r.local.amp = 0, 0 }, "the tones were lost", ""},
		{"one out of hearing", func(r *rig) { r.local.amp = 0 }, "only one tone is heard", ""},
	} {
		r := newRig(t, Config{}, 6, 55, 93)
		r.ask(MoveDial, 5)
		r.play(1.3)
		c.act(r)
		r.play(10)
		if p := r.b.Progress(); p.Over() || !strings.Contains(p.Text, c.after) {
			t.Errorf("%s: %+v", c.name, p)
		}
		r.until(120, func() bool { p := r.b.Progress(); return p.Over() })
		if p := r.b.Progress(); p.Stage != Failed || !strings.Contains(p.Text, c.want) {
			t.Errorf("%s: %+v", c.name, p)
		}
		if r.last().State == Apart {
			t.Errorf("%s: %s", c.name, describe(*r.last()))
		}
	}
}
