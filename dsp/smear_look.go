package dsp

import (
	"math"
	"math/cmplx"
)

// look takes the local's line out of the second in the lens's window (of band
// b, around mid) and measures what is left around want Hz beside it: n0 is the
// density of the noise there.
func (s *smear) look(l *lens, b *band, mid, want, n0 float64) {
	w := &l.win
	s.beat, s.power = math.NaN(), 0
	if l.valid < 0.95 {
		s.note(nil, mid)
		return
	}
	s.frame(w, b, mid)
	s.shade(w)
	reach := 4.0
	if !math.IsNaN(s.sigma) {
		reach = min(12, 3+4*s.sigma)
	}
	centre := want
	var m moments
	for range 4 {
		m = s.moments(w, centre, reach, n0)
		if !(m.power > 0) {
			s.note(nil, mid)
			return
		}
		moved := m.mean - centre
		centre = max(want-reach, min(want+reach, m.mean))
		if math.Abs(moved) < 0.01*reach {
			break
		}
	}
	if m.power < 8*n0/w.used || m.power < 4*m.powerU {
		s.note(nil, mid)
		return
	}
	s.beat, s.u, s.power, s.powerU = m.mean, s.doubt(&m), m.power, m.powerU
	s.phase = cphase(s.at(w, m.mean)) // at the middle, of the second as a whole
	s.note(w, mid)
	if !s.turns && s.partial(n0*phasorRate/(s.loc.amp*s.loc.amp)) {
		s.beat, s.power = math.NaN(), 0
		for k := range int64(phasorRate) {
			s.ring[(s.n-1-k)%int64(len(s.ring))] = 0
		}
	}
}

// frame leaves in s.dft the window without the local's line, in the local's
// frame: the carrier stands at carrier - local, turned by the local's phase.
func (s *smear) frame(w *window, b *band, mid float64) {
	s.dft = resize(s.dft, len(w.z))
	t := mid + w.t0
	ph := s.loc.turnsAt(t) - b.oscillator(t)
	f, c := s.loc.f+s.loc.c*(t-s.loc.at)-b.centre, s.loc.c
	e := cmplx.Rect(1, 2*math.Pi*(ph-math.Floor(ph)))
	q := cmplx.Rect(1, 2*math.Pi*f*w.dt+math.Pi*c*w.dt*w.dt)
	qq := cmplx.Rect(1, 2*math.Pi*c*w.dt*w.dt)
	amp := complex(s.loc.amp*b.gain(f), 0)
	from, to := 1.0, 1.0
	if s.flat {
		from, to = s.gain.at(t), s.gain.at(mid-w.t0)
	}
	for i, z := range w.z {
		g := from + (to-from)*float64(i)/float64(len(w.z))
		s.dft[i] = z*cmplx.Conj(e) - amp*complex(g, 0)
		if !w.ok[i] {
			s.dft[i] = 0
		}
		e *= q
		q *= qq
	}
}

// moments are those of the carrier's periodogram.
type moments struct {
	power, powerU float64 // of the tone, |z|^2
	mean, u       float64 // Hz
}

// moments integrates the periodogram of s.dft over centre +- reach, less the
// noise, and with what the local's fit has taken away put back.
func (s *smear) moments(w *window, centre, reach, n0 float64) moments {
	step := 0.8 / (w.dt * float64(len(w.z)))
	k := int(reach / step)
	norm := 0.0
	for i := range w.w {
		norm += w.w[i]
	}
	norm *= w.dt
	var p0, p1, v0, v1 float64
	var at0 float64
	for j := -k; j <= k; j++ {
		f := centre + float64(j)*step
		y := s.at(w, f)
		p := (real(y)*real(y) + imag(y)*imag(y)) * w.dt * w.dt / norm // density
		d := p - n0
		p0 += d
		p1 += d * float64(j)
		// Bins 0.8 of a resolution apart share some of their noise.
		v := n0 * (2*max(p, n0) - n0) / 0.8
		v0 += v
		v1 += v * float64(j) * float64(j)
		if math.Abs(f) <= step/2 {
			at0 = float64(j)
		}
	}
	m := moments{}
	if p0 <= 0 {
		return m
	}
	mean := p1 / p0
	if back := s.back() / step; back > 0 && math.Abs(centre) < reach {
		p1 += back * at0
		p0 += back
		mean = p1 / p0
	}
	m.power = p0 * step
	m.powerU = math.Sqrt(v0) * step
	m.mean = centre + mean*step
	m.u = math.Sqrt(v1+v0*mean*mean) / p0 * step
	return m
}

