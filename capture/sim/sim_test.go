package sim

import (
	"bytes"
	"context"
	"encoding/json"
	"io"
	"math"
	"math/cmplx"
	"slices"
	"strings"
	"testing"
	"time"

	"offbeat/capture"
)

// all reads a whole scene.
func all(t testing.TB, cfg Config) (*Bench, [][]float32, []Truth) {
	t.Helper()
	b, err := New(cfg)
	if err != nil {
		t.Fatal(err)
	}
	var blk capture.Block
	var ch [][]float32
	var truth []Truth
	b.told = func(tr Truth) { truth = append(truth, tr) }
	for {
		err := b.Read(&blk)
		if err == io.EOF {
			break
		}
		if err != nil {
			t.Fatal(err)
		}
		for i := range blk.Ch {
			if len(ch) <= i {
				ch = append(ch, nil)
			}
			ch[i] = append(ch[i], blk.Ch[i]...)
		}
	}
	return b, ch, truth
}

// line returns the complex amplitude of x at f by a Hann-weighted sum: the
// independent analyser of these tests. f in Hz at the given rate.
func line(x []float32, rate, f float64) complex128 {
	var sum complex128
	var w float64
	n := float64(len(x))
	for i, v := range x {
		h := 0.5 - 0.5*math.Cos(2*math.Pi*(float64(i)+0.5)/n)
		_, ph := math.Modf(f * float64(i) / rate)
		sum += complex(h*float64(v), 0) * cmplx.Rect(1, -2*math.Pi*ph)
		w += h
	}
	return sum * complex(2/w, 0)
}

// freq measures a frequency near f from the phases of two halves.
func freq(x []float32, rate, f float64) float64 {
	n := len(x) / 2
	a, b := line(x[:n], rate, f), line(x[n:2*n], rate, f)
	_, whole := math.Modf(f * float64(n) / rate)
	d := cmplx.Phase(b*cmplx.Conj(a))/(2*math.Pi) - whole
	d -= math.Round(d)
	return f + d*rate/float64(n)
}

// Tones lie where the model puts them, with their levels: sidebands, set-off,
// sample-clock error; no noise.
func TestModel(t *testing.T) {
	for _, c := range []struct {
		name        string
		cfg         Config
		carr, local float64
	}{
		{"usb", Config{Offset: 3.2}, 1000, 1003.2},
		{"lsb", Config{Offset: 3.2, Sideband: "lsb"}, 1000, 996.8},
		{"low", Config{Offset: -7.5}, 1000, 992.5},
		{"set-off", Config{Offset: 1, Local: 10e6 + 100}, 1000, 1101},
		{"clock", Config{Offset: 3.2, ClockError: 200e-6}, 1000 / 1.0002, 1003.2 / 1.0002},
		{"clock lsb", Config{Offset: 3.2, ClockError: -200e-6, Sideband: "lsb"}, 1000 / 0.9998, 996.8 / 0.9998},
	} {
		c.cfg.Rate, c.cfg.Duration, c.cfg.CarrierCN0, c.cfg.White, c.cfg.Seed = 8000, 8, 160, true, 1
		_, ch, truth := all(t, c.cfg)
		for _, x := range []struct {
			what        string
			want, level float64
			told        float64
		}{{"carrier", c.carr, -20, truth[3].CarrierTone}, {"local", c.local, -18, truth[3].LocalTone}} {
			if f := freq(ch[0], 8000, x.want+0.01); math.Abs(f-x.want) > 2e-5 || math.Abs(x.told-x.want) > 1e-9 {
				t.Errorf("%s: %s at %.6f Hz, truth says %.6f, want %.6f", c.name, x.what, f, x.told, x.want)
			}
			if l := 20 * math.Log10(cmplx.Abs(line(ch[0], 8000, x.want))); math.Abs(l-x.level) > 0.005 {
				t.Errorf("%s: %s at %.3f dBFS, want %g", c.name, x.what, l, x.level)
			}
		}
		want := c.cfg.Offset
		if c.cfg.Local != 0 {
			want += c.cfg.Local - 10e6
		}
		if math.Abs(truth[2].Beat-want) > 1e-9 || math.Abs(truth[7].Phase-truth[2].Phase-5*want/(1+c.cfg.ClockError)) > 1e-9 {
			t.Errorf("%s: beat %v, phase grew by %v in 5 s", c.name, truth[2].Beat, truth[7].Phase-truth[2].Phase)
		}
	}
}

