package fit

import (
	"errors"
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Assumption is what a test by SignSums rests on, beside the structure of the plant and an outside signal that is
// independent of the noise.
type Assumption int

const (
	// SymmetricResiduals: at the true plant the residuals are independent, each of a law symmetric about zero; their
	// signs are drawn anew. It takes the noise shape D/C for granted.
	SymmetricResiduals Assumption = iota
	// RandomLevels: the levels of the outside signal were drawn independently from one law; they change places. Nothing
	// is assumed of the noise: the shape D/C only weighs it.
	RandomLevels
)

// Loop is the law that ran, u_k = Σ U[i] u_{k-i} + Σ Y[i] y_{k-i} + Σ Outside[i] o_{k-i}, deviations; U[0] is not used.
// It shapes the instruments: a wrong one widens the region and does not make it wrong.
type Loop struct{ U, Y, Outside []float64 }

// SignSumOptions of NewSignSums.
type SignSumOptions struct {
	Assume  Assumption
	Outside [][]float64 // outside signal of each record, as long as the record
	Loop    Loop
	// From is the first row of each record that counts; nil: 0. Under RandomLevels whatever weighs the sums (the tuned
	// model, Loop, Rest) must not depend on levels from there on.
	From []int
	// Rest is taken off input and output, in the log's units.
	Rest struct{ U, Y float64 }
	// Whole is the least and the largest delay, in whole samples, that is asked about.
	Whole [2]int
	// Draws is the number m of sums, the true one among them; Largest the number q of largest ones that reject.
	Draws, Largest int
	Seed           uint64
}

// SignSums tells which plants a confidence region of level 1 - Largest/Draws holds. At a plant θ the residuals
//
//	ε_k(θ) = (A D y - B D u - κ)/C
//
// are multiplied with instruments ψ_k, filters of the outside signal alone, and summed. At the true plant they are a
// function of the noise alone, so that the sum H_0 = Σ ψ_k ε_k has the same law as sums H_1 … H_{m-1} in which signs
// or levels were drawn anew, and its norm is among the q largest of m with probability q/m, exactly, whatever the
// number of rows. The region is where it is not.
//
// Signs of residuals: Csáji, Campi & Weyer, Sign-perturbed sums: a new system identification approach for constructing
// exact non-asymptotic confidence regions in linear regression models, IEEE Trans. Signal Processing 63 (2015)
// 169-181, after Campi & Weyer, Guaranteed non-asymptotic confidence regions in system identification, Automatica 41
// (2005) 1751-1764. In closed loop the regressors hang together with the noise and instruments take their place: Volpe,
// Csáji, Carè & Weyer, Sign-perturbed sums (SPS) with instrumental variables for the identification of ARX systems,
// IEEE Conf. Decision and Control 2015. Levels of the outside signal: the same argument, made on what the experimenter
// drew himself (Fisher, The Design of Experiments, 1935, sec. 21; Lehmann & Romano, Testing Statistical Hypotheses, 3rd
// ed. 2005, sec. 15.2). ε_k(θ) at the true θ would have been the same under other levels, in closed loop too, since
// A y - B u is what the noise did; so nothing has to run again.
type SignSums struct {
	Rows  int // that count
	Units int // signs or levels that are drawn anew

	opt    SignSumOptions
	shape  Shape
	period float64 // in units of 1/w0
	w0     float64 // rad/s
	fixed  float64 // the delay where it is not free, in units of 1/w0

	instruments, columns int
	constants            []int         // records whose κ are unknowns of their own
	units                []float64     // of each unit: instruments by columns of residuals
	levels               []float64     // of each unit, about their mean; nil: signs
	weight               *mat.SymDense // V, Σ ψ ψ'
	sums                 [][]float64   // m times instruments by columns
	order                []int         // that breaks ties
}

const badSignSums = "fit: sign-perturbed sums need 0 < Largest < Draws, an outside signal and a From for each record, and a range of delays"

// ErrNoInstrument says that the outside signal does not reach all parameters.
var ErrNoInstrument = errors.New("fit: the outside signal does not tell all parameters apart")

// NewSignSums prepares the sums for plants of the tuned model's shape. The tuned model gives the noise shape D/C and the
// instruments: the gradient of the residuals as the outside signal alone would have made it (Söderström & Stoica,
// Instrumental Variable Methods for System Identification, Springer 1983, ch. 6). Integrators of the shape are free.
// Perturb has to follow for each draw.
func NewSignSums(recs []Record, tuned *Prediction, opt SignSumOptions) (*SignSums, error) {
	checkRecords(recs)
	if opt.From == nil {
		opt.From = make([]int, len(recs))
	}
	if opt.Largest < 1 || opt.Largest >= opt.Draws || len(opt.Outside) != len(recs) || len(opt.From) != len(recs) || opt.Whole[0] > opt.Whole[1] {
		panic(badSignSums)
	}
	w0 := timeScale(tuned.Den, tuned.Period)
	s := &SignSums{opt: opt, shape: tuned.Shape, w0: w0, period: tuned.Period * w0, fixed: tuned.Delay * w0, sums: make([][]float64, opt.Draws)}
	s.shape.Integrators = 0
	hold, starts := 1, [][]int(nil)
	n := tuned.Poles
	first := opt.Whole[1] + n + 1
	var longest int
	for i, r := range recs {
		longest = max(longest, len(r.Y))
		if opt.Assume == SymmetricResiduals && len(r.Y) > max(first, opt.From[i]) {
			s.constants = append(s.constants, i)
		}
	}
	if opt.Assume == RandomLevels {
		hold, starts = Levels(opt.Outside)
	}
	s.columns = n + 1 + opt.Whole[1] - opt.Whole[0] + n + 1 + len(s.constants)
	h := s.responses(tuned, hold, longest)
	s.instruments = len(h) + len(s.constants)
	s.weight = mat.NewSymDense(s.instruments, nil)
	for i, r := range recs {
		from := max(first, opt.From[i])
		if len(r.Y) <= from {
			continue
		}
		if len(opt.Outside[i]) != len(r.Y) {
			panic(badRecord)
		}
		x := s.regressors(r, i, tuned, first)
		if opt.Assume == RandomLevels {
			for _, b := range starts[i] {
				if b >= opt.From[i] {
					s.levels = append(s.levels, opt.Outside[i][b])
					s.addUnit(h, x, b)
				}
			}
		} else {
			s.addRows(h, x, lessMean(opt.Outside[i]), from)
		}
		s.Rows += len(r.Y) - from
	}
	if s.levels != nil {
		s.levels = lessMean(s.levels)
		for j := range h {
			for l := j; l < len(h); l++ {
				s.weight.SetSym(j, l, floats.Dot(h[j], h[l]))
			}
		}
	}
	size := s.instruments * s.columns
	if s.Units = len(s.units) / size; s.Units == 0 {
		return nil, ErrNoInstrument
	}
	if _, ok := root(s.weight); !ok {
		return nil, ErrNoInstrument
	}
	s.order = rand.New(rand.NewPCG(opt.Seed, 0)).Perm(opt.Draws)
	s.Perturb(0)
	return s, nil
}

// Perturb makes sum i, 0 being the true one, from PCG(Seed, i). Calls for different i may run at the same time.
func (s *SignSums) Perturb(i int) {
	rnd := rand.New(rand.NewPCG(s.opt.Seed, uint64(i)))
	size := s.instruments * s.columns
	sum := make([]float64, size)
	var factors []float64
	switch {
	case s.levels != nil:
		factors = append(factors, s.levels...)
		if i > 0 {
			rnd.Shuffle(len(factors), func(a, b int) { factors[a], factors[b] = factors[b], factors[a] })
		}
	default:
		factors = make([]float64, s.Units)
		for k := range factors {
			factors[k] = 1
			if i > 0 && rnd.Uint64()&1 == 0 {
				factors[k] = -1
			}
		}
	}
	for k, f := range factors {
		floats.AddScaled(sum, f, s.units[k*size:(k+1)*size])
	}
	s.sums[i] = sum
}

// Levels finds the grid on which outside signals change: for how many rows a level is held at the least, and the first
// row of each level that is logged from its start.
func Levels(outside [][]float64) (hold int, starts [][]int) {
	at := make([]int, len(outside)) // a row at which each changes; -1: none
	for i, o := range outside {
		at[i] = -1
		for k := 1; k < len(o); k++ {
			if o[k] == o[k-1] {
				continue
			}
			if at[i] >= 0 {
				hold = divisor(hold, k-at[i])
			} else {
				at[i] = k
			}
		}
	}
	starts = make([][]int, len(outside))
	for i, o := range outside {
		if at[i] < 0 || hold == 0 {
			continue
		}
		for k := at[i] % hold; k < len(o); k += hold {
			starts[i] = append(starts[i], k)
		}
	}
	return hold, starts
}

// divisor is the greatest common one.
func divisor(a, b int) int {
	for b != 0 {
		a, b = b, a%b
	}
	return a
}

// response settles where no row of the last hundredth of what was computed exceeds this share of the largest.
const (
	settledShare  = 1e-4
	responseLimit = 5000 // rows
)

// responses returns the instruments' answers to one level of unit height held for hold rows, from its first row on: the
// derivatives of the residuals by b_0 … b_m, a_1 … a_n and a free delay, of a loop without noise.
func (s *SignSums) responses(m *Prediction, hold, longest int) [][]float64 {
	num, den := s.scaledPlant(m.Num, m.Den)
	d := lti.SampleDelta(num, den, m.Delay*s.w0, s.period)
	a, b := lti.Shift(nil, d.A), lti.ShiftInput(d.B0, d.B1)
	lag := func(coef, x []float64, k, from int) float64 {
		var v float64
		for i := from; i < len(coef) && i <= k; i++ {
			v += coef[i] * x[k-i]
		}
		return v
	}
	rows := min(longest, responseLimit)
	o, u, y := make([]float64, rows), make([]float64, rows), make([]float64, rows)
	for k := range o {
		if k < hold {
			o[k] = 1
		}
		y[k] = -lag(a, y, k, 1)
		if j := k - d.Whole; j >= 0 {
			y[k] += lag(b, u, j, max(0, 1-d.Whole))
		}
		u[k] = lag(s.opt.Loop.U, u, k, 1) + lag(s.opt.Loop.Y, y, k, 0) + lag(s.opt.Loop.Outside, o, k, 0)
	}
	count := m.Zeros + 1 + m.Poles
	if m.FreeDelay {
		count++
	}
	h := make([][]float64, count)
	last := 0
	for j := range h {
		da, db := lti.Shift(nil, d.DA[j]), lti.ShiftInput(d.DB0[j], d.DB1[j])
		v := make([]float64, rows)
		for k := range v {
			v[k] = lag(da, y, k, 0) - lag(db, u, k-d.Whole, 0)
		}
		h[j] = divideBy(lti.Poly(m.D).Mul(v), m.C, rows)
		floats.Scale(1/floats.Norm(h[j], 2), h[j])
		for k, x := range h[j] {
			if math.Abs(x) > settledShare {
				last = max(last, k)
			}
		}
	}
	for j := range h {
		h[j] = h[j][:last+1]
	}
	return h
}

// scaledPlant takes a plant to time in units of 1/w0.
func (s *SignSums) scaledPlant(num, den lti.Poly) (lti.Poly, lti.Poly) {
	n := len(den) - 1
	scale := func(p lti.Poly) lti.Poly {
		q := make(lti.Poly, len(p))
		for i, v := range p {
			q[i] = v * math.Pow(s.w0, float64(i-n))
		}
		return q
	}
	return scale(num), scale(den)
}

// regressors returns the columns of a record's residuals, zero before row first: y_k … y_{k-n}, the inputs by falling
// delay, and the constants, filtered from rest by D/C, the constants by 1/C.
func (s *SignSums) regressors(r Record, record int, m *Prediction, first int) [][]float64 {
	var x [][]float64
	rows := len(r.Y)
	add := func(signal []float64, off float64, lag int, shape []float64) {
		v := make([]float64, rows)
		for k := first; k < rows; k++ {
			v[k] = signal[k-lag] - off
		}
		x = append(x, divideBy(lti.Poly(shape).Mul(v), m.C, rows))
	}
	for i := range m.Poles + 1 {
		add(r.Y, s.opt.Rest.Y, i, m.D)
	}
	for i := s.opt.Whole[0] + 1; i <= s.opt.Whole[1]+m.Poles+1; i++ {
		add(r.U, s.opt.Rest.U, i, m.D)
	}
	one := make([]float64, rows)
	for _, of := range s.constants {
		off := 0.0 // another record's constant is not in this one
		if of == record {
			off = -1
		}
		add(one, off, 0, []float64{1})
	}
	return x
}

// addUnit adds the products of a level that starts at row b.
func (s *SignSums) addUnit(h, x [][]float64, b int) {
	for _, hj := range h {
		for _, xc := range x {
			m := min(len(hj), len(xc)-b)
			s.units = append(s.units, floats.Dot(hj[:m], xc[b:b+m]))
		}
	}
}

// addRows adds the products of each row of a record. The instrument of a constant is its own column.
func (s *SignSums) addRows(h, x [][]float64, o []float64, from int) {
	psi := make([][]float64, s.instruments)
	for j, hj := range h {
		psi[j] = make([]float64, len(o))
		for k, v := range o {
			m := min(len(hj), len(o)-k)
			floats.AddScaled(psi[j][k:k+m], v, hj[:m])
		}
	}
	copy(psi[len(h):], x[len(x)-len(s.constants):])
	for k := from; k < len(o); k++ {
		for j, pj := range psi {
			for l := j; l < len(psi); l++ {
				s.weight.SetSym(j, l, s.weight.At(j, l)+pj[k]*psi[l][k])
			}
			for _, xc := range x {
				s.units = append(s.units, pj[k]*xc[k])
			}
		}
	}
}

// root returns the lower triangular L with L L' = v.
func root(v *mat.SymDense) (*mat.TriDense, bool) {
	var chol mat.Cholesky
	if !chol.Factorize(v) {
		return nil, false
	}
	var l mat.TriDense
	chol.LTo(&l)
	return &l, true
}

// Directions that say nothing of a number weigh less in a region about that number, by leastSpread or, with few signs or
// levels, by spreadUnits over their number: the statistic of a plant that is wholly wrong exceeds the draws' by about that
// number at the most, and the region must end in all directions.
const (
	leastSpread = 0.3
	spreadUnits = 100
)

// Region is a confidence region for the whole plant, a test for each. Concurrent use is safe.
type Region struct {
	*SignSums
	sums [][]float64 // weighed so that the statistic is the square of sums times coefficients
}

// Region weighs the sums. Without focus the statistic is |V^-1/2 H|², that of the papers. With the gradient of a number
// by b_0 … b_m, a_1 … a_n and a free delay, time in units of 1/Speed, it is
//
//	(g'V^-1 H)² / (g'V^-1 g) + w |V^-1/2 H|²,   w = 0.3 to 1,
//
// and what the region says of that number is nearer to what it would say if it were the only unknown. Any weight leaves the level as it is; under RandomLevels the gradient must not depend on levels
// that count.
func (s *SignSums) Region(focus []float64) *Region {
	l, _ := root(s.weight)
	d := s.instruments
	var inv mat.TriDense
	inv.InverseTri(l)
	w := mat.DenseCopyOf(&inv)
	if focus != nil {
		g := mat.NewVecDense(d, nil)
		for i, v := range focus {
			g.SetVec(i, v)
		}
		var along, row mat.VecDense
		along.MulVec(&inv, g)
		row.MulVec(inv.T(), &along)
		row.ScaleVec(1/mat.Norm(&along, 2), &row)
		var both mat.Dense
		w.Scale(math.Sqrt(math.Min(1, math.Max(leastSpread, spreadUnits/float64(s.Units)))), w)
		both.Stack(row.T(), w)
		w = &both
	}
	r := &Region{SignSums: s, sums: make([][]float64, len(s.sums))}
	for i, sum := range s.sums {
		var x mat.Dense
		x.Mul(w, mat.NewDense(d, s.columns, sum))
		r.sums[i] = x.RawMatrix().Data
	}
	return r
}

// Speed is the unit of time of gradients, in rad/s.
func (s *SignSums) Speed() float64 { return s.w0 }

// coefficients are those of the columns of residuals at a plant in scaled time.
func (s *SignSums) coefficients(num, den lti.Poly, tau float64, constants []float64) []float64 {
	d := lti.SampleDelta(num, den, tau, s.period)
	phi := make([]float64, s.columns)
	n := copy(phi, lti.Shift(nil, d.A))
	for i, v := range lti.ShiftInput(d.B0, d.B1)[1:] {
		phi[n+d.Whole-s.opt.Whole[0]+i] = -v
	}
	for i, v := range constants {
		phi[s.columns-len(s.constants)+i] = -v
	}
	return phi
}

// statistic is that of draw i.
func (r *Region) statistic(i int, phi []float64) float64 {
	x := r.sums[i]
	var t float64
	for k := 0; k < len(x); k += len(phi) {
		v := floats.Dot(x[k:k+len(phi)], phi)
		t += v * v
	}
	return t
}

// holds reports whether fewer than Largest draws are larger than the true one, ties broken by a drawn order: whether it is
// not among the Largest largest.
func (r *Region) holds(phi []float64) bool {
	t0 := r.statistic(0, phi)
	larger := 0
	for i := 1; i < len(r.sums); i++ {
		t := r.statistic(i, phi)
		if t > t0 || t == t0 && r.order[i] > r.order[0] {
			if larger++; larger == r.opt.Largest {
				return true
			}
		}
	}
	return false
}

// Contains reports whether the region holds the plant of m, with the constants of m where signs are drawn. The delay of
// m must lie within Whole.
func (r *Region) Contains(m *Prediction) bool {
	num, den := r.scaledPlant(m.Num, m.Den)
	var constants []float64
	for _, i := range r.constants {
		constants = append(constants, m.Const[i])
	}
	return r.holds(r.coefficients(num, den, m.Delay*r.w0, constants))
}
