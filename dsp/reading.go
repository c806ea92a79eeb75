package dsp

import (
	"encoding/json"
	"math"
	"strconv"
)

// State says what a reading knows of the two tones.
type State string

// The states of a reading.
const (
	Silent    State = "silent"    // no signal at the input
	Searching State = "searching" // signal, no tone
	Lone      State = "lone"      // one of the two tones only
	Apart     State = "apart"     // both held, and known which is which
	Merged    State = "merged"    // closer than the present span can tell apart
	Unsure    State = "unsure"    // two tones, not known which is which
)

// States lists every State in a fixed order.
var States = []State{Silent, Searching, Lone, Apart, Merged, Unsure}

// Flag is a reason to trust a reading less.
type Flag string

// The flags of a reading.
const (
	Faded    Flag = "faded"    // the carrier is in a deep fade
	Spread   Flag = "spread"   // the carrier is smeared by Doppler
	Twilight Flag = "twilight" // the sun rises or sets along the path
	Clipped  Flag = "clipped"  // samples at full scale
	Gap      Flag = "gap"      // samples were lost in this second
	Retuned  Flag = "retuned"  // the receiver or the trimmer jumped
	Unproven Flag = "unproven" // no evidence that the carrier tone is the off-air carrier
)

// Flags lists every Flag in a fixed order.
var Flags = []Flag{Faded, Spread, Twilight, Clipped, Gap, Retuned, Unproven}

// Reading is what one second of sound says. A number that is not known is NaN.
//
// Frequencies are in hertz and corrected for the sample clock's error: the one
// stated, or else ClockError as soon as it is known.
// Signs follow the model of the package: Beat > 0 means that the local
// oscillator is high. All u are standard uncertainties (k = 1) of the quantity
// as received in the span; OffsetU holds also what the sample clock's adds, as
// far as that is stated or known.
type Reading struct {
	T           float64 // middle of the second, s from the first sample, by the nominal sample clock
	State       State
	Beat        float64 // local - carrier at RF, Hz; only when sign and identity are known
	BeatU       float64 // of Beat or BeatAbs, Hz
	BeatAbs     float64 // |beat|, Hz, also when only the size is known
	BeatWithin  float64 // of a beat too slow to be measured yet: its size is below this, Hz
	Error       float64 // Beat - set-off, Hz
	Offset      float64 // Error / local frequency as heard, dimensionless
	OffsetU     float64
	CarrierTone float64 // Hz in the audio
	LocalTone   float64
	CarrierDBFS float64 // dB of a full-scale sine
	LocalDBFS   float64
	CarrierCN0  float64 // tone power over noise power in 1 Hz, dB-Hz
	LocalCN0    float64
	SpreadHz    float64 // rms Doppler width of the carrier, Hz
	Span        float64 // seconds of sound the beat rests on
	Phase       float64 // beat phase, cycles, same sign as Beat, continuous within one PhaseRun
	PhaseRun    int     // grows by one each time continuity of Phase is lost
	InputDBFS   float64 // rms level of the input in this second, dB of a full-scale sine; -Inf never, NaN when no sample came
	Clipped     int     // samples at or beyond full scale in this second
	ClockError  float64 // e of the sample clock as found from second pulses and the host's clock, a fraction: true rate = nominal * (1 + e)
	ClockErrorU float64
	ClockFrom   string // in words, what that rests on; with ClockError unknown: what contradicts what
	Flags       []Flag // in the order of Flags
	Why         string // one short sentence: why it believes what it believes
}

// Blank returns a Reading with every number unknown.
func Blank(t float64, s State) Reading {
	n := math.NaN()
	return Reading{T: t, State: s, Beat: n, BeatU: n, BeatAbs: n, BeatWithin: n, Error: n, Offset: n, OffsetU: n,
		CarrierTone: n, LocalTone: n, CarrierDBFS: n, LocalDBFS: n, CarrierCN0: n, LocalCN0: n,
		SpreadHz: n, Span: n, Phase: n, InputDBFS: n, ClockError: n, ClockErrorU: n}
}

// Has reports whether the reading carries flag f.
func (r *Reading) Has(f Flag) bool {
	for _, g := range r.Flags {
		if g == f {
			return true
		}
	}
	return false
}

// Glimpse is the quick estimate, about ten a second, for the eyes while
// trimming. A number that is not known is NaN.
type Glimpse struct {
	T       float64 // middle of the sound it rests on, s
	Upto    float64 // end of the sound it rests on, s
	State   State
	Beat    float64 // as in Reading
	BeatAbs float64
	BeatU   float64
	Turn    float64 // beat phase, cycles in [0, 1): where the beat hand points
}

// Num marshals as a JSON number, or null when it is not finite.
type Num float64

// MarshalJSON implements json.Marshaler.
func (n Num) MarshalJSON() ([]byte, error) {
	if f := float64(n); math.IsNaN(f) || math.IsInf(f, 0) {
		return []byte("null"), nil
	}
	return json.Marshal(float64(n))
}

// UnmarshalJSON implements json.Unmarshaler; null becomes NaN.
func (n *Num) UnmarshalJSON(b []byte) error {
	if string(b) == "null" {
		*n = Num(math.NaN())
		return nil
	}
	return json.Unmarshal(b, (*float64)(n))
}

