package main

import (
	"fmt"
	"math"
	"strings"

	"steadyrig/cmd/steadyrig/history"
	"steadyrig/cmd/steadyrig/words"
)

// Size of a course on the console, in characters.
const (
	courseWidth = 60
	courseRows  = 9
)

// showCourses draws the rightmost pole and the gain of the logs that count, one after the other.
func showCourses(p *page, t history.Tested) {
	for _, c := range t.Courses(courseWidth) {
		if lo, hi := c.Frame(); len(c.Logs) > 1 && hi > lo {
			over := "over the logs"
			if n := len(t.Evidence); n > len(c.Logs) {
				over = fmt.Sprintf("over the last %d of %d logs", len(c.Logs), n)
			}
			p.heading(words.Unit(strings.ToUpper(c.What[:1])+c.What[1:]+",", c.Unit) + " " + over + ", with 95 % intervals")
			drawCourse(p, c, t.Changes, lo, hi)
		}
	}
}

// drawCourse draws one column a log; below them the first logs after a change are marked.
func drawCourse(p *page, c history.Course, changes []history.Change, lo, hi float64) {
	row := func(v float64) int {
		return int(math.Round((courseRows - 1) * (hi - math.Max(lo, math.Min(hi, v))) / (hi - lo)))
	}
	step := max(1, min(4, courseWidth/len(c.Logs)))
	blank := strings.Repeat(" ", step*len(c.Logs))
	grid, marks := make([][]byte, courseRows), []byte(blank)
	for i := range grid {
		grid[i] = []byte(blank)
	}
	changed := c.ChangedAt(changes)
	for k, e := range c.List {
		at := step*k + step/2
		if changed[k] {
			marks[at] = '^'
		}
		if math.IsNaN(e.Value) {
			continue
		}
		for i := row(e.Interval95.Hi); i <= row(e.Interval95.Lo); i++ {
			grid[i][at] = '|'
		}
		grid[row(e.Value)][at] = 'o'
	}
	line := func(label, text string) {
		p.line("%s", strings.TrimRight(fmt.Sprintf("  %10s %s", label, text), " "))
	}
	for i, text := range grid {
		label := ""
		if i%4 == 0 {
			label = words.Brief(hi - (hi-lo)*float64(i)/(courseRows-1))
		}
		line(label, "|"+string(text))
	}
	line("", "+"+strings.Repeat("-", len(blank)))
	if text := strings.TrimRight(string(marks), " "); text != "" {
		line("changed at", " "+text)
	}
	first, last := c.Logs[0], c.Logs[len(c.Logs)-1]
	line("", fmt.Sprintf(" entry %d (%s) to entry %d (%s)", first.Line, first.Entry.Day(), last.Line, last.Entry.Day()))
}
