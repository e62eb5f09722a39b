package ident

import (
	"context"
	"fmt"
	"math"
	"runtime"
	"slices"

	"steadyrig/data"
	"steadyrig/fit"
)

// AuditSchema names the version of the audit file.
const AuditSchema = "steadyrig/audit/1"

// AuditReport is what an engineer checks of a log in the first ten minutes. Its JSON
// form is the file audit.json.
type AuditReport struct {
	Schema  string   `json:"schema"`
	Tool    string   `json:"tool"`
	Rig     string   `json:"rig"`
	Made    string   `json:"made"`
	Logs    []LogUse `json:"logs"`
	Verdict string   `json:"verdict"` // sound, weak, refused

	Sign           Sign           `json:"sign"`
	OperatingPoint OperatingPoint `json:"operating_point"`
	Spread         OperatingPoint `json:"spread"` // standard deviations about it
	Pairing        Pairing        `json:"pairing"`
	LoopRate       LoopRate       `json:"loop_rate"`
	Outside        Outside        `json:"outside"`
	Law            *LawCheck      `json:"stopgap"`     // null where the rig file has no law
	Memories       float64        `json:"memories"`    // length of the logs in memories of a glance's predictor; 0: unknown
	Informative    *Informative   `json:"informative"` // null where a glance finds no plant
	Excitation     []Excitation   `json:"excitation"`  // of what is logged from outside, or stands in for it
	Coherence      *Coherence     `json:"coherence"`   // null where nothing acts from outside, or the log is too short
	Flaws          []Flaw         `json:"flaws"`
	NextStep       string         `json:"next_step"`
}

// Sign is that of the plant's first response.
type Sign struct {
	Positive bool   `json:"positive"`
	Known    bool   `json:"known"`
	Words    string `json:"words"`
}

// Pairing says whether input and output of a row belong together.
type Pairing struct {
	Rows  int    `json:"rows"` // the input is logged so many rows late; 0: in step
	Words string `json:"words"`
}

// LoopRate sets the sample period against the likely unstable pole, as a
// glance at the log finds it. The final estimate is the fit's.
type LoopRate struct {
	SamplePeriod float64   `json:"sample_period"` // s
	UnstablePole *Estimate `json:"unstable_pole"` // real part, rad/s; null: none seen
	Growth       float64   `json:"growth"`        // factor a sample; 1 where no pole is seen
	Words        string    `json:"words"`
}

// Flaw is a flaw of one of the logs.
type Flaw struct {
	File   string `json:"file"`
	Name   string `json:"name"`
	Column string `json:"column"`
	Count  int    `json:"count"`
	Line   int    `json:"line"`
	Detail string `json:"detail"`
	Effect string `json:"effect"`
	Remedy string `json:"remedy"` // what to do about it
}

// glanceRows is the part of a log that the audit's quick fit looks at.
const glanceRows = 20000

// Audit says what the logs can tell, before any fit is believed. It errs only
// where logs do not belong together; a log that says nothing comes back with
// the verdict refused and a RefusedError.
func Audit(ctx context.Context, exps []*data.Experiment, rig *data.Rig) (*AuditReport, error) {
	a := &AuditReport{Schema: AuditSchema, Rig: rig.Name, Verdict: Sound, Excitation: []Excitation{}, Flaws: []Flaw{}}
	for _, e := range exps {
		a.Logs = append(a.Logs, LogUse{File: e.File, SHA256: e.SHA256, Rows: e.Rows, Used: e.Used, Segments: len(e.Segments)})
		for _, f := range e.Flaws {
			a.Flaws = append(a.Flaws, Flaw{e.File, f.Name, f.Column, f.Count, f.Line, f.Detail, f.Effect, f.Remedy()})
		}
	}
	recs, period, err := records(exps)
	if err != nil {
		a.Verdict = Refused
		return a, err
	}
	a.LoopRate = LoopRate{SamplePeriod: period, Growth: 1}
	su, sy := spread(recs)
	a.Spread = OperatingPoint{su, sy}
	for _, r := range recs {
		for k, y := range r.Filled().Y {
			a.OperatingPoint.Input += r.U[k]
			a.OperatingPoint.Output += y
		}
	}
	var rows float64
	for _, r := range recs {
		rows += float64(len(r.Y))
	}
	a.OperatingPoint.Input /= rows
	a.OperatingPoint.Output /= rows
	if o := rig.OperatingPoint; o != nil {
		a.OperatingPoint = OperatingPoint{o.Input, o.Output}
	}
	a.Outside = outside(exps)
	a.Excitation = append(a.Excitation, excitation(exps, a.Outside)...)
	a.Coherence = coherence(exps, a.Outside, period)
	a.Law = checkLaw(exps, rig)
	if a.Outside.Quiet {
		a.Verdict = Refused
		a.Sign.Words = "unknown: the log shows the law, not the plant"
		a.Pairing.Words = "unknown: the log shows the law, not the plant"
		a.LoopRate.Words = fmt.Sprintf("%.4g s a row; the unstable pole cannot be seen in this log", period)
		err := refuseQuiet(a.Outside)
		a.NextStep = err.(*RefusedError).Do
		return a, err
	}
	if err := refuseDeaf(recs); err != nil {
		a.Verdict, a.NextStep = Refused, err.(*RefusedError).Do
		a.Sign.Words, a.Pairing.Words = "unknown: the output does not answer to the input", "unknown: the output does not answer to the input"
		a.LoopRate.Words = fmt.Sprintf("%.4g s a row", period)
		return a, err
	}
	if err := a.glance(ctx, recs, rig, period); err != nil {
		return a, err
	}
	if a.Informative != nil {
		a.Informative.weigh(a, exps, rig)
	}
	if err := refuseShifted(a.Law, rig); err != nil {
		a.Verdict, a.Pairing = Refused, Pairing{Rows: a.Law.Rows, Words: a.Law.Words}
		a.NextStep = err.(*RefusedError).Do
		return a, err
	}
	return a, a.conclude()
}

