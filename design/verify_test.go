package design

import (
	"cmp"
	"errors"
	"math"
	"math/cmplx"
	"slices"
	"strings"
	"testing"

	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// The tool's own loops are cleared again, by fresh eyes and on the same seed with the same counts.
func TestVerifyOwn(t *testing.T) {
	r := testRigs()[0]
	l := designed(t, r.name)
	again, err := Verify(t.Context(), r.model(t), r.rig(), l, Options{Seed: 1})
	if err != nil {
		t.Fatal(err)
	}
	if again.Promise.MeetSpec != l.Promise.MeetSpec || *again.Margins.PlantInput != *l.Margins.PlantInput && again.Margins.PlantInput.PeakSensitivity != l.Margins.PlantInput.PeakSensitivity {
		t.Errorf("promise %+v, was %+v", again.Promise, l.Promise)
	}
	wrong := r.rig()
	wrong.Loop.SamplePeriod *= 2
	if _, err := Verify(t.Context(), r.model(t), wrong, l, Options{}); err == nil || !strings.Contains(err.Error(), "sample period") {
		t.Errorf("other sample period: %v", err)
	}
}

// An unstable pole cancelled, exactly or within 1 %, is refused, though the response to a reference step looks
// perfect; the pole stays in the loop as the textbooks say: L = 4(s-1.01)/((s-1)(s+1)) has closed-loop poles
// -2 ± sqrt(9.04), and the growth that the refusal names agrees with the simulation.
func TestVerifyRefusesCancellation(t *testing.T) {
	const period = 0.001
	plant := lti.TF{Num: lti.Poly{4}, Den: lti.Poly{-1, 1}}
	r := testRig{
		name: "cancelled", truth: plant, relative: 0.003, period: period, sensor: 1e-4, disturbance: 1e-4, input: [2]float64{-50, 50},
	}
	r.spec.Step, r.spec.Overshoot, r.spec.Settling, r.spec.Band, r.spec.PeakSensitivity = 0.1, 0.2, 2, 0.05, 3
	m := r.model(t)
	for _, zero := range []float64{1.01, 1, 0.99} {
		inner := lti.Tustin(lti.TF{Num: lti.Poly{-zero, 1}, Den: lti.Poly{1, 1}}, period)
		outer := lti.Tustin(lti.TF{Num: lti.Poly{4, 1}, Den: lti.Poly{0, 1}}, period)
		pre := lti.Tustin(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{1, 0.25}}, period)
		law := &lti.Law{Inner: inner}
		loops, err := lti.NewTwoLoops(plant, 0, law)
		if err != nil {
			t.Fatal(err)
		}
		fastest := math.Inf(-1)
		for _, z := range loops.Poles() {
			fastest = math.Max(fastest, real(cmplx.Log(z))/period)
		}
		// s^2 + 4s + 4(-zero) - 1: 1e-3 for the sampling, half a millisecond of delay.
		near(t, "growing pole", fastest, -2+math.Sqrt(5+4*zero), 1e-3)
		// Until the settling time and a quarter more the reference step looks as the spec wants it.
		ref := make([]float64, 2500)
		for k := range ref {
			ref[k] = r.spec.Step
		}
		tr, err := lti.Run{Plant: plant, Period: period, Law: &lti.Law{Inner: inner, Outer: &outer, Prefilter: &pre}, Steps: len(ref), Reference: ref}.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		for k, y := range tr.YTrue {
			if over := y/r.spec.Step - 1; over > r.spec.Overshoot || k >= 2000 && math.Abs(over) > r.spec.Band {
				t.Fatalf("zero at %v: the step does not look perfect: %.3g after %.3g s", zero, y/r.spec.Step, float64(k)*period)
			}
		}
		l := lawLoops(inner)
		l.Outer = &Block{Discrete: Rational{outer.Num, outer.Den}}
		l.Prefilter = &Block{Discrete: Rational{pre.Num, pre.Den}}
		l.pointMissing = true
		got, err := Verify(t.Context(), m, r.rig(), l, Options{Seed: 1, Plants: 60})
		var refused *ident.RefusedError
		if !errors.As(err, &refused) || got.Verdict != Refused {
			t.Fatalf("zero at %v: %v", zero, err)
		}
		// Both loops closed, L = 4 (s - zero)/((s-1)(s+1)) (1 + (s+4)/s): s^3 + 8 s^2 + (15 - 8 zero) s - 16 zero has its
		// unstable root in the rate; half a millisecond of delay is left.
		cubic := lti.Poly{-16 * zero, 15 - 8*zero, 8, 1}
		root := slices.MaxFunc(cubic.Roots(), func(a, b complex128) int { return cmp.Compare(real(a), real(b)) })
		near(t, "rate of the mode", got.Hidden.Growth.Rate[0], real(root), 2e-3)
		if !strings.Contains(refused.What, "grows by e every") || !strings.Contains(refused.What, "noise alone takes") || got.Promise.Stable != 0 {
			t.Errorf("zero at %v: %q, %d of %d stable", zero, refused.What, got.Promise.Stable, got.Promise.Plants)
		}
	}
	// The growth in simulation: a small offset along the mode, from the exactly cancelling loop.
	law := &lti.Law{Inner: lti.Tustin(lti.TF{Num: lti.Poly{-1, 1}, Den: lti.Poly{1, 1}}, period)}
	tr, err := lti.Run{Plant: plant, Period: period, Law: law, Steps: 6001, OutputOffset: 1e-6}.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	near(t, "e-fold in 1 s", tr.YTrue[6000]/tr.YTrue[5000], math.E, 1e-2)
}

