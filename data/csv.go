package data

import (
	"bufio"
	"bytes"
	"compress/flate"
	"compress/gzip"
	"context"
	"crypto/sha256"
	"encoding/binary"
	"encoding/hex"
	"errors"
	"fmt"
	"hash"
	"io"
	"math"
	"slices"
	"strings"
	"unicode/utf16"
	"unicode/utf8"
)

// A source is a log's bytes, unpacked where they came packed, as UTF-8 where they came as UTF-16, and their checksum as
// they came.
type source struct {
	io.Reader
	raw io.Reader
	sum hash.Hash
	how string // they came, for people: "gzip, UTF-16, "

	size int64
}

// sized is what knows how many bytes it has, as a bytes.Reader does.
type sized interface{ Size() int64 }

// Size returns 0 where that is not known, or bytes came packed.
func (s *source) Size() int64 { return s.size }

func newSource(r io.Reader) (*source, error) {
	s := &source{sum: sha256.New()}
	if r, ok := r.(sized); ok {
		s.size = r.Size()
	}
	s.raw = io.TeeReader(r, s.sum)
	buffered := bufio.NewReaderSize(s.raw, 1<<16)
	s.Reader = buffered
	if magic, _ := buffered.Peek(2); string(magic) == "\x1f\x8b" {
		unpacked, err := gzip.NewReader(buffered)
		if err != nil {
			return nil, err
		}
		buffered = bufio.NewReaderSize(unpacked, 1<<16)
		s.Reader, s.how, s.size = buffered, "gzip, ", 0
	}
	switch mark, _ := buffered.Peek(2); string(mark) {
	case "\xff\xfe":
		s.Reader, s.how = &wideText{from: buffered, order: binary.LittleEndian}, s.how+"UTF-16, "
	case "\xfe\xff":
		s.Reader, s.how = &wideText{from: buffered, order: binary.BigEndian}, s.how+"UTF-16, "
	}
	return s, nil
}

// A wideText reads UTF-16 as UTF-8.
type wideText struct {
	from  io.Reader
	order binary.ByteOrder
	raw   [4096]byte
	have  int // bytes of raw not yet decoded
	text  []byte
	err   error
}

func (w *wideText) Read(p []byte) (int, error) {
	for len(w.text) == 0 {
		if w.err != nil {
			return 0, w.err
		}
		var n int
		n, w.err = io.ReadAtLeast(w.from, w.raw[w.have:], 1)
		w.have += n
		w.decode()
	}
	n := copy(p, w.text)
	w.text = w.text[n:]
	return n, nil
}

// decode decodes what there is, but half of a character at the end of raw unless nothing follows it.
func (w *wideText) decode() {
	w.text = w.text[:0]
	at := 0
	for at+2 <= w.have {
		r := rune(w.order.Uint16(w.raw[at:]))
		size := 2
		if utf16.IsSurrogate(r) {
			if at+4 > w.have && w.err == nil {
				break
			}
			second := rune(utf8.RuneError)
			if at+4 <= w.have {
				second = rune(w.order.Uint16(w.raw[at+2:]))
			}
			if r = utf16.DecodeRune(r, second); r != utf8.RuneError {
				size = 4
			}
		}
		w.text = utf8.AppendRune(w.text, r)
		at += size
	}
	w.have = copy(w.raw[:], w.raw[at:w.have])
}

// checksum reads what is left and returns the SHA-256 of all bytes in hex.
func (s *source) checksum() (string, error) {
	if _, err := io.Copy(io.Discard, s.raw); err != nil {
		return "", err
	}
	return hex.EncodeToString(s.sum.Sum(nil)), nil
}

// A table holds the wanted columns of a log, row by row; NaN where a cell holds no number.
type table struct {
	layout
	columns [][]float64 // as asked for; those of stamps in s
	clocks  []clock     // of the columns of stamps
	lines   lineMap
	rows    int
	ragged  int // line of a last line that ends within its row, or 0
	again   []int
}

// A lineMap knows the line of each row. It keeps only the rows whose line is not one after that of the row before.
type lineMap struct{ row, line []int }

func (m *lineMap) add(row, line int) {
	if n := len(m.row); n > 0 && m.line[n-1]+row-m.row[n-1] == line {
		return
	}
	m.row, m.line = append(m.row, row), append(m.line, line)
}

// at returns the line of a row.
func (m *lineMap) at(row int) int {
	lo, hi := 0, len(m.row) // m.row[lo] <= row < m.row[hi]
	for hi-lo > 1 {
		if mid := (lo + hi) / 2; m.row[mid] <= row {
			lo = mid
		} else {
			hi = mid
		}
	}
	if hi == 0 {
		return 0
	}
	return m.line[lo] + row - m.row[lo]
}

