package published

import (
	"flag"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"regexp"
	"strconv"
	"strings"
	"testing"
)

var update = flag.Bool("update", false, "write testdata/published/README.md anew")

// Where a published value was had from.
const (
	read       = "read there"                 // in the source itself
	recomputed = "recomputed"                 // by other software or in exact arithmetic, from the data or the definition
	closed     = "closed form"                // exact expression, its digits from 40-digit arithmetic
	memory     = "from memory"                // a printed number that could not be looked up
	remembered = "from memory, recomputed"    // a printed number, reproduced to all its digits by other software
	practice   = "common practice, no source" // a rule of the trade
)

const folder = "../../../testdata/published"

// section is one table of the page, filled by one test.
type section struct {
	t    *testing.T
	name string
	text strings.Builder
}

// open begins a section, which is compared with the page when the test ends.
func open(t *testing.T, name string) *section {
	s := &section{t: t, name: name}
	s.text.WriteString("| check | source | quantity | ours | published | difference | held to |\n|---|---|---|---|---|---|---|\n")
	t.Cleanup(s.compare)
	return s
}

// value is one number beside the published one.
type value struct {
	what       string
	ours, want float64
	tol        float64
	absolute   bool
	words      [2]string // instead of numbers: ours, published
	worse      bool      // words that differ, and are listed for that
}

// rel is held to tol times the published value's size.
func rel(what string, ours, want, tol float64) value {
	return value{what: what, ours: ours, want: want, tol: tol}
}

// abs is held to tol itself.
func abs(what string, ours, want, tol float64) value {
	return value{what: what, ours: ours, want: want, tol: tol, absolute: true}
}

// said compares what is no number.
func said(what, ours, want string) value { return value{what: what, words: [2]string{ours, want}} }

// differs lists what comes out otherwise than published. The page holds the words, so that a change shows.
func differs(what, ours, published string) value {
	return value{what: what, words: [2]string{ours, published}, worse: true}
}

// verdict is said with yes and no.
func verdict(what string, ours, want bool) value {
	word := map[bool]string{true: "yes", false: "no"}
	return said(what, word[ours], word[want])
}

// difference is the value's distance from the published one in the measure that it is held to.
func (v value) difference() float64 {
	d := math.Abs(v.ours - v.want)
	if v.absolute || v.want == 0 {
		return d
	}
	return d / math.Abs(v.want)
}

// holds is false for NaN too.
func (v value) holds() bool {
	if v.words[1] != "" {
		return v.worse || v.words[0] == v.words[1]
	}
	return v.difference() <= v.tol
}

// row is the value's line of the table. Digits beyond those held to are not shown, and a small difference only by the power
// of ten above it.
func (v value) row() string {
	if v.words[1] != "" {
		held := "the same"
		if v.worse {
			held = "not held"
		}
		return fmt.Sprintf("%s | %s | %s | | %s", v.what, v.words[0], v.words[1], held)
	}
	tol := v.tol
	if v.absolute && v.want != 0 {
		tol /= math.Abs(v.want)
	}
	digits := min(max(int(math.Ceil(-math.Log10(tol))), 4), 15)
	unit := ""
	if v.absolute || v.want == 0 {
		unit = " absolute"
	}
	d := v.difference()
	far := fmt.Sprintf("%.2g", d)
	switch {
	case d < 1e-6:
		far = fmt.Sprintf("< %.0e", math.Pow(10, math.Ceil(math.Log10(max(d, 1e-15)))))
	}
	ours := v.ours
	if v.want == 0 && v.tol < 1e-6 && math.Abs(ours) <= v.tol { // rounding
		ours = 0
	}
	return fmt.Sprintf("%s | %.*g | %.*g | %s | %.2g%s", v.what, digits, ours, digits, v.want, far, v.tol, unit)
}

// check holds the values of one check. id is that of the list of check values; what names it in a few words.
func (s *section) check(id, what, source, status string, values ...value) {
	s.t.Helper()
	s.t.Run(strings.TrimSpace(id+" "+what), func(t *testing.T) {
		t.Helper()
		for i, v := range values {
			head := " | "
			if i == 0 {
				head = strings.TrimSpace(id+" "+what) + " | " + strings.TrimSpace(source+" ("+status+")")
			}
			fmt.Fprintf(&s.text, "| %s | %s |\n", head, v.row())
			switch {
			case v.holds():
			case v.words[1] != "":
				t.Errorf("%s: %q, published %q (%s)", v.what, v.words[0], v.words[1], source)
			default:
				t.Errorf("%s: %.16g, published %.16g (%s): off by %.2g, held to %.2g", v.what, v.ours, v.want, source, v.difference(), v.tol)
			}
		}
	})
}

// tiny is a difference that is rounding and not the same on every processor.
var tiny = regexp.MustCompile(`< 1e-\d\d`)

// compare holds the section against the page, or writes it there.
func (s *section) compare() {
	if s.t.Failed() || s.t.Skipped() {
		return
	}
	page := filepath.Join(folder, "README.md")
	b, err := os.ReadFile(page)
	if err != nil {
		s.t.Fatal(err)
	}
	old := string(b)
	from := strings.Index(old, "\n## "+s.name+"\n")
	if from < 0 {
		s.t.Fatalf("%s has no section %q", page, s.name)
	}
	from += len("\n## " + s.name)
	to := len(old)
	if next := strings.Index(old[from:], "\n## "); next >= 0 {
		to = from + next
	}
	// What is written by hand above the table stays.
	table := "\n" + s.text.String()
	if head := strings.Index(old[from:to], "\n| "); head >= 0 {
		from += head
	} else {
		from = to
	}
	if tiny.ReplaceAllString(old[from:to], "") == tiny.ReplaceAllString(table, "") && !*update {
		return
	}
	if !*update {
		var line string
		for l := range strings.Lines(table) {
			if !strings.Contains(tiny.ReplaceAllString(old[from:to], ""), tiny.ReplaceAllString(l, "")) {
				line = l
				break
			}
		}
		s.t.Errorf("section %q of %s is not what the tests find; run go test ./fit/fittest/published -update and read the difference\nfirst line not there: %s", s.name, page, line)
		return
	}
	if err := os.WriteFile(page, []byte(old[:from]+table+old[to:]), 0o644); err != nil {
		s.t.Fatal(err)
	}
}

// counts is how many rows each category of the list of check values has.
var counts = map[byte]int{'A': 12, 'B': 25, 'C': 22, 'D': 39, 'E': 42, 'F': 10, 'G': 8, 'H': 10}

// Every row of the list stands on the page, be it under what is not checked.
func TestPublishedPageIsComplete(t *testing.T) {
	b, err := os.ReadFile(filepath.Join(folder, "README.md"))
	if err != nil {
		t.Fatal(err)
	}
	listed := map[string]bool{}
	span := regexp.MustCompile(`\b([A-H])(\d\d)\b(?:-([A-H])(\d\d)\b)?`)
	for _, m := range span.FindAllStringSubmatch(string(b), -1) {
		from, _ := strconv.Atoi(m[2]) // two digits, by the expression
		to := from
		if m[3] == m[1] {
			to, _ = strconv.Atoi(m[4])
		}
		for i := from; i <= to; i++ {
			listed[fmt.Sprintf("%s%02d", m[1], i)] = true
		}
	}
	for c, n := range counts {
		for i := 1; i <= n; i++ {
			if id := fmt.Sprintf("%c%02d", c, i); !listed[id] {
				t.Errorf("%s is neither checked nor excused", id)
			}
		}
	}
}
