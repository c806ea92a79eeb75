//go:build portaudio

package sound

import (
	"errors"
	"sync"

	"github.com/gordonklaus/portaudio"
)

// Supported reports whether this build can open sound cards.
func Supported() bool { return true }

func system() (driver, error) { return pa{}, nil }

// PortAudio keeps one state for the process, opens and closes nothing from two
// threads at once, and sees a card that was plugged in only after it was
// terminated and initialised again. So: one lock, and a count of who needs it.
var (
	lock  sync.Mutex
	users int
)

// enter initialises PortAudio for one more user. The lock is held.
func enter() error {
	if users == 0 {
		if err := hush(portaudio.Initialize); err != nil {
			return err
		}
	}
	users++
	return nil
}

// leave ends one user. The lock is held.
func leave() {
	if users--; users == 0 {
		portaudio.Terminate()
	}
}

type pa struct{}

func (pa) devices() ([]Device, error) {
	lock.Lock()
	defer lock.Unlock()
	if err := enter(); err != nil {
		return nil, err
	}
	defer leave()
	return list()
}

func list() ([]Device, error) {
	all, err := portaudio.Devices()
	if err != nil {
		return nil, err
	}
	def, _ := portaudio.DefaultInputDevice() // none is no error
	var out []Device
	for i, d := range all {
		if d.MaxInputChannels < 1 {
			continue
		}
		out = append(out, Device{Name: d.Name, API: d.HostApi.Name, Channels: d.MaxInputChannels, Rate: d.DefaultSampleRate, Default: def != nil && def.Index == d.Index, Index: i})
	}
	return out, nil
}

func (pa) open(d Device, rate float64, channels, frames int) (stream, error) {
	lock.Lock()
	defer lock.Unlock()
	if err := enter(); err != nil {
		return nil, err
	}
	s, err := openStream(d, rate, channels, frames)
	if err != nil {
		leave()
		return nil, err
	}
	return newPump(s, channels, frames), nil
}

func openStream(d Device, rate float64, channels, frames int) (*paStream, error) {
	all, err := portaudio.Devices()
	if err != nil {
		return nil, err
	}
	// The list may have changed since it was read.
	var info *portaudio.DeviceInfo
	for i, x := range all {
		if x.Name == d.Name && x.MaxInputChannels >= channels && (info == nil || i == d.Index) {
			info = x
		}
	}
	if info == nil {
		return nil, errors.New("it has gone")
	}
	s := &paStream{}
	for range channels {
		s.buf = append(s.buf, make([]float32, frames))
	}
	p := portaudio.HighLatencyParameters(info, nil)
	p.Input.Channels = channels
	p.SampleRate = rate
	p.FramesPerBuffer = frames
	if err := hush(func() (err error) {
		s.s, err = portaudio.OpenStream(p, s.buf)
		return err
	}); err != nil {
		return nil, err
	}
	if err := s.s.Start(); err != nil {
		s.s.Close()
		return nil, err
	}
	return s, nil
}

type paStream struct {
	s   *portaudio.Stream
	buf [][]float32
}

func (s *paStream) available() (int, error) { return s.s.AvailableToRead() }

func (s *paStream) read() ([][]float32, bool, error) {
	err := s.s.Read()
	if err == portaudio.InputOverflowed {
		return s.buf, true, nil
	}
	return s.buf, false, err
}

func (s *paStream) close() {
	lock.Lock()
	defer lock.Unlock()
	s.s.Abort()
	s.s.Close()
	leave()
}
