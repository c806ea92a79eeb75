// Package recording reads samples that somebody else wrote: WAV and FLAC
// recordings, and raw PCM, from files, pipes, FIFOs and character devices.
//
// What an input holds is told from its first bytes, never from its name.
// Everything is read from front to back without seeking and in constant
// memory, so whatever works for a file works for a pipe.
//
// The header of a recording is believed only as far as the bytes bear it out:
// a recorder that was killed leaves lengths of zero, of 0xFFFFFFFF or of more
// than is there, and its sound is read to the end all the same. What was odd is
// told by Note.
//
// The reading order of the files: recording.go (Open), feed.go (bytes, waiting),
// wav.go (headers), pcm.go (the Source of WAV and raw PCM), decode.go (the
// loops over samples), flac.go (the Source of FLAC).
package recording

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"time"

	"offbeat/capture"
)

// The limits of what is opened.
const (
	minRate     = 10  // samples per second: a slow ADC
	maxRate     = 1e6 // samples per second: a software receiver
	maxChannels = 64
)

// Options says how to read an input. The zero value delivers channel 1 of a
// recording that tells its own format.
type Options struct {
	// Channels are the channels to deliver, numbered from 1, in that order.
	// Empty: channel 1 only.
	Channels []int
	// Raw describes samples that come without any header. A regular file that
	// begins as a WAV or FLAC recording is read as such even so, and Note says
	// it; a pipe is taken at the word, because looking would mean waiting.
	Raw *RawFormat
	// Reopen keeps a FIFO of raw samples open when its writer goes: Read then
	// reports that nothing arrived until the next writer comes, and what lies
	// between becomes a gap. Without it the end of the writer is io.EOF.
	Reopen bool
	// Patience bounds how long Open waits for the header of a recording that
	// comes through a pipe. Zero: for as long as it takes. Raw samples from a
	// pipe are never waited for.
	Patience time.Duration
}

// RawFormat describes samples without a header, interleaved when there is more
// than one channel.
type RawFormat struct {
	Encoding string  // s16le, s24le (three bytes a sample), s32le or f32le
	Rate     float64 // samples per second and channel, 10 to 1e6
	Channels int     // 1 to 64
}

// Noter is implemented by every Source that Open returns.
type Noter interface {
	// Note says in one line what was odd about the input so far: a header
	// that was never filled in, a recording that was cut. Empty: nothing. It
	// is complete once Read has returned io.EOF. Call it from the goroutine
	// that reads.
	Note() string
}

// Open opens the recording, FIFO or device at path; "-" is standard input.
//
// Format.Live is true for FIFOs and character devices, whose blocks carry a
// Wall: the host time of arrival less the length of what arrived. For regular
// files and standard input it is false and Wall is zero: a date in a header
// (the bext chunk of a broadcast WAV) is by the recorder's clock, whose error
// nobody knows, and is not passed on as the time of a sample.
//
// Reading from anything but a regular file, Read returns without samples after
// a quarter of a second in which nothing came. (A character device that cannot
// be polled, or a system without poll(2), blocks.) A pause of a live writer is
// not a gap: a pipe holds the writer up and loses nothing.
//
// The end of the writer of a pipe or FIFO is io.EOF, whatever the reason. Open
// does not wait for the writer of a FIFO of raw samples; Read says that nothing
// arrived until one comes.
func Open(path string, opt Options) (capture.Source, error) {
	if opt.Raw != nil {
		if err := opt.Raw.check(); err != nil {
			return nil, err
		}
	}
	fd, err := openFeed(path)
	if err != nil {
		return nil, err
	}
	if opt.Reopen && !(fd.fifo && opt.Raw != nil) {
		fd.close()
		return nil, fmt.Errorf("%s: only a FIFO of raw samples can be kept open for its next writer", fd.name)
	}
	src, err := newSource(fd, opt)
	if err != nil {
		fd.close()
		return nil, err
	}
	return src, nil
}

