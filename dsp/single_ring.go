package dsp

import "math"

const (
	ringRate  = 4.0    // target rate of the ring, samples per second
	ringHalf  = 0.75   // half-width that it keeps flat, Hz
	ringSpan  = 3600.0 // how much of it a fit rests on at most, s
	ringSteps = 5      // block means of 1, 2, ... 2^(ringSteps-1) of its samples are fitted
)

// ring keeps an hour of the input around 0 Hz at about four samples a second,
// for beats too slow for windows of seconds. Sample m belongs to output m*d of
// the band, hence to time m*dt exactly. It is made from a band centred on 0 Hz.
// Not safe for concurrent use; the steady state allocates nothing.
type ring struct {
	d    int
	dt   float64
	taps []float64
	z    []complex128
	ok   []bool
	next int64
	grey [ringSteps]float64 // density at 0 Hz over what the variance of a block mean says
	near [ringSteps]float64 // 1 - correlation of neighbouring block means, noise alone
}

func newRing(p *plan) *ring {
	r := &ring{d: max(1, int(p.outRate()/ringRate))}
	r.dt = float64(r.d) / p.outRate()
	r.taps = []float64{1}
	if r.d > 1 {
		r.taps = kaiserLowpass(ringHalf/p.outRate(), (1/r.dt-ringHalf)/p.outRate(), 70)
	}
	n := 1
	for float64(n)*r.dt < ringSpan+8 {
		n *= 2
	}
	r.z, r.ok = make([]complex128, n), make([]bool, n)
	r.colour()
	return r
}

// colour computes what the filter leaves of the whiteness of the noise, from
// its autocorrelation at the distances of the ring's samples.
func (r *ring) colour() {
	reach := len(r.taps)/r.d + 1
	auto := make([]float64, reach+1) // of neighbours 0, 1, ... apart
	total := 0.0
	for l := range auto {
		for i := 0; i+l*r.d < len(r.taps); i++ {
			auto[l] += r.taps[i] * r.taps[i+l*r.d]
		}
		total += auto[l]
		if l > 0 {
			total += auto[l]
		}
	}
	at := func(l int) float64 {
		if l = max(l, -l); l <= reach {
			return auto[l]
		}
		return 0
	}
	for k := range ringSteps {
		m := 1 << k
		var same, next float64
		for l := 1 - m; l < m; l++ {
			n := float64(m - max(l, -l))
			same += n * at(l)
			next += n * at(l+m)
		}
		r.grey[k] = total * float64(m) / same
		r.near[k] = 1 - next/same
	}
}

// time returns the time of sample m, s.
func (r *ring) time(m int64) float64 { return float64(m) * r.dt }

// lag is how far behind the band's output the ring stands, s.
func (r *ring) lag() float64 { return float64(len(r.taps)/2) * r.dt / float64(r.d) }

// advance takes what band b has made since.
func (r *ring) advance(b *band) {
	c, d := int64(len(r.taps)/2), int64(r.d)
	mask := int64(len(b.z) - 1)
	from := ceilDiv(max(b.next-int64(len(b.z)), 0)+c, d)
	if r.next < from-int64(len(r.z)) {
		r.next = from - int64(len(r.z))
	}
	for r.next < from { // what the band no longer has, or never had
		r.put(0, false)
	}
	for r.next*d+c < b.next {
		var y complex128
		ok := true
		at := r.next*d - c
		for j, h := range r.taps {
			i := (at + int64(j)) & mask
			y += complex(h*real(b.z[i]), h*imag(b.z[i]))
			ok = ok && b.ok[i]
		}
		if !b.complex {
			y /= 2 // the band doubles real input
		}
		r.put(y, ok)
	}
}

func (r *ring) put(y complex128, ok bool) {
	i := r.next & int64(len(r.z)-1)
	if !ok {
		y = 0
	}
	r.z[i], r.ok[i] = y, ok
	r.next++
}

// have returns sample m and whether it is there.
func (r *ring) have(m int64) (complex128, bool) {
	if m < 0 || m >= r.next || m < r.next-int64(len(r.z)) {
		return 0, false
	}
	i := m & int64(len(r.z)-1)
	return r.z[i], r.ok[i]
}

// upto returns the end of the sound that the ring has, s.
func (r *ring) upto() float64 { return (float64(r.next) - 0.5) * r.dt }

// gain is the amplitude response of a block mean of 2^k samples at f Hz.
func (r *ring) gain(f float64, k int) float64 {
	m := float64(int(1) << k)
	x := math.Pi * f * r.dt
	if math.Abs(x) < 1e-9 {
		return 1
	}
	return math.Sin(m*x) / (m * math.Sin(x))
}
