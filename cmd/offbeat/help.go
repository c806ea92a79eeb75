package main

import (
	"context"
	"fmt"
	"io"
	"runtime"
	"runtime/debug"
	"strings"
)

// usage is the list of subcommands.
func usage() string {
	var b strings.Builder
	b.WriteString(`offbeat measures how far a local oscillator is off a standard-frequency
carrier, from the sound of a receiver that hears both.

Usage: offbeat COMMAND [flags]

`)
	for _, c := range commands {
		fmt.Fprintf(&b, "  %-10s %s\n", c.name, c.short)
	}
	b.WriteString(`
"offbeat help COMMAND" says more. To begin: "offbeat run" starts a simulated
bench, "offbeat measure FILE" reads a recording.
`)
	return b.String()
}

var helpCommand = &command{
	name: "help", short: "what a command does and its flags",
	help: "Usage: offbeat help [COMMAND]\n",
	run: func(_ context.Context, _ *command, args []string, std stdio) error {
		if len(args) > 0 && (args[0] == "--help" || args[0] == "-h") {
			return errHelp
		}
		if len(args) == 0 {
			_, err := io.WriteString(std.out, usage())
			return err
		}
		c := findCommand(args[0])
		if c == nil {
			return fmt.Errorf("unknown command %s: `offbeat help` lists them", quoted(args[0]))
		}
		_, err := io.WriteString(std.out, c.help)
		return err
	},
}

var versionCommand = &command{
	name: "version", short: "which build this is",
	help: "Usage: offbeat version\n",
	run: func(_ context.Context, c *command, args []string, std stdio) error {
		if files, err := newFlags(c.name).parse(args); err != nil {
			return err
		} else if len(files) > 0 {
			return fmt.Errorf("%s: version takes no arguments", quoted(files[0]))
		}
		version, revision := buildVersion()
		_, err := fmt.Fprintf(std.out, "offbeat %s (%s, %s %s/%s, sound cards: %s)\n", version, revision,
			runtime.Version(), runtime.GOOS, runtime.GOARCH, map[bool]string{true: "yes", false: "no"}[soundSupported()])
		return err
	},
}

// version is set when a release is built: -ldflags "-X main.version=…".
var version = "development"

// buildVersion returns the version and the revision of the source it was built
// from.
func buildVersion() (string, string) {
	revision, dirty := "unknown revision", false
	if info, ok := debug.ReadBuildInfo(); ok {
		for _, s := range info.Settings {
			switch s.Key {
			case "vcs.revision":
				revision = s.Value[:min(12, len(s.Value))]
			case "vcs.modified":
				dirty = s.Value == "true"
			}
		}
	}
	if dirty {
		revision += ", modified"
	}
	return version, revision
}
