package recording

import (
	"errors"
	"fmt"
	"io"
	"log"
	"math"
	"strings"
	"sync"
	"time"

	"github.com/mewkiz/flac"
	"github.com/mewkiz/flac/frame"
	"github.com/mewkiz/flac/meta"

	"offbeat/capture"
)

// flacSource is the Source of FLAC recordings. A goroutine decodes ahead by a
// few frames, so that a pipe that says nothing does not hold Read up; the
// decoder allocates every frame anew (a few times its samples), which is the
// one exception to reading without allocation.
//
// A recording that was cut is delivered to its last whole frame and ends in
// io.EOF, with a Note. A damaged frame ends it with an error after all that
// came before it; nothing behind the damage is trusted.
type flacSource struct {
	fd     *feed
	format capture.Format
	index  []int // of the channels to deliver, from 0
	frames chan decoded
	stop   chan struct{} // closed by Close
	done   chan struct{} // closed by the goroutine when it ends

	cur  decoded
	used int   // samples of cur that were delivered
	next int64 // number of the next sample
	err  error
	rest *time.Timer
}

// decoded is a frame, or what came instead of one.
type decoded struct {
	f    *frame.Frame
	lost int64 // samples missing before it
	at   time.Time
	err  error
}

func (d *decoded) len() int {
	if d.f == nil || len(d.f.Subframes) == 0 {
		return 0
	}
	return len(d.f.Subframes[0].Samples)
}

// newFLAC reads the metadata at the front of fd and begins to decode.
func newFLAC(fd *feed, opt Options) (capture.Source, error) {
	stream, err := openStream(fd)
	if err != nil {
		return nil, err
	}
	info := stream.Info
	bits := int(info.BitsPerSample)
	switch {
	case info.SampleRate < minRate || info.SampleRate > maxRate:
		return nil, fmt.Errorf("%s: FLAC of %d samples a second: must be 10 Hz to 1 MHz", fd.name, info.SampleRate)
	case bits < 4 || bits > 31:
		return nil, fmt.Errorf("%s: FLAC of %d bits is not read: convert it to 24 bits or to WAV", fd.name, bits)
	}
	idx, err := pick(fd.name, opt.Channels, int(info.NChannels))
	if err != nil {
		return nil, err
	}
	s := &flacSource{fd: fd, index: idx, frames: make(chan decoded, 2), stop: make(chan struct{}), done: make(chan struct{})}
	s.format = capture.Format{Rate: float64(info.SampleRate), Channels: len(idx), Live: fd.live,
		Encoding: fmt.Sprintf("FLAC %d-bit", bits)}
	if !fd.quiet {
		s.format.Frames = int64(info.NSamples)
	}
	fd.stop, fd.deadline = s.stop, time.Time{}
	go s.decodeAll(stream)
	return s, nil
}

// openStream parses the metadata. The library is not trusted to survive every
// hostile file.
func openStream(fd *feed) (stream *flac.Stream, err error) {
	defer func() {
		if r := recover(); r != nil {
			err = fmt.Errorf("%s: the FLAC header is damaged", fd.name)
		}
	}()
	// The library parses whatever block comes first, and believes the size
	// that a picture states for itself (80 MB in a file of 40 bytes).
	b, err := fd.peek(8)
	if err == nil && (b[4]&0x7F != 0 || b[5] != 0 || b[6] != 0 || b[7] != 34) {
		return nil, fmt.Errorf("%s: the FLAC header is damaged: its first block is not the stream information", fd.name)
	}
	if err == nil {
		stream, err = flac.New(fd)
	}
	switch {
	case errors.Is(err, io.EOF), errors.Is(err, io.ErrUnexpectedEOF):
		return nil, fmt.Errorf("%s: ends within the FLAC header: the recording holds no samples", fd.name)
	case err != nil:
		return nil, fmt.Errorf("%s: the FLAC header is damaged: %w", fd.name, err)
	}
	hush(stream.Info.SampleRate)
	return stream, nil
}

