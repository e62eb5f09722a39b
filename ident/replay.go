package ident

import (
	"context"
	"math"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/lti"
)

// On a short log the covariance from the information at the estimate is too
// small: the noise zeros are fitted to the log, too. How much too small is
// measured by replaying the log: the fitted plant under the law that ran and
// the same signals from outside, with fresh errors, fitted again. This is the
// parametric bootstrap (Efron, Bootstrap methods, Ann. Statist. 7 (1979) 1-26)
// in closed loop.
const (
	replayRows = 4000 // rows up to which a log is replayed
	replays    = 100
	replayTol  = 1e-6
	replayStep = 20
	// A factor on the covariance outside these limits is not believed.
	leastFactor, mostFactor = 1.0, 4.0
)

// Calibration says by how much replays of the log widened the covariance.
type Calibration struct {
	Replays int     `json:"replays"` // that could be fitted
	Factor  float64 `json:"factor"`  // on the covariance of the plant
}

// feedback is the law as the log shows it: u = c + Σ a u_{k-i} + Σ b y_{k-i}
// plus what came from outside, which is kept.
type feedback struct {
	a, b []float64 // a[0] unused
}

// lawOf finds the law in the log, from the rig file or by least squares on
// what the logged reference and dither leave; ok is false where the log has
// neither, or the law is not linear.
func lawOf(exps []*data.Experiment, rig *data.Rig) (feedback, bool) {
	if s := rig.Stopgap; s != nil {
		if c := checkLaw(exps, rig); c.Rows == 0 && !c.SignWrong && c.Unexplained < 0.9 {
			d0 := s.Denominator[0]
			f := feedback{a: make([]float64, len(s.Denominator)), b: make([]float64, len(s.Numerator))}
			for i, v := range s.Denominator {
				f.a[i] = -v / d0
			}
			for i, v := range s.Numerator {
				f.b[i] = -v / d0
			}
			return f, true
		}
	}
	var recs []fit.Record
	for _, e := range exps {
		for _, s := range e.Segments {
			y, u := slices.Clone(s.Y), slices.Clone(s.U)
			for k := range y {
				if s.R != nil {
					y[k] -= s.R[k]
				}
				if s.D != nil {
					u[k] -= s.D[k]
				}
			}
			recs = append(recs, fit.Record{U: y, Y: u})
		}
	}
	// The shortest law that explains what is left.
	for n := 1; n <= lawOrder; n++ {
		m, _ := fit.FitARX(recs, fit.ARXOptions{NA: n, NB: n + 1, Delay: 0})
		if m == nil {
			continue
		}
		var total float64
		for _, r := range recs {
			total += about(r.Y)
		}
		if m.RSS < 1e-3*total {
			f := feedback{a: make([]float64, n+1), b: m.B}
			for i := 1; i <= n; i++ {
				f.a[i] = -m.A[i]
			}
			return f, true
		}
	}
	return feedback{}, false
}

// answer is the law's part of u[k].
func (f feedback) answer(u, y []float64, k int) float64 {
	var v float64
	for i := 1; i < len(f.a); i++ {
		v += f.a[i] * u[k-i]
	}
	for i, b := range f.b {
		v += b * y[k-i]
	}
	return v
}

// replay returns the records as they would have been with the error draw(n, k)
// in row k of record n, from row lead on, and the errors before; false where the replayed loop leaves
// the log's range, so that the law or the plant cannot be right.
func replay(recs []fit.Record, f *fit.Prediction, law feedback, lead int, before [][]float64, draw func(n, k int) float64) ([]fit.Record, bool) {
	g := lti.SampleDeltaValues(f.Num, f.Den, f.Delay, f.Period)
	a := []float64(lti.Poly(lti.Shift(nil, g.A)).Mul(f.D))
	b := []float64(lti.Poly(lti.ShiftInput(g.B0, g.B1)).Mul(f.D))
	out := make([]fit.Record, len(recs))
	for n, r := range recs {
		my, mu := mean(r.Y), mean(r.U)
		var span float64
		for _, v := range r.Y {
			span = math.Max(span, math.Abs(v-my))
		}
		y, u, e := make([]float64, len(r.Y)), make([]float64, len(r.Y)), make([]float64, len(r.Y))
		y0, u0 := make([]float64, len(r.Y)), make([]float64, len(r.Y))
		for k := range y0 {
			y0[k], u0[k] = r.Y[k]-my, r.U[k]-mu
		}
		copy(y, y0[:lead])
		copy(u, u0[:lead])
		for i, v := range before[n] {
			e[lead-1-i] = v
		}
		for k := lead; k < len(y); k++ {
			e[k] = draw(n, k)
			v := f.Const[n] + e[k]
			for i := 1; i < len(a); i++ {
				v -= a[i] * y[k-i]
			}
			for i := 1; i < len(b); i++ {
				if j := k - i - g.Whole; j < k {
					v += b[i] * u[j]
				}
			}
			for i := 1; i < len(f.C); i++ {
				v += f.C[i] * e[k-i]
			}
			y[k] = v
			if !(math.Abs(v) < 10*span) {
				return nil, false
			}
			// What came from outside in this row of the log comes again.
			u[k] = law.answer(u, y, k) + u0[k] - law.answer(u0, y0, k)
		}
		for k := range y {
			y[k] += my
			u[k] += mu
		}
		out[n] = fit.Record{U: u, Y: y}
	}
	return out, true
}

