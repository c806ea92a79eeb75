package main

import (
	"bufio"
	"bytes"
	"fmt"
	"io"
	"net/http"
	"os"
	"os/exec"
	"path/filepath"
	"regexp"
	"strconv"
	"strings"
	"sync"
	"syscall"
	"testing"
	"time"
)

// The test binary is the program too, when this variable says so: the tests
// below start it as a process of its own.
const asProgram = "OFFBEAT_TEST_AS_PROGRAM"

func TestMain(m *testing.M) {
	if os.Getenv(asProgram) != "" {
		main()
	}
	os.Exit(m.Run())
}

// program returns the command to start the program with.
func program(t testing.TB, args ...string) *exec.Cmd {
	t.Helper()
	self, err := os.Executable()
	if err != nil {
		t.Fatal(err)
	}
	cmd := exec.Command(self, args...)
	cmd.Env = append(os.Environ(), asProgram+"=1")
	return cmd
}

// running is a daemon under test.
type running struct {
	t                    *testing.T
	cmd                  *exec.Cmd
	page, metrics, store string
	mu                   sync.Mutex
	log                  bytes.Buffer
}

func (r *running) Write(p []byte) (int, error) {
	r.mu.Lock()
	defer r.mu.Unlock()
	return r.log.Write(p)
}

func (r *running) logged() string {
	r.mu.Lock()
	defer r.mu.Unlock()
	return r.log.String()
}

// start starts a daemon on a free port and reads what it announces.
func start(t *testing.T, args ...string) *running {
	t.Helper()
	r := &running{t: t, cmd: program(t, append([]string{"run", "--listen", "127.0.0.1:0"}, args...)...)}
	r.cmd.Stderr = r
	out, err := r.cmd.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := r.cmd.Start(); err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		r.cmd.Process.Kill()
		r.cmd.Wait()
		if t.Failed() {
			t.Logf("log of the daemon:\n%s", r.logged())
		}
	})
	lines := bufio.NewScanner(out)
	for r.store == "" && lines.Scan() {
		name, value, _ := strings.Cut(lines.Text(), " ")
		value = strings.TrimSpace(value)
		switch name {
		case "page":
			r.page = value
		case "metrics":
			r.metrics = value
		case "journal":
			r.store = value
		}
	}
	if r.store == "" {
		t.Fatalf("it did not start:\n%s", r.logged())
	}
	go io.Copy(io.Discard, out)
	return r
}

// get returns the body of a page of the daemon.
func (r *running) get(path string) (code int, body string) {
	resp, err := http.Get(strings.TrimSuffix(r.page, "/") + path)
	if err != nil {
		r.t.Fatal(err)
	}
	defer resp.Body.Close()
	b, err := io.ReadAll(resp.Body)
	if err != nil {
		r.t.Fatal(err)
	}
	return resp.StatusCode, string(b)
}

// value returns a metric, by its name and labels as they are written.
func (r *running) value(series string) (float64, bool) {
	_, body := r.get("/metrics")
	m := regexp.MustCompile(`(?m)^` + regexp.QuoteMeta(series) + ` (\S+)$`).FindStringSubmatch(body)
	if m == nil {
		return 0, false
	}
	v, err := strconv.ParseFloat(m[1], 64)
	if err != nil {
		r.t.Fatal(err)
	}
	return v, true
}

// until waits for something to become true.
func (r *running) until(what string, ok func() bool) {
	r.t.Helper()
	for deadline := time.Now().Add(20 * time.Second); !ok(); time.Sleep(50 * time.Millisecond) {
		if time.Now().After(deadline) {
			_, ready := r.get("/readyz")
			r.t.Fatalf("waited in vain for %s; readyz: %s", what, ready)
		}
	}
}

// above waits until a metric exceeds a value.
func (r *running) above(series string, least float64) {
	r.t.Helper()
	r.until(fmt.Sprintf("%s > %v", series, least), func() bool { v, ok := r.value(series); return ok && v > least })
}

