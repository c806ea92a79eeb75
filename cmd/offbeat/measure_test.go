package main

import (
	"bufio"
	"bytes"
	"context"
	"encoding/binary"
	"encoding/json"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"

	"offbeat/dsp"
)

// scene is the sound of a test: two tones and noise.
type scene struct {
	rate, seconds  float64
	carrier, local float64 // Hz
	noise          float64 // rms
	channels       int     // the tones are on the last one; 0: 1
	iq             bool    // two channels, I and Q
	gain           float64 // 0: 1
}

// samples returns interleaved samples. The noise is the same at every call.
func (s scene) samples() []float32 {
	rng := rand.New(rand.NewPCG(1, 2))
	ch := max(s.channels, 1)
	gain := s.gain
	if gain == 0 {
		gain = 1
	}
	n := int(s.rate * s.seconds)
	out := make([]float32, 0, n*ch)
	for i := range n {
		t := float64(i) / s.rate
		for c := range ch {
			v := s.noise * rng.NormFloat64()
			if c == ch-1 || s.iq {
				wave := math.Cos
				if s.iq && c == 1 {
					wave = math.Sin
				}
				v += 0.2*wave(2*math.Pi*s.carrier*t+0.3) + 0.2*wave(2*math.Pi*s.local*t+1.1)
			}
			out = append(out, float32(max(-1, min(gain*v, 32767.0/32768))))
		}
	}
	return out
}

// wav returns the samples as a 16-bit WAV (the canonical 44-byte header).
func (s scene) wav() []byte {
	x := s.samples()
	ch := max(s.channels, 1)
	var b bytes.Buffer
	put := func(v any) { binary.Write(&b, binary.LittleEndian, v) }
	b.WriteString("RIFF")
	put(uint32(36 + 2*len(x)))
	b.WriteString("WAVEfmt ")
	put(uint32(16))
	put(uint16(1))
	put(uint16(ch))
	put(uint32(s.rate))
	put(uint32(s.rate) * uint32(2*ch))
	put(uint16(2 * ch))
	put(uint16(16))
	b.WriteString("data")
	put(uint32(2 * len(x)))
	b.Write(s16(x))
	return b.Bytes()
}

func s16(x []float32) []byte {
	out := make([]byte, 0, 2*len(x))
	for _, v := range x {
		out = binary.LittleEndian.AppendUint16(out, uint16(int16(math.Round(float64(v)*32768))))
	}
	return out
}

func f32(x []float32) []byte {
	out := make([]byte, 0, 4*len(x))
	for _, v := range x {
		out = binary.LittleEndian.AppendUint32(out, math.Float32bits(v))
	}
	return out
}

