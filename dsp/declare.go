package dsp

import (
	"fmt"
	"math"
	"slices"
)

// Claim is what the user says of the two tones.
type Claim string

// The claims.
const (
	LocalIs   Claim = "local"   // the local's tone is the one near a frequency
	CarrierIs Claim = "carrier" // the carrier's is
	Swap      Claim = "swap"    // it is the other way round
	Forget    Claim = "forget"  // let the evidence decide: what was said, shown and remembered counts no more
)

const (
	leastApart = 2.0 // tones closer than this cannot be pointed at, Hz
	asTold     = "you said so"
)

// Declare takes the user's word on which tone is which now. It outranks
// evidence, hint and memory, and holds while the tones are held or recognised
// after they were away; what was said before is not rewritten, and the phase
// count breaks where the word changes anything. hz counts for LocalIs and
// CarrierIs: in the audio, corrected for the sample clock as in a Reading. The
// nearest tone is meant; it must lie within 3 Hz or a third of the tones'
// distance, and be plainly nearer than the other.
//
// It returns in one line what is settled. Like all methods it must not be called
// while another runs.
func (b *Bench) Declare(c Claim, hz float64) (string, error) {
	e, ok := b.eng.(*twoTone)
	if !ok {
		return "", errOneTone
	}
	switch c {
	case Forget:
		e.forget()
		return "what was known of the tones is forgotten: the evidence decides", nil
	case Swap, LocalIs, CarrierIs:
	default:
		return "", fmt.Errorf("claim %q: must be local, carrier, swap or forget", c)
	}
	switch {
	case e.merged || e.hidden:
		return "", fmt.Errorf("the tones are too close now to tell which is meant: trim at least %g Hz apart first", leastApart)
	case e.held() == 0:
		return "", fmt.Errorf("no tone is held now: wait until one is")
	}
	k := 1 - e.local
	if c != Swap {
		near, err := e.nearest(hz)
		if err != nil {
			return "", err
		}
		k = near
		if c == CarrierIs {
			k = 1 - near
		}
	} else if e.local < 0 {
		return "", fmt.Errorf("it is not known which tone is which, so nothing can be swapped: say where the local's tone is")
	}
	e.asked = true // the hint spoke of the start
	e.assign(k)
	e.word.local = asTold
	return e.named(), nil
}

var errOneTone = fmt.Errorf("this hook-up hears one tone only: there is nothing to tell apart")

// nearest returns the index of the held tone that is meant by hz.
func (e *twoTone) nearest(hz float64) (int, error) {
	scale := 1 + e.cfg.SampleRateError
	if math.IsNaN(hz) || math.IsInf(hz, 0) {
		return 0, fmt.Errorf("tone %g Hz: must be a frequency", hz)
	}
	near, reach, heard := -1, 3.0, ""
	for i := range e.tr {
		k := e.ordered(i)
		if t := &e.tr[k]; t.live {
			if heard != "" {
				heard += " and "
			}
			heard += fmt.Sprintf("%.2f", t.f*scale)
			if near < 0 || math.Abs(t.f*scale-hz) < math.Abs(e.tr[near].f*scale-hz) {
				near = k
			}
		}
	}
	if e.held() == 2 {
		reach = max(reach, math.Abs(e.tr[0].f-e.tr[1].f)/3)
	}
	d := math.Abs(e.tr[near].f*scale - hz)
	switch {
	case d > reach:
		return 0, fmt.Errorf("no tone within %.3g Hz of %g Hz: there are tones at %s Hz", reach, hz, heard)
	case e.held() == 2 && d > 0.5*math.Abs(e.tr[1-near].f*scale-hz):
		return 0, fmt.Errorf("two tones about equally near to %g Hz, at %s Hz: say it more closely", hz, heard)
	}
	return near, nil
}

// named says which tone is which.
func (e *twoTone) named() string {
	scale := 1 + e.cfg.SampleRateError
	l, c := &e.tr[e.local], &e.tr[1-e.local]
	switch {
	case l.live && c.live:
		return fmt.Sprintf("the local's tone is the one at %.2f Hz, the carrier's the one at %.2f Hz", l.f*scale, c.f*scale)
	case l.live:
		return fmt.Sprintf("the tone at %.2f Hz is the local's", l.f*scale)
	}
	return fmt.Sprintf("the tone at %.2f Hz is the carrier's", c.f*scale)
}

// assign makes track k the local's. What was learnt under another identity is
// learnt anew.
func (e *twoTone) assign(k int) {
	e.belief.on = false // nothing outranks the word
	if k == e.local {
		return
	}
	was := e.local
	e.local = k
	e.count.broken()
	e.unlearn()
	c, l := &e.tr[1-k], &e.tr[k]
	switch {
	case c.live && l.live:
		e.memory = pairMemory{known: true, at: l.at, carrier: c.f, local: l.f, ampC: c.amp, ampL: l.amp, evC: c.ev, evL: l.ev}
		e.anchor.add(c.at, c.f, c.uf)
	case was >= 0: // one tone only, and it was taken for the other one
		e.memory = pairMemory{}
	}
}

