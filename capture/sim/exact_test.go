package sim

import (
	"bytes"
	"context"
	"encoding/binary"
	"io"
	"math"
	"math/big"
	"math/cmplx"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"testing"
	"time"

	"offbeat/capture"
)

// Phases are counted without rounding: against arbitrary precision, and over a
// month against the frequency asked for.
func TestCount(t *testing.T) {
	r := rand.New(rand.NewPCG(1, 2))
	var c count
	sum, unit := new(big.Int), new(big.Int).Lsh(big.NewInt(1), 64)
	for range 2000 {
		p, n := pitchOf((r.Float64()-0.5)*math.Pow(10, float64(r.IntN(9))-6), 1), r.Int64N(1e6)
		c.add(p, n)
		each := new(big.Int).Mul(big.NewInt(p.whole), unit)
		sum.Add(sum, each.Add(each, big.NewInt(p.part)).Mul(each, big.NewInt(n)))
	}
	got := new(big.Int).Mul(big.NewInt(c.whole), unit)
	if got.Add(got, new(big.Int).SetUint64(c.part)); got.Cmp(sum) != 0 {
		t.Errorf("%v, want %v", got, sum)
	}
	for _, hz := range []float64{3.2, -0.001, 1000, 23999.9, 40000} {
		var c count
		for range 30 * 86400 / 100 {
			c.add(pitchOf(hz, 48000), 4800000)
		}
		want := new(big.Float).SetPrec(200).Mul(big.NewFloat(hz), big.NewFloat(30*86400))
		got := new(big.Float).SetPrec(200).SetMantExp(new(big.Float).SetPrec(200).SetUint64(c.part), -64)
		got.Add(got, new(big.Float).SetInt64(c.whole))
		if d, _ := got.Sub(got, want).Float64(); math.Abs(d) > 1e-6 {
			t.Errorf("%g Hz: off by %g turns after 30 days", hz, d)
		}
	}
}

// At every rate, whole or not, there is one truth a second, and the phase it
// tells is that of the sound: a mixer's output is a cosine of it.
func TestTruthAtEveryRate(t *testing.T) {
	for _, rate := range []float64{10, 12.5, 37, 100.3, 300.5, 1000, 7919, 11025, 44100} {
		const seconds = 40
		cfg := Config{Rate: rate, Seed: 9, Hookup: "mixer", CarrierCN0: 160, Offset: 1.7, Drift: 0.003, ClockError: 50e-6, Duration: seconds,
			Trims: []Turn{{At: 10, By: 0.5, Over: 4}}}
		_, ch, truth := all(t, cfg)
		if len(truth) != seconds {
			t.Fatalf("rate %g: %d seconds of truth", rate, len(truth))
		}
		for i, tr := range truth {
			if tr.T != float64(i)+0.5 {
				t.Errorf("rate %g: second %d at %g", rate, i, tr.T)
			}
			n := int(math.Round(tr.T * rate))
			want := 0.1 * math.Cos(2*math.Pi*(tr.Phase+tr.Beat*(float64(n)/rate-tr.T)))
			tol := 2e-5
			if float64(n) != tr.T*rate {
				tol = 6e-4 // the beat moves between the middle and the nearest sample
			}
			if got := float64(ch[0][n]); math.Abs(got-want) > tol {
				t.Errorf("rate %g, %g s: sample %.6f, by the truth's phase %.6f", rate, tr.T, got, want)
			}
		}
		// Closed form: offset, drift from the middle, half the turn in its middle.
		e := 1 + cfg.ClockError
		if want := 1.7 + 0.003*20.5/e + 0.5; math.Abs(truth[20].Beat-want) > 2e-4 {
			t.Errorf("rate %g: beat %.6f, want %.6f", rate, truth[20].Beat, want)
		}
	}
}