// Away from tones a clean scene is clean: images and interpolation lie 100 dB
// below the carrier.
func TestClean(t *testing.T) {
	_, ch, _ := all(t, Config{Rate: 48000, Duration: 4, CarrierCN0: 160, White: true, Seed: 1, LocalDBFS: -139, CarrierDBFS: -6})
	for f := 137.0; f < 23000; f += 379 {
		if math.Abs(f-1000) < 20 {
			continue
		}
		if l := 20*math.Log10(cmplx.Abs(line(ch[0], 48000, f))+1e-12) + 6; l > -100 {
			t.Errorf("%.0f Hz: %.1f dB below the carrier", f, l)
		}
	}
}

// C/N0 at the carrier is as asked, white and filtered, by the power between
// lines.
func TestCN0(t *testing.T) {
	for _, white := range []bool{true, false} {
		_, ch, _ := all(t, Config{Rate: 8000, Duration: 60, CarrierCN0: 50, White: white, Seed: 3, LocalDBFS: -139})
		power, n := 0.0, 0.0
		for f := 900.0; f < 1100; f += 2.31 {
			if math.Abs(f-1000) < 5 {
				continue
			}
			for s := range 15 {
				a := line(ch[0][s*32000:(s+1)*32000], 8000, f)
				power += real(a)*real(a) + imag(a)*imag(a)
				n++
			}
		}
		// |line|^2 of a Hann window of T seconds sees a density times 1.5/T.
		density := power / n * 4 / 1.5
		got := 10 * math.Log10(0.01/density)
		if math.Abs(got-50) > 0.2 {
			t.Errorf("white %v: C/N0 %.2f dB-Hz", white, got)
		}
	}
}

// Fading has the published statistics (facts: level crossings a second
// 2 sqrt(pi) sigma rho exp(-rho^2), Rayleigh with a Gaussian spectrum), its
// power 1 and its spectrum the width asked for.
func TestFadingStatistics(t *testing.T) {
	const sigma, rate, n = 0.5, 50.0, 400000
	p := newPath(sigma, 7, 1)
	g := make([]complex128, n)
	power := 0.0
	for i := range g {
		g[i] = p.at(float64(i) / rate)
		power += real(g[i])*real(g[i]) + imag(g[i])*imag(g[i])
	}
	power /= n
	if math.Abs(power-1) > 0.05 {
		t.Errorf("mean power %.3f", power)
	}
	// Width from the lag-one correlation: exp(-(2 pi sigma t)^2 / 2).
	var c complex128
	for i := 1; i < n; i++ {
		c += g[i] * cmplx.Conj(g[i-1])
	}
	rho := cmplx.Abs(c) / float64(n-1) / power
	if w := math.Sqrt(-2*math.Log(rho)) * rate / (2 * math.Pi); math.Abs(w/sigma-1) > 0.03 {
		t.Errorf("rms width %.4f Hz, want %g", w, sigma)
	}
	for _, r := range []float64{0.316, 1} {
		crossings, under := 0, 0
		for i := 1; i < n; i++ {
			if cmplx.Abs(g[i]) < r*math.Sqrt(power) {
				under++
			}
			if cmplx.Abs(g[i-1]) < r*math.Sqrt(power) && cmplx.Abs(g[i]) >= r*math.Sqrt(power) {
				crossings++
			}
		}
		got, want := float64(crossings)/(n/rate), 2*math.Sqrt(math.Pi)*sigma*r*math.Exp(-r*r)
		if math.Abs(got/want-1) > 0.06 {
			t.Errorf("crossings of %g: %.4f a second, published %.4f", r, got, want)
		}
		fade := float64(under) / rate / float64(crossings)
		if want := (math.Exp(r*r) - 1) / (2 * math.Sqrt(math.Pi) * sigma * r); math.Abs(fade/want-1) > 0.06 {
			t.Errorf("mean fade below %g: %.4f s, published %.4f", r, fade, want)
		}
	}
}

