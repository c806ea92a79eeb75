package journal

import (
	"bufio"
	"context"
	"database/sql"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"reflect"
	"strings"
	"testing"
	"time"

	"offbeat/dsp"
)

var begin = time.Date(2030, 1, 2, 3, 4, 5, 500e6, time.UTC)

// sample is a plausible reading of second i.
func sample(i int) dsp.Reading {
	r := dsp.Blank(float64(i)+0.5, dsp.Apart)
	r.Beat = 3.2 + 1e-3*math.Sin(float64(i))
	r.BeatAbs, r.Error, r.BeatU = r.Beat, r.Beat, 0.00123
	r.Offset, r.OffsetU = r.Error/10e6, r.BeatU/10e6
	r.CarrierTone, r.LocalTone = 1000.123456+1e-4*float64(i), 1003.323456
	r.CarrierDBFS, r.LocalDBFS, r.CarrierCN0, r.LocalCN0 = -20.12, -18.34, 55.67, 57.01
	r.Span, r.Phase, r.InputDBFS = 1, 3.2*float64(i)+0.25, -12.5
	r.Flags = []dsp.Flag{dsp.Unproven}
	return r
}

func open(t testing.TB, path string, opt Options) *Journal {
	t.Helper()
	j, err := Open(path, opt)
	if err != nil {
		t.Fatal(err)
	}
	return j
}

func flush(t testing.TB, j *Journal) {
	t.Helper()
	ctx, cancel := context.WithTimeout(context.Background(), 20*time.Second)
	defer cancel()
	if err := j.Flush(ctx); err != nil {
		t.Fatal(err)
	}
}

func readings(t testing.TB, r *Reader, bench string) []Row {
	t.Helper()
	var out []Row
	err := r.Readings(context.Background(), bench, time.Unix(0, 0), time.Date(2100, 1, 1, 0, 0, 0, 0, time.UTC), func(x Row) error {
		out = append(out, x)
		return nil
	})
	if err != nil {
		t.Fatal(err)
	}
	return out
}

func same(a, b dsp.Reading) bool {
	a.Why, b.Why = "", ""
	return fmt.Sprintf("%+v", a) == fmt.Sprintf("%+v", b)
}

// Every value and every state, flag and unknown comes back as it was given.
func TestRoundTrip(t *testing.T) {
	j := open(t, filepath.Join(t.TempDir(), "deep", "er", "j.sqlite"), Options{})
	defer j.Close()
	j.Setup("counter", Setup{"two-tone", "usb", 10e6, 10e6, "a test"})
	var want []dsp.Reading
	for i, s := range dsp.States {
		r := dsp.Blank(float64(i)+0.5, s)
		r.PhaseRun = i
		want = append(want, r)
	}
	r := sample(len(want))
	r.Flags = dsp.Flags
	want = append(want, r)
	r = dsp.Blank(float64(len(want))+0.5, dsp.Unsure)
	r.BeatAbs, r.BeatU = 2.5, 0.001
	want = append(want, r)
	for i, r := range want {
		j.Append("counter", begin.Add(time.Duration(i)*time.Second), r)
	}
	j.Event("counter", begin, Turn, "+1/8", map[string]float64{"turns": 0.125})
	j.Event("", begin.Add(time.Second), Start, "", nil)
	flush(t, j)
	got := readings(t, j.Reader(), "counter")
	if len(got) != len(want) {
		t.Fatalf("%d readings, want %d", len(got), len(want))
	}
	for i := range want {
		if want[i].Flags == nil {
			want[i].Flags = got[i].Reading.Flags[:0:0]
			got[i].Reading.Flags = got[i].Reading.Flags[:0:0]
		}
		g, w := got[i].Reading, want[i]
		if math.Abs(g.Offset-w.Offset) < 1e-20 {
			g.Offset, g.OffsetU = w.Offset, w.OffsetU
		}
		if !same(g, w) || !got[i].At.Equal(begin.Add(time.Duration(i)*time.Second)) {
			t.Errorf("reading %d:\n%+v\n%+v", i, g, w)
		}
	}
	ev, err := j.Reader().Events(context.Background(), "counter", begin, begin.Add(time.Hour))
	if err != nil || len(ev) != 2 || ev[0].Kind != Turn || string(ev[0].Data) != `{"turns":0.125}` || ev[1].Bench != "" {
		t.Errorf("%+v %v", ev, err)
	}
	if b, err := j.Reader().Benches(context.Background()); err != nil || !reflect.DeepEqual(b, []string{"counter"}) {
		t.Errorf("%v %v", b, err)
	}
}

