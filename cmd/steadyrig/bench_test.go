package main

import (
	"context"
	"io"
	"strings"
	"testing"
	"time"

	"steadyrig/cmd/steadyrig/report"
	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/fit/demorig"
	"steadyrig/ident"
)

// BenchmarkRun shows where a run on a log of 10 000 rows spends its time: all, then part by part.
func BenchmarkRun(b *testing.B) {
	r, ok := demorig.ByName("mast")
	if !ok || r.Rows != 10000 {
		b.Fatalf("the rig has %d rows, want 10000", r.Rows)
	}
	log, err := rendered(func(w io.Writer) error { return r.WriteCSV(w, 1) })
	if err != nil {
		b.Fatal(err)
	}
	rig, err := data.ReadRig(strings.NewReader(r.File()), "rig.toml")
	if err != nil {
		b.Fatal(err)
	}
	ctx := context.Background()
	var exps []*data.Experiment
	in := report.Input{Rig: rig, Verdict: "sound", Made: time.Unix(0, 0).UTC(), Seed: 1}
	read := func() {
		exp, err := data.ReadLog(strings.NewReader(string(log)), "log.csv", rig)
		if err != nil {
			b.Fatal(err)
		}
		exps = []*data.Experiment{exp}
		in.Logs = exps
	}
	audit := func() {
		if in.Audit, err = ident.Audit(ctx, exps, rig); err != nil {
			b.Fatal(err)
		}
	}
	fit := func() {
		if in.Model, err = ident.Fit(ctx, exps, rig, ident.Options{}); err != nil {
			b.Fatal(err)
		}
	}
	loops := func() {
		if in.Loops, err = design.Design(ctx, in.Model, rig, design.Options{Seed: 1}); err != nil {
			b.Fatal(err)
		}
	}
	write := func() {
		if err := report.Write(io.Discard, in); err != nil {
			b.Fatal(err)
		}
	}
	steps := []struct {
		name string
		do   func()
	}{{"read", read}, {"audit", audit}, {"fit", fit}, {"design", loops}, {"report", write}}
	b.Run("all", func(b *testing.B) {
		for b.Loop() {
			for _, s := range steps {
				s.do()
			}
		}
	})
	for i, s := range steps {
		b.Run(s.name, func(b *testing.B) {
			for _, before := range steps[:i] {
				before.do()
			}
			for b.Loop() {
				s.do()
			}
		})
	}
}
