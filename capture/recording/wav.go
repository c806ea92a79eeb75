package recording

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io"
	"math"

	"offbeat/capture"
)

// Format tags of the fmt chunk (RFC 2361, and Microsoft's mmreg.h as far as
// from memory).
const (
	tagPCM        = 0x0001
	tagFloat      = 0x0003
	tagExtensible = 0xFFFE
)

// codecs names the tags that are not read, so that the user knows what to
// convert.
var codecs = map[uint16]string{
	0x0002: "Microsoft ADPCM", 0x0006: "A-law", 0x0007: "mu-law", 0x0011: "IMA ADPCM", 0x0031: "GSM 6.10",
	0x0040: "G.721 ADPCM", 0x0045: "G.726 ADPCM", 0x0050: "MPEG", 0x0055: "MP3", 0x0064: "G.726 ADPCM",
	0x0092: "AC-3", 0x00FF: "AAC", 0x0161: "Windows Media Audio", 0xF1AC: "FLAC in WAV",
}

// subformat is the tail of the GUIDs KSDATAFORMAT_SUBTYPE_*, whose first two
// bytes are a format tag (RFC 2361, section 4; the same in EBU Tech 3306).
const subformat = "\x00\x00\x00\x00\x10\x00\x80\x00\x00\xAA\x00\x38\x9B\x71"

const (
	unfilled = 0xFFFFFFFF // the length a streaming recorder writes, and the mark of RF64
	// placeholder is about the least length that recorders which cannot seek
	// write instead: 0x7FFFF000 and the like.
	placeholder = 0x7FFF0000
	// tail is more than the chunks behind the samples (titles, markers) take.
	tail = 1 << 20
)

// wavHeader is what stands before the samples.
type wavHeader struct {
	enc      encoding
	name     string // of the encoding
	rate     int64
	channels int
	align    int   // bytes of one sample of all channels
	length   int64 // bytes of samples; -1: to the end of the input
	riffEnd  int64 // where the whole RIFF form ends; -1: not said
}

// newWAV reads the header of the WAV recording at the front of fd.
func newWAV(fd *feed, opt Options) (capture.Source, error) {
	h, err := readWAV(fd)
	if err != nil {
		return nil, err
	}
	p := &pcm{fd: fd, enc: h.enc, align: h.align, left: h.length}
	p.format = capture.Format{Rate: float64(h.rate), Live: fd.live, Encoding: h.name}
	if left := fd.left(); left >= 0 {
		if h.length >= 0 {
			left = min(left, h.length)
		}
		p.format.Frames = left / int64(h.align)
	}
	return p, p.choose(opt.Channels, h.channels)
}

// readWAV walks the chunks up to the first byte of sound. The layout is that of
// the Multimedia Programming Interface and Data Specifications 1.0 (RIFF), with
// ds64 after EBU Tech 3306 (RF64) and ITU-R BS.2088 (BW64).
func readWAV(fd *feed) (*wavHeader, error) {
	head, err := fd.peek(12)
	if err != nil {
		return nil, fd.failure(err)
	}
	h := &wavHeader{riffEnd: -1}
	wide := string(head[:4]) != "RIFF"
	if size := binary.LittleEndian.Uint32(head[4:]); size != 0 && size != unfilled {
		h.riffEnd = fd.pos + 8 + int64(size)
	}
	fd.take(12)
	long := int64(-1) // the data length of ds64
	for {
		at := fd.pos
		c, err := fd.peek(8)
		if errors.Is(err, io.EOF) {
			return nil, fmt.Errorf("%s: no data chunk: the file ends at byte %d", fd.name, at+int64(len(c)))
		}
		if err != nil {
			return nil, fd.failure(err)
		}
		id, size := string(c[:4]), int64(binary.LittleEndian.Uint32(c[4:]))
		fd.take(8)
		body := fd.pos
		switch id {
		case "ds64":
			if long, err = h.readDS64(fd, at, size); err != nil {
				return nil, err
			}
		case "fmt ":
			if err := h.readFmt(fd, at, size); err != nil {
				return nil, err
			}
		case "data":
			if h.align == 0 {
				return nil, fmt.Errorf("%s: the data chunk at byte %d comes before any fmt chunk: the header is damaged", fd.name, at)
			}
			h.measure(fd, size, wide && size == unfilled, long)
			return h, nil
		}
		// Whatever else there is; a chunk of odd size is followed by a pad byte.
		if err := fd.skip(size + size&1 - (fd.pos - body)); err != nil {
			return nil, fmt.Errorf("%s: no data chunk: the file ends within the chunk %q at byte %d", fd.name, id, at)
		}
	}
}

// readDS64 reads the long lengths of RF64 and BW64.
func (h *wavHeader) readDS64(fd *feed, at, size int64) (data int64, err error) {
	if size < 24 {
		return 0, fmt.Errorf("%s: the ds64 chunk at byte %d has %d bytes: it needs 24 at least", fd.name, at, size)
	}
	b, err := fd.peek(16)
	if err != nil {
		return 0, fd.failure(err)
	}
	riff, length := binary.LittleEndian.Uint64(b), binary.LittleEndian.Uint64(b[8:])
	fd.take(16)
	if riff > 0 && riff < math.MaxInt64/2 {
		h.riffEnd = at - 12 + 8 + int64(riff)
	}
	if length == 0 || length > math.MaxInt64/2 {
		return -1, nil
	}
	return int64(length), nil
}

