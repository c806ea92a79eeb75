package dsp

import (
	"fmt"
	"math"
)

// Hookup says what is in the audio.
type Hookup string

// The hook-ups.
const (
	TwoTone    Hookup = "two-tone"   // carrier and local as two tones from an SSB receiver
	Mixer      Hookup = "mixer"      // one tone at |local - carrier|
	Quadrature Hookup = "quadrature" // two channels, I and Q
)

// Hookups lists every Hookup in a fixed order.
var Hookups = []Hookup{TwoTone, Mixer, Quadrature}

// Sideband is the receiver's sideband.
type Sideband string

// The sidebands.
const (
	Upper Sideband = "usb" // tone = rf - dial
	Lower Sideband = "lsb" // tone = dial - rf
)

// Config describes one comparison. The zero value of an optional field means
// its default.
type Config struct {
	Rate             float64  // nominal samples per second, 10 to 1e6
	Hookup           Hookup   // default TwoTone
	Sideband         Sideband // default Upper; for Quadrature, Lower says that the rotation is reversed
	Carrier          float64  // fC, nominal carrier frequency, Hz; default 10e6
	Local            float64  // fL, the local's nominal frequency as heard (harmonic * nominal + set-off), Hz; default Carrier
	LocalTone        float64  // roughly where the local's tone is at the start, Hz; 0: not told
	SampleRateError  float64  // e, a fraction (not ppm); with the next one 0 too: not stated, and used as it is found
	SampleRateErrorU float64  // standard uncertainty of e, a fraction
	SearchLow        float64  // edges of the search for tones, Hz; 0, 0: from the rate
	SearchHigh       float64
	Wired            bool // the carrier is a house reference on a wire: no fading, no Doppler, never `unproven`

	OnReading func(Reading) // called once a second of sound, from the goroutine that calls Samples
	OnGlimpse func(Glimpse) // called about ten times a second; nil: glimpses are not computed
}

// SetOff returns D0 = fL - fC, Hz.
func (c *Config) SetOff() float64 { return c.Local - c.Carrier }

// sign returns s of the model: +1 for Upper, -1 for Lower.
func (c *Config) sign() float64 {
	if c.Sideband == Lower {
		return -1
	}
	return 1
}

// complete fills in defaults and refuses what cannot be meant.
func (c *Config) complete() error {
	if c.Hookup == "" {
		c.Hookup = TwoTone
	}
	if c.Sideband == "" {
		c.Sideband = Upper
	}
	if c.Carrier == 0 {
		c.Carrier = 10e6
	}
	if c.Local == 0 {
		c.Local = c.Carrier
	}
	finite := func(v float64) bool { return !math.IsNaN(v) && !math.IsInf(v, 0) }
	switch {
	case !(c.Rate >= 10 && c.Rate <= 1e6):
		return fmt.Errorf("sample rate %g Hz: must be 10 Hz to 1 MHz", c.Rate)
	case c.Hookup != TwoTone && c.Hookup != Mixer && c.Hookup != Quadrature:
		return fmt.Errorf("hook-up %q: must be two-tone, mixer or quadrature", c.Hookup)
	case c.Sideband != Upper && c.Sideband != Lower:
		return fmt.Errorf("sideband %q: must be usb or lsb", c.Sideband)
	case !(c.Carrier > 0) || !finite(c.Carrier):
		return fmt.Errorf("carrier %g Hz: must be above 0", c.Carrier)
	case !(c.Local > 0) || !finite(c.Local):
		return fmt.Errorf("local %g Hz: must be above 0", c.Local)
	case !(math.Abs(c.SampleRateError) <= 0.01):
		return fmt.Errorf("sample-rate error %g ppm: must be within 10000 ppm", c.SampleRateError*1e6)
	case !(c.SampleRateErrorU >= 0 && c.SampleRateErrorU <= 0.01):
		return fmt.Errorf("uncertainty of the sample rate %g ppm: must be 0 to 10000 ppm", c.SampleRateErrorU*1e6)
	}
	nyquist := c.Rate / 2
	if math.Abs(c.LocalTone) >= nyquist || !finite(c.LocalTone) || (c.LocalTone < 0 && c.Hookup != Quadrature) {
		return fmt.Errorf("local tone %g Hz: must lie below half the sample rate, %g Hz", c.LocalTone, nyquist)
	}
	return c.completeSearch(nyquist)
}

// completeSearch chooses where tones are looked for. An ordinary receiver
// passes about 200 Hz to a few kilohertz; below lie hum and its harmonics.
func (c *Config) completeSearch(nyquist float64) error {
	given := c.SearchLow != 0 || c.SearchHigh != 0
	switch {
	case !given && c.Hookup == Quadrature:
		c.SearchLow, c.SearchHigh = -0.96*nyquist, 0.96*nyquist
	case !given && c.Hookup == Mixer:
		c.SearchLow, c.SearchHigh = 0, min(0.96*nyquist, 8000)
	case !given:
		c.SearchLow, c.SearchHigh = min(200, 0.05*c.Rate), min(0.96*nyquist, 8000)
	case c.SearchHigh == 0:
		c.SearchHigh = min(0.96*nyquist, 8000)
	}
	least := 0.0
	if c.Hookup == Quadrature {
		least = -nyquist
	}
	if !(c.SearchLow >= least && c.SearchLow < c.SearchHigh && c.SearchHigh <= nyquist) {
		return fmt.Errorf("search from %g to %g Hz: must lie between %g and half the sample rate, %g Hz", c.SearchLow, c.SearchHigh, least, nyquist)
	}
	return nil
}

