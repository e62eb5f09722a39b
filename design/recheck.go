package design

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"math"
	"slices"

	"steadyrig/data"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// Verdicts on loops after a change of the rig.
const (
	Keep   = "keep"
	Retune = "retune"
	Stop   = "stop"
)

// A Recheck says whether the present loops may stay on a rig of which a log was taken after a change.
//
// Stop: the present loops may not hold the rig, do not close them. So it is where
//   - the new log was refused, or its model's own residual tests contradict it, so that too little is known;
//   - the gain differs by the factor between two units and the rightmost pole has not moved, so that a column has changed its unit;
//   - the rig tripped, or the input ended at a limit, in a log that may have been taken under the present loops;
//   - of the fresh plants drawn from the new log's model the share that both loops, and the inner one alone, hold within
//     the trips is not shown to be at least PromisedShare: its one-sided 95 % Clopper-Pearson bound is below that, as
//     it is from 5 plants in 2 000 on. The share is the one that a promise rests on: loops that were never allowed to
//     be closed for the first time on more doubt than that are not left closed on more;
//   - an unstable pole of the new plant may lie under a zero of the controllers, see Verify.
//
// Retune: they hold, but the promise is not kept: the bound on the share that meets the whole spec is below
// PromisedShare, or some plant is lost.
//
// Keep: otherwise, also on a rig that has moved.
//
// Plants are drawn from the new log alone: what the earlier one says of a rig that may be another cannot make the loops
// safer. Were the true plant one that the loops lose by however little, Keep would take an estimate on their side of the
// edge by so many deviations that of 2 000 draws not one lies beyond, more than 3 of them (2 000 times the normal tail
// of 3.29 deviations is one), and beyond that the whole way to the spec's peak sensitivity.
//
// Without loops the verdict is about the model: Keep where the rig has not moved, Retune where it has, Stop where the
// new log does not tell.
//
// Its JSON form is recheck.json.
type Recheck struct {
	Schema      string         `json:"schema"`
	Tool        string         `json:"tool"`
	Rig         string         `json:"rig"`
	Made        string         `json:"made"` // RFC 3339
	Logs        []ident.LogUse `json:"logs"`
	ModelSHA256 string         `json:"model_sha256"`           // of the earlier model
	LoopsSHA256 string         `json:"loops_sha256,omitempty"` // of the present loops

	ModelVerdict string       `json:"model_verdict"`          // on the model of the new logs
	Poles        []ident.Root `json:"poles"`                  // of the new plant
	PooledPoles  []ident.Root `json:"pooled_poles,omitempty"` // of both models together, where that was asked for

	Moved       bool                   `json:"moved"`                 // false also where nothing could be compared
	Probability *float64               `json:"probability_by_chance"` // nil: nothing could be compared
	Statistic   float64                `json:"statistic"`             // of the joint test, chi-square of Freedom degrees where nothing moved
	Freedom     int                    `json:"freedom"`
	Allowance   float64                `json:"allowance"` // its non-centrality where the structure is only approximate
	Changes     []ident.Change         `json:"changes"`
	Alone       []ident.Alone          `json:"alone"`   // single numbers whose change would explain all
	Visible     []ident.Visible        `json:"visible"` // what would have been seen
	Structure   *ident.StructureCheck  `json:"structure"`
	Prediction  *ident.PredictionCheck `json:"prediction"`
	Words       string                 `json:"words"` // what moved, in a sentence

	NuGap   *NuGapChange `json:"nu_gap"`  // nil: not measured, a warning says why
	Promise *Promise     `json:"promise"` // of the present loops on the new plants; nil: no loops, or not to be had
	Law     *LawRan      `json:"law"`     // nil: no loops
	Gain    *RetuneGain  `json:"retune"`  // nil: not tried
	Verdict string       `json:"verdict"`
	Why     string       `json:"why"` // the verdict's reason, one sentence
	Do      string       `json:"do"`  // what to do next, one sentence
	// Cautions are for the person at the rig.
	Cautions []string `json:"cautions"`
	Warnings []string `json:"warnings"`

	Present *Loops `json:"-"` // the present loops, judged anew on the new plants; nil: no loops, or no plant to judge them on
	Retuned *Loops `json:"-"` // loops designed for the new plant, nil: not tried

	counted bool // Stop is for the count of plants, not for want of knowledge of the rig
}

