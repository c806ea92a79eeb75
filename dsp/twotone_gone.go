package dsp

import "math"

const (
	goneLevel = 0.2 // of its level that a tone has less than when it is not there
	goneTime  = 2   // seconds for which it must be away
)

// oneGone reports whether one of two close tones has been away for some seconds,
// though the sound of a long fit still holds both: where a second tells them
// apart, each must be there in the latest one.
func (e *twoTone) oneGone(mid float64) bool {
	y := e.closest
	if y == nil || math.Abs(y.sep(mid)) < holdApart {
		e.goneN = 0
		return false
	}
	b, l := e.tr[e.local].band, e.lens
	l.open(b, mid, 1, edge)
	l.add(y.carrier(mid)-b.centre, y.c)
	l.add(y.local(mid)-b.centre, y.c+y.cl)
	l.solved++
	if l.valid < 0.95 || !l.fit.run(&l.win, l.lines, 0, 1, -b.centre) {
		return false
	}
	least := goneLevel * goneLevel
	if power(l.lines[0].a) > least*power(y.a) && power(l.lines[1].a) > least*power(y.b) {
		e.goneN = 0
		return false
	}
	if e.goneN++; e.goneN < goneTime {
		return false
	}
	e.goneN, e.closest, e.sure = 0, nil, false
	e.pair.forget()
	return true
}

// leftOne reports whether the only line found where two tones were held is one
// of them, and the other is not there: nothing like its level is left where it
// was expected. Otherwise they may have merged.
func (e *twoTone) leftOne(b *band, old [2]track, want [2]float64) bool {
	l := e.lens
	if len(l.lines) != 1 || math.Abs(want[0]-want[1]) < holdApart {
		return false
	}
	for j := range want {
		o := 1 - j
		g := b.gain(want[o] - b.centre)
		was := old[o].amp * g * old[o].amp * g * l.win.used
		if math.Abs(l.lines[0].f+b.centre-want[j]) < 0.3 && energyAt(l.fit.r, &l.win, want[o]-b.centre) < 0.1*was {
			return true
		}
	}
	return false
}
