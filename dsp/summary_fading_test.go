package dsp

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"sort"
	"testing"
)

// fadingRun makes the readings of a carrier that fades, straight from its
// phasor: a steady part of power k/(1+k) and a Gaussian Doppler spectrum of rms
// width sigma, Hz, both turning at beat. Seconds for which gone says so have no
// carrier; phase adds to the phase count of a run, cycles.
type fadingRun struct {
	beat, k, sigma float64
	shift          float64 // of a second path as strong, Hz; 0: there is none
	seconds        int
	gone           func(s int) bool
	run            func(s int) int
	narrow         bool    // the readings do not say that the carrier is spread
	pair           float64 // out: the mean frequency of all phasors at once, Hz
	phase          func(run int) float64
}

func (c *fadingRun) readings(r *rand.Rand) []Reading {
	const rate = 10 // phasors a second
	reach := int(math.Ceil(1.2*rate/c.sigma)) + 1
	taps := make([]float64, 2*reach+1)
	sum := 0.0
	for i := range taps {
		x := 2 * math.Pi * c.sigma * float64(i-reach) / rate
		taps[i] = math.Exp(-x * x)
		sum += taps[i] * taps[i]
	}
	n := c.seconds*rate + 1
	paths := []float64{0}
	if c.shift != 0 {
		paths = append(paths, c.shift)
	}
	part := math.Sqrt(1 / (1 + c.k) / sum / 2 / float64(len(paths)))
	z := make([]complex128, n)
	w := make([]complex128, n+2*reach)
	for _, shift := range paths {
		for i := range w {
			w[i] = complex(r.NormFloat64(), r.NormFloat64())
		}
		for i := range z {
			y := complex(math.Sqrt(c.k/(1+c.k)), 0)
			for j, h := range taps {
				y += w[i+j] * complex(h*part, 0)
			}
			z[i] += y * cmplx.Rect(1, 2*math.Pi*shift*float64(i)/rate)
		}
	}
	var out []Reading
	var all complex128
	for s := range c.seconds {
		q := Blank(float64(s)+0.5, Apart)
		if c.run != nil {
			q.PhaseRun = c.run(s)
		}
		if c.gone == nil || !c.gone(s) {
			var pair, at complex128
			power := 0.0
			for i := s * rate; i < (s+1)*rate; i++ {
				pair += z[i+1] * cmplx.Conj(z[i])
				power += real(z[i]*cmplx.Conj(z[i])) / rate
				at += z[i]
			}
			all += pair
			q.Beat = c.beat + cphase(pair)*rate
			q.BeatU, q.Span, q.SpreadHz = 0.001, 1, math.Hypot(c.sigma, c.shift/2)/math.Sqrt(1+c.k)
			q.Phase = c.beat*q.T + cphase(at)
			if c.phase != nil {
				q.Phase += c.phase(q.PhaseRun)
			}
			q.CarrierDBFS, q.LocalDBFS = 10*math.Log10(power)-26, -26
			if !c.narrow {
				q.flag(Spread)
			}
		}
		out = append(out, q)
	}
	c.pair = c.beat + cphase(all)*rate
	return out
}

// lineByHand looks for the frequency at which the stretches add up best by
// trying all of a fine grid: the slow reference of coherent.
func lineByHand(rs []Reading, from, to, step float64, joined bool) float64 {
	best, at := 0.0, 0.0
	for f := from; f <= to; f += step {
		sums, n := map[int]complex128{}, map[int]float64{}
		for _, r := range rs {
			if math.IsNaN(r.Phase) {
				continue
			}
			k := r.PhaseRun
			if joined {
				k = 0
			}
			sums[k] += cmplx.Rect(math.Pow(10, (r.CarrierDBFS-r.LocalDBFS)/20), 2*math.Pi*(r.Phase-f*r.T))
			n[k]++
		}
		v := 0.0
		for k, y := range sums {
			v += real(y*cmplx.Conj(y)) / n[k]
		}
		if v > best {
			best, at = v, f
		}
	}
	return at
}

// sd is the standard deviation of the steady part's frequency, Hz.
func (c *fadingRun) sd(rs []Reading, apart bool) float64 {
	n, mid := map[int]float64{}, map[int]float64{}
	run := func(r *Reading) int {
		if apart {
			return r.PhaseRun
		}
		return 0
	}
	for i := range rs {
		if k := run(&rs[i]); !math.IsNaN(rs[i].Phase) {
			n[k]++
			mid[k] += rs[i].T
		}
	}
	sxx := 0.0
	for i := range rs {
		if k := run(&rs[i]); !math.IsNaN(rs[i].Phase) {
			d := rs[i].T - mid[k]/n[k]
			sxx += d * d
		}
	}
	return math.Sqrt(1/(2*c.k*math.Sqrt(2*math.Pi)*c.sigma)/sxx) / (2 * math.Pi)
}

