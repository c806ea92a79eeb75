package main

import (
	"bufio"
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"reflect"
	"strings"
	"testing"

	"offbeat/capture"
	"offbeat/capture/recording"
	"offbeat/capture/sim"
	"offbeat/dsp"
)

// simulated writes a scene and returns its file and what the truth file says:
// the scene and each second.
func simulated(t *testing.T, args ...string) (file string, scene sim.Config, truth []sim.Truth) {
	t.Helper()
	file = filepath.Join(t.TempDir(), "a.wav")
	if code, _, errs := runMain(append([]string{"simulate", file}, args...)...); code != 0 {
		t.Fatalf("exit %d: %s", code, errs)
	}
	f, err := os.Open(file + ".truth.jsonl")
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	lines := bufio.NewScanner(f)
	for lines.Scan() {
		var head struct{ Scene *sim.Config }
		var second sim.Truth
		if err := json.Unmarshal(lines.Bytes(), &head); err != nil {
			t.Fatal(err)
		}
		if head.Scene != nil {
			scene = *head.Scene
			continue
		}
		if err := json.Unmarshal(lines.Bytes(), &second); err != nil {
			t.Fatal(err)
		}
		truth = append(truth, second)
	}
	return file, scene, truth
}

// samplesOf returns a mono recording.
func samplesOf(t *testing.T, file string) (x []float32) {
	t.Helper()
	src, err := recording.Open(file, recording.Options{Channels: []int{1}})
	if err != nil {
		t.Fatal(err)
	}
	defer src.Close()
	var blk capture.Block
	for src.Read(&blk) == nil {
		x = append(x, blk.Ch[0]...)
	}
	return x
}

// amplitudeAt returns the amplitude of the tone of f cycles a sample: over a
// second, tones a whole number of hertz apart do not disturb each other.
func amplitudeAt(x []float32, f float64) float64 {
	var c, s float64
	for i, v := range x {
		c += float64(v) * math.Cos(2*math.Pi*f*float64(i))
		s += float64(v) * math.Sin(2*math.Pi*f*float64(i))
	}
	return 2 * math.Hypot(c, s) / float64(len(x))
}

// A trim through zero: the truth is that of pencil and paper, and so is the
// sound, looked at without any of the code that measures.
func TestSimulateTrimThroughZero(t *testing.T) {
	const rate = 8000
	file, scene, truth := simulated(t, "--duration", "20s", "--rate", "8kHz", "--offset", "3Hz", "--trim", "5s:-4Hz/8s", "--trim", "13s:-2Hz")
	if want := []sim.Turn{{At: 5, By: -4, Over: 8}, {At: 13, By: -2}}; !reflect.DeepEqual(scene.Trims, want) {
		t.Errorf("the scene has trims %v, want %v", scene.Trims, want)
	}
	if len(truth) != 20 {
		t.Fatalf("truth of %d seconds", len(truth))
	}
	x := samplesOf(t, file)
	if len(x) != 20*rate {
		t.Fatalf("%d samples", len(x))
	}
	start := truth[0].Phase - 0.5*3 // cycles
	for i, s := range truth {
		mid := float64(i) + 0.5
		beat := 3 - 0.5*max(0, min(8, mid-5)) // the mean of an evenly turned second is its middle
		phase := 3*mid - 0.25*math.Pow(max(0, min(8, mid-5)), 2) - 4*max(0, mid-13)
		if i >= 13 {
			beat, phase = beat-2, phase-2*(mid-13)
		}
		if math.Abs(s.Beat-beat) > 1e-9 || math.Abs(s.LocalTone-1000-beat) > 1e-9 || s.T != mid {
			t.Errorf("%g s: truth has beat %.9f, local %.9f Hz at %g s; want %.9f", mid, s.Beat, s.LocalTone, s.T, beat)
		}
		// Frequency stands still for 4 ms at a time: 0.5 Hz/s in such steps
		// strays by less than 1e-5 of a cycle from the parabola.
		if math.Abs(s.Phase-start-phase) > 1e-5 {
			t.Errorf("%g s: truth has phase %.6f, want %.6f", mid, s.Phase-start, phase)
		}
		if 5 <= i && i < 13 {
			continue // the tone turns
		}
		second := x[i*rate : (i+1)*rate]
		if a := amplitudeAt(second, (1000+beat)/rate); math.Abs(a-math.Pow(10, -18./20)) > 2e-3 {
			t.Errorf("%g s: the local's tone has amplitude %.4f", mid, a)
		}
		if a := amplitudeAt(second, (1000-beat)/rate); a > 2e-3 { // 55 dB-Hz below a carrier of 0.1: 3e-4 rms
			t.Errorf("%g s: a tone of amplitude %.4f on the wrong side", mid, a)
		}
	}
}

