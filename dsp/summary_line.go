package dsp

import (
	"math"
	"math/cmplx"
)

// steadyLine is the carrier as seen from the local, one phasor a point, in
// stretches of which each has a phase of its own: within a stretch the steady
// part of the carrier turns at one frequency.
type steadyLine struct {
	dt   float64
	z    []complex128 // 0 where there is none
	from []int        // first point of every stretch
	f    float64      // Hz, where the stretches add up best
	d    []float64    // what is left of the phase, radians of the steady part; 0 where there is none
	t    []float64    // seconds about the middle of the stretch's points; 0 where there is none
	sxx  float64      // sum of t^2
	n    []float64    // points of every stretch
	held float64      // what the stretches' sums explain of the power, score(f)
}

// coherent looks for one line in the carrier as seen from the local: the
// frequency at which the phasors of all seconds add up best. That is the
// regression of the steady part's phase, with what fades as noise beside it:
// deep fades weigh no more than other seconds, and slip no cycle. Where the
// frequency leaves no doubt of the whole cycles between them, unbroken runs are
// taken as one. It is used only where most of the power stands in that line;
// its uncertainty comes from the phase that is left, by its density near
// frequency zero.
func (s *Summer) coherent() (mean, u float64, ok bool) {
	l := steadyLine{dt: float64(s.tau0), z: make([]complex128, len(s.phase))}
	var power, w, wf float64
	for i, p := range s.phase {
		if a := s.level[i]; a > 0 && !math.IsNaN(p) {
			l.z[i] = cmplx.Rect(a, 2*math.Pi*(p-math.Floor(p)))
			power += a * a
			w += s.w[i]
			wf += s.wf[i]
		}
	}
	longest := 0
	s.eachRun(func(lo, hi int) {
		longest = max(longest, hi-lo)
		l.from = append(l.from, lo)
	})
	if power == 0 || longest < 20 {
		return 0, 0, false
	}
	l.climb(wf/w, 60, float64(longest)*l.dt)
	l.leave()
	if l.held < 0.6*power {
		return 0, 0, false
	}
	v, ok := l.density()
	if !ok {
		return 0, 0, false
	}
	if one, yes := l.joined(v, s.cut); yes {
		if w, ok := one.density(); ok {
			l, v = *one, w
		}
	}
	// 1.1: the density rests on a dozen of squares or so (as in byPower).
	return l.f, 1.1 * math.Sqrt(v/l.sxx) / (2 * math.Pi), true
}

func (l *steadyLine) turnBack(i int, f float64) complex128 {
	x := f * float64(i) * l.dt
	return cmplx.Rect(1, -2*math.Pi*(x-math.Floor(x)))
}

// eachStretch calls f for every stretch.
func (l *steadyLine) eachStretch(f func(k, lo, hi int)) {
	for k, lo := range l.from {
		hi := len(l.z)
		if k+1 < len(l.from) {
			hi = l.from[k+1]
		}
		f(k, lo, hi)
	}
}

// sum returns the sum of the phasors of a stretch, turned back by f, and their
// number.
func (l *steadyLine) sum(lo, hi int, f float64) (y complex128, n float64) {
	e, q := l.turnBack(lo, f), l.turnBack(1, f)
	for _, z := range l.z[lo:hi] {
		if z != 0 {
			y += z * e
			n++
		}
		e *= q
	}
	return y, n
}

// score returns what steady lines of frequency f explain of the power.
func (l *steadyLine) score(f float64) float64 {
	v := 0.0
	l.eachStretch(func(_, lo, hi int) {
		if y, n := l.sum(lo, hi, f); n > 0 {
			v += (real(y)*real(y) + imag(y)*imag(y)) / n
		}
	})
	return v
}

// climb finds the frequency of the highest score within some steps of f0, where
// span is that of the longest stretch, s. It returns that of the highest
// elsewhere, 0 if there is no other.
func (l *steadyLine) climb(f0 float64, steps int, span float64) (runnerUp float64) {
	step := 0.3 / span
	v := make([]float64, 2*steps+1)
	top := 0
	for k := range v {
		if v[k] = l.score(f0 + float64(k-steps)*step); v[k] > v[top] {
			top = k
		}
	}
	for k := 1; k < len(v)-1; k++ { // peaks of their own
		if k != top && v[k] > v[k-1] && v[k] > v[k+1] {
			runnerUp = max(runnerUp, v[k])
		}
	}
	best, at := v[top], f0+float64(top-steps)*step
	for range 14 { // the top by halving steps of a parabola's width
		step /= 2
		for _, f := range [2]float64{at - step, at + step} {
			if v := l.score(f); v > best {
				best, at = v, f
			}
		}
	}
	l.f, l.held = at, best
	return runnerUp
}

