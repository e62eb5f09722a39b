package fit

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/blas"
	"gonum.org/v1/gonum/blas/blas64"
	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
)

// InstrumentOptions of Instrument.
type InstrumentOptions struct {
	NA, NB, Delay int // as in ARXOptions, taken literally
	// Lags of the outside signal that serve as instruments, r_{k-Delay} ... r_{k-Delay-Lags+1}; 0: DefaultInstruments, or
	// NA+NB if that is more.
	Lags int
	// Filter is the polynomial in z^-1 by whose inverse input and output are filtered before the fit, C of a noise model
	// A y = B u + C e, zeros inside the unit circle; nil: 1. A wrong one costs accuracy but makes no bias.
	Filter     []float64
	NoConstant bool
}

// DefaultInstruments is the default number of lags of the outside signal.
const DefaultInstruments = 30

// InstrumentResult is a plant A y = B u estimated through the outside signal alone.
type InstrumentResult struct {
	Discrete          // C is the filter; Variance that of what is left after filtering, white or not
	Rows      int     // rows of the regression
	Condition float64 // of the explained regressors
	// Share is how much of that combination of the regressors that the outside signal explains least it does explain:
	// the least squared canonical correlation, between 0 and 1. About Lags/(Rows Share) of the bias of plain least
	// squares remains.
	Share float64
}

// Instrument estimates a plant in closed loop by two-stage least squares with lags of a signal from outside the loop,
// reference or dither, as instruments: the regressors of A y = B u are replaced by what these lags explain of them. It
// needs no noise model: the noise may be of any colour if only it is independent of the outside signal. Söderström &
// Stoica, Instrumental Variable Methods for System Identification, Springer 1983, chapters 3 and 4; for the filter in
// closed loop, Gilson & Van den Hof, Instrumental variable methods for closed-loop system identification, Automatica 41
// (2005) 241-249.
//
// The covariance holds for residuals of any colour: their autocorrelation is estimated over as many lags as there are
// instruments, with Bartlett's weights (Newey & West, A simple, positive semi-definite, heteroskedasticity and
// autocorrelation consistent covariance matrix, Econometrica 55 (1987) 703-708). outsideSignal has one slice for each record,
// as long as the record. The error is Condition, without a result, where the outside signal does not excite enough.
func Instrument(recs []Record, outsideSignal [][]float64, opt InstrumentOptions) (*InstrumentResult, error) {
	checkRecords(recs)
	if len(outsideSignal) != len(recs) || opt.Lags < 0 {
		panic(badRecord)
	}
	lags, order := ARXOptions{NA: opt.NA, NB: opt.NB, Delay: opt.Delay}.lags()
	q := len(lags)
	count := opt.Lags
	if count == 0 {
		count = max(DefaultInstruments, q)
	}
	if count < q {
		panic("fit: fewer instruments than parameters")
	}
	c := opt.Filter
	if c == nil {
		c = []float64{1}
	}
	data := make([][][]float64, len(recs))
	for i, r := range recs {
		if len(outsideSignal[i]) != len(r.Y) {
			panic(badRecord)
		}
		u, y := r.U, r.Y
		if !opt.NoConstant && len(y) > 0 {
			u, y = lessMean(u), lessMean(y) // a step at the start would ring through the filter
		}
		data[i] = [][]float64{output: divideBy(y, c, len(y)), input: divideBy(u, c, len(u)), outside: outsideSignal[i]}
	}
	var all []lag
	for j := range count {
		all = append(all, lag{outside, opt.Delay + j})
	}
	all = append(all, lags...)
	first := max(order, opt.Delay+count-1)
	g := newRegression(data, all, first, opt.NoConstant)
	t, err := g.reduce()
	if err != nil {
		return nil, fmt.Errorf("instrumental variables: %w", err)
	}
	if cond := t.cond(count); cond > ConditionLimit {
		return nil, fmt.Errorf("instrumental variables: outside signal: %w", Condition(cond))
	}

	// The first count rows of the factor are what the instruments explain of the regressors and of y.
	cols := make([][]float64, q)
	explained := make([]float64, count)
	for i := range explained {
		explained[i] = t.r.At(i, len(all))
	}
	for j := range cols {
		cols[j] = make([]float64, count)
		for i := range cols[j] {
			cols[j][i] = t.r.At(i, count+j) * t.scale[count+j]
		}
	}
	res := &InstrumentResult{Rows: g.rows, Share: leastShare(t, count, q)}
	h := newHouseholder(cols, count)
	s := h.triangle().solve(q)
	if s.cond > ConditionLimit {
		return nil, fmt.Errorf("instrumental variables: %w", Condition(s.cond))
	}
	res.Condition = s.cond
	theta, _ := h.refined(explained)

	e := make([][]float64, len(g.used))
	rss := 0.0
	for n, i := range g.used {
		x := data[i]
		v := append([]float64(nil), x[output][first:]...)
		for j, l := range lags {
			floats.AddScaled(v, -theta[j], x[l.signal][first-l.steps:len(x[output])-l.steps])
		}
		if !opt.NoConstant {
			v = lessMean(v)
		}
		e[n], rss = v, rss+floats.Dot(v, v)
	}
	df := g.rows - q - g.constants()
	if df < 1 {
		return nil, fmt.Errorf("instrumental variables: %d rows are too few for %d parameters", g.rows, q)
	}
	res.Variance = rss / float64(df)
	res.Delay = opt.Delay
	res.A, res.B, res.C = make([]float64, opt.NA+1), make([]float64, opt.Delay+opt.NB), c
	res.A[0] = 1
	at, sign := make([]int, q), make([]float64, q)
	for j, l := range lags {
		if l.signal == input {
			res.B[l.steps] = theta[j]
			at[j], sign[j] = opt.NA+l.steps-opt.Delay, 1
		} else {
			res.A[l.steps] = -theta[j]
			at[j], sign[j] = l.steps-1, -1
		}
	}
	cov := instrumentCovariance(t, cols, s, e, g, count)
	scale := float64(g.rows) / float64(df)
	res.Cov = mat.NewSymDense(q, nil)
	for i := range q {
		for j := i; j < q; j++ {
			res.Cov.SetSym(at[i], at[j], sign[i]*sign[j]*scale*cov.At(i, j))
		}
	}
	return res, nil
}