// doubt returns the uncertainty of the second's mean: that of the periodogram,
// that of the local's frequency, and what is left of the local's line, or taken
// away with it, beside the carrier's.
func (s *smear) doubt(m *moments) float64 {
	u := math.Hypot(m.u, s.loc.uf)
	left := s.back()
	if s.flat {
		d := s.gain.flutter() * s.loc.amp
		left += d * d
	}
	if left /= m.power; left > 0 {
		u = math.Hypot(u, math.Sqrt(min(1, left))*math.Hypot(s.sigma, m.mean))
	}
	return u
}

// back returns the power that the local's fit has taken from the carrier's
// smear at the local's own frequency, by the density of a Gaussian smear there.
func (s *smear) back() float64 {
	if s.lever == 0 || !(s.sigma > 0) {
		return 0
	}
	d := s.mean / s.sigma
	return s.slowly / (math.Sqrt(2*math.Pi) * s.sigma) * math.Exp(-d*d/2) * s.lever
}

// shade leaves s.dft under the square root of the weights, so that seconds that
// overlap count everything once, in s.shaded.
func (s *smear) shade(w *window) {
	s.shaded = resize(s.shaded, len(s.dft))
	for i, v := range s.dft {
		s.shaded[i] = v * complex(math.Sqrt(w.w[i]), 0)
	}
}

// at returns the Fourier sum of s.shaded.
func (s *smear) at(w *window, f float64) complex128 {
	var y complex128
	e := cmplx.Rect(1, -2*math.Pi*f*w.t0)
	q := cmplx.Rect(1, -2*math.Pi*f*w.dt)
	for _, v := range s.shaded {
		y += v * e
		e *= q
	}
	return y
}

// note puts the second's phasors into the ring, or nothing for nil.
func (s *smear) note(w *window, mid float64) {
	if s.turns || !s.clear() && !math.IsNaN(s.sigma) {
		w = nil
	}
	if w != nil && s.power > 0 {
		s.slowly += (s.power - s.slowly) / 20
		if s.slowly < s.power/20 {
			s.slowly = s.power / 20
		}
	}
	if w != nil && math.Abs(s.beat-s.ref) > 2 && math.Abs(s.mean-s.ref) > 1 {
		s.turnRing(s.mean)
	}
	// The ring's places are tenths of a second: what was not looked at stays empty.
	for at := int64(math.Round((mid - 0.5) * phasorRate)); s.n < at; s.n++ {
		if s.n < at-int64(len(s.ring)) {
			s.n = at - int64(len(s.ring))
		}
		s.ring[s.n%int64(len(s.ring))] = 0
	}
	for k := range phasorRate {
		i := s.n % int64(len(s.ring))
		s.n++
		s.ring[i] = 0
		if w == nil {
			continue
		}
		lo, hi := -0.5+float64(k)/phasorRate, -0.5+float64(k+1)/phasorRate
		var y complex128
		n := 0
		for j := range s.dft {
			if t := w.t0 + float64(j)*w.dt; t >= lo && t < hi && w.ok[j] {
				y += s.dft[j] * turn(s.ref, mid+t)
				n++
			}
		}
		if n > 0 {
			s.ring[i] = y / complex(float64(n)*s.loc.amp, 0)
		}
	}
}

// clear reports whether the carrier is far enough from the local for what it is
// like to be learnt: closer in, each is mistaken for a part of the other.
func (s *smear) clear() bool {
	if math.IsNaN(s.sigma) {
		return true
	}
	return math.Abs(s.mean) > 1.5
}

