package stability

import (
	"errors"
	"math"
)

// Ageing is the logarithmic law y = A ln(B t + 1) + C, t in seconds from the
// start of the row (the form of MIL-PRF-55310).
type Ageing struct {
	A, B, C     float64
	BLow, BHigh float64 // B within about two standard uncertainties
	RMS         float64 // of what the law leaves
	Line        float64 // rms of what a straight line leaves
}

// Slope returns the drift at t seconds after the start, 1/s.
func (a *Ageing) Slope(t float64) float64 { return a.A * a.B / (a.B*t + 1) }

// Why no law can be told.
var (
	ErrFew   = errors.New("fewer than eight readings")
	ErrLine  = errors.New("no bend is seen: a straight line says as much as a logarithm")
	ErrStart = errors.New("the start of the ageing was not seen: the logarithm's time scale is not determined")
)

// FitAgeing fits the law by least squares to readings y at times t, seconds from
// the start, t >= 0. B and the rest can be exchanged for each other over much of
// their range: where the readings do not tell B from a straight line, or from a
// beginning long ago, the law is refused and the error says which.
func FitAgeing(t, y []float64) (Ageing, error) { return fitAgeing(t, y, true) }

// The range of B that is tried, over the length of the row.
const (
	leastB = 1e-3
	mostB  = 1e5
)

// fitAgeing fits C only if free; else it is 0.
func fitAgeing(t, y []float64, free bool) (Ageing, error) {
	var ts, ys []float64
	T := 0.0
	for i, v := range y[:min(len(y), len(t))] {
		if !math.IsNaN(v) && !math.IsNaN(t[i]) && t[i] >= 0 {
			ts, ys = append(ts, t[i]), append(ys, v)
			T = max(T, t[i])
		}
	}
	if len(ts) < 8 {
		return Ageing{}, ErrFew
	}
	f := lawFit{t: ts, y: ys, free: free, g: make([]float64, len(ts))}
	const steps = 160
	lnB := func(i float64) float64 { return math.Log(leastB/T) + i/steps*math.Log(mostB/leastB) }
	var rss [steps + 1]float64
	best := 0
	for i := range rss {
		rss[i] = f.at(lnB(float64(i)))
		if rss[i] < rss[best] {
			best = i
		}
	}
	switch best {
	case 0:
		return Ageing{}, ErrLine
	case steps:
		return Ageing{}, ErrStart
	}
	b := golden(f.at, lnB(float64(best)-1), lnB(float64(best)+1))
	least := f.at(b)
	out := Ageing{A: f.a, B: math.Exp(b), C: f.c, RMS: math.Sqrt(least / float64(len(ts)))}
	params := 2.0
	if free {
		params = 3
	}
	// B is known as far as the sum of squares stays within four times the
	// residuals' variance of its least; residuals that resemble their neighbours
	// count for less.
	rho := f.neighbours()
	limit := least + 4*least/(float64(len(ts))-params)*(1+rho)/(1-rho)
	limit = max(limit, least+1e-24*f.size())
	out.Line = f.line()
	switch {
	case rss[0] <= limit:
		return out, ErrLine
	case rss[steps] <= limit:
		return out, ErrStart
	}
	crossing := func(from, to float64) float64 {
		for range 60 {
			mid := (from + to) / 2
			if f.at(mid) > limit {
				from = mid
			} else {
				to = mid
			}
		}
		return math.Exp((from + to) / 2)
	}
	out.BLow, out.BHigh = crossing(lnB(0), b), crossing(lnB(steps), b)
	return out, nil
}

// lawFit solves for A and C with B given.
type lawFit struct {
	t, y, g []float64
	free    bool
	a, c    float64
}

// at returns the sum of squares that the best A and C leave.
func (f *lawFit) at(lnB float64) float64 {
	b, n := math.Exp(lnB), float64(len(f.t))
	var mg, my, gg, gy float64
	for i, t := range f.t {
		f.g[i] = math.Log1p(b * t)
		if f.free {
			mg += f.g[i] / n
			my += f.y[i] / n
		}
	}
	for i, g := range f.g {
		gg += (g - mg) * (g - mg)
		gy += (g - mg) * (f.y[i] - my)
	}
	f.a = 0
	if gg > 0 {
		f.a = gy / gg
	}
	f.c = my - f.a*mg
	sum := 0.0
	for i, g := range f.g {
		r := f.y[i] - f.a*g - f.c
		sum += r * r
	}
	return sum
}

// neighbours is how much the residuals of the latest fit resemble each other.
func (f *lawFit) neighbours() float64 {
	var rr, r1, last float64
	for i, g := range f.g {
		r := f.y[i] - f.a*g - f.c
		rr += r * r
		if i > 0 {
			r1 += r * last
		}
		last = r
	}
	if rr == 0 {
		return 0
	}
	return max(0, min(0.95, r1/rr))
}

