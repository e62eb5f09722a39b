package main

import (
	"fmt"
	"io"
	"strings"

	"github.com/go-gota/gota/dataframe"

	"steadyrig/design"
	"steadyrig/ident"
)

// A page is text for a person: lines that fit a terminal of 80 columns, colour where it is seen.
type page struct {
	w      io.Writer
	colour bool
}

func (a *app) page() *page { return &page{w: a.stdout, colour: inColour(a.stdout)} }

func (p *page) line(format string, args ...any) { fmt.Fprintf(p.w, format+"\n", args...) }

// heading starts a part of the page, title one at its top.
func (p *page) heading(text string) {
	fmt.Fprintln(p.w)
	p.title(text)
}

func (p *page) title(text string) {
	if p.colour {
		text = "\x1b[1m" + text + "\x1b[0m"
	}
	fmt.Fprintln(p.w, text)
}

// item is a label and its text, the text in a column of its own.
func (p *page) item(label, text string) { wrap(p.w, fmt.Sprintf("  %-18s ", label), text) }

func (p *page) table(t dataframe.DataFrame) { printTable(p.w, "  ", t) }

// verdict is the first line of a result: the word, then what it means here.
func (p *page) verdict(word, meaning string) {
	ansi := map[string]string{
		ident.Sound: "\x1b[1;32m", ident.Weak: "\x1b[1;33m", ident.Refused: "\x1b[1;31m",
		design.Keep: "\x1b[1;32m", design.Retune: "\x1b[1;33m", design.Stop: "\x1b[1;31m",
	}[word]
	shown := strings.ToUpper(word)
	if p.colour && ansi != "" {
		// The colour takes no room on the line, so it is put in after wrapping.
		var b strings.Builder
		wrap(&b, shown+"  ", meaning)
		io.WriteString(p.w, ansi+shown+"\x1b[0m"+strings.TrimPrefix(b.String(), shown))
		return
	}
	wrap(p.w, shown+"  ", meaning)
}

// warn writes warnings to standard error, one a line.
func (a *app) warn(s *settings, warnings []string) {
	if s.quiet {
		return
	}
	for _, w := range warnings {
		fmt.Fprintln(a.stderr, "steadyrig: warning:", oneLine(w))
	}
}

// deliver writes a result: to its file, and to standard output as JSON or as a page. Without --out the file is
// usual, or none under --json; an empty usual means none.
func (a *app) deliver(s *settings, usual string, content []byte, show func(*page)) error {
	path := a.target(s, usual)
	if path != "" {
		if err := writeFile(path, s.force, content); err != nil {
			return err
		}
	}
	if s.json {
		_, err := a.stdout.Write(content)
		return err
	}
	p := a.page()
	show(p)
	if path != "" {
		p.line("\nWrote %s.", path)
	}
	return nil
}

// target is the file that a result goes to, empty: none.
func (a *app) target(s *settings, usual string) string {
	if s.out == "" && !s.json {
		return usual
	}
	return s.out
}

// checkTarget refuses a target that must not be written to, before any work is done for it.
func (a *app) checkTarget(s *settings, usual string) error {
	if path := a.target(s, usual); path != "" {
		return checkFree(path, s.force)
	}
	return nil
}
