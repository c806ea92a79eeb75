package sound

import (
	"sync"
	"testing"
	"time"
)

// hanging is a stream whose library hangs until it is let go.
type hanging struct {
	mu     sync.Mutex
	n      int
	hang   chan struct{}
	closed chan struct{}
}

func (h *hanging) available() (int, error) {
	h.mu.Lock()
	h.n++
	n := h.n
	h.mu.Unlock()
	if n > 5 {
		<-h.hang
	}
	return 960, nil
}

func (h *hanging) read() ([][]float32, bool, error) {
	return [][]float32{make([]float32, 960)}, false, nil
}

func (h *hanging) close() { close(h.closed) }

// A call that hangs holds nobody up; the stream is closed once it returns.
func TestHangingLibrary(t *testing.T) {
	h := &hanging{hang: make(chan struct{}), closed: make(chan struct{})}
	p := newPump(h, 1, 960)
	for deadline := time.Now().Add(5 * time.Second); ; time.Sleep(time.Millisecond) {
		if n, err := p.available(); err != nil || n == 5*960 {
			break
		}
		if time.Now().After(deadline) {
			t.Fatal("five buffers do not come")
		}
	}
	for range 5 {
		p.read()
	}
	if n, err := p.available(); n != 0 || err != nil {
		t.Errorf("%d %v", n, err)
	}
	gone := make(chan struct{})
	go func() { p.close(); close(gone) }()
	select {
	case <-gone:
	case <-time.After(5 * time.Second):
		t.Fatal("close waits for a call that hangs")
	}
	close(h.hang)
	select {
	case <-h.closed:
	case <-time.After(5 * time.Second):
		t.Error("the stream is never closed")
	}
}

// Buffers that nobody takes are lost, and the next one says so.
func TestSpilt(t *testing.T) {
	s := &script{t: time.Now(), list: []Device{card("card")}}
	st := &scripted{s: s, rate: 48000, channels: 1, frames: 10, began: s.t.Add(-time.Second)}
	p := newPump(st, 1, 10)
	for len(p.full) < depth {
		time.Sleep(time.Millisecond)
	}
	time.Sleep(20 * time.Millisecond) // the rest of a second's frames is spilt
	over := 0
	for range depth {
		if _, o, _ := p.read(); o {
			over++
		}
	}
	if over != 0 {
		t.Error("an overflow too early")
	}
	p.close()
}
