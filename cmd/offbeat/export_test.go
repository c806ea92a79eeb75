package main

import (
	"bytes"
	"context"
	"database/sql"
	"encoding/json"
	"fmt"
	"io"
	"os"
	"os/exec"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"offbeat/dsp"
	"offbeat/metrics/journal"
)

func TestParseTime(t *testing.T) {
	now := time.Date(2030, 3, 1, 9, 30, 15, 250e6, time.FixedZone("", 3600)) // 08:30:15.25 UTC
	for in, want := range map[string]string{
		"2030-01-02":                "2030-01-02T00:00:00Z",
		"2030-01-02 18:00":          "2030-01-02T18:00:00Z",
		"2030-01-02 18:00:05":       "2030-01-02T18:00:05Z",
		"2030-01-02T18:00":          "2030-01-02T18:00:00Z",
		"2030-01-02T18:00:05":       "2030-01-02T18:00:05Z",
		"2030-01-02T18:00:05Z":      "2030-01-02T18:00:05Z",
		"2030-01-02T18:00:05+02:00": "2030-01-02T16:00:05Z",
		"2030-01-02T18:00:05.125Z":  "2030-01-02T18:00:05.125Z",
		"2030-01-02 18:00:05Z":      "2030-01-02T18:00:05Z",
		" now ":                     "2030-03-01T08:30:15.25Z",
		"today":                     "2030-03-01T00:00:00Z",
		"today 06:00":               "2030-03-01T06:00:00Z",
		"yesterday":                 "2030-02-28T00:00:00Z",
		"yesterday 18:00":           "2030-02-28T18:00:00Z",
		"-12h":                      "2030-02-28T20:30:15.25Z",
		"-1.5 d":                    "2030-02-27T20:30:15.25Z",
		"-90min":                    "2030-03-01T07:00:15.25Z",
		"-0s":                       "2030-03-01T08:30:15.25Z",
	} {
		got, err := parseTime(in, now)
		if err != nil || got.Format(time.RFC3339Nano) != want {
			t.Errorf("%q: %v %v, want %s", in, got, err, want)
		}
	}
	for _, in := range []string{"", "-", "--1h", "12h", "18:00", "2030-02-30", "2030-1-2", "yesterday 25:00", "yesterday at six", "tomorrow", "now 12:00",
		"2030-01-02T18:00:05+25:00", "1893621600", "-12", "-12 parsec", "2030-01-02T18:00:60Z", "-99999999d", "today\n06:00"} {
		if got, err := parseTime(in, now); err == nil || strings.Contains(err.Error(), "\n") {
			t.Errorf("%q: %v %v", in, got, err)
		}
	}
}

// What is understood is a time in UTC that reads back as itself; what is not
// gives one line.
func FuzzParseTime(f *testing.F) {
	for _, s := range []string{"2030-01-02", "2030-01-02T18:00:05.125+02:00", "yesterday 18:00", "-12h", "now", "-1e9d", "today ", "0000-01-01", "\x00"} {
		f.Add(s)
	}
	now := time.Date(2030, 3, 1, 9, 30, 15, 0, time.UTC)
	f.Fuzz(func(t *testing.T, s string) {
		got, err := parseTime(s, now)
		if err != nil {
			if strings.ContainsAny(err.Error(), "\n\r") {
				t.Errorf("%q: %q", s, err)
			}
			return
		}
		again, err := parseTime(got.Format(time.RFC3339Nano), now.Add(time.Hour))
		if err != nil || !again.Equal(got) || got.Location() != time.UTC {
			// A zone can lead out of the four-digit years.
			if y := got.Year(); y >= 0 && y <= 9999 {
				t.Errorf("%q: %v, then %v %v", s, got, again, err)
			}
		}
	})
}

// A journal with a night of 200 s and an event, from 2030-01-02 22:00 on.
func smallNight(t testing.TB) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "night.sqlite")
	night(t, path, time.Date(2030, 1, 2, 22, 0, 0, 500e6, time.UTC), 200)
	return path
}

