//go:build portaudio

package sound

import (
	"math"
	"math/cmplx"
	"os"
	"os/exec"
	"path/filepath"
	"testing"
	"time"

	"offbeat/capture"
	"offbeat/capture/sound/soundtest"
)

// The environment has to be there before PortAudio looks at it, so the test
// runs itself again with it.
func TestRealCard(t *testing.T) {
	if os.Getenv("OFFBEAT_PULSE_DIR") != "" {
		realCard(t, os.Getenv("OFFBEAT_PULSE_DIR"))
		return
	}
	dir := t.TempDir()
	_, env, skip := soundtest.New(dir)
	if skip != "" {
		t.Skip(skip)
	}
	cmd := exec.Command(os.Args[0], "-test.run=^TestRealCard$", "-test.v")
	cmd.Env = append(append(os.Environ(), env...), "OFFBEAT_PULSE_DIR="+dir)
	out, err := cmd.CombinedOutput()
	t.Logf("%s", out)
	if err != nil {
		t.Fatal(err)
	}
}

func realCard(t *testing.T, dir string) {
	p, _, _ := soundtest.New(dir)
	if err := p.Start(); err != nil {
		t.Skipf("SKIPPED: PulseAudio cannot be started here: %v", err)
	}
	defer p.Kill()
	all, err := List()
	if err != nil {
		t.Fatal(err)
	}
	t.Logf("inputs: %+v", all)
	file := filepath.Join(dir, "sine.raw")
	if out, err := exec.Command("sox", "-n", "-r", "48000", "-b", "16", "-c", "1", "-e", "signed", file, "synth", "40", "sine", "1000.25", "vol", "0.25").CombinedOutput(); err != nil {
		t.Fatalf("sox: %v %s", err, out)
	}
	stop, err := p.Play(file)
	if err != nil {
		t.Fatal(err)
	}
	defer func() { stop() }()
	src, err := Open(Options{Rate: 48000})
	if err != nil {
		t.Fatal(err)
	}
	defer src.Close()
	x := listen(t, src, 6)
	x = x[len(x)-4*48000:]
	// By an independent analyser: the phase of one-second sums.
	f := 1000.25
	var last complex128
	slope, n, level := 0.0, 0.0, 0.0
	for s := range 4 {
		var sum complex128
		for i := range 48000 {
			k := s*48000 + i
			_, ph := math.Modf(f * float64(k) / 48000)
			h := 1 - math.Cos(2*math.Pi*(float64(i)+0.5)/48000)
			sum += complex(float64(x[k])*h, 0) * cmplx.Rect(1, -2*math.Pi*ph)
		}
		level += 20 * math.Log10(cmplx.Abs(sum)*2/48000) / 4
		if s > 0 {
			slope += cmplx.Phase(sum*cmplx.Conj(last)) / (2 * math.Pi)
			n++
		}
		last = sum
	}
	if off := slope / n; math.Abs(off) > 0.003 {
		t.Errorf("a sine of %g Hz is read back %.4f Hz off", f, off)
	} else {
		t.Logf("frequency off by %.5f Hz, level %.2f dBFS", off, level)
	}
	if math.Abs(level-20*math.Log10(0.25)) > 0.1 {
		t.Errorf("level %.2f dBFS, played at %.2f", level, 20*math.Log10(0.25))
	}

	// The sound server dies and comes back.
	stop()
	p.Kill()
	time.Sleep(1500 * time.Millisecond)
	if err := p.Start(); err != nil {
		t.Fatal(err)
	}
	again, err := p.Play(file)
	if err != nil {
		t.Fatal(err)
	}
	stop = again
	begin := time.Now()
	var b capture.Block
	for {
		at := time.Now()
		if err := src.Read(&b); err != nil {
			t.Fatal(err)
		}
		if d := time.Since(at); d > time.Second {
			t.Errorf("a Read took %v", d)
		}
		if b.Lost > 0 {
			break
		}
		if time.Since(begin) > 20*time.Second {
			t.Fatalf("not back after %v: %+v", time.Since(begin), src.(*source).Stats())
		}
	}
	t.Logf("back after %v, %.2f s lost by %s", time.Since(begin).Round(time.Millisecond), float64(b.Lost)/48000, b.Cause)
	if time.Since(begin) > 10*time.Second || !b.Guessed || float64(b.Lost) < 48000 {
		t.Errorf("back after %v, lost %d", time.Since(begin), b.Lost)
	}
}

// listen returns the first channel of some seconds, which must be whole.
func listen(t *testing.T, src capture.Source, seconds float64) []float32 {
	t.Helper()
	var b capture.Block
	var x []float32
	for end := time.Now().Add(time.Duration((seconds + 15) * 1e9)); float64(len(x)) < seconds*48000; {
		if time.Now().After(end) {
			t.Fatalf("only %d samples came", len(x))
		}
		if err := src.Read(&b); err != nil {
			t.Fatal(err)
		}
		if b.Lost > 0 {
			t.Logf("lost %d by %s", b.Lost, b.Cause)
			x = x[:0]
		}
		if b.Len() > 0 {
			x = append(x, b.Ch[0]...)
		}
	}
	return x
}