// unlearn drops what rests on which tone was which.
func (e *twoTone) unlearn() {
	e.spotted, e.hits = 0, 0
	e.sm.forget()
	e.pair.forget()
	e.anchor.forget()
	e.trusted.forget()
	e.belief.on = false
}

func (e *twoTone) forget() {
	e.word = word{}
	e.asked = true
	e.local, e.memory = -1, pairMemory{}
	e.hidden, e.lostLine, e.dim = false, 0, 0
	e.count.broken()
	e.unlearn()
}

// word is what the user said or showed of the pair.
type word struct {
	local   string    // why the local's tone is the local's
	moved   bool      // both tones moved with the dial: the carrier's is on the air
	doubt   string    // why no beat is to be given
	astray  bool      // the tones were lost since, and are not recognised yet
	refused []float64 // tones that stayed where they were when the dial moved, audio Hz
	last    worded    // the words of the last reading
}

// worded is what a reading said by itself, what was told, and what it said then.
type worded struct {
	why, local string
	moved      bool
	all        string
}

// lost forgets what was told of a pair that is gone. Hum stays.
func (t *word) lost() { *t = word{refused: t.refused} }

// stray says that the tones are looked for afresh.
func (e *twoTone) stray() {
	if e.memory.known {
		e.word.astray = true
	} else {
		e.word.lost()
	}
}

// recognise settles which tone is the local's. What the user said or showed
// comes first, if this is still that pair; it does not go over to another.
func (e *twoTone) recognise(mid float64) int {
	t := &e.word
	if (t.local != "" || t.moved || t.doubt != "") && e.memory.known && !e.memory.crossed {
		if k := e.byMemory(mid, e.tr[1].f-e.tr[0].f); k >= 0 {
			t.astray = false
			return k
		}
	}
	k := e.whichIsLocal(mid)
	if k >= 0 {
		t.local = ""
		if t.astray {
			t.lost()
		}
	}
	return k
}

// refuse keeps a tone at f from being taken up again.
func (t *word) refuse(f float64) {
	const most = 4 // of them; the oldest go
	if len(t.refused) == most {
		t.refused = t.refused[1:]
	}
	t.refused = append(t.refused, f)
}

const besideRefused = 1.5 // Hz about a refused tone that count as it

// without takes the refused tones out of lines, in place.
func (t *word) without(lines []found) []found {
	if len(t.refused) == 0 {
		return lines
	}
	return slices.DeleteFunc(lines, func(x found) bool {
		return slices.ContainsFunc(t.refused, func(f float64) bool { return math.Abs(x.f-f) < besideRefused })
	})
}

// inBand appends the refused tones that lie in band b, Hz in the band.
func (t *word) inBand(dst []float64, b *band) []float64 {
	for _, f := range t.refused {
		if math.Abs(f-b.centre) < b.half+besideRefused {
			dst = append(dst, f-b.centre)
		}
	}
	return dst
}

// mark puts what was told into a reading.
func (e *twoTone) mark(r *Reading) {
	t := &e.word
	if t.doubt != "" && !t.astray && e.held() == 2 {
		r.withoutBeat(t.doubt)
		r.flag(Unproven)
		return
	}
	switch {
	case r.State == Unsure && t.moved && !t.astray:
		r.unflag(Unproven)
	case r.State == Lone && len(t.refused) > 0:
		r.Why += fmt.Sprintf("; one at %.2f Hz stayed when the dial moved and is refused", t.refused[len(t.refused)-1]*(1+e.cfg.SampleRateError))
	case r.State != Apart:
	case t.local == asTold && e.against():
		r.Why = "the local: you said so, but it looks like a carrier, and the other tone does not"
		r.flag(Unproven)
	default:
		if t.moved {
			r.unflag(Unproven)
		}
		if !math.IsNaN(r.BeatAbs) && (t.moved || t.local != "") {
			r.Why = t.words(r.Why)
		}
	}
}

// against reports whether the evidence says that the local's tone is the
// carrier.
func (e *twoTone) against() bool {
	if e.cfg.Wired {
		return false
	}
	_, like := e.tr[e.local].ev.carrierLike(&e.tr[1-e.local].ev)
	return like
}

// words adds what was told to the reason that a reading gives. They hardly ever
// change: the last ones are kept.
func (t *word) words(why string) string {
	l := &t.last
	if l.all != "" && l.why == why && l.local == t.local && l.moved == t.moved {
		return l.all
	}
	*l = worded{why, t.local, t.moved, why}
	if t.moved {
		l.all = join(l.all, "the carrier: it moved with the dial")
	}
	if t.local != "" {
		l.all = join(l.all, "the local: "+t.local)
	}
	return l.all
}

func join(a, b string) string {
	if a == "" {
		return b
	}
	return a + "; " + b
}

// unflag takes f away.
func (r *Reading) unflag(f Flag) {
	if i := slices.Index(r.Flags, f); i >= 0 {
		r.Flags = slices.Delete(r.Flags, i, i+1)
	}
}
