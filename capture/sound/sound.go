// Package sound is the sound-card input, through PortAudio. PortAudio itself is
// behind the build tag portaudio (and cgo); everything else here, the time
// line, the watchdog and the reopening, is plain Go and works on any driver.
//
// Samples are polled from a goroutine of each stream: a read is only made when
// PortAudio says that a whole buffer is there. That keeps four of PortAudio's
// troubles away: a stream is always stopped from the side that reads it
// (stopping while a read blocks can crash in ALSA), a card that stops
// delivering without an error is noticed by the clock, a call that hangs in a
// dead sound server holds nobody up, and no Go code runs on PortAudio's
// real-time thread.
package sound

import (
	"context"
	"errors"
	"fmt"
	"log/slog"
	"math"
	"slices"
	"strings"
	"time"

	"offbeat/capture"
)

// Device is a sound input.
type Device struct {
	Name     string
	API      string // PortAudio's host API, such as ALSA
	Channels int    // greatest number of input channels
	Rate     float64
	Default  bool
	Index    int // the driver's own number
}

// ChannelLevel is the level of one channel.
type ChannelLevel struct {
	RMS, Peak float64 // dB of a full-scale sine; -inf for silence
}

// Options say which card is opened and how.
type Options struct {
	Device   string // name or a case-insensitive part of it; empty: the system's default input
	Rate     float64
	Channels []int // from 1; empty: the first
	Log      *slog.Logger
}

// Stats are counts since the opening.
type Stats struct {
	Samples, Overflows, Stalls, Reopens int64
}

// driver is what is needed of PortAudio; tests put a scripted one in its place.
type driver interface {
	// devices returns a fresh list of inputs.
	devices() ([]Device, error)
	open(d Device, rate float64, channels, frames int) (stream, error)
}

// stream is an open card. It is used by one goroutine.
type stream interface {
	available() (int, error)                              // frames that can be read without waiting
	read() (planes [][]float32, overflow bool, err error) // one buffer; planes are valid until the next read
	close()
}

// Timing of the watchdog.
const (
	patience = 2 * time.Second        // without samples before a card counts as stalled
	firstTry = 500 * time.Millisecond // before the first attempt to reopen
	lastTry  = 10 * time.Second       // between attempts at most
	longest  = 300 * time.Millisecond // that a Read waits
)

// find picks the device of that name or part of a name.
func find(all []Device, name string) (Device, error) {
	if len(all) == 0 {
		return Device{}, errors.New("no sound input was found: connect one, or check that this user may use it (group audio)")
	}
	if name == "" {
		for _, d := range all {
			if d.Default {
				return d, nil
			}
		}
		return all[0], nil
	}
	var hits []Device
	for _, d := range all {
		if d.Name == name {
			return d, nil
		}
		if strings.Contains(strings.ToLower(d.Name), strings.ToLower(name)) {
			hits = append(hits, d)
		}
	}
	switch len(hits) {
	case 1:
		return hits[0], nil
	case 0:
		return Device{}, fmt.Errorf("sound input %q: there is none of that name: there are %s", name, quoted(all))
	}
	return Device{}, fmt.Errorf("sound input %q: several match: say which of %s", name, quoted(hits))
}

func quoted(all []Device) string {
	var s []string
	for _, d := range all {
		s = append(s, fmt.Sprintf("%q", d.Name))
	}
	return strings.Join(s, ", ")
}

// source is an input that goes on through overflows, stalls and unplugging.
type source struct {
	opt    Options
	drv    driver
	now    func() time.Time
	sleep  func(time.Duration)
	stream stream
	frames int // a buffer
	open   int // channels opened
	label  string

	next    int64     // the next sample on the time line
	heard   time.Time // when the last buffer was read
	waiting int       // frames that waited in PortAudio then
	cause   capture.Cause
	try     time.Time
	delay   time.Duration
	stats   Stats
	told    string
}

