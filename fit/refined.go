package fit

import (
	"errors"
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Refined is a plant estimated through signals from outside the loop alone, in
// the parameters of a Prediction.
type Refined struct {
	Shape
	Num, Den lti.Poly
	Delay    float64 // s
	// Cov is the covariance of b_0 … b_m, a_1 … a_n and the delay where it is
	// free, whatever the colour of the noise.
	Cov  *mat.SymDense
	Rows int
	// Share is how much of that combination of the derivatives that the outside
	// signals explain least they do explain: the least squared canonical
	// correlation of ζ and ψ, between 0 and 1.
	Share float64
	Steps int

	influence *Influence
}

// TF returns the plant.
func (r *Refined) TF() lti.TF { return lti.TF{Num: r.Num, Den: r.Den, Delay: r.Delay} }

// WeakInstrument is the error of an estimate through signals from outside that
// say too little of the plant: the ratio F of what their lags explain of the
// least explained derivative to what as many numbers without meaning would.
type WeakInstrument float64

func (w WeakInstrument) Error() string {
	return fmt.Sprintf("the outside signal moves the plant too little for an estimate by itself (F ratio %.2g, %d needed)", float64(w), leastF)
}

// leastF is the ratio below which an instrument is weak (Staiger & Stock,
// Instrumental variables regression with weak instruments, Econometrica 65
// (1997) 557-586).
const leastF = 10

var errUnsettled = errors.New("refined instrumental variables: the search did not settle")

// Refined solves with ζ as at the estimate of the pass before, so many times at
// most, in so many steps together, until less than refinedTol of a deviation is
// left. At a delay of whole samples ζ may jump from pass to pass; each of them
// gives a valid estimate. A plant with as many zeros as poles but one under an
// outside signal that changes every row may have none there.
const (
	refinedPasses = 4
	refinedSteps  = 30
	refinedTol    = 1e-4
)

// Refined estimates the plant by refined instrumental variables in closed loop:
// it solves
//
//	Σ_k ζ_k ε_k(θ) = 0,   ε = (A D y - B D u - κ)/C,
//
// for the plant's free coefficients and delay θ, ζ being the derivative of ε by
// θ with input and output replaced by what the outside signals alone make of
// them. Each record's constant and start-up errors are eliminated from both. D
// and C are those of start and stay; a wrong noise shape costs accuracy but
// makes no bias, since ζ is independent of the noise if the outside signals
// are. With the right one no other instrument is as accurate.
//
// Young & Jakeman, Refined instrumental variable methods of recursive
// time-series analysis, Int. J. Control 29 (1979) 1-30; in closed loop and
// continuous time, Gilson, Garnier, Young & Van den Hof, Instrumental variable
// methods for closed-loop continuous-time model identification, in Garnier &
// Wang (eds.), Identification of Continuous-time Models from Sampled Data,
// Springer 2008. The noise-free signals come from a long model of input and
// output by the outside signals, not from the controller, which need not be
// known.
//
// outside[n] holds the outside signals of record n of NewPredictor, each as long
// as the record; signals that never move are left out. The error is
// WeakInstrument where they move the plant too little.
func (p *Predictor) Refined(start *Prediction, outside [][][]float64) (*Refined, error) {
	driven, count, err := p.driven(outside)
	if err != nil {
		return nil, fmt.Errorf("refined instrumental variables: %w", err)
	}
	return p.refined(start, driven, count)
}

// refined is Refined with the noise-free signals given, that took count
// coefficients each.
func (p *Predictor) refined(start *Prediction, driven *Predictor, count int) (*Refined, error) {
	s, x := p.begin(start)
	defer s.done()
	z := driven.newSearch(s.shape, s.w0)
	plant := s.shape.plant()
	var free []int
	for _, k := range s.shape.free() {
		if k < plant {
			free = append(free, k)
		}
	}
	mo, err := s.moments(z, x, free, nil)
	if err != nil {
		return nil, err
	}
	share := mo.share()
	if f := share / (1 - share) * float64(p.rows-count) / float64(count); f < leastF {
		return nil, WeakInstrument(f)
	}
	steps := 0
	for range refinedPasses {
		for mo.merit > refinedTol*refinedTol {
			if steps++; steps > refinedSteps {
				return nil, errUnsettled
			}
			if x, mo, err = s.solveStep(z, x, free, mo); err != nil {
				return nil, err
			}
		}
		again, err := s.moments(z, x, free, nil)
		if err != nil {
			return nil, err
		}
		mo = again
		if mo.merit <= refinedTol*refinedTol {
			break
		}
	}

	var inv mat.Dense
	if err := inv.Inverse(mo.zp); err != nil {
		return nil, ErrSingular
	}
	m := s.result(x, steps, true)
	r := &Refined{Shape: m.Shape, Num: m.Num, Den: m.Den, Delay: m.Delay, Share: mo.share(), Rows: p.rows, Steps: steps}
	unit := s.units()
	r.influence = &Influence{used: len(free) + len(s.work)}
	for i := range s.work {
		r.influence.rows = append(r.influence.rows, influences(&inv, mo.zeta[i], s.rowErrors(&s.work[i]), free, unit[:plant]))
	}
	r.Cov = r.influence.Covariance()
	return r, nil
}

// moments are the products of ζ, ψ and ε at one point.
type moments struct {
	zp, zz, pp *mat.Dense
	ze         *mat.VecDense
	zeta       [][][]float64 // record, parameter, row
	// merit is ε'ζ (ζ'ζ)^-1 ζ'ε over the variance of ε: the square of the
	// step that is left, in deviations.
	merit float64
}

// solveStep takes Newton's step from x towards ζ'ε = 0, or a part of it, with ζ
// held.
func (s *search) solveStep(z *search, x point, free []int, mo *moments) (point, *moments, error) {
	step := mat.NewVecDense(len(free), nil)
	if err := step.SolveVec(mo.zp, mo.ze); err != nil {
		return x, mo, errUnsettled
	}
	full := make([]float64, s.shape.size())
	for f := -1.0; f < -1e-3; f /= 2 {
		for i, k := range free {
			full[k] = f * step.AtVec(i)
		}
		y := s.moved(x, full)
		if trial, err := s.moments(z, y, free, mo.zeta); err == nil && trial.merit < mo.merit {
			return y, trial, nil
		}
	}
	return x, mo, errUnsettled
}

// moments leaves the errors at x in the workspaces. zeta is that of x where nil
// is given.
func (s *search) moments(z *search, x point, free []int, zeta [][][]float64) (*moments, error) {
	_, q, ok := s.errorsAt(x)
	if !ok {
		return nil, s.failure()
	}
	n := len(free)
	m := &moments{zp: mat.NewDense(n, n, nil), zz: mat.NewDense(n, n, nil), pp: mat.NewDense(n, n, nil), ze: mat.NewVecDense(n, nil), zeta: zeta}
	q.delta = lti.SampleDelta(x.num, x.den, x.tau, s.h)
	cols := s.columns(q)
	t0 := s.pad + s.Lead
	for i := range s.work {
		w := &s.work[i]
		if zeta == nil {
			s.filterAll(&z.work[i], q, t0)
			m.zeta = append(m.zeta, s.derivatives(w, &z.work[i], x.c, cols, free))
		}
		s.filterAll(w, q, t0)
		psi := s.derivatives(w, w, x.c, cols, free)
		zi, e := m.zeta[i], s.rowErrors(w)
		for a := range n {
			m.ze.SetVec(a, m.ze.AtVec(a)+floats.Dot(zi[a], e))
			for b := range n {
				m.zp.Set(a, b, m.zp.At(a, b)+floats.Dot(zi[a], psi[b]))
				m.zz.Set(a, b, m.zz.At(a, b)+floats.Dot(zi[a], zi[b]))
				m.pp.Set(a, b, m.pp.At(a, b)+floats.Dot(psi[a], psi[b]))
			}
		}
	}
	v := mat.NewVecDense(n, nil)
	if err := v.SolveVec(m.zz, m.ze); err != nil {
		return nil, ErrSingular
	}
	m.merit = mat.Dot(m.ze, v) / (s.rss / float64(s.rows))
	if math.IsNaN(m.merit) {
		return nil, s.failure()
	}
	return m, nil
}

// share is the least eigenvalue of (ψ'ψ)^-1 ψ'ζ (ζ'ζ)^-1 ζ'ψ.
func (m *moments) share() float64 {
	var a, b mat.Dense
	if a.Solve(m.zz, m.zp) != nil || b.Solve(m.pp, m.zp.T()) != nil {
		return 0
	}
	b.Mul(&b, &a)
	var eig mat.Eigen
	if !eig.Factorize(&b, mat.EigenNone) {
		return 0
	}
	least := 1.0
	for _, v := range eig.Values(nil) {
		least = math.Min(least, real(v))
	}
	return math.Max(0, least)
}

// drivenOrder bounds the order of the model that makes noise-free signals.
const drivenOrder = 40

// driven returns the records of p as the outside signals alone would have made
// them, and the number of coefficients that were fitted to each signal: input
// and output are regressed on their own past and the outside signals, and the
// models run on the outside signals without an error.
func (p *Predictor) driven(outside [][][]float64) (*Predictor, int, error) {
	p.checkWhole()
	d := &Predictor{Period: p.Period, Lead: p.Lead, DelayRange: p.DelayRange, pad: p.pad, recs: p.recs, first: p.first}
	var kept [][][]float64
	for _, signals := range outside {
		if len(signals) == 0 {
			panic(badRecord)
		}
		if len(signals[0]) >= 2*p.Lead+8 {
			kept = append(kept, signals)
		}
	}
	if len(kept) != len(p.recs) {
		panic(badRecord)
	}
	var drive [][][]float64 // record, signal
	for i, signals := range kept {
		drive = append(drive, nil)
		for j := range signals {
			moves := false
			for _, other := range kept {
				moves = moves || floats.Max(other[j]) > floats.Min(other[j])
			}
			if len(signals[j]) != len(p.recs[i].Y) {
				panic(badRecord)
			}
			if moves {
				drive[i] = append(drive[i], lessMean(signals[j]))
			}
		}
	}
	if len(drive[0]) == 0 {
		return nil, 0, errors.New("the outside signal does not move")
	}
	var us, ys [][]float64
	for _, r := range p.recs {
		us, ys = append(us, r.U), append(ys, r.Y)
	}
	u, nu, err := noiseFree(us, drive)
	if err != nil {
		return nil, 0, err
	}
	y, ny, err := noiseFree(ys, drive)
	if err != nil {
		return nil, 0, err
	}
	for i := range p.recs {
		zeros := make([]float64, p.pad)
		d.padded = append(d.padded, Record{U: append(zeros[:p.pad:p.pad], u[i]...), Y: append(zeros[:p.pad:p.pad], y[i]...)})
	}
	return d, max(nu, ny), nil
}

// noiseFree returns what drive makes of x, and the number of coefficients of the
// model, whose order is that of least AICc.
func noiseFree(x [][]float64, drive [][][]float64) ([][]float64, int, error) {
	per := 1 + len(drive[0])
	data := make([][][]float64, len(x))
	rows := 0
	for i, v := range x {
		data[i] = append([][]float64{v}, drive[i]...)
		rows += len(v)
	}
	order := max(1, min(drivenOrder, rows/(DefaultRowsPerOrder*per)))
	var lags []lag
	for i := range order {
		lags = append(lags, lag{output, i + 1})
		for j := range drive[0] {
			lags = append(lags, lag{input + j, i})
		}
	}
	g := newRegression(data, lags, order, false)
	t, err := g.reduce()
	if err != nil {
		return nil, 0, err
	}
	best, least := 0, math.Inf(1)
	for n := 1; n <= order; n++ {
		if v := AICc.Value(t.rss(n*per), g.rows, n*per+g.constants()); v < least {
			best, least = n, v
		}
	}
	// A periodic signal carries no more lags than it has lines.
	for best > 1 && t.cond(best*per) > ConditionLimit {
		best--
	}
	if c := t.cond(best * per); !(c < ConditionLimit) {
		return nil, 0, Condition(c)
	}
	own := make([]float64, best) // of the signal's past
	from := make([][]float64, len(drive[0]))
	for j, c := range t.solve(best * per).coef {
		if l := lags[j]; l.signal == output {
			own[l.steps-1] = c
		} else {
			from[l.signal-input] = append(from[l.signal-input], c)
		}
	}
	out := make([][]float64, len(x))
	for i, signals := range drive {
		out[i] = simulated(own, from, signals, floats.Dot(x[i], x[i]))
	}
	return out, best * per, nil
}

// simulated runs v_k = Σ own[i] v_{k-1-i} + Σ from[j][i] drive[j]_{k-i} from rest.
// Where the model grows past four times the energy of what it was fitted to,
// which the loop did not, its roots are drawn inward: any stable filter of the
// drive will do.
func simulated(own []float64, from, drive [][]float64, energy float64) []float64 {
	forced, v := make([]float64, len(drive[0])), make([]float64, len(drive[0]))
	for j, coef := range from {
		fir(forced, drive[j], coef, 0, 1, true)
	}
	const inward, attempts = 0.98, 100
	own = slices.Clone(own)
	for range attempts {
		var sum float64
		for k := range v {
			v[k] = forced[k]
			for i := range min(k, len(own)) {
				v[k] += own[i] * v[k-1-i]
			}
			sum += v[k] * v[k]
		}
		if sum <= 4*energy {
			break
		}
		scale := 1.0
		for i := range own {
			scale *= inward
			own[i] *= scale
		}
	}
	return v
}
