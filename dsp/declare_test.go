package dsp

import (
	"math"
	"strings"
	"testing"
)

// sidebands runs a test in both, with the sign that a tone's distance has in each.
func sidebands(t *testing.T, test func(t *testing.T, s Sideband, sign float64)) {
	t.Run("usb", func(t *testing.T) { test(t, Upper, 1) })
	t.Run("lsb", func(t *testing.T) { test(t, Lower, -1) })
}

// wantBeat refuses any but an apart reading of that beat.
func (r *rig) wantBeat(beat float64) {
	r.t.Helper()
	if x := *r.last(); x.State != Apart || math.Abs(x.Beat-beat) > 0.01 {
		r.t.Fatalf("want a beat of %g Hz: %s", beat, describe(x))
	}
}

// Two bare steady tones are told apart by the user's word, a wrong word is
// corrected by another, and what was said before stays as it was said.
func TestDeclareBare(t *testing.T) {
	sidebands(t, func(t *testing.T, side Sideband, s float64) {
		r := newRig(t, Config{Sideband: side}, 3.7, 50, 1)
		r.play(6)
		if r.last().State != Unsure {
			t.Fatal(describe(*r.last()))
		}
		if text := r.declare(LocalIs, 399.4); !strings.Contains(text, "local's tone is the one at 400.30 Hz") {
			t.Error(text)
		}
		r.play(2)
		r.wantBeat(-3.7 * s)
		if w := r.last().Why; w != "the local: you said so" || !r.last().Has(Unproven) {
			t.Error(describe(*r.last()))
		}
		n, run := len(r.rs), r.last().PhaseRun
		r.declare(Swap, 0)
		r.play(3)
		r.wantBeat(3.7 * s)
		if x := r.rs[n-1]; math.Abs(x.Beat+3.7*s) > 0.01 || r.rs[n+1].PhaseRun == run {
			t.Errorf("the past or the phase count: %s, %s", describe(x), describe(r.rs[n+1]))
		}
		if run = r.last().PhaseRun; run != r.rs[n+1].PhaseRun {
			t.Errorf("the phase count broke later on")
		}
		r.declare(CarrierIs, 400.4) // says the same again: nothing breaks
		r.play(3)
		r.wantBeat(3.7 * s)
		if r.last().PhaseRun != run {
			t.Errorf("the same word again breaks the phase count")
		}
		r.declare(Forget, 0)
		r.play(5)
		if x := *r.last(); x.State != Unsure || strings.Contains(x.Why, "said") {
			t.Error(describe(x))
		}
	})
}

// The word holds while the pair is held or known again; it does not go over to
// another pair.
func TestDeclareHolds(t *testing.T) {
	r := newRig(t, Config{LocalTone: 400.3}, 3.7, 50, 2) // a wrong hint
	r.play(5)
	r.wantBeat(-3.7)
	r.declare(LocalIs, 404)
	for _, c := range []struct {
		what string
		act  func(on float64)
	}{
		{"local away", func(on float64) { r.local.amp = 0.05 * on }},
		{"carrier away", func(on float64) { r.carrier.amp = 0.05 * on }},
		{"both away", func(on float64) { r.carrier.amp, r.local.amp = 0.05*on, 0.05*on }},
		{"the dial", func(float64) { r.carrier.f, r.local.f = r.carrier.f+30, r.local.f+30 }},
	} {
		c.act(0)
		r.play(6.3)
		c.act(1)
		r.play(6)
		r.wantBeat(3.7)
		if r.last().Why != "the local: you said so" {
			t.Errorf("%s: %s", c.what, describe(*r.last()))
		}
	}
	r.carrier.amp, r.local.amp = 0, 0
	r.play(6)
	r.carrier.amp, r.local.amp, r.local.f = 0.05, 0.05, r.carrier.f-11
	r.play(6)
	if x := *r.last(); x.State != Unsure {
		t.Errorf("another pair: %s", describe(x))
	}
}

// Through zero beat the word goes with the tones.
func TestDeclareThroughZero(t *testing.T) {
	r := newRig(t, Config{}, 4, 55, 3)
	r.play(5)
	r.declare(CarrierIs, 400.3)
	for range 80 {
		r.local.f -= 0.1
		r.play(0.5)
	}
	r.play(10)
	r.wantBeat(-4)
	for _, x := range r.rs[6:] {
		if truth := 4 - 0.2*(x.T-5); x.T < 45 && math.Abs(truth) > 0.7 && x.Beat*truth < 0 {
			t.Fatalf("truth %.2f: %s", truth, describe(x))
		}
	}
}

