package data

import (
	"bytes"
	"errors"
	"fmt"
	"slices"
	"strings"
	"unicode/utf8"
)

// headSize is how much of a log is looked at to recognise its layout, in bytes, maxHeadLines in lines; maxLine is the
// longest line accepted.
const (
	headSize     = 1 << 18
	maxHeadLines = 500
	maxLine      = headSize / 2
)

// A layout is how a log is written: what separates its cells, where its numbers start, what its columns are called.
type layout struct {
	delimiter byte   // ',' ';' '\t'; ' ' for any run of blanks and tabs
	mark      byte   // decimal mark, '.' or ','
	marked    bool   // the head has a decimal mark, so that the other one is no number
	lineEnd   byte   // '\n', or '\r' where lines end in that alone
	trailing  bool   // each row ends in a delimiter that starts no cell
	comment   []byte // what a line for people starts with; nil: #, % or //
	given     bool   // the rig file says some of it

	names     []string // of the columns, c1, c2, … where the log gives none
	named     bool     // the names are the log's own
	units     []string // nil: no units row
	header    int      // 1-based line of the names; 0: none
	unitsLine int      // 1-based line of the units; 0: none
	from      int      // 1-based line of the first row of numbers
}

// A headLine is one line of the head.
type headLine struct {
	number  int
	text    []byte
	comment bool
	blank   bool
}

// recognise finds the layout of a log from its first bytes, but for what is given. whole tells that head is all there is.
func recognise(head []byte, whole bool, given *Layout) (*layout, error) {
	if err := checkText(head); err != nil {
		return nil, err
	}
	l := &layout{lineEnd: '\n', delimiter: given.delimiter(), given: *given != Layout{}}
	if given.DecimalMark != "" {
		l.mark, l.marked = given.DecimalMark[0], true
	}
	if given.Comment != "" {
		l.comment = []byte(given.Comment)
	}
	if bytes.IndexByte(head, '\n') < 0 && bytes.IndexByte(head, '\r') >= 0 {
		l.lineEnd = '\r'
	}
	lines := l.headLines(head, whole)
	if whole && len(bytes.TrimSpace(head)) == 0 {
		return nil, &ParseError{Err: errors.New("empty"), Hint: "give the log as the logger wrote it: a header, then one row per sample"}
	}
	for number, rest := 1, head; ; number++ {
		i := bytes.IndexByte(rest, l.lineEnd)
		if i > maxLine || i < 0 && len(rest) > maxLine {
			return nil, tooLong(number)
		}
		if i < 0 {
			break
		}
		rest = rest[i+1:]
	}
	above := 0 // lines that certainly are no rows
	for above < len(lines) && lines[above].number < given.NumbersLine {
		above++
	}
	if n := given.NumbersLine; n > 0 && above == len(lines) {
		return nil, noLine(n, "numbers_line")
	}
	first := l.chooseDelimiter(lines[above:])
	if first < 0 {
		err := noNumbers(lines[above:])
		if l.given {
			err.Hint = "correct [layout] in the rig file"
		}
		return nil, err
	}
	first += above
	if given.NamesLine == nil {
		if err := l.findNames(lines, first); err != nil {
			return nil, err
		}
	}
	if err := l.takeNames(lines, first, given); err != nil {
		return nil, err
	}
	return l, nil
}

// takeNames takes names, units and the first row of numbers from the lines that are given.
func (l *layout) takeNames(lines []headLine, first int, given *Layout) error {
	if given.NamesLine != nil {
		for i := range l.names {
			l.names[i] = fmt.Sprintf("c%d", i+1)
		}
		l.named, l.header = *given.NamesLine > 0, *given.NamesLine
		if l.named {
			names, err := l.textLine(lines, "names_line", l.header)
			if err != nil {
				return err
			}
			for i, n := range names {
				if n != "" {
					l.names[i] = n
				}
			}
		}
	}
	if given.UnitsLine != nil {
		l.units, l.unitsLine = nil, *given.UnitsLine
		if l.unitsLine > 0 {
			units, err := l.textLine(lines, "units_line", l.unitsLine)
			if err != nil {
				return err
			}
			for i, u := range units {
				units[i] = strings.Trim(u, "[]() ")
			}
			l.units = units
		}
	}
	switch {
	case given.NumbersLine > 0:
		l.from = given.NumbersLine
	case given.NamesLine != nil || given.UnitsLine != nil:
		l.from = lines[first].number
		for _, line := range lines {
			if line.number > max(l.header, l.unitsLine) && !line.comment && !line.blank {
				l.from = line.number
				break
			}
		}
	}
	return nil
}

