package dsp

import "math"

// anchor foretells where the carrier is: it moves slowly, with the receiver's
// drift, while the local is turned. It is a Kalman filter of the carrier's
// frequency and of that drift, which itself walks at random.
type anchor struct {
	known     bool
	at        float64 // s
	hz, slope float64
	p00       float64 // variances and covariance of hz and slope
	p01, p11  float64
	scatter   float64 // of the carrier about the foretold from second to second, beyond its own u, Hz
	misses    int
	n         int // seconds taken since it began
}

const (
	driftWalk   = 3e-5 // how the drift wanders, Hz/s per square root of a second
	driftShare  = 0.01 // the same by its size
	firstDrift  = 0.03 // what it may be at first, Hz/s
	anchorKnown = 10   // seconds until scatter and drift are known
)

func (a *anchor) forget() { *a = anchor{} }

// add takes the carrier's frequency f at time t, as received over the last
// second or so, with its uncertainty.
func (a *anchor) add(t, f, u float64) {
	if !a.known || t-a.at > 300 {
		a.begin(t, f, u)
		return
	}
	dt := t - a.at
	if dt <= 0 {
		return
	}
	a.advance(dt)
	s := a.p00 + u*u + a.scatter*a.scatter
	d := f - a.hz
	if d*d > 25*s {
		// A fade turns the carrier for a moment; a retuned receiver stays away.
		if a.misses++; a.misses >= 3 {
			a.begin(t, f, u)
			return
		}
	} else {
		a.misses = 0
	}
	a.scatter = math.Sqrt(max(0, a.scatter*a.scatter+0.05*(min(d*d, 9*s)-s)))
	s = a.p00 + u*u + a.scatter*a.scatter
	if d*d > 25*s {
		return
	}
	a.n++
	k0, k1 := a.p00/s, a.p01/s
	a.hz += k0 * d
	a.slope += k1 * d
	a.p11 -= k1 * a.p01
	a.p01 -= k0 * a.p01
	a.p00 -= k0 * a.p00
}

func (a *anchor) begin(t, f, u float64) {
	s := a.scatter
	*a = anchor{known: true, at: t, hz: f, p00: u*u + s*s + 1e-8, p11: firstDrift * firstDrift, scatter: s}
}

// follow is add for a tone that may be turned by hand: where it leaves its way,
// it begins there anew with the drift that was known.
func (a *anchor) follow(t, f, u float64) {
	if a.known && t > a.at && t-a.at <= 300 {
		want, uw := a.when(t)
		if math.Abs(f-want) > 5*math.Hypot(u, uw) {
			a.advance(t - a.at)
			a.hz, a.p00, a.p01 = f, 1, 0
			return
		}
	}
	a.add(t, f, u)
	a.scatter = 0 // it stands still
}

func (a *anchor) walk() float64 {
	q := driftWalk + driftShare*math.Abs(a.slope)
	return q * q
}

func (a *anchor) advance(dt float64) {
	a.at += dt
	a.hz += a.slope * dt
	q := a.walk()
	a.p00 += 2*dt*a.p01 + dt*dt*a.p11 + q*dt*dt*dt/3
	a.p01 += dt*a.p11 + q*dt*dt/2
	a.p11 += q * dt
}

// set takes frequency and drift of a fit over span seconds for what they are;
// the drift only where it is not known better.
func (a *anchor) set(t, f, u, slope, us, span float64) {
	s := a.scatter
	// What a fading carrier does to the slope of so short a span.
	us = math.Hypot(us, 6*s/math.Pow(span, 1.5))
	if was, u := a.drift(t); a.known && u < us {
		slope, us = was, u
	}
	*a = anchor{known: true, at: t, hz: f, slope: slope, p00: u * u, p11: us * us, scatter: s, n: max(a.n, int(span))}
}

// when returns where the carrier is at time t, Hz, and how well that is known.
func (a *anchor) when(t float64) (f, u float64) {
	d := t - a.at
	v := a.p00 + 2*d*a.p01 + d*d*a.p11 + a.walk()*math.Abs(d*d*d)/3
	return a.hz + a.slope*d, math.Sqrt(max(v, 1e-10))
}

// drift returns the receiver's drift and its uncertainty at time t, Hz/s.
func (a *anchor) drift(t float64) (slope, u float64) {
	return a.slope, math.Sqrt(a.p11 + a.walk()*math.Abs(t-a.at))
}