// The presets are the rows of ITU-R F.1487 for middle latitudes.
func TestPresets(t *testing.T) {
	for name, want := range map[string][2]float64{"quiet": {0.5e-3, 0.1}, "moderate": {1e-3, 0.5}, "disturbed": {2e-3, 1}} {
		b, err := New(Config{Channel: name, Seed: 1})
		if err != nil {
			t.Fatal(err)
		}
		if b.cfg.PathDelay != want[0] || 2*b.cfg.SpreadHz != want[1] {
			t.Errorf("%s: %v", name, b.cfg)
		}
	}
	b, _ := New(Config{Channel: "quiet", RiceK: 3, Seed: 2})
	var mean complex128
	power := 0.0
	const n = 40000
	for i := range n {
		g1, g2 := b.ch.at(100 + float64(i))
		mean += (g1 + g2) / n
		power += (real(g1+g2)*real(g1+g2) + imag(g1+g2)*imag(g1+g2)) / n
	}
	k := real(mean*cmplx.Conj(mean)) / (power - real(mean*cmplx.Conj(mean)))
	if math.Abs(power-1) > 0.03 || math.Abs(k-3) > 0.2 {
		t.Errorf("power %.3f, Rice factor %.2f", power, k)
	}
}

// The truth's Doppler shift is the carrier's power-weighted mean frequency: by
// the phase of the sound itself where it does not fade deeply.
func TestTruthOfAFadingCarrier(t *testing.T) {
	for _, sb := range []string{"usb", "lsb"} {
		_, ch, truth := all(t, Config{Rate: 8000, Duration: 120, CarrierCN0: 160, White: true, Seed: 5, Channel: "quiet", RiceK: 10, LocalDBFS: -139, Sideband: sb})
		worst := 0.0
		for i := 1; i < 119; i++ {
			f := freq(ch[0][i*8000:(i+1)*8000], 8000, 1000)
			worst = max(worst, math.Abs(f-truth[i].CarrierTone))
		}
		if worst > 0.03 {
			t.Errorf("%s: truth and sound differ by up to %.3f Hz", sb, worst)
		}
	}
}

// The local's noise has the Allan deviation asked for.
func TestLocalNoise(t *testing.T) {
	adev := func(y []float64, m int) float64 {
		var a []float64
		for i := 0; i+m <= len(y); i += m {
			s := 0.0
			for _, v := range y[i : i+m] {
				s += v / float64(m)
			}
			a = append(a, s)
		}
		s := 0.0
		for i := 1; i < len(a); i++ {
			s += (a[i] - a[i-1]) * (a[i] - a[i-1])
		}
		return math.Sqrt(s / 2 / float64(len(a)-1))
	}
	for _, c := range []struct {
		name string
		cfg  Config
		at   map[int]float64 // tau, s: adev
		tol  float64
	}{
		{"white", Config{LocalWhiteFM: 1e-10}, map[int]float64{1: 1e-10, 16: 0.25e-10}, 0.1},
		{"flicker", Config{LocalFlickerFM: 1e-10}, map[int]float64{4: 1e-10, 16: 1e-10, 64: 1e-10}, 0.2},
		{"walk", Config{LocalWalkFM: 1e-10}, map[int]float64{1: 1e-10, 16: 4e-10}, 0.2},
	} {
		c.cfg.Seed, c.cfg.Rate, c.cfg.Hookup, c.cfg.Duration = 5, 10, "mixer", 20000
		_, _, truth := all(t, c.cfg)
		y := make([]float64, len(truth))
		for i := range y {
			y[i] = truth[i].Beat / 10e6
		}
		for tau, want := range c.at {
			if got := adev(y, tau); math.Abs(got/want-1) > c.tol {
				t.Errorf("%s at %d s: %.3g, want %.3g", c.name, tau, got, want)
			}
		}
	}
}