func noLine(number int, key string) error {
	return &ParseError{Line: number, Err: fmt.Errorf("no such line in the head of the log, but [layout] %s names it", key), Hint: "correct the rig file"}
}

// textLine returns the cells of a line given by number, which may be a comment.
func (l *layout) textLine(lines []headLine, key string, number int) ([]string, error) {
	if number > len(lines) {
		return nil, noLine(number, key)
	}
	line := lines[number-1]
	var cells []string
	if line.comment {
		cells = l.commentWords(line.text)
	} else {
		for _, c := range l.cells(nil, line.text) {
			cells = append(cells, readable(c))
		}
	}
	if n := len(l.names); len(cells) == n+1 && cells[n] == "" {
		cells = cells[:n]
	}
	if len(cells) != len(l.names) {
		return nil, &ParseError{Line: number, Err: fmt.Errorf("%s, but the rows have %d ([layout] %s)", plural(len(cells), "cell", "cells"), len(l.names), key),
			Hint: "correct [layout] in the rig file"}
	}
	return cells, nil
}

func tooLong(line int) error {
	return &ParseError{Line: line, Err: fmt.Errorf("longer than %d bytes", maxLine), Hint: "a log has one row a line"}
}

// checkText refuses what is no text in a single-byte encoding or UTF-8.
func checkText(head []byte) error {
	switch {
	case bytes.HasPrefix(head, []byte("PK\x03\x04")), bytes.HasPrefix(head, []byte("\xd0\xcf\x11\xe0")):
		return &ParseError{Err: errors.New("a spreadsheet or an archive, no text"), Hint: "export the log as CSV"}
	}
	if i := bytes.IndexByte(head, 0); i >= 0 {
		return &ParseError{Line: 1 + bytes.Count(head[:i], []byte{'\n'}), Err: errors.New("a zero byte, so no text"), Hint: "export the log as CSV, in UTF-8, or in UTF-16 with a byte order mark"}
	}
	return nil
}

// headLines cuts the head into at most maxHeadLines lines, without the last one where it may go on beyond the head.
func (l *layout) headLines(head []byte, whole bool) []headLine {
	var lines []headLine
	for number := 1; len(head) > 0 && len(lines) < maxHeadLines; number++ {
		text := head
		i := bytes.IndexByte(head, l.lineEnd)
		if i < 0 && !whole {
			break
		}
		if i < 0 {
			head = nil
		} else {
			text, head = head[:i], head[i+1:]
		}
		text = bytes.TrimSuffix(text, []byte{'\r'})
		lines = append(lines, headLine{number, text, l.isComment(text), isBlank(text)})
	}
	return lines
}

// isComment tells whether a line is for people only.
func (l *layout) isComment(line []byte) bool {
	line = bytes.TrimLeft(line, " \t")
	if l.comment != nil {
		return bytes.HasPrefix(line, l.comment)
	}
	return len(line) > 0 && (line[0] == '#' || line[0] == '%') && !bytes.HasPrefix(bytes.ToLower(line[:min(len(line), 4)]), []byte("#n/a")) ||
		bytes.HasPrefix(line, []byte("//"))
}

func isBlank(line []byte) bool { return len(bytes.TrimSpace(line)) == 0 }

