package main

import (
	"math"
	"time"

	"offbeat/capture"
)

// pacer plays a recording at the pace of the clock, a tenth of a second at a
// time.
type pacer struct {
	src   capture.Source
	rate  float64
	start time.Time
	ahead capture.Block // read and not passed on yet
	taken int
	now   func() time.Time
	sleep func(time.Duration)
}

func newPacer(src capture.Source) *pacer {
	return &pacer{src: src, rate: src.Format().Rate, now: time.Now, sleep: time.Sleep}
}

// Format is that of the recording: should we be late, the rest waits.
func (p *pacer) Format() capture.Format {
	f := p.src.Format()
	f.Encoding += ", played"
	return f
}

func (p *pacer) Close() error { return p.src.Close() }

// Note passes on what was odd about the recording.
func (p *pacer) Note() string {
	if n, ok := p.src.(interface{ Note() string }); ok {
		return n.Note()
	}
	return ""
}

func (p *pacer) Read(b *capture.Block) error {
	if p.taken == p.ahead.Len() {
		p.taken = 0
		if err := p.src.Read(&p.ahead); err != nil {
			p.ahead.Reset(0)
			b.Reset(0)
			return err
		}
	}
	b.Reset(len(p.ahead.Ch))
	n := min(max(int(p.rate/10), 1), p.ahead.Len()-p.taken)
	for c := range b.Ch {
		b.Ch[c] = append(b.Ch[c], p.ahead.Ch[c][p.taken:p.taken+n]...)
	}
	b.First = p.ahead.First + int64(p.taken)
	if p.taken == 0 {
		b.Lost, b.Cause, b.NonFinite = p.ahead.Lost, p.ahead.Cause, p.ahead.NonFinite
	}
	p.taken += n
	if p.start.IsZero() {
		p.start = p.now().Add(-p.time(b.First))
	}
	b.Wall = p.start.Add(p.time(b.First))
	// A sample is heard when it has passed.
	p.sleep(p.start.Add(p.time(b.First + int64(n))).Sub(p.now()))
	return nil
}

// time returns how far into the recording sample i lies.
func (p *pacer) time(i int64) time.Duration {
	return time.Duration(math.Round(float64(i) / p.rate * 1e9))
}
