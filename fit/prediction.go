package fit

import (
	"errors"
	"math"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Shape fixes the structure of a prediction-error model.
type Shape struct {
	Poles  int // of the plant, 1 or more
	Zeros  int // of the plant, fewer than Poles
	Colour int // poles of the disturbance's own, 0 to 2
	// Integrators is how many of the plant's poles are held at zero.
	Integrators int
	// FreeDelay estimates the delay too; else it stays where the start puts it.
	FreeDelay bool
}

// Free returns the number of free parameters that structures of this shape
// share over all records: numerator, denominator, delay, colour, noise zeros.
func (s Shape) Free() int { return s.size() - s.Integrators }

// size counts the fixed coefficients of integrators as well.
func (s Shape) size() int {
	n := s.Zeros + 1 + s.Poles + s.Colour + s.Poles + s.Colour
	if s.FreeDelay {
		n++
	}
	return n
}

// fixed reports whether parameter k is one that integrators hold at zero.
func (s Shape) fixed(k int) bool {
	end := s.Zeros + 1 + s.Poles
	return k < end && k >= end-s.Integrators
}

// Prediction is a plant in continuous time with its noise shape,
//
//	A(q) D(q) y = B(q) D(q) u + κ + C(q) e,
//
// A and B the zero-order-hold samples of Num/Den e^(-Delay s), κ a constant
// for each record or for several that resume one another, e of one variance in
// each log. Plant and noise share A, so that the predictor is stable
// for an unstable plant as soon as C is (Forssell & Ljung, Identification of
// unstable systems using output error and Box-Jenkins model structures, IEEE
// Trans. Automatic Control 45 (2000) 137-141).
type Prediction struct {
	Shape
	Num, Den lti.Poly  // ascending powers of s; Den ends in 1
	Delay    float64   // s
	D, C     []float64 // powers of z^-1, monic
	Period   float64   // s

	Const     []float64 // κ of each record, output units
	Constants int       // how many of them are estimated: records may share one
	RSS       float64   // of the prediction errors, start-up errors included; of N rows of variance Variance where logs differ
	LogDet    float64   // of the information of start-up errors and missing outputs, the rest of the exact likelihood
	Rows      int       // equations used, less the missing outputs
	Variance  float64   // of e; of several logs the geometric mean by rows, to which Cov refers
	Levels    []float64 // variance of e in each log; 0 for a log without equations
	// Cov is the covariance of b_0 … b_m, a_1 … a_n, the delay where it is
	// free, and then the coefficients of D and C in powers of δ = q - 1.
	Cov       *mat.SymDense
	Condition float64 // of the equilibrated information matrix
	Converged bool
	Steps     int
}

// TF returns the plant.
func (p *Prediction) TF() lti.TF { return lti.TF{Num: p.Num, Den: p.Den, Delay: p.Delay} }

// BIC is Schwarz's criterion over the rows of the fit, by the exact likelihood.
func (p *Prediction) BIC() float64 {
	return BIC.Value(p.Objective(), p.Rows, p.Free()+p.Constants)
}

// Objective is what a fit makes least: the sum of squares times the part of the
// exact likelihood that start-up errors bring, in the output's units squared. The
// sum of squares of logs that differ in variance is that of their geometric mean.
func (p *Prediction) Objective() float64 { return p.RSS * math.Exp(p.LogDet/float64(p.Rows)) }

// H returns the noise shape C/(A D), as y = G u + H e.
func (p *Prediction) H() lti.DTF {
	d := lti.SampleDeltaValues(p.Num, p.Den, p.Delay, p.Period)
	return lti.DTF{Num: append(lti.Poly(nil), p.C...), Den: lti.Poly(lti.Shift(nil, d.A)).Mul(p.D), Period: p.Period}
}

// ErrNoFit says that no step from the start improved on it in finite numbers.
var ErrNoFit = errors.New("fit: prediction errors are not finite at the start")

// Fit refines a start by maximum likelihood. The start's polynomials set the
// shape's sizes, its Delay the fixed or first delay. tol is the relative gain
// at which to stop; below 1e-9 the estimate no longer moves in any digit that
// matters. limit bounds the number of steps.
func (p *Predictor) Fit(start *Prediction, tol float64, limit int) (*Prediction, error) {
	s, x := p.begin(start)
	defer s.done()
	x, objective, steps, converged := s.minimise(x, tol, limit)
	if s.stopped != nil || !(objective < math.Inf(1)) {
		return nil, s.failure()
	}
	return s.result(x, steps, converged), nil
}

// Covariance adds the covariance of the estimate, the inverse of the
// information at the optimum times the variance of e. It returns an error
// where the information is singular: the data do not tell all parameters
// apart.
func (p *Predictor) Covariance(m *Prediction) error {
	s, x := p.begin(m)
	defer s.done()
	_, q, ok := s.errorsAt(x)
	if !ok {
		return s.failure()
	}
	h, _ := s.information(x, q)
	if s.stopped != nil {
		return s.failure()
	}
	n := s.shape.size()
	s.hold(h, nil)
	sd := make([]float64, n)
	for i := range sd {
		sd[i] = math.Sqrt(h.At(i, i))
	}
	for i := range n {
		for j := i; j < n; j++ {
			h.SetSym(i, j, h.At(i, j)/(sd[i]*sd[j]))
		}
	}
	var chol mat.Cholesky
	if !chol.Factorize(h) {
		return ErrSingular
	}
	m.Condition = math.Sqrt(chol.Cond())
	inv := mat.NewSymDense(n, nil)
	if err := chol.InverseTo(inv); err != nil {
		var cond mat.Condition
		if !errors.As(err, &cond) {
			return ErrSingular
		}
	}
	unit := s.units()
	variance := m.Variance / (s.sy * s.sy)
	m.Cov = mat.NewSymDense(n, nil)
	for i := range n {
		for j := i; j < n; j++ {
			v := inv.At(i, j) * variance * unit[i] * unit[j] / (sd[i] * sd[j])
			if s.shape.fixed(i) || s.shape.fixed(j) {
				v = 0
			}
			m.Cov.SetSym(i, j, v)
		}
	}
	return nil
}

// ErrSingular says that the data do not tell all parameters apart.
var ErrSingular = errors.New("fit: information matrix is singular")

// Errors returns the one-step prediction errors of m, record by record, in the
// output's units, with the constants and start-up errors that fit best.
// before[n][i] is the start-up error i+1 rows before the first of record n.
func (p *Predictor) Errors(m *Prediction) (errs, before [][]float64, err error) {
	s, x := p.begin(m)
	defer s.done()
	if _, _, ok := s.errorsAt(x); !ok {
		return nil, nil, s.failure()
	}
	for i := range s.work {
		e := append([]float64(nil), s.work[i].e[s.start(i)+s.warm[i]:]...)
		floats.Scale(s.sy, e)
		errs = append(errs, e)
		e = append([]float64(nil), s.work[i].all.x[1:]...)
		floats.Scale(s.sy, e)
		before = append(before, e)
	}
	return errs, before, nil
}
