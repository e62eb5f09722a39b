package ident

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit"
)

// Outputs that are wrong, by a spike or a sensor that is stuck for some rows,
// are left out: fitted as unknowns, one a row. They are found by what they leave
// in the prediction errors (fit.Outliers), in turns with fits without them, and
// where there are any the structure is searched again.
const (
	// falseAlarm is the probability that a log without a wrong output loses any,
	// half of it for single rows and half for stretches, each by Bonferroni's bound.
	falseAlarm = 0.003
	// Once a log has shown wrong outputs, rows are left out from where one right
	// one is lost a log: it costs less than a wrong one that stays.
	afterFirst = 1.0
	// A sensor that is stuck repeats itself exactly, for so many rows and more.
	fewestHeld = 4
	// clearlyRig is the gain in -2 log likelihood by which a large error of the rig
	// itself must explain a row better than a wrong output to count as one. Where
	// sensor noise is nearly all there is the two can hardly be told apart, and
	// leaving out a large error costs no more than a row.
	clearlyRig = 4
	// mostHeld is the longest stretch looked for; a longer one ends a segment.
	mostHeld = data.MinSegment
	// wrongShare of the outputs wrong makes a model weak.
	wrongShare = 0.05
	// mostWrong is the share at which the model is taken to be wrong instead.
	mostWrong     = 0.2
	leftOutTurns  = 12 // fits and looks at one structure
	leftOutSearch = 3  // searches for a structure
)

// Why an output was left out.
const (
	WhyReading = "spike or stuck value, seen in the column"
	WhySpike   = "spike: off what the rows around it tell"
	WhyStuck   = "stuck: a value held that the rows around it contradict"
)

// LeftOut counts the outputs of one log that were left out for one reason.
type LeftOut struct {
	File string  `json:"file"`
	Why  string  `json:"why"`
	Rows int     `json:"rows"`
	Line int     `json:"line"` // of the first, in the file
	Time float64 `json:"time"` // stamp of the first, s
}

// wrongOutput is one output that is left out.
type wrongOutput struct {
	record, row int
	why         string
}

// searched is what the search for a structure came to.
type searched struct {
	recs, some []fit.Record   // all rows, and those that structures are compared on
	parts      []stretch      // which these are of recs; nil: all
	p, sp      *fit.Predictor // of recs and of some
	chooser    *chooser       // on some
	ranked     []*candidate   // best first
	wrong      []wrongOutput  // outputs of recs left out
}

// search finds the structure, and outputs to leave out. ranked is empty where no
// structure could be fitted.
func search(ctx context.Context, recs []fit.Record, period float64, sc scope, opt Options) (*searched, error) {
	s := &searched{recs: recs}
	for n, r := range recs {
		for _, k := range r.Missing {
			s.wrong = append(s.wrong, wrongOutput{n, k, WhyReading})
		}
	}
	for turn := 1; ; turn++ {
		if err := s.choose(ctx, period, sc, opt); err != nil || len(s.ranked) == 0 {
			return s, err
		}
		more := s.look()
		if err := ctx.Err(); err != nil {
			return s, err
		}
		if len(more) == 0 || turn == leftOutSearch {
			return s, nil
		}
		s.leaveOut(more)
	}
}

// choose searches structures with what is left out so far.
func (s *searched) choose(ctx context.Context, period float64, sc scope, opt Options) error {
	var err error
	maxDelay := math.Max(sc.delay[1], sc.base)
	if s.p, err = fit.NewPredictor(s.recs, period, maxDelay); err != nil {
		return &RefusedError{What: err.Error(), Do: "log a longer run"}
	}
	s.p.Interrupt = opt.interrupt(ctx)
	s.some, s.sp, s.parts = s.recs, s.p, nil
	if s.p.Rows() > chooseRows {
		s.parts = stretches(s.recs, chooseRows)
		s.some = taken(s.recs, s.parts)
		if s.sp, err = s.p.On(s.some); err != nil {
			return err
		}
	}
	if s.chooser, err = newChooser(s.sp, s.some, sc, opt.Workers); err != nil {
		return &RefusedError{What: "no long model could be fitted: " + err.Error(), Do: "log a run in which input and output move"}
	}
	if opt.known != nil {
		s.ranked, err = s.chooser.around(ctx, opt.known, opt.Progress)
	} else {
		s.ranked, err = s.chooser.choose(ctx, opt.Progress)
	}
	return err
}