// Format implements capture.Source.
func (s *flacSource) Format() capture.Format { return s.format }

// Note implements Noter.
func (s *flacSource) Note() string {
	if s.err == nil {
		return "" // the goroutine may still be writing it
	}
	return s.fd.note()
}

// Close implements capture.Source. It waits for the decoder to end, which
// takes a quarter of a second at most where the input can be polled, and
// abandons it where it cannot.
func (s *flacSource) Close() error {
	if s.stop == nil {
		return nil
	}
	close(s.stop)
	s.stop = nil
	if !s.fd.quiet || s.fd.wait != nil {
		<-s.done
	}
	s.err = fmt.Errorf("%s: read after it was closed", s.fd.name)
	return s.fd.close()
}

// Read implements capture.Source.
func (s *flacSource) Read(b *capture.Block) error {
	b.Reset(len(s.index))
	if s.err != nil {
		return s.err
	}
	for s.used == s.cur.len() {
		if !s.receive() {
			return nil
		}
		if s.cur.err != nil {
			s.err = s.cur.err
			return s.err
		}
		if s.cur.lost > 0 && s.cur.len() > 0 {
			b.Lost, b.Cause = s.cur.lost, capture.Overflow
			s.next += b.Lost
		}
	}
	n := min(s.cur.len()-s.used, capture.MaxBlock)
	scale := float32(math.Ldexp(1, 1-int(s.cur.f.BitsPerSample)))
	for i, c := range s.index {
		if cap(b.Ch[i]) < n {
			b.Ch[i] = make([]float32, capture.MaxBlock)
		}
		b.Ch[i] = b.Ch[i][:n]
		for j, v := range s.cur.f.Subframes[c].Samples[s.used : s.used+n] {
			b.Ch[i][j] = float32(v) * scale
		}
	}
	if s.fd.live {
		waiting := float64(s.cur.len()-s.used) / s.format.Rate
		b.Wall = s.cur.at.Add(-time.Duration(waiting * 1e9))
	}
	b.First = s.next
	s.next += int64(n)
	s.used += n
	return nil
}

// receive takes the next frame, and reports false if none came in time.
func (s *flacSource) receive() bool {
	s.used, s.cur = 0, decoded{}
	if !s.fd.quiet {
		s.cur = <-s.frames
		return true
	}
	if s.rest == nil {
		s.rest = time.NewTimer(patience)
	} else {
		s.rest.Reset(patience)
	}
	select {
	case s.cur = <-s.frames:
		s.rest.Stop()
		return true
	case <-s.rest.C:
		return false
	}
}

// decodeAll decodes frame after frame into s.frames, and last of all what
// ended the recording.
func (s *flacSource) decodeAll(stream *flac.Stream) {
	defer close(s.done)
	stop := s.fd.stop
	seq := sequence{fd: s.fd, info: stream.Info}
	for {
		d := seq.next(stream)
		select {
		case s.frames <- d:
		case <-stop:
			return
		}
		if d.err != nil {
			return
		}
	}
}

// maxFLAC is the greatest number of samples a FLAC header can state.
const maxFLAC = 1<<36 - 1

// sequence checks that frames follow each other. Whole frames that are missing
// are a gap: whoever wrote the recording was too slow.
type sequence struct {
	fd    *feed
	info  *meta.StreamInfo
	begun bool
	base  uint64 // sample number of the first frame: a stream may be joined late
	fixed uint64 // samples a frame, if all have as many
	done  uint64 // samples on the time line
}

