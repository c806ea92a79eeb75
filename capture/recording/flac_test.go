package recording

import (
	"bytes"
	"fmt"
	"io"
	"log"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"testing"
	"testing/iotest"

	"github.com/mewkiz/flac/frame"

	"offbeat/capture"
)

// flacOf encodes a WAV with the reference encoder (checked with flac 1.4.2 of
// Debian 12) and returns the file.
func flacOf(t testing.TB, wav []byte, args ...string) []byte {
	t.Helper()
	in := file(t, wav)
	out := filepath.Join(t.TempDir(), "x.flac")
	tool(t, "flac", append(append([]string{"-s", "-f", "--lax", "--channel-map=none", "-o", out}, args...), in)...)
	data, err := os.ReadFile(out)
	if err != nil {
		t.Fatal(err)
	}
	return data
}

// tune is a WAV of a few channels: a ramp with noise in valid bits, in a
// container of bits, and its bare samples.
func tune(t testing.TB, rate, channels, bits, valid, n int) (wav, raw []byte) {
	width := bits / 8
	dice := noise(t, n*channels)
	for i := range n * channels {
		v := (i*37%4001 - 2000 + int(dice[i])%16) << 19 >> (32 - valid) << (bits - valid)
		if bits == 8 {
			v += 128
		}
		for j := range width {
			raw = append(raw, byte(v>>(8*j)))
		}
	}
	return riff(fmtExtensible(1, channels, uint32(rate), bits, valid), chunk("data", raw)), raw
}

// TestFLAC compares the sound of what the reference encoder made, which is
// lossless, with what went into it.
func TestFLAC(t *testing.T) {
	for _, c := range []struct {
		rate, channels, bits, valid int
		args                        []string
	}{
		{1000, 1, 8, 8, nil}, {8000, 2, 16, 16, []string{"-8"}}, {44100, 8, 24, 24, nil}, {384000, 1, 24, 24, []string{"-0"}},
		{192000, 2, 16, 16, []string{"-l", "0"}}, {48000, 3, 16, 12, nil}, {48000, 1, 24, 20, nil}, {96000, 2, 16, 13, nil},
		{24000, 1, 16, 16, []string{"-b", "192"}}, {176400, 6, 24, 17, []string{"-b", "20000"}}, {12345, 1, 16, 16, []string{"--no-padding"}},
	} {
		t.Run(fmt.Sprint(c), func(t *testing.T) {
			wav, raw := tune(t, c.rate, c.channels, c.bits, c.valid, 30011)
			data := flacOf(t, wav, c.args...)
			var said bytes.Buffer
			defer log.SetOutput(log.Writer())
			log.SetOutput(&said)
			hushOnce = sync.Once{}
			h := hear(t, file(t, data), Options{Channels: all(c.channels)})
			compare(t, h, raw, map[int]string{8: "u8", 16: "s16", 24: "s24"}[c.bits])
			if h.format.Rate != float64(c.rate) || h.format.Frames != 30011 || h.format.Encoding != fmt.Sprintf("FLAC %d-bit", c.valid) {
				t.Errorf("%+v", h.format)
			}
			if said.Len() > 0 {
				t.Errorf("logged %q", said.String())
			}
		})
	}
}

// TestFLACOtherWriters: sox through libFLAC and FFmpeg's own encoder.
func TestFLACOtherWriters(t *testing.T) {
	path := filepath.Join(t.TempDir(), "x.flac")
	tool(t, "sox", "-D", hum(t, 22050, 2), "-b", "24", path)
	compare(t, hear(t, path, Options{Channels: all(2)}), tool(t, "sox", "-D", path, "-t", "raw", "-b", "24", "-e", "signed-integer", "-"), "s24")
	tool(t, "ffmpeg", "-v", "error", "-y", "-i", hum(t, 48000, 1), "-c:a", "flac", "-sample_fmt", "s16", path)
	compare(t, hear(t, path, Options{}), tool(t, "ffmpeg", "-v", "error", "-i", path, "-f", "f32le", "-"), "f32")
	// Through a pipe FFmpeg cannot go back to state the length.
	data := tool(t, "ffmpeg", "-v", "error", "-i", path, "-c:a", "flac", "-f", "flac", "-")
	src, err := fromBytes(iotest.HalfReader(bytes.NewReader(data)), Options{})
	if err != nil {
		t.Fatal(err)
	}
	compare(t, listen(t, src), tool(t, "ffmpeg", "-v", "error", "-i", path, "-f", "f32le", "-"), "f32")
}

