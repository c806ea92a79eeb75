package sound

import (
	"context"
	"errors"
	"math"
	"strings"
	"testing"
	"time"

	"offbeat/capture"
)

// script is a driver whose cards do what a test says, on a clock of its own.
type script struct {
	t       time.Time
	list    []Device
	listErr error
	openErr error
	st      *scripted
	opens   int
	open_   int // streams open now
}

func (s *script) now() time.Time        { return s.t }
func (s *script) sleep(d time.Duration) { s.t = s.t.Add(d) }
func (s *script) devices() ([]Device, error) {
	return s.list, s.listErr
}

func (s *script) open(d Device, rate float64, channels, frames int) (stream, error) {
	if s.openErr != nil {
		return nil, s.openErr
	}
	s.opens++
	s.open_++
	s.st = &scripted{s: s, rate: rate, channels: channels, frames: frames, began: s.t}
	return s.st, nil
}

// scripted delivers at the pace of the script's clock.
type scripted struct {
	s                *script
	rate             float64
	channels, frames int
	began            time.Time
	given            int
	stalled          bool
	overflow         bool
	failWith         error
}

func (s *scripted) available() (int, error) {
	if s.failWith != nil {
		return 0, s.failWith
	}
	if s.stalled {
		return 0, nil
	}
	return int(s.s.t.Sub(s.began).Seconds()*s.rate+1e-6) - s.given, nil
}

func (s *scripted) read() ([][]float32, bool, error) {
	var p [][]float32
	for c := range s.channels {
		x := make([]float32, s.frames)
		for i := range x {
			x[i] = float32(c + 1)
		}
		p = append(p, x)
	}
	s.given += s.frames
	over := s.overflow
	s.overflow = false
	return p, over, nil
}

func (s *scripted) close() { s.s.open_-- }

func card(name string) Device { return Device{Name: name, API: "test", Channels: 2, Rate: 48000} }

func begin(t *testing.T, opt Options, cards ...Device) (*script, *source) {
	t.Helper()
	s := &script{t: time.Unix(1e9, 0), list: cards}
	src, err := openWith(s, opt, s.now, s.sleep)
	if err != nil {
		t.Fatal(err)
	}
	return s, src
}

// until reads until a block with samples comes, at most for limit of the
// script's time; every Read must return within half a second.
func until(t *testing.T, s *script, src *source, limit time.Duration) capture.Block {
	t.Helper()
	for end := s.t.Add(limit); s.t.Before(end); {
		var b capture.Block
		before := s.t
		if err := src.Read(&b); err != nil {
			t.Fatal(err)
		}
		if d := s.t.Sub(before); d > 500*time.Millisecond {
			t.Fatalf("a Read took %v", d)
		}
		if b.Len() > 0 {
			return b
		}
	}
	t.Fatalf("nothing came in %v", limit)
	return capture.Block{}
}

func TestDelivers(t *testing.T) {
	s, src := begin(t, Options{Rate: 48000, Channels: []int{2, 1}}, card("card"))
	next := int64(0)
	for range 100 {
		b := until(t, s, src, time.Second)
		if b.First != next || b.Len() != 960 || b.Lost != 0 || b.Ch[0][5] != 2 || b.Ch[1][5] != 1 {
			t.Fatalf("%d %d %d", b.First, b.Len(), b.Lost)
		}
		next += int64(b.Len())
		if d := s.t.Sub(b.Wall).Seconds() - 960.0/48000; math.Abs(d) > 0.005 {
			t.Fatalf("wall clock off by %g s", d)
		}
	}
	if st := src.Stats(); st.Samples != 96000 || st.Overflows+st.Stalls+st.Reopens != 0 {
		t.Errorf("%+v", st)
	}
	src.Close()
	if s.open_ != 0 {
		t.Error("a stream stays open")
	}
}

// An overflow becomes a gap before the block that tells of it, as long as the
// clock says.
func TestOverflow(t *testing.T) {
	s, src := begin(t, Options{Rate: 48000}, card("card"))
	for range 10 {
		until(t, s, src, time.Second)
	}
	s.t = s.t.Add(time.Second) // we were away; the card kept half of it
	s.st.given += 24000
	s.st.overflow = true
	b := until(t, s, src, time.Second)
	if b.Cause != capture.Overflow || !b.Guessed || math.Abs(float64(b.Lost-24000)) > 300 {
		t.Errorf("lost %d by %s", b.Lost, b.Cause)
	}
	if c := until(t, s, src, time.Second); c.Lost != 0 || c.First != b.First+int64(b.Len()) {
		t.Errorf("after it: lost %d", c.Lost)
	}
	if src.Stats().Overflows != 1 {
		t.Errorf("%+v", src.Stats())
	}
}

