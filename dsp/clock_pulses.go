package dsp

import (
	"math"
	"slices"
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
