package fit_test

import (
	"math"
	"math/cmplx"
	"testing"

	"steadyrig/fit"
	"steadyrig/fit/fittest"
	"steadyrig/fit/fittest/conform"
)

// D5, an unstable ARMAX plant in closed loop. The prediction-error estimate and its standard errors are those of an
// independent Gauss-Newton program, converged to 1e-16; both estimators are efficient, so that they may differ by a
// small part of the standard error only (what an ARX of order 15 leaves out is 0.5^15). With the same noise the ARX of
// order one errs by six of its standard errors.
func TestNullSpaceMeetsPredictionError(t *testing.T) {
	m, err := fit.FitARX(record(fittest.D5()), fit.ARXOptions{NA: 15, NB: 15, Delay: 1, NoConstant: true})
	if err != nil {
		t.Fatal(err)
	}
	r, err := fit.NullSpace(m, fit.NullSpaceOptions{NA: 1, NB: 1, NC: 1})
	if err != nil {
		t.Fatal(err)
	}
	got := []float64{-r.A[1], r.B[1], r.C[1]}
	for i, want := range []struct{ value, se float64 }{
		{1.314800044617, 0.036546308187}, {0.526034931090, 0.012105192422}, {0.482343618944, 0.023898953945},
	} {
		if !(math.Abs(got[i]-want.value) < 0.25*want.se) {
			t.Errorf("parameter %d: %.6f, want %.6f within a quarter of %.4f", i, got[i], want.value, want.se)
		}
		near(t, "standard error", math.Sqrt(r.Cov.At(i, i)), want.se, 0.03)
	}
	near(t, "variance", r.Variance, 341629.266845, 0.02)
}

// The misfit of the true orders is about chi-squared; one order too low is refused.
func TestNullSpaceMisfit(t *testing.T) {
	rig := fittest.Rigs()[2]
	const trials = 100
	var sum, low float64
	df := 0
	for k := range trials {
		u, y := rig.Record(4000, 2, uint64(k))
		m, err := fit.FitARX([]fit.Record{{U: u, Y: y}}, fit.ARXOptions{NA: 40, NB: 40, Delay: 1})
		if err != nil {
			t.Fatal(err)
		}
		r, err := fit.NullSpace(m, fit.NullSpaceOptions{NA: 2, NB: 2, NC: 2})
		if err != nil {
			t.Fatal(err)
		}
		l, err := fit.NullSpace(m, fit.NullSpaceOptions{NA: 1, NB: 1, NC: 1})
		if err != nil {
			t.Fatal(err)
		}
		sum += r.Misfit
		low += l.Misfit
		df = r.DF
	}
	if df != 80-6 {
		t.Errorf("%d degrees of freedom, want 74", df)
	}
	// Standard deviation of the mean of chi-squared with 74: sqrt(2*74/100) = 1.2. Five of them.
	if mean := sum / trials; !(math.Abs(mean-float64(df)) < 6) {
		t.Errorf("mean misfit %.1f, want %d", mean, df)
	}
	if low/trials < 10*float64(df) {
		t.Errorf("mean misfit with one pole %.1f: not refused", low/trials)
	}
}

// RSS + Variance |Discrepancy|^2 of the long model against the residual sum of squares of a short one, by filtering the
// record itself.
func TestDiscrepancyPredictsResiduals(t *testing.T) {
	rig := fittest.Rigs()[2]
	u, y := rig.Record(20000, 8, 0)
	m, err := fit.FitARX([]fit.Record{{U: u, Y: y}}, fit.ARXOptions{NA: 60, NB: 60, Delay: 1})
	if err != nil {
		t.Fatal(err)
	}
	truth := rig.Truth()
	for _, change := range []float64{0, 0.003, -0.01} {
		d := &fit.Discrete{A: append([]float64(nil), truth.A...), B: truth.B, C: truth.C}
		d.A[1] += change
		long := 0.0
		for _, v := range m.Discrepancy(d) {
			long += v * v
		}
		e, mean := make([]float64, len(u)), 0.0
		for k := range e {
			for i := 0; i <= 2 && i <= k; i++ {
				e[k] += d.A[i]*(y[k-i]-rig.Law.Y0) - d.B[i]*(u[k-i]-rig.Law.U0)
				if i > 0 {
					e[k] -= d.C[i] * e[k-i]
				}
			}
		}
		rows := e[60:]
		for _, v := range rows {
			mean += v / float64(len(rows))
		}
		rss := 0.0
		for _, v := range rows {
			rss += (v - mean) * (v - mean)
		}
		// Of the difference from the long model's RSS, the parts of e that depend on more than 60 samples (0.6^60) and the
		// chance of the regressors are left.
		near(t, "RSS beyond that of the long model", m.Variance*long, rss-m.RSS, 0.02)
	}
}

