package report

import (
	"fmt"
	"strings"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/design"
	"steadyrig/ident"
)

func hasPlant(m *ident.Model) bool { return len(m.Plant.Denominator) > 0 }

func hasLoops(l *design.Loops) bool { return l.Inner != nil }

// summary says in a few sentences what the run came to.
func summary(in Input) []string {
	var s []string
	if in.Refusal != nil {
		s = append(s, sentence(in.Refusal.Error()))
	}
	if hasLoops(in.Loops) && in.Loops.Promise != nil {
		s = append(s, sentence(strings.TrimPrefix(words.Loops(in.Loops), in.Rig.Name+": ")))
	}
	if hasPlant(in.Model) {
		s = append(s, sentence(words.Unstable(in.Model.Poles)))
	}
	return s
}

// sentence gives a text a capital and a full stop.
func sentence(s string) string {
	s = strings.TrimSpace(s)
	if s == "" {
		return s
	}
	return strings.TrimSuffix(sentenceStart(s), ".") + "."
}

func sentenceStart(s string) string {
	if s != "" && s[0] >= 'a' && s[0] <= 'z' {
		return strings.ToUpper(s[:1]) + s[1:]
	}
	return s
}

// headFacts are the figures that a reader looks for first.
func headFacts(in Input) []fact {
	var f []fact
	u := in.Rig.Units
	if l := in.Loops; hasLoops(l) {
		form := l.InnerForm
		if l.OuterForm != "" {
			form += " inside, " + l.OuterForm + " outside"
		}
		if form != "" {
			f = append(f, fact{"Loops", form + ", one step every " + words.Seconds(l.SamplePeriod)})
		}
		if m := l.Margins; m != nil && m.PlantInput != nil {
			f = append(f, fact{"Gain may change by", factors(m.PlantInput)})
			if d := m.PlantInput.Delay; d != nil {
				f = append(f, fact{"Delay may grow by", words.Seconds(*d)})
			}
		}
		if q := l.Promise; q != nil {
			f = append(f,
				fact{"Peak |S|, worst plant", words.Number(q.PeakS.Worst) + asked(in, func() float64 { return in.Rig.Spec.PeakSensitivity }, "")},
				fact{"Overshoot, worst plant", words.Share(q.Overshoot.Worst) + asked(in, func() float64 { return 100 * in.Rig.Spec.Overshoot }, "%")},
				fact{"Settling, worst plant", words.Seconds(q.Settling.Worst) + settlingText(in)},
				fact{"Comes back from", words.Unit(words.Number(q.Recoverable), u.Output)},
			)
		}
	}
	if len(f) > 0 {
		return f
	}
	f = []fact{{"Sign", in.Audit.Sign.Words}, {"From outside", in.Audit.Outside.Words}}
	if in.Audit.Verdict == ident.Refused {
		f = append(f, fact{"Next step", in.Audit.NextStep})
	}
	for _, b := range in.Loops.Bounds {
		if value, _, ask := words.Bound(b); !b.OK {
			f = append(f, fact{sentenceStart(b.Name), "asked " + ask + ", physics allows " + value})
		}
	}
	return f
}

func asked(in Input, get func() float64, unit string) string {
	return askedText(in, func() string { return words.Unit(words.Number(get()), unit) })
}

func askedText(in Input, get func() string) string {
	if in.Rig.Spec == nil {
		return ""
	}
	return " (asked: " + get() + ")"
}

func settlingText(in Input) string {
	if in.settlingChosen {
		return " (none asked, " + words.Seconds(in.Rig.Spec.Settling) + " chosen)"
	}
	return askedText(in, func() string { return words.Seconds(in.Rig.Spec.Settling) })
}

func factors(m *design.Margins) string {
	return "times " + orAny(m.GainDown, words.Brief) + " to " + orAny(m.GainUp, words.Brief)
}

func orAny(x *float64, show func(float64) string) string {
	if x == nil {
		return "any"
	}
	return show(*x)
}

// cautions are what must be read before anybody acts on the report.
func cautions(in Input) []string {
	c := []string{
		"An unstable rig can throw, break or burn. Guards on and nobody within reach before any loop is closed, one person at the stop who does nothing else.",
		"Trips on the output and on the input must work without this controller, and must have been tried first.",
	}
	if hasLoops(in.Loops) {
		c = append(c,
			"Close the inner loop alone first, then the outer one slowly, in the order given under “First closure”.",
			"The promise covers the plants that the data allow, at this operating point, sample period and delay, and no others. A changed rig is another plant.")
	} else {
		c = append(c, "No loops are given here. Until there are, the stopgap law is all that holds the rig.")
	}
	return append(c, "Local codes and the judgement of a licensed practitioner come before anything written here.")
}

