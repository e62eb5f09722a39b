package ident

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit"
)

// Agreement says whether several logs show one plant.
//
// Each log is fitted alone in the structure found on all of them. Estimates θ_i
// of one plant with covariances P_i scatter about their mean weighted by P_i^-1
// such that Σ (θ_i - mean)' P_i^-1 (θ_i - mean) is chi-square with p (L - 1)
// degrees of freedom for L logs and p parameters (Cochran, Problems arising in
// the analysis of a series of similar experiments, J. Roy. Statist. Soc. Suppl. 4
// (1937) 102-118; for vectors Rao, Linear Statistical Inference and its
// Applications, 1973, sec. 6a.2).
type Agreement struct {
	// Probability of logs of one plant scattering as much.
	Probability float64 `json:"probability"`
	Agree       bool    `json:"agree"`
	// Odd is the file of the log that differs from the others taken together;
	// empty where the logs agree, where no one stands out, and of two logs.
	Odd  string   `json:"odd_one_out"`
	Logs []LogFit `json:"logs"`
	// Changes lists poles, zeros, gains and delay in the odd log, or in the second
	// of two, against the others taken together, the clearest difference first;
	// empty where there is no such log.
	Changes []LogChange `json:"changes"`
}

// LogFit is what one log alone says.
type LogFit struct {
	File    string  `json:"file"`
	NoiseSD float64 `json:"noise_sd"` // of its one-step prediction errors in the joint fit, units of the output
	// Probability of as large a difference from the others taken together by
	// chance; null where the log alone does not determine the plant.
	Probability *float64 `json:"probability"`
}

// LogChange is one number of the plant in a log and in the others.
type LogChange struct {
	Name        string   `json:"name"`
	Unit        string   `json:"unit"`
	Here        Estimate `json:"here"`
	Others      Estimate `json:"others"`
	Probability float64  `json:"probability"` // of as large a difference by chance
}

// disagree is the probability by chance below which logs do not show one plant,
// standsOut by how much the likelihood ratio that one log is odd must exceed
// that of any other for it to be named: odds of 20 to 1.
const (
	disagree  = 0.01
	standsOut = 6
)

// aloneDraws is the number of draws from the likelihood of a short log alone.
const aloneDraws = 400

// resumes reports whether segment k of a log goes on where the one before left
// off. A gap longer than all that the log holds may hide a restart elsewhere,
// and so may a clock that jumped back. What drifts over shorter gaps drifts as
// much within segments, and a constant covers it as it does in a log without
// gaps.
func resumes(e *data.Experiment, k int) bool {
	last, s := e.Segments[k-1], e.Segments[k]
	gap := s.Start - last.Start - float64(len(last.Y))*e.Period
	return gap > -0.5*e.Period && gap <= float64(e.Used)*e.Period
}

// noiseSD is the deviation of the prediction errors over all rows.
func noiseSD(p *fit.Predictor, f *fit.Prediction) float64 {
	if len(f.Levels) < 2 {
		return math.Sqrt(f.Variance)
	}
	var v float64
	for i, n := range p.Logs() {
		v += float64(n) / float64(p.Rows()) * f.Levels[i]
	}
	return math.Sqrt(v)
}

// level divides records by the deviation of their log's errors against the mean
// one: errors of one log with another's then count alike.
func level(recs []fit.Record, f *fit.Prediction) {
	if len(f.Levels) < 2 {
		return
	}
	for _, r := range recs {
		g := math.Sqrt(f.Variance / f.Levels[r.Log])
		floats.Scale(g, r.U)
		floats.Scale(g, r.Y)
	}
}

// alone is the estimate of a plant from some of the logs.
type alone struct {
	theta *mat.VecDense
	info  *mat.SymDense // inverse covariance
}

