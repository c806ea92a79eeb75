package main

import (
	"bytes"
	"context"
	"encoding/json"
	"encoding/xml"
	"errors"
	"fmt"
	"image/png"
	"io"
	"math"
	"math/rand/v2"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"offbeat/dsp"
	"offbeat/dsp/stability"
	"offbeat/metrics/journal"
)

// judge runs the command on a text and returns what it printed.
func judge(t *testing.T, stdin string, args ...string) (code int, stdout, stderr string) {
	t.Helper()
	var out, bad bytes.Buffer
	code = run(context.Background(), append([]string{"stability"}, args...), strings.NewReader(stdin), &out, &bad)
	return code, out.String(), bad.String()
}

// thousand is the 1000-point set of SP 1065 section 12.4, a number a line.
func thousand() string {
	var b strings.Builder
	n := int64(1234567890)
	for range 1000 {
		fmt.Fprintf(&b, "%.17g\n", float64(n)/2147483647)
		n = 16807 * n % 2147483647
	}
	return b.String()
}

// The published values (SP 1065 Table 31) through the command, by its contract.
func TestStabilityPublished(t *testing.T) {
	code, out, bad := judge(t, "# minimal standard\n"+thousand(), "--kind", "frequency", "--rate", "1", "--taus", "1,10,100", "--json", "-")
	if code != 0 || bad != "" {
		t.Fatal(code, bad)
	}
	want := map[string][3]float64{
		"adev": {2.922319e-01, 9.965736e-02, 3.897804e-02}, "oadev": {2.922319e-01, 9.159953e-02, 3.241343e-02},
		"mdev": {2.922319e-01, 6.172376e-02, 2.170921e-02}, "tdev": {1.687202e-01, 3.563623e-01, 1.253382e+00},
		"hdev": {2.943883e-01, 1.052754e-01, 3.910860e-02}, "ohdev": {2.943883e-01, 9.581083e-02, 3.237638e-02},
		"totdev": {2.922319e-01, 9.134743e-02, 3.406530e-02}, "tau_s": {1, 10, 100}, "m": {1, 10, 100}, "n": {999, 981, 801},
	}
	lines := strings.Split(strings.TrimSpace(out), "\n")
	if len(lines) != 4 {
		t.Fatalf("%d lines:\n%s", len(lines), out)
	}
	for i := range 3 {
		var got map[string]any
		if err := json.Unmarshal([]byte(lines[i]), &got); err != nil {
			t.Fatal(err)
		}
		for key, w := range want {
			v, _ := got[key].(float64)
			if math.Abs(v/w[i]-1) > 5e-7 {
				t.Errorf("%s at %g s: %v, want %v", key, w[0], got[key], w[i])
			}
		}
		if got["noise"] != "white fm" {
			t.Errorf("noise %v", got["noise"])
		}
	}
	// At m = 10 the exact degrees of freedom of sampled white FM (NumPy) and
	// SciPy's chi-squared: 146.0723, limits from it.
	var ten tauRow
	if err := json.Unmarshal([]byte(lines[1]), &ten); err != nil {
		t.Fatal(err)
	}
	if math.Abs(float64(ten.EDF)-146.0723) > 1e-4 || math.Abs(float64(ten.Low)/8.667789e-2-1) > 1e-4 || math.Abs(float64(ten.High)/9.746678e-2-1) > 1e-4 {
		t.Errorf("%+v", ten)
	}
	if ten.TotalEDF != 150 || ten.TotalBias != 1 { // SP 1065 Table 7: 1.5 T/tau; unbiased
		t.Errorf("total: %+v", ten)
	}
	var s struct{ Summary verdict }
	if err := json.Unmarshal([]byte(lines[3]), &s); err != nil {
		t.Fatal(err)
	}
	v := s.Summary
	for key, want := range map[string]float64{"least_squares": 6.490910e-06, "bisection": -6.104214416e-06, "first_difference": 1.517560593e-04,
		"quadratic": 6.914848e-06, "three_point": -6.104214416e-06, "mean_second_difference": 1.517560593e-04} {
		if got := float64(v.Drifts[key]) / 86400; math.Abs(got/want-1) > 1e-6 {
			t.Errorf("drift %s: %g, want %g", key, got, want)
		}
	}
	if v.Significant || v.Ageing != nil || v.Readings != 1000 || math.Abs(float64(v.Mean)-4.897745e-01) > 1e-7 {
		t.Errorf("%+v", v)
	}
}

