package export

import (
	"encoding/binary"
	"errors"
	"fmt"
	"io/fs"
	"math"
	"os"
)

// chunkRows is how many rows of a spool lie together.
const chunkRows = 1024

// spool is a table of doubles in a temporary file that has no name any more, so
// that nothing of it is left behind however the process ends. It is written row
// by row and read column by column; within a chunk of rows the columns lie one
// after another.
type spool struct {
	f       *os.File
	dir     string
	size    int64
	columns [][]float64 // of the chunk being filled
	raw     []byte
	chunks  []chunk // of the section being filled
}

// chunk is where some rows of a spool lie.
type chunk struct {
	at   int64
	rows int
}

func newSpool(dir string, width int) (*spool, error) {
	f, err := os.CreateTemp(dir, ".offbeat-export-*")
	if err != nil {
		return nil, spoolError(dir, err)
	}
	os.Remove(f.Name())
	return &spool{f: f, dir: dir, columns: make([][]float64, width)}, nil
}

func (s *spool) close() { s.f.Close() }

// add appends a row.
func (s *spool) add(row []float64) error {
	for i, v := range row {
		s.columns[i] = append(s.columns[i], v)
	}
	if len(s.columns[0]) < chunkRows {
		return nil
	}
	return s.write()
}

// write writes the chunk at hand.
func (s *spool) write() error {
	rows := len(s.columns[0])
	if rows == 0 {
		return nil
	}
	s.raw = s.raw[:0]
	for i, c := range s.columns {
		for _, v := range c {
			s.raw = binary.LittleEndian.AppendUint64(s.raw, math.Float64bits(v))
		}
		s.columns[i] = c[:0]
	}
	if _, err := s.f.WriteAt(s.raw, s.size); err != nil {
		return spoolError(s.dir, err)
	}
	s.chunks = append(s.chunks, chunk{s.size, rows})
	s.size += int64(len(s.raw))
	return nil
}

// cut ends a section and returns where its rows are.
func (s *spool) cut() ([]chunk, error) {
	err := s.write()
	out := s.chunks
	s.chunks = nil
	return out, err
}

// column reads a column of a chunk into dst, which it grows as needed.
func (s *spool) column(c chunk, column int, dst []float64) ([]float64, error) {
	n := c.rows * 8
	if cap(s.raw) < n {
		s.raw = make([]byte, n)
	}
	s.raw = s.raw[:n]
	if _, err := s.f.ReadAt(s.raw, c.at+int64(column*n)); err != nil {
		return dst, spoolError(s.dir, err)
	}
	dst = dst[:0]
	for i := 0; i < n; i += 8 {
		dst = append(dst, math.Float64frombits(binary.LittleEndian.Uint64(s.raw[i:])))
	}
	return dst, nil
}

func spoolError(dir string, err error) error {
	var pe *fs.PathError
	if errors.As(err, &pe) {
		err = pe.Err
	}
	return fmt.Errorf("a temporary file in %s: %w: let TMPDIR name a directory with room, or export less at a time", dir, err)
}
