package stability

import (
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

// EDF returns the equivalent degrees of freedom of the overlapping Allan
// variance of n phase points at averaging factor m: OverlappingAllan.EDF.
func EDF(a Noise, n, m int) float64 { return OverlappingAllan.EDF(a, n, m) }

// EDF returns the equivalent degrees of freedom of the variance of n phase
// points at averaging factor m under noise a, at least 1; NaN where none is
// known: no such variance, or the total variance of phase noise. With gaps, n is
// the number of points that would give as many terms without.
//
// It follows C. A. Greenhall and W. J. Riley, Uncertainty of stability variances
// based on finite differences, Proc. 35th PTTI Meeting, 2003, except for white FM
// at small m: there their choice of bandwidth makes it up to 17 % too large
// (m = 1) or 8 % too small (m = 10). Sampled white FM is a random walk of phase,
// for which the same sum is exact, and that is taken. The total variance
// follows SP 1065 Table 7.
func (d Deviation) EDF(a Noise, n, m int) float64 {
	stride := 1
	switch d {
	case TotalDeviation:
		return totalEDF(a, n, m)
	case Allan, Hadamard:
		stride = m
	}
	return d.edf(a, n, m, stride)
}

// order returns the order of the deviation's differences.
func (d Deviation) order() int {
	if d == Hadamard || d == OverlappingHadamard {
		return 3
	}
	return 2
}

// edf is EDF for positions every stride points.
func (d Deviation) edf(a Noise, n, m, stride int) float64 {
	s := structure{a: int(a), d: d.order(), m: float64(m), s: float64(m) / float64(stride)}
	s.smooth = d == ModifiedAllan || d == TimeDeviation
	span := m*s.d + 1
	if s.smooth {
		span += m - 1
	}
	if n < span || m < 1 || s.a > 2 || s.a+2*s.d <= 1 {
		return math.NaN()
	}
	return max(1, s.edf(1+(n-span)/stride))
}

// structure is a variance of finite differences of order d under noise a: its
// autocovariance is the d-th difference, twice, of a structure function of
// phase. Lags are in units of tau; s positions a tau.
type structure struct {
	a, d   int
	m, s   float64
	smooth bool // phase averaged over tau before: the modified variances
}

const sumLimit = 100 // the paper's J_max: from here its tables serve

// edf returns the degrees of freedom of terms terms.
func (v *structure) edf(terms int) float64 {
	M, d := float64(terms), float64(v.d)
	lags := int(math.Min(M, (d+1)*v.s))
	r := M / v.s
	whole := int(v.s) == int(v.m) // every position
	switch {
	case v.a == 2 && !v.smooth:
		return v.whitePhase(M, r)
	case v.a == 0 && whole && v.m*(d+1) <= sumLimit:
		return v.sum(v.walk, lags, M, v.s)
	case lags <= sumLimit || v.a == 1 && !v.smooth && r < d+1:
		f := v.bandwidth()
		// More lags than needed are thinned: every q-th position.
		q := math.Ceil(float64(lags) / 1000)
		return v.sum(func(t float64) float64 { return power(t, f, v.a) }, int(float64(lags)/q), M/q, v.s/q)
	case r >= d+1:
		return v.table(r)
	}
	f := math.Inf(1)
	if v.smooth {
		f = 1
	}
	return v.sum(func(t float64) float64 { return power(t, f, v.a) }, sumLimit, sumLimit, sumLimit/r)
}

// bandwidth returns the paper's F: phase is smoothed over tau/F.
func (v *structure) bandwidth() float64 {
	switch {
	case v.smooth:
		return 1
	case v.a == 1 || v.a < 0 && v.m*float64(v.d+1) <= sumLimit:
		return v.m
	}
	return math.Inf(1)
}

// sum returns M sz(0)^2 / BasicSum (the paper's equation for 1/edf) with the
// structure function sx of lag.
func (v *structure) sum(sx func(t float64) float64, lags int, M, s float64) float64 {
	sz := func(lag float64) float64 {
		z := 0.0
		for k := -v.d; k <= v.d; k++ {
			c := binomial(2*v.d, v.d+k)
			if k&1 != 0 {
				c = -c
			}
			z += c * sx(lag+float64(k))
		}
		return z
	}
	z0 := sz(0)
	last := sz(float64(lags) / s)
	total := z0*z0 + (1-float64(lags)/M)*last*last
	for j := 1; j < lags; j++ {
		z := sz(float64(j) / s)
		total += 2 * (1 - float64(j)/M) * z * z
	}
	return M * z0 * z0 / total
}

// power is the paper's s_x: the structure function of power-law noise a,
// smoothed over 1/f, up to a factor; f infinite: not smoothed.
func power(t, f float64, a int) float64 {
	if math.IsInf(f, 1) {
		return sw(t, a+2)
	}
	return f * f * (2*sw(t, a) - sw(t-1/f, a) - sw(t+1/f, a))
}

func sw(t float64, a int) float64 {
	t = math.Abs(t)
	if t == 0 {
		return 0
	}
	switch a {
	case 2:
		return -t
	case 1:
		return t * t * math.Log(t)
	case 0:
		return t * t * t
	case -1:
		return -t * t * t * t * math.Log(t)
	case -2:
		return -math.Pow(t, 5)
	case -3:
		return math.Pow(t, 6) * math.Log(t)
	}
	return math.Pow(t, 7)
}

// walk is the structure function of a random walk of phase: -|t|, or for the
// modified variances that of its means over m points.
func (v *structure) walk(t float64) float64 {
	if !v.smooth {
		return -math.Abs(t)
	}
	sum := 0.0
	for j := 1 - v.m; j < v.m; j++ {
		sum -= (v.m - math.Abs(j)) * math.Abs(t+j/v.m)
	}
	return sum / (v.m * v.m)
}

// whitePhase is exact for white phase noise: differences correlate at whole
// taus only.
func (v *structure) whitePhase(M, r float64) float64 {
	total := 1.0
	for k := 1; k <= v.d && float64(k) < r; k++ {
		rho := binomial(2*v.d, v.d-k) / binomial(2*v.d, v.d)
		total += 2 * (1 - float64(k)/r) * rho * rho
	}
	return M / total
}

// table is the paper's fit for many lags: its tables 1 to 3.
func (v *structure) table(r float64) float64 {
	i := 2 - v.a
	c := unmodified[i][v.d-1]
	if v.smooth {
		c = smoothed[i][v.d-1]
	}
	e := r / (c[0] - c[1]/r)
	if v.a == 1 && !v.smooth {
		b := flickerPhase[v.d-1]
		scale := b[0] + b[1]*math.Log(v.m)
		e *= scale * scale
	}
	return e
}

// The tables of Greenhall & Riley 2003: noise from 2 to -4, order 1 to 3.
var (
	smoothed = [7][3][2]float64{
		{{2. / 3, 1. / 3}, {7. / 9, 1. / 2}, {22. / 25, 2. / 3}},
		{{.840, .345}, {.997, .616}, {1.141, .843}},
		{{1.079, .368}, {1.033, .607}, {1.184, .848}},
		{{}, {1.048, .534}, {1.180, .816}},
		{{}, {1.302, .535}, {1.175, .777}},
		{{}, {}, {1.194, .703}},
		{{}, {}, {1.489, .702}},
	}
	unmodified = [7][3][2]float64{
		{{3. / 2, 1. / 2}, {35. / 18, 1}, {231. / 100, 3. / 2}},
		{{78.6, 25.2}, {790, 410}, {9950, 6520}},
		{{2. / 3, 1. / 6}, {2. / 3, 1. / 3}, {7. / 9, 1. / 2}},
		{{}, {.852, .375}, {.997, .617}},
		{{}, {1.079, .368}, {1.033, .607}},
		{{}, {}, {1.053, .553}},
		{{}, {}, {1.302, .535}},
	}
	flickerPhase = [3][2]float64{{6, 4}, {15.23, 12}, {47.8, 40}}
)

// binomial returns n over k.
func binomial(n, k int) float64 {
	b := 1.0
	for i := 1; i <= k; i++ {
		b = b * float64(n-k+i) / float64(i)
	}
	return b
}

// totalEDF is b T/tau - c of SP 1065 Table 7.
func totalEDF(a Noise, n, m int) float64 {
	bc := map[Noise][2]float64{0: {1.5, 0}, -1: {1.17, .22}, -2: {.93, .36}}
	k, ok := bc[a]
	if !ok || m < 1 || m >= n {
		return math.NaN()
	}
	return max(1, k[0]*float64(n-1)/float64(m)-k[1])
}

// TotalBias returns the expected total variance over the Allan variance for n
// phase points, 1 - a tau/T (SP 1065 section 5.2.11; a from memory: 0 for white
// FM, 1/(3 ln 2) for flicker FM, 3/4 for random walk FM); NaN for phase noise.
// The published total deviations, and those of Of, are not corrected for it.
func TotalBias(a Noise, n, m int) float64 {
	k, ok := map[Noise]float64{0: 0, -1: 1 / (3 * math.Ln2), -2: .75}[a]
	if !ok || m < 1 || m >= n {
		return math.NaN()
	}
	return 1 - k*float64(m)/float64(n-1)
}

// Limits returns the confidence limits of a deviation with edf equivalent
// degrees of freedom at probability p, by chi-squared (SP 1065 section 5.3.1):
// sigma*sqrt(edf/chi2((1+p)/2)) and sigma*sqrt(edf/chi2((1-p)/2)). NaN if edf is
// not known.
func Limits(sigma, edf, p float64) (low, high float64) {
	if !(edf > 0) {
		return math.NaN(), math.NaN()
	}
	c := distuv.ChiSquared{K: edf}
	return sigma * math.Sqrt(edf/c.Quantile((1+p)/2)), sigma * math.Sqrt(edf/c.Quantile((1-p)/2))
}