// instrumentCovariance is that of theta. With r the vector of instruments, theta errs by W sum r_k e_k, W = (X'X)^-1 P' for
// explained regressors X = r P; as e is independent of r the sum has the Toeplitz covariance
// v(d) = sum_tau gamma_e(tau) sum_k r_k r_{k-d-tau}.
func instrumentCovariance(t *triangle, cols [][]float64, s solution, e [][]float64, g *regression, count int) *mat.SymDense {
	q := len(cols)
	r := make([][]float64, len(g.used))
	for n, i := range g.used {
		r[n] = g.data[i][outside]
	}
	rr, _ := autocovariances(r, 2*count)
	ee, _ := autocovariances(e, count)
	v := mat.NewSymDense(count, nil)
	for d := range count {
		sum := 0.0
		for tau := -count; tau <= count; tau++ {
			k := tau
			if k < 0 {
				k = -k
			}
			bartlett := 1 - float64(k)/float64(count+1)
			lag := d + tau
			if lag < 0 {
				lag = -lag
			}
			sum += bartlett * ee[k] / float64(g.rows) * rr[lag]
		}
		for i := 0; i+d < count; i++ {
			v.SetSym(i, i+d, sum)
		}
	}
	// P = R^-1 times the columns; (X'X)^-1 = inv inv'.
	p := mat.NewDense(count, q, nil)
	upper := t.leading(count)
	for j, c := range cols {
		x := append([]float64(nil), c...)
		blas64.Trsv(blas.NoTrans, upper.RawTriangular(), blas64.Vector{N: count, Data: x, Inc: 1})
		for i := range x {
			p.Set(i, j, x[i]/t.scale[i])
		}
	}
	var w, half mat.Dense
	w.Product(p, s.inv, s.inv.T()) // W'
	half.Mul(v, &w)
	cov := mat.NewSymDense(q, nil)
	for i := range q {
		for j := i; j < q; j++ {
			cov.SetSym(i, j, mat.Dot(w.ColView(i), half.ColView(j)))
		}
	}
	return cov
}

// leastShare returns the least squared canonical correlation of the first count columns of t with the next q.
func leastShare(t *triangle, count, q int) float64 {
	block := mat.DenseCopyOf(t.r.Slice(0, count+q, count, count+q))
	var qr mat.QR
	qr.Factorize(block)
	var basis mat.Dense
	qr.QTo(&basis)
	var svd mat.SVD
	if !svd.Factorize(basis.Slice(0, count, 0, q), mat.SVDNone) {
		return math.NaN()
	}
	sv := svd.Values(nil)
	return sv[q-1] * sv[q-1]
}