func mean(x []float64) float64 {
	var s float64
	for _, v := range x {
		s += v
	}
	return s / float64(len(x))
}

// calibrate replays the log and widens the covariance of the plant by the
// factor by which the replayed estimates scatter more than their own
// covariances say: the median of their squared distances over that of
// chi-square, which a few failed replays do not move.
func (m *Model) calibrate(ctx context.Context, exps []*data.Experiment, rig *data.Rig, p *fit.Predictor, recs []fit.Record, f *fit.Prediction, opt Options) error {
	if p.Rows() > replayRows || f.Delay < 0 {
		return nil
	}
	law, ok := lawOf(exps, rig)
	if !ok || max(len(law.a), len(law.b)) > p.Lead {
		return nil
	}
	errs, before, err := p.Errors(f)
	if err != nil || len(errs) != len(recs) {
		return nil
	}
	distances := make([]float64, replays)
	err = Each(ctx, replays, opt.Workers, func(k int) error {
		distances[k] = math.NaN()
		rnd := rand.New(rand.NewPCG(opt.Seed, uint64(k)))
		again, ok := replay(recs, f, law, p.Lead, before, func(n, _ int) float64 { return errs[n][rnd.IntN(len(errs[n]))] })
		if !ok {
			return nil
		}
		q, err := fit.NewPredictor(again, p.Period, p.DelayRange[1])
		if err != nil {
			return nil
		}
		q.DelayRange = p.DelayRange
		est, err := q.Fit(f, replayTol, replayStep)
		if err != nil || q.Covariance(est) != nil {
			return nil
		}
		distances[k] = distance(est, f)
		return nil
	})
	if err != nil {
		return err
	}
	distances = slices.DeleteFunc(distances, math.IsNaN)
	if len(distances) < replays/2 {
		return nil
	}
	slices.Sort(distances)
	free := float64(len(m.Plant.Parameters) - f.Integrators)
	factor := distances[len(distances)/2] / distuv.ChiSquared{K: free}.Quantile(0.5)
	factor = math.Min(mostFactor, math.Max(leastFactor, factor))
	m.Evidence.Calibration = &Calibration{Replays: len(distances), Factor: factor}
	m.widen(factor)
	m.derive()
	return nil
}

// widen multiplies the plant's covariance.
func (m *Model) widen(factor float64) {
	for i := range m.Plant.Covariance {
		for j := range m.Plant.Covariance[i] {
			m.Plant.Covariance[i][j] *= factor
		}
	}
}

// distance is the squared distance of the plant's parameters of an estimate
// from f's, in units of the estimate's covariance.
func distance(est, f *fit.Prediction) float64 {
	var diff []float64
	var at []int
	add := func(i int, d float64) {
		if est.Cov.At(i, i) > 0 {
			diff, at = append(diff, d), append(at, i)
		}
	}
	for i := range f.Num {
		add(i, est.Num[i]-f.Num[i])
	}
	n := f.Poles
	for i := 1; i <= n; i++ {
		add(len(f.Num)+i-1, est.Den[n-i]-f.Den[n-i])
	}
	if f.FreeDelay {
		add(len(f.Num)+n, est.Delay-f.Delay)
	}
	q := len(diff)
	c, d := mat.NewSymDense(q, nil), mat.NewVecDense(q, nil)
	for i := range q {
		si := math.Sqrt(est.Cov.At(at[i], at[i]))
		d.SetVec(i, diff[i]/si)
		for j := i; j < q; j++ {
			c.SetSym(i, j, est.Cov.At(at[i], at[j])/(si*math.Sqrt(est.Cov.At(at[j], at[j]))))
		}
	}
	var chol mat.Cholesky
	if !chol.Factorize(c) {
		return math.NaN()
	}
	var x mat.VecDense
	if err := chol.SolveVecTo(&x, d); err != nil && x.IsEmpty() {
		return math.NaN()
	}
	return mat.Dot(d, &x)
}
