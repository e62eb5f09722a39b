package fit

import (
	"errors"
	"fmt"
	"math"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// SubspaceOptions of Subspace.
type SubspaceOptions struct {
	// Past is the number of past samples that the state is made of, the order of the long ARX; 0: twice that of least
	// AICc where the rows allow it, and no less than Future and twice Order. Unlike null-space fitting the state needs no
	// more, and loses from far more.
	Past int
	// Future is the number of coming samples that the state must predict; 0: DefaultFuture, or Past if that is less.
	Future int
	// Order of the state; 0: the number of singular values that stand out of the noise.
	Order int
}

// DefaultFuture is more than twice the order of any plant that this package is meant for.
const DefaultFuture = 20

// StateResult is a model in innovations form, y_k = C x_k + e_k and x_{k+1} = A x_k + B u_k + K e_k, without direct term,
// in deviations from the constants of the records. A is n by n, B and K n by 1, C 1 by n.
type StateResult struct {
	A, B, C, K *mat.Dense
	Variance   float64 // of e
	// Singular values of the predicted future: root mean square over the rows of each component of the state, in standard
	// deviations of e. All Future of them; those below Noise are what the errors of the long ARX alone would give.
	Singular []float64
	Noise    float64
	Poles    []complex128 // eigenvalues of A, in the z-plane
	// Den is their polynomial in powers of δ = z - 1, Den[i] multiplying δ^i and Den[n] = 1, and Cov the n by n covariance
	// of its lower coefficients.
	Den    lti.Poly
	Cov    *mat.SymDense
	Past   int
	Future int
	Rows   int
}

// ErrNoState says that nothing of the future is predictable.
var ErrNoState = errors.New("subspace: past inputs and outputs predict nothing: no state found")

// Subspace estimates a state-space model from closed-loop or open-loop records by predictor-based subspace
// identification in its optimised form: a long ARX gives the coefficients of the predictor, these make the observability
// matrix of the predictor times the past, its singular value decomposition over the data gives the state sequence, and
// least squares the matrices. The future is predicted with future inputs and outputs given, so that its errors are the
// white innovations: all horizons have weight one and feedback does not bias it. Chiuso, The role of vector
// autoregressive modeling in predictor-based subspace identification, Automatica 43 (2007) 1034-1048; Chiuso & Picci,
// Consistency analysis of some closed-loop subspace identification methods, Automatica 41 (2005) 377-391.
//
// The data enter through the triangular factor of one long regression only; the cost does not grow with the rows but for
// its products. The covariance is that of the long ARX, carried through the realisation by its derivative.
func Subspace(recs []Record, opt SubspaceOptions) (*StateResult, error) {
	checkRecords(recs)
	if opt.Past < 0 || opt.Future < 0 || opt.Order < 0 {
		panic(badOrder)
	}
	past, future := opt.Past, opt.Future
	if past == 0 {
		m, err := ChooseARX(recs, ChooseOptions{Delay: 1})
		if err != nil {
			var c Condition
			if m == nil || !errors.As(err, &c) {
				return nil, fmt.Errorf("subspace: %w", err)
			}
		}
		past = m.Order
		if usableRows(recs, 2*past) >= 2*DefaultRowsPerOrder*past {
			past *= 2
		}
		past = max(past, future, 2*opt.Order, 2)
	}
	if future == 0 {
		future = min(DefaultFuture, past)
	}
	if future > past || opt.Order > future {
		panic("fit: subspace needs past >= future >= order")
	}
	// Columns y_{k-1}, u_{k-1} ... y_{k-past}, u_{k-past}, then u_k, and y_k as response: the first are the past, the
	// last two what the next past has more.
	lags, order := ARXOptions{NA: past, NB: past, Delay: 1}.lags()
	g := newRegression(signals(recs), append(lags, lag{signal: input}), order, false)
	t, err := g.reduce()
	if err != nil {
		return nil, fmt.Errorf("subspace: %w", err)
	}
	arx := t.solve(2 * past)
	if arx.cond > ConditionLimit {
		return nil, fmt.Errorf("subspace: %w", Condition(arx.cond))
	}
	df := g.rows - 2*past - g.constants()
	if df < 1 {
		return nil, fmt.Errorf("subspace: %d rows are too few for a past of %d samples", g.rows, past)
	}
	sigma := math.Sqrt(arx.rss / float64(df))

	// The data are Q times the columns of r; Q never appears.
	size := 2*past + 2
	r := mat.NewDense(size, size, nil)
	for i := range size {
		for j := i; j < size; j++ {
			v := t.r.At(i, j)
			if j < size-1 {
				v *= t.scale[j]
			}
			r.Set(i, j, v)
		}
	}
	z := r.Slice(0, size, 0, 2*past) // past of row k
	u, y := r.ColView(size-2), r.ColView(size-1)
	next := mat.NewDense(size, 2*past, nil) // past of row k+1
	copyColumn(next, 0, y)
	copyColumn(next, 1, u)
	for j := 2; j < 2*past; j++ {
		copyColumn(next, j, r.ColView(j-2))
	}

	// Row j of h predicts y_{k+j} from the past of row k: the coefficients of lags j+1, j+2 ... (Chiuso 2007, eq. 25).
	h := mat.NewDense(future, 2*past, nil)
	for j := range future {
		copy(h.RawRowView(j), arx.coef[2*j:])
	}
	var predicted mat.Dense
	predicted.Mul(z, h.T())
	var svd mat.SVD
	if !svd.Factorize(&predicted, mat.SVDThin) {
		return nil, errors.New("subspace: singular value decomposition failed")
	}
	res := &StateResult{Singular: svd.Values(nil), Past: past, Future: future, Rows: g.rows, Variance: sigma * sigma}
	perNoise := 1 / (sigma * math.Sqrt(float64(g.rows)))
	for i := range res.Singular {
		res.Singular[i] *= perNoise
	}
	res.Noise = noiseSingular(past, future, g.rows)
	n := opt.Order
	if n == 0 {
		for n < future && res.Singular[n] > res.Noise {
			n++
		}
	}
	if n == 0 || !(res.Singular[n-1] > 0) {
		return nil, ErrNoState
	}
	// The state is the past times tr, with unit mean square over the rows.
	var right, tr, x, xNext mat.Dense
	svd.VTo(&right)
	tr.Mul(h.T(), right.Slice(0, future, 0, n))
	for i := range n {
		s := sigma * res.Singular[i]
		for j := range 2 * past {
			tr.Set(j, i, tr.At(j, i)/s)
		}
	}
	x.Mul(z, &tr)
	xNext.Mul(next, &tr)

	var c mat.Dense
	if err := c.Solve(&x, mat.DenseCopyOf(y)); err != nil && !nearlySingular(err) {
		return nil, fmt.Errorf("subspace: output equation: %w", err)
	}
	var e mat.Dense
	e.Mul(&x, &c)
	e.Sub(mat.DenseCopyOf(y), &e)
	known := mat.NewDense(size, n+2, nil)
	known.Slice(0, size, 0, n).(*mat.Dense).Copy(&x)
	copyColumn(known, n, u)
	copyColumn(known, n+1, e.ColView(0))
	var abk mat.Dense
	if err := abk.Solve(known, &xNext); err != nil && !nearlySingular(err) {
		return nil, fmt.Errorf("subspace: state equation: %w", err)
	}
	res.A = mat.DenseCopyOf(abk.Slice(0, n, 0, n).T())
	res.B = mat.DenseCopyOf(abk.Slice(n, n+1, 0, n).T())
	res.K = mat.DenseCopyOf(abk.Slice(n+1, n+2, 0, n).T())
	res.C = mat.DenseCopyOf(c.T())
	ee := mat.Norm(&e, 2)
	res.Variance = ee * ee / float64(df)
	res.Poles = eigenvalues(res.A)
	if res.Poles == nil {
		return nil, errors.New("subspace: eigenvalues did not converge")
	}

	var perPast, perState mat.Dense // what the regressions make of the columns of the past
	if err := perPast.Solve(known, z); err != nil && !nearlySingular(err) {
		return nil, fmt.Errorf("subspace: state equation: %w", err)
	}
	if err := perState.Solve(&x, z); err != nil && !nearlySingular(err) {
		return nil, fmt.Errorf("subspace: output equation: %w", err)
	}
	m := realisation{right: &right, values: svd.Values(nil), scale: math.Sqrt(float64(g.rows)), tr: &tr, c: &c, at: res.A.T(),
		perPast: perPast.Slice(0, n, 0, 2*past), perState: &perState}
	m.long.Mul(h.T(), &right)
	m.known.Product(z.T(), &predicted, &right)
	den, slope := m.slope()
	res.Den = den
	slope.Mul(slope, arx.inv)
	res.Cov = mat.NewSymDense(n, nil)
	res.Cov.SymOuterK(sigma*sigma, slope)
	return res, nil
}

// realisation is how the state matrix comes about from the coefficients of the long ARX, theta. The state is the past times
// tr, which is h(theta)' times the first n right singular vectors, each times scale over its singular value. A' is C tr_1', tr_1' being the
// first row of tr, of the output that the next past has more, and what regression on the state makes of the older past in
// the places that it has moved to.
type realisation struct {
	right             *mat.Dense // singular vectors, future by future
	values            []float64  // singular values
	scale             float64    // of the state, root of the rows
	long, known       mat.Dense  // h' times right; the products of the past times right, both 2 past by future
	tr, c             *mat.Dense // 2 past by n, n by 1
	at                mat.Matrix // A', n by n
	perPast, perState mat.Matrix // n by 2 past
}

// slope returns the characteristic polynomial of A in powers of δ and its derivative for each coefficient of the long
// ARX, n by 2 past. It is exact to first order in the errors of the long ARX where that has a state of order n: there the
// regressions leave nothing over, so that the products of the data need no derivative, and the estimate is asymptotically
// a function of the coefficients of the long model alone (Chiuso 2007). The singular vectors move by the perturbation of
// eigenvectors of h P h', P the products of the past (Stewart & Sun, Matrix Perturbation Theory, 1990, section V.2):
// by little, unless a state hardly stands out of the noise.
func (m *realisation) slope() (den lti.Poly, slope *mat.Dense) {
	columns, n := m.tr.Dims()
	future, _ := m.right.Dims()
	den, adj := characteristic(m.at)
	slope = mat.NewDense(n, columns, nil)
	first := m.tr.Slice(0, 1, 0, n)
	var shifted mat.Dense // A' less C tr_1'
	shifted.Mul(m.c, first)
	shifted.Sub(m.at, &shifted)
	turned := mat.NewDense(columns, future, nil) // derivative of h' times right
	moved := mat.NewDense(columns, n, nil)
	states, rest := turned.Slice(0, columns, 0, n), turned.Slice(0, columns, n, future)
	var mix, other, swing, dtr, da, part, dc mat.Dense
	for i := range columns {
		turned.Zero()
		for j := 0; j < future && i-2*j >= 0; j++ {
			turned.SetRow(i-2*j, m.right.RawRowView(j))
		}
		dtr.CloneFrom(states)
		if n < future {
			mix.Mul(rest.T(), m.known.Slice(0, columns, 0, n))
			other.Mul(m.known.Slice(0, columns, n, future).T(), states)
			mix.Add(&mix, &other)
			mix.Apply(func(k, j int, v float64) float64 {
				return v / (m.values[j] - m.values[n+k]) / (m.values[j] + m.values[n+k])
			}, &mix)
			swing.Mul(m.long.Slice(0, columns, n, future), &mix)
			dtr.Add(&dtr, &swing)
		}
		dtr.Apply(func(_, j int, v float64) float64 { return v / m.values[j] * m.scale }, &dtr)
		moved.Slice(0, columns-2, 0, n).(*mat.Dense).Copy(dtr.Slice(2, columns, 0, n))
		part.Mul(m.perState, &dtr)
		dc.Mul(&part, m.c)
		for j := range n {
			dc.Set(j, 0, m.perState.At(j, i)-dc.At(j, 0))
		}
		da.Mul(&dc, first)
		part.Mul(m.c, dtr.Slice(0, 1, 0, n))
		da.Add(&da, &part)
		part.Mul(m.perPast, moved)
		da.Add(&da, &part)
		part.Mul(m.perPast, &dtr)
		part.Mul(&part, &shifted)
		da.Sub(&da, &part)
		for j, a := range adj {
			part.Mul(a, &da)
			slope.Set(j, i, -mat.Trace(&part))
		}
	}
	return den, slope
}

// characteristic returns det(δI - (a-I)) in powers of δ and the matrices N_i of the adjoint, the sum of N_i δ^i, by
// Leverrier and Faddeev's recursion (Gantmacher, The Theory of Matrices 1, 1959, chapter IV section 5): a change da of a
// moves coefficient i by -tr(N_i da).
func characteristic(a mat.Matrix) (den lti.Poly, adj []*mat.Dense) {
	n, _ := a.Dims()
	den, adj = make(lti.Poly, n+1), make([]*mat.Dense, n)
	den[n] = 1
	var less mat.Dense
	less.CloneFrom(a)
	for i := range n {
		less.Set(i, i, less.At(i, i)-1)
	}
	next := mat.NewDense(n, n, nil)
	for i := n - 1; i >= 0; i-- {
		for k := range n {
			next.Set(k, k, next.At(k, k)+den[i+1])
		}
		adj[i] = mat.DenseCopyOf(next)
		next.Mul(&less, adj[i])
		den[i] = -mat.Trace(next) / float64(n-i)
	}
	return den, adj
}

func copyColumn(dst *mat.Dense, j int, v mat.Vector) {
	for i := range v.Len() {
		dst.Set(i, j, v.AtVec(i))
	}
}

// nearlySingular is the error beside an answer that mat still gives.
func nearlySingular(err error) bool {
	var c mat.Condition
	return errors.As(err, &c) && !math.IsInf(float64(c), 1)
}

// noiseSingular is the size of singular value that the errors of an ARX of order past leave where there is no state, with
// n rows. The errors of the coefficients, times the past over the data, are white with variance 1/n in each of 2 past
// orthogonal directions. A future by 2 past matrix of such has its largest singular value near
// (sqrt(future) + sqrt(2 past)) / sqrt(n) (Davidson & Szarek 2001, theorem II.13); the shifted rows repeat the same
// errors, for which the factor is doubled.
func noiseSingular(past, future, n int) float64 {
	return 2 * (math.Sqrt(float64(future)) + math.Sqrt(float64(2*past))) / math.Sqrt(float64(n))
}

// Discrete returns the model as polynomials.
func (s *StateResult) Discrete() *Discrete {
	n, _ := s.A.Dims()
	d := &Discrete{A: delayPoly(s.Poles), Delay: 1, Variance: s.Variance}
	// det(zI - A + v C) = det(zI - A) + C adj(zI - A) v is linear in v; v as large as A keeps the difference from cancelling.
	difference := func(v *mat.Dense) (poly, closed []float64) {
		scale := 1.0
		if p := mat.Norm(v, 2) * mat.Norm(s.C, 2); p > 0 {
			scale = max(mat.Norm(s.A, 2), 1) / p
		}
		var m mat.Dense
		m.Mul(v, s.C)
		m.Scale(-scale, &m)
		m.Add(s.A, &m)
		closed = delayPoly(eigenvalues(&m))
		poly = make([]float64, n+1)
		for i := range poly {
			poly[i] = (closed[i] - d.A[i]) / scale
		}
		return poly, closed
	}
	d.B, _ = difference(s.B)
	d.C, _ = difference(s.K)
	for i := range d.C {
		d.C[i] += d.A[i]
	}
	d.C = insideCircle(d.C)
	return d
}
