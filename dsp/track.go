package dsp

import (
	"math"
	"math/cmplx"
)

// track is one tone as it is held from second to second. Frequencies are in
// the audio, by the nominal sample clock.
type track struct {
	live  bool
	band  *band
	f     float64 // Hz, at the middle of the last window
	c     float64 // Hz/s
	at    float64 // time of that middle, s
	amp   float64 // full scale 1
	phase float64 // turns modulo 1, at the middle
	uf    float64 // standard uncertainty of f, Hz
	noise float64 // density around it, full scale^2 per Hz, smoothed over some seconds
	whole bool    // there from end to end of the last window, in one piece
	tail  bool    // there at the end of the last window
	seen  int     // windows in a row that showed it
	ev    evidence
	jit   jitter
}

// cn0 returns the tone's C/N0 as a ratio, Hz.
func (t *track) cn0() float64 { return t.amp * t.amp / t.noise }

// predict returns where the tone is expected at time at.
func (t *track) predict(at float64) float64 {
	dt := at - t.at
	if math.Abs(dt) > 3 {
		return t.f
	}
	return t.f + t.c*dt
}

// lens looks at a band through one window: it owns the scratch space for the
// window, its lines and its spectra, and is reused from second to second.
type lens struct {
	plan    *plan
	complex bool
	win     window
	fit     fitter
	spec    *spectrum
	lines   []line
	demod   []complex128
	amps    []float64
	avoid   []float64
	solved  int     // counts the fits
	specOf  int     // the fit whose residual spec holds
	near    float64 // where noise was last asked for in it, and what it was
	noise   float64
	diffU   float64 // standard uncertainty of the difference of the first two lines for noise of density 1, Hz
	valid   float64 // share of the window's weight that rests on real samples
}

func newLens(p *plan, isComplex bool) *lens {
	return &lens{plan: p, complex: isComplex, spec: newSpectrum(p.outRate()), lines: make([]line, 0, maxLines)}
}

// open loads the window of nominal length span centred on mid (s) from b. Its
// edges taper as half a cosine over 2*taper, so that programme sidebands a
// hundred hertz away do not leak into the frequency while nearly nothing of
// the bound is given away.
func (l *lens) open(b *band, mid, span, taper float64) {
	rate := b.rate
	half := span / 2
	from := int64(math.Ceil((mid - half - taper) * rate))
	to := int64(math.Floor((mid + half + taper) * rate))
	k0, z, ok := b.window(from, to, l.win.z, l.win.ok)
	l.win.z, l.win.ok = z, ok
	l.win.dt = 1 / b.outRate()
	l.win.t0 = float64(b.sampleOf(k0))/rate - mid
	l.win.half = half
	l.win.w = resize(l.win.w, len(z))
	sum, all := 0.0, 0.0
	for i := range z {
		t := math.Abs(l.win.t0 + float64(i)*l.win.dt)
		w := 1.0
		if taper > 0 && t > half-taper {
			w = 0.5 - 0.5*math.Sin(math.Pi/2*min(1, (t-half)/taper))
		}
		all += w
		if !ok[i] {
			w = 0
		}
		l.win.w[i] = w
		sum += w
	}
	l.win.used = sum * l.win.dt
	l.valid = sum / max(all, 1e-9)
	l.lines = l.lines[:0]
}

// add appends a line at band frequency f and returns its index.
func (l *lens) add(f, c float64) int {
	l.lines = append(l.lines, line{f: f, c: c})
	return len(l.lines) - 1
}

