package dsp

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"strings"
	"testing"
	"time"
)

// ticking is receiver audio with second pulses, made without any filter: the
// carrier's tone, the local's, and bursts beside the carrier on every true
// second, over one path or two that fade.
type ticking struct {
	rate    float64
	e       float64 // of the sample clock
	tone    float64 // the carrier's, Hz
	beat    float64 // the local is so far above it
	pulse   float64 // Hz of the burst beside the carrier: +1000, -1000, +1200
	cycles  float64 // of it; default 5
	cn0     float64 // dB-Hz
	seed    uint64
	fading  float64 // Hz; two paths a millisecond apart, 0: one steady path
	program bool    // tones, subcarrier, speech-like noise
	agc     float64 // s of decay; 0: none
	drift   float64 // of the receiver, Hz a minute
	miss    bool    // no pulse in seconds 29 and 59, a long one in second 0
	away    [2]float64
	often   float64 // pulses a second; default 1
	tenFrom float64 // from this second on they come ten times a second; 0: never
	click   float64 // a wide-band click on every true second, amplitude
}

// play makes seconds of it, nominal, in uneven blocks; between blocks it calls
// each with the samples so far.
func (s ticking) play(seconds float64, each func(x []float32, n int64)) {
	const amp = 0.1
	r := rand.New(rand.NewPCG(s.seed, 11))
	sigma := amp / math.Sqrt2 * math.Sqrt(s.rate/2/math.Pow(10, s.cn0/10))
	true_ := s.rate * (1 + s.e)
	cycles := s.cycles
	if cycles == 0 {
		cycles = 5
	}
	long := math.Inf(-1)
	if s.pulse != 0 {
		long = cycles / math.Abs(s.pulse)
	}
	var g [2][6]struct{ f, p float64 } // the paths' gains: a few slow waves each
	for i := range g {
		for j := range g[i] {
			g[i][j] = struct{ f, p float64 }{s.fading * r.NormFloat64() / 2, r.Float64()}
		}
	}
	gain := func(i int, t float64) (z complex128) {
		for _, w := range g[i] {
			z += cmplx.Rect(0.4, 2*math.Pi*frac(w.f*t+w.p))
		}
		return z
	}
	often := max(1, s.often)
	burst := func(t float64) complex128 { // the upper or lower sideband of the pulse
		if s.tenFrom > 0 && t > s.tenFrom {
			often = 10
		}
		sec := math.Floor(t * often)
		in, minute := t-sec/often, math.Mod(sec, 60)
		l := long
		if s.miss && (minute == 29 || minute == 59) || sec >= s.away[0] && sec < s.away[1] {
			return 0
		}
		if s.miss && minute == 0 {
			l = 0.8
		}
		if in < l {
			return cmplx.Rect(0.45, 2*math.Pi*s.pulse*in)
		}
		return 0
	}
	level, speech := amp, 0.0
	gains := [2]complex128{1, 0}
	block := make([]float32, 0, 6000)
	want := 1000
	var carrier, local, rotC, rotL complex128
	for n := int64(0); n < int64(seconds*s.rate); n++ {
		t := float64(n) / true_
		if s.fading > 0 && n&31 == 0 {
			gains[0], gains[1] = gain(0, t), gain(1, t)
		}
		m := gains[0] * (1 + burst(t))
		if s.fading > 0 {
			m += gains[1] * (1 + burst(t-0.001))
		}
		if s.program {
			in := t - math.Floor(t)
			if minute := math.Mod(t, 60); minute < 45 && in > 0.03 && in < 0.99 {
				m += complex(0.25, 0) * gains[0] * cmplx.Rect(1, 2*math.Pi*500*in)
			} else if minute >= 45 && minute < 55 {
				speech += 0.3 * (r.NormFloat64() - speech)
				m += complex(max(-0.5, min(0.5, speech*(1+math.Sin(2*math.Pi*3*t)))), 0)
			}
			if in > 0.03 && in < 0.2+0.3*float64(int(t)*7%3) {
				m += gains[0] * cmplx.Rect(0.09, 2*math.Pi*100*in)
			}
		}
		if n&63 == 0 {
			turn, hz := s.tone*t+s.drift*t*t/120, s.tone+s.drift*t/60
			carrier, rotC = cmplx.Rect(amp, 2*math.Pi*frac(turn)), cmplx.Rect(1, 2*math.Pi*hz/true_)
			local, rotL = cmplx.Rect(amp, 2*math.Pi*frac(turn+s.beat*t)), cmplx.Rect(1, 2*math.Pi*(hz+s.beat)/true_)
		}
		v := real(m*carrier) + real(local)
		carrier *= rotC
		local *= rotL
		if s.click > 0 && t-math.Floor(t) < 1/true_ {
			v += s.click
		}
		v += sigma * r.NormFloat64()
		if s.agc > 0 {
			if a := math.Abs(v); a > level {
				level += (a - level) * min(1, 200/s.rate)
			} else {
				level -= (level - a) / (s.agc * s.rate)
			}
			v *= 0.2 / max(level, 1e-3)
		}
		if block = append(block, float32(v)); len(block) == want {
			each(block, n+1)
			block, want = block[:0], 1+r.IntN(6000)
		}
	}
}

