package ident

import (
	"context"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strings"
	"testing"

	"gonum.org/v1/gonum/floats"

	"steadyrig/data"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
)

// changed is a rig and what acts on it at a next test.
func changed(r demorig.Rig, c NextTest, rows int, seed uint64) (demorig.Rig, demorig.Signals) {
	r.Rows = rows
	switch c.What {
	case "longer":
		r.Rows *= 2
	case "stronger":
		r.Dither *= c.Size
		r.Step *= c.Size
	case "hold", "dither":
		r.Dither, r.DitherHold = c.Size, c.Hold
	case "faster":
		r.Stopgap = resampled(r.Stopgap, r.Period/2)
		r.Period /= 2
		r.Rows *= 2
		r.DitherHold *= 2
		r.StepHold *= 2
		if r.DisturbancePole == 0 {
			r.Disturbance *= math.Sqrt2 // the same density in continuous time
		}
	}
	s := r.Signals(r.Rows, seed)
	switch c.What {
	case "band":
		noise := band(r.Rows, r.Period, c.From, c.To, seed+50)
		floats.AddScaled(s.Dither, c.Size, noise)
	case "reference":
		rnd := rand.New(rand.NewPCG(seed, 77))
		for k := range s.Reference {
			if k%c.Hold == 0 {
				s.Reference[k] = r.Y0 + c.Size*float64(2*rnd.IntN(2)-1)
			} else {
				s.Reference[k] = s.Reference[k-1]
			}
		}
	}
	return r, s
}

// resampled is a law of first order at another period, by Tustin's rule back and forth.
func resampled(g lti.DTF, period float64) lti.DTF {
	corner := func(p lti.Poly) float64 { z := -p[1] / p[0]; return 2 / g.Period * (z - 1) / (z + 1) }
	zero, pole := corner(g.Num), corner(g.Den)
	gain := (g.Num[0] + g.Num[1]) / (g.Den[0] + g.Den[1])
	return lti.Tustin(lti.TF{Num: lti.Poly{gain, -gain / zero}, Den: lti.Poly{1, -1 / pole}}, period)
}

// What each change is said to bring to the interval it brings to the Cramér-Rao bound of a log that is simulated with that change
// alone, within the scatter between two draws of probe and noise, a few percent on each side (TestExpectedDeviationIsTheBound); and
// in that log the input is hardly ever cut off, the output stays within its limits, and moves by twice the variance at most. The double
// pole of slider has no regular bound.
func TestNextTestsBringWhatTheySay(t *testing.T) {
	if testing.Short() {
		t.Skip("simulates a log for each change")
	}
	names := []string{"hover", "mast"}
	if os.Getenv("STEADYRIG_STUDY") != "" {
		names = []string{"hover", "mast", "reactor", "flap"}
	}
	const seed = 21
	seen := map[string]bool{}
	for _, name := range names {
		r := rigNamed(t, name)
		rig, err := data.ReadRig(strings.NewReader(r.File()), name)
		if err != nil {
			t.Fatal(err)
		}
		m := truth(t, r)
		now := logged(t, r, r.Signals(r.Rows, seed), true)
		inf := expected(t, now, m)
		recs, _, err := records(now)
		if err != nil {
			t.Fatal(err)
		}
		a := &AuditReport{Outside: outside(now), OperatingPoint: OperatingPoint{r.U0, r.Y0}}
		a.Spread.Input, a.Spread.Output = spread(recs)
		inf.weigh(a, now, rig)
		before := rightmost(t, now, m)
		for _, c := range inf.NextTests {
			if c.What == "slower" {
				continue
			}
			next, s := changed(r, c, r.Rows, seed+1)
			exps := logged(t, next, s, true)
			u, y := exps[0].Segments[0].U, exps[0].Segments[0].Y
			after := rightmost(t, exps, truth(t, next))
			said, got := c.HalfWidth/inf.halves[0], after/before
			t.Logf("%-8s %s: said %.3f of the interval, got %.3f", name, c.Words, said, got)
			seen[c.What] = true
			if math.Abs(math.Log(said/got)) > 0.1 {
				t.Errorf("%s: %s: said %.3f of the interval, got %.3f", name, c.Words, said, got)
			}
			if n, more := cut(u, r.InputLimits), cut(now[0].Segments[0].U, r.InputLimits); n > 1e-3+2*more {
				t.Errorf("%s: %s: %.2g of the inputs are cut off, %.2g before", name, c.Words, n, more)
			}
			if lo, hi := slices.Min(y), slices.Max(y); lo <= r.Trip[0] || hi >= r.Trip[1] {
				t.Errorf("%s: %s: the output runs from %.3g to %.3g", name, c.Words, lo, hi)
			}
			if v := about(y) / float64(len(y)) / (a.Spread.Output * a.Spread.Output); v > moreMotion*1.25 {
				t.Errorf("%s: %s: the output moves by %.3g of its variance", name, c.Words, v)
			}
		}
		if first := inf.NextTests[0]; !slices.IsSortedFunc(inf.NextTests, func(a, b NextTest) int { return int(math.Copysign(1, b.Worth-a.Worth)) }) || first.HalfWidth > inf.halves[0] {
			t.Errorf("%s: not the best first: %+v", name, inf.NextTests)
		}
	}
	for _, what := range []string{"longer", "stronger", "band", "hold", "dither", "reference", "faster"} {
		if !seen[what] {
			t.Errorf("%q was not tried", what)
		}
	}
}

