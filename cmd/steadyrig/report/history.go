package report

import (
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"

	"steadyrig/cmd/steadyrig/history"
	"steadyrig/cmd/steadyrig/words"
)

// HistoryInput is what a page on a rig's history tells. There is at least one entry.
type HistoryInput struct {
	Entries       []history.Entry
	Tested        history.Tested
	Bad           []history.BadLine
	File          string
	Command, Tool string
	Made          time.Time
}

// How much of a history is shown.
const (
	drawnLogs  = 300
	listedRows = 500
)

// WriteHistory writes the page.
func WriteHistory(w io.Writer, in HistoryInput) error {
	last := in.Entries[len(in.Entries)-1]
	word, meaning := in.Tested.Verdict()
	v := view{
		Rig: last.Rig, What: "History of the rig", Word: sentenceStart(word), Class: word, Summary: []string{sentence(meaning)},
		Facts:   []fact{{"Entries", fmt.Sprintf("%d, of which %s", len(in.Entries), words.Count(len(in.Tested.Evidence), "log")+" can be compared")}},
		Command: in.Command, Tool: in.Tool, Made: in.Made.Format("2 January 2006, 15:04 MST"), MadeRFC: in.Made.Format(time.RFC3339),
	}
	if n := len(in.Bad); n > 0 {
		v.Facts = append(v.Facts, fact{"Left out", words.Count(n, "line") + " that cannot be read, the first of them line " + fmt.Sprint(in.Bad[0].Line) + ": " + in.Bad[0].Why})
	}
	course := section{ID: "course", Title: "Pole and gain", Lead: in.Tested.Notes()}
	for _, c := range in.Tested.Courses(drawnLogs) {
		if lo, hi := c.Frame(); len(c.Logs) > 1 && hi > lo {
			course.Figures = append(course.Figures, courseFigure(c, in.Tested.Changes))
		}
	}
	if t := changeTable(in.Tested); len(t.Rows) > 0 {
		course.Tables = append(course.Tables, t)
	}
	v.Sections = []section{course, {ID: "entries", Title: "Entries", Tables: []table{entryTable(in)}}, {
		ID: "origin", Title: "Origin", Facts: []fact{{"File", in.File}, {"Command", in.Command}, {"Tool", in.Tool}},
	}}
	if err := page.Execute(w, v); err != nil {
		return fmt.Errorf("writing the page: %w", err)
	}
	return nil
}

// changeTable has a row for each number at each change.
func changeTable(t history.Tested) table {
	out := table{Caption: "Changes", Head: []string{"since entry", "what", "before", "after", "moved by, 95 %"}, Right: []bool{false, false, true, true, false}}
	for _, c := range t.Changes {
		at := fmt.Sprint(c.At)
		if c.Range[0] < c.Range[1] {
			at += fmt.Sprintf(" (with 95 %% from %d to %d)", c.Range[0], c.Range[1])
		}
		for i, n := range c.Numbers {
			if i > 0 {
				at = ""
			}
			what, unit := history.What(n.Name)
			before, after, moved := n.Words()
			out.Rows = append(out.Rows, []string{at, axis(what, unit), before, after, moved})
		}
	}
	return out
}

// entryTable lists the last entries.
func entryTable(in HistoryInput) table {
	from := max(0, len(in.Entries)-listedRows)
	t := table{Caption: "Entries of the file", Head: []string{"entry", "made", "what", "verdict", "rightmost pole, rad/s", "gain", "logs", "loops"}, Right: []bool{true}}
	if from > 0 {
		t.Notes = []string{fmt.Sprintf("The last %d of %d.", listedRows, len(in.Entries))}
	}
	for _, e := range in.Entries[from:] {
		var pole, gain, loops string
		var logs []string
		if e.Plant != nil {
			if r := e.Plant.Rightmost(); r != nil {
				pole = fmt.Sprintf("%s (%s)", words.Number(r.Re), words.Interval(r.Re95))
			}
			if g := e.Plant.Gain; g != nil {
				gain = fmt.Sprintf("%s (%s)", words.Unit(words.Number(g.Value), g.Unit), words.Interval(g.Interval95))
			}
		}
		for _, l := range e.Logs {
			logs = append(logs, l.File)
		}
		if l := e.Loops; l != nil {
			loops = strings.Trim(l.InnerForm+", "+l.OuterForm, ", ")
			if l.Plants > 0 {
				loops += "; at least " + words.Share(l.LowerBound) + " of the plants keep the spec"
			}
		}
		t.Rows = append(t.Rows, []string{fmt.Sprint(e.Line), strings.Replace(e.Made, "T", " ", 1), e.Kind, e.Verdict, pole, gain, strings.Join(logs, ", "), strings.TrimPrefix(loops, "; ")})
	}
	return t
}

// courseFigure draws a number of the logs, one after the other.
func courseFigure(c history.Course, changes []history.Change) figure {
	p := newPlot("", axis(c.What, c.Unit))
	bar := stroke{faint(petrol, 0xa0), 2.4, nil}
	if len(c.List) > 60 {
		bar.width = 1
	}
	lo, hi := c.Frame()
	changed := c.ChangedAt(changes)
	var at plotter.XYs
	for k, e := range c.List {
		x := float64(k)
		if changed[k] {
			addLine(p, []float64{x - 0.5, x - 0.5}, []float64{lo, hi}, limitLine)
		}
		if finite(e.Value) {
			at = append(at, plotter.XY{X: x, Y: e.Value})
			addLine(p, []float64{x, x}, []float64{math.Max(lo, e.Interval95.Lo), math.Min(hi, e.Interval95.Hi)}, bar)
		}
	}
	sc, err := plotter.NewScatter(at)
	if err != nil {
		panic("report: " + err.Error()) // all values were checked
	}
	sc.GlyphStyle = draw.GlyphStyle{Color: ink, Radius: vg.Points(2), Shape: draw.CircleGlyph{}}
	p.Add(sc)
	p.X.Min, p.X.Max, p.Y.Min, p.Y.Max = -0.7, float64(len(c.List))-0.3, lo, hi
	var ticks []plot.Tick
	for k := 0; k < len(c.Logs); k += (len(c.Logs) + 3) / 4 {
		ticks = append(ticks, plot.Tick{Value: float64(k), Label: strconv.Itoa(c.Logs[k].Line) + "\n" + c.Logs[k].Entry.Day()})
	}
	p.X.Tick.Marker = plot.ConstantTicks(ticks)
	keys := []key{{Stroke: bar, Label: "95 % interval"}}
	if slices.Contains(changed, true) {
		keys = append(keys, key{Stroke: limitLine, Label: "changed from here on"})
	}
	title := sentenceStart(c.What)
	return figure{drawn(p, title+" of the logs, one after the other, with 95 % intervals"), title, keys, "By entry and date, one log after the other."}
}