// hear plays a scene to a clock that knows the tones, and calls soon after ten
// minutes and a little.
func (s ticking) hear(c *clock, seconds float64, soon func()) {
	early := true
	s.play(seconds, func(x []float32, n int64) {
		c.push(x, nil)
		at := float64(n) / s.rate
		if at > 620 && early {
			early = false
			soon()
		}
		f := s.tone + s.drift*at/60
		c.tones(f, f+s.beat)
	})
}

// truth checks what a clock says against e.
func truth(t *testing.T, c *clock, name string, e, most, u float64) {
	t.Helper()
	got, gotU, how, ok := c.estimate()
	t.Logf("%s: e %+.3f ppm, error %+.3f, u %.3f, %s", name, got*1e6, (got-e)*1e6, gotU*1e6, how)
	if !ok || math.Abs(got-e) > most || gotU > u || math.Abs(got-e) > 3*gotU {
		t.Errorf("%s: said %+.3f ppm, u %.3f (%s, %v); it is %+.3f", name, got*1e6, gotU*1e6, how, ok, e*1e6)
	}
}

// Second pulses alone give the clock to 0.5 ppm in two hours and to a few ppm in
// ten minutes, on either side of the tone, through fading over two paths,
// programme, gain control and drift, with pulses missing.
func TestClockFromPulses(t *testing.T) {
	t.Parallel()
	scenes := []struct {
		name string
		ticking
	}{
		{"steady", ticking{rate: 4000, e: 150e-6, tone: 600, beat: 3.2, pulse: 1000, cn0: 50}},
		{"fading, programme, gain control", ticking{rate: 4000, e: -80e-6, tone: 600, beat: -4, pulse: 1000, cn0: 50, fading: 0.5, program: true, agc: 0.5, miss: true}},
		{"below the tone, drifting", ticking{rate: 4800, e: 20e-6, tone: 1500, beat: 5, pulse: -1000, cn0: 50, fading: 0.1, drift: 0.5}},
		{"1200 Hz, weak, set-off", ticking{rate: 5512.5, e: 400e-6, tone: 900, beat: 100, pulse: 1200, cycles: 6, cn0: 38}},
		{"far off", ticking{rate: 4000, e: -950e-6, tone: 600, beat: 2, pulse: 1000, cn0: 50}},
	}
	seeds, span := uint64(1), 1500.0
	if long() {
		seeds, span = 4, 7200
	}
	for _, s := range scenes {
		for seed := range seeds {
			s.seed = 100 + seed
			c := newClock(s.rate, false)
			s.hear(c, span, func() { truth(t, c, s.name+", 10 min", s.e, 5e-6, 5e-6) })
			truth(t, c, s.name, s.e, 0.5e-6, 0.5e-6)
		}
	}
}