func (r *running) signal(s os.Signal) {
	r.t.Helper()
	if err := r.cmd.Process.Signal(s); err != nil {
		r.t.Fatal(err)
	}
}

// stop ends the daemon with a signal and wants a clean end.
func (r *running) stop() {
	r.t.Helper()
	r.signal(syscall.SIGTERM)
	done := make(chan error, 1)
	go func() { done <- r.cmd.Wait() }()
	select {
	case err := <-done:
		if err != nil {
			r.t.Errorf("it ended with %v", err)
		}
	case <-time.After(15 * time.Second):
		r.t.Fatal("it did not end on SIGTERM")
	}
}

func writeConfig(t *testing.T, path, text string) {
	t.Helper()
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
}

// tone writes a recording long enough to play through a test.
func tone(t *testing.T, name string, seconds float64) string {
	return put(t, name, scene{rate: 8000, seconds: seconds, carrier: 1000, local: 1003.2, noise: 0.01}.wav())
}

func mkfifo(t *testing.T) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "audio")
	if err := syscall.Mkfifo(path, 0o600); err != nil {
		t.Skip("SKIPPED: no FIFO can be made here: ", err)
	}
	return path
}

// Without a configuration the daemon shows a beat of the simulated bench within
// 15 s, in its metrics and in its journal, and ends cleanly.
func TestDaemonSimulated(t *testing.T) {
	journal := filepath.Join(t.TempDir(), "state", "a.sqlite")
	r := start(t, "--journal", journal)
	if r.store != journal {
		t.Errorf("the journal is said to be %s", r.store)
	}
	began := time.Now()
	r.until("a beat", func() bool { _, ok := r.value(`offbeat_beat_hertz{bench="counter"}`); return ok })
	if d := time.Since(began); d > 15*time.Second {
		t.Errorf("it took %v", d)
	}
	if v, _ := r.value(`offbeat_beat_hertz{bench="counter"}`); v < 3 || v > 3.4 {
		t.Errorf("the beat is %v, want about 3.2", v)
	}
	if code, body := r.get("/readyz"); code != 200 {
		t.Errorf("readyz: %d %s", code, body)
	}
	if code, body := r.get("/"); code != 200 || !strings.Contains(body, "counter") {
		t.Errorf("page: %d %.200s", code, body)
	}
	counted := 0.0
	for _, state := range []string{"silent", "searching", "lone", "apart", "merged", "unsure"} {
		v, _ := r.value(`offbeat_readings_total{bench="counter",state="` + state + `"}`)
		counted += v
	}
	r.stop()
	rows := readJournal(t, journal)
	if len(rows) < int(counted) {
		t.Errorf("%d readings in the journal, and %v were counted before the end", len(rows), counted)
	}
	beats := 0
	for i, row := range rows {
		if row.bench != "counter" {
			t.Errorf("a reading of bench %q", row.bench)
		}
		if i > 0 && (row.at <= rows[i-1].at || row.at > rows[i-1].at+1500) {
			t.Errorf("reading %d is at %d ms, the one before at %d ms", i, row.at, rows[i-1].at)
		}
		if row.known && row.beat > 3 && row.beat < 3.4 {
			beats++
		}
	}
	if beats == 0 {
		t.Error("no beat in the journal")
	}
}