// The slow and obvious bench: every sample from closed forms and from the fading
// processes themselves, without steps, interpolation or accumulators.
func TestAgainstTheObvious(t *testing.T) {
	for _, c := range []struct {
		name string
		cfg  Config
	}{
		{"steady", Config{}},
		{"lower, clock", Config{Sideband: "lsb", ClockError: -80e-6}},
		{"moderate", Config{Channel: "moderate", Sideband: "lsb"}},
		{"disturbed", Config{Channel: "disturbed", RiceK: 1}},
		{"odd rate", Config{Channel: "moderate", Rate: 11025}},
		{"no whole rate", Config{Channel: "moderate", Rate: 7919.3}},
		{"shifted path", Config{SpreadHz: 1, PathDelay: 3e-3, PathShift: -4}},
		{"widest", Config{SpreadHz: 15, PathDelay: 7e-3}},
		{"widest, far shift", Config{SpreadHz: 15, PathShift: 50, ClockError: 0.01}},
		{"narrow, far shift", Config{SpreadHz: 0.05, PathShift: -50}},
	} {
		cfg := c.cfg
		if cfg.Rate == 0 {
			cfg.Rate = 8000
		}
		cfg.Seed, cfg.Duration, cfg.CarrierCN0, cfg.White, cfg.Tones = 11, 4, 160, true, true
		cfg.Offset, cfg.Drift, cfg.ReceiverDrift = 3.2, 0.01, 3
		b, ch, _ := all(t, cfg)
		start := rand.New(rand.NewPCG(11, 1))
		pc, pb := float64(start.Uint64())/(1<<64), float64(start.Uint64())/(1<<64)
		h, s := newChannel(&b.cfg), b.sign
		programme := func(t float64) complex128 {
			if t < 0 {
				return 1
			}
			return complex(1+0.5*math.Sin(2*math.Pi*500*t), 0)
		}
		late := math.Round(b.cfg.PathDelay*cfg.Rate) * b.dts
		worst, sum := 0.0, 0.0
		for n, got := range ch[0] {
			t := float64(n) * b.dts
			g := h.at(t)
			g1, g2 := g[0].v, g[1].v
			carrier := (g1*programme(t) + g2*programme(t-late)) * cmplx.Rect(0.1, 2*math.Pi*s*(s*pc+s*1000*t+s*3*t*t/120))
			if s < 0 {
				carrier = cmplx.Conj(g1*programme(t)+g2*programme(t-late)) * cmplx.Rect(0.1, 2*math.Pi*(pc+1000*t+3*t*t/120))
			}
			local := cmplx.Rect(amplitude(-18), 2*math.Pi*(pc+1000*t+3*t*t/120+s*(pb+3.2*t+0.01*t*t/2)))
			d := float64(got) - real(carrier+local)
			worst, sum = max(worst, math.Abs(d)), sum+d*d
		}
		// 118 dB below the carrier: what is left is the noise asked for and the
		// rounding of the samples.
		if rms := math.Sqrt(sum / float64(len(ch[0]))); rms > 1.2e-7 || worst > 6e-7 {
			t.Errorf("%s: differs by %.2g rms, %.2g at worst", c.name, rms, worst)
		}
	}
}

// The truth's shift is the received carrier's frequency weighted by its power,
// integral |h|^2 w / integral |h|^2 = Im integral h' conj(h) / integral |h|^2.
func TestShift(t *testing.T) {
	for _, cfg := range []Config{{Channel: "quiet"}, {Channel: "disturbed", RiceK: 0.5}, {SpreadHz: 2, PathShift: 3}} {
		cfg.Rate, cfg.Seed, cfg.Duration, cfg.ClockError = 1000, 21, 20, 1e-3
		cfg.Tone, cfg.White = 200, true
		b, _, truth := all(t, cfg)
		h := newChannel(&b.cfg)
		const n = 5000 // a second
		dt := 1 / (n * (1 + cfg.ClockError))
		sum := func(g [2]gain) complex128 { return g[0].v + g[1].v }
		last := sum(h.at(0))
		for i, tr := range truth {
			var turn, power, level float64
			for k := range n {
				next := sum(h.at(float64(i*n+k+1) * dt))
				turn += imag((next - last) * cmplx.Conj((next+last)/2))
				power += real((next + last) / 2 * cmplx.Conj((next+last)/2))
				level += real(last * cmplx.Conj(last))
				last = next
			}
			want := turn / power / dt / (2 * math.Pi)
			if math.Abs(tr.Shift-want) > 1e-4*(1+math.Abs(want)) {
				t.Errorf("%+v, second %d: shift %.5f Hz, want %.5f", cfg.Channel, i, tr.Shift, want)
			}
			if db := -20 + 10*math.Log10(level/n); math.Abs(db-tr.CarrierDBFS) > 0.02 {
				t.Errorf("%+v, second %d: level %.3f dBFS, want %.3f", cfg.Channel, i, tr.CarrierDBFS, db)
			}
		}
	}
}

