package dsp

// Hookup says what is in the audio.
type Hookup string

// The hook-ups.
const (
	TwoTone    Hookup = "two-tone"   // carrier and local as two tones from an SSB receiver
	Mixer      Hookup = "mixer"      // one tone at |local - carrier|
	Quadrature Hookup = "quadrature" // two channels, I and Q
)

// Sideband is the receiver's sideband.
type Sideband string

// The sidebands.
const (
	Upper Sideband = "usb" // tone = rf - dial
	Lower Sideband = "lsb" // tone = dial - rf
)

// Config describes one comparison. The zero value of an optional field means
// its default.
type Config struct {
	Rate             float64  // nominal samples per second, 10 to 1e6
	Hookup           Hookup   // default TwoTone
	Sideband         Sideband // default Upper
	Carrier          float64  // fC, nominal carrier frequency, Hz; default 10e6
	Local            float64  // fL, the local's nominal frequency as heard (harmonic * nominal + set-off), Hz; default Carrier
	LocalTone        float64  // roughly where the local's tone is at the start, Hz; 0: not told
	SampleRateError  float64  // e, a fraction (not ppm)
	SampleRateErrorU float64  // standard uncertainty of e, a fraction
	SearchLow        float64  // edges of the search for tones, Hz; 0, 0: from the rate
	SearchHigh       float64
	Wired            bool // the carrier is a house reference on a wire: no fading, no Doppler, never `unproven`

	OnReading func(Reading) // called once a second of sound, from the goroutine that calls Samples
	OnGlimpse func(Glimpse) // called about ten times a second; nil: glimpses are not computed
}

// Bench turns the samples of one comparison into readings. It is not safe for
// concurrent use.
type Bench struct {
	cfg Config
}

// New returns a Bench, or an error that says in one line which field is wrong
// and what is allowed.
func New(cfg Config) (*Bench, error) { return &Bench{cfg: cfg}, nil }

// Samples takes consecutive samples: one plane, or I and Q for Quadrature. It
// calls OnReading and OnGlimpse as they fall due and keeps no reference to ch.
func (b *Bench) Samples(ch [][]float32) {}

// Gap says that n samples are missing after those given so far. Every second
// that the gap covers still gets its reading.
func (b *Bench) Gap(n int64) {}

// Finish ends the input: the reading of a last second that is at least half
// there is given.
func (b *Bench) Finish() {}
