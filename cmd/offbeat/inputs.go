package main

import (
	"context"
	"fmt"
	"io"
	"math"
	"os"
	"strings"
	"time"

	"golang.org/x/term"

	"offbeat/capture/sound"
)

var inputsCommand = &command{
	name: "inputs", short: "sound inputs, with a level",
	run: inputs,
	help: `Usage: offbeat inputs [flags]

Lists the sound inputs and listens to each for a second. Any part of a name
serves as the device of a bench, such as sound:NAME for the input of offbeat run.

  --watch               again and again, until Ctrl-C: to set a level by

Levels are in dB of a full-scale sine. Loudest peaks at -20 to -6 leave room
for fading and are far above the card's own noise.
`,
}

// cards is what inputs asks the sound package; tests put their own in place.
type cards struct {
	list  func() ([]sound.Device, error)
	level func(ctx context.Context, device string, seconds float64) ([]sound.ChannelLevel, error)
}

func soundSupported() bool { return sound.Supported() }

func inputs(ctx context.Context, c *command, args []string, std stdio) error {
	f := newFlags(c.name)
	watch := false
	f.BoolVar(&watch, "watch", false, "")
	files, err := f.parse(args)
	if err != nil {
		return err
	}
	if len(files) > 0 {
		return fmt.Errorf("%s: inputs takes no arguments", quoted(files[0]))
	}
	ctx, cancel := interruptible(ctx)
	defer cancel()
	file, ok := std.out.(*os.File)
	clear := watch && ok && term.IsTerminal(int(file.Fd()))
	return showInputs(ctx, std.out, cards{sound.List, sound.Level}, watch, clear)
}

// showInputs lists the cards once, or until ctx ends.
func showInputs(ctx context.Context, w io.Writer, c cards, watch, clear bool) error {
	for {
		devices, err := c.list()
		if err != nil {
			return err
		}
		var b strings.Builder
		if clear {
			b.WriteString("\x1b[H\x1b[2J")
		}
		if len(devices) == 0 {
			b.WriteString("no sound inputs: is a card plugged in, and may this user use it (group audio)?\n")
		}
		for _, d := range devices {
			listenTo(ctx, &b, c, d)
			if ctx.Err() != nil {
				return nil
			}
		}
		if _, err := io.WriteString(w, b.String()); err != nil {
			return err
		}
		if !watch {
			if len(devices) == 0 {
				return &exitError{code: exitNothing}
			}
			return nil
		}
		if len(devices) == 0 {
			pause(ctx, time.Second)
		}
		if ctx.Err() != nil {
			return nil
		}
	}
}

// listenTo writes a card and the level of each of its channels.
func listenTo(ctx context.Context, w io.Writer, c cards, d sound.Device) {
	mark := " "
	if d.Default {
		mark = "*"
	}
	fmt.Fprintf(w, "%s %s  (%s, %d channels, %s)\n", mark, oneLine(d.Name), d.API, d.Channels, hertz(d.Rate))
	levels, err := c.level(ctx, d.Name, 1)
	if err != nil {
		fmt.Fprintf(w, "    %s\n", oneLine(err.Error()))
		return
	}
	for i, l := range levels {
		fmt.Fprintf(w, "    channel %d  [%s]  %s, peak %s\n", i+1, bar(l.RMS), dBFS(l.RMS), dBFS(l.Peak))
	}
}

// bar draws a level between -80 dB and full scale.
func bar(level float64) string {
	const width, floor = 32, -80
	n := 0
	if level > floor {
		n = min(int(math.Round((level-floor)/-floor*width)), width)
	}
	return strings.Repeat("=", n) + strings.Repeat(" ", width-n)
}

func dBFS(v float64) string {
	if math.IsInf(v, -1) || math.IsNaN(v) {
		return "silent"
	}
	return fmt.Sprintf("%.1f dBFS", v)
}
