package fit

import (
	"math"

	"gonum.org/v1/gonum/mat"
)

// Prior is what is known of a plant before its records are seen: its free
// parameters b_0 … b_m, a_1 … a_n but for those that integrators hold, and the delay
// where it is free, are normal about Mean, in the units of Prediction. Info is the
// inverse of their covariance.
type Prior struct {
	Mean []float64
	Info *mat.SymDense
}

const badPrior = "fit: prior is not of the shape's free plant parameters"

// FitNear is Fit with a prior: it makes -2 log likelihood plus
// (θ - Mean)' Info (θ - Mean) least. With the estimate from other records as the
// prior that is what all records together say, as far as the other estimate is
// normal. Objective and LogDet of the result hold the prior's part, so that N times
// the log of its Objective over that of Fit is the statistic of the likelihood
// ratio of one plant against two (Wilks, The large-sample distribution of the
// likelihood ratio for testing composite hypotheses, Ann. Math. Statist. 9 (1938)
// 60-62).
func (p *Predictor) FitNear(start *Prediction, prior Prior, tol float64, limit int) (*Prediction, error) {
	s, x := p.begin(start)
	defer s.done()
	s.prior = s.near(prior)
	x, objective, steps, converged := s.minimise(x, tol, limit)
	if !(objective < math.Inf(1)) {
		return nil, ErrNoFit
	}
	return s.result(x, steps, converged), nil
}

// near is a prior in scaled units.
type near struct {
	at   []int // the shared parameters that it is about
	mean []float64
	info *mat.SymDense
}

func (s *search) near(p Prior) *near {
	var at []int
	for _, k := range s.shape.free() {
		if k < s.shape.plant() {
			at = append(at, k)
		}
	}
	if len(at) != len(p.Mean) || p.Info.SymmetricDim() != len(at) {
		panic(badPrior)
	}
	unit := s.units()
	n := &near{at: at, mean: make([]float64, len(at)), info: mat.NewSymDense(len(at), nil)}
	for i, k := range at {
		n.mean[i] = p.Mean[i] / unit[k]
		for j := range i + 1 {
			n.info.SetSym(i, j, p.Info.At(i, j)*unit[k]*unit[at[j]])
		}
	}
	return n
}

// off returns the deviations of x from the prior's mean, and info times them.
func (n *near) off(x point, shape Shape) (d, g *mat.VecDense) {
	all := append([]float64(nil), x.num...)
	for i := 1; i <= shape.Poles; i++ {
		all = append(all, x.den[shape.Poles-i])
	}
	all = append(all, x.tau)
	d, g = mat.NewVecDense(len(n.at), nil), mat.NewVecDense(len(n.at), nil)
	for i, k := range n.at {
		d.SetVec(i, all[k]-n.mean[i])
	}
	g.MulVec(n.info, d)
	return d, g
}

// square is the prior's part of -2 log likelihood at x.
func (n *near) square(x point, shape Shape) float64 {
	if n == nil {
		return 0
	}
	d, g := n.off(x, shape)
	return mat.Dot(d, g)
}

// add adds the prior's part to the derivatives of half the objective, of which a
// unit of -2 log likelihood is scale.
func (n *near) add(x point, shape Shape, scale float64, h *mat.SymDense, grad []float64) {
	if n == nil {
		return
	}
	_, g := n.off(x, shape)
	for i, k := range n.at {
		grad[k] += scale * g.AtVec(i)
		for j := range i + 1 {
			l := n.at[j]
			h.SetSym(k, l, h.At(k, l)+scale*n.info.At(i, j))
		}
	}
}