// The programme's sidebands are symmetric on a steady channel, in both
// receivers, and a pulse stands on every second.
func TestProgramme(t *testing.T) {
	for _, sb := range []string{"usb", "lsb"} {
		_, ch, _ := all(t, Config{Rate: 8000, Duration: 4, CarrierCN0: 160, White: true, Seed: 1, LocalDBFS: -139, Tones: true, Sideband: sb, Tone: 1500})
		up, down := cmplx.Abs(line(ch[0], 8000, 2000)), cmplx.Abs(line(ch[0], 8000, 1000))
		if math.Abs(up/down-1) > 1e-5 || math.Abs(up/0.1-0.25) > 0.002 {
			t.Errorf("%s: sidebands %.6f and %.6f", sb, up, down)
		}
	}
	_, ch, _ := all(t, Config{Rate: 8000, Duration: 5, CarrierCN0: 160, White: true, Seed: 1, LocalDBFS: -139, SecondPulses: true, Tone: 1237})
	for s := 1; s < 5; s++ {
		in, out := 0.0, 0.0
		for i := range 40 {
			in = max(in, math.Abs(float64(ch[0][s*8000+i])))
			out = max(out, math.Abs(float64(ch[0][s*8000+1000+i])))
		}
		if in < 1.4*out {
			t.Errorf("second %d: peak %.3f in the pulse, %.3f outside", s, in, out)
		}
	}
}

// The same seed gives the same sound however it is read, and turning the
// trimmer keeps the phase continuous.
func TestDeterminismAndTrim(t *testing.T) {
	cfg := Default()
	cfg.Rate, cfg.Duration = 8000, 6
	_, a, ta := all(t, cfg)
	for _, most := range []int64{1, 37, 8000} {
		small, err := New(cfg)
		if err != nil {
			t.Fatal(err)
		}
		small.most = most
		var blk capture.Block
		n := 0
		for ; small.Read(&blk) == nil; n += blk.Len() {
			if int64(blk.Len()) > most || !slices.Equal(blk.Ch[0], a[0][n:n+blk.Len()]) {
				t.Fatalf("blocks of %d give other sound", most)
			}
		}
		if n != len(a[0]) {
			t.Fatalf("%d samples in blocks of %d", n, most)
		}
	}
	_, b, _ := all(t, cfg)
	for i := range a[0] {
		if a[0][i] != b[0][i] {
			t.Fatal("the same seed gives other sound")
		}
	}
	if len(ta) != 6 || len(a[0]) != 48000 {
		t.Fatalf("%d seconds of truth, %d samples", len(ta), len(a[0]))
	}
	bn, _ := New(Config{Rate: 8000, CarrierCN0: 160, White: true, Seed: 1, CarrierDBFS: -139, Duration: 8})
	var blk capture.Block
	var x []float32
	for bn.Read(&blk) == nil {
		x = append(x, blk.Ch[0]...)
		if len(x) == 16000 {
			bn.Trim(5)
		}
	}
	jump := 0.0
	for i := 2; i < len(x); i++ {
		jump = max(jump, math.Abs(float64(x[i]-2*x[i-1]+x[i-2])))
	}
	if w := 2 * math.Pi * 1005 / 8000; jump > amplitude(-18)*w*w*1.01 {
		t.Errorf("a corner of %.4f in the sound", jump)
	}
	if f := freq(x[3*8000:8*8000], 8000, 1005); math.Abs(f-1005) > 1e-3 || bn.Trimmed() != 5 {
		t.Errorf("local at %.4f Hz after a turn of 5 Hz", f)
	}
}