// cells cuts a line into its cells, blanks and quotes trimmed, into dst.
func (l *layout) cells(dst [][]byte, line []byte) [][]byte {
	dst = dst[:0]
	if l.delimiter == ' ' {
		line = bytes.TrimSpace(line)
		for len(line) > 0 {
			var cell []byte
			if line[0] == '"' {
				cell, line = quoted(line)
			} else {
				i := bytes.IndexAny(line, " \t")
				if i < 0 {
					i = len(line)
				}
				cell, line = line[:i], line[i:]
			}
			dst = append(dst, cell)
			line = bytes.TrimLeft(line, " \t")
		}
		return dst
	}
	for {
		rest := bytes.TrimLeft(line, " ")
		var cell []byte
		if len(rest) > 0 && rest[0] == '"' {
			cell, rest = quoted(rest)
			line = bytes.TrimLeft(rest, " ")
			if len(line) > 0 && line[0] != l.delimiter { // text behind a quoted cell: take it as part of the cell
				i := bytes.IndexByte(line, l.delimiter)
				if i < 0 {
					i = len(line)
				}
				cell, line = append(bytes.Clone(cell), line[:i]...), line[i:]
			}
		} else {
			i := bytes.IndexByte(line, l.delimiter)
			if i < 0 {
				i = len(line)
			}
			cell, line = bytes.TrimSpace(line[:i]), line[i:]
		}
		dst = append(dst, cell)
		if len(line) == 0 {
			break
		}
		line = line[1:]
	}
	if l.trailing && len(dst) > 1 && len(dst[len(dst)-1]) == 0 {
		dst = dst[:len(dst)-1]
	}
	return dst
}

// quoted returns the text of the quoted cell that line starts with, and what follows it.
func quoted(line []byte) (cell, rest []byte) {
	doubled := false
	for i := 1; i < len(line); i++ {
		if line[i] != '"' {
			continue
		}
		if i+1 < len(line) && line[i+1] == '"' {
			doubled = true
			i++
			continue
		}
		cell = line[1:i]
		if doubled {
			cell = bytes.ReplaceAll(cell, []byte(`""`), []byte(`"`))
		}
		return bytes.TrimSpace(cell), line[i+1:]
	}
	return bytes.TrimSpace(line[1:]), nil
}

// What a cell of the head looks like.
const (
	cellText = iota
	cellMissing
	cellNumber
	cellStamp
)

func (l *layout) kind(cell []byte) int {
	if isMissing(cell) {
		return cellMissing
	}
	if _, n := scanNumber(cell, l.mark); n == len(cell) {
		return cellNumber
	}
	if _, _, ok := scanStamp(cell); ok {
		return cellStamp
	}
	return cellText
}

// chooseDelimiter tries all ways to cut the lines that are not ruled out already, keeps the one that makes most cells
// numbers, and returns the index of the first row of numbers, or -1.
func (l *layout) chooseDelimiter(lines []headLine) int {
	best, bestScore, bestFirst := *l, 0, -1
	ways := []struct{ delimiter, mark byte }{{'\t', '.'}, {';', '.'}, {',', '.'}, {' ', '.'}, {'\t', ','}, {';', ','}, {' ', ','}}
	if d := l.delimiter; d != 0 && d != '\t' && d != ';' && d != ',' && d != ' ' {
		ways = append(ways[:0], ways[0], ways[4])
		ways[0].delimiter, ways[1].delimiter = d, d
	}
	for _, try := range ways {
		if l.delimiter != 0 && try.delimiter != l.delimiter || l.mark != 0 && try.mark != l.mark {
			continue
		}
		c := *l
		c.delimiter, c.mark = try.delimiter, try.mark
		if score, first := c.try(lines); score > bestScore {
			best, bestScore, bestFirst = c, score, first
		}
	}
	*l = best
	return bestFirst
}

