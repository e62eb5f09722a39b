package main

import (
	"fmt"
	"strings"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/design"
)

// showLoops prints loops: the verdict and the promise, then limits, controllers, margins, and how to close them.
func showLoops(p *page, l *design.Loops, u data.Units) {
	p.verdict(l.Verdict, words.Loops(l))
	if len(l.Bounds) > 0 {
		p.line("")
		showBounds(p, l.Bounds)
	}
	showBody(p, l, u)
}

// showDesign prints a design whose limits were printed before it was tuned.
func showDesign(p *page, l *design.Loops, u data.Units) {
	p.verdict(l.Verdict, words.Loops(l))
	showBody(p, l, u)
}

func showBody(p *page, l *design.Loops, u data.Units) {
	showControllers(p, l, u)
	showFront(p, l, u)
	showMargins(p, l)
	showYardstick(p, l, u)
	showPromise(p, l, u)
	showClosure(p, l, u)
}

// showBounds prints what physics allows, with sources.
func showBounds(p *page, bounds []design.Bound) {
	showLimits(p, bounds)
	showSources(p, bounds)
}

// showSources prints where each limit comes from and what is left of it over the plants allowed.
func showSources(p *page, bounds []design.Bound) {
	for i, b := range bounds {
		if i == 0 {
			p.line("")
		}
		text := ""
		if _, over, _ := words.Bound(b); over != "" {
			text = "95 % over the plants allowed: " + over + ". "
		}
		if b.Advice != "" {
			text += b.Advice + ". "
		}
		if b.Relaxed != "" {
			text += b.Relaxed + ". "
		}
		p.line("  %s", b.Name)
		wrap(p.w, "      ", text+"Source: "+b.Source+".")
	}
}

// showLimits prints what physics allows beside what is asked.
func showLimits(p *page, bounds []design.Bound) {
	p.title("What physics allows, whatever the controller")
	var name, bound, asked, ok []string
	for _, b := range bounds {
		value, _, ask := words.Bound(b)
		name, bound, asked, ok = append(name, b.Name), append(bound, value), append(asked, ask), append(ok, words.InReach(b))
	}
	p.table(columns("bound", name, ">no better than", bound, ">asked", asked, "in reach", ok))
}

func showControllers(p *page, l *design.Loops, u data.Units) {
	if l.Inner == nil {
		return
	}
	p.heading(fmt.Sprintf("Loops, one step every %s", words.Seconds(l.SamplePeriod)))
	wrap(p.w, "  ", l.Law)
	p.item("operating point", fmt.Sprintf("u0 = %s, y0 = %s", words.Unit(words.Number(l.OperatingPoint.Input), u.Input), words.Unit(words.Number(l.OperatingPoint.Output), u.Output)))
	block := func(name, form string, b *design.Block) {
		if b.IsOne() {
			return
		}
		if form == "" {
			form = b.Given
		}
		if form != "" {
			p.item(name, form)
			name = ""
		}
		p.item(name, words.Fraction(b.Discrete, "z"))
	}
	block("inner", l.InnerForm, l.Inner)
	block("outer", l.OuterForm, l.Outer)
	block("prefilter", "", l.Prefilter)
	if l.InputLimits != nil {
		p.item("input limits", words.Unit(words.Number(l.InputLimits[0])+" to "+words.Number(l.InputLimits[1]), u.Input))
	}
	if l.OuterLimits != nil {
		p.item("outer limits", words.Unit(words.Number(l.OuterLimits[0])+" to "+words.Number(l.OuterLimits[1]), u.Output)+", deviation")
	}
	showMappings(p, l.Sampling)
	if len(l.Forms) == 0 {
		return
	}
	p.heading("What simplicity costs, on the worst of the tuning plants")
	var loop, form, order, peak, noise, chosen []string
	for _, f := range l.Forms {
		mark := ""
		if f.Chosen {
			mark = "chosen"
		}
		loop, form, order, chosen = append(loop, f.Loop), append(form, f.Form), append(order, fmt.Sprint(f.Order)), append(chosen, mark)
		peak, noise = append(peak, words.Number(f.PeakSensitivity)), append(noise, words.Unit(words.Number(f.InputNoise), u.Input))
	}
	p.table(columns("loop", loop, "form", form, ">order", order, ">peak |S|", peak, ">input noise", noise, " ", chosen))
	if l.Choice != "" {
		p.line("")
		p.item("chosen", l.Choice)
	}
}

