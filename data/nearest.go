package data

import (
	"fmt"
	"strings"
	"unicode"
)

// nearest returns the name that shares most with word, and whether so much that a slip of the keyboard explains the
// difference. Case, blanks, '_' and '-' do not count. Ties go to the first.
func nearest(word string, names []string) (name string, near bool) {
	const longest = 64 // a longer name is no slip of the keyboard, and the cost grows with its square
	if len(word) > longest {
		return "", false
	}
	want := fold(word)
	best := 1.0 // share of the longer name that differs
	for _, n := range names {
		if len(n) > longest {
			continue
		}
		have := fold(n)
		edits := distance(want, have)
		if share := float64(edits) / float64(max(1, len(want), len(have))); share < best {
			best, name = share, n
			near = edits <= 1+min(len(want), len(have))/3
		}
	}
	return name, near
}

// fold drops what people vary in names: case, blanks, '_' and '-'.
func fold(s string) []rune {
	var out []rune
	for _, r := range s {
		if r == '_' || r == '-' || unicode.IsSpace(r) {
			continue
		}
		out = append(out, unicode.ToLower(r))
	}
	return out
}

// distance is the optimal string alignment distance: insertions, deletions, substitutions and swaps of two
// neighbours, each at cost 1 (F. J. Damerau, "A technique for computer detection and correction of spelling
// errors", Comm. ACM 7(3), 1964, 171-176).
func distance(a, b []rune) int {
	before, last, row := make([]int, len(b)+1), make([]int, len(b)+1), make([]int, len(b)+1)
	for j := range last {
		last[j] = j
	}
	for i := 1; i <= len(a); i++ {
		row[0] = i
		for j := 1; j <= len(b); j++ {
			cost := 1
			if a[i-1] == b[j-1] {
				cost = 0
			}
			row[j] = min(last[j]+1, row[j-1]+1, last[j-1]+cost)
			if i > 1 && j > 1 && a[i-1] == b[j-2] && a[i-2] == b[j-1] {
				row[j] = min(row[j], before[j-2]+1)
			}
		}
		before, last, row = last, row, before
	}
	return last[len(b)]
}

// quoteList joins names as "a", "b", "c", at most limit of them and then "and N more".
func quoteList(names []string, limit int) string {
	var b strings.Builder
	for i, n := range names {
		if i == limit {
			fmt.Fprintf(&b, " and %d more", len(names)-limit)
			break
		}
		if i > 0 {
			b.WriteString(", ")
		}
		b.WriteString(quote(n))
	}
	return b.String()
}
