package main

import (
	"errors"
	"fmt"
	"os"
	"slices"
	"strings"
	"time"

	"github.com/goccy/go-yaml/ast"

	"offbeat/capture"
)

// The kinds of input.
const (
	kindSound     = "sound"
	kindRecording = "recording"
	kindPipe      = "pipe"
	kindSimulate  = "simulate"
)

var kinds = []string{kindSound, kindRecording, kindPipe, kindSimulate}

// inputSpec says where samples come from. It is comparable: benches with equal
// specs share one opened input.
type inputSpec struct {
	Kind     string
	Device   string  // sound: the name or a part of it; empty: the default
	Path     string  // recording, pipe
	Rate     float64 // sound: wanted rate; raw: its rate, Hz
	Encoding string  // raw: how a sample is written; empty: the file says
	Channels int     // raw: interleaved channels; 0: 1
	Starts   int64   // recording: when it began, Unix ns; 0: not said
	Play     bool    // recording: at the pace of the clock, as if it were live
	Sim      simSpec
}

// live reports whether an input that ends or fails may come back.
func (in *inputSpec) live() bool {
	return in.Kind == kindSound || in.Kind == kindPipe && in.Path != "-"
}

// paced reports whether the input's samples are for the present moment, so that
// a second in which none arrive is a second without signal. A recording and a
// simulation wait for whoever reads them.
func (in *inputSpec) paced() bool { return in.Kind == kindSound || in.Kind == kindPipe }

// knownRate returns the sample rate if the spec tells it, else 0.
func (in *inputSpec) knownRate() float64 {
	switch {
	case in.Kind == kindSound && in.Rate == 0:
		return defaultSoundRate
	case in.Kind == kindSimulate:
		return in.Sim.rate()
	}
	return in.Rate
}

const defaultSoundRate = 48000

// String names the input for people.
func (in *inputSpec) String() string {
	switch in.Kind {
	case kindSound:
		if in.Device == "" {
			return "the default sound card"
		}
		return fmt.Sprintf("sound card %q", in.Device)
	case kindSimulate:
		return "simulated bench"
	case kindPipe:
		if in.Path == "-" {
			return "standard input"
		}
		return "pipe " + in.Path
	}
	return in.Path
}

// check refuses raw descriptions that are not whole.
func (in *inputSpec) check() *fieldError {
	switch {
	case in.Kind == kindSound || in.Kind == kindSimulate:
		return nil
	case in.Encoding == "" && (in.Rate != 0 || in.Channels != 0):
		return &fieldError{"rate", "describes raw samples: say format too, " + orList(encodings)}
	case in.Encoding != "" && in.Rate == 0:
		return &fieldError{"format", "raw samples do not say their rate: give rate too"}
	case in.Channels > maxChannels:
		return &fieldError{"channels", fmt.Sprintf("%d: at most %d", in.Channels, maxChannels)}
	}
	return nil
}

// readInput reads the input of a bench.
func readInput(n ast.Node, in *inputSpec) error {
	m, err := readMapping(n, "input")
	if err != nil {
		return err
	}
	if !m.has("kind") {
		return faultAt(m.at, "input has no kind: it is one of %s", strings.Join(kinds, ", "))
	}
	if err := scalar(m, "kind", &in.Kind, func(s string) (string, error) { return oneOf(s, kinds) }); err != nil {
		return err
	}
	allowed := map[string][]string{
		kindSound:     {"kind", "device", "rate"},
		kindRecording: {"kind", "file", "starts", "format", "rate", "channels"},
		kindPipe:      {"kind", "path", "format", "rate", "channels"},
		kindSimulate:  append([]string{"kind"}, simKeys...),
	}[in.Kind]
	if m, err = readMapping(n, "a "+in.Kind+" input", allowed...); err != nil {
		return err
	}
	if err := first(errors.Join(
		scalar(m, "device", &in.Device, parseWords),
		scalar(m, "file", &in.Path, parseWords),
		scalar(m, "path", &in.Path, parseWords),
		scalar(m, "rate", &in.Rate, parseRate),
		scalar(m, "format", &in.Encoding, parseEncoding),
		scalar(m, "channels", &in.Channels, parseCount),
		scalar(m, "starts", &in.Starts, parseStarts),
	)); err != nil {
		return err
	}
	switch {
	case in.Kind == kindRecording && in.Path == "":
		return faultAt(m.at, "a recording input needs file: the WAV, FLAC or raw file")
	case in.Kind == kindRecording:
		in.Play = in.Starts == 0
	case in.Kind == kindPipe && in.Path == "":
		return faultAt(m.at, "a pipe input needs path: the FIFO, or - for standard input")
	case in.Kind == kindSimulate:
		return readSim(m, in)
	}
	if bad := in.check(); bad != nil {
		return faultAt(m.where(bad.field), "%s", bad)
	}
	return nil
}

// parseStarts reads the moment a recording began.
func parseStarts(s string) (int64, error) {
	t, err := time.Parse(time.RFC3339, s)
	if err != nil {
		return 0, fmt.Errorf("%s: must be a moment such as 2026-01-05T20:00:00Z", quoted(s))
	}
	return t.UnixNano(), nil
}

// parseInput reads the value of --input: sim, sound, sound:NAME, pipe:PATH or
// a file.
func parseInput(s string) (inputSpec, error) {
	switch {
	case s == "sim":
		return inputSpec{Kind: kindSimulate, Sim: defaultSim}, nil
	case s == "sound":
		return inputSpec{Kind: kindSound}, nil
	case strings.HasPrefix(s, "sound:"):
		return inputSpec{Kind: kindSound, Device: strings.TrimPrefix(s, "sound:")}, nil
	case s == "pipe:" || s == "":
		return inputSpec{}, fmt.Errorf("%s: must be sim, sound, sound:NAME, pipe:PATH or a file", quoted(s))
	case strings.HasPrefix(s, "pipe:"):
		return inputSpec{Kind: kindPipe, Path: strings.TrimPrefix(s, "pipe:")}, nil
	case s == "-":
		return inputSpec{Kind: kindPipe, Path: "-"}, nil
	}
	if isFIFO(s) {
		return inputSpec{Kind: kindPipe, Path: s}, nil
	}
	return inputSpec{Kind: kindRecording, Path: s, Play: true}, nil
}

// opener opens an input for the given channels (1-based). The one in use is of
// openWith; tests put their own in its place.
type opener func(in inputSpec, channels []int) (capture.Source, error)

// union returns the sorted union of two lists of channels.
func union(a, b []int) []int {
	u := append(slices.Clone(a), b...)
	slices.Sort(u)
	return slices.Compact(u)
}

func isFIFO(path string) bool {
	info, err := os.Stat(path)
	return err == nil && info.Mode()&os.ModeNamedPipe != 0
}
