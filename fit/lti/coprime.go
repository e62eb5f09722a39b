package lti

import (
	"fmt"
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/mat"
)

// CoprimeMargin returns the largest b(P, C) that any controller C has about a plant of one input and output, continuous
// or sampled: every plant nearer than that in the nu-gap is stabilised by that controller, and no controller does
// better. With X and Z the stabilising solutions of the two Riccati equations of normalised coprime factors it is
// 1/sqrt(1 + the largest eigenvalue of X Z) (Glover & McFarlane, Robust stabilization of normalized coprime factor plant
// descriptions with H-infinity-bounded uncertainty, IEEE Trans. Automatic Control 34 (1989) 821-830; sampled: Walker,
// Relationship between three discrete-time H-infinity algebraic Riccati equation solutions, Int. J. Control 52 (1990)
// 801-809). A mode that input or output does not reach must be stable, or there is an error.
//
// The margin depends on the units of input and output: scale first.
func CoprimeMargin(g SS) (float64, error) {
	if r, c := g.D.Dims(); r != 1 || c != 1 {
		panic("lti: coprime margin of a block with several inputs or outputs")
	}
	d := g.D.At(0, 0)
	s := 1 + d*d
	n := g.Order()
	if n == 0 {
		return 1, nil
	}
	// Ar = A - B D C/S; weights C'C/S and S for X, BB'/S and S for Z.
	var bc, ar, cc, bb, xz mat.Dense
	bc.Mul(g.B, g.C)
	bc.Scale(d/s, &bc)
	ar.Sub(g.A, &bc)
	cc.Mul(g.C.T(), g.C)
	cc.Scale(1/s, &cc)
	bb.Mul(g.B, g.B.T())
	bb.Scale(1/s, &bb)
	solve := CARE
	if g.Period > 0 {
		solve = DARE
	}
	weight := mat.NewDense(1, 1, []float64{s})
	x, _, err := solve(&ar, g.B, &cc, weight)
	if err != nil {
		return 0, fmt.Errorf("computing the coprime margin: %w", err)
	}
	z, _, err := solve(ar.T(), g.C.T(), &bb, weight)
	if err != nil {
		return 0, fmt.Errorf("computing the coprime margin: %w", err)
	}
	xz.Mul(x, z)
	top := 0.0
	for _, e := range eigenvalues(&xz) {
		top = math.Max(top, real(e))
	}
	return 1 / math.Sqrt(1+top), nil
}

// FeedbackMargin returns b(P, C) of a stable sampled loop with negative feedback, and the frequency (rad/s) at which it
// is least: the infimum of |1 + P C|/(sqrt(1 + |P|^2) sqrt(1 + |C|^2)). Any plant nearer to p than that in the nu-gap is
// stabilised by c too (Vinnicombe, Frequency domain uncertainty and the graph topology, IEEE Trans. Automatic Control 38
// (1993) 1371-1383, theorem 4.2; Uncertainty and Feedback, 2001).
func FeedbackMargin(p, c DTF) (margin, at float64) {
	gain := func(x complex128) complex128 {
		b, a, k, d := p.Num.Eval(x), p.Den.Eval(x), c.Num.Eval(x), c.Den.Eval(x)
		return complex(hypot(a, b)*hypot(d, k), 0) / (d*a + k*b)
	}
	top, at := sampledPeak(gain, p, c)
	return 1 / top, at
}

func hypot(a, b complex128) float64 { return math.Hypot(cmplx.Abs(a), cmplx.Abs(b)) }

// sampledPeak returns the largest |f(z^-1)| on the unit circle and its frequency; what f does is done about the poles
// and zeros of the blocks.
func sampledPeak(f func(x complex128) complex128, blocks ...DTF) (value, at float64) {
	period := blocks[0].Period
	lo, hi := sampledRange(blocks...)
	of := func(w float64) complex128 { return f(cmplx.Exp(complex(0, -w*period))) }
	value, at = Peak(of, lo, hi)
	if v := cmplx.Abs(f(1)); v > value {
		value, at = v, 0
	}
	return value, at
}

// sampledRange returns the frequencies between which anything happens in sampled blocks of one period.
func sampledRange(blocks ...DTF) (lo, hi float64) {
	hi = math.Pi / blocks[0].Period
	lo = hi
	for _, b := range blocks {
		if b.Period != blocks[0].Period {
			panic(mixedPeriods)
		}
		for _, z := range append(b.Poles(), b.Zeros()...) {
			if z != 0 && z != 1 {
				lo = math.Min(lo, cmplx.Abs(cmplx.Log(z))/b.Period)
			}
		}
	}
	return math.Max(1e-3*lo, 1e-9*hi), hi
}
