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
	"sync"
	"testing"
	"time"

	"offbeat/capture"
)

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

// Whoever likes turns the trimmer and asks for the truth while it is read; this
// says most under the race detector.
func TestTrimFromElsewhere(t *testing.T) {
	b, err := New(Config{Rate: 8000, Seed: 1, Duration: 30})
	if err != nil {
		t.Fatal(err)
	}
	var hands sync.WaitGroup
	for range 4 {
		hands.Go(func() {
			for range 100 {
				b.Trim(0.25)
				if tr := b.Truth(); tr.Trimmed > 100 || b.Trimmed() > 100 {
					t.Errorf("truth %+v, trimmed %g", tr, b.Trimmed())
				}
			}
		})
	}
	var blk capture.Block
	for b.given < 10*8000 {
		if err := b.Read(&blk); err != nil {
			t.Fatal(err)
		}
	}
	hands.Wait()
	for b.Read(&blk) == nil {
	}
	if tr := b.Truth(); tr.T != 29.5 || tr.Trimmed != 100 || math.Abs(tr.Beat-100) > 1e-9 {
		t.Errorf("after 400 turns of a quarter hertz: %+v", tr)
	}
	b.Trim(math.NaN())
	if b.Trim(math.Inf(1)); b.Trimmed() != 100 {
		t.Errorf("trimmed %g", b.Trimmed())
	}
	for range 3 {
		b.Trim(-math.MaxFloat64)
	}
	if b.Trimmed() != -1e6 {
		t.Errorf("trimmed %g beyond its stop", b.Trimmed())
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
		var head struct {
			Scene   Config
			Version int
		}
		if err := json.Unmarshal([]byte(lines[0]), &head); err != nil || len(lines) != 4 || head.Version != Version {
			t.Fatalf("%d lines of truth: %s (%v)", len(lines), lines[0], err)
		}
		// What the truth file says of the scene makes the same sound again.
		_, want, _ := all(t, cfg)
		if _, again, _ := all(t, head.Scene); !slices.Equal(again[0], want[0]) {
			t.Error("the scene in the truth file gives other sound")
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
		{LocalWhiteFM: math.Inf(1)}, {Channel: "custom"}, {Channel: "rice:"}, {Channel: "rice:-1"}, {Channel: "rice:NaN"}, {Channel: "rice:3", RiceK: 2}, {ReceiverWander: -1}, {Channel: "quiet", SpreadHz: 1}, {Baseband: true}, {Retunes: []Step{{At: math.NaN()}}},
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
	for name, cfg := range map[string]Config{"steady 48k": {}, "steady 8k": {Rate: 8000}, "moderate 48k": {Channel: "moderate"}, "moderate 8k": {Channel: "moderate", Rate: 8000}, "demo 48k": Default()} {
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
