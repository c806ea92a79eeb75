package recording

import (
	"bytes"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"strings"
	"testing"
	"testing/iotest"
)

// kinds are the encodings by the names of the slow decoder.
var kinds = []struct {
	kind      string
	tag, bits int
}{{"u8", 1, 8}, {"s16", 1, 16}, {"s24", 1, 24}, {"s32", 1, 32}, {"f32", 3, 32}, {"f64", 3, 64}}

// ragged gives pieces of random size.
type ragged struct {
	r io.Reader
	n *rand.Rand
}

func (r ragged) Read(p []byte) (int, error) {
	return r.r.Read(p[:min(len(p), 1+r.n.IntN(700))])
}

// TestEncodings compares every encoding and channel count with the slow
// decoder, on bytes that hold every pattern (NaN too), however they arrive.
func TestEncodings(t *testing.T) {
	data := noise(t, 8*64*9*57)
	pieces := map[string]func(io.Reader) io.Reader{
		"whole": func(r io.Reader) io.Reader { return r },
		"bytes": iotest.OneByteReader, "halves": iotest.HalfReader, "last with EOF": iotest.DataErrReader,
		"ragged": func(r io.Reader) io.Reader { return ragged{r, rand.New(rand.NewPCG(1, 2))} },
	}
	for _, k := range kinds {
		for _, channels := range []int{1, 2, 3, 8, 64} {
			t.Run(fmt.Sprintf("%s/%d", k.kind, channels), func(t *testing.T) {
				wav := riff(fmtChunk(k.tag, channels, 48000, k.bits), chunk("data", data))
				opt := Options{Channels: []int{channels, 1, (channels + 1) / 2}}
				check := func(how string, h heard) {
					bad := 0
					for i, c := range opt.Channels {
						want, n := slow(data, k.kind, channels, c-1)
						same(t, how, h.ch[i], want)
						bad += n
					}
					if h.err != nil || h.note != "" || h.nonFinite != bad {
						t.Errorf("%s: err %v, note %q, %d not finite, want %d", how, h.err, h.note, h.nonFinite, bad)
					}
					if (k.tag == 3) != (bad > 0) {
						t.Fatalf("the noise holds %d non-finite values", bad)
					}
				}
				for how, wrap := range pieces {
					src, err := fromBytes(wrap(bytes.NewReader(wav)), opt)
					if err != nil {
						t.Fatal(err)
					}
					if f := src.Format(); f.Frames != 0 || f.Rate != 48000 || f.Live {
						t.Errorf("format %+v", f)
					}
					check(how, listen(t, src))
				}
				h := hear(t, file(t, wav), opt)
				check("file", h)
				if h.format.Frames != int64(len(h.ch[0])) {
					t.Errorf("%d frames announced, %d came", h.format.Frames, len(h.ch[0]))
				}
			})
		}
	}
}

// TestKnownSamples fixes scale and sign by hand, against a slip that the fast
// and the slow decoder share.
func TestKnownSamples(t *testing.T) {
	for _, c := range []struct {
		name string
		wav  []byte
		want []float32
	}{
		{"8-bit", riff(fmtChunk(1, 1, 8000, 8), chunk("data", le(0x00, 0x80, 0xFF, 0x40))), []float32{-1, 0, 127.0 / 128, -0.5}},
		{"16-bit", riff(fmtChunk(1, 1, 8000, 16), chunk("data", le(0x00, 0x80, 0x00, 0x40, 0xFF, 0xFF))), []float32{-1, 0.5, -1.0 / 32768}},
		{"24-bit", riff(fmtChunk(1, 1, 8000, 24), chunk("data", le(0x00, 0x00, 0x80, 0x00, 0x00, 0x40, 0xFF, 0xFF, 0xFF))), []float32{-1, 0.5, -1.0 / 8388608}},
		{"32-bit", riff(fmtChunk(1, 1, 8000, 32), chunk("data", le(0, 0, 0, 0x80, 0, 0, 0, 0x20))), []float32{-1, 0.25}},
		{"float", riff(fmtChunk(3, 1, 8000, 32), chunk("data", le(uint32(0x3F800000), uint32(0xC0000000), uint32(0x7FC00000), uint32(0xFF800000), uint32(0x3E800000)))),
			[]float32{1, -2, 0, 0, 0.25}},
		{"double", riff(fmtChunk(3, 1, 8000, 64), chunk("data", le(math.Float64bits(-0.75), math.Float64bits(1e300), math.Float64bits(3)))), []float32{-0.75, 0, 3}},
		// 20 bits fill the upper part of their container of 24.
		{"20 bits in 24", riff(fmtExtensible(1, 1, 8000, 24, 20), chunk("data", le(0x00, 0x00, 0x40, 0xF0, 0xFF, 0xFF))), []float32{0.5, -16.0 / 8388608}},
		{"12 bits in 16", riff(chunk("fmt ", le(uint16(1), uint16(1), uint32(8000), uint32(16000), uint16(2), uint16(12))), chunk("data", le(0x00, 0xC0))), []float32{-0.5}},
	} {
		h := hear(t, file(t, c.wav), Options{})
		same(t, c.name, h.ch[0], c.want)
	}
}

