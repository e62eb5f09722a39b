package data

import (
	"errors"
	"fmt"
	"strings"
)

// Sentinels that a *ParseError may wrap; test for them with errors.Is.
var (
	// ErrUnsupported: the file is well formed but asks for what the tool cannot do.
	ErrUnsupported = errors.New("not supported")
	// ErrNoColumn: a column that the rig file names is not in the log.
	ErrNoColumn = errors.New("no such column")
	// ErrTooShort: no stretch of the log is long enough for a fit.
	ErrTooShort = errors.New("too few rows")
)

// A ParseError says what is wrong with an input file, where, and what to do. Its text is one line.
type ParseError struct {
	File string
	// Line counts from 1; 0 where the fault has no line.
	Line int
	// Column counts from 1: the character in a rig file, the field in a log; 0 where unknown.
	Column int
	Err    error  // what is wrong
	Hint   string // what to do about it; may be empty
}

// Error returns "file: line 12, column 3: what; hint".
func (e *ParseError) Error() string {
	var b strings.Builder
	b.WriteString(e.File)
	b.WriteString(": ")
	if e.Line > 0 {
		fmt.Fprintf(&b, "line %d", e.Line)
		if e.Column > 0 {
			fmt.Fprintf(&b, ", column %d", e.Column)
		}
		b.WriteString(": ")
	}
	b.WriteString(e.Err.Error())
	if e.Hint != "" {
		b.WriteString("; ")
		b.WriteString(e.Hint)
	}
	return b.String()
}

// Unwrap returns Err.
func (e *ParseError) Unwrap() error { return e.Err }
