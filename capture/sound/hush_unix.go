//go:build portaudio && unix

package sound

import (
	"bytes"
	"io"
	"os"

	"golang.org/x/sys/unix"
)

// hush runs f, which asks every sound system there is for its devices, and
// keeps their complaints about those that are not there off the standard error:
// it goes to a file meanwhile, from which all that is not such chatter is
// passed on. The lock is held, so no two run at once.
func hush(f func() error) error {
	tmp, err := os.CreateTemp("", "offbeat")
	if err != nil {
		return f()
	}
	defer tmp.Close()
	os.Remove(tmp.Name())
	was, err := unix.Dup(2)
	if err != nil {
		return f()
	}
	defer unix.Close(was)
	if unix.Dup3(int(tmp.Fd()), 2, 0) != nil {
		return f()
	}
	err = f()
	unix.Dup3(was, 2, 0)
	if _, e := tmp.Seek(0, io.SeekStart); e != nil {
		return err
	}
	said, _ := io.ReadAll(tmp)
	for _, line := range bytes.SplitAfter(said, []byte("\n")) {
		if !chatter(line) {
			os.Stderr.Write(line)
		}
	}
	return err
}

// chatter reports whether a line is one of the sound libraries' own.
func chatter(line []byte) bool {
	for _, p := range []string{"ALSA lib", "jack server", "JackShm", "Cannot connect to server", "attempt to connect to server", "connect(2) call to", "Expression '", "\n"} {
		if bytes.HasPrefix(line, []byte(p)) {
			return true
		}
	}
	return len(line) == 0
}