// TestLayouts reads files whose chunks are out of the ordinary. Every one holds
// the same three samples.
func TestLayouts(t *testing.T) {
	pcm := le(0x00, 0x40, 0x00, 0xC0, 0x00, 0x20) // 0.5, -0.5, 0.25
	f, d := fmtChunk(1, 1, 8000, 16), chunk("data", pcm)
	join := func(p ...any) []byte { return le(p...) }
	ds64 := func(riff, data uint64) []byte {
		return chunk("ds64", le(riff, data, uint64(3), uint32(0)))
	}
	const n = 0xFFFFFFFF
	none := ""
	for _, c := range []struct {
		name, note string
		wav        []byte
	}{
		{"plain", none, riff(f, d)},
		{"odd chunks before and after", none, riff(chunk("LIST", []byte("INFOabc")), f, chunk("JUNK", make([]byte, 33)), chunk("id3 ", []byte("x")), d, chunk("LIST", []byte("INFOxyz")))},
		{"broadcast", none, riff(chunk("bext", make([]byte, 603)), f, chunk("fact", le(uint32(3))), d)},
		{"fmt of 18 bytes", none, riff(chunk("fmt ", le(f[8:], uint16(0))), d)},
		{"fmt of 41 bytes", none, riff(chunk("fmt ", append(fmtExtensible(1, 1, 8000, 16, 16)[8:], 7)), d)},
		{"extensible without valid bits", none, riff(fmtExtensible(1, 1, 8000, 16, 0), d)},
		{"RF64", none, join("RF64", uint32(n), "WAVE", ds64(4+36+24+14, 6), f, "data", uint32(n), pcm)},
		{"BW64", none, join("BW64", uint32(n), "WAVE", ds64(4+36+24+14+10, 6), f, "data", uint32(n), pcm, chunk("axml", []byte("<>")))},
		{"RF64 that states 32 bits", none, join("RF64", uint32(n), "WAVE", ds64(78, 999), f, "data", uint32(6), pcm)},
		{"RF64 never finished", "never filled in", join("RF64", uint32(n), "WAVE", ds64(0, 0), f, "data", uint32(n), pcm)},
		{"RF64 without ds64", "never filled in", join("RF64", uint32(n), "WAVE", f, "data", uint32(n), pcm)},
		{"killed: zeros", "never filled in", join("RIFF", uint32(0), "WAVE", f, "data", uint32(0), pcm)},
		{"killed: header of an empty file", "never filled in", join("RIFF", uint32(36), "WAVE", f, "data", uint32(0), pcm)},
		{"killed: ones", "never filled in", join("RIFF", uint32(n), "WAVE", f, "data", uint32(n), pcm)},
		{"killed: stand-in", "stand-in", join("RIFF", uint32(0x7FFFF024), "WAVE", f, "data", uint32(0x7FFFF000), pcm)},
		{"cut", "less than its header states", join("RIFF", uint32(36+8000), "WAVE", f, "data", uint32(8000), pcm)},
		{"cut within a sample", "ends within a sample; its last 1 bytes are dropped", join("RIFF", uint32(0), "WAVE", f, "data", uint32(0), pcm, 0x55)},
		{"odd data length", "ends within a sample", join("RIFF", uint32(36+8), "WAVE", f, "data", uint32(7), pcm, 0x55, 0)},
		{"junk behind", "9 bytes behind the end", join(riff(f, d), []byte("junk junk"))},
	} {
		t.Run(c.name, func(t *testing.T) {
			h := hear(t, file(t, c.wav), Options{})
			same(t, "file", h.ch[0], []float32{0.5, -0.5, 0.25})
			if h.err != nil || !strings.Contains(h.note, c.note) || (c.note == "") != (h.note == "") {
				t.Errorf("err %v, note %q, want %q", h.err, h.note, c.note)
			}
			if h.format.Frames != 3 {
				t.Errorf("%d frames announced", h.format.Frames)
			}
			src, err := fromBytes(iotest.OneByteReader(bytes.NewReader(c.wav)), Options{})
			if err != nil {
				t.Fatal(err)
			}
			h = listen(t, src)
			same(t, "pipe", h.ch[0], []float32{0.5, -0.5, 0.25})
			if h.err != nil || h.format.Frames != 0 {
				t.Errorf("pipe: err %v, %d frames announced", h.err, h.format.Frames)
			}
		})
	}
}