// Every way to use it wrongly, and every unreadable journal, is one clear line
// and leaves nothing behind.
func TestExportRefusals(t *testing.T) {
	good := smallNight(t)
	dir := t.TempDir()
	file := func(name, content string) string {
		p := filepath.Join(dir, name)
		if err := os.WriteFile(p, []byte(content), 0o600); err != nil {
			t.Fatal(err)
		}
		return p
	}
	alter := func(name, statement string) string {
		b, err := os.ReadFile(good)
		if err != nil {
			t.Fatal(err)
		}
		p := file(name, string(b))
		db, err := sql.Open("sqlite", p)
		if err != nil {
			t.Fatal(err)
		}
		defer db.Close()
		if _, err := db.Exec(statement); err != nil {
			t.Fatal(err)
		}
		return p
	}
	empty := filepath.Join(dir, "empty.sqlite")
	j, err := journal.Open(empty, journal.Options{})
	if err != nil {
		t.Fatal(err)
	}
	j.Close()
	exists := file("exists.csv", "mine")
	out := filepath.Join(dir, "out")
	for _, c := range []struct {
		args string // journal, then flags
		code int
		want string
	}{
		{good + "|--from|2030-01-03|--to|2030-01-02", 2, "--from 2030-01-03T00:00:00.000Z is not before --to 2030-01-02T00:00:00.000Z"},
		{good + "|--from|noon", 2, `--from: "noon": a time is 2030-01-02`},
		{good + "|--format|xml", 2, `--format: "xml": must be csv, jsonl or openmetrics`},
		{good + "|--what|dreams", 2, "must be readings, minutes or events"},
		{good + "|--what|events|--format|openmetrics", 2, "--format openmetrics is for readings"},
		{good + "|--every|10s", 2, "--every is for --format openmetrics"},
		{good + "|--every|10ms|--format|openmetrics", 2, "a length of time"},
		{good + "|--every|0.5s|--format|openmetrics", 2, "must be at least 1s"},
		{good + "|--label|job=a", 2, "--label is for --format openmetrics"},
		{good + "|--label|job", 2, "must be NAME=VALUE"},
		{good + "|--label|__x=a", 2, "must be NAME=VALUE"},
		{good + "|--label|bench=a", 2, "have a label bench of their own"},
		{good + "|--label|a=", 2, "the value is empty"},
		{good + "|--label|a=1|--label|a=2", 2, "was given before"},
		{good + "|--force", 2, "--force is for -o FILE"},
		{good + "|stray", 2, `"stray": say -o FILE`},
		{good + "|--bench|house-reference", 2, "--bench house-reference: the journal " + good + " holds counter"},
		{good + "|--from|2031-01-01", 1, "holds no readings of counter from 2031-01-01T00:00:00Z; those of counter go from 2030-01-02T22:00:00Z to 2030-01-02T22:03:19Z"},
		{good + "|--what|minutes", 1, "holds no minutes of counter; from 2030-01-02T22:00:00Z to 2030-01-02T22:03:19Z there are the seconds of counter themselves"},
		{good + "|--what|events|--to|2030-01-01", 1, "holds no events before 2030-01-01T00:00:00Z"},
		{empty, 1, "holds no readings yet"},
		{empty + "|--bench|counter", 2, "holds no bench yet"},
		{filepath.Join(dir, "none.sqlite"), 2, "none.sqlite: no such file or directory: choose another file with --journal"},
		{dir, 2, "a directory: name a file in it"},
		{file("text", strings.Repeat("not a database ", 200)), 2, "it is not an offbeat journal"},
		{file("nothing", ""), 2, "it is not an offbeat journal"},
		{alter("newer.sqlite", "PRAGMA user_version = 99"), 2, "written by a newer offbeat (schema 99, this one knows 2): upgrade"},
		{alter("foreign.sqlite", "DROP TABLE events; DROP VIEW readable; DROP TABLE readings; DROP TABLE setups; DROP TABLE benches"), 2, "no such table"},
		{alter("lost.sqlite", "PRAGMA foreign_keys = OFF; DELETE FROM setups"), 2, "setup 1, which a reading refers to"},
		{good + "|-o|" + exists, 2, "exists.csv exists: choose another name, or overwrite it with --force"},
		{good + "|-o|" + dir, 2, "a directory: name a file in it"},
		{good + "|-o|" + filepath.Join(dir, "no", "such"), 2, "no such file or directory"},
	} {
		flags := strings.Split(c.args, "|")
		if !strings.Contains(c.args, "|-o|") && c.want != "--force is for -o FILE" {
			flags = append(flags, "-o", out)
		}
		code, stdout, stderr := runMain(append([]string{"export", "--journal"}, flags...)...)
		if code != c.code || stdout != "" || !strings.Contains(stderr, c.want) || strings.Count(stderr, "\n") != 1 {
			t.Errorf("%s: exit %d, %q, %q; want %q", c.args, code, stdout, stderr, c.want)
		}
		if _, err := os.Stat(out); err == nil {
			t.Fatalf("%s: a file was left", c.args)
		}
	}
	if b, _ := os.ReadFile(exists); string(b) != "mine" {
		t.Errorf("the file that existed holds %q", b)
	}
}