// NuGapChange is the distance of the new plant from the old one in the nu-gap, both sampled with the loops' period and
// delay, input and output in units of InputRange and OutputRange, against the distance that the present loops bear.
type NuGapChange struct {
	Value      float64    `json:"value"`
	Interval   [2]float64 `json:"interval_95"`
	At         float64    `json:"at"`           // rad/s, where the two are furthest apart
	Margin     *float64   `json:"margin"`       // lesser of the two below; nil: no loops, or they do not hold the old plant
	MarginBoth *float64   `json:"margin_both"`  // b(P, C) of both loops at the old plant
	MarginIn   *float64   `json:"margin_inner"` // of the inner loop alone
	// HeldBy is Theorem where the interval's upper end is below Margin: any plant that near is held (Vinnicombe). Else it
	// is Count, as only looking at the plants can tell; empty: no margin.
	HeldBy      string  `json:"held_by"`
	InputRange  float64 `json:"input_range"`
	OutputRange float64 `json:"output_range"`
	Draws       int     `json:"draws"` // pairs of plants behind the interval
}

// LawRan says which law ran in the new log, by the share of the input's variance that each leaves; null: not tested.
type LawRan struct {
	Which   string   `json:"which"` // one of Law…
	Loops   *float64 `json:"loops_leave"`
	Stopgap *float64 `json:"stopgap_leaves"`
	Words   string   `json:"words"`
}

// The laws that LawRan tells apart.
const (
	LawLoops   = "loops"
	LawStopgap = "stopgap"
	LawUnknown = "unknown"
)

// lawRan is the share of the input's variance below which a law is the one that ran: moves off by less than a tenth.
const lawRan = 0.01

// RetuneGain compares the present loops with retuned ones on the same plants drawn from the new model.
type RetuneGain struct {
	Figures []GainFigure `json:"figures"`
	Kept    bool         `json:"kept"` // the retuned pair keeps the promise
	Why     string       `json:"why,omitempty"`
}

// GainFigure is one figure of a promise with both pairs, at the new nominal plant and at the worst of those drawn.
type GainFigure struct {
	Name    string `json:"name"` // as in a promise
	Present Spread `json:"present"`
	Retuned Spread `json:"retuned"`
}

// RecheckSchema is the schema name of recheck.json.
const RecheckSchema = "steadyrig/recheck/1"

// A Since is what logs that were taken since say of the rig.
type Since struct {
	Logs    []*data.Experiment
	Model   *ident.Model      // of these logs
	Refusal error             // why they were refused, nil: they were not
	Changes *ident.Comparison // with the earlier model; nil: the two could not be compared
}