// TestNoSamples: a recording of no length at all is legal.
func TestNoSamples(t *testing.T) {
	h := hear(t, file(t, riff(fmtChunk(1, 1, 8000, 16), chunk("data", nil))), Options{})
	if len(h.ch[0]) != 0 || h.err != nil || h.note != "" {
		t.Errorf("%+v", h)
	}
}

// TestLongerThanTheHeader: recorders that count in 32 bits, and those that
// cannot seek, leave headers that state far too little. The files have holes
// and take no room.
func TestLongerThanTheHeader(t *testing.T) {
	const gib = 1 << 30
	for _, c := range []struct {
		name   string
		stated uint32
		size   int64 // bytes behind the header
		frames int64
		note   string
	}{
		{"wrapped once", gib, 5 * gib, 5 * gib / 2, "over 4 GiB"},
		{"wrapped twice, with tags behind", 500, 8*gib + 500 + 60, (8*gib + 500) / 2, "over 4 GiB"},
		{"stand-in", 0x7FFFF000, 3 * gib, 3 * gib / 2, "stand-in"},
		{"true, 2 GiB, and a little behind", 0x7FFFF000, 0x7FFFF000 + 60, 0x7FFFF000 / 2, "60 bytes behind"},
		{"true, nearly 4 GiB", 0xFFFF0000, 0xFFFF0000, 0xFFFF0000 / 2, ""},
		{"something else behind", gib, 2 * gib, gib / 2, "1073741824 bytes behind"},
	} {
		path := file(t, le("RIFF", 36+c.stated, "WAVE", fmtChunk(1, 1, 48000, 16), "data", c.stated))
		if err := os.Truncate(path, 44+c.size); err != nil {
			t.Fatal(err)
		}
		src, err := Open(path, Options{})
		if err != nil {
			t.Fatal(err)
		}
		if f := src.Format(); f.Frames != c.frames {
			t.Errorf("%s: %d frames, want %d", c.name, f.Frames, c.frames)
		}
		if note := src.(Noter).Note(); !strings.Contains(note, c.note) || (note == "") != (c.note == "") {
			t.Errorf("%s: note %q", c.name, note)
		}
		src.Close()
	}
}

