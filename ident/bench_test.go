package ident

import (
	"context"
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
