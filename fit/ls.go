package fit

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/lapack/lapack64"
	"gonum.org/v1/gonum/mat"
)

// ConditionLimit is the condition number, of the regressors scaled to unit length, above which least squares reports
// Condition beside its answer: about four digits are then left.
const ConditionLimit = 1e12

// Condition is the error of a least-squares problem that the data hardly determine: the 2-norm condition number, as
// estimated, of the regressors scaled to unit length. As with mat.Condition the answer is returned beside it, unless
// it is infinite.
type Condition float64

func (c Condition) Error() string {
	return fmt.Sprintf("least squares: regressors nearly dependent (condition number %.2g): the data do not tell the parameters apart", float64(c))
}

// LSResult is the answer of a linear least-squares problem with m rows and n parameters.
type LSResult struct {
	Coef []float64     // n
	SE   []float64     // n, standard errors: Sigma sqrt(diag (X'X)^-1)
	Cov  *mat.SymDense // n by n, Sigma^2 (X'X)^-1
	RSS  float64       // residual sum of squares
	DF   int           // m - n
	// Sigma is the residual standard deviation sqrt(RSS/DF); NaN, as are SE and Cov, when DF is 0.
	Sigma float64
	// R2 is 1 - RSS/TSS. TSS is taken about the mean if a column of x is constant, about zero otherwise.
	R2        float64
	Condition float64 // of the columns scaled to unit length, estimated
}

// LeastSquares minimises the squared length of y - x b by Householder QR of x with its columns scaled (Golub, Numerical
// methods for solving linear least squares problems, Numer. Math. 7 (1965) 206-216), refined with compensated residuals
// (Björck, Iterative refinement of linear least squares solutions I, BIT 7 (1967) 257-278). The error is a Condition,
// with the answer still returned, when the columns are nearly dependent; with Condition(+Inf) there is no answer. It
// panics if the shapes differ.
func LeastSquares(x *mat.Dense, y []float64) (*LSResult, error) {
	m, n := x.Dims()
	if len(y) != m {
		panic("fit: rows of the regressors and of the response differ")
	}
	if m < n {
		return nil, fmt.Errorf("least squares: %d rows are too few for %d parameters", m, n)
	}
	cols := make([][]float64, n)
	centred := false
	for j := range cols {
		cols[j] = mat.Col(nil, j, x)
		centred = centred || constant(cols[j])
		if holdsNonFinite(cols[j]) {
			return nil, errNotFinite
		}
	}
	if holdsNonFinite(y) {
		return nil, errNotFinite
	}
	h := newHouseholder(cols, m)
	s := h.triangle().solve(n)
	if math.IsInf(s.cond, 1) {
		return nil, Condition(s.cond)
	}
	b, r := h.refined(y)
	res := &LSResult{Coef: b, RSS: floats.Dot(r, r), DF: m - n, Condition: s.cond}
	res.Sigma = math.Sqrt(res.RSS / float64(res.DF))
	if res.DF == 0 {
		res.Sigma = math.NaN()
	}
	res.Cov = s.covariance(res.Sigma * res.Sigma)
	res.SE = make([]float64, n)
	for j := range n {
		res.SE[j] = math.Sqrt(res.Cov.At(j, j))
	}
	var centre, tss float64
	if centred {
		centre = mean(y)
	}
	for _, v := range y {
		tss += (v - centre) * (v - centre)
	}
	res.R2 = 1 - res.RSS/tss
	if s.cond > ConditionLimit {
		return res, Condition(s.cond)
	}
	return res, nil
}

func constant(x []float64) bool {
	for _, v := range x {
		if v != x[0] {
			return false
		}
	}
	return x[0] != 0
}

func holdsNonFinite(x []float64) bool {
	for _, v := range x {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return true
		}
	}
	return false
}

// householder is the QR factorisation of columns scaled by powers of two, which is exact.
type householder struct {
	cols  [][]float64 // scaled
	scale []float64
	qr    blas64.General
	tau   []float64
}

