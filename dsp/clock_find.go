package dsp

import "math"

// turn ends a minute and begins another.
func (p *pulses) turn(minute float64) {
	if p.gates >= 20 {
		p.heardAgain()
	}
	if p.seconds >= 30 {
		p.judge()
	}
	if p.seconds > 0 {
		for b := range p.bands {
			p.bands[b].folded = [stretchN][perSecond]float32{}
		}
	}
	p.gate, p.gates, p.gateTime, p.seconds = [gateFrames]float32{}, 0, 0, 0
	p.minute = minute
}

// heardAgain makes a point of the minute's expected pulses, if they came.
func (p *pulses) heardAgain() {
	n := float64(p.gates)
	var base, var2, count float64
	for k, v := range p.gate {
		if k <= gateHalf-7 || k >= gateHalf+7 {
			base += float64(v) / n
			var2 += sq(float64(v) / n)
			count++
		}
	}
	base /= count
	scatter := math.Sqrt(max(1e-12, var2/count-base*base) * count / (count - 1))
	top, at := 0.0, 0
	for k := gateHalf - 3; k <= gateHalf+3; k++ {
		if v := float64(p.gate[k-1]+2*p.gate[k]+p.gate[k+1])/4/n - base; v > top {
			top, at = v, k
		}
	}
	p.misses++
	if top < 4*scatter {
		return
	}
	var sum, moment float64
	for k := max(0, at-4); k <= min(gateFrames-1, at+4); k++ {
		v := max(0, float64(p.gate[k])/n-base)
		sum += v
		moment += v * float64(k-gateHalf)
	}
	t, late := p.gateTime/n, moment/sum/perSecond
	x := spot{t: t, x: p.trend.when(t) + late, s: math.Hypot(1e-4, 3e-3*scatter/top)}
	if p.misses > 3 { // after silence once is not enough: it may be noise, and far off in time would weigh much
		first := p.again
		p.again = x
		if x.t-first.t > 200 || math.Abs(p.trend.wrapped(x.x-first.x-p.trend.b*(x.t-first.t))) > 0.002 {
			return
		}
		p.add(first)
	}
	p.misses = 0
	p.add(x)
	p.refit(p.trend.b)
}

// add keeps a point.
func (p *pulses) add(s spot) {
	if len(p.spots) == keepMinutes {
		p.spots = p.spots[:copy(p.spots, p.spots[1:])]
	}
	s.x -= math.Floor(s.x)
	p.spots = append(p.spots, s)
}

// refit draws the line anew.
func (p *pulses) refit(b float64) {
	p.told = p.trend.choose(p.spots, b, func(span float64) float64 { return pathDelay / span })
	p.told.ok = p.told.ok && len(p.spots) >= 4 && p.told.span >= 200 && p.told.u <= clockGood
}

// judge looks for pulses in the minute's folds.
func (p *pulses) judge() {
	best := candidate{t: 60*p.minute + 30}
	for b := range p.bands {
		if p.bands[b].on && b%7 != 6 {
			if c := p.look(b); c.good && !best.good || c.good == best.good && c.z > best.z {
				best = c
			}
		}
	}
	off := math.Inf(1)
	if p.locked {
		off = math.Abs(p.trend.wrapped(best.phase - p.trend.when(best.t)))
	}
	switch {
	case off < 0.008 && best.good:
		p.doubts, p.gateBand = 0, best.band
	case p.locked && p.misses == 0 && !best.good && best.z > 6:
		// Something comes when expected, but is not alone or not short.
		if p.doubts++; p.doubts >= 6 {
			p.locked, p.told, p.doubts = false, told{}, 0
			p.spots, p.found = p.spots[:0], p.found[:0]
		}
	case best.good && !(p.locked && p.misses == 0):
		if len(p.found) == cap(p.found) {
			p.found = p.found[:copy(p.found, p.found[1:])]
		}
		p.found = append(p.found, best)
		if best.z > 5.2 {
			p.eager = max(p.eager, p.minute+6)
		}
		p.find()
	}
}

// look finds the best pulse in the minute's fold of a band.
func (p *pulses) look(b int) candidate {
	c := candidate{t: 60*p.minute + 30, band: b}
	top, at := float32(0), 0
	for i := -foldSteps; i <= foldSteps; i++ {
		p.foldAt(b, float64(i)*foldStep)
		f := &p.fold
		for k := range f {
			if v := f[(k+perSecond-1)%perSecond] + 2*f[k] + f[(k+1)%perSecond]; v > top {
				top, at, c.e = v, k, float64(i)*foldStep
			}
		}
	}
	if top == 0 {
		return c
	}
	p.foldAt(b, c.e)
	c.good = p.shaped(&c, at) && c.z >= 4.5 && !p.click(&c, at)
	return c
}

