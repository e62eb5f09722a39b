package data

import (
	"bytes"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"math"
	"path"
	"slices"
	"strings"
	"unicode"
	"unicode/utf8"

	"github.com/go-gota/gota/dataframe"
	"github.com/go-gota/gota/series"
)

// A Sheet is a table as people keep one: a row a test, columns of text or of numbers. Its methods return new ones.
//
// The table work is gota's, on cells of text: as numbers it would write them with six decimals and take digests for numbers.
// An empty cell says that nothing is known; one that reads NaN becomes empty.
type Sheet struct {
	Columns []SheetColumn
	label   string // before names that another sheet has, too
	frame   dataframe.DataFrame
}

// A SheetColumn is the head of a column.
type SheetColumn struct {
	Name   string
	Unit   string // empty: none, or not known
	Number bool   // all cells that are not empty are numbers, with a decimal point
}

const (
	badSheet = "data: a sheet wants columns of different names and rows of as many cells"
	// What people keep in a table is less.
	maxSheet        = 8 << 20 // bytes, unpacked
	maxSheetLine    = 1 << 16
	maxSheetColumns = 1000
)

// NewSheet makes a sheet of rows of cells. It panics where names repeat or are empty, or rows are not as long as columns.
func NewSheet(columns []SheetColumn, rows [][]string) *Sheet {
	s := &Sheet{Columns: columns}
	all := make([]series.Series, len(columns))
	for j, c := range columns {
		if c.Name == "" || s.index(c.Name) != j {
			panic(badSheet)
		}
		cells := make([]string, len(rows))
		for i, row := range rows {
			if len(row) != len(columns) {
				panic(badSheet)
			}
			if row[j] != "NaN" {
				cells[i] = row[j]
			}
		}
		all[j] = series.New(cells, series.String, c.Name)
	}
	return s.with(dataframe.New(all...))
}

// with is the sheet that frame has become, a selection of the columns.
func (s *Sheet) with(frame dataframe.DataFrame) *Sheet {
	if frame.Err != nil {
		panic(badSheet + ": " + frame.Err.Error())
	}
	t := &Sheet{label: s.label, frame: frame}
	for _, name := range frame.Names() {
		t.Columns = append(t.Columns, s.Columns[s.index(name)])
	}
	return t
}

// Rows lists the cells.
func (s *Sheet) Rows() [][]string { return s.frame.Records()[1:] }

// WriteCSV writes names and rows, cells as they are.
func (s *Sheet) WriteCSV(w io.Writer) error { return s.frame.WriteCSV(w) }

// index is that of a column, -1: there is none.
func (s *Sheet) index(name string) int {
	return slices.IndexFunc(s.Columns, func(c SheetColumn) bool { return c.Name == name })
}

// column finds a column by name.
func (s *Sheet) column(name string) (SheetColumn, []string, error) {
	if i := s.index(name); i >= 0 {
		return s.Columns[i], s.frame.Col(name).Records(), nil
	}
	var names []string
	for _, c := range s.Columns {
		names = append(names, c.Name)
	}
	if like, near := nearest(name, names); near {
		return SheetColumn{}, nil, fmt.Errorf("there is no column %s; did you mean %s?", quote(name), quote(like))
	}
	return SheetColumn{}, nil, fmt.Errorf("there is no column %s; the columns are %s", quote(name), quoteList(names, 40))
}

// Select returns the columns of a list such as `file, rows, "pay load"`, in its order.
func (s *Sheet) Select(list string) (*Sheet, error) {
	names, err := nameList(list)
	if err != nil {
		return nil, err
	}
	for i, name := range names {
		if _, _, err := s.column(name); err != nil {
			return nil, err
		}
		if slices.Contains(names[:i], name) {
			return nil, fmt.Errorf("column %s stands twice in the list; name it once", quote(name))
		}
	}
	return s.with(s.frame.Select(names)), nil
}

// Sort orders the rows by the columns of a list, the first counts most; a minus before a name turns its order. Rows that
// have no value stay last, rows alike in their order.
func (s *Sheet) Sort(list string) (*Sheet, error) {
	names, err := nameList(list)
	if err != nil {
		return nil, err
	}
	frame := s.frame
	// By one column after the other: of three and more at once gota's Arrange mixes the rows up.
	for _, name := range slices.Backward(names) {
		down := s.index(name) < 0 && strings.HasPrefix(name, "-")
		if down {
			name = strings.TrimSpace(name[1:])
		}
		c, _, err := s.column(name)
		if err != nil {
			return nil, err
		}
		frame = frame.Subset(c.values(frame.Col(name).Records()).Order(down))
	}
	return s.with(frame), nil
}