// SIGHUP applies what has changed, and a bad configuration changes nothing.
func TestDaemonReload(t *testing.T) {
	a, b := tone(t, "a.wav", 120), tone(t, "b.wav", 120)
	file := filepath.Join(t.TempDir(), "offbeat.yaml")
	bench := func(name, recording, more string) string {
		return fmt.Sprintf("  - {name: %s, input: {kind: recording, file: %s}%s}\n", name, recording, more)
	}
	head := "journal: {file: " + filepath.Join(t.TempDir(), "a.sqlite") + "}\nbenches:\n"
	writeConfig(t, file, head+bench("counter", a, "")+bench("generator", b, ""))
	r := start(t, "--config", file)
	counter, generator := `offbeat_samples_total{bench="counter"}`, `offbeat_samples_total{bench="generator"}`
	r.above(counter, 8000)
	r.above(generator, 8000)

	writeConfig(t, file, head+bench("counter", a, "")+bench("counter", b, ""))
	r.signal(syscall.SIGHUP)
	ok := `offbeat_config_last_reload_successful`
	r.until("the bad configuration to be refused", func() bool { v, known := r.value(ok); return known && v == 0 })
	r.until("a word on what is wrong", func() bool { return strings.Contains(r.logged(), "names must differ") })
	v, _ := r.value(generator)
	r.above(generator, v)

	writeConfig(t, file, head+bench("counter", a, "")+bench("house-reference", b, ", wired: true"))
	v, _ = r.value(counter)
	r.signal(syscall.SIGHUP)
	r.above(`offbeat_samples_total{bench="house-reference"}`, 8000)
	if _, there := r.value(generator); there {
		t.Error("the bench that was taken out is still there")
	}
	if now, _ := r.value(counter); now < v {
		t.Errorf("the bench that had not changed began anew: %v after %v samples", now, v)
	}
	if v, _ := r.value(ok); v != 1 {
		t.Errorf("reload successful: %v", v)
	}
	r.stop()
}

// A FIFO whose writer dies: the bench says silent, the other one runs on, and
// the next writer is heard.
func TestDaemonPipe(t *testing.T) {
	fifo := mkfifo(t)
	file := filepath.Join(t.TempDir(), "offbeat.yaml")
	journal := filepath.Join(t.TempDir(), "a.sqlite")
	writeConfig(t, file, fmt.Sprintf(`
journal: {file: %s}
benches:
  - name: counter
    input: {kind: pipe, path: %s, format: s16le, rate: 8000}
    local_tone: 1003Hz
  - name: generator
    input: {kind: recording, file: %s}
  - name: house-reference
    input: {kind: recording, file: /nonexistent/a.wav}
`, journal, fifo, tone(t, "b.wav", 120)))
	r := start(t, "--config", file)
	r.until("a word on the missing file", func() bool {
		code, body := r.get("/readyz")
		return code == 503 && strings.Contains(body, "house-reference: /nonexistent/a.wav")
	})
	sound := s16(scene{rate: 8000, seconds: 4, carrier: 1000, local: 1003.2, noise: 0.01}.samples())
	write := func() {
		w, err := os.OpenFile(fifo, os.O_WRONLY, 0)
		if err != nil {
			t.Fatal(err)
		}
		defer w.Close()
		if _, err := w.Write(sound); err != nil {
			t.Fatal(err)
		}
	}
	state := func(s string) string { return `offbeat_state{bench="counter",state="` + s + `"}` }
	write()
	r.above(`offbeat_samples_total{bench="counter"}`, 31999)
	r.until("the counter to be silent", func() bool { v, ok := r.value(state("silent")); return ok && v == 1 })
	v, _ := r.value(`offbeat_samples_total{bench="generator"}`)
	r.above(`offbeat_samples_total{bench="generator"}`, v)
	apart, _ := r.value(`offbeat_readings_total{bench="counter",state="apart"}`)
	write()
	r.above(`offbeat_readings_total{bench="counter",state="apart"}`, apart)
	if v, _ := r.value(`offbeat_samples_total{bench="counter"}`); v != 64000 {
		t.Errorf("%v samples were heard, want 64000", v)
	}
	r.stop()
}

