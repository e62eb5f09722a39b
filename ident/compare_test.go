package ident

import (
	"context"
	"fmt"
	"math"
	"os"
	"slices"
	"strconv"
	"testing"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
)

// knownFit fits a simulated log of a rig in a known structure from a start near the
// truth, which a search would find, too: what a study of many pairs can afford. It
// tests no method and draws no band.
func knownFit(t testing.TB, r demorig.Rig, seed uint64, start *fit.Prediction) *Model {
	t.Helper()
	s := r.Signals(r.Rows, seed)
	trace, err := r.Simulate(s)
	if err != nil {
		t.Fatal(err)
	}
	e := &data.Experiment{File: fmt.Sprint(r.Name, seed), Period: r.Period, Rows: r.Rows, Used: r.Rows, Segments: []data.Segment{{U: trace.U, Y: trace.Y}}}
	exps := []*data.Experiment{e}
	rig := &data.Rig{Name: r.Name, OperatingPoint: &data.OperatingPoint{Input: r.U0, Output: r.Y0}}
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
	m := newModel(exps, rig)
	m.Verdict, m.Noise.SamplePeriod = Sound, period
	ranked := []*candidate{{structure: structure{f.Poles, f.Zeros, f.Shape.Colour, f.FreeDelay, f.Integrators}, fit: f, bic: f.BIC()}}
	if err := m.tests(p, recs, f); err != nil {
		t.Fatal(err)
	}
	if err := m.covariance(p, f); err != nil {
		t.Fatal(err)
	}
	m.describe(p, f, rig)
	m.conditions(p, recs, f, rig)
	if err := m.loosen(p, f, ranked); err != nil {
		t.Fatal(err)
	}
	if err := m.sample(context.Background(), p, f, ranked, Options{Seed: seed, Workers: 1}); err != nil {
		t.Fatal(err)
	}
	m.fitted = &refitted{p: p, f: f, recs: recs}
	return m
}

// start is where knownFit starts for a rig.
func start(t testing.TB, r demorig.Rig) *fit.Prediction {
	f := truth(t, r)
	for f.Integrators < f.Poles && f.Den[f.Integrators] == 0 {
		f.Integrators++
	}
	return f
}

// TestStudyOfChanges.
func TestStudyOfChanges(t *testing.T) {
	pairs := 2
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		pairs, _ = strconv.Atoi(v)
	}
	changes := []struct {
		name   string
		change func(r *demorig.Rig)
		power  string
	}{
		{"nothing", func(r *demorig.Rig) {}, ""},
		{"probe", func(r *demorig.Rig) {
			r.DitherHold, r.StepHold, r.Dither, r.Step = r.DitherHold*2, r.StepHold*2, r.Dither*0.8, r.Step*0.8
		}, ""},
		{"law", func(r *demorig.Rig) { r.Stopgap.Num = r.Stopgap.Num.Scale(1.15) }, ""},
		{"gain", func(r *demorig.Rig) { r.Truth.Num = r.Truth.Num.Scale(1.12) }, "gain"},
		{"pole", func(r *demorig.Rig) { r.Truth.Den = faster(r.Truth.Den, 1.08) }, "unstable pole"},
	}
	for _, r := range demorig.All() {
		if name := os.Getenv("STEADYRIG_RIG"); name != "" && name != r.Name {
			continue
		}
		if v := os.Getenv("STEADYRIG_ROWS"); v != "" {
			r.Rows, _ = strconv.Atoi(v)
		}
		from := start(t, r)
		moved, clear, told, seen := make([]int, len(changes)), make([]map[string]int, len(changes)), make([]int, len(changes)), make([]int, len(changes))
		var sizes [2][]float64
		for i := range pairs {
			before := knownFit(t, r, uint64(20000+6*i), from)
			for k, c := range changes {
				s := r
				c.change(&s)
				after := knownFit(t, s, uint64(20001+6*i+k), from)
				got, err := Compare(context.Background(), before, after, nil, &data.Rig{Name: r.Name}, Options{})
				if err != nil {
					t.Fatal(err)
				}
				if i == 0 && os.Getenv("SAY") != "" {
					t.Log(c.name, got.Words, got.Warnings)
					for _, x := range got.Changes {
						t.Log("    ", x.Words, x.ProbabilityByChance)
					}
				}
				if clear[k] == nil {
					clear[k] = map[string]int{}
				}
				if got.Moved {
					moved[k]++
				}
				for _, x := range got.Changes {
					if x.Clear {
						clear[k][x.Name]++
					}
				}
				for _, v := range got.Visible {
					size := 0.12
					if v.Name != "gain" {
						size = 0.08
					}
					if k == 0 && v.Size != nil {
						n := slices.Index([]string{"gain", "unstable pole"}, v.Name)
						sizes[n] = append(sizes[n], *v.Size)
					}
					if v.Name == c.power && v.Size != nil && *v.Size <= size {
						told[k]++
						if got.Moved {
							seen[k]++
						}
					}
				}
			}
		}
		for _, s := range sizes {
			slices.Sort(s)
			if len(s) > 0 {
				t.Logf("   visible: median %.3g, range %.3g to %.3g", s[len(s)/2], s[0], s[len(s)-1])
			}
		}
		for k, c := range changes {
			t.Logf("| %s | %d | %s | moved %d of %d | told visible %d, of these seen %d | clear %v |", r.Name, r.Rows, c.name, moved[k], pairs, told[k], seen[k], clear[k])
		}
	}
}

// faster scales the unstable poles of a denominator by f.
func faster(den lti.Poly, f float64) lti.Poly {
	r := den.Roots()
	for i := range r {
		if real(r[i]) > 0 {
			r[i] *= complex(f, 0)
		}
	}
	return lti.FromRoots(r)
}
