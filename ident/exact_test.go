package ident

import (
	"bytes"
	"context"
	"math"
	"math/rand/v2"
	"os"
	"strconv"
	"strings"
	"testing"
	"time"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
)

// modelOf fits the true structure from the truth on, without the search for it and with integrators free.
func modelOf(t testing.TB, r demorig.Rig, exps []*data.Experiment) *Model {
	t.Helper()
	recs, period, err := records(exps)
	if err != nil {
		t.Fatal(err)
	}
	p, err := fit.NewPredictor(recs, period, maxDelaySamples*period)
	if err != nil {
		t.Fatal(err)
	}
	f, err := p.Fit(truth(t, r), compareTol, finalSteps)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Covariance(f); err != nil {
		t.Fatal(err)
	}
	m := &Model{}
	m.describe(p, f, &data.Rig{})
	return m
}

// swept is a log of the rig whose probe is a sine of rising frequency, which nobody drew.
func swept(t testing.TB, r demorig.Rig, seed uint64) *data.Experiment {
	t.Helper()
	s := r.Signals(r.Rows, seed)
	phase := 0.0
	for k := range s.Dither {
		phase += 2 * math.Pi / (400 - 390*float64(k%2000)/2000)
		s.Dither[k] = 1.4 * r.Dither * math.Sin(phase)
	}
	run, err := r.Simulate(s)
	if err != nil {
		t.Fatal(err)
	}
	return &data.Experiment{File: "swept.csv", Period: r.Period, Rows: r.Rows, Used: r.Rows, Segments: []data.Segment{{Line: 1, U: run.U, Y: run.Y, D: s.Dither}}}
}

// Exact intervals of the rightmost pole hold the truth at least as often as they say, by the binomial law but for one
// study in 10 000, with levels drawn anew and with signs. STEADYRIG_STUDY sets the number of logs a rig, STEADYRIG_ROWS
// their length.
func TestStudyOfExactIntervals(t *testing.T) {
	if testing.Short() {
		t.Skip("fits some logs")
	}
	logs, rigs := 1, []demorig.Rig{rigNamed(t, "mast"), rigNamed(t, "flap")}
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		logs, _ = strconv.Atoi(v)
		rigs = demorig.All()
	}
	all, in := 0, 0
	for _, r := range rigs {
		if name := os.Getenv("STEADYRIG_RIG"); name != "" && name != r.Name {
			continue
		}
		if v := os.Getenv("STEADYRIG_ROWS"); v != "" {
			r.Rows, _ = strconv.Atoi(v)
		}
		roots := r.Truth.Den.Roots()
		right := roots[len(roots)-1]
		for _, drawn := range []bool{true, false} {
			if !drawn && r.Dither == 0 {
				continue
			}
			re, im, pairs, open, normal, claimed := 0, 0, 0, 0, 0, 0
			ratio := 0.0
			var elapsed time.Duration
			for k := range logs {
				e, rig := experiment(t, r, uint64(5000+k))
				if !drawn {
					e = swept(t, r, uint64(5000+k))
				}
				exps := []*data.Experiment{e}
				m := modelOf(t, r, exps)
				start := time.Now()
				if err := m.AddExact(context.Background(), exps, rig, Options{Seed: uint64(k)}); err != nil {
					t.Fatal(err)
				}
				elapsed += time.Since(start)
				if m.Exact.Claim == ClaimNone {
					t.Logf("%s, log %d: %s", r.Name, k, m.Exact.Note)
					continue
				}
				if m.Exact.Claim == ClaimExact {
					claimed++
				}
				p, q := m.Exact.Poles[len(m.Exact.Poles)-1], m.Poles[len(m.Poles)-1]
				all++
				if p.Re95.Contains(real(right)) {
					re++
					in++
				}
				if p.Im95 != nil {
					pairs++
					if p.Im95.Contains(imag(right)) {
						im++
					}
				}
				if q.Re95.Contains(real(right)) {
					normal++
				}
				if w := p.Re95.Hi - p.Re95.Lo; math.IsInf(w, 0) {
					open++
				} else {
					ratio += math.Log(w / (q.Re95.Hi - q.Re95.Lo))
				}
			}
			t.Logf("%-8s drawn %-5v %d rows, %d logs: claimed exact %d, real part inside %d (normal %d), imaginary %d of %d, open %d, width over normal %.2f, %v a log",
				r.Name, drawn, r.Rows, logs, claimed, re, normal, im, pairs, open, math.Exp(ratio/float64(max(1, logs-open))), (elapsed / time.Duration(logs)).Round(time.Millisecond))
			if !drawn && claimed > 0 {
				t.Errorf("%s: a swept sine was taken for draws in %d logs", r.Name, claimed)
			}
		}
	}
	if p := (distuv.Binomial{N: float64(all), P: 0.95}).CDF(float64(in)); p < 1e-4 {
		t.Errorf("%d of %d intervals hold the truth: probability %.2g if 95 %% do", in, all, p)
	}
}