// TestRefusals: one line that says what and where.
func TestRefusals(t *testing.T) {
	d := chunk("data", make([]byte, 64))
	fm := func(tag, channels, rate, align, bits int) []byte {
		return chunk("fmt ", le(uint16(tag), uint16(channels), uint32(rate), uint32(0), uint16(align), uint16(bits)))
	}
	guid := fmtExtensible(1, 1, 8000, 16, 16)
	guid[len(guid)-1] = 0
	text := []byte("It was a dark and stormy night; the rain fell in torrents.")
	for _, c := range []struct {
		name string
		data []byte
		opt  Options
		want string
	}{
		{"empty", nil, Options{}, "x: empty, there is nothing to read"},
		{"text", text, Options{}, "x: neither a WAV nor a FLAC recording: for samples without a header say their format, rate and channels"},
		{"short", []byte("RIF"), Options{}, "x: neither a WAV nor a FLAC recording: for samples without a header say their format, rate and channels"},
		{"AVI", []byte("RIFF\x00\x00\x00\x00AVI LIST"), Options{}, `x: a RIFF file of the kind "AVI ", which is not sound: convert it to WAV or FLAC`},
		{"Wave64", []byte("riff\x2e\x91\xcf\x11\xa5\xd6\x28\xdb"), Options{}, "x: a Wave64 file, which is not read: convert it to WAV or FLAC"},
		{"Ogg", []byte("OggS\x00\x02\x00\x00\x00\x00\x00\x00"), Options{}, "x: an Ogg file, which is not read: convert it to WAV or FLAC"},
		{"MP3", append([]byte("ID3\x04\x00\x00\x00\x00\x00\x02xx"), text...), Options{}, "x: a tagged file that is not FLAC (MP3, perhaps): convert it to WAV or FLAC"},
		{"no chunks", riff(), Options{}, "x: no data chunk: the file ends at byte 12"},
		{"no data", riff(fmtChunk(1, 1, 8000, 16)), Options{}, "x: no data chunk: the file ends at byte 36"},
		{"cut in a chunk", riff(fmtChunk(1, 1, 8000, 16), chunk("LIST", text))[:60], Options{}, `x: no data chunk: the file ends within the chunk "LIST" at byte 36`},
		{"cut in fmt", riff(fmtChunk(1, 1, 8000, 16))[:30], Options{}, "x: ends within its header, after 30 bytes: the recording holds no samples"},
		{"no fmt", riff(d), Options{}, "x: the data chunk at byte 12 comes before any fmt chunk: the header is damaged"},
		{"short fmt", riff(chunk("fmt ", make([]byte, 14)), d), Options{}, "x: in the fmt chunk at byte 12: it has 14 bytes, at least 16 are needed"},
		{"short ds64", riff(chunk("ds64", make([]byte, 8)), d), Options{}, "x: the ds64 chunk at byte 12 has 8 bytes: it needs 24 at least"},
		{"zero rate", riff(fm(1, 1, 0, 2, 16), d), Options{}, "x: in the fmt chunk at byte 12: a sample rate of zero"},
		{"low rate", riff(fm(1, 1, 9, 2, 16), d), Options{}, "x: in the fmt chunk at byte 12: a sample rate of 9 Hz: must be 10 Hz to 1 MHz"},
		{"high rate", riff(fm(1, 1, 1000001, 2, 16), d), Options{}, "x: in the fmt chunk at byte 12: a sample rate of 1000001 Hz: must be 10 Hz to 1 MHz"},
		{"zero channels", riff(fm(1, 0, 8000, 2, 16), d), Options{}, "x: in the fmt chunk at byte 12: zero channels"},
		{"65 channels", riff(fm(1, 65, 8000, 130, 16), d), Options{}, "x: in the fmt chunk at byte 12: 65 channels: at most 64 are read"},
		{"block align", riff(fm(1, 2, 8000, 2, 16), d), Options{}, "x: in the fmt chunk at byte 12: the block align of 2 bytes does not fit 2 channels of 16 bits: the header is damaged"},
		{"zero align", riff(fm(1, 2, 8000, 0, 16), d), Options{}, "x: in the fmt chunk at byte 12: the block align of 0 bytes does not fit 2 channels of 16 bits: the header is damaged"},
		{"zero bits", riff(fm(1, 1, 8000, 2, 0), d), Options{}, "x: in the fmt chunk at byte 12: PCM of 0 bits: only 8 to 32 are read"},
		{"64-bit PCM", riff(fm(1, 1, 8000, 8, 64), d), Options{}, "x: in the fmt chunk at byte 12: PCM of 64 bits: only 8 to 32 are read"},
		{"half floats", riff(fm(3, 1, 8000, 2, 16), d), Options{}, "x: in the fmt chunk at byte 12: floats of 16 bits: only 32 and 64 are read"},
		{"A-law", riff(fm(6, 1, 8000, 1, 8), d), Options{}, "x: in the fmt chunk at byte 12: the codec A-law is not read: convert it to PCM or FLAC"},
		{"unknown codec", riff(fm(0x1234, 1, 8000, 1, 8), d), Options{}, "x: in the fmt chunk at byte 12: the codec 0x1234 is not read: convert it to PCM or FLAC"},
		{"mu-law, extensible", riff(fmtExtensible(7, 1, 8000, 8, 8), d), Options{}, "x: in the fmt chunk at byte 12: the codec mu-law is not read: convert it to PCM or FLAC"},
		{"short extensible", riff(fm(0xFFFE, 1, 8000, 2, 16), d), Options{}, "x: in the fmt chunk at byte 12: it is of the extensible kind but has 16 bytes instead of 40"},
		{"sub-format", riff(guid, d), Options{}, "x: in the fmt chunk at byte 12: unknown sub-format 01 00 00 00 00 00 10 00 80 00 00 aa 00 38 9b 00: only PCM and float are read"},
		{"valid bits", riff(fmtExtensible(1, 1, 8000, 16, 17), d), Options{}, "x: in the fmt chunk at byte 12: 17 valid bits in samples of 16"},
		{"channel 3 of 2", riff(fmtChunk(1, 2, 8000, 16), d), Options{Channels: []int{1, 3}}, "x: channel 3 asked, the file has 2"},
		{"channel 0", riff(fmtChunk(1, 2, 8000, 16), d), Options{Channels: []int{0}}, "x: channel 0 asked: channels are numbered from 1"},
		{"FLAC cut in its header", []byte("fLaC\x00\x00\x00\x22\x10\x00\x10\x00"), Options{}, "x: ends within the FLAC header: the recording holds no samples"},
		{"raw channel", text, Options{Channels: []int{2}, Raw: &RawFormat{"s16le", 10, 1}}, "x: channel 2 asked, the file has 1"},
	} {
		_, err := fromBytes(bytes.NewReader(c.data), c.opt)
		if err == nil || err.Error() != c.want {
			t.Errorf("%s:\n got %v\nwant %s", c.name, err, c.want)
		}
	}
}

