package main

import (
	"context"
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"offbeat/dsp/stability"
	"offbeat/metrics/journal"
)

// row is evenly spaced phases or frequencies to be judged.
type row struct {
	name   string
	phase  bool // the values are phases; else frequencies
	tau0   float64
	values []float64 // NaN: missing
	run    []int32   // of phases: breaks of continuity; nil: none
	begin  time.Time // of the first value; zero: not known
	notes  []string
}

// note adds a line about what was odd.
func (r *row) note(format string, args ...any) {
	r.notes = append(r.notes, fmt.Sprintf(format, args...))
}

// asPhase returns the phases of the row.
func (r *row) asPhase() (x []float64, run []int32) {
	if r.phase {
		return r.values, r.run
	}
	return stability.Phase(r.values, r.tau0)
}

// asFrequency returns the frequencies of the row.
func (r *row) asFrequency() []float64 {
	if r.phase {
		return stability.Frequency(r.values, r.run, r.tau0)
	}
	return r.values
}

// known counts what is not missing.
func (r *row) known() (n int) {
	for _, v := range r.values {
		if !math.IsNaN(v) {
			n++
		}
	}
	return n
}

// mostGaps bounds the even row that a column with times is laid out on, by how
// many places there may be for each reading.
const mostGaps = 1000

// spread lays a column with times out on an even grid, tau0 apart, or if that is
// 0 the median distance of its neighbours.
func (r *row) spread(n numbers, tau0 float64) error {
	order := make([]int, len(n.times))
	for i := range order {
		order[i] = i
	}
	if !slices.IsSorted(n.times) {
		slices.SortStableFunc(order, func(a, b int) int {
			switch d := n.times[a] - n.times[b]; {
			case d < 0:
				return -1
			case d > 0:
				return 1
			}
			return 0
		})
		r.note("the times are not in order: the readings were sorted by them")
	}
	if tau0 == 0 {
		var steps []float64
		for i := 1; i < len(order); i++ {
			if d := n.times[order[i]] - n.times[order[i-1]]; d > 0 {
				steps = append(steps, d)
			}
		}
		if len(steps) == 0 {
			return fmt.Errorf("%s: the times do not tell how far readings are apart: all are the same, or there is one only; say --rate or --interval", r.name)
		}
		slices.Sort(steps)
		tau0 = steps[(len(steps)-1)/2]
		// Times written to the millisecond do not make a step of 0.9999 s.
		if near := math.Round(tau0*1000) / 1000; near > 0 && math.Abs(tau0-near) < 1e-3*near {
			tau0 = near
		}
	}
	r.tau0 = tau0
	if len(order) == 0 {
		return nil
	}
	first := n.times[order[0]]
	places := (n.times[order[len(order)-1]] - first) / tau0
	if !(places < mostGaps*float64(len(order))+mostGaps) {
		return fmt.Errorf("%s: the times span %.3g places %s s apart for %d readings: are times or --rate right?", r.name, places, number(tau0), len(order))
	}
	r.values = slices.Repeat([]float64{math.NaN()}, int(math.Round(places))+1)
	taken := make([]bool, len(r.values))
	twice, off := 0, 0
	for _, i := range order {
		at := (n.times[i] - first) / tau0
		k := int(math.Round(at))
		if math.Abs(at-float64(k)) > 0.25 {
			off++
		}
		if taken[k] {
			twice++
			continue
		}
		taken[k], r.values[k] = true, n.values[i]
	}
	if twice > 0 {
		r.note("%s at a time that is taken, or nearly: the first was kept", plural(twice, "reading"))
	}
	if off > 0 {
		r.note("%s more than a quarter of a step off the even spacing of %s s", plural(off, "reading"), number(tau0))
	}
	return nil
}

// span says which readings of a journal are meant.
type span struct {
	path, bench string
	from, to    time.Time
}

// openEnd is the end of a span that has none.
var openEnd = time.Date(9999, 1, 1, 0, 0, 0, 0, time.UTC)

// when words an end of the span, nothing if it is open.
func (s *span) when(word string, t time.Time) string {
	if t.IsZero() || t.Equal(openEnd) {
		return ""
	}
	return word + t.Format(time.RFC3339)
}

// fromJournal reads a span of a journal: one place a second.
func fromJournal(ctx context.Context, s span, phase bool) (*row, error) {
	r, err := journal.OpenReadOnly(s.path)
	if err != nil {
		return nil, err
	}
	defer r.Close()
	names, err := r.Benches(ctx)
	if err != nil {
		return nil, fmt.Errorf("journal %s: %w", s.path, err)
	}
	if s.bench == "" && len(names) == 1 {
		s.bench = names[0]
	}
	switch {
	case len(names) == 0:
		return nil, fmt.Errorf("journal %s: there is no bench in it yet", s.path)
	case s.bench == "":
		return nil, fmt.Errorf("journal %s holds %d benches: say which with --bench: %s", s.path, len(names), strings.Join(names, ", "))
	case !slices.Contains(names, s.bench):
		return nil, fmt.Errorf("journal %s: there is no bench %s: it has %s", s.path, quoted(s.bench), strings.Join(names, ", "))
	}
	out := &row{name: "bench " + s.bench, phase: phase, tau0: 1}
	l := lineUp{row: out}
	if err := r.Readings(ctx, s.bench, s.from, s.to, l.add); err != nil {
		if ctx.Err() != nil {
			return nil, ctx.Err()
		}
		return nil, fmt.Errorf("journal %s: %w", s.path, err)
	}
	if len(out.values) == 0 {
		return nil, fmt.Errorf("bench %s has no reading%s%s", s.bench, s.when(" from ", s.from), s.when(" to ", s.to))
	}
	l.end()
	return out, nil
}

// lineUp puts the readings of a journal into their seconds. The sound's own time
// counts seconds exactly; where it begins anew, the host's clock tells how long
// nothing was heard.
type lineUp struct {
	*row
	last   journal.Row
	part   int32
	begins int // of the sound, after the first
	steps  int // of the host's clock
}

// longestOutage is the longest gap that is laid out in full.
const longestOutage = 400 * 24 * 3600

func (l *lineUp) add(j journal.Row) error {
	g := &j.Reading
	if len(l.values) == 0 {
		l.begin = j.At
	} else {
		sound, wall := g.T-l.last.Reading.T, j.At.Sub(l.last.At).Seconds()
		places := math.Round(sound)
		if g.PhaseRun != l.last.Reading.PhaseRun || *j.Setup != *l.last.Setup {
			l.part++
		}
		switch {
		case sound < 0.5:
			places = max(1, math.Round(wall))
			l.begins++
			l.part++
		case math.Abs(sound-wall) > 2:
			l.steps++
		}
		if places > longestOutage {
			return fmt.Errorf("nothing was heard for %s before %s: choose a span without that", length(places), j.At.Format(time.RFC3339))
		}
		for range int(places) - 1 {
			l.values, l.run = append(l.values, math.NaN()), append(l.run, l.part)
		}
	}
	if l.phase {
		l.values, l.run = append(l.values, g.Phase/j.Setup.LocalHz), append(l.run, l.part)
	} else {
		l.values, l.run = append(l.values, g.Offset), append(l.run, l.part)
	}
	l.last = j
	return nil
}

// end notes what was odd.
func (l *lineUp) end() {
	if l.begins > 0 {
		l.note("the sound began anew in this span: %s", plural(l.begins, "time"))
	}
	if l.steps > 0 {
		l.note("the host's clock was set in this span (%s): seconds were counted by the sound", plural(l.steps, "time"))
	}
}
