package dsp

import (
	"fmt"
	"math"
	"math/cmplx"
)

const (
	nearSamples = 64 // of a span
	nearPhases  = 12
	nearMost    = 3.0 // merged tones are not further apart than this, Hz
)

// nearLevels are the changes of the levels' ratio that are allowed for.
var nearLevels = [...]float64{0.8, 0.9, 1, 1.1, 1.25}

// nearSteps are the separations tried, in cycles over the span.
var nearSteps = [...]float64{0.15, 0.2, 0.25, 0.3, 0.4, 0.5, 0.65, 0.8, 1, 1.3, 1.6, 2, 2.5, 3}

// nearZero bounds the beat of two tones that cannot be told apart. The phase of
// their sum would wave about a parabola (frequency and drift) by an amount that
// their levels and the separation give, at any phase between them; where it
// plainly waves less, they are closer. The phase is used because a gain control
// leaves nothing else.
type nearZero struct {
	ratio float64                 // of the weaker tone's level to the other's, for which least was made
	least [len(nearSteps)]float64 // the smallest mean square of that wave, rad^2
	ph    [nearSamples]float64
	last  [8]float64 // what the latest seconds said
	seen  int
	at    float64
}

// wave fills in least for two tones whose levels have the given ratio.
func (x *nearZero) wave(ratio float64) {
	if math.Abs(ratio-x.ratio) < 0.05*x.ratio {
		return
	}
	x.ratio = ratio
	for k, q := range nearSteps {
		x.least[k] = math.Inf(1)
		for j := range nearPhases * len(nearLevels) {
			a := min(0.999, ratio*nearLevels[j/nearPhases])
			for i := range x.ph {
				t := (float64(i) + 0.5) / nearSamples
				x.ph[i] = cmplx.Phase(1 + cmplx.Rect(a, 2*math.Pi*(q*t+float64(j%nearPhases)/nearPhases)))
			}
			all, _ := aboutParabola(x.ph[:], 0)
			x.least[k] = min(x.least[k], all)
		}
	}
}

// aboutParabola returns the mean square of y about the parabola that fits all but
// its last n values best: of those before, and of those last.
func aboutParabola(y []float64, n int) (before, last float64) {
	var m [3][3]float64
	var r [3]float64
	at := func(i int) [3]float64 {
		t := (2*float64(i)+1)/float64(len(y)) - 1
		return [3]float64{1, t, t*t - 1.0/3}
	}
	for i, v := range y[:len(y)-n] {
		p := at(i)
		for a := range 3 {
			r[a] += p[a] * v
			for b := range 3 {
				m[a][b] += p[a] * p[b]
			}
		}
	}
	c := solve3(m, r)
	for i, v := range y {
		p := at(i)
		d := v - c[0]*p[0] - c[1]*p[1] - c[2]*p[2]
		if i < len(y)-n {
			before += d * d / float64(len(y)-n)
		} else {
			last += d * d / float64(n)
		}
	}
	return before, last
}

// bound returns within how many hertz of zero beat the tones are at time end,
// by the sound around centre (audio Hz) up to then; nearMost when nothing bounds
// it.
func (x *nearZero) bound(s *slow, st *stretch, end, centre, ampC, ampL float64) float64 {
	ratio := min(ampC, ampL) / max(ampC, ampL)
	if !(ratio > 0.01) {
		return nearMost
	}
	x.wave(ratio)
	var moves bool
	second := nearMost
	// A span's samples are means, in which a faster beat would drown: shorter
	// spans have to rule that out first.
	best := nearMost
	for span := 1.0; span < 256; span *= math.Sqrt2 {
		s.fetch(st, end, span, centre, nearSamples)
		if st.valid < 0.97 || best*st.dt > 0.3 {
			break
		}
		ph := x.ph[:min(len(st.z), nearSamples)]
		for i := range ph {
			ph[i] = cmplx.Phase(st.z[i])
			if i > 0 {
				ph[i] -= 2 * math.Pi * math.Round((ph[i]-ph[i-1])/(2*math.Pi))
			}
		}
		all, _ := aboutParabola(ph, 0)
		if span > 5 {
			before, last := aboutParabola(ph, max(1, int(2/span*float64(len(ph)))))
			moves = moves || last > 100*(1+100/span)*before // it began to move a moment ago
		}
		for k, q := range nearSteps {
			if all < 0.25*x.least[k] {
				best = min(best, q/span)
				break
			}
		}
		if span == 1 {
			second = best
		}
	}
	if moves {
		best = second
	}
	return best
}

// over returns the largest of the bounds of the latest seconds, end being the
// present one: by chance a local that turns, or a carrier that fades, may look
// steady for a moment. NaN while nothing has been bounded for so long.
func (x *nearZero) over(end, bound float64) float64 {
	if end-x.at > 1.5 {
		x.seen = 0
	}
	x.at = end
	x.last[x.seen%len(x.last)] = bound
	x.seen++
	most := 0.0
	for _, b := range x.last {
		most = max(most, b)
	}
	if x.seen < len(x.last) || most == nearMost {
		return math.NaN()
	}
	return most
}

// sayNear says how close the merged tones are known to be.
func (e *twoTone) sayNear(r *Reading, mid, scale float64) {
	m := &e.memory
	if !m.known || len(e.bands) != 1 || math.Abs(e.cfg.SetOff()) >= 10 {
		return
	}
	f := e.tr[0].f
	if !e.tr[0].live {
		f = e.tr[1].f
	}
	r.BeatWithin = e.zero.over(mid, e.zero.bound(e.slow, &e.pair.st, mid+0.5, f, m.ampC, m.ampL)) * scale
	if !math.IsNaN(r.BeatWithin) && !e.hidden {
		r.Why = fmt.Sprintf("zero beat within ±%.2g Hz, if both tones are still there; the longer they rest, the closer this gets", r.BeatWithin)
	}
}
