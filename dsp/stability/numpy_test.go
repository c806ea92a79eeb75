package stability

import (
	"bufio"
	"encoding/binary"
	"fmt"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"testing"
	"time"
)

// octaves is the overlapping Allan deviation of the row in the file at every
// octave, the same formula in NumPy's whole-row operations, three times; it
// prints the best time and the values.
const octaves = `
import sys, time
import numpy as np
x = np.fromfile(sys.argv[1])
def once():
    out = []
    m = 1
    while 2 * m < len(x):
        d = x[2*m:] - x[m:-m]
        d -= x[m:-m]
        d += x[:-2*m]
        out.append((m, np.sqrt(np.dot(d, d) / (2.0 * m * m * len(d)))))
        m *= 2
    return out
best = 1e9
for _ in range(3):
    t = time.perf_counter()
    out = once()
    best = min(best, time.perf_counter() - t)
print(best)
for m, a in out:
    print(m, repr(float(a)))
`

// numpy returns a Python that has NumPy, or skips.
func numpy(t *testing.T) string {
	for _, python := range []string{"/usr/bin/python3", "python3"} {
		if exec.Command(python, "-c", "import numpy").Run() == nil {
			return python
		}
	}
	t.Skip("SKIPPED: no Python with NumPy here, so nothing outside this project was compared: install python3-numpy")
	return ""
}

// All octaves of a row side by side with NumPy: the same values, and with
// OFFBEAT_LONG=1, over ten million points, at least five times as fast.
func TestOctavesBesideNumPy(t *testing.T) {
	python := numpy(t)
	n, long := 200_000, os.Getenv("OFFBEAT_LONG") != ""
	if long {
		n = 10_000_000
	}
	rng := rand.New(rand.NewPCG(10, 7))
	y := make([]float64, n-1)
	for i := range y {
		y[i] = 1e-7 + 1e-10*rng.NormFloat64()
	}
	x, _ := Phase(y, 1)
	file := filepath.Join(t.TempDir(), "row")
	f, err := os.Create(file)
	if err != nil {
		t.Fatal(err)
	}
	w := bufio.NewWriterSize(f, 1<<20)
	if err := binary.Write(w, binary.LittleEndian, x); err != nil {
		t.Fatal(err)
	}
	if err := w.Flush(); err != nil {
		t.Fatal(err)
	}
	f.Close()

	out, err := exec.Command(python, "-c", octaves, file).Output()
	if err != nil {
		t.Fatal(err)
	}
	best := time.Duration(1 << 62)
	var ours []Point
	for range 3 {
		start := time.Now()
		ours = Octaves(OverlappingAllan, x, nil, 1)
		best = min(best, time.Since(start))
	}
	lines := 0
	var theirs float64
	for k, p := range ours {
		var m int
		var a float64
		if k == 0 {
			fmt.Sscan(string(out), &theirs)
			for out[0] != '\n' {
				out = out[1:]
			}
			out = out[1:]
		}
		if _, err := fmt.Sscan(string(out), &m, &a); err != nil {
			break
		}
		for len(out) > 0 && out[0] != '\n' {
			out = out[1:]
		}
		out = out[1:]
		if m != p.M {
			t.Errorf("octave %d: m %d, NumPy %d", k, p.M, m)
		}
		near(t, fmt.Sprint("m ", m), p.Dev, a, 1e-9)
		lines++
	}
	if lines != len(ours) || lines < 10 {
		t.Fatalf("%d octaves, NumPy %d", len(ours), lines)
	}
	ratio := theirs / best.Seconds()
	t.Logf("%d points, %d octaves: %v, NumPy %.3f s: ratio %.1f", n, lines, best.Round(time.Microsecond), theirs, ratio)
	if long && ratio < 5 {
		t.Errorf("only %.1f times as fast as NumPy", ratio)
	}
}
