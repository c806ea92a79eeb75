package dsp

import (
	"math"

	"offbeat/dsp/stability"
)

// mean returns the mean beat by the nominal clock, its standard uncertainty
// against the carrier as sent (noise and fading), and how it was made. Within every unbroken run the
// phase is regressed on time with one common slope. That is the best there is
// while the phase noise is white, and its uncertainty is then the regression's.
// Where the residuals wander further than neighbours differ, the carrier's
// fading (or a drifting local) makes the noise white FM or redder: then the
// mean over the unbroken runs is taken from their ends, and the Allan deviation
// says what it is worth: the largest of adev(m) * sqrt(m tau0 / T).
func (s *Summer) mean() (mean, u float64, method string) {
	slope, resid, sxx, points := s.regress()
	if points < 3 && s.wide < s.usable/2 {
		return s.weighted()
	}
	dt := float64(s.tau0)
	d1, n1 := stability.Overlapping(s.phase, s.run, dt, 1)
	white := d1 * dt / math.Sqrt(3) // sigma of white phase noise that gives this adev, cycles
	// In short runs wandering cannot show in the residuals: there the phases must
	// also be as quiet as the readings' own uncertainty says.
	trusted := white < 4*s.phaseU() || points > 30*s.runs()
	// One slow tone: a reading near the end rests on nearly all of the sound, with
	// level and offset fitted beside the beat. That beats phases told one by one,
	// unless the run is many spans long.
	if s.cfg.Hookup != TwoTone && s.cfg.LocalTone == 0 {
		if m, wu, method := s.weighted(); wu < max(resid, white)/math.Sqrt(sxx) {
			return m, wu, method
		}
	}
	if points >= 3 && (n1 < 8 || resid < 1.6*white && trusted) && s.wide < s.usable/2 {
		su := max(resid, s.phaseU(), white) / math.Sqrt(sxx)
		return slope, su, "phase regression over unbroken runs"
	}
	if mean, u, ok := s.coherent(); ok {
		return mean, math.Hypot(u, s.phaseU()/math.Sqrt(max(sxx, 1))), "coherent over the run: the carrier's steady part"
	}
	if s.wide >= s.usable/2 {
		if mean, u, ok := s.byPower(); ok {
			return mean, u, "mean weighted by the carrier's power; uncertainty from its fading"
		}
		return s.weighted()
	}
	m, held := s.ends()
	worst := 0.0
	for k := 1; float64(k)*dt <= held/3; k *= 2 {
		if a, n := stability.Overlapping(s.phase, s.run, dt, k); n >= 2 {
			// Few differences make a poor estimate: take its upper limit.
			_, high := stability.Limits(a, stability.EDF(0, n+2*k, k), 0.6827)
			worst = max(worst, high*math.Sqrt(float64(k)*dt/held))
		}
	}
	return m, max(worst, s.phaseU()/held), "mean over unbroken runs; uncertainty from the Allan deviation"
}

// regress fits phase = offset(run) + slope*t by least squares and returns the
// slope (Hz), the residuals' standard deviation (cycles), the sum of squares of
// time about the runs' means, and the number of points.
func (s *Summer) regress() (slope, resid, sxx float64, points int) {
	var sxy, syy float64
	runs := 0
	s.eachRun(func(lo, hi int) {
		var n, mt, mp float64
		var xx, xy, yy float64
		for i := lo; i < hi; i++ {
			if math.IsNaN(s.phase[i]) {
				continue
			}
			n++
			t, p := float64(i*s.tau0), s.phase[i]
			dt, dp := t-mt, p-mp
			mt += dt / n
			mp += dp / n
			xx += dt * (t - mt)
			xy += dt * (p - mp)
			yy += dp * (p - mp)
		}
		if n >= 2 {
			sxx, sxy, syy = sxx+xx, sxy+xy, syy+yy
			points += int(n)
			runs++
		}
	})
	if sxx == 0 {
		return 0, 0, 0, 0
	}
	slope = sxy / sxx
	// The residual afresh: syy - slope*sxy would cancel.
	sum := 0.0
	s.eachRun(func(lo, hi int) {
		var n, m float64
		for i := lo; i < hi; i++ {
			if !math.IsNaN(s.phase[i]) {
				n++
				m += (s.phase[i] - slope*float64(i*s.tau0) - m) / n
			}
		}
		if n < 2 {
			return
		}
		for i := lo; i < hi; i++ {
			if !math.IsNaN(s.phase[i]) {
				d := s.phase[i] - slope*float64(i*s.tau0) - m
				sum += d * d
			}
		}
	})
	if free := points - runs - 1; free > 0 {
		resid = math.Sqrt(sum / float64(free))
	}
	return slope, resid, sxx, points
}

