package dsp

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"
)

// fadingRun makes the readings of a carrier that fades, straight from its
// phasor: a steady part of power k/(1+k) and a Gaussian Doppler spectrum of rms
// width sigma, Hz, both turning at beat. Seconds for which gone says so have no
// carrier; phase adds to the phase count of a run, cycles.
type fadingRun struct {
	beat, k, sigma float64
	seconds        int
	gone           func(s int) bool
	run            func(s int) int
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
	w := make([]complex128, n+2*reach)
	for i := range w {
		w[i] = complex(r.NormFloat64(), r.NormFloat64())
	}
	part := math.Sqrt(1 / (1 + c.k) / sum / 2)
	z := make([]complex128, n)
	for i := range z {
		for j, h := range taps {
			z[i] += w[i+j] * complex(h, 0)
		}
		z[i] = z[i]*complex(part, 0) + complex(math.Sqrt(c.k/(1+c.k)), 0)
	}
	var out []Reading
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
			q.Beat = c.beat + cphase(pair)*rate
			q.BeatU, q.Span, q.SpreadHz = 0.001, 1, c.sigma/math.Sqrt(1+c.k)
			q.Phase = c.beat*q.T + cphase(at)
			if c.phase != nil {
				q.Phase += c.phase(q.PhaseRun)
			}
			q.CarrierDBFS, q.LocalDBFS = 10*math.Log10(power)-26, -26
			q.flag(Spread)
		}
		out = append(out, q)
	}
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
		{"Rice 4, away a minute", fadingRun{k: 4, sigma: 0.05, seconds: 180, gone: away, run: func(s int) int { return s / 61 }}, false},
		{"Rice 4, away a minute, within a run", fadingRun{k: 4, sigma: 0.05, seconds: 180, gone: away}, false},
		{"Rice 4, runs that do not fit", fadingRun{k: 4, sigma: 0.1, seconds: 600, run: func(s int) int { return s / 100 }}, true},
	} {
		t.Run(c.name, func(t *testing.T) {
			const seed, scenes = 11, 60
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
