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