// What stops the daemon from starting is one line and exit code 2.
func TestDaemonCannotStart(t *testing.T) {
	journal := filepath.Join(t.TempDir(), "a.sqlite")
	r := start(t, "--journal", journal)
	_, port, _ := strings.Cut(strings.TrimPrefix(r.page, "http://"), ":")
	port = strings.TrimSuffix(port, "/")
	bad := put(t, "bad.yaml", []byte("benches: []\n"))
	occupied := put(t, "file", nil)
	locked := filepath.Join(t.TempDir(), "locked.sqlite")
	lockDatabase(t, locked)
	for _, c := range []struct {
		name string
		args []string
		want string
	}{
		{"port in use", []string{"--listen", "127.0.0.1:" + port, "--journal", journal + "2"}, "in use"},
		{"journal in use", []string{"--listen", "127.0.0.1:0", "--journal", journal}, "a.sqlite"},
		{"journal is a directory", []string{"--listen", "127.0.0.1:0", "--journal", t.TempDir()}, "a directory: name a file in it"},
		{"journal locked by another program", []string{"--listen", "127.0.0.1:0", "--journal", locked}, "locked"},
		{"journal is something else", []string{"--listen", "127.0.0.1:0", "--journal", put(t, "notes.txt", bytes.Repeat([]byte("as found\n"), 200))}, "not an offbeat journal"},
		{"journal below a file", []string{"--listen", "127.0.0.1:0", "--journal", filepath.Join(occupied, "a.sqlite")}, "not a directory"},
		{"bad configuration", []string{"--config", bad}, bad + ":1:10: benches is empty"},
		{"no configuration", []string{"--config", "/nonexistent"}, "no such file"},
		{"bench flags with a configuration", []string{"--config", bad, "--carrier", "5MHz"}, "--carrier describes a bench"},
		{"listening to all", []string{"--listen", "0.0.0.0:0"}, "other machines"},
		{"an argument", []string{"offbeat.yaml"}, "say --config FILE"},
		{"bad input", []string{"--input", "pipe:"}, "must be sim, sound, sound:NAME, pipe:PATH or a file"},
	} {
		t.Run(c.name, func(t *testing.T) {
			cmd := program(t, append([]string{"run"}, c.args...)...)
			var errs bytes.Buffer
			cmd.Stderr = &errs
			timer := time.AfterFunc(20*time.Second, func() { cmd.Process.Kill() })
			defer timer.Stop()
			err := cmd.Run()
			if code := cmd.ProcessState.ExitCode(); code != 2 {
				t.Errorf("exit %d (%v)", code, err)
			}
			last := strings.TrimSuffix(errs.String(), "\n")
			if strings.Contains(last, "\n") || !strings.HasPrefix(last, "offbeat run: ") || !strings.Contains(last, c.want) {
				t.Errorf("stderr %q, want one line with %q", last, c.want)
			}
		})
	}
	r.stop()
}

// A second signal ends at once what does not end by itself; one is enough for
// measure to give the summary of what it has heard of a pipe.
func TestMeasureInterrupted(t *testing.T) {
	fifo := mkfifo(t)
	cmd := program(t, "measure", "--json", "--format", "s16le", "--rate", "8000", "--local-tone", "1003", fifo)
	out, err := cmd.StdoutPipe()
	if err != nil {
		t.Fatal(err)
	}
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	defer cmd.Process.Kill()
	w, err := os.OpenFile(fifo, os.O_WRONLY, 0)
	if err != nil {
		t.Fatal(err)
	}
	defer w.Close()
	if _, err := w.Write(s16(scene{rate: 8000, seconds: 6, carrier: 1000, local: 1003.2, noise: 0.01}.samples())); err != nil {
		t.Fatal(err)
	}
	lines := bufio.NewReader(out)
	var all strings.Builder
	for range 5 { // a live pipe is not kept waiting for its readings
		line, err := lines.ReadString('\n')
		if err != nil {
			t.Fatal(err)
		}
		all.WriteString(line)
	}
	if err := cmd.Process.Signal(syscall.SIGINT); err != nil {
		t.Fatal(err)
	}
	rest, err := io.ReadAll(lines)
	if err != nil {
		t.Fatal(err)
	}
	if err := cmd.Wait(); err != nil {
		t.Errorf("it ended with %v", err)
	}
	p := parseJSON(t, all.String()+string(rest))
	if len(p.readings) < 5 || float64(p.summary.Beat) < 3.19 || float64(p.summary.Beat) > 3.21 {
		t.Errorf("%d readings, beat %v", len(p.readings), p.summary.Beat)
	}
}
