package history

import (
	"fmt"
	"math"
	"strings"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/ident"
)

// What says in words what a name of ident.Followed stands for, and its unit.
func What(name string) (what, unit string) {
	switch name {
	case "pole_re":
		return "rightmost pole", "rad/s"
	case "pole_im":
		return "its imaginary part", "rad/s"
	}
	kind, unit, _ := strings.Cut(strings.TrimSuffix(name, " -"), " ")
	if kind == "log_lead" {
		_, unit, _ = strings.Cut(unit, " ") // after the difference of orders
		return "leading gain", unit
	}
	return "steady gain", unit
}

// Words are a number before and after a change in its unit, and the 95 % interval of what it moved by: of a gain, which
// is followed by its logarithm, in per cent.
func (n Number) Words() (before, after, moved string) {
	_, unit := What(n.Name)
	rise := n.Rise.Interval95
	if !strings.HasPrefix(n.Name, "log_") {
		return words.Number(n.Before.Value), words.Number(n.After.Value), span(rise, unit)
	}
	sign := 1.0
	if strings.HasSuffix(n.Name, " -") {
		sign = -1
	}
	percent := ident.Interval{Lo: 100 * math.Expm1(rise.Lo), Hi: 100 * math.Expm1(rise.Hi)}
	return words.Number(sign * math.Exp(n.Before.Value)), words.Number(sign * math.Exp(n.After.Value)), span(percent, "%")
}

// span is an interval of a difference, with its signs.
func span(iv ident.Interval, unit string) string {
	from, to, _ := strings.Cut(words.Interval(iv), " to ")
	if iv.Lo > 0 {
		from = "+" + from
	}
	if iv.Hi > 0 {
		to = "+" + to
	}
	return fmt.Sprintf("%s to %s", from, words.Unit(to, unit))
}

// Compared says in words what is compared from log to log.
func (t Tested) Compared() string {
	var list []string
	for _, name := range t.By {
		what, _ := What(name)
		list = append(list, what)
	}
	switch n := len(list); n {
	case 0:
		return "nothing"
	case 1:
		return list[0]
	default:
		return strings.Join(list[:n-1], ", ") + " and " + list[n-1]
	}
}

// Verdict says in a word and a sentence what the history comes to.
func (t Tested) Verdict() (word, meaning string) {
	logs := words.Count(len(t.Evidence), "log")
	switch n := len(t.Changes); {
	case len(t.Evidence) < 2:
		return "short", "fewer than two logs can be compared."
	case n == 0:
		return "unchanged", fmt.Sprintf("over %s the %s did not change by more than chance.", logs, t.Compared())
	default:
		times := "once"
		if n > 1 {
			times = fmt.Sprintf("%d times", n)
		}
		return "changed", fmt.Sprintf("%s in %s, last since entry %d.", times, logs, t.Changes[n-1].At)
	}
}

// counted says which entries are evidence.
const counted = "A log counts once, by the plant that was fitted to it last. Pooled logs that counted before, designs and refused models do not count."

// Notes say what marks are worth and what they rest on, a sentence or two each.
func (t Tested) Notes() []string {
	if len(t.Evidence) < 2 {
		return []string{counted}
	}
	notes := []string{
		fmt.Sprintf("With a probability of at least %g %% no change is marked that did not happen, however long the history grows and however often it is looked at, if the intervals of the logs hold what they say.", 100*(1-t.Level)),
		counted,
	}
	weak := 0
	for _, e := range t.Evidence {
		if e.Entry.Verdict == ident.Weak {
			weak++
		}
	}
	if weak > 0 {
		notes = append(notes, fmt.Sprintf("%s of %d gave a weak model: its intervals may be too narrow, and marks that rest on it are less sure.", words.Count(weak, "log"), len(t.Evidence)))
	}
	if t.Lacking > 0 {
		notes = append(notes, fmt.Sprintf("%s left out of the test: not all of %s can be told from it.", words.Count(t.Lacking, "log"), t.Compared()))
	}
	return notes
}
