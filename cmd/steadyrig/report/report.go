package report

import (
	"io"
	"time"

	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

// Input is what a report tells. Loops without an inner block, and a model without a plant, are told as refused.
type Input struct {
	Rig     *data.Rig
	Logs    []*data.Experiment
	Audit   *ident.AuditReport
	Model   *ident.Model
	Loops   *design.Loops
	Refusal error // why the job ended early; nil: it did not
	Command string
	Tool    string
	Made    time.Time
	Seed    uint64
}

// Write writes the report.
func Write(w io.Writer, in Input) error { return nil }