// The mean frequency of a fading line over T scatters by sqrt(sigma/(4 sqrt(pi)
// T)) (pulse pair; Zrnic 1977, Doviak & Zrnic, from memory): 0.0343 Hz for a
// width of 0.5 Hz and a minute.
func TestFadingLimit(t *testing.T) {
	const sigma, rate, n, trials = 0.5, 20.0, 1200, 300
	p := newPath(sigma, 31, 1)
	sum := 0.0
	for trial := range trials {
		var c, last complex128
		for i := range n {
			g := p.at(float64(trial*n+i) / rate).v
			c += g * cmplx.Conj(last)
			last = g
		}
		f := cmplx.Phase(c) * rate / (2 * math.Pi)
		sum += f * f
	}
	want := math.Sqrt(sigma / (4 * math.Sqrt(math.Pi) * 60))
	if got := math.Sqrt(sum / trials); math.Abs(got/want-1) > 0.15 {
		t.Errorf("scatter %.4f Hz, published %.4f", got, want)
	}
}

// The receiver passes the programme's sidebands in its passband and holds back
// those beyond 0 Hz, in both sidebands alike.
func TestOppositeSideband(t *testing.T) {
	const rate = 8000
	for _, sb := range []string{"usb", "lsb"} {
		c := Config{Rate: rate, Sideband: sb, Tone: 1000}
		if err := c.complete(); err != nil {
			t.Fatal(err)
		}
		audible := map[float64]float64{} // by audio frequency, dB
		for _, f := range []float64{100, 200, 500, 1000, 1200, 1500, 2000, 2500} {
			m := make([]complex128, 2*rate)
			for i := range m {
				m[i] = complex(1+0.5*math.Cos(2*math.Pi*f*float64(i)/rate), 0)
			}
			newOneSide(&c, 1.0/rate).pass(m)
			pair := complex(1, 0)
			for _, side := range []float64{f, -f} {
				var sum complex128
				for i := rate; i < 2*rate; i++ {
					e := m[i]
					if sb == "lsb" {
						e = cmplx.Conj(e)
					}
					sum += e * cmplx.Rect(1, -2*math.Pi*side*float64(i)/rate)
				}
				pair *= sum
				audible[1000+side] = 20 * math.Log10(cmplx.Abs(sum)/rate/0.25)
			}
			// Amplitude modulation stays that: both sidebands turn about the carrier.
			if turn := cmplx.Phase(pair); f <= 200 && math.Abs(turn) > 0.12 {
				t.Errorf("%s: sidebands at +-%g Hz turned by %.3f", sb, f, turn)
			}
		}
		for f, db := range audible {
			if f >= 500 && f <= 2500 && math.Abs(db) > 0.5 || f <= -200 && db > -25 || f <= -1000 && db > -55 {
				t.Errorf("%s: sideband at %g Hz of audio passes with %.1f dB", sb, f, db)
			}
		}
	}
}

// A tone outside of the samples' band is filtered off, not folded into it.
func TestBand(t *testing.T) {
	for _, c := range []struct {
		cfg  Config
		fold float64
	}{{Config{Rate: 8000, Sideband: "lsb", Offset: 1300}, 300}, {Config{Rate: 8000, Offset: 3400}, 3600},
		{Config{Rate: 100, Hookup: "mixer", Offset: 70}, 30}, {Config{Rate: 8000, Hookup: "quadrature", Baseband: true, Offset: -5500}, 3500}} {
		c.cfg.Seed, c.cfg.Duration, c.cfg.CarrierCN0, c.cfg.White = 1, 3, 160, true
		_, ch, truth := all(t, c.cfg)
		if a := cmplx.Abs(line(ch[0], c.cfg.Rate, c.fold)); a > 1e-5 || truth[1].Local || math.Abs(truth[1].Beat-c.cfg.Offset) > 1e-6 {
			t.Errorf("%+v: %.2g at %g Hz, truth %+v", c.cfg.Hookup, a, c.fold, truth[1])
		}
	}
}

