package data

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"slices"
)

// MinSegment is the number of rows below which a segment is dropped: its own initial state and constant would take
// up most of what it says.
const MinSegment = 50

// Open opens a rig file or a log with open (os.Open, say) and refuses what is no file with an error of one line.
func Open(path string, open func(string) (fs.File, error)) (fs.File, error) {
	f, err := open(path)
	switch {
	case errors.Is(err, fs.ErrNotExist):
		return nil, &ParseError{File: path, Err: fs.ErrNotExist, Hint: "check the name and the folder"}
	case errors.Is(err, fs.ErrPermission):
		return nil, &ParseError{File: path, Err: fs.ErrPermission, Hint: "you may not read this file"}
	case err != nil:
		return nil, &ParseError{File: path, Err: err}
	}
	info, err := f.Stat()
	if err != nil {
		f.Close()
		return nil, &ParseError{File: path, Err: err}
	}
	if info.IsDir() {
		f.Close()
		return nil, &ParseError{File: path, Err: errors.New("a directory"), Hint: "name the file in it"}
	}
	return f, nil
}

// ReadLog reads one log, plain or packed by gzip, as the rig file says. file is the log's name, for messages.
//
// What is wrong with the log but can be lived with is listed in the experiment's Flaws, each with what was done
// about it; what cannot comes back as a *ParseError. The rig file lacking what NeedLog asks for is an error, too. A
// reader that tells its Size, as a bytes.Reader does, spares columns that grow.
func ReadLog(r io.Reader, file string, rig *Rig) (*Experiment, error) {
	return ReadLogContext(context.Background(), r, file, rig)
}

// ReadLogContext is ReadLog until ctx is done, whose error it then returns.
func ReadLogContext(ctx context.Context, r io.Reader, file string, rig *Rig) (*Experiment, error) {
	if err := rig.NeedLog(); err != nil {
		return nil, err
	}
	src, err := newSource(r)
	if err != nil {
		return nil, readingError(file, err)
	}
	l := &log{file: file, rig: rig}
	t, err := readTable(ctx, src, file, &rig.Layout, l.choose)
	if err != nil {
		return nil, err
	}
	sum, err := src.checksum()
	if err != nil {
		return nil, readingError(file, err)
	}
	l.table = t
	exp, err := l.experiment(ctx)
	if err != nil {
		return nil, err
	}
	exp.SHA256, exp.Layout = sum, src.how+exp.Layout
	return exp, nil
}

// A log is a table in which each column has its part.
type log struct {
	*table
	file string
	rig  *Rig

	fields               []int // of the columns read
	time, u, y, r, d, tu int   // index into columns, or -1; tu: stamps of the input by a clock of its own
	dropped              []uint8
	clipped              int // rows of the input beyond its limits
	period               float64
	flaws                []Flaw
}

// Reasons why a row is not used, bits of log.dropped.
const (
	startsSegment uint8 = 1 << iota // the row is fine, but not one period after the one before
	isMissingRow
	isTripped
	isStuck
	isResting
	isWrong  // the output only, in a row or a few: the segment goes on
	isUnused = ^startsSegment
)

// choose finds the columns that the rig file names.
func (l *log) choose(lay *layout) (fields, stamps []int, err error) {
	var parts []string
	for _, c := range []struct {
		key, name string
		index     *int
	}{
		{"time", l.rig.Log.Time, &l.time}, {"input", l.rig.Log.Input, &l.u}, {"output", l.rig.Log.Output, &l.y},
		{"reference", l.rig.Log.Reference, &l.r}, {"dither", l.rig.Log.Dither, &l.d},
		{"input_time", l.rig.Log.InputTime, &l.tu},
	} {
		*c.index = -1
		if c.name == "" {
			continue
		}
		f, err := lay.field(c.name)
		if err != nil {
			e := err.(*ParseError)
			e.Err = fmt.Errorf("[log] %s %s (%s): %w", c.key, quote(c.name), l.rig.where("log."+c.key), e.Err)
			return nil, nil, e
		}
		if i := slices.Index(fields, f); i >= 0 {
			return nil, nil, &ParseError{Line: lay.header, Hint: "each part needs a column of its own",
				Err: fmt.Errorf("[log] %s and %s (%s) are both column %d, %s", parts[i], c.key, l.rig.where("log."+parts[i]), f+1, quote(lay.names[f]))}
		}
		*c.index = len(fields)
		if c.key == "time" || c.key == "input_time" {
			stamps = append(stamps, len(fields))
		}
		fields, parts = append(fields, f), append(parts, c.key)
	}
	l.fields = fields
	return fields, stamps, nil
}

// where names the rig file and the line of a key.
func (g *Rig) where(key string) string {
	if n := g.Line(key); n > 0 {
		return fmt.Sprintf("%s line %d", g.name(), n)
	}
	return g.name()
}

// column returns the name in the log of a column read.
func (l *log) column(index int) string { return l.names[l.fields[index]] }

func (l *log) flaw(f Flaw) { l.flaws = append(l.flaws, f) }

// fault returns an error about the log as a whole, or about a row where row >= 0.
func (l *log) fault(row int, hint, format string, args ...any) error {
	e := &ParseError{File: l.file, Err: fmt.Errorf(format, args...), Hint: hint}
	if row >= 0 {
		e.Line = l.lines.at(row)
	}
	return e
}

// experiment turns the columns into segments.
func (l *log) experiment(ctx context.Context) (*Experiment, error) {
	exp := &Experiment{File: l.file, Rows: l.rows, Columns: l.names, Layout: l.describe()}
	if l.rows == 1 {
		return nil, l.fault(0, fmt.Sprintf("a fit needs %d rows at the very least", MinSegment), "%w: only this one", ErrTooShort)
	}
	for _, i := range []int{l.u, l.y} {
		if err := l.checkMoves(i); err != nil {
			return nil, err
		}
	}
	l.dropped = make([]uint8, l.rows)
	if err := l.timeBase(); err != nil {
		return nil, err
	}
	exp.InputStep, exp.OutputStep = grid(l.levels(l.columns[l.u]), fewestInput), grid(l.levels(l.columns[l.y]), fewestInput)
	l.undoSkew()
	if err := l.findFlaws(ctx); err != nil {
		return nil, err
	}
	if 2*l.clipped > l.rows {
		return nil, l.mostlyBeyond()
	}
	exp.Period = l.period
	exp.Segments = l.segments()
	for _, s := range exp.Segments {
		exp.Used += len(s.Y) - len(s.Wrong)
	}
	exp.Flaws = l.flaws
	if len(exp.Segments) == 0 {
		return nil, l.tooShort()
	}
	return exp, nil
}
