package dsp

import (
	"math"
	"slices"

	blas "gonum.org/v1/gonum/blas/gonum"
)

// pulses finds the second pulses of a standard-frequency emission and when they
// come. Such pulses are bursts of a few milliseconds, often five cycles of a tone
// of 1000 to 1500 Hz that modulates the carrier's amplitude (common practice;
// ITU-R TF.460-6 ties them to UTC within 1 ms, from memory). In the audio they
// stand that far beside the carrier's tone.
//
// Frames: the power in a few bands there, 500 times a nominal second, each from
// pulseWindow of sound under a Hann window. What counts is log(1 + power/median
// of the second): speech, fading and gain control move it little, and a pulse
// weighs by its strength over the noise up to a point.
//
// Hunting: a minute is folded modulo one second, for all e within +-1000 ppm, and
// its best pulse noted if it stands out, is short, is the only one in the second
// (a beat of 2 Hz or more makes as many humps; one of 1 Hz a long one), and is not
// as strong in a band 300 Hz away (a click). Four of the latest twelve minutes on
// one line make a find. Chance candidates in every single minute would make one in
// 7000 h; noise makes one in seven minutes or fewer, and so no find in a lifetime.
//
// Once found, only the sound about every expected pulse is looked at, and every
// fifteenth minute all of it, so that a false find is let go and another epoch is
// noticed. While nothing is found after twelve minutes, two minutes in thirty
// are listened to, and whatever looks like a pulse makes it listen on.
type pulses struct {
	rate    float64
	complex bool
	told    told
	trend   trend
	spots   []spot // one a minute in which the pulses were heard

	heard  []float64 // tones that the bands are made for
	bands  [pulseBands]pulseBand
	hann   []float64
	buf, q []float32 // of the sound wanted
	lo, hi int64     // which is samples lo..hi
	doing  listen
	sec    float64 // the nominal second that it belongs to
	at     float64 // the pulse expected there, nominal s

	minute  float64 // being filled
	seconds int     // of it, heard whole
	frames  []float32
	sorted  []float32
	fold    [perSecond]float32
	found   []candidate // latest

	gate     [gateFrames]float32 // about the expected pulse, summed over the minute
	gates    int
	gateTime float64 // sum of their times
	gateBand int
	again    spot // heard once after silence

	eager  float64 // until this minute every one is listened to
	misses int     // minutes since the pulses were heard
	doubts int     // looks in a row that showed no such pulse as was expected
	locked bool
}

// listen says what is listened to in a second.
type listen int

const (
	nothing  listen = iota
	whole           // all of it, and a margin
	expected        // the sound about a pulse
)

const (
	perSecond   = 500
	pulseWindow = 0.007 // s
	stretchLong = 4     // s that are folded as if e were 0
	stretchN    = 60 / stretchLong
	gateHalf    = 12
	gateFrames  = 2*gateHalf + 1
	pulseBands  = 2 * 7 // about two centres: three offsets on both sides, and a witness
	pulseMargin = 0.035 // s of sound kept beyond the second
	foldSteps   = 15    // either side of 0
	foldStep    = clockRange / foldSteps
	keepOut     = 350.0 // Hz about a tone in which no band may lie
)

// pulseOffsets are the bands' distances from the carrier's tone, Hz. In the last
// one no pulses are looked for: it tells clicks from them, on the side where there
// is more room in a receiver's passband.
var pulseOffsets = [7]float64{1000, 1200, 1500, -1000, -1200, -1500, 700}

// pulseBand is one place where the pulses may be heard.
type pulseBand struct {
	on     bool
	hz     float64
	c, s   []float32
	folded [stretchN][perSecond]float32
}

// candidate is what a minute holds: the best pulse and when it comes.
type candidate struct {
	t, phase, e float64 // middle of the minute, s; then modulo 1 s; e of the fold
	z           float64 // height over the fold's scatter
	band        int
	good        bool // it looks like a pulse
}

func newPulses(rate float64, isComplex bool) *pulses {
	p := &pulses{rate: rate, complex: isComplex, sec: -1}
	p.trend = trend{period: 1, jump: 0.005}
	n := int(pulseWindow*rate) | 1
	for i := range n {
		p.hann = append(p.hann, 0.5-0.5*math.Cos(2*math.Pi*(float64(i)+1)/float64(n+1)))
	}
	return p
}

// aim puts the bands beside the tones, if those have moved.
func (p *pulses) aim(hz []float64) {
	if len(hz) == 0 || slices.ContainsFunc(hz, math.IsNaN) {
		return
	}
	moved := len(p.heard) != len(hz)
	for i := 0; i < len(hz) && !moved; i++ {
		moved = math.Abs(p.heard[i]-hz[i]) > 25
	}
	if !moved || p.rate < 3000 {
		return
	}
	if p.heard == nil {
		p.frames, p.sorted = make([]float32, perSecond), make([]float32, perSecond)
		p.spots, p.found = make([]spot, 0, keepMinutes), make([]candidate, 0, 12)
		p.heard = make([]float64, 0, 8)
		p.eager = p.minute + 13
	}
	p.heard = append(p.heard[:0], hz...)
	centres := [2]float64{hz[0], hz[min(1, len(hz)-1)]}
	if math.Abs(centres[0]-centres[1]) < 120 {
		centres[0], centres[1] = (centres[0]+centres[1])/2, math.NaN()
	}
	for i := range p.bands {
		centre, off := centres[i/7], pulseOffsets[i%7]
		if i%7 == 6 && centre > 1300 {
			off = -off
		}
		p.place(&p.bands[i], centre+off)
	}
}

