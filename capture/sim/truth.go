package sim

import (
	"math"
	"math/cmplx"
)

// Truth is what was true of one second of sound, by the nominal sample clock.
type Truth struct {
	T           float64 `json:"t"`                 // its middle, s
	Beat        float64 `json:"beat_hz"`           // local - carrier as sent, mean over the second, per true second
	Shift       float64 `json:"received_shift_hz"` // mean Doppler of the carrier as received, weighted by power, at RF
	Received    float64 `json:"beat_received_hz"`  // Beat - Shift
	CarrierTone float64 `json:"carrier_tone_hz"`   // as measured with the nominal clock, Doppler included
	LocalTone   float64 `json:"local_tone_hz"`
	CarrierDBFS float64 `json:"carrier_dbfs"` // with fading, before gain control
	LocalDBFS   float64 `json:"local_dbfs"`
	Phase       float64 `json:"phase_cycles"`  // of the beat as sent, at T, from the start
	Carrier     bool    `json:"carrier_heard"` // all through the second
	Local       bool    `json:"local_heard"`
	Retuned     bool    `json:"retuned"`
	Lost        int64   `json:"lost_samples"`
	Trimmed     float64 `json:"trimmed_hz"` // turns by hand so far
}

// entry is one step for the ledger.
type entry struct {
	beat           float64
	stepB, stepC   uint64
	h0, h1         complex128
	carrier, local bool
	retuned        bool
}

// ledger sums steps into seconds.
type ledger struct {
	steps  int // a second
	n      int
	second int64
	lost   int64
	cycles float64 // of the beat, at the start of the second

	sumB, sumC, half float64
	cross            complex128
	power            float64
	t                Truth
}

func (l *ledger) start(c *Config, step int) {
	l.steps = max(1, int(math.Round(c.Rate/float64(step))))
	l.reset()
}

func (l *ledger) reset() {
	l.n, l.sumB, l.sumC, l.half, l.cross, l.power = 0, 0, 0, 0, 0, 0
	l.t = Truth{Carrier: true, Local: true}
}

// add takes a step; true when it completes a second.
func (l *ledger) add(e entry, b *Bench) (Truth, bool) {
	step := float64(b.step)
	cycB := float64(int64(e.stepB)) / (1 << 63) / 2 * step
	cycC := float64(int64(e.stepC)) / (1 << 63) / 2 * step
	if l.n < l.steps/2 {
		l.half += cycB
	} else if l.steps%2 == 1 && l.n == l.steps/2 {
		l.half += cycB / 2
	}
	l.sumB += cycB
	l.sumC += cycC
	l.cross += e.h1 * cmplx.Conj(e.h0)
	l.power += (real(e.h0)*real(e.h0) + imag(e.h0)*imag(e.h0) + real(e.h1)*real(e.h1) + imag(e.h1)*imag(e.h1)) / 2
	l.t.Carrier = l.t.Carrier && e.carrier
	l.t.Local = l.t.Local && e.local
	l.t.Retuned = l.t.Retuned || e.retuned
	l.n++
	if l.n < l.steps {
		return Truth{}, false
	}
	t := l.t
	c := &b.cfg
	span := float64(l.steps) * step // samples
	t.T = float64(l.second) + 0.5
	t.Beat = l.sumB / (span * b.dts)
	if l.power > 0 {
		t.Shift = cmplx.Phase(l.cross) / (2 * math.Pi * step * b.dts)
	}
	t.Received = t.Beat - t.Shift
	perSecond := c.Rate / span // cycles of the span to nominal hertz
	if c.Hookup == "two-tone" || c.Baseband {
		t.CarrierTone = (l.sumC)*perSecond + b.sign*t.Shift/(1+c.ClockError)
		t.LocalTone = (l.sumC + b.sign*l.sumB) * perSecond
	}
	t.CarrierDBFS = c.CarrierDBFS + 10*math.Log10(max(l.power/float64(l.steps), 1e-30))
	t.LocalDBFS = c.LocalDBFS
	t.Phase = l.cycles + l.half
	t.Lost, l.lost = l.lost, 0
	t.Trimmed = b.Trimmed()
	l.cycles += l.sumB
	l.second++
	l.reset()
	return t, true
}
