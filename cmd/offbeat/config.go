package main

import (
	"errors"
	"fmt"
	"io"
	"net"
	"os"
	"regexp"
	"strconv"
	"strings"
	"time"

	"github.com/goccy/go-yaml/ast"

	"offbeat/dsp"
)

// config is what the daemon is told to do.
type config struct {
	Listen    string // host:port of the page and the metrics
	WebConfig string // TLS and passwords, a file of the exporter toolkit; empty: none
	Insecure  bool   // listen beyond this machine with neither
	Journal   string // file; empty: the state directory
	ThinAfter time.Duration
	Benches   []settings
}

const (
	defaultListen = "127.0.0.1:9471"
	maxConfig     = 256 << 10 // bytes; a bench takes about 500
)

// loadConfig reads a configuration file into a fresh value. Every error is one
// line that begins with the file, the line and the column.
func loadConfig(path string) (*config, error) {
	f, err := os.Open(path)
	if err != nil {
		return nil, fmt.Errorf("configuration: %w", err)
	}
	defer f.Close()
	text, err := io.ReadAll(io.LimitReader(f, maxConfig+1))
	if err != nil {
		return nil, fmt.Errorf("configuration: %w", err)
	}
	if len(text) > maxConfig {
		return nil, fmt.Errorf("configuration: %s is larger than %d KiB: is it the right file?", path, maxConfig>>10)
	}
	c, err := parseConfig(text)
	var f2 *fault
	if errors.As(err, &f2) {
		return nil, fmt.Errorf("%s:%w", path, f2)
	}
	return c, err
}

// parseConfig reads the text of a configuration; a *fault says where it is
// wrong.
func parseConfig(text []byte) (*config, error) {
	root, err := parseYAML(text)
	if err != nil {
		return nil, err
	}
	if root == nil {
		return nil, &fault{1, 1, "the configuration is empty: it needs at least a list of benches"}
	}
	m, err := readMapping(root, "the configuration", "listen", "web_config", "insecure", "journal", "benches")
	if err != nil {
		return nil, err
	}
	c := &config{Listen: defaultListen}
	if err := errors.Join(
		scalar(m, "listen", &c.Listen, parseAddress),
		scalar(m, "web_config", &c.WebConfig, parseWords),
		scalar(m, "insecure", &c.Insecure, parseBool),
	); err != nil {
		return nil, first(err)
	}
	if err := c.checkListen(); err != nil {
		return nil, faultAt(m.where("listen"), "listen: %s", err)
	}
	if m.has("journal") {
		j, err := readMapping(m.value["journal"], "journal", "file", "thin_after")
		if err != nil {
			return nil, err
		}
		if err := first(errors.Join(scalar(j, "file", &c.Journal, parseWords), scalar(j, "thin_after", &c.ThinAfter, parseThinAfter))); err != nil {
			return nil, err
		}
	}
	if !m.has("benches") {
		return nil, faultAt(m.at, "no benches: the configuration needs a list of at least one")
	}
	return c, c.readBenches(m.value["benches"])
}

// first returns the first of joined errors: one line at a time.
func first(err error) error {
	if j, ok := err.(interface{ Unwrap() []error }); ok {
		return j.Unwrap()[0]
	}
	return err
}

func (c *config) readBenches(n ast.Node) error {
	items, err := list(n, "benches")
	if err != nil {
		return err
	}
	if len(items) == 0 {
		return faultAt(n, "benches is empty: the daemon needs at least one")
	}
	seen := map[string]int{}
	for _, item := range items {
		b, m, err := readBench(item)
		if err != nil {
			return err
		}
		at := m.where("name")
		if line, twice := seen[b.Name]; twice {
			return faultAt(at, "name: a bench %s stands on line %d already: names must differ", quoted(b.Name), line)
		}
		seen[b.Name] = at.GetToken().Position.Line
		c.Benches = append(c.Benches, *b)
	}
	return nil
}

