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
// {"scene": configuration}, then one Truth a second. The scene must have a
// duration; it is made as fast as possible. Drop-outs are cut out of the WAV
// file, as a recorder that loses samples would, and stand in the truth.
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
	if opt.Bits != 16 && opt.Bits != 24 && opt.Bits != 32 {
		return fmt.Errorf("simulated bench: %d bits: must be 16, 24 or 32 (float)", opt.Bits)
	}
	if cfg.DropEvery > 0 {
		return errors.New("simulated bench: a WAV file cannot hold drop-outs: its time line has no gaps")
	}
	w := bufio.NewWriterSize(wav, 1<<18)
	w.Write(header(b, opt.Bits))
	enc := json.NewEncoder(truth)
	if err := enc.Encode(map[string]any{"scene": b.Config()}); err != nil {
		return err
	}
	var blk capture.Block
	var buf []byte
	last := 0.0
	for {
		if err := ctx.Err(); err != nil {
			return err
		}
		err := b.Read(&blk)
		if err == io.EOF {
			break
		}
		if err != nil {
			return err
		}
		buf = encode(buf[:0], blk.Ch, opt.Bits)
		if _, err := w.Write(buf); err != nil {
			return err
		}
		if t := b.Truth(); t.T > last {
			last = t.T
			if err := enc.Encode(t); err != nil {
				return err
			}
		}
	}
	return w.Flush()
}

// header is a canonical WAV header. Sizes beyond 4 GiB become 0xFFFFFFFF, which
// readers take for "to the end of the file".
func header(b *Bench, bits int) []byte {
	ch := b.Format().Channels
	align := ch * bits / 8
	size := uint64(b.frames()) * uint64(align)
	clip := func(v uint64) uint32 { return uint32(min(v, math.MaxUint32)) }
	h := []byte("RIFF")
	h = binary.LittleEndian.AppendUint32(h, clip(size+36))
	h = append(h, "WAVEfmt "...)
	h = binary.LittleEndian.AppendUint32(h, 16)
	format := uint16(1)
	if bits == 32 {
		format = 3
	}
	h = binary.LittleEndian.AppendUint16(h, format)
	h = binary.LittleEndian.AppendUint16(h, uint16(ch))
	h = binary.LittleEndian.AppendUint32(h, uint32(math.Round(b.cfg.Rate)))
	h = binary.LittleEndian.AppendUint32(h, uint32(math.Round(b.cfg.Rate))*uint32(align))
	h = binary.LittleEndian.AppendUint16(h, uint16(align))
	h = binary.LittleEndian.AppendUint16(h, uint16(bits))
	h = append(h, "data"...)
	return binary.LittleEndian.AppendUint32(h, clip(size))
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