// glance fits plain structures to part of the log.
func (a *AuditReport) glance(ctx context.Context, recs []fit.Record, rig *data.Rig, period float64) error {
	sc := scopeOf(rig, period)
	some := recs
	p, err := fit.NewPredictor(recs, period, math.Max(sc.delay[1], sc.base))
	if err == nil && p.Rows() > glanceRows {
		some = spreadOver(recs, glanceRows)
		p, err = fit.NewPredictor(some, period, math.Max(sc.delay[1], sc.base))
	}
	if err != nil {
		a.Verdict = Refused
		a.NextStep = "log a longer run"
		return &RefusedError{What: err.Error(), Do: a.NextStep}
	}
	c, err := newChooser(p, some, sc, runtime.GOMAXPROCS(0))
	if err != nil {
		a.Verdict = Refused
		a.NextStep = "log a run in which input and output move"
		return &RefusedError{What: err.Error(), Do: a.NextStep}
	}
	var list []structure
	for _, s := range []structure{{poles: 1}, {poles: 2}, {poles: 3}, {poles: 2, colour: 1}, {poles: 3, colour: 1}, {poles: 3, zeros: 1, colour: 1}, {poles: 2, delay: true}, {poles: 2, colour: 1, delay: true}} {
		if sc.allows(s) {
			list = append(list, s)
		}
	}
	if len(list) == 0 {
		list = append(list, structure{poles: sc.minPoles, zeros: min(sc.minZeros, sc.minPoles-1), delay: sc.mustDelay})
	}
	if err := c.try(ctx, list, nil, nil); err != nil {
		return err
	}
	ranked := c.ranked()
	if len(ranked) == 0 {
		a.Verdict = Weak
		a.Sign.Words = "unknown: no plain model fits"
		return nil
	}
	best := ranked[0].fit
	// A far zero on the wrong side turns the sign of the very first response;
	// the direction that counts is that of the best plant without zeros.
	plain := best
	for _, cand := range ranked {
		if cand.zeros == 0 {
			plain = cand.fit
			break
		}
	}
	a.Sign = Sign{Positive: lead(plain) > 0, Known: true}
	if a.Sign.Positive {
		a.Sign.Words = "more input pushes the output up (positive gain): a positive inner gain opposes it"
	} else {
		a.Sign.Words = "more input pushes the output down (negative gain): the inner gain must be negative"
	}
	a.Memories = float64(p.Rows()) / memory(decaying(best))
	for _, cand := range ranked {
		if a.Informative == nil && a.Outside.law != nil {
			a.Informative = informative(a.Outside.pieces, cand.fit, a.Outside.law)
		}
	}
	a.Pairing.Words = "input and output of a row belong together"
	var refused *RefusedError
	if err := c.pairing(ctx, some, ranked, runtime.GOMAXPROCS(0)); err != nil {
		a.Pairing = Pairing{Rows: 1, Words: err.Error()}
		refused, _ = err.(*RefusedError)
		if refused == nil {
			return err
		}
	}
	if p.Covariance(best) == nil {
		m := &Model{}
		m.describe(p, best, rig)
		a.OperatingPoint = m.OperatingPoint
		for _, r := range m.Poles {
			if r.Unstable && (a.LoopRate.UnstablePole == nil || r.Re > a.LoopRate.UnstablePole.Value) {
				a.LoopRate.UnstablePole = &Estimate{Value: r.Re, SD: r.ReSD, Interval95: r.Re95}
			}
		}
	}
	if u := a.LoopRate.UnstablePole; u != nil && u.Interval95.Lo <= 0 {
		a.LoopRate.Words = fmt.Sprintf("%.4g s a row; a slow pole between %.3g and %.3g rad/s, which may be an integrator", period, u.Interval95.Lo, u.Interval95.Hi)
		a.LoopRate.UnstablePole = nil
	} else if u != nil {
		a.LoopRate.Growth = math.Exp(u.Value * period)
		a.LoopRate.Words = fmt.Sprintf("%.4g s a row; an unstable pole near %.3g rad/s (%.3g to %.3g) grows by %.2g %% a row",
			period, u.Value, u.Interval95.Lo, u.Interval95.Hi, 100*(a.LoopRate.Growth-1))
	} else {
		a.LoopRate.Words = fmt.Sprintf("%.4g s a row; no unstable pole seen at a glance", period)
	}
	return nil
}

