package fit

import (
	"errors"
	"math"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
	"gonum.org/v1/gonum/lapack"
	"gonum.org/v1/gonum/lapack/lapack64"
	"gonum.org/v1/gonum/mat"
)

var errNotFinite = errors.New("least squares: the data hold values that are not finite numbers")

// triangle is a least-squares problem reduced to its upper triangular factor: R'R = [X y]'[X y], the columns of X
// scaled to unit length, y (the last column) as it is. Every problem that uses the first q columns only can be solved
// from it.
type triangle struct {
	r     *mat.Dense // n+1 by n+1, upper triangle
	scale []float64  // n, length of each column
	rows  int
}

// newTriangle reduces a = [X y] by Householder QR, which no scaling of columns disturbs. a has at least as many rows as
// columns, if need be by rows of zeros; rows counts those that hold data.
func newTriangle(a *mat.Dense, rows int) *triangle { return scaleTriangle(upperTriangle(a), rows) }

// scaleTriangle scales the columns of r but the last to unit length, in place.
func scaleTriangle(r *mat.Dense, rows int) *triangle {
	n, _ := r.Dims()
	t := &triangle{r: r, scale: make([]float64, n-1), rows: rows}
	for j := range t.scale {
		t.scale[j] = mat.Norm(r.ColView(j), 2)
		for i := 0; i <= j && t.scale[j] > 0; i++ {
			r.Set(i, j, r.At(i, j)/t.scale[j])
		}
	}
	return t
}

// upperTriangle returns the square R of the QR factorisation of a, which has at least as many rows as columns.
func upperTriangle(a *mat.Dense) *mat.Dense {
	_, n := a.Dims()
	var q mat.QR
	q.Factorize(a)
	var r mat.Dense
	q.RTo(&r)
	return mat.DenseCopyOf(r.Slice(0, n, 0, n))
}

// triangleOfProducts reduces the matrix of products p = [X y]'[X y]. It returns nil where p is not positive definite to
// working accuracy, and then only the rows themselves can help.
func triangleOfProducts(p *mat.SymDense, rows int) *triangle {
	n := p.SymmetricDim() - 1
	t := &triangle{scale: make([]float64, n), rows: rows}
	for j := range t.scale {
		t.scale[j] = math.Sqrt(p.At(j, j))
		if !(t.scale[j] > 0) {
			return nil
		}
	}
	last := math.Sqrt(p.At(n, n))
	if !(last > 0) || math.IsInf(last, 1) {
		return nil
	}
	s := mat.NewSymDense(n+1, nil)
	for i := range n + 1 {
		for j := i; j <= n; j++ {
			v := p.At(i, j) / t.lengthOr(i, last) / t.lengthOr(j, last)
			s.SetSym(i, j, v)
		}
	}
	var c mat.Cholesky
	if !c.Factorize(s) {
		return nil
	}
	var u mat.TriDense
	c.UTo(&u)
	t.r = mat.DenseCopyOf(&u)
	for i := range n + 1 {
		t.r.Set(i, n, t.r.At(i, n)*last)
	}
	return t
}

func (t *triangle) lengthOr(j int, last float64) float64 {
	if j < len(t.scale) {
		return t.scale[j]
	}
	return last
}

func (t *triangle) bad() bool {
	n := len(t.scale)
	for i := range n + 1 {
		for j := i; j <= n; j++ {
			if v := t.r.At(i, j); math.IsNaN(v) || math.IsInf(v, 0) {
				return true
			}
		}
	}
	return false
}

// rss returns the residual sum of squares with the first q columns as regressors.
func (t *triangle) rss(q int) float64 {
	n := len(t.scale)
	s := 0.0
	for i := q; i <= n; i++ {
		s += t.r.At(i, n) * t.r.At(i, n)
	}
	return s
}

// cond estimates the 2-norm condition number of the first q scaled columns by that in the 1-norm.
func (t *triangle) cond(q int) float64 {
	if q == 0 {
		return 1
	}
	for i := range q {
		if t.r.At(i, i) == 0 {
			return math.Inf(1)
		}
	}
	tri := t.leading(q).RawTriangular()
	rc := lapack64.Trcon(lapack.MaxColumnSum, tri, make([]float64, 3*q), make([]int, q))
	if rc == 0 {
		return math.Inf(1)
	}
	return 1 / rc
}

func (t *triangle) leading(q int) *mat.TriDense {
	u := mat.NewTriDense(q, mat.Upper, nil)
	for i := range q {
		for j := i; j < q; j++ {
			u.SetTri(i, j, t.r.At(i, j))
		}
	}
	return u
}

// solution belongs to the first q columns of a triangle.
type solution struct {
	coef      []float64
	rss, cond float64
	inv       *mat.TriDense // inverse of R with the scaling undone: (X'X)^-1 = inv inv'
}

func (t *triangle) solve(q int) solution {
	n := len(t.scale)
	s := solution{rss: t.rss(q), cond: t.cond(q)}
	if math.IsInf(s.cond, 1) || q == 0 {
		return s
	}
	s.inv = t.leading(q)
	raw := s.inv.RawTriangular()
	// Back substitution, not the inverse, for the coefficients: it is backward stable.
	s.coef = make([]float64, q)
	for i := range q {
		s.coef[i] = t.r.At(i, n)
	}
	blas64.Trsv(blas.NoTrans, raw, blas64.Vector{N: q, Data: s.coef, Inc: 1})
	for i := range q {
		s.coef[i] /= t.scale[i]
	}
	lapack64.Trtri(raw)
	for i := range q {
		for j := i; j < q; j++ {
			s.inv.SetTri(i, j, s.inv.At(i, j)/t.scale[i])
		}
	}
	return s
}

// covariance returns variance (X'X)^-1.
func (s solution) covariance(variance float64) *mat.SymDense {
	q, _ := s.inv.Dims()
	c := mat.NewSymDense(q, nil)
	c.SymOuterK(variance, s.inv)
	return c
}
