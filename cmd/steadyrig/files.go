package main

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
)

// checkFree refuses a path that must not be written to, before any work is done for it.
func checkFree(path string, force bool) error {
	info, err := os.Stat(path)
	switch {
	case err == nil && info.IsDir():
		return callErrorf("%s: a directory; name a file in it", path)
	case err == nil && !force:
		return callErrorf("%s: exists and is left alone; choose another --out or give --force", path)
	case err != nil && !errors.Is(err, fs.ErrNotExist):
		return callErrorf("%s: %w", path, plainPathError(err))
	}
	if dir, err := os.Stat(filepath.Dir(path)); err != nil || !dir.IsDir() {
		return callErrorf("%s: there is no folder %s; make it first", path, filepath.Dir(path))
	}
	return nil
}

// writeFile writes a file whole or not at all: beside it first, then under its name.
func writeFile(path string, force bool, content []byte) error {
	if err := checkFree(path, force); err != nil {
		return err
	}
	f, err := os.CreateTemp(filepath.Dir(path), ".steadyrig-*")
	if err != nil {
		return callErrorf("writing %s: %w", path, plainPathError(err))
	}
	defer os.Remove(f.Name()) // fails once renamed
	_, err = f.Write(content)
	if e := f.Chmod(0o644); err == nil {
		err = e
	}
	if e := f.Close(); err == nil {
		err = e
	}
	if err == nil {
		err = os.Rename(f.Name(), path)
	}
	if err != nil {
		return fmt.Errorf("writing %s: %w", path, plainPathError(err))
	}
	return nil
}

// plainPathError drops the path and the name of the system call, which mean nothing to a caller.
func plainPathError(err error) error {
	var path *fs.PathError
	if errors.As(err, &path) {
		return path.Err
	}
	var link *os.LinkError
	if errors.As(err, &link) {
		return link.Err
	}
	return err
}

// A file is what a run leaves behind, before it is written.
type file struct {
	name    string
	content []byte
}

// checkFolder refuses a folder that must not be written to, before any work is done for it.
func checkFolder(path string, force bool, names ...string) error {
	info, err := os.Stat(path)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		return nil
	case err != nil:
		return callErrorf("%s: %w", path, plainPathError(err))
	case !info.IsDir():
		return callErrorf("%s: a file; name a folder", path)
	}
	for _, n := range names {
		if err := checkFree(filepath.Join(path, n), force); err != nil {
			return err
		}
	}
	return nil
}

// writeFolder writes files into a folder. A new folder appears whole or not at all; in one that exists each file does.
func writeFolder(path string, force bool, files []file) error {
	if _, err := os.Stat(path); err == nil {
		for _, f := range files {
			if err := writeFile(filepath.Join(path, f.name), force, f.content); err != nil {
				return err
			}
		}
		return nil
	}
	if err := os.MkdirAll(filepath.Dir(path), 0o755); err != nil {
		return callErrorf("%s: %w", path, plainPathError(err))
	}
	temp, err := os.MkdirTemp(filepath.Dir(path), ".steadyrig-*")
	if err != nil {
		return callErrorf("%s: %w", path, plainPathError(err))
	}
	defer os.RemoveAll(temp) // nothing is left of it once renamed
	for _, f := range files {
		if err := writeFile(filepath.Join(temp, f.name), false, f.content); err != nil {
			return err
		}
	}
	if err = os.Chmod(temp, 0o755); err == nil {
		err = os.Rename(temp, path)
	}
	if err != nil {
		return fmt.Errorf("writing %s: %w", path, plainPathError(err))
	}
	return nil
}
