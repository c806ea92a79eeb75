package main

import (
	"context"
	"errors"
	"io"
	"math"
	"slices"
	"strings"
	"sync"
	"testing"
	"time"

	"offbeat/capture"
	"offbeat/dsp"
)

// script is a Source that plays a list of steps: blocks, pauses and an end.
type script struct {
	format capture.Format
	steps  []step
	at     int64
	end    error
	mu     sync.Mutex
	closed bool
	pace   time.Duration // Read takes at least this long
}

// step is a block of n samples after lost ones; n == 0: nothing arrives.
type step struct {
	n, lost int
	cause   capture.Cause
}

func (s *script) Format() capture.Format { return s.format }

func (s *script) Read(b *capture.Block) error {
	b.Reset(s.format.Channels)
	time.Sleep(s.pace)
	if len(s.steps) == 0 {
		return s.end
	}
	st := s.steps[0]
	s.steps = s.steps[1:]
	s.at += int64(st.lost)
	b.First, b.Lost, b.Cause = s.at, int64(st.lost), st.cause
	for c := range b.Ch {
		for i := range st.n {
			// Tones of 1000 and 1003.2 Hz, 6 dB lower on each further channel.
			t := float64(s.at+int64(i)) / s.format.Rate
			v := 0.2*math.Sin(2*math.Pi*1000*t) + 0.2*math.Sin(2*math.Pi*1003.2*t)
			b.Ch[c] = append(b.Ch[c], float32(v/float64(int(1)<<c)))
		}
	}
	s.at += int64(st.n)
	return nil
}

func (s *script) Close() error {
	s.mu.Lock()
	defer s.mu.Unlock()
	s.closed = true
	return nil
}

// notebook is a listener that writes everything down.
type notebook struct {
	mu       sync.Mutex
	got      []dsp.Reading
	at       []time.Time
	gaps     map[capture.Cause]int64
	heard    int
	troubles []string
	backs    int
	openings int
	slow     time.Duration
	onRead   func(n int)
}

func (n *notebook) opened(capture.Format, dsp.Config) { n.mu.Lock(); n.openings++; n.mu.Unlock() }
func (n *notebook) samples(k, _ int) {
	n.mu.Lock()
	n.heard += k
	n.mu.Unlock()
	time.Sleep(n.slow)
}
func (n *notebook) gap(_ time.Time, c capture.Cause, k int64) {
	n.mu.Lock()
	defer n.mu.Unlock()
	if n.gaps == nil {
		n.gaps = map[capture.Cause]int64{}
	}
	n.gaps[c] += k
}
func (n *notebook) reading(at time.Time, r dsp.Reading) {
	n.mu.Lock()
	n.got, n.at = append(n.got, r), append(n.at, at)
	k := len(n.got)
	n.mu.Unlock()
	if n.onRead != nil {
		n.onRead(k)
	}
}
func (n *notebook) glimpse(time.Time, dsp.Glimpse) {}
func (n *notebook) back(time.Time, time.Duration)  { n.mu.Lock(); n.backs++; n.mu.Unlock() }
func (n *notebook) idle()                          {}
func (n *notebook) trouble(err error) {
	n.mu.Lock()
	defer n.mu.Unlock()
	if err == nil {
		err = io.EOF
	}
	n.troubles = append(n.troubles, err.Error())
}

// checkSeconds asserts one reading for each second, at times that grow.
func (n *notebook) checkSeconds(t *testing.T, want int) {
	t.Helper()
	if len(n.got) != want {
		t.Errorf("%d readings, want %d", len(n.got), want)
	}
	for i, r := range n.got {
		if r.T != float64(i)+0.5 {
			t.Fatalf("reading %d is of t = %v", i, r.T)
		}
		if i > 0 && !n.at[i].After(n.at[i-1]) {
			t.Fatalf("reading %d at %v is not after the one before, at %v", i, n.at[i], n.at[i-1])
		}
	}
}

const testRate = 8000

func benchSettings(name string, channels ...int) settings {
	return settings{Name: name, Channels: channels, LocalTone: 1003}
}

// clocked drives a bench without goroutines, on a clock of its own.
type clocked struct {
	t   *testing.T
	b   *bench
	out *notebook
	now time.Time
	src script
}

func newClocked(t *testing.T) *clocked {
	c := &clocked{t: t, out: &notebook{}, now: time.Date(2026, 1, 5, 20, 0, 0, 0, time.UTC)}
	c.b = newBench(benchSettings("counter"), c.out, true)
	c.b.now = func() time.Time { return c.now }
	c.src.format = capture.Format{Rate: testRate, Channels: 1, Live: true}
	c.give(0, 0, "")
	return c
}

