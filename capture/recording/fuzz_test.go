package recording

import (
	"bytes"
	"io"
	"math/rand/v2"
	"os"
	"path/filepath"
	"runtime/metrics"
	"strings"
	"testing"

	"offbeat/capture"
)

// allocated returns the bytes allocated so far by the whole program.
func allocated() uint64 {
	s := []metrics.Sample{{Name: "/gc/heap/allocs:bytes"}}
	metrics.Read(s)
	return s[0].Value.Uint64()
}

// swallow opens data in pieces of random size and reads it to its end, holding
// it to the contract. It returns the samples per channel, or -1 if Open
// refused, and checks that every error is one line that names the input.
func swallow(t *testing.T, data []byte, seed uint64, opt Options) ([]float32, error) {
	src, err := fromBytes(ragged{bytes.NewReader(data), rand.New(rand.NewPCG(seed, 3))}, opt)
	if err == nil {
		h := listen(t, src)
		if err = h.err; err == nil {
			err = io.EOF
		}
		if err == io.EOF || strings.HasPrefix(err.Error(), "x: ") {
			return h.ch[0], err
		}
	}
	if !strings.HasPrefix(err.Error(), "x: ") || strings.ContainsAny(err.Error(), "\n\r") || len(err.Error()) > 300 {
		t.Errorf("not a line about the input: %q", err)
	}
	return nil, err
}

// fuzzBuffer is what one opening may allocate whatever a header claims: the
// buffer, one plane, and room for the test itself; the samples come on top.
const fuzzBuffer = 2 << 20

func FuzzWAV(f *testing.F) {
	d := chunk("data", []byte("0123456789abcdef01234567"))
	for _, k := range kinds {
		f.Add(riff(fmtChunk(k.tag, 2, 48000, k.bits), d), uint64(1))
		f.Add(riff(chunk("LIST", []byte("odd")), fmtExtensible(k.tag, 1, 10, k.bits, k.bits), d, d), uint64(2))
	}
	f.Add(le("RF64", uint32(0xFFFFFFFF), "WAVE", chunk("ds64", make([]byte, 28)), fmtChunk(1, 1, 8000, 16), "data", uint32(0xFFFFFFFF), "abc"), uint64(3))
	f.Add(le("RIFF", uint32(0), "WAVE", "JUNK", uint32(0xFFFFFFFF), "abc"), uint64(4))
	fixtures(f, "*.wav", func(b []byte) { f.Add(b, uint64(5)) })
	f.Fuzz(func(t *testing.T, data []byte, seed uint64) {
		before := allocated()
		got, err := swallow(t, data, seed, Options{})
		if used := allocated() - before; used > fuzzBuffer+64*uint64(len(data)) {
			t.Errorf("%d bytes allocated for an input of %d", used, len(data))
		}
		if len(got) > len(data) {
			t.Errorf("%d samples from %d bytes", len(got), len(data))
		}
		// The same file through the file system, where its length is known:
		// never fewer samples, for nothing recorded is lost, and the same ones.
		if err != nil && err != io.EOF {
			return
		}
		path := filepath.Join(t.TempDir(), "x")
		if os.WriteFile(path, data, 0o600) != nil {
			return
		}
		src, err := Open(path, Options{})
		if err != nil {
			t.Fatalf("refused as a file, not as a pipe: %v", err)
		}
		h := listen(t, src)
		if len(h.ch[0]) < len(got) || h.format.Frames != int64(len(h.ch[0])) {
			t.Fatalf("%d samples as a file (%d announced), %d as a pipe", len(h.ch[0]), h.format.Frames, len(got))
		}
		same(t, "file and pipe", h.ch[0][:len(got)], got)
	})
}

func FuzzFLAC(f *testing.F) {
	fixtures(f, "*.flac", func(b []byte) { f.Add(b, uint64(1)); f.Add(b[:len(b)/2], uint64(2)) })
	f.Fuzz(func(t *testing.T, data []byte, seed uint64) {
		if len(data) < 4 {
			return
		}
		data = append([]byte("fLaC"), data[4:]...)
		before := allocated()
		got, _ := swallow(t, data, seed, Options{})
		// A frame of a few bytes may state a constant of 65535 samples in each
		// of 8 channels; the library and this test hold them some times over.
		if used := allocated() - before; used > 16<<20+uint64(len(data))<<20 {
			t.Errorf("%d bytes allocated for an input of %d", used, len(data))
		}
		if len(got) > 65535*len(data) {
			t.Errorf("%d samples from %d bytes", len(got), len(data))
		}
	})
}

func FuzzRaw(f *testing.F) {
	names := []string{"s16le", "s24le", "s32le", "f32le"}
	f.Add([]byte("0123456789abcdef"), uint8(0), uint8(1), uint64(1))
	f.Add(le(uint32(0x7FC00000), uint32(0x3F800000)), uint8(3), uint8(2), uint64(2))
	f.Fuzz(func(t *testing.T, data []byte, enc, channels uint8, seed uint64) {
		if kindOf(data) != "" || bytes.HasPrefix(data, []byte("ID3")) {
			return
		}
		raw := RawFormat{names[enc%4], 48000, int(channels)}
		if raw.check() != nil {
			return
		}
		before := allocated()
		ch := 1 + int(seed%uint64(channels))
		got, err := swallow(t, data, seed, Options{Raw: &raw, Channels: []int{ch}})
		if used := allocated() - before; used > fuzzBuffer+64*uint64(len(data)) {
			t.Errorf("%d bytes allocated for an input of %d", used, len(data))
		}
		if len(data) == 0 {
			return
		}
		want, _ := slow(data, strings.TrimSuffix(raw.Encoding, "le"), int(channels), ch-1)
		same(t, raw.Encoding, got, want)
		if err != io.EOF {
			t.Errorf("err %v", err)
		}
	})
}

// fixtures gives the small recordings of the repository that match pattern.
func fixtures(tb testing.TB, pattern string, use func([]byte)) {
	tb.Helper()
	paths, err := filepath.Glob(filepath.Join("..", "..", "testdata", "recordings", pattern))
	if err != nil || len(paths) == 0 {
		tb.Fatalf("no recordings %s: %v", pattern, err)
	}
	for _, p := range paths {
		b, err := os.ReadFile(p)
		if err != nil {
			tb.Fatal(err)
		}
		use(b)
	}
}

var _ capture.Source = (*pcm)(nil)
var _ capture.Source = (*flacSource)(nil)