type readingJSON struct {
	T           Num    `json:"t"`
	State       State  `json:"state"`
	Beat        Num    `json:"beat_hz"`
	BeatU       Num    `json:"beat_u_hz"`
	BeatAbs     Num    `json:"beat_abs_hz"`
	BeatWithin  Num    `json:"beat_within_hz"`
	Error       Num    `json:"error_hz"`
	Offset      Num    `json:"offset"`
	OffsetU     Num    `json:"offset_u"`
	CarrierTone Num    `json:"carrier_tone_hz"`
	LocalTone   Num    `json:"local_tone_hz"`
	CarrierDBFS Num    `json:"carrier_dbfs"`
	LocalDBFS   Num    `json:"local_dbfs"`
	CarrierCN0  Num    `json:"carrier_cn0_dbhz"`
	LocalCN0    Num    `json:"local_cn0_dbhz"`
	SpreadHz    Num    `json:"spread_hz"`
	Span        Num    `json:"span_s"`
	Phase       Num    `json:"phase_cycles"`
	PhaseRun    int    `json:"phase_run"`
	InputDBFS   Num    `json:"input_dbfs"`
	Clipped     int    `json:"clipped_samples"`
	ClockPPM    Num    `json:"clock_error_ppm"`
	ClockUPPM   Num    `json:"clock_error_u_ppm"`
	ClockFrom   string `json:"clock_from,omitempty"`
	Flags       []Flag `json:"flags"`
	Why         string `json:"why,omitempty"`
}

// MarshalJSON writes the reading by the fixed contract of the command.
func (r Reading) MarshalJSON() ([]byte, error) { return r.AppendJSON(nil), nil }

// AppendJSON appends what MarshalJSON writes to dst: a reading a second for
// months is worth not going through reflection.
func (r *Reading) AppendJSON(dst []byte) []byte {
	num := func(key string, v float64) {
		dst = append(dst, key...)
		if math.IsNaN(v) || math.IsInf(v, 0) {
			dst = append(dst, "null"...)
			return
		}
		dst = strconv.AppendFloat(dst, v, 'g', -1, 64)
	}
	num(`{"t":`, r.T)
	dst = append(dst, `,"state":"`...)
	dst = append(dst, r.State...)
	num(`","beat_hz":`, r.Beat)
	num(`,"beat_u_hz":`, r.BeatU)
	num(`,"beat_abs_hz":`, r.BeatAbs)
	num(`,"beat_within_hz":`, r.BeatWithin)
	num(`,"error_hz":`, r.Error)
	num(`,"offset":`, r.Offset)
	num(`,"offset_u":`, r.OffsetU)
	num(`,"carrier_tone_hz":`, r.CarrierTone)
	num(`,"local_tone_hz":`, r.LocalTone)
	num(`,"carrier_dbfs":`, r.CarrierDBFS)
	num(`,"local_dbfs":`, r.LocalDBFS)
	num(`,"carrier_cn0_dbhz":`, r.CarrierCN0)
	num(`,"local_cn0_dbhz":`, r.LocalCN0)
	num(`,"spread_hz":`, r.SpreadHz)
	num(`,"span_s":`, r.Span)
	num(`,"phase_cycles":`, r.Phase)
	dst = append(dst, `,"phase_run":`...)
	dst = strconv.AppendInt(dst, int64(r.PhaseRun), 10)
	num(`,"input_dbfs":`, r.InputDBFS)
	dst = append(dst, `,"clipped_samples":`...)
	dst = strconv.AppendInt(dst, int64(r.Clipped), 10)
	num(`,"clock_error_ppm":`, ppm(r.ClockError))
	num(`,"clock_error_u_ppm":`, ppm(r.ClockErrorU))
	if r.ClockFrom != "" {
		dst = append(dst, `,"clock_from":`...)
		dst = strconv.AppendQuote(dst, r.ClockFrom)
	}
	dst = append(dst, `,"flags":[`...)
	for i, f := range r.Flags {
		if i > 0 {
			dst = append(dst, ',')
		}
		dst = append(dst, '"')
		dst = append(dst, f...)
		dst = append(dst, '"')
	}
	dst = append(dst, ']')
	if r.Why != "" {
		dst = append(dst, `,"why":`...)
		dst = strconv.AppendQuote(dst, r.Why) // plain ASCII text of this package
	}
	return append(dst, '}')
}

// UnmarshalJSON reads what MarshalJSON wrote.
func (r *Reading) UnmarshalJSON(b []byte) error {
	var j readingJSON
	if err := json.Unmarshal(b, &j); err != nil {
		return err
	}
	*r = Reading{float64(j.T), j.State, float64(j.Beat), float64(j.BeatU), float64(j.BeatAbs), float64(j.BeatWithin), float64(j.Error),
		float64(j.Offset), float64(j.OffsetU), float64(j.CarrierTone), float64(j.LocalTone), float64(j.CarrierDBFS), float64(j.LocalDBFS),
		float64(j.CarrierCN0), float64(j.LocalCN0), float64(j.SpreadHz), float64(j.Span), float64(j.Phase), j.PhaseRun,
		float64(j.InputDBFS), j.Clipped, float64(j.ClockPPM) / 1e6, float64(j.ClockUPPM) / 1e6, j.ClockFrom, j.Flags, j.Why}
	return nil
}

// ppm returns a fraction in parts per million, to the millionth of one.
func ppm(v float64) float64 { return math.Round(v*1e12) / 1e6 }
