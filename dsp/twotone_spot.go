package dsp

import (
	"math"
	"math/cmplx"
)

const (
	spotSpan  = 8.0  // how long a line has to stand still to be told from a smear, s
	spotReach = 12.0 // Hz
)

// spot looks for a line that stands still beside a carrier that does not: over
// some seconds a local's tone is one line, while a carrier smeared by Doppler
// spreads its power. Where that is plain, it settles which is which, also where
// the carrier is too wide to be followed as a line.
func (e *twoTone) spot(mid float64) bool {
	if len(e.bands) != 1 || math.Abs(e.cfg.SetOff()) >= 10 || e.cfg.Wired {
		return false
	}
	if e.local >= 0 && e.word.local != "" && !e.merged {
		return false // a tone that comes and goes is no smear where it is known whose it is
	}
	b, st := e.bands[0], &e.pair.st
	e.slow.fetch(st, mid+0.5, spotSpan, e.slow.centre, int(math.Ceil(spotSpan*2.2*spotReach)))
	if st.valid < 0.95 {
		return false
	}
	p := e.pair
	p.fit.r = append(p.fit.r[:0], st.z...)
	f, _ := p.peak(-spotReach, spotReach, 0, math.NaN(), 0)
	f, c, _, a := e.lineAt(st, f)
	if a == 0 {
		return false
	}
	p.subtract(a, f, c)
	a2 := real(a)*real(a) + imag(a)*imag(a)
	n0 := e.floor(b, f+st.centre) // leaves the latest second in the lens
	// What is left within a hertz of the line is its own unsteadiness, or a
	// carrier's; further out it is the carrier's, if there is one.
	y := e.beyond(st, f, n0)
	far, mean, width := y.power, y.mean, y.width
	if far <= 0 || y.beside > 0.5*a2 || a2*spotSpan < 40*n0 {
		return false
	}
	if far < 20*n0/spotSpan+8*n0*math.Sqrt(2*y.reach/spotSpan) || far < 0.02*a2 || width < 0.15 || width > 4 {
		return false
	}
	if e.humAt(b, f+st.centre-b.centre) || !e.holds(f+st.centre, 1) && !e.holds(mean+st.centre, 1+2*width) {
		return false // something else than the tones that are held
	}
	// The carrier must not be a line of its own, nor one that is being turned.
	for k := -40; k <= 40; k++ {
		turn := float64(k) * 0.0125
		g2, d2 := p.peak(mean-2*width, mean+2*width, turn, f, 0.7)
		if d2/spotSpan > 0.5*far || turn == 0 && math.Abs(g2-f) < 0.7 {
			return false
		}
	}
	if m := &e.memory; m.known {
		// Of a pair that was known the carrier must have been a smeared one, and
		// the line must be as loud as the local was.
		level := 20 * math.Log10(math.Sqrt(a2)/m.ampL)
		if !(e.sm.sigma > wideSpread) || e.sm.steady > 0.4 || math.Abs(level) > 6 {
			return false
		}
		// And what is spread must be where the carrier was headed: a local that
		// turns looks smeared too, beside a carrier that stands still.
		want, u := e.anchor.when(mid)
		u = math.Sqrt(u*u + e.anchor.scatter*e.anchor.scatter + width*width + carrierSlack*carrierSlack)
		if e.anchor.known && student(mean+st.centre-want, u)-student(f+st.centre-want, u) < 2 {
			return false
		}
	}
	if !p.lasts(a, f, c, n0/st.dt) {
		return false // a tone that came or went
	}
	if e.spotted == 0 || math.Abs(f+st.centre-e.spotAt) > 0.1 {
		e.spotted = 0
	}
	e.spotAt = f + st.centre
	if e.spotted++; e.spotted < 3 {
		return false
	}
	e.spotted = 0
	e.settle(b, mid, f+st.centre, mean+st.centre, math.Sqrt(a2), far, width, n0)
	return true
}

// holds reports whether a tone is held within reach of f.
func (e *twoTone) holds(f, reach float64) bool {
	for k := range e.tr {
		if e.tr[k].live && math.Abs(e.tr[k].f-f) < reach {
			return true
		}
	}
	return false
}

// smudge is what lies beside a line: its power, mean and rms width within reach
// of the mean, and the power close to the line.
type smudge struct{ power, mean, width, reach, beside float64 }

