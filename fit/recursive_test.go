package fit_test

import (
	"math"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit"
	"steadyrig/fit/fittest"
	"steadyrig/fit/lti"
)

// trueModel is a rig's true model in the estimator's form.
func trueModel(r fittest.Rig) *fit.Prediction {
	truth := r.Truth()
	return &fit.Prediction{
		Shape: fit.Shape{Poles: r.Plant.Den.Degree(), Zeros: r.Plant.Num.Degree(), Colour: len(truth.D) - 1, FreeDelay: r.Plant.Delay > 0},
		Num:   r.Plant.Num, Den: r.Plant.Den, Delay: r.Plant.Delay, D: truth.D, C: truth.C, Period: r.Period,
	}
}

// plainErrors are the prediction errors of m by the definition, from a rest at the first row.
func plainErrors(t *testing.T, m *fit.Prediction, u, y []float64) []float64 {
	t.Helper()
	g, err := lti.ZOHTF(lti.TF{Num: m.Num, Den: m.Den, Delay: m.Delay}, m.Period)
	if err != nil {
		t.Fatal(err)
	}
	a, b := g.Den.Mul(m.D), g.Num.Mul(m.D)
	e := make([]float64, len(u))
	for k := range e {
		for i, v := range a {
			e[k] += v * y[max(0, k-i)]
		}
		for i, v := range b {
			e[k] -= v * u[max(0, k-i)]
		}
		for i := 1; i < len(m.C) && i <= k; i++ {
			e[k] -= m.C[i] * e[k-i]
		}
	}
	return e
}

func feed(r *fit.Recursive, u, y []float64, chunk int) (errs []float64) {
	for k := 0; k < len(u); k += chunk {
		end := min(len(u), k+chunk)
		errs = append(errs, r.Add(u[k:end], y[k:end])...)
	}
	return errs
}

// movedRigs are the kinds of rigs on which the tests run: a delay of parts of a sample, a colour, a zero.
func movedRigs(t *testing.T) []fittest.Rig {
	t.Helper()
	var out []fittest.Rig
	for _, r := range fittest.Kinds() {
		if slices.Contains([]string{"levitated body", "delay of 1.4 samples", "coloured disturbance", "flow-driven pair"}, r.Name) {
			out = append(out, r)
		}
	}
	if len(out) != 4 {
		t.Fatalf("%d kinds of rig are left, want 4", len(out))
	}
	return out
}

// The oracle is least squares by orthogonal factors on derivatives taken as differences of plain prediction errors. Over
// steps of 1e-5 of a parameter these are good to 1e-6 of the largest column or so, and the move to that, deviations of it
// being the unit.
func TestRecursiveIsLeastSquares(t *testing.T) {
	for _, rig := range movedRigs(t) {
		m := trueModel(rig)
		const from, n = 600, 1200 // the start is long forgotten
		u, y := rig.Record(from+n, 7, 1)
		r := fit.NewRecursive(m, 0, 0)
		e := plainErrors(t, m, u, y)
		errs := feed(r, u[:from], y[:from], 400)
		r.Take()
		errs = append(slices.Clone(errs), feed(r, u[from:], y[from:], 400)...)
		for k, v := range errs {
			if want := e[r.Settle()+k]; math.Abs(v-want) > 1e-9*(1+math.Abs(want)) {
				t.Fatalf("%s: error of row %d is %g, by the definition %g", rig.Name, r.Settle()+k, v, want)
			}
		}
		d, err := r.Take().Drift()
		if err != nil {
			t.Fatalf("%s: %v", rig.Name, err)
		}
		p := len(d.Moved)
		j := mat.NewDense(n, p+1, nil)
		for i := range p {
			step := make([]float64, p)
			step[i] = 1e-4 * math.Sqrt(d.Cov.At(i, i))
			up := plainErrors(t, m.Moved(step), u, y)
			step[i] = -step[i]
			down := plainErrors(t, m.Moved(step), u, y)
			for k := range n {
				j.Set(k, i, (up[from+k]-down[from+k])/(-2*step[i]))
			}
		}
		one := make([]float64, len(u)) // what a constant adds: κ is behind 1/C
		for k := range one {
			one[k] = -1
			for i := 1; i < len(m.C) && i <= k; i++ {
				one[k] -= m.C[i] * one[k-i]
			}
			if k >= from {
				j.Set(k-from, p, one[k])
			}
		}
		var qr mat.QR
		qr.Factorize(j)
		var x mat.VecDense
		if err := qr.SolveVecTo(&x, false, mat.NewVecDense(n, slices.Clone(e[from:]))); err != nil {
			t.Fatal(err)
		}
		for i, v := range d.Moved {
			if sd := math.Sqrt(d.Cov.At(i, i)); !(math.Abs(v+x.AtVec(i)) < 1e-5*sd) {
				t.Errorf("%s: parameter %d moved by %.8g, by orthogonal factors %.8g, deviation %.3g", rig.Name, i, v, -x.AtVec(i), sd)
			}
		}
	}
}