// Nothing that is not short pulses once a second is taken for them: no claim, and
// no minute that passes for a find.
func TestClockClaimsNoPulses(t *testing.T) {
	t.Parallel()
	seconds := 800.0
	if long() {
		seconds = 20000
	}
	for _, s := range []struct {
		name string
		ticking
	}{
		{"noise", ticking{cn0: 50}},
		{"programme without pulses", ticking{cn0: 50, program: true, fading: 0.3, agc: 0.3}},
		{"a beat of exactly 1 Hz under gain control", ticking{cn0: 60, beat: 1, agc: 0.3}},
		{"the same, fast", ticking{cn0: 70, beat: 1, agc: 0.02}},
		{"2 Hz", ticking{cn0: 60, beat: 2, agc: 0.05}},
		{"3 Hz", ticking{cn0: 70, beat: -3, agc: 0.02}},
		{"25 Hz", ticking{cn0: 70, beat: 25, agc: 0.01}},
		{"100 Hz", ticking{cn0: 80, beat: 100, agc: 0.02}},
		{"clicks over the whole band", ticking{cn0: 50, click: 0.5}},
		{"bursts of 50 ms", ticking{cn0: 50, pulse: 1000, cycles: 50}},
		{"two bursts a second", ticking{cn0: 50, pulse: 1000, often: 2}},
		{"ten bursts a second", ticking{cn0: 50, pulse: 1000, often: 10}},
	} {
		s.rate, s.tone, s.seed = 4000, 600, 7
		if s.beat == 0 {
			s.beat = 3.3
		}
		c := newClock(s.rate, false)
		claims := 0
		s.play(seconds, func(x []float32, n int64) {
			c.push(x, nil)
			c.tones(600, 600+s.beat)
			if _, _, _, ok := c.estimate(); ok {
				claims++
			}
		})
		t.Logf("%s: %d minutes looked like pulses", s.name, len(c.pulses.found))
		if claims > 0 || c.pulses.locked {
			t.Errorf("%s: pulses claimed", s.name)
		}
	}
}

// By chance, candidates in every minute make a find about once in what the
// comment on pulses says.
func TestClockFindByChance(t *testing.T) {
	r := rand.New(rand.NewPCG(12, 1))
	hours := 20000
	if long() {
		hours = 1000000
	}
	finds := 0
	p := newPulses(8000, false)
	p.spots, p.found = make([]spot, 0, keepMinutes), make([]candidate, 0, 12)
	for m := range hours * 60 {
		if len(p.found) == cap(p.found) {
			p.found = p.found[:copy(p.found, p.found[1:])]
		}
		p.found = append(p.found, candidate{t: 60*float64(m) + 30, phase: r.Float64(), e: (2*r.Float64() - 1) * clockRange, good: true})
		if p.find(); p.locked {
			finds++
			p.locked = false
			p.spots = p.spots[:0]
		}
	}
	t.Logf("%d finds in %d h of nothing but chance candidates, one a minute", finds, hours)
	if finds > hours/2000 {
		t.Errorf("too many")
	}
}

