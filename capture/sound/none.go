//go:build !portaudio

package sound

import "offbeat/capture"

// Supported reports whether this build can open sound cards.
func Supported() bool { return false }

func system() (driver, error) { return nil, capture.ErrNoSupport }