// The mean of a carrier with a steady part. Its standard deviation is known: the
// phase beside the line has the density 1/(2 k sqrt(2 pi) sigma) rad^2/Hz near
// zero, and a regression over points of which sxx is the sum of squares of time
// about their mean passes sqrt(density / sxx) / (2 pi).
func TestSteadyPart(t *testing.T) {
	away := func(s int) bool { return s >= 60 && s < 120 }
	for _, c := range []struct {
		name  string
		run   fadingRun
		apart bool // the runs' phases have nothing to do with each other
	}{
		{"Rice 4, two minutes", fadingRun{k: 4, sigma: 0.1, seconds: 120}, false},
		{"Rice 20, two minutes", fadingRun{k: 20, sigma: 0.1, seconds: 120}, false},
		{"Rice 4, ten minutes, a new run each 50 s", fadingRun{k: 4, sigma: 0.1, seconds: 600, run: func(s int) int { return s / 50 }}, false},
		{"Rice 100, not told as spread", fadingRun{k: 100, sigma: 0.05, seconds: 300, narrow: true}, false},
		{"Rice 4, away a minute", fadingRun{k: 4, sigma: 0.05, seconds: 180, gone: away, run: func(s int) int { return s / 61 }}, false},
		{"Rice 4, away a minute, within a run", fadingRun{k: 4, sigma: 0.05, seconds: 180, gone: away}, false},
		{"Rice 4, runs that do not fit", fadingRun{k: 4, sigma: 0.1, seconds: 600, run: func(s int) int { return s / 100 }}, true},
	} {
		t.Run(c.name, func(t *testing.T) {
			const seed, scenes = 12, 40
			r := rand.New(rand.NewPCG(seed, 1))
			if c.run.run == nil {
				c.run.run = func(int) int { return 0 }
			}
			var se, sq, n, inside float64
			want := 0.0
			for i := range scenes {
				c.run.beat = 2 + 4*r.Float64()
				if c.apart {
					var off [64]float64
					for k := range off {
						off[k] = r.Float64()
					}
					c.run.phase = func(k int) float64 { return off[k] }
				}
				rs := c.run.readings(r)
				sum := summarise(Config{LocalTone: 1000}, rs)
				e := float64(sum.Beat) - c.run.beat
				se += e * e
				sq += e * e / float64(sum.BeatU*sum.BeatU)
				if math.Abs(e) <= 2*float64(sum.BeatU) {
					inside++
				}
				n++
				if i == 0 {
					want = c.run.sd(rs, c.apart)
				}
				if i < 3 {
					f := lineByHand(rs, c.run.beat-0.002, c.run.beat+0.002, 2e-6, !c.apart)
					if math.Abs(f-float64(sum.Beat)) > 3e-6 {
						t.Errorf("seed %d, scene %d: %.6f Hz, by hand %.6f (%s)", seed, i, sum.Beat, f, sum.Method)
					}
				}
			}
			rms, honest := math.Sqrt(se/n), math.Sqrt(sq/n)
			t.Logf("seed %d: rms %.3g Hz, expected %.3g, rms(error/u) %.2f, within 2u %.0f %%", seed, rms, want, honest, 100*inside/n)
			if !(rms < 1.25*want) || !(honest > 0.7 && honest < 1.2) || !(inside > 0.9*n) {
				t.Errorf("seed %d: rms error %.3g Hz, expected %.3g; rms(error/u) %.2f; within 2u %.0f %%", seed, rms, want, honest, 100*inside/n)
			}
		})
	}
}

// The mean of a carrier that fades altogether, against the limit of the
// pulse-pair mean: sqrt(integral (f-mu)^2 S^2 df / T) / integral S df, which is
// sqrt(sigma / (4 sqrt(pi) T)) for one Gaussian (Zrnic 1977; from memory).
func TestFadingMean(t *testing.T) {
	for _, c := range []struct {
		name         string
		sigma, shift float64
		seconds      int
	}{
		{"0.1 Hz, 2 min", 0.1, 0, 120},
		{"0.1 Hz lopsided, 2 min", 0.1, 0.2, 120},
		{"0.1 Hz, 30 min", 0.1, 0, 1800},
		{"0.1 Hz lopsided, 30 min", 0.1, 0.2, 1800},
		{"0.5 Hz, 30 min", 0.5, 0, 1800},
		{"0.5 Hz lopsided, 30 min", 0.5, 1, 1800},
	} {
		t.Run(c.name, func(t *testing.T) {
			const seed = 13
			scenes := min(100, 40*1800/c.seconds)
			r := rand.New(rand.NewPCG(seed, 2))
			var a, b float64
			for f := -8 * c.sigma; f < c.shift+8*c.sigma; f += c.sigma / 50 {
				s := math.Exp(-f*f/(2*c.sigma*c.sigma)) + math.Exp(-(f-c.shift)*(f-c.shift)/(2*c.sigma*c.sigma))
				a += (f - c.shift/2) * (f - c.shift/2) * s * s * c.sigma / 50
				b += s * c.sigma / 50
			}
			limit := math.Sqrt(a/float64(c.seconds)) / b
			var se, sq, n, inside float64
			var us []float64
			for range scenes {
				run := fadingRun{beat: 2 + 4*r.Float64(), sigma: c.sigma, shift: c.shift, seconds: c.seconds}
				sum := summarise(Config{LocalTone: 1000}, run.readings(r))
				// Slow reference: the pulse pair of the whole run at once.
				if d := math.Abs(float64(sum.Beat) - run.pair); !(d < 0.25*limit) {
					t.Errorf("seed %d: %.5f Hz, all at once %.5f (%s)", seed, sum.Beat, run.pair, sum.Method)
				}
				e := float64(sum.Beat) - run.beat - c.shift/2
				se += e * e
				sq += e * e / float64(sum.BeatU*sum.BeatU)
				if math.Abs(e) <= 2*float64(sum.BeatU) {
					inside++
				}
				n++
				us = append(us, float64(sum.BeatU))
			}
			sort.Float64s(us)
			rms, u := math.Sqrt(se/n)/limit, us[len(us)/2]/limit
			t.Logf("seed %d: rms/limit %.2f, rms(error/u) %.2f, within 2u %.1f %%, median u/limit %.2f", seed, rms, math.Sqrt(sq/n), 100*inside/n, u)
			if rms > 1+3/math.Sqrt(2*n) || rms < 0.7 || inside < 0.87*n || u < 0.85 || u > 1.2 {
				t.Errorf("seed %d: rms/limit %.2f, within 2u %.1f %%, median u/limit %.2f", seed, rms, 100*inside/n, u)
			}
		})
	}
}