// A zero of 1 + K2 is a zero of the controller: K2 = -1 + (s - 1)/s has one at the pole, though K2 itself does not.
func TestVerifySeesOuterCancellation(t *testing.T) {
	const period = 0.01
	m := bare(lti.TF{Num: lti.Poly{4}, Den: lti.Poly{-1, 1}}, period)
	p, err := newProblem(m, bareRig(period, 0, 2))
	if err != nil {
		t.Fatal(err)
	}
	law := &lti.Law{Inner: lti.Gain(1, period)}
	outer := lti.Tustin(lti.TF{Num: lti.Poly{-1}, Den: lti.Poly{0, 1}}, period) // 1 + K2 = (s - 1)/s
	law.Outer = &outer
	if _, r := p.hidden(law); r == nil || !strings.Contains(r.What, "1 + K2") {
		t.Errorf("%v", r)
	}
	outer = lti.Tustin(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{0, 1}}, period)
	if _, r := p.hidden(law); r != nil {
		t.Errorf("a plain integrator: %v", r)
	}
	// A zero of K1 at the integrator of K2.
	law.Inner = lti.Tustin(lti.TF{Num: lti.Poly{1e-5, 1}, Den: lti.Poly{1, 0.1}}, period)
	if _, r := p.hidden(law); r == nil || !strings.Contains(r.What, "integrator") {
		t.Errorf("%v", r)
	}
}

// A user's stabilising pair that misses the spec is refused with what it misses, and keeps its coefficients.
func TestVerifyUsersLoops(t *testing.T) {
	r := testRigs()[1]
	l, err := ReadLoops(strings.NewReader(`{"schema": "steadyrig/loops/1", "rig": "balanced", "sample_period": 0.03,
		"inner": {"continuous": {"numerator": [3, 6], "denominator": [0.05, 1]}},
		"outer": {"continuous": {"numerator": [0.05], "denominator": [1, 0]}}, "prefilter": 1, "outer_limits": null}`), "mine.json")
	if err != nil {
		t.Fatal(err)
	}
	got, err := Verify(t.Context(), r.model(t), r.rig(), l, Options{Seed: 1, Plants: 100})
	var refused *ident.RefusedError
	if !errors.As(err, &refused) || !strings.Contains(refused.What, "settling") {
		t.Fatalf("%v", err)
	}
	if got.Promise.Stable != 100 || got.InputLimits == nil || *got.InputLimits != r.input || got.Inner.Continuous != l.Inner.Continuous || got.Sampling.Mapping == "" {
		t.Errorf("%+v", got.Promise)
	}
}