// Gain control brings either tone alone to its level, I and Q alike, and full
// scale is full scale.
func TestGainControl(t *testing.T) {
	for _, level := range []float64{-50, -30, -6} {
		_, ch, _ := all(t, Config{Rate: 8000, Hookup: "quadrature", CarrierDBFS: level, CarrierCN0: 140, Offset: 7, AGC: true, Seed: 1, Duration: 6})
		for i := 40000; i < len(ch[0]); i++ {
			if a := math.Hypot(float64(ch[0][i]), float64(ch[1][i])); math.Abs(a-0.25) > 0.0025 {
				t.Fatalf("%g dBFS: amplitude %.4f", level, a)
			}
		}
	}
	// A loud local that goes leaves the carrier to rise again within some decays.
	_, ch, _ := all(t, Config{Rate: 8000, CarrierDBFS: -40, LocalDBFS: -10, Offset: 50, CarrierCN0: 90, White: true, AGC: true, Seed: 1, Duration: 8, LocalAway: [][2]float64{{3, 99}}})
	with, without := cmplx.Abs(line(ch[0][:24000], 8000, 1000)), cmplx.Abs(line(ch[0][48000:], 8000, 1000))
	if without < 0.2 || without > 0.26 || with > 0.02 {
		t.Errorf("carrier at %.4f beside the local, %.4f alone", with, without)
	}
	_, ch, _ = all(t, Config{Rate: 8000, CarrierDBFS: -1, LocalDBFS: -1, Seed: 1, Duration: 2})
	full := 0
	for _, v := range ch[0] {
		if v == 1 || v == -1 {
			full++
		} else if math.Abs(float64(v)) > 1 {
			t.Fatalf("sample %g beyond full scale", v)
		}
	}
	if full == 0 {
		t.Error("two loud tones do not reach full scale")
	}
}

// The subcarrier is strong for two, five or eight tenths of a second.
func TestSubcarrier(t *testing.T) {
	_, ch, _ := all(t, Config{Rate: 8000, Subcarrier: true, CarrierCN0: 160, White: true, LocalDBFS: -139, Seed: 3, Duration: 40})
	seen := map[int]int{}
	for s := range 40 {
		tenths := 0
		for k := 1; k < 10; k++ {
			at := s*8000 + k*800
			if cmplx.Abs(line(ch[0][at:at+800], 8000, 1100)) > 0.1*0.115/2 {
				tenths++
			}
		}
		seen[tenths+1]++
	}
	if len(seen) != 3 || seen[2] < 4 || seen[5] < 4 || seen[8] < 4 {
		t.Errorf("lengths in tenths: %v", seen)
	}
}

// A spur stands where it is asked for, as strong as asked for.
func TestSpurs(t *testing.T) {
	_, ch, _ := all(t, Config{Rate: 8000, White: true, CarrierCN0: 160, Seed: 1, Duration: 4, Spurs: []Spur{{50, -40}, {1234.5, -60}}})
	for f, db := range map[float64]float64{50: -40, 1234.5: -60} {
		if got := 20 * math.Log10(cmplx.Abs(line(ch[0], 8000, f))); math.Abs(got-db) > 0.01 {
			t.Errorf("%g Hz: %.3f dBFS, want %g", f, got, db)
		}
	}
}

// At the pace of the clock a drop-out is silence: reads return soon and empty,
// and samples after it do not come before their time.
func TestPacedDropouts(t *testing.T) {
	t.Parallel()
	b, err := New(Config{Rate: 8000, Pace: true, Seed: 6, DropEvery: 0.5, DropFor: 0.9})
	if err != nil {
		t.Fatal(err)
	}
	var blk capture.Block
	began := time.Now()
	lost, empty := int64(0), 0
	for lost == 0 {
		before := time.Now()
		if err := b.Read(&blk); err != nil {
			t.Fatal(err)
		}
		if d := time.Since(before); d > 500*time.Millisecond {
			t.Errorf("a read took %v", d)
		}
		if blk.Len() == 0 {
			empty++
		}
		lost = blk.Lost
	}
	due := float64(blk.First+int64(blk.Len())) / 8000
	if lost != 7200 || empty < 3 || time.Since(began).Seconds() < due-0.001 {
		t.Errorf("lost %d, %d empty reads, due after %.3f s, came after %v", lost, empty, due, time.Since(began))
	}
}

