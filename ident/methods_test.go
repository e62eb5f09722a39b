package ident

import (
	"context"
	"math"
	"os"
	"slices"
	"strconv"
	"testing"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
)

// outsideOn fits a structure to the log of a demo rig from its truth and
// compares with the estimate from outside.
func outsideOn(t *testing.T, r demorig.Rig, seed uint64, start *fit.Prediction) Method {
	t.Helper()
	e, _ := experiment(t, r, seed)
	exps := []*data.Experiment{e}
	recs, period, err := records(exps)
	if err != nil {
		t.Fatal(err)
	}
	p, err := fit.NewPredictor(recs, period, math.Max(maxDelaySamples*period, start.Delay))
	if err != nil {
		t.Fatal(err)
	}
	f, err := p.Fit(start, finalTol, finalSteps)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Covariance(f); err != nil {
		t.Fatal(err)
	}
	m := &Model{}
	m.describe(p, f, &data.Rig{})
	return byOutside(p, outsideSignals(exps), f, m)
}

// Right models are called wrong in no more logs than the threshold of one in a
// thousand explains: of 25 logs one at the most, with probability 0.9997; by
// chance one per hundred and no more is what STEADYRIG_STUDY=N, N logs of each
// rig, has to show.
func TestOutsideAgreesWithRightModels(t *testing.T) {
	if testing.Short() {
		t.Skip("fits 25 logs")
	}
	logs := 5
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		logs, _ = strconv.Atoi(v)
	}
	total, wrong := 0, 0
	for _, r := range demorig.All() {
		start := truth(t, r)
		for _, p := range r.Truth.Den.Roots() {
			if p == 0 {
				start.Integrators++
			}
		}
		low := 0
		for seed := range uint64(logs) {
			m := outsideOn(t, r, 5000+seed, start)
			total++
			if m.Probability == nil {
				t.Errorf("%s, seed %d: %s", r.Name, 5000+seed, m.Note)
				continue
			}
			if *m.Probability < 0.05 {
				low++
			}
			if !m.Agrees {
				wrong++
				t.Logf("%s, seed %d: %s", r.Name, 5000+seed, m.Note)
			}
		}
		t.Logf("%-8s probability below 0.05 in %d of %d", r.Name, low, logs)
	}
	t.Logf("disagrees: %d of %d", wrong, total)
	if wrong > max(1, total/100) {
		t.Errorf("right models are called wrong in %d of %d logs", wrong, total)
	}
}

// A slow disturbance that the noise shape has no pole for moves the prediction,
// not the estimate from outside.
func TestOutsideShowsAWrongNoiseShape(t *testing.T) {
	r, _ := demorig.ByName("mast")
	r.Disturbance *= 5
	start := truth(t, r)
	start.Colour, start.D, start.C = 0, []float64{1}, start.C[:start.Poles+1]
	for seed := range uint64(3) {
		if m := outsideOn(t, r, 5000+seed, start); m.Agrees || m.Probability == nil {
			t.Errorf("seed %d: %+v", 5000+seed, m)
		}
	}
}

// The signals beside records are of the same rows: some of them, or all.
func TestSignalsAreOfTheRowsSeen(t *testing.T) {
	var s searched
	var signals [][][]float64
	for _, n := range []int{60000, 12000, 7} {
		x, z := make([]float64, n), make([]float64, n)
		for k := range x {
			x[k], z[k] = float64(n+k), float64(-k)
		}
		s.recs, signals = append(s.recs, fit.Record{U: x, Y: x}), append(signals, [][]float64{x, z})
	}
	s.parts = stretches(s.recs, chooseRows)
	s.some = taken(s.recs, s.parts)
	for _, all := range []bool{false, true} {
		e, err := s.seen(nil, signals, all)
		if err != nil {
			t.Fatal(err)
		}
		rows := 0
		for i, r := range e.recs {
			rows += len(r.Y)
			if len(e.signals[i]) != 2 || !slices.Equal(e.signals[i][0], r.U) || len(e.signals[i][1]) != len(r.U) {
				t.Errorf("all %v: record %d differs", all, i)
			}
		}
		if e.all != 72007 || e.rows != rows || all != (rows == 72007) || rows < chooseRows*9/10 {
			t.Errorf("all %v: %d of %d rows seen, %d in the records", all, e.rows, e.all, rows)
		}
		if e, _ := s.seen(nil, nil, all); e.signals != nil {
			t.Error("signals from nothing")
		}
	}
}

// The same from the log alone, where the structure that is found has the rig's
// poles, zeros and disturbance poles: STEADYRIG_STUDY=N.
func TestStudyOfOutside(t *testing.T) {
	logs, _ := strconv.Atoi(os.Getenv("STEADYRIG_STUDY"))
	if logs == 0 {
		t.Skip("runs with STEADYRIG_STUDY set")
	}
	total, wrong := 0, 0
	for _, r := range demorig.All() {
		want := truth(t, r)
		right, silent := 0, 0
		for seed := range uint64(logs) {
			e, rig := experiment(t, r, 6000+seed)
			m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
			if err != nil {
				t.Logf("%s, seed %d: %v", r.Name, 6000+seed, err)
				continue
			}
			x := m.Evidence.Methods[len(m.Evidence.Methods)-1]
			s := m.Evidence.Structures[0]
			if s.Poles != want.Poles || s.Zeros != want.Zeros || s.Colour != want.Colour {
				t.Logf("%s, seed %d: %d poles, %d zeros, %d of the disturbance; outside agrees: %v", r.Name, 6000+seed, s.Poles, s.Zeros, s.Colour, x.Agrees)
				continue
			}
			right++
			if x.Probability == nil {
				silent++
			}
			if !x.Agrees {
				wrong++
				t.Logf("%s, seed %d: %s", r.Name, 6000+seed, x.Note)
			}
		}
		total += right
		t.Logf("%-8s %d right of %d logs, %d of them without a test", r.Name, right, logs, silent)
	}
	t.Logf("disagrees: %d of %d", wrong, total)
	if wrong > max(1, total/100) {
		t.Errorf("right models are called wrong in %d of %d logs", wrong, total)
	}
}
