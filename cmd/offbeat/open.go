package main

import (
	"fmt"
	"log/slog"
	"time"

	"offbeat/capture"
	"offbeat/capture/recording"
	"offbeat/capture/sim"
	"offbeat/capture/sound"
)

// openWith returns the opener of real inputs; what they have to say while they
// run goes to the log, if there is one.
func openWith(log *slog.Logger) opener {
	return func(in inputSpec, channels []int) (capture.Source, error) { return openInput(in, channels, log) }
}

// openInput opens an input for the given channels, numbered from 1.
func openInput(in inputSpec, channels []int, log *slog.Logger) (capture.Source, error) {
	switch in.Kind {
	case kindRecording, kindPipe:
		return openRecording(in, channels)
	case kindSound:
		rate := in.Rate
		if rate == 0 {
			rate = defaultSoundRate
		}
		return sound.Open(sound.Options{Device: in.Device, Rate: rate, Channels: channels, Log: log})
	case kindSimulate:
		scene := in.Sim.scene()
		scene.Pace = true
		return sim.New(scene)
	}
	return nil, fmt.Errorf("input of kind %q: must be %s", in.Kind, orList(kinds))
}

func openRecording(in inputSpec, channels []int) (capture.Source, error) {
	opt := recording.Options{Channels: channels}
	if in.Encoding != "" {
		opt.Raw = &recording.RawFormat{Encoding: in.Encoding, Rate: in.Rate, Channels: max(in.Channels, 1)}
	}
	if in.Kind == kindPipe {
		opt.Patience = 5 * time.Second // then it is tried again, and the daemon can end meanwhile
		opt.Reopen = in.Path != "-" && in.Encoding != "" && isFIFO(in.Path)
	}
	src, err := recording.Open(in.Path, opt)
	if err == nil && in.Play {
		return newPacer(src), nil
	}
	return src, err
}
