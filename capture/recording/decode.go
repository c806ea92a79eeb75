package recording

import (
	"encoding/binary"
	"math"
)

// encoding is one way of writing a sample down. decode turns every stride-th
// byte of src, from its first, into len(dst) samples of full scale ±1 and
// returns how many were NaN or infinite and became 0. src must hold
// (len(dst)-1)*stride+width bytes.
type encoding struct {
	name   string // for people
	width  int    // bytes a sample
	decode func(dst []float32, src []byte, stride int) (nonFinite int)
}

var (
	encU8  = encoding{"8-bit PCM", 1, decodeU8}
	encS16 = encoding{"16-bit PCM", 2, decodeS16}
	encS24 = encoding{"24-bit PCM", 3, decodeS24}
	encS32 = encoding{"32-bit PCM", 4, decodeS32}
	encF32 = encoding{"32-bit float", 4, decodeF32}
	encF64 = encoding{"64-bit float", 8, decodeF64}

	rawEncodings = map[string]encoding{"s16le": encS16, "s24le": encS24, "s32le": encS32, "f32le": encF32}
)

// Powers of two, so that scaling rounds nothing.
const (
	scale8  = 1.0 / (1 << 7)
	scale16 = 1.0 / (1 << 15)
	scale32 = 1.0 / (1 << 31)
)

// decodeU8 reads unsigned bytes, 128 being zero.
func decodeU8(dst []float32, src []byte, stride int) int {
	o := 0
	for i := range dst {
		dst[i] = float32(int32(src[o])-128) * scale8
		o += stride
	}
	return 0
}

// decodeS16 reads signed 16-bit samples.
func decodeS16(dst []float32, src []byte, stride int) int {
	if stride == 2 {
		for len(dst) >= 8 && len(src) >= 16 {
			v := binary.LittleEndian.Uint64(src)
			w := binary.LittleEndian.Uint64(src[8:16])
			d := (*[8]float32)(dst)
			d[0] = float32(int16(v)) * scale16
			d[1] = float32(int16(v>>16)) * scale16
			d[2] = float32(int16(v>>32)) * scale16
			d[3] = float32(int16(v>>48)) * scale16
			d[4] = float32(int16(w)) * scale16
			d[5] = float32(int16(w>>16)) * scale16
			d[6] = float32(int16(w>>32)) * scale16
			d[7] = float32(int16(w>>48)) * scale16
			dst, src = dst[8:], src[16:]
		}
	}
	o := 0
	for i := range dst {
		dst[i] = float32(int16(binary.LittleEndian.Uint16(src[o:]))) * scale16
		o += stride
	}
	return 0
}

// decodeS24 reads signed samples of three bytes.
func decodeS24(dst []float32, src []byte, stride int) int {
	if stride == 3 {
		for len(dst) >= 4 && len(src) >= 12 {
			v := binary.LittleEndian.Uint64(src)
			w := binary.LittleEndian.Uint32(src[8:12])
			d := (*[4]float32)(dst)
			d[0] = float32(int32(v)<<8) * scale32
			d[1] = float32(int32(v>>16)&^0xFF) * scale32
			d[2] = float32(int32(v>>40|uint64(w)<<24)&^0xFF) * scale32
			d[3] = float32(int32(w)&^0xFF) * scale32
			dst, src = dst[4:], src[12:]
		}
	}
	o := 0
	for i := range dst {
		s := src[o : o+3 : o+3]
		dst[i] = float32(int32(s[0])<<8|int32(s[1])<<16|int32(s[2])<<24) * scale32
		o += stride
	}
	return 0
}

// decodeS32 reads signed 32-bit samples, rounded to the nearest float32.
func decodeS32(dst []float32, src []byte, stride int) int {
	if stride == 4 {
		for len(dst) >= 4 && len(src) >= 16 {
			v := binary.LittleEndian.Uint64(src)
			w := binary.LittleEndian.Uint64(src[8:16])
			d := (*[4]float32)(dst)
			d[0] = float32(int32(v)) * scale32
			d[1] = float32(int32(v>>32)) * scale32
			d[2] = float32(int32(w)) * scale32
			d[3] = float32(int32(w>>32)) * scale32
			dst, src = dst[4:], src[16:]
		}
	}
	o := 0
	for i := range dst {
		dst[i] = float32(int32(binary.LittleEndian.Uint32(src[o:]))) * scale32
		o += stride
	}
	return 0
}

// exponent masks the exponent of a float32; all ones mean NaN or infinite.
const exponent = 0x7F800000

// decodeF32 passes 32-bit floats on, those beyond full scale too.
func decodeF32(dst []float32, src []byte, stride int) (nonFinite int) {
	if stride == 4 {
		for len(dst) >= 4 && len(src) >= 16 {
			v := binary.LittleEndian.Uint64(src)
			w := binary.LittleEndian.Uint64(src[8:16])
			a, b, c, e := uint32(v), uint32(v>>32), uint32(w), uint32(w>>32)
			if a&exponent == exponent || b&exponent == exponent || c&exponent == exponent || e&exponent == exponent {
				nonFinite += decodeF32(dst[:3], src, 4) + decodeF32(dst[3:4], src[12:], 4)
			} else {
				d := (*[4]float32)(dst)
				d[0] = math.Float32frombits(a)
				d[1] = math.Float32frombits(b)
				d[2] = math.Float32frombits(c)
				d[3] = math.Float32frombits(e)
			}
			dst, src = dst[4:], src[16:]
		}
	}
	o := 0
	for i := range dst {
		v := binary.LittleEndian.Uint32(src[o:])
		if v&exponent == exponent {
			v = 0
			nonFinite++
		}
		dst[i] = math.Float32frombits(v)
		o += stride
	}
	return nonFinite
}

// decodeF64 rounds 64-bit floats to the nearest float32. One too great for a
// float32 counts as infinite.
func decodeF64(dst []float32, src []byte, stride int) (nonFinite int) {
	o := 0
	for i := range dst {
		v := float32(math.Float64frombits(binary.LittleEndian.Uint64(src[o:])))
		if math.Float32bits(v)&exponent == exponent {
			v = 0
			nonFinite++
		}
		dst[i] = v
		o += stride
	}
	return nonFinite
}
