package main

import (
	"io"
	"testing"
	"time"

	"offbeat/capture"
)

// Played, a recording gives every sample once, in order, and none before its
// time.
func TestPacer(t *testing.T) {
	src := &script{format: capture.Format{Rate: 1000, Channels: 2}, steps: []step{{n: 2050}, {n: 330}}, end: io.EOF}
	want := &script{format: src.format, steps: []step{{n: 2380}}}
	var all, b capture.Block
	if err := want.Read(&all); err != nil {
		t.Fatal(err)
	}
	p := newPacer(src)
	began := time.Date(2026, 1, 5, 20, 0, 0, 0, time.UTC)
	now := began
	p.now = func() time.Time { return now }
	p.sleep = func(d time.Duration) { now = now.Add(max(d, 0)) }
	next := int64(0)
	for {
		err := p.Read(&b)
		if err == io.EOF {
			break
		}
		if err != nil || b.Len() == 0 || b.Len() > 100 || b.First != next {
			t.Fatalf("%v, %d samples from %d, want from %d", err, b.Len(), b.First, next)
		}
		for c := range 2 {
			for i, v := range b.Ch[c] {
				if v != all.Ch[c][int(next)+i] {
					t.Fatalf("channel %d, sample %d differs", c, int(next)+i)
				}
			}
		}
		next += int64(b.Len())
		if d := now.Sub(began); d != time.Duration(next)*time.Millisecond {
			t.Fatalf("sample %d came after %v", next, d)
		}
		if d := b.Wall.Sub(began); d != time.Duration(b.First)*time.Millisecond {
			t.Fatalf("sample %d is said to be of %v", b.First, d)
		}
	}
	if next != 2380 {
		t.Errorf("%d samples", next)
	}
}
