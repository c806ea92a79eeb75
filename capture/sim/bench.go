package sim

import (
	"io"
	"math"
	"math/rand/v2"
	"sync"
	"time"

	"offbeat/capture"
)

// Bench makes the sound of a scene. It is a capture.Source; besides, Trim,
// Trimmed, Seed, Config and Truth may be called from any goroutine.
//
// Sound is made in steps of 4 ms or less on a grid that divides every second of
// the sample clock evenly: frequencies and levels are set once a step, fading is
// interpolated through it. So what is heard does not depend on how it is read.
// Phases are integers of 2^-64 turns, and every frequency is a whole number of
// them a sample: what is heard and what Truth says agree for as long as anyone
// will listen.
type Bench struct {
	cfg    Config
	sign   float64 // of the sideband
	parts  int     // steps a second
	planes int
	total  int64   // samples of the whole scene
	rate   float64 // samples a true second
	dts    float64 // its inverse

	k      int64 // next step to be made
	n      int64 // its first sample
	given  int64 // next sample to be given
	lost   int64 // samples dropped since the last block
	out    [2][]float32
	left   [2][]float32 // of the present step, not yet given
	planar [2][]float32 // out, as long as the present step

	loc    *local
	wander *wander
	ch     *channel
	prog   *programme
	pc, pb uint64       // phases of the carrier's tone and of the beat, as sent
	g      [2][2]gain   // of both paths at both ends of the step
	m      []complex128 // modulated carrier, the delayed path's history first
	late   int          // delay of the second path, samples
	made   int          // samples of the step in m
	rec    *receiver
	drop   *drops

	most  int64 // samples a block
	began time.Time
	book  ledger
	told  func(Truth) // called with every second's truth; may be nil

	mu      sync.Mutex
	trimmed float64
	truth   Truth
}

// New returns the bench of a scene, or one line that says what is wrong.
func New(cfg Config) (*Bench, error) {
	if cfg.Seed == 0 {
		cfg.Seed = rand.Uint64() | 1
	}
	if err := cfg.complete(); err != nil {
		return nil, err
	}
	b := &Bench{cfg: cfg, sign: 1, parts: partsFor(&cfg), planes: 1, total: math.MaxInt64, rate: cfg.Rate * (1 + cfg.ClockError)}
	b.dts = 1 / b.rate
	c := &b.cfg
	if c.Sideband == "lsb" {
		b.sign = -1
	}
	if c.Hookup == "quadrature" {
		b.planes = 2
	}
	if n := b.frames(); n > 0 {
		b.total = n
	}
	dt := b.gridTime(1)
	b.loc, b.ch, b.prog, b.rec = newLocal(c, dt), newChannel(c), newProgramme(c, b.dts), newReceiver(c)
	b.wander = newWander(c)
	start := rand.New(rand.NewPCG(c.Seed, 1))
	b.pc, b.pb = start.Uint64(), start.Uint64()
	b.g = [2][2]gain{b.ch.at(0), b.ch.at(dt)}
	longest := int(math.Ceil(c.Rate/float64(b.parts))) + 1
	b.late = int(math.Round(c.PathDelay * c.Rate))
	b.m = make([]complex128, b.late+longest)
	for i := range b.m {
		b.m[i] = 1
	}
	b.out[0], b.out[1] = make([]float32, longest), make([]float32, longest)
	b.drop = newDrops(c, b.total)
	b.book.start(c, b.total, b.pb)
	// Blocks hold half a second at the most, so that Truth keeps up with them.
	b.most = int64(min(4096, math.Ceil(c.Rate/2)))
	if c.Pace {
		b.most = max(1, int64(0.03*c.Rate))
	}
	return b, nil
}

// partsFor chooses the steps a second: 250, and for wide or shifted spectra as
// many as keep the interpolation's error 100 dB below the carrier.
func partsFor(c *Config) int {
	return max(1, int(min(max(250, 150*c.SpreadHz+50*math.Abs(c.PathShift)), math.Floor(c.Rate))))
}

// gridTime returns the true time of grid point k, s.
func (b *Bench) gridTime(k int64) float64 {
	return float64(k) / float64(b.parts) / (1 + b.cfg.ClockError)
}

// gridSample returns the place of grid point k in samples, not rounded.
func (b *Bench) gridSample(k int64) float64 {
	p := int64(b.parts)
	return b.cfg.Rate*float64(k/p) + b.cfg.Rate*float64(k%p)/float64(p)
}

// Seed returns the seed of everything random.
func (b *Bench) Seed() uint64 { return b.cfg.Seed }

// Config returns the scene with its defaults filled in.
func (b *Bench) Config() Config { return b.cfg }

