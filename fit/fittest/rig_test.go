package fittest

import (
	"math"
	"math/cmplx"
	"testing"

	"steadyrig/fit/lti"
)

// The truth must reproduce the record: filtering u and y by it leaves white errors of the stated variance.
func TestTruthExplainsRecord(t *testing.T) {
	for i, rig := range Kinds() {
		truth := rig.Truth()
		ad, bd := lti.Poly(truth.A).Mul(truth.D), lti.Poly(truth.B).Mul(truth.D)
		const n = 40000
		u, y := rig.Record(n, 1, uint64(i))
		e, variance, lag1 := make([]float64, n), 0.0, 0.0
		for k := range e {
			for j := 0; j < len(ad) && j <= k; j++ {
				e[k] += ad[j] * (y[k-j] - rig.Law.Y0)
			}
			for j := 0; j < len(bd) && j <= k; j++ {
				e[k] -= bd[j] * (u[k-j] - rig.Law.U0)
			}
			for j := 1; j < len(truth.C) && j <= k; j++ {
				e[k] -= truth.C[j] * e[k-j]
			}
		}
		rest := e[2000:] // the zeros of C are inside 0.99
		for k, v := range rest {
			variance += v * v / float64(len(rest))
			if k > 0 {
				lag1 += v * rest[k-1] / float64(len(rest))
			}
		}
		// Five standard deviations: sqrt(2/n) of the variance, sqrt(1/n) of the correlation.
		if d := variance/truth.Variance - 1; !(math.Abs(d) < 5*math.Sqrt(2.0/float64(len(rest)))) {
			t.Errorf("%s: variance %.4g, truth %.4g", rig.Name, variance, truth.Variance)
		}
		if r := lag1 / variance; !(math.Abs(r) < 5/math.Sqrt(float64(len(rest)))) {
			t.Errorf("%s: errors correlated by %.3g", rig.Name, r)
		}
		for j, z := range rig.Poles() {
			p := complex(0, 0)
			for _, a := range truth.A {
				p = p*z + complex(a, 0)
			}
			if cmplx.Abs(p) > 1e-9 {
				t.Errorf("%s: A(pole %d) = %g", rig.Name, j, p)
			}
		}
		for _, v := range y {
			if math.Abs(v) > 1e3 {
				t.Fatalf("%s: the loop does not hold", rig.Name)
			}
		}
	}
}

// A first-order plant without input noise, y = B/A u + v: the zero of C is the mirrored pole and the variance of e that of v
// times the square of the pole (steady Kalman filter).
func TestTruthMirrorsPole(t *testing.T) {
	rig := Rigs()[0]
	rig.InputNoise, rig.SensorNoise = 0, 0.3
	z, truth := real(rig.Poles()[0]), rig.Truth()
	if math.Abs(truth.C[1]+1/z) > 1e-12 || math.Abs(truth.Variance-z*z*0.09) > 1e-12 {
		t.Errorf("C %v, variance %g; want zero %g, variance %g", truth.C, truth.Variance, 1/z, z*z*0.09)
	}
}
