package words

import (
	"fmt"
	"math"
	"strings"

	"steadyrig/design"
	"steadyrig/ident"
)

// Model says in a sentence what a model comes to.
func Model(m *ident.Model) string {
	if len(m.Plant.Denominator) == 0 {
		return fmt.Sprintf("no plant of %s can be given.", m.Rig)
	}
	meaning := map[string]string{
		ident.Sound:   "no test speaks against it.",
		ident.Weak:    "usable with care, see the warnings.",
		ident.Refused: "not to be designed with.",
	}[m.Verdict]
	return fmt.Sprintf("%s: %s; %s", m.Rig, Unstable(m.Poles), meaning)
}

// Unstable names the unstable poles, or the ones that may be.
func Unstable(poles []ident.Root) string {
	var found []string
	for _, r := range poles {
		if r.Im < 0 || !r.Unstable && !(r.ProbabilityUnstable > 0.025) {
			continue
		}
		what := fmt.Sprintf("at %s rad/s (95 %%: %s)", Number(r.Re), Interval(r.Re95))
		switch {
		case r.Im != 0:
			what = fmt.Sprintf("pair at %s ± %si rad/s (real part 95 %%: %s)", Number(r.Re), Number(r.Im), Interval(r.Re95))
		case r.Re > 0 && r.Re95.Lo > 0:
			what += ", doubling in " + Seconds(math.Ln2/r.Re)
		}
		if r.Re95.Lo < 0 {
			what += fmt.Sprintf(", unstable with probability %s", Probability(r.ProbabilityUnstable))
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

// Assumes says what a method takes for granted.
var Assumes = map[string]string{
	"prediction": "plant and noise shape",
	"state":      "a state of low order",
	"long":       "only a long memory",
	"outside":    "only the outside signal",
}

// Rightmost formats the pole with the largest real part.
func Rightmost(poles [][2]float64) string {
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
		return Number(best[0]) + " ± " + Number(math.Abs(best[1])) + "i"
	}
	return Number(best[0])
}

// Loops says in a sentence what a design comes to.
func Loops(l *design.Loops) string {
	q := l.Promise
	switch {
	case l.Inner == nil:
		return l.Rig + ": no loops are given."
	case q == nil:
		return l.Rig + ": the loops were not proven."
	}
	return fmt.Sprintf("%s: of the plants that the data allow, at least %s keep the spec (%g %% confidence; %d of %d drawn).",
		l.Rig, Share(q.LowerBound), 100*q.Confidence, q.MeetSpec, q.Plants)
}
