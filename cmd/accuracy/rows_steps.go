package main

import (
	"fmt"
	"math"
	"math/rand/v2"
	"strings"

	"offbeat/capture/sim"
	"offbeat/dsp"
)

// guide begins the scene's step, and begins it again when it fails, as a user
// would.
func (p *played) guide(d *dsp.Bench) {
	if p.ask == "" || float64(len(p.readings)) < p.askAt || p.progress.Stage == dsp.Settled {
		return
	}
	was := p.progress.Stage
	p.progress = d.Progress()
	switch p.progress.Stage {
	case dsp.Settled:
		p.settledAt = len(p.readings)
	case dsp.NoStep, dsp.Failed, dsp.Cancelled:
		if was != p.progress.Stage && p.progress.Stage == dsp.Failed {
			p.failures++
		}
		_ = d.Ask(p.ask) // where that is refused now, in a second it may not be
	}
}

// namesLocal says that a pull of the wire was settled, and on the right tone.
func (p *played) namesLocal() (settled, right bool) {
	var f float64
	if _, err := fmt.Sscanf(p.progress.Text, "the tone at %f Hz is the local's", &f); err != nil || p.progress.Stage != dsp.Settled {
		return false, false
	}
	t := p.truthAt(p.settledAt - 1)
	return true, math.Abs(f-t.LocalTone) < math.Abs(f-t.CarrierTone)
}

// stepped is a scene at whose bench a step is taken: a carrier that may fade, a
// hint or none, levels that differ, perhaps gain control and drift.
func stepped(r *rand.Rand, ask dsp.Step) scene {
	s := base(r, either(r)*(2.5+9*r.Float64()))
	s.ask, s.askAt = ask, 12
	if r.IntN(2) == 0 {
		s.cfg.LocalTone = 0
	}
	s.sim.CarrierCN0 = 45 + 15*r.Float64()
	s.sim.LocalDBFS = s.sim.CarrierDBFS + 10*(2*r.Float64()-1)
	s.sim.AGC = r.IntN(2) == 0
	s.sim.ReceiverDrift = 0.5 * (2*r.Float64() - 1)
	if r.IntN(3) > 0 {
		s.fade(0.03*math.Pow(10, r.Float64()), 0)
		if r.IntN(2) == 0 {
			s.sim.RiceK = 4
		}
	}
	return s
}

// mistakenFrom counts the wrong claims from a reading on.
func (p *played) mistakenFrom(from int) (n int) {
	for i := from; i < len(p.readings); i++ {
		if p.mistaken(i) {
			n++
		}
	}
	return n
}

// restAfter returns the readings after the step up to the next time that the dial
// is moved or the wire pulled, with no step under way, as from, to.
func (p *played) restAfter() (from, to int) {
	for to = p.settledAt; to < len(p.readings); to++ {
		for _, x := range p.sim.Retunes {
			if int(x.At) == to+1 {
				return p.settledAt, to
			}
		}
		for _, x := range p.sim.LocalAway {
			if int(x[0]) == to+1 {
				return p.settledAt, to
			}
		}
	}
	return p.settledAt, to
}

func judgePull(all []played) []figure {
	settled, wrong, after, later, failures := 0, 0, 0, 0, 0
	var took []float64
	for i := range all {
		p := &all[i]
		failures += p.failures
		if ok, right := p.namesLocal(); ok {
			settled++
			took = append(took, float64(p.settledAt)-p.askAt)
			if !right {
				wrong++
			}
			from, to := p.restAfter()
			after += p.mistakenFrom(from) - p.mistakenFrom(to)
			later += p.mistakenFrom(to)
		}
	}
	return []figure{
		least("settled", percent(settled, len(all)), 95, "%"),
		most("settled on the wrong tone", float64(wrong), 0, ""),
		most("wrong seconds after that", float64(after), 0, ""),
		told("wrong seconds after further pulls without a step", float64(later), ""),
		told("begun again, times", float64(failures), ""),
		told("median time it took", median(took), "s"),
	}
}

func judgeDial(all []played) []figure {
	alike, other, unproven, seconds, wrong, later := 0, 0, 0, 0, 0, 0
	for i := range all {
		p := &all[i]
		switch {
		case p.progress.Stage != dsp.Settled:
			continue
		case !strings.Contains(p.progress.Text, "both tones moved"):
			other++
			continue
		}
		alike++
		from, to := p.restAfter()
		wrong += p.mistakenFrom(from) - p.mistakenFrom(to)
		later += p.mistakenFrom(to)
		for _, r := range p.readings[from:to] {
			if r.State == dsp.Apart {
				seconds++
				if r.Has(dsp.Unproven) {
					unproven++
				}
			}
		}
	}
	return []figure{
		least("both seen to move alike", percent(alike, len(all)), 95, "%"),
		most("settled otherwise", float64(other), 0, ""),
		most("seconds apart but unproven after that", float64(unproven), 0, ""),
		told("seconds apart after that", float64(seconds), ""),
		most("wrong seconds after that", float64(wrong), 0, ""),
		told("wrong seconds after further moves without a step", float64(later), ""),
	}
}

func judgeNobody(all []played) []figure {
	settled := 0
	for i := range all {
		if all[i].progress.Stage == dsp.Settled {
			settled++
		}
	}
	return []figure{most("settled", float64(settled), 0, "")}
}

func unsettled(p *played) float64 {
	if p.progress.Stage != dsp.Settled {
		return 1
	}
	ok, right := p.namesLocal()
	if ok && !right {
		return 1000
	}
	if ok {
		return float64(p.mistakenFrom(p.settledAt))
	}
	return 0
}

func stepRows() []row {
	return []row{
		{name: "steps: pull the wire",
			make: func(r *rand.Rand) scene {
				s := stepped(r, dsp.PullWire)
				if r.IntN(2) == 0 {
					s.cfg.LocalTone, s.misled = s.sim.Tone, true // that is the carrier's
				}
				for at := 22 + 4*r.Float64(); len(s.sim.LocalAway) < 4; at += 26 + 8*r.Float64() { // three pulls and one more
					s.sim.LocalAway = append(s.sim.LocalAway, [2]float64{at, at + 12})
				}
				s.sim.Duration = 170
				return s
			},
			judge: judgePull, worse: unsettled},
		{name: "steps: fades, and nobody pulls the wire",
			make: func(r *rand.Rand) scene {
				s := stepped(r, dsp.PullWire)
				s.fade(0.02*math.Pow(10, 1.3*r.Float64()), 0)
				s.sim.RiceK = 0
				s.sim.Duration = 600
				return s
			},
			judge: judgeNobody, worse: func(p *played) float64 { return 1 - unsettled(p) }},
		{name: "steps: move the dial",
			make: func(r *rand.Rand) scene {
				s := stepped(r, dsp.MoveDial)
				s.sim.Retunes = nil
				for at := 24.0; at < 100; at += 25 {
					s.sim.Retunes = append(s.sim.Retunes, sim.Step{At: at + r.Float64(), By: either(r) * (6 + 40*r.Float64())})
				}
				s.sim.Duration = 130
				return s
			},
			judge: judgeDial, worse: func(p *played) float64 {
				n := unsettled(p) + float64(p.mistakenFrom(p.settledAt))
				if p.progress.Stage == dsp.Settled && !strings.Contains(p.progress.Text, "both tones moved") {
					n += 1000
				}
				return n
			}},
	}
}