// runs returns the number of unbroken runs of at least two phases.
func (s *Summer) runs() int {
	runs := 0
	s.eachRun(func(lo, hi int) {
		if hi-lo >= 2 {
			runs++
		}
	})
	return max(runs, 1)
}

// eachRun calls f for every stretch of one phase run.
func (s *Summer) eachRun(f func(lo, hi int)) {
	for lo := 0; lo < len(s.run); {
		hi := lo + 1
		for hi < len(s.run) && s.run[hi] == s.run[lo] {
			hi++
		}
		f(lo, hi)
		lo = hi
	}
}

// ends returns the mean beat from the first and last phase of every run,
// weighted by their lengths, and the seconds held in all.
func (s *Summer) ends() (mean, held float64) {
	cycles := 0.0
	s.eachRun(func(lo, hi int) {
		a, b := -1, -1
		for i := lo; i < hi; i++ {
			if !math.IsNaN(s.phase[i]) {
				if a < 0 {
					a = i
				}
				b = i
			}
		}
		if b > a {
			cycles += s.phase[b] - s.phase[a]
			held += float64((b - a) * s.tau0)
		}
	})
	return cycles / held, held
}

// phaseU returns the standard uncertainty of a single phase, cycles, from the
// stated uncertainty of the beats: for one second of a line in white noise
// u(phase) = u(f) T / sqrt(3) in cycles (Rife & Boorstyn: var(w) = 6/(..N^3),
// var(phi at centre) = 1/(2 N SNR)).
func (s *Summer) phaseU() float64 {
	sum, n := 0.0, 0.0
	for i, u := range s.u {
		if !math.IsNaN(u) && !math.IsNaN(s.phase[i]) {
			sum += u * u * math.Pow(max(1, s.span[i]), 3) // of one second's phase
			n++
		}
	}
	if n == 0 {
		return 0
	}
	return math.Sqrt(sum/n) / math.Sqrt(12)
}

// weighted is the mean of single readings whose spans do not overlap, taken
// from the end backwards: the latest rest on the longest spans.
func (s *Summer) weighted() (mean, u float64, method string) {
	var w, wx, n, chi float64
	upto := math.Inf(1)
	for i := len(s.beat) - 1; i >= 0; i-- {
		t := float64(i * s.tau0)
		if math.IsNaN(s.beat[i]) || !(s.u[i] > 0) || t > upto {
			continue
		}
		upto = t - max(s.span[i], float64(s.tau0))*0.999
		k := 1 / (s.u[i] * s.u[i])
		w += k
		wx += k * s.beat[i]
		n++
		// The spread about the mean so far, term by term (Welford; West 1979).
		if w > k {
			d := s.beat[i] - (wx-k*s.beat[i])/(w-k)
			chi += d * d * k * (w - k) / w
		}
	}
	if w == 0 {
		return math.NaN(), math.NaN(), "no reading with an uncertainty"
	}
	u = math.Sqrt(1 / w)
	if n > 1 {
		u *= math.Sqrt(max(1, chi/(n-1)))
	}
	return wx / w, u, "weighted mean of readings whose spans do not overlap"
}