// partial reports whether the carrier was there in a part of the second only:
// its first or last tenths hold nothing but noise while the rest is strong.
func (s *smear) partial(noise float64) bool {
	var p [phasorRate]float64
	sum := 0.0
	for k := range p {
		v := s.back1(k)
		p[k] = real(v)*real(v) + imag(v)*imag(v)
		sum += p[k] / phasorRate
	}
	if sum < 15*noise {
		return false
	}
	weak := func(v float64) bool { return v < 4*noise && v < 0.1*sum }
	return weak(p[0]) || weak(p[phasorRate-1])
}

// turnRing changes the frequency by which the ring is turned back.
func (s *smear) turnRing(ref float64) { // the ring's times are whole tenths from its own beginning
	s.ref = ref
	s.ring = [len(s.ring)]complex128{}
}

// width estimates the carrier's rms Doppler width from how its phasors lose
// their likeness: exp(-2 pi^2 sigma^2 tau^2) for a Gaussian spectrum, at the
// shortest lag that shows a loss beyond doubt; noise is the mean power of the
// noise in one phasor, by the local.
func (s *smear) width(noise float64) float64 {
	var zero, n0 float64
	for _, v := range s.ring {
		if v != 0 {
			zero += real(v)*real(v) + imag(v)*imag(v)
			n0++
		}
	}
	if n0 < 8*phasorRate {
		return math.NaN()
	}
	zero = zero/n0 - noise
	if zero <= 0 {
		return math.NaN()
	}
	// What stands still in the carrier never loses its likeness: it is left out.
	still := 0.0
	if s.steady > 0.3 && s.steady < 0.97 {
		still = s.steady
	}
	out := 0.0
	for _, lag := range [...]int{1, 2, 4, 8, 16, 32, 64, 128} {
		var r complex128
		var n float64
		for k := range len(s.ring) {
			i := s.n - 1 - int64(k)
			if i-int64(lag) < 0 || k+lag >= len(s.ring) {
				break
			}
			v, u := s.ring[i%int64(len(s.ring))], s.ring[(i-int64(lag))%int64(len(s.ring))]
			if v != 0 && u != 0 {
				r += v * cmplx.Conj(u)
				n++
			}
		}
		if n < 40 || n < 3*float64(lag) {
			break
		}
		rho := cmplx.Abs(r) / n / zero
		tau := float64(lag) / phasorRate
		doubt := 3 * noise / zero / math.Sqrt(n) * 1.5
		if rho >= 1-doubt {
			continue
		}
		rho = (rho - still) / (1 - still)
		out = math.Sqrt(-math.Log(max(0.02, min(1, rho)))/(2*math.Pi*math.Pi)) / tau * math.Sqrt(1-still)
		if rho < 0.9 && still == 0 || rho < 0.6 {
			return out
		}
	}
	return out
}

// inOneLine returns the share of the carrier's power in the latest minute that
// stands in one line; noise as for width.
func (s *smear) inOneLine(noise float64) float64 {
	const n = 60 * phasorRate
	var power, have float64
	for k := range n {
		v := s.back1(k)
		if v != 0 {
			power += real(v)*real(v) + imag(v)*imag(v)
			have++
		}
	}
	if have < n/2 {
		return s.steady
	}
	most := 0.0
	reach := 0.1
	if s.sigma > 0.1 {
		reach = s.sigma
	}
	for f := s.mean - s.ref - reach; f <= s.mean-s.ref+reach; f += 0.3 / 60 {
		var y complex128
		q, e := cmplx.Rect(1, 2*math.Pi*f/phasorRate), complex(1, 0)
		for k := range n {
			y += s.back1(k) * e
			e *= q
		}
		most = max(most, real(y)*real(y)+imag(y)*imag(y))
	}
	return min(1, most/have/max(power-noise*have, 1e-300))
}

// back1 returns the k-th latest phasor.
func (s *smear) back1(k int) complex128 {
	i := s.n - 1 - int64(k)
	if i < 0 {
		return 0
	}
	return s.ring[i%int64(len(s.ring))]
}
