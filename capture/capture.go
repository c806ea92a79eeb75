// Package capture says where samples come from. A Source yields Blocks of
// planar samples on a time line that counts every sample the input should have
// delivered, so that a gap is data and never a silent splice.
//
// The sub-packages are the inputs: recording (WAV, FLAC and raw PCM from files,
// pipes and FIFOs), sound (sound cards through PortAudio, behind a build tag)
// and sim (the simulated bench). None of them knows what the samples mean.
package capture

import (
	"errors"
	"time"
)

// Format describes what a Source delivers.
type Format struct {
	Rate     float64 // nominal samples per second and channel, > 0
	Channels int     // planes in every Block, >= 1
	Live     bool    // samples arrive at the pace of a clock and can be late; false for recordings
	Encoding string  // for people: "WAV 16-bit PCM", "sound card", "simulated bench"
	Frames   int64   // samples per channel if known beforehand, else 0
}

// Cause says why samples are missing before a Block.
type Cause string

// The causes of a gap. They are label values of metrics and kinds of journal events.
const (
	Overflow  Cause = "overflow"  // the input delivered faster than we read; the driver said so
	Stalled   Cause = "stalled"   // the input stopped delivering and came back
	Reopened  Cause = "reopened"  // the input was closed and opened again
	Shed      Cause = "shed"      // this daemon was too slow and dropped samples on purpose
	Simulated Cause = "simulated" // a drop-out made by the simulated bench
)

// Causes lists every Cause, in a fixed order.
var Causes = []Cause{Overflow, Stalled, Reopened, Shed, Simulated}

// Block is a run of consecutive samples. The caller owns it and passes it to
// Read again and again; Read reuses the capacity of its slices.
type Block struct {
	// Ch holds one plane per delivered channel, all of one length, full scale
	// ±1 (integer PCM is divided by 2^(bits-1); float PCM is passed on as it
	// is). Non-finite input values are replaced by 0 and counted in NonFinite.
	Ch [][]float32
	// First is the index of Ch[i][0] on the input's time line, in samples from
	// the opening of the source. It counts lost samples:
	// First == previous First + previous length + Lost.
	First int64
	// Lost is how many samples are missing immediately before First; 0: none.
	Lost int64
	// Guessed says that Lost is an estimate from the host clock.
	Guessed bool
	// Cause is why samples are missing; empty unless Lost > 0.
	Cause Cause
	// Wall is the host time at which sample First was taken, as well as it is
	// known; zero for a recording that does not say.
	Wall time.Time
	// NonFinite counts samples that were NaN or infinite and were replaced by 0.
	NonFinite int
}

// Len returns the number of samples per channel.
func (b *Block) Len() int {
	if len(b.Ch) == 0 {
		return 0
	}
	return len(b.Ch[0])
}

// Reset makes b hold n channels of length zero and clears everything else,
// keeping capacity. Sources call it at the start of Read.
func (b *Block) Reset(n int) {
	for len(b.Ch) < n {
		b.Ch = append(b.Ch, nil)
	}
	b.Ch = b.Ch[:n]
	for i := range b.Ch {
		b.Ch[i] = b.Ch[i][:0]
	}
	b.First, b.Lost, b.Guessed, b.Cause = 0, 0, false, ""
	b.Wall, b.NonFinite = time.Time{}, 0
}

// Source is an input. Exactly four returns of Read are legal:
//
//	nil, b.Len() > 0    samples, possibly preceded by a gap (b.Lost > 0)
//	nil, b.Len() == 0   nothing arrived for now: only from live sources and
//	                    pipes, which return within half a second at the latest
//	                    so that the reader can say so; call Read again
//	io.EOF, b.Len() == 0  the clean end; every later Read returns io.EOF too
//	other, b.Len() == 0   the input failed for good; every later Read returns
//	                      the same error. The error is one line that says what,
//	                      where and what to do.
//
// A Source is read by one goroutine, which also closes it after its last Read.
// Read delivers at most MaxBlock samples per channel, and in the steady state
// does not allocate.
type Source interface {
	Format() Format
	Read(b *Block) error
	Close() error
}

// MaxBlock is the greatest number of samples per channel in one Block.
const MaxBlock = 65536

// ErrNoSupport is returned when this build cannot open a kind of input.
var ErrNoSupport = errors.New("this build has no sound-card support: rebuild with `make build` (needs PortAudio's headers) or feed samples through a pipe: `… | offbeat measure --format s16le --rate 48000 -`")
