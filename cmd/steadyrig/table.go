package main

import (
	"fmt"
	"io"
	"strings"
	"unicode/utf8"

	"steadyrig/cmd/steadyrig/words"

	"github.com/go-gota/gota/dataframe"
	"github.com/go-gota/gota/series"
)

// pageWidth is the width of a terminal that all text fits in.
const pageWidth = 80

// printTable writes a table: columns of text to the left, columns of numbers (already formatted, or of a numeric
// type) to the right. A column of text whose name starts with '>' is set to the right, the mark taken off.
func printTable(w io.Writer, indent string, t dataframe.DataFrame) {
	names, types := t.Names(), t.Types()
	width := make([]int, len(names))
	right := make([]bool, len(names))
	cells := t.Records()
	for j, name := range names {
		right[j] = types[j] != series.String || strings.HasPrefix(name, ">")
		cells[0][j] = strings.TrimPrefix(name, ">")
		for i := range cells {
			if i > 0 && types[j] == series.Float {
				cells[i][j] = words.Number(t.Elem(i-1, j).Float())
			}
			width[j] = max(width[j], utf8.RuneCountInString(cells[i][j]))
		}
	}
	for _, row := range cells {
		var b strings.Builder
		for j, cell := range row {
			pad := strings.Repeat(" ", width[j]-utf8.RuneCountInString(cell))
			if right[j] {
				b.WriteString("  " + pad + cell)
			} else {
				b.WriteString("  " + cell + pad)
			}
		}
		fmt.Fprintln(w, strings.TrimRight(indent+b.String()[2:], " "))
	}
}

// columns makes a table from columns of text, given as name, cells, name, cells, …
func columns(pairs ...any) dataframe.DataFrame {
	var s []series.Series
	for i := 0; i < len(pairs); i += 2 {
		s = append(s, series.New(pairs[i+1].([]string), series.String, pairs[i].(string)))
	}
	return dataframe.New(s...)
}

// wrap writes text in lines that fit the page: the first after lead, the others as far in.
func wrap(w io.Writer, lead, text string) {
	in := utf8.RuneCountInString(lead)
	line, at := lead, in
	for _, word := range strings.Fields(text) {
		n := utf8.RuneCountInString(word)
		if at > in && at+1+n > pageWidth {
			fmt.Fprintln(w, line)
			line, at = strings.Repeat(" ", in), in
		}
		if at > in {
			line, at = line+" ", at+1
		}
		line, at = line+word, at+n
	}
	fmt.Fprintln(w, strings.TrimRight(line, " "))
}
