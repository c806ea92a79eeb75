package main

import (
	"context"
	"log/slog"
	"sync"
)

// house is the running benches and the inputs they listen to. Its methods are
// called from one goroutine.
type house struct {
	ctx     context.Context
	open    opener
	log     *slog.Logger
	engage  func(settings) listener // makes the listener of a bench
	dismiss func(name string)       // a bench is no more
	feeds   map[inputSpec]*feedRun
	benches map[string]*benchRun
	waiting sync.WaitGroup
}

type feedRun struct {
	*feed
	cancel context.CancelFunc
	done   chan struct{}
}

type benchRun struct {
	*bench
	on   *feedRun
	stop chan struct{}
	done chan struct{}
}

func newHouse(ctx context.Context, open opener, log *slog.Logger, engage func(settings) listener, dismiss func(string)) *house {
	return &house{ctx: ctx, open: open, log: log, engage: engage, dismiss: dismiss, feeds: map[inputSpec]*feedRun{}, benches: map[string]*benchRun{}}
}

// apply makes the running benches those of the list. A bench whose description
// has not changed runs on undisturbed.
func (h *house) apply(list []settings) {
	wanted := map[string]*settings{}
	for i := range list {
		wanted[list[i].Name] = &list[i]
	}
	for name, b := range h.benches {
		if w := wanted[name]; w == nil || !w.equal(&b.set) {
			h.log.Info("bench stops", "bench", name)
			h.stop(name, b)
		}
	}
	var fresh []*feedRun
	for i := range list {
		if h.benches[list[i].Name] == nil {
			if f := h.start(list[i]); f != nil {
				fresh = append(fresh, f)
			}
		}
	}
	for spec, f := range h.feeds {
		if len(f.listening()) == 0 {
			f.cancel()
			<-f.done
			delete(h.feeds, spec)
		}
	}
	// New inputs begin when all their benches listen: none misses the start.
	for _, f := range fresh {
		h.run(f)
	}
}

// start makes a bench and lets it listen. If its input is new, it is returned,
// not running yet.
func (h *house) start(s settings) (fresh *feedRun) {
	b := &benchRun{newBench(s, h.engage(s), s.Input.paced()), nil, make(chan struct{}), make(chan struct{})}
	f := h.feeds[s.Input]
	if f == nil || !f.add(b.ear) {
		f = &feedRun{feed: newFeed(s.Input, h.open), done: make(chan struct{})}
		f.add(b.ear)
		h.feeds[s.Input] = f
		fresh = f
	}
	b.on = f
	h.benches[s.Name] = b
	h.log.Info("bench starts", "bench", s.Name, "input", s.Input.String())
	h.waiting.Go(func() {
		defer close(b.done)
		b.run(b.stop)
	})
	return fresh
}

func (h *house) run(f *feedRun) {
	ctx, cancel := context.WithCancel(h.ctx)
	f.cancel = cancel
	h.waiting.Go(func() {
		defer close(f.done)
		defer cancel()
		f.feed.run(ctx)
	})
}

func (h *house) stop(name string, b *benchRun) {
	b.on.remove(b.ear)
	close(b.stop)
	<-b.done
	delete(h.benches, name)
	h.dismiss(name)
}

// wait returns when every bench has given its last reading, after the context
// has ended.
func (h *house) wait() { h.waiting.Wait() }
