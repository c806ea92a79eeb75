package sim

import (
	"io"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"sync"
	"time"

	"offbeat/capture"
)

// Bench makes the sound of a scene. It is a capture.Source; besides, Trim,
// Trimmed, Seed and Truth may be called from any goroutine.
//
// Sound is made in steps of about 4 ms (Config of the channel, frequencies and
// levels are set once a step, fading is interpolated through it), so what is
// heard does not depend on how it is read. Phases are integers of 2^-64 turns:
// they stay exact for as long as anyone will listen.
type Bench struct {
	cfg  Config
	sign float64
	step int     // samples a step
	dts  float64 // true seconds a sample

	n     int64 // next sample to be made
	given int64 // next sample to be given
	out   [2][]float32
	left  [2][]float32 // of the present step, not yet given

	loc  *local
	ch   *channel
	prog *programme
	pc   uint64 // phase of the carrier's tone, as sent
	pb   uint64 // phase of the beat, as sent
	g    [4][2]complex128
	m    []float64 // modulated amplitude, the delayed path's history first
	late int       // delay of the second path, samples

	noise   *rand.Rand
	sigma   float64
	filter  []biquad
	gain    float64
	level   float64 // gain control's detector
	attack  float64
	decay   float64
	chance  *rand.Rand
	nextOut int64 // sample at which the next drop-out begins

	began time.Time

	mu      sync.Mutex
	trimmed float64
	truth   Truth

	book ledger
}

// New returns the bench of a scene, or one line that says what is wrong.
func New(cfg Config) (*Bench, error) {
	if cfg.Seed == 0 {
		cfg.Seed = rand.Uint64() | 1
	}
	if err := cfg.complete(); err != nil {
		return nil, err
	}
	b := &Bench{cfg: cfg, sign: 1, step: stepFor(cfg.Rate), dts: 1 / (cfg.Rate * (1 + cfg.ClockError)), gain: 1}
	if cfg.Sideband == "lsb" {
		b.sign = -1
	}
	dt := float64(b.step) * b.dts
	b.loc, b.ch, b.prog = newLocal(&cfg, dt), newChannel(&cfg), newProgramme(&cfg, b.dts)
	start := rand.New(rand.NewPCG(cfg.Seed, 1))
	b.pc, b.pb = start.Uint64(), 0
	for i := range b.g {
		b.g[i][0], b.g[i][1] = b.ch.at(float64(i-1) * dt)
	}
	b.late = int(math.Round(cfg.PathDelay * cfg.Rate))
	b.m = make([]float64, b.late+b.step)
	for i := range b.m {
		b.m[i] = 1
	}
	b.setNoise()
	b.attack = 1 - math.Exp(-b.dts/cfg.AGCAttack)
	b.decay = 1 - math.Exp(-b.dts/cfg.AGCDecay)
	b.chance = rand.New(rand.NewPCG(cfg.Seed, 501))
	b.nextOut = math.MaxInt64
	b.planDrop()
	b.out[0], b.out[1] = make([]float32, b.step), make([]float32, b.step)
	b.book.start(&cfg, b.step)
	return b, nil
}

// stepFor chooses the samples a step: about 250 steps a second, and a whole
// number of them in a second where the rate allows it.
func stepFor(rate float64) int {
	if r := int(rate); float64(r) == rate && r >= 250 {
		for d := range 150 {
			for _, q := range []int{250 - d, 250 + d} {
				if q > 0 && r%q == 0 {
					return r / q
				}
			}
		}
	}
	return max(1, int(math.Round(rate/250)))
}

// setNoise scales the noise so that C/N0 is as asked at the carrier's pitch,
// whatever the filter does there.
func (b *Bench) setNoise() {
	c := &b.cfg
	b.noise = rand.New(rand.NewPCG(c.Seed, 401))
	a := amplitude(c.CarrierDBFS)
	density := a * a / math.Pow(10, c.CarrierCN0/10) // of the analytic signal
	b.sigma = math.Sqrt(density * c.Rate / 4)
	if c.Hookup == "quadrature" {
		b.sigma = math.Sqrt(density * c.Rate / 2)
	}
	if c.White {
		return
	}
	b.filter = []biquad{newBiquad(c.Passband[0], c.Rate, true), newBiquad(c.Passband[0], c.Rate, true),
		newBiquad(c.Passband[1], c.Rate, false), newBiquad(c.Passband[1], c.Rate, false)}
	h := 1.0
	for i := range b.filter {
		h *= b.filter[i].response(c.Tone / c.Rate)
	}
	b.sigma /= max(h, 1e-3)
}