func logSection(in Input) section {
	a, u := in.Audit, in.Rig.Units
	s := section{ID: "log", Title: "Log", Lead: []string{fmt.Sprintf("Verdict on the log: %s.", a.Verdict)}}
	s.Facts = []fact{
		{"Sign", a.Sign.Words},
		{"Operating point", fmt.Sprintf("input %s, output %s; standard deviations about it %s and %s",
			words.Unit(words.Number(a.OperatingPoint.Input), u.Input), words.Unit(words.Number(a.OperatingPoint.Output), u.Output),
			words.Unit(words.Number(a.Spread.Input), u.Input), words.Unit(words.Number(a.Spread.Output), u.Output))},
		{"Pairing of columns", a.Pairing.Words},
		{"Loop rate", a.LoopRate.Words},
		{"From outside", a.Outside.Words},
	}
	if text := words.Excitation(a.Excitation, u); text != "" {
		s.Facts = append(s.Facts, fact{"Excitation", text})
	}
	s.Facts = append(s.Facts, fact{"Signal and noise", words.SignalAndNoise(a)})
	if a.Memories > 0 {
		s.Facts = append(s.Facts, fact{"Length", words.Memories(a.Memories)})
	}
	if a.Law != nil {
		s.Facts = append(s.Facts, fact{"Stopgap law", a.Law.Words})
	}
	s.Facts = append(s.Facts, fact{"To expect", words.ToExpect(a)})
	if i := a.Informative; i != nil && i.Lacking {
		s.Facts = append(s.Facts, fact{"Probe power", i.Advice})
	}
	if a.NextStep != "" {
		s.Facts = append(s.Facts, fact{"Next step", a.NextStep})
	}
	for i, e := range in.Logs {
		if i == shownLogs {
			s.Lead = append(s.Lead, fmt.Sprintf("%s drawn of %d.", words.Count(shownLogs, "log"), len(in.Logs)))
			break
		}
		s.Figures = append(s.Figures, logFigures(e, in.Rig)...)
	}
	if a.Coherence != nil {
		s.Figures = append(s.Figures, coherenceFigure(a.Coherence), noiseFigure(a.Coherence))
	}
	if i := a.Informative; i != nil {
		s.Figures = append(s.Figures, bandFigure(i))
		s.Tables = append(s.Tables, table{
			Caption: "Where what the log tells of the rightmost pole comes from", Head: []string{"rad/s", "Hz", "Power", "Tells", "Could add", "Worth"},
			Right: []bool{true, true, true, true, true, true}, Rows: words.Bands(i), Notes: []string{words.BandNote(i)},
		})
		next := table{Caption: words.NextTests(i), Head: []string{"Pole", "Change"}, Right: []bool{true, false}}
		for _, n := range i.NextTests {
			h, text := words.NextTest(n)
			next.Rows = append(next.Rows, []string{h, text})
		}
		s.Tables = append(s.Tables, next)
	}
	flaws := table{Caption: "Flaws found in the log", Head: []string{"Flaw", "Column", "Count", "First line", "What", "Effect"}, Right: []bool{false, false, true, true, false, false}}
	for _, f := range a.Flaws {
		line := ""
		if f.Line > 0 {
			line = fmt.Sprint(f.Line)
		}
		flaws.Rows = append(flaws.Rows, []string{f.Name, f.Column, fmt.Sprint(f.Count), line, f.Detail, f.Effect + "; what to do: " + f.Remedy})
	}
	if len(flaws.Rows) > 0 {
		s.Tables = append(s.Tables, flaws)
	} else {
		s.Lead = append(s.Lead, "No flaw was found in its columns.")
	}
	return s
}

