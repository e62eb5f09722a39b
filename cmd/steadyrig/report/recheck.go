package report

import (
	"cmp"
	"fmt"
	"io"
	"math"
	"slices"
	"time"

	"gonum.org/v1/plot"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

// RecheckInput is what the page of a recheck tells.
type RecheckInput struct {
	Rig           *data.Rig
	Before, After *ident.Model  // After may hold no plant
	Loops         *design.Loops // the present ones; nil: none were given
	Recheck       *design.Recheck
	Command, Tool string
	Made          time.Time
	Seed          uint64 // of the plants drawn for the figures
}

// Strokes of what was before; what is now has those of any report.
var (
	beforeLine = stroke{rust, 1.4, []float64{5, 2.5}}
	beforeBand = faint(rust, 0x2c)
	retuneLine = stroke{ink, 1.8, []float64{2, 2}}
)

// WriteRecheck writes the page of a recheck, the earlier plant and the new one laid over each other.
func WriteRecheck(w io.Writer, in RecheckInput) error {
	r := in.Recheck
	if in.Loops != nil {
		in.Rig = in.Loops.Asked(in.Rig)
	}
	v := view{
		Rig: in.Rig.Name, What: "What a change did to the rig, and whether its loops still hold", Word: sentenceStart(r.Verdict), Class: r.Verdict,
		Command: in.Command, Tool: in.Tool,
		Made: in.Made.Format("2 January 2006, 15:04 MST"), MadeRFC: in.Made.Format(time.RFC3339),
		Cautions: r.Cautions,
	}
	for _, text := range []string{r.Why, r.Do} {
		if text != "" {
			v.Summary = append(v.Summary, sentence(text))
		}
	}
	v.Facts = []fact{{"All numbers together", words.Moved(r)}}
	if r.Promise != nil {
		v.Facts = append(v.Facts, fact{"Present loops", words.Held(r.Promise)})
	}
	if g := r.NuGap; g != nil {
		for _, f := range words.Distance(g, in.Rig.Units) {
			v.Facts = append(v.Facts, fact{sentenceStart(f[0]), f[1]})
		}
	}
	for _, part := range []func(RecheckInput) section{movedSection, presentSection, recheckOrigin} {
		if s := part(in); s.ID != "" {
			v.Sections = append(v.Sections, s)
		}
	}
	if err := page.Execute(w, v); err != nil {
		return fmt.Errorf("writing the page: %w", err)
	}
	return nil
}

func movedSection(in RecheckInput) section {
	r := in.Recheck
	s := section{ID: "moved", Title: "What moved"}
	if r.Words != "" {
		s.Lead = append(s.Lead, sentence(r.Words))
	}
	for _, w := range r.Warnings {
		s.Lead = append(s.Lead, sentence(w))
	}
	if r.Law != nil {
		s.Facts = append(s.Facts, fact{"Law that ran", r.Law.Words})
	}
	s.Facts = append(s.Facts, fact{"Model of the new log", in.After.Verdict})
	if r.Prediction != nil {
		s.Facts = append(s.Facts, fact{"Prediction", words.Predicted(r.Prediction, in.Rig.Units.Output)})
	}
	if r.Structure != nil {
		s.Facts = append(s.Facts, fact{"Structure", words.Fits(r.Structure)})
	}
	t := table{Caption: "Numbers of the plant before and after", Head: []string{"Number", "Before", "After", "Changed by, 95 %", "By chance"}, Right: []bool{false, true, true, true, true}, Rows: words.Changed(r)}
	if len(t.Rows) > 0 {
		t.Notes = []string{"* more than chance explains, all numbers counted."}
		s.Tables = append(s.Tables, t)
	}
	if !hasPlant(in.After) {
		s.Lead = append(s.Lead, "No plant can be given from the new log.")
		return s
	}
	s.Tables = append(s.Tables, rootTable("Poles before, rad/s", in.Before.Poles, "Unstable"), rootTable("Poles after, rad/s", in.After.Poles, "Unstable"))
	s.Figures = append(s.Figures, bothResponses(in)...)
	shade := faint(rust, 0x18)
	keys := []key{{Stroke: stroke{faint(rust, 0xa0), 3.2, nil}, Label: "before, 95 %"}, {Stroke: stroke{faint(petrol, 0xa0), 3.2, nil}, Label: "after, 95 %"}, {Band: &shade, Label: "unstable half-plane"}}
	add := func(title, alt string, before, after *ident.Model) {
		p := rootPlot(rooted{before, beforeLine, beforeLine}, rooted{after, mainLine, mainLine})
		s.Figures = append(s.Figures, figure{drawn(p, alt), title, keys, "An interval narrower than its mark does not show; the tables have the numbers."})
	}
	add("Poles × and zeros ○, before and after", "Poles and zeros of the earlier and of the new plant with their 95 % intervals", in.Before, in.After)
	if a, b := slow(in.Before), slow(in.After); len(a.Poles) < len(in.Before.Poles) && len(b.Poles) > 0 {
		add("The slow ones, close up", "The slow poles and zeros of the earlier and of the new plant with their 95 % intervals", a, b)
	}
	return s
}

// slow is a model with those poles and zeros alone that are no more than twice as fast as the rightmost pole.
func slow(m *ident.Model) *ident.Model {
	size := func(r ident.Root) float64 { return math.Hypot(r.Re, r.Im) }
	fastest := 2 * size(slices.MaxFunc(m.Poles, func(a, b ident.Root) int { return cmp.Compare(a.Re, b.Re) }))
	fast := func(r ident.Root) bool { return size(r) > fastest }
	return &ident.Model{Poles: slices.DeleteFunc(slices.Clone(m.Poles), fast), Zeros: slices.DeleteFunc(slices.Clone(m.Zeros), fast)}
}

// bothResponses draws gain and phase of both plants with their bands.
func bothResponses(in RecheckInput) []figure {
	a, b := in.Before.FrequencyResponse, in.After.FrequencyResponse
	if a == nil || b == nil {
		return nil
	}
	u := in.Rig.Units
	g, ph := newPlot("frequency, rad/s", axis("gain", words.Ratio(u.Output, u.Input))), newPlot("frequency, rad/s", "phase, degrees")
	logAxis(&g.X)
	logAxis(&g.Y)
	logAxis(&ph.X)
	// Unwrapped phases may start whole turns apart.
	turn := 360 * math.Round((b.Phase.Value[0]-a.Phase.Value[0])/360)
	turned := func(x []float64) []float64 {
		y := slices.Clone(x)
		for i := range y {
			y[i] += turn
		}
		return y
	}
	addBand(g, a.Omega, a.Gain.Lo, a.Gain.Hi, beforeBand)
	addBand(g, b.Omega, b.Gain.Lo, b.Gain.Hi, bandColour)
	addLine(g, a.Omega, a.Gain.Value, beforeLine)
	addLine(g, b.Omega, b.Gain.Value, mainLine)
	addBand(ph, a.Omega, turned(a.Phase.Lo), turned(a.Phase.Hi), beforeBand)
	addBand(ph, b.Omega, b.Phase.Lo, b.Phase.Hi, bandColour)
	addLine(ph, a.Omega, turned(a.Phase.Value), beforeLine)
	addLine(ph, b.Omega, b.Phase.Value, mainLine)
	if span := ph.Y.Max - ph.Y.Min; span > 20 && span < 1000 {
		ph.Y.Tick.Marker = degreeTicks{}
	}
	room(&ph.Y)
	old, now := beforeBand, bandColour
	keys := []key{
		{Stroke: beforeLine, Label: "before"}, {Band: &old, Label: fmt.Sprintf("its %.0f %% joint band", 100*a.Level)},
		{Stroke: mainLine, Label: "after"}, {Band: &now, Label: fmt.Sprintf("its %.0f %% joint band", 100*b.Level)},
	}
	note := "From the logged input to the output. Each whole true response lies inside its own band, gain and phase, with the confidence named; bands that part at some frequency speak for a change there, bands that overlap not against one."
	return []figure{
		{drawn(g, "Gain of the earlier and of the new plant over frequency, with their bands"), "Frequency response: gain", keys, note},
		{drawn(ph, "Phase of the earlier and of the new plant over frequency, with their bands"), "Frequency response: phase", keys, ""},
	}
}

// presentSection sets the present loops on both plants side by side, and what a retune would gain.
func presentSection(in RecheckInput) section {
	r, u := in.Recheck, in.Rig.Units
	if in.Loops == nil || r.Promise == nil {
		return section{}
	}
	s := section{ID: "present", Title: "Present loops", Lead: []string{
		fmt.Sprintf("Plants drawn from the model of the new log alone, in the sampled loop with its delay and limits: %s.", words.Held(r.Promise)),
	}}
	if r.Retuned != nil && r.Retuned.Promise != nil {
		s.Lead = append(s.Lead, "Retuned for the new plant: "+words.Held(r.Retuned.Promise)+".")
	}
	if r.Gain != nil && r.Gain.Why != "" {
		s.Lead = append(s.Lead, sentence("no new pair: "+r.Gain.Why))
	}
	s.Tables = []table{{
		Caption: "Present and retuned loops on the new plants", Head: []string{"Figure", "Present (worst plant)", "Retuned (worst plant)", "Asked"},
		Right: []bool{false, true, true, true}, Rows: words.Gained(r, in.Rig),
	}}
	y, x := newPlot("time, s", axis("output", u.Output)), newPlot("time, s", axis("input", u.Input))
	var keys []key
	var reference *design.Responses
	for _, c := range []struct {
		label string
		loops *design.Loops
		m     *ident.Model
		many  int
		line  stroke
		faint stroke
	}{
		{"present loops, plant before", in.Loops, in.Before, drawnSteps / 2, beforeLine, stroke{faint(rust, 0x40), 0.7, nil}},
		{"present loops, plant after", in.Loops, in.After, drawnSteps / 2, mainLine, drawnLine},
		{"retuned loops, plant after", r.Retuned, in.After, 0, retuneLine, drawnLine},
	} {
		if c.loops == nil || c.loops.Inner == nil {
			continue
		}
		run, err := c.loops.StepResponses(c.m, in.Rig, c.many, in.Seed)
		if err != nil {
			s.Lead = append(s.Lead, sentence("no step responses of "+c.label+": "+err.Error()))
			continue
		}
		reference = run
		keys = append(keys, key{Stroke: c.line, Label: c.label})
		drawSteps(y, run.Time, run.Output, c.line, c.faint)
		drawSteps(x, run.Time, run.Input, c.line, c.faint)
	}
	if reference == nil {
		return s
	}
	spec, end, target := in.Rig.Spec, reference.Time[len(reference.Time)-1], reference.Reference[len(reference.Reference)-1]
	addLevel(y, 0, end, target+spec.Overshoot*spec.Step, askedLine)
	addLevel(y, spec.Settling, end, target+spec.Band*spec.Step, askedLine)
	addLevel(y, spec.Settling, end, target-spec.Band*spec.Step, askedLine)
	if o := in.Rig.Limits.Output; o != nil { // an output that runs away must not flatten the rest
		y.Y.Min, y.Y.Max = math.Max(y.Y.Min, o[0]), math.Min(y.Y.Max, o[1])
	}
	room(&y.Y)
	room(&x.Y)
	yKeys := append(slices.Clone(keys), key{Stroke: askedLine, Label: "overshoot and settling asked for"})
	s.Figures = []figure{
		{drawn(y, "Output after the reference step of the spec with the present loops on both plants, and with the retuned ones"), "Step of the reference", yKeys,
			fmt.Sprintf("In the sampled loop with its limits, without noise; thin: %d plants drawn of each model.", drawnSteps/2)},
		{drawn(x, "Input after the reference step of the spec"), "What the step takes of the actuator", keys, ""},
	}
	return s
}

// drawSteps draws runs, the nominal one last so that it lies on top.
func drawSteps(p *plot.Plot, t []float64, runs [][]float64, nominal, drawn stroke) {
	for i := len(runs) - 1; i >= 0; i-- {
		s := drawn
		if i == 0 {
			s = nominal
		}
		tx, ty := thinned(t, runs[i], stretches)
		addLine(p, tx, ty, s)
	}
}

func recheckOrigin(in RecheckInput) section {
	s := section{ID: "origin", Title: "Origin", Lead: []string{"The command that made this page:"}, Code: in.Command}
	t := table{Caption: "Logs", Head: []string{"", "File", "Rows used", "of", "SHA-256"}, Right: []bool{false, false, true, true}}
	for i, m := range []*ident.Model{in.Before, in.After} {
		for _, l := range m.Logs {
			t.Rows = append(t.Rows, []string{[]string{"before", "after"}[i], l.File, fmt.Sprint(l.Used), fmt.Sprint(l.Rows), l.SHA256})
		}
	}
	s.Tables = []table{t}
	s.Facts = []fact{{"Tool", in.Tool}, {"Seed", fmt.Sprint(in.Seed)}}
	return s
}