func TestEvents(t *testing.T) {
	cfg := Config{Rate: 8000, Duration: 10, CarrierCN0: 160, White: true, Seed: 1, CarrierAway: [][2]float64{{2, 4}}, LocalAway: [][2]float64{{6, 7}},
		Retunes: []Step{{At: 5, By: 40}}, Trims: []Turn{{At: 8, By: -2, Over: 1}}}
	_, ch, truth := all(t, cfg)
	for i, tr := range truth {
		sec := ch[0][i*8000 : (i+1)*8000]
		shift := 0.0
		if tr.T > 5 {
			shift = 40
		}
		c, l := cmplx.Abs(line(sec, 8000, 1000+shift)) > 0.05, cmplx.Abs(line(sec, 8000, 1000+shift+tr.Beat)) > 0.05
		if c != tr.Carrier && tr.Beat > 5 || !tr.Carrier != (i == 2 || i == 3) || !tr.Local != (i == 6) || tr.Retuned != (i == 5) {
			t.Errorf("second %d: %+v, heard %v %v", i, tr, c, l)
		}
	}
	if math.Abs(truth[9].Beat+2) > 1e-9 || math.Abs(truth[8].Beat+1) > 0.01 {
		t.Errorf("after the turn %v, during it %v", truth[9].Beat, truth[8].Beat)
	}
}

func TestDropouts(t *testing.T) {
	b, err := New(Config{Rate: 8000, Duration: 60, Seed: 4, DropEvery: 5, DropFor: 0.3})
	if err != nil {
		t.Fatal(err)
	}
	var blk capture.Block
	next, gaps, lost, told := int64(0), 0, int64(0), int64(0)
	b.told = func(tr Truth) { told += tr.Lost }
	for b.Read(&blk) == nil {
		if blk.First != next+blk.Lost {
			t.Fatalf("first %d after %d, lost %d", blk.First, next, blk.Lost)
		}
		if blk.Lost > 0 {
			gaps++
			lost += blk.Lost
			if blk.Lost != 2400 && blk.First+int64(blk.Len()) != 480000 || blk.Cause != capture.Simulated {
				t.Errorf("%+v", blk.Lost)
			}
		}
		next = blk.First + int64(blk.Len())
	}
	if gaps < 4 || gaps > 25 {
		t.Errorf("%d drop-outs in a minute", gaps)
	}
	if told != lost || next != 480000 {
		t.Errorf("lost %d samples, truth says %d; ended at %d", lost, told, next)
	}
}

func TestPace(t *testing.T) {
	b, err := New(Config{Rate: 8000, Pace: true, Seed: 1})
	if err != nil {
		t.Fatal(err)
	}
	var blk capture.Block
	start := time.Now()
	var first time.Time
	n := 0
	for n < 8000 {
		if err := b.Read(&blk); err != nil {
			t.Fatal(err)
		}
		if first.IsZero() {
			first = blk.Wall
		}
		n += blk.Len()
	}
	// Not early, and the wall clock goes with the samples.
	if d := time.Since(start).Seconds(); d < 0.9 {
		t.Errorf("a second of sound in %.3f s", d)
	}
	if d := blk.Wall.Sub(first).Seconds() - float64(blk.First)/8000; math.Abs(d) > 1e-6 {
		t.Errorf("wall clock off by %g s", d)
	}
}

