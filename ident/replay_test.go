package ident

import (
	"context"
	"math"
	"testing"

	"steadyrig/data"
	"steadyrig/fit"
)

// A log replayed with its own errors is the log again: model, law and signals
// from outside are all that made it.
func TestReplayWithItsOwnErrors(t *testing.T) {
	for _, name := range []string{"hover", "mast", "reactor"} {
		r := rigNamed(t, name)
		r.Rows = 1200
		e, rig := experiment(t, r, 11)
		exps := []*data.Experiment{e}
		recs, period, err := records(exps)
		if err != nil {
			t.Fatal(err)
		}
		p, err := fit.NewPredictor(recs, period, maxDelaySamples*period)
		if err != nil {
			t.Fatal(err)
		}
		f, err := p.Fit(truth(t, r), finalTol, finalSteps)
		if err != nil {
			t.Fatal(err)
		}
		errs, before, err := p.Errors(f)
		if err != nil {
			t.Fatal(err)
		}
		for _, law := range []bool{true, false} {
			if !law {
				rig.Stopgap = nil // then it is found by least squares
			}
			l, ok := lawOf(exps, rig)
			if !ok {
				if law {
					t.Fatalf("%s: the law of the rig file is not taken", name)
				}
				continue // the law is not linear: the input meets its limits
			}
			again, ok := replay(recs, f, l, p.Lead, before, func(n, k int) float64 { return errs[n][k-p.Lead] })
			if !ok {
				t.Fatalf("%s: the replay leaves the log's range", name)
			}
			var off, size float64
			for k := range recs[0].Y {
				off = math.Max(off, math.Abs(again[0].Y[k]-recs[0].Y[k]))
				size = math.Max(size, math.Abs(recs[0].Y[k]-mean(recs[0].Y)))
			}
			if !(off < 1e-9*size) {
				t.Errorf("%s: replay with law from rig file %v off by %g of %g", name, law, off, size)
			}
		}
	}
}

// On logs of 600 rows the replays widen the covariance by a little on the
// average, on a long one there is nothing to widen and the log is not replayed.
func TestShortLogIsCalibrated(t *testing.T) {
	if testing.Short() {
		t.Skip("replays four logs")
	}
	r := rigNamed(t, "hover")
	long, rig := experiment(t, r, 12)
	r.Rows = 600
	var mean float64
	compared := 0
	const logs = 4
	for seed := range uint64(logs) {
		short, _ := experiment(t, r, 12+seed)
		m, err := Fit(context.Background(), []*data.Experiment{short}, rig, Options{})
		if err != nil {
			t.Fatal(err)
		}
		c := m.Evidence.Calibration
		if c == nil || c.Replays < 90 {
			t.Fatalf("calibration of a short log: %+v, want most replays fitted", c)
		}
		mean += c.Factor / logs
		if len(m.Zeros) > 0 || len(m.Noise.Numerator) != len(m.Plant.Denominator) || len(m.Plant.Parameters) != 4 {
			continue // another structure than the plain one below
		}
		// The covariance in the model is that of the information times the factor.
		recs, period, err := records([]*data.Experiment{short})
		if err != nil {
			t.Fatal(err)
		}
		p, err := fit.NewPredictor(recs, period, maxDelaySamples*period)
		if err != nil {
			t.Fatal(err)
		}
		g := m.TF()
		f := &fit.Prediction{Shape: fit.Shape{Poles: 3}, Num: g.Num, Den: g.Den, D: []float64{1}, C: m.Noise.Numerator, Variance: m.Noise.SD * m.Noise.SD, Period: period}
		if err := p.Covariance(f); err != nil {
			t.Fatal(err)
		}
		if got := m.Plant.Covariance[0][0] / f.Cov.At(0, 0); math.Abs(got-c.Factor) > 1e-3*c.Factor {
			t.Errorf("covariance is %.4g times that of the information, the factor is %.4g", got, c.Factor)
		}
		compared++
	}
	if compared == 0 {
		t.Error("no log had the plain structure: nothing was compared")
	}
	if mean < 1.1 || mean > 2 {
		t.Errorf("covariance widened by %.2f on the average", mean)
	}
	m, err := Fit(context.Background(), []*data.Experiment{long}, rig, Options{})
	if err != nil {
		t.Fatal(err)
	}
	if m.Evidence.Calibration != nil {
		t.Errorf("a log of %d rows was replayed", long.Used)
	}
}
