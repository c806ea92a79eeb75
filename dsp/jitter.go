package dsp

import "slices"

const jitterKeep = 15

// jitter is how unsteady a tone's frequency is from second to second: the
// squares of its second differences, which a drift does not enter, by what its
// noise alone would give. Fading turns the carrier's phase; the local's stands
// still, and gain control, which works on both, does not touch it.
type jitter struct {
	f, u [3]float64 // the latest three seconds
	at   float64
	n    int                 // seconds in a row
	d    [jitterKeep]float64 // squared second differences, Hz^2
	r    [jitterKeep]float64 // the same by the noise
	m    int
}

func (j *jitter) add(at, f, u float64) {
	if at-j.at != 1 {
		j.n = 0
	}
	j.at = at
	j.f = [3]float64{j.f[1], j.f[2], f}
	j.u = [3]float64{j.u[1], j.u[2], u}
	if j.n++; j.n < 3 {
		return
	}
	d := j.f[0] - 2*j.f[1] + j.f[2]
	v := j.u[0]*j.u[0] + 4*j.u[1]*j.u[1] + j.u[2]*j.u[2]
	j.d[j.m%jitterKeep], j.r[j.m%jitterKeep] = d*d, d*d/v
	j.m++
}

// typical returns the medians of the squares and of their ratio to the noise;
// false before there are enough. A median of squares of Gaussian noise is 0.455
// of their mean.
func (j *jitter) typical() (hz2, ratio float64, ok bool) {
	n := min(j.m, jitterKeep)
	if n < 8 {
		return 0, 0, false
	}
	var a, b [jitterKeep]float64
	copy(a[:], j.d[:n])
	copy(b[:], j.r[:n])
	slices.Sort(a[:n])
	slices.Sort(b[:n])
	return a[n/2] / 0.455, b[n/2] / 0.455, true
}

// byJitter returns the index of the tone that stands still beside one that
// plainly does not, or -1. Where one fades and the other does not, less will do:
// a hand at the local's wire changes its level too, but not its frequency.
func (e *twoTone) byJitter() int {
	if e.cfg.Wired {
		return -1
	}
	var d, r [2]float64
	for k := range e.tr {
		var ok bool
		if d[k], r[k], ok = e.tr[k].jit.typical(); !ok {
			return -1
		}
	}
	for k := range e.tr {
		plainly := 20.0
		if e.tr[1-k].ev.fades(&e.tr[k].ev) {
			plainly = 5
		}
		if d[1-k] > plainly*d[k] && r[1-k] > plainly {
			return k
		}
	}
	return -1
}
