package fit

import (
	"math"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/fit/lti"
)

// Influence is how each row of the records moves an estimate: to first order
// the estimate's error is the sum over all rows (Hampel, The influence curve
// and its role in robust estimation, J. Amer. Statist. Assoc. 69 (1974)
// 383-393). Parameters are in the order of Prediction's Cov; one that is held
// has no rows.
type Influence struct {
	rows [][][]float64 // record, parameter, row; in the parameter's units
	used int           // parameters that were estimated, the records' constants included
}

// Influence returns the influence of each row on b_0 … b_m, a_1 … a_n, the
// delay where it is free, D and C: -H^-1 ψ_k e_k, ψ the derivatives of the
// prediction errors less what constant and start-up errors take of them, H the
// second derivatives of half the objective. m is an estimate from these
// records: away from the optimum the rows say nothing. Around missing outputs the
// errors are what these leave of them.
func (p *Predictor) Influence(m *Prediction) (*Influence, error) {
	s, x := p.begin(m)
	defer s.done()
	h, err := s.curvature(x)
	if err != nil {
		return nil, err
	}
	_, q, ok := s.errorsAt(x)
	if !ok {
		return nil, s.failure()
	}
	var inv mat.Dense
	if err := inv.Inverse(h); err != nil {
		return nil, ErrSingular
	}
	free := s.shape.free()
	q.delta = lti.SampleDelta(x.num, x.den, x.tau, s.h)
	cols := s.columns(q)
	f := &Influence{used: len(free) + len(s.work)}
	unit := s.units()
	for i := range s.work {
		w := &s.work[i]
		s.filterAll(w, q, s.start(i))
		f.rows = append(f.rows, influences(&inv, s.derivatives(w, w, x.c, cols, free), s.rowErrors(w), free, unit))
	}
	return f, nil
}

// plant is the number of parameters of the plant, held ones included; they come
// first.
func (s Shape) plant() int { return s.size() - s.Colour - (s.Poles + s.Colour) }

// free lists the parameters that are not held.
func (s Shape) free() []int {
	var list []int
	for k := range s.size() {
		if !s.fixed(k) {
			list = append(list, k)
		}
	}
	return list
}

// rowErrors are a record's prediction errors from its first equation on.
func (s *search) rowErrors(w *workspace) []float64 { return w.e[len(w.e)-w.rows:] }

// influences returns -inv d_k e_k for each row k, at the places of the free ones
// of as many parameters as there are units.
func influences(inv *mat.Dense, d [][]float64, e []float64, free []int, unit []float64) [][]float64 {
	out := make([][]float64, len(unit))
	for a, k := range free {
		v := make([]float64, len(e))
		for b := range free {
			floats.AddScaled(v, -inv.At(a, b)*unit[k], d[b])
		}
		floats.Mul(v, e)
		out[k] = v
	}
	return out
}

// curvature returns the second derivatives of half the objective by the free
// parameters, as differences of its gradient over a hundredth of a deviation.
// J'J alone is right only where the errors are independent of the past.
func (s *search) curvature(x point) (*mat.Dense, error) {
	const part = 1e-2
	_, q, ok := s.errorsAt(x)
	if !ok {
		return nil, s.failure()
	}
	jj, _ := s.information(x, q)
	sigma := math.Sqrt(s.rss / float64(s.rows))
	free := s.shape.free()
	h := mat.NewDense(len(free), len(free), nil)
	step := make([]float64, s.shape.size())
	for a, k := range free {
		d := part * sigma / math.Sqrt(jj.At(k, k))
		var g [2][]float64
		for side, f := range []float64{d, -d} {
			step[k] = f
			y := s.moved(x, step)
			_, q, ok := s.errorsAt(y)
			if !ok {
				return nil, s.failure()
			}
			_, g[side] = s.information(y, q)
		}
		step[k] = 0
		for b, l := range free {
			h.Set(a, b, (g[0][l]-g[1][l])/(2*d))
		}
	}
	var t mat.Dense
	t.Add(h, h.T())
	t.Scale(0.5, &t)
	return &t, nil
}

