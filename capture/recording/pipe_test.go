//go:build unix

package recording

import (
	"bytes"
	"errors"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"strings"
	"syscall"
	"testing"
	"time"

	"offbeat/capture"
)

func fifo(t *testing.T) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "fifo")
	if err := syscall.Mkfifo(path, 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// slowADC is a raw format of ten samples a second.
var slowADC = Options{Raw: &RawFormat{"s16le", 10, 1}}

// open opens path and closes it at the end of the test.
func open(t *testing.T, path string, opt Options) capture.Source {
	t.Helper()
	src, err := Open(path, opt)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { src.Close() })
	return src
}

// writer opens a FIFO for writing.
func writer(t *testing.T, path string) *os.File {
	t.Helper()
	w, err := os.OpenFile(path, os.O_WRONLY, 0)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { w.Close() })
	return w
}

// step reads once and says what came: "" for a quiet read.
func step(t *testing.T, src capture.Source, b *capture.Block) string {
	t.Helper()
	before := time.Now()
	err := src.Read(b)
	if d := time.Since(before); d > 5*time.Second { // the contract says half a second; machines may be busy
		t.Errorf("Read took %v", d)
	}
	switch {
	case err != nil:
		return err.Error()
	case b.Len() == 0:
		return ""
	}
	return "samples"
}

// settle reads until something other than quiet comes.
func settle(t *testing.T, src capture.Source, b *capture.Block) string {
	t.Helper()
	for range 100 {
		if s := step(t, src, b); s != "" {
			return s
		}
	}
	return ""
}

// TestFIFO: no writer yet, samples one by one, half a sample, a writer that
// dies within a sample.
func TestFIFO(t *testing.T) {
	path := fifo(t)
	src := open(t, path, slowADC) // returns although nobody writes
	if f := src.Format(); !f.Live || f.Frames != 0 || f.Rate != 10 {
		t.Errorf("%+v", f)
	}
	var b capture.Block
	if got := step(t, src, &b); got != "" {
		t.Fatalf("without a writer: %s", got)
	}
	w := writer(t, path)
	if got := step(t, src, &b); got != "" {
		t.Fatalf("a silent writer: %s", got)
	}
	for i, c := range []struct {
		write []byte
		want  string
		n     int
	}{{le(0, 0x40), "samples", 1}, {le(0), "", 0}, {le(0xC0, 0x00), "samples", 1}, {le(0x20, 0, 0x20, 9), "samples", 2}} {
		before := time.Now()
		w.Write(c.write)
		got := step(t, src, &b)
		if got != c.want || b.Len() != c.n || b.Lost != 0 {
			t.Fatalf("step %d: %q, %d samples, lost %d", i, got, b.Len(), b.Lost)
		}
		length := time.Duration(c.n) * 100 * time.Millisecond
		if c.n > 0 && (b.Wall.Before(before.Add(-length)) || b.Wall.After(time.Now().Add(-length))) {
			t.Errorf("step %d: wall %v", i, b.Wall)
		}
	}
	if b.First != 2 || b.Ch[0][0] != 0.25 {
		t.Errorf("first %d, %v", b.First, b.Ch)
	}
	w.Close()
	if got := step(t, src, &b); got != "EOF" {
		t.Fatalf("after the writer died: %q", got)
	}
	if got := step(t, src, &b); got != "EOF" {
		t.Fatalf("later: %q", got)
	}
	if want := path + ": ends within a sample; its last 1 bytes are dropped"; src.(Noter).Note() != want {
		t.Errorf("note %q", src.(Noter).Note())
	}
}

// TestFIFOWriterSaysNothing: one that opens and goes ends the input, one that
// never comes does not.
func TestFIFOWriterSaysNothing(t *testing.T) {
	path := fifo(t)
	src := open(t, path, slowADC)
	writer(t, path).Close()
	var b capture.Block
	if got := step(t, src, &b); got != "EOF" {
		t.Errorf("got %q", got)
	}
}

