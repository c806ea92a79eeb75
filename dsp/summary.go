package dsp

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
	Method         string            `json:"method"` // how the mean was made, or why there is none
}

// Summer collects readings into a Summary in bounded memory. It is not safe
// for concurrent use.
type Summer struct {
	cfg Config
}

// NewSummer returns a Summer for the readings of a Bench with the same Config.
func NewSummer(cfg Config) *Summer { return &Summer{cfg: cfg} }

// Add takes the next reading, in order of time.
func (s *Summer) Add(r Reading) {}

// Summary returns what the readings so far say. It may be called at any time.
func (s *Summer) Summary() Summary { return Summary{} }
