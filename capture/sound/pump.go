package sound

import (
	"sync/atomic"
	"time"
)

// depth is how many buffers a pump holds: two seconds.
const depth = 100

// pump polls a stream from a goroutine of its own and hands its buffers on. A
// call into a sound library may hang for as long as a dead sound server does
// not answer; then only the pump hangs. Once given up it closes its stream
// itself, as soon as the call returns: a stream is always stopped from the side
// that reads it.
type pump struct {
	frames int
	full   chan *buffer
	free   chan *buffer
	last   *buffer
	failed atomic.Pointer[error]
	quit   atomic.Bool
	done   chan struct{}
}

type buffer struct {
	planes   [][]float32
	overflow bool
}

func newPump(st stream, channels, frames int) *pump {
	p := &pump{frames: frames, full: make(chan *buffer, depth), free: make(chan *buffer, depth), done: make(chan struct{})}
	for range depth {
		b := &buffer{}
		for range channels {
			b.planes = append(b.planes, make([]float32, frames))
		}
		p.free <- b
	}
	go p.run(st)
	return p
}

func (p *pump) run(st stream) {
	defer close(p.done)
	defer st.close()
	spilt := false // nobody took the buffers in time: what came was lost
	for !p.quit.Load() {
		n, err := st.available()
		if err == nil && n < p.frames {
			time.Sleep(4 * time.Millisecond)
			continue
		}
		var planes [][]float32
		var overflow bool
		if err == nil {
			planes, overflow, err = st.read()
		}
		if err != nil {
			p.failed.Store(&err)
			return
		}
		select {
		case b := <-p.free:
			for i := range b.planes {
				copy(b.planes[i], planes[i])
			}
			b.overflow = overflow || spilt
			spilt = false
			p.full <- b
		default:
			spilt = true
		}
	}
}

// available implements stream.
func (p *pump) available() (int, error) {
	n := len(p.full)
	if n == 0 {
		if err := p.failed.Load(); err != nil {
			return 0, *err
		}
	}
	return n * p.frames, nil
}

// read implements stream.
func (p *pump) read() ([][]float32, bool, error) {
	if p.last != nil {
		p.free <- p.last
	}
	p.last = <-p.full
	return p.last.planes, p.last.overflow, nil
}

// close implements stream. It waits a moment for the stream to be closed and
// leaves one that hangs to itself.
func (p *pump) close() {
	p.quit.Store(true)
	select {
	case <-p.done:
	case <-time.After(200 * time.Millisecond):
	}
}
