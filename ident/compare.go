package ident

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/lti"
)

// MovedLevel is the probability by chance below which a rig is said to have moved.
const MovedLevel = 0.05

// Comparison says what moved between an earlier model and a later one.
type Comparison struct {
	// Moved is the joint test of all parameters of the plant at MovedLevel.
	Moved               bool    `json:"moved"`
	ProbabilityByChance float64 `json:"probability_by_chance"` // of the joint test
	Statistic           float64 `json:"statistic"`             // chi-square with Freedom degrees of freedom where nothing moved
	Freedom             int     `json:"freedom"`
	// Allowance is the non-centrality that the statistic is allowed to have because
	// the structure is only approximate, 0 where it is not.
	Allowance float64 `json:"allowance"`
	// Changes lists gain, poles, zeros, delay, noise level, offset and actuator
	// range, in this order, as far as both models have them.
	Changes []Change `json:"changes"`
	// Alone lists the single numbers a change of which, all others as they were, would
	// explain what moved, the likeliest first; empty where nothing moved or none does.
	Alone []Alone `json:"alone"`
	// Visible says what size of change would have been seen in 95 of 100 pairs of
	// such logs: of the gain, and of the unstable pole where there is one.
	Visible    []Visible       `json:"visible"`
	Structure  StructureCheck  `json:"structure"`
	Prediction PredictionCheck `json:"prediction"`
	Words      string          `json:"words"` // what moved, in a sentence
	Warnings   []string        `json:"warnings"`
}

// Change is one number before and after.
type Change struct {
	Name   string  `json:"name"`
	Unit   string  `json:"unit"`
	Before float64 `json:"before"`
	After  float64 `json:"after"`
	// Interval95 is that of the change: of After/Before where Ratio, else of
	// After - Before. Each holds by itself.
	Interval95 Interval `json:"interval_95"`
	Ratio      bool     `json:"ratio"`
	// ProbabilityByChance of so large a change in any of the numbers looked at
	// (Holm, A simple sequentially rejective multiple test procedure, Scand. J.
	// Statist. 6 (1979) 65-70).
	ProbabilityByChance float64 `json:"probability_by_chance"`
	// Clear is set where that is below MovedLevel and, of a number of the plant, the
	// plant as a whole has moved (Marcus, Peritz & Gabriel, On closed testing
	// procedures with special reference to ordered analysis of variance, Biometrika
	// 63 (1976) 655-660).
	Clear bool   `json:"clear"`
	Words string `json:"words"` // "gain up 12 % (9 to 15)"

	plant bool
	short string
}

// Alone is a single number of the plant whose change would explain all that moved.
type Alone struct {
	Name       string   `json:"name"`
	Ratio      float64  `json:"ratio"` // after over before
	Interval95 Interval `json:"interval_95"`
	// ProbabilityLeft is that of what it leaves unexplained coming by chance.
	ProbabilityLeft float64 `json:"probability_left"`
}

// Visible is the size of a change, as a fraction of the number, from which on it is
// seen as often as Power.
type Visible struct {
	Name  string   `json:"name"`
	Size  *float64 `json:"size"` // null: not even a change to twice or half the value
	Power float64  `json:"power"`
}

// StructureCheck says whether the earlier structure fits the new log.
type StructureCheck struct {
	Earlier string  `json:"earlier"`
	Best    string  `json:"best"` // that fits the new log best
	BIC     float64 `json:"bic"`  // of the earlier above the best
	Fits    bool    `json:"fits"` // no other fits clearly better, and no residual test speaks against it
}

// PredictionCheck compares what is left of the new log by one-step prediction, the
// noise shape fitted to each plant.
type PredictionCheck struct {
	Before float64 `json:"before_sd"` // deviation of the errors with the earlier plant, units of the output
	After  float64 `json:"after_sd"`  // with the new one
	Gain   float64 `json:"gain"`      // of the new plant over the earlier one, in -2 log likelihood
	Misfit float64 `json:"misfit"`    // what a long model gains over the new one beyond its parameters, in -2 log likelihood
	// Unlike is by what factor the spectra of the two inputs differ at one frequency
	// against another, noise held against noise.
	Unlike *float64 `json:"unlike"` // null: not known
}

