package main

import (
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"
)

// intoFile lets write fill a file, or leaves nothing behind. With force a file
// that exists is replaced, but only by a whole one.
func intoFile(path string, force bool, write func(io.Writer) error) (err error) {
	info, statErr := os.Stat(path)
	if statErr == nil && !info.Mode().IsRegular() {
		return intoDevice(path, info, write)
	}
	var f *os.File
	replace := force && statErr == nil
	if replace {
		f, err = os.CreateTemp(filepath.Dir(path), ".offbeat-export-*")
	} else {
		f, err = os.OpenFile(path, os.O_WRONLY|os.O_CREATE|os.O_EXCL, 0o644)
	}
	if errors.Is(err, fs.ErrExist) {
		return fmt.Errorf("%s exists: choose another name, or overwrite it with --force", path)
	}
	if err != nil {
		return err
	}
	err = write(f)
	if e := f.Close(); err == nil {
		err = e
	}
	if err == nil && replace {
		err = errors.Join(os.Chmod(f.Name(), info.Mode().Perm()), os.Rename(f.Name(), path))
	}
	if err != nil {
		os.Remove(f.Name())
	}
	return err
}

// intoDevice writes to what is not a regular file, such as a FIFO.
func intoDevice(path string, info fs.FileInfo, write func(io.Writer) error) error {
	if info.IsDir() {
		return fmt.Errorf("%s: a directory: name a file in it", path)
	}
	f, err := os.OpenFile(path, os.O_WRONLY, 0)
	if err != nil {
		return err
	}
	err = write(f)
	if e := f.Close(); err == nil {
		err = e
	}
	return err
}
