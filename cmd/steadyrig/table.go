package main

import (
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"
	"unicode/utf8"

	"github.com/go-gota/gota/dataframe"
	"github.com/go-gota/gota/series"

	"steadyrig/ident"
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
				cells[i][j] = number(t.Elem(i-1, j).Float())
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

// number formats a figure for a person: four digits.
func number(x float64) string {
	switch {
	case math.IsNaN(x):
		return "unknown"
	case math.IsInf(x, 1):
		return "no limit"
	case math.IsInf(x, -1):
		return "-no limit"
	case x == 0:
		return "0"
	}
	s := strconv.FormatFloat(x, 'g', 4, 64)
	if a := math.Abs(x); a >= 1e4 && a < 1e6 || a < 1e-4 && a >= 1e-5 {
		s = strconv.FormatFloat(x, 'f', max(0, 3-int(math.Floor(math.Log10(a)))), 64)
	}
	return s
}

// brief formats a figure for a crowded table: three digits.
func brief(x float64) string {
	if s := strconv.FormatFloat(x, 'g', 3, 64); !strings.ContainsAny(s, "eIN") {
		return s
	}
	return number(x)
}

// withUnit puts a unit behind a figure where there is one.
func withUnit(s, unit string) string {
	if unit == "" {
		return s
	}
	return s + " " + unit
}

// interval formats a 95 % interval; an open end is said in words.
func interval(iv ident.Interval) string {
	lo, hi := math.IsInf(iv.Lo, -1), math.IsInf(iv.Hi, 1)
	switch {
	case lo && hi:
		return "not bounded"
	case lo:
		return "below " + number(iv.Hi)
	case hi:
		return "above " + number(iv.Lo)
	}
	from, to := together(iv.Lo, iv.Hi)
	return from + " to " + to
}

// together formats the two ends of an interval with as many digits as tell them apart: the width to two digits, and
// at least four digits of the larger end where that asks for more.
func together(lo, hi float64) (from, to string) {
	width := hi - lo
	if !(width > 0) {
		return number(lo), number(hi)
	}
	decimals := 1 - int(math.Floor(math.Log10(width)))
	big := math.Max(math.Abs(lo), math.Abs(hi))
	if big >= 1e6 || big < 1e-4 || decimals > 8 {
		digits := max(2, min(12, 1+int(math.Floor(math.Log10(big)))+decimals))
		return strconv.FormatFloat(lo, 'g', digits, 64), strconv.FormatFloat(hi, 'g', digits, 64)
	}
	f := func(x float64) string {
		s := strconv.FormatFloat(x, 'f', max(0, decimals), 64)
		if strings.Trim(s, "-0.") == "" {
			return "0"
		}
		return s
	}
	return f(lo), f(hi)
}

// share formats a fraction as a percentage.
func share(x float64) string {
	if math.IsNaN(x) {
		return "unknown"
	}
	return number(100*x) + " %"
}

// probability formats a probability without claiming certainty.
func probability(p float64) string {
	switch {
	case math.IsNaN(p):
		return "unknown"
	case p > 0.9995:
		return "> 0.999"
	case p < 0.0005:
		return "< 0.001"
	}
	return strconv.FormatFloat(p, 'f', 3, 64)
}
