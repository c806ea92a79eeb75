package main

import (
	"fmt"
	"time"

	"offbeat/capture"
	"offbeat/capture/recording"
	"offbeat/capture/sim"
)

// openInput opens an input for the given channels, numbered from 1.
func openInput(in inputSpec, channels []int) (capture.Source, error) {
	switch in.Kind {
	case kindRecording, kindPipe:
		return openRecording(in, channels)
	case kindSimulate:
		scene := in.Sim.scene()
		scene.Pace = true
		return sim.New(scene)
	}
	return nil, fmt.Errorf("PENDING %s", in.Kind)
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