// Any SQLite tool reads it while it is written: here Debian's sqlite3.
func TestForeignReader(t *testing.T) {
	prog, err := exec.LookPath("sqlite3")
	if err != nil {
		t.Skip("SKIPPED: sqlite3 (Debian package) is not installed: no foreign tool read the journal")
	}
	path := filepath.Join(t.TempDir(), "j.sqlite")
	j := open(t, path, Options{})
	defer j.Close()
	j.Setup("counter", Setup{"two-tone", "usb", 10e6, 10e6 + 100, "a test"})
	for i := range 100 {
		r := sample(i)
		r.Beat = 103
		j.Append("counter", begin.Add(time.Duration(i)*time.Second), r)
	}
	flush(t, j)
	out, err := exec.Command(prog, "-readonly", path, "PRAGMA integrity_check; SELECT count(*), max(error_hz), max(state), max(flags), min(time) FROM readable;").CombinedOutput()
	if err != nil || string(out) != "ok\n100|3.0|apart|unproven|2030-01-02T03:04:05.500Z\n" {
		t.Errorf("%v\n%s", err, out)
	}
}

func TestOneWriter(t *testing.T) {
	path := filepath.Join(t.TempDir(), "j.sqlite")
	j := open(t, path, Options{})
	if _, err := Open(path, Options{}); err == nil || !strings.Contains(err.Error(), "another offbeat is writing it") || strings.Contains(err.Error(), "\n") {
		t.Error(err)
	}
	if err := j.Close(); err != nil {
		t.Fatal(err)
	}
	open(t, path, Options{}).Close()
}

func TestRefusals(t *testing.T) {
	dir := t.TempDir()
	text := filepath.Join(dir, "text")
	os.WriteFile(text, []byte(strings.Repeat("not a database at all ", 100)), 0o644)
	newer := filepath.Join(dir, "newer.sqlite")
	open(t, newer, Options{}).Close()
	db, _ := sql.Open("sqlite", newer)
	db.Exec("PRAGMA user_version = 99")
	db.Close()
	for path, want := range map[string]string{
		text: "it is not an offbeat journal", newer: "written by a newer offbeat", "/proc/no/j.sqlite": "no such file", dir: "is a directory",
	} {
		j, err := Open(path, Options{})
		if err == nil {
			j.Close()
			t.Errorf("%s: accepted", path)
			continue
		}
		if path == dir {
			want = "" // whatever SQLite calls it
		}
		if !strings.Contains(err.Error(), want) || strings.Contains(err.Error(), "\n") || !strings.HasPrefix(err.Error(), "journal "+path) {
			t.Errorf("%s: %v", path, err)
		}
	}
}

// A journal of schema 1 is brought up to date with all it holds.
func TestMigration(t *testing.T) {
	path := filepath.Join(t.TempDir(), "j.sqlite")
	db, err := sql.Open("sqlite", path)
	if err != nil {
		t.Fatal(err)
	}
	if _, err := db.Exec(migrations[0] + `PRAGMA user_version = 1; INSERT INTO benches VALUES (1, 'old'); INSERT INTO setups VALUES (1,1,0,'two-tone','usb',10e6,10e6,'x');
		INSERT INTO readings (bench, t, setup, state, flags, beat, run, clipped, sound_ms) VALUES (1, 1000, 1, 3, 0, 1.5, 0, 0, 500);`); err != nil {
		t.Fatal(err)
	}
	db.Close()
	r, err := OpenReadOnly(path) // which changes nothing
	if err != nil {
		t.Fatal(err)
	}
	if got := readings(t, r, "old"); len(got) != 1 || got[0].Reading.Beat != 1.5 || got[0].Setup.Input != "x" {
		t.Errorf("read as it is: %+v", got)
	}
	if _, _, ok, err := r.MinutesExtent(context.Background(), "old", time.Time{}, begin); ok || err != nil {
		t.Errorf("minutes of a schema without: %v %v", ok, err)
	}
	r.Close()
	j := open(t, path, Options{})
	defer j.Close()
	got := readings(t, j.Reader(), "old")
	if len(got) != 1 || got[0].Reading.Beat != 1.5 || got[0].Reading.State != dsp.Apart {
		t.Errorf("%+v", got)
	}
	var n int
	if err := j.ro.QueryRow("SELECT count(*) FROM minutes").Scan(&n); err != nil {
		t.Error(err)
	}
}

// The host's clock set back by an hour: nothing is lost.
func TestClockSetBack(t *testing.T) {
	j := open(t, filepath.Join(t.TempDir(), "j.sqlite"), Options{})
	defer j.Close()
	for range 2 {
		for i := range 100 {
			j.Append("counter", begin.Add(time.Duration(i)*time.Second), sample(i))
		}
	}
	flush(t, j)
	if got := readings(t, j.Reader(), "counter"); len(got) != 200 {
		t.Errorf("%d readings of 200", len(got))
	}
}

