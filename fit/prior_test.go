package fit

import (
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// scaled is a prior of scale times the information.
func scaled(mean []float64, info *mat.SymDense, scale float64) Prior {
	p := Prior{Mean: mean, Info: mat.NewSymDense(len(mean), nil)}
	p.Info.ScaleSym(scale, info)
	return p
}

// A prior without information leaves the fit as it is, one of all information holds
// the plant where it is, and the estimate from one log as a prior gives with the other
// log what both give together, as far as its likelihood is normal: of 4 000 rows each
// within a twentieth of a deviation.
func TestFitNear(t *testing.T) {
	one, g := pendulum(7, 4000)
	two, _ := pendulum(8, 4000)
	two.Log = 1
	z := math.Exp(-0.15)
	start := &Prediction{
		Shape: Shape{Poles: 2}, Num: g.Num, Den: lti.Poly{-9, 0.1, 1}, D: []float64{1},
		C: delayPoly([]complex128{complex(z, 0), complex(z, 0)}), Period: 0.05,
	}
	fitted := func(recs ...Record) (*Predictor, *Prediction) {
		p, err := NewPredictor(recs, 0.05, 0)
		if err != nil {
			t.Fatal(err)
		}
		f, err := p.Fit(start, 1e-11, 200)
		if err == nil {
			err = p.Covariance(f)
		}
		if err != nil {
			t.Fatal(err)
		}
		return p, f
	}
	_, f1 := fitted(one)
	two.Log = 0
	p2, f2 := fitted(two)
	two.Log = 1
	_, both := fitted(one, two)
	theta := func(f *Prediction) []float64 { return []float64{f.Num[0], f.Den[1], f.Den[0]} }
	cov := mat.NewSymDense(3, nil)
	for i := range 3 {
		for j := range i + 1 {
			cov.SetSym(i, j, f1.Cov.At(i, j))
		}
	}
	var info mat.SymDense
	var chol mat.Cholesky
	if !chol.Factorize(cov) || chol.InverseTo(&info) != nil {
		t.Fatal("no inverse")
	}
	for _, c := range []struct {
		name  string
		scale float64
		want  *Prediction
		tol   float64 // deviations of one log
	}{
		{"no information", 0, f2, 1e-3},
		{"all information", 1e8, f1, 1e-3},
		{"the other log's", 1, both, 0.05},
	} {
		f, err := p2.FitNear(f2, scaled(theta(f1), &info, c.scale), 1e-11, 200)
		if err != nil {
			t.Fatal(err)
		}
		for i, v := range theta(f) {
			if d := math.Abs(v-theta(c.want)[i]) / math.Sqrt(f1.Cov.At(i, i)); !(d < c.tol) {
				t.Errorf("%s: parameter %d is %.6g, want %.6g: %.2g deviations off", c.name, i, v, theta(c.want)[i], d)
			}
		}
	}
}

// The objective's gradient with a prior against differences.
func TestGradientNearPrior(t *testing.T) {
	rec, _ := pendulum(1, 600)
	p, err := NewPredictor([]Record{rec}, 0.05, 0.2)
	if err != nil {
		t.Fatal(err)
	}
	s, x := p.begin(&Prediction{
		Shape: Shape{Poles: 3, Zeros: 1, Integrators: 1, FreeDelay: true},
		Num:   lti.Poly{9, 0.3}, Den: lti.Poly{0, -9, 11, 1}, Delay: 0.07,
		D: []float64{1}, C: delayPoly([]complex128{0.8, 0.7 + 0.1i, 0.7 - 0.1i}),
	})
	defer s.done()
	info := mat.NewSymDense(5, nil) // b0, b1, a1, a2, delay
	for i, v := range []float64{30, 2e3, 20, 10, 1e5} {
		info.SetSym(i, i, v)
	}
	info.SetSym(0, 1, 50)
	s.prior = s.near(Prior{Mean: []float64{8, 0.2, 10, -8, 0.05}, Info: info})
	_, q, ok := s.errorsAt(x)
	if !ok {
		t.Fatal("no errors at the start")
	}
	_, g := s.information(x, q)
	scale := math.Exp((s.logDet + s.apriori) / float64(s.rows))
	step := make([]float64, len(g))
	for _, k := range s.prior.at {
		const h = 1e-5
		step[k] = h
		up, _, _ := s.errorsAt(s.moved(x, step))
		step[k] = -h
		down, _, _ := s.errorsAt(s.moved(x, step))
		step[k] = 0
		want := (up - down) / (4 * h) // of half the objective
		if got := scale * g[k]; !(math.Abs(got-want) < 1e-4*math.Abs(want)) {
			t.Errorf("parameter %d: %.8g, want %.8g", k, got, want)
		}
	}
}
