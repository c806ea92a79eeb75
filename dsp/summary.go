package dsp

import (
	"math"

	"offbeat/dsp/stability"
)

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
	cut     []int32 // runs of one cut count the cycles of the same pair of tones
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

// mean returns the mean beat by the nominal clock, its standard uncertainty
// against the carrier as sent (noise and fading), and how it was made. Within every unbroken run the
// phase is regressed on time with one common slope. That is the best there is
// while the phase noise is white, and its uncertainty is then the regression's.
// Where the residuals wander further than neighbours differ, the carrier's
// fading (or a drifting local) makes the noise white FM or redder: then the
// mean over the unbroken runs is taken from their ends, and the Allan deviation
// says what it is worth: the largest of adev(m) * sqrt(m tau0 / T).
func (s *Summer) mean() (mean, u float64, method string) {
	slope, resid, sxx, points := s.regress()
	if points < 3 && s.wide < s.usable/2 {
		return s.weighted()
	}
	dt := float64(s.tau0)
	d1, n1 := stability.Overlapping(s.phase, s.run, dt, 1)
	white := d1 * dt / math.Sqrt(3) // sigma of white phase noise that gives this adev, cycles
	// In short runs wandering cannot show in the residuals: there the phases must
	// also be as quiet as the readings' own uncertainty says.
	trusted := white < 4*s.phaseU() || points > 30*s.runs()
	// One slow tone: a reading near the end rests on nearly all of the sound, with
	// level and offset fitted beside the beat. That beats phases told one by one,
	// unless the run is many spans long.
	if s.cfg.Hookup != TwoTone && s.cfg.LocalTone == 0 {
		if m, wu, method := s.weighted(); wu < max(resid, white)/math.Sqrt(sxx) {
			return m, wu, method
		}
	}
	if points >= 3 && (n1 < 8 || resid < 1.6*white && trusted) && s.wide < s.usable/2 {
		su := max(resid, s.phaseU(), white) / math.Sqrt(sxx)
		return slope, su, "phase regression over unbroken runs"
	}
	if mean, u, ok := s.coherent(); ok {
		return mean, math.Hypot(u, s.phaseU()/math.Sqrt(max(sxx, 1))), "coherent over the run: the carrier's steady part"
	}
	if s.wide >= s.usable/2 {
		if mean, u, ok := s.byPower(); ok {
			return mean, u, "mean weighted by the carrier's power; uncertainty from its fading"
		}
		return s.weighted()
	}
	m, held := s.ends()
	worst := 0.0
	for k := 1; float64(k)*dt <= held/3; k *= 2 {
		if a, n := stability.Overlapping(s.phase, s.run, dt, k); n >= 2 {
			// Few differences make a poor estimate: take its upper limit.
			_, high := stability.Limits(a, stability.EDF(0, n+2*k, k), 0.6827)
			worst = max(worst, high*math.Sqrt(float64(k)*dt/held))
		}
	}
	return m, max(worst, s.phaseU()/held), "mean over unbroken runs; uncertainty from the Allan deviation"
}

// regress fits phase = offset(run) + slope*t by least squares and returns the
// slope (Hz), the residuals' standard deviation (cycles), the sum of squares of
// time about the runs' means, and the number of points.
func (s *Summer) regress() (slope, resid, sxx float64, points int) {
	var sxy, syy float64
	runs := 0
	s.eachRun(func(lo, hi int) {
		var n, mt, mp float64
		var xx, xy, yy float64
		for i := lo; i < hi; i++ {
			if math.IsNaN(s.phase[i]) {
				continue
			}
			n++
			t, p := float64(i*s.tau0), s.phase[i]
			dt, dp := t-mt, p-mp
			mt += dt / n
			mp += dp / n
			xx += dt * (t - mt)
			xy += dt * (p - mp)
			yy += dp * (p - mp)
		}
		if n >= 2 {
			sxx, sxy, syy = sxx+xx, sxy+xy, syy+yy
			points += int(n)
			runs++
		}
	})
	if sxx == 0 {
		return 0, 0, 0, 0
	}
	slope = sxy / sxx
	// The residual afresh: syy - slope*sxy would cancel.
	sum := 0.0
	s.eachRun(func(lo, hi int) {
		var n, m float64
		for i := lo; i < hi; i++ {
			if !math.IsNaN(s.phase[i]) {
				n++
				m += (s.phase[i] - slope*float64(i*s.tau0) - m) / n
			}
		}
		if n < 2 {
			return
		}
		for i := lo; i < hi; i++ {
			if !math.IsNaN(s.phase[i]) {
				d := s.phase[i] - slope*float64(i*s.tau0) - m
				sum += d * d
			}
		}
	})
	if free := points - runs - 1; free > 0 {
		resid = math.Sqrt(sum / float64(free))
	}
	return slope, resid, sxx, points
}

// runs returns the number of unbroken runs of at least two phases.
func (s *Summer) runs() int {
	runs := 0
	s.eachRun(func(lo, hi int) {
		if hi-lo >= 2 {
			runs++
		}
	})
	return max(runs, 1)
}

