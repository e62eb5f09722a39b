package design

import (
	"bytes"
	"errors"
	"fmt"
	"math"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// estimated returns the model that a log of the plant would give: its parameters off by a draw of their covariance.
func estimatedOf(m *ident.Model, seed uint64) *ident.Model {
	g := m.Draw(1, seed)[0]
	c := *m
	down := func(p lti.Poly) []float64 {
		q := slices.Clone(p)
		slices.Reverse(q)
		return q
	}
	c.Plant.Numerator, c.Plant.Denominator, c.Plant.Delay = down(g.Num), down(g.Den), g.Delay
	return &c
}

// The interval of the nu-gap, over pairs of estimates that scatter as their covariance says, about plants whose true gap
// is computed from the truth: it holds that in at least 95 of 100, and where nothing has moved its lower end is zero as
// often. The triangle's inequality makes it wider than that, so only the lower limit binds: of n cases the number inside
// is, were the level 95 % exactly, at least the 1e-4 quantile of the binomial. The estimate itself is above the true gap
// in most cases, which is why it needs an interval that is not about it alone.
func TestIntervalOfTheNuGap(t *testing.T) {
	if testing.Short() {
		t.Skip("measures many gaps")
	}
	cases := 30
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		cases, _ = strconv.Atoi(v)
	}
	r := testRigs()[0]
	rig := r.rig()
	for _, by := range []float64{1, 1.3} {
		then, now := r, r
		now.truth.Num = now.truth.Num.Scale(by)
		old, fresh := then.model(t), now.model(t)
		truth, err := (&Recheck{}).nuGap(old, fresh, rig, nil, Options{})
		if err != nil {
			t.Fatal(err)
		}
		inside, zero, above := 0, 0, 0
		for k := range uint64(cases) {
			g, err := (&Recheck{}).nuGap(estimatedOf(old, 100+2*k), estimatedOf(fresh, 101+2*k), rig, nil, Options{Seed: k})
			if err != nil {
				t.Fatal(err)
			}
			if g.Interval[0] <= truth.Value && truth.Value <= g.Interval[1] {
				inside++
			}
			if g.Interval[0] == 0 {
				zero++
			}
			if g.Value > truth.Value {
				above++
			}
		}
		least := 0
		for by := (distuv.Binomial{N: float64(cases), P: 0.95}); by.CDF(float64(least)) < 1e-4; {
			least++
		}
		t.Logf("gain times %g: true gap %.4f inside %d of %d, lower end zero in %d, estimate above the truth in %d", by, truth.Value, inside, cases, zero, above)
		if inside < least {
			t.Errorf("gain times %g: inside %d of %d, want %d at least", by, inside, cases, least)
		}
		if by == 1 && (truth.Value != 0 || zero < least) {
			t.Errorf("nothing moved: gap %g, lower end zero in %d of %d, want %d at least", truth.Value, zero, cases, least)
		}
		if by == 1 && above < cases {
			t.Errorf("nothing moved: %d of %d estimates above zero; where is the bias?", above, cases)
		}
		if by != 1 && zero > 0 {
			t.Errorf("gain times %g: the interval reaches zero in %d", by, zero)
		}
	}
}