func newHouseholder(cols [][]float64, m int) *householder {
	n := len(cols)
	h := &householder{cols: make([][]float64, n), scale: make([]float64, n), tau: make([]float64, n)}
	h.qr = blas64.General{Rows: m, Cols: n, Stride: n, Data: make([]float64, m*n)}
	for j, c := range cols {
		h.scale[j] = 1
		if length := floats.Norm(c, 2); length > 0 {
			_, e := math.Frexp(length)
			h.scale[j] = math.Ldexp(1, e)
		}
		h.cols[j] = make([]float64, m)
		for i, v := range c {
			h.cols[j][i] = v / h.scale[j]
			h.qr.Data[i*n+j] = h.cols[j][i]
		}
	}
	work := make([]float64, 1)
	lapack64.Geqrf(h.qr, h.tau, work, -1)
	work = make([]float64, int(work[0]))
	lapack64.Geqrf(h.qr, h.tau, work, len(work))
	return h
}

// triangle returns R with its columns scaled to unit length, without a response.
func (h *householder) triangle() *triangle {
	n := len(h.cols)
	r := mat.NewDense(n+1, n+1, nil)
	for i := range n {
		copy(r.RawRowView(i)[i:n], h.qr.Data[i*n+i:i*n+n])
	}
	t := scaleTriangle(r, h.qr.Rows)
	for j := range t.scale {
		t.scale[j] *= h.scale[j]
	}
	return t
}

func (h *householder) applyQ(t blas.Transpose, v []float64) {
	c := blas64.General{Rows: len(v), Cols: 1, Stride: 1, Data: v}
	work := make([]float64, 1)
	lapack64.Ormqr(blas.Left, t, h.qr, h.tau, c, work, -1)
	work = make([]float64, int(work[0]))
	lapack64.Ormqr(blas.Left, t, h.qr, h.tau, c, work, len(work))
}

// Two refinements reach the accuracy of the working precision unless the condition is near its inverse.
const refinements = 2

// refined solves r + X b = y, X'r = 0. Each pass solves the same system for the corrections, with the right-hand sides
// f = y - r - X b and g = -X'r in twice the working precision (Björck 1967, eqs. 3.1-3.5); the first pass, from zero, is
// the plain solution.
func (h *householder) refined(y []float64) (b, r []float64) {
	m, n := h.qr.Rows, h.qr.Cols
	upper := blas64.Triangular{Uplo: blas.Upper, Diag: blas.NonUnit, N: n, Stride: n, Data: h.qr.Data}
	b, r = make([]float64, n), make([]float64, m)
	f, g := make([]float64, m), make([]float64, n)
	for range 1 + refinements {
		for i := range f {
			var s twice
			s.add(y[i], 1)
			s.add(-r[i], 1)
			for j, c := range h.cols {
				s.add(-c[i], b[j])
			}
			f[i] = s.sum()
		}
		for j, c := range h.cols {
			var s twice
			for i, v := range c {
				s.add(-v, r[i])
			}
			g[j] = s.sum()
		}
		blas64.Trsv(blas.Trans, upper, blas64.Vector{N: n, Data: g, Inc: 1})
		h.applyQ(blas.Trans, f)
		d := make([]float64, n)
		for j := range d {
			d[j] = f[j] - g[j]
			f[j] = g[j]
		}
		blas64.Trsv(blas.NoTrans, upper, blas64.Vector{N: n, Data: d, Inc: 1})
		h.applyQ(blas.NoTrans, f)
		floats.Add(b, d)
		floats.Add(r, f)
	}
	floats.Div(b, h.scale)
	return b, r
}

// twice sums products as if in twice the working precision (Ogita, Rump & Oishi, Accurate sum and dot product, SIAM J.
// Sci. Comput. 26 (2005) 1955-1988, algorithm 5.3).
type twice struct{ hi, lo float64 }

func (s *twice) add(a, b float64) {
	p := a * b
	e := math.FMA(a, b, -p)
	t := s.hi + p
	z := t - s.hi
	s.lo += (s.hi - (t - z)) + (p - z) + e
	s.hi = t
}

func (s *twice) sum() float64 { return s.hi + s.lo }