// Compare says what moved between an earlier model and a later one, which has to
// come from Refit with the earlier one and the logs exps; opt.Seed is that of the draws
// where a log was short. It errs where the two
// cannot be compared.
//
// The statistic is that of the likelihood ratio on the new log, with the earlier
// estimate as a normal one,
//
//	min over θ of [-2 log L(θ) + (θ - θ1)' Σ1^-1 (θ - θ1)] - min over θ of [-2 log L(θ)],
//
// θ the free parameters of the plant, all of the noise refitted in either (Wilks,
// Ann. Math. Statist. 9 (1938) 60-62). Near the optimum it is the chi-square test of
// the difference by both covariances; on short logs it needs but one of them to be
// normal. Integrators were chosen: Σ1 is the conditional covariance of the other
// parameters.
//
// Where the structure is only approximate, the new estimate's covariance is that of
// a sandwich and the difference itself is tested by it. Then the best plant of the
// structure also depends on the spectrum under which it was found, so that the
// estimates differ though the rig is the same. How far is bounded. Let Δ be the
// error that the best plant under the spectrum W1 leaves in the prediction errors,
// which is orthogonal to the plant's derivatives under W1, and W2/W1 vary over
// frequency by no more than the factor κ. Under W2 the cosine between Δ and any of
// these derivatives is then at most c = (κ - 1)/(κ + 1) (Wielandt's inequality: Horn
// & Johnson, Matrix Analysis, 1985, theorem 7.4.34). Fitting anew under W2 takes the
// part c² of the misfit of the earlier plant, so it gains no more than
// c²/(1 - c²) = (κ - 1)²/(4κ) of the misfit that is left, which a long model of the
// new log shows. The statistic's non-centrality is allowed to be what a change of
// that gain can bring. κ comes from the spectra of the inputs over the level of the
// noise. The plant has thus to buy more in prediction than a change of probe or loop
// can make it buy.
func Compare(ctx context.Context, before, after *Model, exps []*data.Experiment, rig *data.Rig, opt Options) (*Comparison, error) {
	if err := comparable(before, after, rig); err != nil {
		return nil, err
	}
	c := &Comparison{Changes: []Change{}, Alone: []Alone{}, Visible: []Visible{}, Warnings: []string{}}
	c.warn(before, after)
	t, err := jointly(before, after)
	if err != nil {
		return nil, err
	}
	c.Statistic, c.Freedom, c.Allowance = t.statistic, t.freedom, t.allowance
	c.ProbabilityByChance, c.Moved = t.probability, t.probability < MovedLevel
	c.Prediction = t.prediction
	c.structure(after)
	c.changes(before, after, exps, rig, t, opt.Seed)
	if c.visible(before, t); c.Moved {
		c.Alone = t.alone(before, after)
	}
	c.say()
	return c, ctx.Err()
}

// comparable says why two models cannot be compared.
func comparable(before, after *Model, rig *data.Rig) error {
	switch {
	case len(after.Plant.Denominator) == 0:
		return errors.New("the new log gave no plant to compare")
	case before.form() != after.form():
		return fmt.Errorf("the earlier model has %s, the new one %s: refit the new log in the structure of the earlier one", before.form(), after.form())
	case after.fitted == nil:
		panic(notRefitted)
	}
	return sameUnits(before, rig)
}

const notRefitted = "ident: the later model does not come from Refit"