func plantSection(in Input) section {
	m, u := in.Model, in.Rig.Units
	s := section{ID: "plant", Title: "Plant", Lead: []string{sentence("Verdict on the model: " + m.Verdict)}}
	for _, w := range m.Warnings {
		s.Lead = append(s.Lead, sentence(w))
	}
	if !hasPlant(m) {
		s.Lead = append(s.Lead, "No plant can be given from this log.")
		return s
	}
	ratio := words.Ratio(u.Output, u.Input)
	s.Facts = []fact{
		{"Transfer function", "from the input's to the output's deviation from the operating point; " + words.PlantUnits(u) + "; ± is half a 95 % interval"},
		{"Numerator", words.Numerator(m)},
		{"Denominator", words.Denominator(m)},
		{"Delay", words.Delay(m) + ", from the logged input to the output"},
		{"Steady gain", words.SteadyGain(m, ratio)},
	}
	if g := m.Gain.HighFrequency; g != nil {
		s.Facts = append(s.Facts, fact{"Leading gain", words.Leading(m, ratio)})
	}
	s.Facts = append(s.Facts,
		fact{"Operating point", fmt.Sprintf("input %s, output %s", words.Unit(words.Number(m.OperatingPoint.Input), u.Input), words.Unit(words.Number(m.OperatingPoint.Output), u.Output))},
		fact{"Explained", words.Share(m.Evidence.ExplainedShare) + " of the output's variance one step ahead, on rows not used in the fit"},
		fact{"Residuals", words.Residuals(m)},
		fact{"Length", words.Memories(m.Evidence.Memories)},
	)
	if text := words.Basis(m); text != "" {
		s.Facts = append(s.Facts, fact{"Intervals", text})
	}
	if agreement := words.Agreement(m); agreement != nil {
		s.Facts = append(s.Facts, fact{"One plant in all logs", strings.Join(agreement, "; ")})
		for i := range m.Logs {
			s.Facts = append(s.Facts, fact{"Log", words.LogUsed(m, i, u.Output)})
		}
	}
	for _, text := range words.LeftOut(m) {
		s.Facts = append(s.Facts, fact{"Left out", text})
	}
	poles := rootTable("Poles, rad/s", m.Poles, "Unstable")
	poles.Notes = words.PoleNotes(m.Poles)
	s.Tables = append(s.Tables, poles)
	if e := m.Exact; e != nil {
		exact := table{Caption: words.ExactTitle(e), Head: []string{"Pole", "Part", "95 % interval"}, Right: []bool{true}, Notes: words.ExactNotes(e)}
		pole, part, bounds := words.ExactIntervals(e)
		for i := range pole {
			exact.Rows = append(exact.Rows, []string{pole[i], part[i], bounds[i]})
		}
		s.Tables = append(s.Tables, exact)
	}
	if len(m.Zeros) > 0 {
		s.Tables = append(s.Tables, rootTable("Zeros, rad/s", m.Zeros, "Right half-plane"))
	}
	methods := table{Caption: "The same poles by other ways of estimating", Head: []string{"Method", "Takes for granted", "Rightmost pole, rad/s", "95 %", "Agrees", "By chance", "Note"}, Right: []bool{false, false, true, true, false, true}}
	for _, e := range m.Evidence.Methods {
		methods.Rows = append(methods.Rows, []string{e.Name, words.Assumes[e.Name], words.Rightmost(e.Poles), words.Within(e), words.Agrees(e), words.ByChance(e), e.Note})
	}
	if text := words.RowsSeen(m.Evidence.Methods); text != "" {
		methods.Notes = append(methods.Notes, text)
	}
	if len(methods.Rows) > 0 {
		s.Tables = append(s.Tables, methods)
	}
	structures := table{Caption: "Structures compared", Head: []string{"Poles", "Held at 0", "Zeros", "Colour", "Delay", "BIC above best", ""}, Right: []bool{true, true, true, true, true, true}}
	for _, c := range m.Evidence.Structures {
		note := c.Verdict
		if c.Chosen && note == "" {
			note = "chosen"
		}
		structures.Rows = append(structures.Rows, []string{fmt.Sprint(c.Poles), fmt.Sprint(c.Integrators), fmt.Sprint(c.Zeros), fmt.Sprint(c.Colour), words.Seconds(c.Delay), words.Number(c.BIC), note})
	}
	if len(structures.Rows) > 0 {
		s.Tables = append(s.Tables, structures)
	}
	s.Figures = append(s.Figures, fitFigures(m, in.Logs, u)...)
	s.Figures = append(s.Figures, poleFigure(m))
	if f, ok := methodFigure(m); ok {
		s.Figures = append(s.Figures, f)
	}
	s.Figures = append(s.Figures, responseFigures(m, u)...)
	return s
}