// beyond measures what is left in the stretch beside the line at f. Gain control
// repeats a smear on the other side of the line, and weakly further out: the
// strongest part counts, with what belongs to it.
func (e *twoTone) beyond(st *stretch, f, n0 float64) smudge {
	const step = 1 / spotSpan
	const n = int(2*spotReach/step) + 1
	var d [n]float64
	y := smudge{reach: 1}
	best, run := 0.0, 0.0
	const wide = int(1 / step)
	for i := range d {
		g := -spotReach + float64(i)*step
		d[i] = (e.pair.fit.density(st, g) - n0) * step
		if math.Abs(g-f) < 0.7 {
			y.beside += d[i]
			d[i] = 0
		}
		run += d[i]
		if i >= wide {
			run -= d[i-wide]
		}
		if run > best {
			best, y.mean = run, g-0.5
		}
	}
	y.reach = 2
	for range 5 {
		var p, p1, p2 float64
		for i, v := range d {
			if g := -spotReach + float64(i)*step - y.mean; math.Abs(g) <= y.reach {
				p += v
				p1 += v * g
				p2 += v * g * g
			}
		}
		y.power = p
		if p <= 0 {
			break
		}
		y.mean += p1 / p
		y.width = math.Sqrt(max(0, p2/p-p1/p*(p1/p)))
		y.reach = min(spotReach, 1+3*y.width)
	}
	return y
}

// lasts reports whether a line and what is left beside it, beyond noise of the given
// power, are there in every quarter of the stretch: a tone that has just come, or
// that hopped with the dial, is as wide as a smear, and is none.
func (p *pair) lasts(a complex128, f, c, noise float64) bool {
	st, r := &p.st, p.fit.r
	least, most := math.Inf(1), 0.0
	e, q, qq := chirped(f, c, st.t0, st.dt)
	for k := range 4 {
		part := r[k*len(r)/4 : (k+1)*len(r)/4]
		n := float64(max(1, len(part)))
		sum, line := 0.0, complex(0, 0)
		for _, z := range part {
			sum += real(z)*real(z) + imag(z)*imag(z)
			line += z * cmplx.Conj(e)
			e *= q
			q *= qq
		}
		if cmplx.Abs(a+line/complex(n, 0)) < 0.35*cmplx.Abs(a) {
			return false
		}
		v := sum/n - noise
		least, most = min(least, v), max(most, v)
	}
	return least > 0.05*most
}

// lineAt fits one line near f in the stretch.
func (e *twoTone) lineAt(st *stretch, f float64) (f1, c, uf float64, a complex128) {
	w := &e.sm.white
	w.set(haze{n0: 1, sigma: 1}, st.dt, 0)
	w.take(st)
	return w.refine(f, 0, e.anchor.slope, 0.02)
}

// floor returns the density of the noise in band b around f, tones left out.
func (e *twoTone) floor(b *band, f float64) float64 {
	l := e.lens
	l.open(b, float64(e.last)+0.5, 1, edge)
	l.spec.take(l.win.z)
	l.specOf = -1
	e.avoid = append(e.avoid[:0], f-b.centre)
	n0 := l.spec.noise(f-b.centre, 60, b.half, spotReach+3, e.avoid)
	if math.IsNaN(n0) {
		n0 = l.spec.noise(f-b.centre, b.rate, b.rate, 0, nil)
	}
	return n0
}

// settle takes the line for the local and what lies beside it for the carrier.
func (e *twoTone) settle(b *band, mid, line, carrier, amp, power, width, n0 float64) {
	e.local, e.merged, e.jumped = 1, false, true
	e.word.lost()
	e.count.broken()
	g := b.gain(line - b.centre)
	c, l := &e.tr[0], &e.tr[1]
	*c = track{live: true, band: b, f: carrier, at: mid, amp: math.Sqrt(power) / g, noise: n0 / (g * g), tail: true}
	*l = track{live: true, band: b, f: line, at: mid, amp: amp / g, noise: n0 / (g * g), tail: true, whole: true, uf: 0.01}
	e.memory = pairMemory{known: true, at: mid, carrier: carrier, local: line, ampC: c.amp, ampL: l.amp}
	e.anchor.forget()
	e.anchor.scatter = width
	e.anchor.add(mid, carrier, width)
	e.sm.forget()
	e.sm.loc = model{at: mid, f: line, amp: l.amp}
	e.sm.span = 4
	e.sm.sigma, e.sm.slowly, e.sm.mean = width, power, carrier-line
}
