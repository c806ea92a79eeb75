package dsp

import "math"

const (
	gainKeep  = 512    // seconds of the receiver's gain that are kept
	gainLearn = 25     // seconds of a clear local before it is judged
	gainLeast = 0.0035 // variance of the local's level (nepers squared, some 0.5 dB) that calls for it
)

// gain is the receiver's gain from second to second, as the noise beside the
// tones tells: a gain control turns noise and tones up and down alike. It counts
// only where it was seen to steady the local, whose level stands still, while
// that stood clear: a programme's sidebands are no noise.
type gain struct {
	nu   [gainKeep]float64 // half the log of the noise's density in second i mod gainKeep; NaN: not known
	last int64             // the latest second
	ref  float64           // nu of gain 1
	n    float64           // seconds of a clear local
	raw  spreadOf          // log of its amplitude
	left spreadOf          // the same less nu
	on   bool
}

// spreadOf is a running mean and variance over about a minute.
type spreadOf struct{ mean, v float64 }

func (s *spreadOf) add(x, w float64) {
	d := x - s.mean
	s.mean += w * d
	s.v = (1 - w) * (s.v + w*d*d)
}

// hear takes the noise's density in the second around mid.
func (g *gain) hear(mid, n0 float64) {
	sec := int64(math.Floor(mid))
	if sec > g.last+gainKeep {
		g.last = sec - gainKeep
	}
	for g.last < sec {
		g.last++
		g.nu[g.last%gainKeep] = math.NaN()
	}
	if n0 > 0 {
		g.nu[sec%gainKeep] = math.Log(n0) / 2
	}
}

// learn takes the amplitude of a local that stands clear, in the latest second.
func (g *gain) learn(amp float64) {
	nu := g.nu[g.last%gainKeep]
	if math.IsNaN(nu) || !(amp > 0) {
		return
	}
	g.n++
	w := max(1.0/60, 1/g.n)
	g.raw.add(math.Log(amp), w)
	g.left.add(math.Log(amp)-nu, w)
	if g.n < gainLearn {
		return
	}
	on := g.raw.v > gainLeast && g.raw.v > 2.5*g.left.v
	if on && !g.on {
		g.ref = g.raw.mean - g.left.mean
	}
	g.on = on
}

// level returns the local's amplitude at gain 1.
func (g *gain) level() float64 { return math.Exp(g.left.mean + g.ref) }

// flutter returns by how much, relatively, the local's amplitude in a second is
// another than is reckoned with.
func (g *gain) flutter() float64 {
	switch {
	case g.n < gainLearn:
		return 0
	case g.on:
		return math.Sqrt(g.left.v)
	}
	return math.Sqrt(g.raw.v)
}

// at returns the gain at time t, 1 where it is not known.
func (g *gain) at(t float64) float64 {
	if !g.on {
		return 1
	}
	of := func(sec int64) float64 {
		if sec < 0 || sec > g.last || sec <= g.last-gainKeep {
			return math.NaN()
		}
		return g.nu[sec%gainKeep] - g.ref
	}
	sec := math.Floor(t - 0.5)
	a, b := of(int64(sec)), of(int64(sec)+1)
	u := t - 0.5 - sec
	switch {
	case math.IsNaN(a) && math.IsNaN(b):
		return 1
	case math.IsNaN(a):
		a = b
	case math.IsNaN(b):
		b = a
	}
	return math.Exp(a + (b-a)*u)
}

// flatten takes the receiver's gain out of a stretch.
func (g *gain) flatten(st *stretch) {
	if !g.on {
		return
	}
	const every = 8
	var k complex128
	for i := range st.z {
		if i%every == 0 || st.dt > 0.1 {
			k = complex(1/g.at(st.mid+st.t0+float64(i)*st.dt), 0)
		}
		st.z[i] *= k
	}
}