// put writes a file into the test's directory and returns its path.
func put(t testing.TB, name string, content []byte) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), name)
	if err := os.WriteFile(path, content, 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// command runs the program inside the test.
func runMain(args ...string) (code int, stdout, stderr string) {
	var out, errs bytes.Buffer
	code = run(context.Background(), args, strings.NewReader(""), &out, &errs)
	return code, out.String(), errs.String()
}

// parsed is the output of measure --json.
type parsed struct {
	readings []dsp.Reading
	summary  dsp.Summary
}

func parseJSON(t *testing.T, out string) (p parsed) {
	t.Helper()
	lines := bufio.NewScanner(strings.NewReader(out))
	lines.Buffer(nil, 1<<20)
	ended := false
	for lines.Scan() {
		if ended {
			t.Fatalf("a line after the summary: %s", lines.Text())
		}
		var s struct {
			Summary *dsp.Summary `json:"summary"`
		}
		if strings.HasPrefix(lines.Text(), `{"summary"`) {
			if err := json.Unmarshal(lines.Bytes(), &s); err != nil {
				t.Fatalf("%v: %s", err, lines.Text())
			}
			p.summary, ended = *s.Summary, true
			continue
		}
		var r dsp.Reading
		if err := json.Unmarshal(lines.Bytes(), &r); err != nil {
			t.Fatalf("%v: %s", err, lines.Text())
		}
		p.readings = append(p.readings, r)
	}
	if !ended {
		t.Fatal("no summary")
	}
	return p
}

// A recording of every hook-up gives one reading a second and the beat that was
// put in. The tolerance is five standard uncertainties of the run as the
// program states them, and no more than 1 mHz.
func TestMeasure(t *testing.T) {
	two := scene{rate: 8000, seconds: 12, carrier: 1000, local: 1003.2, noise: 0.01}
	cases := []struct {
		name   string
		scene  scene
		args   []string
		beat   float64
		offset float64
		size   bool // no sign
	}{
		{"two tones", two, []string{"--local-tone", "1003"}, 3.2, 3.2e-7, false},
		{"lower sideband", two, []string{"--local-tone", "1003", "--sideband", "lsb"}, -3.2, -3.2e-7, false},
		{"set off", two, []string{"--local-tone=1003", "--set-off", "3Hz"}, 3.2, 0.2 / 10000003, false},
		{"harmonic", two, []string{"--local-tone", "1003", "--carrier", "5 MHz", "--local", "1MHz", "--harmonic", "5"}, 3.2, 6.4e-7, false},
		{"sample clock", two, []string{"--local-tone", "1003", "--sample-rate-error", "1000"}, 3.2032, 3.2032e-7, false},
		{"which is which is not told", two, nil, 3.2, math.NaN(), true},
		{"second channel", scene{rate: 8000, seconds: 12, carrier: 1000, local: 996, noise: 0.01, channels: 2},
			[]string{"--local-tone", "996", "--channel", "2"}, -4, -4e-7, false},
		{"flag after the file", two, []string{"FILE", "--local-tone", "1003"}, 3.2, 3.2e-7, false},
		{"high rate", scene{rate: 192000, seconds: 8, carrier: 1000, local: 1005, noise: 0.02}, []string{"--local-tone", "1005"}, 5, 5e-7, false},
		{"quadrature", scene{rate: 8000, seconds: 12, carrier: -700, local: -704.5, noise: 0.01, channels: 2, iq: true},
			[]string{"--hookup", "quadrature", "--local-tone", "-704"}, -4.5, -4.5e-7, false},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			file := put(t, "a.wav", c.scene.wav())
			args := []string{"measure", "--json"}
			placed := false
			for _, a := range c.args {
				if a == "FILE" {
					a, placed = file, true
				}
				args = append(args, a)
			}
			if !placed {
				args = append(args, file)
			}
			code, out, errs := runMain(args...)
			if code != 0 || errs != "" {
				t.Fatalf("exit %d: %s", code, errs)
			}
			p := parseJSON(t, out)
			if len(p.readings) != int(c.scene.seconds) {
				t.Errorf("%d readings of %v s", len(p.readings), c.scene.seconds)
			}
			for i, r := range p.readings {
				if r.T != float64(i)+0.5 {
					t.Errorf("reading %d: t = %v", i, r.T)
				}
			}
			got, u := float64(p.summary.Beat), float64(p.summary.BeatU)
			if c.size {
				if !math.IsNaN(got) {
					t.Errorf("a signed beat %v where the sign is not known", got)
				}
				got = float64(p.summary.BeatAbs)
			}
			if d := math.Abs(got - c.beat); !(d <= 5*u) || !(d < 1e-3) {
				t.Errorf("beat %v ± %v, want %v", got, u, c.beat)
			}
			y := float64(p.summary.Offset)
			if math.IsNaN(y) != math.IsNaN(c.offset) || math.Abs(y-c.offset) > 1e-10 {
				t.Errorf("offset %v, want %v", y, c.offset)
			}
		})
	}
}

