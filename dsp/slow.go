package dsp

import (
	"math"
	"math/cmplx"
)

const (
	slowRate  = 50.0  // target rate of the slow ring, complex samples per second
	slowHalf  = 14.0  // half-width that it keeps flat, Hz
	slowSpan  = 512.0 // how much it keeps, s
	slowReset = 2.5   // how far its centre may lie from where it is wanted, Hz
)

// slow keeps minutes of the sound around both tones: a band's output once more
// shifted and decimated, to about 50 complex samples a second. Sample m belongs
// to output m*d of the band and to time m*d*dt exactly. Its phase is that of the
// sound at time 0 turned back by centre*t. Not safe for concurrent use; the
// steady state allocates nothing.
type slow struct {
	plan   *plan
	d      int
	rate   float64
	taps   []float64
	mod    []complex128 // taps, modulated to the offset from the band's centre
	off    float64      // that offset, Hz
	centre float64      // audio Hz
	z      []complex128
	ok     []bool
	next   int64
}

func newSlow(p *plan) *slow {
	s := &slow{plan: p, d: max(1, int(math.Round(p.outRate()/slowRate)))}
	s.rate = p.outRate() / float64(s.d)
	s.taps = []float64{1}
	if s.d > 1 {
		s.taps = kaiserLowpass(slowHalf/p.outRate(), (s.rate-slowHalf)/p.outRate(), 90)
	}
	s.mod = make([]complex128, len(s.taps))
	n := 1
	for float64(n) < slowSpan*s.rate {
		n *= 2
	}
	s.z, s.ok = make([]complex128, n), make([]bool, n)
	s.off = math.NaN()
	return s
}

// time returns the time of sample m, s.
func (s *slow) time(m int64) float64 { return float64(m*int64(s.d)) / s.plan.outRate() }

// turn returns exp(-j 2 pi hz t), the whole turns taken out first.
func turn(hz, t float64) complex128 {
	x := hz * t
	return cmplx.Rect(1, -2*math.Pi*(x-math.Floor(x)))
}

// aim moves the centre to f (audio Hz) when it lies too far from it, and turns
// what is kept accordingly.
func (s *slow) aim(f float64) {
	if math.Abs(f-s.centre) < slowReset {
		return
	}
	by := f - s.centre
	for m := max(0, s.next-int64(len(s.z))); m < s.next; m++ {
		i := m & int64(len(s.z)-1)
		if s.ok[i] {
			s.z[i] *= turn(by, s.time(m))
		}
	}
	s.centre = f
}

// advance takes what band b has made since.
func (s *slow) advance(b *band) {
	if off := s.centre - b.centre; off != s.off {
		s.off = off
		c := len(s.taps) / 2
		for j, h := range s.taps {
			s.mod[j] = complex(h, 0) * cmplx.Rect(1, -2*math.Pi*off*float64(j-c)/s.plan.outRate())
		}
	}
	c, d := int64(len(s.taps)/2), int64(s.d)
	first := max(b.next-int64(len(b.z)), 0)
	from := ceilDiv(first+c, d)
	if s.next < from-int64(len(s.z)) {
		s.next = from - int64(len(s.z))
	}
	for s.next < from { // what the band no longer has, or never had
		s.put(0, false)
	}
	mask := int64(len(b.z) - 1)
	for s.next*d+c < b.next {
		var y complex128
		ok := true
		at := s.next*d - c
		for j := range s.mod {
			i := (at + int64(j)) & mask
			y += s.mod[j] * b.z[i]
			ok = ok && b.ok[i]
		}
		if ok {
			y *= turn(s.off, s.time(s.next))
		}
		s.put(y, ok)
	}
}

func (s *slow) put(y complex128, ok bool) {
	i := s.next & int64(len(s.z)-1)
	if !ok {
		y = 0
	}
	s.z[i], s.ok[i] = y, ok
	s.next++
}

// forget drops what is kept: no span reaches back beyond now.
func (s *slow) forget() { clear(s.ok) }

// upto returns the time up to which samples have been made, s.
func (s *slow) upto() float64 { return s.time(s.next - 1) }
