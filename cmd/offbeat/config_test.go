package main

import (
	"bytes"
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"offbeat/dsp"
)

var update = flag.Bool("update", false, "write the errors of testdata/config anew; read the difference before keeping it")

// Every file of testdata/config breaks one rule; its first line is the error.
func TestBadConfigurations(t *testing.T) {
	files, err := filepath.Glob("testdata/config/*.yaml")
	if err != nil || len(files) < 50 {
		t.Fatalf("%d files, %v", len(files), err)
	}
	for _, file := range files {
		t.Run(strings.TrimSuffix(filepath.Base(file), ".yaml"), func(t *testing.T) {
			text, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			first, _, _ := strings.Cut(string(text), "\n")
			_, err = loadConfig(file)
			if err == nil {
				t.Fatal("it was accepted")
			}
			got := strings.TrimPrefix(err.Error(), file+":")
			if *update {
				text = append([]byte("# error: "+got), text[len(first):]...)
				if err := os.WriteFile(file, text, 0o644); err != nil {
					t.Fatal(err)
				}
				return
			}
			if want := strings.TrimPrefix(first, "# error: "); got != want {
				t.Errorf("got  %s\nwant %s", got, want)
			}
		})
	}
}

const twoBenches = `# a comment
listen: "[::1]:9000"
journal:
  file: night.sqlite
  thin_after: 90d
benches:
  - name: counter
    input: {kind: sound, device: Line, rate: 48000}
    sideband: lsb
    carrier: 10 MHz
    local: 1MHz
    harmonic: 10
    set_off: +100Hz
    local_tone: 1.1kHz
    sample_rate_error: 12.5ppm
    sample_rate_error_u: 300ppb
    search: [800, 1.5kHz]
    wired: true
    channel: 2
  - name: iq
    hookup: quadrature
    channels: [3, 4]
    input:
      kind: pipe
      path: /run/audio
      format: s24le
      rate: 192kHz
      channels: 4
`

func TestConfiguration(t *testing.T) {
	c, err := parseConfig([]byte(twoBenches))
	if err != nil {
		t.Fatal(err)
	}
	if c.Listen != "[::1]:9000" || c.Journal != "night.sqlite" || c.ThinAfter != 90*24*time.Hour || len(c.Benches) != 2 {
		t.Errorf("%+v", c)
	}
	want := settings{Name: "counter", Input: inputSpec{Kind: kindSound, Device: "Line", Rate: 48000}, Channels: []int{2},
		Sideband: dsp.Lower, Carrier: 10e6, Local: 1e6, Harmonic: 10, SetOff: 100, LocalTone: 1100, SampleRateError: 1.25e-5,
		SampleRateErrorU: 3e-7, SearchLow: 800, SearchHigh: 1500, Wired: true}
	if !c.Benches[0].equal(&want) {
		t.Errorf("got  %+v\nwant %+v", c.Benches[0], want)
	}
	if d := c.Benches[0].config(48000); d.Local != 10000100 || d.SetOff() != 100 {
		t.Errorf("the local is heard at %v", d.Local)
	}
	iq := settings{Name: "iq", Hookup: dsp.Quadrature, Channels: []int{3, 4},
		Input: inputSpec{Kind: kindPipe, Path: "/run/audio", Encoding: "s24le", Rate: 192e3, Channels: 4}}
	if !c.Benches[1].equal(&iq) {
		t.Errorf("got  %+v\nwant %+v", c.Benches[1], iq)
	}
}

// equal must notice a change of any field: a reload would miss it otherwise.
func TestSettingsEqual(t *testing.T) {
	lines := strings.Split(twoBenches, "\n")
	base, err := parseConfig([]byte(twoBenches))
	if err != nil {
		t.Fatal(err)
	}
	for i := 8; i < 19; i++ { // the optional keys of the first bench
		less := strings.Join(append(append([]string{}, lines[:i]...), lines[i+1:]...), "\n")
		less = strings.Replace(less, "harmonic: 10\n", "harmonic: 10\n", 1)
		c, err := parseConfig([]byte(less))
		if err != nil {
			if strings.Contains(lines[i], "harmonic") || strings.Contains(lines[i], "local: 1MHz") || strings.Contains(lines[i], "search") {
				continue // that one cannot be left out alone
			}
			t.Fatalf("without %q: %v", lines[i], err)
		}
		a, b := base.Benches[0], c.Benches[0]
		if a.equal(&b) && !strings.Contains(lines[i], "carrier: 10 MHz") {
			t.Errorf("without %q the bench counts as unchanged", lines[i])
		}
	}
	a, b := base.Benches[0], base.Benches[0]
	if !a.equal(&b) {
		t.Error("a bench does not equal itself")
	}
}