// While another program holds the journal, and while the disk is full, readings
// wait; then they are written.
func TestBusy(t *testing.T) {
	path := filepath.Join(t.TempDir(), "j.sqlite")
	j := open(t, path, Options{Every: 50 * time.Millisecond})
	defer j.Close()
	flush(t, j)
	db, _ := sql.Open("sqlite", path)
	defer db.Close()
	db.SetMaxOpenConns(1)
	if _, err := db.Exec("BEGIN IMMEDIATE"); err != nil {
		t.Fatal(err)
	}
	for i := range 10 {
		j.Append("counter", begin.Add(time.Duration(i)*time.Second), sample(i))
	}
	time.Sleep(2500 * time.Millisecond)
	if s := j.Stats(); s.Errors == 0 || s.Pending != 10 || s.LastError == "" {
		t.Errorf("while held: %+v", s)
	}
	if _, err := db.Exec("ROLLBACK"); err != nil {
		t.Fatal(err)
	}
	flush(t, j)
	if s := j.Stats(); s.Pending != 0 || s.LastError != "" {
		t.Errorf("after: %+v", s)
	}
	if got := readings(t, j.Reader(), "counter"); len(got) != 10 {
		t.Errorf("%d readings of 10", len(got))
	}
}

func TestDiskFull(t *testing.T) {
	dir := t.TempDir()
	if out, err := exec.Command("mount", "-t", "tmpfs", "-o", "size=4m", "tmpfs", dir).CombinedOutput(); err != nil {
		t.Skipf("SKIPPED: no small file system can be mounted here, so a full disk was not tried: %s", out)
	}
	defer exec.Command("umount", "-l", dir).Run()
	path := filepath.Join(dir, "j.sqlite")
	j := open(t, path, Options{Every: 20 * time.Millisecond, Waiting: 3000})
	flush(t, j)
	ballast := filepath.Join(dir, "ballast")
	os.WriteFile(ballast, make([]byte, 8<<20), 0o644) // takes what there is
	i := 0
	for ; i < 3500; i++ {
		j.Append("counter", begin.Add(time.Duration(i)*time.Second), sample(i))
	}
	time.Sleep(300 * time.Millisecond)
	s := j.Stats()
	if s.Errors == 0 || s.Dropped == 0 || !strings.Contains(s.LastError, "full") {
		t.Errorf("with a full disk: %+v", s)
	}
	if err := os.Remove(ballast); err != nil {
		t.Fatal(err)
	}
	flush(t, j)
	got := readings(t, j.Reader(), "counter")
	if int64(len(got)) != 3500-s.Dropped {
		t.Errorf("%d readings, %d were given up of 3500", len(got), s.Dropped)
	}
	ev, err := j.Reader().Events(context.Background(), "", time.Unix(0, 0), time.Now().Add(time.Hour))
	if err != nil || len(ev) != 1 || ev[0].Kind != Gap || string(ev[0].Data) != fmt.Sprintf(`{"rows":%d}`, s.Dropped) {
		t.Errorf("the loss is not told: %+v %v", ev, err)
	}
	if err := j.Close(); err != nil {
		t.Error(err)
	}
}

