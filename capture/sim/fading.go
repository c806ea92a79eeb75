package sim

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
)

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

// at returns the process at time t, which never goes back.
func (p *path) at(t float64) complex128 {
	x := t * p.rate
	centre := int64(math.Floor(x))
	for ; p.next <= centre+taps/2; p.next++ {
		p.w[uint64(p.next)%taps] = complex(p.r.NormFloat64(), p.r.NormFloat64()) * complex(math.Sqrt2/2, 0)
	}
	var sum complex128
	for k := centre - taps/2 + 1; k <= centre+taps/2; k++ {
		u := 2 * math.Pi * p.sigma * (x - float64(k)) / p.rate
		sum += p.w[uint64(k)%taps] * complex(math.Exp(-u*u), 0)
	}
	return sum * complex(p.gain, 0)
}

// channel gives the complex gains of both paths at the times of a control grid.
type channel struct {
	a, b  *path
	shift float64
	rice  complex128 // steady part, on the first path
	part  float64    // amplitude of each fading part
	two   bool
}

func newChannel(c *Config) *channel {
	h := &channel{shift: c.PathShift, rice: 1}
	if c.Channel == "steady" || c.SpreadHz == 0 {
		return h
	}
	h.a, h.b = newPath(c.SpreadHz, c.Seed, 101), newPath(c.SpreadHz, c.Seed, 102)
	h.rice = complex(math.Sqrt(c.RiceK/(1+c.RiceK)), 0)
	h.part = math.Sqrt(0.5 / (1 + c.RiceK))
	h.two = true
	return h
}

func (h *channel) at(t float64) (g1, g2 complex128) {
	if !h.two {
		return h.rice, 0
	}
	g1 = h.rice + h.a.at(t)*complex(h.part, 0)
	g2 = h.b.at(t) * complex(h.part, 0) * cmplx.Rect(1, 2*math.Pi*math.Mod(h.shift*t, 1))
	return g1, g2
}