// foldAt folds the minute for a clock that is off by e.
func (p *pulses) foldAt(b int, e float64) {
	p.fold = [perSecond]float32{}
	for j := range p.bands[b].folded {
		shift := int(math.Round(e*(float64(j*stretchLong)+stretchLong/2-30)*perSecond)) + perSecond
		from := &p.bands[b].folded[j]
		cut := shift % perSecond
		for k, v := range from[cut:] {
			p.fold[k] += v
		}
		for k, v := range from[:cut] {
			p.fold[perSecond-cut+k] += v
		}
	}
}

// near returns the fold's mean about frame k in the shape of a pulse, and that of
// its flanks, 14 to 24 ms away.
func (p *pulses) near(k int) (top, flank float64) {
	f := func(i int) float64 { return float64(p.fold[(i+2*perSecond)%perSecond]) }
	for i := 7; i <= 12; i++ {
		flank += f(k-i) + f(k+i)
	}
	return (f(k-1) + 2*f(k) + f(k+1)) / 4, flank / 12
}

// shaped completes c with what stands at frame k of the fold, and reports whether
// it is short and the only one.
func (p *pulses) shaped(c *candidate, k int) bool {
	n := float32(p.seconds)
	middle := float64(middling(append(p.sorted[:0], p.fold[:]...)))
	top, flank := p.near(k)
	second := 0.0
	for i := range p.fold {
		t, f := p.near(i)
		p.frames[i] = float32(math.Abs(t - f))
		if d := (i - k + perSecond) % perSecond; d > gateHalf && d < perSecond-gateHalf {
			second = max(second, t-f)
		}
	}
	scatter := 1.4826 * float64(middling(p.frames[:perSecond]))
	c.z = (top - flank) / max(scatter, 1e-6*float64(n))
	var sum, moment float64
	for i := -4; i <= 4; i++ {
		v := max(0, float64(p.fold[(k+i+perSecond)%perSecond])-flank)
		sum += v
		moment += v * float64(i)
	}
	if sum > 0 {
		c.phase = (float64(k) + moment/sum) / perSecond
	}
	return flank-middle < 0.4*(top-middle) && second < 0.75*(top-flank)
}

// click reports whether what stands at frame k stands as high in a band at least
// 300 Hz nearer to the carrier or farther from it, on whichever side.
func (p *pulses) click(c *candidate, k int) bool {
	n := float64(p.seconds)
	rise := func() float64 {
		most := math.Inf(-1)
		for i := -1; i <= 1; i++ {
			t, f := p.near(k + i)
			most = max(most, (t-f)/n)
		}
		return most
	}
	own := math.Exp(rise()) - 1
	for b := range p.bands {
		apart := math.Abs(math.Abs(pulseOffsets[b%7]) - math.Abs(pulseOffsets[c.band%7]))
		if p.bands[b].on && b/7 == c.band/7 && apart >= 300 {
			p.foldAt(b, c.e)
			// Frames of noise scatter by about 0.6; two of them are in a pulse.
			if h := rise(); h > 3*0.6/math.Sqrt(2*n) && math.Exp(h)-1 > own/4 {
				return true
			}
		}
	}
	return false
}

// find looks for a line through the latest candidate and three others at least.
func (p *pulses) find() {
	last := p.found[len(p.found)-1]
	best, slope, from := 0, 0.0, candidate{}
	for _, c := range p.found[:len(p.found)-1] {
		dt := last.t - c.t
		if dt > 490 { // further back the whole seconds between are not sure
			continue
		}
		b := p.trend.wrapped(last.phase-c.phase) / dt
		if math.Abs(b) > clockRange || math.Abs(b-last.e) > 150e-6 {
			continue
		}
		n := 0
		for _, x := range p.found {
			if on(x, c, b) {
				n++
			}
		}
		if n > best {
			best, slope, from = n, b, c
		}
	}
	if best < 4 {
		return
	}
	if math.Abs(slope-p.trend.b) > clockGood {
		p.spots = p.spots[:0]
	}
	for len(p.spots) > 0 && p.spots[len(p.spots)-1].t >= last.t-720 && p.misses > 0 {
		p.spots = p.spots[:len(p.spots)-1]
	}
	for _, x := range p.found {
		if on(x, from, slope) {
			p.add(spot{x.t, x.phase, 1e-3})
		}
	}
	p.found = p.found[:0]
	p.refit(slope)
	p.locked, p.misses, p.doubts, p.gateBand = true, 0, 0, last.band
}

// on reports whether candidate x lies on the line of slope b through c, and not
// more than twelve minutes from it.
func on(x, c candidate, b float64) bool {
	d := x.phase - c.phase - b*(x.t-c.t)
	d -= math.Round(d)
	return math.Abs(d) < 0.003 && math.Abs(x.e-b) < 150e-6 && math.Abs(x.t-c.t) < 720
}