// frames returns where the frames of a FLAC file begin, and its end. The frame
// decoder takes no byte more than it needs.
func frames(t testing.TB, data []byte) []int {
	t.Helper()
	at := 4
	for last := false; !last; {
		last = data[at]&0x80 != 0
		at += 4 + int(data[at+1])<<16 + int(data[at+2])<<8 + int(data[at+3])
	}
	var marks []int
	for at < len(data) {
		marks = append(marks, at)
		r := bytes.NewReader(data[at:])
		if _, err := frame.Parse(r); err != nil {
			t.Fatal(err)
		}
		at = len(data) - r.Len()
	}
	return append(marks, at)
}

// unstated returns data without the count of samples in its header, which is
// in the last 36 bits before the MD5 (RFC 9639, section 8.2).
func unstated(data []byte) []byte {
	d := bytes.Clone(data)
	d[21] &= 0xF0
	clear(d[22:26])
	return d
}

// TestFLACCut: a recording that was cut is given to its last whole frame.
func TestFLACCut(t *testing.T) {
	wav, raw := tune(t, 8000, 1, 16, 16, 8000)
	want, _ := slow(raw, "s16", 1, 0)
	data := flacOf(t, wav, "-b", "1000")
	marks := frames(t, data)
	if len(marks) != 9 {
		t.Fatalf("%d frames", len(marks)-1)
	}
	stated := data
	data = unstated(data)
	for _, d := range [][]byte{stated, data} {
		for i, m := range marks {
			for _, cut := range []int{m, m + 1, m + 3, m + 200} {
				if cut > len(d) || i == len(marks)-1 && cut > m {
					continue
				}
				src, err := fromBytes(bytes.NewReader(d[:cut]), Options{})
				if err != nil {
					t.Fatal(err)
				}
				h := listen(t, src)
				same(t, fmt.Sprintf("cut at %d", cut), h.ch[0], want[:1000*i])
				whole := i == len(marks)-1 || cut == m && &d[0] == &data[0]
				if h.err != nil || whole != (h.note == "") || !whole && !strings.Contains(h.note, fmt.Sprintf("cut short: %.1f s of sound", float64(i)/8)) {
					t.Errorf("cut at %d: err %v, note %q", cut, h.err, h.note)
				}
			}
		}
	}
}

// TestFLACDamage: what came before the damage is given, then one line.
func TestFLACDamage(t *testing.T) {
	wav, raw := tune(t, 8000, 2, 16, 16, 8000)
	want, _ := slow(raw, "s16", 2, 1)
	data := flacOf(t, wav, "-b", "1000")
	marks := frames(t, data)
	for i := range 8 {
		bad := bytes.Clone(data)
		bad[(marks[i]+marks[i+1])/2] ^= 0x10
		h := hear(t, file(t, bad), Options{Channels: []int{2}})
		same(t, "before the damage", h.ch[0], want[:1000*i])
		if h.err == nil || !strings.Contains(h.err.Error(), fmt.Sprintf("the FLAC recording is damaged after %.1f s of sound: ", float64(i)/8)) {
			t.Errorf("frame %d: %v", i, h.err)
		}
	}
	cut := func(parts ...[]byte) heard {
		return hear(t, file(t, bytes.Join(parts, nil)), Options{Channels: []int{2}})
	}

	// Two whole frames are missing: a gap of known length.
	h := cut(data[:marks[3]], data[marks[5]:])
	same(t, "around the gap", h.ch[0], append(append([]float32{}, want[:3000]...), want[5000:]...))
	if h.err != nil || len(h.gaps) != 1 || h.gaps[0] != (gap{5000, 2000, false, capture.Overflow}) {
		t.Errorf("gaps %v, err %v", h.gaps, h.err)
	}
	// Joined late: the time line begins with the first frame.
	h = cut(data[:marks[0]], data[marks[2]:])
	same(t, "joined late", h.ch[0], want[2000:])
	if h.err != nil || h.gaps != nil {
		t.Errorf("gaps %v, err %v", h.gaps, h.err)
	}
	// Frames in the wrong order.
	h = cut(data[:marks[4]], data[marks[1]:])
	if h.err == nil || !strings.HasSuffix(h.err.Error(), "its frames are out of order") {
		t.Errorf("err %v", h.err)
	}
	// Tags in front and behind, as some taggers leave them.
	h = cut([]byte("ID3\x04\x00\x00\x00\x00\x01\x01"), make([]byte, 129), data, []byte("TAG"), make([]byte, 125))
	same(t, "tagged", h.ch[0], want)
	if h.err != nil || !strings.Contains(h.note, "behind the end") {
		t.Errorf("err %v, note %q", h.err, h.note)
	}
	// A disk that fails.
	src, err := fromBytes(io.MultiReader(bytes.NewReader(data[:marks[4]]), iotest.ErrReader(fmt.Errorf("input/output error"))), Options{})
	if err != nil {
		t.Fatal(err)
	}
	if h := listen(t, src); h.err == nil || h.err.Error() != "x: input/output error (after 0.5 s of sound)" || len(h.ch[0]) != 4000 {
		t.Errorf("err %v after %d", h.err, len(h.ch[0]))
	}
}