// A reader cuts a log into lines and those into numbers.
type reader struct {
	table
	ctx    context.Context
	file   string
	want   []int    // column asked for -> field
	clock  []*clock // field -> clock that it is read by, nil: plain numbers
	part   []int    // field -> column asked for, or -1
	last   int      // last field wanted
	values []float64
	header []byte // for a header that comes again
	cells  [][]byte
	faults faults
}

// faults collects cells that should be numbers and are not.
type faults struct {
	first []*ParseError
	count int
}

const faultsShown = 4

// add counts a fault; describe is called for the few that are shown.
func (f *faults) add(describe func() *ParseError) {
	f.count++
	if len(f.first) < faultsShown {
		f.first = append(f.first, describe())
	}
}

// err returns all faults in one line, or nil.
func (f *faults) err() error {
	if f.count == 0 {
		return nil
	}
	first := *f.first[0]
	if f.count == 1 {
		return &first
	}
	var b strings.Builder
	b.WriteString(first.Err.Error())
	for _, e := range f.first[1:] {
		fmt.Fprintf(&b, "; line %d", e.Line)
		if e.Column > 0 {
			fmt.Fprintf(&b, ", column %d", e.Column)
		}
		fmt.Fprintf(&b, ": %v", e.Err)
	}
	if more := f.count - len(f.first); more > 0 {
		fmt.Fprintf(&b, "; and %d more", more)
	}
	first.Err = errors.New(b.String())
	return &first
}

// readHead reads the first bytes of a log, without a byte order mark. whole tells that they are all of it.
func readHead(src io.Reader, file string) (head []byte, whole bool, err error) {
	head = make([]byte, headSize)
	n, err := io.ReadFull(src, head)
	if err == io.EOF || err == io.ErrUnexpectedEOF {
		// ReadFull says of a log that has ended what the unpacking says of one that was cut off: ask again.
		var more int
		more, err = src.Read(head[n : n+1])
		n += more
		whole = err == io.EOF
	}
	if err != nil && !whole {
		return nil, false, readingError(file, err)
	}
	return bytes.TrimPrefix(head[:n], []byte("\xef\xbb\xbf")), whole, nil
}

// readTable reads a log, until ctx is done. choose is told the layout and returns the fields wanted, and which of them hold stamps (indices
// into them). given is what the rig file says of the layout.
func readTable(ctx context.Context, src io.Reader, file string, given *Layout, choose func(*layout) (fields, stamps []int, err error)) (*table, error) {
	head, whole, err := readHead(src, file)
	if err != nil {
		return nil, err
	}
	l, err := recognise(head, whole, given)
	if err != nil {
		return nil, inFile(file, err)
	}
	fields, stamps, err := choose(l)
	if err != nil {
		return nil, inFile(file, err)
	}
	r := &reader{table: table{layout: *l}, ctx: ctx, file: file, want: fields}
	r.columns = make([][]float64, len(fields))
	r.values = make([]float64, len(fields))
	r.part = make([]int, len(l.names))
	for i := range r.part {
		r.part[i] = -1
	}
	for i, f := range fields {
		r.part[f] = i
		r.last = max(r.last, f)
	}
	r.clock, r.clocks = make([]*clock, len(l.names)), make([]clock, len(stamps))
	for i, k := range stamps {
		r.clock[fields[k]] = &r.clocks[i]
	}
	if err := r.read(head, src, whole); err != nil {
		return nil, err
	}
	return &r.table, nil
}

// inFile fills in the file of a ParseError.
func inFile(file string, err error) error {
	if e, ok := err.(*ParseError); ok {
		e.File = file
	}
	return err
}

func readingError(file string, err error) error {
	var corrupt flate.CorruptInputError
	switch {
	case errors.Is(err, io.ErrUnexpectedEOF):
		return &ParseError{File: file, Err: errors.New("the packed file ends before its end"), Hint: "copy it again"}
	case errors.Is(err, gzip.ErrChecksum), errors.Is(err, gzip.ErrHeader), errors.As(err, &corrupt):
		return &ParseError{File: file, Err: err, Hint: "the packed file is damaged: copy it again"}
	}
	return fmt.Errorf("reading %q: %w", file, err)
}

