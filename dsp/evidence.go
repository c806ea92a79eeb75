package dsp

import "math"

// evidence is what speaks for a tone being the off-air carrier: its level
// wanders as fading makes it, and its programme stands beside it in pairs of
// sidebands of equal distance and about equal level, which the other tone does
// not have.
type evidence struct {
	seconds  int
	level    float64 // running mean of the level, dB, over about a minute
	varies   float64 // running variance of the level, dB^2
	last     float64 // the latest level, dB
	steps    float64 // running mean square of its steps from second to second, dB^2
	mirrored float64 // share of the latest seconds that showed a pair of sidebands
	faded    bool    // the level is far below its mean now
}

const (
	fadeDepth    = 8.0  // dB below the mean level that count as a deep fade
	enoughTime   = 20   // seconds before the level's wandering says anything
	smearedTime  = 10   // seconds for which a tone must be smeared to be off the air
	widestPath   = 0.5  // rms Doppler width of an ordinary path at the most, Hz (common practice)
	sidebandTime = 5    // seconds before sidebands do
	sidebandMin  = 20.0 // Hz: closer in, gain control makes mirror images too
	ownSideband  = 4.0  // how much stronger they must be than the other tone's, power by that of the tone
)

// add takes a second in which the tone was there from end to end.
func (e *evidence) add(dBFS float64) {
	e.seconds++
	w := max(1.0/60, 1/float64(e.seconds))
	d, step := dBFS-e.level, dBFS-e.last
	e.last = dBFS
	if e.seconds == 1 {
		e.level, d, step = dBFS, 0, 0
	}
	e.faded = d < -fadeDepth
	e.level += w * d
	e.varies += w * (d*d - e.varies)
	e.steps += w * (step*step - e.steps)
}

// sidebands takes whether a second in which the other tone was there too showed
// a pair of them.
func (e *evidence) sidebands(pair bool) {
	p := 0.0
	if pair {
		p = 1
	}
	e.mirrored += max(0.1, 1/float64(e.seconds)) * (p - e.mirrored)
}

// carrierLike reports whether the evidence shows an off-air carrier, beside a
// local whose level stands still, and in which words. What both tones do alike
// is the receiver's gain control. Noise through a filter a few hertz wide comes
// and goes too, but within the second: its level has nothing to do with that of
// the second before, while a carrier's fading takes its time.
func (e *evidence) carrierLike(local *evidence) (string, bool) {
	switch {
	case e.seconds >= sidebandTime && e.mirrored > 0.5 && local.mirrored < 0.3:
		return "it carries a programme: sidebands in pairs about it", true
	case e.fades(local):
		return "it fades, and the other tone does not", true
	}
	return "", false
}

// fades reports whether the level wanders as fading makes it, and the other's
// does not.
func (e *evidence) fades(other *evidence) bool {
	return e.seconds >= enoughTime && other.seconds >= enoughTime && e.varies > 1 && e.varies > 9*other.varies && e.steps < e.varies
}

// ownPair reports whether line k has two sidebands at equal distances to both
// sides, each well above the noise of density n0 and within 6 dB of each other,
// that are its own: gain control gives every tone the same pair by the tone's
// level, so line o must show them much weaker. What lies a multiple of the mains
// frequency beside a multiple of it may be more hum, which is about as strong.
func (l *lens) ownPair(b *band, k, o int, n0 float64) bool {
	s := l.spec
	f, f2 := l.lines[k].f, l.lines[o].f
	by := power(l.lines[k].a) / max(power(l.lines[o].a), 1e-300)
	own := power(l.lines[k].a) * l.win.used / 1.5 // its density before it was taken away, under a Hann window
	bin := s.rate / float64(s.n)
	for d := math.Ceil(sidebandMin / bin); d*bin <= b.half-math.Abs(f); d++ {
		h := d * bin
		if math.Abs(f+h-f2) < 4 || math.Abs(f-h-f2) < 4 {
			continue
		}
		up, down := s.p[s.bin(f+h)], s.p[s.bin(f-h)]
		if min(up, down) < 30*n0 || max(up, down) > 4*min(up, down) || !s.isPeak(f+h) || !s.isPeak(f-h) {
			continue
		}
		most := own / 4 // full modulation
		if humBeside(f+b.centre, h) {
			most = own / 8
		}
		if max(up, down) > most || ripple(h) || math.Abs(f2)+h > b.half {
			continue
		}
		other := min(s.top(f2+h), s.top(f2-h)) + 4*n0
		if min(up, down) > ownSideband*by*other {
			return true
		}
	}
	return false
}

// humBeside reports whether a tone at f Hz of audio and one h beside it may both
// be multiples of a mains frequency.
func humBeside(f, h float64) bool {
	for _, hz := range mains {
		m := math.Round(h / hz)
		if m >= 1 && math.Abs(h-m*hz) < 1+0.2*m && math.Abs(f-hz*math.Round(f/hz)) < 0.3+0.2*f/hz {
			return true
		}
	}
	return false
}

// ripple reports whether sidebands h aside are what a rectifier or a magnetic
// field puts on an oscillator. Of the multiples of the mains frequency only 100
// Hz is used by stations too.
func ripple(h float64) bool {
	for _, hz := range [...]float64{50, 60, 120} {
		if math.Abs(h-hz) < 1.5 {
			return true
		}
	}
	return false
}

func power(z complex128) float64 { return real(z)*real(z) + imag(z)*imag(z) }

// top returns the largest density of the three bins nearest to f.
func (s *spectrum) top(f float64) float64 {
	k := s.bin(f)
	return max(s.p[(k+s.n-1)%s.n], s.p[k], s.p[(k+1)%s.n])
}

// isPeak reports whether the bin at f is, within one bin, a local maximum.
func (s *spectrum) isPeak(f float64) bool {
	k := s.bin(f)
	at := func(i int) float64 { return s.p[(k+i+s.n)%s.n] }
	top := max(at(-1), at(0), at(1))
	return top >= at(-2) && top >= at(2) && top < 8*at(0)
}