// TestFIFOReopen: writers come and go, the time between is a gap.
func TestFIFOReopen(t *testing.T) {
	path := fifo(t)
	opt := Options{Reopen: true, Raw: &RawFormat{"s16le", 1000, 1}}
	src := open(t, path, opt)
	var b capture.Block
	next, heardAt, wroteAt := int64(0), time.Time{}, time.Time{}
	for round := range 3 {
		w := writer(t, path)
		before := time.Now()
		w.Write(append(make([]byte, 2*20), 1)) // the odd byte goes with its writer
		if got := settle(t, src, &b); got != "samples" || b.Len() != 20 {
			t.Fatalf("round %d: %q, %d samples", round, got, b.Len())
		}
		after := time.Now()
		if round == 0 {
			if b.Lost != 0 || b.First != 0 {
				t.Errorf("first writer: lost %d, first %d", b.Lost, b.First)
			}
		} else {
			// By the clock of this test the old writer's last sample came
			// between wroteAt and heardAt, the new ones between before and after.
			least := before.Sub(heardAt).Milliseconds() - 20 - 1
			most := after.Sub(wroteAt).Milliseconds() - 20 + 1
			if b.Cause != capture.Stalled || !b.Guessed || b.Lost < max(1, least) || b.Lost > max(1, most) || b.First != next+b.Lost {
				t.Errorf("round %d: %+v, want lost from %d to %d", round, b, least, most)
			}
		}
		next, wroteAt, heardAt = b.First+20, before, after
		w.Close()
		for range 2 + 3*round {
			if got := step(t, src, &b); got != "" {
				t.Fatalf("round %d, between writers: %q", round, got)
			}
		}
	}
}

// TestFIFOKilledWriter: the process that writes a WAV is killed.
func TestFIFOKilledWriter(t *testing.T) {
	path := fifo(t)
	wav := file(t, le("RIFF", uint32(0xFFFFFFFF), "WAVE", fmtChunk(1, 2, 8000, 16), "data", uint32(0xFFFFFFFF), make([]byte, 4*1000+2)))
	cmd := exec.Command("sh", "-c", `exec 3>"$1"; cat "$2" >&3; exec sleep 60 >&3`, "sh", path, wav)
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	src := open(t, path, Options{Channels: []int{2, 1}}) // waits for the header
	var b capture.Block
	n := 0
	for n < 1000 {
		switch got := step(t, src, &b); got {
		case "samples":
			n += b.Len()
		case "":
		default:
			t.Fatalf("after %d: %s", n, got)
		}
	}
	if got := step(t, src, &b); got != "" {
		t.Fatalf("the writer sleeps: %q", got)
	}
	cmd.Process.Kill()
	cmd.Wait()
	if got := settle(t, src, &b); got != "EOF" || n != 1000 {
		t.Errorf("%q after %d samples", got, n)
	}
	if note := src.(Noter).Note(); !strings.Contains(note, "its last 2 bytes are dropped") {
		t.Errorf("note %q", note)
	}
}

// TestPatience: Open of a FIFO that must tell its own format gives up.
func TestPatience(t *testing.T) {
	path := fifo(t)
	_, err := Open(path, Options{Patience: time.Millisecond})
	if err == nil || err.Error() != path+": nothing arrived: is anything writing to it?" {
		t.Errorf("err %v", err)
	}
}

// asStdin makes f standard input for the test.
func asStdin(t *testing.T, f *os.File) {
	old := os.Stdin
	os.Stdin = f
	t.Cleanup(func() { os.Stdin = old })
}

