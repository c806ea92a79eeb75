package stability

import "math"

// Drift is how the frequency of a row moves, by the estimators of SP 1065
// section 5.6, each in 1/s (fractional frequency a second); NaN where the row
// does not allow one.
type Drift struct {
	// Of frequency: regression on time, means of the halves, first and last.
	LeastSquares, Bisection, FirstDifference float64
	// Of phase, which must be one run: parabola, mean of the second differences,
	// start, middle and end.
	Quadratic, SecondDifference, ThreePoint float64

	// Best is the one that suits the noise: the parabola for phase noise, the
	// regression for white and flicker FM, the halves for random walk FM.
	Best   float64
	U      float64 // standard uncertainty of Best; NaN if the row is too short to tell
	Method string
	Noise  Noise // behind U
}

// Significant reports whether the drift exceeds twice its uncertainty.
func (d *Drift) Significant() bool { return math.Abs(d.Best) > 2*d.U }

// DriftOf estimates the drift of phase x.
func DriftOf(x []float64, run []int32, tau0 float64) Drift {
	y := Frequency(x, run, tau0)
	nan := math.NaN()
	d := Drift{Quadratic: nan, SecondDifference: nan, ThreePoint: nan, Best: nan, U: nan}
	d.LeastSquares = slope(y, tau0)
	d.Bisection = halves(y, tau0)
	d.FirstDifference = ends(y, tau0)
	var wander float64
	if oneRun(x, run) {
		d.Quadratic, wander = parabola(x, tau0)
		d.SecondDifference = meanSecond(x, tau0)
		if n := (len(x) - 1) / 2; n > 0 {
			t := float64(n) * tau0
			d.ThreePoint = (x[2*n] - 2*x[n] + x[0]) / (t * t)
		}
	}
	d.choose(x, run, y, tau0, wander)
	return d
}

// choose takes the estimator that suits the noise, and its uncertainty.
func (d *Drift) choose(x []float64, run []int32, y []float64, tau0, wander float64) {
	d.Best, d.Method = d.LeastSquares, "least squares"
	l, ok := levelOf(x, run, tau0, 30)
	if !ok {
		d.U = regressionU(y, tau0, d.LeastSquares)
		return
	}
	d.Noise = l.noise
	switch {
	case l.noise >= 1 && !math.IsNaN(d.Quadratic):
		d.Best, d.U, d.Method = d.Quadratic, wander, "quadratic fit of the phase"
		if !math.IsNaN(wander) {
			return // white residuals tell their own uncertainty
		}
	case l.noise == -2:
		d.Best, d.Method = d.Bisection, "means of the two halves"
	}
	d.U = l.driftU(float64(len(y)) * tau0)
}

// noiseLevel is the noise of a row: its kind, and Allan deviations by the
// Hadamard one, which no drift enters.
type noiseLevel struct {
	noise Noise
	tau   []float64
	dev   []float64
}

// levelOf finds the noise at the longest tau of which the row has parts and at
// two octaves below; false if the row is too short. A wrong kind would be far
// off when carried on to longer taus, so of the three the reddest is taken. The
// Hadamard variance is that fraction of Allan's: 1 for white FM,
// ln(256/27)/(4 ln 2) for flicker FM, 1/2 for random walk FM (from the integrals
// of SP 1065 section 5.2.8, from memory).
func levelOf(x []float64, run []int32, tau0 float64, parts int) (noiseLevel, bool) {
	l := noiseLevel{noise: 2}
	for m := len(x) / parts; m >= 1 && len(l.tau) < 3; m /= 2 {
		a, ok := Identify(x, run, m)
		dev, n := OverlappingHadamard.Of(x, run, tau0, m)
		if ok && n >= 10 {
			l.noise = min(l.noise, a)
			l.tau, l.dev = append(l.tau, float64(m)*tau0), append(l.dev, dev)
		}
	}
	scale := 1.0
	switch l.noise {
	case -1:
		scale = 1 / math.Sqrt(math.Log(256./27)/(4*math.Ln2))
	case -2:
		scale = math.Sqrt2
	}
	for i := range l.dev {
		l.dev[i] *= scale
	}
	return l, len(l.tau) > 0
}

// at returns the Allan deviation at tau, as the kind of noise goes on; the
// largest of what the taus say.
func (l noiseLevel) at(tau float64) (dev float64) {
	mu := -1 - float64(l.noise) // of the variance
	if l.noise >= 1 {
		mu = -2
	}
	for i := range l.tau {
		dev = max(dev, l.dev[i]*math.Pow(tau/l.tau[i], mu/2))
	}
	return dev
}

