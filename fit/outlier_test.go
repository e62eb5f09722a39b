package fit

import (
	"math"
	"testing"

	"steadyrig/fit/lti"
)

// A wrong output is measured where and as large as it was made, against the
// same record without it: the errors are linear in the output. Taken for
// missing, it lowers the sum of squares by the square of that.
func TestOutliersMeasureWrongOutputs(t *testing.T) {
	rec, g := pendulum(21, 2000)
	z := math.Exp(-0.15)
	m := &Prediction{Shape: Shape{Poles: 2}, Period: 0.05, Num: g.Num, Den: g.Den, D: []float64{1}, C: delayPoly([]complex128{complex(z, 0), complex(z, 0)})}
	outliers := func(r Record) (*Predictor, *Outliers) {
		p, err := NewPredictor([]Record{r}, 0.05, 0.2)
		if err != nil {
			t.Fatal(err)
		}
		o, err := p.Outliers(m)
		if err != nil {
			t.Fatal(err)
		}
		return p, o
	}
	_, clean := outliers(rec)
	// C is A's mirror image: |A/C| = e^0.15 at all frequencies.
	if want := 0.02 * math.Exp(0.15); math.Abs(clean.SD[0]/want-1) > 5*1.17/math.Sqrt(2000) {
		t.Errorf("deviation of the errors %g, want %g", clean.SD[0], want)
	}
	bad := Record{U: rec.U, Y: append([]float64(nil), rec.Y...)}
	bad.Y[700] += 0.5
	_, o := outliers(bad)
	was, _ := clean.Single(0, 700)
	wrong, large := o.Single(0, 700)
	// A pulse in 2000 rows moves mean and constant by a two-thousandth of itself.
	if got := wrong*o.SD[0] - was*clean.SD[0]; math.Abs(got/(0.5*math.Exp(0.15))-1) > 2e-3 {
		t.Errorf("a pulse of 0.5 is measured as %g", got/math.Exp(0.15))
	}
	if !(math.Abs(wrong) > math.Abs(large)) {
		t.Errorf("a wrong output is taken for a large error: %g, %g", wrong, large)
	}
	for k := 600; k < 800; k++ {
		if other, _ := o.Single(0, k); k != 700 && math.Abs(other) >= math.Abs(wrong) {
			t.Errorf("row %d stands out by %g, the wrong one by %g", k, other, wrong)
		}
	}

	// Against the sums of squares with and without the rows.
	for k := 900; k < 912; k++ {
		bad.Y[k] = bad.Y[900]
	}
	p, o := outliers(bad)
	stretch := o.Stretch(0, 901, 912)
	s, x := p.begin(m)
	s.errorsAt(x)
	full := s.rss * p.sy * p.sy
	for k := 901; k < 912; k++ {
		bad.Missing = append(bad.Missing, k)
	}
	p, _ = outliers(bad)
	s, x = p.begin(m)
	s.errorsAt(x)
	gain := (full - s.rss*p.sy*p.sy) / (o.SD[0] * o.SD[0])
	// The test leaves constant and start-up errors where they are.
	if math.Abs(stretch/gain-1) > 1e-2 {
		t.Errorf("a stuck stretch brings %g, the fit without it %g", stretch, gain)
	}
}

// Large errors of the rig itself are not taken for wrong outputs: with an
// input disturbance that the response of A D/C tells from sensor noise, every
// hundredth error ten times as large.
func TestOutliersKnowLargeErrors(t *testing.T) {
	g := lti.TF{Num: lti.Poly{9}, Den: lti.Poly{-9, 0, 1}}
	d := lti.SampleDelta(g.Num, g.Den, 0, 0.05)
	a, b := lti.Shift(nil, d.A), lti.ShiftInput(d.B0, d.B1)
	c := delayPoly([]complex128{0.3, -0.2})
	const n = 6000
	rec := loopData(5, n, a, b, []float64{1}, c, 0, []float64{22, -18}, 0.02)
	// The loop is linear: pulses of the error add their own response.
	var large []int
	for k := 100; k < n; k += 100 {
		large = append(large, k)
	}
	add := loopPulses(n, a, b, c, []float64{22, -18}, large, 0.2)
	for k := range n {
		rec.Y[k] += add.Y[k]
		rec.U[k] += add.U[k]
	}
	p, err := NewPredictor([]Record{rec}, 0.05, 0.2)
	if err != nil {
		t.Fatal(err)
	}
	o, err := p.Outliers(&Prediction{Shape: Shape{Poles: 2}, Period: 0.05, Num: g.Num, Den: g.Den, D: []float64{1}, C: c})
	if err != nil {
		t.Fatal(err)
	}
	for _, k := range large {
		wrong, size := o.Single(0, k)
		if math.Abs(size) < 6 || math.Abs(wrong) > math.Abs(size) {
			t.Errorf("a large error in row %d is taken for a wrong output: %g, %g", k, size, wrong)
		}
	}
}

// loopPulses is the response of the loop to errors of the given size in rows at.
func loopPulses(n int, a, b, c, gain []float64, at []int, size float64) Record {
	e := make([]float64, n)
	for _, k := range at {
		e[k] = size
	}
	rec := Record{U: make([]float64, n), Y: make([]float64, n)}
	for k := range n {
		for i := 0; i < len(c) && i <= k; i++ {
			rec.Y[k] += c[i] * e[k-i]
		}
		for i := 1; i < len(a) && i <= k; i++ {
			rec.Y[k] += b[i]*rec.U[k-i] - a[i]*rec.Y[k-i]
		}
		for i := 0; i < len(gain) && i <= k; i++ {
			rec.U[k] -= gain[i] * rec.Y[k-i]
		}
	}
	return rec
}