// TestOpenRefusals: what is wrong before a byte is read.
func TestOpenRefusals(t *testing.T) {
	dir := t.TempDir()
	raw := func(enc string, rate float64, channels int) Options {
		return Options{Raw: &RawFormat{enc, rate, channels}}
	}
	some := file(t, []byte("0123456789ab"))
	reopen := raw("s16le", 10, 1)
	reopen.Reopen = true
	for _, c := range []struct {
		path string
		opt  Options
		want string
	}{
		{dir + "/none.wav", Options{}, dir + "/none.wav: cannot be opened: no such file or directory"},
		{dir, Options{}, dir + ": a directory, not a recording"},
		{some, raw("s8", 10, 1), `raw format "s8": must be s16le, s24le, s32le or f32le`},
		{some, raw("s16le", 9.9, 1), "raw format: sample rate 9.9 Hz: must be 10 Hz to 1 MHz"},
		{some, raw("s16le", math.NaN(), 1), "raw format: sample rate NaN Hz: must be 10 Hz to 1 MHz"},
		{some, raw("s16le", 10, 65), "raw format: 65 channels: must be 1 to 64"},
		{some, reopen, some + ": only a FIFO of raw samples can be kept open for its next writer"},
	} {
		if _, err := Open(c.path, c.opt); err == nil || err.Error() != c.want {
			t.Errorf("got %v\nwant %s", err, c.want)
		}
	}
}

// TestReadErrorIsLocated: a disk that fails ends the recording with an error
// after all that came before, and nothing is lost.
func TestReadErrorIsLocated(t *testing.T) {
	wav := riff(fmtChunk(1, 1, 8000, 16), chunk("data", make([]byte, 16000)))
	for _, r := range []io.Reader{
		io.MultiReader(bytes.NewReader(wav[:8044]), iotest.ErrReader(fmt.Errorf("input/output error"))),
		io.MultiReader(bytes.NewReader(wav[:8044]), iotest.ErrReader(io.ErrUnexpectedEOF)),
	} {
		src, err := fromBytes(r, Options{})
		if err != nil {
			t.Fatal(err)
		}
		h := listen(t, src)
		if len(h.ch[0]) != 4000 || h.err == nil || !strings.HasPrefix(h.err.Error(), "x: ") || !strings.HasSuffix(h.err.Error(), "(after 0.5 s of sound)") {
			t.Errorf("%d samples, %v", len(h.ch[0]), h.err)
		}
	}
}
