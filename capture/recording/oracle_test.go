package recording

import (
	"bytes"
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"testing"

	"offbeat/capture"
)

// slow decodes interleaved samples in the most obvious way: bytes to an
// integer, one at a time, and a division in float64.
func slow(data []byte, kind string, channels, ch int) (out []float32, nonFinite int) {
	width := map[string]int{"u8": 1, "s16": 2, "s24": 3, "s32": 4, "f32": 4, "f64": 8}[kind]
	for at := ch * width; at+width <= len(data)/(width*channels)*(width*channels); at += width * channels {
		word := uint64(0)
		for i := width - 1; i >= 0; i-- {
			word = word*256 + uint64(data[at+i])
		}
		v := 0.0
		switch kind {
		case "u8":
			v = (float64(word) - 128) / 128
		case "f32":
			v = float64(math.Float32frombits(uint32(word)))
		case "f64":
			v = math.Float64frombits(word)
		default:
			full := math.Pow(2, float64(8*width-1))
			v = float64(word)
			if v >= full {
				v -= 2 * full
			}
			v /= full
		}
		f := float32(v)
		if math.IsNaN(v) || math.IsInf(v, 0) || math.IsInf(float64(f), 0) {
			f = 0
			nonFinite++
		}
		out = append(out, f)
	}
	return out, nonFinite
}

// gap is a hole that a Block reported.
type gap struct {
	first, lost int64
	guessed     bool
	cause       capture.Cause
}

// heard is everything a Source delivered.
type heard struct {
	format    capture.Format
	ch        [][]float32
	nonFinite int
	gaps      []gap
	quiet     int   // empty reads
	err       error // nil for io.EOF
	note      string
}

// listen reads src to its end and closes it, holding it to the contract of
// capture.Source.
func listen(t testing.TB, src capture.Source) heard {
	t.Helper()
	h := heard{format: src.Format()}
	h.ch = make([][]float32, h.format.Channels)
	var b capture.Block
	next := int64(0)
	for {
		err := src.Read(&b)
		if len(b.Ch) != h.format.Channels {
			t.Fatalf("%d planes, the format says %d", len(b.Ch), h.format.Channels)
		}
		for _, c := range b.Ch {
			if len(c) != b.Len() || len(c) > capture.MaxBlock {
				t.Fatalf("planes of %d and %d samples", b.Len(), len(c))
			}
		}
		if err != nil {
			for range 3 {
				if b.Len() != 0 {
					t.Fatalf("%d samples beside the error %v", b.Len(), err)
				}
				if again := src.Read(&b); !errors.Is(again, err) {
					t.Fatalf("the error %v became %v", err, again)
				}
			}
			if err != io.EOF {
				h.err = err
			}
			break
		}
		if b.Len() == 0 {
			h.quiet++
			continue
		}
		if b.First != next+b.Lost || (b.Lost > 0) != (b.Cause != "") {
			t.Fatalf("block at %d after %d, lost %d, cause %q", b.First, next, b.Lost, b.Cause)
		}
		if b.Lost > 0 {
			h.gaps = append(h.gaps, gap{b.First, b.Lost, b.Guessed, b.Cause})
		}
		if b.Wall.IsZero() == h.format.Live {
			t.Fatalf("live is %v, wall %v", h.format.Live, b.Wall)
		}
		next = b.First + int64(b.Len())
		h.nonFinite += b.NonFinite
		for i, c := range b.Ch {
			h.ch[i] = append(h.ch[i], c...)
		}
	}
	h.note = src.(Noter).Note()
	if err := src.Close(); err != nil {
		t.Fatal(err)
	}
	return h
}

// same fails unless got and want are equal bit for bit.
func same(t testing.TB, what string, got, want []float32) {
	t.Helper()
	if len(got) != len(want) {
		t.Fatalf("%s: %d samples, want %d", what, len(got), len(want))
	}
	for i := range got {
		if math.Float32bits(got[i]) != math.Float32bits(want[i]) && !(got[i] == 0 && want[i] == 0) {
			t.Fatalf("%s: sample %d is %v, want %v", what, i, got[i], want[i])
		}
	}
}

// le writes numbers and strings one after the other, little-endian.
func le(parts ...any) []byte {
	var b []byte
	for _, p := range parts {
		switch v := p.(type) {
		case string:
			b = append(b, v...)
		case []byte:
			b = append(b, v...)
		case uint16:
			b = binary.LittleEndian.AppendUint16(b, v)
		case uint32:
			b = binary.LittleEndian.AppendUint32(b, v)
		case uint64:
			b = binary.LittleEndian.AppendUint64(b, v)
		case int: // a byte
			b = append(b, byte(v))
		default:
			panic(fmt.Sprintf("%T", p))
		}
	}
	return b
}

// chunk is a RIFF chunk with its pad byte.
func chunk(id string, body []byte) []byte {
	b := le(id, uint32(len(body)), body)
	if len(body)%2 == 1 {
		b = append(b, 0)
	}
	return b
}

// riff is a whole file of these chunks.
func riff(chunks ...[]byte) []byte {
	body := append([]byte("WAVE"), bytes.Join(chunks, nil)...)
	return le("RIFF", uint32(len(body)), body)
}

// fmtChunk is the plain one of 16 bytes.
func fmtChunk(tag, channels int, rate uint32, bits int) []byte {
	align := channels * ((bits + 7) / 8)
	return chunk("fmt ", le(uint16(tag), uint16(channels), rate, rate*uint32(align), uint16(align), uint16(bits)))
}

// fmtExtensible is the one of 40 bytes.
func fmtExtensible(tag, channels int, rate uint32, bits, valid int) []byte {
	align := channels * bits / 8
	return chunk("fmt ", le(uint16(tagExtensible), uint16(channels), rate, rate*uint32(align), uint16(align), uint16(bits),
		uint16(22), uint16(valid), uint32(0), uint16(tag), subformat))
}

// fromBytes opens data as a pipe that never pauses would give it.
func fromBytes(r io.Reader, opt Options) (capture.Source, error) {
	return newSource(newFeed(r, "x"), opt)
}

// file writes data to a new file and returns its path.
func file(t testing.TB, data []byte) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "x.dat")
	if err := os.WriteFile(path, data, 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// hear opens path and listens.
func hear(t testing.TB, path string, opt Options) heard {
	t.Helper()
	src, err := Open(path, opt)
	if err != nil {
		t.Fatal(err)
	}
	return listen(t, src)
}

// noise is n bytes from a generator with a printed seed.
func noise(t testing.TB, n int) []byte {
	t.Helper()
	seed := rand.Uint64()
	t.Logf("seed %d", seed)
	r := rand.New(rand.NewPCG(seed, 1))
	b := make([]byte, n)
	for i := range b {
		b[i] = byte(r.Uint32())
	}
	return b
}

// tool returns the output of a program, and skips where it is not installed.
func tool(t testing.TB, name string, args ...string) []byte {
	t.Helper()
	if _, err := exec.LookPath(name); err != nil {
		t.Skipf("SKIPPED, NOT CHECKED: %s is not installed (Debian: sox, ffmpeg, flac, sndfile-programs)", name)
	}
	cmd := exec.Command(name, args...)
	var out, msg bytes.Buffer
	cmd.Stdout, cmd.Stderr = &out, &msg
	if err := cmd.Run(); err != nil {
		t.Fatalf("%s %v: %v\n%s", name, args, err, msg.String())
	}
	return out.Bytes()
}

// all lists the channel numbers 1 to n.
func all(n int) []int {
	c := make([]int, n)
	for i := range c {
		c[i] = i + 1
	}
	return c
}