// readBench reads one item of the list of benches.
func readBench(n ast.Node) (*settings, *mapping, error) {
	m, err := readMapping(n, "a bench", "name", "input", "channel", "channels", "hookup", "sideband", "carrier", "local", "harmonic",
		"set_off", "local_tone", "sample_rate_error", "sample_rate_error_u", "search", "wired")
	if err != nil {
		return nil, nil, err
	}
	for _, key := range []string{"name", "input"} {
		if !m.has(key) {
			return nil, nil, faultAt(m.at, "this bench has no %s: every bench needs a name and an input", key)
		}
	}
	var s settings
	if err := first(errors.Join(
		scalar(m, "name", &s.Name, parseName),
		scalar(m, "hookup", &s.Hookup, parseHookup),
		scalar(m, "sideband", &s.Sideband, parseSideband),
		scalar(m, "carrier", &s.Carrier, parseHertz),
		scalar(m, "local", &s.Local, parseHertz),
		scalar(m, "harmonic", &s.Harmonic, parseCount),
		scalar(m, "set_off", &s.SetOff, parseHertz),
		scalar(m, "local_tone", &s.LocalTone, parseHertz),
		scalar(m, "sample_rate_error", &s.SampleRateError, parseFraction),
		scalar(m, "sample_rate_error_u", &s.SampleRateErrorU, parseFraction),
		scalar(m, "wired", &s.Wired, parseBool),
		readChannels(m, &s),
		readSearch(m, &s),
	)); err != nil {
		return nil, nil, err
	}
	if err := readInput(m.value["input"], &s.Input); err != nil {
		return nil, nil, err
	}
	if bad := s.check(); bad != nil {
		at := m.where(bad.field)
		if bad.field == "channel" && m.has("channels") {
			at = m.where("channels")
		}
		return nil, nil, faultAt(at, "%s", bad)
	}
	if s.Input.Kind == kindSimulate {
		s.Input.Sim.follow(&s)
		if err := s.Input.Sim.check(); err != nil {
			return nil, nil, faultAt(m.where("input"), "%s", err)
		}
	}
	if rate := s.Input.knownRate(); rate > 0 {
		if _, err := dsp.New(s.config(rate)); err != nil {
			return nil, nil, faultAt(m.at, "bench %s: %s", s.Name, err)
		}
	}
	return &s, m, nil
}

// readChannels reads `channel: 2` or `channels: [3, 4]`.
func readChannels(m *mapping, s *settings) error {
	if m.has("channel") && m.has("channels") {
		return faultAt(m.where("channels"), "channel and channels exclude each other")
	}
	if err := scalar(m, "channel", &s.Channels, parseChannels); err != nil || !m.has("channels") {
		return err
	}
	items, err := list(m.value["channels"], "channels")
	if err != nil {
		return err
	}
	for _, item := range items {
		t, err := text(item, "channels")
		if err != nil {
			return err
		}
		c, err := parseChannels(t)
		if err != nil {
			return faultAt(item, "channels: %s", err)
		}
		s.Channels = append(s.Channels, c...)
	}
	if n := len(s.Channels); n < 1 || n > 2 {
		return faultAt(m.where("channels"), "channels: %d are given: a bench listens to one, or to two for quadrature", n)
	}
	return nil
}

// readSearch reads `search: [800Hz, 1.5kHz]`.
func readSearch(m *mapping, s *settings) error {
	if !m.has("search") {
		return nil
	}
	items, err := list(m.value["search"], "search")
	if err != nil {
		return err
	}
	if len(items) != 2 {
		return faultAt(m.where("search"), "search: must be two frequencies, [LOW, HIGH]")
	}
	for i, dst := range []*float64{&s.SearchLow, &s.SearchHigh} {
		t, err := text(items[i], "search")
		if err != nil {
			return err
		}
		if *dst, err = parseHertz(t); err != nil {
			return faultAt(items[i], "search: %s", err)
		}
	}
	return nil
}

var nameShape = regexp.MustCompile(`^[A-Za-z0-9][A-Za-z0-9_.-]{0,63}$`)

// parseName reads the name of a bench. It becomes a label, a part of an address
// and a word in the log.
func parseName(s string) (string, error) {
	if !nameShape.MatchString(s) {
		return "", fmt.Errorf("%s: must be letters, digits, dots, dashes and underscores, 64 at most", quoted(s))
	}
	return s, nil
}

// parseThinAfter reads the age at which seconds become minutes.
func parseThinAfter(s string) (time.Duration, error) {
	d, err := parseSpan(s)
	if err == nil && d < 24*time.Hour {
		err = fmt.Errorf("%s: must be at least 1d", quoted(s))
	}
	return d, err
}

// parseAddress reads host:port.
func parseAddress(s string) (string, error) {
	host, port, err := net.SplitHostPort(s)
	if err != nil {
		return "", fmt.Errorf("%s: must be an address and a port, such as %s", quoted(s), defaultListen)
	}
	if n, err := strconv.Atoi(port); err != nil || n < 0 || n > 65535 {
		return "", fmt.Errorf("%s: the port must be 0 to 65535", quoted(s))
	}
	if strings.ContainsAny(host, " /") {
		return "", fmt.Errorf("%s: must be an address and a port, such as %s", quoted(s), defaultListen)
	}
	return s, nil
}

// checkListen refuses to show the page to a network unasked.
func (c *config) checkListen() error {
	if c.Insecure || c.WebConfig != "" || isLoopback(c.Listen) {
		return nil
	}
	return fmt.Errorf("%s can be reached from other machines: give a web_config with TLS and a password, or say insecure: true", c.Listen)
}

func isLoopback(address string) bool {
	host, _, err := net.SplitHostPort(address)
	if err != nil {
		return false
	}
	ip := net.ParseIP(host)
	return host == "localhost" || ip != nil && ip.IsLoopback()
}
