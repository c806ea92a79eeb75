package main

import (
	"math"
	"os"
	"reflect"
	"strings"
	"testing"

	"offbeat/capture/sim"
)

// fullScene has every field of sim.Config set, so that none can be forgotten.
func fullScene() sim.Config {
	return sim.Config{Rate: 8000, Seed: 7, Hookup: "quadrature", Sideband: "lsb", Baseband: true, Carrier: 5e6, Local: 5e6 + 2, Tone: 900,
		Offset: -1.25, Drift: 3e-7, LocalWhiteFM: 1e-11, LocalFlickerFM: 2e-12, LocalWalkFM: 3e-13, ReceiverDrift: 0.5, ReceiverWander: 1.5,
		CarrierDBFS: -25, LocalDBFS: -22, CarrierCN0: 48, Passband: [2]float64{250, 2600}, White: true,
		Channel: "custom", SpreadHz: 0.2, PathDelay: 0.0015, PathShift: -0.3, RiceK: 4,
		SecondPulses: true, Tones: true, Subcarrier: true, Speech: true, Depth: 0.8, AGC: true, AGCAttack: 0.004, AGCDecay: 0.7, DC: 0.01,
		ClockError: 1e-5, DropEvery: 60, DropFor: 0.3, Duration: 20,
		CarrierAway: [][2]float64{{3, 4.5}, {9, 10}}, LocalAway: [][2]float64{{6, 7}}, Retunes: []sim.Step{{At: 8, By: 40}},
		Trims: []sim.Turn{{At: 2, By: -4, Over: 10}, {At: 15, By: 0.1}}, Spurs: []sim.Spur{{Hz: 150, DBFS: -40}}}
}

// What a simSpec says of a scene is all of it: a field that sim.Config gains
// must be passed on, or be named here.
func TestSimSpecHoldsTheScene(t *testing.T) {
	want := fullScene()
	v := reflect.ValueOf(want)
	for i := range v.NumField() {
		if name := v.Type().Field(i).Name; v.Field(i).IsZero() && name != "Pace" { // an input's opener chooses the pace
			t.Errorf("%s is not in the scene of this test", name)
		}
	}
	s := fromScene(want)
	got := s.scene()
	if math.Abs(got.Drift-want.Drift) > 1e-15*want.Drift {
		t.Errorf("drift %g, want %g", got.Drift, want.Drift)
	}
	got.Drift = want.Drift // it went by way of a fraction a day
	if !reflect.DeepEqual(got, want) {
		t.Errorf("got  %+v\nwant %+v", got, want)
	}
	if again := fromScene(got); again != s {
		t.Errorf("the same scene counts as another:\n%+v\n%+v", s, again)
	}
}