// While the carrier is away, measure tells no beat; before and after it tells
// the right one. So with the local.
func TestMeasureHearsAbsence(t *testing.T) {
	for _, who := range []string{"carrier", "local"} {
		file, _, truth := simulated(t, "--duration", "50s", "--rate", "8kHz", "--offset", "5Hz", "--"+who+"-away", "20s-30s")
		for i, s := range truth {
			away := i >= 20 && i < 30
			if s.Carrier == (away && who == "carrier") || s.Local == (away && who == "local") {
				t.Errorf("%s away, second %d: truth says carrier %v, local %v", who, i, s.Carrier, s.Local)
			}
		}
		code, out, errs := runMain("measure", "--json", "--local-tone", "1005", file)
		if code != 0 {
			t.Fatalf("exit %d: %s", code, errs)
		}
		readings := parseJSON(t, out).readings
		if len(readings) != 50 {
			t.Fatalf("%d readings", len(readings))
		}
		before, after := 0, 0
		for i, r := range readings {
			told := !math.IsNaN(r.Beat)
			switch {
			case told && math.Abs(r.Beat-5) > 0.01: // a second at 55 dB-Hz is good to 0.9 mHz
				t.Errorf("%s away, second %d: beat %v", who, i, r.Beat)
			case i >= 20 && i < 30:
				if told || r.State == dsp.Apart {
					t.Errorf("%s away, second %d: %s, beat %v", who, i, r.State, r.Beat)
				}
				if i >= 23 && r.State != dsp.Lone {
					t.Errorf("%s away, second %d: %s, want lone", who, i, r.State)
				}
			case told && i < 20:
				before++
			case told:
				after++
			}
		}
		if before < 15 || after < 10 { // either begins with a search
			t.Errorf("%s away: %d beats before, %d after", who, before, after)
		}
	}
}

// Retunes, spurs, an offset and a passband are in the sound where they were
// asked for.
func TestSimulateReceiver(t *testing.T) {
	const rate = 8000
	file, scene, truth := simulated(t, "--duration", "6s", "--rate", "8000", "--offset", "5", "--retune", "3s:+40Hz",
		"--spur", "150Hz:-40dB,2.5kHz:-46dB", "--dc", "0.01", "--passband", "none")
	if !scene.White || len(scene.Spurs) != 2 {
		t.Errorf("the scene is %+v", scene)
	}
	if !truth[3].Retuned || truth[2].Retuned || truth[4].Retuned {
		t.Errorf("retuned: %v %v %v", truth[2].Retuned, truth[3].Retuned, truth[4].Retuned)
	}
	x := samplesOf(t, file)
	for _, c := range []struct {
		second  int
		hz, dbc float64 // dB of full scale
	}{{1, 1000, -20}, {1, 1005, -18}, {4, 1040, -20}, {4, 1045, -18}, {1, 150, -40}, {4, 2500, -46}} {
		if a := amplitudeAt(x[c.second*rate:(c.second+1)*rate], c.hz/rate); math.Abs(20*math.Log10(a)-c.dbc) > 0.5 {
			t.Errorf("second %d: %g Hz at %.2f dB, want %g", c.second, c.hz, 20*math.Log10(a), c.dbc)
		}
	}
	sum := 0.0
	for _, v := range x[rate : 2*rate] {
		sum += float64(v)
	}
	if mean := sum / rate; math.Abs(mean-0.01) > 1e-3 {
		t.Errorf("the input's offset is %.5f, want 0.01", mean)
	}
}

