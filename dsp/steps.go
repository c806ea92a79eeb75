package dsp

import (
	"fmt"
	"math"
)

// Step is something that the user does at the bench, guided, which shows what
// no sound alone can show.
type Step string

// The steps.
const (
	PullWire Step = "pull-wire" // the local's coupling wire is pulled and put back: which tone goes and comes?
	MoveDial Step = "move-dial" // the receiver's dial is moved a little: which tones move?
)

// Steps lists every Step in a fixed order.
var Steps = []Step{PullWire, MoveDial}

// Stage is how far a step has come.
type Stage string

// The stages of a step.
const (
	NoStep    Stage = "none"      // none was begun
	Steadying Stage = "steadying" // the tones are measured as they are
	Waiting   Stage = "waiting"   // for the wire to be pulled, or the dial moved
	Away      Stage = "away"      // a tone has gone, or the tones move: wait
	Back      Stage = "back"      // waiting for the tone that went to come back
	Settled   Stage = "settled"   // the step has shown what it can show
	Failed    Stage = "failed"    // it has shown nothing
	Cancelled Stage = "cancelled"
)

// Progress says how far a step has come. Text says in one line what is to be
// done now, or what came out. Left is the time left for that, s; NaN: any.
type Progress struct {
	Step  Step
	Stage Stage
	Text  string
	Left  float64
}

// Over reports whether no step is under way.
func (p *Progress) Over() bool {
	switch p.Stage {
	case NoStep, Settled, Failed, Cancelled:
		return true
	}
	return false
}

const (
	stepPatience = 60.0 // s: how long a step waits for the user
	steadyFor    = 4    // seconds in which the tones are measured first
	least1s      = 30.0 // dB-Hz: a weaker tone cannot be seen to go within a second
)

// Ask begins a guided step. Two tones must be held at least 2 Hz apart. A step
// under way is given up for it.
func (b *Bench) Ask(s Step) error {
	e, ok := b.eng.(*twoTone)
	if !ok {
		return errOneTone
	}
	if s != PullWire && s != MoveDial {
		return fmt.Errorf("step %q: must be pull-wire or move-dial", s)
	}
	switch a, c := &e.tr[0], &e.tr[1]; {
	case e.merged || e.hidden || e.held() == 2 && math.Abs(a.f-c.f) < leastApart:
		return fmt.Errorf("the tones are too close for this step: trim at least %g Hz apart first", leastApart)
	case e.held() < 2:
		return fmt.Errorf("this step needs both tones: wait until they are heard")
	}
	e.step.begin(e, s)
	return nil
}

// Cancel gives up the step under way, if there is one.
func (b *Bench) Cancel() {
	if e, ok := b.eng.(*twoTone); ok && !e.step.over() {
		e.step.end(Cancelled, "given up")
	}
}

// Progress says how far the step has come, or how the last one ended. It changes
// with the seconds: look after every Reading.
func (b *Bench) Progress() Progress {
	e, ok := b.eng.(*twoTone)
	if !ok || e.step.stage == "" {
		return Progress{Stage: NoStep, Left: math.NaN()}
	}
	s := &e.step
	return Progress{s.kind, s.stage, s.text, s.left}
}

// tone is one of the two tones of a step, in order of frequency when it began.
type tone struct {
	f     float64 // where it is, or should be, audio Hz
	power float64 // over the density of the noise, Hz: gain control does not touch it
	amp   float64 // full scale 1
	noise float64
	there bool
	band  *band
	base  float64 // power while all was as it should be
	loud  float64 // amp then
	still bool    // known not to fade
}

// drop returns how far its power is below what it was, dB.
func (t *tone) drop() float64 { return 10 * math.Log10(t.base/max(t.power, 1e-9)) }

// step is a guided step.
type step struct {
	kind  Step
	stage Stage
	text  string
	left  float64
	until float64 // when patience ends, s
	tones [2]tone
	local int // which of them was the local's, -1: not known
	n     int // seconds in a row of whatever is waited for
	both  int // seconds in a row without both tones
	wire  wire
	dial  dial
}

func (s *step) over() bool {
	p := Progress{Stage: s.stage}
	return s.stage == "" || p.Over()
}

func (s *step) begin(e *twoTone, kind Step) {
	*s = step{kind: kind, stage: Steadying, text: "leave everything as it is for some seconds", local: -1, left: math.NaN(), until: float64(e.last) + stepPatience}
	first := 0
	if e.tr[1].f < e.tr[0].f {
		first = 1
	}
	for i := range s.tones {
		t := &e.tr[(first+i)%2]
		s.tones[i] = tone{f: t.f, amp: t.amp, there: true, still: t.ev.seconds >= enoughTime && t.ev.varies < 1}
	}
	if e.local >= 0 {
		s.local = (e.local + first) % 2
	}
	s.wire.gone = -1
	if s.wire.spread = e.sm.sigma; !(s.wire.spread >= spreadLeast) {
		s.wire.spread = 0
	}
}

func (s *step) end(at Stage, format string, args ...any) {
	s.stage, s.left = at, math.NaN()
	s.text = fmt.Sprintf(format, args...)
}

// next goes on to a stage that ends after so many seconds.
func (s *step) next(at Stage, mid, within float64, format string, args ...any) {
	s.stage, s.n, s.both = at, 0, 0
	s.until, s.left = mid+within, within
	s.text = fmt.Sprintf(format, args...)
}

