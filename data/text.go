package data

import (
	"fmt"
	"strconv"
	"strings"
	"unicode/utf8"
)

// quote returns s in double quotes, cut to a length that fits on a line, with whatever a terminal might take as
// a command escaped.
func quote(s string) string {
	const longest = 40
	if len(s) > longest {
		cut := longest
		for cut > 0 && !utf8.RuneStart(s[cut]) {
			cut--
		}
		s = s[:cut] + "…"
	}
	q := strconv.Quote(s)
	return strings.ReplaceAll(q, `\u2026`, "…")
}

// plural returns "1 row" or "5 rows".
func plural(n int, one, many string) string {
	if n == 1 {
		return "1 " + one
	}
	return fmt.Sprintf("%d %s", n, many)
}

// number formats a figure for a message: six digits are more than a person reads.
func number(x float64) string { return strconv.FormatFloat(x, 'g', 6, 64) }

// number3 is for figures that are estimates.
func number3(x float64) string { return strconv.FormatFloat(x, 'g', 3, 64) }