// Every bad input is one clear line (or a summary that says why) and its code.
func TestMeasureBadInput(t *testing.T) {
	good := scene{rate: 8000, seconds: 3, carrier: 1000, local: 1004, noise: 0.01}
	wav := good.wav()
	zeroRate := bytes.Clone(wav)
	copy(zeroRate[24:28], []byte{0, 0, 0, 0})
	hostile := good.samples()
	for i := range hostile {
		hostile[i] = float32(math.NaN())
		if i%2 == 0 {
			hostile[i] = float32(math.Inf(1))
		}
	}
	file := put(t, "good.wav", wav)
	cases := []struct {
		name string
		file string
		args []string
		code int
		want string // of stderr for code 2, of stdout for code 1
	}{
		{"no file", "", nil, 2, "which recording? Give a FILE, or - for standard input"},
		{"two files", file, []string{file}, 2, "one recording at a time"},
		{"missing", "/nonexistent/a.wav", nil, 2, "/nonexistent/a.wav: cannot be opened: no such file or directory"},
		{"directory", t.TempDir(), nil, 2, "a directory, not a recording"},
		{"empty", put(t, "empty.wav", nil), nil, 2, "empty, there is nothing to read"},
		{"not sound", put(t, "notes.wav", []byte("as found: high by three\n")), nil, 2, "neither a WAV nor a FLAC recording"},
		{"zero rate", put(t, "zero.wav", zeroRate), nil, 2, "zero.wav"},
		{"wrong channel", file, []string{"--channel", "2"}, 2, "channel 2 asked, the file has 1"},
		{"channel zero", file, []string{"--channel", "0"}, 2, `--channel: "0": channels are counted from 1`},
		{"quadrature of one channel", file, []string{"--hookup", "quadrature"}, 2, "channel 2 asked, the file has 1"},
		{"quadrature of one channel twice", file, []string{"--hookup", "quadrature", "--channel", "1,1"}, 2, "--channel: 1,1: quadrature needs two different channels"},
		{"two channels", file, []string{"--channel", "1,2"}, 2, "--channel: 1,2: this hook-up takes one channel"},
		{"unknown flag", file, []string{"--loud"}, 2, "unknown flag \"--loud\": `offbeat help measure` lists them"},
		{"flag without value", file, []string{"--carrier"}, 2, "--carrier needs a value"},
		{"bad carrier", file, []string{"--carrier", "ten"}, 2, `--carrier: "ten" is not a number`},
		{"bad sideband", file, []string{"--sideband", "am"}, 2, `--sideband: "am": must be usb or lsb`},
		{"bad hookup", file, []string{"--hookup", "three-tone"}, 2, "must be two-tone, mixer or quadrature"},
		{"local far off", file, []string{"--local", "1MHz"}, 2, "is its harmonic 10 meant?"},
		{"local tone beyond", file, []string{"--local-tone", "5kHz"}, 2, "local tone 5000 Hz: must lie below half the sample rate"},
		{"search beyond", file, []string{"--search", "100-9000"}, 2, "half the sample rate"},
		{"search order", file, []string{"--search", "900-100"}, 2, "--search: 900 Hz to 100 Hz: the first must be below the second"},
		{"rate without format", file, []string{"--rate", "8000"}, 2, "--rate: describes raw samples: say format too"},
		{"rate zero", file, []string{"--rate", "0", "--format", "s16le"}, 2, `--rate: "0": a sample rate must be 10 Hz to 1 MHz`},
		{"raw without rate", file, []string{"--format", "s16le"}, 2, "--format: raw samples do not say their rate"},
		{"every with json", file, []string{"--json", "--every", "5"}, 2, "--every is for the table"},
		{"all zero", put(t, "zeros.raw", make([]byte, 4*16000)), []string{"--format", "s16le", "--rate", "8000"}, 1, "the input carried no signal"},
		{"NaN and infinite", put(t, "nan.raw", f32(hostile)), []string{"--format", "f32le", "--rate", "8000"}, 1, "Result      none: "},
		{"noise", put(t, "noise.wav", scene{rate: 8000, seconds: 4, carrier: 0, local: 0, noise: 0.1}.wav()), nil, 1, "no tone stood out of the noise"},
		{"half a second", put(t, "short.wav", scene{rate: 8000, seconds: 0.5, carrier: 1000, local: 1004}.wav()), nil, 1, "less than a second of sound"},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			args := append([]string{"measure"}, c.args...)
			if c.file != "" {
				args = append(args, c.file)
			}
			if strings.HasSuffix(c.name, "without value") {
				args = []string{"measure", c.file, "--carrier"}
			}
			code, out, errs := runMain(args...)
			if code != c.code {
				t.Errorf("exit %d, want %d; stdout %q", code, c.code, out)
			}
			if c.code == 1 {
				if !strings.Contains(out, c.want) {
					t.Errorf("the summary does not say %q:\n%s", c.want, out)
				}
				return
			}
			if strings.Count(errs, "\n") != 1 || !strings.HasPrefix(errs, "offbeat measure: ") || !strings.Contains(errs, c.want) {
				t.Errorf("stderr %q, want one line with %q", errs, c.want)
			}
			if out != "" {
				t.Errorf("stdout %q", out)
			}
		})
	}
}

// Clipped sound is measured and flagged.
func TestMeasureClipped(t *testing.T) {
	file := put(t, "loud.wav", scene{rate: 8000, seconds: 5, carrier: 1000, local: 1004, gain: 6}.wav())
	code, out, errs := runMain("measure", "--json", "--local-tone", "1004", file)
	if code != 0 {
		t.Fatalf("exit %d: %s", code, errs)
	}
	for _, r := range parseJSON(t, out).readings {
		if !r.Has(dsp.Clipped) || r.Clipped == 0 {
			t.Errorf("t = %v: flags %v, %d samples clipped", r.T, r.Flags, r.Clipped)
		}
	}
}

// The table has a head, rows that cover the whole recording, and a summary in
// which the offset carries two digits of uncertainty.
func TestMeasureTable(t *testing.T) {
	file := put(t, "a.wav", scene{rate: 8000, seconds: 13, carrier: 1000, local: 1003.2, noise: 0.01}.wav())
	code, out, errs := runMain("measure", "--local-tone", "1003", "--every", "5", file)
	if code != 0 || errs != "" {
		t.Fatalf("exit %d: %s", code, errs)
	}
	for _, want := range []string{
		`: WAV .*, 8000 Hz, channel 1, 13 s\n`,
		`two-tone, usb, carrier 10 MHz, local 10 MHz\n`,
		`0:00:00 .* [0-9]/5 `, `0:00:05 +apart +\+3\.(199|200).* 5/5 `, `0:00:10 .* 3/3 `,
		`Offset +\(\+3\.20 ± 0\.12\) × 1e-7 `,
		`In words +the local is high by 320 parts in a thousand million`,
		`trim it down by 3\.20 ± 0\.12 Hz at 10 MHz`,
	} {
		if !regexp.MustCompile(want).MatchString(out) {
			t.Errorf("the output lacks %q:\n%s", want, out)
		}
	}
	if strings.Contains(out, "\x1b") || strings.Contains(out, "\r") {
		t.Error("control characters where nobody has a terminal")
	}
}