// warn says what keeps two logs from being like each other.
func (c *Comparison) warn(before, after *Model) {
	note := func(format string, args ...any) { c.Warnings = append(c.Warnings, fmt.Sprintf(format, args...)) }
	if before.Rig != after.Rig {
		note("the earlier model is that of %q, the rig file that of %q", before.Rig, after.Rig)
	}
	if !samePeriods(before, after) {
		note("the earlier log was sampled every %.6g s, the new one every %.6g s: the noise is not compared", before.Noise.SamplePeriod, after.Noise.SamplePeriod)
	}
	if before.Verdict == Refused {
		note("the earlier model was refused: what is compared with it rests on little")
	}
	for _, w := range before.Logs {
		for _, v := range after.Logs {
			if w.SHA256 == v.SHA256 && w.SHA256 != "" {
				note("%s is one of the logs that the earlier model was fitted to: it cannot show a change", v.File)
			}
		}
	}
	if p := after.Evidence.Residuals.Linearity; p < doubtful {
		note("the rig answers nonlinearly: another size of motion or operating point moves the best linear plant, too")
	}
}

func samePeriods(a, b *Model) bool {
	return math.Abs(a.Noise.SamplePeriod/b.Noise.SamplePeriod-1) <= samePeriod
}

// jointTest is the test of all parameters of the plant.
type jointTest struct {
	statistic, allowance, probability float64
	freedom                           int
	before, after                     fit.Prior     // what each model says of the parameters
	sum                               *mat.SymDense // inverse of the sum of their covariances
	at                                []string      // names of the parameters
	prediction                        PredictionCheck
}

var errNotTold = errors.New("the two models do not tell the plant's parameters apart: log a longer run")

func jointly(before, after *Model) (*jointTest, error) {
	t := new(jointTest)
	var ok1, ok2 bool
	t.before, t.at, ok1 = before.prior()
	t.after, _, ok2 = after.prior()
	if !ok1 || !ok2 || len(t.before.Mean) != len(t.after.Mean) || len(t.at) == 0 {
		return nil, errNotTold
	}
	t.freedom = len(t.at)
	cov1, cov2 := inverse(t.before.Info), inverse(t.after.Info)
	if cov1 == nil || cov2 == nil {
		return nil, errNotTold
	}
	cov1.AddSym(cov1, cov2)
	if t.sum = inverse(cov1); t.sum == nil {
		return nil, errNotTold
	}
	d := mat.NewVecDense(t.freedom, nil)
	for i := range t.at {
		d.SetVec(i, t.after.Mean[i]-t.before.Mean[i])
	}
	t.statistic = mat.Inner(d, t.sum, d)
	if err := t.predict(before, after); err != nil {
		return nil, err
	}
	t.probability = noncentral(t.statistic, t.freedom, t.allowance)
	return t, nil
}

// stiff is by how much information is raised to hold a plant where it is.
const stiff = 1e6

// predict sets what depends on the new log: the likelihood ratio, the prediction
// errors of either plant, and what the structure misses.
func (t *jointTest) predict(before, after *Model) error {
	p, f := after.fitted.p, after.fitted.f
	gain := func(g *fit.Prediction) float64 {
		return math.Max(0, float64(f.Rows)*math.Log(g.Objective()/f.Objective()))
	}
	start := before.prediction(f.Period)
	start.FreeDelay = f.FreeDelay
	fits := func(prior fit.Prior) (*fit.Prediction, error) {
		var best *fit.Prediction
		for _, s := range []*fit.Prediction{copyOf(f), start} {
			if g, err := p.FitNear(s, prior, finalTol, finalSteps); err == nil && (best == nil || g.Objective() < best.Objective()) {
				best = g
			}
		}
		if best == nil {
			return nil, errors.New("the earlier plant does not predict the new log at all")
		}
		return best, nil
	}
	if after.Evidence.IntervalsBy != BySandwich {
		near, err := fits(t.before)
		if err != nil {
			return err
		}
		t.statistic = gain(near)
	}
	held := fit.Prior{Mean: t.before.Mean, Info: mat.NewSymDense(t.freedom, nil)}
	held.Info.ScaleSym(stiff, t.before.Info)
	old, err := fits(held)
	if err != nil {
		return err
	}
	q := &t.prediction
	q.Before, q.After, q.Gain = noiseSD(p, old), noiseSD(p, f), gain(old)
	if k := unlike(before, after); !math.IsInf(k, 0) {
		q.Unlike = &k
	}
	if !before.Evidence.Residuals.misses() && !after.Evidence.Residuals.misses() {
		return nil
	}
	q.Misfit = after.fitted.misfit()
	part := 1.0
	if q.Unlike != nil {
		part = math.Min(1, (*q.Unlike-1)*(*q.Unlike-1)/(4**q.Unlike))
	}
	t.allowance = part * q.Misfit * t.perGain(p, f)
	return nil
}

