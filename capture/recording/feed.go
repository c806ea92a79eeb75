package recording

import (
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"strings"
	"syscall"
	"time"
)

const (
	fileBuffer = 256 << 10
	pipeBuffer = 64 << 10 // what a Linux pipe holds
	patience   = 250 * time.Millisecond
)

// errQuiet says that nothing arrived within patience.
var errQuiet = errors.New("nothing arrived")

// feed is a stream of bytes with a buffer. It is read from one goroutine.
type feed struct {
	name  string // for error messages
	r     io.Reader
	file  *os.File // nil when a test gives a reader
	owned bool     // close it: standard input is not ours
	wait  *waiter  // nil: reads do not wait for long

	quiet bool  // nothing may arrive for a while: a pipe, FIFO or device
	live  bool  // arrives at the pace of a clock
	fifo  bool  // opened by path, so that a next writer may come
	size  int64 // bytes in the whole input from where it was opened; -1: unknown

	buf    []byte
	lo, hi int
	pos    int64     // bytes taken out so far
	err    error     // what ended the input
	at     time.Time // when the latest bytes arrived, if live

	deadline time.Time // until when peek, skip and Read wait; zero: for ever
	stop     <-chan struct{}
	notes    []string
}

// newFeed returns a feed of r, which is not a file.
func newFeed(r io.Reader, name string) *feed {
	return &feed{name: name, r: r, size: -1, buf: make([]byte, fileBuffer)}
}

// openFeed opens path, or standard input for "-", and finds out what it is.
func openFeed(path string) (*feed, error) {
	fd := &feed{name: path, file: os.Stdin, size: -1}
	if path == "-" {
		fd.name = "standard input"
	} else {
		st, err := os.Stat(path)
		if err != nil {
			return nil, plain(path, err)
		}
		if st.IsDir() {
			return nil, fmt.Errorf("%s: a directory, not a recording", path)
		}
		flag := os.O_RDONLY
		if fd.fifo = st.Mode()&os.ModeNamedPipe != 0; fd.fifo {
			flag |= syscall.O_NONBLOCK // do not wait for a writer here
		}
		if fd.file, err = os.OpenFile(path, flag, 0); err != nil {
			return nil, plain(path, err)
		}
		fd.owned = true
	}
	st, err := fd.file.Stat()
	if err != nil {
		fd.close()
		return nil, plain(fd.name, err)
	}
	fd.r = fd.file
	if st.Mode().IsRegular() {
		// Standard input may be a file of which some has been read already.
		if at, err := fd.file.Seek(0, io.SeekCurrent); err == nil {
			fd.size = max(st.Size()-at, 0)
		}
		fd.buf = make([]byte, fileBuffer)
		return fd, nil
	}
	fd.quiet = true
	fd.live = fd.fifo || st.Mode()&os.ModeCharDevice != 0
	fd.buf = make([]byte, pipeBuffer)
	fd.wait = newWaiter(fd.file)
	return fd, nil
}

// fill reads once into the buffer behind what is in it. It returns nil if the
// buffer grew, errQuiet if nothing arrived for now, and otherwise what ended
// the input, every time from then on.
func (fd *feed) fill() error {
	if fd.err != nil {
		return fd.err
	}
	if fd.lo > 0 {
		fd.hi = copy(fd.buf, fd.buf[fd.lo:fd.hi])
		fd.lo = 0
	}
	for range 100 {
		if fd.wait != nil && !fd.wait.readable(patience) {
			return errQuiet
		}
		n, err := fd.r.Read(fd.buf[fd.hi:])
		fd.hi += n
		fd.err = err
		if n > 0 {
			if fd.live {
				fd.at = time.Now()
			}
			return nil
		}
		if err != nil {
			return err
		}
	}
	fd.err = io.ErrNoProgress
	return fd.err
}

// forget drops what is buffered and the end of the input, because a FIFO may
// go on with its next writer.
func (fd *feed) forget() { fd.lo, fd.hi, fd.err = 0, 0, nil }

// await fills, and goes on waiting as long as it is allowed to.
func (fd *feed) await() error {
	for {
		err := fd.fill()
		if err != errQuiet {
			return err
		}
		select {
		case <-fd.stop:
			return os.ErrClosed
		default:
		}
		if !fd.deadline.IsZero() && time.Now().After(fd.deadline) {
			return errors.New("nothing arrived: is anything writing to it?")
		}
	}
}

// peek returns the next n bytes without taking them, waiting for them. At the
// end of the input it returns fewer, with io.EOF. n must be small.
func (fd *feed) peek(n int) ([]byte, error) {
	for fd.hi-fd.lo < n {
		if err := fd.await(); err != nil {
			return fd.buf[fd.lo:fd.hi], err
		}
	}
	return fd.buf[fd.lo : fd.lo+n], nil
}

// take moves past n bytes that are in the buffer.
func (fd *feed) take(n int) {
	fd.lo += n
	fd.pos += int64(n)
}

// skip moves past n bytes, waiting for them.
func (fd *feed) skip(n int64) error {
	for {
		k := min(n, int64(fd.hi-fd.lo))
		fd.take(int(k))
		if n -= k; n == 0 {
			return nil
		}
		if err := fd.await(); err != nil {
			return err
		}
	}
}

// Read implements io.Reader, waiting for at least one byte.
func (fd *feed) Read(p []byte) (int, error) {
	if fd.lo == fd.hi {
		if err := fd.await(); err != nil {
			return 0, err
		}
	}
	n := copy(p, fd.buf[fd.lo:fd.hi])
	fd.take(n)
	return n, nil
}

// left returns how many bytes are still to come, or -1.
func (fd *feed) left() int64 {
	if fd.size < 0 {
		return -1
	}
	return max(fd.size-fd.pos, 0)
}

func (fd *feed) close() error {
	if fd.owned && fd.file != nil {
		return fd.file.Close()
	}
	return nil
}

// noteThat adds to what Note says.
func (fd *feed) noteThat(format string, args ...any) {
	fd.notes = append(fd.notes, fmt.Sprintf(format, args...))
}

func (fd *feed) note() string {
	if len(fd.notes) == 0 {
		return ""
	}
	return fd.name + ": " + strings.Join(fd.notes, "; ")
}

// failure makes one line of an error that ended the input within its header.
func (fd *feed) failure(err error) error {
	if errors.Is(err, io.EOF) || errors.Is(err, io.ErrUnexpectedEOF) {
		return fmt.Errorf("%s: ends within its header, after %d bytes: the recording holds no samples", fd.name, fd.pos+int64(fd.hi-fd.lo))
	}
	return plain(fd.name, err)
}

// plain prefixes err with name, once: the path inside an os error is dropped.
func plain(name string, err error) error {
	var pe *fs.PathError
	if errors.As(err, &pe) {
		if pe.Op == "open" || pe.Op == "stat" {
			return fmt.Errorf("%s: cannot be opened: %w", name, pe.Err)
		}
		return fmt.Errorf("%s: reading failed: %w", name, pe.Err)
	}
	return fmt.Errorf("%s: %w", name, err)
}
