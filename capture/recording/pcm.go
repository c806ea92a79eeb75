package recording

import (
	"fmt"
	"io"
	"math"
	"time"

	"offbeat/capture"
)

// pcm is the Source of everything whose samples stand in the input as they
// are: WAV behind its header, and raw PCM.
type pcm struct {
	fd     *feed
	format capture.Format
	enc    encoding
	align  int   // bytes of one sample of all channels
	offset []int // where in these a delivered channel begins, bytes
	left   int64 // bytes of sound to come; -1: to the end of the input
	next   int64 // number of the next sample
	err    error // what every later Read returns

	reopen bool
	away   bool      // the writer of the FIFO has gone
	last   time.Time // when its last bytes came; zero: none ever did
}

// newRaw returns the Source of samples without a header.
func newRaw(fd *feed, opt Options) (capture.Source, error) {
	raw, enc := opt.Raw, rawEncodings[opt.Raw.Encoding]
	p := &pcm{fd: fd, enc: enc, align: enc.width * raw.Channels, left: -1, reopen: opt.Reopen}
	p.format = capture.Format{Rate: raw.Rate, Live: fd.live, Encoding: "raw " + enc.name}
	p.format.Frames = max(fd.left(), 0) / int64(p.align)
	return p, p.choose(opt.Channels, raw.Channels)
}

// choose sets the channels to deliver, of those there are.
func (p *pcm) choose(asked []int, have int) error {
	idx, err := pick(p.fd.name, asked, have)
	if err != nil {
		return err
	}
	for _, i := range idx {
		p.offset = append(p.offset, i*p.enc.width)
	}
	p.format.Channels = len(idx)
	return nil
}

// Format implements capture.Source.
func (p *pcm) Format() capture.Format { return p.format }

// Note implements Noter.
func (p *pcm) Note() string { return p.fd.note() }

// Close implements capture.Source. Standard input stays open.
func (p *pcm) Close() error {
	p.err = fmt.Errorf("%s: read after it was closed", p.fd.name)
	return p.fd.close()
}

// Read implements capture.Source. It delivers what one read of the input gave,
// however little, so that a slow converter is not late.
func (p *pcm) Read(b *capture.Block) error {
	b.Reset(len(p.offset))
	if p.err != nil {
		return p.err
	}
	for p.buffered() < p.align {
		if p.left >= 0 && p.left < int64(p.align) {
			return p.end(io.EOF)
		}
		switch err := p.fd.fill(); {
		case err == errQuiet:
			return nil
		case err == io.EOF && p.reopen:
			p.leave()
			return nil
		case err != nil:
			return p.end(err)
		}
	}
	n := min(p.buffered()/p.align, capture.MaxBlock)
	p.mark(b)
	p.decode(b, n)
	return nil
}

// buffered returns how many bytes of sound are in the buffer.
func (p *pcm) buffered() int {
	n := p.fd.hi - p.fd.lo
	if p.left >= 0 {
		n = int(min(int64(n), p.left))
	}
	return n
}

// mark puts the next samples on the time line, and a gap before them if they
// are the first of a new writer.
func (p *pcm) mark(b *capture.Block) {
	if p.fd.live {
		waiting := time.Duration(float64(p.buffered()/p.align) / p.format.Rate * 1e9)
		b.Wall = p.fd.at.Add(-waiting)
		if p.away && !p.last.IsZero() {
			// At least one, for the new writer does not go on where the old
			// one ended.
			lost := math.Round(b.Wall.Sub(p.last).Seconds() * p.format.Rate)
			b.Lost, b.Guessed, b.Cause = max(1, int64(lost)), true, capture.Stalled
		}
		p.away, p.last = false, p.fd.at
	}
	p.next += b.Lost
	b.First = p.next
}

// decode takes n samples of each channel from the buffer.
func (p *pcm) decode(b *capture.Block, n int) {
	size := n * p.align
	src := p.fd.buf[p.fd.lo : p.fd.lo+size]
	for i, off := range p.offset {
		if cap(b.Ch[i]) < n {
			b.Ch[i] = make([]float32, capture.MaxBlock)
		}
		b.Ch[i] = b.Ch[i][:n]
		b.NonFinite += p.enc.decode(b.Ch[i], src[off:], p.align)
	}
	p.fd.take(size)
	p.next += int64(n)
	if p.left >= 0 {
		p.left -= int64(size)
	}
}

// leave begins the wait for the next writer of a FIFO. While there is none,
// polling says at once that the input has ended, hence the sleep.
func (p *pcm) leave() {
	p.away = true
	p.fd.forget()
	time.Sleep(patience / 5)
}

// end makes err, which ended the input, what Read returns from now on.
func (p *pcm) end(err error) error {
	if err != io.EOF {
		p.err = fmt.Errorf("%w (after %.1f s of sound)", plain(p.fd.name, err), float64(p.next)/p.format.Rate)
		return p.err
	}
	p.err = io.EOF
	rest := int64(p.buffered())
	if p.left >= 0 && p.left < int64(p.align) {
		rest = p.left
	}
	if rest > 0 {
		p.fd.noteThat("ends within a sample; its last %d bytes are dropped", rest)
	}
	if p.left >= int64(p.align) {
		missing := float64(p.left/int64(p.align)) / p.format.Rate
		p.fd.noteThat("cut short: %.1f s of sound, %.1f s less than its header states", float64(p.next)/p.format.Rate, missing)
	}
	return p.err
}