// The word outranks evidence; the reading says that this speaks against it.
func TestDeclareOutranksEvidence(t *testing.T) {
	r := newRig(t, Config{}, 4.5, 55, 4)
	r.carrier.fn = fading(0.1, 4)
	if !r.until(60, func() bool { return len(r.rs) > 0 && r.last().State == Apart && r.last().Beat > 0 }) {
		t.Fatal("not identified by evidence")
	}
	r.declare(LocalIs, 400.3)
	r.play(60)
	against := 0
	for _, x := range r.rs[len(r.rs)-55:] {
		if x.Beat > 0 {
			t.Fatalf("overruled: %s", describe(x))
		}
		if x.State == Apart && strings.Contains(x.Why, "looks like a carrier") {
			against++
			if !x.Has(Unproven) {
				t.Error(describe(x))
			}
		}
	}
	if against < 20 {
		t.Errorf("only %d s say that the evidence is against it", against)
	}
	r.declare(Swap, 0)
	if !r.until(60, func() bool { return r.last().Beat > 4 && !r.last().Has(Unproven) }) {
		t.Errorf("not recovered: %s", describe(*r.last()))
	}
}

// One tone alone is named, and the other is what is left when it comes.
func TestDeclareLone(t *testing.T) {
	for _, c := range []struct {
		claim Claim
		beat  float64
	}{{LocalIs, 5.2}, {CarrierIs, -5.2}} {
		r := newRig(t, Config{}, 5.2, 50, 5)
		r.carrier.amp = 0
		r.play(6)
		if r.last().State != Lone {
			t.Fatal(describe(*r.last()))
		}
		if _, err := r.b.Declare(Swap, 0); err == nil {
			t.Error("swapped what is not known")
		}
		r.declare(c.claim, 405)
		r.play(2)
		if x := *r.last(); math.IsNaN(x.LocalTone) == (c.claim == LocalIs) || math.IsNaN(x.CarrierTone) == (c.claim == CarrierIs) {
			t.Errorf("%s: %s", c.claim, describe(x))
		}
		r.carrier.amp = 0.05
		r.play(6)
		r.wantBeat(c.beat)
	}
}

// What cannot be meant is refused in one line that says why.
func TestDeclareRefuses(t *testing.T) {
	r := newRig(t, Config{}, 4, 55, 6)
	refused := func(c Claim, hz float64, want string) {
		t.Helper()
		text, err := r.b.Declare(c, hz)
		if err == nil || !strings.Contains(err.Error(), want) || strings.Contains(err.Error(), "\n") {
			t.Errorf("%s %g: %q, %v; want %q", c, hz, text, err, want)
		}
	}
	refused(LocalIs, 400, "no tone is held")
	r.play(5)
	refused(LocalIs, 408, "no tone within 3 Hz of 408 Hz: there are tones at 400.30 and 404.30 Hz")
	refused(CarrierIs, 402.2, "two tones about equally near")
	refused(LocalIs, math.NaN(), "must be a frequency")
	refused(Swap, 0, "not known which")
	refused("aerial", 0, "must be local, carrier, swap or forget")
	if r.last().State != Unsure {
		t.Error(describe(*r.last()))
	}
	for r.local.f > 400.5 {
		r.local.f -= 0.1
		r.play(0.5)
	}
	refused(LocalIs, 400.5, "too close now")
	refused(Swap, 0, "trim at least 2 Hz apart first")
	m, err := New(Config{Rate: 2000, Hookup: Mixer})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := m.Declare(Swap, 0); err == nil {
		t.Error("a mixer has one tone only")
	}
	if err := m.Ask(PullWire); err == nil {
		t.Error("a mixer has one tone only")
	}
	m.Cancel()
	if p := m.Progress(); p.Stage != NoStep {
		t.Errorf("%+v", p)
	}
	// Far apart, a third of the distance is near enough.
	r = newRig(t, Config{LocalTone: 400}, 100, 55, 7)
	r.play(5)
	r.declare(LocalIs, 475)
	r.play(2)
	r.wantBeat(100)
}
