package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"
	"sync"
	"time"

	"offbeat/capture"
)

// feed reads one input for all benches that listen to it, and opens it again
// when a live one fails.
type feed struct {
	spec inputSpec
	open opener
	wait func(ctx context.Context, d time.Duration) // between attempts; tests shorten it

	mu   sync.Mutex
	ears []*ear
	over bool // run has returned

	// Of the goroutine of run:
	src      capture.Source
	format   capture.Format
	channels []int // opened
	opening  int
	base     int64     // the source's sample 0 on the feed's time line
	next     int64     // the feed's next sample
	ended    time.Time // when next was taken, if the input was closed since
	home     chan *shared
	note     string // what was odd about the input, once it is closed
}

func newFeed(spec inputSpec, open opener) *feed {
	return &feed{spec: spec, open: open, wait: pause, home: make(chan *shared, 2*liveDepth)}
}

// pause waits for d or until ctx ends.
func pause(ctx context.Context, d time.Duration) {
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-t.C:
	case <-ctx.Done():
	}
}

// add lets e listen from the next block on. It reports false if the input has
// ended.
func (f *feed) add(e *ear) bool {
	f.mu.Lock()
	defer f.mu.Unlock()
	if f.over {
		return false
	}
	f.ears = append(slices.Clone(f.ears), e)
	return true
}

// remove lets e listen no more.
func (f *feed) remove(e *ear) {
	f.mu.Lock()
	defer f.mu.Unlock()
	f.ears = slices.DeleteFunc(slices.Clone(f.ears), func(x *ear) bool { return x == e })
}

func (f *feed) listening() []*ear {
	f.mu.Lock()
	defer f.mu.Unlock()
	return f.ears
}

// run reads until ctx ends, the input ends, or it fails for good. It closes the
// queues of all ears.
func (f *feed) run(ctx context.Context) {
	defer func() {
		f.shut()
		f.mu.Lock()
		defer f.mu.Unlock()
		for _, e := range f.ears {
			close(e.queue)
		}
		f.ears, f.over = nil, true
	}()
	delay := time.Second / 2
	for ctx.Err() == nil {
		err := f.openAll(ctx)
		if err == nil {
			before := f.next
			err = f.read(ctx)
			f.shut()
			if f.next > before {
				delay = time.Second / 2
			}
		}
		if ctx.Err() != nil {
			return
		}
		if err == errWider {
			continue
		}
		if err == io.EOF {
			err = nil
			if f.spec.live() {
				err = fmt.Errorf("%s: the writer has gone; waiting for the next", &f.spec)
			}
		}
		for _, e := range f.listening() {
			if !e.deaf { // that one has been told already
				e.tell(err)
			}
		}
		if !f.spec.live() || errors.Is(err, capture.ErrNoSupport) {
			return
		}
		f.wait(ctx, delay)
		delay = min(2*delay, 30*time.Second)
	}
}

// shut closes the source.
func (f *feed) shut() {
	if f.src != nil {
		if n, ok := f.src.(interface{ Note() string }); ok {
			f.note = n.Note()
		}
		f.src.Close()
		f.src = nil
		f.ended = time.Now()
	}
}

// errWider says that a bench has come that needs a channel which is not open.
var errWider = errors.New("a further channel is wanted")

// openAll opens the input for the channels of all ears. If that fails and there
// are several, those whose own channels cannot be opened are told so and left
// out: one bench's mistake must not silence the others.
func (f *feed) openAll(ctx context.Context) error {
	ears := f.listening()
	if len(ears) == 0 {
		return errors.New("nobody listens")
	}
	wanted := func(ears []*ear) (c []int) {
		for _, e := range ears {
			c = union(c, e.channels)
		}
		return c
	}
	for _, e := range ears {
		e.deaf = false
	}
	channels := wanted(ears)
	src, err := f.openOne(ctx, channels)
	if err != nil && len(ears) > 1 && ctx.Err() == nil {
		var good []*ear
		for _, e := range ears {
			s, own := f.openOne(ctx, e.channels)
			if own != nil {
				e.tell(own)
				e.deaf = true
				continue
			}
			s.Close()
			good = append(good, e)
		}
		if len(good) > 0 {
			channels = wanted(good)
			src, err = f.openOne(ctx, channels)
		}
	}
	if err != nil {
		return err
	}
	f.opened(src, channels, ears)
	return nil
}

