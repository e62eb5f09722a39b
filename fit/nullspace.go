package fit

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
)

// NullSpaceOptions are the orders of A y = B u + C e, taken literally.
type NullSpaceOptions struct {
	NA, NB, NC int // NB coefficients of B, from index Delay of the ARX model on
}

const noRoot = "fit: the long model does not come from FitARX"

// The weighted steps converge linearly, and slowly where zeros of C are close; the search takes over from a good start.
const (
	weightedSteps = 5
	searchSteps   = 50
	searchGain    = 1e-6 // of the misfit, below which the search ends: a thousandth of a deviation
	plausible     = 3    // deviations of chi-squared above its mean, up to which a minimum is not doubted
)

// NullSpaceResult is a model with how well it agrees with the long ARX that it was taken from.
type NullSpaceResult struct {
	Discrete
	// Misfit is the weighted sum of squares of what the long ARX has that the model lacks, in units of its covariance:
	// about chi-squared with DF degrees of freedom if the long ARX is long enough and the orders are right.
	Misfit float64
	DF     int
	Steps  int // of the search, searchSteps when it did not converge
}

// NullSpace reduces a long ARX model to low order by weighted null-space fitting: with A and B of the long model near
// A/C and B/C of the short one, C A_long - A and C B_long - B vanish up to the errors of A_long and B_long, and are linear
// in the unknowns; least squares weighted by the inverse of their covariance, which depends on C, is repeated with the C
// found. Galrinho, Rojas & Hjalmarsson, Parametric identification using weighted null-space fitting, IEEE Trans. Automatic
// Control 64 (2019) 2798-2813. From the step with the least misfit, and from the others where that ends in a misfit too
// great for chance, a damped Gauss-Newton search goes on to the least misfit of all, the weighted distance between A/C, B/C
// and the long model: Söderström, Stoica & Friedlander, An indirect prediction error method for system identification,
// Automatica 27 (1991) 183-188.
//
// Both are asymptotically efficient if the order of the ARX grows with the data. The zeros of C are kept inside the unit
// circle by reflection; A may be unstable, since A/C and B/C are stable all the same. The model must come from FitARX,
// ChooseARX or, best, LongARX. The covariance is the inverse of the information at the long model's noise variance.
func NullSpace(m *ARX, opt NullSpaceOptions) (*NullSpaceResult, error) {
	if opt.NA < 0 || opt.NB < 0 || opt.NC < 0 {
		panic(badOrder)
	}
	p := opt.NA + opt.NB + opt.NC
	if p == 0 {
		panic(noParameters)
	}
	if m.root == nil {
		panic(noRoot)
	}
	na, nb := len(m.A)-1, len(m.B)-m.Delay
	if na+nb < p || na < opt.NA || nb < opt.NB {
		return nil, fmt.Errorf("null-space fitting: an ARX of order %d is too short for %d parameters", m.Order, p)
	}
	if !(m.Variance > 0) {
		return nil, errors.New("null-space fitting: the ARX model leaves no residuals")
	}
	f := nullSpace{m: m, opt: opt, na: na, nb: nb}
	starts, err := f.weighted()
	if err != nil {
		return nil, fmt.Errorf("null-space fitting: %w", err)
	}
	slices.SortStableFunc(starts, func(a, b *NullSpaceResult) int { return cmp.Compare(a.Misfit, b.Misfit) })
	best := f.search(starts[0])
	for _, s := range starts[1:] {
		df := float64(best.DF)
		if best.Misfit < df+plausible*math.Sqrt(2*df) {
			break
		}
		if r := f.search(s); r.Misfit < best.Misfit {
			best = r
		}
	}
	return best, nil
}

// weighted takes the steps of null-space fitting proper, the first without weighting for C, and returns them all.
func (f *nullSpace) weighted() (steps []*NullSpaceResult, err error) {
	c := []float64{1}
	long := append([]float64{0}, f.m.A[1:]...) // the leading one is no unknown
	for range 1 + weightedSteps {
		// The relations at lag k are, a and b being those of the long model, a_k = A_k - sum_j C_j a_{k-j} and
		// b_k = B_k - sum_j C_j b_{k-j} (Galrinho et al., eqs. 15-18).
		theta, _, stop := f.solve(c, f.m.A, f.m.B, f.column(c, long, f.m.B))
		if stop != nil {
			err = stop
			break
		}
		r := f.model(theta)
		if r == nil {
			break
		}
		steps, c = append(steps, r), r.C
	}
	if len(steps) > 0 {
		return steps, nil
	}
	if err == nil {
		err = errors.New("no finite model found")
	}
	return nil, err
}

// search minimises the misfit from r. The derivatives of A/C and B/C are the columns of the weighted step with A/C and
// B/C in place of the long model.
func (f *nullSpace) search(r *NullSpaceResult) *NullSpaceResult {
	for r.Steps < searchSteps {
		a, b := f.responses(&r.Discrete)
		full := append([]float64{1}, a...)
		step, cov, err := f.solve(r.C, full, append(make([]float64, f.m.Delay), b...), f.difference(a, b))
		if err != nil {
			return r
		}
		r.Cov = cov
		theta := append(append(append([]float64(nil), r.A[1:]...), r.B[f.m.Delay:]...), r.C[1:]...)
		var next *NullSpaceResult
		for size := 1.0; size > 1e-3; size /= 2 {
			trial := append([]float64(nil), theta...)
			floats.AddScaled(trial, size, step)
			if n := f.model(trial); n != nil && n.Misfit < r.Misfit {
				next = n
				break
			}
		}
		if next == nil {
			return r
		}
		next.Steps, next.Cov = r.Steps+1, cov
		gain := r.Misfit - next.Misfit
		r = next
		if gain < searchGain {
			return r
		}
	}
	return r
}