// Output that nobody can take is an error, not a success.
func TestMeasureFullDisk(t *testing.T) {
	full, err := os.OpenFile("/dev/full", os.O_WRONLY, 0)
	if err != nil {
		t.Skip("SKIPPED: this system has no /dev/full")
	}
	defer full.Close()
	file := put(t, "a.wav", scene{rate: 8000, seconds: 5, carrier: 1000, local: 1003.2, noise: 0.01}.wav())
	var errs bytes.Buffer
	code := run(context.Background(), []string{"measure", "--json", file}, nil, full, &errs)
	if code != 2 || !strings.Contains(errs.String(), "writing the output") || strings.Count(errs.String(), "\n") != 1 {
		t.Errorf("exit %d: %q", code, errs.String())
	}
}

func TestSay(t *testing.T) {
	for _, c := range []struct{ got, want string }{
		{withU(3.200003, 0.0000042, "Hz"), "+3.2000030 ± 0.0000042 Hz"},
		{withU(-3.2, 0.0996, "Hz"), "-3.20 ± 0.10 Hz"},
		{withU(1234.5, 123, "Hz"), "+1230 ± 120 Hz"},
		{withU(12, 9.96, "Hz"), "+12 ± 10 Hz"},
		{withU(-0.001, 0.5, "Hz"), "+0.00 ± 0.50 Hz"},
		{withU(5, math.NaN(), "Hz"), "+5 Hz"},
		{offsetWithU(3.2e-7, 4.2e-11), "(+3.20000 ± 0.00042) × 1e-7"},
		{offsetWithU(-1e-12, 1.2e-9), "(+0.0 ± 1.2) × 1e-9"},
		{offsetWithU(9.99e-8, 9.96e-9), "(+10.0 ± 1.0) × 1e-8"},
		{clock(3723.9), "1:02:03"},
		{length(42.25), "42.3 s"}, {length(125), "2 min 5 s"}, {length(7384), "2 h 3 min"},
		{hertz(10e6), "10 MHz"}, {hertz(10000100), "10.0001 MHz"}, {hertz(44100), "44.1 kHz"}, {hertz(1000), "1000 Hz"},
		{number(12.5e-6 * 1e6), "12.5"},
	} {
		if c.got != c.want {
			t.Errorf("got %q, want %q", c.got, c.want)
		}
	}
}

// The help of every command names only flags that it takes.
func TestHelp(t *testing.T) {
	code, out, _ := runMain("help")
	if code != 0 {
		t.Fatal(code)
	}
	for _, c := range commands {
		if !strings.Contains(out, "\n  "+c.name+" ") {
			t.Errorf("the list of commands lacks %s", c.name)
		}
		code, help, _ := runMain("help", c.name)
		code2, help2, _ := runMain(c.name, "--help")
		if code != 0 || code2 != 0 || help != help2 || !strings.HasPrefix(help, "Usage: offbeat "+c.name) {
			t.Errorf("help of %s: exit %d and %d\n%s", c.name, code, code2, help)
		}
		for i, line := range strings.Split(help, "\n") {
			if n := len([]rune(line)); n > 84 {
				t.Errorf("%s, line %d: %d columns", c.name, i+1, n)
			}
		}
		for _, name := range regexp.MustCompile(`--[a-z][a-z0-9-]*`).FindAllString(help, -1) {
			// A flag that is known takes the next word or leaves it; either way the
			// last one is what the command stumbles over, before it does anything.
			if _, _, errs := runMain(c.name, name, "--never", "--never"); strings.Contains(errs, "unknown flag "+quoted(name)) {
				t.Errorf("the help of %s tells of %s, which it does not take", c.name, name)
			}
		}
	}
	for _, later := range []string{"watch", "record"} {
		if code, _, errs := runMain(later); code != 2 || !strings.Contains(errs, "unknown command") {
			t.Errorf("%s: exit %d, %q", later, code, errs)
		}
	}
	if code, _, errs := runMain(); code != 2 || !strings.Contains(errs, "Usage") {
		t.Errorf("without arguments: exit %d, %q", code, errs)
	}
	if code, out, _ := runMain("version"); code != 0 || !strings.HasPrefix(out, "offbeat ") || strings.Count(out, "\n") != 1 {
		t.Errorf("version: exit %d, %q", code, out)
	}
}
