package main

import (
	"bufio"
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"strings"

	"offbeat/capture/sim"
	"offbeat/dsp"
)

var simulateCommand = &command{
	name: "simulate", short: "receiver audio of known truth, to a WAV file",
	run: simulate,
	help: `Usage: offbeat simulate [flags] FILE.wav

Writes the sound of a simulated bench, and beside it FILE.wav.truth.jsonl: the
scene, then what was true of each second. The scene is plain (two steady tones
in noise, the local 3.2 Hz high) unless flags say more.

  --duration TIME       how long: 60s, 10min, 8h (default 60s)
  --rate N              samples a second (default 48000)
  --bits 16|24|32       32 is floating point (default 16)
  --seed N              of everything random; 0 is a new one (default 1480)
  --force               overwrite files that exist

What is heard:
  --demo                begin with the demonstration: fading, a programme on the
                        carrier, a drifting receiver, an ageing local
  --hookup two-tone|mixer|quadrature   --sideband usb|lsb
  --baseband true|false quadrature: a receiver's baseband with both tones, not
                        the beat itself (default false)
  --carrier FREQ        nominal carrier (default 10MHz)
  --local FREQ          where the local should be heard (default: the carrier)
  --tone HZ             audio pitch of the carrier (default 1000)
  --offset HZ           how far the local is off at the start (default 3.2)
  --drift-per-day FRACTION
                        ageing of the local: 2ppb
  --white-fm, --flicker-fm, --walk-fm NUMBER
                        noise of the local: Allan deviation at 1 s; its floor;
                        at 1 s
  --carrier-level DB, --local-level DB
                        in dB of full scale (default -20 and -18)
  --carrier-cn0 DB      carrier over the noise in 1 Hz (default 55)

The path:
  --fading steady|quiet|moderate|disturbed|rice:K|custom
                        quiet, moderate and disturbed after ITU-R F.1487;
                        rice:4 is quiet with a steady part of 4 times the power
                        of the fading parts (default steady)
  --spread HZ, --path-delay TIME, --path-shift HZ
                        of custom, and of rice:K: rms Doppler width of each
                        path; delay (2ms) and mean Doppler of the second path
  --rice-k NUMBER       a steady part in any fading: its power over theirs
  --pulses, --tones, --subcarrier, --speech true|false
                        the programme on the carrier; --depth 0..1 scales it

The receiver:
  --receiver-drift HZ   a minute
  --receiver-wander HZ  rms of its coming and going over hours
  --passband LOW-HIGH   of its audio, in Hz (default 300-2700); none: noise in
                        all of the band
  --agc true|false      gain control; --agc-attack TIME, --agc-decay TIME
                        (default 5ms and 500ms)
  --spur HZ:DB          a tone of its own, or hum: 150Hz:-40dB
  --dc NUMBER           offset of the input, full scale 1
  --clock-error PPM     of the sample clock

What happens when, each in true time from the start:
  --trim TIME:HZ        the local is turned by so much at that time;
         TIME:HZ/TIME   evenly within the second time: 20s:-4Hz/30s turns it
                        by -4 Hz from 20 s to 50 s
  --retune TIME:HZ      the receiver's dial: both tones jump by so much
  --carrier-away TIME-TIME, --local-away TIME-TIME
                        not heard from the first time to the second: 60s-90s
  These and --spur may be given more than once, or take several with commas
  between: --trim 20s:-4Hz/30s,60s:+0.5Hz

Frequencies take mHz, Hz, kHz or MHz. Times take s, min, h or d; a path's delay
and the gain control's times take ms or s.
`,
}

func simulate(ctx context.Context, c *command, args []string, std stdio) error {
	f := newFlags(c.name)
	plain := simSpec{Seed: 1480, Offset: 3.2, Duration: 60}
	var opt sim.WriteOptions
	force, demo := false, false
	f.BoolVar(&force, "force", false, "")
	f.BoolVar(&demo, "demo", false, "")
	quantity(f, &opt.Bits, "bits", func(s string) (int, error) {
		n, err := oneOf(s, []string{"16", "24", "32"})
		return map[string]int{"16": 16, "24": 24, "32": 32}[n], err
	})
	// Flags are applied to the scene in their order, after --demo has chosen it.
	var said []func(*simSpec) error
	define := func(name string, set func(*simSpec, string) error) {
		f.Func(name, "", func(v string) error {
			var probe simSpec
			if err := set(&probe, v); err != nil {
				return err
			}
			said = append(said, func(s *simSpec) error {
				if err := set(s, v); err != nil {
					return fmt.Errorf("--%s: %w", name, err)
				}
				return nil
			})
			return nil
		})
	}
	for _, field := range simFields {
		if !strings.HasPrefix(field.key, "drop_") { // a WAV file has no gaps
			define(strings.ReplaceAll(field.key, "_", "-"), field.set)
		}
	}
	define("hookup", into(func(s *simSpec) *dsp.Hookup { return &s.Hookup }, parseHookup))
	define("sideband", into(func(s *simSpec) *dsp.Sideband { return &s.Sideband }, parseSideband))
	define("baseband", into(func(s *simSpec) *bool { return &s.Baseband }, parseBool))
	define("carrier", into(func(s *simSpec) *float64 { return &s.Carrier }, notZero(parseHertz)))
	define("local", into(func(s *simSpec) *float64 { return &s.Local }, notZero(parseHertz)))
	define("duration", into(func(s *simSpec) *float64 { return &s.Duration }, parseSeconds))
	files, err := f.parse(args)
	if err != nil {
		return err
	}
	if len(files) != 1 || files[0] == "-" {
		return errors.New("where to? Give one file name, such as night.wav")
	}
	if demo {
		plain = defaultSim
		plain.Duration = 60
	}
	for _, set := range said {
		if err := set(&plain); err != nil {
			return err
		}
	}
	if err := plain.check(); err != nil {
		return err
	}
	ctx, cancel := interruptible(ctx)
	defer cancel()
	truth := files[0] + ".truth.jsonl"
	if err := writeScene(ctx, files[0], truth, plain.scene(), opt, force); err != nil {
		return err
	}
	fmt.Fprintf(std.out, "%s: %s of sound\n%s: what was true of it\n", files[0], length(plain.Duration), truth)
	return nil
}

// writeScene writes both files, or leaves neither behind.
func writeScene(ctx context.Context, wav, truth string, scene sim.Config, opt sim.WriteOptions, force bool) (err error) {
	var made []*os.File
	defer func() {
		for _, f := range made {
			if e := f.Close(); err == nil {
				err = e
			}
		}
		if err != nil {
			for _, f := range made {
				os.Remove(f.Name())
			}
		}
	}()
	mode := os.O_WRONLY | os.O_CREATE | os.O_EXCL
	if force {
		mode = os.O_WRONLY | os.O_CREATE | os.O_TRUNC
	}
	for _, name := range []string{wav, truth} {
		f, err := os.OpenFile(name, mode, 0o644)
		if errors.Is(err, fs.ErrExist) {
			return fmt.Errorf("%s exists: choose another name, or overwrite it with --force", name)
		}
		if err != nil {
			return err
		}
		made = append(made, f)
	}
	lines := bufio.NewWriter(made[1])
	if err := sim.Write(ctx, made[0], lines, scene, opt); err != nil {
		if ctx.Err() != nil {
			return errors.New("interrupted; nothing was kept")
		}
		return err
	}
	return lines.Flush()
}
