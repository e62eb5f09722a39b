package fit_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"steadyrig/fit"
	"steadyrig/fit/fittest"
)

func record(s fittest.Set) []fit.Record { return []fit.Record{{U: s.U, Y: s.Y}} }

func near(t *testing.T, what string, got, want, rel float64) {
	t.Helper()
	if !(math.Abs(got-want) <= rel*math.Abs(want)) {
		t.Errorf("%s: %.16g, want %.16g within %g relative", what, got, want, rel)
	}
}

// 95 % intervals of both parameters of an unstable plant in closed loop, a constant for each of two records estimated as
// well: of 400 trials 362 to 396 have a false alarm probability of 7e-5.
func TestARXCovers(t *testing.T) {
	hitA, hitB := 0, 0
	for k := range 400 {
		rnd := rand.New(rand.NewPCG(9, uint64(k)))
		var recs []fit.Record
		for i := range 2 {
			r := fit.Record{U: make([]float64, 150), Y: make([]float64, 150)}
			y, u := 0.0, 0.0
			for j := range r.U {
				y = 1.25*y + 0.5*u + 0.5*rnd.NormFloat64()
				u = rnd.NormFloat64() - 2*y
				r.U[j], r.Y[j] = u+7*float64(i), y-3*float64(i)
			}
			recs = append(recs, r)
		}
		m, err := fit.FitARX(recs, fit.ARXOptions{NA: 1, NB: 1, Delay: 1})
		if err != nil {
			t.Fatal(err)
		}
		if math.Abs(-m.A[1]-1.25) < 1.96*math.Sqrt(m.Cov.At(0, 0)) {
			hitA++
		}
		if math.Abs(m.B[1]-0.5) < 1.96*math.Sqrt(m.Cov.At(1, 1)) {
			hitB++
		}
	}
	if hitA < 362 || hitA > 396 || hitB < 362 || hitB > 396 {
		t.Errorf("covered %d and %d times of 400", hitA, hitB)
	}
}
