package fittest

import (
	"math"
	"math/cmplx"
	"testing"
)

// The truth must reproduce the record: filtering u and y by it leaves white errors of the stated variance.
func TestTruthExplainsRecord(t *testing.T) {
	for i, rig := range Rigs() {
		truth := rig.Truth()
		const n = 40000
		u, y := rig.Record(n, 1, uint64(i))
		e, variance, lag1 := make([]float64, n), 0.0, 0.0
		for k := range e {
			for j := 0; j < len(truth.A) && j <= k; j++ {
				e[k] += truth.A[j]*(y[k-j]-rig.Law.Y0) - truth.B[j]*(u[k-j]-rig.Law.U0)
				if j > 0 {
					e[k] -= truth.C[j] * e[k-j]
				}
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

// With white noise at the input only, a first-order plant has C = 1, and under u = r - K y the bound with C known is, in
// closed form, N var a = lambda (K^2/s + 1/Ry) (Gustavsson, Ljung & Söderström, Identification of processes in closed loop,
// Automatica 13 (1977) 59-75). With C estimated too it is no less.
func TestPoleBoundsNoLessThanWithKnownNoise(t *testing.T) {
	rig := Rigs()[0]
	rig.Hold, rig.SensorNoise = 1, 0
	truth := rig.Truth()
	a, b := -truth.A[1], truth.B[1]
	const n, k = 20000, 2.0
	s, lambda := rig.Dither*rig.Dither, truth.Variance
	ry := (b*b*s + lambda) / (1 - (a-b*k)*(a-b*k))
	want := math.Sqrt(lambda * (k*k/s + 1/ry) / n)
	u, y := rig.Record(n, 2, 0)
	if got := rig.PoleBounds(u, y)[0]; !(got > 0.98*want && got < 1.5*want) {
		t.Errorf("bound %g, with known noise %g", got, want)
	}
}

func TestDistances(t *testing.T) {
	d := Distances([]complex128{1, 2i}, []complex128{1.5i, 5})
	if d[0] != 4 || d[1] != 0.5 {
		t.Errorf("distances %v, want 4 and 0.5", d)
	}
	if d := Distances([]complex128{1, 2}, []complex128{2}); !math.IsInf(d[0], 1) || d[1] != 0 {
		t.Errorf("distances %v, want +Inf and 0", d)
	}
}