// derivatives returns the columns listed in which over a record's rows, of the
// signals in from under the transients of w, less what the record's constant
// and start-up errors take of them. c is C in powers of δ.
func (s *search) derivatives(w, from *workspace, c []float64, cols []column, which []int) [][]float64 {
	t0 := len(w.e) - w.rows
	h := gram(c, w.rows)
	local := make([]float64, h.SymmetricDim())
	g := make([]float64, len(local))
	out := make([][]float64, len(which))
	for i, k := range which {
		d := make([]float64, w.rows)
		cols[k].at(d, &from.filtered, t0)
		// Lagged copies of a filtered signal did not start at rest at t0.
		var past [1]float64
		for j, free := range w.free {
			cols[k].at(past[:], &from.filtered, t0-j-1)
			floats.AddScaled(d[:w.settled], -past[0], free[:w.settled])
		}
		g[0] = w.alongStep(d)
		for j, free := range w.free {
			g[j+1] = -floats.Dot(free[:w.settled], d[:w.settled])
		}
		if solveScaled(local, h, g, 0) {
			w.addStep(d, -local[0])
			for j, free := range w.free {
				floats.AddScaled(d[:w.settled], local[j+1], free[:w.settled])
			}
		}
		out[i] = d
	}
	return out
}

// Covariance is that of the estimate whatever the colour of its errors and
// however their size changes: the rows' outer products and, with Bartlett's
// weights, those of rows some lags apart (Newey & West, A simple, positive
// semi-definite, heteroskedasticity and autocorrelation consistent covariance
// matrix, Econometrica 55 (1987) 703-708).
//
// For a prediction-error estimate this is the sandwich H^-1 S H^-1 (White,
// Maximum likelihood estimation of misspecified models, Econometrica 50 (1982)
// 1-25). It is the spread about the best model of the fitted structure under
// the spectra and the controller of these records. Where the structure is wrong
// that model is not the plant, and nothing here says how far its poles are from
// the true ones.
func (f *Influence) Covariance() *mat.SymDense {
	n := len(f.rows[0])
	c := mat.NewSymDense(n, nil)
	count := 0
	for _, r := range f.rows {
		count += len(r[0])
	}
	lags := int(math.Sqrt(float64(count)))
	scale := float64(count) / float64(max(1, count-f.used))
	for i := range n {
		for j := i; j < n; j++ {
			var sum float64
			for _, r := range f.rows {
				a, b := r[i], r[j]
				if a == nil || b == nil {
					continue
				}
				if len(a) > block {
					sum += bartlett(a, b, lags)
					continue
				}
				sum += floats.Dot(a, b)
				for k := 1; k <= lags && k < len(a); k++ {
					weight := 1 - float64(k)/float64(lags+1)
					sum += weight * (floats.Dot(a[k:], b[:len(b)-k]) + floats.Dot(a[:len(a)-k], b[k:]))
				}
			}
			c.SetSym(i, j, scale*sum)
		}
	}
	return c
}

// bartlett returns the sum of products of a and b in rows up to so many lags
// apart, by Bartlett's weights, in as many steps as there are rows: two rows k
// apart are together in lags+1-k of all stretches of lags+1 rows (Meketon &
// Schmeiser, Overlapping batch means: something for nothing?, Proc. Winter
// Simulation Conference 1984, 226-230).
func bartlett(a, b []float64, lags int) float64 {
	var sa, sb, sum float64 // over the stretch that ends in row k, over all of them
	for k := range len(a) + lags {
		if k < len(a) {
			sa, sb = sa+a[k], sb+b[k]
		}
		if first := k - lags - 1; first >= 0 {
			sa, sb = sa-a[first], sb-b[first]
		}
		sum += sa * sb
	}
	return sum / float64(lags+1)
}

// Difference is a test whether two estimates of one plant from the same rows
// differ by more than chance.
type Difference struct {
	Statistic   float64
	DF          float64 // of the chi-square law that stands for the statistic's, a fraction where directions count in part
	Probability float64 // of so large a statistic where both estimate the same plant
}

// leastDifference is the least deviation of the difference, along any
// direction, that it is held against, over that of the second estimate. By
// construction the two can be much closer than either is to the truth: what
// feeds back of the noise tells few directions of the plant more than outside
// signals do. Differences as small as that are of no account.
const leastDifference = 0.2