// What Write writes, another program reads: sox gives back the
// samples; as floating point it writes them in steps of 2^-24.
func TestWriteReadBySox(t *testing.T) {
	sox, err := exec.LookPath("sox")
	if err != nil {
		t.Skip("SKIPPED: sox is not installed, the WAV files were not read by another program")
	}
	for _, c := range []struct {
		bits int
		step float64
		cfg  Config
	}{{16, 1.0 / 32768, Config{}}, {24, 1.0 / 8388608, Config{}}, {32, 1.0 / (1 << 24), Config{}}, {24, 1.0 / 8388608, Config{Hookup: "quadrature"}}} {
		c.cfg.Rate, c.cfg.Seed, c.cfg.Duration = 8000, 1, 1.000125 // an odd number of frames
		name := filepath.Join(t.TempDir(), "scene.wav")
		f, err := os.Create(name)
		if err != nil {
			t.Fatal(err)
		}
		if err := Write(context.Background(), f, io.Discard, c.cfg, WriteOptions{Bits: c.bits}); err != nil {
			t.Fatal(err)
		}
		f.Close()
		file, err := os.ReadFile(name)
		if err != nil || len(file)%2 != 0 || int(binary.LittleEndian.Uint32(file[4:]))+8 != len(file) {
			t.Errorf("%d bits: %d bytes, header says %d and 8 (%v)", c.bits, len(file), binary.LittleEndian.Uint32(file[4:]), err)
		}
		var complaint bytes.Buffer
		cmd := exec.Command(sox, name, "-t", "raw", "-e", "floating-point", "-b", "32", "-L", "-")
		cmd.Stderr = &complaint
		raw, err := cmd.Output()
		if err != nil || complaint.Len() > 0 {
			t.Fatalf("%d bits: %v %s", c.bits, err, complaint.String())
		}
		_, ch, _ := all(t, c.cfg)
		if len(raw) != 4*len(ch)*len(ch[0]) || len(ch[0]) != 8001 {
			t.Fatalf("%d bits: sox reads %d bytes of %d frames", c.bits, len(raw), len(ch[0]))
		}
		for i := range ch[0] {
			for k := range ch {
				got := math.Float32frombits(binary.LittleEndian.Uint32(raw[4*(i*len(ch)+k):]))
				if d := math.Abs(float64(got - ch[k][i])); d > 0.51*c.step {
					t.Fatalf("%d bits, frame %d: %g, want %g", c.bits, i, got, ch[k][i])
				}
			}
		}
	}
}

// The receiver's wander begins at 0, stays within its bounds over a month, is
// slow, and moves both tones alike; the truth tells of it.
func TestWander(t *testing.T) {
	c := Config{ReceiverWander: 2, Seed: 8}
	w := newWander(&c)
	last, sum := w.at(0), 0.0
	if last != 0 {
		t.Errorf("begins at %g", last)
	}
	const n = 30 * 1440
	for i := range n {
		f := w.at(60 * float64(i+1))
		if math.Abs(f-last) > 1 {
			t.Fatalf("from %.3f to %.3f Hz within a minute", last, f)
		}
		last = f
		sum += (f + c.ReceiverWander*w.start) * (f + c.ReceiverWander*w.start)
	}
	if rms := math.Sqrt(sum / n); math.Abs(rms/math.Sqrt2-1) > 0.15 { // about its own mean
		t.Errorf("rms %.3f Hz", rms)
	}
	_, ch, truth := all(t, Config{Rate: 1000, Tone: 200, Offset: 40, White: true, CarrierCN0: 160, Seed: 3, Duration: 600, ReceiverWander: 2})
	for _, i := range []int{0, 300, 599} {
		x := ch[0][i*1000 : (i+1)*1000]
		// freq tells tones 2 Hz apart from each other only by where it looks.
		if c, l := freq(x, 1000, math.Round(truth[i].CarrierTone)), freq(x, 1000, math.Round(truth[i].LocalTone)); math.Abs(c-truth[i].CarrierTone) > 1e-3 || math.Abs(l-truth[i].LocalTone) > 1e-3 {
			t.Errorf("second %d: tones at %.4f and %.4f, truth says %.4f and %.4f", i, c, l, truth[i].CarrierTone, truth[i].LocalTone)
		}
	}
	widest := 0.0
	for _, tr := range truth {
		widest = max(widest, math.Abs(tr.CarrierTone-200))
	}
	if widest < 0.1 || widest > 2 {
		t.Errorf("in ten minutes it moved by up to %.3f Hz", widest)
	}
}
