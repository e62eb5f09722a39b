package fit

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/mat"
)

// ARX is the model, for sample k of record s,
//
//	y_k = c_s - sum_{i=1}^{NA} a_i y_{k-i} + sum_{i=Delay}^{Delay+NB-1} b_i u_{k-i} + e_k
//
// estimated by least squares (Ljung, System Identification, 2nd ed. 1999, section 4.2). In closed loop it needs a
// sample of delay in plant or controller, and an order past the memory of the predictor; then it is consistent.
type ARX struct {
	A         []float64     // A[0] = 1; A[i] multiplies y_{k-i}
	B         []float64     // B[i] multiplies u_{k-i}; zero below Delay
	Delay     int           // index of the first estimated coefficient of B
	Const     []float64     // c_s of each record; NaN for a record too short to be used
	Variance  float64       // of e: RSS over degrees of freedom
	Cov       *mat.SymDense // of (a_1 ... a_NA, b_Delay ... b_{Delay+NB-1}); the constants are estimated with them
	RSS       float64       // residual sum of squares
	Rows      int           // rows of the regression, all records together
	First     int           // first row of each record
	Order     int           // the longer of NA and Delay+NB-1
	Condition float64       // of the regressors scaled to unit length, their means removed

	root *mat.Dense // rows of any order: root'root is the inverse of Cov times Variance
}

// ARXOptions are taken literally: no field but First has a default.
type ARXOptions struct {
	NA, NB int
	// Delay is the index of the first coefficient of B: 1 for a plant sampled through a hold. 0 adds the direct term. In
	// closed loop under a law that answers to the output of the same sample it is not zero, for u_k then holds e_k:
	// whether the columns are paired rightly is for Refined to tell, whose delay is not negative if they are.
	Delay int
	// First is the first row of each record; 0 (default), or anything too small, is the least possible, the order. A
	// common First makes models of different orders comparable.
	First      int
	NoConstant bool // c_s = 0; the default is a constant for each record
}

func (o ARXOptions) lags() (lags []lag, order int) {
	if o.NA < 0 || o.NB < 0 || o.Delay < 0 || o.First < 0 {
		panic(badOrder)
	}
	if o.NA+o.NB == 0 {
		panic(noParameters)
	}
	// Taken in turn, so that the leading columns are a model of lower order.
	for i := range max(o.NA, o.NB) {
		if i < o.NA {
			lags = append(lags, lag{output, i + 1})
		}
		if i < o.NB {
			lags = append(lags, lag{input, o.Delay + i})
		}
	}
	order = o.NA
	if o.NB > 0 {
		order = max(order, o.Delay+o.NB-1)
	}
	return lags, order
}

// FitARX estimates the model of opt from the records. Records with no two rows to give are left out. The error is a
// Condition, with the model still returned, when the data hardly tell the parameters apart, as without power from
// outside the loop; with Condition(+Inf) there is no model.
func FitARX(recs []Record, opt ARXOptions) (*ARX, error) {
	checkRecords(recs)
	lags, order := opt.lags()
	g := newRegression(signals(recs), lags, max(order, opt.First), opt.NoConstant)
	t, err := g.reduce()
	if err != nil {
		return nil, fmt.Errorf("ARX of order %d: %w", order, err)
	}
	return g.arx(t, opt)
}

// arx turns the solution for the columns of opt, the leading ones of t, into a model.
func (g *regression) arx(t *triangle, opt ARXOptions) (*ARX, error) {
	q := opt.NA + opt.NB
	s := t.solve(q)
	if math.IsInf(s.cond, 1) {
		return nil, Condition(s.cond)
	}
	_, order := opt.lags()
	m := &ARX{
		A: make([]float64, opt.NA+1), B: make([]float64, opt.Delay+opt.NB), Delay: opt.Delay,
		RSS: s.rss, Rows: g.rows, First: g.first, Order: order, Condition: s.cond,
		Const: make([]float64, len(g.data)),
	}
	m.A[0] = 1
	df := g.rows - q - g.constants()
	m.Variance = s.rss / float64(df)
	if df <= 0 {
		m.Variance = math.NaN()
	}
	cov := s.covariance(m.Variance)
	m.Cov = mat.NewSymDense(q, nil)
	at, sign := make([]int, q), make([]float64, q) // place of each lag in the covariance, and sign of its coefficient
	for j, l := range g.lags[:q] {
		if l.signal == input {
			m.B[l.steps] = s.coef[j]
			at[j], sign[j] = opt.NA+l.steps-opt.Delay, 1
		} else {
			m.A[l.steps] = -s.coef[j]
			at[j], sign[j] = l.steps-1, -1
		}
	}
	for i := range q {
		for j := i; j < q; j++ {
			m.Cov.SetSym(at[i], at[j], sign[i]*sign[j]*cov.At(i, j))
		}
	}
	m.root = mat.NewDense(q, q, nil)
	for i := range q {
		for j := i; j < q; j++ {
			m.root.Set(i, at[j], sign[j]*t.r.At(i, j)*t.scale[j])
		}
	}
	for i := range m.Const {
		m.Const[i] = math.NaN()
	}
	for _, i := range g.used {
		m.Const[i] = 0
		if g.without {
			continue
		}
		sums := g.sums(plain(g.data[i]))
		c := sums[len(g.lags)]
		for j := range q {
			c -= s.coef[j] * sums[j]
		}
		m.Const[i] = c / float64(len(g.data[i][output])-g.first)
	}
	if s.cond > ConditionLimit {
		return m, Condition(s.cond)
	}
	return m, nil
}