// response returns the section's amplitude at f, a fraction of the rate.
func (q *biquad) response(f float64) float64 {
	z := cmplx.Rect(1, -2*math.Pi*f)
	return cmplx.Abs((complex(q.b0, 0) + complex(q.b1, 0)*z + complex(q.b0, 0)*z*z) / (1 + complex(q.a1, 0)*z + complex(q.a2, 0)*z*z))
}

func (b *Bench) planDrop() {
	if b.cfg.DropEvery > 0 {
		b.nextOut = b.given + int64(1+b.chance.ExpFloat64()*b.cfg.DropEvery*b.cfg.Rate)
	}
}

// Seed returns the seed of everything random.
func (b *Bench) Seed() uint64 { return b.cfg.Seed }

// Config returns the scene with its defaults filled in.
func (b *Bench) Config() Config { return b.cfg }

// Trim turns the virtual trimmer: it adds hz to the local's frequency at RF from
// the next step on.
func (b *Bench) Trim(hz float64) {
	b.mu.Lock()
	b.trimmed += hz
	b.mu.Unlock()
}

// Trimmed returns the sum of all turns.
func (b *Bench) Trimmed() float64 {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.trimmed
}

// Truth returns what was true in the last whole second.
func (b *Bench) Truth() Truth {
	b.mu.Lock()
	defer b.mu.Unlock()
	return b.truth
}

// Format implements capture.Source.
func (b *Bench) Format() capture.Format {
	f := capture.Format{Rate: b.cfg.Rate, Channels: 1, Live: b.cfg.Pace, Encoding: "simulated bench", Frames: b.frames()}
	if b.cfg.Hookup == "quadrature" {
		f.Channels = 2
	}
	return f
}

func (b *Bench) frames() int64 { return int64(math.Round(b.cfg.Duration * b.cfg.Rate)) }

// Close implements capture.Source.
func (b *Bench) Close() error { return nil }

// Read implements capture.Source. It never returns an empty block.
func (b *Bench) Read(blk *capture.Block) error {
	ch := b.Format().Channels
	blk.Reset(ch)
	want := int64(4096)
	if b.cfg.Pace {
		want = max(1, int64(0.03*b.cfg.Rate))
	}
	if total := b.frames(); total > 0 {
		want = min(want, total-b.given)
		if want <= 0 {
			return io.EOF
		}
	}
	if b.given >= b.nextOut {
		blk.Lost = max(1, int64(b.cfg.DropFor*b.cfg.Rate))
		if total := b.frames(); total > 0 {
			blk.Lost = min(blk.Lost, total-b.given)
		}
		blk.Cause = capture.Simulated
		b.book.lost += blk.Lost
		b.skip(blk.Lost)
		b.planDrop()
		if total := b.frames(); total > 0 {
			want = min(want, total-b.given)
			if want <= 0 {
				return io.EOF
			}
		}
	}
	want = min(want, b.nextOut-b.given)
	blk.First = b.given
	for have := int64(0); have < want; {
		n := b.take(want - have)
		for i := range blk.Ch {
			blk.Ch[i] = append(blk.Ch[i], b.left[i][:n]...)
			b.left[i] = b.left[i][n:]
		}
		have += int64(n)
	}
	b.given += want
	if b.cfg.Pace {
		b.pace(blk)
	}
	return nil
}

// take makes a step if nothing is left and returns how many of at most n
// samples are there.
func (b *Bench) take(n int64) int {
	if len(b.left[0]) == 0 {
		b.make()
	}
	return int(min(n, int64(len(b.left[0]))))
}

func (b *Bench) skip(n int64) {
	b.given += n
	for n > 0 {
		k := b.take(n)
		for i := range b.left {
			if len(b.left[i]) >= k {
				b.left[i] = b.left[i][k:]
			}
		}
		n -= int64(k)
	}
}

// pace waits until the block's last sample would have been taken.
func (b *Bench) pace(blk *capture.Block) {
	if b.began.IsZero() {
		b.began = time.Now().Add(-time.Duration(float64(blk.First) / b.cfg.Rate * 1e9))
	}
	due := b.began.Add(time.Duration(float64(b.given) / b.cfg.Rate * 1e9))
	if d := time.Until(due); d > 0 {
		time.Sleep(min(d, 400*time.Millisecond))
	}
	blk.Wall = b.began.Add(time.Duration(float64(blk.First) / b.cfg.Rate * 1e9))
}
