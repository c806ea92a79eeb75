package main

import (
	"bufio"
	"fmt"
	"io"
	"math"
	"slices"
	"strings"
	"time"

	"offbeat/capture"
	"offbeat/dsp"
)

// writeHead says what is being read and how it is understood.
func writeHead(w io.Writer, name string, s *settings, f capture.Format, cfg dsp.Config, seconds float64) {
	what := []string{f.Encoding, hertz(f.Rate)}
	if len(s.channels()) > 1 {
		what = append(what, "channels "+channelList(s.channels()))
	} else {
		what = append(what, "channel "+channelList(s.channels()))
	}
	if seconds > 0 {
		what = append(what, length(seconds))
	}
	fmt.Fprintf(w, "%s: %s\n", name, strings.Join(what, ", "))
	local := hertz(s.local())
	if h := s.harmonic(); h > 1 {
		local += fmt.Sprintf(" × %d", h)
	}
	kind := string(cfg.Hookup)
	if cfg.Hookup != dsp.Mixer {
		kind += ", " + string(cfg.Sideband)
	}
	if s.Wired {
		kind += ", wired reference"
	}
	fmt.Fprintf(w, "%s, carrier %s, local %s", kind, hertz(cfg.Carrier), local)
	if d := cfg.SetOff(); d != 0 {
		fmt.Fprintf(w, ", set off by %+g Hz", d)
	}
	fmt.Fprint(w, "\n\n")
}

// table shows the readings, several seconds to a row.
type table struct {
	every  int
	rows   int
	n      int // seconds in the present row
	from   float64
	last   dsp.Reading
	beats  []float64 // of the row
	usable int
	flags  map[dsp.Flag]bool
	states map[dsp.State]int
	signed bool
}

// newTable chooses a length of row that gives about two dozen of them.
func newTable(every int, seconds float64) *table {
	if every == 0 {
		every = 10
		if seconds > 0 {
			for _, every = range []int{1, 2, 5, 10, 20, 30, 60, 120, 300, 600, 1200, 1800, 3600, 7200, 14400, 43200, 86400} {
				if seconds/float64(every) <= 25 {
					break
				}
			}
		}
	}
	return &table{every: every, flags: map[dsp.Flag]bool{}, states: map[dsp.State]int{}}
}

// full adds a reading and reports whether the row is complete.
func (t *table) full(r *dsp.Reading) bool {
	if t.n == 0 {
		t.from = r.T - 0.5
		t.beats, t.usable, t.signed = t.beats[:0], 0, false
		clear(t.flags)
		clear(t.states)
	}
	t.n++
	t.states[r.State]++
	for _, f := range r.Flags {
		t.flags[f] = true
	}
	beat := r.Beat
	if math.IsNaN(beat) && !t.signed {
		beat = r.BeatAbs
	} else if !t.signed {
		t.signed = true
		t.beats = t.beats[:0] // sizes and signed beats do not mix
	}
	if !math.IsNaN(beat) {
		t.beats = append(t.beats, beat)
	}
	t.last = *r
	return t.n >= t.every
}

const rowShape = "%10s  %-10s %17s %11s  %11s %11s  %9s  %7s  %s\n"

// row writes the row: the mean of its one-second beats, and by how much they
// scatter (a row of one second: the standard uncertainty of that second).
func (t *table) row(w io.Writer) {
	if t.rows%40 == 0 {
		fmt.Fprintf(w, rowShape, "from", "state", "beat, Hz", "±", "carrier, Hz", "local, Hz", "C/N0, dB", "seconds", "")
	}
	t.rows++
	beat, scatter := "-", "-"
	if n := len(t.beats); n > 0 {
		mean, dev := meanAndDeviation(t.beats)
		if n == 1 {
			dev = t.last.BeatU
		}
		dec := 6
		if dev > 0 && !math.IsInf(dev, 0) {
			dec = min(max(decimals(dev), 0), 9)
			scatter = fixed(dev, dec)
		}
		if beat = signed(mean, dec); !t.signed {
			beat = "±" + beat[1:]
		}
	}
	if len(t.beats) == 0 && !math.IsNaN(t.last.BeatWithin) {
		beat = fmt.Sprintf("within ±%.2g", t.last.BeatWithin)
	}
	var flags []string
	for _, f := range dsp.Flags {
		if t.flags[f] {
			flags = append(flags, string(f))
		}
	}
	fmt.Fprintf(w, rowShape, clock(t.from), t.state(), beat, scatter, known(t.last.CarrierTone, 3), known(t.last.LocalTone, 3),
		known(t.last.CarrierCN0, 0)+"/"+known(t.last.LocalCN0, 0), fmt.Sprintf("%d/%d", len(t.beats), t.n), strings.Join(flags, " "))
	t.n = 0
}

// state returns the state of most of the row.
func (t *table) state() dsp.State {
	return slices.MaxFunc(dsp.States, func(a, b dsp.State) int { return t.states[a] - t.states[b] })
}

// end writes a row that is not full.
func (t *table) end(w io.Writer) {
	if t.n > 0 {
		t.row(w)
	}
	if t.rows > 0 {
		fmt.Fprintln(w)
	}
}

func known(v float64, dec int) string {
	if math.IsNaN(v) {
		return "-"
	}
	return fixed(v, dec)
}

func meanAndDeviation(v []float64) (mean, dev float64) {
	for _, x := range v {
		mean += x / float64(len(v))
	}
	if len(v) < 2 {
		return mean, math.NaN()
	}
	for _, x := range v {
		dev += (x - mean) * (x - mean) / float64(len(v)-1)
	}
	return mean, math.Sqrt(dev)
}

// liveLine is the last line of a terminal, overwritten as the work goes on. A
// nil liveLine shows nothing.
type liveLine struct {
	w     *bufio.Writer
	total float64 // seconds expected; 0: not known
	shown time.Time
	on    bool
}

func (l *liveLine) expect(seconds float64) {
	if l != nil {
		l.total = seconds
	}
}

// show tells of the latest reading, ten times a second at most.
func (l *liveLine) show(r *dsp.Reading) {
	if l == nil || time.Since(l.shown) < 100*time.Millisecond {
		return
	}
	l.shown = time.Now()
	l.on = true
	fmt.Fprintf(l.w, "\r\x1b[K%s  %s", clock(r.T+0.5), r.State)
	switch {
	case !math.IsNaN(r.Beat):
		fmt.Fprintf(l.w, "  beat %+.4f Hz  offset %+.2e", r.Beat, r.Offset)
	case !math.IsNaN(r.BeatAbs):
		fmt.Fprintf(l.w, "  beat ±%.4f Hz", r.BeatAbs)
	case !math.IsNaN(r.BeatWithin):
		fmt.Fprintf(l.w, "  beat within ±%.2g Hz", r.BeatWithin)
	}
	if l.total > 0 {
		fmt.Fprintf(l.w, "  (%.0f %% read)", min(100*(r.T+0.5)/l.total, 100))
	}
	l.w.Flush() // an error stays in the writer, where the next flush finds it
}

func (l *liveLine) clear() {
	if l != nil && l.on {
		l.w.WriteString("\r\x1b[K")
		l.on = false
	}
}