// What is far too large is refused before it is parsed, in one line.
func TestHostileConfigurations(t *testing.T) {
	dir := t.TempDir()
	for name, text := range map[string][]byte{
		"10 MB of comments": bytes.Repeat([]byte("# offbeat\n"), 1<<20),
		"10 MB of one line": bytes.Repeat([]byte("x"), 10<<20),
		"deep brackets":     bytes.Repeat([]byte("["), 200_000),
		"deep braces":       bytes.Repeat([]byte("{a: "), 50_000),
		"deep indents":      deepIndents(400),
		"deep dashes":       bytes.Repeat([]byte("- "), 100_000),
		"deep lines":        bytes.Repeat([]byte("[\n"), 100_000),
		"zeros":             make([]byte, 1000),
		"alias bomb":        aliasBomb(),
		"many keys":         manyKeys(10_000),
	} {
		file := filepath.Join(dir, strings.ReplaceAll(name, " ", "_"))
		if err := os.WriteFile(file, text, 0o600); err != nil {
			t.Fatal(err)
		}
		_, err := loadConfig(file)
		if err == nil {
			t.Errorf("%s: accepted", name)
			continue
		}
		if m := err.Error(); strings.ContainsAny(m, "\n\r") || len(m) > 500 {
			t.Errorf("%s: the error is not one short line: %.600q", name, m)
		}
	}
}

func deepIndents(n int) []byte {
	var b bytes.Buffer
	for i := range n {
		fmt.Fprintf(&b, "%sa:\n", strings.Repeat(" ", i))
	}
	return b.Bytes()
}

func manyKeys(n int) []byte {
	var b bytes.Buffer
	for i := range n {
		fmt.Fprintf(&b, "key%d: 1\n", i)
	}
	return b.Bytes()
}

// aliasBomb doubles thirty times.
func aliasBomb() []byte {
	var b bytes.Buffer
	b.WriteString("a0: &a0 [x, x]\n")
	for i := range 30 {
		fmt.Fprintf(&b, "a%d: &a%d [*a%d, *a%d]\n", i+1, i+1, i, i)
	}
	return b.Bytes()
}

func TestExampleConfiguration(t *testing.T) {
	c, err := loadConfig("../../deploy/offbeat.example.yaml")
	if err != nil {
		t.Fatal(err)
	}
	var names []string
	for _, b := range c.Benches {
		names = append(names, b.Name)
	}
	if got := strings.Join(names, " "); got != "counter generator house-reference" {
		t.Errorf("benches %s", got)
	}
	if c.Benches[0].Input != c.Benches[1].Input {
		t.Error("counter and generator do not share the sound card")
	}
}

func FuzzConfig(f *testing.F) {
	f.Add([]byte(twoBenches))
	files, _ := filepath.Glob("testdata/config/*.yaml")
	for _, file := range files {
		if text, err := os.ReadFile(file); err == nil {
			f.Add(text)
		}
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		if len(text) > 16<<10 {
			return
		}
		c, err := parseConfig(text)
		if err != nil {
			if m := err.Error(); strings.ContainsAny(m, "\n\r") || len(m) > 1000 {
				t.Errorf("the error is not one short line: %q", m)
			}
			return
		}
		if len(c.Benches) == 0 {
			t.Error("no benches")
		}
		for _, b := range c.Benches {
			if bad := b.check(); bad != nil || b.Name == "" || b.Input.Kind == "" {
				t.Errorf("%+v: %v", b, bad)
			}
		}
	})
}
