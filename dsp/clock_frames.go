package dsp

import (
	"math"

	blas "gonum.org/v1/gonum/blas/gonum"
)

// power returns the power of the window that begins at buf[at].
func (p *pulses) power(b *pulseBand, at int) float32 {
	var dot blas.Implementation
	n := len(p.hann)
	x := p.buf[at : at+n]
	i, q := dot.Sdot(n, x, 1, b.c, 1), dot.Sdot(n, x, 1, b.s, 1)
	if p.complex {
		y := p.q[at : at+n]
		i -= dot.Sdot(n, y, 1, b.s, 1)
		q += dot.Sdot(n, y, 1, b.c, 1)
	}
	return i*i + q*q
}

// level turns powers into log(1 + power/median), in place.
func (p *pulses) level(f []float32) bool {
	m := middling(append(p.sorted[:0], f...))
	if !(m > 0) {
		return false
	}
	for i, v := range f {
		f[i] = float32(math.Log(1 + float64(v/m)))
	}
	return true
}

// middling returns the middle value of s by size, which it reorders (Hoare's
// selection).
func middling(s []float32) float32 {
	k, lo, hi := len(s)/2, 0, len(s)-1
	for lo < hi {
		m, i, j := s[(lo+hi)/2], lo, hi
		for i <= j {
			for s[i] < m {
				i++
			}
			for s[j] > m {
				j--
			}
			if i <= j {
				s[i], s[j] = s[j], s[i]
				i++
				j--
			}
		}
		switch {
		case k <= j:
			hi = j
		case k >= i:
			lo = i
		default:
			return s[k]
		}
	}
	return s[k]
}

// used says whether band b is listened to: while the pulses are held only theirs
// is, and the one that tells clicks.
func (p *pulses) used(b int) bool {
	held := p.locked && p.misses < 2
	return p.bands[b].on && (!held || b == p.gateBand || b%7 == 6 && b/7 == p.gateBand/7)
}

// second adds the whole second to the folds.
func (p *pulses) second() {
	j := int(math.Mod(p.sec, 60)) / stretchLong
	for b := range p.bands {
		band := &p.bands[b]
		if !p.used(b) {
			continue
		}
		f := p.frames[:perSecond]
		for k := range f {
			i := p.window(p.sec + float64(k)/perSecond)
			if i < 0 {
				return
			}
			f[k] = p.power(band, i)
		}
		if !p.level(f) {
			continue
		}
		mean := float32(0)
		for _, v := range f {
			mean += v
		}
		mean /= perSecond
		fold := &band.folded[j]
		for k, v := range f {
			fold[k] += v - mean
		}
	}
	p.seconds++
}

// pulse adds the sound about the expected pulse.
func (p *pulses) pulse() {
	band := &p.bands[p.gateBand]
	if !band.on {
		return
	}
	f := p.frames[:gateFrames]
	for k := range f {
		i := p.window(p.at + float64(k-gateHalf)/perSecond)
		if i < 0 {
			return
		}
		f[k] = p.power(band, i)
	}
	if !p.level(f) {
		return
	}
	for k, v := range f {
		p.gate[k] += v
	}
	p.gates++
	p.gateTime += p.at
}