// look finds wrong outputs in turns with fits of the best structure; none where
// these end before all that stands out is explained.
func (s *searched) look() []wrongOutput {
	var found []wrongOutput
	p, recs, f := s.p, s.recs, s.ranked[0].fit
	for range leftOutTurns {
		o, err := p.Outliers(f)
		if err != nil {
			return nil
		}
		more := standOut(o, recs, len(s.wrong)+len(found) > 0)
		if len(more) == 0 {
			break
		}
		found = append(found, more...)
		if float64(len(s.wrong)+len(found)) > mostWrong*float64(p.Rows()) {
			return nil
		}
		recs = without(recs, more)
		next, err := p.On(recs)
		if err != nil {
			return nil
		}
		better, err := next.Fit(f, compareTol, compareStep)
		if err != nil {
			return nil
		}
		p, f = next, better
	}
	return found
}

// leaveOut adds outputs to those left out.
func (s *searched) leaveOut(more []wrongOutput) {
	s.recs = without(s.recs, more)
	s.wrong = append(s.wrong, more...)
	slices.SortFunc(s.wrong, func(a, b wrongOutput) int { return cmp.Or(cmp.Compare(a.record, b.record), cmp.Compare(a.row, b.row)) })
}

// without returns records with more outputs missing.
func without(recs []fit.Record, more []wrongOutput) []fit.Record {
	out := slices.Clone(recs)
	for n := range out {
		missing := slices.Clone(out[n].Missing)
		for _, w := range more {
			if w.record == n {
				missing = append(missing, w.row)
			}
		}
		slices.Sort(missing)
		out[n].Missing = slices.Compact(missing)
	}
	return out
}

// standOut lists the outputs that stand out of the errors: held stretches as a
// whole, less their first row, which may still be right; and single rows, the
// largest within a memory of the response only, since a wrong output makes its
// neighbours suspect. A row that a large error of the rig explains clearly better
// is an event of the rig, not of the sensor.
func standOut(o *fit.Outliers, recs []fit.Record, known bool) []wrongOutput {
	rows := 0
	var held [][3]int // record, from, to
	for n := range o.Records() {
		from, to := o.Rows(n)
		rows += to - from - len(recs[n].Missing)
		held = append(held, heldIn(recs[n], n, from, to)...)
	}
	allowed := falseAlarm / 2
	if known {
		allowed = afterFirst / 2
	}
	bound := -distuv.UnitNormal.Quantile(math.Min(0.25, allowed/float64(2*max(1, rows))))
	var out []wrongOutput
	taken := make([][]bool, o.Records())
	for n := range taken {
		taken[n] = make([]bool, len(recs[n].Y))
		for _, k := range recs[n].Missing {
			taken[n][k] = true
		}
	}
	for _, h := range held {
		n, from, to := h[0], h[1]+1, h[2]
		if !(distuv.ChiSquared{K: float64(to - from)}.Survival(o.Stretch(n, from, to)) < allowed/float64(len(held))) {
			continue
		}
		for k := from; k < to; k++ {
			out = append(out, wrongOutput{n, k, WhyStuck})
		}
		first, last := o.Rows(n)
		for k := max(first, from-o.Memory); k < min(last, to+o.Memory); k++ {
			taken[n][k] = true // looked at again without the stretch
		}
	}
	for n := range o.Records() {
		first, last := o.Rows(n)
		for k := first; k < last; k++ {
			if taken[n][k] {
				continue
			}
			w, large := o.Single(n, k)
			if !(math.Abs(w) > bound) || large*large > w*w+clearlyRig {
				continue
			}
			largest := true
			for j := max(first, k-o.Memory); j < min(last, k+o.Memory+1); j++ {
				v, _ := o.Single(n, j)
				largest = largest && math.Abs(v) <= math.Abs(w)
			}
			if largest {
				out = append(out, wrongOutput{n, k, WhySpike})
			}
		}
	}
	return out
}