// NewRecheck judges loops (nil: none) by before, the model that they were designed for, and by what was found since.
// Errors: the loops do not fit the rig file, before holds no plant, or ctx ended.
func NewRecheck(ctx context.Context, before *ident.Model, since Since, rig *data.Rig, loops *Loops, opt Options) (*Recheck, error) {
	if len(before.Plant.Denominator) == 0 {
		return nil, &ident.RefusedError{What: "the earlier model holds no plant: its fit was refused", Do: "give a model that was fitted"}
	}
	exps, after, refusal := since.Logs, since.Model, since.Refusal
	r := &Recheck{
		Schema: RecheckSchema, Rig: rig.Name, Logs: after.Logs, ModelVerdict: after.Verdict, Poles: after.Poles, Verdict: Keep, Warnings: []string{},
		Changes: []ident.Change{}, Alone: []ident.Alone{}, Visible: []ident.Visible{},
	}
	said := func(warnings []string, err error) {
		for _, w := range warnings {
			if (err == nil || w != err.Error()) && !slices.Contains(r.Warnings, w) {
				r.Warnings = append(r.Warnings, w)
			}
		}
	}
	said(after.Warnings, refusal)
	if c := since.Changes; c != nil {
		r.Moved, r.Probability, r.Statistic, r.Freedom, r.Allowance = c.Moved, &c.ProbabilityByChance, c.Statistic, c.Freedom, c.Allowance
		r.Changes, r.Alone, r.Visible = c.Changes, c.Alone, c.Visible
		r.Structure, r.Prediction, r.Words = &c.Structure, &c.Prediction, c.Words
		said(c.Warnings, nil)
	}
	if loops != nil {
		rig = loops.Asked(rig)
		r.Law = whichLaw(exps, rig, loops)
	}
	tripped := ended(exps, rig, before)
	known, moved := refusal == nil && len(after.Plant.Denominator) > 0, r.Moved
	var err error
	if known {
		if r.NuGap, err = r.nuGap(before, after, rig, loops, opt); err != nil {
			return nil, err
		}
	}
	var broken error // why Verify refused
	if known && loops != nil {
		if r.Present, broken = Verify(ctx, after, rig, loops, opt); r.Present == nil {
			return nil, broken
		}
		r.Promise = r.Present.Promise
		said(r.Present.Warnings, broken)
	}
	units := r.rescaled(before, after)
	switch {
	case refusal != nil:
		r.say(Stop, refusal, "the new log does not tell what the rig is now: ")
	case !known:
		r.say(Stop, &ident.RefusedError{What: "the new log gives no plant", Do: "log a run with a stronger probe"}, "")
	case units != 0:
		r.Verdict, r.Why = Stop, fmt.Sprintf("the gain is %.4g times the earlier one and the rightmost pole has not moved, as where a column came in another unit", units)
		r.Do = "log input and output in the units of the earlier log; if the gain is what changed, fit and design anew"
	case loops == nil && since.Changes == nil:
		r.say(Stop, &ident.RefusedError{What: "the earlier model and the new log could not be compared", Do: "log a longer run or one with a stronger probe"}, "")
	case loops == nil && moved:
		r.Verdict, r.Why, r.Do = Retune, "the rig has moved away from the model", "fit the new log and design again; give the loops to learn whether they still hold"
	case loops == nil:
		r.Why, r.Do = "the model still holds", "give the loops to learn whether they still do, too"
	case tripped != "" && r.Law.Which != LawStopgap:
		r.Verdict, r.Why = Stop, tripped+", in a log that may have been taken under the present loops"
		r.Do = "do not close these loops; find out what changed, and hold the rig with a law that is known to"
		if r.Law.Which == LawLoops {
			r.Why = "under the present loops " + tripped
		}
	case r.Promise == nil:
		r.say(Stop, broken, "")
	case contradicted(after) != nil:
		r.say(Stop, contradicted(after), "")
	case r.Present.Hidden != nil && !r.Present.Margins.PlantInput.Stable:
		r.say(Stop, broken, "")
	case ClopperPearsonLower(r.Promise.Stable, r.Promise.Plants, r.Promise.Confidence) < PromisedShare:
		r.Verdict, r.Why = Stop, fmt.Sprintf("the present loops hold %d of %d plants that the new log allows, too few to show that they hold at least %.4g %% of them",
			r.Promise.Stable, r.Promise.Plants, 100*PromisedShare)
		r.Do, r.counted = "do not close these loops: design new ones for the new plant", true
		if r.Present.Margins.PlantInput.Stable && r.Present.Margins.InnerAlone.Stable {
			r.Do = "do not close these loops: take a longer log or a stronger probe under a law that is known to hold the rig, or design new ones"
		}
	case broken != nil:
		r.say(Retune, broken, "the present loops hold the rig, but ")
	case moved:
		r.Why, r.Do = "the rig has moved, and the present loops still hold it and keep the spec", "keep the loops; design anew only for what a retune would gain"
	case since.Changes == nil:
		r.Why, r.Do = "the present loops hold the rig and keep the spec; what moved could not be told", "keep the loops"
	default:
		r.Why, r.Do = "nothing moved that this log could show, and the present loops keep the spec", "keep model and loops"
	}
	if tripped != "" {
		r.Warnings = append(r.Warnings, tripped+"; rows from there on were not used")
	}
	r.Cautions = r.cautions()
	return r, nil
}