// On short records the start is bad and full steps overshoot: the search must still end at a least misfit, which the truth
// cannot undercut.
func TestNullSpaceSearchEndsAtLeastMisfit(t *testing.T) {
	square := func(m *fit.ARX, d *fit.Discrete) (s float64) {
		for _, v := range m.Discrepancy(d) {
			s += v * v
		}
		return s
	}
	for i, rig := range fittest.Rigs() {
		truth := rig.Truth()
		n := len(truth.A) - 1
		for k := range 40 {
			u, y := rig.Record(400, uint64(30+i), uint64(k))
			m, err := fit.FitARX([]fit.Record{{U: u, Y: y}}, fit.ARXOptions{NA: 25, NB: 25, Delay: 1})
			if err != nil {
				t.Fatal(err)
			}
			r, err := fit.NullSpace(m, fit.NullSpaceOptions{NA: n, NB: n, NC: n})
			if err != nil {
				t.Fatal(err)
			}
			near(t, "misfit", square(m, &r.Discrete), r.Misfit, 1e-9)
			for _, z := range r.NoiseZeros() {
				if !(cmplx.Abs(z) < 1) {
					t.Errorf("%s, record %d: noise zero %v", rig.Name, k, z)
				}
			}
			if best := square(m, &fit.Discrete{A: truth.A, B: truth.B, C: truth.C}); !(r.Misfit <= best) {
				t.Errorf("%s, record %d: misfit %.2f after %d steps, that of the truth is %.2f", rig.Name, k, r.Misfit, r.Steps, best)
			}
		}
	}
}

// Pure sensor noise on an unstable plant: the noise zero is the mirrored pole, and the prediction error's variance exceeds
// the sensor's by the square of the pole (Forssell & Ljung, Identification of unstable systems using output error and
// Box-Jenkins model structures, IEEE Trans. Automatic Control 45 (2000) 137-141; steady Kalman filter of an unmoved
// unstable state: gain a - 1/a, innovation variance a^2 r).
func TestNullSpaceMirrorsUnstablePole(t *testing.T) {
	rig := fittest.Rigs()[0]
	rig.InputNoise, rig.SensorNoise = 0, 0.2
	pole := real(rig.Poles()[0])
	u, y := rig.Record(50000, 4, 0)
	m, err := fit.LongARX([]fit.Record{{U: u, Y: y}})
	if err != nil {
		t.Fatal(err)
	}
	r, err := fit.NullSpace(m, fit.NullSpaceOptions{NA: 1, NB: 1, NC: 1})
	if err != nil {
		t.Fatal(err)
	}
	five := func(i int) float64 { return 5 * math.Sqrt(r.Cov.At(i, i)) }
	if !(math.Abs(-r.A[1]-pole) < five(0)) {
		t.Errorf("pole %.5f, want %.5f within %.5f", -r.A[1], pole, five(0))
	}
	if !(math.Abs(-r.C[1]-1/pole) < five(2)) {
		t.Errorf("noise zero %.5f, want %.5f within %.5f", -r.C[1], 1/pole, five(2))
	}
	near(t, "variance", r.Variance, pole*pole*0.2*0.2, 5*math.Sqrt(2.0/50000))
}

// Coverage of 95 % intervals of the first-order coefficient: with 400 trials 362 to 396 hits have a false alarm
// probability of 7e-5.
func TestNullSpaceCovers(t *testing.T) {
	rig := fittest.Rigs()[0]
	truth := rig.Truth()
	hits := [3]int{}
	for k := range 400 {
		u, y := rig.Record(2000, 6, uint64(k))
		m, err := fit.FitARX([]fit.Record{{U: u, Y: y}}, fit.ARXOptions{NA: 12, NB: 12, Delay: 1})
		if err != nil {
			t.Fatal(err)
		}
		r, err := fit.NullSpace(m, fit.NullSpaceOptions{NA: 1, NB: 1, NC: 1})
		if err != nil {
			t.Fatal(err)
		}
		for i, d := range []float64{r.A[1] - truth.A[1], r.B[1] - truth.B[1], r.C[1] - truth.C[1]} {
			if math.Abs(d) < 1.959964*math.Sqrt(r.Cov.At(i, i)) {
				hits[i]++
			}
		}
	}
	for i, h := range hits {
		if h < 362 || h > 396 {
			t.Errorf("parameter %d covered %d of 400 times", i, h)
		}
	}
}

// Several short records, each with its own operating point, against one long record: the same answer within what chance
// allows.
func TestSeveralRecords(t *testing.T) {
	rig := fittest.Rigs()[2]
	var recs []fit.Record
	for k := range 8 {
		u, y := rig.Record(1000, 7, uint64(k))
		for i := range u {
			u[i] += 10 * float64(k)
			y[i] -= 100 * float64(k)
		}
		recs = append(recs, fit.Record{U: u, Y: y})
	}
	one := conform.Bound(rig, recs[0].U, recs[0].Y, true) // offsets of record 0 are zero
	for _, m := range []fit.Estimator{fit.StateMethod{}, fit.LongMethod{}} {
		e, err := m.Estimate(recs, nil, conform.Found(rig))
		if err != nil {
			t.Fatal(err)
		}
		for _, f := range rig.Factors() {
			q, _, ok := e.Factor(f)
			_, bound, _ := one.Factor(f)
			for i := range len(f) - 1 {
				if sd := math.Sqrt(bound.At(i, i) / 8); !ok || !(math.Abs(q[i]-f[i]) < 4*sd) {
					t.Errorf("%s: factor %v came out as %v, bound of coefficient %d %.2g", m.Name(), f, q, i, sd)
				}
			}
		}
	}
}