// heldIn lists the stretches [from, to) of equal outputs in record n that have
// errors and are not missing already.
func heldIn(r fit.Record, n, first, last int) [][3]int {
	var out [][3]int
	for from, to := first, 0; from < last; from = to {
		for to = from + 1; to < last && r.Y[to] == r.Y[from]; to++ {
		}
		missing := func(k int) bool { _, found := slices.BinarySearch(r.Missing, k); return found }
		if to-from >= fewestHeld && to-from <= mostHeld && !missing(to-1) {
			out = append(out, [3]int{n, from, to})
		}
	}
	return out
}

// leftOut is the evidence of what was left out.
func leftOut(exps []*data.Experiment, wrong []wrongOutput) []LeftOut {
	out := []LeftOut{}
	n := 0
	for _, e := range exps {
		of := len(out)
		for _, s := range e.Segments {
			for _, w := range wrong {
				if w.record != n {
					continue
				}
				i := slices.IndexFunc(out[of:], func(l LeftOut) bool { return l.Why == w.why })
				if i < 0 {
					i = len(out) - of
					out = append(out, LeftOut{File: e.File, Why: w.why, Line: s.LineAt(w.row), Time: s.Start + float64(w.row)*e.Period})
				}
				out[of+i].Rows++
			}
			n++
		}
	}
	return out
}

// marked returns the logs with the missing outputs of their records, one for each
// segment, as wrong ones.
func marked(exps []*data.Experiment, recs []fit.Record) []*data.Experiment {
	out := make([]*data.Experiment, len(exps))
	n := 0
	for i, e := range exps {
		more := *e
		more.Segments = slices.Clone(e.Segments)
		for k := range more.Segments {
			more.Segments[k].Wrong = recs[n].Missing
			n++
		}
		out[i] = &more
	}
	return out
}

// cutAtWrong returns the logs cut at wrong outputs, pieces of data.MinSegment rows
// and more, for what knows no missing ones.
func cutAtWrong(exps []*data.Experiment) []*data.Experiment {
	out := make([]*data.Experiment, len(exps))
	for i, e := range exps {
		cut := *e
		cut.Segments = slices.DeleteFunc(e.Pieces(), func(s data.Segment) bool { return len(s.Y) < data.MinSegment })
		out[i] = &cut
	}
	return out
}

// clipped warns of logs whose input was logged before its limits.
func (m *Model) clipped(exps []*data.Experiment) {
	for _, e := range exps {
		for _, f := range e.Flaws {
			if f.Name == data.FlawBeyond {
				m.Warnings = append(m.Warnings, fmt.Sprintf("the input of %s is past [limits] input in %s, the first on line %d: it was clipped to them, log it after its limits",
					e.File, counted(f.Count, "row"), f.Line))
			}
		}
	}
}

// doubtfulFlaws are those that a linear plant fitted to the log inherits.
var doubtfulFlaws = []string{data.FlawClocks, data.FlawTelemetry, data.FlawRate, data.FlawDeadZone, data.FlawStiction, data.FlawCycle,
	data.FlawPeriodic, data.FlawAlias, data.FlawFew}

// Doubtful tells whether a linear plant fitted to the log inherits the flaw, so that the model is weak.
func (f Flaw) Doubtful() bool { return slices.Contains(doubtfulFlaws, f.Name) }

// doubt calls a model weak where a log has such a flaw.
func (m *Model) doubt(exps []*data.Experiment) {
	for _, e := range exps {
		for _, f := range e.Flaws {
			if slices.Contains(doubtfulFlaws, f.Name) {
				m.Verdict = Weak
				m.Warnings = append(m.Warnings, fmt.Sprintf("%s in %s: %s; %s", f.Name, e.File, f.Detail, f.Remedy()))
			}
		}
	}
}
