package fit

import (
	"fmt"
	"math"

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

// LeastSquares minimises the squared length of y - x b by Householder QR of x with its columns scaled to unit length
// (Golub, Numerical methods for solving linear least squares problems, Numer. Math. 7 (1965) 206-216). The error is a
// Condition, with the answer still returned, when the columns are nearly dependent; with Condition(+Inf) there is no
// answer. It panics if the shapes differ.
func LeastSquares(x *mat.Dense, y []float64) (*LSResult, error) {
	m, n := x.Dims()
	if len(y) != m {
		panic("fit: rows of the regressors and of the response differ")
	}
	if m < n {
		return nil, fmt.Errorf("least squares: %d rows are too few for %d parameters", m, n)
	}
	aug := mat.NewDense(max(m, n+1), n+1, nil)
	centred := false
	for j := range n {
		constant := true
		for i := range m {
			v := x.At(i, j)
			aug.Set(i, j, v)
			constant = constant && v == x.At(0, j)
		}
		centred = centred || constant && x.At(0, j) != 0
	}
	for i, v := range y {
		aug.Set(i, n, v)
	}
	t := newTriangle(aug, m)
	if t.bad() {
		return nil, errNotFinite
	}
	s := t.solve(n)
	res := &LSResult{Coef: s.coef, RSS: s.rss, DF: m - n, Condition: s.cond}
	if math.IsInf(s.cond, 1) {
		return nil, Condition(s.cond)
	}
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
		for _, v := range y {
			centre += v / float64(m)
		}
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
