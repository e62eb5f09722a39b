package ident

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit"
	"steadyrig/fit/fittest"
	"steadyrig/fit/lti"
)

// The deviation of a sampled pole follows from the covariance of the
// coefficients by the delta method: data set D3, check value H08 (verified
// there by recomputation from C12).
func TestSimpleRootDeviation(t *testing.T) {
	d := fittest.D3()
	m, err := fit.FitARX([]fit.Record{{U: d.U, Y: d.Y}}, fit.ARXOptions{NA: 2, NB: 2, Delay: 1, NoConstant: true})
	if err != nil {
		t.Fatal(err)
	}
	cov := mat.NewSymDense(3, nil)
	// y = 1.99 y1 - 0.93 y2: z² + A[1] z + A[2].
	at := []int{1, 0}
	for i := range 2 {
		for j := range 2 {
			cov.SetSym(i, j, m.Cov.At(at[i], at[j]))
		}
	}
	r := uncertain{p: lti.Poly{m.A[2], m.A[1], 1}, cov: cov}.roots()
	if len(r) != 2 || math.Abs(r[1].Re-1.2401691152602) > 1e-10 || math.Abs(r[1].ReSD-0.0140745099163) > 1e-11 {
		t.Errorf("roots %+v, want one at 1.2401691152602 with deviation 0.0140745099163", r)
	}
}

// Near a double root the formula for simple roots covers too little; the
// ellipse must not. 2000 draws of the coefficients of s² + a s + b about a
// double root at zero: binomial limits 1867 to 1931 for 95 % (check value B22).
// A profile of a function this crooked is not exact, so the upper limit is
// open.
func TestDoubleRootCoverage(t *testing.T) {
	rnd := rand.New(rand.NewPCG(3, 3))
	cov := mat.NewSymDense(3, []float64{0.04, 0.01, 0, 0.01, 0.01, 0, 0, 0, 0})
	in, both := 0, 0
	const draws = 2000
	for range draws {
		x, y := rnd.NormFloat64(), rnd.NormFloat64()
		b := 0.2 * x
		a := 0.05*x + math.Sqrt(0.01-0.0025)*y
		r := uncertain{p: lti.Poly{b, a, 1}, cov: cov}.roots()
		if r[1].Re95.Contains(0) {
			in++
		}
		if r[0].Re95.Contains(0) && r[1].Re95.Contains(0) && r[0].Im95.Contains(0) {
			both++
		}
	}
	t.Logf("right root in %d of %d, both in %d", in, draws, both)
	if in < 1867 {
		t.Errorf("the right root's interval holds the truth in %d of %d", in, draws)
	}
}

// A factor's covariance against differences of its coefficients.
func TestFactor(t *testing.T) {
	p := lti.FromRoots([]complex128{1 + 2i, 1 - 2i, -3, -5})
	rnd := rand.New(rand.NewPCG(4, 4))
	cov := mat.NewSymDense(5, nil)
	for i := range 4 {
		cov.SetSym(i, i, 1e-10*(1+rnd.Float64()))
	}
	_, _, c := uncertain{p: p, cov: cov}.factor(1+2i, 1-2i)
	var want [2][2]float64
	for i := range 4 {
		const eps = 1e-6
		at := func(e float64) (a, b float64) {
			q := append(lti.Poly(nil), p...)
			q[i] += e
			for _, r := range q.Roots() {
				if imag(r) > 0 {
					return -2 * real(r), real(r)*real(r) + imag(r)*imag(r)
				}
			}
			return
		}
		a1, b1 := at(eps)
		a0, b0 := at(-eps)
		g := [2]float64{(a1 - a0) / (2 * eps), (b1 - b0) / (2 * eps)}
		for k := range 2 {
			for l := range 2 {
				want[k][l] += g[k] * g[l] * cov.At(i, i)
			}
		}
	}
	for k := range 2 {
		for l := range 2 {
			if math.Abs(c[k][l]-want[k][l]) > 1e-5*math.Abs(want[k][l]) {
				t.Errorf("covariance [%d][%d] = %g, differences give %g", k, l, c[k][l], want[k][l])
			}
		}
	}
}
