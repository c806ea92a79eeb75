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
// plainly does not, or -1.
func (e *twoTone) byJitter() int {
	if e.cfg.Wired {
		return -1
	}
	a, ra, ok0 := e.tr[0].jit.typical()
	b, rb, ok1 := e.tr[1].jit.typical()
	switch {
	case !ok0 || !ok1:
	case a > 20*b && ra > 20:
		return 1
	case b > 20*a && rb > 20:
		return 0
	}
	return -1
}
