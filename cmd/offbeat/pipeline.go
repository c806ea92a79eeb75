package main

import (
	"context"
	"fmt"
	"sync/atomic"
	"time"

	"offbeat/capture"
	"offbeat/dsp"
)

// The way of a sample, from the input to a reading:
//
//	Source.Read ─▶ shared block ─▶ queue of each bench ─▶ dsp.Bench ─▶ listener
//	└── goroutine of the feed ──┘  └──────── goroutine of the bench ──────────┘
//
// A feed reads an input once for all benches that listen to it. Blocks are not
// copied: each bench picks its planes and the last one gives the block back.
// Queues are bounded. Of a live input, what finds a queue full is dropped for
// that bench alone, which sees it as a gap; a recording waits.

// shared is one block on its way to the benches.
type shared struct {
	capture.Block
	format   capture.Format
	channels []int // the input's channel of each plane, 1-based
	opening  int   // counts the openings of the input
	left     atomic.Int32
	home     chan *shared
}

// release gives the block back after use.
func (s *shared) release() {
	if s.left.Add(-1) == 0 {
		select {
		case s.home <- s:
		default:
		}
	}
}

// listener hears what a bench says. All calls come from the bench's goroutine.
type listener interface {
	opened(f capture.Format, cfg dsp.Config) // samples begin, at this rate
	samples(n, nonFinite int)
	gap(at time.Time, cause capture.Cause, n int64) // n samples are missing
	reading(at time.Time, r dsp.Reading)
	glimpse(at time.Time, g dsp.Glimpse)
	back(at time.Time, missing time.Duration) // samples arrive again
	idle()                                    // nothing is waiting to be worked on
	trouble(err error)                        // the input failed; nil: it ended
}

// helper is a listener through which the user acts upon the bench.
type helper interface {
	sends() errands                       // what is to be done on the bench's goroutine
	stepped(at time.Time, p dsp.Progress) // how far the guided step is, after every reading
}

// ear is the queue between a feed and a bench.
type ear struct {
	channels []int // wanted, 1-based
	queue    chan *shared
	trouble  chan error // the latest failure of the input
	gone     chan struct{}
	drops    bool // may lose what finds the queue full; otherwise the input waits
	greeted  bool // was told of an opening; the feed's own
	deaf     bool // its channels could not be opened; the feed's own
}

func newEar(channels []int, depth int) *ear {
	return &ear{channels: channels, queue: make(chan *shared, depth), trouble: make(chan error, 1), gone: make(chan struct{})}
}

// Blocks of a card are some 10 to 100 ms long: the live depth is seconds of
// slack. A recording needs only enough to keep two goroutines busy.
const (
	liveDepth      = 256
	recordingDepth = 8
)

// offer hands the block over, or drops it if the bench is behind and the input
// cannot wait.
func (e *ear) offer(ctx context.Context, s *shared) {
	select {
	case e.queue <- s:
		return
	default:
	}
	if e.drops && s.format.Live {
		s.release()
		return
	}
	select {
	case e.queue <- s:
	case <-e.gone:
		s.release()
	case <-ctx.Done():
		s.release()
	}
}

// tell leaves word of a failure, or with nil of the end. Only the latest word
// counts, but the end does not hide a failure that nobody has heard of yet.
func (e *ear) tell(err error) {
	select {
	case old := <-e.trouble:
		if err == nil {
			err = old
		}
	default:
	}
	e.trouble <- err
}

// bench is the goroutine that turns blocks into readings.
type bench struct {
	set     settings
	ear     *ear
	out     listener
	fill    bool // count sound as missing while nothing arrives
	now     func() time.Time
	dsp     *dsp.Bench
	line    timeline
	open    int   // the opening of the input that dsp was made for
	planes  []int // which planes of a block are ours
	ch      [][]float32
	kept    func() bool // the host's clock is disciplined
	errands errands     // of the listener; nil: none
	marked  int64       // the sample of the line that the host's clock was read for last
}

// newBench returns a bench that is not running yet. fill says that its input is
// for the present moment: sound that does not arrive is missing, and sound that
// arrives faster than it is worked off is shed.
func newBench(set settings, out listener, fill bool) *bench {
	depth := recordingDepth
	if fill {
		depth = liveDepth
	}
	b := &bench{set: set, out: out, fill: fill, now: time.Now, kept: hostClockKept, ear: newEar(set.channels(), depth)}
	b.ear.drops = fill
	if h, ok := out.(helper); ok {
		b.errands = h.sends()
	}
	return b
}