// A journal damaged in its middle: what went before it came out, on standard
// output; a file is not kept, and one to be replaced stays.
func TestExportDamaged(t *testing.T) {
	path := filepath.Join(t.TempDir(), "night.sqlite")
	night(t, path, time.Date(2030, 1, 2, 22, 0, 0, 500e6, time.UTC), 6000)
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	copy(b[len(b)*7/10/4096*4096:], bytes.Repeat([]byte{0xa5}, 4096)) // a page
	if err := os.WriteFile(path, b, 0o600); err != nil {
		t.Fatal(err)
	}
	code, stdout, stderr := runMain("export", "--journal", path)
	if code != 2 || !strings.Contains(stderr, "or it is damaged") || strings.Count(stderr, "\n") != 1 {
		t.Errorf("%d %q", code, stderr)
	}
	if n := strings.Count(stdout, "\r\n"); n < 1000 || n >= 6000 || !strings.HasSuffix(stdout, "\r\n") {
		t.Errorf("%d rows came before the damage", n)
	}
	out := put(t, "old.csv", []byte("of before"))
	if code, _, _ := runMain("export", "--journal", path, "-o", out, "--force"); code != 2 {
		t.Error(code)
	}
	if b, _ := os.ReadFile(out); string(b) != "of before" {
		t.Errorf("the file to be replaced holds %.20q", b)
	}
	if left, _ := os.ReadDir(filepath.Dir(out)); len(left) != 1 {
		t.Errorf("left behind: %v", left)
	}
}

// Files are written whole, replaced only on demand, and the same as standard
// output. Flags choose benches and span; notes go to standard error.
func TestExportFiles(t *testing.T) {
	path := smallNight(t)
	out := filepath.Join(t.TempDir(), "a.csv")
	if code, stdout, stderr := runMain("export", "--journal", path, "-o", out); code != 0 || stdout+stderr != "" {
		t.Fatal(code, stdout, stderr)
	}
	_, want, _ := runMain("export", "--journal", path)
	if got, _ := os.ReadFile(out); string(got) != want || strings.Count(want, "\r\n") != 201 {
		t.Errorf("the file differs from standard output, or has not 201 lines: %.300s", got)
	}
	if err := os.Chmod(out, 0o640); err != nil {
		t.Fatal(err)
	}
	if code, _, stderr := runMain("export", "--journal", path, "-o", out, "--force", "--from", "2030-01-02 22:01", "--to", "2030-01-02T22:01:10Z", "--format", "jsonl"); code != 0 {
		t.Fatal(stderr)
	}
	got, _ := os.ReadFile(out)
	if bytes.Count(got, []byte("\n")) != 10 || !bytes.HasPrefix(got, []byte(`{"time":"2030-01-02T22:01:00.500Z","bench":"counter","t":60.5,"state":"apart","beat_hz":3.2`)) {
		t.Errorf("%.300s", got)
	}
	if info, err := os.Stat(out); err != nil || info.Mode().Perm() != 0o640 {
		t.Errorf("its mode is not that of before: %v %v", info.Mode(), err)
	}
	if _, events, _ := runMain("export", "--journal", path, "--what", "events"); events != "time,bench,kind,text,data\r\n2030-01-02T22:00:00.500Z,counter,note,the night begins,\r\n" {
		t.Errorf("%q", events)
	}
	// A second bench, silent in this span, is told of.
	j, err := journal.Open(path, journal.Options{})
	if err != nil {
		t.Fatal(err)
	}
	j.Append("generator", time.Date(2030, 2, 1, 0, 0, 0, 0, time.UTC), dsp.Blank(0.5, dsp.Silent))
	j.Close()
	code, stdout, stderr := runMain("export", "--journal", path, "--to", "2030-01-03")
	if code != 0 || stdout != want || stderr != "offbeat export: note: no readings of generator before 2030-01-03T00:00:00Z\n" {
		t.Error(code, stderr)
	}
	if _, stdout, stderr := runMain("export", "--journal", path, "--bench", "generator"); strings.Count(stdout, "\r\n") != 2 || stderr != "" {
		t.Error(stdout, stderr)
	}
}