// Killed at a random moment under load, every acknowledged reading is there
// once, and the next run tells of the break.
func TestKill(t *testing.T) {
	if path := os.Getenv("OFFBEAT_KILLED_JOURNAL"); path != "" {
		killed(path)
	}
	seed := uint64(time.Now().UnixNano())
	t.Logf("seed %d", seed)
	r := rand.New(rand.NewPCG(seed, 0))
	path := filepath.Join(t.TempDir(), "j.sqlite")
	acked, total := 0, 0
	const rounds = 12
	for round := range rounds {
		cmd := exec.Command(os.Args[0], "-test.run=^TestKill$")
		cmd.Env = append(os.Environ(), "OFFBEAT_KILLED_JOURNAL="+path, fmt.Sprintf("OFFBEAT_KILLED_FROM=%d", total))
		out, err := cmd.StdoutPipe()
		if err != nil {
			t.Fatal(err)
		}
		if err := cmd.Start(); err != nil {
			t.Fatal(err)
		}
		lines := bufio.NewScanner(out)
		if !lines.Scan() {
			t.Fatal("the child said nothing")
		}
		go func() {
			time.Sleep(time.Duration(20+r.IntN(200)) * time.Millisecond)
			cmd.Process.Kill()
		}()
		ack := 0
		for ok := true; ok; ok = lines.Scan() {
			fmt.Sscan(lines.Text(), &ack)
		}
		cmd.Wait()
		acked = total + ack
		j := open(t, path, Options{})
		got := readings(t, j.Reader(), "counter")
		if len(got) < acked {
			t.Errorf("round %d: %d readings, %d were acknowledged", round, len(got), acked)
		}
		for i, g := range got {
			if g.Reading.T != float64(i)+0.5 {
				t.Fatalf("round %d: reading %d is of %v", round, i, g.Reading.T)
			}
		}
		var ok string
		if err := j.ro.QueryRow("PRAGMA integrity_check").Scan(&ok); err != nil || ok != "ok" {
			t.Errorf("round %d: integrity %s %v", round, ok, err)
		}
		flush(t, j)
		ev, err := j.Reader().Events(context.Background(), "", time.Unix(0, 0), time.Now().Add(time.Hour))
		if err != nil || len(ev) != round+1 || ev[round].Kind != Restart {
			t.Errorf("round %d: %d events %v", round, len(ev), err)
		}
		total = len(got)
		if err := j.Close(); err != nil {
			t.Fatal(err)
		}
	}
	t.Logf("%d kills, %d readings, %d acknowledged before the last kill, none lost", rounds, total, acked)
}

// killed writes until it is killed, telling how many rows are safe.
func killed(path string) {
	from := 0
	fmt.Sscan(os.Getenv("OFFBEAT_KILLED_FROM"), &from)
	j, err := Open(path, Options{})
	if err != nil {
		fmt.Println(err)
		os.Exit(1)
	}
	fmt.Println(0)
	for i := from; ; i++ {
		j.Append("counter", begin.Add(time.Duration(i)*time.Second), sample(i))
		if i%37 == 0 {
			if err := j.Flush(context.Background()); err == nil {
				fmt.Println(i + 1 - from)
			}
		}
	}
}

// A reader that takes its time does not keep the writer's log from being folded
// in: within a page nothing is held.
func TestSlowReader(t *testing.T) {
	path := filepath.Join(t.TempDir(), "j.sqlite")
	j := open(t, path, Options{})
	defer j.Close()
	put := func(from, n int) {
		for i := range n {
			j.Append("counter", begin.Add(time.Duration(from+i)*time.Second), sample(from+i))
		}
		flush(t, j)
	}
	put(0, 3*pageRows)
	r, err := OpenReadOnly(path)
	if err != nil {
		t.Fatal(err)
	}
	defer r.Close()
	n := 0
	err = r.Readings(context.Background(), "counter", begin, begin.Add(time.Hour*24), func(row Row) error {
		if row.Reading.T != float64(n)+0.5 {
			t.Fatalf("reading %d is of %v", n, row.Reading.T)
		}
		if n++; n == pageRows+pageRows/2 {
			put(3*pageRows, 10)
			var busy, logged, folded int
			if err := j.db.QueryRow("PRAGMA wal_checkpoint(TRUNCATE)").Scan(&busy, &logged, &folded); err != nil || busy != 0 {
				t.Errorf("the log cannot be folded in: %d %v", busy, err)
			}
		}
		return nil
	})
	if err != nil || n != 3*pageRows+10 {
		t.Errorf("%d readings, %v", n, err)
	}
}