// The curves of the report begin at rest, follow the reference and agree with the margins.
func TestCurves(t *testing.T) {
	r := testRigs()[3]
	l := designed(t, r.name)
	m, rig := r.model(t), r.rig()
	s, err := l.StepResponses(m, rig, 3, 1)
	if err != nil {
		t.Fatal(err)
	}
	if len(s.Output) != 4 || len(s.Input) != 4 || len(s.Output[0]) != len(s.Time) {
		t.Fatalf("shapes %d %d %d %d", len(s.Output), len(s.Input), len(s.Output[0]), len(s.Time))
	}
	last := len(s.Time) - 1
	for i, y := range s.Output {
		near(t, "start", y[0], r.point.Output, 1e-12)
		near(t, "end", y[last], r.point.Output+r.spec.Step, 0.01)
		near(t, "input at the end", s.Input[i][last]-r.point.Input, r.spec.Step/r.truth.DC(), 0.1)
	}
	c, err := l.Sensitivity(m, rig, 20, 1)
	if err != nil {
		t.Fatal(err)
	}
	peak := 0.0
	for j := range c.Omega {
		peak = math.Max(peak, c.S[j])
		if !(c.SLo[j] <= c.S[j] && c.S[j] <= c.SHi[j] && c.InnerSLo[j] <= c.InnerSHi[j]) {
			t.Fatalf("range at %v", c.Omega[j])
		}
	}
	near(t, "peak", peak, l.Margins.PlantInput.PeakSensitivity, 0.01)
	near(t, "reference at low frequency", c.Reference[0], 1, 0.01)
}

// An unstable pole cancelled in series, 1 % off: partial fractions give the mode -0.005 e^t in the unit step response
// of (s - 1.01)/((s - 1)(s + 1)), which reaches 1 at t = ln 200.
func TestInexactCancellationInSeries(t *testing.T) {
	const period = 1e-3
	g, err := lti.ZOHTF(lti.TF{Num: lti.Poly{-1.01, 1}, Den: lti.Poly{-1, 0, 1}}, period)
	if err != nil {
		t.Fatal(err)
	}
	step := make([]float64, 10001)
	for i := range step {
		step[i] = 1
	}
	y := g.Filter(nil, step)
	mode := func(k int) float64 { return y[k] - 1.01 + 1.005*math.Exp(-float64(k)*period) }
	near(t, "t = 5", mode(5000), -0.742065795512883, 1e-6)
	near(t, "t = 10", mode(10000), -110.132328974034, 1e-6)
	near(t, "t = ln 200", mode(5298), -math.Exp(5.298-5.29831736654804), 1e-6)
}

// An actuator has the rig file's limits and the trips stay where they are, whatever a loops file says.
func TestVerifyKeepsTheRigsLimits(t *testing.T) {
	r := testRigs()[0]
	own := designed(t, r.name)
	rig := r.rig()
	rig.Limits.InputRate = 1e5
	verify := func(change func(*Loops)) (*Loops, error) {
		l := *own
		change(&l)
		return Verify(t.Context(), r.model(t), rig, &l, Options{Seed: 1, Plants: 700})
	}
	// The trip at 7 leaves 0.12 above 6.88, and the step wants 0.15.
	got, err := verify(func(l *Loops) { l.OperatingPoint.Output = 6.88 })
	var refused *ident.RefusedError
	if !errors.As(err, &refused) || got.Promise.Stable != 0 || got.Promise.Misses[0].What != missTrip {
		t.Errorf("step through the trip: %v, %+v", err, got.Promise)
	}
	got, err = verify(func(l *Loops) { l.OperatingPoint.Output = 6.6 })
	if err != nil || got.Verdict != Weak || len(got.Warnings) == 0 || !strings.Contains(got.Warnings[0], "work about input") {
		t.Fatalf("moved operating point: %v, %v, %q", err, got.Verdict, got.Warnings)
	}
	for _, b := range got.Bounds {
		if b.Name == BoundTrip && math.Abs(b.Value-0.4) > 1e-9 {
			t.Errorf("room to the trip %v, want 0.4", b.Value)
		}
	}
	if out := got.FirstClosure.Trip.Output; out == nil || out[0] < 3 || out[1] > 7 {
		t.Errorf("first closure trips at %v, the rig at [3, 7]", out)
	}
	wide, err := verify(func(l *Loops) { l.InputLimits, l.InputRate = &[2]float64{-50, 50}, 1e9 })
	if err != nil {
		t.Fatal(err)
	}
	if *wide.InputLimits != r.input || wide.InputRate != 1e5 || len(wide.Warnings) < 2 {
		t.Errorf("limits %v, rate %v, warnings %q", *wide.InputLimits, wide.InputRate, wide.Warnings)
	}
	for name, change := range map[string]func(*Loops){
		"output outside":     func(l *Loops) { l.OperatingPoint.Output = 7.5 },
		"input outside":      func(l *Loops) { l.OperatingPoint.Input = 3.5; l.InputLimits = &[2]float64{0, 5} },
		"nothing in common":  func(l *Loops) { l.InputLimits = &[2]float64{4, 5} },
		"point at the limit": func(l *Loops) { l.InputLimits = &[2]float64{1.2, 3} },
	} {
		if l, err := verify(change); err == nil || l != nil {
			t.Errorf("%s: %v", name, err)
		}
	}
}

