package dsp

import "math"

// evidence is what speaks for a tone being the off-air carrier: its level
// wanders as fading makes it, and its programme stands beside it in pairs of
// sidebands of equal distance and about equal level.
type evidence struct {
	seconds  int
	level    float64 // running mean of the level, dB, over about a minute
	varies   float64 // running variance of the level, dB^2
	mirrored float64 // share of the latest seconds that showed a pair of sidebands
	faded    bool    // the level is far below its mean now
}

const (
	fadeDepth   = 8.0  // dB below the mean level that count as a deep fade
	enoughTime  = 20   // seconds before the level's wandering says anything
	sidebandMin = 20.0 // Hz: closer in, gain control makes mirror images too
)

// add takes a second in which the tone was there from end to end.
func (e *evidence) add(dBFS float64, pair bool) {
	e.seconds++
	w := max(1.0/60, 1/float64(e.seconds))
	d := dBFS - e.level
	if e.seconds == 1 {
		e.level, d = dBFS, 0
	}
	e.faded = d < -fadeDepth
	e.level += w * d
	e.varies += w * (d*d - e.varies)
	p := 0.0
	if pair {
		p = 1
	}
	e.mirrored += max(0.1, 1/float64(e.seconds)) * (p - e.mirrored)
}

// carrierLike reports whether the evidence shows an off-air carrier, beside a
// local whose level stands still, and in which words.
func (e *evidence) carrierLike(local *evidence) (string, bool) {
	switch {
	case e.mirrored > 0.5 && local.mirrored < 0.3:
		return "it carries a programme: sidebands in pairs about it", true
	case e.seconds >= enoughTime && local.seconds >= enoughTime && e.varies > 1 && e.varies > 9*local.varies:
		return "it fades, and the other tone does not", true
	}
	return "", false
}

// pair reports whether the spectrum shows two lines at equal distances to both
// sides of f, each well above the noise, within 6 dB of each other.
func (s *spectrum) pair(f, noise, half float64) bool {
	bin := s.rate / float64(s.n)
	for d := math.Ceil(sidebandMin / bin); d*bin <= half-math.Abs(f); d++ {
		up, down := s.p[s.bin(f+d*bin)], s.p[s.bin(f-d*bin)]
		if min(up, down) > 30*noise && max(up, down) < 4*min(up, down) && s.isPeak(f+d*bin) && s.isPeak(f-d*bin) {
			return true
		}
	}
	return false
}

// isPeak reports whether the bin at f is, within one bin, a local maximum.
func (s *spectrum) isPeak(f float64) bool {
	k := s.bin(f)
	at := func(i int) float64 { return s.p[(k+i+s.n)%s.n] }
	top := max(at(-1), at(0), at(1))
	return top >= at(-2) && top >= at(2) && top < 8*at(0)
}