// Vinnicombe's theorem, from the outside: where the gap is below the margin, the loops hold the new plant by the
// eigenvalues of the realised loops; and there are plants further off that they do not hold.
func TestMarginAgainstTheNuGap(t *testing.T) {
	p, loops := flapRecheck(t)
	law := loops.LTI()
	beyond := false
	for _, by := range []float64{0.2, 0.5, 0.8, 0.9, 1.1, 1.3, 2, 5, 12, 20} {
		now := *p.model
		now.Plant.Numerator = slices.Clone(now.Plant.Numerator)
		for i := range now.Plant.Numerator {
			now.Plant.Numerator[i] *= by
		}
		g, err := (&Recheck{}).nuGap(p.model, &now, p.rig, loops, Options{})
		if err != nil {
			t.Fatal(err)
		}
		if g.Margin == nil || *g.Margin != math.Min(*g.MarginBoth, *g.MarginIn) {
			t.Fatalf("margin %v of %v and %v", g.Margin, g.MarginBoth, g.MarginIn)
		}
		held := true
		for _, l := range []*lti.Law{law, {Inner: law.Inner}} {
			two, err := lti.NewTwoLoops(now.TF(), p.compute, l)
			if err != nil {
				t.Fatal(err)
			}
			held = held && two.Stable()
		}
		t.Logf("gain times %g: gap %.4f, margin %.4f, held %v, by %s", by, g.Value, *g.Margin, held, g.HeldBy)
		if g.Value < *g.Margin && !held || g.HeldBy == Theorem && !held {
			t.Errorf("gain times %g: gap %.4f below the margin %.4f, and not held", by, g.Value, *g.Margin)
		}
		beyond = beyond || !held
	}
	if !beyond {
		t.Error("every plant is held: nothing was tried beyond the edge")
	}
}

// flapRecheck takes model and loops from the results that are kept with the command.
func flapRecheck(t testing.TB) (*problem, *Loops) {
	t.Helper()
	r, _ := demorig.ByName("flap")
	rig, err := data.ReadRig(strings.NewReader(r.File()), "rig.toml")
	if err != nil {
		t.Fatal(err)
	}
	read := func(name string) *os.File {
		f, err := os.Open("../cmd/steadyrig/testdata/" + name)
		if err != nil {
			t.Fatal(err)
		}
		t.Cleanup(func() { f.Close() })
		return f
	}
	m, err := ident.ReadModel(read("model.json"), "model.json")
	if err != nil {
		t.Fatal(err)
	}
	l, err := ReadLoops(read("loops.json"), "loops.json")
	if err != nil {
		t.Fatal(err)
	}
	p, err := newProblem(m, rig)
	if err != nil {
		t.Fatal(err)
	}
	return p, l
}

// logUnder is a log of a demo rig under a law, read as the command reads it.
func logUnder(t testing.TB, r demorig.Rig, law *lti.Law, rows int) (*data.Experiment, *data.Rig) {
	t.Helper()
	s := r.Signals(rows, 3)
	trace, err := lti.Run{
		Plant: r.Truth, Period: r.Period, ComputeDelay: r.ComputeDelay, Law: law, Steps: rows, Trip: r.Trip,
		Reference: s.Reference, Dither: s.Dither, InputDisturbance: s.Disturbance, Noise: s.Noise,
	}.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	e, rig, err := r.Read(s, trace, 3)
	if err != nil {
		t.Fatal(err)
	}
	return e, rig
}

// The law that ran is told, by the simulator's own logs, though two loops act on reference and output unlike and the input
// is at its limits now and then; of loops whose gain is 20 % off it is told that they did not run.
func TestWhichLawRan(t *testing.T) {
	r, _ := demorig.ByName("flap")
	_, loops := flapRecheck(t)
	r.Step, r.StepHold = 0.3, 60
	tight := r
	tight.InputLimits = [2]float64{-0.2, 1.8}
	other := *loops.LTI()
	other.Inner.Num = other.Inner.Num.Scale(1.2)
	clamped := *loops.LTI()
	clamped.OuterLimits = [2]float64{-0.2, 0.2}
	narrow := *loops.LTI()
	narrow.InputLimits = tight.InputLimits
	for _, c := range []struct {
		name string
		r    demorig.Rig
		law  *lti.Law
		want string
	}{
		{"loops", r, loops.LTI(), LawLoops},
		{"stopgap", r, r.Law(), LawStopgap},
		{"loops at the limits", tight, &narrow, LawLoops},
		{"stopgap at the limits", tight, tight.Law(), LawStopgap},
		{"loops with v clamped", r, &clamped, LawLoops},
		{"another gain", r, &other, LawUnknown},
	} {
		law := *c.law
		law.OutputStep = r.Resolution
		e, rig := logUnder(t, c.r, &law, 3000)
		got := whichLaw([]*data.Experiment{e}, rig, loops)
		held := 0
		for _, u := range e.Segments[0].U {
			if u <= c.r.InputLimits[0] || u >= c.r.InputLimits[1] {
				held++
			}
		}
		t.Logf("%s: loops leave %.2g, stopgap %.2g, %d rows at a limit: %s", c.name, *got.Loops, *got.Stopgap, held, got.Words)
		if got.Which != c.want {
			t.Errorf("%s: got %s, want %s", c.name, got.Which, c.want)
		}
		if strings.HasSuffix(c.name, "at the limits") && held < 10 {
			t.Errorf("%s: only %d rows at a limit", c.name, held)
		}
	}
	e, rig := logUnder(t, r, r.Law(), 500)
	rig.Log.ControllerPeriod = r.Period / 2
	if got := whichLaw([]*data.Experiment{e}, rig, loops); got.Which != LawUnknown || got.Loops != nil {
		t.Errorf("a log of every second step: %+v", got)
	}
}