// Old seconds that became minutes are pointed to, and come out as minutes.
func TestExportMinutes(t *testing.T) {
	path := smallNight(t)
	db, err := sql.Open("sqlite", path)
	if err != nil {
		t.Fatal(err)
	}
	at := time.Date(2029, 1, 2, 22, 0, 0, 0, time.UTC).UnixMilli()
	if _, err := db.Exec(`INSERT INTO minutes VALUES (1, ?1, 1, 60, 54, 3.25, 3.125, 3.5, 3.25, 0.001, NULL, 1003.25, NULL, -1825, NULL, 5550, NULL,
		0.25, ?1+500, 190.75, ?1+59500, 2, 3, -1250, 7, '[0,0,6,54,0,0]', '[0,0,0,0,0,0,60]')`, at); err != nil {
		t.Fatal(err)
	}
	db.Close()
	if code, stdout, stderr := runMain("export", "--journal", path); code != 0 || strings.Count(stdout, "\n") != 201 ||
		!strings.Contains(stderr, "note: from 2029-01-02T22:00:00Z to 2029-01-02T22:00:00Z the seconds of counter were thinned to minutes: --what minutes has them") {
		t.Error(code, stderr)
	}
	if code, _, stderr := runMain("export", "--journal", path, "--to", "2030-01-01"); code != 1 || !strings.Contains(stderr, "--what minutes has them") {
		t.Error(code, stderr)
	}
	_, table, stderr := runMain("export", "--journal", path, "--what", "minutes")
	const want = "2029-01-02T22:00:00.000Z,counter,60,54,1e+07,1e+07,3.25,3.125,3.5,3.25,0.001,,1003.25,,-18.25,,55.5,,-12.5,0.25,2029-01-02T22:00:00.500Z,190.75,2029-01-02T22:00:59.500Z,2,3,7,lone:6 apart:54,unproven:60"
	if rows := strings.Split(table, "\r\n"); len(rows) != 3 || rows[1] != want || strings.Count(rows[0], ",") != strings.Count(rows[1], ",") || stderr != "" {
		t.Errorf("%s\n%s", table, stderr)
	}
	_, object, _ := runMain("export", "--journal", path, "--what", "minutes", "--format", "jsonl")
	var m map[string]any
	if err := json.Unmarshal([]byte(object), &m); err != nil {
		t.Fatal(err)
	}
	for _, name := range strings.Split(strings.SplitN(table, "\r\n", 2)[0], ",") {
		if _, ok := m[name]; !ok {
			t.Errorf("the key %s is missing: %s", name, object)
		}
	}
	if m["carrier_tone_hz"] != nil || m["beat_hz"] != 3.25 || fmt.Sprint(m["state_seconds"]) != "map[apart:54 lone:6]" || m["last_phase_time"] != "2029-01-02T22:00:59.500Z" {
		t.Error(object)
	}
}