// Compare tests the prediction-error estimate m against the estimate r from the
// outside signal alone. Both come from these records, so that their difference
// is judged by the influence of each row on it. Where plant and noise shape are
// right both tend to the plant; a wrong noise shape moves m and not r; order,
// hold, pairing and nonlinearity move both, and often alike. The idea is
// that of Durbin (1954), Wu (1973) and Hausman, Specification tests in
// econometrics, Econometrica 46 (1978) 1251-1271; as the covariance of the
// difference is not taken as the difference of covariances, m need not be
// efficient (White 1982, theorem 5.1).
func (p *Predictor) Compare(m *Prediction, r *Refined) (Difference, error) {
	f, err := p.Influence(m)
	if err != nil {
		return Difference{}, err
	}
	for i, rows := range f.rows {
		f.rows[i] = rows[:m.Shape.plant()]
		for k, v := range f.rows[i] {
			if v != nil {
				floats.Sub(v, r.influence.rows[i][k])
			}
		}
	}
	return difference(m.Shape, plantParameters(m.TF()), plantParameters(r.TF()), f.Covariance(), r.Cov)
}

// plantParameters lists b_0 … b_m, a_1 … a_n, delay.
func plantParameters(g lti.TF) []float64 {
	out := append([]float64(nil), g.Num...)
	for i := len(g.Den) - 2; i >= 0; i-- {
		out = append(out, g.Den[i])
	}
	return append(out, g.Delay)
}

// difference tests a - b with covariance cov. With λ_i, v_i the variances and
// directions of a - b in coordinates in which own, the covariance of b, is the
// unit matrix, the statistic is Σ (v_i'(a - b))²/max(λ_i, leastDifference²): a sum
// of chi-squares of one degree each, times w_i = λ_i/max(λ_i, leastDifference²).
// It is taken for a multiple of one chi-square with the same mean and variance
// (Satterthwaite, An approximate distribution of estimates of variance
// components, Biometrics Bull. 2 (1946) 110-114). Where no w_i reaches one all
// are raised until one does.
func difference(shape Shape, a, b []float64, cov, own *mat.SymDense) (Difference, error) {
	var free []int
	for _, k := range shape.free() {
		if k < shape.plant() {
			free = append(free, k)
		}
	}
	n := len(free)
	delta := mat.NewVecDense(n, nil)
	v, d := mat.NewSymDense(n, nil), mat.NewSymDense(n, nil)
	for i, k := range free {
		sd := math.Sqrt(own.At(k, k))
		delta.SetVec(i, (a[k]-b[k])/sd)
		for j := i; j < n; j++ {
			l := free[j]
			other := math.Sqrt(own.At(l, l))
			v.SetSym(i, j, own.At(k, l)/(sd*other))
			d.SetSym(i, j, cov.At(k, l)/(sd*other))
		}
	}
	var chol mat.Cholesky
	if !chol.Factorize(v) {
		return Difference{}, ErrSingular
	}
	var l mat.TriDense
	chol.LTo(&l)
	var half, white mat.Dense
	var y mat.VecDense
	if half.Solve(&l, d) != nil || white.Solve(&l, half.T()) != nil || y.SolveVec(&l, delta) != nil {
		return Difference{}, ErrSingular
	}
	sym := mat.NewSymDense(n, nil)
	for i := range n {
		for j := i; j < n; j++ {
			sym.SetSym(i, j, (white.At(i, j)+white.At(j, i))/2)
		}
	}
	var eig mat.EigenSym
	var directions mat.Dense
	if !eig.Factorize(sym, true) {
		return Difference{}, ErrSingular
	}
	eig.VectorsTo(&directions)
	var t Difference
	var sum, squares, most float64
	for i, lambda := range eig.Values(nil) {
		c := mat.Dot(directions.ColView(i), &y)
		held := math.Max(lambda, leastDifference*leastDifference)
		t.Statistic += c * c / held
		w := math.Max(0, lambda) / held
		sum, squares, most = sum+w, squares+w*w, math.Max(most, w)
	}
	if !(most > 0) {
		return Difference{}, ErrSingular
	}
	t.DF = sum * sum / squares
	t.Statistic *= most * sum / squares
	if t.Probability = (distuv.ChiSquared{K: t.DF}).Survival(t.Statistic); math.IsNaN(t.Probability) {
		return Difference{}, ErrSingular
	}
	return t, nil
}