// eachRun calls f for every stretch of one phase run.
func (s *Summer) eachRun(f func(lo, hi int)) {
	for lo := 0; lo < len(s.run); {
		hi := lo + 1
		for hi < len(s.run) && s.run[hi] == s.run[lo] {
			hi++
		}
		f(lo, hi)
		lo = hi
	}
}

// ends returns the mean beat from the first and last phase of every run,
// weighted by their lengths, and the seconds held in all.
func (s *Summer) ends() (mean, held float64) {
	cycles := 0.0
	s.eachRun(func(lo, hi int) {
		a, b := -1, -1
		for i := lo; i < hi; i++ {
			if !math.IsNaN(s.phase[i]) {
				if a < 0 {
					a = i
				}
				b = i
			}
		}
		if b > a {
			cycles += s.phase[b] - s.phase[a]
			held += float64((b - a) * s.tau0)
		}
	})
	return cycles / held, held
}

// phaseU returns the standard uncertainty of a single phase, cycles, from the
// stated uncertainty of the beats: for one second of a line in white noise
// u(phase) = u(f) T / sqrt(3) in cycles (Rife & Boorstyn: var(w) = 6/(..N^3),
// var(phi at centre) = 1/(2 N SNR)).
func (s *Summer) phaseU() float64 {
	sum, n := 0.0, 0.0
	for i, u := range s.u {
		if !math.IsNaN(u) && !math.IsNaN(s.phase[i]) {
			sum += u * u * math.Pow(max(1, s.span[i]), 3) // of one second's phase
			n++
		}
	}
	if n == 0 {
		return 0
	}
	return math.Sqrt(sum/n) / math.Sqrt(12)
}

// weighted is the mean of single readings whose spans do not overlap, taken
// from the end backwards: the latest rest on the longest spans.
func (s *Summer) weighted() (mean, u float64, method string) {
	var w, wx, n, chi float64
	upto := math.Inf(1)
	for i := len(s.beat) - 1; i >= 0; i-- {
		t := float64(i * s.tau0)
		if math.IsNaN(s.beat[i]) || !(s.u[i] > 0) || t > upto {
			continue
		}
		upto = t - max(s.span[i], float64(s.tau0))*0.999
		k := 1 / (s.u[i] * s.u[i])
		w += k
		wx += k * s.beat[i]
		n++
		// The spread about the mean so far, term by term (Welford; West 1979).
		if w > k {
			d := s.beat[i] - (wx-k*s.beat[i])/(w-k)
			chi += d * d * k * (w - k) / w
		}
	}
	if w == 0 {
		return math.NaN(), math.NaN(), "no reading with an uncertainty"
	}
	u = math.Sqrt(1 / w)
	if n > 1 {
		u *= math.Sqrt(max(1, chi/(n-1)))
	}
	return wx / w, u, "weighted mean of readings whose spans do not overlap"
}

// stability returns the overlapping Allan deviation of the offset at every
// octave of tau that the run allows.
func (s *Summer) stability() []StabilityPoint {
	out := []StabilityPoint{}
	x := make([]float64, len(s.phase))
	for i, p := range s.phase {
		x[i] = p / s.cfg.Local
	}
	for m := 1; 3*m < len(x); m *= 2 {
		a, n := stability.Overlapping(x, s.run, float64(s.tau0), m)
		if n < 2 || !(a > 0) {
			continue
		}
		p := StabilityPoint{Tau: float64(m * s.tau0), Adev: a, N: n, Low: Num(math.NaN()), High: Num(math.NaN())}
		noise, ok := stability.Identify(x, s.run, m)
		if !ok && len(out) > 0 { // too few points: the noise of the tau before, or white FM
			noise, ok = stability.Noise(0), true
		}
		if ok {
			lo, hi := stability.Limits(a, stability.EDF(noise, n+2*m, m), 0.6827)
			p.Low, p.High = Num(lo), Num(hi)
		}
		out = append(out, p)
	}
	return out
}

// drift returns the slope of the offset per day by least squares, NaN unless
// it exceeds twice its own uncertainty.
func (s *Summer) drift() float64 {
	var n, mt, mb, xx, xy float64
	for i, b := range s.beat {
		if math.IsNaN(b) {
			continue
		}
		n++
		dt := float64(i*s.tau0) - mt
		mt += dt / n
		mb += (b - mb) / n
		xx += dt * (float64(i*s.tau0) - mt)
		xy += dt * (b - mb)
	}
	if n < 60 || xx == 0 {
		return math.NaN()
	}
	slope := xy / xx
	var rr, r1, last float64
	have := false
	for i, b := range s.beat {
		if math.IsNaN(b) {
			have = false
			continue
		}
		d := b - mb - slope*(float64(i*s.tau0)-mt)
		rr += d * d
		if have {
			r1 += d * last
		}
		last, have = d, true
	}
	rho := max(0, min(0.99, r1/rr))
	u := math.Sqrt(rr / (n - 2) / xx * (1 + rho) / (1 - rho)) // neighbours that resemble each other count for less
	if !(math.Abs(slope) > 2*u) {
		return math.NaN()
	}
	return slope * 86400 / s.cfg.Local * s.clock.scale(&s.cfg)
}
