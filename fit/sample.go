package fit

import (
	"errors"
	"math"
	"math/rand/v2"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Steps of Sample: the walk learns its stride in the first, the rest are kept
// thinned to the number of draws.
const (
	learnSteps = 2000
	learnEvery = 500
	drawSteps  = 5 // a draw
	tStudent   = 5 // degrees of freedom of the wide steps
)

// leastMoves is the share of steps taken below which a walk goes nowhere.
const leastMoves = 0.03

// ErrStuck says that a walk over the likelihood did not move.
var ErrStuck = errors.New("fit: the walk over the likelihood does not move")

// Sample draws n models of m's shape from the likelihood of all parameters: of
// the variance of e with the prior 1/σ², of each record's constant and start-up
// errors in closed form, of the others by Metropolis's walk (Metropolis,
// Rosenbluth, Rosenbluth, Teller & Teller, J. Chem. Phys. 21 (1953) 1087-1092),
// whose stride is learnt first (Haario, Saksman & Tamminen, An adaptive
// Metropolis algorithm, Bernoulli 7 (2001) 223-242). The prior is flat in the
// coefficients of numerator, denominator, C and D, and in the delay. Where the
// likelihood is normal the draws are those of its covariance; on a short log
// noise zeros crowd the unit circle, and they are not.
//
// m must be an optimum of Fit. Draws have no covariance. The error is that of
// Covariance, or ErrStuck.
func (p *Predictor) Sample(m *Prediction, n int, rnd *rand.Rand) ([]*Prediction, error) {
	if m.Cov == nil {
		k := *m
		if err := p.Covariance(&k); err != nil {
			return nil, err
		}
		m = &k
	}
	s, x := p.begin(m)
	defer s.done()
	w := walk{s: s, rnd: rnd}
	unit := s.units()
	for i := range s.shape.size() {
		if !s.shape.fixed(i) {
			w.free = append(w.free, i)
		}
	}
	dim := len(w.free)
	cov := mat.NewSymDense(dim, nil)
	for a, i := range w.free {
		for b, j := range w.free {
			if b >= a {
				cov.SetSym(a, b, m.Cov.At(i, j)/(unit[i]*unit[j]))
			}
		}
	}
	if !w.stride(cov) {
		return nil, ErrSingular
	}
	here, logp, ok := x, 0.0, false
	if logp, ok = w.density(here); !ok {
		return nil, ErrNoFit
	}
	var past [][]float64
	var draws []*Prediction
	moves := 0
	for k := 1; len(draws) < n; k++ {
		if y, ok := w.step(here); ok {
			if lq, ok := w.density(y); ok && math.Log(rnd.Float64()) < lq-logp {
				here, logp = y, lq
				moves++
			}
		}
		switch {
		case k <= learnSteps:
			past = append(past, w.coordinates(here))
			if k%learnEvery == 0 && k > learnEvery {
				w.learn(past[len(past)/3:])
			}
			if k == learnSteps && moves < leastMoves*learnSteps {
				return nil, ErrStuck
			}
		case k%drawSteps == 0:
			s.errorsAt(here)
			draws = append(draws, s.result(here, k, false))
		}
	}
	return draws, nil
}

// walk proposes steps and weighs points.
type walk struct {
	s    *search
	rnd  *rand.Rand
	free []int      // indices of parameters that move
	root *mat.Dense // of the covariance of a step of unit stride
}

// stride takes the covariance of the draws so far as the shape of the steps.
func (w *walk) stride(cov *mat.SymDense) bool {
	n := cov.SymmetricDim()
	sd := make([]float64, n)
	for i := range sd {
		sd[i] = math.Sqrt(cov.At(i, i))
		if !(sd[i] > 0) || math.IsInf(sd[i], 0) {
			return false
		}
	}
	scaled := mat.NewSymDense(n, nil)
	for i := range n {
		for j := i; j < n; j++ {
			scaled.SetSym(i, j, cov.At(i, j)/(sd[i]*sd[j]))
		}
		scaled.SetSym(i, i, 1+1e-9)
	}
	var chol mat.Cholesky
	if !chol.Factorize(scaled) {
		return false
	}
	var l mat.TriDense
	chol.LTo(&l)
	w.root = mat.NewDense(n, n, nil)
	for i := range n {
		for j := 0; j <= i; j++ {
			w.root.Set(i, j, sd[i]*l.At(i, j))
		}
	}
	return true
}

// learn sets the stride by past points.
func (w *walk) learn(past [][]float64) {
	n := len(w.free)
	mean := make([]float64, n)
	for _, x := range past {
		floats.AddScaled(mean, 1/float64(len(past)), x)
	}
	cov := mat.NewSymDense(n, nil)
	for _, x := range past {
		for i := range n {
			for j := i; j < n; j++ {
				cov.SetSym(i, j, cov.At(i, j)+(x[i]-mean[i])*(x[j]-mean[j])/float64(len(past)))
			}
		}
	}
	w.stride(cov) // a walk that has not moved keeps its stride
}

// step proposes a point; false where it leaves what the shape allows. The
// stride is 2.4/√n, the best for a normal density (Gelman, Roberts & Gilks,
// Bayesian Statistics 5 (1996) 599-607); every other step has heavy tails.
func (w *walk) step(x point) (point, bool) {
	n := len(w.free)
	z := make([]float64, n)
	f := 2.4 / math.Sqrt(float64(n))
	if w.rnd.IntN(2) == 0 {
		var chi float64
		for range tStudent {
			v := w.rnd.NormFloat64()
			chi += v * v / tStudent
		}
		f *= w.rnd.Float64() / math.Sqrt(chi)
	}
	for i := range z {
		z[i] = f * w.rnd.NormFloat64()
	}
	step := make([]float64, w.s.shape.size())
	for i, k := range w.free {
		for j := 0; j <= i; j++ {
			step[k] += w.root.At(i, j) * z[j]
		}
	}
	y := x.clone()
	add(&y, step, w.s.shape)
	if y.tau < w.s.DelayRange[0]*w.s.w0 || y.tau > w.s.DelayRange[1]*w.s.w0 || !inside(y.c) || !inside(y.d) {
		return point{}, false
	}
	return y, true
}

// coordinates lists the free parameters of x.
func (w *walk) coordinates(x point) []float64 {
	var all []float64
	all = append(all, x.num...)
	n := w.s.shape.Poles
	for i := 1; i <= n; i++ {
		all = append(all, x.den[n-i])
	}
	if w.s.shape.FreeDelay {
		all = append(all, x.tau)
	}
	all = append(append(all, x.d[1:]...), x.c[1:]...)
	out := make([]float64, len(w.free))
	for i, k := range w.free {
		out[i] = all[k]
	}
	return out
}

// density is the log of the posterior density of x but for a constant.
func (w *walk) density(x point) (float64, bool) {
	s := w.s
	if _, _, ok := s.errorsAt(x); !ok {
		return 0, false
	}
	// The information about constants and start-up errors: of records that share
	// a constant that of their start-up errors, and what is left for the constant.
	det := s.shared
	for _, share := range s.shares {
		for _, i := range share {
			if w := &s.work[i]; len(share) > 1 {
				det += w.logDet
			} else {
				det += logDet(w.all.h, 0)
			}
		}
	}
	v := -det / 2
	for i, constants := range s.constants() {
		if n := s.logs[i]; n > 0 {
			v -= float64(n-constants) / 2 * math.Log(s.sums[i])
		}
	}
	return v, !math.IsNaN(v)
}

// inside reports whether the roots of a monic polynomial in powers of δ lie in
// the unit circle of z, by Jury's table (Jury, Theory and Application of the
// z-Transform Method, 1964).
func inside(c []float64) bool {
	asc := lti.Shift(nil, c) // powers of z^-1
	for n := len(asc) - 1; n > 0; n-- {
		k := asc[n]
		if !(math.Abs(k) < 1-1e-12) {
			return false
		}
		next := make([]float64, n)
		for i := range next {
			next[i] = (asc[i] - k*asc[n-i]) / (1 - k*k)
		}
		asc = next
	}
	return true
}
