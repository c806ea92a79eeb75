package recording

import (
	"bytes"
	"encoding/binary"
	"fmt"
	"os"
	"path/filepath"
	"testing"
)

// The files of this test are written by other programs (checked with SoX
// 14.4.2, FFmpeg 5.1 and libsndfile 1.2 of Debian 12), which also say what is
// in them: the same program reads its file back into bare samples, and these go
// through the slow decoder.

// compare checks every channel of h against interleaved samples.
func compare(t *testing.T, h heard, raw []byte, kind string) {
	t.Helper()
	if h.err != nil || h.note != "" || h.nonFinite != 0 {
		t.Errorf("err %v, note %q, %d not finite", h.err, h.note, h.nonFinite)
	}
	if len(raw) == 0 {
		t.Fatal("the other program gave nothing")
	}
	for c := range h.ch {
		want, _ := slow(raw, kind, len(h.ch), c)
		same(t, fmt.Sprintf("channel %d", c+1), h.ch[c], want)
	}
}

// hum is a WAV of a tone in noise with different channels, made by sox, in
// 32 bits.
func hum(t *testing.T, rate, channels int) string {
	path := filepath.Join(t.TempDir(), "hum.wav")
	tool(t, "sox", "-R", "-D", "-n", "-r", fmt.Sprint(rate), "-c", fmt.Sprint(channels), "-b", "32", path,
		"synth", "0.12", "whitenoise", "synth", "sine", "mix", fmt.Sprint(rate/9), "gain", "-3")
	return path
}

func TestSox(t *testing.T) {
	layouts := []struct{ rate, channels int }{{1000, 1}, {8000, 2}, {44100, 8}, {48000, 3}, {192000, 2}, {384000, 1}}
	for i, e := range []struct {
		bits, enc, kind string
	}{{"8", "unsigned-integer", "u8"}, {"16", "signed-integer", "s16"}, {"24", "signed-integer", "s24"}, {"32", "signed-integer", "s32"}, {"32", "floating-point", "f32"}, {"64", "floating-point", "f64"}} {
		// Every encoding in three of the layouts, every layout with three.
		for j := range 3 {
			c := layouts[(i+2*j)%len(layouts)]
			t.Run(fmt.Sprintf("%s/%d/%d", e.kind, c.rate, c.channels), func(t *testing.T) {
				t.Parallel()
				path := filepath.Join(t.TempDir(), "x.wav")
				tool(t, "sox", "-D", hum(t, c.rate, c.channels), "-b", e.bits, "-e", e.enc, path)
				raw := tool(t, "sox", "-D", path, "-t", "raw", "-b", e.bits, "-e", e.enc, "-")
				h := hear(t, path, Options{Channels: all(c.channels)})
				compare(t, h, raw, e.kind)
				if h.format.Rate != float64(c.rate) || h.format.Frames != int64(len(h.ch[0])) {
					t.Errorf("%+v", h.format)
				}
			})
		}
	}
}

// TestSoxPipe reads what sox writes where it cannot seek: a stand-in for the
// length.
func TestSoxPipe(t *testing.T) {
	synth := func(format string) []byte {
		return tool(t, "sox", "-R", "-D", "-n", "-r", "48000", "-c", "2", "-b", "16", "-e", "signed-integer", "-t", format, "-", "synth", "0.1", "whitenoise", "gain", "-3")
	}
	wav, raw := synth("wav"), synth("raw")
	if length := binary.LittleEndian.Uint32(wav[40:]); length != 0x7FFFF000 {
		t.Errorf("sox states a length of %#x", length)
	}
	src, err := fromBytes(bytes.NewReader(wav), Options{Channels: all(2)})
	if err != nil {
		t.Fatal(err)
	}
	compare(t, listen(t, src), raw, "s16")
}