// rice:K and custom reach the simulator from the flags: the mean power of the
// carrier is kept, its fluctuation is that of the Rice factor, and its mean
// frequency that of both paths.
func TestSimulateFading(t *testing.T) {
	for _, c := range []struct {
		args          string
		k, spread     float64
		delay, shift  float64
		low, high     float64 // of the relative variance of the power
		doppler, room float64 // mean received shift, Hz
	}{
		// The relative variance of the power of a Rice channel of factor K is
		// (1 + 2K)/(1 + K)^2: 1 for Rayleigh, 0.36 for 4, 0.0197 for 100 (from
		// memory). Fading of 0.1 Hz leaves some 300 independent values in 15
		// minutes. Half of the power has the second path's shift.
		{"--fading custom --spread 0.1Hz --path-delay 2ms", 0, 0.1, 0.002, 0, 0.6, 1.4, 0, 0.03},
		{"--spread 0.1Hz --path-delay 2ms --path-shift -0.4Hz", 0, 0.1, 0.002, -0.4, 0.6, 1.4, -0.2, 0.04},
		{"--fading rice:4 --spread 0.1Hz", 4, 0.1, 0, 0, 0.22, 0.5, 0, 0.02},
		{"--fading rice:100", 100, 0.05, 0.0005, 0, 0.012, 0.03, 0, 0.005},
		{"--fading quiet --rice-k 100", 100, 0.05, 0.0005, 0, 0.012, 0.03, 0, 0.005},
		{"--demo --fading steady", 4, 0, 0, 0, -1e-9, 1e-9, 0, 1e-9},
	} {
		_, scene, truth := simulated(t, strings.Fields("--duration 15min --rate 100 --tone 20 --offset 1 --passband none "+c.args)...)
		if scene.RiceK != c.k || scene.SpreadHz != c.spread || scene.PathDelay != c.delay || scene.PathShift != c.shift {
			t.Errorf("%s: the scene has K %g, spread %g, delay %g, shift %g", c.args, scene.RiceK, scene.SpreadHz, scene.PathDelay, scene.PathShift)
		}
		var sum, squares, turned float64
		for _, s := range truth {
			p := math.Pow(10, (s.CarrierDBFS+20)/10)
			sum += p
			squares += p * p
			turned += p * s.Shift
		}
		n := float64(len(truth))
		mean := sum / n
		if v := (squares/n - mean*mean) / (mean * mean); mean < 0.8 || mean > 1.25 || v < c.low || v > c.high {
			t.Errorf("%s: mean power %.3f, relative variance %.4f, want 1 and %g to %g", c.args, mean, v, c.low, c.high)
		}
		if got := turned / sum; math.Abs(got-c.doppler) > c.room {
			t.Errorf("%s: received %.4f Hz high, want %g", c.args, got, c.doppler)
		}
	}
}

// A receiver's baseband with both tones is heard by the hook-up that takes it,
// and a bench with a hint gets one from a configuration.
func TestSimulateBaseband(t *testing.T) {
	file, _, _ := simulated(t, "--duration", "15s", "--rate", "8000", "--hookup", "quadrature", "--baseband", "true", "--tone", "-40", "--offset", "6Hz")
	code, out, errs := runMain("measure", "--json", "--hookup", "quadrature", "--local-tone", "-34", file)
	if code != 0 {
		t.Fatalf("exit %d: %s", code, errs)
	}
	if beat := float64(parseJSON(t, out).summary.Beat); !(math.Abs(beat-6) < 1e-3) {
		t.Errorf("beat %v, want 6", beat)
	}
	for text, want := range map[string]bool{"local_tone: 43.2Hz": true, "sideband: usb": false} {
		c, err := parseConfig([]byte("benches:\n  - name: iq\n    hookup: quadrature\n    " + text + "\n    input: {kind: simulate, rate: 8000, tone: 40Hz}\n"))
		if err != nil {
			t.Fatal(err)
		}
		if got := c.Benches[0].Input.Sim.scene(); got.Baseband != want || got.Tone != 40 {
			t.Errorf("%s: baseband %v, tone %g", text, got.Baseband, got.Tone)
		}
	}
}

// Whatever is wrong with what is asked for, the user reads of it in one line and
// no file is left.
func TestSimulateRefuses(t *testing.T) {
	for _, c := range []struct{ args, want string }{
		{"--trim 20s", `--trim: "20s": must be TIME:HZ, or TIME:HZ/TIME`},
		{"--trim 20s:-4Hz --trim 30s:x", `--trim: in "30s:x": "x" is not a number`},
		{"--carrier-away 30s-20s", `--carrier-away: in "30s-20s": it ends before it begins`},
		{"--spur 30kHz:-40", "spur 30000: must be"},
		{"--fading custom", "needs a spread"},
		{"--demo --spread 0.2Hz", "fading quiet has its own spread and paths"},
		{"--demo --fading rice:4 --rice-k 4", "names the Rice factor"},
		{"--baseband true", "only quadrature has one"},
		{"--carrier 0", "0 would stand for the default"},
	} {
		t.Chdir(t.TempDir())
		code, _, errs := runMain(append([]string{"simulate", "a.wav"}, strings.Fields(c.args)...)...)
		if code != 2 || strings.Count(errs, "\n") != 1 || !strings.Contains(errs, c.want) {
			t.Errorf("%s: exit %d, %q", c.args, code, errs)
		}
		if left, _ := os.ReadDir("."); len(left) > 0 {
			t.Errorf("%s: left %v behind", c.args, left)
		}
	}
}

// The help of the command names every flag it takes.
func TestSimulateHelp(t *testing.T) {
	for _, f := range simFields {
		flag := "--" + strings.ReplaceAll(f.key, "_", "-")
		if dropouts := strings.HasPrefix(f.key, "drop_"); !dropouts && !strings.Contains(simulateCommand.help, flag) {
			t.Errorf("the help does not name %s", flag)
		}
	}
	for _, line := range strings.Split(simulateCommand.help, "\n") {
		if len([]rune(line)) > 80 {
			t.Errorf("too long: %s", line)
		}
	}
}