// values are cells as gota compares and orders them, empty ones as its NaN: alike with nothing, and last in any order.
func (c SheetColumn) values(cells []string) series.Series {
	if !c.Number {
		known := slices.Clone(cells)
		for i, cell := range cells {
			if cell == "" {
				known[i] = "NaN"
			}
		}
		return series.New(known, series.String, c.Name)
	}
	x := make([]float64, len(cells))
	for i, cell := range cells {
		var ok bool
		if x[i], ok = numberCell(cell); !ok {
			x[i] = math.NaN()
		}
	}
	return series.New(x, series.Float, c.Name)
}

// A condition is one that Where keeps rows by.
type condition struct{ name, operator, value string }

// operators of conditions, the longer of two that begin alike first.
var operators = []string{"==", "=", "!=", "<=", "<", ">=", ">", "has"}

// parseCondition reads NAME OPERATOR VALUE. A name or a value with blanks or operators in it stands in double quotes.
func parseCondition(text string) (c condition, err error) {
	shape := func(what string) (condition, error) {
		return condition{}, fmt.Errorf(`%s in the condition %s; write COLUMN OPERATOR VALUE, as in "rows > 1000", with one of = != < <= > >= has`, what, quote(text))
	}
	rest := strings.TrimSpace(text)
	if strings.HasPrefix(rest, `"`) {
		var closed bool
		if c.name, rest, closed = strings.Cut(rest[1:], `"`); !closed {
			return shape("a quote is not closed")
		}
	} else {
		end := strings.IndexFunc(rest, func(r rune) bool { return unicode.IsSpace(r) || strings.ContainsRune("=!<>", r) })
		if end < 0 {
			end = len(rest)
		}
		c.name, rest = rest[:end], rest[end:]
	}
	if c.name == "" {
		return shape("there is no column")
	}
	rest = strings.TrimSpace(rest)
	for _, o := range operators {
		if after, found := strings.CutPrefix(rest, o); found && (o != "has" || after == "" || after[0] == '"' || after != strings.TrimSpace(after)) {
			c.operator, rest = o, strings.TrimSpace(after)
			break
		}
	}
	switch {
	case c.operator == "":
		return shape("there is no operator")
	case rest == "":
		return shape(`there is no value ("" is an empty cell)`)
	case c.operator == "==":
		c.operator = "="
	}
	c.value = rest
	if strings.HasPrefix(rest, `"`) {
		inner, after, closed := strings.Cut(rest[1:], `"`)
		if !closed || after != "" {
			return shape("a quote is not closed, or more follows it")
		}
		c.value = inner
	}
	return c, nil
}

// Where keeps the rows for which a condition holds, such as `unstable_pole > 3`, `fit = sound`, `flaws has gap` or
// `problem != ""`. Numbers are compared with numbers; texts are equal, or one holds the other whatever its case. A row
// without a value is in no comparison but that with "".
func (s *Sheet) Where(text string) (*Sheet, error) {
	c, err := parseCondition(text)
	if err != nil {
		return nil, err
	}
	column, cells, err := s.column(c.name)
	if err != nil {
		return nil, err
	}
	keep := make([]bool, len(cells))
	compare := func(with any) {
		is := column.values(cells).Compare(map[string]series.Comparator{"=": series.Eq, "!=": series.Neq,
			"<": series.Less, "<=": series.LessEq, ">": series.Greater, ">=": series.GreaterEq}[c.operator], with)
		keep, _ = is.Bool() // a comparison is a bool
	}
	switch value, isNumber := numberCell(c.value); {
	case c.value == "" && (c.operator == "=" || c.operator == "!="):
		for i, cell := range cells {
			keep[i] = (cell == "") == (c.operator == "=")
		}
	case c.operator == "has" && column.Number:
		return nil, fmt.Errorf("column %s has numbers; has looks into text", quote(c.name))
	case c.operator == "has":
		for i, cell := range cells {
			keep[i] = strings.Contains(strings.ToLower(cell), strings.ToLower(c.value))
		}
	case column.Number && !isNumber:
		return nil, fmt.Errorf("column %s has numbers, %s is none (decimals after a point, no unit)", quote(c.name), quote(c.value))
	case column.Number:
		compare(value)
	case c.operator != "=" && c.operator != "!=":
		return nil, fmt.Errorf("column %s has text, such as %s; compare it by =, != or has", quote(c.name), quote(slices.MaxFunc(append(cells, ""), func(a, b string) int { return len(a) - len(b) })))
	default:
		compare(c.value)
	}
	return s.with(s.frame.Subset(keep)), nil
}

