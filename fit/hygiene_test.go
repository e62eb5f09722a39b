package fit_test

import (
	"errors"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit"
	"steadyrig/fit/fittest"
	"steadyrig/fit/fittest/conform"
)

// What a bad log may hold comes back as one line, not as a panic or a model.
func TestBadRecords(t *testing.T) {
	good := fittest.D2()
	withNaN := append([]float64(nil), good.Y...)
	withNaN[700] = math.NaN()
	flat := make([]float64, len(good.U))
	quiet := fittest.D2z()
	for _, c := range []struct {
		name      string
		recs      []fit.Record
		condition bool
	}{
		{"no records", nil, false},
		{"empty record", []fit.Record{{}}, false},
		{"one row", []fit.Record{{U: []float64{1}, Y: []float64{1}}}, false},
		{"few rows", []fit.Record{{U: good.U[:5], Y: good.Y[:5]}}, false},
		{"not a number", []fit.Record{{U: good.U, Y: withNaN}}, false},
		{"input never moves", []fit.Record{{U: flat, Y: good.Y}}, true},
		{"output never moves", []fit.Record{{U: good.U, Y: flat}}, true},
		{"nothing moves", []fit.Record{{U: flat, Y: flat}}, true},
		{"no power from outside", []fit.Record{{U: quiet.U, Y: quiet.Y}}, true},
	} {
		var ill fit.Condition
		check := func(method string, err error) {
			if err == nil {
				t.Errorf("%s: %s: no error", c.name, method)
			} else if strings.Contains(err.Error(), "\n") || errors.As(err, &ill) != c.condition {
				t.Errorf("%s: %s: %q, Condition should be %v", c.name, method, err, c.condition)
			}
		}
		_, err := fit.LongARX(c.recs)
		check("LongARX", err)
		_, err = fit.FitARX(c.recs, fit.ARXOptions{NA: 3, NB: 3, Delay: 1})
		check("FitARX", err)
		_, err = fit.Subspace(c.recs, fit.SubspaceOptions{Past: 4})
		check("Subspace", err)
		_, err = fit.Subspace(c.recs, fit.SubspaceOptions{})
		check("Subspace, past by AICc", err)
	}
}

// The same records give the same bits, and are left as they were.
func TestRepeatable(t *testing.T) {
	rig := fittest.Rigs()[2]
	u, y, dither := rig.RecordWithDither(3000, 3, 3)
	u0, y0 := append([]float64(nil), u...), append([]float64(nil), y...)
	run := func(m fit.Estimator) *fit.PoleEstimate {
		e, err := m.Estimate([]fit.Record{{U: u, Y: y}}, [][][]float64{{dither}}, conform.Found(rig))
		if err != nil {
			t.Fatal(err)
		}
		return e
	}
	for _, m := range fit.Estimators() {
		a, b := run(m), run(m)
		if !slices.Equal(a.Den, b.Den) || !mat.Equal(a.Cov, b.Cov) {
			t.Errorf("%s: %v, then %v", m.Name(), a, b)
		}
	}
	for i := range u {
		if u[i] != u0[i] || y[i] != y0[i] {
			t.Fatal("record changed")
		}
	}
}

// Units do not matter: input in other units by 1e6, output by 1e-6, both far from zero.
func TestUnitsDoNotMatter(t *testing.T) {
	rig := fittest.Rigs()[1]
	u, y, dither := rig.RecordWithDither(3000, 3, 4)
	u2, y2 := make([]float64, len(u)), make([]float64, len(y))
	for i := range u {
		u2[i], y2[i] = 1e6*u[i]+3e8, 1e-6*y[i]-5e-3
	}
	scaled := conform.Found(rig)
	scaled.Num = scaled.Num.Scale(1e-12)
	for _, m := range fit.Estimators() {
		a, err := m.Estimate([]fit.Record{{U: u, Y: y}}, [][][]float64{{dither}}, conform.Found(rig))
		if err != nil {
			t.Fatal(err)
		}
		b, err := m.Estimate([]fit.Record{{U: u2, Y: y2}}, [][][]float64{{dither}}, scaled)
		if err != nil {
			t.Fatal(err)
		}
		for i := range len(a.Den) - 1 {
			if sd := math.Sqrt(a.Cov.At(i, i)); !(math.Abs(a.Den[i]-b.Den[i]) < 0.01*sd) {
				t.Errorf("%s: coefficient %d moved from %g to %g, its deviation is %g", m.Name(), i, a.Den[i], b.Den[i], sd)
			}
			if v, w := a.Cov.At(i, i), b.Cov.At(i, i); !(math.Abs(v-w) < 1e-3*v) {
				t.Errorf("%s: variance %d moved from %g to %g", m.Name(), i, v, w)
			}
		}
	}
}

// The direct term by least squares is no witness of how the columns are paired where the law answers at once: with
// u = r - K y it tends to -K lambda/(s + K^2 lambda), s the variance of r and lambda that of e, on rightly paired columns
// (the regression of e_k on r_k - K e_k, what u_k has beyond the past).
func TestDirectTermOfRightPairing(t *testing.T) {
	const k, lambda = 2.0, 0.25
	for trial := range 10 {
		rnd := rand.New(rand.NewPCG(11, uint64(trial)))
		n := 1000
		rec := fit.Record{U: make([]float64, n), Y: make([]float64, n)}
		y, u := 0.0, 0.0
		for i := range n {
			y = 1.25*y + 0.5*u + math.Sqrt(lambda)*rnd.NormFloat64()
			u = rnd.NormFloat64() - k*y
			rec.U[i], rec.Y[i] = u, y
		}
		m, err := fit.FitARX([]fit.Record{rec}, fit.ARXOptions{NA: 1, NB: 2, Delay: 0})
		if err != nil {
			t.Fatal(err)
		}
		if d := m.B[0] + k*lambda/(1+k*k*lambda); !(math.Abs(d) < 5*math.Sqrt(m.Cov.At(1, 1))) {
			t.Errorf("direct term %.3f, want %.3f", m.B[0], -k*lambda/(1+k*k*lambda))
		}
	}
}