// DefaultMaxOrder is the largest order tried by ChooseARX, and DefaultRowsPerOrder the least number of rows for each
// unit of order.
const (
	DefaultMaxOrder     = 60
	DefaultRowsPerOrder = 10
)

// ChooseOptions of ChooseARX. Orders n have NA = NB = n.
type ChooseOptions struct {
	MinOrder  int // 0: 1
	MaxOrder  int // 0: DefaultMaxOrder, or less where there are not DefaultRowsPerOrder rows for each unit
	Delay     int // as in ARXOptions, taken literally
	Criterion Criterion
	// NoConstant as in ARXOptions.
	NoConstant bool
}

// OrderScore is what one order reaches on the sample common to all.
type OrderScore struct {
	Order, Parameters, Rows int // parameters with the constants
	RSS, Score              float64
}

// ARXOrders scores the orders of opt on one common sample, the rows that the largest order leaves, by one reduction of
// the data: the factor of the largest order holds those of all smaller ones.
func ARXOrders(recs []Record, opt ChooseOptions) ([]OrderScore, error) {
	checkRecords(recs)
	if opt.MinOrder < 0 || opt.MaxOrder < 0 {
		panic(badOrder)
	}
	lo, hi := max(opt.MinOrder, 1), opt.MaxOrder
	if hi == 0 {
		rows := 0
		for _, r := range recs {
			rows += len(r.Y)
		}
		hi = max(lo, min(DefaultMaxOrder, rows/DefaultRowsPerOrder))
		for hi > lo && usableRows(recs, hi+opt.Delay) < DefaultRowsPerOrder*hi {
			hi--
		}
	}
	if hi < lo {
		panic(badOrder)
	}
	lags, order := ARXOptions{NA: hi, NB: hi, Delay: opt.Delay}.lags()
	g := newRegression(signals(recs), lags, order, opt.NoConstant)
	t, err := g.reduce()
	if err != nil {
		return nil, fmt.Errorf("ARX of order %d: %w", hi, err)
	}
	scores := make([]OrderScore, 0, hi-lo+1)
	for n := lo; n <= hi; n++ {
		p := 2*n + g.constants()
		rss := t.rss(2 * n)
		scores = append(scores, OrderScore{n, p, g.rows, rss, opt.Criterion.Value(rss, g.rows, p)})
	}
	return scores, nil
}

func usableRows(recs []Record, first int) int {
	return newRegression(signals(recs), nil, first, true).rows
}

// ChooseARX returns the model of the order with the least score, fitted to all rows that this order leaves. Errors are
// those of FitARX.
func ChooseARX(recs []Record, opt ChooseOptions) (*ARX, error) {
	scores, err := ARXOrders(recs, opt)
	if err != nil {
		return nil, err
	}
	best := scores[0]
	for _, s := range scores {
		if s.Score < best.Score {
			best = s
		}
	}
	if math.IsInf(best.Score, 1) {
		return nil, fmt.Errorf("ARX: %d rows are too few for %d parameters", best.Rows, best.Parameters)
	}
	return FitARX(recs, ARXOptions{NA: best.Order, NB: best.Order, Delay: opt.Delay, NoConstant: opt.NoConstant})
}

// LongFactor times the order of least AICc is the order of LongARX. At the order of least AICc itself what the model
// leaves out is small in the residuals but not in the poles of a short model taken from it: on the rigs of package
// fittest null-space fitting then errs by up to 100 times the Cramér-Rao bound, at three times the order by 1.0 to 1.4
// times. Orders beyond cost little.
const LongFactor = 3

// LongARX returns a model with delay 1 that is long enough to be reduced: LongFactor times the order of least AICc, or
// less where there are not DefaultRowsPerOrder rows for each unit. Errors are those of FitARX.
func LongARX(recs []Record) (*ARX, error) {
	m, err := ChooseARX(recs, ChooseOptions{Delay: 1})
	var ill Condition
	if err != nil && !(m != nil && errors.As(err, &ill)) {
		return nil, err
	}
	n := LongFactor * m.Order
	for n > m.Order && usableRows(recs, n) < DefaultRowsPerOrder*n {
		n--
	}
	return FitARX(recs, ARXOptions{NA: n, NB: n, Delay: 1})
}

// At returns g = B/A and h = 1/A at omega rad/s for samples period s apart: y = g u + h e.
func (m *ARX) At(omega, period float64) (g, h complex128) {
	q := cmplx.Exp(complex(0, -omega*period)) // z^-1
	a := polyAt(m.A, q)
	return polyAt(m.B, q) / a, 1 / a
}

func polyAt(p []float64, x complex128) complex128 {
	var v complex128
	for i := len(p) - 1; i >= 0; i-- {
		v = v*x + complex(p[i], 0)
	}
	return v
}

// Residuals returns e_k of each record; entry 0 belongs to sample m.Order. The records are those of the fit, or as many
// others with the same constants; a record that is too short or has no constant gives nil.
func (m *ARX) Residuals(recs []Record) [][]float64 {
	checkRecords(recs)
	if len(recs) != len(m.Const) {
		panic("fit: number of records differs from that of the fit")
	}
	out := make([][]float64, len(recs))
	for i, r := range recs {
		if len(r.Y) <= m.Order || math.IsNaN(m.Const[i]) {
			continue
		}
		e := make([]float64, len(r.Y)-m.Order)
		for k := range e {
			t := k + m.Order
			v := -m.Const[i]
			for j, a := range m.A {
				v += a * r.Y[t-j]
			}
			for j := m.Delay; j < len(m.B); j++ {
				v -= m.B[j] * r.U[t-j]
			}
			e[k] = v
		}
		out[i] = e
	}
	return out
}
