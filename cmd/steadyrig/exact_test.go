package main

import (
	"bytes"
	"encoding/json"
	"math"
	"slices"
	"strings"
	"testing"

	"steadyrig/fit/demorig"
	"steadyrig/ident"
)

// Without an outside signal in the log there are no exact intervals: one line, before any work, and no file.
func TestExactNeedsAnOutsideSignal(t *testing.T) {
	files := demoFiles(t, "flap", 1, func(r *demorig.Rig) { r.Rows = 400 })
	files["rig.toml"] = strings.Replace(files["rig.toml"], `dither        = "d"`, "", 1)
	inFolder(t, files)
	before := listing(t)
	for _, args := range [][]string{{"fit", "rig.toml", "log.csv", "--exact"}, {"run", "rig.toml", "log.csv", "--exact", "--dir", "study"}} {
		status, stdout, stderr := call(t, args...)
		if status != statusCall || stdout != "" {
			t.Errorf("%s: exit status %d, standard output %q", args[0], status, stdout)
		}
		oneErrorLine(t, stderr, "exact intervals need", "probe or the reference", "dither")
		if after := listing(t); !slices.Equal(before, after) {
			t.Errorf("%s: files before %v, after %v", args[0], before, after)
		}
	}
}

// fit --exact adds to the model and changes nothing else of it.
func TestFitExact(t *testing.T) {
	if testing.Short() {
		t.Skip("fits a log twice")
	}
	inFolder(t, demoFiles(t, "reactor", 1, func(r *demorig.Rig) { r.Rows = 1600 }))
	var models [2]map[string]any
	for i, more := range [][]string{nil, {"--exact"}} {
		status, stdout, stderr := call(t, append([]string{"fit", "rig.toml", "log.csv", "--json"}, more...)...)
		if status != statusDone {
			t.Fatalf("exit status %d: %s", status, stderr)
		}
		if err := json.Unmarshal([]byte(stdout), &models[i]); err != nil {
			t.Fatal(err)
		}
	}
	exact, _ := models[1]["exact"].(map[string]any)
	if models[0]["exact"] != nil || exact["claim"] != ident.ClaimExact || exact["level"] != 0.95 || exact["seed"] != 1.0 {
		t.Errorf("without --exact %v, with it %v", models[0]["exact"], exact)
	}
	delete(models[1], "exact")
	a, _ := json.Marshal(models[0])
	b, _ := json.Marshal(models[1])
	if !bytes.Equal(a, b) {
		t.Error("--exact changes the rest of the model")
	}
}

func TestExactPage(t *testing.T) {
	var b bytes.Buffer
	for _, e := range []ident.Exact{
		{
			Level: 0.95, Draws: 1000, Largest: 50, Seed: 1, Claim: ident.ClaimExact, Assumption: "some assumption; another one", Rows: 4800, Units: 1200,
			Poles: []ident.ExactPole{{Re: 1.156, Im: 10.47, OfTwo: true, Re95: ident.Interval{Lo: 0.92, Hi: 1.37}, Im95: &ident.Interval{Lo: 10.1, Hi: 10.9}}},
		},
		{
			Level: 0.95, Draws: 1000, Largest: 50, Seed: 7, Claim: ident.ClaimApproximate, Assumption: "some assumption", Note: "some reason", Rows: 300, Units: 300,
			Poles: []ident.ExactPole{{OfTwo: true, Re95: ident.Interval{Lo: -0.2, Hi: math.Inf(1)}}, {Re: 36.1, Re95: ident.Interval{Lo: 35.5, Hi: 36.5}}},
		},
		{Level: 0.95, Draws: 1000, Largest: 50, Seed: 1, Claim: ident.ClaimNone, Note: "some reason; another one"},
	} {
		showExact(&page{w: &b}, &ident.Model{Exact: &e})
	}
	showExact(&page{w: &b}, &ident.Model{})
	fits80(t, "exact", b.String())
	golden(t, "exact", b.String())
}
