package fit

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// rough returns n records of a drifting input and an output that follows it, far from zero.
func rough(seed uint64, lengths ...int) (recs []Record) {
	rnd := rand.New(rand.NewPCG(seed, 0))
	for i, n := range lengths {
		r := Record{U: make([]float64, n), Y: make([]float64, n)}
		u, y := 0.0, 0.0
		for k := range n {
			y = 0.9*y + 0.1*u + 0.01*rnd.NormFloat64()
			u = 0.8*u + rnd.NormFloat64()
			r.U[k], r.Y[k] = u+300*float64(i+1), y-50*float64(i+1)
		}
		recs = append(recs, r)
	}
	return recs
}

// The oracle: the regressors written out in full, with a column of ones for each record, and one tall QR.
func tall(recs []Record, opt ARXOptions, first int) (*LSResult, error) {
	var rows [][]float64
	var resp []float64
	for i, r := range recs {
		for k := first; k < len(r.Y); k++ {
			var row []float64
			for j := 1; j <= opt.NA; j++ {
				row = append(row, -r.Y[k-j])
			}
			for j := range opt.NB {
				row = append(row, r.U[k-opt.Delay-j])
			}
			one := make([]float64, len(recs))
			one[i] = 1
			rows = append(rows, append(row, one...))
			resp = append(resp, r.Y[k])
		}
	}
	x := mat.NewDense(len(rows), len(rows[0]), nil)
	for i, r := range rows {
		x.SetRow(i, r)
	}
	return LeastSquares(x, resp)
}

func TestARXAgainstTallQR(t *testing.T) {
	for _, c := range []struct {
		name string
		recs []Record
		opt  ARXOptions
	}{
		{"one record", rough(1, 500), ARXOptions{NA: 5, NB: 5, Delay: 1}},
		{"three records", rough(2, 300, 41, 200), ARXOptions{NA: 8, NB: 3, Delay: 2}},
		{"direct term", rough(3, 300, 400), ARXOptions{NA: 2, NB: 6, Delay: 0}},
		{"later first row", rough(4, 300, 400), ARXOptions{NA: 3, NB: 3, Delay: 1, First: 17}},
		{"no output lags", rough(5, 300), ARXOptions{NB: 9, Delay: 1}},
		{"no input lags", rough(6, 300), ARXOptions{NA: 4}},
	} {
		t.Run(c.name, func(t *testing.T) {
			lags, order := c.opt.lags()
			g := newRegression(signals(c.recs), lags, max(order, c.opt.First), false)
			want, err := tall(c.recs, c.opt, g.first)
			if err != nil {
				t.Fatal(err)
			}
			byProducts := triangleOfProducts(g.products(), g.rows)
			if byProducts == nil {
				t.Fatal("products not positive definite")
			}
			for way, tri := range map[string]*triangle{"products": byProducts, "rows": g.reduceRows()} {
				m, err := g.arx(tri, c.opt)
				if err != nil {
					t.Fatal(err)
				}
				got := append(append(append([]float64(nil), m.A[1:]...), m.B[min(c.opt.Delay, len(m.B)):]...), m.Const...)
				// Rounding is 1e-16 times the condition number, 1e2, squared for the products, and the constants are
				// 1e3 times the noise.
				for i, w := range want.Coef {
					if !(math.Abs(got[i]-w) <= 1e-8*want.SE[i]) {
						t.Errorf("%s: coefficient %d is %.15g, want %.15g (se %.2g)", way, i, got[i], w, want.SE[i])
					}
				}
				for i := range c.opt.NA + c.opt.NB {
					for j := range c.opt.NA + c.opt.NB {
						if d := m.Cov.At(i, j) - want.Cov.At(i, j); !(math.Abs(d) <= 1e-9*want.SE[i]*want.SE[j]) {
							t.Errorf("%s: covariance %d,%d is %g, want %g", way, i, j, m.Cov.At(i, j), want.Cov.At(i, j))
						}
					}
				}
				if !(math.Abs(m.RSS-want.RSS) <= 1e-9*want.RSS) {
					t.Errorf("%s: RSS %.15g, want %.15g", way, m.RSS, want.RSS)
				}
				e, sum := m.Residuals(c.recs), 0.0
				for _, r := range e {
					for _, v := range r[g.first-m.Order:] {
						sum += v * v
					}
				}
				if !(math.Abs(sum-want.RSS) <= 1e-9*want.RSS) {
					t.Errorf("%s: squares of the residuals %.15g, want %.15g", way, sum, want.RSS)
				}
			}
		})
	}
}

// Noise-free data: nearly dependent lags, where the products alone lose the answer, must reach the rows.
func TestARXFallsBackToRows(t *testing.T) {
	rnd := rand.New(rand.NewPCG(7, 0))
	n := 2000
	r := Record{U: make([]float64, n), Y: make([]float64, n)}
	u := 0.0
	for k := 2; k < n; k++ {
		u = 0.999*u + rnd.NormFloat64()
		r.U[k] = u
		r.Y[k] = 1.999*r.Y[k-1] - 0.99901*r.Y[k-2] + 1e-4*r.U[k-1] + 0.9e-4*r.U[k-2]
	}
	m, err := FitARX([]Record{r}, ARXOptions{NA: 2, NB: 2, Delay: 1})
	if err != nil {
		t.Fatal(err)
	}
	got := []float64{m.A[1], m.A[2], m.B[1], m.B[2]}
	for i, want := range []float64{-1.999, 0.99901, 1e-4, 0.9e-4} {
		if !(math.Abs(got[i]-want) < 1e-9*math.Abs(want)) {
			t.Errorf("coefficient %d: %.15g, want %.15g (condition %.2g)", i, got[i], want, m.Condition)
		}
	}
}

func BenchmarkFitARX(b *testing.B) {
	for _, c := range []struct {
		name     string
		n, order int
	}{{"rows=10000/order=50", 10000, 50}, {"rows=1000000/order=50", 1000000, 50}} {
		recs := rough(1, c.n)
		b.Run(c.name, func(b *testing.B) {
			for b.Loop() {
				if _, err := FitARX(recs, ARXOptions{NA: c.order, NB: c.order, Delay: 1}); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(c.n)*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
		})
	}
}

func BenchmarkReduceRows(b *testing.B) {
	recs := rough(1, 10000)
	lags, order := ARXOptions{NA: 50, NB: 50, Delay: 1}.lags()
	g := newRegression(signals(recs), lags, order, false)
	for b.Loop() {
		g.reduceRows()
	}
}
