package main

import (
	"fmt"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"
)

// The figures of a whole process take minutes and a quiet machine: `make bench`
// asks for them. The program is built as it is shipped.
func longProgram(t *testing.T) string {
	t.Helper()
	if os.Getenv("OFFBEAT_LONG") == "" {
		t.Skip("SKIPPED: a figure of make bench (OFFBEAT_LONG=1)")
	}
	bin := filepath.Join(t.TempDir(), "offbeat")
	if out, err := exec.Command("go", "build", "-trimpath", "-ldflags", "-s -w", "-o", bin, ".").CombinedOutput(); err != nil {
		t.Fatalf("%v: %s", err, out)
	}
	return bin
}

// sound20 writes 20 minutes of 48 kHz 16-bit mono with sox.
func sound20(t *testing.T, minutes int) string {
	t.Helper()
	if _, err := exec.LookPath("sox"); err != nil {
		t.Skip("SKIPPED: sox is not installed")
	}
	file := filepath.Join(t.TempDir(), "long.wav")
	part := func(what string) string {
		return fmt.Sprintf("|sox -R -n -r 48000 -c 1 -p synth %d %s", 60*minutes, what)
	}
	cmd := exec.Command("sox", "-R", "-m", part("sine 1000"), part("sine 1003.2"), part("whitenoise vol 0.02"), "-b", "16", file)
	if out, err := cmd.CombinedOutput(); err != nil {
		t.Fatalf("%v: %s", err, out)
	}
	return file
}

// timed runs a command and returns how long it took and its greatest memory.
func timed(t *testing.T, name string, args ...string) (time.Duration, int64) {
	t.Helper()
	cmd := exec.Command(name, args...)
	began := time.Now()
	if err := cmd.Run(); err != nil {
		t.Fatalf("%s: %v", name, err)
	}
	return time.Since(began), cmd.ProcessState.SysUsage().(*syscall.Rusage).Maxrss
}

// 20 minutes of sound take no longer than sox's own way down to 400 Hz, whole
// process against whole process, in turns; the best of seven each.
func TestSpeed(t *testing.T) {
	bin := longProgram(t)
	file := sound20(t, 20)
	ours, theirs := time.Hour, time.Hour
	for range 7 {
		d, _ := timed(t, bin, "measure", "--json", file)
		ours = min(ours, d)
		d, _ = timed(t, "sox", file, "-n", "rate", "400", "stat")
		theirs = min(theirs, d)
	}
	t.Logf("measure %v, sox %v, ratio %.3f", ours, theirs, float64(ours)/float64(theirs))
	if ours > theirs {
		t.Errorf("measure takes %.3f times as long as sox", float64(ours)/float64(theirs))
	}
}

// Memory stays below 64 MiB whatever the length, and does not grow with it.
func TestMemory(t *testing.T) {
	bin := longProgram(t)
	_, short := timed(t, bin, "measure", "--json", sound20(t, 2))
	_, long := timed(t, bin, "measure", "--json", sound20(t, 60))
	t.Logf("2 minutes: %d KiB, 60 minutes: %d KiB", short, long)
	if long > 64<<10 {
		t.Errorf("%d KiB is above 64 MiB", long)
	}
	if long > short+8<<10 {
		t.Errorf("an hour takes %d KiB more than two minutes", long-short)
	}
}

// A daemon with 16 benches of 48 kHz stays under one core.
func TestLoad(t *testing.T) {
	bin := longProgram(t)
	file := sound20(t, 2)
	var cfg strings.Builder
	journal := filepath.Join(t.TempDir(), "a.sqlite")
	fmt.Fprintf(&cfg, "listen: 127.0.0.1:0\njournal: {file: %s}\nbenches:\n", journal)
	for i := range 16 {
		link := fmt.Sprintf("%s.%d.wav", file, i) // a file for each: no two benches share an input
		if err := os.Link(file, link); err != nil {
			t.Fatal(err)
		}
		fmt.Fprintf(&cfg, "  - {name: b%d, input: {kind: recording, file: %s}, local_tone: 1003Hz}\n", i, link)
	}
	cmd := exec.Command(bin, "run", "--config", put(t, "load.yaml", []byte(cfg.String())))
	cmd.Stderr = os.Stderr
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	const length = 60 * time.Second
	time.Sleep(length)
	cmd.Process.Signal(syscall.SIGTERM)
	if err := cmd.Wait(); err != nil {
		t.Error(err)
	}
	used := cmd.ProcessState.UserTime() + cmd.ProcessState.SystemTime()
	beats := 0
	for _, row := range readJournal(t, journal) {
		if row.known {
			beats++
		}
	}
	if beats < 16*50 {
		t.Errorf("only %d readings with a beat", beats)
	}
	share := used.Seconds() / length.Seconds()
	t.Logf("16 benches: %.3f of a core, %d KiB", share, cmd.ProcessState.SysUsage().(*syscall.Rusage).Maxrss)
	if share > 1 {
		t.Errorf("16 benches take %.2f cores", share)
	}
}