// next decodes one frame and compares it with the header of the stream.
func (q *sequence) next(stream *flac.Stream) (d decoded) {
	defer func() {
		if r := recover(); r != nil {
			d = decoded{err: q.damaged(fmt.Errorf("the decoder gave up: %v", r))}
		}
	}()
	f, err := stream.Next()
	if err == nil {
		if f.BitsPerSample == 0 { // as in the header of the stream
			f.BitsPerSample = q.info.BitsPerSample
		}
		if err = q.agrees(f); err == nil {
			err = f.Parse()
		}
	}
	if err != nil {
		return decoded{err: q.ended(err)}
	}
	d = decoded{f: f, at: q.fd.at}
	n := uint64(d.len())
	if !q.begun {
		q.begun, q.fixed = true, n
		q.base = q.number(f)
	}
	at := q.number(f) - q.base
	switch {
	case at < q.done, at-q.done > maxFLAC:
		return decoded{err: q.damaged(errors.New("its frames are out of order"))}
	case at > q.done:
		d.lost = int64(at - q.done)
	}
	q.done = at + n
	return d
}

// number returns the sample number of a frame (RFC 9639, section 9.1.5). In a
// stream of fixed block size the last frame may be shorter than the others.
func (q *sequence) number(f *frame.Frame) uint64 {
	if f.HasFixedBlockSize {
		return f.Num * q.fixed
	}
	return f.Num
}

// agrees refuses a frame that is not of the kind the stream says.
func (q *sequence) agrees(f *frame.Frame) error {
	switch {
	case f.SampleRate != 0 && f.SampleRate != q.info.SampleRate:
		return fmt.Errorf("the sample rate changes from %d to %d Hz", q.info.SampleRate, f.SampleRate)
	case f.Channels.Count() != int(q.info.NChannels):
		return fmt.Errorf("the number of channels changes from %d to %d", q.info.NChannels, f.Channels.Count())
	case f.BitsPerSample != q.info.BitsPerSample:
		return fmt.Errorf("the sample size changes from %d to %d bits", q.info.BitsPerSample, f.BitsPerSample)
	}
	return nil
}

// ended says what an error of the decoder means: the end, a cut, or damage.
func (q *sequence) ended(err error) error {
	short := q.info.NSamples > q.done
	switch {
	case err == io.EOF && !short:
		return io.EOF
	case q.info.NSamples > 0 && !short:
		q.fd.noteThat("what stands behind the end that its header states (a tag, perhaps) is not read")
		return io.EOF
	case errors.Is(err, io.EOF), errors.Is(err, io.ErrUnexpectedEOF):
		missing := ""
		if short {
			missing = fmt.Sprintf(", %.1f s less than its header states", float64(q.info.NSamples-q.done)/float64(q.info.SampleRate))
		}
		q.fd.noteThat("cut short: %.1f s of sound%s", q.seconds(), missing)
		return io.EOF
	}
	if q.fd.err != nil && q.fd.err != io.EOF {
		return fmt.Errorf("%w (after %.1f s of sound)", plain(q.fd.name, q.fd.err), q.seconds())
	}
	return q.damaged(err)
}

func (q *sequence) seconds() float64 { return float64(q.done) / float64(q.info.SampleRate) }

// damaged makes one line of what stops the decoding.
func (q *sequence) damaged(err error) error {
	// The library puts the name of its function in front.
	why := err.Error()
	if strings.HasPrefix(why, "frame.") {
		if _, after, ok := strings.Cut(why, ": "); ok {
			why = after
		}
	}
	return fmt.Errorf("%s: the FLAC recording is damaged after %.1f s of sound: %s", q.fd.name, q.seconds(), why)
}

// hush keeps the library from writing a line to the standard logger for every
// frame of the two sample rates its authors still wanted examples of.
func hush(rate uint32) {
	if rate == 24000 || rate == 176400 {
		hushOnce.Do(func() { log.SetOutput(hushed{log.Writer()}) })
	}
}

var hushOnce sync.Once

type hushed struct{ w io.Writer }

func (h hushed) Write(p []byte) (int, error) {
	if strings.Contains(string(p), "The flac library test cases do not yet include") {
		return len(p), nil
	}
	return h.w.Write(p)
}
