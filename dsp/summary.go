package dsp

import "math"

// BudgetLine is one row of an uncertainty budget.
type BudgetLine struct {
	Source string  `json:"source"`
	Type   string  `json:"type"` // "A" or "B"
	U      float64 `json:"u"`    // standard uncertainty of the offset, dimensionless
}

// StabilityPoint is the overlapping Allan deviation at one averaging time.
type StabilityPoint struct {
	Tau  float64 `json:"tau_s"`
	Adev float64 `json:"adev"` // dimensionless
	Low  Num     `json:"low"`  // 68.27 % confidence limits
	High Num     `json:"high"`
	N    int     `json:"n"` // second differences that entered
}

// Summary is what a run of readings says, keys by the fixed contract.
type Summary struct {
	Seconds        float64           `json:"seconds"`
	UsableSeconds  float64           `json:"usable_seconds"`
	Beat           Num               `json:"beat_hz"`
	BeatAbs        Num               `json:"beat_abs_hz"`
	BeatU          Num               `json:"beat_u_hz"`
	Error          Num               `json:"error_hz"`
	Offset         Num               `json:"offset"`
	OffsetU        Num               `json:"offset_u"`
	OffsetExpanded Num               `json:"offset_expanded"`
	K              Num               `json:"k"`
	Budget         []BudgetLine      `json:"budget"`
	Stability      []StabilityPoint  `json:"stability"`
	SpreadHz       Num               `json:"spread_hz"`
	DriftPerDay    Num               `json:"drift_per_day"`
	StateSeconds   map[State]float64 `json:"state_seconds"`
	ClockPPM       Num               `json:"clock_error_ppm"` // e of the sample clock as found, ppm
	ClockUPPM      Num               `json:"clock_error_u_ppm"`
	ClockFrom      string            `json:"clock_from,omitempty"`
	Method         string            `json:"method"` // how the mean was made, or why there is none
}

// Allowances for what no data of a run can show, as half-widths of rectangular
// distributions of the offset. They are deliberately plain here.
const (
	pathAllowance    = 1e-8   // an HF carrier as received is good to about that (guidance of a national time laboratory, from memory)
	carrierAllowance = 1e-10  // standard-frequency emissions (ITU-R TF.460-6, recommends 1; from memory)
	clockAllowance   = 100e-6 // a sample clock of which nothing was said (common practice)
	coverage         = 2.0    // k of the expanded uncertainty
)

// summaryPoints bounds what a Summer keeps: beyond it, every other point is
// dropped and the spacing doubles.
const summaryPoints = 1 << 16

// Summer collects readings into a Summary in bounded memory, at most about
// 3 MB however long the run. It is not safe for concurrent use.
type Summer struct {
	cfg     Config
	n       int
	states  map[State]float64
	usable  int
	cuts    int32
	tau0    int // seconds between points
	t0      float64
	clock   clockSay  // of the latest reading
	phase   []float64 // cycles, NaN where not known
	beat    []float64 // by the nominal clock, Hz; signed if signed, else its size
	u       []float64
	run     []int32
	cut     []int32   // runs of one cut count the cycles of the same pair of tones
	span    []float64 // seconds of sound that the point's reading rests on
	level   []float64 // of the carrier by the local, amplitude; 0 where there is no beat
	w, wf   []float64 // power and power times beat, summed over the point's seconds
	wide    int       // seconds in which the carrier was smeared by Doppler
	signed  int
	spread  float64
	spreadN int
}

// NewSummer returns a Summer for the readings of a Bench with the same Config.
func NewSummer(cfg Config) *Summer {
	if cfg.Carrier == 0 {
		cfg.Carrier = 10e6
	}
	if cfg.Local == 0 {
		cfg.Local = cfg.Carrier
	}
	return &Summer{cfg: cfg, states: map[State]float64{}, tau0: 1, clock: noClock}
}

// Add takes the next reading, in order of time, one for each second.
func (s *Summer) Add(r Reading) {
	if s.n == 0 {
		s.t0 = r.T
	}
	s.states[r.State]++
	beat := r.Beat
	switch {
	case !math.IsNaN(r.Beat):
		s.signed++
	case s.signed == 0:
		beat = r.BeatAbs
	}
	if !math.IsNaN(beat) {
		s.usable++
	}
	if !math.IsNaN(r.SpreadHz) {
		s.spread += r.SpreadHz
		s.spreadN++
	}
	if r.Has(Gap) || r.Has(Retuned) {
		s.cuts++
	}
	level := s.weigh(&r, beat)
	s.clock = clockSay{e: r.ClockError, u: r.ClockErrorU, from: r.ClockFrom}
	// The clock is known better later on: until the end beats are kept by the
	// nominal one, as phases are.
	scale := s.clock.scale(&s.cfg)
	beat, r.BeatU = beat/scale, r.BeatU/scale
	if s.n%s.tau0 == 0 {
		if len(s.phase) == summaryPoints {
			s.halve()
		}
		if s.n%s.tau0 == 0 {
			s.phase = append(s.phase, r.Phase)
			s.beat = append(s.beat, beat)
			s.u = append(s.u, r.BeatU)
			s.run = append(s.run, int32(r.PhaseRun))
			s.cut = append(s.cut, s.cuts)
			s.span = append(s.span, r.Span)
			s.level = append(s.level, level)
			s.w, s.wf = append(s.w, 0), append(s.wf, 0)
		}
	}
	if k := len(s.w) - 1; level > 0 {
		s.w[k] += level * level
		s.wf[k] += level * level * beat
	}
	s.n++
}