// Another rate scales tau; the deviations of frequency do not depend on it.
func TestStabilityRate(t *testing.T) {
	_, fast, _ := judge(t, thousand(), "--kind", "frequency", "--rate", "10", "--taus", "0.1,1", "--json", "-")
	_, slow, _ := judge(t, thousand(), "--kind", "frequency", "--interval", "1d", "--taus", "decade", "--json", "-")
	if !strings.Contains(fast, `{"tau_s":1,"m":10,"n":981,`) || !strings.Contains(slow, `{"tau_s":864000,"m":10,"n":981,`) {
		t.Errorf("%s\n%s", fast, slow)
	}
	code, out, _ := judge(t, thousand(), "--kind", "frequency", "--taus", "all", "--json", "-")
	if n := strings.Count(out, "\n"); code != 0 || n != 501 {
		t.Errorf("all: %d lines", n)
	}
}

// What is wrong is said in one clear line, and what could be computed is.
func TestStabilityBadInput(t *testing.T) {
	for _, c := range []struct {
		what, stdin string
		args        []string
		code        int
		stderr, out string // contained
	}{
		{"no kind", "1\n", []string{"-"}, 2, "say what the numbers are: --kind phase or --kind frequency", ""},
		{"empty", "", []string{"--kind", "phase", "-"}, 2, "standard input: there is no number in it", ""},
		{"comments only", "# a\n\n", []string{"--kind", "phase", "-"}, 2, "there is no number in it", ""},
		{"text only", "abc\ndef\n", []string{"--kind", "phase", "-"}, 2, `there is no number in it: line 1: "abc" is not a number and counts as missing; 2 such lines in all`, ""},
		{"binary", "1\n\x00\x01\n", []string{"--kind", "phase", "-"}, 2, "line 2 holds binary data", ""},
		{"one point", "1\n", []string{"--kind", "frequency", "-"}, 1, "standard input holds 1 usable reading: 2 are the least for a deviation", "Mean        1"},
		{"two columns", "1,2\n", []string{"--kind", "phase", "-"}, 2, `line 1 holds 2 columns ("1,2"): say which with --column`, ""},
		{"no such column", "t,y\n1,2\n", []string{"--kind", "phase", "--column", "z", "-"}, 2, `there is no column "z": line 1 has "t", "y"`, ""},
		{"column too far", "t,y\n1,2\n", []string{"--kind", "phase", "--column", "3", "-"}, 2, "there is no column 3: line 1 has 2", ""},
		{"constant", "5\n5\n5\n5\n", []string{"--kind", "frequency", "-"}, 0, "", "all readings are alike"},
		{"some text", "1\n2\nbad\n2\n1\n3\n", []string{"--kind", "frequency", "-"}, 0, "", `line 3: "bad" is not a number and counts as missing`},
		{"infinite", "1\n2\ninf\n2\n1\n3\n", []string{"--kind", "frequency", "-"}, 0, "", "1 infinite value counted as missing"},
		{"gaps everywhere", "1\nnan\n2\n-\n3\n", []string{"--kind", "frequency", "-"}, 1, "gaps leave no two neighbouring differences", ""},
		{"out of order", "t,y\n3,1\n1,2\n2,3\n4,4\n", []string{"--kind", "frequency", "--column", "y", "--time", "t", "-"}, 0, "", "the times are not in order: the readings were sorted"},
		{"repeated", "t,y\n1,1\n2,2\n2,3\n3,4\n4,1\n", []string{"--kind", "frequency", "--column", "y", "--time", "t", "-"}, 0, "", "1 reading at a time that is taken"},
		{"one time", "t,y\n1,1\n1,2\n", []string{"--kind", "frequency", "--column", "y", "--time", "t", "-"}, 2, "all are the same", ""},
		{"bad time", "t,y\n1,1\nsoon,7\n2,2\n3,4\n", []string{"--kind", "frequency", "--column", "y", "--time", "t", "-"}, 0, "", `line 3: "soon" is not a time`},
		{"times far apart", "t,y\n1,1\n2,2\n3,2\n1e9,4\n", []string{"--kind", "frequency", "--column", "y", "--time", "t", "-"}, 2, "are times or --rate right?", ""},
		{"tau between", "1\n2\n", []string{"--kind", "phase", "--taus", "2.5", "-"}, 2, `"2.5" s is not a whole number of readings 1 s apart`, ""},
		{"bad tau", "1\n2\n", []string{"--kind", "phase", "--taus", "octaves", "-"}, 2, "averaging times are octave, decade, all, or seconds", ""},
		{"bad rate", "1\n2\n", []string{"--kind", "phase", "--rate", "0", "-"}, 2, "must be 1e-9 Hz to 1e9 Hz", ""},
		{"both", "1\n", []string{"--bench", "a", "-"}, 2, "--bench is for the journal", ""},
		{"neither", "", nil, 2, "which numbers?", ""},
		{"backwards", "", []string{"--bench", "a", "--from", "2030-01-02", "--to", "2030-01-01"}, 2, "is not before", ""},
		{"no file", "", []string{"--kind", "phase", "nowhere.txt"}, 2, "nowhere.txt: no such file or directory", ""},
		{"nothing to draw", "5\n5\n5\n", []string{"--kind", "frequency", "--plot", "x.svg", "-"}, 2, "nothing to draw", ""},
		{"bad picture", "5\n5\n5\n", []string{"--kind", "frequency", "--plot", "x.pdf", "-"}, 2, "must end in .svg or .png", ""},
	} {
		code, out, bad := judge(t, c.stdin, c.args...)
		if code != c.code || !strings.Contains(bad, c.stderr) || !strings.Contains(out, c.out) || strings.Count(bad, "\n") > 1 || c.stderr == "" && bad != "" {
			t.Errorf("%s: exit %d, want %d\nstderr: %sstdout: %s", c.what, code, c.code, bad, out)
		}
		if strings.Contains(out, "NaN") || strings.Contains(out, "Inf") {
			t.Errorf("%s: %s", c.what, out)
		}
	}
}