// Old seconds become minutes: nothing of them is unaccounted for, and it is
// told.
func TestThinning(t *testing.T) {
	path := filepath.Join(t.TempDir(), "j.sqlite")
	j := open(t, path, Options{ThinAfter: time.Hour})
	defer j.Close()
	const n = 3 * 3600
	last := begin.Add(n * time.Second)
	for i := range n {
		r := sample(i)
		if i%10 == 0 {
			r = dsp.Blank(r.T, dsp.Lone)
		}
		j.Append("counter", begin.Add(time.Duration(i)*time.Second), r)
	}
	flush(t, j)
	j.thin(last)
	rest := readings(t, j.Reader(), "counter")
	if len(rest) < 3600 || len(rest) > 3660 {
		t.Errorf("%d seconds are left of the last hour", len(rest))
	}
	var rows, seconds, usable, lone int
	var lo, hi, mean float64
	err := j.ro.QueryRow(`SELECT count(*), sum(n), sum(usable), min(beat_min), max(beat_max), avg(beat_mean), sum(json_extract(states, '$[2]')) FROM minutes`).
		Scan(&rows, &seconds, &usable, &lo, &hi, &mean, &lone)
	if err != nil {
		t.Fatal(err)
	}
	if seconds+len(rest) != n || usable != seconds*9/10 || lone != seconds-usable || math.Abs(lo-3.199) > 1e-6 || math.Abs(hi-3.201) > 1e-6 || math.Abs(mean-3.2) > 1e-4 {
		t.Errorf("%d minutes: %d seconds, %d usable, %d lone, beat %v to %v, mean %v; %d seconds left", rows, seconds, usable, lone, lo, hi, mean, len(rest))
	}
	var p0, p1 float64
	var t0, t1 int64
	if err := j.ro.QueryRow("SELECT first_phase, first_phase_t, last_phase, last_phase_t FROM minutes ORDER BY t LIMIT 1 OFFSET 5").Scan(&p0, &t0, &p1, &t1); err != nil {
		t.Fatal(err)
	}
	if got := (p1 - p0) / float64(t1-t0) * 1000; math.Abs(got-3.2) > 1e-9 {
		t.Errorf("phase of a minute grows by %v cycles a second", got)
	}
	got, inStates := Minute{}, 0
	err = j.Reader().Minutes(context.Background(), "counter", time.Unix(0, 0), last, func(m Minute) error {
		if got.Seconds++; got.Seconds == 6 {
			got.Beat, got.FirstPhase, got.LastPhase, got.FirstPhaseAt, got.LastPhaseAt = m.Beat, m.FirstPhase, m.LastPhase, m.FirstPhaseAt, m.LastPhaseAt
		}
		got.Usable += m.Usable
		for _, n := range m.States {
			inStates += n
		}
		return nil
	})
	if err != nil || got.Seconds != rows || got.Usable != usable || inStates != seconds || math.Abs(got.Beat-3.2) > 1e-3 ||
		got.FirstPhase != p0 || got.LastPhase != p1 || got.FirstPhaseAt.UnixMilli() != t0 || got.LastPhaseAt.UnixMilli() != t1 {
		t.Errorf("read as minutes: %d with %d usable and %d in states, %+v, %v", got.Seconds, got.Usable, inStates, got, err)
	}
	first, end, ok, err := j.Reader().MinutesExtent(context.Background(), "counter", time.Unix(0, 0), last)
	if err != nil || !ok || !first.Equal(begin.Truncate(time.Minute)) || end.Sub(first) != time.Duration(rows-1)*time.Minute {
		t.Errorf("minutes from %v to %v, %v %v", first, end, ok, err)
	}
	ev, err := j.Reader().Events(context.Background(), "counter", time.Unix(0, 0), time.Now().Add(time.Hour))
	if err != nil || len(ev) == 0 || ev[0].Kind != Thinned {
		t.Errorf("thinning was not told: %+v %v", ev, err)
	}
}

// A day of one bench: what it costs on disk.
func TestBytesADay(t *testing.T) {
	path := filepath.Join(t.TempDir(), "j.sqlite")
	j := open(t, path, Options{Waiting: 1 << 20})
	r := rand.New(rand.NewPCG(1, 1))
	for i := range 86400 / 4 {
		s := sample(i)
		s.Beat += r.NormFloat64() * 1e-3
		s.BeatU *= 1 + r.Float64()
		s.CarrierTone += r.NormFloat64() * 1e-3
		s.LocalTone += r.NormFloat64() * 1e-3
		j.Append("counter", begin.Add(time.Duration(i)*time.Second), s)
	}
	flush(t, j)
	if err := j.Close(); err != nil {
		t.Fatal(err)
	}
	fi, err := os.Stat(path)
	if err != nil {
		t.Fatal(err)
	}
	day := float64(fi.Size()) * 4 / 1e6
	t.Logf("%.1f MB a day and bench, %.0f bytes a reading", day, float64(fi.Size())/(86400/4))
	if day > 10 {
		t.Errorf("%.1f MB a day", day)
	}
}

// One day out of a month.
func BenchmarkDay(b *testing.B) {
	path := filepath.Join(b.TempDir(), "j.sqlite")
	j := open(b, path, Options{Waiting: 4 << 20})
	defer j.Close()
	const n = 1_000_000
	for i := range n {
		j.Append("counter", begin.Add(time.Duration(i)*time.Second), sample(i))
	}
	ctx := context.Background()
	if err := j.Flush(ctx); err != nil {
		b.Fatal(err)
	}
	from := begin.Add(5 * 24 * time.Hour)
	for b.Loop() {
		rows := 0
		if err := j.Reader().Readings(ctx, "counter", from, from.Add(24*time.Hour), func(Row) error { rows++; return nil }); err != nil || rows != 86400 {
			b.Fatal(rows, err)
		}
	}
}