// say takes verdict and words from a refusal.
func (r *Recheck) say(verdict string, err error, lead string) {
	r.Verdict, r.Why, r.Do = verdict, lead+err.Error(), ""
	var refused *ident.RefusedError
	if errors.As(err, &refused) {
		r.Why, r.Do = lead+refused.What, refused.Do
	}
}

// Err is the refusal that ends a recheck which does not say keep; nil where it does.
func (r *Recheck) Err() error {
	if r.Verdict == Keep {
		return nil
	}
	return &ident.RefusedError{What: r.Verdict + ": " + r.Why, Do: r.Do}
}

// nuGapDraws is the number of pairs of plants behind the interval of a nu-gap.
const nuGapDraws = 400

// nuGap measures how far the plant has moved. The nu-gap of two estimates is biased upwards, as any distance is: with no
// move at all it is that of two errors. But it is a metric (Vinnicombe, Uncertainty and Feedback, 2001, sec. 3.1; Zhou &
// Doyle, Essentials of Robust Control, 1998, ch. 17), and the triangle's inequality, used twice, gives
//
//	|gap(P0, P1) - gap(Q0, Q1)| <= gap(P0, Q0) + gap(P1, Q1)
//
// for true plants P and estimates Q. The right-hand side is distributed as that of drawn plants about the estimates, the
// two draws being independent because the logs are. Its 95 % quantile either way of the estimate thus holds the true gap
// in at least 95 % of rechecks, and where nothing moved the lower end is zero in as many.
func (r *Recheck) nuGap(before, after *ident.Model, rig *data.Rig, loops *Loops, opt Options) (*NuGapChange, error) {
	if err := rig.NeedDesign(); err != nil {
		if loops != nil {
			return nil, err
		}
		r.Warnings = append(r.Warnings, "the nu-gap was not measured: "+err.Error())
		return nil, nil
	}
	var p [2]*problem
	for i, m := range []*ident.Model{before, after} {
		var err error
		if p[i], err = newProblem(m, rig); err != nil {
			r.Warnings = append(r.Warnings, "the nu-gap was not measured: "+err.Error())
			return nil, nil
		}
	}
	if loops != nil {
		if err := p[0].adopt(loops); err != nil {
			return nil, err
		}
	}
	g := &NuGapChange{Draws: nuGapDraws, InputRange: p[0].limits[1] - p[0].limits[0], OutputRange: p[0].outputRange()}
	scale := g.InputRange / g.OutputRange
	old := p[0].nominal.scaled(scale, p[0].period)
	var err error
	if g.Value, g.At, err = lti.SampledNuGap(old, p[1].nominal.scaled(scale, p[1].period)); err != nil {
		r.Warnings = append(r.Warnings, "the nu-gap was not measured: "+err.Error())
		return nil, nil
	}
	off := make([]float64, nuGapDraws)
	for i, m := range []*ident.Model{before, after} {
		for k, tf := range m.Draw(nuGapDraws, stream(opt.Seed, streamGap, i)) {
			if pl, err := p[i].newPlant(tf); err == nil {
				off[k] += p[i].gapOnGrid(&pl, scale)
			} else {
				off[k]++ // a plant that cannot be sampled is as far off as any
			}
		}
	}
	slices.Sort(off)
	q := off[int(math.Ceil(0.95*nuGapDraws))-1]
	g.Interval = [2]float64{math.Max(0, g.Value-q), math.Min(1, g.Value+q)}
	if loops == nil {
		return g, nil
	}
	law := loops.LTI()
	both, alone, err := p[0].newProver(law).holds(before.TF(), &p[0].nominal)
	if err != nil || !both || !alone {
		r.Warnings = append(r.Warnings, "the loops do not hold the earlier model's own plant: they are not the loops of that model")
		return g, nil
	}
	inner, outer := controllers(law, scale)
	margin := func(c lti.DTF) *float64 {
		b, _ := lti.FeedbackMargin(old, c)
		return &b
	}
	g.MarginIn, g.MarginBoth = margin(inner), margin(outer)
	g.Margin = g.MarginIn
	if *g.MarginBoth < *g.Margin {
		g.Margin = g.MarginBoth
	}
	g.HeldBy = Count
	if g.Interval[1] < *g.Margin {
		g.HeldBy = Theorem
	}
	return g, nil
}