func (f *lawFit) size() (sum float64) {
	for _, v := range f.y {
		sum += v * v
	}
	return sum
}

// line is the rms of what a straight line leaves.
func (f *lawFit) line() float64 {
	n := float64(len(f.t))
	var mt, my, tt, ty, rr float64
	for i, t := range f.t {
		mt += t / n
		my += f.y[i] / n
	}
	for i, t := range f.t {
		tt += (t - mt) * (t - mt)
		ty += (t - mt) * (f.y[i] - my)
	}
	for i, t := range f.t {
		r := f.y[i] - my - ty/tt*(t-mt)
		rr += r * r
	}
	return math.Sqrt(rr / n)
}

// golden returns where f is least between lo and hi.
func golden(f func(float64) float64, lo, hi float64) float64 {
	const ratio = 0.6180339887498949
	a, b := hi-ratio*(hi-lo), lo+ratio*(hi-lo)
	fa, fb := f(a), f(b)
	for range 60 {
		if fa < fb {
			hi, b, fb = b, a, fa
			a = hi - ratio*(hi-lo)
			fa = f(a)
		} else {
			lo, a, fa = a, b, fb
			b = lo + ratio*(hi-lo)
			fb = f(b)
		}
	}
	return (lo + hi) / 2
}

// Blocks averages y over at most n stretches of equal length and returns their
// middles, seconds from the start of the row, and means. A stretch of which less
// than half is known is left out.
func Blocks(y []float64, tau0 float64, n int) (t, mean []float64) {
	size := max(1, (len(y)+n-1)/n)
	for lo := 0; lo < len(y); lo += size {
		hi := min(lo+size, len(y))
		m, known := average(y[lo:hi])
		if 2*known < hi-lo || known == 0 {
			continue
		}
		t = append(t, (float64(lo)+float64(hi))/2*tau0)
		mean = append(mean, m)
	}
	return t, mean
}

// Settling is a row that begins with a larger drift than it ends with.
type Settling struct {
	Warm  bool    // the beginning drifts more than the end, beyond doubt
	Still bool    // and the end still drifts
	Early float64 // drift of the first third, 1/s
	Late  float64 // of the last third
	U     float64 // standard uncertainty of both, at most
}

// SettlingOf tells warming up from noise and from even drift: the least-squares
// slope of the first third must differ from 0, and from that of the last third,
// by more than three standard uncertainties, and the last third's must be less
// than two thirds of it. The uncertainty is 2 sqrt(2) adev(T/6)/(T/3), with the
// Allan deviation carried on from a third of that tau or less as if the noise
// were a random walk, the worst there is. False if the row is too short.
func SettlingOf(x []float64, run []int32, tau0 float64) (Settling, bool) {
	y := Frequency(x, run, tau0)
	third := len(y) / 3
	if third < 30 {
		return Settling{}, false
	}
	T := float64(third) * tau0
	for m := third / 6; m >= 1; m /= 2 {
		dev, ok := medianHadamard(x, run, tau0, m)
		if !ok {
			continue
		}
		adev := dev * math.Sqrt2 * math.Sqrt(T/2/(float64(m)*tau0))
		s := Settling{Early: slope(y[:third], tau0), Late: slope(y[len(y)-third:], tau0), U: 2 * math.Sqrt2 * adev / T}
		if math.IsNaN(s.Early + s.Late) {
			return Settling{}, false
		}
		s.Warm = math.Abs(s.Early) > 3*s.U && math.Abs(s.Early-s.Late) > 3*math.Sqrt2*s.U && math.Abs(s.Late) < 2./3*math.Abs(s.Early)
		s.Still = s.Warm && math.Abs(s.Late) > 2*s.U && s.Early*s.Late > 0
		return s, true
	}
	return Settling{}, false
}

// medianHadamard is the overlapping Hadamard deviation from the median of the
// third differences' sizes instead of their squares' mean: neither an even drift
// nor a short fast one enters. False where gaps leave less than six taus.
func medianHadamard(x []float64, run []int32, tau0 float64, m int) (float64, bool) {
	var size []float64
	for i := 0; i+3*m < len(x); i++ {
		if run != nil && (run[i] != run[i+m] || run[i] != run[i+2*m] || run[i] != run[i+3*m]) {
			continue
		}
		if d := x[i+3*m] - 3*(x[i+2*m]-x[i+m]) - x[i]; !math.IsNaN(d) {
			size = append(size, math.Abs(d))
		}
	}
	if len(size) < 6*m || len(size) < 10 {
		return 0, false
	}
	return median(size) / 0.6745 / math.Sqrt(6) / (float64(m) * tau0), true
}