// Join puts the columns of another sheet beside each row, from its row of the same key: on names a column that both have,
// or OURS=THEIRS. Where it has no such row cells stay empty; alone lists its keys that no row here has. A name that both
// have is the other's label and a point before it.
//
// Keys are compared as text. A column of numbers is no key, since two tables seldom write them alike; nor is one in which
// the other sheet repeats itself, which would multiply rows.
func (s *Sheet) Join(other *Sheet, on string) (joined *Sheet, alone []string, err error) {
	ours, theirs := on, on
	if a, b, two := strings.Cut(on, "="); two && s.index(on) < 0 {
		ours, theirs = strings.TrimSpace(a), strings.TrimSpace(b)
	}
	c, have, err := s.column(ours)
	if err != nil {
		return nil, nil, err
	}
	if c.Number {
		return nil, nil, fmt.Errorf("column %s has numbers, which two tables seldom write alike; join on text, such as a file's name", quote(ours))
	}
	_, keys, err := other.column(theirs)
	if err != nil {
		return nil, nil, fmt.Errorf("%s: %w", other.label, err)
	}
	columns := slices.Clone(other.Columns)
	columns[other.index(theirs)].Name = ours
	for j := range columns {
		if name := columns[j].Name; j != other.index(theirs) && s.index(name) >= 0 {
			columns[j].Name = other.label + "." + name
		}
		if slices.ContainsFunc(columns[:j], func(c SheetColumn) bool { return c.Name == columns[j].Name }) || j != other.index(theirs) && s.index(columns[j].Name) >= 0 {
			return nil, nil, fmt.Errorf("%s: column %s would stand there twice; rename it", other.label, quote(columns[j].Name))
		}
	}
	wanted := map[string]bool{} // our keys, true: with a row there
	for _, key := range have {
		wanted[key] = false
	}
	var rows [][]string
	seen := map[string]bool{}
	for i, row := range other.Rows() {
		if keys[i] == "" {
			continue
		}
		if seen[keys[i]] {
			return nil, nil, fmt.Errorf("%s: %s stands twice in column %s; a key wants one row", other.label, quote(keys[i]), quote(theirs))
		}
		seen[keys[i]] = true
		if _, ours := wanted[keys[i]]; !ours {
			alone = append(alone, keys[i])
			continue
		}
		wanted[keys[i]] = true
		rows = append(rows, row)
	}
	// A key that the other sheet lacks gets an empty row there: gota would write NaN.
	for _, key := range have {
		if !wanted[key] {
			row := make([]string, len(columns))
			row[other.index(theirs)] = key
			rows = append(rows, row)
			wanted[key] = true
		}
	}
	both := s.frame.LeftJoin(NewSheet(columns, rows).frame, ours)
	wide := &Sheet{label: s.label, Columns: slices.Clone(s.Columns)}
	for _, c := range columns {
		if c.Name != ours {
			wide.Columns = append(wide.Columns, c)
		}
	}
	var names []string
	for _, c := range wide.Columns {
		names = append(names, c.Name)
	}
	return wide.with(both.Select(names)), alone, nil
}

// nameList reads names with commas between them; one with a comma in it stands in double quotes.
func nameList(list string) (names []string, err error) {
	r := csv.NewReader(strings.NewReader(list))
	r.TrimLeadingSpace = true
	names, err = r.Read()
	if err == nil {
		_, more := r.Read()
		for i := range names {
			if names[i] = strings.TrimSpace(names[i]); names[i] == "" || more != io.EOF {
				err = errors.New("a name is missing")
			}
		}
	}
	if err != nil {
		return nil, fmt.Errorf(`%s is no list of columns; write names with commas between them, "a, b" for one name with a comma in it`, quote(list))
	}
	return names, nil
}

// numberCell reads a cell that is a finite number.
func numberCell(cell string) (float64, bool) {
	x, n := scanNumber([]byte(cell), '.')
	return x, n == len(cell) && n > 0 && !math.IsInf(x, 0)
}

