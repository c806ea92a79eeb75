package sim

import (
	"bufio"
	"context"
	"encoding/binary"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"

	"offbeat/capture"
)

// WriteOptions says how samples are written.
type WriteOptions struct {
	Bits int // 16 (default), 24, or 32 for float
}

// Write writes a scene as a WAV file, and its truth as JSON lines: first
// {"scene": configuration, "version": Version}, seed and defaults filled in, then
// one Truth for each whole second. The scene must have a duration and no drop-outs, for which a WAV
// file has no place; it is made as fast as possible. Samples beyond full scale
// are clipped, integer ones rounded to even.
func Write(ctx context.Context, wav, truth io.Writer, cfg Config, opt WriteOptions) error {
	cfg.Pace = false
	b, err := New(cfg)
	if err != nil {
		return err
	}
	if b.frames() <= 0 {
		return errors.New("simulated bench: a recording needs a duration above 0")
	}
	if opt.Bits == 0 {
		opt.Bits = 16
	}
	if cfg.DropEvery > 0 {
		return errors.New("simulated bench: a WAV file cannot hold drop-outs: its time line has no gaps")
	}
	if opt.Bits != 16 && opt.Bits != 24 && opt.Bits != 32 {
		return fmt.Errorf("simulated bench: %d bits: must be 16, 24 or 32 (float)", opt.Bits)
	}
	w := bufio.NewWriterSize(wav, 1<<18)
	w.Write(header(b, opt.Bits))
	enc := json.NewEncoder(truth)
	if err := enc.Encode(map[string]any{"scene": b.Config(), "version": Version}); err != nil {
		return err
	}
	var told error
	b.told = func(t Truth) {
		if told == nil {
			told = enc.Encode(t)
		}
	}
	var blk capture.Block
	var buf []byte
	for {
		if err := ctx.Err(); err != nil {
			return err
		}
		switch err := b.Read(&blk); {
		case err == io.EOF:
			if b.frames()*int64(b.planes*opt.Bits/8)%2 == 1 {
				w.WriteByte(0) // chunks are padded to even length
			}
			return w.Flush()
		case err != nil:
			return err
		case told != nil:
			return told
		}
		buf = encode(buf[:0], blk.Ch, opt.Bits)
		if _, err := w.Write(buf); err != nil {
			return err
		}
	}
}

// header is a canonical WAV header; floating point has its format chunk extended
// and a fact chunk, as the format's description asks of everything but PCM. Sizes
// beyond 4 GiB become 0xFFFFFFFF, which readers take for "to the end of the file".
func header(b *Bench, bits int) []byte {
	le := binary.LittleEndian
	ch := b.planes
	align := ch * bits / 8
	size := uint64(b.frames()) * uint64(align)
	clip := func(v uint64) uint32 { return uint32(min(v, math.MaxUint32)) }
	format, length := uint16(1), uint32(16)
	if bits == 32 {
		format, length = 3, 18
	}
	h := append([]byte("WAVEfmt "), byte(length), 0, 0, 0)
	h = le.AppendUint16(h, format)
	h = le.AppendUint16(h, uint16(ch))
	h = le.AppendUint32(h, uint32(math.Round(b.cfg.Rate)))
	h = le.AppendUint32(h, uint32(math.Round(b.cfg.Rate))*uint32(align))
	h = le.AppendUint16(h, uint16(align))
	h = le.AppendUint16(h, uint16(bits))
	if bits == 32 {
		h = append(h, 0, 0)
		h = append(h, "fact\x04\x00\x00\x00"...)
		h = le.AppendUint32(h, clip(uint64(b.frames())))
	}
	h = append(h, "data"...)
	h = le.AppendUint32(h, clip(size))
	return append(le.AppendUint32([]byte("RIFF"), clip(uint64(len(h))+size+size%2)), h...)
}

// encode interleaves the planes.
func encode(dst []byte, ch [][]float32, bits int) []byte {
	for i := range ch[0] {
		for _, x := range ch {
			v := float64(x[i])
			switch bits {
			case 16:
				dst = binary.LittleEndian.AppendUint16(dst, uint16(int16(max(-32768, min(32767, math.RoundToEven(v*32768))))))
			case 24:
				s := int32(max(-8388608, min(8388607, math.RoundToEven(v*8388608))))
				dst = append(dst, byte(s), byte(s>>8), byte(s>>16))
			default:
				dst = binary.LittleEndian.AppendUint32(dst, math.Float32bits(x[i]))
			}
		}
	}
	return dst
}
