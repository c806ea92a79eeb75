// Command offbeat measures how far a local oscillator is off a standard-
// frequency carrier, from the sound of a receiver that hears both.
//
// One file holds each subcommand. Where to begin reading: pipeline.go, the way
// of a sample from an input to a reading.
package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"os/signal"
	"syscall"
)

// The exit codes of every subcommand.
const (
	exitOK      = 0 // done; of measure: read to the end
	exitNothing = 1 // nothing usable, or a check that failed
	exitBad     = 2 // bad usage or unreadable input
)

func main() {
	os.Exit(run(context.Background(), os.Args[1:], os.Stdin, os.Stdout, os.Stderr))
}

// command is a subcommand: what it does in a line, its help, and itself.
type command struct {
	name, short, help string
	run               func(ctx context.Context, c *command, args []string, std stdio) error
}

// stdio is the standard streams.
type stdio struct {
	in       io.Reader
	out, err io.Writer
}

// exitError ends a subcommand with a code other than exitBad. Its text may be
// empty when all has been said.
type exitError struct {
	code int
	msg  string
}

func (e *exitError) Error() string { return e.msg }

var commands []*command

func init() {
	commands = []*command{runCommand, measureCommand, stabilityCommand, exportCommand, inputsCommand, simulateCommand, checkCommand, versionCommand, helpCommand}
}

// run is the whole program; it returns the exit code.
func run(ctx context.Context, args []string, stdin io.Reader, stdout, stderr io.Writer) int {
	if len(args) == 0 {
		io.WriteString(stderr, usage())
		return exitBad
	}
	name := args[0]
	switch name {
	case "-h", "-help", "--help":
		name = "help"
	case "-version", "--version":
		name = "version"
	}
	c := findCommand(name)
	if c == nil {
		fmt.Fprintf(stderr, "offbeat: unknown command %s: `offbeat help` lists them\n", quoted(args[0]))
		return exitBad
	}
	err := c.run(ctx, c, args[1:], stdio{stdin, stdout, stderr})
	if err == nil {
		return exitOK
	}
	if errors.Is(err, errHelp) {
		io.WriteString(stdout, c.help)
		return exitOK
	}
	var exit *exitError
	code := exitBad
	if errors.As(err, &exit) {
		code = exit.code
	}
	if msg := oneLine(err.Error()); msg != "" {
		fmt.Fprintf(stderr, "offbeat %s: %s\n", c.name, msg)
	}
	return code
}

func findCommand(name string) *command {
	for _, c := range commands {
		if c.name == name {
			return c
		}
	}
	return nil
}

// interruptible returns a context that the first SIGINT or SIGTERM ends. The
// second signal ends the process at once, as if nobody listened.
func interruptible(ctx context.Context) (context.Context, context.CancelFunc) {
	ctx, cancel := context.WithCancel(ctx)
	signals := make(chan os.Signal, 1)
	signal.Notify(signals, syscall.SIGINT, syscall.SIGTERM)
	go func() {
		select {
		case <-signals:
		case <-ctx.Done():
		}
		signal.Stop(signals)
		cancel()
	}()
	return ctx, cancel
}