// misfit is what a long model gains over the refit, in -2 log likelihood, beyond what
// its parameters gain by chance, on the rows that structures are compared on and as
// much on the others.
func (r *refitted) misfit() float64 {
	f := r.f
	if r.sp != r.p {
		var err error
		if f, err = r.sp.Fit(copyOf(f), compareTol, compareStep); err != nil {
			return 0
		}
	}
	long, _ := fit.ChooseARX(r.some, fit.ChooseOptions{Delay: 1, Criterion: fit.AICc})
	if long == nil {
		return 0
	}
	n := float64(f.Rows)
	gain := n*math.Log(f.Objective()/n/(long.RSS/float64(long.Rows))) - float64(2*long.Order-f.Free())
	return math.Max(0, gain*float64(r.f.Rows)/n)
}

// perGain is the most that a change of the plant which gains one unit of -2 log
// likelihood brings to the statistic: the largest eigenvalue of the statistic's
// matrix in the metric of the likelihood.
func (t *jointTest) perGain(p *fit.Predictor, f *fit.Prediction) float64 {
	g := copyOf(f)
	if p.Covariance(g) != nil {
		return 1
	}
	_, at := freeParameters(g)
	cov := mat.NewSymDense(len(at), nil)
	for i, a := range at {
		for j, b := range at[:i+1] {
			cov.SetSym(i, j, g.Cov.At(a, b))
		}
	}
	// Eigenvalues of cov·sum are those of L'·sum·L.
	root := rootOf(table(cov))
	var half, whole mat.Dense
	half.Mul(t.sum, root)
	whole.Mul(root.T(), &half)
	sym := mat.NewSymDense(len(at), nil)
	for i := range at {
		for j := range i + 1 {
			sym.SetSym(i, j, (whole.At(i, j)+whole.At(j, i))/2)
		}
	}
	var eig mat.EigenSym
	if !eig.Factorize(sym, false) {
		return 1
	}
	return slices.Max(eig.Values(nil))
}

func table(s *mat.SymDense) [][]float64 {
	out := make([][]float64, s.SymmetricDim())
	for i := range out {
		out[i] = mat.Row(nil, i, s)
	}
	return out
}

// prior is what the model says of the free parameters of the plant, listed by
// name, as of those of a plant with its integrators held: false where it does not
// tell them apart. Of a model with draws it is their mean and covariance.
func (m *Model) prior() (fit.Prior, []string, bool) {
	s := m.form()
	g := m.TF()
	mean := make([]float64, len(m.Plant.Parameters))
	for i, name := range m.Plant.Parameters {
		mean[i] = *parameter(&g, name)
	}
	cov := m.Plant.Covariance
	if same := m.sameForm(); len(same) >= drawn/4 {
		c := newCloud(same, m.Plant.Parameters)
		mean, cov = c.mean, c.cov
	}
	var live, free, held []int // those with a variance; by their place among these the free ones and those held
	for i, row := range cov {
		if !(row[i] > 0) {
			continue
		}
		if end := s.zeros + 1 + s.poles; i < end-s.integrators || i >= end {
			free = append(free, len(live))
		} else {
			held = append(held, len(live))
		}
		live = append(live, i)
	}
	all := mat.NewSymDense(len(live), nil)
	for i, a := range live {
		for j, b := range live[:i+1] {
			all.SetSym(i, j, cov[a][b])
		}
	}
	info := inverse(all)
	if info == nil || len(free) == 0 {
		return fit.Prior{}, nil, false
	}
	// With P the inverse covariance the free ones given that the held ones are zero
	// have P_ff^-1 as covariance and μ_f + P_ff^-1 P_fh μ_h as mean.
	p := fit.Prior{Mean: make([]float64, len(free)), Info: mat.NewSymDense(len(free), nil)}
	var names []string
	shift := mat.NewVecDense(len(free), nil)
	for i, a := range free {
		names = append(names, m.Plant.Parameters[live[a]])
		for j, b := range free[:i+1] {
			p.Info.SetSym(i, j, info.At(a, b))
		}
		for _, h := range held {
			shift.SetVec(i, shift.AtVec(i)+info.At(a, h)*mean[live[h]])
		}
	}
	conditional := inverse(p.Info)
	if conditional == nil {
		return fit.Prior{}, nil, false
	}
	var by mat.VecDense
	by.MulVec(conditional, shift)
	for i, a := range free {
		p.Mean[i] = mean[live[a]] + by.AtVec(i)
	}
	return p, names, true
}