// Trim turns the virtual trimmer: it adds hz to the local's frequency at RF from
// the next step on, its phase continuous. A value that is not finite turns
// nothing, and the trimmer has stops at +-1 MHz.
func (b *Bench) Trim(hz float64) {
	if math.IsNaN(hz) || math.IsInf(hz, 0) {
		return
	}
	b.mu.Lock()
	b.trimmed = max(-1e6, min(1e6, b.trimmed+hz))
	b.mu.Unlock()
}

// Trimmed returns the sum of all turns.
func (b *Bench) Trimmed() float64 {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.trimmed
}

// Truth returns what was true in the last whole second that was made; T is 0
// before the first. It may be called at any time, from any goroutine; sound is
// made up to one step before it is read.
func (b *Bench) Truth() Truth {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.truth
}

// Format implements capture.Source.
func (b *Bench) Format() capture.Format {
	return capture.Format{Rate: b.cfg.Rate, Channels: b.planes, Live: b.cfg.Pace, Encoding: "simulated bench", Frames: b.frames()}
}

// frames returns the length in samples, 0 for an endless scene.
func (b *Bench) frames() int64 {
	if b.cfg.Duration == 0 {
		return 0
	}
	return max(1, int64(math.Round(b.cfg.Duration*b.cfg.Rate)))
}

// Close implements capture.Source.
func (b *Bench) Close() error { return nil }

// Read implements capture.Source. Blocks hold at most 4096 samples; at the pace
// of the clock about 30 ms, and none while a drop-out lasts.
func (b *Bench) Read(blk *capture.Block) error {
	blk.Reset(b.planes)
	for b.given < b.total && b.given >= b.drop.from {
		n := min(b.drop.to-b.given, int64(math.Ceil(b.cfg.Rate/4)))
		b.skip(n)
		b.lost += n
		if b.given == b.drop.to {
			b.drop.next()
		}
		if b.cfg.Pace {
			b.wait()
			return nil
		}
	}
	want := min(b.most, b.total-b.given, b.drop.from-b.given)
	if want <= 0 {
		return io.EOF
	}
	blk.First = b.given
	if b.lost > 0 {
		blk.Lost, blk.Cause, b.lost = b.lost, capture.Simulated, 0
	}
	for have := int64(0); have < want; {
		n := b.take(want - have)
		for i := range blk.Ch {
			blk.Ch[i] = append(blk.Ch[i], b.left[i][:n]...)
		}
		b.use(n)
		have += n
	}
	if b.cfg.Pace {
		b.wait()
		blk.Wall = b.began.Add(b.clock(blk.First))
	}
	return nil
}

// take makes a step if nothing is left and returns how many of at most n
// samples are there.
func (b *Bench) take(n int64) int64 {
	if len(b.left[0]) == 0 {
		b.make()
	}
	return min(n, int64(len(b.left[0])))
}

func (b *Bench) use(n int64) {
	for i := range b.planes {
		b.left[i] = b.left[i][n:]
	}
	b.given += n
}

func (b *Bench) skip(n int64) {
	for n > 0 {
		k := b.take(n)
		b.use(k)
		n -= k
	}
}

// clock returns the true time of sample n since the start.
func (b *Bench) clock(n int64) time.Duration { return time.Duration(float64(n) * b.dts * 1e9) }

// wait waits until the last sample given would have been taken. The reckoning
// is from the start, so that waiting adds up to no drift.
func (b *Bench) wait() {
	if b.began.IsZero() {
		b.began = time.Now()
	}
	time.Sleep(time.Until(b.began.Add(b.clock(b.given))))
}

// drops is the plan of drop-outs: from..to is the next one, in samples. It
// depends on the scene only, so that whoever needs it makes his own.
type drops struct {
	r        *rand.Rand
	every    float64 // mean, samples
	long     int64
	last     int64 // sample that is never dropped: a gap stands before something
	from, to int64
}

func newDrops(c *Config, total int64) *drops {
	d := &drops{r: rand.New(rand.NewPCG(c.Seed, 501)), every: c.DropEvery * c.Rate, long: max(1, int64(c.DropFor*c.Rate)), last: total - 1}
	d.next()
	return d
}

func (d *drops) next() {
	if d.every > 0 {
		d.from = d.to + int64(1+d.r.ExpFloat64()*d.every)
		d.to = min(d.from+d.long, d.last)
	}
	if d.every == 0 || d.from >= d.last {
		d.from, d.to = math.MaxInt64, math.MaxInt64
	}
}

// between returns how many samples of lo..hi are dropped; lo never goes back.
func (d *drops) between(lo, hi int64) (n int64) {
	for {
		n += max(0, min(hi, d.to)-max(lo, d.from))
		if d.to >= hi {
			return n
		}
		d.next()
	}
}
