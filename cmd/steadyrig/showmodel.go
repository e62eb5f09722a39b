package main

import (
	"fmt"
	"math"
	"strings"

	"steadyrig/data"
	"steadyrig/ident"
)

// showModel prints a model: the verdict and the pole that matters, then the plant, then the evidence.
func showModel(p *page, m *ident.Model, u data.Units) {
	p.verdict(m.Verdict, modelVerdict(m))
	if len(m.Plant.Denominator) > 0 {
		showPlant(p, m, u)
		showRoots(p, "Poles", m.Poles, "unstable")
		showRoots(p, "Zeros", m.Zeros, "right half-plane")
		showMethods(p, m)
	}
	showEvidence(p, m, u)
}

// modelVerdict says in a sentence what a model comes to.
func modelVerdict(m *ident.Model) string {
	if len(m.Plant.Denominator) == 0 {
		return fmt.Sprintf("no plant of %s can be given.", m.Rig)
	}
	meaning := map[string]string{
		ident.Sound:   "no test speaks against it.",
		ident.Weak:    "usable with care, see the warnings.",
		ident.Refused: "not to be designed with.",
	}[m.Verdict]
	return fmt.Sprintf("%s: %s; %s", m.Rig, unstableInWords(m.Poles), meaning)
}

// unstableInWords names the unstable poles, or the ones that may be.
func unstableInWords(poles []ident.Root) string {
	var found []string
	for _, r := range poles {
		if r.Im < 0 || !r.Unstable && !(r.ProbabilityUnstable > 0.025) {
			continue
		}
		what := fmt.Sprintf("at %s rad/s (95 %%: %s)", number(r.Re), interval(r.Re95))
		switch {
		case r.Im != 0:
			what = fmt.Sprintf("pair at %s ± %si rad/s (real part 95 %%: %s)", number(r.Re), number(r.Im), interval(r.Re95))
		case r.Re > 0 && r.Re95.Lo > 0:
			what += ", doubling in " + seconds(math.Ln2/r.Re)
		}
		if r.Re95.Lo < 0 {
			what += fmt.Sprintf(", unstable with probability %s", probability(r.ProbabilityUnstable))
		}
		found = append(found, what)
	}
	switch len(found) {
	case 0:
		return "no unstable pole was found"
	case 1:
		return "unstable pole " + found[0]
	}
	return "unstable poles " + strings.Join(found, "; ")
}

func showPlant(p *page, m *ident.Model, u data.Units) {
	p.heading("Plant  y = G(s) u, deviations from the operating point")
	ratio := units{u}.ratio(u.Output, u.Input)
	p.item("numerator", polynomial(m.Plant.Numerator, "s"))
	p.item("denominator", polynomial(m.Plant.Denominator, "s"))
	delay := seconds(m.Plant.Delay)
	if sd, ok := parameterSD(m, "delay"); ok {
		delay += " ± " + seconds(1.96*sd)
	}
	p.item("delay", delay+", from the logged input to the output")
	if g := m.Gain.DC; g != nil {
		p.item("steady gain", estimate(g, ratio))
	} else {
		p.item("steady gain", "none: the plant integrates")
	}
	if g := m.Gain.HighFrequency; g != nil {
		excess := len(m.Plant.Denominator) - len(m.Plant.Numerator)
		p.item("leading gain", estimate(g, withUnit(ratio, "s^-"+fmt.Sprint(excess)))+fmt.Sprintf(", over s^%d at high frequency", excess))
	}
	p.item("operating point", fmt.Sprintf("input %s, output %s", withUnit(number(m.OperatingPoint.Input), u.Input), withUnit(number(m.OperatingPoint.Output), u.Output)))
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
	return fmt.Sprintf("%s (95 %%: %s)", withUnit(number(e.Value), unit), interval(e.Interval95))
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
		v, imag := number(r.Re), ""
		if r.Im != 0 {
			v, imag = number(r.Re)+" ± "+number(r.Im)+"i", interval(r.Im95)
			pairs = true
		}
		word := "no"
		switch {
		case r.Re95.Lo <= 0 && r.Re95.Hi >= 0:
			word = "open"
		case r.Unstable:
			word = "YES"
		}
		value, re, im = append(value, v), append(re, interval(r.Re95)), append(im, imag)
		verdict, chance = append(verdict, word), append(chance, probability(r.ProbabilityUnstable))
	}
	if pairs {
		p.table(columns(">value", value, "95 % of real part", re, "of imaginary part", im, right, verdict, "probability", chance))
		return
	}
	p.table(columns(">value", value, "95 % interval", re, right, verdict, "probability", chance))
}

