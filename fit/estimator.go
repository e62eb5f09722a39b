package fit

import (
	"errors"
	"math"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Estimator finds the poles of a plant from records taken in closed loop, by one set of assumptions. A method that is not
// in Estimators has to pass fittest's conformance suite before it joins them.
type Estimator interface {
	// Name is what the method takes for granted, in one word: "prediction", "state", "long", "outside".
	Name() string
	// Estimate finds the poles in the structure of found: number of poles and of colour poles, delay, period. What found
	// says of their values is a start or a filter at most. outside[n] holds the signals from outside the loop that were logged
	// beside record n, each as long as the record; nil where there are none.
	Estimate(recs []Record, outside [][][]float64, found *Prediction) (*PoleEstimate, error)
}

// Estimators are the methods of this package, the one that decides first.
func Estimators() []Estimator {
	return []Estimator{PredictionMethod{}, StateMethod{}, LongMethod{}, OutsideMethod{}}
}

// PoleEstimate is what a method says of the poles: the denominator of the sampled plant, times that of the disturbance's
// own colour and with a root at -1 for each sample of delay where the method fits these together, in powers of δ = z - 1.
// Its coefficients and their covariance are regular where poles meet.
type PoleEstimate struct {
	Den    lti.Poly      // n+1 coefficients, Den[i] multiplies δ^i, Den[n] = 1
	Cov    *mat.SymDense // n by n, of Den[0] ... Den[n-1]
	Period float64       // s
}

// Remainder divides Den by q, monic of degree k and known exactly. The remainder, k coefficients ascending, is zero if
// all roots of q are roots of Den. It is linear in Den, so that its covariance is exact.
func (e *PoleEstimate) Remainder(q lti.Poly) (r []float64, cov *mat.SymDense) {
	_, rem := e.Den.Div(q)
	return rem, congruent(remainders(len(e.Den)-1, q), e.Cov)
}

// Disagreement compares Den with the monic q of degree k that another estimate has, cov being the covariance of its k lower
// coefficients: the remainder in units of its covariance. It is about chi-squared with k degrees of freedom if q's roots are
// among those of Den but for the errors of the two, and these are independent; less if the other estimate is efficient, for the
// two then differ by less than the first errs by itself (Hausman, Specification tests in econometrics, Econometrica 46
// (1978) 1251-1271, lemma 2.1). It is NaN where the covariance is singular.
func (e *PoleEstimate) Disagreement(q lti.Poly, cov mat.Symmetric) float64 {
	r, s := e.Remainder(q)
	w, _ := e.Den.Div(q)
	s.AddSym(s, congruent(factorSlope(w, q), cov))
	var chol mat.Cholesky
	v := mat.NewVecDense(len(r), r)
	var solved mat.VecDense
	if !chol.Factorize(s) || chol.SolveVecTo(&solved, v) != nil {
		return math.NaN()
	}
	return mat.Dot(v, &solved)
}

// Factor returns the monic factor of Den nearest to near by Newton's method on the remainder, for two roots Bairstow's
// (Stoer & Bulirsch, Introduction to Numerical Analysis, 3rd ed. 2002, section 5.6), with the covariance of its k
// coefficients, ascending. It is regular where the roots of the factor meet each other, not where they meet another
// root of Den. ok is false where there is no such factor: its roots have met others.
func (e *PoleEstimate) Factor(near lti.Poly) (q lti.Poly, cov *mat.SymDense, ok bool) {
	const steps, settled = 40, 1e-13
	q = append(lti.Poly(nil), near...)
	k := len(q) - 1
	var inverse mat.Dense
	for range steps {
		w, rem := e.Den.Div(q)
		// Den = q w + rem: a change dq of q takes dq w, modulo q, from the remainder.
		if err := inverse.Inverse(factorSlope(w, q)); err != nil && !nearlySingular(err) {
			return nil, nil, false
		}
		var dq mat.VecDense
		dq.MulVec(&inverse, mat.NewVecDense(k, rem))
		largest := 0.0
		for i := range k {
			q[i] += dq.AtVec(i)
			largest = math.Max(largest, math.Abs(dq.AtVec(i)))
		}
		if !(largest < math.MaxFloat64) {
			return nil, nil, false
		}
		if largest <= settled {
			var slope mat.Dense
			slope.Mul(&inverse, remainders(len(e.Den)-1, q))
			return q, congruent(&slope, e.Cov), true
		}
	}
	return nil, nil, false
}

// factorSlope returns the k by k matrix that takes a change of the k lower coefficients of the monic q to the change of
// q w modulo q: column i is x^i w.
func factorSlope(w, q lti.Poly) *mat.Dense {
	k := len(q) - 1
	m := mat.NewDense(k, k, nil)
	for i := range k {
		_, r := append(make(lti.Poly, i), w...).Div(q)
		m.SetCol(i, r)
	}
	return m
}

// remainders returns the k by n matrix whose column i is x^i modulo q.
func remainders(n int, q lti.Poly) *mat.Dense {
	m := mat.NewDense(len(q)-1, n, nil)
	for i := range n {
		x := make(lti.Poly, i+1)
		x[i] = 1
		_, r := x.Div(q)
		m.SetCol(i, r)
	}
	return m
}

// congruent returns j c j'.
func congruent(j mat.Matrix, c mat.Symmetric) *mat.SymDense {
	var full mat.Dense
	full.Product(j, c, j.T())
	n, _ := full.Dims()
	out := mat.NewSymDense(n, nil)
	for i := range n {
		for k := i; k < n; k++ {
			out.SetSym(i, k, (full.At(i, k)+full.At(k, i))/2)
		}
	}
	return out
}

// Sampled is the estimate that a denominator in continuous time makes, ascending and monic, cov being that of the
// coefficients of s^(n-1) ... s^0.
func Sampled(den lti.Poly, cov mat.Symmetric, period float64) *PoleEstimate {
	n := len(den) - 1
	w0 := timeScale(den, period)
	scaled := make(lti.Poly, n+1)
	for i, v := range den {
		scaled[i] = v * math.Pow(w0, float64(i-n))
	}
	d := lti.SampleDelta(lti.Poly{1}, scaled, 0, period*w0)
	e := &PoleEstimate{Den: reversed(d.A), Period: period}
	slope := mat.NewDense(n, n, nil) // of Den[i] along the coefficient of s^(n-1-k)
	for k := range n {
		for i := range n {
			slope.Set(i, k, d.DA[1+k][n-i]*math.Pow(w0, float64(-k-1)))
		}
	}
	e.Cov = congruent(slope, cov)
	return e
}

// inDelta is the estimate that a denominator in powers of z^-1 makes; the leading entries of cov belong to a_1, a_2 ...
func inDelta(a []float64, cov *mat.SymDense, period float64) *PoleEstimate {
	n := len(a) - 1
	slope := mat.NewDense(n, n, nil)
	for k := range n {
		unit := make([]float64, n+1)
		unit[k+1] = 1
		slope.SetCol(k, reversed(lti.Unshift(unit))[:n])
	}
	return &PoleEstimate{Den: reversed(lti.Unshift(a)), Cov: congruent(slope, cov.SliceSym(0, n)), Period: period}
}

func reversed(x []float64) []float64 {
	out := make([]float64, len(x))
	for i, v := range x {
		out[len(x)-1-i] = v
	}
	return out
}

// order returns how many poles plant and disturbance have together, and by how many samples, counted up, the input is
// late beyond the one that the hold takes: a delay of part of a sample brings a coefficient of B and a state as a whole
// one does.
func (p *Prediction) order() (poles, late int) {
	return p.Poles + p.Colour, max(0, int(math.Ceil(p.Delay/p.Period-1e-9)))
}

// predictor holds records for fits near p, which may put the delay two samples later.
func (p *Prediction) predictor(recs []Record) (*Predictor, error) {
	_, late := p.order()
	return NewPredictor(recs, p.Period, float64(late+2)*p.Period)
}

// PredictionMethod is maximum likelihood in continuous-time coefficients, by Predictor, from the model found. It takes
// the whole structure for granted, that of the noise included, and reaches the Cramér-Rao bound.
type PredictionMethod struct{}

var _ Estimator = PredictionMethod{}

// Name returns "prediction".
func (PredictionMethod) Name() string { return "prediction" }

// The search starts at the model found and ends where no digit that matters moves.
const (
	refineTol   = 1e-9
	refineSteps = 60
)

// Estimate refines found. Poles that found holds at zero stay there and have no deviation.
func (PredictionMethod) Estimate(recs []Record, _ [][][]float64, found *Prediction) (*PoleEstimate, error) {
	p, err := found.predictor(recs)
	if err != nil {
		return nil, err
	}
	f, err := p.Fit(found, refineTol, refineSteps)
	if err != nil {
		return nil, err
	}
	if err := p.Covariance(f); err != nil {
		return nil, err
	}
	return Sampled(f.Den, f.Cov.SliceSym(f.Zeros+1, f.Zeros+1+f.Poles), f.Period), nil
}

// StateMethod is predictor-based subspace identification, by Subspace. It takes the number of states for granted and a
// past long enough; in closed loop it is consistent, and not efficient on every rig.
type StateMethod struct{}

var _ Estimator = StateMethod{}

// Name returns "state".
func (StateMethod) Name() string { return "state" }

// Estimate fits one state for each pole of plant and disturbance and for each sample of delay.
func (StateMethod) Estimate(recs []Record, _ [][][]float64, found *Prediction) (*PoleEstimate, error) {
	poles, late := found.order()
	s, err := Subspace(recs, SubspaceOptions{Order: poles + late})
	if err != nil {
		return nil, err
	}
	return &PoleEstimate{Den: s.Den, Cov: s.Cov, Period: found.Period}, nil
}

// LongMethod is null-space fitting to a long ARX, by LongARX and NullSpace. It takes the orders of A, B and C for granted
// and a long model long enough; it is efficient among the models whose sampled coefficients are all free.
type LongMethod struct{}

var _ Estimator = LongMethod{}

// Name returns "long".
func (LongMethod) Name() string { return "long" }

// Estimate fits A with the poles of plant and disturbance together; the leading coefficients of B that a delay makes zero
// are left free.
func (LongMethod) Estimate(recs []Record, _ [][][]float64, found *Prediction) (*PoleEstimate, error) {
	long, err := LongARX(recs)
	if long == nil {
		return nil, err
	}
	poles, late := found.order()
	r, err := NullSpace(long, NullSpaceOptions{NA: poles, NB: poles + late, NC: poles})
	if err != nil {
		return nil, err
	}
	if r.Cov == nil {
		return nil, errors.New("null-space fitting: the long model does not tell the parameters apart")
	}
	return inDelta(r.A, r.Cov, found.Period), nil
}

// OutsideMethod is refined instrumental variables, by Predictor.Refined, with the noise model found as filter. It takes for
// granted that the outside signals do not know the noise, and nothing about the noise.
type OutsideMethod struct{}

var _ Estimator = OutsideMethod{}

// Name returns "outside".
func (OutsideMethod) Name() string { return "outside" }

// ErrNoOutside says that no signal from outside the loop was logged.
var ErrNoOutside = errors.New("no signal from outside the loop was logged")

// Estimate starts at found. Poles that found holds at zero stay there and have no deviation.
func (OutsideMethod) Estimate(recs []Record, outside [][][]float64, found *Prediction) (*PoleEstimate, error) {
	if outside == nil {
		return nil, ErrNoOutside
	}
	p, err := found.predictor(recs)
	if err != nil {
		return nil, err
	}
	r, err := p.Refined(found, outside)
	if err != nil {
		return nil, err
	}
	return r.Denominator(found.Period), nil
}

// Denominator is what r says of the poles, for samples period s apart.
func (r *Refined) Denominator(period float64) *PoleEstimate {
	return Sampled(r.Den, r.Cov.SliceSym(r.Zeros+1, r.Zeros+1+r.Poles), period)
}