// solve fits the lines present: first their amplitudes, then their frequencies
// with the chirps that were given, and (if chirps) their chirps too where the
// window shows that those are wrong. A chirp that is fitted for nothing costs
// half as much again in the phase, though nothing in the frequency. Real input
// near 0 Hz has each tone's image beside it: those enter as nuisances.
func (l *lens) solve(b *band, chirps bool) bool {
	l.solved++
	n := len(l.lines)
	l.addImages(b, n)
	defer func() { l.lines = l.lines[:n] }()
	if !l.fit.run(&l.win, l.lines, 0, 1, -b.centre) || !l.fit.run(&l.win, l.lines, 1, 4, -b.centre) {
		return false
	}
	order := 1
	if chirps {
		// One more pass gives the residual and the covariance at the solution
		// together with the chirps' corrections.
		order = 2
		n := l.fit.accumulate(&l.win, l.lines, order)
		if !l.fit.solve(n) {
			return false
		}
		if !l.fit.bent(&l.win, l.lines, n) {
			l.diffU = l.fit.uncertainty(&l.win, l.lines, order)
			return true
		}
		if !l.fit.run(&l.win, l.lines, order, 5, -b.centre) {
			return false
		}
	}
	if !l.fit.solve(l.fit.accumulate(&l.win, l.lines, order)) {
		return false
	}
	l.diffU = l.fit.uncertainty(&l.win, l.lines, order)
	return true
}

func (l *lens) addImages(b *band, n int) {
	if l.complex {
		return
	}
	reach := b.half
	if b.d1*b.d2 == 1 {
		reach = b.rate
	}
	for k := range n {
		im := -2*b.centre - l.lines[k].f
		if math.Abs(im) < reach && len(l.lines) < maxLines && math.Abs(im-l.lines[k].f)*l.win.half > 0.5 {
			l.lines = append(l.lines, line{f: im, ghost: true, image: k + 1})
		}
	}
}

// frequencies of the lines present, for masking.
func (l *lens) freqs(dst []float64) []float64 {
	for _, x := range l.lines {
		dst = append(dst, x.f)
	}
	return dst
}

// noiseFor returns the density of the noise around band frequency f in the
// residual; lines close to each other share it.
func (l *lens) noiseFor(b *band, f float64) float64 {
	if math.Abs(f-l.near) < 15 {
		return l.noise
	}
	l.near = f
	l.noise = l.spec.noise(f, 60, b.half, 4, l.avoid)
	if math.IsNaN(l.noise) {
		l.noise = l.spec.noise(f, b.rate, b.rate, 0, l.avoid)
	}
	return l.noise
}

// take moves track t to line ln, as fitted in the window around mid: its
// frequency, level, phase, the noise about it, and whether it was there from
// end to end.
func (l *lens) take(t *track, b *band, mid float64, ln int) {
	x := &l.lines[ln]
	gain := b.gain(x.f)
	l.avoid = l.freqs(l.avoid[:0])
	if l.specOf != l.solved { // once for both lines of a fit
		l.spec.take(l.fit.r)
		l.specOf, l.near = l.solved, math.Inf(1)
	}
	n0 := l.noiseFor(b, x.f)
	n0 = max(n0, 1e-18*real(x.a*cmplx.Conj(x.a)), 1e-30)
	s := n0 / (gain * gain)
	if !(t.noise > 0) || t.seen == 0 {
		t.noise, t.seen = s, 0
	}
	density := max(n0, t.noise*gain*gain)
	t.whole, t.tail = l.shape(ln, density)
	fresh := !t.live
	t.band, t.live = b, true
	if !t.whole && !fresh {
		return // what it was stays the better guess of what it is
	}
	if t.whole {
		t.ev.add(20 * math.Log10(cmplx.Abs(x.a)/gain))
		if len(l.lines) >= 2 && ln < 2 {
			t.ev.sidebands(l.ownPair(b, ln, 1-ln, n0))
		}
		// an average over about ten seconds
		t.noise += max(0.1, 1/float64(t.seen+1)) * (s - t.noise)
	}
	f := x.f + b.centre
	switch { // the chirp to expect next: the fit's where it shows one, else that of the last seconds
	case x.c != t.c:
		t.c = max(-2, min(2, x.c))
	case t.seen >= 2 && mid > t.at && mid-t.at < 3:
		t.c += 0.3 * ((f-t.f)/(mid-t.at) - t.c)
	}
	t.jit.add(mid, f, x.uf*math.Sqrt(t.noise)*gain)
	t.f, t.at = f, mid
	t.amp = cmplx.Abs(x.a) / gain
	t.phase = cphase(x.a) + b.oscillator(mid)
	if t.seen++; !t.whole {
		t.seen = 0 // its noise was not noise alone: begin the average afresh
	}
	// What the fit leaves beside the line and noise does not explain (fading,
	// gain control, a jump) counts as noise.
	local := t.noise * gain * gain
	if left := l.spec.beside(x.f, 1.2, 4); left > 2*local {
		local = left
	}
	t.uf = x.uf * math.Sqrt(local)
}