// Columns are found by name or number, in every usual dress.
func TestColumns(t *testing.T) {
	for _, c := range []struct {
		what, text string
		column     column
		want       string
	}{
		{"plain", "1\r\n 2 \n\n#x\n-3e-9\n+.5", column{}, "[1 2 -3e-09 0.5]"},
		{"missing", "nan\nNA\nnull\n-\n1\n", column{}, "[NaN NaN NaN NaN 1]"},
		{"no hexadecimal", "0x10\n1_0\n1e999\n2\n", column{}, "[NaN NaN NaN 2]"},
		{"BOM", "\ufeff1\n2\n", column{}, "[1 2]"},
		{"comma", "t,y\n0,1\n1,\n2,3\n", column{name: "y"}, "[1 NaN 3]"},
		{"other case", "T,Y\n0,1\n", column{name: "y"}, "[1]"},
		{"semicolon", "t;y\n0;1\n", column{name: "y"}, "[1]"},
		{"tab", "t\ty z\n0\t1\n", column{name: "y z"}, "[1]"},
		{"space", "t   y\n0  1\n", column{name: "y"}, "[1]"},
		{"number with header", "t,y\n0,1\n", column{name: "2"}, "[1]"},
		{"number without", "0,1\n1,2\n", column{name: "2"}, "[1 2]"},
		{"name that is a number", "2,1\n5,6\n", column{name: "1"}, "[6]"},
		{"quotes", `"a, ""b""","y"` + "\n\"x,y\",\"7\"\n", column{name: "y"}, "[7]"},
		{"short line", "a,b\n1\n2,3\n", column{name: "b"}, "[NaN 3]"},
	} {
		n, err := readColumn(strings.NewReader(c.text), c.column)
		if got := fmt.Sprint(n.values); err != nil || got != c.want {
			t.Errorf("%s: %s %v, want %s", c.what, got, err, c.want)
		}
	}
	if _, err := readColumn(io.MultiReader(strings.NewReader("1\n2\n"), broken{}), column{}); err == nil {
		t.Error("a broken reader ends as if whole")
	}
}

