package stability

import "math"

// Running keeps the overlapping Allan deviation of a row of phases that has no
// end, at every octave of tau, in bounded memory: about 0.9 kB an octave. Of
// every tau it takes positions tau/16 apart (every position below 16 tau0): 16
// to a tau, against which all positions gain a few per cent of confidence. A new
// phase costs a fixed few operations, and one more for each octave that its index
// divides. It allocates nothing after NewRunning. Not safe for concurrent use.
type Running struct {
	tau0   float64
	i      int64 // index of the next phase
	levels []level
}

// perTau is how many positions a tau has; ring how many phases a level keeps:
// three taus and the present, rounded up to a power of two.
const (
	perTau = 16
	ring   = 64
)

// level is an octave: m = 1 << k.
type level struct {
	stride int64 // between positions
	lag    int64 // m in strides
	x      [ring]float64
	run    [ring]int32
	sum    float64 // of squares of second differences
	n      int64

	// For the noise type: frequencies less the first one, and their differences,
	// each with its neighbour a tau before.
	ref  float64
	y, d neighbours
}

// neighbours is the sums behind a lag-1 autocorrelation.
type neighbours struct{ n, a, b, aa, bb, ab float64 }

func (s *neighbours) add(a, b float64) {
	s.n++
	s.a += a
	s.b += b
	s.aa += a * a
	s.bb += b * b
	s.ab += a * b
}

// lag1 returns the autocorrelation; NaN if nothing varies.
func (s *neighbours) lag1() float64 {
	n := s.n
	return (s.ab - s.a*s.b/n) / math.Sqrt((s.aa-s.a*s.a/n)*(s.bb-s.b*s.b/n))
}

// NewRunning returns a Running for phases tau0 seconds apart, for octaves from
// tau0 to 2^(octaves-1) tau0; octaves from 1 to 40.
func NewRunning(tau0 float64, octaves int) *Running {
	r := &Running{tau0: tau0, levels: make([]level, max(1, min(octaves, 40)))}
	for k := range r.levels {
		v := &r.levels[k]
		v.stride = max(1, int64(1)<<k/perTau)
		v.lag = int64(1) << k / v.stride
	}
	r.Reset()
	return r
}

// Reset forgets everything.
func (r *Running) Reset() {
	r.i = 0
	for k := range r.levels {
		v := &r.levels[k]
		*v = level{stride: v.stride, lag: v.lag}
		for j := range v.x {
			v.x[j] = math.NaN()
		}
	}
}

// Add takes the next phase, seconds; NaN: missing. No difference is taken
// between phases of different runs.
func (r *Running) Add(x float64, run int32) {
	i := r.i
	r.i++
	for k := range r.levels {
		v := &r.levels[k]
		if i&(v.stride-1) != 0 {
			return // then no higher octave either
		}
		v.add(i/v.stride, x, run)
	}
}

// Skip takes n missing phases.
func (r *Running) Skip(n int64) {
	// After three taus of nothing a level holds nothing: more need not be played.
	most := 4 * (int64(1) << (len(r.levels) - 1))
	if n > most {
		leap := (n - most) &^ (r.levels[len(r.levels)-1].stride<<8 - 1)
		r.i += leap
		n -= leap
	}
	for range n {
		r.Add(math.NaN(), 0)
	}
}

// add takes the phase of position j.
func (v *level) add(j int64, x float64, run int32) {
	v.x[j&(ring-1)], v.run[j&(ring-1)] = x, run
	a, b, c := (j-v.lag)&(ring-1), (j-2*v.lag)&(ring-1), (j-3*v.lag)&(ring-1)
	if v.run[a] != run || v.run[b] != run {
		return
	}
	y0, y1 := x-v.x[a], v.x[a]-v.x[b]
	d := y0 - y1
	if math.IsNaN(d) {
		return
	}
	if v.n == 0 {
		v.ref = y1
	}
	v.sum += d * d
	v.n++
	v.y.add(y0-v.ref, y1-v.ref)
	if before := y1 - (v.x[b] - v.x[c]); v.run[c] == run && !math.IsNaN(before) {
		v.d.add(d, before)
	}
}

// noise returns the noise type by the lag-1 autocorrelation, as Identify does:
// of the frequencies, or if they are not stationary, of their differences. It
// takes all positions, of which a tau's worth count as one; false while there
// are fewer than 30 such.
func (v *level) noise() (Noise, bool) {
	if v.d.n < 30*float64(v.lag) {
		return 0, false
	}
	for d, s := range []*neighbours{&v.y, &v.d} {
		r := s.lag1()
		delta := r / (1 + r)
		if d == 0 && !(delta < 0.25) {
			continue
		}
		alpha := -2*(delta+float64(d)+1) + 2
		return Noise(max(-2, min(2, math.Round(alpha)))), !math.IsNaN(alpha)
	}
	return 0, false
}

// State is what a Running says of one tau.
type State struct {
	Tau       float64 // s
	Dev       float64 // overlapping Allan deviation
	N         int64   // terms
	Noise     Noise   // as told by this tau, or by the one before
	EDF       float64
	Low, High float64 // confidence limits; NaN before the noise is known
}

// States appends the octaves that have at least one term to dst; the limits are
// for probability p. It may allocate.
func (r *Running) States(dst []State, p float64) []State {
	noise, known := Noise(0), false
	for k := range r.levels {
		v := &r.levels[k]
		if v.n == 0 {
			continue
		}
		if a, ok := v.noise(); ok {
			noise, known = a, true
		}
		m := int(v.lag * v.stride)
		tau := float64(m) * r.tau0
		s := State{Tau: tau, Dev: math.Sqrt(v.sum / (2 * tau * tau * float64(v.n))), N: v.n, Noise: noise,
			EDF: math.NaN(), Low: math.NaN(), High: math.NaN()}
		if known && s.Dev > 0 {
			s.EDF = OverlappingAllan.edf(noise, 2*m+1+int(v.n-1)*int(v.stride), m, int(v.stride))
			s.Low, s.High = Limits(s.Dev, s.EDF, p)
		}
		dst = append(dst, s)
	}
	return dst
}