// A rig that was lost in its log is found out, by its trip, by an input that came to rest for good, and without trips by
// an input that stays at a limit; one that was not lost is not.
func TestHowALogEnded(t *testing.T) {
	r, _ := demorig.ByName("flap")
	p, loops := flapRecheck(t)
	law := loops.LTI()
	gone := r
	gone.Truth.Num = gone.Truth.Num.Scale(0.05) // the loops lose it, see TestMarginAgainstTheNuGap
	open := gone
	open.Trip = [2]float64{-1e6, 1e6}
	for _, c := range []struct {
		name string
		r    demorig.Rig
		law  *lti.Law
		want string
	}{
		{"held", r, r.Law(), ""},
		{"tripped", gone, law, "tripped"},
		{"ran into its limits", open, law, "at a limit"},
	} {
		e, rig := logUnder(t, c.r, c.law, 1500)
		got := ended([]*data.Experiment{e}, rig, p.model)
		if (c.want == "") != (got == "") || !strings.Contains(got, c.want) {
			t.Errorf("%s: got %q", c.name, got)
		}
	}
	var log bytes.Buffer
	s := r.Signals(1500, 3)
	trace, err := r.Simulate(s)
	if err != nil {
		t.Fatal(err)
	}
	for k := 1000; k < 1500; k++ {
		trace.U[k] = r.U0
	}
	if err := r.WriteTrace(&log, s, trace, 3); err != nil {
		t.Fatal(err)
	}
	e, err := data.ReadLog(&log, "log.csv", p.rig)
	if err != nil {
		t.Fatal(err)
	}
	if got := ended([]*data.Experiment{e}, p.rig, p.model); !strings.Contains(got, "comes to rest") {
		t.Errorf("switched off: got %q", got)
	}
}

// since is a log that gave a model, moved or not.
func sinceOf(m *ident.Model, e *data.Experiment, gain float64, chance float64) Since {
	before := 1.0
	return Since{Logs: []*data.Experiment{e}, Model: m, Changes: &ident.Comparison{
		Moved: chance < ident.MovedLevel, ProbabilityByChance: chance,
		Changes: []ident.Change{{Name: "gain", Before: before, After: gain, Ratio: true, Interval95: ident.Interval{Lo: 0.97 * gain, Hi: 1.03 * gain}, ProbabilityByChance: chance}},
	}}
}

