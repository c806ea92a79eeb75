package sim

import (
	"math"
	"math/rand/v2"
)

// programme is what modulates the carrier's amplitude, by what standard-
// frequency emissions usually carry (common practice): a pulse of five cycles
// of 1000 Hz on every second, a steady tone for most of a minute, a keyed
// subcarrier, and speech towards the minute's end.
type programme struct {
	c      *Config
	dt     float64 // true seconds a sample
	speech [2]biquad
	r      *rand.Rand
	key    uint64
	on     bool
}

func newProgramme(c *Config, dt float64) *programme {
	p := &programme{c: c, dt: dt, r: rand.New(rand.NewPCG(c.Seed, 301)), key: c.Seed}
	p.on = c.SecondPulses || c.Tones || c.Subcarrier || c.Speech
	if c.Speech {
		rate := 1 / dt
		p.speech = [2]biquad{newBiquad(min(300, 0.1*rate), rate, true), newBiquad(min(2200, 0.4*rate), rate, false)}
	}
	return p
}

// fill writes the modulated amplitude (1 without modulation) of the samples
// from true time t on.
func (p *programme) fill(dst []float64, t float64) {
	c := p.c
	for i := range dst {
		u := t + float64(i)*p.dt
		sec := math.Floor(u)
		in := u - sec
		minute := math.Mod(sec, 60)
		m := 1.0
		quiet := c.SecondPulses && (in < 0.03 || in > 0.99)
		if c.SecondPulses && in < 0.005 {
			m += 0.9 * c.Depth * math.Sin(2*math.Pi*1000*in)
		}
		if c.Tones && minute < 45 && !quiet {
			f := 500.0
			if math.Mod(math.Floor(sec/60), 2) == 1 {
				f = 600
			}
			m += 0.5 * c.Depth * math.Sin(2*math.Pi*f*in)
		}
		if c.Subcarrier {
			// Strong for 0.2, 0.5 or 0.8 s, as a code would have it.
			k := (p.key + uint64(sec)*0x9e3779b97f4a7c15) >> 13 % 3
			a := 0.05
			if in > 0.03 && in < 0.2+0.3*float64(k) {
				a = 0.18
			}
			m += a * c.Depth * math.Sin(2*math.Pi*100*in)
		}
		if c.Speech && minute >= 45 && minute < 52 && !quiet {
			s := 1 + math.Sin(2*math.Pi*3.1*in)*math.Sin(2*math.Pi*1.3*u) // syllables
			m += max(-0.7, min(0.7, 0.35*s*p.speech[1].next(p.speech[0].next(p.r.NormFloat64())))) * c.Depth
		}
		dst[i] = max(0, m)
	}
}

// biquad is a second-order Butterworth section (bilinear transform).
type biquad struct {
	b0, b1, a1, a2 float64
	x1, x2, y1, y2 float64
}

func newBiquad(f, rate float64, high bool) biquad {
	k := math.Tan(math.Pi * f / rate)
	d := 1 + math.Sqrt2*k + k*k
	q := biquad{b0: k * k / d, b1: 2 * k * k / d, a1: 2 * (k*k - 1) / d, a2: (1 - math.Sqrt2*k + k*k) / d}
	if high {
		q.b0, q.b1 = 1/d, -2/d
	}
	return q
}

func (q *biquad) next(x float64) float64 {
	y := q.b0*x + q.b1*q.x1 + q.b0*q.x2 - q.a1*q.y1 - q.a2*q.y2
	q.x2, q.x1, q.y2, q.y1 = q.x1, x, q.y1, y
	return y
}
