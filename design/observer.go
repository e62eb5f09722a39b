package design

import (
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// An estimated is the nominal plant as an observer-based controller holds it: x[k+1] = phi x[k] + gamma u[k-whole],
// y = c x.
type estimated struct {
	phi, gamma, c *mat.Dense
	whole         int
}

// newEstimated samples a plant with the whole samples of its delay left out.
func newEstimated(g lti.TF, period float64) (estimated, error) {
	q := g.Delay / period
	whole := int(math.Floor(q + 1e-9))
	if frac := q - float64(whole); frac > 1e-9 {
		g.Delay = frac * period
	} else if g.Delay = 0; g.RelDegree() == 0 {
		whole, g.Delay = whole-1, period // so that the input of this sample has no part in its output
	}
	ss, err := lti.ZOH(g, period)
	return estimated{ss.A, ss.B, ss.C, whole}, err
}

// observer builds an observer-based controller from its parameters: x[0] = ln of the rate at which the input's weight
// against the output, and x[1] = ln of the rate at which the output's noise against the input's, meets the plant's
// gain, so that the loops they make cross one thereabouts; x[2] = the least decay of both, in 1/s. The gains are
// the stationary ones of linear-quadratic control and Kalman's filter, with the decay after Anderson & Moore
// (1971), Linear Optimal Control, sec. 4.1:
//
//	u = -F x^(k+whole | k),  x^(k|k) = (I - M c)(phi x^(k-1|k-1) + gamma u[k-1-whole]) + M y[k]
//
// The whole samples of delay are predicted over with the inputs already sent, which leaves F as it is (Mirkin & Raskin
// (2003), Automatica 39, 1747-1754). Its order is the plant's and the delay's. False where an equation has no solution.
func (p *problem) observer(x []float64) (block, bool) {
	e := &p.estimated
	n := e.phi.RawMatrix().Rows
	weight := func(x float64) *mat.Dense {
		v := cmplx.Abs(p.nominal.tf.At(complex(0, math.Exp(x))))
		return mat.NewDense(1, 1, []float64{v * v})
	}
	var phi, gamma, q mat.Dense
	grow := math.Exp(math.Abs(x[2]) * p.period)
	phi.Scale(grow, e.phi)
	gamma.Scale(grow, e.gamma)
	q.Mul(e.c.T(), e.c)
	_, f, err := lti.DARE(&phi, &gamma, &q, weight(x[0]))
	if err != nil {
		return block{}, false
	}
	q.Mul(e.gamma, e.gamma.T())
	noise := weight(x[1])
	cov, _, err := lti.DARE(phi.T(), e.c.T(), &q, noise)
	if err != nil {
		return block{}, false
	}
	var m, spread, ng mat.Dense
	m.Mul(cov, e.c.T())
	spread.Mul(e.c, &m)
	m.Scale(1/(spread.At(0, 0)+noise.At(0, 0)), &m)
	keep := mat.NewDense(n, n, nil)
	keep.Mul(&m, e.c)
	for i := range n {
		for j := range n {
			keep.Set(i, j, -keep.At(i, j))
		}
		keep.Set(i, i, 1+keep.At(i, i))
	}
	ng.Mul(keep, e.gamma)
	keep.Mul(keep, e.phi) // of the error's step
	// ahead = F phi^whole; sent[i] = F phi^(i-1) gamma is the part of the input sent i samples ago.
	sent, ahead := lti.Poly{1}, f
	for range e.whole {
		var s mat.Dense
		s.Mul(ahead, e.gamma)
		sent = append(sent, s.At(0, 0))
		var next mat.Dense
		next.Mul(ahead, e.phi)
		ahead = &next
	}
	// adj(I - q^-1 keep) = sum of adj_j q^-j and det = sum of a_j q^-j, by Leverrier and Faddeev.
	a, byY, byU := lti.Poly{1}, make(lti.Poly, 0, n), make(lti.Poly, 1+e.whole, n+1+e.whole)
	adj := mat.NewDense(n, n, nil)
	for i := range n {
		adj.Set(i, i, 1)
	}
	for j := range n {
		var row, v mat.Dense
		row.Mul(ahead, adj)
		v.Mul(&row, &m)
		byY = append(byY, v.At(0, 0))
		v.Mul(&row, &ng)
		byU = append(byU, v.At(0, 0))
		adj.Mul(keep, adj)
		a = append(a, -mat.Trace(adj)/float64(j+1))
		for i := range n {
			adj.Set(i, i, adj.At(i, i)+a[j+1])
		}
	}
	k := block{z: lti.DTF{Num: make(lti.Poly, n+1+e.whole), Den: a.Mul(sent).Add(byU), Period: p.period}}
	copy(k.z.Num, byY)
	for _, v := range k.z.Den {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return block{}, false
		}
	}
	return k, true
}

// observerLattice calls try with the weights that a search begins with about one rate of the feedback's.
func (p *problem) observerLattice(feedback float64, try func(x ...float64)) {
	for _, estimate := range p.rates() {
		try(feedback, math.Log(estimate), decayPerSettling/p.spec.settling)
	}
}