func showFront(p *page, l *design.Loops, u data.Units) {
	if len(l.Front) == 0 {
		return
	}
	p.heading("Speed against effort of the step, worst tuning plant (input: of its range)")
	var settling, over, input, noise, peak, form, chosen []string
	for _, f := range l.Front {
		mark := ""
		if f.Chosen {
			mark = "chosen"
		}
		settling, over, input = append(settling, words.Seconds(f.Settling)), append(over, words.Share(f.Overshoot)), append(input, words.Share(f.PeakInput))
		noise, peak = append(noise, words.Unit(words.Number(f.InputNoise), u.Input)), append(peak, words.Number(f.PeakSensitivity))
		form, chosen = append(form, f.OuterForm), append(chosen, mark)
	}
	p.table(columns(">settling", settling, ">overshoot", over, ">input", input, ">input noise", noise, ">peak |S|", peak, "outer", form, " ", chosen))
	p.line("")
	if l.Assumed != nil {
		p.item("settling", fmt.Sprintf("%s, chosen: %s", words.Seconds(l.Assumed.Settling), l.Assumed.Why))
	}
	p.item("another point", "its controllers are under front in loops.json; ask for its settling in [spec] to have it proven")
}

// showMappings prints how controllers in s were brought to the sample period.
func showMappings(p *page, s *design.Sampling) {
	if s == nil || s.Mapping == "" {
		return
	}
	head := "From s to z: no mapping holds the nominal plant"
	if s.ContinuousPeak > 0 {
		head = fmt.Sprintf("From s to z; in continuous time peak |S| is %s", words.Brief(s.ContinuousPeak))
	}
	p.heading(head)
	var name, peak, off, chosen []string
	for _, m := range s.Mappings {
		mark, figure := "", words.Brief(m.PeakSensitivity)
		if m.Chosen {
			mark = "chosen"
		}
		if !m.Stable {
			figure = "lost"
		}
		name, peak, off, chosen = append(name, m.Mapping), append(peak, figure), append(off, words.Brief(m.Mismatch)), append(chosen, mark)
	}
	p.table(columns("mapping", name, ">peak |S|", peak, ">S changes by at most", off, " ", chosen))
}

func showMargins(p *page, l *design.Loops) {
	if l.Margins == nil {
		return
	}
	p.heading("Margins of the sampled loop, nominal plant (crossing of gain one in rad/s)")
	var where, gain, phase, delay, peak, cross []string
	for _, m := range []struct {
		name string
		m    *design.Margins
	}{{"plant input, both loops", l.Margins.PlantInput}, {"inner loop alone", l.Margins.InnerAlone}, {"outer break", l.Margins.OuterBreak}} {
		if m.m == nil {
			continue
		}
		where = append(where, m.name)
		gain = append(gain, factor(m.m.GainDown)+" to "+factor(m.m.GainUp))
		phase = append(phase, orAny(m.m.PhaseDeg, func(x float64) string { return words.Brief(x) + "°" }))
		delay = append(delay, orAny(m.m.Delay, words.Seconds))
		peak = append(peak, words.Brief(m.m.PeakSensitivity))
		cross = append(cross, words.Brief(m.m.Crossover))
	}
	if m := l.Margins.Worst; m != nil && m.Stable > 0 {
		where = append(where, fmt.Sprintf("plant input, worst of %d", m.Plants))
		gain = append(gain, factor(m.GainDown)+" to "+factor(m.GainUp))
		phase = append(phase, orAny(m.PhaseDeg, func(x float64) string { return words.Brief(x) + "°" }))
		delay = append(delay, orAny(m.Delay, words.Seconds))
		peak, cross = append(peak, words.Brief(m.PeakSensitivity)), append(cross, "")
	}
	p.table(columns("loop", where, ">gain times", gain, ">phase", phase, ">delay", delay, ">peak |S|", peak, ">crossing", cross))
	if m := l.Margins.Worst; m != nil && m.Stable < m.Plants {
		p.line("  %d of %d drawn plants are lost and have no margin.", m.Plants-m.Stable, m.Plants)
	}
}