// place moves a band to hz, or turns it off where it cannot be.
func (p *pulses) place(b *pulseBand, hz float64) {
	lo, hi := 150.0, min(0.46*p.rate, 8000)
	if p.complex {
		lo = -hi
	}
	on := hz >= lo && hz <= hi
	for _, f := range p.heard {
		on = on && math.Abs(hz-f) >= keepOut
	}
	if b.on && !on {
		b.folded = [stretchN][perSecond]float32{}
	}
	b.on, b.hz = on, hz
	if !on {
		return
	}
	b.c, b.s = resize(b.c, len(p.hann)), resize(b.s, len(p.hann))
	for i, h := range p.hann {
		s, c := math.Sincos(-2 * math.Pi * hz / p.rate * float64(i))
		b.c[i], b.s[i] = float32(h*c), float32(h*s)
	}
}

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

// push takes the samples from index n on.
func (p *pulses) push(n int64, x, q []float32) {
	end := n + int64(len(x))
	for {
		from, to := p.lo+int64(len(p.buf)), min(p.hi, end)
		if to > from {
			p.keep(x[from-n : to-n])
			if p.complex {
				p.q = append(p.q, q[from-n:to-n]...)
			}
		}
		if p.hi > end {
			return
		}
		switch {
		case p.doing == whole:
			p.second()
			if p.locked && p.at < p.sec+1 {
				p.pulse()
			}
		case p.doing == expected:
			p.pulse()
		}
		p.plan(p.hi)
	}
}

// keep appends to buf, with room for the longest piece that is ever wanted.
func (p *pulses) keep(x []float32) {
	if room := int((1+2*pulseMargin)*p.rate) + 8; cap(p.buf) < room {
		p.buf = append(make([]float32, 0, room), p.buf...)
		if p.complex {
			p.q = append(make([]float32, 0, room), p.q...)
		}
	}
	p.buf = append(p.buf, x...)
}

// gap says that the next sample will be number next.
func (p *pulses) gap(next int64) {
	p.buf, p.q = p.buf[:0], p.q[:0]
	p.sec = math.Ceil(float64(next)/p.rate) - 1
	p.plan(next)
}

// plan chooses the sound of the next second to be looked at. What came before
// sample upto is gone, but for what is in buf; a piece that is out of reach by
// that is left out.
func (p *pulses) plan(upto int64) {
	m := pulseMargin * p.rate
	p.sec++
	if minute := math.Floor(p.sec / 60); minute > p.minute {
		p.turn(minute)
	}
	p.at = math.Inf(1)
	if p.locked {
		p.at = p.expect(p.sec)
	}
	p.doing = nothing
	lo, hi := 0.0, (p.sec+1)*p.rate-m // of nothing: up to where the next whole second would begin
	switch {
	case p.listening():
		p.doing, lo, hi = whole, p.sec*p.rate-m, (p.sec+1)*p.rate+m
	case p.at < p.sec+1:
		p.doing, lo, hi = expected, p.at*p.rate-m, p.at*p.rate+m
	}
	have := upto - int64(len(p.buf))
	p.lo, p.hi = int64(math.Ceil(lo)), int64(math.Ceil(hi))
	if p.doing == nothing || p.lo < have {
		p.hi = max(upto, int64((p.sec+1)*p.rate-m))
		p.doing, p.lo = nothing, p.hi
	}
	cut := int(min(int64(len(p.buf)), p.lo-have))
	p.buf = p.buf[:copy(p.buf, p.buf[cut:])]
	if p.complex {
		p.q = p.q[:copy(p.q, p.q[cut:])]
	}
}

// listening says whether whole seconds are looked at in this minute.
func (p *pulses) listening() bool {
	if len(p.heard) == 0 {
		return false
	}
	due := p.minute < p.eager || math.Mod(p.minute, 30) < 2
	if p.locked && p.misses < 12 {
		due = p.misses >= 2 || math.Mod(p.minute, 15) == 0
	}
	return due
}

// expect returns when the first pulse from time t on is expected.
func (p *pulses) expect(t float64) float64 {
	d := p.trend.when(t) - t
	d -= math.Floor(d)
	return t + d*(1+p.trend.b)
}

// window returns the place in buf of the window about time t, or -1.
func (p *pulses) window(t float64) int {
	i := int(int64(math.Round(t*p.rate))-p.lo) - len(p.hann)/2
	if i < 0 || i+len(p.hann) > len(p.buf) {
		return -1
	}
	return i
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
