package words

import (
	"fmt"
	"strings"

	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

// Recheck says in a sentence what a recheck comes to, Do what to do then.
func Recheck(r *design.Recheck) string { return r.Rig + ": " + r.Why + "." }

// Moved tells the joint test of all parameters.
func Moved(r *design.Recheck) string {
	if r.Probability == nil {
		return "nothing could be compared"
	}
	text := "no more than chance explains"
	if r.Moved {
		text = "more than chance explains"
	}
	return fmt.Sprintf("%s (probability of as much by chance: %s; moved is said below %.2g)", text, Probability(*r.Probability), ident.MovedLevel)
}

// Changed lists the rows of a table of changes: what, before, after, the change's 95 % interval, its probability by chance.
func Changed(r *design.Recheck) (rows [][]string) {
	for _, c := range r.Changes {
		interval := Interval(c.Interval95)
		if c.Ratio {
			interval = "times " + interval
		}
		name := c.Name
		if c.Unit != "" && !strings.Contains(name, c.Unit) {
			name += ", " + c.Unit
		}
		rows = append(rows, []string{name, Number(c.Before), Number(c.After), interval, ChangedByChance(c)})
	}
	return rows
}

// ChangedByChance is the probability of as large a change by chance, with a star where it is more than that.
func ChangedByChance(c ident.Change) string {
	if c.Clear {
		return Probability(c.ProbabilityByChance) + " *"
	}
	return Probability(c.ProbabilityByChance)
}

// Predicted tells how well each plant predicts the new log; unit is the output's.
func Predicted(c *ident.PredictionCheck, unit string) string {
	return fmt.Sprintf("errors of %s with the earlier plant and the noise refitted, of %s with the new one", Unit(Number(c.Before), unit), Unit(Number(c.After), unit))
}

// Fits tells whether the earlier structure fits the new log.
func Fits(c *ident.StructureCheck) string {
	if c.Fits {
		return "that of the earlier model (" + c.Earlier + ") still fits"
	}
	return fmt.Sprintf("that of the earlier model (%s) fits no more; best is %s", c.Earlier, c.Best)
}

// Distance tells the nu-gap and what the loops bear; each a label and its text.
func Distance(g *design.NuGapChange, u data.Units) (facts [][2]string) {
	add := func(label, text string) { facts = append(facts, [2]string{label, text}) }
	at := "largest at rest"
	if g.At > 0 {
		at = "largest at " + Brief(g.At) + " rad/s"
	}
	add("nu-gap", fmt.Sprintf("%s (95 %%: %s), %s; 0 is the same plant, 1 as far as can be", Brief(g.Value), Interval(ident.Interval{Lo: g.Interval[0], Hi: g.Interval[1]}), at))
	if g.Margin == nil {
		return facts
	}
	bear := fmt.Sprintf("%s at the earlier plant (both loops %s, inner loop alone %s)", Brief(*g.Margin), Brief(*g.MarginBoth), Brief(*g.MarginIn))
	switch {
	case g.HeldBy == design.Theorem:
		bear += ": any plant nearer than that is held, and the new one is"
	case g.Interval[0] > *g.Margin:
		bear += ": the new plant is further off, so that nothing but looking at it tells whether it is held"
	default:
		bear += ": the new plant may be further off, so that only looking at it tells whether it is held"
	}
	add("the loops bear", bear)
	add("in units of", fmt.Sprintf("%s of input, %s of output", Unit(Number(g.InputRange), u.Input), Unit(Number(g.OutputRange), u.Output)))
	return facts
}

// Gained lists the rows of a table of both pairs on the new plants: figure, present, retuned, each with that of the worst
// drawn plant in brackets, and what the spec asks. Without a retuned pair its column holds dashes.
func Gained(r *design.Recheck, rig *data.Rig) (rows [][]string) {
	q := r.Promise
	if q == nil {
		return nil
	}
	input := func(x float64) string { return Unit(Brief(x), rig.Units.Input) }
	output := func(x float64) string { return Unit(Brief(x), rig.Units.Output) }
	add := func(name, key string, present design.Spread, asked float64, show func(float64) string) {
		both := func(s design.Spread) string { return fmt.Sprintf("%s (%s)", show(s.Nominal), show(s.Worst)) }
		row := []string{name, both(present), "–", "–"}
		if q.PeakS.Nominal == 0 { // it is 1 at the least where the loops hold the plant
			row[1] = "lost"
		}
		if r.Gain != nil {
			for _, f := range r.Gain.Figures {
				if f.Name == key {
					row[2] = both(f.Retuned)
				}
			}
		}
		if asked > 0 {
			row[3] = show(asked)
		}
		rows = append(rows, row)
	}
	s := rig.Spec
	noise := s.InputNoise
	if lim := rig.Limits.Input; noise == 0 && lim != nil {
		noise = design.NoiseShare * (lim[1] - lim[0])
	}
	add("settling", "settling", q.Settling, s.Settling, Seconds)
	add("overshoot", "overshoot", q.Overshoot, s.Overshoot, Share)
	add("peak |S|", "peak_sensitivity", q.PeakS, s.PeakSensitivity, Brief)
	add("input noise, sd", "input_noise", q.InputNoise, noise, input)
	if q.KickPeak != nil {
		add("after the kick", "kick_peak", *q.KickPeak, s.KickPeak, output)
	}
	return rows
}

// Held tells how many of the new plants a promise holds.
func Held(q *design.Promise) string {
	return fmt.Sprintf("%d of %d stay stable, %d keep the spec: at least %s of those that the log allows, with %g %% confidence",
		q.Stable, q.Plants, q.MeetSpec, Share(q.LowerBound), 100*q.Confidence)
}
