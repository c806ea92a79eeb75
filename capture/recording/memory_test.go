package recording

import (
	"bytes"
	"io"
	"os"
	"runtime"
	"testing"

	"offbeat/capture"
)

// endless gives n zero bytes.
type endless struct{ n int64 }

func (e *endless) Read(p []byte) (int, error) {
	if e.n == 0 {
		return 0, io.EOF
	}
	k := min(e.n, int64(len(p)))
	clear(p[:k])
	e.n -= k
	return int(k), nil
}

// TestNoAllocation: reading allocates nothing once a block has its planes.
func TestNoAllocation(t *testing.T) {
	for _, k := range kinds {
		wav := le("RIFF", uint32(0), "WAVE", fmtChunk(k.tag, 2, 48000, k.bits), "data", uint32(0xFFFFFFFF))
		src, err := fromBytes(io.MultiReader(bytes.NewReader(wav), &endless{1 << 40}), Options{Channels: all(2)})
		if err != nil {
			t.Fatal(err)
		}
		checkNoAllocation(t, k.kind, src)
	}
	// From a file, with its system calls, and from a device, with its waiting.
	path := file(t, nil)
	if err := os.Truncate(path, 1<<30); err != nil {
		t.Fatal(err)
	}
	for _, p := range []string{path, "/dev/zero"} {
		src, err := Open(p, Options{Raw: &RawFormat{"f32le", 48000, 1}})
		if err != nil {
			t.Skipf("SKIPPED, NOT CHECKED: %v", err)
		}
		checkNoAllocation(t, p, src)
		src.Close()
	}
}

func checkNoAllocation(t *testing.T, what string, src capture.Source) {
	t.Helper()
	var b capture.Block
	read := func() {
		if err := src.Read(&b); err != nil || b.Len() == 0 {
			t.Fatalf("%s: %v", what, err)
		}
	}
	read()
	if n := testing.AllocsPerRun(200, read); n != 0 {
		t.Errorf("%s: %v allocations per Read", what, n)
	}
}

// TestConstantMemory: 300 MB go through in the memory of the first block, and
// so do 300 MB of a chunk that is skipped.
func TestConstantMemory(t *testing.T) {
	const size = 300e6
	head := le("RIFF", uint32(0), "WAVE", "JUNK", uint32(size))
	data := le(fmtChunk(1, 1, 48000, 16), "data", uint32(0xFFFFFFFF))
	var before, after runtime.MemStats
	runtime.GC()
	runtime.ReadMemStats(&before)
	src, err := fromBytes(io.MultiReader(bytes.NewReader(head), &endless{size}, bytes.NewReader(data), &endless{size}), Options{})
	if err != nil {
		t.Fatal(err)
	}
	var b capture.Block
	if n := drain(t, src, &b); n != size/2 {
		t.Errorf("%d samples", n)
	}
	runtime.ReadMemStats(&after)
	if grown := after.TotalAlloc - before.TotalAlloc; grown > 1<<20 {
		t.Errorf("%d bytes were allocated", grown)
	}
}

// TestFLACMemory: FLAC allocates every frame, but keeps none: twenty million
// samples go through a heap of a few megabytes.
func TestFLACMemory(t *testing.T) {
	data := flacOf(t, riff(fmtChunk(1, 1, 48000, 16), chunk("data", make([]byte, 40e6))))
	src, err := fromBytes(bytes.NewReader(data), Options{})
	if err != nil {
		t.Fatal(err)
	}
	var b capture.Block
	var m runtime.MemStats
	runtime.GC()
	runtime.ReadMemStats(&m)
	least, most, n := m.HeapAlloc, uint64(0), 0
	for i := 0; ; i++ {
		err := src.Read(&b)
		if err == io.EOF {
			break
		}
		if err != nil {
			t.Fatal(err)
		}
		n += b.Len()
		if i%1000 == 500 {
			runtime.GC()
			runtime.ReadMemStats(&m)
			most = max(most, m.HeapAlloc)
		}
	}
	if n != 20e6 || most > least+4<<20 {
		t.Errorf("%d samples, heap from %d to %d bytes", n, least, most)
	}
	src.Close()
}
