package main

import (
	"bufio"
	"encoding/json"
	"fmt"
	"math"
	"net"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"offbeat/capture/sim"
)

func TestCheck(t *testing.T) {
	dir := t.TempDir()
	t.Setenv("STATE_DIRECTORY", "")
	t.Setenv("XDG_STATE_HOME", filepath.Join(dir, "state"))
	taken, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	defer taken.Close()
	free, err := net.Listen("tcp", "127.0.0.1:0")
	if err != nil {
		t.Fatal(err)
	}
	open := free.Addr().String()
	free.Close()
	wav := tone(t, "a.wav", 5)
	config := func(name, text string) string { return put(t, name, []byte(text)) }
	good := config("good.yaml", fmt.Sprintf(`listen: %s
benches:
  - name: counter
    input: {kind: recording, file: %s}
  - name: generator
    input: {kind: recording, file: %s}
    sideband: lsb
  - name: house-reference
    input: {kind: simulate, fading: steady, offset: -2Hz}
`, open, wav, wav))
	bad := config("bad.yaml", fmt.Sprintf(`listen: %s
journal: {file: %s}
benches:
  - name: counter
    input: {kind: recording, file: /nonexistent/a.wav}
  - name: generator
    input: {kind: recording, file: %s}
    channel: 2
  - name: house-reference
    input: {kind: recording, file: %s}
    local_tone: 5kHz
`, taken.Addr(), filepath.Join(wav, "a.sqlite"), wav, tone(t, "b.wav", 2)))
	for _, c := range []struct {
		name string
		args []string
		code int
		want []string // the lines, in order; each begins and contains
	}{
		{"all well", []string{"--config", good}, 0, []string{
			"ok configuration " + good + ": 3 benches", "ok input counter, generator: " + wav, "ok input house-reference: simulated bench",
			"ok journal " + dir, "ok page " + open + " is free"}},
		{"all bad", []string{"--config", bad}, 1, []string{
			"ok configuration", "problem input counter: /nonexistent/a.wav: cannot be opened", "problem input generator: " + wav + ": channel 2 asked, the file has 1",
			"problem input house-reference: local tone 5000 Hz: must lie below half the sample rate", "problem journal", "problem page"}},
		{"configuration", []string{"--config", config("c.yaml", "benches: []\n")}, 1, []string{"problem configuration"}},
		{"no configuration", []string{"--listen", open}, 0, []string{"ok configuration none", "ok input counter: simulated bench", "ok journal", "ok page"}},
		{"no such input", []string{"--listen", open, "--input", "/nonexistent/a.wav"}, 1, []string{"ok configuration", "problem input bench: /nonexistent", "ok journal", "ok page"}},
	} {
		t.Run(c.name, func(t *testing.T) {
			code, out, errs := runMain(append([]string{"check"}, c.args...)...)
			if code != c.code || errs != "" {
				t.Errorf("exit %d, stderr %q", code, errs)
			}
			lines := strings.Split(strings.TrimSuffix(out, "\n"), "\n")
			if len(lines) != len(c.want) {
				t.Fatalf("%d lines, want %d:\n%s", len(lines), len(c.want), out)
			}
			for i, want := range c.want {
				if got := strings.Join(strings.Fields(lines[i]), " "); !strings.HasPrefix(got, want) {
					t.Errorf("line %d is %q, want %q", i+1, got, want)
				}
			}
		})
	}
	if _, err := os.Stat(filepath.Join(dir, "state")); err == nil {
		t.Error("checking has made the state directory")
	}
	if code, _, errs := runMain("check", "--loud"); code != 2 || !strings.Contains(errs, "offbeat check: unknown flag") {
		t.Errorf("a bad flag: exit %d, %q", code, errs)
	}
}