func rootTable(caption string, roots []ident.Root, right string) table {
	t := table{Caption: caption, Head: []string{"Value", "95 % interval", right, "Probability"}, Right: []bool{true, false, false, true}}
	for _, r := range roots {
		if r.Im < 0 {
			continue
		}
		value, bounds := words.Root(r)
		verdict, chance := words.Unstableness(r)
		t.Rows = append(t.Rows, []string{value, bounds, verdict, chance})
	}
	return t
}

func boundsSection(in Input) section {
	if len(in.Loops.Bounds) == 0 {
		return section{}
	}
	s := section{ID: "bounds", Title: "What physics allows", Lead: []string{"Limits that no controller passes, on this plant with this actuator, delay and sample period."}}
	t := table{Caption: "Bounds beside what the spec asks", Head: []string{"Bound", "No better than", "95 % over plants", "Asked", "In reach", "Source"}, Right: []bool{false, true, false, true}}
	for _, b := range in.Loops.Bounds {
		value, interval, ask := words.Bound(b)
		if interval == "" {
			interval = "–" // the same for all plants
		}
		t.Rows = append(t.Rows, []string{b.Name, value, interval, ask, words.InReach(b), b.Source})
		if b.Advice != "" {
			s.Lead = append(s.Lead, sentence(b.Name+": "+b.Advice))
		}
	}
	s.Tables = []table{t}
	return s
}

func loopsSection(in Input) section {
	l, u := in.Loops, in.Rig.Units
	s := section{ID: "loops", Title: "Loops", Lead: []string{sentence("Verdict on the loops: " + l.Verdict)}}
	for _, w := range l.Warnings {
		s.Lead = append(s.Lead, sentence(w))
	}
	if !hasLoops(l) {
		return s
	}
	s.Code = strings.ReplaceAll(l.Law, "; ", "\n")
	s.Facts = append(s.Facts, fact{"Operating point", fmt.Sprintf("u0 = %s, y0 = %s", words.Unit(words.Number(l.OperatingPoint.Input), u.Input), words.Unit(words.Number(l.OperatingPoint.Output), u.Output))})
	if l.InputLimits != nil {
		s.Facts = append(s.Facts, fact{"Input limits", words.Unit(words.Number(l.InputLimits[0])+" to "+words.Number(l.InputLimits[1]), u.Input)})
	}
	if l.OuterLimits != nil {
		s.Facts = append(s.Facts, fact{"Outer limits", words.Unit(words.Number(l.OuterLimits[0])+" to "+words.Number(l.OuterLimits[1]), u.Output) + ", deviation"})
	}
	blocks := table{Caption: "Controllers, rounded; loops.json has all digits", Head: []string{"Block", "Form", "As designed", fmt.Sprintf("As run every %s", words.Seconds(l.SamplePeriod))}}
	for _, b := range []struct {
		name, form string
		block      *design.Block
	}{{"inner", l.InnerForm, l.Inner}, {"outer", l.OuterForm, l.Outer}, {"prefilter", "", l.Prefilter}} {
		if b.block.IsOne() {
			continue
		}
		if b.form == "" {
			b.form = b.block.Given
		}
		continuous := ""
		if c := b.block.Continuous; c != nil {
			continuous = "(" + words.Polynomial(c.Numerator, "s") + ") / (" + words.Polynomial(c.Denominator, "s") + ")"
		}
		blocks.Rows = append(blocks.Rows, []string{b.name, b.form, continuous, words.Fraction(b.block.Discrete, "z")})
	}
	s.Tables = append(s.Tables, blocks)
	forms := table{Caption: "What simplicity costs, on the worst of the tuning plants", Head: []string{"Loop", "Form", "Order", "Peak |S|", "Input noise, sd", ""}, Right: []bool{false, false, true, true, true}}
	for _, f := range l.Forms {
		mark := ""
		if f.Chosen {
			mark = "chosen"
		}
		forms.Rows = append(forms.Rows, []string{f.Loop, f.Form, fmt.Sprint(f.Order), words.Number(f.PeakSensitivity), words.Unit(words.Number(f.InputNoise), u.Input), mark})
	}
	if l.Choice != "" {
		forms.Notes = []string{sentence("Chosen: " + l.Choice)}
	}
	if len(forms.Rows) > 0 {
		s.Tables = append(s.Tables, forms)
	}
	front := table{
		Caption: "Speed against effort of the spec's step, on the worst of the tuning plants",
		Head:    []string{"Settling", "Overshoot", "Of the input's range", "Input noise, sd", "Peak |S|", "Outer form", ""}, Right: []bool{true, true, true, true, true},
		Notes: []string{"The controllers of each point are in loops.json. To have another one proven, ask for its settling in the rig file."},
	}
	for _, f := range l.Front {
		mark := ""
		if f.Chosen {
			mark = "chosen"
		}
		front.Rows = append(front.Rows, []string{words.Seconds(f.Settling), words.Share(f.Overshoot), words.Share(f.PeakInput),
			words.Unit(words.Number(f.InputNoise), u.Input), words.Number(f.PeakSensitivity), f.OuterForm, mark})
	}
	if len(front.Rows) > 0 {
		s.Tables = append(s.Tables, front)
	}
	if l.Assumed != nil {
		s.Facts = append(s.Facts, fact{"Settling", fmt.Sprintf("%s, chosen: %s", words.Seconds(l.Assumed.Settling), l.Assumed.Why)})
	}
	return s
}