// Whoever reads the output may go away at any time: that is no error, of the
// real program with a real pipe.
func TestExportBrokenPipe(t *testing.T) {
	path := filepath.Join(t.TempDir(), "night.sqlite")
	night(t, path, time.Date(2030, 1, 2, 22, 0, 0, 500e6, time.UTC), 6000)
	for _, format := range []string{"csv", "jsonl", "openmetrics"} {
		spool := t.TempDir()
		cmd := program(t, "export", "--journal", path, "--format", format)
		cmd.Env = append(cmd.Env, "TMPDIR="+spool)
		var errs bytes.Buffer
		cmd.Stderr = &errs
		out, err := cmd.StdoutPipe()
		if err != nil {
			t.Fatal(err)
		}
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		if _, err := io.ReadFull(out, make([]byte, 100)); err != nil {
			t.Fatal(err)
		}
		out.Close()
		if err := cmd.Wait(); err != nil || errs.Len() > 0 {
			t.Errorf("%s: %v %s", format, err, errs.String())
		}
		if left, _ := os.ReadDir(spool); len(left) > 0 {
			t.Errorf("%s: left behind: %v", format, left)
		}
	}
	// A full disk is an error.
	if full, err := os.OpenFile("/dev/full", os.O_WRONLY, 0); err == nil {
		defer full.Close()
		var errs bytes.Buffer
		if code := run(context.Background(), []string{"export", "--journal", path}, nil, full, &errs); code != 2 || !strings.Contains(errs.String(), "no space left on device") {
			t.Error(code, errs.String())
		}
	}
}

// SIGTERM in the middle ends it with nothing left behind.
func TestExportInterrupted(t *testing.T) {
	path := filepath.Join(t.TempDir(), "night.sqlite")
	night(t, path, time.Date(2030, 1, 2, 22, 0, 0, 500e6, time.UTC), 6000)
	fifo := filepath.Join(t.TempDir(), "out")
	if err := syscall.Mkfifo(fifo, 0o600); err != nil {
		t.Skipf("SKIPPED: no FIFO can be made here: %v", err)
	}
	cmd := program(t, "export", "--journal", path, "-o", fifo)
	var errs bytes.Buffer
	cmd.Stderr = &errs
	if err := cmd.Start(); err != nil {
		t.Fatal(err)
	}
	in, err := os.Open(fifo) // it is written from here on, and waits when the pipe is full
	if err != nil {
		t.Fatal(err)
	}
	if _, err := io.ReadFull(in, make([]byte, 100)); err != nil {
		t.Fatal(err)
	}
	cmd.Process.Signal(syscall.SIGTERM)
	time.Sleep(100 * time.Millisecond)
	rest, _ := io.ReadAll(in)
	err = cmd.Wait()
	if cmd.ProcessState.ExitCode() != 2 || !strings.Contains(errs.String(), "interrupted") || !bytes.HasSuffix(rest, []byte("\n")) {
		t.Errorf("%v %q, the output ends with %.40q", err, errs.String(), rest[max(0, len(rest)-40):])
	}
}

// While a daemon writes, every export holds whole rows, without a second missing
// or twice, and never fewer than the one before.
func TestExportWhileWritten(t *testing.T) {
	path := filepath.Join(t.TempDir(), "live.sqlite")
	j, err := journal.Open(path, journal.Options{Every: 20 * time.Millisecond})
	if err != nil {
		t.Fatal(err)
	}
	stop, done := make(chan struct{}), make(chan int)
	go func() {
		begin := time.Date(2030, 1, 2, 22, 0, 0, 0, time.UTC)
		for i := 0; ; i++ {
			select {
			case <-stop:
				done <- i
				return
			case <-time.After(200 * time.Microsecond):
			}
			j.Append("counter", begin.Add(time.Duration(i)*time.Second), dsp.Blank(float64(i)+0.5, dsp.Lone))
		}
	}()
	before := 0
	for range 15 {
		time.Sleep(50 * time.Millisecond)
		code, stdout, stderr := runMain("export", "--journal", path, "--format", "jsonl")
		if code == 1 {
			continue // nothing was committed yet
		}
		if code != 0 {
			t.Fatal(code, stderr)
		}
		n := 0
		for line := range strings.Lines(stdout) {
			var r dsp.Reading
			if err := json.Unmarshal([]byte(line), &r); err != nil || r.T != float64(n)+0.5 {
				t.Fatalf("row %d: %v %q", n, err, line)
			}
			n++
		}
		if n < before {
			t.Errorf("%d rows after %d", n, before)
		}
		before = n
		code, stdout, stderr = runMain("export", "--journal", path, "--format", "openmetrics")
		if code != 0 || !strings.HasSuffix(stdout, "\n# EOF\n") {
			t.Fatal(code, stderr)
		}
		if lone, ups := strings.Count(stdout, `state="lone"}`), strings.Count(stdout, "offbeat_bench_up{"); lone != ups || lone < n {
			t.Errorf("%d seconds of one family, %d of another, %d before", lone, ups, n)
		}
	}
	close(stop)
	total := <-done
	if err := j.Close(); err != nil {
		t.Fatal(err)
	}
	if _, stdout, _ := runMain("export", "--journal", path, "--format", "jsonl"); strings.Count(stdout, "\n") != total {
		t.Errorf("%d rows of %d in the end", strings.Count(stdout, "\n"), total)
	}
	if before == 0 {
		t.Error("nothing was exported while it was written")
	}
}