// simTexts is one text for every key, and what it must make of the scene.
var simTexts = []struct {
	key, text, yaml string // yaml: as it may stand in a configuration besides
	want            func(*sim.Config)
}{
	{"seed", "5", "", func(c *sim.Config) { c.Seed = 5 }},
	{"rate", "8kHz", "", func(c *sim.Config) { c.Rate = 8000 }},
	{"tone", "1.1kHz", "", func(c *sim.Config) { c.Tone = 1100 }},
	{"offset", "-50mHz", "", func(c *sim.Config) { c.Offset = -0.05 }},
	{"drift_per_day", "8.64ppb", "", func(c *sim.Config) { c.Drift = 8.64e-9 * 10e6 / 86400 }},
	{"white_fm", "1e-11", "", func(c *sim.Config) { c.LocalWhiteFM = 1e-11 }},
	{"flicker_fm", "2e-12", "", func(c *sim.Config) { c.LocalFlickerFM = 2e-12 }},
	{"walk_fm", "3e-13", "", func(c *sim.Config) { c.LocalWalkFM = 3e-13 }},
	{"receiver_drift", "-0.3Hz", "", func(c *sim.Config) { c.ReceiverDrift = -0.3 }},
	{"receiver_wander", "0.5", "", func(c *sim.Config) { c.ReceiverWander = 0.5 }},
	{"carrier_level", "-30dB", "", func(c *sim.Config) { c.CarrierDBFS = -30 }},
	{"local_level", "-40", "", func(c *sim.Config) { c.LocalDBFS = -40 }},
	{"carrier_cn0", "45 dB", "", func(c *sim.Config) { c.CarrierCN0 = 45 }},
	{"passband", "250Hz-2.6kHz", "[250, 2.6kHz]", func(c *sim.Config) { c.Passband = [2]float64{250, 2600} }},
	{"passband", "none", "", func(c *sim.Config) { c.White = true }},
	{"fading", "moderate", "", func(c *sim.Config) { c.Channel = "moderate" }},
	{"fading", "rice:2.50", "", func(c *sim.Config) { c.Channel, c.RiceK = "rice:2.5", 0 }},
	{"spread", "0.2Hz", "", func(c *sim.Config) { c.SpreadHz = 0.2 }},
	{"path_delay", "1.5ms", "0.0015 s", func(c *sim.Config) { c.PathDelay = 0.0015 }},
	{"path_shift", "-300mHz", "", func(c *sim.Config) { c.PathShift = -0.3 }},
	{"rice_k", "20", "", func(c *sim.Config) { c.RiceK = 20 }},
	{"depth", "0.5", "", func(c *sim.Config) { c.Depth = 0.5 }},
	{"pulses", "false", "", func(c *sim.Config) { c.SecondPulses = false }},
	{"tones", "false", "", func(c *sim.Config) { c.Tones = false }},
	{"subcarrier", "false", "", func(c *sim.Config) { c.Subcarrier = false }},
	{"speech", "false", "", func(c *sim.Config) { c.Speech = false }},
	{"agc", "true", "", func(c *sim.Config) { c.AGC = true }},
	{"agc_attack", "2ms", "", func(c *sim.Config) { c.AGCAttack = 0.002 }},
	{"agc_decay", "1.5s", "1500ms", func(c *sim.Config) { c.AGCDecay = 1.5 }},
	{"dc", "-0.05", "", func(c *sim.Config) { c.DC = -0.05 }},
	{"clock_error", "12.5ppm", "", func(c *sim.Config) { c.ClockError = 1.25e-5 }},
	{"drop_every", "10min", "", func(c *sim.Config) { c.DropEvery = 600 }},
	{"drop_for", "0.5s", "", func(c *sim.Config) { c.DropFor = 0.5 }},
	{"trim", "20s:-4Hz/30s, 2min:+.1", "[20s:-4Hz/30s, '2min: 100mHz']", func(c *sim.Config) { c.Trims = []sim.Turn{{At: 20, By: -4, Over: 30}, {At: 120, By: 0.1}} }},
	{"retune", "1min:+0.2kHz", "[60s:200]", func(c *sim.Config) { c.Retunes = []sim.Step{{At: 60, By: 200}} }},
	{"carrier_away", "60s-1.5min,1e2s-200s", "[60s-90s, 100s - 200s]", func(c *sim.Config) { c.CarrierAway = [][2]float64{{60, 90}, {100, 200}} }},
	{"local_away", "1e-3s-1d", "[0.001s-24h]", func(c *sim.Config) { c.LocalAway = [][2]float64{{0.001, 86400}} }},
	{"spur", "50:-40,1.2kHz:-6.5 dB", "[50Hz:-40dB, 1200:-6.5]", func(c *sim.Config) { c.Spurs = []sim.Spur{{Hz: 50, DBFS: -40}, {Hz: 1200, DBFS: -6.5}} }},
}

// Every key makes of the demonstration what its text says, and the same however
// it is written.
func TestSimKeys(t *testing.T) {
	tested := map[string]bool{}
	for _, c := range simTexts {
		tested[c.key] = true
		base := defaultSim
		want := base.scene()
		c.want(&want)
		in := func(value string) *inputSpec {
			root, err := parseYAML([]byte("kind: simulate\n" + c.key + ": " + value + "\n"))
			if err != nil {
				t.Fatalf("%s: %s: %v", c.key, value, err)
			}
			var in inputSpec
			if err := readInput(root, &in); err != nil {
				t.Fatalf("%s: %s: %v", c.key, value, err)
			}
			return &in
		}
		one := in(c.text)
		got := one.Sim.scene()
		if math.Abs(got.Drift-want.Drift) > 1e-12*math.Abs(want.Drift) {
			t.Errorf("%s: drift %g, want %g", c.text, got.Drift, want.Drift)
		}
		got.Drift = want.Drift
		if !reflect.DeepEqual(got, want) {
			t.Errorf("%s: %s:\ngot  %+v\nwant %+v", c.key, c.text, got, want)
		}
		if one.Sim == defaultSim {
			t.Errorf("%s: %s counts as no change", c.key, c.text)
		}
		if c.yaml == "" {
			continue
		}
		if other := in(c.yaml); *other != *one {
			t.Errorf("%s: %s and %s count as two inputs:\n%+v\n%+v", c.key, c.text, c.yaml, one.Sim, other.Sim)
		}
	}
	root, err := parseYAML([]byte("kind: simulate\ntrim: []\nspur: []\n"))
	if err != nil {
		t.Fatal(err)
	}
	var none inputSpec
	if err := readInput(root, &none); err != nil || none.Sim != defaultSim {
		t.Errorf("empty lists: %v, %+v", err, none.Sim)
	}
	for _, f := range simFields {
		if !tested[f.key] {
			t.Errorf("key %s is not tested", f.key)
		}
	}
}