// cut is the share of inputs that lie at a limit.
func cut(u []float64, limits [2]float64) float64 {
	n := 0
	for _, v := range u {
		if v <= limits[0] || v >= limits[1] {
			n++
		}
	}
	return float64(n) / float64(len(u))
}

// The change that is named first narrows the interval that a fit reports as it was printed. STEADYRIG_STUDY fits logs of four rigs,
// structure searched for; else of one, structure given.
func TestFirstChangeNarrowsTheFit(t *testing.T) {
	if testing.Short() {
		t.Skip("fits two logs")
	}
	names := []string{"hover"}
	study := os.Getenv("STEADYRIG_STUDY") != ""
	if study {
		names = []string{"hover", "mast", "reactor", "flap"}
	}
	for _, name := range names {
		r := rigNamed(t, name)
		halfWidth := func(r demorig.Rig, s demorig.Signals, seed uint64) float64 {
			trace, err := r.Simulate(s)
			if err != nil {
				t.Fatal(err)
			}
			e, rig, err := r.Read(s, trace, seed)
			if err != nil {
				t.Fatal(err)
			}
			if !study {
				poles, zeros := r.Truth.Den.Degree(), r.Truth.Num.Degree()
				rig.Model.Order, rig.Model.Zeros = &poles, &zeros
			}
			m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
			if err != nil {
				t.Fatal(err)
			}
			p := m.Poles[len(m.Poles)-1]
			return (p.Re95.Hi - p.Re95.Lo) / 2
		}
		e, rig := experiment(t, r, 31)
		a, err := Audit(context.Background(), []*data.Experiment{e}, rig)
		if err != nil || a.Informative == nil {
			t.Fatalf("%s: %v", name, err)
		}
		c := a.Informative.NextTests[0]
		next, s := changed(r, c, r.Rows, 32)
		if c.What == "band" {
			next.Dither = max(next.Dither, c.Size) // so that the dither is logged
		}
		before, after := halfWidth(r, r.Signals(r.Rows, 31), 31), halfWidth(next, s, 32)
		t.Logf("%-8s %s: said ± %.4g instead of %.4g, fitted ± %.4g instead of %.4g", name, c.Words, c.HalfWidth, a.Informative.halves[0], after, before)
		if math.Abs(math.Log(after/c.HalfWidth)) > 0.2 {
			t.Errorf("%s: %s: said ± %.4g, fitted ± %.4g", name, c.Words, c.HalfWidth, after)
		}
	}
}