// leave computes what the line leaves of the phase.
func (l *steadyLine) leave() {
	l.d, l.t = make([]float64, len(l.z)), make([]float64, len(l.z))
	l.n, l.sxx = make([]float64, len(l.from)), 0
	l.eachStretch(func(k, lo, hi int) {
		y, n := l.sum(lo, hi, l.f)
		if l.n[k] = n; n == 0 {
			return
		}
		b := y / complex(n, 0)
		mid := 0.0
		for i := lo; i < hi; i++ {
			if l.z[i] != 0 {
				mid += float64(i) / n
			}
		}
		for i := lo; i < hi; i++ {
			if l.z[i] != 0 {
				l.d[i] = imag(l.z[i] / b * l.turnBack(i, l.f))
				l.t[i] = (float64(i) - mid) * l.dt
				l.sxx += l.t[i] * l.t[i]
			}
		}
	})
}

// density returns the density of the remaining phase near frequency zero, per
// point: the mean square of its sums under sine tapers (Riedel & Sidorenko,
// IEEE Trans. SP-43, 1995; from memory), each of them freed of what the line's
// phases and frequency have taken for themselves. The tapers reach as far as
// the density is flat: to half the rms width of what fades.
func (l *steadyLine) density() (v float64, ok bool) {
	var dd, jumps float64
	points := l.points()
	for i, d := range l.d {
		dd += d * d
		if i > 0 && l.z[i] != 0 && l.z[i-1] != 0 {
			jumps += (d - l.d[i-1]) * (d - l.d[i-1])
		}
	}
	if points < 20 || dd == 0 {
		return 0, false
	}
	width := math.Sqrt(jumps/dd) / (2 * math.Pi) // cycles a point
	last := int(max(8, min(width*float64(len(l.z)), points/4, 60)))
	sum, n := 0.0, 0.0
	taper := make([]float64, len(l.z))
	for k := 1; k <= last || n < 8 && float64(k) < points/2; k++ {
		was, left := l.taper(taper, k)
		if left < 0.3*was {
			continue
		}
		y := 0.0
		for i, x := range taper {
			y += x * l.d[i]
		}
		sum += y * y / left
		n++
	}
	if n < 6 {
		return 0, false
	}
	// Few tapers are scattered, and a formula (that of a Gaussian spectrum as
	// wide) is blind: both are heard, as in byPower.
	v = sum / n
	known := dd / points / (math.Sqrt(2*math.Pi) * width)
	return (sum + 12*max(known, v/4)) / (n + 12), true
}

// taper fills x with sine taper k where there are points, orthogonal to every
// stretch's constant and to the common slope, and returns its sum of squares
// before and after that.
func (l *steadyLine) taper(x []float64, k int) (was, left float64) {
	slope := 0.0
	w := math.Pi * float64(k) / float64(len(x)+1)
	l.eachStretch(func(j, lo, hi int) {
		mean := 0.0
		for i := lo; i < hi; i++ {
			x[i] = 0
			if l.z[i] != 0 {
				x[i] = math.Sin(w * float64(i+1))
				was += x[i] * x[i]
				mean += x[i] / l.n[j]
				slope += x[i] * l.t[i]
			}
		}
		for i := lo; i < hi; i++ {
			if l.z[i] != 0 {
				x[i] -= mean
			}
		}
	})
	slope /= l.sxx
	for i := range x {
		x[i] -= slope * l.t[i]
		left += x[i] * x[i]
	}
	return was, left
}

// joined takes stretches together that have no cut between them. That is right
// if the frequency they agree on leaves no doubt of the cycles between them, and
// if their phases then fit; v is the density of what is left of the phase while
// they stand alone.
func (l *steadyLine) joined(v float64, cut []int32) (*steadyLine, bool) {
	one := &steadyLine{dt: l.dt, z: l.z}
	l.eachStretch(func(k, lo, hi int) {
		if k == 0 || cut[lo] != cut[lo-1] {
			one.from = append(one.from, lo)
		}
	})
	fewer := l.phases() - one.phases()
	if fewer == 0 {
		return nil, false
	}
	span := 0.0
	one.eachStretch(func(_, lo, hi int) { span = max(span, float64(hi-lo)*l.dt) })
	reach := 5 * math.Sqrt(v/l.sxx) / (2 * math.Pi)
	steps := 10 + int(reach/0.3*span)
	if steps > 500 {
		return nil, false
	}
	other := one.climb(l.f, steps, span)
	// Twice the logarithm of a likelihood ratio is a difference of scores by the
	// density of one quadrature. A phase less, amplitude and phase, costs about
	// two, of a density that is itself known to a quarter; so much more than that
	// comes from phases that do not fit.
	unit := v * l.held / l.points()
	misfit, free := (l.held-one.held)/unit, 2*fewer+1
	if one.held-other < 16*unit || misfit > 1.5*free+6*math.Sqrt(2*free) {
		return nil, false
	}
	one.leave()
	return one, true
}

// phases returns the number of stretches with something in them.
func (l *steadyLine) phases() (n float64) {
	l.eachStretch(func(_, lo, hi int) {
		if y, _ := l.sum(lo, hi, 0); y != 0 {
			n++
		}
	})
	return n
}

// points returns the number of phasors.
func (l *steadyLine) points() (n float64) {
	for _, z := range l.z {
		if z != 0 {
			n++
		}
	}
	return n
}