// sameForm lists the stored draws that have the model's zeros and, where that is
// held, its delay.
func (m *Model) sameForm() []lti.TF {
	var same []lti.TF
	delay := slices.Contains(m.Plant.Parameters, "delay")
	for _, d := range m.Plant.Draws {
		if len(d.Numerator) == len(m.Plant.Numerator) && (delay || d.Delay == m.Plant.Delay) {
			same = append(same, d.tf())
		}
	}
	return same
}

// noncentral is the probability that a chi-square of k degrees of freedom and
// non-centrality l exceeds x: that of k + 2j degrees with j Poisson of mean l/2
// (Fisher, The general sampling distribution of the multiple correlation
// coefficient, Proc. Roy. Soc. A 121 (1928) 654-673; Johnson, Kotz & Balakrishnan,
// Continuous Univariate Distributions 2, 1995, eq. 29.2).
func noncentral(x float64, k int, l float64) float64 {
	if !(l > 0) {
		return distuv.ChiSquared{K: float64(k)}.Survival(x)
	}
	j := distuv.Poisson{Lambda: l / 2}
	reach := 12*math.Sqrt(l/2) + 30
	var p float64
	for i := math.Max(0, math.Floor(l/2-reach)); i <= l/2+reach; i++ {
		p += j.Prob(i) * distuv.ChiSquared{K: float64(k) + 2*i}.Survival(x)
	}
	return math.Min(1, p)
}

// structure says how the earlier structure stands on the new log.
func (c *Comparison) structure(after *Model) {
	s := &c.Structure
	s.Earlier = after.form().String()
	s.Best = s.Earlier
	if o := after.fitted.other; o != nil {
		s.Best, s.BIC = o.String(), after.fitted.behind
	}
	r := after.Evidence.Residuals
	s.Fits = s.BIC <= clearly && !r.misses()
	switch {
	case s.BIC > clearly:
		c.Warnings = append(c.Warnings, fmt.Sprintf("the new log asks for %s instead of %s (BIC %.0f better): the rig has changed its structure, or the new log shows what the earlier did not; fit it by itself", s.Best, s.Earlier, s.BIC))
	case r.misses():
		c.Warnings = append(c.Warnings, fmt.Sprintf("%s is not all that the new log shows: a change is called only beyond what another probe or loop alone could make of that", s.Earlier))
	}
}

// changes lists the numbers and tests each.
func (c *Comparison) changes(before, after *Model, exps []*data.Experiment, rig *data.Rig, t *jointTest, seed uint64) {
	c.Changes = append(c.Changes, t.numbers(before, after, rig, seed)...)
	c.Changes = append(c.Changes, noiseLevel(before, after, rig)...)
	c.Changes = append(c.Changes, offset(before, after, rig)...)
	c.Changes = append(c.Changes, actuator(exps, rig)...)
	// Holm: the i-th least probability counts as often as there are i fewer left.
	order := make([]int, len(c.Changes))
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int {
		return cmp.Compare(c.Changes[a].ProbabilityByChance, c.Changes[b].ProbabilityByChance)
	})
	least := 0.0
	for i, k := range order {
		x := &c.Changes[k]
		least = math.Min(1, math.Max(least, float64(len(order)-i)*x.ProbabilityByChance))
		x.ProbabilityByChance = least
		x.Clear = least < MovedLevel && (c.Moved || !x.plant)
		x.say()
	}
}

