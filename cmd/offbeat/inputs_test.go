package main

import (
	"bytes"
	"context"
	"errors"
	"math"
	"strings"
	"testing"

	"offbeat/capture"
	"offbeat/capture/sound"
)

func TestInputs(t *testing.T) {
	if !sound.Supported() {
		code, out, errs := runMain("inputs")
		if want := "offbeat inputs: " + capture.ErrNoSupport.Error() + "\n"; code != 2 || errs != want || out != "" {
			t.Errorf("without sound cards: exit %d, %q", code, errs)
		}
		code, out, _ = runMain("check", "--input", "sound", "--listen", "127.0.0.1:0", "--journal", t.TempDir()+"/a.sqlite")
		if code != 1 || !strings.Contains(out, capture.ErrNoSupport.Error()) {
			t.Errorf("check without sound cards: exit %d, %q", code, out)
		}
	}
	fake := cards{
		list: func() ([]sound.Device, error) {
			return []sound.Device{{Name: "Line In", API: "ALSA", Channels: 2, Rate: 48000, Default: true}, {Name: "Busy", API: "ALSA", Channels: 1, Rate: 44100}}, nil
		},
		level: func(_ context.Context, device string, _ float64) ([]sound.ChannelLevel, error) {
			if device == "Busy" {
				return nil, errors.New("Busy: another program holds it")
			}
			return []sound.ChannelLevel{{RMS: -40, Peak: -30}, {RMS: math.Inf(-1), Peak: math.Inf(-1)}}, nil
		},
	}
	var out bytes.Buffer
	if err := showInputs(context.Background(), &out, fake, false, false); err != nil {
		t.Fatal(err)
	}
	want := `* Line In  (ALSA, 2 channels, 48 kHz)
    channel 1  [================                ]  -40.0 dBFS, peak -30.0 dBFS
    channel 2  [                                ]  silent, peak silent
  Busy  (ALSA, 1 channels, 44.1 kHz)
    Busy: another program holds it
`
	if out.String() != want {
		t.Errorf("got\n%s\nwant\n%s", out.String(), want)
	}
	fake.list = func() ([]sound.Device, error) { return nil, nil }
	out.Reset()
	var exit *exitError
	if err := showInputs(context.Background(), &out, fake, false, false); !errors.As(err, &exit) || exit.code != 1 || !strings.Contains(out.String(), "no sound inputs") {
		t.Errorf("no cards: %v, %q", err, out.String())
	}
}