// What is wrong is said in one line, with what is allowed.
func TestSimTextsThatAreWrong(t *testing.T) {
	for _, c := range []struct{ key, text, want string }{
		{"trim", "", `"": must be TIME:HZ`},
		{"trim", "20s", `"20s": must be TIME:HZ, or TIME:HZ/TIME`},
		{"trim", "20:-4Hz", `in "20:-4Hz": "20": a length of time is a number with s, min, h or d`},
		{"trim", "-20s:-4Hz", `a length of time must be 0 to 36525d`},
		{"trim", "20s:-4Hz/", `in "20s:-4Hz/": "": a length of time`},
		{"trim", "20s:-4dB/3s", `unknown unit "dB"`},
		{"trim", "20s:-4Hz/3s/3s", `"3s/3s": a length of time`},
		{"trim", "20s:1Hz,", `"": must be TIME:HZ`},
		{"trim", strings.Repeat("1s:1Hz,", maxItems) + "1s:1Hz", "1001 of them: at most 1000"},
		{"retune", "60s+200Hz", `"60s+200Hz": must be TIME:HZ: 60s:+200Hz moves`},
		{"retune", "60s:", `in "60s:": "" is not a number`},
		{"carrier_away", "60s", `"60s": must be TIME-TIME: 60s-90s is away`},
		{"carrier_away", "90s-60s", `in "90s-60s": it ends before it begins: write the earlier time first`},
		{"local_away", "60-90s", `in "60-90s": "60": a length of time`},
		{"local_away", "60s-60s", `it ends before it begins`},
		{"spur", "150Hz", `"150Hz": must be HZ:DB`},
		{"spur", "150Hz:-40dBm", `unknown unit "dBm"`},
		{"passband", "2700-300", `"2700-300": must rise from above 0 Hz, such as 300-2700, or be none`},
		{"passband", "0-2700", `must rise from above 0 Hz`},
		{"passband", "300", `must rise from above 0 Hz`},
		{"fading", "rice", `"rice": must be steady, quiet, moderate, disturbed, custom or rice:K with a number K`},
		{"fading", "rice:", `"rice:": must be rice: and a number from 0, such as rice:4`},
		{"fading", "rice:-1", `must be rice: and a number from 0`},
		{"path_delay", "2", `"2" has no unit: write the number with its unit, ms or s`},
		{"agc_attack", "0ms", `"0ms": 0 would stand for the default`},
		{"depth", "0", `"0": 0 would stand for the default`},
	} {
		for _, f := range simFields {
			if f.key != c.key {
				continue
			}
			err := f.set(new(simSpec), c.text)
			if err == nil || !strings.Contains(err.Error(), c.want) || strings.Contains(err.Error(), "\n") {
				t.Errorf("%s %.80q: got %v, want %s", c.key, c.text, err, c.want)
			}
		}
	}
}

// Scenes that are wrong as a whole are refused in the words of the flags.
func TestSimScenesThatAreWrong(t *testing.T) {
	for _, c := range []struct{ text, want string }{
		{"fading=rice:4 rice_k=5", "fading rice:4 names the Rice factor, and a rice k is given beside it"},
		{"fading=quiet spread=0.1Hz", "fading quiet has its own spread and paths"},
		{"fading=steady path_shift=0.1Hz", "fading steady has its own spread and paths"},
		{"fading=custom", "needs a spread above 0, such as 0.1Hz"},
		{"fading=custom path_delay=1ms", "needs a spread above 0, such as 0.1Hz"},
		{"fading=rice:4 path_delay=1ms", "needs a spread above 0, such as 0.1Hz"},
		{"path_delay=1ms", "needs a spread above 0, such as 0.1Hz"},
		{"rice_k=4", "is steady, which has no rice k"},
		{"spread=16Hz", "spread 16: must be 0 to 15"},
		{"trim=1s:2MHz", "turn 2e+06: must be"},
		{"fading=custom spread=0.1Hz", ""},
		{"spread=0.1Hz rice_k=4", ""},
		{"fading=rice:4 spread=0.1Hz path_delay=1ms path_shift=0.2Hz", ""},
		{"rice_k=5 fading=rice:4", ""}, // as with any flag, the later one stands
		{"fading=disturbed rice_k=4", ""},
	} {
		var s simSpec
		for field := range strings.FieldsSeq(c.text) {
			key, text, _ := strings.Cut(field, "=")
			for _, f := range simFields {
				if f.key == key {
					if err := f.set(&s, text); err != nil {
						t.Fatalf("%s: %v", field, err)
					}
				}
			}
		}
		err := s.check()
		if c.want == "" && err != nil || c.want != "" && (err == nil || !strings.Contains(err.Error(), c.want)) {
			t.Errorf("%s: got %v, want %q", c.text, err, c.want)
		}
	}
}

