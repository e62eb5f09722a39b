package ident

import (
	"context"
	"math"
	"os"
	"strconv"
	"testing"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
)

// several returns logs of a rig, one for each noise level, each at an operating
// point of its own; gain multiplies the plant of the last.
func several(t testing.TB, r demorig.Rig, seed uint64, gain float64, levels ...float64) ([]*data.Experiment, *data.Rig) {
	t.Helper()
	var exps []*data.Experiment
	var rig *data.Rig
	for i, level := range levels {
		own := r
		own.SensorNoise, own.Disturbance, own.Resolution = level*r.SensorNoise, level*r.Disturbance, level*r.Resolution
		if i == len(levels)-1 {
			own.Truth.Num = r.Truth.Num.Scale(gain)
		}
		var e *data.Experiment
		e, rig = experiment(t, own, 100*seed+uint64(i))
		e.File = string(rune('a'+i)) + ".csv"
		for _, s := range e.Segments {
			for k := range s.Y {
				s.U[k] += float64(i)
				s.Y[k] -= float64(2 * i)
				s.R[k] -= float64(2 * i)
			}
		}
		exps = append(exps, e)
	}
	rig.OperatingPoint = nil
	return exps, rig
}

// joint fits logs in the structure of the truth, from there.
func joint(t testing.TB, exps []*data.Experiment, true1 *fit.Prediction) (*fit.Predictor, *fit.Prediction, *Model) {
	t.Helper()
	recs, period, err := records(exps)
	if err != nil {
		t.Fatal(err)
	}
	p, err := fit.NewPredictor(recs, period, math.Max(maxDelaySamples*period, true1.Delay))
	if err != nil {
		t.Fatal(err)
	}
	f, err := p.Fit(copyOf(true1), finalTol, finalSteps)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Covariance(f); err != nil {
		t.Fatal(err)
	}
	m := &Model{}
	m.describe(p, f, &data.Rig{})
	return p, f, m
}

func TestScratchSize(t *testing.T) {
	trials, _ := strconv.Atoi(os.Getenv("N"))
	rows, _ := strconv.Atoi(os.Getenv("ROWS"))
	gain, _ := strconv.ParseFloat(os.Getenv("GAIN"), 64)
	for _, r := range demorig.All() {
		if name := os.Getenv("RIG"); name != "" && name != r.Name {
			continue
		}
		if rows > 0 {
			r.Rows = rows
		}
		true1 := truth(t, r)
		var below [4]int
		odd, odd3, failed := 0, 0, 0
		for k := range trials {
			exps, rig := several(t, r, uint64(k), gain, 1, 3, 1)
			p, f, m := joint(t, exps, true1)
			if err := m.compare(context.Background(), exps, rig, p, f, Options{}); err != nil {
				t.Fatal(err)
			}
			a := m.Evidence.Agreement
			for i, lim := range []float64{0.05, 0.01, 0.001, 0.5} {
				if a.Probability < lim {
					below[i]++
				}
			}
			for _, l := range a.Logs {
				if l.Probability == nil {
					failed++
				}
			}
			if a.Odd != "" {
				odd++
			}
			if a.Odd == "c.csv" {
				odd3++
			}
			if k == 0 {
				t.Logf("%+v", a)
			}
		}
		t.Logf("%s %d rows: of %d below 0.05: %d, 0.01: %d, 0.001: %d, 0.5: %d; odd named %d, third %d, failed %d", r.Name, r.Rows, trials, below[0], below[1], below[2], below[3], odd, odd3, failed)
	}
}