// TestFLACChanges: a stream that turns into another kind midway.
func TestFLACChanges(t *testing.T) {
	make := func(rate, channels, bits int) []byte {
		wav, _ := tune(t, rate, channels, bits, bits, 4096)
		return flacOf(t, wav, "-b", "4096")
	}
	data := make(8000, 1, 16)
	for want, other := range map[string][]byte{
		"the sample rate changes from 8000 to 16000 Hz": make(16000, 1, 16),
		"the number of channels changes from 1 to 2":    make(8000, 2, 16),
		"the sample size changes from 16 to 24 bits":    make(8000, 1, 24),
		"its frames are out of order":                   data,
		"invalid sync-code":                             []byte("fLaC"),
	} {
		d := unstated(data)
		if len(other) > 4 {
			other = other[frames(t, other)[0]:]
		}
		d = append(d, other...)
		src, err := fromBytes(bytes.NewReader(d), Options{})
		if err != nil {
			t.Fatal(err)
		}
		if h := listen(t, src); h.err == nil || h.err.Error() != "x: the FLAC recording is damaged after 0.5 s of sound: "+want || len(h.ch[0]) != 4096 {
			t.Errorf("%s: err %v after %d", want, h.err, len(h.ch[0]))
		}
	}
}

// TestFLACRefusals: what FLAC may hold and is not read.
func TestFLACRefusals(t *testing.T) {
	wav, _ := tune(t, 8000, 1, 32, 32, 100)
	if _, err := Open(file(t, flacOf(t, wav)), Options{}); err == nil || !strings.HasSuffix(err.Error(), ": FLAC of 32 bits is not read: convert it to 24 bits or to WAV") {
		t.Errorf("err %v", err)
	}
	wav, _ = tune(t, 8000, 2, 16, 16, 100)
	data := flacOf(t, wav)
	if _, err := fromBytes(bytes.NewReader(data), Options{Channels: []int{3}}); err == nil || err.Error() != "x: channel 3 asked, the file has 2" {
		t.Errorf("err %v", err)
	}
	for n := 4; n < 42; n++ {
		if _, err := fromBytes(bytes.NewReader(data[:n]), Options{}); err == nil || err.Error() != "x: ends within the FLAC header: the recording holds no samples" {
			t.Errorf("%d bytes: err %v", n, err)
		}
	}
	picture := bytes.Clone(data)
	picture[4] = 6
	if _, err := fromBytes(bytes.NewReader(picture), Options{}); err == nil || err.Error() != "x: the FLAC header is damaged: its first block is not the stream information" {
		t.Errorf("err %v", err)
	}
	zero := bytes.Clone(data)
	zero[18], zero[19], zero[20] = 0, 0, zero[20]&0x0F // RFC 9639, 8.2: 20 bits of sample rate
	if _, err := fromBytes(bytes.NewReader(zero), Options{}); err == nil || !strings.Contains(err.Error(), "invalid sample rate (0)") {
		t.Errorf("err %v", err)
	}
}