// conclude sets the verdict and the one next step.
func (a *AuditReport) conclude() error {
	flaw := slices.IndexFunc(a.Flaws, func(f Flaw) bool { return slices.Contains(doubtfulFlaws, f.Name) })
	named := func(name string) int { return slices.IndexFunc(a.Flaws, func(f Flaw) bool { return f.Name == name }) }
	mend := func(i int) string { return fmt.Sprintf("mend the flaw %q: %s", a.Flaws[i].Name, a.Flaws[i].Remedy) }
	switch {
	case a.Pairing.Rows != 0 && named(data.FlawClocks) >= 0:
		a.Verdict = Refused
		a.Pairing.Words = "not known: by the rows input and output do not belong together, as where two clocks run apart"
		a.NextStep = mend(named(data.FlawClocks))
		return &RefusedError{What: "input and output were logged by clocks that run apart", Do: a.NextStep}
	case a.Pairing.Rows != 0:
		a.Verdict = Refused
		a.NextStep = `set input_row = "before" in [log], or shift the input column by a row`
		return &RefusedError{What: a.Pairing.Words}
	case a.Law != nil && a.Law.SignWrong:
		a.Verdict = Weak
		a.NextStep = "correct the sign of [stopgap] in the rig file, or that of a column"
	case a.Law != nil && a.Law.Rows != 0:
		a.Verdict = Weak
		a.NextStep = "find out which row the input belongs to: " + a.Law.Words
	case a.Law != nil && a.Law.Unexplained > 0.9 && named(data.FlawDrift) >= 0:
		a.Verdict = Weak
		a.NextStep = mend(named(data.FlawDrift)) + "; the law of the rig file does not explain an input whose output drifts"
	case a.Law != nil && a.Law.Unexplained > 0.9:
		a.Verdict = Weak
		a.NextStep = "correct [stopgap] in the rig file, or leave it out: " + a.Law.Words
	case flaw >= 0:
		a.Verdict = Weak
		a.NextStep = mend(flaw)
	case a.Memories > 0 && a.Memories < soundMemories:
		a.Verdict = Weak
		a.NextStep = fmt.Sprintf("log a longer run: this one holds %s memories of the predictor, intervals want %d", three(a.Memories), soundMemories)
	case a.Outside.Share < faintShare:
		a.Verdict = Weak
		a.NextStep = "log a run with more power from outside, since the intervals of this one rest on little" + a.Informative.most()
	case a.Informative.isWide():
		a.Verdict = Weak
		a.NextStep = fmt.Sprintf("log a run that tells more, since the interval of the rightmost pole will be wide: %s times as long with the same probe%s",
			three(a.Informative.enough()), a.Informative.most())
	case a.Informative.onShape():
		a.Verdict = Weak
		a.NextStep = "log a run with more power from outside, since this one tells the rightmost pole by the shape assumed for the disturbance" + a.Informative.most()
	case a.LoopRate.Growth > 2:
		a.Verdict = Weak
		a.NextStep = "log faster: the unstable pole more than doubles the output within a row"
	case a.LoopRate.Growth > 1.35:
		a.NextStep = "fit the log; a faster log would tell the fast poles better"
	case a.Informative.most() != "":
		a.NextStep = "fit the log" + a.Informative.most()
	default:
		a.NextStep = "fit the log"
	}
	return nil
}