// second looks at the second around mid, after the tones were followed through it.
func (s *step) second(e *twoTone, mid float64) {
	if s.over() {
		return
	}
	s.left = max(0, s.until-mid)
	switch s.kind {
	case PullWire:
		s.watchWire(e, mid)
	case MoveDial:
		s.watchDial(e, mid)
	}
}

// listen looks for both tones where they should be, whatever became of the tracks,
// and returns false where too little sound came. It moves them along with the
// receiver's drift: one that is not there by the movement of the other.
func (s *step) listen(e *twoTone, mid float64) bool {
	var moved [2]float64
	for i := range s.tones {
		t := &s.tones[i]
		t.there, t.power, t.band = false, 0, nil
		for _, b := range e.bands {
			if math.Abs(t.f-b.centre) < b.half {
				t.band = b
			}
		}
	}
	a, b := &s.tones[0], &s.tones[1]
	ok := true
	switch {
	case a.band != nil && a.band == b.band:
		ok = e.hear(a.band, mid, &moved, a, b)
	default:
		for i := range s.tones {
			if t := &s.tones[i]; t.band != nil {
				var m [2]float64
				ok = e.hear(t.band, mid, &m, t) && ok
				moved[i] = m[0]
			}
		}
	}
	// What is left of a tone that went, or what leaks into its place, leads nowhere.
	follow := [2]bool{a.there && !s.gone(0), b.there && !s.gone(1)}
	if !follow[0] {
		moved[0] = moved[1]
	}
	if !follow[1] {
		moved[1] = moved[0]
	}
	if follow[0] || follow[1] {
		a.f += 0.5 * moved[0]
		b.f += 0.5 * moved[1]
	}
	return ok
}

// hear fits tones that lie in one band, the strongest first, in the second around
// mid. moved is how far each lies from where it was expected.
func (e *twoTone) hear(b *band, mid float64, moved *[2]float64, tones ...*tone) bool {
	l := e.lens
	l.open(b, mid, 1, edge)
	if l.valid < 0.9 {
		return false
	}
	reach := 0.7
	if len(tones) == 2 {
		reach = min(reach, 0.35*math.Abs(tones[0].f-tones[1].f))
	}
	l.fit.r = append(l.fit.r[:0], l.win.z...)
	var at [2]int // the line of each tone, +1
	var most [2]float64
	for range tones {
		k, f, p := -1, 0.0, -1.0
		for i, t := range tones {
			if at[i] != 0 {
				continue
			}
			for g := -reach; g <= reach; g += 0.1 {
				if q := energyAt(l.fit.r, &l.win, t.f-b.centre+g); q > p {
					k, f, p = i, t.f-b.centre+g, q
				}
			}
		}
		most[k] = p
		ln := l.add(f, 0)
		at[k] = ln + 1
		if !l.solve(b, false) || math.Abs(l.lines[ln].f+b.centre-tones[k].f) > 2*reach {
			at[k] = -1
			l.lines = l.lines[:ln]
			if ln == 0 || !l.solve(b, false) {
				l.lines = l.lines[:0]
				l.fit.r = append(l.fit.r[:0], l.win.z...)
			}
		}
	}
	e.avoid = e.avoid[:0]
	for _, t := range tones {
		e.avoid = append(e.avoid, t.f-b.centre)
	}
	l.specOf = -1
	l.spec.take(l.fit.r)
	n0 := l.spec.noise(e.avoid[0], 60, b.half, 4, e.avoid)
	if math.IsNaN(n0) {
		n0 = l.spec.noise(e.avoid[0], b.rate, b.rate, 0, nil)
	}
	for i := range tones { // sound without noise has some in the end
		n0 = max(n0, 1e-9*most[i], 1e-30)
	}
	for i, t := range tones {
		t.power = most[i] / max(l.win.used, 0.1) / n0 // at most
		if at[i] < 1 || at[i] > len(l.lines) {
			continue
		}
		x := &l.lines[at[i]-1]
		a2 := real(x.a)*real(x.a) + imag(x.a)*imag(x.a)
		t.power = a2 / n0
		g := b.gain(x.f)
		if t.there = a2*l.win.used > 16*n0; t.there {
			t.amp, t.noise = math.Sqrt(a2)/g, n0/(g*g)
			moved[i] = x.f + b.centre - t.f
		}
	}
	return true
}

// seat makes both tones of a step the tracks of the bench, where it has lost them.
func (e *twoTone) seat(tones *[2]tone, mid float64) bool {
	a, b := &tones[0], &tones[1]
	if a.band == nil || a.band != b.band || !a.there || !b.there {
		return false
	}
	e.merged, e.hidden, e.lostLine, e.dim, e.local = false, false, 0, 0, -1
	e.unlearn()
	for k := range tones {
		t := &tones[k]
		e.tr[k] = track{live: true, band: t.band, f: t.f, at: mid, amp: t.amp, noise: t.noise, whole: true, tail: true, uf: 0.05, ev: e.tr[k].ev}
	}
	return true
}

// trackAt returns the index of the live track at f, -1: none.
func (e *twoTone) trackAt(f float64) int {
	for k := range e.tr {
		if e.tr[k].live && math.Abs(e.tr[k].f-f) < 0.8 {
			return k
		}
	}
	return -1
}