// run works until the feed ends or stop is closed; then it gives what is left
// and returns.
func (b *bench) run(stop <-chan struct{}) {
	tick := time.NewTicker(200 * time.Millisecond)
	defer tick.Stop()
	defer close(b.ear.gone)
	for {
		if len(b.ear.queue) == 0 {
			b.out.idle()
		}
		select {
		case s, more := <-b.ear.queue:
			if !more {
				b.finish()
				return
			}
			b.take(s)
		case f := <-b.errands:
			f(b.dsp)
		case err := <-b.ear.trouble:
			b.drain()
			b.out.trouble(err)
		case <-tick.C:
			b.wait(b.now())
		case <-stop:
			b.drain()
			b.finish()
			return
		}
	}
}

// drain works off what is in the queue.
func (b *bench) drain() {
	for {
		select {
		case s, more := <-b.ear.queue:
			if !more {
				return
			}
			b.take(s)
		default:
			return
		}
	}
}

// finish gives the last reading.
func (b *bench) finish() {
	if b.dsp != nil {
		b.dsp.Finish()
	}
	select {
	case err := <-b.ear.trouble:
		b.out.trouble(err)
	default:
	}
	b.out.idle()
}

// take works off one block.
func (b *bench) take(s *shared) {
	defer s.release()
	if s.opening != b.open {
		if err := b.reopened(s); err != nil {
			b.out.trouble(err)
			return
		}
	}
	if b.dsp == nil {
		return
	}
	lost := b.line.arrive(&s.Block, b.now())
	if lost.late > 0 && s.Len() > 0 {
		b.out.back(b.line.wall, time.Duration(float64(lost.late)/b.line.rate*1e9))
	}
	if lost.input > 0 {
		b.out.gap(b.line.wall, lost.cause, lost.input)
	}
	if lost.shed > 0 {
		b.out.gap(b.line.wall, capture.Shed, lost.shed)
	}
	b.dsp.Gap(lost.input + lost.shed)
	if s.Len() == 0 {
		return
	}
	for i, p := range b.planes {
		b.ch[i] = s.Ch[p]
	}
	b.mark(s)
	b.out.samples(s.Len(), s.NonFinite)
	b.dsp.Samples(b.ch)
}

// mark tells the bench about once a second what time it is, so that it finds the
// error of the sample clock. A disciplined clock is needed for that; the simulated
// bench says its own true time.
func (b *bench) mark(s *shared) {
	n := b.line.wallN
	if !s.format.Live || s.Wall.IsZero() || float64(n-b.marked) < b.line.rate {
		return
	}
	b.marked = n
	if b.set.Input.Kind == kindSimulate || b.kept() {
		b.dsp.Mark(n, s.Wall)
	}
}

// wait counts sound as missing while nothing arrives: each second still gets
// its reading.
func (b *bench) wait(now time.Time) {
	if !b.fill || b.dsp == nil || len(b.ear.queue) > 0 {
		return
	}
	if n := b.line.idle(now); n > 0 {
		b.out.gap(now, capture.Stalled, n)
		b.dsp.Gap(n)
	}
}

// reopened prepares for an input that was opened, or opened anew. A line that
// goes on at the same rate is kept.
func (b *bench) reopened(s *shared) error {
	b.open = s.opening
	b.planes = b.planes[:0]
	for _, c := range b.ear.channels {
		i := indexOf(s.channels, c)
		if i < 0 || i >= len(s.Ch) {
			b.dsp = nil
			return fmt.Errorf("the input has no channel %d", c)
		}
		b.planes = append(b.planes, i)
	}
	b.ch = make([][]float32, len(b.planes))
	if b.dsp != nil && b.line.rate == s.format.Rate {
		b.out.opened(s.format, b.dsp.Config())
		return nil
	}
	cfg := b.set.config(s.format.Rate)
	cfg.OnReading = func(r dsp.Reading) {
		b.out.reading(b.line.at(r.T), r)
		if h, ok := b.out.(helper); ok {
			h.stepped(b.line.at(r.T), b.dsp.Progress())
		}
	}
	if g, ok := b.out.(interface{ wantsGlimpses() bool }); ok && g.wantsGlimpses() {
		cfg.OnGlimpse = func(g dsp.Glimpse) { b.out.glimpse(b.now(), g) }
	}
	d, err := dsp.New(cfg)
	if err != nil {
		b.dsp = nil
		return err
	}
	b.dsp, b.marked = d, 0
	b.line.start(s.format.Rate, b.now())
	b.line.next = s.First // what was lost before we listened is not ours
	b.out.opened(s.format, d.Config())
	return nil
}

func indexOf(list []int, v int) int {
	for i, x := range list {
		if x == v {
			return i
		}
	}
	return -1
}
