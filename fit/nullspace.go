package fit

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"
)

// NullSpaceOptions are the orders of A y = B u + C e, taken literally but for Iterations.
type NullSpaceOptions struct {
	NA, NB, NC int // NB coefficients of B, from index Delay of the ARX model on
	Iterations int // at most; 0: DefaultIterations
}

// DefaultIterations of NullSpace: the weighting depends on C, so that the first few pay and the rest change little.
const DefaultIterations = 20

// NullSpaceResult is a model with how well it agrees with the long ARX that it was taken from.
type NullSpaceResult struct {
	Discrete
	// Misfit is the weighted sum of squares of what the long ARX has that the model lacks, in units of its covariance:
	// about chi-squared with DF degrees of freedom if the long ARX is long enough and the orders are right.
	Misfit     float64
	DF         int
	Iterations int // weighted ones
}

// NullSpace reduces a long ARX model to low order by weighted null-space fitting: with A and B of the long model near
// A/C and B/C of the short one, C A_long - A and C B_long - B vanish up to the errors of A_long and B_long, and are linear
// in the unknowns; least squares weighted by the inverse of their covariance, which depends on C, is repeated with the C
// found. The iterate with the least misfit is returned. It is asymptotically efficient if the order of the ARX grows with
// the data. The zeros of C are kept inside the unit circle by reflection; A may be unstable, since A/C and B/C are stable
// all the same. Galrinho, Rojas & Hjalmarsson, Parametric identification using weighted null-space fitting, IEEE Trans.
// Automatic Control 64 (2019) 2798-2813.
//
// The model must come from FitARX or ChooseARX. The covariance is that of the last weighting at the long ARX's noise
// variance.
func NullSpace(m *ARX, opt NullSpaceOptions) (*NullSpaceResult, error) {
	if opt.NA < 0 || opt.NB < 0 || opt.NC < 0 || opt.Iterations < 0 {
		panic(badOrder)
	}
	p := opt.NA + opt.NB + opt.NC
	if p == 0 {
		panic(noParameters)
	}
	if m.root == nil {
		panic("fit: null-space fitting needs a model from FitARX")
	}
	na, nb := len(m.A)-1, len(m.B)-m.Delay
	if na+nb < p || na < opt.NA || nb < opt.NB {
		return nil, fmt.Errorf("null-space fitting: an ARX of order %d is too short for %d parameters", m.Order, p)
	}
	if !(m.Variance > 0) {
		return nil, errors.New("null-space fitting: the ARX model leaves no residuals")
	}
	limit := opt.Iterations
	if limit == 0 {
		limit = DefaultIterations
	}
	f := nullSpace{m: m, opt: opt, na: na, nb: nb}
	c := []float64{1}
	var best *NullSpaceResult
	var last float64
	for it := range limit + 1 {
		theta, cov, err := f.solve(c)
		if err != nil {
			if best != nil {
				break
			}
			return nil, fmt.Errorf("null-space fitting: %w", err)
		}
		r := f.model(theta)
		r.Cov, r.Iterations = cov, it
		if holdsNonFinite(r.A) || holdsNonFinite(r.B) || holdsNonFinite(r.C) {
			break
		}
		if best == nil || r.Misfit < best.Misfit {
			best = r
		}
		if it > 1 && math.Abs(r.Misfit-last) < 1e-6 {
			break
		}
		last, c = r.Misfit, r.C
	}
	if best == nil {
		return nil, errors.New("null-space fitting: no finite model found")
	}
	return best, nil
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

// solve is one weighted least-squares step. The relations at lag k are, a and b being those of the long model,
// a_k = A_k - sum_j C_j a_{k-j}, b_k = B_k - sum_j C_j b_{k-j} (Galrinho et al., eqs. 15-18). The covariance of their
// errors is T P T', T the Toeplitz matrix of C: filtering every column by 1/C undoes T.
func (f *nullSpace) solve(c []float64) (theta []float64, cov *mat.SymDense, err error) {
	opt, m := f.opt, f.m
	var cols [][]float64
	column := func(a, b []float64) []float64 {
		// Lags 1 ... na of a, Delay ... of b.
		var fa, fb []float64
		if a != nil {
			fa = divideBy(a, c, f.na+1)[1:]
		}
		if b != nil {
			fb = divideBy(b, c, m.Delay+f.nb)[m.Delay:]
		}
		return f.whiten(fa, fb)
	}
	unit := func(i int) []float64 {
		x := make([]float64, i+1)
		x[i] = 1
		return x
	}
	shifted := func(x []float64, j int) []float64 {
		out := make([]float64, len(x)+j)
		for i, v := range x {
			out[i+j] = -v
		}
		return out[:len(x)]
	}
	for i := range opt.NA {
		cols = append(cols, column(unit(i+1), nil))
	}
	for i := range opt.NB {
		cols = append(cols, column(nil, unit(m.Delay+i)))
	}
	for j := 1; j <= opt.NC; j++ {
		cols = append(cols, column(shifted(m.A, j), shifted(m.B, j)))
	}
	long := append([]float64{0}, m.A[1:]...) // the leading one is no unknown
	y := column(long, m.B)
	h := newHouseholder(cols, len(y))
	s := h.triangle().solve(len(cols))
	if s.cond > ConditionLimit {
		return nil, nil, Condition(s.cond)
	}
	theta, _ = h.refined(y)
	return theta, s.covariance(m.Variance), nil
}

// model takes theta apart and measures its misfit.
func (f *nullSpace) model(theta []float64) *NullSpaceResult {
	opt, m := f.opt, f.m
	r := &NullSpaceResult{DF: f.na + f.nb - len(theta)}
	r.A = append([]float64{1}, theta[:opt.NA]...)
	r.B = append(make([]float64, m.Delay), theta[opt.NA:opt.NA+opt.NB]...)
	r.C = insideCircle(append([]float64{1}, theta[opt.NA+opt.NB:]...))
	r.Delay, r.Variance = m.Delay, m.Variance
	a, b := divideBy(r.A, r.C, f.na+1)[1:], divideBy(r.B, r.C, m.Delay+f.nb)[m.Delay:]
	for i := range a {
		a[i] -= m.A[i+1]
	}
	for i := range b {
		b[i] -= m.B[m.Delay+i]
	}
	for _, v := range f.whiten(a, b) {
		r.Misfit += v * v / m.Variance
	}
	return r
}
