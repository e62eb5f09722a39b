package main

import (
	"fmt"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/ident"
)

// showModel prints a model: the verdict and the pole that matters, then the plant, then the evidence.
func showModel(p *page, m *ident.Model, u data.Units) {
	p.verdict(m.Verdict, words.Model(m))
	if len(m.Plant.Denominator) > 0 {
		showPlant(p, m, u)
		showPoles(p, m)
		showExact(p, m)
		showRoots(p, "Zeros", m.Zeros, "right half-plane")
		showMethods(p, m)
	}
	showEvidence(p, m, u)
}

func showPlant(p *page, m *ident.Model, u data.Units) {
	p.heading("Plant  y = G(s) u, deviations from the operating point")
	ratio := words.Ratio(u.Output, u.Input)
	p.item("units", words.PlantUnits(u)+"; ± is half a 95 % interval")
	p.item("numerator", words.Numerator(m))
	p.item("denominator", words.Denominator(m))
	p.item("delay", words.Delay(m)+", from the logged input to the output")
	p.item("steady gain", words.SteadyGain(m, ratio))
	if m.Gain.HighFrequency != nil {
		p.item("leading gain", words.Leading(m, ratio))
	}
	p.item("operating point", fmt.Sprintf("input %s, output %s", words.Unit(words.Number(m.OperatingPoint.Input), u.Input), words.Unit(words.Number(m.OperatingPoint.Output), u.Output)))
}

func showPoles(p *page, m *ident.Model) {
	showRoots(p, "Poles", m.Poles, "unstable")
	for _, note := range words.PoleNotes(m.Poles) {
		wrap(p.w, "  ", note)
	}
}

// showExact prints the intervals that rest on no long log, where they were asked for.
func showExact(p *page, m *ident.Model) {
	if m.Exact == nil {
		return
	}
	p.heading(words.ExactTitle(m.Exact))
	if pole, part, bounds := words.ExactIntervals(m.Exact); len(pole) > 0 {
		p.table(columns(">pole", pole, "part", part, "95 % interval", bounds))
	}
	for _, note := range words.ExactNotes(m.Exact) {
		wrap(p.w, "  ", note)
	}
}

// showRoots prints a table of poles or zeros, a pair on one line.
func showRoots(p *page, title string, roots []ident.Root, right string) {
	if len(roots) == 0 {
		return
	}
	p.heading(title + ", rad/s")
	var value, bounds, verdict, chance []string
	for _, r := range roots {
		if r.Im < 0 {
			continue
		}
		v, b := words.Root(r)
		value, bounds = append(value, v), append(bounds, b)
		is, probable := words.Unstableness(r)
		verdict, chance = append(verdict, is), append(chance, probable)
	}
	p.table(columns(">value", value, "95 % interval", bounds, right, verdict, ">probability", chance))
}

func showMethods(p *page, m *ident.Model) {
	if len(m.Evidence.Methods) == 0 {
		return
	}
	p.heading("The same poles by other ways of estimating, rad/s")
	var name, takes, poles, within, agrees, chance []string
	for _, e := range m.Evidence.Methods {
		name, takes, agrees = append(name, e.Name), append(takes, words.Assumes[e.Name]), append(agrees, words.Agrees(e))
		poles, within, chance = append(poles, words.Rightmost(e.Poles)), append(within, words.Within(e)), append(chance, words.ByChance(e))
	}
	p.table(columns("method", name, "takes for granted", takes, ">rightmost pole", poles, ">95 %", within, "agrees", agrees, ">chance", chance))
	if text := words.RowsSeen(m.Evidence.Methods); text != "" {
		wrap(p.w, "  ", text)
	}
	for _, e := range m.Evidence.Methods {
		if e.Note != "" && (!e.Agrees || len(e.Poles) == 0) {
			p.item(e.Name, e.Note)
		}
	}
}

// shownStructures is the number of candidate structures in a table; the file has them all.
const shownStructures = 5

func showEvidence(p *page, m *ident.Model, u data.Units) {
	p.heading("Evidence")
	if len(m.Plant.Denominator) > 0 {
		p.item("explained", fmt.Sprintf("%s of the output's variance one step ahead, on rows not used in the fit", words.Share(m.Evidence.ExplainedShare)))
		p.item("left over", fmt.Sprintf("%s standard deviation of one-step prediction errors", words.Unit(words.Number(m.Noise.SD), u.Output)))
		p.item("residuals", words.Residuals(m))
		if text := words.Basis(m); text != "" {
			p.item("intervals", text)
		}
	}
	for _, text := range words.LeftOut(m) {
		p.item("left out", text)
	}
	p.item("from outside", fmt.Sprintf("%s of the input's variance", words.Share(m.Evidence.OutsideShare)))
	if m.Evidence.Memories > 0 {
		p.item("length", words.Memories(m.Evidence.Memories))
	}
	for i := range m.Logs {
		p.item("log", words.LogUsed(m, i, u.Output))
	}
	for i, text := range words.Agreement(m) {
		label := "one plant in all"
		if i > 0 {
			label = "differs"
		}
		p.item(label, text)
	}
	if len(m.Evidence.Structures) == 0 {
		return
	}
	p.heading("Structures compared")
	var poles, zero, zeros, colour, delay, bic, word []string
	for i, s := range m.Evidence.Structures {
		if i == shownStructures {
			break
		}
		poles, zero = append(poles, fmt.Sprint(s.Poles)), append(zero, fmt.Sprint(s.Integrators))
		zeros, colour = append(zeros, fmt.Sprint(s.Zeros)), append(colour, fmt.Sprint(s.Colour))
		delay, bic = append(delay, words.Seconds(s.Delay)), append(bic, words.Number(s.BIC))
		mark := ""
		if s.Chosen {
			mark = "chosen"
		}
		word = append(word, mark)
	}
	p.table(columns(">poles", poles, ">held at 0", zero, ">zeros", zeros, ">colour", colour, ">delay", delay, ">BIC above best", bic, " ", word))
	if n := len(m.Evidence.Structures) - shownStructures; n > 0 {
		p.line("  and %d more in the file, with what spoke against each", n)
	}
}