func showYardstick(p *page, l *design.Loops, u data.Units) {
	if l.Yardstick == nil {
		return
	}
	p.heading("Against the best that any controller could do, nominal plant")
	for _, f := range words.Yardstick(l.Yardstick, u) {
		p.item(f[0], f[1])
	}
}

func factor(x *float64) string { return orAny(x, words.Brief) }

func orAny(x *float64, show func(float64) string) string {
	if x == nil {
		return "any"
	}
	return show(*x)
}

func showPromise(p *page, l *design.Loops, u data.Units) {
	q := l.Promise
	if q == nil {
		return
	}
	p.heading(fmt.Sprintf("Promise, on %d plants drawn afresh, in the sampled and saturating loop", q.Plants))
	var what, nominal, worst []string
	add := func(name string, s design.Spread, show func(float64) string) {
		what, nominal, worst = append(what, name), append(nominal, show(s.Nominal)), append(worst, show(s.Worst))
	}
	add("overshoot", q.Overshoot, words.Share)
	add("settling", q.Settling, words.Seconds)
	add("peak |S| at the input", q.PeakS, words.Number)
	add("input noise, sd", q.InputNoise, func(x float64) string { return words.Unit(words.Number(x), u.Input) })
	if q.KickPeak != nil {
		add("output after the kick", *q.KickPeak, func(x float64) string { return words.Unit(words.Number(x), u.Output) })
	}
	p.table(columns("figure", what, ">nominal", nominal, ">worst", worst))
	p.line("")
	p.item("stable", fmt.Sprintf("%d of %d", q.Stable, q.Plants))
	p.item("meet the spec", fmt.Sprintf("%d of %d; at least %s of all, with %g %% confidence", q.MeetSpec, q.Plants, words.Share(q.LowerBound), 100*q.Confidence))
	for _, m := range q.Misses {
		text := fmt.Sprintf("%s on %s", strings.ReplaceAll(m.What, "_", " "), words.Count(m.Plants, "plant"))
		if worst, asked := words.Miss(m, u); worst != "" {
			text += fmt.Sprintf(": worst %s, asked %s", worst, asked)
		}
		p.item("missed", text)
	}
	p.item("largest step", words.Unit(words.Number(q.LargestStep), u.Output))
	p.item("comes back from", words.Unit(words.Number(q.Recoverable), u.Output)+" off the operating point")
	if q.Conditions != "" {
		p.item("the runs", q.Conditions)
	}
	if q.Attempts > 1 {
		p.item("attempts", fmt.Sprintf("%d, so the confidence is shared between them", q.Attempts))
	}
}

func showClosure(p *page, l *design.Loops, u data.Units) {
	c := l.FirstClosure
	if c == nil {
		return
	}
	p.heading("First closure")
	for i, step := range c.Order {
		wrap(p.w, fmt.Sprintf("  %d. ", i+1), step)
	}
	trip := func(name string, pair *[2]float64, unit string) {
		if pair != nil {
			p.item(name, "outside "+words.Unit(words.Number(pair[0])+" to "+words.Number(pair[1]), unit))
		}
	}
	trip("trip on input", c.Trip.Input, u.Input)
	trip("trip on output", c.Trip.Output, u.Output)
	trip("at rest stop at u", c.Stop.Input, u.Input)
	trip("at rest stop at y", c.Stop.Output, u.Output)
	for _, text := range c.Cautions {
		wrap(p.w, "  ! ", text)
	}
}
