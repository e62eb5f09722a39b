package fit

import (
	"errors"
	"math"
	"os"
	"runtime"
	"strconv"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// wholeObjective is the exact objective of one record from its definition, with
// all of it in memory: the errors without κ and ε by the recursion, what a step
// and each past error bring into every row as columns of one dense matrix, both
// solved for by QR with a row of prior for each ε, and the determinant of what
// these columns' products leave.
func wholeObjective(t *testing.T, s *search, x point) float64 {
	t.Helper()
	q, ok := s.sampled(x)
	if !ok {
		t.Fatal("no model")
	}
	u, y := s.recs[0].U, s.recs[0].Y
	first, n, nc := s.first[0], len(y), len(q.c)-1
	ad, bd := lti.Poly(q.a).Mul(q.d), lti.Poly(q.b).Mul(q.d)
	e := make([]float64, n)
	for k := first; k < n; k++ {
		for i, a := range ad {
			e[k] += a * y[k-i]
		}
		for i, b := range bd {
			e[k] -= b * u[min(n-1, k-q.whole-i)]
		}
		for i := 1; i <= nc && k-i >= first; i++ {
			e[k] -= q.c[i] * e[k-i]
		}
	}
	rows := n - first
	step, free := slowResponses(q.c, rows)
	a, b := mat.NewDense(rows+nc, 1+nc, nil), mat.NewVecDense(rows+nc, nil)
	for k := range rows {
		a.Set(k, 0, step[k])
		for i := range nc {
			a.Set(k, 1+i, -free[i][k])
		}
		b.SetVec(k, e[first+k])
	}
	for i := range nc {
		a.Set(rows+i, 1+i, 1)
	}
	var qr mat.QR
	qr.Factorize(a)
	var left, sol mat.VecDense
	if err := qr.SolveVecTo(&sol, false, b); err != nil {
		t.Fatal(err)
	}
	left.MulVec(a, &sol)
	left.SubVec(b, &left)
	var g, information mat.Dense
	g.CloneFrom(a.Slice(0, rows+nc, 1, 1+nc))
	information.Mul(g.T(), &g)
	logDet, _ := mat.LogDet(&information)
	return mat.Dot(&left, &left) * math.Exp(logDet/float64(rows))
}

// The estimate of a record of several blocks against the exact objective of the
// whole one: Newton's step from it towards the least of that is below a hundredth
// of a deviation, and the objectives agree. STEADYRIG_STUDY=1 takes a million rows.
func TestLongRecordAgainstTheWhole(t *testing.T) {
	if testing.Short() {
		t.Skip("takes a second")
	}
	rows := block + 4500
	if os.Getenv("STEADYRIG_STUDY") != "" {
		rows = 1_000_000
	}
	r, g := pendulum(3, rows)
	p, err := NewPredictor([]Record{r}, 0.05, 0.2)
	if err != nil {
		t.Fatal(err)
	}
	m, err := p.Fit(&Prediction{
		Shape: Shape{Poles: 2, Colour: 1, FreeDelay: true},
		Num:   g.Num, Den: g.Den, Delay: 0.01, D: []float64{1, -0.5}, C: delayPoly([]complex128{0.5, 0.6, 0.3}),
	}, 1e-11, 200)
	if err != nil {
		t.Fatal(err)
	}
	s, x := p.begin(m)
	objective, q, _ := s.errorsAt(x)
	if want := wholeObjective(t, s, x); !(math.Abs(objective-want) < 1e-9*want) {
		t.Errorf("objective %.15g, of the whole %.15g", objective, want)
	}
	h, _ := s.information(x, q)
	variance := s.rss / float64(s.rows)
	var inv mat.Dense
	if err := inv.Inverse(h); err != nil {
		t.Fatal(err)
	}
	n := s.shape.size()
	slope := mat.NewVecDense(n, nil)
	for k := range n {
		d := 0.1 * math.Sqrt(variance/h.At(k, k))
		var f [2]float64
		for i, v := range []float64{d, -d} {
			move := make([]float64, n)
			move[k] = v
			y := x.clone()
			add(&y, move, s.shape)
			f[i] = wholeObjective(t, s, y)
		}
		slope.SetVec(k, (f[0]-f[1])/(4*d)*s.rss/objective)
	}
	var newton mat.VecDense
	newton.MulVec(&inv, slope)
	for k := range n {
		if off := newton.AtVec(k) / math.Sqrt(inv.At(k, k)*variance); !(math.Abs(off) < 0.01) {
			t.Errorf("parameter %d is %.2g deviations from the optimum of the whole", k, off)
		}
	}
}

// The derivatives of a window against those of the whole objective, where the
// delay is negative and the window looks a row ahead, and where it is not.
func TestWindowAgainstTheWhole(t *testing.T) {
	r, g := pendulum(4, 2*chunk+300)
	p, err := NewPredictor([]Record{r}, 0.05, 0.2)
	if err != nil {
		t.Fatal(err)
	}
	for _, delay := range []float64{-0.02, 0, 0.13} {
		s, x := p.begin(&Prediction{
			Shape: Shape{Poles: 2, Colour: 1, FreeDelay: true},
			Num:   g.Num, Den: g.Den, Delay: delay, D: []float64{1, -0.5}, C: delayPoly([]complex128{0.5, 0.6, 0.3}),
		})
		objective, q, _ := s.errorsAt(x)
		h, grad := s.information(x, q)
		for k := range grad {
			d := 1e-3 * math.Sqrt(s.rss/float64(s.rows)/h.At(k, k))
			var f [2]float64
			for i, v := range []float64{d, -d} {
				move := make([]float64, len(grad))
				move[k] = v
				y := x.clone()
				add(&y, move, s.shape)
				f[i] = wholeObjective(t, s, y)
			}
			// Per deviation of the parameter, against the errors' variance.
			want := (f[0] - f[1]) / (4 * d) * s.rss / objective
			if unit := math.Sqrt(s.rss / float64(s.rows) * h.At(k, k)); !(math.Abs(grad[k]-want) < 1e-3*unit+1e-5*math.Abs(want)) {
				t.Errorf("delay %g, parameter %d: slope %.8g, of the whole %.8g", delay, k, grad[k], want)
			}
		}
	}
}

// What a row more costs in bytes: two scaled columns and the errors of a fit,
// and no copy of a column for any regression. Slopes between two lengths.
func TestBytesPerRow(t *testing.T) {
	if testing.Short() {
		t.Skip("takes a second")
	}
	const few, many = 100_000, 300_000
	r, g := pendulum(5, many)
	start := &Prediction{Shape: Shape{Poles: 2}, Num: g.Num, Den: g.Den, D: []float64{1}, C: delayPoly([]complex128{0.5, 0.6}), Delay: 0}
	for _, c := range []struct {
		name string
		most float64 // bytes a row
		do   func(recs []Record) error
	}{
		{"fit and covariance", 3*8 + 1, func(recs []Record) error {
			p, err := NewPredictor(recs, 0.05, 0)
			if err != nil {
				return err
			}
			m, err := p.Fit(start, 1e-9, 50)
			if err != nil {
				return err
			}
			return p.Covariance(m)
		}},
		{"regression", 1, func(recs []Record) error {
			_, err := FitARX(recs, ARXOptions{NA: 20, NB: 20, Delay: 1})
			return err
		}},
		{"whiteness", 1, func(recs []Record) error {
			LjungBox([][]float64{recs[0].Y}, 25, 1)
			return nil
		}},
	} {
		bytes := func(rows int) float64 {
			var before, after runtime.MemStats
			runtime.ReadMemStats(&before)
			if err := c.do([]Record{r.Rows(0, rows)}); err != nil {
				t.Fatal(err)
			}
			runtime.ReadMemStats(&after)
			return float64(after.TotalAlloc - before.TotalAlloc)
		}
		bytes(few) // what is allocated once
		if got := (bytes(many) - bytes(few)) / (many - few); !(got <= c.most) {
			t.Errorf("%s: %.3g bytes a row, want %g at most", c.name, got, c.most)
		}
	}
}

// What runs ends with the interrupt's error, wherever it comes.
func TestInterrupt(t *testing.T) {
	r, g := pendulum(6, 3000)
	p, err := NewPredictor([]Record{r}, 0.05, 0)
	if err != nil {
		t.Fatal(err)
	}
	start := &Prediction{Shape: Shape{Poles: 2}, Num: g.Num, Den: g.Den, D: []float64{1}, C: delayPoly([]complex128{0.5, 0.6})}
	m, err := p.Fit(start, 1e-9, 50)
	if err != nil {
		t.Fatal(err)
	}
	stop := errors.New("stop")
	for name, do := range map[string]func() error{
		"fit":        func() error { _, err := p.Fit(start, 1e-9, 50); return err },
		"covariance": func() error { return p.Covariance(m) },
		"errors":     func() error { _, _, err := p.Errors(m); return err },
		"outliers":   func() error { _, err := p.Outliers(m); return err },
		"influence":  func() error { _, err := p.Influence(m); return err },
	} {
		calls := 0
		p.Interrupt = func() error { calls++; return nil }
		if err := do(); err != nil || calls == 0 {
			t.Errorf("%s: asked %d times, %v", name, calls, err)
		}
		for last := 1; last <= calls; last++ {
			k := 0
			p.Interrupt = func() error {
				if k++; k >= last {
					return stop
				}
				return nil
			}
			if err := do(); err != stop || k != last {
				t.Errorf("%s, interrupted at call %d of %d: %v after %d calls", name, last, calls, err, k)
			}
		}
	}
	q, err := p.On([]Record{r})
	if err != nil || q.Interrupt == nil || q.DelayRange != p.DelayRange {
		t.Errorf("other records: %+v, %v", q, err)
	}
}

// The sum by stretches against the sum over lags.
func TestBartlett(t *testing.T) {
	r, _ := pendulum(7, 500)
	for _, lags := range []int{0, 1, 22, 600} {
		var want, size float64
		for i, a := range r.U {
			for j, b := range r.Y {
				if apart := max(i-j, j-i); apart <= lags {
					want += (1 - float64(apart)/float64(lags+1)) * a * b
					size += math.Abs(a * b)
				}
			}
		}
		if got := bartlett(r.U, r.Y, lags); !(math.Abs(got-want) < 1e-12*size) {
			t.Errorf("%d lags: %.15g, want %.15g", lags, got, want)
		}
	}
}

// The median by counting against that of sorted numbers.
func TestMedianModulus(t *testing.T) {
	for _, c := range []struct {
		x    [][]float64
		want float64
	}{
		{[][]float64{{3}}, 3},
		{[][]float64{{-1, 5}, {0, 2}}, 2},
		{[][]float64{{}, {1e-310, -1e300, 0.25, 0.25 + 1e-16, -0.25000000000000006}}, 0.25000000000000006},
	} {
		if got := medianModulus(c.x); got != c.want {
			t.Errorf("%v: %s, want %s", c.x, strconv.FormatFloat(got, 'g', -1, 64), strconv.FormatFloat(c.want, 'g', -1, 64))
		}
	}
}
