package main

import (
	"math"
	"os/exec"
	"path/filepath"
	"syscall"
	"testing"
	"time"

	"offbeat/capture/sound"
	"offbeat/capture/sound/soundtest"
)

// A recording, a pipe and a sound card give the same beat of the same sound.
func TestSameBeat(t *testing.T) {
	const beat = 3.2
	sc := scene{rate: 48000, seconds: 30, carrier: 1000, local: 1000 + beat, noise: 0.01}
	pcm := s16(sc.samples())
	raw, wav := put(t, "a.raw", pcm), put(t, "a.wav", sc.wav())

	code, out, errs := runMain("measure", "--json", "--local-tone", "1003", wav)
	if code != 0 {
		t.Fatalf("recording: exit %d: %s", code, errs)
	}
	file := parseJSON(t, out)
	if d := math.Abs(float64(file.summary.Beat) - beat); !(d < 5*float64(file.summary.BeatU)) || d > 1e-4 {
		t.Errorf("recording: beat %v ± %v", file.summary.Beat, file.summary.BeatU)
	}

	t.Run("pipe", func(t *testing.T) {
		cmd := program(t, "measure", "--json", "--local-tone", "1003", "--format", "s16le", "--rate", "48000", "-")
		feed := exec.Command("cat", raw)
		pipe, err := feed.StdoutPipe()
		if err != nil {
			t.Fatal(err)
		}
		cmd.Stdin = pipe
		if err := feed.Start(); err != nil {
			t.Fatal(err)
		}
		defer feed.Wait()
		got, err := cmd.Output()
		if err != nil {
			t.Fatal(err)
		}
		p := parseJSON(t, string(got))
		if p.summary.Beat != file.summary.Beat || len(p.readings) != len(file.readings) {
			t.Errorf("the same samples through a pipe give %v, from a file %v", p.summary.Beat, file.summary.Beat)
		}
	})

	t.Run("sound card", func(t *testing.T) {
		if !sound.Supported() {
			t.Skip("SKIPPED: this build has no sound-card support (make test turns it on): no sound card was tried")
		}
		pulse, env, skip := soundtest.New(t.TempDir())
		if skip != "" {
			t.Skip(skip)
		}
		if err := pulse.Start(); err != nil {
			t.Skip("SKIPPED: ", err)
		}
		defer pulse.Kill()
		stop, err := pulse.Play(raw)
		if err != nil {
			t.Fatal(err)
		}
		defer stop()
		journal := filepath.Join(t.TempDir(), "a.sqlite")
		cmd := program(t, "run", "--listen", "127.0.0.1:0", "--journal", journal, "--input", "sound", "--local-tone", "1003")
		cmd.Env = append(cmd.Env, env...)
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		time.Sleep(14 * time.Second)
		cmd.Process.Signal(syscall.SIGTERM)
		if err := cmd.Wait(); err != nil {
			t.Errorf("it ended with %v", err)
		}
		sum, n := 0.0, 0
		for _, row := range readJournal(t, journal) {
			if row.known {
				sum += row.beat
				n++
			}
		}
		// One second of these tones is good to about 0.2 mHz; the sink's clock is
		// the machine's, so no sample is lost and no rate is off.
		if mean := sum / float64(n); n < 5 || math.Abs(mean-beat) > 1e-3 {
			t.Errorf("sound card: %d readings with a beat, mean %v", n, mean)
		} else {
			t.Logf("recording %v, sound card %v from %d readings", file.summary.Beat, mean, n)
		}
	})
}
