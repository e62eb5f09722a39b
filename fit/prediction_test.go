package fit

import (
	"math"
	"math/rand/v2"
	"testing"

	"steadyrig/fit/lti"
)

// loopData simulates A D y = B D u + C e in closed loop under u = r - k(q) y
// from exact polynomials, without any estimator's code.
func loopData(seed uint64, n int, a, b, d, c []float64, whole int, gain []float64, sd float64) Record {
	rnd := rand.New(rand.NewPCG(seed, 1))
	ad, bd := []float64(lti.Poly(a).Mul(d)), []float64(lti.Poly(b).Mul(d))
	rec := Record{U: make([]float64, n), Y: make([]float64, n)}
	e := make([]float64, n)
	level := 1.0
	for k := range n {
		e[k] = sd * rnd.NormFloat64()
		y := e[k]
		for i := 1; i < len(ad) && i <= k; i++ {
			y -= ad[i] * rec.Y[k-i]
		}
		for i := range bd {
			if j := k - i - whole; j >= 0 && i+whole > 0 {
				y += bd[i] * rec.U[j]
			}
		}
		for i := 1; i < len(c) && i <= k; i++ {
			y += c[i] * e[k-i]
		}
		rec.Y[k] = y
		if rnd.Float64() < 0.1 {
			level = -level
		}
		u := level
		for i := range gain {
			if k-i >= 0 {
				u -= gain[i] * rec.Y[k-i]
			}
		}
		rec.U[k] = u
	}
	return rec
}

// pendulum is an unstable rig with sensor noise only, sampled at 0.05 s:
// 9/(s^2-9) with C the mirrored A of white sensor noise.
func pendulum(seed uint64, n int) (Record, lti.TF) {
	g := lti.TF{Num: lti.Poly{9}, Den: lti.Poly{-9, 0, 1}}
	d := lti.SampleDelta(g.Num, g.Den, 0, 0.05)
	a := lti.Shift(nil, d.A)
	b := lti.ShiftInput(d.B0, d.B1)
	z := math.Exp(-0.15)
	return loopData(seed, n, a, b, []float64{1}, delayPoly([]complex128{complex(z, 0), complex(z, 0)}), 0, []float64{22, -18}, 0.02), g
}

func TestPredictionGradient(t *testing.T) {
	// The determinant's slope is itself a difference, good to about 1e-3 of a
	// term that is a percent of C's gradient on this record.
	const gradTol = 2e-5
	for _, missing := range [][]int{nil, {40, 41, 45, 200, 300, 301, 302, 303, 304, 305, 306, 599}} {
		rec, _ := pendulum(1, 600)
		rec.Missing = missing
		testGradient(t, []Record{rec}, gradTol)
	}
	several := pieces()
	several[0].Missing, several[2].Missing, several[3].Missing = []int{25, 100, 101}, []int{3, 30, 31, 90}, []int{150}
	testGradient(t, several, gradTol)
}

func testGradient(t *testing.T, recs []Record, gradTol float64) {
	p, err := NewPredictor(recs, 0.05, 0.2)
	if err != nil {
		t.Fatal(err)
	}
	start := &Prediction{
		Shape: Shape{Poles: 3, Zeros: 1, Colour: 1, FreeDelay: true},
		Num:   lti.Poly{9, 0.3}, Den: lti.Poly{-100, -9, 11, 1}, Delay: 0.07,
		D: []float64{1, -0.9}, C: delayPoly([]complex128{0.8, 0.7 + 0.1i, 0.7 - 0.1i, 0.2}),
	}
	s, x := p.begin(start)
	_, q, ok := s.errorsAt(x)
	if !ok {
		t.Fatal("no errors at the start")
	}
	objective, _, _ := s.errorsAt(x)
	scale := objective / s.rss // the objective's own factor on the gradient of S
	_, g := s.information(x, q)
	for k := range g {
		step := make([]float64, len(g))
		const eps = 1e-6
		step[k] = eps
		up, _, _ := s.errorsAt(s.moved(x, step))
		step[k] = -eps
		down, _, _ := s.errorsAt(s.moved(x, step))
		want := (up - down) / (2 * eps) / 2 / scale
		if !(math.Abs(g[k]-want) <= gradTol*(math.Abs(want)+math.Abs(g[k]))+1e-7) {
			t.Errorf("%d records, parameter %d: gradient %.10g, differences give %.10g", len(recs), k, g[k], want)
		}
	}
}

func TestPredictionFindsPendulum(t *testing.T) {
	for seed := range uint64(4) {
		rec, g := pendulum(10+seed, 4000)
		p, err := NewPredictor([]Record{rec}, 0.05, 0.2)
		if err != nil {
			t.Fatal(err)
		}
		arx, err := ChooseARX([]Record{rec}, ChooseOptions{Delay: 1})
		if err != nil {
			t.Fatal(err)
		}
		shape := Shape{Poles: 2, Zeros: 0}
		seeds := arx.Reduce(4, p.su, p.sy, 0.05)
		for _, sd := range seeds {
			t.Log("seed", sd.Poles, sd.Noise)
		}
		m := p.Start(shape, seeds[1], 0, 0, nil)
		if m == nil {
			t.Fatal("no start")
		}
		f, err := p.Fit(m, 1e-10, 50)
		if err != nil {
			t.Fatal(err)
		}
		if err := p.Covariance(f); err != nil {
			t.Fatal(err)
		}
		t.Log(f.Num, f.Den, f.C, f.Steps, f.Converged, f.RSS, f.Variance, f.Condition)
		for i, want := range []float64{g.Num[0], g.Den[1], g.Den[0]} {
			got := []float64{f.Num[0], f.Den[1], f.Den[0]}[i]
			sd := math.Sqrt(f.Cov.At(i, i))
			t.Logf("%g +- %g, want %g", got, sd, want)
			if !(math.Abs(got-want) < 4*sd) {
				t.Errorf("seed %d parameter %d = %g, want %g within 4 x %g", seed, i, got, want, sd)
			}
		}
	}
}

// Where the output rests a unit higher, the input that holds it differs by the
// inverse of the steady gain.
func TestRest(t *testing.T) {
	rec, g := pendulum(5, 1500)
	for k := range rec.Y {
		rec.Y[k] += 40
		rec.U[k] += 7
	}
	p, err := NewPredictor([]Record{rec}, 0.05, 0.2)
	if err != nil {
		t.Fatal(err)
	}
	z := math.Exp(-0.15)
	f, err := p.Fit(&Prediction{Shape: Shape{Poles: 2}, Num: g.Num, Den: g.Den, D: []float64{1}, C: delayPoly([]complex128{complex(z, 0), complex(z, 0)})}, 1e-10, 50)
	if err != nil {
		t.Fatal(err)
	}
	dc := f.TF().DC()
	if got := p.Rest(f, 0, 42) - p.Rest(f, 0, 41); math.Abs(got*dc-1) > 1e-9 {
		t.Errorf("a unit of output takes %g of input, want %g", got, 1/dc)
	}
	// The simulation's own operating point, moved with the columns: deviations
	// of the input's mean and of the gain stay far below this.
	if got := p.Rest(f, 0, 40); math.Abs(got-7) > 0.05 {
		t.Errorf("an output of 40 rests at an input of %g, want 7", got)
	}
}
