package main

import (
	"context"
	"io"
	"log/slog"
	"slices"
	"sync"
	"testing"
	"time"

	"offbeat/capture"
)

// endless is a live source of silence, a block every few milliseconds.
type endless struct {
	format capture.Format
	at     int64
	closed func()
}

func (e *endless) Format() capture.Format { return e.format }
func (e *endless) Close() error           { e.closed(); return nil }
func (e *endless) Read(b *capture.Block) error {
	time.Sleep(5 * time.Millisecond)
	b.Reset(e.format.Channels)
	b.First = e.at
	n := int(e.format.Rate / 10) // twenty times too fast: no matter
	for c := range b.Ch {
		b.Ch[c] = append(b.Ch[c], make([]float32, n)...)
	}
	e.at += int64(n)
	return nil
}

// rack counts the inputs that are open.
type rack struct {
	mu     sync.Mutex
	opened [][]int
	open   int
}

func (r *rack) get(_ inputSpec, channels []int) (capture.Source, error) {
	r.mu.Lock()
	defer r.mu.Unlock()
	r.opened = append(r.opened, slices.Clone(channels))
	r.open++
	return &endless{format: capture.Format{Rate: testRate, Channels: len(channels), Live: true}, closed: func() {
		r.mu.Lock()
		defer r.mu.Unlock()
		r.open--
	}}, nil
}

func (r *rack) count() (opened, open int) {
	r.mu.Lock()
	defer r.mu.Unlock()
	return len(r.opened), r.open
}

// books is the notebooks of the benches engaged, by name and turn.
type books struct {
	mu   sync.Mutex
	list map[string][]*notebook
}

func (b *books) engage(s settings) listener {
	b.mu.Lock()
	defer b.mu.Unlock()
	n := &notebook{}
	b.list[s.Name] = append(b.list[s.Name], n)
	return n
}

// heard waits until the latest bench of that name has given more readings.
func (b *books) heard(t *testing.T, name string) {
	t.Helper()
	b.mu.Lock()
	n := b.list[name][len(b.list[name])-1]
	b.mu.Unlock()
	count := func() int { n.mu.Lock(); defer n.mu.Unlock(); return len(n.got) }
	was := count()
	for deadline := time.Now().Add(10 * time.Second); count() < was+2; time.Sleep(5 * time.Millisecond) {
		if time.Now().After(deadline) {
			t.Fatalf("%s gives no readings", name)
		}
	}
}

// Applying another list stops, changes and starts benches, and leaves alone
// what has not changed.
func TestApply(t *testing.T) {
	ctx, cancel := context.WithCancel(context.Background())
	defer cancel()
	r, b := &rack{}, &books{list: map[string][]*notebook{}}
	var gone []string
	h := newHouse(ctx, r.get, slog.New(slog.NewTextHandler(io.Discard, nil)), b.engage, func(n string) { gone = append(gone, n) })
	card := inputSpec{Kind: kindSound, Device: "Line"}
	other := inputSpec{Kind: kindSound, Device: "Mic"}
	bench := func(name string, in inputSpec, channels ...int) settings {
		return settings{Name: name, Input: in, Channels: channels}
	}
	check := func(step string, opened, open int, names ...string) {
		t.Helper()
		for _, n := range names {
			b.heard(t, n)
		}
		if o, n := r.count(); o != opened || n != open {
			t.Errorf("%s: %d inputs were opened and %d are open, want %d and %d; %v", step, o, n, opened, open, r.opened)
		}
		if len(h.benches) != len(names) || len(h.feeds) != open {
			t.Errorf("%s: %d benches, %d feeds", step, len(h.benches), len(h.feeds))
		}
	}
	h.apply([]settings{bench("counter", card, 1), bench("generator", card, 2)})
	check("two on one card", 1, 1, "counter", "generator")
	keep := h.benches["counter"]

	h.apply([]settings{bench("generator", card, 2), bench("counter", card, 1)})
	check("the same again", 1, 1, "counter", "generator")

	changed := bench("generator", card, 2)
	changed.SetOff = 100
	h.apply([]settings{bench("counter", card, 1), changed})
	check("one changed", 1, 1, "counter", "generator")

	h.apply([]settings{bench("counter", card, 1), changed, bench("house-reference", other)})
	check("one more", 2, 2, "counter", "generator", "house-reference")

	h.apply([]settings{bench("counter", card, 1), bench("house-reference", other)})
	check("one less", 2, 2, "counter", "house-reference")

	if h.benches["counter"] != keep || len(b.list["counter"]) != 1 || len(b.list["generator"]) != 2 {
		t.Error("a bench that had not changed was disturbed")
	}
	// A further channel of a card that is open: it is opened again for both.
	h.apply([]settings{bench("counter", card, 1), bench("wide", card, 3)})
	check("a further channel", 3, 1, "counter", "wide")
	if got := r.opened[2]; !slices.Equal(got, []int{1, 3}) {
		t.Errorf("opened channels %v", got)
	}
	if h.benches["counter"] != keep {
		t.Error("a bench that had not changed was replaced")
	}
	if want := []string{"generator", "generator", "house-reference"}; !slices.Equal(gone, want) {
		t.Errorf("dismissed %v, want %v", gone, want)
	}
	cancel()
	h.wait()
	if _, open := r.count(); open != 0 {
		t.Errorf("%d inputs are still open", open)
	}
	seen := b.list["counter"][0]
	for i := 1; i < len(seen.at); i++ {
		if !seen.at[i].After(seen.at[i-1]) {
			t.Fatalf("reading %d is not after the one before", i)
		}
	}
}

// One bad input does not hold the others up.
func TestOneBadInput(t *testing.T) {
	ctx, cancel := context.WithCancel(context.Background())
	defer cancel()
	r, b := &rack{}, &books{list: map[string][]*notebook{}}
	open := func(in inputSpec, c []int) (capture.Source, error) {
		if in.Device == "gone" {
			return nil, io.ErrUnexpectedEOF
		}
		return r.get(in, c)
	}
	h := newHouse(ctx, open, slog.New(slog.NewTextHandler(io.Discard, nil)), b.engage, func(string) {})
	h.apply([]settings{
		{Name: "bad", Input: inputSpec{Kind: kindSound, Device: "gone"}},
		{Name: "good", Input: inputSpec{Kind: kindSound}},
	})
	b.heard(t, "good")
	cancel()
	h.wait()
	if bad := b.list["bad"][0]; len(bad.troubles) == 0 || len(bad.got) != 0 {
		t.Errorf("the bad one said %q and gave %d readings", bad.troubles, len(bad.got))
	}
}
