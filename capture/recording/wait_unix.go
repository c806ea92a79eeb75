//go:build unix

package recording

import (
	"os"
	"syscall"
	"time"

	"golang.org/x/sys/unix"
)

// waiter waits for a file to have something to read. Waiting with poll(2)
// before each read keeps the reading in one goroutine, leaves the blocking mode
// of standard input alone, which other processes share, and never has to
// interrupt a read to close.
type waiter struct {
	conn syscall.RawConn
	poll func(fd uintptr) // made once: no allocation per call
	ms   int
	fds  [1]unix.PollFd
	n    int
	err  error
}

func newWaiter(f *os.File) *waiter {
	conn, err := f.SyscallConn()
	if err != nil {
		return nil
	}
	w := &waiter{conn: conn}
	w.poll = func(fd uintptr) {
		w.fds[0] = unix.PollFd{Fd: int32(fd), Events: unix.POLLIN}
		w.n, w.err = unix.Poll(w.fds[:], w.ms)
	}
	return w
}

// readable reports whether a read would return at once, with bytes, the end
// (the writer has gone) or an error. It waits for d at most. A FIFO that no
// writer has opened yet is not readable (Linux reports POLLHUP only after a
// writer was there).
func (w *waiter) readable(d time.Duration) bool {
	until := time.Now().Add(d)
	for {
		w.ms = int(max(time.Until(until), 0) / time.Millisecond)
		if err := w.conn.Control(w.poll); err != nil {
			return true // closed: let the read say so
		}
		if w.err != unix.EINTR {
			return w.n != 0
		}
		if w.ms == 0 {
			return false
		}
	}
}
