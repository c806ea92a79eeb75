package main

import (
	"flag"
	"fmt"
	"io"
	"slices"
	"strings"
)

// flags is the flags of one subcommand. It keeps the standard library's
// definitions and reads the command line itself: flags may follow the file
// name, and every error is one line that says what is allowed.
type flags struct {
	*flag.FlagSet
	seen []string // names given, in order
}

func newFlags(name string) *flags {
	fs := flag.NewFlagSet(name, flag.ContinueOnError)
	fs.SetOutput(io.Discard)
	fs.Usage = func() {}
	return &flags{FlagSet: fs}
}

// given reports whether the flag was on the command line.
func (f *flags) given(name string) bool { return slices.Contains(f.seen, name) }

// quantity defines a flag whose value goes through parse into dst.
func quantity[T any](f *flags, dst *T, name string, parse func(string) (T, error)) {
	f.Func(name, "", func(s string) error {
		v, err := parse(s)
		if err == nil {
			*dst = v
		}
		return err
	})
}

// errHelp says that --help was asked for.
var errHelp = fmt.Errorf("help asked for")

// parse reads args and returns what is not a flag. "-" is a file name, "--"
// ends the flags.
func (f *flags) parse(args []string) (files []string, err error) {
	for len(args) > 0 {
		arg := args[0]
		args = args[1:]
		if arg == "--" {
			return append(files, args...), nil
		}
		if len(arg) < 2 || arg[0] != '-' {
			files = append(files, arg)
			continue
		}
		name, value, hasValue := strings.Cut(strings.TrimPrefix(strings.TrimPrefix(arg, "-"), "-"), "=")
		if name == "help" || name == "h" {
			return nil, errHelp
		}
		def := f.Lookup(name)
		if def == nil {
			return nil, fmt.Errorf("unknown flag %s: `offbeat help %s` lists them", quoted(arg), f.Name())
		}
		if b, ok := def.Value.(interface{ IsBoolFlag() bool }); ok && b.IsBoolFlag() {
			if !hasValue {
				value = "true"
			}
		} else if !hasValue {
			if len(args) == 0 {
				return nil, fmt.Errorf("--%s needs a value", name)
			}
			value, args = args[0], args[1:]
		}
		if err := f.Set(name, value); err != nil {
			return nil, fmt.Errorf("--%s: %s", name, plainFlagError(err, value))
		}
		f.seen = append(f.seen, name)
	}
	return files, nil
}

// plainFlagError words the standard library's terse errors.
func plainFlagError(err error, value string) string {
	switch err.Error() {
	case "parse error":
		return quoted(value) + " is not understood"
	case "value out of range":
		return quoted(value) + " is out of range"
	}
	return err.Error()
}