type broken struct{}

func (broken) Read([]byte) (int, error) { return 0, errors.New("broken") }

// Lines of a million characters and rows with times land where they should.
func TestTimesIntoPlace(t *testing.T) {
	r := &row{name: "x"}
	n, err := readColumn(strings.NewReader("at,v\n2030-01-01T00:00:00Z,1\n2030-01-01T00:00:10.2Z,2\n2030-01-01T00:00:50Z,6\n2030-01-01T00:00:20+00:00,3\n"), column{name: "v", time: "at"})
	if err == nil {
		err = r.spread(n, 10)
	}
	if got := fmt.Sprint(r.values, len(r.notes)); err != nil || got != "[1 2 3 NaN NaN 6] 1" {
		t.Errorf("%s %v", got, err)
	}
	if _, err := readColumn(strings.NewReader(strings.Repeat("1", longestLine+70000)), column{}); err == nil {
		t.Error("a line without end was read")
	}
}

// A span of a journal with a gap, a lost count, a clock set back and a restart is
// judged as the same phases are directly.
func TestStabilityOfJournal(t *testing.T) {
	path := filepath.Join(t.TempDir(), "j.sqlite")
	j, err := journal.Open(path, journal.Options{})
	if err != nil {
		t.Fatal(err)
	}
	begin := time.Date(2030, 1, 2, 3, 0, 0, 500e6, time.UTC)
	j.Setup("counter", journal.Setup{Hookup: "two-tone", Sideband: "usb", CarrierHz: 10e6, LocalHz: 10e6, Input: "test"})
	rng := rand.New(rand.NewPCG(2, 2))
	var x []float64
	var run []int32
	phase, part := 0.0, int32(0)
	at, sound := begin, 0.5
	for i := range 2500 {
		r := dsp.Blank(sound, dsp.Apart)
		phase += 3.2 + 1e-3*rng.NormFloat64()
		r.Beat, r.BeatU, r.Phase, r.PhaseRun = 3.2, 1e-3, phase, int(part)
		switch i {
		case 400: // not held
			r = dsp.Blank(sound, dsp.Searching)
			r.PhaseRun = int(part)
		case 900:
			part++
			phase += 77
			r.Phase, r.PhaseRun = phase, int(part)
		case 1300: // the host's clock is put forward a minute
			at = at.Add(time.Minute)
		case 1800: // begun anew after 90 s
			part++
			at = at.Add(89 * time.Second)
			sound = 0.5
			r.T, r.PhaseRun = sound, int(part)
			for range 89 {
				x, run = append(x, math.NaN()), append(run, part)
			}
		}
		j.Append("counter", at, r)
		x, run = append(x, r.Phase/10e6), append(run, part)
		at, sound = at.Add(time.Second), sound+1
	}
	if err := j.Flush(context.Background()); err != nil {
		t.Fatal(err)
	}
	if err := j.Close(); err != nil {
		t.Fatal(err)
	}
	code, out, bad := judge(t, "", "--journal", path, "--from", "2030-01-02 03:00", "--to", "2030-01-03", "--json")
	if code != 0 || !strings.Contains(bad, "the host's clock was set in this span (1 time)") || !strings.Contains(bad, "began anew in this span: 1 time") {
		t.Fatal(code, bad)
	}
	lines := strings.Split(strings.TrimSpace(out), "\n")
	if len(lines) < 9 {
		t.Fatalf("%s", out)
	}
	for _, line := range lines[:len(lines)-1] {
		var got tauRow
		if err := json.Unmarshal([]byte(line), &got); err != nil {
			t.Fatal(err)
		}
		want, n := stability.Overlapping(x, run, 1, got.M)
		if got.N != n || math.Abs(float64(got.Oadev)/want-1) > 1e-9 {
			t.Errorf("m %d: %g of %d, want %g of %d", got.M, got.Oadev, got.N, want, n)
		}
	}
	if !strings.Contains(lines[len(lines)-1], `"begin":"2030-01-02T03:00:00Z"`) {
		t.Error(lines[len(lines)-1])
	}
	for _, c := range []struct {
		args []string
		want string
	}{
		{[]string{"--bench", "other"}, `there is no bench "other": it has counter`},
		{[]string{"--from", "2031-01-01", "--to", "2031-01-02"}, "bench counter has no reading from 2031-01-01T00:00:00Z to 2031-01-02T00:00:00Z"},
	} {
		code, _, bad := judge(t, "", append([]string{"--journal", path}, c.args...)...)
		if code != 2 || !strings.Contains(bad, c.want) {
			t.Errorf("%v: %d %s", c.args, code, bad)
		}
	}
	code, out, bad = judge(t, "", "--journal", path, "--kind", "frequency", "--from", "2030-01-02")
	if code != 0 || !strings.Contains(out, "Mean        3.2e-07") {
		t.Error(code, out, bad)
	}
}

