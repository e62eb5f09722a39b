package conform

import (
	"math"
	"testing"

	"steadyrig/fit/fittest"
)

// With white noise at the input only, a first-order plant has C = 1, and under u = r - K y the bound with C known is, in
// closed form, N var a = lambda (K^2/s + 1/Ry) (Gustavsson, Ljung & Söderström, Identification of processes in closed loop,
// Automatica 13 (1977) 59-75). With C estimated too it is no less. A first-order plant has as many coefficients in
// continuous time as sampled, so that both bounds are one.
func TestBoundNoLessThanWithKnownNoise(t *testing.T) {
	rig := fittest.Rigs()[0]
	rig.Hold, rig.SensorNoise = 1, 0
	truth := rig.Truth()
	a, b := -truth.A[1], truth.B[1]
	const n, k = 20000, 2.0
	s, lambda := rig.Dither*rig.Dither, truth.Variance
	ry := (b*b*s + lambda) / (1 - (a-b*k)*(a-b*k))
	want := math.Sqrt(lambda * (k*k/s + 1/ry) / n)
	u, y := rig.Record(n, 2, 0)
	got := math.Sqrt(Bound(rig, u, y, true).Cov.At(0, 0))
	if !(got > 0.98*want && got < 1.5*want) {
		t.Errorf("bound %g, with known noise %g", got, want)
	}
	if c := math.Sqrt(Bound(rig, u, y, false).Cov.At(0, 0)); !(math.Abs(c-got) < 1e-6*got) {
		t.Errorf("bound %g in continuous time, %g sampled", c, got)
	}
}

// Knowing more makes a bound no greater: that of the continuous-time structure is no more than that of free sampled
// coefficients, on every kind of rig.
func TestBoundOfStructureIsLess(t *testing.T) {
	for i, rig := range fittest.Kinds() {
		u, y := rig.Record(2000, 3, uint64(i))
		tight, free := Bound(rig, u, y, false), Bound(rig, u, y, true)
		for _, f := range rig.Factors() {
			_, a, ok := tight.Factor(f)
			_, b, free := free.Factor(f)
			if !ok || !free {
				t.Fatalf("%s: %v is no factor of the truth", rig.Name, f)
			}
			for j := range len(f) - 1 {
				if !(a.At(j, j) <= 1.0001*b.At(j, j)) {
					t.Errorf("%s: coefficient %d of %v: variance %g with the structure, %g without", rig.Name, j, f, a.At(j, j), b.At(j, j))
				}
			}
		}
	}
}