// compare fits each log alone from the joint estimate f and tests whether they
// show one plant. It does nothing for a single log.
func (m *Model) compare(ctx context.Context, exps []*data.Experiment, rig *data.Rig, p *fit.Predictor, f *fit.Prediction, opt Options) error {
	if len(exps) < 2 {
		return nil
	}
	logs := make([]*alone, len(exps))
	err := Each(ctx, len(exps), opt.Workers, func(i int) error {
		var err error
		logs[i], err = fitAlone(exps[i:i+1], p, f, opt)
		return err
	})
	if err != nil {
		return err
	}
	a := &Agreement{Probability: 1, Agree: true, Changes: []LogChange{}}
	m.Evidence.Agreement = a
	for i, e := range exps {
		l := LogFit{File: e.File}
		if i < len(f.Levels) {
			l.NoiseSD = math.Sqrt(f.Levels[i])
		}
		a.Logs = append(a.Logs, l)
	}
	sum := pooled(logs, -1)
	if sum == nil {
		return nil
	}
	n := float64(sum.theta.Len())
	var scatter, first, second float64
	odd, last, tested := -1, -1, 0
	for i, l := range logs {
		rest := pooled(logs, i)
		if l == nil || rest == nil {
			continue
		}
		// With W = P^-1 and R that of the rest, (W^-1 + R^-1)^-1 = W - W (W + R)^-1 W.
		var diff, wd, x mat.VecDense
		diff.SubVec(l.theta, rest.theta)
		wd.MulVec(l.info, &diff)
		if x.SolveVec(sum.info, &wd); x.IsEmpty() {
			continue
		}
		q := mat.Dot(&diff, &wd) - mat.Dot(&wd, &x)
		prob := distuv.ChiSquared{K: n}.Survival(q)
		a.Logs[i].Probability = &prob
		tested, last = tested+1, i
		if odd < 0 || q > first {
			odd, first, second = i, q, first
		} else {
			second = math.Max(second, q)
		}
		diff.SubVec(l.theta, sum.theta)
		scatter += mat.Inner(&diff, l.info, &diff)
	}
	if tested < 2 {
		return nil
	}
	a.Probability = distuv.ChiSquared{K: n * float64(tested-1)}.Survival(scatter)
	// The least of the logs' probabilities counts as often as there are logs (Holm,
	// A simple sequentially rejective multiple test procedure, Scand. J. Statist. 6
	// (1979) 65-70, first step); of two logs both are that of all.
	least := *a.Logs[odd].Probability * float64(tested)
	a.Agree = a.Probability >= disagree && (tested == 2 || least >= disagree)
	switch {
	case a.Agree:
		return nil
	case tested == 2:
		odd = last
	case least >= disagree || first-second < standsOut:
		return nil
	default:
		a.Odd = a.Logs[odd].File
	}
	a.Changes = m.changes(rig, f, logs[odd], pooled(logs, odd))
	return nil
}

// against says in a sentence what speaks against one plant in all logs; empty
// where nothing does.
func (a *Agreement) against() string {
	if a == nil || a.Agree {
		return ""
	}
	by := "(probability below 1e-6)"
	if a.Probability >= 1e-6 {
		by = fmt.Sprintf("(probability %.2g)", a.Probability)
	}
	if len(a.Changes) == 0 {
		return "the logs do not show one plant " + by + ", and none of them stands out: fit each by itself"
	}
	tested := slices.DeleteFunc(slices.Clone(a.Logs), func(l LogFit) bool { return l.Probability == nil })
	here, others, do := a.Odd, "the others", a.Odd
	text := fmt.Sprintf("%s shows another plant than the other logs %s", here, by)
	if a.Odd == "" {
		here, others, do = tested[1].File, tested[0].File, "each"
		text = fmt.Sprintf("%s and %s do not show one plant %s", others, here, by)
	}
	c := a.Changes[0]
	tell := func(e Estimate) string {
		return fmt.Sprintf("%.4g %s (%.4g to %.4g)", e.Value, c.Unit, e.Interval95.Lo, e.Interval95.Hi)
	}
	return fmt.Sprintf("%s: the %s is %s in %s, %s in %s; fit %s by itself", text, c.Name, tell(c.Here), here, tell(c.Others), others, do)
}

// fitAlone fits the structure of f to one log; nil where the log does not
// determine it. Parameters are in units of f's deviations.
func fitAlone(one []*data.Experiment, p *fit.Predictor, f *fit.Prediction, opt Options) (*alone, error) {
	recs, _, err := records(one)
	if err != nil {
		return nil, err
	}
	own, err := p.On(recs)
	if err != nil {
		return nil, nil
	}
	est, err := own.Fit(copyOf(f), compareTol, compareStep)
	if err != nil || own.Covariance(est) != nil {
		return nil, nil
	}
	theta, at := freeParameters(est)
	cov := mat.NewSymDense(len(at), nil)
	for i, a := range at {
		for j, b := range at[:i+1] {
			cov.SetSym(i, j, est.Cov.At(a, b))
		}
	}
	// On a short log the likelihood is not normal about its peak; mean and
	// covariance of draws from it are taken instead.
	if own.Rows() <= drawRows {
		if draws, err := own.Sample(est, aloneDraws, rand.New(rand.NewPCG(opt.Seed, 0))); err == nil {
			table := mat.NewDense(len(draws), len(at), nil)
			for k, d := range draws {
				values, _ := freeParameters(d)
				table.SetRow(k, values)
			}
			stat.CovarianceMatrix(cov, table, nil)
			for i := range theta {
				theta[i] = stat.Mean(mat.Col(nil, i, table), nil)
			}
		}
	}
	for i, a := range at {
		theta[i] /= math.Sqrt(f.Cov.At(a, a))
		for j, b := range at[:i+1] {
			cov.SetSym(i, j, cov.At(i, j)/math.Sqrt(f.Cov.At(a, a)*f.Cov.At(b, b)))
		}
	}
	info := inverse(cov)
	if info == nil {
		return nil, nil
	}
	return &alone{mat.NewVecDense(len(theta), theta), info}, nil
}