// Rows that come one by one, or many at once, leave the same errors.
func TestRecursiveTakesRowsAsTheyCome(t *testing.T) {
	for _, rig := range movedRigs(t) {
		m := trueModel(rig)
		u, y := rig.Record(700, 3, 2)
		want := feed(fit.NewRecursive(m, 1, 2), u, y, fit.RecursiveChunk)
		for _, chunk := range []int{1, 37} {
			if got := feed(fit.NewRecursive(m, 1, 2), u, y, chunk); !slices.Equal(got, want) {
				t.Errorf("%s: errors differ where %d rows come at once", rig.Name, chunk)
			}
		}
	}
}

// The moves over windows of an unchanged rig, in their own deviations, are standard normal: of 4 rigs, 100 windows and some 6
// parameters each the mean square is chi-square over its degrees, about 2400 and correlated within a window; 20 % is over
// four deviations of 400 independent groups of six fully correlated ones (sqrt(2/400) = 7 %, less than 5 % where they are not).
func TestDriftOfWindowsIsNormal(t *testing.T) {
	var squares, n float64
	for _, rig := range movedRigs(t) {
		m := trueModel(rig)
		const window = 800
		r := fit.NewRecursive(m, 0, 0)
		u, y := rig.Record(100*window+r.Settle(), 11, 3)
		feed(r, u[:r.Settle()], y[:r.Settle()], r.Settle())
		for k := r.Settle(); k < len(u); k += window {
			feed(r, u[k:k+window], y[k:k+window], 400)
			s := r.Take()
			d, err := s.Drift()
			if err != nil || s.Rows != window {
				t.Fatalf("%s: %d rows, %v", rig.Name, s.Rows, err)
			}
			for i, v := range d.Moved {
				squares += v * v / d.Cov.At(i, i)
				n++
			}
		}
	}
	if v := squares / n; v < 0.8 || v > 1.2 {
		t.Errorf("mean square of %.0f moves in their own deviations is %.3f, want 1", n, v)
	}
}

// A gain half as large again is no small move: the second step, from where the first one leads, finds it.
func TestMovedConverges(t *testing.T) {
	for _, rig := range movedRigs(t) {
		u, y := rig.Record(8000, 5, 4)
		m := trueModel(rig)
		lead := len(m.Num) - 1
		true0 := m.Num[lead]
		m.Num = m.Num.Scale(1 / 1.5)
		var sd float64
		for range 5 {
			r := fit.NewRecursive(m, 0, 0)
			feed(r, u, y, fit.RecursiveChunk)
			d, err := r.Take().Drift()
			if err != nil {
				t.Fatal(err)
			}
			m, sd = m.Moved(d.Moved), math.Sqrt(d.Cov.At(lead, lead))
		}
		if off := (m.Num[lead] - true0) / sd; math.Abs(off) > 4 {
			t.Errorf("%s: leading coefficient %.4g, true %.4g, %.1f deviations off", rig.Name, m.Num[lead], true0, off)
		}
	}
}

func TestForgettingWeighsRows(t *testing.T) {
	rig := movedRigs(t)[0]
	m := trueModel(rig)
	u, y := rig.Record(3000, 9, 5)
	r := fit.NewRecursive(m, 0, 0)
	feed(r, u[:1500], y[:1500], 500)
	a := r.Take()
	feed(r, u[1500:], y[1500:], 500)
	b := r.Take()
	whole := fit.NewRecursive(m, 0, 0)
	feed(whole, u, y, 500)
	want, err := whole.Take().Drift()
	if err != nil {
		t.Fatal(err)
	}
	got, err := a.Forget(1, b).Drift()
	if err != nil {
		t.Fatal(err)
	}
	last, _ := b.Drift()
	none, _ := a.Forget(0, b).Drift()
	for i := range want.Moved {
		sd := math.Sqrt(want.Cov.At(i, i))
		if math.Abs(got.Moved[i]-want.Moved[i]) > 1e-6*sd {
			t.Errorf("parameter %d: nothing forgotten gives %g, the rows together %g", i, got.Moved[i], want.Moved[i])
		}
		if math.Abs(none.Moved[i]-last.Moved[i]) > 1e-9*sd {
			t.Errorf("parameter %d: all forgotten gives %g, the last rows alone %g", i, none.Moved[i], last.Moved[i])
		}
	}
}