// assumes says what a method takes for granted.
var assumes = map[string]string{
	"prediction": "plant and noise shape",
	"state":      "a state of low order",
	"long":       "only a long memory",
	"outside":    "only the outside signal",
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
		name, takes, agrees = append(name, e.Name), append(takes, assumes[e.Name]), append(agrees, word)
		poles = append(poles, rightmost(e.Poles))
	}
	p.table(columns("method", name, "takes for granted", takes, ">rightmost pole", poles, "agrees", agrees))
	for _, e := range m.Evidence.Methods {
		if e.Note != "" {
			p.item(e.Name, e.Note)
		}
	}
}

// rightmost formats the pole with the largest real part.
func rightmost(poles [][2]float64) string {
	if len(poles) == 0 {
		return "none"
	}
	best := poles[0]
	for _, q := range poles[1:] {
		if q[0] > best[0] {
			best = q
		}
	}
	if best[1] != 0 {
		return number(best[0]) + " ± " + number(math.Abs(best[1])) + "i"
	}
	return number(best[0])
}

// shownStructures is the number of candidate structures in a table; the file has them all.
const shownStructures = 5

func showEvidence(p *page, m *ident.Model, u data.Units) {
	p.heading("Evidence")
	if len(m.Plant.Denominator) > 0 {
		p.item("explained", fmt.Sprintf("%s of the output's variance one step ahead, on rows not used in the fit", share(m.Evidence.ExplainedShare)))
		p.item("left over", fmt.Sprintf("%s standard deviation of one-step prediction errors", withUnit(number(m.Noise.SD), u.Output)))
		p.item("residuals", fmt.Sprintf("white: %s, free of the input: %s (probability of more by chance, %d lags)",
			probability(m.Evidence.Residuals.Whiteness), probability(m.Evidence.Residuals.CrossInput), m.Evidence.Residuals.Lags))
	}
	p.item("from outside", fmt.Sprintf("%s of the input's variance", share(m.Evidence.OutsideShare)))
	if m.Evidence.Memories > 0 {
		p.item("length", fmt.Sprintf("%s predictor memories", number(m.Evidence.Memories)))
	}
	for _, l := range m.Logs {
		p.item("log", fmt.Sprintf("%s: %d of %d rows used, %s", l.File, l.Used, l.Rows, count(l.Segments, "segment")))
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
		delay, bic = append(delay, seconds(s.Delay)), append(bic, number(s.BIC))
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

func count(n int, what string) string {
	if n == 1 {
		return "1 " + what
	}
	return fmt.Sprintf("%d %ss", n, what)
}

// seconds formats a time in a unit that suits its size.
func seconds(t float64) string {
	switch a := math.Abs(t); {
	case math.IsNaN(t) || math.IsInf(t, 0):
		return number(t)
	case a == 0:
		return "0 s"
	case a < 1e-3:
		return number(t*1e6) + " µs"
	case a < 1:
		return number(t*1e3) + " ms"
	}
	return number(t) + " s"
}

// polynomial formats coefficients in descending powers.
func polynomial(c []float64, x string) string {
	var b strings.Builder
	for i, v := range c {
		power := len(c) - 1 - i
		if v == 0 && len(c) > 1 {
			continue
		}
		switch {
		case b.Len() == 0 && v < 0:
			b.WriteString("-")
		case b.Len() > 0 && v < 0:
			b.WriteString(" - ")
		case b.Len() > 0:
			b.WriteString(" + ")
		}
		if a := math.Abs(v); a != 1 || power == 0 {
			b.WriteString(number(a))
			if power > 0 {
				b.WriteString(" ")
			}
		}
		switch {
		case power == 1:
			b.WriteString(x)
		case power > 1:
			fmt.Fprintf(&b, "%s^%d", x, power)
		}
	}
	return b.String()
}
