package main

import (
	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/design"
)

// showRecheck prints a recheck: the verdict, what moved, how far, and what it means for the loops.
func showRecheck(p *page, r *design.Recheck, rig *data.Rig) {
	u := rig.Units
	p.verdict(r.Verdict, words.Recheck(r))
	if r.Do != "" {
		p.item("what to do", r.Do)
	}
	p.heading("What moved")
	p.item("all together", words.Moved(r))
	if r.Words != "" {
		p.item("in words", r.Words)
	}
	if len(r.Changes) > 0 {
		p.line("")
		p.item("by chance", "what, with 95 % intervals")
		for _, c := range r.Changes {
			p.item(words.ChangedByChance(c), c.Words)
		}
		p.line("  * more than chance explains, all numbers counted.\n")
	}
	if r.Prediction != nil {
		p.item("prediction", words.Predicted(r.Prediction, u.Output))
	}
	if r.Structure != nil {
		p.item("structure", words.Fits(r.Structure))
	}
	if r.NuGap != nil {
		p.heading("How far, and how far the present loops bear")
		for _, f := range words.Distance(r.NuGap, u) {
			p.item(f[0], f[1])
		}
	}
	if rows := words.Gained(r, rig); len(rows) > 0 {
		p.heading("Present loops on the new plants, and what a retune would gain")
		c := transposed(rows, 4)
		p.table(columns("figure", c[0], ">present", c[1], ">retuned", c[2], ">asked", c[3]))
		p.line("  In brackets: the worst of the plants.")
		p.line("")
		p.item("present loops", words.Held(r.Promise))
		if r.Retuned != nil && r.Retuned.Promise != nil {
			p.item("retuned", words.Held(r.Retuned.Promise))
		}
		if r.Gain != nil && r.Gain.Why != "" {
			p.item("no new pair", r.Gain.Why)
		}
	}
	p.heading("The new log")
	if r.Law != nil {
		p.item("law that ran", r.Law.Words)
	}
	p.item("model of it", r.ModelVerdict)
	if len(r.Poles) > 0 {
		p.item("", words.Unstable(r.Poles))
	}
	if len(r.PooledPoles) > 0 {
		p.item("pooled model", words.Unstable(r.PooledPoles))
	}
	p.heading("Before anything is closed")
	for _, text := range r.Cautions {
		wrap(p.w, "  ! ", text)
	}
}

// transposed turns rows of n cells into columns.
func transposed(rows [][]string, n int) [][]string {
	out := make([][]string, n)
	for _, row := range rows {
		for j := range n {
			out[j] = append(out[j], row[j])
		}
	}
	return out
}