// Pulses that stop are missed and not made up; those that come back at another
// place of the second, as after samples lost uncounted, go on with the same line;
// counted gaps cost nothing.
func TestClockPulsesInterrupted(t *testing.T) {
	t.Parallel()
	s := ticking{rate: 4000, e: 123e-6, tone: 600, beat: 4, pulse: 1000, cn0: 50, seed: 5, away: [2]float64{900, 1900}}
	c := newClock(s.rate, false)
	var lost int64
	var spots [4]int
	s.play(3600, func(x []float32, n int64) {
		at := float64(n) / s.rate
		spots[min(3, int(at/900))] = len(c.pulses.spots)
		if at > 2400 && lost == 0 { // a third of a second is lost and not counted
			lost = 1333
			c.gap(n - lost)
			return
		}
		if math.Mod(at, 100) < 1.5 { // these are counted
			c.gap(n - lost)
			return
		}
		c.push(x, nil)
		c.tones(s.tone, s.tone+s.beat)
	})
	t.Log("points after each quarter of an hour:", spots)
	if spots[1]-spots[0] > 1 {
		t.Errorf("%d minutes heard while the pulses were away", spots[1]-spots[0])
	}
	if c.pulses.trend.steps != 1 {
		t.Errorf("%d jumps noticed, there was one", c.pulses.trend.steps)
	}
	truth(t, c, "interrupted", s.e, 0.5e-6, 0.5e-6)
}

// A find is let go when what comes every second turns out to come oftener, and
// what it said with it.
func TestClockLetsGo(t *testing.T) {
	t.Parallel()
	s := ticking{rate: 4000, e: 40e-6, tone: 600, beat: 4, pulse: 1000, cn0: 50, seed: 6, tenFrom: 700}
	c := newClock(s.rate, false)
	s.hear(c, 7500, func() {
		if _, _, _, ok := c.estimate(); !ok || !c.pulses.locked {
			t.Error("not found")
		}
	})
	if _, _, _, ok := c.estimate(); ok || c.pulses.locked {
		t.Error("still claimed")
	}
}

// arrivals marks the samples of a clock that is off by e, as a host would see
// them: late by up to 30 ms, now and then by much more.
func arrivals(c *clock, e, seconds float64, seed uint64, clockShows func(t float64) float64) {
	r := rand.New(rand.NewPCG(seed, 21))
	start := time.Date(2026, 3, 1, 22, 0, 0, 0, time.UTC)
	for n := int64(4096); float64(n) < seconds*c.rate; n += 4096 {
		t := float64(n) / (c.rate * (1 + e))
		late := 0.030 * r.Float64()
		if r.IntN(20) == 0 {
			late += 0.1 * r.ExpFloat64()
		}
		if r.IntN(200) == 0 {
			late += r.Float64()
		}
		if math.Mod(t, 1800) < 70 { // a busy minute: everything is late
			late += 0.3 * r.Float64()
		}
		if at := clockShows(t + late); !math.IsNaN(at) {
			c.mark(n, start.Add(time.Duration(at*1e9)))
		}
		c.gap(n)
	}
}

func TestClockFromHost(t *testing.T) {
	t.Parallel()
	seeds := uint64(3)
	if long() {
		seeds = 60
	}
	for _, x := range []struct {
		name  string
		shows func(t float64) float64
	}{
		{"kept", func(t float64) float64 { return t }},
		{"set by an hour and back by 2.5 s", func(t float64) float64 {
			switch {
			case t > 4500:
				return t + 3600 - 2.5
			case t > 2500:
				return t + 3600
			}
			return t
		}},
		{"set back by an hour early on", func(t float64) float64 {
			if t > 130 {
				return t - 3600
			}
			return t
		}},
		{"away for twenty minutes", func(t float64) float64 {
			if t > 2000 && t < 3200 {
				return math.NaN()
			}
			return t
		}},
	} {
		within, all := 0, 0
		for seed := range seeds {
			for _, e := range []float64{150e-6, -80e-6, 20e-6, 400e-6, -1e-3} {
				c := newClock(8000, false)
				arrivals(c, e, 600, seed, x.shows)
				if _, u, _, ok := c.estimate(); !ok || u > 5e-6 {
					t.Errorf("%s: u %.2f ppm after 10 minutes", x.name, u*1e6)
				}
				c = newClock(8000, false)
				arrivals(c, e, 7200, seed, x.shows)
				got, u, how, ok := c.estimate()
				if seed == 0 {
					t.Logf("%s: error %+.3f ppm, u %.3f, %s", x.name, (got-e)*1e6, u*1e6, how)
				}
				if !ok || math.Abs(got-e) > 0.5e-6 || u > 0.5e-6 {
					t.Errorf("%s, seed %d: said %+.3f ppm, u %.3f, %v; it is %+.3f", x.name, seed, got*1e6, u*1e6, ok, e*1e6)
				}
				if all++; math.Abs(got-e) < 2*u {
					within++
				}
			}
		}
		if within*10 < all*9 {
			t.Errorf("%s: %d of %d within 2u", x.name, within, all)
		}
	}
}