// say puts a change into words.
func (x *Change) say() {
	name := cmp.Or(x.short, x.Name)
	signed := func(v float64) string { return fmt.Sprintf("%+.3g", v) }
	with := func(text string) string { return strings.TrimSpace(text + " " + x.Unit) }
	if !x.Ratio {
		span := signed(x.Interval95.Lo) + " to " + signed(x.Interval95.Hi)
		if x.Clear {
			x.Words = fmt.Sprintf("%s (%s)", with(fmt.Sprintf("%s %.4g -> %.4g", name, x.Before, x.After)), span)
		} else {
			x.Words = fmt.Sprintf("%s: no clear change (%s)", with(fmt.Sprintf("%s %.4g", name, x.Before)), span)
		}
		return
	}
	percent := func(r float64) float64 { return 100 * (r - 1) }
	r, lo, hi := percent(x.After/x.Before), percent(x.Interval95.Lo), percent(x.Interval95.Hi)
	switch {
	case !x.Clear:
		x.Words = fmt.Sprintf("%s: no clear change (%s to %s %%)", name, signed(lo), signed(hi))
	case r >= 0:
		x.Words = fmt.Sprintf("%s up %.2g %% (%.2g to %.2g)", name, r, lo, hi)
	default:
		x.Words = fmt.Sprintf("%s down %.2g %% (%.2g to %.2g)", name, -r, -hi, -lo)
	}
}

// say puts the comparison into words.
func (c *Comparison) say() {
	var clear, others []string
	for _, x := range c.Changes {
		switch {
		case x.Clear && x.plant:
			clear = append(clear, x.Words)
		case x.Clear:
			others = append(others, x.Words)
		}
	}
	by := fmt.Sprintf("probability by chance %.2g", c.ProbabilityByChance)
	if c.ProbabilityByChance < 1e-6 {
		by = "probability by chance below 1e-6"
	}
	switch {
	case c.Moved && len(clear) > 0:
		c.Words = fmt.Sprintf("the plant moved (%s): %s", by, strings.Join(clear, "; "))
	case c.Moved:
		c.Words = fmt.Sprintf("the plant moved (%s), but no single number stands out", by)
	default:
		c.Words = fmt.Sprintf("no change of the plant beyond chance (%s)", by)
		var seen []string
		for _, v := range c.Visible {
			if v.Size != nil {
				seen = append(seen, fmt.Sprintf("a change of the %s by %.2g %%", v.Name, 100**v.Size))
			} else {
				c.Words += fmt.Sprintf("; not even twice or half the %s would have been seen", v.Name)
			}
		}
		if len(seen) > 0 {
			c.Words += fmt.Sprintf("; %s would have been seen in %.0f of 100 pairs of such logs", strings.Join(seen, " or "), 100*c.Visible[0].Power)
		}
	}
	for i, a := range c.Alone[:min(2, len(c.Alone))] {
		percent := func(r float64) string { return fmt.Sprintf("%+.2g", 100*(r-1)) }
		text := fmt.Sprintf("of the %s alone by %s %% (%s to %s)", a.Name, percent(a.Ratio), percent(a.Interval95.Lo), percent(a.Interval95.Hi))
		if i == 0 {
			c.Words += "; a change " + text
		} else {
			c.Words += ", or " + text
		}
	}
	if len(c.Alone) > 0 {
		c.Words += " would explain it"
	}
	if len(others) > 0 {
		c.Words += "; beside it " + strings.Join(others, "; ")
	}
}
