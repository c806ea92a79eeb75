package main

import (
	"time"

	"offbeat/dsp"
	"offbeat/metrics/journal"
	"offbeat/metrics/web"
)

// What the user says at the page goes to the goroutine of the bench, which alone
// may touch it, and is written into the journal from there.

// errands is the way to the goroutine of a bench.
type errands chan func(*dsp.Bench)

// askTime is how long an answer of a bench is waited for.
const askTime = 2 * time.Second

// do runs f on the goroutine of the bench and returns what it returned. Once given
// up, f does not run any more.
func (c errands) do(f func(*dsp.Bench) error) error {
	done := make(chan error, 1)
	patience := time.NewTimer(askTime)
	defer patience.Stop()
	select {
	case c <- func(b *dsp.Bench) {
		if b == nil {
			done <- web.ErrBusy
			return
		}
		done <- f(b)
	}:
		return <-done // the bench has taken it, and answers at once
	case <-patience.C:
		return web.ErrBusy
	}
}

func (d *desk) sends() errands { return d.errands }

// wordEvent is what an event of kind journal.Identity holds besides its text.
type wordEvent struct {
	Claim dsp.Claim `json:"claim,omitempty"`
	Hz    float64   `json:"hz,omitempty"`
	Step  dsp.Step  `json:"step,omitempty"`
	Stage dsp.Stage `json:"stage,omitempty"`
}

// declare gives the user's word on which tone is which.
func (d *desk) declare(c dsp.Claim, hz float64) (settled string, err error) {
	err = d.errands.do(func(b *dsp.Bench) error {
		if settled, err = b.Declare(c, hz); err != nil {
			return err
		}
		d.log.Info("identity", "claim", c, "hz", hz, "settled", settled)
		d.keep.Event(d.name, time.Now(), journal.Identity, settled, wordEvent{Claim: c, Hz: hz})
		return nil
	})
	return settled, err
}

// step begins a guided step; an empty one gives up what is under way.
func (d *desk) step(s dsp.Step) (p dsp.Progress, err error) {
	err = d.errands.do(func(b *dsp.Bench) error {
		if s == "" {
			b.Cancel()
		} else if err := b.Ask(s); err != nil {
			return err
		}
		p = b.Progress()
		d.stepped(time.Now(), p)
		return nil
	})
	return p, err
}

// stepped keeps how far the step has come, and writes down its beginning and its
// end. It is called from the bench's goroutine, after every reading.
func (d *desk) stepped(at time.Time, p dsp.Progress) {
	d.mu.Lock()
	was := d.progress
	if p.Stage == dsp.NoStep && !was.Over() {
		p.Step, p.Stage, p.Text = was.Step, dsp.Cancelled, "the input was opened anew"
	}
	d.progress = p
	d.mu.Unlock()
	begun := !p.Over() && (was.Over() || was.Step != p.Step)
	if begun || p.Over() && !was.Over() {
		d.log.Info("step", "step", p.Step, "stage", p.Stage, "text", p.Text)
		d.keep.Event(d.name, at, journal.Identity, string(p.Step)+": "+p.Text, wordEvent{Step: p.Step, Stage: p.Stage})
	}
}

func (d *desk) lastProgress() dsp.Progress {
	d.mu.Lock()
	defer d.mu.Unlock()
	return d.progress
}

// The daemon is the web.Desk of its benches.
var _ web.Desk = (*daemon)(nil)

func (d *daemon) desk(name string) (*desk, error) {
	d.mu.Lock()
	defer d.mu.Unlock()
	if k := d.desks[name]; k != nil {
		return k, nil
	}
	return nil, web.ErrNoBench
}

// Declare implements web.Desk.
func (d *daemon) Declare(bench string, c dsp.Claim, hz float64) (string, error) {
	k, err := d.desk(bench)
	if err != nil {
		return "", err
	}
	return k.declare(c, hz)
}

// Ask implements web.Desk.
func (d *daemon) Ask(bench string, s dsp.Step) (dsp.Progress, error) {
	k, err := d.desk(bench)
	if err != nil {
		return dsp.Progress{}, err
	}
	return k.step(s)
}

// Cancel implements web.Desk.
func (d *daemon) Cancel(bench string) (dsp.Progress, error) { return d.Ask(bench, "") }

// Progress implements web.Desk.
func (d *daemon) Progress(bench string) (dsp.Progress, error) {
	k, err := d.desk(bench)
	if err != nil {
		return dsp.Progress{}, err
	}
	return k.lastProgress(), nil
}