// engine is what differs between the hook-ups.
type engine interface {
	push(x, q []float32)                    // the next samples
	gap(next int64)                         // the next sample will be number next
	second(i int64) Reading                 // what second i says; all its sound has been pushed
	glimpse(from, upto float64, g *Glimpse) // what the sound between two times says
}

const (
	slotsPerSecond = 10
	edge           = 0.05 // a second's window reaches this far beyond it, tapering, s
	silence        = 2e-6 // rms below which the input carries no signal: under half a step of 16 bits
)

// Bench turns the samples of one comparison into readings. It is not safe for
// concurrent use. After the first seconds Samples allocates nothing while both
// tones are held.
type Bench struct {
	cfg   Config // its SampleRateError is the one in use
	given Config // as New was told, with the defaults filled in
	eng   engine
	raw   raw
	clock *clock
	tones [2]float64 // where carrier and local were heard last, Hz by the nominal clock
	n     int64      // samples on the time line so far
	slot  int64      // number of the tenth of a second that is being filled
	sec   int64      // next second to be read
	reach int64      // what the filters look ahead, samples

	glim Glimpse
	acc  [4]secondLevel // of the latest seconds, by number modulo 4
}

// secondLevel is what the raw samples of one second say.
type secondLevel struct {
	sum2    float64
	samples int64
	lost    int64
	clipped int
	n       int64 // which second
}

// New returns a Bench, or an error that says in one line which field is wrong
// and what is allowed.
func New(cfg Config) (*Bench, error) {
	if err := cfg.complete(); err != nil {
		return nil, err
	}
	p := newPlan(cfg.Rate)
	b := &Bench{cfg: cfg, given: cfg, reach: int64(p.reach()), tones: [2]float64{math.NaN(), math.NaN()}}
	b.raw.keep = int(2.6*cfg.Rate) + 2*p.reach() + 64
	b.raw.complex = cfg.Hookup == Quadrature
	switch {
	case cfg.Hookup == TwoTone, cfg.Hookup == Quadrature && cfg.LocalTone != 0:
		b.eng = newTwoTone(&b.cfg, p, &b.raw)
		b.clock = newClock(cfg.Rate, cfg.Hookup == Quadrature)
	default:
		b.eng = newSingle(&b.cfg, p, &b.raw)
		b.clock = &clock{rate: cfg.Rate} // no tone beside which second pulses could stand
	}
	return b, nil
}

// Config returns the configuration with its defaults filled in.
func (b *Bench) Config() Config { return b.given }

// slotEnd returns the sample at which tenth of a second j ends.
func (b *Bench) slotEnd(j int64) int64 {
	return int64(math.Round(float64(j+1) * b.cfg.Rate / slotsPerSecond))
}

// Samples takes consecutive samples: one plane, or I and Q for Quadrature. It
// calls OnReading and OnGlimpse as they fall due and keeps no reference to ch.
func (b *Bench) Samples(ch [][]float32) {
	x := ch[0]
	var q []float32
	if b.cfg.Hookup == Quadrature {
		q = ch[1]
	}
	for len(x) > 0 {
		n := int(min(int64(len(x)), b.slotEnd(b.slot)-b.n))
		l := b.level()
		measure(l, x[:n])
		l.samples += int64(n)
		if q != nil {
			measure(l, q[:n])
			b.raw.push(b.n, x[:n], q[:n])
			b.eng.push(x[:n], q[:n])
			b.clock.push(x[:n], q[:n])
			q = q[n:]
		} else {
			b.raw.push(b.n, x[:n], nil)
			b.eng.push(x[:n], nil)
			b.clock.push(x[:n], nil)
		}
		x = x[n:]
		b.n += int64(n)
		b.due()
	}
}

// level returns the accumulator of the second that sample b.n falls in.
func (b *Bench) level() *secondLevel { return b.levelOf(b.slot / slotsPerSecond) }

func (b *Bench) levelOf(sec int64) *secondLevel {
	l := &b.acc[sec&3]
	if l.n != sec {
		*l = secondLevel{n: sec}
	}
	return l
}