// weigh returns the carrier's amplitude by the local's, which gain control
// leaves alone; 0 without a beat. Where levels are not told, 1.
func (s *Summer) weigh(r *Reading, beat float64) float64 {
	if math.IsNaN(beat) || s.signed > 0 && math.IsNaN(r.Beat) {
		return 0
	}
	if r.Has(Spread) {
		s.wide++
	}
	if d := r.CarrierDBFS - r.LocalDBFS; !math.IsNaN(d) {
		return math.Pow(10, d/20)
	}
	return 1
}

func (s *Summer) halve() {
	for i := range summaryPoints / 2 {
		s.phase[i], s.beat[i], s.u[i], s.run[i], s.level[i] = s.phase[2*i], s.beat[2*i], s.u[2*i], s.run[2*i], s.level[2*i]
		s.span[i], s.cut[i] = s.span[2*i], s.cut[2*i]
		s.w[i], s.wf[i] = s.w[2*i]+s.w[2*i+1], s.wf[2*i]+s.wf[2*i+1]
	}
	n := summaryPoints / 2
	s.phase, s.beat, s.u, s.run, s.level = s.phase[:n], s.beat[:n], s.u[:n], s.run[:n], s.level[:n]
	s.w, s.wf, s.span, s.cut = s.w[:n], s.wf[:n], s.span[:n], s.cut[:n]
	s.tau0 *= 2
}

// Summary returns what the readings so far say. It may be called at any time.
func (s *Summer) Summary() Summary {
	nan := Num(math.NaN())
	out := Summary{Seconds: float64(s.n), UsableSeconds: float64(s.usable), Beat: nan, BeatAbs: nan, BeatU: nan,
		Error: nan, Offset: nan, OffsetU: nan, OffsetExpanded: nan, K: nan, SpreadHz: nan, DriftPerDay: nan,
		ClockPPM: Num(ppm(s.clock.e)), ClockUPPM: Num(ppm(s.clock.u)), ClockFrom: s.clock.from,
		Budget: []BudgetLine{}, Stability: []StabilityPoint{}, StateSeconds: s.states}
	if s.spreadN > 0 {
		out.SpreadHz = Num(s.spread / float64(s.spreadN))
	}
	if s.usable == 0 {
		out.Method = s.whyNothing()
		return out
	}
	mean, u, method := s.mean()
	scale := s.clock.scale(&s.cfg)
	mean, u = mean*scale, u*scale
	out.Method = method
	out.BeatAbs, out.BeatU = Num(math.Abs(mean)), Num(u)
	out.Stability = s.stability()
	if s.signed == 0 {
		return out
	}
	out.Beat = Num(mean)
	out.Error = Num(mean - s.cfg.SetOff())
	out.Offset = out.Error / Num(s.cfg.Local)
	out.Budget = s.budget(mean, u)
	sum := 0.0
	for _, l := range out.Budget {
		sum += l.U * l.U
	}
	out.OffsetU = Num(math.Sqrt(sum))
	out.K = coverage
	out.OffsetExpanded = coverage * out.OffsetU
	out.DriftPerDay = Num(s.drift())
	return out
}

// whyNothing says in words why there is no beat.
func (s *Summer) whyNothing() string {
	if s.n == 0 {
		return "nothing usable: less than a second of sound"
	}
	most, worst := 0.0, Searching
	for _, st := range States {
		if s.states[st] > most {
			most, worst = s.states[st], st
		}
	}
	say := map[State]string{
		Silent:    "the input carried no signal: check the cable, the channel and the level",
		Searching: "no tone stood out of the noise: check tuning, aerial and coupling wire",
		Lone:      "only one of the two tones was heard: check the coupling wire, the aerial and the tuning",
		Merged:    "the tones were closer than the span could tell apart: listen longer, or set the local aside",
		Unsure:    "two tones, but not known which is the local's: say so with --local-tone",
		Apart:     "the tones were held but jumped or came and went within every second",
	}
	return "nothing usable: " + say[worst]
}

func (s *Summer) budget(mean, u float64) []BudgetLine {
	fl := s.cfg.Local
	lines := []BudgetLine{{"noise and fading of the beat", "A", u / fl}}
	clock, _ := s.clock.uncertainty(&s.cfg)
	lines = append(lines, BudgetLine{s.clock.source(&s.cfg), "B", math.Abs(mean) * clock / fl})
	if !s.cfg.Wired {
		lines = append(lines,
			BudgetLine{"Doppler of the path below the carrier as sent", "B", pathAllowance / math.Sqrt(3)},
			BudgetLine{"the carrier's own accuracy", "B", carrierAllowance / math.Sqrt(3)})
	}
	return lines
}
