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
	side   *oneSide
	on     bool
}

func newProgramme(c *Config, dt float64) *programme {
	p := &programme{c: c, dt: dt, r: rand.New(rand.NewPCG(c.Seed, 301)), side: newOneSide(c, dt)}
	p.on = c.SecondPulses || c.Tones || c.Subcarrier || c.Speech
	if c.Speech {
		p.speech = [2]biquad{newBiquad(min(300*dt, 0.1), math.Sqrt2/2, true), newBiquad(min(2200*dt, 0.4), math.Sqrt2/2, false)}
	}
	return p
}

// fill writes the modulated carrier (1 without modulation) as the receiver's
// filter lets it through, for the samples from true time t on.
func (p *programme) fill(dst []complex128, t float64) {
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
			k := ((c.Seed + uint64(sec)) * 0x9e3779b97f4a7c15 >> 33) % 3
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
		dst[i] = complex(max(0, m), 0)
	}
	if p.side != nil {
		p.side.pass(dst)
	}
}
