package sim

import (
	"io"
	"math"
	"math/cmplx"
	"slices"
	"testing"

	"gonum.org/v1/gonum/dsp/fourier"
	"gonum.org/v1/gonum/dsp/window"

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
	for _, c := range []Config{{White: true}, {Tone: 1000}, {Tone: 330}, {Tone: 2600, ClockError: 0.01}} {
		// The carrier stays away: the noise is scaled by its level all the same.
		c.Rate, c.Duration, c.CarrierCN0, c.Seed, c.LocalDBFS, c.CarrierAway = 8000, 120, 50, 3, -139, [][2]float64{{0, 999}}
		_, ch, truth := all(t, c)
		power, n := 0.0, 0.0
		for off := -20.0; off <= 20; off += 4 {
			for s := range 240 {
				a := line(ch[0][s*4000:(s+1)*4000], 8000, truth[0].CarrierTone+off)
				power += real(a)*real(a) + imag(a)*imag(a)
				n++
			}
		}
		// |line|^2 of a Hann window of T seconds sees a density times 1.5/T.
		density := power / n * 0.5 / 1.5 / (1 + c.ClockError) // in a true hertz
		got := 10 * math.Log10(0.01/density)
		if math.Abs(got-50) > 0.2 {
			t.Errorf("%+v: C/N0 %.2f dB-Hz", c, got)
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
		g[i] = p.at(float64(i) / rate).v
		power += real(g[i])*real(g[i]) + imag(g[i])*imag(g[i])
	}
	power /= n
	if math.Abs(power-1) > 0.05 {
		t.Errorf("mean power %.3f", power)
	}
	// Width and shape by the periodogram, Hann weighted so that nothing leaks.
	spectrum := make([]float64, 4000)
	fft := fourier.NewCmplxFFT(len(spectrum))
	for at := 0; at < n; at += len(spectrum) {
		for i, z := range fft.Coefficients(nil, window.HannComplex(slices.Clone(g[at:at+len(spectrum)]))) {
			spectrum[i] += real(z)*real(z) + imag(z)*imag(z)
		}
	}
	var sum, first, second, beyond float64
	for i, p := range spectrum {
		f := rate * fft.Freq(i)
		sum, first, second = sum+p, first+p*f, second+p*f*f
		if math.Abs(f) > 2*sigma {
			beyond += p
		}
	}
	mean := first / sum
	if w := math.Sqrt(second/sum - mean*mean); math.Abs(w/sigma-1) > 0.03 || math.Abs(mean) > 0.02 {
		t.Errorf("rms width %.4f Hz about %.4f, want %g about 0", w, mean, sigma)
	}
	if tail := beyond / sum; math.Abs(tail/math.Erfc(math.Sqrt2)-1) > 0.1 {
		t.Errorf("%.4f of the power beyond two widths, want %.4f of a Gaussian", tail, math.Erfc(math.Sqrt2))
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
	if b, err := New(Config{Channel: "rice:7.5", Seed: 1}); err != nil || b.cfg.RiceK != 7.5 || b.cfg.SpreadHz != 0.05 || b.cfg.PathDelay != 0.5e-3 {
		t.Errorf("rice:7.5 is %+v, %v", b, err)
	}
	b, _ := New(Config{Channel: "quiet", RiceK: 3, Seed: 2})
	var mean complex128
	power := 0.0
	const n = 40000
	for i := range n {
		h := b.ch.at(100 + float64(i))
		g1, g2 := h[0].v, h[1].v
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
		{"white", Config{LocalWhiteFM: 1e-10}, map[int]float64{1: 1e-10, 16: 0.25e-10}, 0.06},
		{"flicker", Config{LocalFlickerFM: 1e-10}, map[int]float64{4: 1e-10, 16: 1e-10, 64: 1e-10}, 0.1},
		{"walk", Config{LocalWalkFM: 1e-10}, map[int]float64{1: 1e-10, 16: 4e-10}, 0.08},
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
		if math.Abs(up/down-1) > 1e-6 || math.Abs(up/0.1-0.25) > 0.002 {
			t.Errorf("%s: sidebands %.6f and %.6f", sb, up, down)
		}
	}
	// Pulses come by true seconds, 5 cycles of 1000 Hz: the envelope, from I and Q,
	// is 1 + 0.9 sin, and 1 before and after.
	for _, e := range []float64{0, 0.01} {
		_, ch, _ := all(t, Config{Rate: 8000, Duration: 5, CarrierCN0: 160, Hookup: "quadrature", Seed: 1, SecondPulses: true, ClockError: e})
		for s := 1; s < 5; s++ {
			for i := -100; i < 200; i++ {
				n := int(math.Ceil(float64(s)*8000*(1+e))) + i
				in := float64(n)/(8000*(1+e)) - float64(s)
				want := 0.1
				if in >= 0 && in < 0.005 {
					want += 0.09 * math.Sin(2*math.Pi*1000*in)
				}
				if got := math.Hypot(float64(ch[0][n]), float64(ch[1][n])); math.Abs(got-want) > 1e-6 {
					t.Fatalf("clock error %g, %.6f s after second %d: envelope %.6f, want %.6f", e, in, s, got, want)
				}
			}
		}
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

// C/N0 of I and Q: a line of amplitude A over the density of the complex noise.
func TestQuadratureCN0(t *testing.T) {
	_, ch, _ := all(t, Config{Rate: 1000, Seed: 2, Hookup: "quadrature", CarrierCN0: 40, Offset: 100, Duration: 600})
	power, n := 0.0, 0.0
	for s := range 600 {
		i, q := ch[0][s*1000:(s+1)*1000], ch[1][s*1000:(s+1)*1000]
		for _, f := range []float64{-300, -200, -50, 50, 200} {
			z := (line(i, 1000, f) + 1i*line(q, 1000, f)) / 2
			power += real(z)*real(z) + imag(z)*imag(z)
			n++
		}
	}
	if got := 10 * math.Log10(0.01/(power/n/1.5)); math.Abs(got-40) > 0.2 {
		t.Errorf("C/N0 %.2f dB-Hz", got)
	}
}
