package main

import (
	"math"
	"time"

	"offbeat/capture"
)

// timeline places the samples of one bench in time. It has no clock of its own:
// the caller says what the host time is. All counts are samples per channel.
//
// The bench's line runs as the input's does, with one addition: when nothing
// has arrived for a second, the missing sound is counted on as it passes
// (idle), and taken off what the input says it lost when it comes back. If it
// lost less than was counted on - a pipe whose writer only rested lost
// nothing - no sample is thrown away for it: the line stays ahead.
type timeline struct {
	rate  float64
	next  int64     // the input's number of the next sample
	n     int64     // samples on the bench's line so far, given or missing
	ahead int64     // of these, counted as missing since the latest sample
	seen  time.Time // host time when samples arrived last
	wall  time.Time // host time of sample wallN of the bench's line
	wallN int64
	last  time.Time // latest time given out
}

// patience is how long nothing may arrive before sound counts as missing, and
// how far behind the host clock the count stays: a card's own estimate of what
// it lost, made when it is back, is then seldom the smaller one.
const patience = time.Second

// start begins the line when the input was opened.
func (l *timeline) start(rate float64, now time.Time) {
	*l = timeline{rate: rate, seen: now, wall: now, last: l.last}
}

// loss is what is missing before a block, by who lost it.
type loss struct {
	input int64         // lost by the input and not counted yet
	cause capture.Cause // why
	shed  int64         // dropped by us because the bench was too slow
	late  int64         // counted as missing while nothing arrived
}

// arrive places a block and returns what is missing before it. The samples
// that the caller has to declare missing now are input + shed.
func (l *timeline) arrive(b *capture.Block, now time.Time) loss {
	missing := max(b.First-l.next, 0)
	out := loss{late: l.ahead, cause: b.Cause}
	byInput := min(b.Lost, missing)
	out.shed = missing - byInput
	out.input = max(byInput-l.ahead, 0)
	l.ahead = 0
	l.n += out.input + out.shed
	if !b.Wall.IsZero() {
		l.wall, l.wallN = b.Wall, l.n
	}
	l.next = b.First + int64(b.Len())
	l.n += int64(b.Len())
	if b.Len() > 0 {
		l.seen = now
	}
	return out
}

// idle returns how many samples have to be declared missing by now because
// nothing arrives.
func (l *timeline) idle(now time.Time) int64 {
	if l.rate == 0 {
		return 0
	}
	quiet := now.Sub(l.seen) - patience
	if quiet <= 0 {
		return 0
	}
	more := int64(quiet.Seconds()*l.rate) - l.ahead
	if more <= 0 {
		return 0
	}
	l.ahead += more
	l.n += more
	return more
}

// at returns the host time of t seconds on the bench's line. Successive results
// always grow: should the host clock be set back, times wait for it.
func (l *timeline) at(t float64) time.Time {
	const tick = time.Millisecond // what the journal keeps apart
	offset := t - float64(l.wallN)/l.rate
	at := l.wall.Add(time.Duration(math.Round(offset * 1e9))).Round(0)
	if !at.After(l.last) {
		at = l.last.Add(tick)
	}
	l.last = at
	return at
}