// The picture is a picture, with a bar and a mark for every averaging time.
func TestStabilityPlot(t *testing.T) {
	dir := t.TempDir()
	for _, name := range []string{"a.svg", "a.png"} {
		file := filepath.Join(dir, name)
		if code, _, bad := judge(t, thousand(), "--kind", "frequency", "--plot", file, "-"); code != 0 {
			t.Fatal(bad)
		}
		f, err := os.Open(file)
		if err != nil {
			t.Fatal(err)
		}
		defer f.Close()
		if name == "a.png" {
			m, err := png.Decode(f)
			if err != nil || m.Bounds().Dx() < 600 {
				t.Fatal(m, err)
			}
			continue
		}
		words, teal := "", 0
		d := xml.NewDecoder(f)
		for {
			tok, err := d.Token()
			if err != nil {
				if !errors.Is(err, io.EOF) {
					t.Fatal(err)
				}
				break
			}
			switch e := tok.(type) {
			case xml.CharData:
				words += string(e) + "\n"
			case xml.StartElement:
				for _, a := range e.Attr {
					if e.Name.Local == "path" && strings.Contains(a.Value, "fill:#0B7A75") {
						teal++
					}
				}
			}
		}
		for _, w := range []string{"standard input", "averaging time, s", "Allan deviation, limits 68.3 %"} {
			if !strings.Contains(words, w) {
				t.Errorf("the picture does not say %q", w)
			}
		}
		if teal != 9 {
			t.Errorf("%d marks for 9 averaging times", teal)
		}
	}
	if code, _, bad := judge(t, thousand(), "--kind", "frequency", "--plot", filepath.Join(dir, "no", "a.svg"), "-"); code != 2 || !strings.Contains(bad, "no such file or directory") {
		t.Error(code, bad)
	}
}

// Whatever the text is, it gives numbers or one clear line; every value comes
// from a line; no infinity gets through.
func FuzzColumn(f *testing.F) {
	f.Add("t,y\n1,2\n", "y", "t")
	f.Add("1\n2\n-\ninf\n", "", "")
	f.Add("\"a\"\"b\";c\n1;2", "2", "")
	f.Add("2030-01-02T03:04:05Z 1e-9\n", "2", "1")
	f.Add("\ufeff# x\n\t\n,,\n", "1", "")
	f.Fuzz(func(t *testing.T, text, name, at string) {
		n, err := readColumn(strings.NewReader(text), column{name, at})
		if err != nil {
			if strings.TrimSpace(err.Error()) == "" || strings.Contains(err.Error(), "\n") {
				t.Errorf("unclear: %q", err)
			}
			return
		}
		if len(n.values) > strings.Count(text, "\n")+1 || at != "" && len(n.times) != len(n.values) {
			t.Errorf("%d values, %d times", len(n.values), len(n.times))
		}
		for _, v := range append(n.values, n.times...) {
			if math.IsInf(v, 0) {
				t.Error("infinite")
			}
		}
		for _, s := range n.notes {
			if strings.Contains(s, "\n") {
				t.Errorf("note of several lines: %q", s)
			}
		}
		if n.times != nil && len(n.times) < 100 {
			r := &row{name: "x"}
			if r.spread(n, 0) == nil && len(r.values) > 200*mostGaps {
				t.Errorf("%d places for %d readings", len(r.values), len(n.values))
			}
		}
	})
}