// whichLaw tells which law ran in the logs. Two loops are one law of reference and output: with K1 = n1/d1, K2 = n2/d2
// and F = nf/df it is, in deviations,
//
//	d1 d2 df u = n1 n2 nf r - n1 (n2 + d2) df y
//
// wherever nothing is held back by a limit.
func whichLaw(exps []*data.Experiment, rig *data.Rig, loops *Loops) *LawRan {
	out := &LawRan{Which: LawUnknown}
	period := exps[0].Period
	if c := rig.Log.ControllerPeriod; c > 0 {
		period = c
	}
	if math.Abs(period-exps[0].Period) > 1e-3*period {
		out.Words = "which law ran in the log cannot be told: the log does not show every step of it"
		return out
	}
	if s := rig.Stopgap; s != nil {
		left := ident.LawLeaves(exps, s.Denominator, s.Numerator, s.Numerator)
		out.Stopgap = &left
	}
	if math.Abs(loops.SamplePeriod-period) <= 1e-3*period {
		law := loops.LTI()
		one := lti.Poly{1}
		n2, d2, nf, df := lti.Poly{0}, one, one, one
		byR := law.Inner.Num
		if law.Outer != nil {
			n2, d2 = law.Outer.Num, law.Outer.Den
			byR = byR.Mul(n2)
		}
		if law.Prefilter != nil {
			nf, df = law.Prefilter.Num, law.Prefilter.Den
		}
		left := ident.LawLeaves(exps, law.Inner.Den.Mul(d2).Mul(df), law.Inner.Num.Mul(n2.Add(d2)).Mul(df), byR.Mul(nf))
		out.Loops = &left
	}
	is := func(x *float64) bool { return x != nil && *x < lawRan }
	switch {
	case is(out.Loops) && !(is(out.Stopgap) && *out.Stopgap < *out.Loops):
		out.Which, out.Words = LawLoops, fmt.Sprintf("the log was taken under the present loops: they explain the input but for %.2g of its variance", *out.Loops)
	case is(out.Stopgap):
		out.Which, out.Words = LawStopgap, fmt.Sprintf("the log was taken under the stopgap law of the rig file and not under the present loops: it explains the input but for %.2g of its variance", *out.Stopgap)
	default:
		out.Words = "the log was taken under another law than the present loops"
		if out.Loops != nil {
			out.Words += fmt.Sprintf(": these leave %.2g of the input's variance", *out.Loops)
		} else {
			out.Words += fmt.Sprintf(": these run every %.4g s, the rows are %.4g s apart", loops.SamplePeriod, period)
		}
	}
	return out
}

// factors lie between units that columns are logged in: powers of ten, degrees in a radian, millimetres in an inch.
var factors = []float64{10, 100, 1e3, 1e6, 180 / math.Pi, 25.4}

// rescaled returns the factor by which the gain has changed where that is one between units and the rightmost pole has
// not moved by more than 4 deviations; else 0.
func (r *Recheck) rescaled(before, after *ident.Model) float64 {
	i := slices.IndexFunc(r.Changes, func(c ident.Change) bool { return c.Ratio && c.ProbabilityByChance < ident.MovedLevel })
	if i < 0 || len(before.Poles) == 0 || len(after.Poles) == 0 {
		return 0
	}
	c := r.Changes[i]
	ratio := c.After / c.Before
	size := math.Abs(math.Log(math.Abs(ratio)))
	// The interval's ends are factors of the ratio, or it says nothing about it.
	half := math.Log(c.Interval95.Hi/c.Interval95.Lo) / 2
	if !slices.ContainsFunc(factors, func(f float64) bool { return math.Abs(size-math.Log(f)) < math.Min(2*half, 0.2) }) {
		return 0
	}
	rightmost := func(m *ident.Model) ident.Root {
		return slices.MaxFunc(m.Poles, func(a, b ident.Root) int { return cmp.Compare(a.Re, b.Re) })
	}
	if p, q := rightmost(before), rightmost(after); math.Abs(p.Re-q.Re) > 4*math.Hypot(p.ReSD, q.ReSD) {
		return 0
	}
	return ratio
}