func allOK(ok []bool) bool {
	for _, v := range ok {
		if !v {
			return false
		}
	}
	return true
}

// shape looks at line k block by block: Goertzel's filter at the line's own
// frequency over twentieths of a second of (residual + line), or longer ones
// for a weak line, gives amplitude and phase against the fit. whole: there in
// every block, and in phase with the fit; tail: there in the last blocks.
func (l *lens) shape(k int, density float64) (whole, tail bool) {
	ln := &l.lines[k]
	a2 := real(ln.a)*real(ln.a) + imag(ln.a)*imag(ln.a)
	block := 0.05
	for block < 0.25 && a2*block < 40*density {
		block += 0.05
	}
	per := max(2, int(block/l.win.dt))
	blocks := len(l.win.z) / per
	if blocks < 3 {
		return a2*l.win.used > 20*density, true
	}
	l.demod = resize(l.demod, per)
	noise := density / (float64(per) * l.win.dt)
	most := 0.0
	amps := l.amps[:0]
	turned := 0.0
	off := len(l.win.z) - blocks*per
	for i := range blocks {
		at := off + i*per
		if !allOK(l.win.ok[at : at+per]) {
			continue
		}
		mid := l.win.t0 + (float64(at)+float64(per-1)/2)*l.win.dt
		t := l.win.t0 + float64(at)*l.win.dt
		e := ln.a * cmplx.Rect(1, 2*math.Pi*ln.f*t+math.Pi*ln.c*t*t)
		q := cmplx.Rect(1, 2*math.Pi*ln.f*l.win.dt+math.Pi*ln.c*l.win.dt*(2*t+l.win.dt))
		qq := cmplx.Rect(1, 2*math.Pi*ln.c*l.win.dt*l.win.dt)
		for j := range per {
			l.demod[j] = l.fit.r[at+j] + e*complex(1+ln.g*(t+float64(j)*l.win.dt), 0)
			e *= q
			q *= qq
		}
		f := ln.f + ln.c*mid
		g := goertzel(l.demod, 2*math.Pi*f*l.win.dt) / complex(float64(per), 0)
		// model phase at the block's start, by the local frequency through its middle
		ph := 2*math.Pi*ln.f*mid + math.Pi*ln.c*mid*mid - 2*math.Pi*f*float64(per-1)/2*l.win.dt
		p := real(g)*real(g) + imag(g)*imag(g)
		if p > 6*noise && p > 0.1*a2 {
			d := math.Abs(cmplx.Phase(g * cmplx.Conj(ln.a) * cmplx.Rect(1, -ph)))
			turned = max(turned, d-4*math.Sqrt(noise/p/2))
		}
		amps = append(amps, p)
		most = max(most, p)
	}
	l.amps = amps
	bad, lastBad := 0, 0
	for _, p := range amps {
		if p < max(0.12*most, 4*noise) {
			bad++
			lastBad++
		} else {
			lastBad = 0
		}
	}
	present := a2*l.win.used > 16*density
	tail = present && float64(lastBad)*float64(per)*l.win.dt < 0.25
	whole = present && bad == 0 && turned < 0.5 && math.Abs(ln.g)*l.win.half < 0.9
	return whole, tail
}