// give passes n samples to the bench, lost ones before them; time goes on by n.
func (c *clocked) give(n, lost int, cause capture.Cause) {
	s := &shared{format: c.src.format, channels: []int{1}, opening: 1, home: make(chan *shared, 1)}
	s.left.Store(1)
	c.src.steps = []step{{n, lost, cause}}
	if err := c.src.Read(&s.Block); err != nil {
		c.t.Fatal(err)
	}
	s.Wall = c.now
	c.now = c.now.Add(time.Duration(n) * time.Second / testRate)
	c.b.take(s)
}

// rest lets time pass without samples.
func (c *clocked) rest(d time.Duration) {
	for end := c.now.Add(d); c.now.Before(end); {
		c.now = c.now.Add(200 * time.Millisecond)
		c.b.wait(c.now)
	}
}

func (c *clocked) play(seconds float64) {
	for range int(seconds * 10) {
		c.give(testRate/10, 0, "")
	}
}

// While a live input delivers nothing, each second still gets its reading, and
// what the input says it lost when it is back is not counted twice.
func TestOutage(t *testing.T) {
	const out = 6.4 // seconds
	cases := []struct {
		name string
		lost int // what the input says when it is back
		want int // seconds in all
		late float64
		gaps map[capture.Cause]int64
	}{
		{"the input knows what it lost", out * testRate, 26, 0, map[capture.Cause]int64{capture.Stalled: 5.4 * testRate, capture.Reopened: 1 * testRate}},
		{"a pipe that only rested", 0, 25, 1, map[capture.Cause]int64{capture.Stalled: 5.4 * testRate}},
		{"an estimate that is too small", 3 * testRate, 25, 1, map[capture.Cause]int64{capture.Stalled: 5.4 * testRate}},
		{"an estimate that is larger", 9 * testRate, 29, -2.6, map[capture.Cause]int64{capture.Stalled: 5.4 * testRate, capture.Reopened: 3.6 * testRate}},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			k := newClocked(t)
			start := k.now
			k.play(10)
			k.rest(6400 * time.Millisecond)
			silent := len(k.out.got)
			if silent < 14 { // 15.4 s have been counted on, less the filters' reach
				t.Errorf("only %d readings by the end of the outage", silent)
			}
			k.give(testRate/10, c.lost, capture.Reopened)
			k.play(9.9)
			k.b.finish()
			k.out.checkSeconds(t, c.want)
			for cause, n := range k.out.gaps {
				if n != c.gaps[cause] {
					t.Errorf("%d samples counted as %s, want %d", n, cause, c.gaps[cause])
				}
			}
			if k.out.heard != 20*testRate {
				t.Errorf("%d samples reached the bench, want all %d", k.out.heard, 20*testRate)
			}
			for i, r := range k.out.got {
				switch {
				case i >= 2 && i < 9 && (r.State != dsp.Apart || math.Abs(r.Beat-3.2) > 1e-3):
					t.Errorf("second %d before the outage: %s, beat %v", i, r.State, r.Beat)
				case i > 10 && i < 15 && (r.State != dsp.Silent || !r.Has(dsp.Gap)):
					t.Errorf("second %d of the outage: %s %v, want silent and gap", i, r.State, r.Flags)
				case i > c.want-4 && r.State != dsp.Apart:
					t.Errorf("second %d after the outage: %s", i, r.State)
				}
			}
			// The wall time of the last full second is where the clock says.
			last := len(k.out.got) - 1
			at := start.Add(time.Duration((k.out.got[last].T + c.late) * 1e9))
			if d := k.out.at[last].Sub(at); d.Abs() > time.Millisecond {
				t.Errorf("the last reading is at %v, want %v", k.out.at[last], at)
			}
			if k.out.backs != 1 {
				t.Errorf("told %d times that the input is back", k.out.backs)
			}
		})
	}
}

// A host clock that is set back must not put readings before earlier ones.
func TestClockSetBack(t *testing.T) {
	k := newClocked(t)
	k.play(5)
	k.now = k.now.Add(-time.Hour)
	k.play(5)
	k.b.finish()
	k.out.checkSeconds(t, 10)
}

// runFeed reads a source to its end through the given benches.
func runFeed(t *testing.T, f *feed, benches ...*bench) {
	t.Helper()
	ctx, cancel := context.WithTimeout(context.Background(), 20*time.Second)
	defer cancel()
	var wg sync.WaitGroup
	for _, b := range benches {
		f.add(b.ear)
		wg.Go(func() { b.run(nil) })
	}
	f.run(ctx)
	wg.Wait()
	if ctx.Err() != nil {
		t.Fatal("the feed did not end by itself")
	}
}

