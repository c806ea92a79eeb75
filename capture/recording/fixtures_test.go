package recording

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// TestFixtures reads the recordings of the repository, so that a machine
// without the other programs still compares with what they wrote.
func TestFixtures(t *testing.T) {
	dir := filepath.Join("..", "..", "testdata", "recordings")
	all, err := filepath.Glob(filepath.Join(dir, "*.f32"))
	if err != nil || len(all) != 8 {
		t.Fatalf("%d recordings, %v", len(all), err)
	}
	for _, truth := range all {
		raw, err := os.ReadFile(truth)
		if err != nil {
			t.Fatal(err)
		}
		name := strings.TrimSuffix(truth, ".f32")
		path := name + ".wav"
		if strings.HasPrefix(filepath.Base(name), "flac") {
			path = name + ".flac"
		}
		t.Run(filepath.Base(path), func(t *testing.T) {
			h := hear(t, path, Options{Channels: []int{1, 2}})
			if strings.HasSuffix(name, "-piped") != (h.note != "") {
				t.Errorf("note %q", h.note)
			}
			h.note = ""
			compare(t, h, raw, "f32")
			if len(h.ch[0]) != 64 || h.format.Frames != 64 || h.format.Rate != 8000 {
				t.Errorf("%d samples, %+v", len(h.ch[0]), h.format)
			}
		})
	}
}