func TestQuadratureAndMixer(t *testing.T) {
	for _, sb := range []string{"usb", "lsb"} {
		_, ch, _ := all(t, Config{Rate: 8000, Duration: 4, Hookup: "quadrature", CarrierCN0: 160, Offset: 3.2, Seed: 1, Sideband: sb})
		turn := 0.0
		for i := 1; i < len(ch[0]); i++ {
			a, b := complex(float64(ch[0][i-1]), float64(ch[1][i-1])), complex(float64(ch[0][i]), float64(ch[1][i]))
			turn += cmplx.Phase(b*cmplx.Conj(a)) / (2 * math.Pi)
		}
		want := 3.2 * 4
		if sb == "lsb" {
			want = -want
		}
		if math.Abs(turn-want) > 0.01 {
			t.Errorf("%s: %.3f turns in 4 s, want %.1f", sb, turn, want)
		}
	}
	_, ch, _ := all(t, Config{Rate: 100, Duration: 20, Hookup: "mixer", CarrierCN0: 160, Offset: -2, Seed: 1, DC: 0.1})
	if a := cmplx.Abs(line(ch[0], 100, 2)); math.Abs(a-0.1) > 1e-3 {
		t.Errorf("mixer: amplitude %.4f at 2 Hz", a)
	}
}

func TestWrite(t *testing.T) {
	for _, bits := range []int{16, 24, 32} {
		var wav, truth bytes.Buffer
		cfg := Default()
		cfg.Rate, cfg.Duration = 8000, 3
		if err := Write(context.Background(), &wav, &truth, cfg, WriteOptions{Bits: bits}); err != nil {
			t.Fatal(err)
		}
		if want := 44 + 3*8000*bits/8 + map[int]int{32: 14}[bits]; wav.Len() != want {
			t.Errorf("%d bits: %d bytes", bits, wav.Len())
		}
		lines := strings.Split(strings.TrimSpace(truth.String()), "\n")
		if len(lines) != 4 || !strings.HasPrefix(lines[0], `{"scene":{`) {
			t.Fatalf("%d lines of truth: %s", len(lines), lines[0])
		}
		var tr Truth
		if err := json.Unmarshal([]byte(lines[2]), &tr); err != nil || tr.T != 1.5 || math.Abs(tr.Beat-3.2) > 0.01 {
			t.Errorf("%+v %v", tr, err)
		}
	}
	if err := Write(context.Background(), io.Discard, io.Discard, Config{}, WriteOptions{}); err == nil {
		t.Error("a recording without an end")
	}
}

func TestRefusals(t *testing.T) {
	for _, c := range []Config{{Rate: 5}, {Hookup: "am"}, {Sideband: "x"}, {Channel: "bad"}, {Tone: 30000}, {Depth: 2}, {SpreadHz: 50, Channel: "custom"}, {Offset: math.NaN()},
		{LocalWhiteFM: math.Inf(1)}, {Channel: "custom"}, {Channel: "quiet", SpreadHz: 1}, {Baseband: true}, {Retunes: []Step{{At: math.NaN()}}},
		{CarrierAway: [][2]float64{{3, 2}}}, {Spurs: []Spur{{Hz: 25000}}}, {Passband: [2]float64{2000, 1000}}} {
		if _, err := New(c); err == nil || strings.Contains(err.Error(), "\n") {
			t.Errorf("%+v: %v", c, err)
		}
	}
}

func TestReadAllocatesNothing(t *testing.T) {
	b, _ := New(Default())
	var blk capture.Block
	for range 20 {
		b.Read(&blk)
	}
	if n := testing.AllocsPerRun(100, func() { b.Read(&blk) }); n != 0 {
		t.Errorf("%v allocations a block", n)
	}
}

func BenchmarkRead(b *testing.B) {
	for name, cfg := range map[string]Config{"steady 48k": {}, "steady 8k": {Rate: 8000}, "demo 48k": Default()} {
		b.Run(name, func(b *testing.B) {
			s, err := New(cfg)
			if err != nil {
				b.Fatal(err)
			}
			var blk capture.Block
			n := 0
			b.ReportAllocs()
			for b.Loop() {
				s.Read(&blk)
				n += blk.Len()
			}
			b.ReportMetric(float64(n)/s.cfg.Rate/b.Elapsed().Seconds(), "x-real-time")
		})
	}
}