func marginsSection(in Input) section {
	l := in.Loops
	if !hasLoops(l) {
		return section{}
	}
	s := section{ID: "margins", Title: "Margins"}
	if l.Margins != nil {
		s.Lead = []string{"Margins count at the plant input with both loops closed. The outer break alone looks better than the loop is."}
		t := table{Caption: "Margins of the sampled loop, nominal plant", Head: []string{"Loop", "Gain times", "Phase", "Delay", "Peak |S|", "at, rad/s", "Gain one at, rad/s"}, Right: []bool{false, true, true, true, true, true, true}}
		for _, m := range []struct {
			name string
			m    *design.Margins
		}{{"plant input, both loops", l.Margins.PlantInput}, {"inner loop alone", l.Margins.InnerAlone}, {"outer break", l.Margins.OuterBreak}} {
			if m.m != nil {
				t.Rows = append(t.Rows, []string{m.name, strings.TrimPrefix(factors(m.m), "times "), orAny(m.m.PhaseDeg, func(x float64) string { return words.Brief(x) + "°" }),
					orAny(m.m.Delay, words.Seconds), words.Brief(m.m.PeakSensitivity), words.Brief(m.m.PeakSensitivityAt), words.Brief(m.m.Crossover)})
			}
		}
		if w := l.Margins.Worst; w != nil && w.Stable > 0 {
			m := &design.Margins{GainUp: w.GainUp, GainDown: w.GainDown}
			t.Rows = append(t.Rows, []string{fmt.Sprintf("plant input, worst of %d drawn plants", w.Plants), strings.TrimPrefix(factors(m), "times "), orAny(w.PhaseDeg, func(x float64) string { return words.Brief(x) + "°" }),
				orAny(w.Delay, words.Seconds), words.Brief(w.PeakSensitivity), "", ""})
		}
		s.Tables = []table{t}
	}
	if l.Yardstick != nil {
		for _, f := range words.Yardstick(l.Yardstick, in.Rig.Units) {
			s.Facts = append(s.Facts, fact{sentenceStart(f[0]), f[1]})
		}
	}
	curves, err := l.Sensitivity(in.Model, in.Rig, drawnSpectra, in.Seed)
	if err != nil { // the figures are missed, the rest is not lost
		s.Lead = append(s.Lead, sentence("No curves: "+err.Error()))
		return s
	}
	s.Figures = sensitivityFigures(curves, in.Rig.Spec.PeakSensitivity)
	return s
}