func opens(sources ...*script) opener {
	var mu sync.Mutex
	return func(_ inputSpec, channels []int) (capture.Source, error) {
		mu.Lock()
		defer mu.Unlock()
		if len(sources) == 0 {
			return nil, errors.New("no such card")
		}
		s := sources[0]
		sources = sources[1:]
		return s, nil
	}
}

func blocks(n, size int) (s []step) { return slices.Repeat([]step{{n: size}}, n) }

// Of a live input a slow bench loses blocks, counted as shed; a bench beside it
// loses none, and a recording waits.
func TestShed(t *testing.T) {
	const n, size = 300, 80
	for _, live := range []bool{true, false} {
		src := &script{format: capture.Format{Rate: testRate, Channels: 1, Live: live}, steps: blocks(n, size), end: io.EOF}
		quick, slow := &notebook{}, &notebook{slow: 2 * time.Millisecond}
		a, b := newBench(benchSettings("a"), quick, true), newBench(benchSettings("b"), slow, true)
		b.ear.queue = make(chan *shared, 4)
		src.pace = time.Millisecond / 2
		runFeed(t, newFeed(inputSpec{Kind: kindRecording}, opens(src)), a, b)
		if live {
			// How much is shed depends on the scheduler; that it is all accounted for does not.
			if slow.gaps[capture.Shed] == 0 {
				t.Error("a bench that is ten times too slow shed nothing")
			}
			if got := slow.heard + int(slow.gaps[capture.Shed]); got > n*size || got < slow.heard {
				t.Errorf("%d samples heard and %d shed of %d", slow.heard, slow.gaps[capture.Shed], n*size)
			}
			continue
		}
		for _, l := range []*notebook{quick, slow} {
			if l.heard != n*size || len(l.gaps) != 0 {
				t.Errorf("a recording: %d samples heard of %d, gaps %v", l.heard, n*size, l.gaps)
			}
		}
	}
}

// Two benches on two channels of one input: it is opened once, and each hears
// its own channel.
func TestSharedInput(t *testing.T) {
	src := &script{format: capture.Format{Rate: testRate, Channels: 2}, steps: blocks(50, testRate/10), end: io.EOF}
	left, right := &notebook{}, &notebook{}
	a, b := newBench(benchSettings("left", 1), left, false), newBench(benchSettings("right", 2), right, false)
	runFeed(t, newFeed(inputSpec{Kind: kindRecording}, opens(src)), a, b)
	left.checkSeconds(t, 5)
	right.checkSeconds(t, 5)
	if d := left.got[3].InputDBFS - right.got[3].InputDBFS; math.Abs(d-6.02) > 0.05 {
		t.Errorf("the channels differ by %.2f dB, want 6.02", d)
	}
	if !src.closed {
		t.Error("the source was not closed")
	}
}

// A bench that wants a channel which is not there must not silence the others.
func TestMissingChannel(t *testing.T) {
	open := func(_ inputSpec, channels []int) (capture.Source, error) {
		if slices.Max(channels) > 2 {
			return nil, errors.New("card: channel 5 asked, it has 2")
		}
		return &script{format: capture.Format{Rate: testRate, Channels: len(channels)}, steps: blocks(30, testRate/10), end: io.EOF}, nil
	}
	good, bad := &notebook{}, &notebook{}
	a, b := newBench(benchSettings("good", 2), good, false), newBench(benchSettings("bad", 5), bad, false)
	runFeed(t, newFeed(inputSpec{Kind: kindRecording}, open), a, b)
	good.checkSeconds(t, 3)
	if len(bad.got) != 0 || len(bad.troubles) == 0 || !strings.Contains(bad.troubles[0], "channel 5") {
		t.Errorf("the other bench: %d readings, said %q", len(bad.got), bad.troubles)
	}
}

