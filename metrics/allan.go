package metrics

import (
	"math"

	"offbeat/dsp"
	"offbeat/dsp/stability"
)

const (
	allanOctaves = 24     // of tau from a second: up to 97 days
	oneSigma     = 0.6827 // the probability that limits are for
)

// allan feeds a running Allan deviation with the phases of a bench's readings.
type allan struct {
	r        *stability.Running
	hertz    float64 // the local as heard: one cycle of beat is 1/hertz seconds
	t        float64 // of the latest reading
	run      int32
	phaseRun int
}

func newAllan(localHz float64) *allan {
	return &allan{r: stability.NewRunning(1, allanOctaves), hertz: localHz, t: math.NaN()}
}

// add takes the next reading. Seconds without one are missing; no difference is
// taken across a break of the phase, a new beginning of the sound, or a turn of
// the trimmer or the dial.
func (a *allan) add(r *dsp.Reading) {
	missing := math.Round(r.T-a.t) - 1
	if missing > 0 {
		a.r.Skip(int64(missing))
	}
	if missing < 0 || r.PhaseRun != a.phaseRun || r.Has(dsp.Retuned) {
		a.run++
	}
	a.t, a.phaseRun = r.T, r.PhaseRun
	a.r.Add(r.Phase/a.hertz, a.run)
}
