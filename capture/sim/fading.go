package sim

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
)

// gain is what a path multiplies by at one time, and how that changes a second.
type gain struct{ v, slope complex128 }

func (g gain) plus(h gain) gain     { return gain{g.v + h.v, g.slope + h.slope} }
func (g gain) times(a float64) gain { return gain{g.v * complex(a, 0), g.slope * complex(a, 0)} }

// turned returns the gain at time t under a Doppler shift of hz.
func (g gain) turned(hz, t float64) gain {
	e := cmplx.Rect(1, 2*math.Pi*math.Mod(hz*t, 1))
	return gain{g.v * e, (g.slope + g.v*complex(0, 2*math.Pi*hz)) * e}
}

// power is |v|^2, and turn is power times angular frequency: Im v' conj(v).
func (g gain) power() float64 { return real(g.v)*real(g.v) + imag(g.v)*imag(g.v) }
func (g gain) turn() float64  { return imag(g.slope)*real(g.v) - real(g.slope)*imag(g.v) }

// path is one complex Gaussian fading process of mean power 1 with the Doppler
// power spectrum exp(-f^2 / 2 sigma^2) (ITU-R F.1487; Watterson, Juroshek &
// Bensema 1970): white complex noise at 16 sigma through the continuous kernel
// whose spectrum is exp(-f^2 / 4 sigma^2). Images of the noise's rate lie at
// exp(-32) and below.
type path struct {
	sigma float64
	rate  float64 // of the noise, 16 sigma
	gain  float64
	r     *rand.Rand
	w     [taps]complex128 // the latest noise, by index modulo taps
	next  int64            // index of the next noise value
}

const taps = 32 // the kernel's support: +-5.6 standard deviations

func newPath(sigma float64, seed, stream uint64) *path {
	p := &path{sigma: sigma, rate: 16 * sigma, r: rand.New(rand.NewPCG(seed, stream)), next: -taps / 2}
	// Kernel exp(-(2 pi sigma t)^2); the sum of its squares over the noise's
	// grid is rate * sqrt(pi/2) / (2 pi sigma) to within e^-32.
	p.gain = 1 / math.Sqrt(p.rate*math.Sqrt(math.Pi/2)/(2*math.Pi*sigma))
	return p
}

// at returns the process at time t, which never goes back, and its derivative.
func (p *path) at(t float64) gain {
	x := t * p.rate
	centre := int64(math.Floor(x))
	for ; p.next <= centre+taps/2; p.next++ {
		p.w[uint64(p.next)%taps] = complex(p.r.NormFloat64(), p.r.NormFloat64()) * complex(math.Sqrt2/2, 0)
	}
	var g gain
	for k := centre - taps/2 + 1; k <= centre+taps/2; k++ {
		u := 2 * math.Pi * p.sigma * (x - float64(k)) / p.rate
		h := p.gain * math.Exp(-u*u)
		g.v += p.w[uint64(k)%taps] * complex(h, 0)
		g.slope += p.w[uint64(k)%taps] * complex(-2*u*h*2*math.Pi*p.sigma, 0)
	}
	return g
}

// channel gives the complex gains of both paths at the times of a control grid.
type channel struct {
	a, b  *path
	shift float64
	rice  gain    // steady part, on the first path
	part  float64 // amplitude of each fading part
	two   bool
}

func newChannel(c *Config) *channel {
	h := &channel{shift: c.PathShift, rice: gain{v: 1}}
	if c.Channel == "steady" || c.SpreadHz == 0 {
		return h
	}
	h.a, h.b = newPath(c.SpreadHz, c.Seed, 101), newPath(c.SpreadHz, c.Seed, 102)
	h.rice = h.rice.times(math.Sqrt(c.RiceK / (1 + c.RiceK)))
	h.part = math.Sqrt(0.5 / (1 + c.RiceK))
	h.two = true
	return h
}

// at returns the gains of the first and of the delayed path.
func (h *channel) at(t float64) [2]gain {
	if !h.two {
		return [2]gain{h.rice}
	}
	return [2]gain{h.rice.plus(h.a.at(t).times(h.part)), h.b.at(t).times(h.part).turned(h.shift, t)}
}