// driftU returns the standard uncertainty of the drift over a row of length T:
// that of the difference of the halves' means, sqrt(2) adev(T/2), over T/2. The
// regression is better than the halves for white FM by a seventh; that is left
// as reserve.
func (l noiseLevel) driftU(T float64) float64 { return 2 * math.Sqrt2 * l.at(T/2) / T }

// regressionU is the standard uncertainty of the regression's slope from its own
// residuals, those that resemble their neighbours counting for less.
func regressionU(y []float64, tau0, slope float64) float64 {
	mean, n := average(y)
	mt := meanTime(y, tau0)
	var rr, xx, r1, last float64
	last = math.NaN()
	for i, v := range y {
		if math.IsNaN(v) {
			last = v
			continue
		}
		t := float64(i)*tau0 - mt
		r := v - mean - slope*t
		rr += r * r
		xx += t * t
		if !math.IsNaN(last) {
			r1 += r * last
		}
		last = r
	}
	if n < 5 || rr == 0 {
		return math.NaN()
	}
	rho := max(0, min(0.99, r1/rr))
	return math.Sqrt(rr / float64(n-2) / xx * (1 + rho) / (1 - rho))
}

func oneRun(x []float64, run []int32) bool {
	for i := range run {
		if run[i] != run[0] {
			return false
		}
	}
	return len(x) >= 3
}

func meanTime(y []float64, tau0 float64) float64 {
	t, n := 0.0, 0.0
	for i, v := range y {
		if !math.IsNaN(v) {
			n++
			t += (float64(i) - t) / n
		}
	}
	return t * tau0
}

// slope is the least-squares slope of what is known of y; NaN of less than two.
func slope(y []float64, tau0 float64) float64 {
	mean, n := average(y)
	mt := meanTime(y, tau0)
	var xx, xy float64
	for i, v := range y {
		if !math.IsNaN(v) {
			t := float64(i)*tau0 - mt
			xx += t * t
			xy += t * (v - mean)
		}
	}
	if n < 2 {
		return math.NaN()
	}
	return xy / xx
}

// halves is the difference of the halves' means over that of their times. The
// middle of an odd number belongs to neither.
func halves(y []float64, tau0 float64) float64 {
	h := len(y) / 2
	a, b := y[:h], y[len(y)-h:]
	ma, na := average(a)
	mb, nb := average(b)
	if na == 0 || nb == 0 {
		return math.NaN()
	}
	return (mb - ma) / (meanTime(b, tau0) + float64(len(y)-h)*tau0 - meanTime(a, tau0))
}

// ends is the last frequency less the first, over the time between.
func ends(y []float64, tau0 float64) float64 {
	a, b := -1, -1
	for i, v := range y {
		if !math.IsNaN(v) {
			if a < 0 {
				a = i
			}
			b = i
		}
	}
	if b <= a {
		return math.NaN()
	}
	return (y[b] - y[a]) / (float64(b-a) * tau0)
}

// parabola returns twice the second coefficient of the least-squares parabola,
// and its standard uncertainty from the residuals if they are white, else NaN.
func parabola(x []float64, tau0 float64) (drift, u float64) {
	z := append([]float64(nil), x...)
	n := 0.0
	for _, v := range x {
		if !math.IsNaN(v) {
			n++
		}
	}
	if n < 3 {
		return math.NaN(), math.NaN()
	}
	q := removeQuadratic(z)
	half := float64(len(x)-1) / 2 * tau0
	drift = 2 * q[2] / (half * half)
	rho, ok := lag1(z)
	if n < 10 || !ok {
		return drift, math.NaN()
	}
	// Thinned out, flicker PM looks white; between neighbours it does not.
	if rho > 0.15 {
		return drift, math.NaN()
	}
	rr := 0.0
	for _, v := range z {
		if !math.IsNaN(v) {
			rr += v * v
		}
	}
	// var(c2) = 180 s^2/(n T^4) for many evenly spaced points.
	T := 2 * half
	return drift, 2 * math.Sqrt(180*rr/(n-3)/n) / (T * T)
}

// meanSecond is the mean of the second differences.
func meanSecond(x []float64, tau0 float64) float64 {
	mean, n := 0.0, 0.0
	for i := 0; i+2 < len(x); i++ {
		if d := x[i+2] - 2*x[i+1] + x[i]; !math.IsNaN(d) {
			n++
			mean += (d - mean) / n
		}
	}
	if n == 0 {
		return math.NaN()
	}
	return mean / (tau0 * tau0)
}