// What the example configuration shows in comments can be used as it stands.
func TestSimExample(t *testing.T) {
	all, err := os.ReadFile("../../deploy/offbeat.example.yaml")
	if err != nil {
		t.Fatal(err)
	}
	_, shown, ok := strings.Cut(string(all), "  # - name: demo\n")
	if !ok {
		t.Fatal("the example has no simulated bench")
	}
	var b strings.Builder
	b.WriteString("benches:\n  - name: demo\n")
	for line := range strings.Lines(shown) {
		if rest := strings.TrimPrefix(line, "  # "); strings.HasPrefix(rest, " ") || strings.HasPrefix(rest, "- ") {
			b.WriteString("  " + rest)
		}
	}
	c, err := parseConfig([]byte(b.String()))
	if err != nil {
		t.Fatalf("%v in\n%s", err, b.String())
	}
	demo, practice := c.Benches[0].Input.Sim, c.Benches[1].Input.Sim.scene()
	want := defaultSim
	want.follow(&c.Benches[0])
	if demo != want {
		t.Errorf("demo is not the demonstration: %+v", demo)
	}
	if len(practice.Trims) != 2 || len(practice.Spurs) != 2 || len(practice.CarrierAway) != 2 || len(practice.Retunes) != 1 || practice.Channel != "rice:4" {
		t.Errorf("practice is %+v", practice)
	}
}

// What is read from any text is written so that it reads as the same, and what
// cannot be read is refused in one short line.
func FuzzSimList(f *testing.F) {
	for _, c := range simTexts {
		f.Add(c.text)
	}
	for _, s := range []string{"20s:-4Hz/30s", ",", "1e-3s-2e-1s", "1e-300s:1e-300Hz", "0s:-0Hz", "36525d:5µHz/0.3ns", "1s:1Hz/1s,1s-2s", "0\x1d\x19\x16\x00" + strings.Repeat("0\u0098\x03", 20) + ":", "1e308s:5e-324Hz/1e-9s", "\x80:", "--", "1:-2"} {
		f.Add(s)
	}
	f.Fuzz(func(t *testing.T, text string) {
		roundTrip(t, text, trimItem)
		roundTrip(t, text, retuneItem)
		roundTrip(t, text, awayItem)
		roundTrip(t, text, spurItem)
		for _, f := range simFields {
			var s simSpec
			if err := f.set(&s, text); err != nil {
				if m := err.Error(); strings.ContainsAny(m, "\n\r") || len(m) > 1000 { // single quantities have a target of their own
					t.Errorf("%s %q: the error is not one short line: %q", f.key, text, m)
				}
				continue
			}
			scene := s.scene()
			if again := fromScene(scene); !near(again.DriftPerDay, s.DriftPerDay) {
				t.Errorf("%s %q: drift %g, then %g", f.key, text, s.DriftPerDay, again.DriftPerDay)
			} else if again.DriftPerDay = s.DriftPerDay; again != s {
				t.Errorf("%s %q: another scene:\n%+v\n%+v", f.key, text, s, again)
			}
			checkParsed(t, text, s.check()) // it may be out of range, but is said so, and nothing breaks
		}
	})
}

// near allows for the rounding of a quotient, also of the smallest numbers.
func near(a, b float64) bool { return math.Abs(a-b) <= 1e-12*math.Abs(b)+1e-300 }

func roundTrip[T comparable](t *testing.T, text string, kind itemKind[T]) {
	t.Helper()
	items, err := kind.list(text)
	if err != nil {
		checkParsed(t, text, err)
		return
	}
	known := kind.text(items)
	again := kind.known(known)
	if !reflect.DeepEqual(again, items) || kind.text(again) != known {
		t.Errorf("%q: %v, by %q %v", text, items, known, again)
	}
}