// openOne opens the source, but does not wait for it longer than ctx lasts:
// opening a FIFO may wait for its writer.
func (f *feed) openOne(ctx context.Context, channels []int) (capture.Source, error) {
	type result struct {
		src capture.Source
		err error
	}
	done := make(chan result, 1)
	go func() {
		src, err := f.open(f.spec, channels)
		done <- result{src, err}
	}()
	select {
	case r := <-done:
		return r.src, r.err
	case <-ctx.Done():
		go func() {
			if r := <-done; r.err == nil {
				r.src.Close()
			}
		}()
		return nil, ctx.Err()
	}
}

// opened puts the new source on the time line: what passed while the input was
// closed is missing.
func (f *feed) opened(src capture.Source, channels []int, ears []*ear) {
	was := f.format.Rate
	f.src, f.format, f.channels = src, src.Format(), channels
	f.opening++
	f.base = f.next
	if was == f.format.Rate && !f.ended.IsZero() {
		f.base += int64(math.Round(time.Since(f.ended).Seconds() * was))
	}
	for _, e := range ears {
		e.greeted = false
	}
}

// read passes blocks on until the source ends or fails.
func (f *feed) read(ctx context.Context) error {
	for ctx.Err() == nil {
		ears := f.listening()
		for _, e := range ears {
			if e.greeted || e.deaf {
				continue
			}
			if !covers(f.channels, e.channels) && f.spec.live() {
				e.greeted = true
				return errWider
			}
			e.greeted = true
			f.pass(ctx, f.block(), []*ear{e})
		}
		if err := f.step(ctx, ears); err != nil {
			return err
		}
	}
	return ctx.Err()
}

// step reads one block and passes it on.
func (f *feed) step(ctx context.Context, ears []*ear) error {
	s := f.block()
	err := f.src.Read(&s.Block)
	if err != nil || s.Len() == 0 {
		f.pass(ctx, s, nil)
		return err
	}
	f.place(s)
	f.pass(ctx, s, ears)
	return nil
}

// covers reports whether all of want is in have.
func covers(have, want []int) bool {
	for _, c := range want {
		if !slices.Contains(have, c) {
			return false
		}
	}
	return true
}

// block takes a block that is free, or makes one.
func (f *feed) block() *shared {
	var s *shared
	select {
	case s = <-f.home:
	default:
		s = &shared{home: f.home}
	}
	s.Reset(len(f.channels))
	s.format, s.channels, s.opening = f.format, f.channels, f.opening
	s.First, s.Wall = f.next, time.Time{}
	return s
}

// place puts a block of the source on the feed's time line.
func (f *feed) place(s *shared) {
	s.First += f.base
	if missing := s.First - s.Lost - f.next; missing > 0 {
		s.Lost += missing
		s.Guessed, s.Cause = true, capture.Reopened
	}
	if s.Wall.IsZero() {
		if f.spec.Starts != 0 {
			s.Wall = time.Unix(0, f.spec.Starts).Add(time.Duration(float64(s.First) / f.format.Rate * 1e9))
		} else {
			s.Wall = time.Now().Add(-time.Duration(float64(s.Len()) / f.format.Rate * 1e9))
		}
	}
	f.next = s.First + int64(s.Len())
}

// pass hands a block to the ears.
func (f *feed) pass(ctx context.Context, s *shared, ears []*ear) {
	s.left.Store(int32(len(ears)) + 1)
	for _, e := range ears {
		if e.deaf {
			s.release()
		} else {
			e.offer(ctx, s)
		}
	}
	s.release()
}