// readFmt reads the fmt chunk and refuses what cannot be decoded.
func (h *wavHeader) readFmt(fd *feed, at, size int64) error {
	bad := func(format string, args ...any) error {
		return fmt.Errorf("%s: in the fmt chunk at byte %d: %s", fd.name, at, fmt.Sprintf(format, args...))
	}
	if size < 16 {
		return bad("it has %d bytes, at least 16 are needed", size)
	}
	n := int(min(size, 40))
	b, err := fd.peek(n)
	if err != nil {
		return fd.failure(err)
	}
	fd.take(n)
	u16 := func(o int) int { return int(binary.LittleEndian.Uint16(b[o:])) }
	tag, bits := uint16(u16(0)), u16(14)
	h.channels, h.rate, h.align = u16(2), int64(binary.LittleEndian.Uint32(b[4:])), u16(12)
	valid := bits
	if tag == tagExtensible {
		if n < 40 {
			return bad("it is of the extensible kind but has %d bytes instead of 40", size)
		}
		if string(b[26:40]) != subformat {
			return bad("unknown sub-format % x: only PCM and float are read", b[24:40])
		}
		tag = uint16(u16(24))
		if v := u16(18); v != 0 {
			valid = v
		}
	}
	switch {
	case tag != tagPCM && tag != tagFloat:
		if name := codecs[tag]; name != "" {
			return bad("the codec %s is not read: convert it to PCM or FLAC", name)
		}
		return bad("the codec 0x%04X is not read: convert it to PCM or FLAC", tag)
	case h.channels == 0:
		return bad("zero channels")
	case h.channels > maxChannels:
		return bad("%d channels: at most %d are read", h.channels, maxChannels)
	case h.rate == 0:
		return bad("a sample rate of zero")
	case h.rate < minRate || h.rate > maxRate:
		return bad("a sample rate of %d Hz: must be 10 Hz to 1 MHz", h.rate)
	}
	return h.chooseEncoding(tag, bits, valid, bad)
}

// chooseEncoding finds the decoder for a sample of bits, of which valid are in
// use. PCM fills its container from the most significant bit (Microsoft,
// WAVEFORMATEXTENSIBLE), so that full scale is that of the container.
func (h *wavHeader) chooseEncoding(tag uint16, bits, valid int, bad func(string, ...any) error) error {
	width := (bits + 7) / 8
	switch {
	case tag == tagFloat && bits == 32:
		h.enc = encF32
	case tag == tagFloat && bits == 64:
		h.enc = encF64
	case tag == tagFloat:
		return bad("floats of %d bits: only 32 and 64 are read", bits)
	case bits < 8 || bits > 32:
		return bad("PCM of %d bits: only 8 to 32 are read", bits)
	default:
		h.enc = [...]encoding{encU8, encS16, encS24, encS32}[width-1]
	}
	if valid > bits {
		return bad("%d valid bits in samples of %d", valid, bits)
	}
	if h.align != h.channels*width {
		return bad("the block align of %d bytes does not fit %d channels of %d bits: the header is damaged", h.align, h.channels, bits)
	}
	h.name = "WAV " + h.enc.name
	if tag == tagPCM && valid != 8*width {
		h.name = fmt.Sprintf("WAV %d-bit PCM in %d bits", valid, 8*width)
	}
	return nil
}

// measure finds how many bytes of sound follow, given the length that the data
// chunk states. long is that of ds64 (-1: not said), which counts if wide.
func (h *wavHeader) measure(fd *feed, stated int64, wide bool, long int64) {
	left := fd.left()
	if wide {
		stated = long
	}
	unknown := stated <= 0 || !wide && stated == unfilled
	switch {
	case unknown && left == 0:
		h.length = 0 // a recording without a single sample
	case unknown:
		h.length = -1
		fd.noteThat("its recorder never filled in the length; read to the end")
	case left < 0:
		h.length = stated
		if !wide && stated >= placeholder {
			h.length = -1 // from a recorder that cannot seek; there is no telling
		}
	default:
		h.length = h.outgrown(fd, stated, left, wide)
	}
}

// outgrown sees to files with more in them than their header states, of which
// nothing may be lost: 32 bits count to 4 GiB only, which is half a day.
func (h *wavHeader) outgrown(fd *feed, stated, left int64, wide bool) int64 {
	excess := left - stated
	if wraps := excess >> 32; !wide && wraps > 0 && excess&(1<<32-1) <= tail {
		fd.noteThat("longer than its header can say (over 4 GiB); read to the end")
		return stated + wraps<<32
	}
	if !wide && stated >= placeholder && (excess > tail || excess < -tail) {
		fd.noteThat("its header states a stand-in for the length; read to the end")
		return -1
	}
	if end := fd.pos + stated; excess > 1 && h.riffEnd >= 0 && h.riffEnd <= end+1 {
		fd.noteThat("%d bytes behind the end that its header states are not read", excess)
	}
	return stated
}
