package sim

import (
	"math"
	"math/bits"
)

// pitch is a frequency in turns a sample: a whole number and a fraction of
// 2^-64, from -1/2 up to 1/2. Its resolution is 2^-62 turns.
type pitch struct{ whole, part int64 }

// pitchOf returns hz at rate samples a second; what the quotient is rounded by
// is added again, as it would come to 1e-5 turns in a month.
func pitchOf(hz, rate float64) pitch {
	f := hz / rate
	w := math.Round(f)
	rest := math.FMA(-f, rate, hz) / rate
	p := int64((f-w)*(1<<62)) + int64(math.Round(rest*(1<<62)))
	return pitch{int64(w), min(p, 1<<61-1) << 2}
}

// angle returns the phase p in radians.
func angle(p uint64) float64 { return float64(int64(p)) / (1 << 63) * math.Pi }

// count is a sum of turns without rounding: whole ones and 2^-64 parts. A
// floating sum would be off by a thousandth of a turn after a month.
type count struct {
	whole int64
	part  uint64
}

// add adds n samples at p.
func (c *count) add(p pitch, n int64) {
	hi, lo := bits.Mul64(uint64(p.part), uint64(n))
	if p.part < 0 {
		hi -= uint64(n)
	}
	var carry uint64
	c.part, carry = bits.Add64(c.part, lo, 0)
	c.whole += int64(hi) + int64(carry) + p.whole*n
}

func (c count) turns() float64 { return float64(c.whole) + float64(c.part)/(1<<64) }