// TestStdin: a pipe and a redirected file.
func TestStdin(t *testing.T) {
	wav := riff(fmtChunk(1, 1, 8000, 16), chunk("data", make([]byte, 2000)))
	r, w, err := os.Pipe()
	if err != nil {
		t.Fatal(err)
	}
	asStdin(t, r)
	w.Write(wav[:1044])
	src := open(t, "-", Options{})
	var b capture.Block
	if got := step(t, src, &b); got != "samples" || b.Len() != 500 || !b.Wall.IsZero() || src.Format().Live || src.Format().Frames != 0 {
		t.Errorf("%q, %+v, %+v", got, b, src.Format())
	}
	if got := step(t, src, &b); got != "" {
		t.Errorf("a pause: %q", got)
	}
	w.Close()
	if got := step(t, src, &b); got != "EOF" || !strings.HasPrefix(src.(Noter).Note(), "standard input: cut short") {
		t.Errorf("%q, %q", got, src.(Noter).Note())
	}
	src.Close()
	if _, err := r.Stat(); err != nil {
		t.Errorf("standard input was closed: %v", err)
	}

	f, err := os.Open(file(t, append([]byte("read before"), wav...)))
	if err != nil {
		t.Fatal(err)
	}
	io.CopyN(io.Discard, f, 11)
	asStdin(t, f)
	h := hear(t, "-", Options{})
	if h.format.Frames != 1000 || len(h.ch[0]) != 1000 || h.format.Live || h.quiet != 0 {
		t.Errorf("%+v", h.format)
	}

	r, w, _ = os.Pipe()
	w.Close()
	asStdin(t, r)
	if _, err := Open("-", Options{}); err == nil || err.Error() != "standard input: empty, there is nothing to read" {
		t.Errorf("err %v", err)
	}
	r.Close()
	if _, err := Open("-", Options{}); err == nil {
		t.Error("a closed standard input was opened")
	}
}

// TestDevices: character devices are live.
func TestDevices(t *testing.T) {
	src := open(t, "/dev/zero", slowADC)
	var b capture.Block
	if got := step(t, src, &b); got != "samples" || !src.Format().Live || b.Wall.IsZero() {
		t.Errorf("%q, %+v", got, src.Format())
	}
	if _, err := Open("/dev/null", Options{}); err == nil || err.Error() != "/dev/null: empty, there is nothing to read" {
		t.Errorf("err %v", err)
	}
}

// TestFLACPipe: a live FLAC stream pauses, and closing it while it does ends
// its goroutine.
func TestFLACPipe(t *testing.T) {
	wav, raw := tune(t, 8000, 1, 16, 16, 8000)
	want, _ := slow(raw, "s16", 1, 0)
	data := flacOf(t, wav, "-b", "1000")
	marks := frames(t, data)
	path := fifo(t)
	goroutines := runtime.NumGoroutine()
	done := make(chan *os.File)
	go func() {
		w, _ := os.OpenFile(path, os.O_WRONLY, 0)
		w.Write(data[:marks[3]+50])
		done <- w
	}()
	src, err := Open(path, Options{})
	if err != nil {
		t.Fatal(err)
	}
	w := <-done
	defer w.Close()
	var b capture.Block
	for i := range 3 {
		if got := settle(t, src, &b); got != "samples" || !bytes.Equal(bits(b.Ch[0]), bits(want[1000*i:1000*i+1000])) || b.Wall.IsZero() {
			t.Fatalf("frame %d: %q, %d samples", i, got, b.Len())
		}
	}
	if got := step(t, src, &b); got != "" {
		t.Errorf("a pause: %q", got)
	}
	w.Write(data[marks[3]+50 : marks[4]])
	if got := settle(t, src, &b); got != "samples" || b.First != 3000 {
		t.Errorf("after the pause: %q at %d", got, b.First)
	}
	if err := src.Close(); err != nil {
		t.Error(err)
	}
	for i := 0; runtime.NumGoroutine() > goroutines; i++ {
		if i == 1000 {
			t.Fatalf("%d goroutines more than before", runtime.NumGoroutine()-goroutines)
		}
		time.Sleep(time.Millisecond) // they are on their way out
	}
}

func bits(x []float32) []byte {
	var b []byte
	for _, v := range x {
		b = le(b, uint32(int32(v*32768)))
	}
	return b
}

// TestClosed: a Source that was closed says so.
func TestClosed(t *testing.T) {
	src := open(t, file(t, make([]byte, 100)), slowADC)
	src.Close()
	var b capture.Block
	if err := src.Read(&b); err == nil || errors.Is(err, io.EOF) {
		t.Errorf("err %v", err)
	}
}