// A simulated recording, measured, gives the beat of its truth file.
func TestSimulate(t *testing.T) {
	for _, c := range []struct {
		name    string
		args    []string
		measure []string
		within  float64 // Hz; steady tones at 55 dB-Hz over 20 s are good to some 20 µHz
	}{
		{"plain", nil, []string{"--local-tone", "1003"}, 2e-4},
		{"lower sideband, 24 bits", []string{"--sideband", "lsb", "--bits", "24", "--offset", "-5Hz", "--rate", "44100"}, []string{"--sideband", "lsb", "--local-tone", "1005"}, 2e-4},
		{"sample clock", []string{"--clock-error", "100ppm", "--bits", "32"}, []string{"--local-tone", "1003", "--sample-rate-error", "100"}, 2e-4},
		{"demonstration", []string{"--demo"}, []string{"--local-tone", "1003"}, 0.1},
	} {
		t.Run(c.name, func(t *testing.T) {
			file := filepath.Join(t.TempDir(), "a.wav")
			code, out, errs := runMain(append([]string{"simulate", "--duration", "20s", file}, c.args...)...)
			if code != 0 || errs != "" || !strings.Contains(out, "20 s of sound") {
				t.Fatalf("exit %d: %s%s", code, out, errs)
			}
			want := truthOf(t, file+".truth.jsonl")
			code, out, errs = runMain(append([]string{"measure", "--json", file}, c.measure...)...)
			if code != 0 {
				t.Fatalf("exit %d: %s", code, errs)
			}
			p := parseJSON(t, out)
			if len(p.readings) != 20 {
				t.Errorf("%d readings", len(p.readings))
			}
			if got := float64(p.summary.Beat); !(math.Abs(got-want) < c.within) {
				t.Errorf("beat %v, in truth %v", got, want)
			}
			if code, _, errs := runMain("simulate", "--duration", "1s", file); code != 2 || !strings.Contains(errs, "exists: choose another name, or overwrite it with --force") {
				t.Errorf("overwriting: exit %d, %q", code, errs)
			}
			if code, _, errs := runMain("simulate", "--duration", "1s", "--force", file); code != 0 {
				t.Errorf("overwriting by force: exit %d, %q", code, errs)
			}
		})
	}
	for _, c := range []struct{ args, want string }{
		{"", "where to?"},
		{"a.wav b.wav", "where to?"},
		{"--fading stormy a.wav", `--fading: "stormy": must be steady, quiet, moderate, disturbed, custom or rice:K`},
		{"--duration 5 a.wav", `--duration: "5": a length of time is a number with s, min, h or d`},
		{"--duration 0s a.wav", "duration"},
		{"--bits 8 a.wav", `--bits: "8": must be 16, 24 or 32`},
		{"--tone 30kHz a.wav", "half the sample rate"},
		{"/nonexistent/a.wav", "no such file or directory"},
	} {
		t.Chdir(t.TempDir())
		code, _, errs := runMain(append([]string{"simulate"}, strings.Fields(c.args)...)...)
		if code != 2 || strings.Count(errs, "\n") != 1 || !strings.Contains(errs, c.want) {
			t.Errorf("simulate %s: exit %d, %q", c.args, code, errs)
		}
		if left, _ := os.ReadDir("."); len(left) > 0 {
			t.Errorf("simulate %s: left %v behind", c.args, left)
		}
	}
}

// truthOf returns the mean beat as sent of a truth file.
func truthOf(t *testing.T, file string) float64 {
	t.Helper()
	f, err := os.Open(file)
	if err != nil {
		t.Fatal(err)
	}
	defer f.Close()
	lines := bufio.NewScanner(f)
	sum, n := 0.0, 0
	for lines.Scan() {
		if strings.HasPrefix(lines.Text(), `{"scene"`) {
			continue
		}
		var truth sim.Truth
		if err := json.Unmarshal(lines.Bytes(), &truth); err != nil {
			t.Fatal(err)
		}
		sum += truth.Beat
		n++
	}
	if n != 20 {
		t.Fatalf("the truth file tells of %d seconds", n)
	}
	return sum / float64(n)
}
