package dsp

import (
	"math"
	"time"
)

// host fits the host's clock: points (t, x) with x = t - host time, which late
// arrivals only lower. The upper hull of a minute's points holds its earliest
// arrival for whatever slope (Moon, Skelly & Towsley, INFOCOM 1999, from memory,
// fit a line to such a hull); the line goes through the minutes' earliest.
type host struct {
	began time.Time
	told  told
	trend trend
	hulls []hull // of the latest minutes
	now   hull
	spots []spot
}

// hull is the upper convex hull of a minute's points.
type hull struct {
	minute float64
	k      int
	t, x   [24]float64
}

// add adds a point later than all before.
func (h *hull) add(t, x float64) {
	for h.k >= 2 {
		a, b := h.k-2, h.k-1
		if (h.x[b]-h.x[a])*(t-h.t[a]) > (x-h.x[a])*(h.t[b]-h.t[a]) {
			break
		}
		h.k--
	}
	if h.k == len(h.t) {
		h.k--
	}
	h.t[h.k], h.x[h.k] = t, x
	h.k++
}

// highest returns the point that is farthest above a line of slope b.
func (h *hull) highest(b float64) (t, x float64) {
	j := 0
	for i := 1; i < h.k; i++ {
		if h.x[i]-h.x[j] > b*(h.t[i]-h.t[j]) {
			j = i
		}
	}
	return h.t[j], h.x[j]
}

// mark takes one arrival: nominal time t, s, and what the host's clock showed.
func (h *host) mark(t float64, at time.Time) {
	at = at.Round(0) // the clock on the wall: a step of it is to be seen
	if h.began.IsZero() {
		h.began = at
		h.trend.jump = 0.015
		h.hulls, h.spots = make([]hull, 0, keepMinutes), make([]spot, 0, keepMinutes)
	}
	if h.now.k > 0 && !(t > h.now.t[h.now.k-1]) {
		return
	}
	if m := math.Floor(t / 60); m != h.now.minute {
		if h.now.k > 0 {
			h.close()
		}
		h.now = hull{minute: m}
	}
	h.now.add(t, t-at.Sub(h.began).Seconds())
}

// close ends a minute.
func (h *host) close() {
	if len(h.hulls) == keepMinutes {
		h.hulls = h.hulls[:copy(h.hulls, h.hulls[1:])]
	}
	h.hulls = append(h.hulls, h.now)
	if len(h.hulls) < 3 {
		return
	}
	b := h.trend.b
	if !h.told.ok {
		b = h.guess()
	}
	for range 3 {
		h.gather(b)
		h.told = h.trend.choose(h.spots, b, func(float64) float64 { return hostRate })
		if !h.told.ok {
			return
		}
		b = h.trend.b
	}
	h.told.ok = h.told.u <= clockGood
}

// gather makes a point of every minute for a slope b.
func (h *host) gather(b float64) {
	h.spots = h.spots[:0]
	for i := range h.hulls {
		t, x := h.hulls[i].highest(b)
		h.spots = append(h.spots, spot{t, x, 1e-3})
	}
}

// guess returns the slope, to 5 ppm, for which neighbouring minutes differ least,
// jumps counting no more than 30 ms.
func (h *host) guess() float64 {
	best, least := 0.0, math.Inf(1)
	for b := -clockRange; b <= clockRange+1e-9; b += 10e-6 {
		h.gather(b)
		sum := 0.0
		for i := 1; i < len(h.spots); i++ {
			p, q := h.spots[i-1], h.spots[i]
			sum += min(0.03, math.Abs(q.x-p.x-b*(q.t-p.t)))
		}
		if sum < least {
			best, least = b, sum
		}
	}
	return best
}
