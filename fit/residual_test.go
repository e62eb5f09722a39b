package fit_test

import (
	"math"
	"testing"

	"steadyrig/fit"
	"steadyrig/fit/fittest"
)

func arxOf(t *testing.T, s fittest.Set, n, first int) (*fit.ARX, [][]float64) {
	t.Helper()
	m, err := fit.FitARX(record(s), fit.ARXOptions{NA: n, NB: n, Delay: 1, First: first, NoConstant: true})
	if err != nil {
		t.Fatal(err)
	}
	e := m.Residuals(record(s))
	return m, [][]float64{e[0][m.First-m.Order:]}
}

// Values of two independent implementations on the same residuals (a statistics library and the definition): Ljung & Box
// 1978.
func TestLjungBox(t *testing.T) {
	_, e := arxOf(t, fittest.D1(), 2, 0)
	for _, c := range []struct {
		lags int
		q, p float64
	}{{10, 14.109509, 0.028437}, {20, 18.820691, 0.278071}, {25, 29.138709, 0.110711}} {
		q, p := fit.LjungBox(e, c.lags, 4)
		near(t, "Q", q, c.q, 1e-6/c.q)
		near(t, "p", p, c.p, 1e-6/c.p)
	}
	q, _ := fit.BoxPierce(e, 20, 4)
	near(t, "Box-Pierce", q, 18.600934, 1e-6/18)
}

// The checks must pass true structures and refuse wrong ones: a bad order, and an unstable plant under coloured noise
// whose pole the ARX model misses by far more than its interval says (Söderström & Stoica, System Identification, 1989,
// on errors in regressors).
func TestWhiteness(t *testing.T) {
	for _, c := range []struct {
		name   string
		set    fittest.Set
		order  int
		first  int
		q      float64
		refuse bool
	}{
		{"D2, true structure", fittest.D2(), 1, 0, 9.491333, false},
		{"D3, true structure", fittest.D3(), 2, 0, 16.508782, false},
		{"D1, order too low", fittest.D1(), 1, 2, 831.518098, true},
		{"D5, coloured noise", fittest.D5(), 1, 0, 158.430729, true},
	} {
		m, e := arxOf(t, c.set, c.order, c.first)
		q, p := fit.LjungBox(e, 20, 2*c.order)
		near(t, c.name, q, c.q, 1e-6/c.q)
		if (p < 0.01) != c.refuse {
			t.Errorf("%s: p %.3g, refused should be %v", c.name, p, c.refuse)
		}
		if c.set.Name == "D5" {
			near(t, "biased pole", -m.A[1], 1.506984527896197, 1e-10)
			near(t, "input gain", m.B[1], 0.5288750962525607, 1e-10)
			near(t, "se of the pole", math.Sqrt(m.Cov.At(0, 0)), 0.03039561648402, 1e-9)
		}
	}
}

// Standard linear-model theory, residual sums of squares in exact arithmetic.
func TestFTestOfOrder(t *testing.T) {
	for _, c := range []struct {
		set       fittest.Set
		order, df int
		f, p      float64
	}{
		{fittest.D1(), 3, 990, 0.259498922441, 0.7714904958},
		{fittest.D3(), 3, 3991, 0.0347288723675, 0.96586755},
		{fittest.D2(), 2, 1993, 0.661416366481, 0.51623305},
	} {
		maxOrder := map[string]int{"D1": 4}[c.set.Name]
		if maxOrder == 0 {
			maxOrder = 3
		}
		s, err := fit.ARXOrders(record(c.set), fit.ChooseOptions{MaxOrder: maxOrder, Delay: 1, NoConstant: true})
		if err != nil {
			t.Fatal(err)
		}
		f, p := fit.FTest(s[c.order-2].RSS, s[c.order-1].RSS, 2, c.df)
		near(t, c.set.Name+" F", f, c.f, 1e-8)
		near(t, c.set.Name+" p", p, c.p, 1e-8)
	}
}

// NIST Statistical Reference Datasets, univariate, NumAcc3 and NumAcc4: lag-1 autocorrelation -0.999 exactly. The mean
// is c = 1e6 or 1e7 and the deviations 0.1, so that the data are rounded to 1e-9 and 1e-8 of a deviation.
func TestAutocorrelationFarFromZero(t *testing.T) {
	for _, c := range []float64{1e6, 1e7} {
		x := []float64{c + 0.2}
		for range 500 {
			x = append(x, c+0.1, c+0.3)
		}
		near(t, "r1", fit.Autocorrelation([][]float64{x}, 1)[1], -0.999, 1e-7)
	}
}

// A model of too low an order is refused; a true one is not, in closed loop either, where the present input holds the
// present residual: u = r - 2 y.
func TestPastInputs(t *testing.T) {
	for _, c := range []struct {
		set    fittest.Set
		order  int
		refuse bool
	}{{fittest.D1(), 1, true}, {fittest.D1(), 2, false}, {fittest.D2(), 1, false}, {fittest.D3(), 2, false}} {
		_, e := arxOf(t, c.set, c.order, 2)
		u := c.set.U[2:]
		_, p, err := fit.PastInputs([]fit.Record{{U: u, Y: e[0]}}, 10)
		if err != nil {
			t.Fatal(err)
		}
		if (p < 0.01) != c.refuse {
			t.Errorf("%s order %d: p %.3g, refused should be %v", c.set.Name, c.order, p, c.refuse)
		}
		r := fit.CrossCorrelation([]fit.Record{{U: u, Y: e[0]}}, 10)
		bound := 4 / math.Sqrt(float64(len(u)))
		for k, v := range r[1:] {
			if !c.refuse && math.Abs(v) > bound {
				t.Errorf("%s order %d: correlation %.3g with the input %d samples ago", c.set.Name, c.order, v, k+1)
			}
		}
		if closed := c.set.R != nil; closed && r[0] > -bound {
			t.Errorf("%s: correlation %.3g with the present input, which holds -2 e", c.set.Name, r[0])
		}
	}
}