// The same log and seed give the same bytes whatever the number of workers, and the file brings them back.
func TestExactIsDeterministic(t *testing.T) {
	if testing.Short() {
		t.Skip("fits a log")
	}
	r := rigNamed(t, "flap")
	r.Rows = 2000
	e, rig := experiment(t, r, 4)
	exps := []*data.Experiment{e}
	m, err := Fit(context.Background(), exps, rig, Options{Seed: 3})
	if err != nil {
		t.Fatal(err)
	}
	var first []byte
	for _, workers := range []int{1, 8} {
		done, total := 0, 0
		opt := Options{Seed: 3, Workers: workers}
		if workers == 1 {
			opt.Progress = func(d, n int) { done, total = d, n }
		}
		if err := m.AddExact(context.Background(), exps, rig, opt); err != nil {
			t.Fatal(err)
		}
		if workers == 1 && (done != total || done == 0) {
			t.Errorf("progress ends at %d of %d", done, total)
		}
		var b bytes.Buffer
		if err := m.Write(&b); err != nil {
			t.Fatal(err)
		}
		if first == nil {
			first = b.Bytes()
		} else if !bytes.Equal(first, b.Bytes()) {
			t.Error("8 workers give other intervals than 1")
		}
		back, err := ReadModel(&b, "model.json")
		if err != nil {
			t.Fatal(err)
		}
		p := m.Exact.Poles[0]
		if q := back.Exact.Poles[0]; q.Re95 != p.Re95 || *q.Im95 != *p.Im95 || back.Exact.Seed != 3 {
			t.Errorf("the file brings back %+v, wrote %+v", q, p)
		}
		// The pair of the log and of the model.
		if len(m.Exact.Poles) != 1 || !p.Re95.Contains(p.Re) || !p.Im95.Contains(p.Im) {
			t.Errorf("poles %+v", m.Exact.Poles)
		}
	}
}

// Without a signal from outside that moves, and without the law, there is nothing to make instruments from.
func TestCheckExact(t *testing.T) {
	r := rigNamed(t, "hover")
	r.Rows = 1000
	e, rig := experiment(t, r, 1)
	exps := []*data.Experiment{e}
	if err := CheckExact(exps, rig); err != nil {
		t.Errorf("a log with a probe: %v", err)
	}
	s := &e.Segments[0]
	d := s.D
	s.D = nil // the reference stands still
	if err := CheckExact(exps, rig); err == nil || !strings.Contains(err.Error(), "probe or the reference") {
		t.Errorf("a log without one: %v", err)
	}
	s.D = d
	want, _ := loopOf(exps, rig, true)
	rig.Stopgap = nil
	// The columns are rounded to eight digits.
	if l, ok := loopOf(exps, rig, true); !ok || !floats.EqualApprox(l.U, want.U, 1e-3) || !floats.EqualApprox(l.Y, want.Y, 1e-3) || !floats.EqualApprox(l.Outside, want.Outside, 1e-3) {
		t.Errorf("the law found in the log is %+v, ran %+v", l, want)
	}
	rnd := rand.New(rand.NewPCG(1, 1))
	for k := range s.U {
		s.U[k] = rnd.NormFloat64()
	}
	if err := CheckExact(exps, rig); err == nil || !strings.Contains(err.Error(), "law") {
		t.Errorf("a log without a law: %v", err)
	}
}

// Levels that were drawn pass but for one in a thousand, those that follow from each other do not.
func TestCheckLevels(t *testing.T) {
	const rows = 3000
	made := func(next func(rnd *rand.Rand, k int, last float64) float64, seed uint64) [][]float64 {
		rnd := rand.New(rand.NewPCG(11, seed))
		o := make([]float64, rows)
		last := 1.0
		for k := range o {
			last = next(rnd, k, last)
			o[k] = last
		}
		return [][]float64{o[:rows/3], o[rows/3:]}
	}
	binary := func(rnd *rand.Rand, k int, last float64) float64 {
		if k%10 != 0 {
			return last
		}
		return float64(rnd.IntN(2))
	}
	turned := 0
	const trials = 100
	for k := range uint64(trials) {
		if checkLevels(made(binary, k), k) != nil {
			turned++
		}
	}
	// 0.1 are due; three or more have a probability of 1.5e-4.
	if turned > 2 {
		t.Errorf("%d of %d signals of independent levels were turned down", turned, trials)
	}
	for name, next := range map[string]func(*rand.Rand, int, float64) float64{
		"square wave": func(_ *rand.Rand, k int, _ float64) float64 { return float64(k / 10 % 2) },
		"telegraph": func(rnd *rand.Rand, _ int, last float64) float64 {
			if rnd.Float64() < 0.1 {
				return -last
			}
			return last
		},
		"stairs":    func(_ *rand.Rand, k int, _ float64) float64 { return float64(k / 50 % 7) },
		"two steps": func(_ *rand.Rand, k int, _ float64) float64 { return float64(k / 1200) },
	} {
		if checkLevels(made(next, 1), 1) == nil {
			t.Errorf("%s passes for independent draws", name)
		}
	}
}
