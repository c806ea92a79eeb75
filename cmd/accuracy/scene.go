package main

import (
	"fmt"
	"hash/fnv"
	"io"
	"math"
	"math/rand/v2"
	"slices"
	"sort"
	"sync"
	"time"

	"offbeat/capture"
	"offbeat/capture/sim"
	"offbeat/dsp"
)

// scene is what is played and how the bench is set up for it.
type scene struct {
	sim  sim.Config
	cfg  dsp.Config
	note float64 // whatever the row wants to remember
	from float64 // rows look at readings after this time, s

	ask   dsp.Step // what the user is guided through, from askAt s on; empty: nothing
	askAt float64

	misled bool // the hint is wrong: only the step puts it right
}

// played is a scene after it was played.
type played struct {
	scene
	truth    []sim.Truth
	readings []dsp.Reading
	summary  dsp.Summary
	cpu      time.Duration

	progress  dsp.Progress // of the step
	settledAt int          // how many readings there were when it was settled
	failures  int
}

// sign of the beat in the audio.
func (s *scene) sign() float64 {
	if s.cfg.Sideband == dsp.Lower {
		return -1
	}
	return 1
}

// play plays a scene as fast as possible.
func play(s scene) (played, error) {
	p := played{scene: s}
	b, err := sim.New(s.sim)
	if err != nil {
		return p, err
	}
	cfg := s.cfg
	cfg.Rate = b.Config().Rate
	cfg.OnReading = func(r dsp.Reading) { p.readings = append(p.readings, r) }
	d, err := dsp.New(cfg)
	if err != nil {
		return p, err
	}
	sum := dsp.NewSummer(d.Config())
	var blk capture.Block
	for last := 0.0; ; {
		if err := b.Read(&blk); err == io.EOF {
			break
		} else if err != nil {
			return p, err
		}
		if t := b.Truth(); t.T > last {
			p.truth = append(p.truth, t)
			last = t.T
		}
		began := time.Now()
		d.Gap(blk.Lost)
		d.Samples(blk.Ch)
		p.guide(d)
		p.cpu += time.Since(began)
	}
	d.Finish()
	for _, r := range p.readings {
		sum.Add(r)
	}
	p.summary = sum.Summary()
	return p, nil
}

// figure is one number of a row with its limit; atLeast says on which side.
type figure struct {
	what    string
	value   float64
	limit   float64 // NaN: only told
	atLeast bool
	unit    string
}

func most(what string, v, limit float64, unit string) figure {
	return figure{what, v, limit, false, unit}
}
func least(what string, v, limit float64, unit string) figure {
	return figure{what, v, limit, true, unit}
}
func told(what string, v float64, unit string) figure {
	return figure{what, v, math.NaN(), false, unit}
}

func (f *figure) missed() bool {
	switch {
	case math.IsNaN(f.limit):
		return false
	case f.atLeast:
		return !(f.value >= f.limit)
	}
	return !(f.value <= f.limit)
}

// row is one line of the table: how its scenes are made and judged.
type row struct {
	name  string
	share float64 // of the scenes asked for; 0: all
	make  func(r *rand.Rand) scene
	judge func(all []played) []figure
	worse func(p *played) float64 // for -v: how bad a scene is
}

// run plays a row and prints it; it returns the figures missed and how many
// there were.
func (w *row) run(seed uint64, scenes, workers int, only uint64, verbose bool, out io.Writer) (missed, n int) {
	if w.share > 0 {
		scenes = max(1, int(w.share*float64(scenes)))
	}
	h := fnv.New64()
	io.WriteString(h, w.name)
	list := make([]scene, scenes)
	for i := range list {
		r := rand.New(rand.NewPCG(seed, h.Sum64()+uint64(i)))
		list[i] = w.make(r)
		list[i].sim.Seed = r.Uint64() | 1
	}
	if only != 0 {
		list = slices.DeleteFunc(list, func(s scene) bool { return s.sim.Seed != only })
		if len(list) == 0 {
			return 0, 0
		}
	}
	all, err := playAll(list, workers)
	if err != nil {
		fmt.Fprintf(out, "%s: %v\n", w.name, err)
		return 1, 1
	}
	var cpu, sound float64
	for i := range all {
		cpu += all[i].cpu.Seconds()
		sound += float64(len(all[i].readings))
	}
	fmt.Fprintf(out, "%s (%d scenes, %.4f core a bench)\n", w.name, scenes, cpu/sound)
	for _, f := range w.judge(all) {
		n++
		mark, limit := "", ""
		if !math.IsNaN(f.limit) {
			limit = fmt.Sprintf("at most %.4g", f.limit)
			if f.atLeast {
				limit = fmt.Sprintf("at least %.4g", f.limit)
			}
			mark = "ok"
		}
		if f.missed() {
			missed++
			mark = "MISSED"
		}
		fmt.Fprintf(out, "    %-52s %10.4g %-4s %-18s %s\n", f.what, f.value, f.unit, limit, mark)
	}
	if verbose && w.worse != nil {
		w.worst(all, out)
	}
	return missed, n
}

// worst prints the scenes that did worst.
func (w *row) worst(all []played, out io.Writer) {
	sort.Slice(all, func(i, j int) bool { return w.worse(&all[i]) > w.worse(&all[j]) })
	for _, p := range all[:min(4, len(all))] {
		fmt.Fprintf(out, "  worse %.4g: %+v local tone %g\n     %s summary %.5f u %.5f %s\n", w.worse(&p), p.sim, p.cfg.LocalTone, p.progress.Text, p.summary.Beat, p.summary.BeatU, p.summary.Method)
		for i, r := range p.readings {
			t := p.truthAt(i)
			fmt.Fprintf(out, "     %6.1f %-9s %9.5f u %8.2g span %5.1f truth %9.5f recv %9.5f C %8.3f L %8.3f (%8.3f %8.3f) lev %6.2f %6.2f run %d sp %.3f %v %s\n", r.T, r.State, r.Beat, r.BeatU, r.Span, t.Beat, t.Received,
				r.CarrierTone, r.LocalTone, t.CarrierTone, t.LocalTone, r.CarrierDBFS-r.LocalDBFS, t.CarrierDBFS-t.LocalDBFS, r.PhaseRun, r.SpreadHz, r.Flags, r.Why)
		}
	}
}

// truthAt returns the truth of the second of reading i.
func (p *played) truthAt(i int) sim.Truth {
	if i < len(p.truth) {
		return p.truth[i]
	}
	return sim.Truth{Beat: math.NaN(), Received: math.NaN()}
}

func playAll(list []scene, workers int) ([]played, error) {
	all := make([]played, len(list))
	errs := make([]error, len(list))
	var wg sync.WaitGroup
	next := make(chan int)
	for range workers {
		wg.Go(func() {
			for i := range next {
				all[i], errs[i] = play(list[i])
			}
		})
	}
	for i := range list {
		next <- i
	}
	close(next)
	wg.Wait()
	for _, err := range errs {
		if err != nil {
			return nil, err
		}
	}
	return all, nil
}
