package metrics

import (
	"strings"

	"offbeat/dsp"
)

// A Family is a metric that readings kept in a journal tell: what the
// exposition shows live, under the same name and with the same labels, so that
// a history joins what is scraped. All are gauges. The counters are not among
// them: how far they had counted before is not known.
type Family struct {
	Name, Help string
	Unit       string // the last word of Name where that is a unit, else empty
	Series     []Series
}

// A Series is one of a Family's for each bench.
type Series struct {
	Labels [][2]string                  // names and values, beside bench
	Of     func(r *dsp.Reading) float64 // NaN: absent
}

// History returns the families whose values are in a reading, in a fixed order.
func History() []Family {
	var out []Family
	add := func(m metric, s Series) {
		if n := len(out); n == 0 || out[n-1].Name != m.name {
			out = append(out, m.family())
		}
		f := &out[len(out)-1]
		f.Series = append(f.Series, s)
	}
	for _, g := range gauges {
		s := Series{Of: g.of}
		if g.tone != "" {
			s.Labels = [][2]string{{"tone", g.tone}}
		}
		add(g.desc, s)
	}
	for _, state := range dsp.States {
		add(descState, Series{[][2]string{{"state", string(state)}}, func(r *dsp.Reading) float64 { return one(r.State == state) }})
	}
	for _, flag := range dsp.Flags {
		add(descFlag, Series{[][2]string{{"flag", string(flag)}}, func(r *dsp.Reading) float64 { return one(r.Has(flag)) }})
	}
	return out
}

// UpFamily returns the family that is 1 while a bench gives readings and 0 from
// StaleAfter after the last one on. It has no Series of its own.
func UpFamily() Family { return descUp.family() }

// InfoFamily returns the family that is always 1 and has what a bench compares
// in its labels. It has no Series of its own: BenchInfo.Labels makes them.
func InfoFamily() Family { return descInfo.family() }

// Labels returns the labels of InfoFamily beside bench.
func (i BenchInfo) Labels() [][2]string {
	var out [][2]string
	for n, v := range i.values() {
		out = append(out, [2]string{descInfo.labels[n+1], v})
	}
	return out
}

func (m metric) family() Family {
	f := Family{Name: m.name, Help: m.help}
	switch unit := m.name[strings.LastIndexByte(m.name, '_')+1:]; unit {
	case "hertz", "seconds", "ratio", "dbfs", "dbhz":
		f.Unit = unit
	}
	return f
}
