package conform

import (
	"slices"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit"
	"steadyrig/fit/fittest"
	"steadyrig/fit/lti"
)

// Found returns the rig as an identification that found the truth would hand it on: true structure, delay free where the
// rig has one, true values.
func Found(r fittest.Rig) *fit.Prediction {
	t := r.Truth()
	return &fit.Prediction{
		Shape: fit.Shape{Poles: len(r.Plant.Den) - 1, Zeros: len(r.Plant.Num) - 1, Colour: len(t.D) - 1, FreeDelay: r.Plant.Delay > 0},
		Num:   r.Plant.Num, Den: r.Plant.Den, Delay: r.Plant.Delay, D: t.D, C: t.C, Period: r.Period, Const: []float64{0},
		Variance: t.Variance, Converged: true,
	}
}

// Bound returns the true denominator with the Cramér-Rao bound of its covariance for an estimate from this record: the
// inverse of the information, that of the prediction errors' gradient at the truth (Ljung, System Identification, 2nd ed.
// 1999, section 9.4), with a constant unknown. The unknowns are the continuous-time coefficients that the structure has, its
// delay if there is one, the colour and C. With free they are all coefficients of A D, B D, from one sample of delay on,
// and C, which is what a method in sampled coefficients can use; Den is then that of A D.
func Bound(r fittest.Rig, u, y []float64, free bool) *fit.PoleEstimate {
	t := r.Truth()
	n, colour := len(t.A)-1, len(t.D)-1
	ad, bd := lti.Poly(t.A).Mul(t.D), lti.Poly(t.B).Mul(t.D)
	rows := len(y)
	du, dy := make([]float64, rows), make([]float64, rows)
	for k := range rows {
		du[k], dy[k] = u[k]-r.Law.U0, y[k]-r.Law.Y0
	}
	uc, yc := divide(du, t.C), divide(dy, t.C)
	e := filtered(yc, ad)
	floats.Sub(e, filtered(uc, bd))
	ec := divide(e, t.C)

	var cols [][]float64
	add := func(dad, dbd lti.Poly) {
		c := filtered(yc, dad)
		cols = append(cols, floats.SubTo(c, c, filtered(uc, dbd)))
	}
	power := func(i int) lti.Poly { return append(make(lti.Poly, i), 1) } // z^-i
	degree := n
	if free {
		degree = n + colour
		for i := range degree {
			delta := make([]float64, degree+1)
			delta[degree-i] = 1
			add(lti.Shift(nil, delta), nil) // of δ^i
		}
		for i := 1; i < len(bd); i++ {
			add(nil, power(i))
		}
	} else {
		s, m := r.Sampled(), len(r.Plant.Num)
		along := func(k int) {
			b := power(s.Whole).Mul(lti.ShiftInput(s.DB0[k], s.DB1[k]))
			add(lti.Poly(lti.Shift(nil, s.DA[k])).Mul(t.D), b.Mul(t.D))
		}
		for k := range n + m {
			along((m + k) % (n + m)) // the denominator first
		}
		if r.Plant.Delay > 0 {
			along(n + m)
		}
		for i := 1; i <= colour; i++ {
			add(power(i).Mul(t.A), power(i).Mul(t.B))
		}
	}
	for i := 1; i < len(t.C); i++ {
		cols = append(cols, filtered(ec, power(i)))
	}
	first := len(t.B)
	grad := mat.NewDense(rows-first, len(cols)+1, nil)
	for j, c := range cols {
		grad.SetCol(j, c[first:])
	}
	for k := range rows - first {
		grad.Set(k, len(cols), 1)
	}
	var qr mat.QR
	qr.Factorize(grad)
	var rr, inv mat.Dense
	qr.RTo(&rr)
	if err := inv.Inverse(rr.Slice(0, len(cols)+1, 0, len(cols)+1)); err != nil {
		if _, ok := err.(mat.Condition); !ok {
			panic(err)
		}
	}
	var cov mat.SymDense
	cov.SymOuterK(t.Variance, inv.Slice(0, degree, 0, len(cols)+1))
	if !free {
		return fit.Sampled(r.Plant.Den, &cov, r.Period)
	}
	den := lti.Unshift(ad)
	slices.Reverse(den)
	return &fit.PoleEstimate{Den: den, Cov: &cov, Period: r.Period}
}

// filtered returns c x, c in powers of z^-1, from rest.
func filtered(x []float64, c lti.Poly) []float64 {
	out := make([]float64, len(x))
	for i, v := range c {
		if v != 0 && i < len(x) {
			floats.AddScaled(out[i:], v, x[:len(x)-i])
		}
	}
	return out
}

// divide filters x by 1/c from rest.
func divide(x, c []float64) []float64 {
	out := make([]float64, len(x))
	for k, v := range x {
		for i := 1; i < len(c) && i <= k; i++ {
			v -= c[i] * out[k-i]
		}
		out[k] = v
	}
	return out
}
