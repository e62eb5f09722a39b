package history

import (
	"bufio"
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"slices"
	"time"

	"steadyrig/fit"
	"steadyrig/ident"
)

// longestLine is in bytes; no entry comes near it.
const longestLine = 1 << 20

// A BadLine is one that holds no entry.
type BadLine struct {
	Line int    `json:"line"` // from 1
	Why  string `json:"why"`
}

// Read reads a history line by line. Lines that hold no entry are told, the others are read all the same; an error is
// one of r.
func Read(r io.Reader) ([]Entry, []BadLine, error) {
	var list []Entry
	var bad []BadLine
	in := bufio.NewReaderSize(r, 1<<16)
	for n := 1; ; n++ {
		line, long, err := readLine(in)
		if err != nil && err != io.EOF {
			return list, bad, fmt.Errorf("reading line %d: %w", n, err)
		}
		text := bytes.TrimSpace(line)
		switch {
		case long:
			bad = append(bad, BadLine{n, fmt.Sprintf("more than %d bytes", longestLine)})
		case len(text) > 0:
			e, why := parse(text)
			switch {
			case why == "":
				e.Line, e.Text = n, slices.Clone(text)
				list = append(list, *e)
			case err == io.EOF:
				bad = append(bad, BadLine{n, "half written"})
			default:
				bad = append(bad, BadLine{n, why})
			}
		}
		if err == io.EOF {
			return list, bad, nil
		}
	}
}

// readLine returns the next line; of one that is too long only that it is. The line is valid until the next call.
func readLine(in *bufio.Reader) (line []byte, long bool, err error) {
	for {
		part, err := in.ReadSlice('\n')
		if err == nil && line == nil {
			return part, len(part) > longestLine, nil
		}
		if long = long || len(line)+len(part) > longestLine; !long {
			line = append(line, part...)
		}
		if !errors.Is(err, bufio.ErrBufferFull) {
			return line, long, err
		}
	}
}

// parse reads one line, or says what is wrong with it.
func parse(text []byte) (*Entry, string) {
	e := new(Entry)
	if err := json.Unmarshal(text, e); err != nil {
		return nil, "no entry: " + err.Error()
	}
	if e.Schema != Schema {
		return nil, fmt.Sprintf("schema is %q, want %q", e.Schema, Schema)
	}
	if _, err := e.Time(); err != nil {
		return nil, fmt.Sprintf("made is %q, want a time as in 2006-01-02T15:04:05Z", e.Made)
	}
	if e.Plant != nil && e.Plant.Followed != nil {
		if err := check(e.Plant.Followed); err != nil {
			return nil, "followed: " + err.Error()
		}
	}
	return e, ""
}

// check holds the parts of what is followed against each other.
func check(f *ident.Followed) error {
	square := len(f.Covariance) == len(f.Names) && len(f.Values) == len(f.Names)
	for _, row := range f.Covariance {
		square = square && len(row) == len(f.Names)
	}
	if !square {
		return fmt.Errorf("%d names, %d values and a covariance that does not fit", len(f.Names), len(f.Values))
	}
	for i, name := range f.Names {
		if !(f.Covariance[i][i] > 0) || slices.Index(f.Names, name) < i {
			return fmt.Errorf("%q is there twice or has no deviation", name)
		}
	}
	return nil
}

// reading is what a plant says of names.
func reading(f *ident.Followed, names []string) (fit.Reading, error) {
	p := f.Pick(names)
	return fit.NewReading(p.Values, p.Covariance)
}

// Time is when the entry was made.
func (e *Entry) Time() (time.Time, error) { return time.Parse(time.RFC3339, e.Made) }

// Day is the date on which the entry was made, where it was made.
func (e *Entry) Day() string { return e.Made[:len("2006-01-02")] }