// A card that stops without an error, one that fails, one that is unplugged for
// a while: each is opened again, and the time line is right to 50 ms.
func TestComesBack(t *testing.T) {
	gone := errors.New("unplugged")
	for _, c := range []struct {
		name  string
		begin func(s *script)
		away  time.Duration
		end   func(s *script)
		cause capture.Cause
	}{
		{"stalls", func(s *script) { s.st.stalled = true }, 0, func(*script) {}, capture.Stalled},
		{"fails once", func(s *script) { s.st.failWith = gone }, 0, func(*script) {}, capture.Reopened},
		{"unplugged", func(s *script) { s.st.failWith = gone; s.list = nil }, 40 * time.Second, func(s *script) { s.list = []Device{card("card")} }, capture.Reopened},
		{"refuses", func(s *script) { s.st.failWith = gone; s.openErr = errors.New("busy") }, 25 * time.Second, func(s *script) { s.openErr = nil }, capture.Reopened},
		{"one channel less", func(s *script) { s.st.failWith = gone; s.list[0].Channels = 1 }, 12 * time.Second, func(s *script) { s.list[0].Channels = 2 }, capture.Reopened},
		{"list fails", func(s *script) { s.st.failWith = gone; s.listErr = gone }, 5 * time.Second, func(s *script) { s.listErr = nil }, capture.Reopened},
	} {
		t.Run(c.name, func(t *testing.T) {
			s, src := begin(t, Options{Rate: 48000, Channels: []int{1, 2}}, card("card"))
			start := s.t
			for range 50 {
				until(t, s, src, time.Second)
			}
			c.begin(s)
			var b capture.Block
			for end := s.t.Add(c.away); s.t.Before(end); {
				if err := src.Read(&b); err != nil || b.Len() > 0 {
					t.Fatal(err, b.Len())
				}
			}
			c.end(s)
			back := s.t
			b = until(t, s, src, 30*time.Second)
			if d := s.t.Sub(back); d > 11*time.Second {
				t.Errorf("back only after %v", d)
			}
			if b.Cause != c.cause || !b.Guessed || b.Lost <= 0 {
				t.Errorf("lost %d by %q", b.Lost, b.Cause)
			}
			// The end of the block lies where the clock says.
			if d := float64(b.First+int64(b.Len()))/48000 - s.t.Sub(start).Seconds(); math.Abs(d) > 0.05 {
				t.Errorf("time line off by %.3f s", d)
			}
			if n := until(t, s, src, time.Second); n.Lost != 0 {
				t.Errorf("lost again: %d", n.Lost)
			}
			src.Close()
			if s.open_ != 0 {
				t.Error("streams stay open")
			}
		})
	}
}

func TestRefusals(t *testing.T) {
	for _, c := range []struct {
		opt  Options
		want string
	}{
		{Options{Rate: 48000, Device: "x"}, `sound input "x": there is none of that name: there are "Line A", "Line B", "Mic"`},
		{Options{Rate: 48000, Device: "line"}, `sound input "line": several match: say which of "Line A", "Line B"`},
		{Options{Rate: 48000, Device: "mic", Channels: []int{3}}, `sound input "Mic": channel 3 asked, it has 2`},
		{Options{Rate: 48000, Channels: []int{0}}, "channels count from 1"},
		{Options{Rate: 5}, "must be 1000 to 768000"},
	} {
		s := &script{list: []Device{card("Line A"), card("Line B"), card("Mic")}}
		if _, err := openWith(s, c.opt, s.now, s.sleep); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%+v: %v", c.opt, err)
		}
	}
	s := &script{list: []Device{card("Mic")}, openErr: errors.New("invalid sample rate")}
	if _, err := openWith(s, Options{Rate: 96000}, s.now, s.sleep); err == nil || err.Error() != `sound input "Mic" at 96000 Hz: invalid sample rate: its own rate is 48000 Hz` {
		t.Error(err)
	}
	s = &script{}
	if _, err := openWith(s, Options{Rate: 48000}, s.now, s.sleep); err == nil || !strings.Contains(err.Error(), "no sound input was found") {
		t.Error(err)
	}
}

func TestNonFinite(t *testing.T) {
	src := &source{opt: Options{Rate: 8000, Channels: []int{1}}, now: time.Now, frames: 3}
	var b capture.Block
	b.Reset(1)
	nan := float32(math.NaN())
	src.deliver(&b, [][]float32{{1, nan, float32(math.Inf(1))}}, false, 0)
	if b.NonFinite != 2 || b.Ch[0][0] != 1 || b.Ch[0][1] != 0 || b.Ch[0][2] != 0 {
		t.Errorf("%+v", b)
	}
}

func TestWithoutSupport(t *testing.T) {
	if Supported() {
		t.Skip("this build has sound-card support")
	}
	t.Log("the real sound input is tested with: go test -tags portaudio ./capture/sound")
	for _, err := range []error{func() error { _, err := Open(Options{Rate: 48000}); return err }(), func() error { _, err := List(); return err }(),
		func() error { _, err := Level(context.Background(), "", 1); return err }()} {
		if !errors.Is(err, capture.ErrNoSupport) || strings.Contains(err.Error(), "\n") {
			t.Error(err)
		}
	}
}

func TestReadAllocatesNothing(t *testing.T) {
	planes := [][]float32{make([]float32, 960)}
	src := &source{opt: Options{Rate: 48000, Channels: []int{1}}, now: time.Now, frames: 960}
	var b capture.Block
	b.Reset(1)
	src.deliver(&b, planes, false, 0)
	if n := testing.AllocsPerRun(100, func() { b.Reset(1); src.deliver(&b, planes, false, 0) }); n != 0 {
		t.Errorf("%v allocations a block", n)
	}
}
