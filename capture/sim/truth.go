package sim

import "math"

// Truth is what was true of one second of sound, by the nominal sample clock.
type Truth struct {
	T           float64 `json:"t"`                 // its middle, s
	Beat        float64 `json:"beat_hz"`           // local - carrier as sent, mean over the second, per true second
	Shift       float64 `json:"received_shift_hz"` // mean Doppler of the carrier as received, weighted by power, at RF
	Received    float64 `json:"beat_received_hz"`  // Beat - Shift
	CarrierTone float64 `json:"carrier_tone_hz"`   // as measured with the nominal clock, Doppler included
	LocalTone   float64 `json:"local_tone_hz"`
	CarrierDBFS float64 `json:"carrier_dbfs"` // mean power of the carrier alone with fading, before gain control; -300 and less: none
	LocalDBFS   float64 `json:"local_dbfs"`
	Phase       float64 `json:"phase_cycles"`  // of the beat as sent, at T; the start's fraction of a turn included
	Carrier     bool    `json:"carrier_heard"` // all through the second
	Local       bool    `json:"local_heard"`
	Retuned     bool    `json:"retuned"`
	Lost        int64   `json:"lost_samples"`
	Trimmed     float64 `json:"trimmed_hz"` // turns by hand so far
}

// ledger sums steps into seconds.
type ledger struct {
	n      int // steps so far
	second int64
	first  int64 // sample
	total  count // turns of the beat, the first phase included
	phase  float64
	drop   *drops

	beat, tone     count
	turn, weight   float64 // integrals of power times angular frequency, and of power
	power          float64 // as weight, while the carrier is heard
	local, samples int64
	t              Truth
}

func (l *ledger) start(c *Config, total int64, phase uint64) {
	l.drop = newDrops(c, total)
	l.total.part = phase
	l.t = Truth{Carrier: true, Local: true}
}

// add takes a step; true when it completes a second.
func (l *ledger) add(s *step, b *Bench) (Truth, bool) {
	if l.n == b.parts/2 {
		// Linear within the step: the middle may fall between samples.
		l.phase = l.total.turns() + (float64(s.beat.whole)+float64(s.beat.part)/(1<<64))*s.halfway
	}
	l.n++
	l.samples += s.n
	l.total.add(s.beat, s.n)
	l.beat.add(s.beat, s.n)
	l.tone.add(s.carrier, s.n)
	power := (s.before.power() + s.after.power()) / 2
	l.turn += (s.before.turn() + s.after.turn()) / 2
	l.weight += power
	if s.hearC {
		l.power += power
	}
	if s.hearL {
		l.local++
	}
	l.t.Carrier = l.t.Carrier && s.hearC
	l.t.Local = l.t.Local && s.hearL
	l.t.Retuned = l.t.Retuned || s.retuned
	if l.n < b.parts {
		return Truth{}, false
	}
	t := l.close(b)
	*l = ledger{second: l.second + 1, first: l.first + l.samples, total: l.total, drop: l.drop, t: Truth{Carrier: true, Local: true}}
	return t, true
}

// close returns the truth of a whole second.
func (l *ledger) close(b *Bench) Truth {
	c, t := &b.cfg, l.t
	beat, tone := l.beat.turns()/float64(l.samples), l.tone.turns()/float64(l.samples) // turns a sample
	t.T = float64(l.second) + 0.5
	t.Beat = beat / b.dts
	if b.ch.two {
		t.Shift = l.turn / l.weight / (2 * math.Pi)
	}
	t.Received = t.Beat - t.Shift
	if !b.product() {
		t.CarrierTone = tone*c.Rate + b.sign*t.Shift/(1+c.ClockError)
		t.LocalTone = (tone + b.sign*beat) * c.Rate
	}
	decibel := func(share float64) float64 { return 10 * math.Log10(max(share/float64(b.parts), 1e-30)) }
	t.CarrierDBFS = c.CarrierDBFS + decibel(l.power)
	t.LocalDBFS = c.LocalDBFS + decibel(float64(l.local))
	t.Phase = l.phase
	t.Lost = l.drop.between(l.first, l.first+l.samples)
	return t
}
