package main

import (
	"fmt"

	"offbeat/capture"
	"offbeat/capture/recording"
)

// openInput opens an input for the given channels, numbered from 1.
func openInput(in inputSpec, channels []int) (capture.Source, error) {
	switch in.Kind {
	case kindRecording, kindPipe:
		return recording.Open(in.Path, in.recordingOptions(channels))
	}
	return nil, fmt.Errorf("PENDING %s", in.Kind)
}

func (in *inputSpec) recordingOptions(channels []int) recording.Options {
	opt := recording.Options{Channels: channels}
	if in.Encoding != "" {
		opt.Raw = &recording.RawFormat{Encoding: in.Encoding, Rate: in.Rate, Channels: max(in.Channels, 1)}
	}
	return opt
}
