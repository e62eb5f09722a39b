package ident

import (
	"context"
	"errors"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/fit"
	"steadyrig/fit/lti"
)

// On a short log the likelihood is not normal about its peak: noise zeros crowd
// the unit circle, and which structure is right is itself open. Up to drawRows
// rows the plants that the log allows are drawn from the likelihood, over every
// structure of as many poles that is not left behind, each by its weight
// exp(-ΔBIC/2) (Kass & Raftery, Bayes factors, J. Amer. Statist. Assoc. 90 (1995)
// 773-795), and the intervals are those of the draws.
const (
	drawRows    = 4000
	drawn       = 1000
	leastWeight = 0.03 // of a structure, over the winner's
)

// sample draws plants for a short log and takes the intervals from them. A log
// whose likelihood gives none, or one that cannot be right, keeps its normal
// intervals.
func (m *Model) sample(ctx context.Context, p *fit.Predictor, f *fit.Prediction, ranked []*candidate, opt Options) error {
	if p.Rows() > drawRows || m.Evidence.IntervalsBy == BySandwich {
		return nil
	}
	type source struct {
		start  *fit.Prediction
		weight float64
	}
	var list []source
	var total float64
	at := make(map[structure]int)
	for i, c := range ranked {
		w := math.Exp((ranked[0].bic - c.bic) / 2)
		if c.poles != ranked[0].poles || i > 0 && w < leastWeight {
			continue
		}
		// An integrator was chosen, not measured: its pole is drawn free.
		free := c.structure
		free.integrators = 0
		total += w
		if k, ok := at[free]; ok {
			list[k].weight += w
			continue
		}
		at[free] = len(list)
		start := copyOf(c.fit)
		if i == 0 {
			start = copyOf(f)
		}
		start.Integrators = 0
		list = append(list, source{start, w})
	}
	got := make([][]*fit.Prediction, len(list))
	err := Each(ctx, len(list), opt.Workers, func(i int) error {
		n := int(math.Round(drawn * list[i].weight / total))
		best, err := p.Fit(list[i].start, finalTol, finalSteps)
		if errors.Is(err, fit.ErrNoFit) {
			return nil
		} else if err != nil {
			return err
		}
		if list, err := p.Sample(best, n, rand.New(rand.NewPCG(opt.Seed, uint64(i)))); err == nil {
			got[i] = list
		}
		return nil
	})
	if err != nil {
		return err
	}
	var plants []lti.TF
	for _, list := range got {
		for _, d := range list {
			plants = append(plants, d.TF())
		}
	}
	if len(plants) < drawn/2 {
		return nil
	}
	m.Plant.Draws = make([]DrawnPlant, len(plants))
	for i, g := range plants {
		m.Plant.Draws[i] = DrawnPlant{reversed(g.Num), reversed(g.Den), g.Delay}
	}
	m.Evidence.IntervalsBy = ByDraws
	m.takeIntervals(plants)
	return nil
}

// takeIntervals takes the bounds of poles, zeros, gains and delay, and the
// covariance, from drawn plants.
func (m *Model) takeIntervals(plants []lti.TF) {
	// Zeros, delay and covariance are those of plants of the chosen form.
	var same []lti.TF
	delay := slices.Contains(m.Plant.Parameters, "delay")
	for _, g := range plants {
		if len(g.Num) == len(m.Plant.Numerator) && (delay || g.Delay == m.Plant.Delay) {
			same = append(same, g)
		}
	}
	takeRoots(m.Poles, plants, func(g lti.TF) []complex128 { return g.Den.Roots() })
	if m.Gain.DC != nil {
		m.Gain.DC.take(plants, func(g lti.TF) float64 { return g.Num[0] / g.Den[0] })
	}
	if len(same) < drawn/4 {
		return
	}
	takeRoots(m.Zeros, same, func(g lti.TF) []complex128 { return g.Num.Roots() })
	m.Gain.HighFrequency.take(same, func(g lti.TF) float64 { return g.Num[len(g.Num)-1] })
	if delay {
		d := Estimate{Value: m.Plant.Delay, Interval95: *m.Plant.Delay95}
		d.take(same, func(g lti.TF) float64 { return g.Delay })
		m.Plant.Delay95 = &d.Interval95
	}
	m.Plant.Covariance = newCloud(same, m.Plant.Parameters).cov
}

// take sets deviation and interval of e by what drawn plants have.
func (e *Estimate) take(plants []lti.TF, of func(lti.TF) float64) {
	x := make([]float64, len(plants))
	for i, g := range plants {
		x[i] = of(g)
	}
	slices.Sort(x)
	e.SD, e.Interval95 = halfWidth(x), central(x, Confidence, e.Interval95)
}