// ended says how the rig was lost in one of the logs, by its trips or by an input that stays at a limit up to the end for
// longer than the unstable pole takes to grow by e; empty: it was not.
func ended(exps []*data.Experiment, rig *data.Rig, before *ident.Model) string {
	fastest := 0.0
	for _, p := range before.Poles {
		fastest = math.Max(fastest, p.Re)
	}
	for _, e := range exps {
		last := e.Segments[len(e.Segments)-1]
		for _, f := range e.Flaws {
			switch {
			case f.Name == data.FlawTrip:
				return fmt.Sprintf("the rig tripped in %s, line %d", e.File, f.Line)
			case f.Name == data.FlawIdle && f.Line > last.LineAt(len(last.U)-1):
				return fmt.Sprintf("the input of %s comes to rest at line %d and stays there, as after a trip", e.File, f.Line)
			}
		}
		lim := rig.Limits.Input
		if lim == nil || fastest == 0 {
			continue
		}
		inset, n := 1e-6*(lim[1]-lim[0]), 0
		for k := len(last.U) - 1; k >= 0 && (last.U[k] <= lim[0]+inset || last.U[k] >= lim[1]-inset); k-- {
			n++
		}
		if float64(n)*e.Period > 1/fastest {
			return fmt.Sprintf("%s ends with the input at a limit for %d rows", e.File, n)
		}
	}
	return ""
}

// AddRetune designs loops for the new plant and sets them beside the present ones. A refusal is no error: the pair then
// comes without its promise.
func (r *Recheck) AddRetune(ctx context.Context, after *ident.Model, rig *data.Rig, loops *Loops, opt Options) error {
	asked := loops.Asked(rig)
	l, err := Design(ctx, after, asked, opt)
	var refused *ident.RefusedError
	if err != nil && (l == nil || !errors.As(err, &refused)) {
		return err
	}
	if asked != rig {
		l.Assumed = loops.Assumed
	}
	r.Gain = &RetuneGain{Figures: []GainFigure{}, Kept: err == nil}
	if r.Retuned = l; err != nil {
		r.Gain.Why = err.Error()
	}
	switch {
	case r.Offers() && r.Verdict == Stop:
		r.Do = "do not close these loops: a pair for the new plant was found, to be closed as for the first time"
	case r.Offers():
		r.Do = "take the retuned pair, closed as for the first time"
	case r.Verdict == Retune:
		r.Do = "no pair was found that keeps the spec on the new plant: " + refused.Do
	}
	a, b := r.Promise, l.Promise
	if a == nil || b == nil {
		return nil
	}
	add := func(name string, present, retuned Spread) {
		r.Gain.Figures = append(r.Gain.Figures, GainFigure{name, present, retuned})
	}
	add(missSettling, a.Settling, b.Settling)
	add(missOvershoot, a.Overshoot, b.Overshoot)
	add(missPeakS, a.PeakS, b.PeakS)
	add(missNoise, a.InputNoise, b.InputNoise)
	if a.KickPeak != nil && b.KickPeak != nil {
		add(missKick, *a.KickPeak, *b.KickPeak)
	}
	return nil
}

// Offers reports whether the retuned pair is to take the place of the present one: it keeps the promise, and the verdict
// is Retune, or Stop because of what the new log's plants do in the present loops.
func (r *Recheck) Offers() bool {
	return r.Gain != nil && r.Gain.Kept && (r.Verdict == Retune || r.counted)
}

// cautions are for the person at the rig.
func (r *Recheck) cautions() []string {
	c := []string{"Somebody could be hurt: guards on, nobody within reach, a person at the stop; local codes and licensed practice come before this verdict."}
	switch r.Verdict {
	case Stop:
		c = append(c, "Do not close the present loops. Bring the rig down, or hold it by a law that is known to hold it as it is now, before anything else.")
	case Retune:
		c = append(c, "A new pair is closed like any for the first time: trips set and tried before, inner loop alone, then the outer one slowly, in the order of its first_closure.")
	}
	return append(c, "The verdict speaks of the rig as it was in this log, at this operating point, and of no later change.")
}