// try scores one way to cut the lines: cells that are numbers or stamps, less two for each that is text, over the
// lines with the usual number of cells. It sets trailing, marked and names to their number.
func (l *layout) try(lines []headLine) (score, first int) {
	type row struct{ cells, number, text, index int }
	var rows []row
	var cells [][]byte
	count := map[int]int{}
	ends := map[int]int{} // rows by number of cells whose last cell is empty
	for i, line := range lines {
		if line.comment || line.blank {
			continue
		}
		cells = l.cells(cells, line.text)
		r := row{cells: len(cells), index: i}
		for _, c := range cells {
			switch l.kind(c) {
			case cellNumber:
				r.number++
				l.marked = l.marked || bytes.IndexByte(c, l.mark) >= 0
			case cellStamp:
				r.number++
			case cellText:
				r.text++
			}
		}
		rows = append(rows, r)
		if r.cells > 1 && r.number > 1 {
			count[r.cells]++
			if len(cells[len(cells)-1]) == 0 {
				ends[r.cells]++
			}
		}
	}
	usual := commonest(count)
	if usual == 0 {
		return 0, -1
	}
	texts := map[int]int{} // rows by number of cells of text
	for _, r := range rows {
		if r.cells == usual && r.number > 1 {
			texts[r.text]++
		}
	}
	usualText := commonest(texts)
	first = -1
	for i, r := range rows {
		if r.cells != usual || r.number < 2 {
			continue
		}
		score += r.number - 2*r.text
		alone := i+1 < len(rows) && (rows[i+1].cells != usual || rows[i+1].number < 2)
		if first < 0 && !alone && r.text <= usualText {
			first = r.index
		}
	}
	if first < 0 { // rows never follow each other; take the first
		for _, r := range rows {
			if r.cells == usual && r.number > 1 {
				first = r.index
				break
			}
		}
	}
	if l.delimiter != ' ' && ends[usual] == count[usual] {
		l.trailing = true
		usual--
	}
	l.names = make([]string, usual)
	return score, first
}

// commonest returns the key with the largest count, the larger key of two; 0 of none.
func commonest(count map[int]int) int {
	best := 0
	for key, n := range count {
		if n > count[best] || n == count[best] && key > best {
			best = key
		}
	}
	return best
}

// findNames finds the header, the units row and the first row of numbers, given a line that certainly is one.
func (l *layout) findNames(lines []headLine, first int) error {
	n := len(l.names)
	all := *l
	all.trailing = false
	var texts []int // nearest block of lines of text above, with as many cells as the rows
	var cells [][]byte
	l.from = lines[first].number
	last := first // upper end of what is known to be rows
	for i := first - 1; i >= 0; i-- {
		if lines[i].comment || lines[i].blank {
			if len(texts) > 0 {
				break
			}
			continue
		}
		cells = all.cells(cells, lines[i].text)
		if l.trailing && len(cells) == n+1 && len(cells[n]) > 0 && len(texts) == 0 {
			// A header names the last column, which is empty in all rows.
			l.trailing, n = false, n+1
			l.names = make([]string, n)
		}
		if l.trailing && len(cells) == n+1 && len(cells[n]) == 0 {
			cells = cells[:n]
		}
		numbers, text := 0, 0
		for _, c := range cells {
			switch l.kind(c) {
			case cellNumber, cellStamp:
				if string(c) != "1" { // the unit of a ratio
					numbers++
				}
			case cellText:
				text++
			}
		}
		if len(cells) == n && numbers == 0 && text > 0 {
			texts = append([]int{i}, texts...)
			continue
		}
		if len(texts) > 0 {
			break
		}
		if len(cells) == n && text > 0 && i == 0 { // a header with numbers in it
			texts = []int{i}
			break
		}
		if len(cells) != n && numbers == 0 && len(cells) > 1 && last == first {
			return l.headerMismatch(lines[i], len(cells), n)
		}
		last = i
	}
	if len(texts) == 0 {
		for i := range l.names {
			l.names[i] = fmt.Sprintf("c%d", i+1)
		}
		l.namesFromComment(lines, first)
		for _, line := range lines { // rows may start above the first faultless one
			if !line.comment && !line.blank {
				l.from = line.number
				break
			}
		}
		return nil
	}
	header := texts[0]
	for _, i := range texts { // the first one without a hole, else the first
		if full(l.cells(cells, lines[i].text)) {
			header = i
			break
		}
	}
	l.named, l.header = true, lines[header].number
	for i, c := range l.cells(cells, lines[header].text) {
		if l.names[i] = readable(c); l.names[i] == "" {
			l.names[i] = fmt.Sprintf("c%d", i+1)
		}
	}
	end := header
	if i := header + 1; i < len(lines) && slices.Contains(texts, i) {
		l.units, l.unitsLine = make([]string, n), lines[i].number
		for j, c := range l.cells(cells, lines[i].text) {
			l.units[j] = strings.Trim(readable(c), "[]() ")
		}
		end = texts[len(texts)-1]
	}
	for i := end + 1; i < len(lines); i++ {
		if !lines[i].comment && !lines[i].blank {
			l.from = lines[i].number
			break
		}
	}
	return nil
}

