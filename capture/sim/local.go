package sim

import (
	"math"
	"math/rand/v2"
)

// flickers is how many first-order processes, time constants four apart from
// half a second on, make up flicker noise: flat to about 30000 s.
const flickers = 9

// local is the frequency of the local oscillator, Hz at RF away from nominal,
// in steps of dt seconds.
type local struct {
	f0, drift, nominal float64
	dt                 float64
	white, walkStep    float64
	flick              float64
	walk               float64
	ou                 [flickers]float64
	r                  *rand.Rand
	turns              []Turn
}

// newLocal scales each noise so that it has the Allan deviation asked for:
// white FM var(mean over dt) = adev(1 s)^2/dt; random walk FM with steps w:
// AVAR(tau) = (w^2/dt) tau/3; flicker FM as a sum of processes with variance v
// and time constants r apart: S(f) = v/(ln r) / f, AVAR = 2 ln2 v/(ln r)
// (IEEE Std 1139 power laws, from memory; tested against a computed deviation).
func newLocal(c *Config, dt float64) *local {
	l := &local{f0: c.Offset, drift: c.Drift, nominal: c.Local, dt: dt, turns: c.Trims, r: rand.New(rand.NewPCG(c.Seed, 201))}
	l.white = c.LocalWhiteFM * c.Local / math.Sqrt(dt)
	l.walkStep = c.LocalWalkFM * c.Local * math.Sqrt(3*dt)
	l.flick = c.LocalFlickerFM * c.Local * math.Sqrt(math.Log(4)/(2*math.Ln2))
	for i := range l.ou {
		l.ou[i] = l.flick * l.r.NormFloat64()
	}
	return l
}

// step returns the mean frequency of the next dt seconds, t their middle, without
// turns of the virtual trimmer by hand.
func (l *local) step(t float64) float64 {
	f := l.f0 + l.drift*t
	if l.white != 0 {
		f += l.white * l.r.NormFloat64()
	}
	if l.walkStep != 0 {
		l.walk += l.walkStep * l.r.NormFloat64()
		f += l.walk
	}
	if l.flick != 0 {
		tau := 0.5
		for i := range l.ou {
			k := math.Exp(-l.dt / tau)
			l.ou[i] = k*l.ou[i] + l.flick*math.Sqrt(1-k*k)*l.r.NormFloat64()
			f += l.ou[i]
			tau *= 4
		}
	}
	for _, u := range l.turns {
		switch {
		case t <= u.At:
		case u.Over <= 0 || t >= u.At+u.Over:
			f += u.By
		default:
			f += u.By * (t - u.At) / u.Over
		}
	}
	return f
}