// A live input that fails is opened again; the time between is a gap, and one
// reading a second goes on.
func TestReopened(t *testing.T) {
	format := capture.Format{Rate: testRate, Channels: 1, Live: true}
	unplugged := errors.New("card: unplugged")
	first := &script{format: format, steps: blocks(20, testRate/10), end: unplugged}
	second := &script{format: format, steps: blocks(20, testRate/10), end: unplugged}
	f := newFeed(inputSpec{Kind: kindSound}, opens(first, second))
	out := &notebook{}
	b := newBench(benchSettings("counter"), out, true)
	ctx, cancel := context.WithCancel(context.Background())
	attempts := 0
	f.wait = func(ctx context.Context, d time.Duration) {
		pause(ctx, 300*time.Millisecond)
		if attempts++; attempts == 4 {
			cancel()
		}
	}
	f.add(b.ear)
	done := make(chan struct{})
	go func() { defer close(done); b.run(nil) }()
	f.run(ctx)
	<-done
	missing := out.gaps[capture.Reopened]
	if missing < testRate/4 || missing > 2*testRate {
		t.Errorf("%d samples counted as missing, want about 0.3 s", missing)
	}
	if out.heard != 4*testRate {
		t.Errorf("%d samples heard", out.heard)
	}
	if !slices.Contains(out.troubles, "card: unplugged") || !slices.Contains(out.troubles, "no such card") {
		t.Errorf("said %q", out.troubles)
	}
	out.checkSeconds(t, len(out.got))
	if !first.closed || !second.closed {
		t.Error("a source was not closed")
	}
}

// A bench whose input never opens says why and ends with the feed.
func TestNoInput(t *testing.T) {
	out := &notebook{}
	runFeed(t, newFeed(inputSpec{Kind: kindRecording}, opens()), newBench(benchSettings("a"), out, false))
	if len(out.troubles) != 1 || out.troubles[0] != "no such card" || len(out.got) != 0 {
		t.Errorf("said %q, %d readings", out.troubles, len(out.got))
	}
}

// Passing a block on allocates nothing.
func TestNoAllocationPerBlock(t *testing.T) {
	const size = 400
	src := &script{format: capture.Format{Rate: 1e6, Channels: 1, Live: true}, steps: blocks(3000, size), end: io.EOF}
	f := newFeed(inputSpec{Kind: kindSound}, opens(src))
	set := benchSettings("a")
	b := newBench(set, &notebook{}, true)
	f.add(b.ear)
	if err := f.openAll(context.Background()); err != nil {
		t.Fatal(err)
	}
	ears := f.listening()
	once := func() {
		if err := f.step(context.Background(), ears); err != nil {
			t.Fatal(err)
		}
		b.take(<-b.ear.queue)
	}
	for range 1000 { // the first tenths of a second
		once()
	}
	// 400 blocks are a sixth of a second: no reading falls due among them.
	if n := testing.AllocsPerRun(400, once); n != 0 {
		t.Errorf("%v allocations per block", n)
	}
}

// The time of day reaches the bench only where it says something of the sample
// clock: with live sound, and a host's clock that is disciplined or simulated.
func TestHostClock(t *testing.T) {
	const e, rate = 200e-6, 1000
	for _, c := range []struct {
		name             string
		kind             string
		kept, live, wall bool
		found            bool
	}{
		{"a sound card", kindSound, true, true, true, true},
		{"a pipe", kindPipe, true, true, true, true},
		{"the host's clock runs free", kindSound, false, true, true, false},
		{"the simulated bench, whatever the host's clock", kindSimulate, false, true, true, true},
		{"a recording", kindRecording, true, false, true, false},
		{"no time told", kindSound, true, true, false, false},
	} {
		k := newClocked(t)
		k.b.set.Input.Kind, k.b.kept, k.b.fill = c.kind, func() bool { return c.kept }, false
		k.b.open, k.b.dsp = 0, nil // opened anew
		k.b.set.Hookup, k.b.set.LocalTone, k.src.format.Rate, k.src.format.Live = dsp.Mixer, 0, rate, c.live
		start := k.now
		for n := 0; n < 420; n++ {
			s := &shared{format: k.src.format, channels: []int{1}, opening: 1, home: make(chan *shared, 1)}
			s.left.Store(1)
			s.Reset(1)
			s.Ch[0], s.First = append(s.Ch[0], make([]float32, rate)...), int64(n)*rate
			if c.wall { // each block comes up to 5 ms late
				s.Wall = start.Add(time.Duration(float64(n)/(1+e)*1e9) + time.Duration(n*37%50)*100*time.Microsecond)
			}
			k.b.take(s)
		}
		r := k.out.got[len(k.out.got)-1]
		if found := !math.IsNaN(r.ClockError); found != c.found || found && math.Abs(r.ClockError-e) > 5e-6 {
			t.Errorf("%s: clock %g, u %g, %q", c.name, r.ClockError, r.ClockErrorU, r.ClockFrom)
		}
	}
	t.Log("this host's clock is disciplined:", hostClockKept())
}
