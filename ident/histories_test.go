package ident

import (
	"context"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"testing"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
)

// Histories of real fits: STEADYRIG_STUDY logs of 2 000 rows (STEADYRIG_ROWS) of each demo rig (STEADYRIG_RIG), and a
// quarter as many of one with 12 % more gain. How far the fits scatter against their own deviations decides whether
// fit.Changes holds its level on them: it is put to the unchanged logs in 200 random orders, which are no independent
// histories but show whether marks are rare, and to the unchanged ones with the changed ones after.
func TestStudyOfHistories(t *testing.T) {
	logs, err := strconv.Atoi(os.Getenv("STEADYRIG_STUDY"))
	if err != nil {
		t.Skip("fits many logs: set STEADYRIG_STUDY")
	}
	rows, err := strconv.Atoi(os.Getenv("STEADYRIG_ROWS"))
	if err != nil {
		rows = 2000
	}
	for _, r := range demorig.All() {
		if name := os.Getenv("STEADYRIG_RIG"); name != "" && name != r.Name {
			continue
		}
		r.Rows = rows
		followed := func(r demorig.Rig, from uint64, n int) (list []*Followed) {
			for k := range n {
				e, rig := experiment(t, r, from+uint64(k))
				m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{Seed: 1})
				if err != nil {
					t.Logf("seed %d: %v", from+uint64(k), err)
					continue
				}
				if f := m.Followed(rig.Units); f != nil {
					list = append(list, f)
				}
			}
			return list
		}
		before := followed(r, 8000, logs)
		r.Truth.Num = slices.Clone(r.Truth.Num)
		for i := range r.Truth.Num {
			r.Truth.Num[i] *= 1.12
		}
		after := followed(r, 9000, logs/4)
		names := FollowedNames(append(slices.Clone(before), after...))
		readings := func(list []*Followed) (out []fit.Reading) {
			for _, f := range list {
				if p := f.Pick(names); p != nil {
					q, err := fit.NewReading(p.Values, p.Covariance)
					if err != nil {
						t.Fatal(err)
					}
					out = append(out, q)
				}
			}
			return out
		}
		a, b := readings(before), readings(after)
		mean, _ := fit.Mean(a)
		scatter := make([]float64, len(names)) // squared distance from the mean in own deviations
		for _, f := range before {
			if p := f.Pick(names); p != nil {
				for j, x := range p.Values {
					d := x - mean[j]
					scatter[j] += d * d / p.Covariance[j][j] / float64(len(a)-1)
				}
			}
		}
		for j := range scatter {
			scatter[j] = math.Sqrt(scatter[j])
		}
		marked := 0
		rnd := rand.New(rand.NewPCG(1, 1))
		for range 200 {
			order := slices.Clone(a)
			rnd.Shuffle(len(order), func(i, j int) { order[i], order[j] = order[j], order[i] })
			if len(fit.Changes(order, 0.05)) > 0 {
				marked++
			}
		}
		t.Logf("%s: compared by %q, %d of %d logs; scatter over own deviations %.2f; marked in %d of 200 orders; 12 %% more gain from %d on: %+v",
			r.Name, names, len(a)+len(b), logs+logs/4, scatter, marked, len(a), fit.Changes(append(slices.Clone(a), b...), 0.05))
	}
}