// takeRoots sets the bounds of listed roots by those of drawn plants.
func takeRoots(list []Root, plants []lti.TF, of func(lti.TF) []complex128) {
	re, im := make([][]float64, len(list)), make([][]float64, len(list))
	for _, g := range plants {
		for i, v := range alike(of(g), list) {
			re[i], im[i] = append(re[i], real(v)), append(im[i], imag(v))
		}
	}
	all := math.Pow(Confidence, 1/float64(max(1, len(list)))) // Šidák, as in roots
	for i := range list {
		r := &list[i]
		slices.Sort(re[i])
		slices.Sort(im[i])
		r.ReSD, r.ImSD = halfWidth(re[i]), halfWidth(im[i])
		normal, held := *r, r.Re == 0 && r.Im == 0
		if held { // what an integrator has is the ellipse of the free pair
			normal = Root{}
		}
		r.Re95, r.Im95 = central(re[i], Confidence, normal.Re95), central(im[i], Confidence, normal.Im95)
		r.Re95All, r.Im95All = central(re[i], all, normal.Re95All), central(im[i], all, normal.Im95All)
		if held {
			continue // an integrator's probability weighs its structure, too
		}
		below, _ := slices.BinarySearch(re[i], 0)
		r.ProbabilityUnstable = float64(len(re[i])-below) / float64(len(re[i]))
	}
}

// alike pairs the roots of a drawn plant with listed ones, nearest first.
func alike(r []complex128, list []Root) []complex128 {
	out := make([]complex128, len(list))
	taken := make([]bool, len(list))
	for len(r) > 0 {
		bi, bj, best := 0, 0, math.Inf(1)
		for i, p := range list {
			for j, v := range r {
				if d := cmplx.Abs(v - complex(p.Re, p.Im)); !taken[i] && d < best {
					bi, bj, best = i, j, d
				}
			}
		}
		out[bi], taken[bi] = r[bj], true
		r = slices.Delete(r, bj, bj+1)
	}
	return out
}

// central is the middle share of sorted numbers, widened to hold the normal
// interval where that has two ends: each of the two alone is too narrow on some
// logs whose disturbance seems weaker than it is.
func central(x []float64, share float64, normal Interval) Interval {
	tail := (1 - share) / 2
	lo, hi := quantile(x, tail), quantile(x, 1-tail)
	if math.IsInf(normal.Lo, 0) || math.IsInf(normal.Hi, 0) {
		return Interval{lo, hi}
	}
	return Interval{math.Min(lo, normal.Lo), math.Max(hi, normal.Hi)}
}

// halfWidth is half of the middle two thirds of sorted numbers: the deviation
// where they are normal, and not moved by a few that lie far out.
func halfWidth(x []float64) float64 {
	tail := distuv.UnitNormal.CDF(-1)
	return (quantile(x, 1-tail) - quantile(x, tail)) / 2
}

func quantile(x []float64, p float64) float64 {
	t := p * float64(len(x)-1)
	k := min(int(t), len(x)-2)
	return x[k] + (t-float64(k))*(x[k+1]-x[k])
}

// cloud is the middle and the spread of plants of one form.
type cloud struct {
	names []string
	mean  []float64
	cov   [][]float64
	root  *mat.Dense // lower triangular, of cov
}

// newCloud takes the named parameters of plants.
func newCloud(plants []lti.TF, names []string) *cloud {
	q := len(names)
	c := &cloud{names: names, mean: make([]float64, q), cov: make([][]float64, q)}
	x := mat.NewDense(q, len(plants), nil)
	for i, name := range names {
		for k, g := range plants {
			x.Set(i, k, *parameter(&g, name))
		}
		row := x.RawRowView(i)
		c.mean[i] = floats.Sum(row) / float64(len(row))
		floats.AddConst(-c.mean[i], row)
	}
	for i := range q {
		c.cov[i] = make([]float64, q)
		for j := range q {
			c.cov[i][j] = floats.Dot(x.RawRowView(i), x.RawRowView(j)) / float64(len(plants))
		}
	}
	c.root = rootOf(c.cov)
	return c
}

// shrink is the share of the spread by which a plant drawn from stored ones
// differs from the one it is drawn near to.
const shrink = 0.3

// near draws a plant near a stored one of the cloud's form: the stored ones
// move together towards their mean and are spread again by a normal kernel,
// which keeps mean and covariance (West, Approximating posterior distributions
// by mixtures, J. Roy. Statist. Soc. B 55 (1993) 409-422).
func (c *cloud) near(g lti.TF, rnd *rand.Rand) lti.TF {
	for i, v := range c.spread(rnd) {
		x := parameter(&g, c.names[i])
		*x = c.mean[i] + math.Sqrt(1-shrink*shrink)*(*x-c.mean[i]) + shrink*v
	}
	return g
}

// spread draws deviations from the mean, as normal ones are.
func (c *cloud) spread(rnd *rand.Rand) []float64 {
	z, out := make([]float64, len(c.names)), make([]float64, len(c.names))
	for i := range z {
		z[i] = rnd.NormFloat64()
		for j := range i + 1 {
			out[i] += c.root.At(i, j) * z[j]
		}
	}
	return out
}

// clouds describes the stored plants by the number of their zeros.
func (m *Model) clouds() map[int]*cloud {
	by := make(map[int][]lti.TF)
	for _, d := range m.Plant.Draws {
		by[len(d.Numerator)-1] = append(by[len(d.Numerator)-1], d.tf())
	}
	out := make(map[int]*cloud)
	for zeros, plants := range by {
		out[zeros] = newCloud(plants, append(parameterNames(zeros, len(m.Plant.Denominator)-1), "delay"))
	}
	return out
}
