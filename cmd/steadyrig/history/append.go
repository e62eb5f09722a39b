package history

import (
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
)

// Append adds entries at the end of the file, which it makes where there is none, and returns once they are on the
// disk. Only Schema is filled in.
func Append(path string, entries ...Entry) (err error) {
	text, err := encode(entries)
	if err != nil {
		return err
	}
	f, err := os.OpenFile(path, os.O_RDWR|os.O_CREATE|os.O_APPEND, 0o644)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, f.Close()) }() // which gives the lock back, too
	if err := lock(f); err != nil {
		return err
	}
	cut, err := cutOff(f)
	if err != nil {
		return err
	}
	if cut {
		text = append([]byte{'\n'}, text...)
	}
	if _, err := f.Write(text); err != nil {
		return err
	}
	return f.Sync()
}

// encode is entries as lines.
func encode(entries []Entry) ([]byte, error) {
	var text []byte
	for _, e := range entries {
		e.Schema = Schema
		line, err := json.Marshal(e)
		if err != nil {
			return nil, fmt.Errorf("encoding an entry: %w", err)
		}
		text = append(append(text, line...), '\n')
	}
	return text, nil
}

// cutOff reports whether the last line of a file does not end: its writer was stopped.
func cutOff(f *os.File) (bool, error) {
	info, err := f.Stat()
	if err != nil || info.Size() == 0 {
		return false, err
	}
	last := make([]byte, 1)
	if _, err := f.ReadAt(last, info.Size()-1); err != nil && err != io.EOF {
		return false, err
	}
	return last[0] != '\n', nil
}