func stepsSection(in Input) section {
	l, u := in.Loops, in.Rig.Units
	if !hasLoops(l) {
		return section{}
	}
	s := section{ID: "promise", Title: "Promise"}
	if q := l.Promise; q != nil {
		s.Lead = []string{fmt.Sprintf("%s were drawn afresh from the model, none of them used for tuning, and run in the sampled loop with its delay and limits. %d stay stable, %d meet the spec: at least %s of the plants that the data allow, with %g %% confidence.",
			words.Count(q.Plants, "plant"), q.Stable, q.MeetSpec, words.Share(q.LowerBound), 100*q.Confidence)}
		t := table{Caption: "Figures over the drawn plants", Head: []string{"Figure", "Nominal", "Worst", "Asked"}, Right: []bool{false, true, true, true}}
		spec := in.Rig.Spec
		add := func(name string, sp design.Spread, show func(float64) string, ask float64) {
			text := "–"
			if ask > 0 {
				text = show(ask)
			}
			t.Rows = append(t.Rows, []string{name, show(sp.Nominal), show(sp.Worst), text})
		}
		input := func(x float64) string { return words.Unit(words.Number(x), u.Input) }
		add("overshoot", q.Overshoot, words.Share, spec.Overshoot)
		add("settling", q.Settling, words.Seconds, spec.Settling)
		add("peak |S| at the plant input", q.PeakS, words.Number, spec.PeakSensitivity)
		add("input noise, standard deviation", q.InputNoise, input, askedNoise(in))
		if q.KickPeak != nil {
			add("output after the kick", *q.KickPeak, func(x float64) string { return words.Unit(words.Number(x), u.Output) }, spec.KickPeak)
		}
		s.Tables = append(s.Tables, t)
		miss := table{Caption: "What was missed", Head: []string{"Figure", "Plants", "Worst", "Asked"}, Right: []bool{false, true, true, true}}
		for _, m := range q.Misses {
			row := []string{strings.ReplaceAll(m.What, "_", " "), fmt.Sprint(m.Plants), "–", "–"}
			if worst, ask := words.Miss(m, u); worst != "" {
				row[2], row[3] = worst, ask
			}
			miss.Rows = append(miss.Rows, row)
		}
		if len(miss.Rows) > 0 {
			s.Tables = append(s.Tables, miss)
		}
		s.Facts = []fact{
			{"Largest step", words.Unit(words.Number(q.LargestStep), u.Output)},
			{"Comes back from", words.Unit(words.Number(q.Recoverable), u.Output) + " off the operating point"},
			{"The runs", q.Conditions},
		}
	}
	r, err := l.StepResponses(in.Model, in.Rig, drawnSteps, in.Seed)
	if err != nil {
		s.Lead = append(s.Lead, sentence("No step responses: "+err.Error()))
		return s
	}
	s.Figures = stepFigures(r, l, in.Rig.Spec, u)
	return s
}

// askedNoise is the largest standard deviation of the input that the spec asks for.
func askedNoise(in Input) float64 {
	for _, b := range in.Loops.Bounds {
		if b.Name == design.BoundNoise && b.Asked != nil {
			return *b.Asked
		}
	}
	if ask := in.Rig.Spec.InputNoise; ask > 0 {
		return ask
	}
	if lim := in.Rig.Limits.Input; lim != nil {
		return design.NoiseShare * (lim[1] - lim[0])
	}
	return 0
}

func closureSection(in Input) section {
	c, u := in.Loops.FirstClosure, in.Rig.Units
	if c == nil {
		return section{}
	}
	s := section{ID: "closure", Title: "First closure", Steps: c.Order}
	trip := func(name string, pair *[2]float64, unit string) {
		if pair != nil {
			s.Facts = append(s.Facts, fact{name, "outside " + words.Unit(words.Number(pair[0])+" to "+words.Number(pair[1]), unit)})
		}
	}
	trip("Trip on the output", c.Trip.Output, u.Output)
	trip("Trip on the input", c.Trip.Input, u.Input)
	trip("At rest, stop at an output", c.Stop.Output, u.Output)
	trip("At rest, stop at an input", c.Stop.Input, u.Input)
	s.Facts = append(s.Facts, fact{"Expect on the traces", fmt.Sprintf("standard deviations near %s at the input and %s at the output",
		words.Unit(words.Brief(c.ExpectedSD.Input), u.Input), words.Unit(words.Brief(c.ExpectedSD.Output), u.Output))})
	for _, text := range c.Cautions {
		s.Lead = append(s.Lead, sentence(text))
	}
	return s
}

func originSection(in Input) section {
	s := section{ID: "origin", Title: "Origin", Lead: []string{"The command that made this report:"}, Code: in.Command}
	t := table{Caption: "Logs", Head: []string{"File", "Rows used", "of", "Segments", "SHA-256"}, Right: []bool{false, true, true, true}}
	for _, l := range in.Model.Logs {
		t.Rows = append(t.Rows, []string{l.File, fmt.Sprint(l.Used), fmt.Sprint(l.Rows), fmt.Sprint(l.Segments), l.SHA256})
	}
	s.Tables = []table{t}
	s.Facts = []fact{{"Tool", in.Tool}, {"Seed", fmt.Sprint(in.Seed)}, {"Figures", fmt.Sprintf("%d drawn plants in step responses, %d behind sensitivity", drawnSteps, drawnSpectra)}}
	return s
}
