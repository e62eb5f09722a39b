package fit

import (
	"math/cmplx"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Discrete is a low-order sampled model A y = B u + C e in powers of the delay z^-1, the constants of the records apart:
// A[i], B[i], C[i] multiply y_{k-i}, u_{k-i}, e_{k-i}. A[0] = C[0] = 1. Plant and noise share A, so that the predictor is
// stable if C is, whatever A; the zeros of C lie inside the unit circle.
type Discrete struct {
	A, B, C  []float64
	Delay    int           // index of the first free coefficient of B
	Variance float64       // of e
	Cov      *mat.SymDense // of (a_1 ..., b_Delay ..., c_1 ...); nil where the method gives none
}

// Poles returns the roots of A in the z-plane.
func (d *Discrete) Poles() []complex128 { return delayRoots(d.A) }

// NoiseZeros returns the roots of C in the z-plane, the poles of the predictor.
func (d *Discrete) NoiseZeros() []complex128 { return delayRoots(d.C) }

// At returns g = B/A and h = C/A at omega rad/s for samples period s apart: y = g u + h e.
func (d *Discrete) At(omega, period float64) (g, h complex128) {
	q := cmplx.Exp(complex(0, -omega*period)) // z^-1
	a := polyAt(d.A, q)
	return polyAt(d.B, q) / a, polyAt(d.C, q) / a
}

// delayRoots returns the n roots in z of z^n p(z^-1), n being the degree in z^-1 that p is written with.
func delayRoots(p []float64) []complex128 {
	r := make(lti.Poly, len(p))
	for i, v := range p {
		r[len(p)-1-i] = v
	}
	return r.Roots()
}

// delayPoly returns the monic polynomial in z^-1 with the given roots in z.
func delayPoly(roots []complex128) []float64 {
	p := lti.FromRoots(roots)
	out := make([]float64, len(roots)+1)
	for i := range out {
		out[i] = p[len(roots)-i]
	}
	return out
}

// nearestCircle is how near to the unit circle a reflected zero of C may come.
const nearestCircle = 1e-6

// insideCircle mirrors the roots of a monic polynomial in z^-1 that lie outside the unit circle: 1/conj(z) gives the same
// spectrum up to a factor.
func insideCircle(c []float64) []float64 {
	roots := delayRoots(c)
	moved := false
	for i, z := range roots {
		r := cmplx.Abs(z)
		if r <= 1-nearestCircle {
			continue
		}
		moved = true
		roots[i] = z * complex(min(1/r, 1-nearestCircle)/r, 0)
	}
	if !moved {
		return c
	}
	return delayPoly(roots)
}

// divideBy returns the first n terms of the power series x/c in z^-1, c monic: x filtered by 1/c from rest.
func divideBy(x, c []float64, n int) []float64 {
	out := make([]float64, n)
	for k := range out {
		if k < len(x) {
			out[k] = x[k]
		}
		for i := 1; i < len(c) && i <= k; i++ {
			out[k] -= c[i] * out[k-i]
		}
	}
	return out
}
