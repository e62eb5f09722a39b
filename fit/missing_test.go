package fit

import (
	"math"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// gapped is a short record of the pendulum with single outputs missing, a
// stretch of them, one just before the first equation, and the last.
func gapped(t testing.TB, n int) (*Predictor, *Prediction, Record) {
	t.Helper()
	rec, _ := pendulum(3, n)
	rec.Missing = []int{2, 15, 40, 41, 60, 80, 81, 82, 83, 84, 85, 86, 87, 120, n - 1}
	p, err := NewPredictor([]Record{rec}, 0.05, 0.2)
	if err != nil {
		t.Fatal(err)
	}
	return p, &Prediction{
		Shape: Shape{Poles: 3, Zeros: 1, Colour: 1, FreeDelay: true}, Period: 0.05,
		Num: lti.Poly{9, 0.3}, Den: lti.Poly{-100, -9, 11, 1}, Delay: 0.07,
		D: []float64{1, -0.9}, C: delayPoly([]complex128{0.8, 0.7 + 0.1i, 0.7 - 0.1i, 0.2}),
	}, rec
}

// The likelihood is that of a Kalman filter that skips the missing outputs,
// its state started from the known outputs and the prior of past errors
// (Harvey, Forecasting, Structural Time Series Models and the Kalman Filter,
// 1989, sec. 3.4.7). The constant is the one under which it is largest.
func TestMissingOutputsAreSkippedAsAKalmanFilterDoes(t *testing.T) {
	p, m, rec := gapped(t, 150)
	s, x := p.begin(m)
	objective, q, ok := s.errorsAt(x)
	if !ok {
		t.Fatal("no errors")
	}
	ad, bd := []float64(lti.Poly(q.a).Mul(q.d)), []float64(lti.Poly(q.b).Mul(q.d))
	first := p.first[0]
	if first <= p.Lead {
		t.Fatalf("the first equation is that of row %d, want it after the missing output before row %d", first, p.Lead)
	}
	// What stands in for a missing output must not matter: some nonsense does.
	y := slices.Clone(s.recs[0].Y)
	for _, k := range rec.Missing {
		if k >= first {
			y[k] = 1e3 * float64(k%7-3)
		}
	}
	kalman := func(constant float64) (squares, logs float64, rows int) {
		n := len(ad) - 1
		state, cov := make([]float64, n), make([][]float64, n)
		for i := range n {
			cov[i] = make([]float64, n)
			for j := i + 1; j <= n; j++ {
				state[i] -= ad[j] * y[first+i-j]
			}
			for j := range n {
				for l := 1; l <= n; l++ {
					if i+l <= n && j+l <= n {
						cov[i][j] += q.c[i+l] * q.c[j+l]
					}
				}
			}
		}
		for k := first; k < len(y); k++ {
			known := constant
			for i, b := range bd {
				known += b * s.recs[0].U[k-q.whole-i]
			}
			f := cov[0][0] + 1
			v := y[k] - state[0] - known
			moved := func(x func(i int) float64, i int) float64 { // the state's transition, without noise
				r := -ad[i+1] * x(0)
				if i+1 < n {
					r += x(i + 1)
				}
				return r
			}
			next, gain := make([]float64, n), make([]float64, n)
			half, nextCov := make([][]float64, n), make([][]float64, n)
			for i := range n {
				next[i] = moved(func(j int) float64 { return state[j] }, i) - ad[i+1]*known
				gain[i] = (moved(func(j int) float64 { return cov[j][0] }, i) + q.c[i+1] - ad[i+1]) / f
				half[i], nextCov[i] = make([]float64, n), make([]float64, n)
				for j := range n {
					half[i][j] = moved(func(l int) float64 { return cov[l][j] }, i)
				}
			}
			seen := !slices.Contains(rec.Missing, k)
			for i := range n {
				for j := range n {
					nextCov[i][j] = moved(func(l int) float64 { return half[i][l] }, j) + (q.c[i+1]-ad[i+1])*(q.c[j+1]-ad[j+1])
					if seen {
						nextCov[i][j] -= gain[i] * gain[j] * f
					}
				}
				if seen {
					next[i] += gain[i] * v
				}
			}
			if seen {
				squares += v * v / f
				logs += math.Log(f)
				rows++
			}
			// Left to itself a rounding error that is not symmetric grows.
			for i := range n {
				for j := range i {
					nextCov[i][j] = nextCov[j][i]
				}
			}
			state, cov = next, nextCov
		}
		return squares, logs, rows
	}
	constant := s.work[0].all.x[0]
	squares, logs, rows := kalman(constant)
	if rows != p.Rows() {
		t.Errorf("%d rows count, the filter saw %d", p.Rows(), rows)
	}
	if math.Abs(s.rss/squares-1) > 1e-9 {
		t.Errorf("sum of squares %.12g, the filter's is %.12g", s.rss, squares)
	}
	if math.Abs(s.logDet-logs) > 1e-9*math.Abs(logs) {
		t.Errorf("log determinant %.12g, the filter's is %.12g", s.logDet, logs)
	}
	if want := squares * math.Exp(logs/float64(rows)); math.Abs(objective/want-1) > 1e-9 {
		t.Errorf("objective %.12g, the filter's is %.12g", objective, want)
	}
	for _, d := range []float64{-1e-3, 1e-3} {
		if other, _, _ := kalman(constant + d); other <= squares {
			t.Errorf("another constant fits better: %.12g, %.12g", other, squares)
		}
	}
}

// The objective does not depend on what stands in for a missing output, and the
// errors it leaves do not.
func TestMissingOutputsDoNotMatter(t *testing.T) {
	p, m, rec := gapped(t, 400)
	s, x := p.begin(m)
	want, _, _ := s.errorsAt(x)
	e := slices.Clone(s.work[0].e)
	for _, k := range rec.Missing {
		if k >= p.first[0] {
			p.padded[0].Y[p.pad+k] += float64(k%5) - 2
		}
	}
	got, _, _ := s.errorsAt(x)
	if math.Abs(got/want-1) > 1e-10 {
		t.Errorf("objective %.14g, %.14g with other values in the gaps", want, got)
	}
	for k := range e {
		if math.Abs(e[k]-s.work[0].e[k]) > 1e-9 {
			t.Fatalf("error of row %d is %g, %g with other values in the gaps", k, e[k], s.work[0].e[k])
		}
	}
	// As a caller sees it, to the bit and whatever is written there.
	estimate := func(values ...float64) *Prediction {
		again := Record{U: rec.U, Y: slices.Clone(rec.Y), Missing: rec.Missing}
		for i, k := range rec.Missing {
			again.Y[k] = values[i%len(values)]
		}
		p, err := NewPredictor([]Record{again}, 0.05, 0.2)
		if err != nil {
			t.Fatal(err)
		}
		f, err := p.Fit(m, 1e-10, 50)
		if err != nil {
			t.Fatal(err)
		}
		if err := p.Covariance(f); err != nil {
			t.Fatal(err)
		}
		return f
	}
	a, b := estimate(0), estimate(1e9, math.NaN(), -3)
	if !slices.Equal(a.Num, b.Num) || !slices.Equal(a.Den, b.Den) || a.Delay != b.Delay || !slices.Equal(a.C, b.C) || a.RSS != b.RSS || a.Cov.At(0, 0) != b.Cov.At(0, 0) {
		t.Errorf("the estimate depends on what is written in missing rows: %v/%v, %v/%v", a.Num, a.Den, b.Num, b.Den)
	}
}

// Records whose last outputs are missing say what the shorter ones say: the
// likelihood, and the information by which the covariance is found; also where
// they share constants and their logs differ in noise.
func TestMissingTailIsAShorterRecord(t *testing.T) {
	_, m, _ := gapped(t, 150)
	m.Variance = 1
	const tail = 30
	var whole, shorter []Record
	for _, r := range pieces() {
		n := len(r.Y)
		shorter = append(shorter, r.Rows(0, n-tail))
		for k := n - tail; k < n; k++ {
			r.Missing = append(r.Missing, k)
		}
		whole = append(whole, r)
	}
	var objective [2]float64
	var cov [2]*mat.SymDense
	for i, recs := range [][]Record{whole, shorter} {
		p, err := NewPredictor(recs, 0.05, 0.2)
		if err != nil {
			t.Fatal(err)
		}
		s, x := p.begin(m)
		v, _, ok := s.errorsAt(x)
		if !ok || p.Covariance(m) != nil {
			t.Fatal("no errors or covariance")
		}
		objective[i], cov[i] = v*p.sy*p.sy, m.Cov
	}
	if math.Abs(objective[0]/objective[1]-1) > 1e-9 {
		t.Errorf("objective %.12g with the tail missing, %.12g without it", objective[0], objective[1])
	}
	for i := range cov[0].SymmetricDim() {
		for j := range i + 1 {
			scale := math.Sqrt(cov[1].At(i, i) * cov[1].At(j, j))
			if math.Abs(cov[0].At(i, j)-cov[1].At(i, j)) > 1e-6*scale {
				t.Errorf("covariance (%d, %d) %.9g with the tail missing, %.9g without it", i, j, cov[0].At(i, j), cov[1].At(i, j))
			}
		}
	}
}

// Where the model is true the scatter of the rows' contributions around missing
// outputs gives the covariance, too. Of 4 000 rows with HAC weights over some
// dozen lags, a variance is known to within a tenth or so.
func TestInfluenceWithMissingOutputs(t *testing.T) {
	rec, g := pendulum(12, 4000)
	for k := 40; k < len(rec.Y); k += 20 {
		rec.Missing = append(rec.Missing, k, k+1)
	}
	p, err := NewPredictor([]Record{rec}, 0.05, 0.2)
	if err != nil {
		t.Fatal(err)
	}
	z := math.Exp(-0.15)
	f, err := p.Fit(&Prediction{Shape: Shape{Poles: 2}, Period: 0.05, Num: g.Num, Den: g.Den, D: []float64{1}, C: delayPoly([]complex128{complex(z, 0), complex(z, 0)})}, 1e-11, 50)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Covariance(f); err != nil {
		t.Fatal(err)
	}
	i, err := p.Influence(f)
	if err != nil {
		t.Fatal(err)
	}
	c := i.Covariance()
	for k := range 3 { // the plant's
		if ratio := c.At(k, k) / f.Cov.At(k, k); math.Abs(ratio-1) > 0.3 {
			t.Errorf("parameter %d: variance by the rows is %.2f of that by the information", k, ratio)
		} else {
			t.Logf("parameter %d: %.3f", k, ratio)
		}
	}
}

// What is restored is within its deviation of what was there: with a fifth of
// the outputs missing the error's mean square is the trace of the inverse of
// their information times the variance of e, within five deviations of a sum of
// as many squares, had they no correlation.
func TestRestored(t *testing.T) {
	rec, g := pendulum(8, 3000)
	truth := slices.Clone(rec.Y)
	for k := 35; k < len(rec.Y)-5; k += 5 {
		rec.Missing = append(rec.Missing, k)
		rec.Y[k] = 77
	}
	p, err := NewPredictor([]Record{rec}, 0.05, 0.2)
	if err != nil {
		t.Fatal(err)
	}
	z := math.Exp(-0.15)
	f, err := p.Fit(&Prediction{Shape: Shape{Poles: 2}, Period: 0.05, Num: g.Num, Den: g.Den, D: []float64{1}, C: delayPoly([]complex128{complex(z, 0), complex(z, 0)})}, 1e-10, 50)
	if err != nil {
		t.Fatal(err)
	}
	got, err := p.Restored(f)
	if err != nil {
		t.Fatal(err)
	}
	var sum float64
	for k := range truth {
		d := got[0].Y[k] - truth[k]
		if !slices.Contains(rec.Missing, k) {
			if d != 0 {
				t.Fatalf("row %d is not missing and moved by %g", k, d)
			}
			continue
		}
		sum += d * d
	}
	n := float64(len(rec.Missing))
	s, x := p.begin(f)
	s.errorsAt(x)
	var want float64
	for i := range rec.Missing {
		unit := make([]float64, len(rec.Missing))
		unit[i] = 1
		want += f.Variance * inverseDiagonal(t, &s.work[0].gaps, unit, i)
	}
	if ratio := sum / want; math.Abs(ratio-1) > 5*math.Sqrt(2/n) {
		t.Errorf("mean square of restored outputs is %.3f of its expectation", ratio)
	}
}

func inverseDiagonal(t *testing.T, g *gaps, unit []float64, i int) float64 {
	t.Helper()
	v, ok := g.taken(mat.NewVecDense(len(unit), unit), mat.NewVecDense(len(unit), unit))
	if !ok {
		t.Fatalf("missing output %d has no information", i)
	}
	return v.At(0, 0)
}
