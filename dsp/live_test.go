package dsp

import (
	"math"
	"math/rand/v2"
	"testing"
)

// voice is one tone of a live scene.
type voice struct {
	f, amp float64
	fn     func(t float64) (amp, turns float64)
	turns  float64
}

// rig is a scene that a user acts upon while it is heard.
type rig struct {
	t              *testing.T
	rate           float64
	carrier, local *voice
	more           []*voice
	sigma          float64 // of the noise
	agc            bool
	gain           float64
	n              int
	rnd            *rand.Rand
	b              *Bench
	rs             []Reading
}

// newRig hears tones of amplitude 0.05 at C/N0 cn0, carrier at 400 Hz and local
// at 400 Hz + sep.
func newRig(t *testing.T, cfg Config, sep, cn0 float64, seed uint64) *rig {
	t.Helper()
	r := &rig{t: t, rate: 2000, gain: 1, rnd: rand.New(rand.NewPCG(seed, 15)), carrier: &voice{f: 400.3, amp: 0.05}, local: &voice{f: 400.3 + sep, amp: 0.05}}
	r.sigma = math.Sqrt(0.05 * 0.05 / 2 * r.rate / 2 / math.Pow(10, cn0/10))
	r.carrier.turns, r.local.turns = r.rnd.Float64(), r.rnd.Float64()
	cfg.Rate = r.rate
	cfg.OnReading = func(x Reading) { r.rs = append(r.rs, x) }
	var err error
	if r.b, err = New(cfg); err != nil {
		t.Fatal(err)
	}
	return r
}

// play lets the sound go on for some seconds.
func (r *rig) play(seconds float64) {
	x := make([]float32, int(math.Round(seconds*r.rate)))
	for i := range x {
		t := float64(r.n) / r.rate
		r.n++
		v := r.sigma * r.rnd.NormFloat64()
		for _, o := range append([]*voice{r.carrier, r.local}, r.more...) {
			o.turns = frac(o.turns + o.f/r.rate)
			a, p := 1.0, 0.0
			if o.fn != nil {
				a, p = o.fn(t)
			}
			v += o.amp * a * math.Cos(2*math.Pi*(o.turns+p))
		}
		if r.agc { // towards a peak of 0.3: at once down, slowly up
			if y := math.Abs(v * r.gain); y > 0.3 {
				r.gain *= 1 - 0.1*(y/0.3-1)
			} else {
				r.gain *= 1 + 2/r.rate
			}
			r.gain = min(r.gain, 1000)
			v *= r.gain
		}
		x[i] = float32(v)
	}
	r.b.Samples([][]float32{x})
}

func (r *rig) last() *Reading { return &r.rs[len(r.rs)-1] }

// until lets the sound go on until ok, for some seconds at most.
func (r *rig) until(seconds float64, ok func() bool) bool {
	for range int(seconds * 4) {
		if ok() {
			return true
		}
		r.play(0.25)
	}
	return ok()
}

// stage lets the sound go on until the step has come to a stage, or ended.
func (r *rig) stage(seconds float64, s Stage) Progress {
	r.t.Helper()
	var p Progress
	if !r.until(seconds, func() bool { p = r.b.Progress(); return p.Stage == s || p.Over() }) {
		r.t.Fatalf("waited in vain for %s: %+v; %s", s, p, describe(*r.last()))
	}
	return p
}

// declare gives the user's word.
func (r *rig) declare(c Claim, hz float64) string {
	r.t.Helper()
	s, err := r.b.Declare(c, hz)
	if err != nil {
		r.t.Fatalf("%s %g: %v", c, hz, err)
	}
	return s
}