// freeParameters lists the plant's estimated parameters and their rows in Cov.
func freeParameters(f *fit.Prediction) (values []float64, at []int) {
	n := f.Poles
	add := func(v float64) { values, at = append(values, v), append(at, len(at)) }
	for _, b := range f.Num {
		add(b)
	}
	for i := 1; i <= n-f.Integrators; i++ {
		add(f.Den[n-i])
	}
	if f.FreeDelay {
		values, at = append(values, f.Delay), append(at, len(f.Num)+n)
	}
	return values, at
}

// pooled is the mean of all logs but one, weighted by their information; nil
// where none is left.
func pooled(logs []*alone, without int) *alone {
	var sum *alone
	for i, l := range logs {
		if l == nil || i == without {
			continue
		}
		n := l.theta.Len()
		if sum == nil {
			sum = &alone{mat.NewVecDense(n, nil), mat.NewSymDense(n, nil)}
		}
		var part mat.VecDense
		part.MulVec(l.info, l.theta)
		sum.theta.AddVec(sum.theta, &part)
		sum.info.AddSym(sum.info, l.info)
	}
	if sum == nil {
		return nil
	}
	var mean mat.VecDense
	if err := mean.SolveVec(sum.info, sum.theta); err != nil && mean.IsEmpty() {
		return nil
	}
	return &alone{&mean, sum.info}
}

// model is the plant of such an estimate, with its poles, zeros and gains.
func (a *alone) model(f *fit.Prediction) *Model {
	g := copyOf(f)
	_, at := freeParameters(f)
	g.Cov = mat.NewSymDense(f.Cov.SymmetricDim(), nil)
	inv := inverse(a.info)
	if inv == nil {
		return nil
	}
	for i, k := range at {
		sd := math.Sqrt(f.Cov.At(k, k))
		v := a.theta.AtVec(i) * sd
		switch z := len(g.Num); {
		case k < z:
			g.Num[k] = v
		case k < z+g.Poles:
			g.Den[g.Poles-1-(k-z)] = v
		default:
			g.Delay = v
		}
		for j, l := range at[:i+1] {
			g.Cov.SetSym(k, l, inv.At(i, j)*sd*math.Sqrt(f.Cov.At(l, l)))
		}
	}
	m := new(Model)
	m.plant(g)
	m.derive()
	return m
}

// changes lists the numbers of a plant in one log and in the others.
func (m *Model) changes(rig *data.Rig, f *fit.Prediction, one, rest *alone) []LogChange {
	here, others := one.model(f), rest.model(f)
	list := []LogChange{}
	if here == nil || others == nil {
		return list
	}
	add := func(name, unit string, a, b *Estimate) {
		if a == nil || b == nil || !(math.Hypot(a.SD, b.SD) > 0) {
			return
		}
		z := math.Abs(a.Value-b.Value) / math.Hypot(a.SD, b.SD)
		list = append(list, LogChange{name, unit, *a, *b, 2 * distuv.UnitNormal.Survival(z)})
	}
	roots := func(kind string, joint, a, b []Root) {
		for i, r := range joint {
			switch {
			case r.Im < 0 || i >= len(a) || i >= len(b):
			case r.Im == 0:
				add(fmt.Sprintf("%s near %.3g", kind, r.Re), "rad/s", &Estimate{a[i].Re, a[i].ReSD, a[i].Re95}, &Estimate{b[i].Re, b[i].ReSD, b[i].Re95})
			default:
				pair := fmt.Sprintf("%s pair near %.3g ± %.3gi, ", kind, r.Re, r.Im)
				add(pair+"real part", "rad/s", &Estimate{a[i].Re, a[i].ReSD, a[i].Re95}, &Estimate{b[i].Re, b[i].ReSD, b[i].Re95})
				add(pair+"imaginary part", "rad/s", &Estimate{a[i].Im, a[i].ImSD, a[i].Im95}, &Estimate{b[i].Im, b[i].ImSD, b[i].Im95})
			}
		}
	}
	roots("pole", m.Poles, here.Poles, others.Poles)
	roots("zero", m.Zeros, here.Zeros, others.Zeros)
	ratio := cmp.Or(rig.Units.Output, "output") + "/" + cmp.Or(rig.Units.Input, "input")
	add("steady gain", ratio, here.Gain.DC, others.Gain.DC)
	add("leading gain", fmt.Sprintf("%s s^-%d", ratio, f.Poles-f.Zeros), here.Gain.HighFrequency, others.Gain.HighFrequency)
	if f.FreeDelay {
		delay := func(m *Model) *Estimate {
			last := len(m.Plant.Covariance) - 1
			return estimate(m.Plant.Delay, math.Sqrt(m.Plant.Covariance[last][last]))
		}
		add("delay", "s", delay(here), delay(others))
	}
	slices.SortStableFunc(list, func(a, b LogChange) int {
		z := func(c LogChange) float64 {
			return math.Abs(c.Here.Value-c.Others.Value) / math.Hypot(c.Here.SD, c.Others.SD)
		}
		return cmp.Compare(z(b), z(a))
	})
	return list
}