// A host's clock that runs free and is set right every half hour is not believed.
func TestClockHostSetAgainAndAgain(t *testing.T) {
	c := newClock(8000, false)
	arrivals(c, 20e-6, 7200, 3, func(t float64) float64 { return t + 60e-6*math.Mod(t, 1800) })
	if e, u, how, ok := c.estimate(); ok {
		t.Errorf("%+.2f ppm, u %.2f, %s; it is +20", e*1e6, u*1e6, how)
	}
}

// The slope is that of an ordinary least-squares line where nothing is amiss, and
// its u covers it as it should; strays and jumps change neither much.
func TestTrend(t *testing.T) {
	r := rand.New(rand.NewPCG(8, 8))
	within, trials := 0, 400
	for range trials {
		var p []spot
		var st, sx, stt, stx float64
		for i := range 100 {
			at, x := 60*float64(i), 5e-6*60*float64(i)+1e-3*r.NormFloat64()
			p = append(p, spot{at, x, 1e-3})
			st, sx, stt, stx = st+at, sx+x, stt+at*at, stx+at*x
		}
		plain := (stx - st*sx/100) / (stt - st*st/100)
		tr := trend{jump: 0.015}
		if !tr.fit(p, 30e-6) {
			t.Fatal("no line")
		}
		if math.Abs(tr.b-plain) > tr.u || tr.steps != 0 {
			t.Errorf("slope %g, ordinary %g, u %g, %d jumps", tr.b, plain, tr.u, tr.steps)
		}
		if math.Abs(tr.b-5e-6) < tr.u {
			within++
		}
		for i := range p {
			if i > 60 {
				p[i].x += 40
			}
			if i%17 == 3 {
				p[i].x -= 0.5
			}
		}
		if !tr.fit(p, 0) || math.Abs(tr.b-5e-6) > 5*tr.u || tr.steps != 1 {
			t.Errorf("with strays and a jump: slope %g, u %g, %d jumps", tr.b, tr.u, tr.steps)
		}
	}
	t.Logf("%d of %d within u", within, trials)
	if within < trials*65/100 { // 68 % were it exact; it leans to the safe side
		t.Errorf("%d of %d within u", within, trials)
	}
}

// Sources that agree are combined; sources that do not are both covered, or no
// number is given.
func TestClockCombined(t *testing.T) {
	say := func(ppm, u float64) told { return told{e: ppm * 1e-6, u: u * 1e-6, span: 7200, ok: true} }
	for _, x := range []struct {
		p, h  told
		e, u  float64
		words string
		ok    bool
	}{
		{say(10, 0.3), told{}, 10, 0.3, "second pulses over 2.0 h", true},
		{told{}, say(-20, 0.4), -20, 0.4, "host clock over 2.0 h", true},
		{say(10, 0.3), say(10.5, 0.4), 10.18, 0.24, "second pulses over 2.0 h and host clock over 2.0 h", true},
		{say(10, 0.3), say(20, 0.4), 15, 5.02, "disagree: +10.00 and +20.00 ppm", true},
		{say(10, 0.3), say(80, 0.4), 0, 0, "disagree", false},
		{told{}, told{}, 0, 0, "", false},
	} {
		c := newClock(8000, false)
		c.pulses.told, c.host.told = x.p, x.h
		e, u, how, ok := c.estimate()
		if ok != x.ok || !strings.Contains(how, x.words) || ok && (math.Abs(e*1e6-x.e) > 0.01 || math.Abs(u*1e6-x.u) > 0.01) {
			t.Errorf("%v, %v: %+.3f ppm, u %.3f, %q, %v", x.p, x.h, e*1e6, u*1e6, how, ok)
		}
	}
}