// measure adds the level and the clipped samples of x.
func measure(l *secondLevel, x []float32) {
	const (
		full = 0x3f7ff800 // float32 bits of 0.99988: the top step of 14 bits
		top  = 1 << 31
	)
	for len(x) > 0 {
		part := x[:min(len(x), 128)]
		x = x[len(part):]
		sum := dotSelf(part)
		l.sum2 += sum
		if sum < 0.99 {
			continue // then none of them can be at full scale
		}
		var any, other uint32 // their top bits tell whether one is
		rest := part
		for ; len(rest) >= 4; rest = rest[4:] {
			any |= math.Float32bits(rest[0])&^top + (top - full)
			other |= math.Float32bits(rest[1])&^top + (top - full)
			any |= math.Float32bits(rest[2])&^top + (top - full)
			other |= math.Float32bits(rest[3])&^top + (top - full)
		}
		for _, v := range rest {
			any |= math.Float32bits(v)&^top + (top - full)
		}
		any |= other
		if any&top == 0 {
			continue
		}
		for _, v := range part {
			if math.Float32bits(v)&^top >= full {
				l.clipped++
			}
		}
	}
}

// Gap says that n samples are missing after those given so far. Every second
// that the gap covers still gets its reading.
func (b *Bench) Gap(n int64) {
	if n <= 0 {
		return
	}
	b.eng.gap(b.n + n)
	b.clock.gap(b.n + n)
	b.raw.drop()
	for n > 0 {
		m := min(n, b.slotEnd(b.slot)-b.n)
		b.level().lost += m
		b.n += m
		n -= m
		b.due()
	}
}

// due gives what has fallen due when b.n reached the end of a slot.
func (b *Bench) due() {
	for b.n >= b.slotEnd(b.slot) {
		b.slot++
		if b.cfg.OnGlimpse != nil {
			b.glimpse()
		}
	}
	for b.n-b.reach >= int64(math.Ceil((float64(b.sec)+1+edge)*b.cfg.Rate)) {
		b.read()
	}
}

// Finish ends the input: the reading of a last second of which at least nine
// tenths are there is given.
func (b *Bench) Finish() {
	for float64(b.n) >= (float64(b.sec)+0.9)*b.cfg.Rate {
		b.read()
	}
}

// read makes and delivers the reading of second b.sec.
func (b *Bench) read() {
	l := *b.levelOf(b.sec)
	t := float64(b.sec) + 0.5
	var r Reading
	rms := 0.0
	if l.samples > 0 {
		rms = math.Sqrt(l.sum2 / float64(l.samples))
	}
	sec := b.sec
	b.sec++
	clock := b.readClock()
	lost := l.lost > 0 || b.levelOfIf(sec-1).lost > 0 && b.rawFrom(sec)
	switch {
	case l.samples == 0 || rms < silence:
		r = Blank(t, Silent)
		r.Why = "no signal at the input"
		if l.samples == 0 {
			r.Why = "no samples arrived"
		}
		b.eng.second(sec) // keeps its own count of what it has not heard
	default:
		r = b.eng.second(sec)
		if lost && !math.IsNaN(r.BeatAbs) {
			r.withoutBeat("samples were lost in this second")
		}
	}
	if l.samples > 0 {
		r.InputDBFS = 20 * math.Log10(max(rms*math.Sqrt2, 1e-12))
	}
	r.Clipped = l.clipped
	if l.clipped > 0 {
		r.flag(Clipped)
	}
	if l.lost > 0 {
		r.flag(Gap)
	}
	clock.say(&r, &b.given)
	b.tellTones(&r)
	if b.cfg.OnReading != nil {
		b.cfg.OnReading(r)
	}
}

// levelOfIf returns the accumulator of a second if it is still kept, else an
// empty one.
func (b *Bench) levelOfIf(sec int64) secondLevel {
	if sec >= 0 && b.acc[sec&3].n == sec {
		return b.acc[sec&3]
	}
	return secondLevel{}
}

// rawFrom reports whether the samples kept begin inside the reach of second
// sec: a gap just before it touches its window.
func (b *Bench) rawFrom(sec int64) bool {
	return float64(b.raw.first()) > (float64(sec)-edge)*b.cfg.Rate-float64(b.reach)
}

// glimpse makes and delivers the quick estimate from the latest sound.
func (b *Bench) glimpse() {
	upto := float64(b.n-b.reach) / b.cfg.Rate
	g := &b.glim // kept in the bench: a fresh one would be garbage ten times a second
	*g = Glimpse{Upto: upto, State: Searching, Beat: math.NaN(), BeatAbs: math.NaN(), BeatU: math.NaN(), Turn: math.NaN(), T: upto}
	if upto > 0.5 {
		b.eng.glimpse(upto-0.4, upto, g)
	}
	b.cfg.OnGlimpse(*g)
}

// withoutBeat takes the numbers of the beat back and says why.
func (r *Reading) withoutBeat(why string) {
	n := math.NaN()
	r.Beat, r.BeatU, r.BeatAbs, r.Error, r.Offset, r.OffsetU, r.Phase, r.Span = n, n, n, n, n, n, n, n
	r.Why = why
}

// flag adds f, keeping the order of Flags.
func (r *Reading) flag(f Flag) {
	if r.Has(f) {
		return
	}
	all := make([]Flag, 0, len(r.Flags)+1)
	for _, g := range Flags {
		if g == f || r.Has(g) {
			all = append(all, g)
		}
	}
	r.Flags = all
}