// newSource finds out what fd holds. It takes fd over only if it succeeds.
func newSource(fd *feed, opt Options) (capture.Source, error) {
	if opt.Raw != nil && fd.quiet {
		return newRaw(fd, opt)
	}
	if opt.Patience > 0 {
		fd.deadline = time.Now().Add(opt.Patience)
	}
	kind, err := sniff(fd)
	if err != nil {
		return nil, err
	}
	switch {
	case kind == "" && opt.Raw != nil:
		return newRaw(fd, opt)
	case kind == "WAV" || kind == "FLAC":
		if opt.Raw != nil {
			fd.noteThat("it is a %s recording, so the raw format that was given is not used", kind)
		}
		if kind == "FLAC" {
			return newFLAC(fd, opt)
		}
		return newWAV(fd, opt)
	case kind != "":
		return nil, fmt.Errorf("%s: %s: convert it to WAV or FLAC", fd.name, kind)
	}
	return nil, fmt.Errorf("%s: neither a WAV nor a FLAC recording: for samples without a header say their format, rate and channels", fd.name)
}

// sniff tells what begins at the front of fd: "WAV", "FLAC", another kind of
// sound that is not read, or "" for anything else. An ID3 tag in front, which
// some taggers put before FLAC, is skipped.
func sniff(fd *feed) (string, error) {
	head, err := fd.peek(12)
	if len(head) == 0 && errors.Is(err, io.EOF) {
		return "", fmt.Errorf("%s: empty, there is nothing to read", fd.name)
	}
	if err != nil && !errors.Is(err, io.EOF) {
		return "", fd.failure(err)
	}
	if len(head) >= 10 && string(head[:3]) == "ID3" {
		// ID3v2.4 structure, 3.1: the size is four bytes of seven bits and
		// leaves out the header of ten bytes.
		size := int64(head[6]&0x7F)<<21 | int64(head[7]&0x7F)<<14 | int64(head[8]&0x7F)<<7 | int64(head[9]&0x7F)
		if err := fd.skip(10 + size); err != nil && !errors.Is(err, io.EOF) {
			return "", fd.failure(err)
		}
		if head, err = fd.peek(12); err != nil && !errors.Is(err, io.EOF) {
			return "", fd.failure(err)
		}
		if !bytes.HasPrefix(head, []byte("fLaC")) {
			return "a tagged file that is not FLAC (MP3, perhaps)", nil
		}
	}
	return kindOf(head), nil
}

// kindOf knows the first bytes of the containers that a user may try.
func kindOf(head []byte) string {
	magic, form := "", ""
	if len(head) >= 4 {
		magic = string(head[:4])
	}
	if len(head) >= 12 {
		form = string(head[8:12])
	}
	switch {
	case magic == "fLaC":
		return "FLAC"
	case (magic == "RIFF" || magic == "RF64" || magic == "BW64") && form == "WAVE":
		return "WAV"
	case magic == "RIFF" && form != "":
		return fmt.Sprintf("a RIFF file of the kind %q, which is not sound", form)
	case magic == "RIFX":
		return "a big-endian WAV (RIFX) file, which is not read"
	case magic == "riff":
		return "a Wave64 file, which is not read"
	case magic == "FORM" && (form == "AIFF" || form == "AIFC"):
		return "an AIFF file, which is not read"
	case magic == "OggS":
		return "an Ogg file, which is not read"
	case magic == ".snd":
		return "an AU file, which is not read"
	case magic == "caff":
		return "a CAF file, which is not read"
	}
	return ""
}

// check refuses a raw format that cannot be meant.
func (r *RawFormat) check() error {
	if _, ok := rawEncodings[r.Encoding]; !ok {
		return fmt.Errorf("raw format %q: must be s16le, s24le, s32le or f32le", r.Encoding)
	}
	if r.Channels < 1 || r.Channels > maxChannels {
		return fmt.Errorf("raw format: %d channels: must be 1 to %d", r.Channels, maxChannels)
	}
	if !(r.Rate >= minRate && r.Rate <= maxRate) {
		return fmt.Errorf("raw format: sample rate %g Hz: must be 10 Hz to 1 MHz", r.Rate)
	}
	return nil
}

// pick turns channel numbers asked for into indices from 0.
func pick(name string, asked []int, have int) ([]int, error) {
	if len(asked) == 0 {
		return []int{0}, nil
	}
	idx := make([]int, len(asked))
	for i, n := range asked {
		switch {
		case n < 1:
			return nil, fmt.Errorf("%s: channel %d asked: channels are numbered from 1", name, n)
		case n > have && have == 1:
			return nil, fmt.Errorf("%s: channel %d asked, the file has 1", name, n)
		case n > have:
			return nil, fmt.Errorf("%s: channel %d asked, the file has %d", name, n, have)
		}
		idx[i] = n - 1
	}
	return idx, nil
}