// Discrepancy is what the long model has that d lacks: the coefficients of the long A and B less those of A/C and B/C, in
// units of their joint standard deviations, so that the entries are independent with variance one if d is true. It does
// not depend on the number of rows: the residual sum of squares of d is about RSS plus Variance times its squared length,
// which makes it a cheap likelihood for choosing structures and starts. The model must come from FitARX, and C must have
// its zeros inside the unit circle.
func (m *ARX) Discrepancy(d *Discrete) []float64 {
	if m.root == nil {
		panic(noRoot)
	}
	f := nullSpace{m: m, na: len(m.A) - 1, nb: len(m.B) - m.Delay}
	r := f.difference(f.responses(d))
	floats.Scale(1/math.Sqrt(m.Variance), r)
	return r
}

type nullSpace struct {
	m      *ARX
	opt    NullSpaceOptions
	na, nb int
}

// whiten returns root times the vector of the long model's coefficients (a, b), whose covariance is Variance times
// (root' root)^-1, so that errors of the long model become white.
func (f *nullSpace) whiten(a, b []float64) []float64 {
	v := mat.NewVecDense(f.na+f.nb, nil)
	for i, x := range a {
		v.SetVec(i, x)
	}
	for i, x := range b {
		v.SetVec(f.na+i, x)
	}
	v.MulVec(f.m.root, v)
	return v.RawVector().Data
}

// column returns lags 1 ... of a and Delay ... of b, filtered by 1/C and whitened. The covariance of the errors of the
// relations is T P T', T the Toeplitz matrix of C and P the covariance of the long model: filtering by 1/C undoes T.
func (f *nullSpace) column(c, a, b []float64) []float64 {
	var fa, fb []float64
	if a != nil {
		fa = divideBy(a, c, f.na+1)[1:]
	}
	if b != nil {
		fb = divideBy(b, c, f.m.Delay+f.nb)[f.m.Delay:]
	}
	return f.whiten(fa, fb)
}

// solve finds the coefficients of A, B and C by least squares, with a and b as factors of C.
func (f *nullSpace) solve(c, a, b, y []float64) (theta []float64, cov *mat.SymDense, err error) {
	unit := func(i int) []float64 {
		x := make([]float64, i+1)
		x[i] = 1
		return x
	}
	delayed := func(x []float64, j int) []float64 {
		out := make([]float64, len(x)+j)
		floats.SubTo(out[j:], out[j:], x)
		return out[:len(x)]
	}
	var cols [][]float64
	for i := range f.opt.NA {
		cols = append(cols, f.column(c, unit(i+1), nil))
	}
	for i := range f.opt.NB {
		cols = append(cols, f.column(c, nil, unit(f.m.Delay+i)))
	}
	for j := 1; j <= f.opt.NC; j++ {
		cols = append(cols, f.column(c, delayed(a, j), delayed(b, j)))
	}
	h := newHouseholder(cols, len(y))
	s := h.triangle().solve(len(cols))
	if s.cond > ConditionLimit {
		return nil, nil, Condition(s.cond)
	}
	theta, _ = h.refined(y)
	return theta, s.covariance(f.m.Variance), nil
}

// responses returns A/C at lags 1 ... and B/C at lags Delay ..., as many as the long model has.
func (f *nullSpace) responses(d *Discrete) (a, b []float64) {
	return divideBy(d.A, d.C, f.na+1)[1:], divideBy(d.B, d.C, f.m.Delay+f.nb)[f.m.Delay:]
}

// difference is what the long model has more than a and b, whitened.
func (f *nullSpace) difference(a, b []float64) []float64 {
	da, db := make([]float64, f.na), make([]float64, f.nb)
	floats.SubTo(da, f.m.A[1:], a)
	floats.SubTo(db, f.m.B[f.m.Delay:], b)
	return f.whiten(da, db)
}

// model takes theta apart and measures its misfit; nil if that is not finite.
func (f *nullSpace) model(theta []float64) *NullSpaceResult {
	if holdsNonFinite(theta) {
		return nil
	}
	opt, m := f.opt, f.m
	r := &NullSpaceResult{DF: f.na + f.nb - len(theta)}
	r.A = append([]float64{1}, theta[:opt.NA]...)
	r.B = append(make([]float64, m.Delay), theta[opt.NA:opt.NA+opt.NB]...)
	r.C = insideCircle(append([]float64{1}, theta[opt.NA+opt.NB:]...))
	r.Delay, r.Variance = m.Delay, m.Variance
	d := f.difference(f.responses(&r.Discrete))
	r.Misfit = floats.Dot(d, d) / m.Variance
	if math.IsNaN(r.Misfit) || math.IsInf(r.Misfit, 0) {
		return nil
	}
	return r
}
