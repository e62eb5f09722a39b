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
