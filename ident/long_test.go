package ident

import (
	"bytes"
	"context"
	"errors"
	"math"
	"sync/atomic"
	"testing"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
)

// A log of more rows than structures are compared on: the estimate is that of
// all rows, as fitted from the truth by tighter steps, within a hundredth of a
// deviation, and the same bytes come from one worker and from eight. The rest of
// the long path is held against the whole likelihood in fit's own tests.
func TestLongLog(t *testing.T) {
	if testing.Short() {
		t.Skip("takes seconds")
	}
	r, _ := demorig.ByName("hover")
	r.Rows = 60_000
	e, rig := experiment(t, r, 21)
	exps := []*data.Experiment{e}
	var files [2]bytes.Buffer
	var m *Model
	for i, workers := range []int{1, 8} {
		var err error
		if m, err = Fit(t.Context(), exps, rig, Options{Seed: 1, Workers: workers}); err != nil {
			t.Fatal(err)
		}
		if err := m.Write(&files[i]); err != nil {
			t.Fatal(err)
		}
	}
	if !bytes.Equal(files[0].Bytes(), files[1].Bytes()) {
		t.Error("one worker and eight find different models")
	}
	if m.Verdict != Sound {
		t.Errorf("%s: %v", m.Verdict, m.Warnings)
	}
	for _, method := range m.Evidence.Methods {
		want := r.Rows
		if method.Name != "prediction" {
			want = chooseRows
		}
		if method.Rows != want {
			t.Errorf("%s saw %d rows, want %d", method.Name, method.Rows, want)
		}
	}
	recs, period, err := records(exps)
	if err != nil {
		t.Fatal(err)
	}
	p, err := fit.NewPredictor(recs, period, maxDelaySamples*period)
	if err != nil {
		t.Fatal(err)
	}
	f, err := p.Fit(truth(t, r), 1e-14, finalSteps)
	if err != nil {
		t.Fatal(err)
	}
	got := append(reversed(m.Plant.Numerator), m.Plant.Denominator[1:]...)
	want := append([]float64(f.Num), reversed(f.Den)[1:]...)
	for i := range got {
		if sd := math.Sqrt(m.Plant.Covariance[i][i]); !(math.Abs(got[i]-want[i]) < 0.01*sd) {
			t.Errorf("coefficient %d is %g, of all rows %g ± %.2g", i, got[i], want[i], sd)
		}
	}
}

// A probe that acts for a part of a long log is among the rows that structures
// are compared on, which lie apart and in order.
func TestStretchesFindTheProbe(t *testing.T) {
	u := make([]float64, 400_000)
	for k := range u {
		u[k] = math.Sin(float64(k) / 7)
		if k >= 130_000 && k < 142_000 {
			u[k] *= 3
		}
	}
	list := stretches([]fit.Record{{U: u, Y: u}}, chooseRows)
	rows, probed, last := 0, 0, 0
	for _, s := range list {
		rows += s.to - s.from
		probed += max(0, min(s.to, 142_000)-max(s.from, 130_000))
		if s.from < last || s.to > len(u) {
			t.Errorf("stretch [%d, %d) after row %d", s.from, s.to, last)
		}
		last = s.to
	}
	if len(list) != 5 || rows != chooseRows || probed < 10_000 {
		t.Errorf("%d stretches of %d rows, %d of them probed", len(list), rows, probed)
	}
}

// Without rows of the probe among them, this log was refused for columns a row
// apart.
func TestLongLogProbedForAWhile(t *testing.T) {
	if testing.Short() {
		t.Skip("takes seconds")
	}
	r, _ := demorig.ByName("hover")
	r.Rows = 120_000
	s := r.Signals(r.Rows, 22)
	for k := range s.Dither {
		if k < 38_000 || k >= 50_000 {
			s.Dither[k] = 0
		}
	}
	trace, err := r.Simulate(s)
	if err != nil {
		t.Fatal(err)
	}
	e, rig, err := r.Read(s, trace, 22)
	if err != nil {
		t.Fatal(err)
	}
	m, err := Fit(t.Context(), []*data.Experiment{e}, rig, Options{Seed: 1})
	if err != nil {
		t.Fatal(err)
	}
	if m.Verdict != Sound || len(m.Poles) != 3 {
		t.Errorf("%s, %d poles: %v", m.Verdict, len(m.Poles), m.Warnings)
	}
}

// A fit ends with its context, wherever in its course that is done.
func TestFitEndsWithItsContext(t *testing.T) {
	if testing.Short() {
		t.Skip("takes seconds")
	}
	r, _ := demorig.ByName("hover")
	e, rig := experiment(t, r, 23)
	fitted := func(calls int64) (int64, error) {
		ctx, cancel := context.WithCancel(t.Context())
		defer cancel()
		var n atomic.Int64
		_, err := Fit(ctx, []*data.Experiment{e}, rig, Options{Seed: 1, Workers: 2, Progress: func(int, int) {
			if n.Add(1) == calls {
				cancel()
			}
		}})
		return n.Load(), err
	}
	all, err := fitted(-1)
	if err != nil || all < 100 {
		t.Fatalf("%d calls of progress: %v", all, err)
	}
	for _, part := range []float64{0, 0.5, 0.9, 0.97} {
		at := 1 + int64(part*float64(all))
		n, err := fitted(at)
		if !errors.Is(err, context.Canceled) {
			t.Errorf("ended at call %d of %d: %v", at, all, err)
		}
		// Of a structure that is being looked at each start, of less than a hundred, asks once more and is told.
		if n > at+2*100 {
			t.Errorf("ended at call %d of %d, went on to %d", at, all, n)
		}
	}
}
