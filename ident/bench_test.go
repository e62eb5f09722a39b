package ident

import (
	"context"
	"fmt"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/demorig"
)

// BenchmarkFit is the whole identification of one log of each demo rig.
func BenchmarkFit(b *testing.B) {
	for _, r := range demorig.All() {
		e, rig := experiment(b, r, 1)
		b.Run(r.Name, func(b *testing.B) {
			for b.Loop() {
				if _, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{}); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(r.Rows)*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
		})
	}
}

// BenchmarkStages shows what each stage of an audit and a fit makes of a long log, in rows of the log. The structure and
// the other methods see 50 000 of them.
func BenchmarkStages(b *testing.B) {
	r, _ := demorig.ByName("hover")
	for _, r.Rows = range []int{100_000, 1_000_000} {
		e, rig := experiment(b, r, 1)
		exps := []*data.Experiment{e}
		ctx := context.Background()
		recs, period, err := records(exps)
		if err != nil {
			b.Fatal(err)
		}
		var s *searched
		structure := func() {
			if s, err = search(ctx, recs, period, scopeOf(rig, period), Options{}); err != nil {
				b.Fatal(err)
			}
		}
		structure()
		best := s.ranked[0].fit
		f, err := s.p.Fit(best, finalTol, finalSteps)
		if err != nil {
			b.Fatal(err)
		}
		covariance := func() {
			if err := s.p.Covariance(f); err != nil {
				b.Fatal(err)
			}
		}
		covariance()
		m := newModel(exps, rig)
		m.describe(s.p, f, rig)
		for _, stage := range []struct {
			name string
			do   func()
		}{
			{"audit", func() { Audit(ctx, exps, rig) }},
			{"checks", func() { outside(exps); checkLaw(exps, rig); refuseDeaf(recs) }},
			{"structure", structure},
			{"likelihood", func() { s.p.Fit(best, finalTol, finalSteps) }},
			{"covariance", covariance},
			{"tests", func() { m.tests(s.p, recs, f) }},
			{"methods", func() {
				seen, err := s.seen(f, outsideSignals(exps), false)
				if err == nil {
					_, err = methods(ctx, seen, f, m, 0)
				}
				if err != nil {
					b.Fatal(err)
				}
			}},
			{"fit", func() { Fit(ctx, exps, rig, Options{}) }},
		} {
			b.Run(fmt.Sprintf("%s/rows=%d", stage.name, r.Rows), func(b *testing.B) {
				for b.Loop() {
					stage.do()
				}
				b.ReportMetric(float64(r.Rows)*float64(b.N)/b.Elapsed().Seconds(), "rows/s")
			})
		}
	}
}