// An estimate ages: u grows as the clock may have wandered.
func TestClockAges(t *testing.T) {
	c := newClock(8000, false)
	c.host.told = told{e: 1e-5, u: 1e-7, at: 0, span: 7200, ok: true}
	c.gap(8000 * 3600 * 16)
	if _, u, _, ok := c.estimate(); !ok || math.Abs(u-math.Hypot(1e-7, 2e-7)) > 1e-12 {
		t.Errorf("u %g after 16 h", u)
	}
}

// A quadrature input hears the pulses at negative frequencies too.
func TestClockComplex(t *testing.T) {
	const rate, e = 4000.0, 70e-6
	c := newClock(rate, true)
	r := rand.New(rand.NewPCG(4, 4))
	x, q := make([]float32, 4000), make([]float32, 4000)
	for n := 0; n < 900*4000; n += len(x) {
		for i := range x {
			ti := float64(n+i) / (rate * (1 + e))
			z := complex(0.1, 0)
			if in := frac(ti); in < 0.005 {
				z += cmplx.Rect(0.04, -2*math.Pi*1000*in)
			}
			z *= cmplx.Rect(1, 2*math.Pi*frac(-300*ti))
			x[i] = float32(real(z) + 0.01*r.NormFloat64())
			q[i] = float32(imag(z) + 0.01*r.NormFloat64())
		}
		c.push(x, q)
		c.tones(-300, -297)
	}
	truth(t, c, "quadrature", e, 2e-6, 2e-6)
}

// Whether hunting or held, a second of sound costs no allocation.
func TestClockAllocatesNothing(t *testing.T) {
	s := ticking{rate: 8000, e: 10e-6, tone: 1000, beat: 3, pulse: 1000, cn0: 55, seed: 2}
	c := newClock(s.rate, false)
	var minute []float32
	s.play(60, func(x []float32, n int64) { minute = append(minute, x...) })
	start := time.Now()
	second := func() {
		from := int(c.n % 470000)
		c.push(minute[from:from+8000], nil)
		c.tones(1000, 1003)
		c.mark(c.n, start.Add(time.Duration(c.n)*125*time.Microsecond))
	}
	for range 200 {
		second()
	}
	if n := testing.AllocsPerRun(600, second); n > 0 {
		t.Errorf("%v allocations a second of sound", n)
	}
}

// What the clock adds to a bench: while it hunts for pulses, while it holds them,
// and when there are none.
func BenchmarkClock(b *testing.B) {
	for _, rate := range []float64{8000, 48000, 192000} {
		for _, pulse := range []float64{0, 1000} {
			b.Run(map[float64]string{8000: "8kHz", 48000: "48kHz", 192000: "192kHz"}[rate]+map[float64]string{0: "/none", 1000: "/held"}[pulse], func(b *testing.B) {
				s := ticking{rate: rate, tone: 1000, beat: 3, pulse: pulse, cn0: 55, seed: 2}
				c := newClock(rate, false)
				var minute []float32
				s.play(60.2, func(x []float32, n int64) { minute = append(minute, x...) })
				minute = minute[:int(60*rate)]
				play := func() {
					for i := 0; i < len(minute); i += 16384 {
						c.push(minute[i:min(len(minute), i+16384)], nil)
						c.tones(1000, 1003)
					}
				}
				for range 15 {
					play()
				}
				if c.pulses.locked != (pulse > 0) {
					b.Fatal("locked:", c.pulses.locked)
				}
				for b.Loop() {
					for range 30 {
						play()
					}
				}
				b.ReportMetric(b.Elapsed().Seconds()/float64(b.N)/1800*1e6, "us/second")
			})
		}
	}
}