// Open opens a card. A name that is not there, a rate or a channel that the card
// refuses is one clear line; a build without PortAudio answers
// capture.ErrNoSupport.
func Open(opt Options) (capture.Source, error) {
	drv, err := system()
	if err != nil {
		return nil, err
	}
	return openWith(drv, opt, time.Now, time.Sleep)
}

func openWith(drv driver, opt Options, now func() time.Time, sleep func(time.Duration)) (*source, error) {
	if opt.Log == nil {
		opt.Log = slog.New(slog.DiscardHandler)
	}
	if len(opt.Channels) == 0 {
		opt.Channels = []int{1}
	}
	if !(opt.Rate >= 1000 && opt.Rate <= 768000) {
		return nil, fmt.Errorf("sound input: sample rate %g Hz: must be 1000 to 768000", opt.Rate)
	}
	if slices.Min(opt.Channels) < 1 {
		return nil, fmt.Errorf("sound input: channel %d: channels count from 1", slices.Min(opt.Channels))
	}
	s := &source{opt: opt, drv: drv, now: now, sleep: sleep, frames: int(opt.Rate / 50), open: slices.Max(opt.Channels), delay: firstTry}
	if err := s.start(); err != nil {
		return nil, err
	}
	s.heard = now()
	return s, nil
}

// start opens the stream.
func (s *source) start() error {
	all, err := s.drv.devices()
	if err != nil {
		return fmt.Errorf("sound inputs cannot be listed: %w", err)
	}
	d, err := find(all, s.opt.Device)
	if err != nil {
		return err
	}
	if d.Channels < s.open {
		return fmt.Errorf("sound input %q: channel %d asked, it has %d", d.Name, s.open, d.Channels)
	}
	st, err := s.drv.open(d, s.opt.Rate, s.open, s.frames)
	if err != nil {
		return fmt.Errorf("sound input %q at %g Hz: %w: its own rate is %g Hz", d.Name, s.opt.Rate, err, d.Rate)
	}
	s.stream, s.label, s.waiting = st, d.Name, 0
	return nil
}

// Format implements capture.Source.
func (s *source) Format() capture.Format {
	return capture.Format{Rate: s.opt.Rate, Channels: len(s.opt.Channels), Live: true, Encoding: "sound card " + s.label}
}

// Stats returns counts since the opening; from the reading goroutine only.
func (s *source) Stats() Stats { return s.stats }

// Close implements capture.Source.
func (s *source) Close() error {
	s.drop()
	return nil
}

func (s *source) drop() {
	if s.stream != nil {
		s.stream.close()
		s.stream = nil
	}
}

// Read implements capture.Source: one buffer of a fiftieth of a second, or an
// empty block after at most 0.3 s. It never fails for good.
func (s *source) Read(b *capture.Block) error {
	b.Reset(len(s.opt.Channels))
	for end := s.now().Add(longest); s.now().Before(end); {
		if s.stream == nil && !s.reopen() {
			s.sleep(20 * time.Millisecond)
			continue
		}
		n, err := s.stream.available()
		if err == nil && n < s.frames {
			if s.now().Sub(s.heard) > patience && s.now().Sub(s.try) > patience {
				s.stats.Stalls++
				s.lose(capture.Stalled, errors.New("it has stopped delivering"))
				continue
			}
			s.sleep(4 * time.Millisecond)
			continue
		}
		if err == nil {
			var planes [][]float32
			var overflow bool
			planes, overflow, err = s.stream.read()
			if err == nil {
				s.deliver(b, planes, overflow, max(0, n-s.frames))
				return nil
			}
		}
		s.lose(capture.Reopened, err)
	}
	return nil
}

// lose gives the stream up; it is opened again later.
func (s *source) lose(why capture.Cause, err error) {
	s.drop()
	if s.cause == "" {
		s.cause = why
	}
	s.try = s.now().Add(s.delay)
	s.say(fmt.Sprintf("sound input %q is lost: %v: trying to open it again", s.label, err))
}

