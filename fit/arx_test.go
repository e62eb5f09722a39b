package fit_test

import (
	"errors"
	"math"
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

// Results of the definition in exact rational arithmetic on the deterministic sets.
func TestFitARXExact(t *testing.T) {
	for _, c := range []struct {
		name string
		set  fittest.Set
		opt  fit.ARXOptions
		a, b []float64 // as coefficients of y_{k-i}, u_{k-i} on the right-hand side
		seA  []float64
		seB  []float64
		rss  float64
		tol  float64 // printed digits
	}{
		{"D1 second order", fittest.D1(), fit.ARXOptions{NA: 2, NB: 2, Delay: 1, NoConstant: true},
			[]float64{1.505396543036128, -0.6909083067385771}, []float64{1.000931822409103, 0.490280910432716},
			[]float64{0.006232741766484, 0.0060947990315351}, []float64{0.0093314916403173, 0.010699120070327},
			89609302.0486137684, 1e-10},
		{"D1 misspecified", fittest.D1(), fit.ARXOptions{NA: 1, NB: 1, Delay: 1, First: 2, NoConstant: true},
			[]float64{0.9052985326828285}, []float64{0.8550472043067398},
			[]float64{0.011636946455165}, []float64{0.047353303954751}, 2346528.938256521 * 996, 1e-10},
		{"D2 unstable in closed loop", fittest.D2(), fit.ARXOptions{NA: 1, NB: 1, Delay: 1, NoConstant: true},
			[]float64{1.209254357987922}, []float64{0.4917262136555993},
			[]float64{0.030403095107474}, []float64{0.012713241985832}, 169131032.544955332, 1e-10},
		{"D3 unstable second order", fittest.D3(), fit.ARXOptions{NA: 2, NB: 2, Delay: 1, NoConstant: true},
			[]float64{1.992030745502276, -0.9324355727753951}, []float64{0.2470256565280281, 0.2479606651469649},
			[]float64{0.011148141585835, 0.0094476522452533}, []float64{0.0045159252104649, 0.0032689662447899},
			341203694.990550877, 1e-9},
	} {
		t.Run(c.name, func(t *testing.T) {
			m, err := fit.FitARX(record(c.set), c.opt)
			if err != nil {
				t.Fatal(err)
			}
			near(t, "RSS", m.RSS, c.rss, c.tol)
			for i, want := range c.a {
				near(t, "a", -m.A[i+1], want, c.tol)
				near(t, "se a", math.Sqrt(m.Cov.At(i, i)), c.seA[i], c.tol)
			}
			for i, want := range c.b {
				near(t, "b", m.B[i+1], want, c.tol)
				j := i + len(c.a)
				near(t, "se b", math.Sqrt(m.Cov.At(j, j)), c.seB[i], c.tol)
			}
		})
	}
}

func TestNoOutsidePowerIsCondition(t *testing.T) {
	_, err := fit.FitARX(record(fittest.D2z()), fit.ARXOptions{NA: 1, NB: 1, Delay: 1, NoConstant: true})
	var c fit.Condition
	if !errors.As(err, &c) {
		t.Fatalf("y1 and u1 = -2 y1 as regressors: error %v, want Condition", err)
	}
}

// Akaike 1974, Schwarz 1978; residual sums of squares in exact arithmetic.
func TestARXOrders(t *testing.T) {
	s, err := fit.ARXOrders(record(fittest.D1()), fit.ChooseOptions{MaxOrder: 4, Delay: 1, Criterion: fit.BIC, NoConstant: true})
	if err != nil {
		t.Fatal(err)
	}
	for i, want := range []struct{ rss, bic float64 }{
		{2334797459.843112, 14622.5814454}, {89444501.18061474, 11387.3750973}, {89397635.34215001, 11400.6605853}, {89360818.4733405, 11414.05781},
	} {
		near(t, "RSS", s[i].RSS, want.rss, 1e-12)
		near(t, "BIC", s[i].Score, want.bic, 1e-10)
	}
}
