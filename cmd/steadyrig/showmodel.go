package main

import (
	"fmt"
	"math"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/ident"
)

// showModel prints a model: the verdict and the pole that matters, then the plant, then the evidence.
func showModel(p *page, m *ident.Model, u data.Units) {
	p.verdict(m.Verdict, words.Model(m))
	if len(m.Plant.Denominator) > 0 {
		showPlant(p, m, u)
		showRoots(p, "Poles", m.Poles, "unstable")
		showRoots(p, "Zeros", m.Zeros, "right half-plane")
		showMethods(p, m)
	}
	showEvidence(p, m, u)
}

func showPlant(p *page, m *ident.Model, u data.Units) {
	p.heading("Plant  y = G(s) u, deviations from the operating point")
	ratio := words.Ratio(u.Output, u.Input)
	p.item("numerator", words.Polynomial(m.Plant.Numerator, "s"))
	p.item("denominator", words.Polynomial(m.Plant.Denominator, "s"))
	delay := words.Seconds(m.Plant.Delay)
	if sd, ok := parameterSD(m, "delay"); ok {
		delay += " ± " + words.Seconds(1.96*sd)
	}
	p.item("delay", delay+", from the logged input to the output")
	if g := m.Gain.DC; g != nil {
		p.item("steady gain", estimate(g, ratio))
	} else {
		p.item("steady gain", "none: the plant integrates")
	}
	if g := m.Gain.HighFrequency; g != nil {
		excess := len(m.Plant.Denominator) - len(m.Plant.Numerator)
		p.item("leading gain", estimate(g, words.Unit(ratio, "s^-"+fmt.Sprint(excess)))+fmt.Sprintf(", over s^%d at high frequency", excess))
	}
	p.item("operating point", fmt.Sprintf("input %s, output %s", words.Unit(words.Number(m.OperatingPoint.Input), u.Input), words.Unit(words.Number(m.OperatingPoint.Output), u.Output)))
}

func parameterSD(m *ident.Model, name string) (float64, bool) {
	for i, n := range m.Plant.Parameters {
		if n == name && i < len(m.Plant.Covariance) && m.Plant.Covariance[i][i] > 0 {
			return math.Sqrt(m.Plant.Covariance[i][i]), true
		}
	}
	return 0, false
}

func estimate(e *ident.Estimate, unit string) string {
	return fmt.Sprintf("%s (95 %%: %s)", words.Unit(words.Number(e.Value), unit), words.Interval(e.Interval95))
}

// showRoots prints a table of poles or zeros, a pair on one line.
func showRoots(p *page, title string, roots []ident.Root, right string) {
	if len(roots) == 0 {
		return
	}
	p.heading(title + ", rad/s")
	var value, re, im, verdict, chance []string
	pairs := false
	for _, r := range roots {
		if r.Im < 0 {
			continue
		}
		v, imag := words.Number(r.Re), ""
		if r.Im != 0 {
			v, imag = words.Number(r.Re)+" ± "+words.Number(r.Im)+"i", words.Interval(r.Im95)
			pairs = true
		}
		word := "no"
		switch {
		case r.Re95.Lo <= 0 && r.Re95.Hi >= 0:
			word = "open"
		case r.Unstable:
			word = "YES"
		}
		value, re, im = append(value, v), append(re, words.Interval(r.Re95)), append(im, imag)
		verdict, chance = append(verdict, word), append(chance, words.Probability(r.ProbabilityUnstable))
	}
	if pairs {
		p.table(columns(">value", value, "95 % of real part", re, "of imaginary part", im, right, verdict, "probability", chance))
		return
	}
	p.table(columns(">value", value, "95 % interval", re, right, verdict, "probability", chance))
}

func showMethods(p *page, m *ident.Model) {
	if len(m.Evidence.Methods) == 0 {
		return
	}
	p.heading("The same poles by other ways of estimating")
	var name, takes, poles, agrees []string
	for _, e := range m.Evidence.Methods {
		word := "yes"
		if !e.Agrees {
			word = "NO"
		}
		name, takes, agrees = append(name, e.Name), append(takes, words.Assumes[e.Name]), append(agrees, word)
		poles = append(poles, words.Rightmost(e.Poles))
	}
	p.table(columns("method", name, "takes for granted", takes, ">rightmost pole", poles, "agrees", agrees))
	for _, e := range m.Evidence.Methods {
		if e.Note != "" {
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
		p.item("residuals", fmt.Sprintf("white: %s, free of the input: %s (probability of more by chance, %d lags)",
			words.Probability(m.Evidence.Residuals.Whiteness), words.Probability(m.Evidence.Residuals.CrossInput), m.Evidence.Residuals.Lags))
	}
	p.item("from outside", fmt.Sprintf("%s of the input's variance", words.Share(m.Evidence.OutsideShare)))
	if m.Evidence.Memories > 0 {
		p.item("length", fmt.Sprintf("%s predictor memories", words.Number(m.Evidence.Memories)))
	}
	for _, l := range m.Logs {
		p.item("log", fmt.Sprintf("%s: %d of %d rows used, %s", l.File, l.Used, l.Rows, words.Count(l.Segments, "segment")))
	}
	if len(m.Evidence.Structures) == 0 {
		return
	}
	p.heading("Structures compared")
	var poles, zeros, colour, delay, bic, word []string
	for i, s := range m.Evidence.Structures {
		if i == shownStructures {
			break
		}
		poles, zeros, colour = append(poles, fmt.Sprint(s.Poles)), append(zeros, fmt.Sprint(s.Zeros)), append(colour, fmt.Sprint(s.Colour))
		delay, bic = append(delay, words.Seconds(s.Delay)), append(bic, words.Number(s.BIC))
		mark := ""
		if s.Chosen {
			mark = "chosen"
		}
		word = append(word, mark)
	}
	p.table(columns(">poles", poles, ">zeros", zeros, ">colour", colour, ">delay", delay, ">BIC above best", bic, " ", word))
	if n := len(m.Evidence.Structures) - shownStructures; n > 0 {
		p.line("  and %d more in the file, with what spoke against each", n)
	}
}