// Each verdict, on the plants that ask for it: the earlier one, one off a little, one whose spec the loops miss, and one
// that they lose by the eigenvalues of TestMarginAgainstTheNuGap; a refused log, one that tripped, one in other units.
func TestVerdictsOfARecheck(t *testing.T) {
	if testing.Short() {
		t.Skip("proves loops several times")
	}
	r, _ := demorig.ByName("flap")
	p, loops := flapRecheck(t)
	stopgap, rig := logUnder(t, r, r.Law(), 1000)
	tripped := *stopgap
	tripped.Flaws = []data.Flaw{{Name: data.FlawTrip, Line: 77}}
	lost := r
	lost.Truth.Num = lost.Truth.Num.Scale(0.05)
	underLoops, _ := logUnder(t, lost, loops.LTI(), 1000)
	scaled := func(by float64) *ident.Model {
		m := *p.model
		m.Plant.Numerator = slices.Clone(m.Plant.Numerator)
		for i := range m.Plant.Numerator {
			m.Plant.Numerator[i] *= by
		}
		return &m
	}
	refused := &ident.RefusedError{What: "nothing moves the input", Do: "log a probe"}
	for _, c := range []struct {
		name  string
		since Since
		loops *Loops
		want  string
		says  string
	}{
		{"moved a little", sinceOf(scaled(1.05), stopgap, 1.05, 1e-4), loops, Keep, "has moved"},
		{"spec missed", sinceOf(scaled(0.5), stopgap, 0.5, 1e-9), loops, Retune, "hold the rig, but"},
		{"lost", sinceOf(scaled(0.2), stopgap, 0.2, 1e-9), loops, Stop, "hold 0 of 600 plants"},
		{"another unit", sinceOf(scaled(1000), stopgap, 1000, 1e-9), nil, Stop, "another unit"},
		{"refused", Since{Logs: []*data.Experiment{stopgap}, Model: p.model, Refusal: refused}, loops, Stop, "nothing moves the input"},
		{"tripped under the stopgap law", sinceOf(p.model, &tripped, 1, 0.6), loops, Keep, "nothing moved"},
		{"tripped under the loops", sinceOf(p.model, underLoops, 1, 0.6), loops, Stop, "under the present loops the rig tripped"},
		{"no loops", sinceOf(p.model, stopgap, 1, 0.6), nil, Keep, "the model still holds"},
		{"no loops, moved", sinceOf(scaled(1.05), stopgap, 1.05, 1e-4), nil, Retune, "moved away from the model"},
		{"no loops, refused", Since{Logs: []*data.Experiment{stopgap}, Model: p.model, Refusal: refused}, nil, Stop, "nothing moves the input"},
		{"no loops, not compared", Since{Logs: []*data.Experiment{stopgap}, Model: p.model}, nil, Stop, "could not be compared"},
	} {
		got, err := NewRecheck(t.Context(), p.model, c.since, rig, c.loops, Options{Plants: 600}) // 0.05^(1/600) = 0.99502
		if err != nil {
			t.Errorf("%s: %v", c.name, err)
			continue
		}
		if got.Verdict != c.want || !strings.Contains(got.Why, c.says) {
			t.Errorf("%s: got %s: %s; want %s: … %s …", c.name, got.Verdict, got.Why, c.want, c.says)
		}
		var no *ident.RefusedError
		if err := got.Err(); (err == nil) != (got.Verdict == Keep) || err != nil && (!errors.As(err, &no) || no.Do == "") {
			t.Errorf("%s: verdict %s ends with %v", c.name, got.Verdict, err)
		}
		if len(got.Cautions) < 2 || !strings.Contains(strings.Join(got.Cautions, " "), "licensed practice") {
			t.Errorf("%s: cautions %q", c.name, got.Cautions)
		}
	}
}

// What the doc comment of Recheck says of 2 000 plants.
func TestShareThatHasToBeHeld(t *testing.T) {
	for lost, holds := range map[int]bool{0: true, 4: true, 5: false} {
		if got := ClopperPearsonLower(2000-lost, 2000, 0.95) >= PromisedShare; got != holds {
			t.Errorf("%d of 2000 lost: %v, want %v", lost, got, holds)
		}
	}
	if n := 2000 * distuv.UnitNormal.Survival(3.29); fmt.Sprintf("%.1f", n) != "1.0" {
		t.Errorf("2000 times the tail beyond 3.29 deviations is %.3f", n)
	}
}
