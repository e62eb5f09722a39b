package ident

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Pool returns the model that the logs of an earlier model and of a later one, which
// comes from Refit with it, give together. With both estimates normal about one
// plant that is their mean weighted by the inverses P of their covariances,
// (P1 + P2)^-1 (P1 θ1 + P2 θ2), of covariance (P1 + P2)^-1 (Rao, Linear Statistical
// Inference and its Applications, 1973, sec. 4a.9). Integrators stay held; the
// covariance is that of the free structure, as everywhere. Of two short logs the
// pooled draws are those of the later one drawn again by what the earlier says of
// each (Rubin, Using the SIR algorithm to simulate posterior distributions, in
// Bayesian Statistics 3 (1988) 395-402).
//
// Noise, operating point and evidence are those of the later log. Pool errs where the
// plant moved between the two, by the joint test of Compare at MovedLevel.
func Pool(before, after *Model) (*Model, error) {
	if before.form() != after.form() {
		return nil, fmt.Errorf("models of two structures are not pooled: %s and %s", before.form(), after.form())
	}
	if after.fitted == nil {
		panic(notRefitted)
	}
	t, err := jointly(before, after)
	if err != nil {
		return nil, err
	}
	if t.probability < MovedLevel {
		return nil, fmt.Errorf("the plant moved between the logs (probability by chance %.2g): they are not pooled, use the new model", t.probability)
	}
	m := pooledHead(before, after)
	if err := m.weigh(before, after, t); err != nil {
		return nil, err
	}
	m.derive()
	m.hold(before, after)
	if short := len(before.sameForm()) > 0 && len(after.sameForm()) > 0; short {
		m.redraw(before, after)
	}
	m.FrequencyResponse = m.Responses(bandDraws, 0)
	return m, m.finite()
}

// pooledHead is all of the pooled model but its plant.
func pooledHead(before, after *Model) *Model {
	m := *after
	m.fitted, m.Exact = nil, nil
	m.Logs = slices.Concat(before.Logs, after.Logs)
	m.Evidence.Memories += before.Evidence.Memories
	m.Evidence.IntervalsBy = ByCurvature
	for _, o := range []*Model{before, after} {
		if o.Evidence.IntervalsBy == BySandwich {
			m.Evidence.IntervalsBy = BySandwich
		}
		if o.Verdict != Sound {
			m.Verdict = Weak
		}
	}
	m.Warnings = slices.Clone(after.Warnings)
	for _, w := range before.Warnings {
		if !slices.Contains(m.Warnings, w) {
			m.Warnings = append(m.Warnings, "of the earlier log: "+w)
		}
	}
	return &m
}

// weigh sets the pooled plant and its covariance.
func (m *Model) weigh(before, after *Model, t *jointTest) error {
	info := mat.NewSymDense(t.freedom, nil)
	info.AddSym(t.before.Info, t.after.Info)
	var x, y, mean mat.VecDense
	x.MulVec(t.before.Info, mat.NewVecDense(t.freedom, t.before.Mean))
	y.MulVec(t.after.Info, mat.NewVecDense(t.freedom, t.after.Mean))
	x.AddVec(&x, &y)
	inv := inverse(info)
	if inv == nil {
		return errNotTold
	}
	mean.MulVec(inv, &x)
	g := after.TF()
	for i, name := range t.at {
		*parameter(&g, name) = mean.AtVec(i)
	}
	m.Plant = Plant{Numerator: reversed(g.Num), Denominator: reversed(g.Den), Delay: math.Max(0, g.Delay), Parameters: after.Plant.Parameters}
	cov := pooledCovariance(before.Plant.Covariance, after.Plant.Covariance)
	if cov == nil {
		return errNotTold
	}
	m.Plant.Covariance = cov
	if i := slices.Index(m.Plant.Parameters, "delay"); i >= 0 {
		half := z95 * math.Sqrt(cov[i][i])
		m.Plant.Delay95 = &Interval{m.Plant.Delay - half, m.Plant.Delay + half}
	}
	return nil
}

// pooledCovariance is (A^-1 + B^-1)^-1 over what has a variance in both, nil where
// that is singular.
func pooledCovariance(a, b [][]float64) [][]float64 {
	var live []int
	out := make([][]float64, len(a))
	for i := range a {
		out[i] = make([]float64, len(a))
		if a[i][i] > 0 && b[i][i] > 0 {
			live = append(live, i)
		}
	}
	part := func(c [][]float64) *mat.SymDense {
		s := mat.NewSymDense(len(live), nil)
		for i, k := range live {
			for j, l := range live[:i+1] {
				s.SetSym(i, j, c[k][l])
			}
		}
		return inverse(s)
	}
	pa, pb := part(a), part(b)
	if pa == nil || pb == nil {
		return nil
	}
	pa.AddSym(pa, pb)
	inv := inverse(pa)
	if inv == nil {
		return nil
	}
	for i, k := range live {
		for j, l := range live {
			out[k][l] = inv.At(i, j)
		}
	}
	return out
}

// hold gives integrators the probability of being unstable that the log which
// doubts it more allows; that of the free pole says nothing of the structure.
func (m *Model) hold(before, after *Model) {
	for i, p := range m.Poles {
		if p.Re != 0 || p.Im != 0 {
			continue
		}
		m.Poles[i].ProbabilityUnstable = math.Min(p.ProbabilityUnstable, math.Min(held(before, i), held(after, i)))
	}
}

// held is the probability that the integrator at place i of the poles is unstable.
func held(m *Model, i int) float64 {
	if i < len(m.Poles) && m.Poles[i].Re == 0 && m.Poles[i].Im == 0 {
		return m.Poles[i].ProbabilityUnstable
	}
	return 1
}

// redraws is how many plants of the later log the pooled draws are taken from.
const redraws = 20000

// redraw sets the draws of two short logs together.
func (m *Model) redraw(before, after *Model) {
	c := newCloud(before.sameForm(), before.Plant.Parameters)
	info := c.information()
	if info == nil {
		return
	}
	var plants []lti.TF
	var weights []float64
	var total float64
	for _, g := range after.Draw(redraws, 1) {
		if len(g.Num) != len(m.Plant.Numerator) {
			continue
		}
		w := c.density(info, g)
		plants, weights, total = append(plants, g), append(weights, w), total+w
	}
	if !(total > 0) {
		return
	}
	// Systematic resampling: one offset, equal steps.
	var kept []lti.TF
	step := total / drawn
	due := step * rand.New(rand.NewPCG(1, redraws)).Float64()
	var sum float64
	for i, g := range plants {
		for sum += weights[i]; due < sum; due += step {
			kept = append(kept, g)
		}
	}
	for _, g := range kept {
		m.Plant.Draws = append(m.Plant.Draws, DrawnPlant{reversed(g.Num), reversed(g.Den), g.Delay})
	}
	m.Evidence.IntervalsBy = ByDraws
	m.takeIntervals(kept)
}

// information is the inverse of the cloud's covariance, nil where that is singular.
func (c *cloud) information() *mat.SymDense {
	cov := mat.NewSymDense(len(c.names), nil)
	for i, row := range c.cov {
		for j := range row[:i+1] {
			cov.SetSym(i, j, row[j])
		}
	}
	return inverse(cov)
}

// density is that of a normal distribution like the cloud at g, but for a factor.
func (c *cloud) density(info *mat.SymDense, g lti.TF) float64 {
	d := mat.NewVecDense(len(c.names), nil)
	for i, name := range c.names {
		d.SetVec(i, *parameter(&g, name)-c.mean[i])
	}
	return math.Exp(-mat.Inner(d, info, d) / 2)
}