// A journal closed in order can be exported from a read-only medium, where
// SQLite cannot make its index beside it.
func TestExportReadOnlyMedium(t *testing.T) {
	path := smallNight(t)
	dir := t.TempDir()
	os.Remove(path + "-shm")
	os.Remove(path + "-wal")
	if out, err := exec.Command("sh", "-c", `mount --bind "$1" "$2" && mount -o remount,ro,bind "$2"`, "sh", filepath.Dir(path), dir).CombinedOutput(); err != nil {
		t.Skipf("SKIPPED: nothing can be mounted here, so a read-only medium was not tried: %s", out)
	}
	defer exec.Command("umount", "-l", dir).Run()
	code, stdout, stderr := runMain("export", "--journal", filepath.Join(dir, "night.sqlite"))
	if code != 0 || strings.Count(stdout, "\n") != 201 {
		t.Errorf("%d %q", code, stderr)
	}
}

// Memory stays flat: five times the readings take hardly more. With OFFBEAT_LONG
// it is a million.
func TestExportMemory(t *testing.T) {
	sizes := []int{10_000, 50_000}
	if os.Getenv("OFFBEAT_LONG") != "" {
		sizes[1] = 1_000_000
	}
	if _, err := os.Stat("/proc/self/status"); err != nil {
		t.Skip("SKIPPED: there is no /proc here to read memory from")
	}
	peak := map[string][]int64{}
	for _, n := range sizes {
		path := filepath.Join(t.TempDir(), "night.sqlite")
		night(t, path, time.Date(2030, 1, 2, 22, 0, 0, 500e6, time.UTC), n)
		for _, format := range []string{"csv", "jsonl", "openmetrics"} {
			cmd := program(t, "export", "--journal", path, "--format", format)
			began := time.Now()
			if err := cmd.Start(); err != nil {
				t.Fatal(err)
			}
			ended := make(chan error, 1)
			go func() { ended <- cmd.Wait() }()
			kib := highWater(t, cmd.Process.Pid, ended)
			took := time.Since(began).Seconds()
			peak[format] = append(peak[format], kib)
			t.Logf("%-11s %7d readings: %6d KiB, %.2f s, %.0f readings a second", format, n, kib, took, float64(n)/took)
		}
	}
	for format, kib := range peak {
		if kib[1] > kib[0]+8<<10 {
			t.Errorf("%s: %d KiB for %d readings, %d KiB for %d", format, kib[0], sizes[0], kib[1], sizes[1])
		}
	}
}

// highWater watches the largest resident size of a process, KiB, until it ends.
// What wait4 tells would count the memory of its parent before exec.
func highWater(t *testing.T, pid int, ended <-chan error) (kib int64) {
	t.Helper()
	for {
		if b, err := os.ReadFile(fmt.Sprintf("/proc/%d/status", pid)); err == nil {
			if _, rest, ok := strings.Cut(string(b), "VmHWM:"); ok {
				var now int64
				fmt.Sscan(rest, &now)
				kib = max(kib, now)
			}
		}
		select {
		case err := <-ended:
			if err != nil {
				t.Fatal(err)
			}
			return kib
		case <-time.After(2 * time.Millisecond):
		}
	}
}