// Loops that lose the plant are told why, not to take a longer log, and carry no figures that mean nothing.
func TestVerifySaysWhyThePlantIsLost(t *testing.T) {
	r := testRigs()[1]
	own := designed(t, r.name)
	for name, c := range map[string]struct {
		factor float64
		want   string
	}{"wrong sign": {-1, "wrong sign"}, "next to no gain": {1e-3, "do not hold even the nominal plant"}} {
		l := *own
		inner := Block{Discrete: Rational{slices.Clone(own.Inner.Discrete.Numerator), own.Inner.Discrete.Denominator}}
		for i := range inner.Discrete.Numerator {
			inner.Discrete.Numerator[i] *= c.factor
		}
		l.Inner = &inner
		got, err := Verify(t.Context(), r.model(t), r.rig(), &l, Options{Seed: 1, Plants: 60})
		var refused *ident.RefusedError
		if !errors.As(err, &refused) || !strings.Contains(refused.Do, c.want) || strings.Contains(refused.Do, "longer log") {
			t.Errorf("%s: %v", name, err)
		}
		if got.FirstClosure != nil || got.Forms != nil || got.InnerForm != "" {
			t.Errorf("%s: first closure %+v, forms %v %q", name, got.FirstClosure, got.Forms, got.InnerForm)
		}
		lost := false
		for _, w := range got.Warnings {
			lost = lost || strings.Contains(w, "it is lost")
			if strings.Contains(w, "overshoots") {
				t.Errorf("%s: %q", name, w)
			}
		}
		if !lost {
			t.Errorf("%s: %q", name, got.Warnings)
		}
	}
	// What the nominal plant misses, a surer model misses too.
	rig := r.rig()
	rig.Spec.Settling /= 3
	_, err := Verify(t.Context(), r.model(t), rig, own, Options{Seed: 1, Plants: 60})
	if err == nil || !strings.Contains(err.Error(), "a longer log will not help") {
		t.Errorf("%v", err)
	}
}

// A held input never passes its limits: the first closure's trip lies inside them, clear of noise and step.
func TestFirstClosureTrips(t *testing.T) {
	for _, r := range testRigs() {
		l := designed(t, r.name)
		in, sd := *l.FirstClosure.Trip.Input, l.FirstClosure.ExpectedSD.Input
		if !(r.input[0] < in[0] && in[1] < r.input[1]) {
			t.Errorf("%s: trips at %v, limits %v", r.name, in, r.input)
		}
		moved := 0.0
		for _, u := range r.step(t, r.truth, l.LTI(), 1).U {
			moved = math.Max(moved, math.Abs(u-r.point.Input))
		}
		if need := moved + 4*sd; in[0] > r.point.Input-need || in[1] < r.point.Input+need {
			t.Errorf("%s: trips at %v, step and noise take %v about %v", r.name, in, need, r.point.Input)
		}
		if !strings.Contains(l.Promise.Conditions, "noise") {
			t.Errorf("%s: conditions %q", r.name, l.Promise.Conditions)
		}
	}
}