// reopen tries when it is time.
func (s *source) reopen() bool {
	if s.now().Before(s.try) {
		return false
	}
	if err := s.start(); err != nil {
		s.delay = min(2*s.delay, lastTry)
		s.try = s.now().Add(s.delay)
		s.say(err.Error())
		return false
	}
	s.try = s.now()
	s.stats.Reopens++
	return true
}

// say logs a trouble once.
func (s *source) say(what string) {
	if what != s.told {
		s.opt.Log.Warn(what)
		s.told = what
	}
}

// deliver copies a buffer (PortAudio's slices point at C memory) and puts it on
// the time line. What was lost before it is judged by the host's clock: the
// time since the last buffer less the samples that came for it.
func (s *source) deliver(b *capture.Block, planes [][]float32, overflow bool, waiting int) {
	now := s.now()
	if overflow {
		s.stats.Overflows++
		if s.cause == "" {
			s.cause = capture.Overflow
		}
	}
	if s.cause != "" {
		came := float64(s.frames + waiting - s.waiting)
		lost := int64(math.Round(now.Sub(s.heard).Seconds()*s.opt.Rate - came))
		if s.cause == capture.Overflow || lost > 0 {
			b.Lost, b.Guessed, b.Cause = max(1, lost), true, s.cause
		}
		if s.told != "" {
			s.opt.Log.Info(fmt.Sprintf("sound input %q is back", s.label))
			s.told = ""
		}
		s.cause, s.delay = "", firstTry
	}
	s.next += b.Lost
	b.First = s.next
	for i, c := range s.opt.Channels {
		for _, v := range planes[c-1] {
			if v != v || v > math.MaxFloat32 || v < -math.MaxFloat32 {
				v = 0
				b.NonFinite++
			}
			b.Ch[i] = append(b.Ch[i], v)
		}
	}
	n := b.Len()
	s.next += int64(n)
	s.stats.Samples += int64(n)
	s.heard, s.waiting = now, waiting
	b.Wall = now.Add(-time.Duration(float64(n+waiting) / s.opt.Rate * 1e9))
}

// List returns the sound inputs.
func List() ([]Device, error) {
	drv, err := system()
	if err != nil {
		return nil, err
	}
	return drv.devices()
}

// Level listens to all channels of a device for a while.
func Level(ctx context.Context, device string, seconds float64) ([]ChannelLevel, error) {
	drv, err := system()
	if err != nil {
		return nil, err
	}
	return levelWith(ctx, drv, device, seconds)
}

func levelWith(ctx context.Context, drv driver, device string, seconds float64) ([]ChannelLevel, error) {
	all, err := drv.devices()
	if err != nil {
		return nil, err
	}
	d, err := find(all, device)
	if err != nil {
		return nil, err
	}
	opt := Options{Device: d.Name, Rate: d.Rate}
	for c := range min(d.Channels, 8) {
		opt.Channels = append(opt.Channels, c+1)
	}
	s, err := openWith(drv, opt, time.Now, time.Sleep)
	if err != nil {
		return nil, err
	}
	defer s.Close()
	sum, peak := make([]float64, len(opt.Channels)), make([]float64, len(opt.Channels))
	n := 0.0
	var b capture.Block
	for end := time.Now().Add(time.Duration(seconds*1e9) + time.Second); n < seconds*d.Rate; {
		if err := ctx.Err(); err != nil {
			return nil, err
		}
		if time.Now().After(end) {
			return nil, fmt.Errorf("sound input %q: no samples arrive", d.Name)
		}
		if err := s.Read(&b); err != nil {
			return nil, err
		}
		for i := range b.Ch {
			for _, v := range b.Ch[i] {
				sum[i] += float64(v) * float64(v)
				peak[i] = max(peak[i], math.Abs(float64(v)))
			}
		}
		n += float64(b.Len())
	}
	out := make([]ChannelLevel, len(sum))
	for i := range out {
		out[i] = ChannelLevel{RMS: 20 * math.Log10(math.Sqrt(2*sum[i]/n)), Peak: 20 * math.Log10(peak[i])}
	}
	return out, nil
}