func full(cells [][]byte) bool {
	for _, c := range cells {
		if len(c) == 0 {
			return false
		}
	}
	return true
}

func (l *layout) headerMismatch(line headLine, names, n int) error {
	e := &ParseError{Line: line.number, Err: fmt.Errorf("%s in the header, %s in the rows below", plural(names, "name", "names"), plural(n, "cell", "cells"))}
	switch {
	case l.delimiter == ',' && n == 2*names:
		e.Hint = "decimal commas cannot be told from commas between cells: export with ';' between cells"
	case l.delimiter == ' ':
		e.Hint = "put names with blanks in them in double quotes"
	default:
		e.Hint = "one name a column"
	}
	return e
}

// namesFromComment takes the names from the nearest comment above the rows, if it has as many words as there are
// columns, after an optional label that ends in ':'.
func (l *layout) namesFromComment(lines []headLine, first int) {
	for i := first - 1; i >= 0; i-- {
		if lines[i].blank {
			continue
		}
		if !lines[i].comment {
			return
		}
		words := l.commentWords(lines[i].text)
		if len(words) == 0 {
			continue
		}
		if len(words) == len(l.names) {
			copy(l.names, words)
			l.named, l.header = true, lines[i].number
		}
		return
	}
}

// commentWords returns the words of a comment, after an optional label that ends in ':'.
func (l *layout) commentWords(line []byte) []string {
	text := strings.TrimLeft(readable(bytes.TrimPrefix(bytes.TrimLeft(line, " \t"), l.comment)), "#%/ \t")
	if label, rest, ok := strings.Cut(text, ":"); ok && !strings.ContainsAny(label, ",;\t") {
		text = rest
	}
	if l.delimiter == ' ' || strings.IndexByte(text, l.delimiter) < 0 {
		return strings.Fields(text)
	}
	var words []string
	for _, c := range l.cells(nil, []byte(text)) {
		words = append(words, string(c))
	}
	return words
}

// readable returns text as UTF-8: as it is, or read as Latin-1 where it is not UTF-8.
func readable(text []byte) string {
	if utf8.Valid(text) {
		return string(text)
	}
	runes := make([]rune, len(text))
	for i, c := range text {
		runes[i] = rune(c)
	}
	return string(runes)
}

func noNumbers(lines []headLine) *ParseError {
	for _, line := range lines {
		if !line.comment && !line.blank {
			return &ParseError{Line: line.number, Err: errors.New("no row of two or more numbers below this line"),
				Hint: "a log has a header and rows of numbers, separated by commas, semicolons, tabs or blanks"}
		}
	}
	return &ParseError{Err: errors.New("no row of numbers"), Hint: "there are only comments and blank lines"}
}

// describe says the layout in words.
func (l *layout) describe() string {
	var b strings.Builder
	switch name, known := map[byte]string{',': "commas", ';': "semicolons", '\t': "tabs", ' ': "blanks"}[l.delimiter]; known {
	case true:
		b.WriteString(name + " between cells")
	default:
		b.WriteString(quote(string(rune(l.delimiter))) + " between cells")
	}
	if l.mark == ',' {
		b.WriteString(", decimal comma")
	}
	if l.header > 0 {
		fmt.Fprintf(&b, ", names on line %d", l.header)
	} else {
		b.WriteString(", no names")
	}
	if l.units != nil {
		fmt.Fprintf(&b, ", units on line %d", l.unitsLine)
	}
	fmt.Fprintf(&b, ", numbers from line %d", l.from)
	if l.comment != nil {
		fmt.Fprintf(&b, ", comments after %s", quote(string(l.comment)))
	}
	if l.given {
		b.WriteString(", as [layout] says")
	}
	return b.String()
}