// read cuts the log into lines, head first.
func (r *reader) read(head []byte, src io.Reader, whole bool) error {
	buf := make([]byte, 0, 4*headSize)
	buf = append(buf, head...)
	line := 1
	reserved := false
	for {
		if err := r.ctx.Err(); err != nil {
			return err
		}
		rest := buf
		for {
			i := bytes.IndexByte(rest, r.lineEnd)
			if i < 0 {
				break
			}
			if line >= r.from {
				r.line(rest[:i], line, false)
			} else if line == r.layout.header {
				r.header = bytes.Clone(rest[:i])
			}
			rest = rest[i+1:]
			line++
		}
		if whole {
			if len(rest) > 0 && line >= r.from {
				r.line(rest, line, true)
			}
			break
		}
		if s, ok := src.(sized); ok && !reserved && r.rows > 0 {
			r.reserve(float64(r.rows) / float64(len(buf)-len(rest)) * float64(s.Size()))
			reserved = true
		}
		if len(rest) > maxLine {
			return inFile(r.file, tooLong(line))
		}
		buf = buf[:copy(buf[:cap(buf)], rest)]
		n, err := io.ReadAtLeast(src, buf[len(buf):cap(buf)], 1)
		buf = buf[:len(buf)+n]
		if err == io.EOF {
			whole = true
		} else if err != nil {
			return readingError(r.file, err)
		}
	}
	if err := r.faults.err(); err != nil {
		return err
	}
	if r.rows == 0 {
		return &ParseError{File: r.file, Err: fmt.Errorf("%w: none", ErrTooShort), Hint: "the log has a header and nothing else"}
	}
	return nil
}

// mostReserved bounds the rows that columns have room for from the start.
const mostReserved = 1 << 24

// reserve makes room for about so many rows: columns that grow are copied, and what they grew out of stays for a while.
func (r *reader) reserve(rows float64) {
	const more = 1.02
	for i, c := range r.columns {
		r.columns[i] = slices.Grow(c, max(0, int(min(more*rows, mostReserved))-len(c)))
	}
}

// line reads one line of the part of the log where the rows are. open: the file ends in it, without a line end.
func (r *reader) line(text []byte, line int, open bool) {
	if n := len(text); n > 0 && text[n-1] == '\r' {
		text = text[:n-1]
	}
	if !r.quick(text) && !r.slow(text, line, open) {
		return
	}
	for i, x := range r.values {
		r.columns[i] = append(r.columns[i], x)
	}
	r.lines.add(r.rows, line)
	r.rows++
}

// quick reads a row of plain numbers into r.values. It returns false for any other line, which slow then reads.
func (r *reader) quick(text []byte) bool {
	for i := range r.clocks {
		if c := &r.clocks[i]; !c.started || c.iso || c.base != 0 {
			return false
		}
	}
	if r.part[0] < 0 && r.isComment(text) {
		return false
	}
	if r.delimiter == ' ' {
		return r.quickBlanks(text)
	}
	pos := 0
	for f := 0; ; f++ {
		i := r.part[f]
		if i < 0 {
			j := bytes.IndexByte(text[pos:], r.delimiter)
			if j < 0 || text[pos] == '"' {
				return false
			}
			pos += j + 1
			continue
		}
		for pos < len(text) && text[pos] == ' ' {
			pos++
		}
		x, n := scanNumber(text[pos:], r.mark)
		if n == 0 || math.IsInf(x, 0) {
			return false
		}
		pos += n
		for pos < len(text) && text[pos] == ' ' {
			pos++
		}
		if c := r.clock[f]; c != nil {
			x *= c.scale
		}
		r.values[i] = x
		if pos == len(text) {
			return f == r.last && f == len(r.part)-1 && !r.trailing
		}
		if text[pos] != r.delimiter {
			return false
		}
		if f == r.last {
			break
		}
		pos++
	}
	// What is left starts with the delimiter behind the last column wanted.
	rest := text[pos:]
	left := len(r.part) - 1 - r.last
	if r.trailing {
		left++
	}
	return bytes.Count(rest, []byte{r.delimiter}) == left && bytes.IndexByte(rest, '"') < 0
}

// quickBlanks is quick for cells between runs of blanks and tabs.
func (r *reader) quickBlanks(text []byte) bool {
	pos, f := 0, 0
	for {
		for pos < len(text) && (text[pos] == ' ' || text[pos] == '\t') {
			pos++
		}
		if pos == len(text) {
			return f == len(r.part)
		}
		if f == len(r.part) || text[pos] == '"' {
			return false
		}
		if i := r.part[f]; i >= 0 {
			x, n := scanNumber(text[pos:], r.mark)
			if n == 0 || math.IsInf(x, 0) {
				return false
			}
			pos += n
			if pos < len(text) && text[pos] != ' ' && text[pos] != '\t' {
				return false
			}
			if c := r.clock[f]; c != nil {
				x *= c.scale
			}
			r.values[i] = x
		} else {
			for pos < len(text) && text[pos] != ' ' && text[pos] != '\t' {
				pos++
			}
		}
		f++
	}
}