// ReadSheet reads a table that somebody keeps: names in the first line, then rows, with commas, semicolons or tabs between the
// cells; packed or not. Blanks around cells go, rows of empty cells, too. Errors are *ParseError.
func ReadSheet(r io.Reader, file string) (*Sheet, error) {
	src, err := newSource(r)
	if err != nil {
		return nil, readingError(file, err)
	}
	text, err := io.ReadAll(io.LimitReader(src, maxSheet+1))
	if err != nil {
		return nil, readingError(file, err)
	}
	fault := func(line, column int, hint, format string, args ...any) (*Sheet, error) {
		return nil, &ParseError{File: file, Line: line, Column: column, Err: fmt.Errorf(format, args...), Hint: hint}
	}
	const note = "give a table with one row a test, as a spreadsheet saves it"
	if len(text) > maxSheet {
		return fault(0, 0, note, "longer than %d MB, so no table of tests", maxSheet>>20)
	}
	for number, rest := 1, text; len(rest) > 0; number++ {
		line, after, _ := bytes.Cut(rest, []byte("\n"))
		if len(line) > maxSheetLine {
			return fault(number, 0, note, "longer than %d kB, so no table of tests", maxSheetLine>>10)
		}
		rest = after
	}
	if !utf8.Valid(text) { // one byte a sign
		text = []byte(latin(text))
	}
	first, _, _ := bytes.Cut(bytes.TrimLeft(text, "\r\n"), []byte("\n"))
	reader := csv.NewReader(bytes.NewReader(text))
	reader.Comma = delimiterOf(first)
	reader.FieldsPerRecord = -1
	var names []string
	var rows [][]string
	head := 0 // line of the names
	for {
		row, err := reader.Read()
		if err == io.EOF {
			break
		}
		if e := (*csv.ParseError)(nil); errors.As(err, &e) {
			return fault(e.Line, e.Column, `write a quote within quotes twice`, "%w", e.Err)
		} else if err != nil {
			return nil, readingError(file, err)
		}
		blank := true
		for j, cell := range row {
			if row[j] = strings.TrimFunc(cell, func(r rune) bool { return unicode.IsSpace(r) || r == '\ufeff' }); row[j] != "" {
				blank = false
			}
		}
		line, _ := reader.FieldPos(0)
		switch {
		case blank:
		case names == nil && len(row) > maxSheetColumns:
			return fault(line, 0, note, "%d columns, where a table of tests has %d at the most", len(row), maxSheetColumns)
		case names == nil:
			names, head = row, line
		case len(row) != len(names):
			return fault(line, 0, "quote cells that hold the delimiter", "%s where %d belong", plural(len(row), "cell", "cells"), len(names))
		default:
			rows = append(rows, row)
		}
	}
	if names == nil {
		return fault(0, 0, note, "no line of names")
	}
	base := path.Base(strings.ReplaceAll(file, `\`, "/"))
	return sheetOf(names, rows, strings.TrimSuffix(base, path.Ext(base)), func(column int, hint, format string, args ...any) (*Sheet, error) {
		return fault(head, column, hint, format, args...)
	})
}

// sheetOf makes a sheet of what was read, without columns that have neither name nor cells.
func sheetOf(names []string, rows [][]string, label string, fault func(column int, hint, format string, args ...any) (*Sheet, error)) (*Sheet, error) {
	var columns []SheetColumn
	var kept []int
	for j, name := range names {
		filled, numbers := 0, 0
		for _, row := range rows {
			if row[j] == "NaN" {
				row[j] = ""
			}
			if row[j] == "" {
				continue
			}
			filled++
			if _, ok := numberCell(row[j]); ok {
				numbers++
			}
		}
		if name == "" && filled == 0 {
			continue
		}
		if name == "" {
			return fault(j+1, "give it one in the first line", "a column without a name")
		}
		if i := slices.Index(names, name); i < j {
			return fault(j+1, "rename one of them", "the name %s again, which column %d has", quote(name), i+1)
		}
		columns = append(columns, SheetColumn{Name: name, Number: filled > 0 && numbers == filled})
		kept = append(kept, j)
	}
	cells := make([][]string, len(rows))
	for i, row := range rows {
		for _, j := range kept {
			cells[i] = append(cells[i], row[j])
		}
	}
	s := NewSheet(columns, cells)
	s.label = label
	return s, nil
}

// latin reads bytes as Latin-1.
func latin(b []byte) string {
	runes := make([]rune, len(b))
	for i, c := range b {
		runes[i] = rune(c)
	}
	return string(runes)
}

// delimiterOf is the sign that parts the names: the most frequent one outside quotes.
func delimiterOf(line []byte) rune {
	best, most := ',', 0
	for _, d := range []byte{',', ';', '\t'} {
		n, quoted := 0, false
		for _, c := range line {
			switch {
			case c == '"':
				quoted = !quoted
			case c == d && !quoted:
				n++
			}
		}
		if n > most {
			best, most = rune(d), n
		}
	}
	return best
}
