package fit

import (
	"math"
	"math/cmplx"
	"testing"
)

// Mirrored zeros leave the spectrum as it was but for a factor, and are inside.
func TestInsideCircle(t *testing.T) {
	for _, roots := range [][]complex128{{1.25, 0.5}, {-3, complex(1.2, 0.9), complex(1.2, -0.9)}, {0.3, 0.9}, {1, 2}} {
		c := delayPoly(roots)
		in := insideCircle(c)
		for _, z := range delayRoots(in) {
			if !(cmplx.Abs(z) <= 1-nearestCircle/2) {
				t.Errorf("%v: zero %v", roots, z)
			}
		}
		ratio := func(w float64) float64 {
			q := cmplx.Exp(complex(0, -w))
			return cmplx.Abs(polyAt(c, q) / polyAt(in, q))
		}
		for w := 0.5; w < math.Pi; w += 0.5 {
			if r := ratio(w) / ratio(0.25); !(math.Abs(r-1) < 1e-4) { // a zero on the circle moves by 1e-6
				t.Errorf("%v: spectra differ by %g at %g", roots, r, w)
			}
		}
	}
	c := []float64{1, -0.5}
	if in := insideCircle(c); in[1] != -0.5 {
		t.Errorf("zero inside moved: %v", in)
	}
}

// 1/(1 - z^-1/2) = 1 + z^-1/2 + z^-2/4 ..., and (1 - z^-1/2)/(1 - z^-1/2) = 1.
func TestDivideBy(t *testing.T) {
	for i, v := range divideBy([]float64{1}, []float64{1, -0.5}, 8) {
		if v != math.Pow(0.5, float64(i)) {
			t.Errorf("term %d: %g", i, v)
		}
	}
	for i, v := range divideBy([]float64{1, -0.5}, []float64{1, -0.5}, 8) {
		if want := map[bool]float64{true: 1}[i == 0]; v != want {
			t.Errorf("term %d: %g", i, v)
		}
	}
}

// A step that leaves the circle is mirrored before its misfit is taken.
func TestNullSpaceStepsStayInside(t *testing.T) {
	m, err := FitARX(rough(8, 500), ARXOptions{NA: 6, NB: 6, Delay: 1})
	if err != nil {
		t.Fatal(err)
	}
	f := nullSpace{m: m, opt: NullSpaceOptions{NA: 1, NB: 1, NC: 1}, na: 6, nb: 6}
	r := f.model([]float64{-0.9, 0.1, -1.25})
	if r == nil || math.Abs(r.C[1]+0.8) > 1e-12 {
		t.Errorf("C of zero 1.25: %+v, want the zero at 0.8", r)
	}
}