// slow reads any line into r.values, notes what is wrong with it, and tells whether it is a row.
func (r *reader) slow(text []byte, line int, open bool) bool {
	if isBlank(text) || r.isComment(text) {
		return false
	}
	r.cells = r.layout.cells(r.cells, text)
	cells := r.cells
	if len(cells) != len(r.part) {
		if open && len(cells) < len(r.part) {
			r.ragged = line
			return false
		}
		r.faults.add(func() *ParseError {
			return &ParseError{File: r.file, Line: line, Err: fmt.Errorf("%s where %d belong", plural(len(cells), "cell", "cells"), len(r.part)),
				Hint: "mend or remove these lines"}
		})
		return false
	}
	if r.rows > 0 && r.layout.header > 0 && len(r.header) > 0 && bytes.Equal(bytes.TrimSpace(text), bytes.TrimSpace(r.header)) {
		r.again = append(r.again, r.rows)
		return false
	}
	for i, f := range r.want {
		x, ok := r.number(cells[f], f)
		if !ok {
			r.faults.add(func() *ParseError { return r.badCell(cells[f], line, f) })
		}
		r.values[i] = x
	}
	return true
}

// badCell says what is wrong with a cell of field f that holds no number.
func (r *reader) badCell(cell []byte, line, f int) *ParseError {
	e := &ParseError{File: r.file, Line: line, Column: f + 1, Hint: "mend or remove these lines; an empty cell or NaN may stand for a missing value"}
	what := "is no number"
	if r.clock[f] != nil {
		what = "is no time stamp"
		e.Hint = "write s, or ISO 8601 like 2025-12-17T20:58:11.705"
	} else if x, n := scanNumber(cell, r.mark); n == len(cell) && math.IsInf(x, 0) {
		what = "is too large for a number"
	}
	e.Err = fmt.Errorf("%s %s (column %s)", quote(readable(cell)), what, quote(r.names[f]))
	return e
}

// number reads one cell of field f.
func (r *reader) number(cell []byte, f int) (float64, bool) {
	if isMissing(cell) {
		return math.NaN(), true
	}
	if c := r.clock[f]; c != nil {
		if !c.started && !c.start(cell, r.mark, r.unit(f)) {
			return math.NaN(), false
		}
		return c.read(cell, r.mark)
	}
	x, n := scanNumber(cell, r.mark)
	if n == len(cell) && !math.IsInf(x, 0) {
		return x, true
	}
	if n < len(cell) && !r.marked && r.delimiter != ',' { // the first decimal mark of the log is none of the head's
		if x, n := scanNumber(cell, ','); n == len(cell) {
			r.mark, r.marked = ',', true
			return x, true
		}
	}
	return math.NaN(), false
}

// unit returns what the log says of the unit of a field: its units row, or the brackets in its name.
func (l *layout) unit(f int) string {
	if l.units != nil {
		return l.units[f]
	}
	_, unit := splitUnit(l.names[f])
	return unit
}

// splitUnit cuts "u [A]" or "u (A)" into "u" and "A".
func splitUnit(name string) (bare, unit string) {
	for _, p := range []string{"[]", "()"} {
		if i := strings.IndexByte(name, p[0]); i > 0 && name[len(name)-1] == p[1] {
			return strings.TrimSpace(name[:i]), strings.TrimSpace(name[i+1 : len(name)-1])
		}
	}
	return name, ""
}

// field finds a column by its name: as written, or else without its unit, if that is one column only.
func (l *layout) field(name string) (int, error) {
	var found, bare []int
	for i, n := range l.names {
		if n == name {
			found = append(found, i)
		} else if b, _ := splitUnit(n); b == name {
			bare = append(bare, i)
		}
	}
	if len(found) == 0 {
		found = bare
	}
	if len(found) == 1 {
		return found[0], nil
	}
	e := &ParseError{Line: l.header, Err: ErrNoColumn}
	if len(found) > 1 {
		e.Err = fmt.Errorf("columns %d and %d both have that name", found[0]+1, found[1]+1)
		e.Hint = "give each column a name of its own"
		return 0, e
	}
	list := "the columns are " + quoteList(l.names, 20)
	if !l.named {
		list = fmt.Sprintf("the log has no header: its columns are called c1 to c%d", len(l.names))
	}
	if near, ok := nearest(name, l.names); ok {
		e.Hint = "did you mean " + quote(near) + "? " + list
	} else {
		e.Hint = list
	}
	return 0, e
}
