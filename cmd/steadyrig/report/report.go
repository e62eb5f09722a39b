package report

import (
	_ "embed"
	"fmt"
	"html/template"
	"io"
	"time"

	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

// Input is what a report tells. Loops without an inner block, and a model without a plant, are told as refused.
type Input struct {
	Rig     *data.Rig
	About   string // a sentence on the rig; may be empty
	Logs    []*data.Experiment
	Audit   *ident.AuditReport
	Model   *ident.Model
	Loops   *design.Loops
	Verdict string // of the whole
	Refusal error  // why the job ended early; nil: it did not
	Command string // that made the report, as a shell takes it
	Tool    string
	Made    time.Time
	Seed    uint64 // of the plants drawn for the figures

	settlingChosen bool // the rig file gives none
}

//go:embed page.html
var pageText string

var page = template.Must(template.New("page").Parse(pageText))

// A view is what the page shows.
type view struct {
	Rig, About    string
	What          string // the page is of
	Word, Class   string
	Summary       []string
	Facts         []fact
	Cautions      []string
	Sections      []section
	Command, Tool string
	Made, MadeRFC string
}

// A fact is a label with its figure.
type fact struct{ Label, Value string }

// A section is a part of the page under its own heading.
type section struct {
	ID, Title string
	Lead      []string
	Facts     []fact
	Figures   []figure
	Tables    []table
	Steps     []string // in their order
	Code      string
}

// A table has a column set to the right where Right says so.
type table struct {
	Caption string
	Head    []string
	Right   []bool
	Rows    [][]string
	Notes   []string // below it
}

// Column tells the template how to set column j.
func (t table) Column(j int) string {
	if j < len(t.Right) && t.Right[j] {
		return "n"
	}
	return ""
}

// Write writes the report.
func Write(w io.Writer, in Input) error {
	asked := in.Rig
	in.Rig = in.Loops.Asked(in.Rig)
	in.settlingChosen = in.Rig != asked
	v := view{
		Rig: in.Rig.Name, About: in.About, What: "Plant and loops from closed-loop logs", Word: sentenceStart(in.Verdict), Class: in.Verdict,
		Command: in.Command, Tool: in.Tool,
		Made: in.Made.Format("2 January 2006, 15:04 MST"), MadeRFC: in.Made.Format(time.RFC3339),
	}
	v.Summary = summary(in)
	v.Facts = headFacts(in)
	v.Cautions = cautions(in)
	parts := []func(Input) section{logSection, plantSection, boundsSection, loopsSection, marginsSection, stepsSection, closureSection, originSection}
	for _, part := range parts {
		if s := part(in); s.ID != "" {
			v.Sections = append(v.Sections, s)
		}
	}
	if err := page.Execute(w, v); err != nil {
		return fmt.Errorf("writing the report: %w", err)
	}
	return nil
}