func TestFFmpeg(t *testing.T) {
	for _, codec := range []string{"pcm_u8", "pcm_s16le", "pcm_s24le", "pcm_s32le", "pcm_f32le", "pcm_f64le"} {
		for _, c := range []struct {
			rate, channels int
			extra          []string
		}{{96000, 1, nil}, {1000, 8, []string{"-rf64", "always"}}, {384000, 2, []string{"-write_bext", "1", "-metadata", "description=a night"}}} {
			t.Run(fmt.Sprint(codec, c), func(t *testing.T) {
				t.Parallel()
				path := filepath.Join(t.TempDir(), "x.wav")
				args := append([]string{"-v", "error", "-i", hum(t, c.rate, c.channels), "-c:a", codec}, c.extra...)
				tool(t, "ffmpeg", append(args, path)...)
				raw := tool(t, "ffmpeg", "-v", "error", "-i", path, "-f", "f32le", "-")
				compare(t, hear(t, path, Options{Channels: all(c.channels)}), raw, "f32")
			})
		}
	}
	t.Run("peaks behind the samples", func(t *testing.T) {
		path := filepath.Join(t.TempDir(), "x.wav")
		tool(t, "ffmpeg", "-v", "error", "-i", hum(t, 8000, 1), "-c:a", "pcm_s16le", "-write_peak", "on", path)
		raw := tool(t, "ffmpeg", "-v", "error", "-i", path, "-f", "s16le", "-")
		compare(t, hear(t, path, Options{}), raw, "s16")
	})
	t.Run("pipe", func(t *testing.T) {
		path := hum(t, 44100, 1)
		wav := tool(t, "ffmpeg", "-v", "error", "-i", path, "-c:a", "pcm_s24le", "-f", "wav", "-")
		raw := tool(t, "ffmpeg", "-v", "error", "-i", path, "-f", "s24le", "-")
		src, err := fromBytes(bytes.NewReader(wav), Options{})
		if err != nil {
			t.Fatal(err)
		}
		h := listen(t, src)
		h.note = "" // it says, rightly, that the length was never filled in
		compare(t, h, raw, "s24")
	})
}

func TestSndfile(t *testing.T) {
	for _, e := range []struct{ flag, kind string }{{"-pcmu8", "u8"}, {"-pcm16", "s16"}, {"-pcm24", "s24"}, {"-pcm32", "s32"}, {"-float32", "f32"}, {"-float64", "f64"}} {
		for _, ext := range []string{"wav", "wavex", "rf64"} {
			for _, channels := range []int{1, 8} {
				t.Run(fmt.Sprint(e.kind, ext, channels), func(t *testing.T) {
					t.Parallel()
					dir := t.TempDir()
					path := filepath.Join(dir, "x."+ext)
					tool(t, "sndfile-convert", e.flag, hum(t, 22050, channels), path)
					// The samples as libsndfile reads them, in the same encoding
					// and so without any rescaling.
					again := filepath.Join(dir, "again.raw")
					tool(t, "sndfile-convert", "-endian=little", e.flag, path, again)
					raw, err := os.ReadFile(again)
					if err != nil {
						t.Fatal(err)
					}
					h := hear(t, path, Options{Channels: all(channels)})
					compare(t, h, raw, e.kind)
				})
			}
		}
	}
	t.Run("w64", func(t *testing.T) {
		path := filepath.Join(t.TempDir(), "x.w64")
		tool(t, "sndfile-convert", hum(t, 8000, 1), path)
		want := path + ": a Wave64 file, which is not read: convert it to WAV or FLAC"
		if _, err := Open(path, Options{}); err == nil || err.Error() != want {
			t.Errorf("got %v", err)
		}
	})
	for flag, codec := range map[string]string{"-alaw": "A-law", "-ulaw": "mu-law", "-ms-adpcm": "Microsoft ADPCM", "-ima-adpcm": "IMA ADPCM", "-gsm610": "GSM 6.10"} {
		t.Run(codec, func(t *testing.T) {
			path := filepath.Join(t.TempDir(), "x.wav")
			tool(t, "sndfile-convert", flag, hum(t, 8000, 1), path)
			want := path + ": in the fmt chunk at byte 12: the codec " + codec + " is not read: convert it to PCM or FLAC"
			if _, err := Open(path, Options{}); err == nil || err.Error() != want {
				t.Errorf("got %v", err)
			}
		})
	}
}
