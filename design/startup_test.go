package design

import (
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/lti"
)

// withStopgap adds a stopgap law with less gain than the designed inner controller, and the rounding of a sensor.
func (r testRig) withStopgap(t *testing.T) *data.Rig {
	t.Helper()
	g, step := r.rig(), r.sensor/5
	inner := designed(t, r.name).Inner.Discrete
	g.Stopgap = &data.Stopgap{Numerator: slices.Clone(inner.Numerator), Denominator: inner.Denominator}
	for i := range g.Stopgap.Numerator {
		g.Stopgap.Numerator[i] *= 0.8
	}
	g.Limits.OutputResolution = &step
	return g
}

// A hand-over moves input and output by no more than noise does, on every kind of rig: the mean of 21 largest moves within
// the settling time after it is at most 1.25 times that of the settling time before, when the stopgap law ran, or of one
// long after. (Such a mean scatters by less than 8 % for moves of more than a few independent values; the figures are
// printed.)
func TestHandOverIsBumpless(t *testing.T) {
	for _, r := range testRigs() {
		law := designed(t, r.name).LTI()
		p, err := newProblem(r.model(t), r.withStopgap(t))
		if err != nil {
			t.Fatal(err)
		}
		h := p.tryHandOver(law, 1)
		if h == nil {
			t.Fatalf("%s: no hand-over", r.name)
		}
		t.Logf("%-12s input before %.3g, after %.3g, later %.3g, output %.3g, %.3g, %.3g", r.name, h.Before.Input, h.After.Input, h.Noise.Input, h.Before.Output, h.After.Output, h.Noise.Output)
		if h.After.Input > 1.25*math.Max(h.Before.Input, h.Noise.Input) || h.After.Output > 1.25*math.Max(h.Before.Output, h.Noise.Output) {
			t.Errorf("%s: %+v", r.name, h)
		}
	}
}

// The same where a steady force holds the rig off its operating point while the stopgap law runs, without noise: handed
// over by the rule, the input moves by no more than the outer integrator adds, and the output goes back to its reference; with
// v = 0 the input jumps, and closed as if from rest it jumps by far more.
func TestHandOverOffThePoint(t *testing.T) {
	r := testRigs()[1]
	l := designed(t, r.name)
	g := r.withStopgap(t)
	g.Limits.OutputResolution = nil
	p, err := newProblem(r.model(t), g)
	if err != nil {
		t.Fatal(err)
	}
	before, why := p.stopgap()
	if why != "" {
		t.Fatal(why)
	}
	run := p.handOver(before)
	run.Plant, run.Period, run.ComputeDelay, run.Law = r.truth, r.period, r.compute, l.LTI()
	run.HandOver *= 3 // the rig comes to rest under the stopgap law first
	at := run.HandOver
	run.Steps = 2 * at
	run.InputDisturbance = make([]float64, run.Steps)
	for k := range run.InputDisturbance {
		run.InputDisturbance[k] = 0.2
	}
	tr, err := run.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	run.FollowShare = 0 // v = 0
	still, err := run.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	off := tr.YTrue[at] - r.point.Output
	if tr.U[at] != tr.U[at-1] {
		t.Errorf("first input of the new law %v, last one of the old %v", tr.U[at], tr.U[at-1])
	}
	// A steady v goes on by the numerator of K2 at z = 1 times the error, through the first coefficient of K1: what the
	// integrator adds in a sample. What else moves the input is a v that the rule has not found.
	law := l.LTI()
	own := -law.Inner.Num[0] * law.Outer.Num.At(1) * off
	jump, without := tr.U[at+1]-tr.U[at]-own, still.U[at+1]-still.U[at]-own
	rest := law.Start().Step(r.point.Output, tr.Y[at]) - tr.U[at-1]
	t.Logf("off by %.3g; beside the integrator the input moves by %.3g, with v = 0 by %.3g, from rest by %.3g", off, jump, without, rest)
	if !(math.Abs(jump) < 0.01*math.Abs(without)) || math.Abs(without) > math.Abs(rest) || math.Abs(off) < 0.05 {
		t.Errorf("off by %.3g; beside the integrator the input moves by %.3g, with v = 0 by %.3g, from rest by %.3g", off, jump, without, rest)
	}
	most := 0.0
	for _, y := range tr.YTrue[at:] {
		most = math.Max(most, math.Abs(y-r.point.Output))
	}
	if end := math.Abs(tr.YTrue[len(tr.YTrue)-1] - r.point.Output); end > 0.02*math.Abs(off) || most > 1.1*math.Abs(off) {
		t.Errorf("output off by %v at the hand-over, at most %v after it, %v at the end", off, most, end)
	}
}

// What a wrong sign looks like, against runs of the simulator alone: without limits its output grows at the rate that
// is told, and the median time to the trip is that of other noise within its scatter.
func TestWrongSign(t *testing.T) {
	r := testRigs()[1]
	l := designed(t, r.name)
	var sign *Fault
	for i, f := range l.FirstClosure.Faults {
		if f.What == faultSign {
			sign = &l.FirstClosure.Faults[i]
		}
	}
	if sign == nil || sign.Stable || sign.Growth == nil || sign.ToTrip == nil || sign.ToStop == nil {
		t.Fatalf("%+v", l.FirstClosure.Faults)
	}
	law := l.LTI()
	law.Inner.Num = law.Inner.Num.Scale(-1)
	free := *law
	free.InputLimits, free.OuterLimits = [2]float64{}, [2]float64{}
	steps := int(12 * *sign.Growth / r.period)
	tr, err := lti.Run{Plant: r.truth, Period: r.period, ComputeDelay: r.compute, Law: &free, Steps: steps, OutputOffset: 1e-6}.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	half := steps / 2
	growth := float64(steps-1-half) * r.period / math.Log(tr.YTrue[steps-1]/tr.YTrue[half])
	near(t, "growth time", *sign.Growth, growth, 0.02)

	var times []float64
	for seed := range uint64(41) {
		rnd := rand.New(rand.NewPCG(seed, 77))
		noise, dist := make([]float64, 3000), make([]float64, 3000)
		for k := range noise {
			noise[k], dist[k] = r.sensor*rnd.NormFloat64(), r.disturbance*rnd.NormFloat64()
		}
		tr, err := lti.Run{Plant: r.truth, Period: r.period, ComputeDelay: r.compute, Law: law, Steps: 3000, Noise: noise, InputDisturbance: dist}.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		times = append(times, float64(outside(tr.Y, l.FirstClosure.Trip.Output))*r.period)
	}
	slices.Sort(times)
	// The median of 21 lies between these orders of 41 with a probability of more than 0.999 (hypergeometric).
	if m := *sign.ToTrip; m < times[8] || m > times[32] {
		t.Errorf("median %v s to the trip, other runs %v to %v", m, times[8], times[32])
	}
	if !(*sign.ToStop < *sign.ToTrip) {
		t.Errorf("stop after %v s, trip after %v", *sign.ToStop, *sign.ToTrip)
	}
}

// Columns a row off: the told ratios are those of simulations with a sample more of delay under the same noise.
func TestColumnsARowOff(t *testing.T) {
	r := testRigs()[1]
	l := designed(t, r.name)
	i := slices.IndexFunc(l.FirstClosure.Faults, func(f Fault) bool { return f.What == faultRow })
	if i < 0 || !l.FirstClosure.Faults[i].Stable {
		t.Fatalf("%+v", l.FirstClosure.Faults)
	}
	const n = 100000
	rnd := rand.New(rand.NewPCG(3, 3))
	noise, dist := make([]float64, n), make([]float64, n)
	for k := range noise {
		noise[k], dist[k] = r.sensor*rnd.NormFloat64(), r.disturbance*rnd.NormFloat64()
	}
	sd := func(late float64) SignalPair {
		g := r.truth
		g.Delay += late
		tr, err := lti.Run{Plant: g, Period: r.period, ComputeDelay: r.compute, Law: l.LTI(), Steps: n, Noise: noise, InputDisturbance: dist}.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		var s SignalPair
		for k := range n {
			s.Input += tr.U[k] * tr.U[k] / n
			s.Output += tr.Y[k] * tr.Y[k] / n
		}
		return SignalPair{math.Sqrt(s.Input), math.Sqrt(s.Output)}
	}
	own, late := sd(0), sd(r.period)
	got := l.FirstClosure.Faults[i].Moves
	// The same noise drives both, so their ratio scatters by less than a part in a hundred; the grid adds as much.
	near(t, "input", got.Input, late.Input/own.Input, 0.02)
	near(t, "output", got.Output, late.Output/own.Output, 0.02)
}

// Correct running at rest does not reach the stop levels: 20 hours of it do so with a probability of 2e-3 at most. And
// they are not far out: a tenth of the way less, on a level of about five deviations, is passed.
func TestStopLevels(t *testing.T) {
	r := testRigs()[1]
	l := designed(t, r.name)
	s := l.FirstClosure.Stop
	if s.Input == nil || s.Output == nil || s.Note != "" || s.Output[1]-r.point.Output >= l.Promise.Recoverable {
		t.Fatalf("%+v", s)
	}
	n := int(20 * 3600 / r.period)
	rnd := rand.New(rand.NewPCG(5, 5))
	noise, dist := make([]float64, n), make([]float64, n)
	for k := range noise {
		noise[k], dist[k] = r.sensor*rnd.NormFloat64(), r.disturbance*rnd.NormFloat64()
	}
	tr, err := lti.Run{Plant: r.truth, Period: r.period, ComputeDelay: r.compute, Law: l.LTI(), Steps: n, Noise: noise, InputDisturbance: dist}.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		name  string
		x     []float64
		level *[2]float64
		about float64
	}{{"input", tr.U, s.Input, r.point.Input}, {"output", tr.Y, s.Output, r.point.Output}} {
		if k := outside(c.x, c.level); k < n {
			t.Errorf("%s leaves %v after %v s of correct running", c.name, *c.level, float64(k)*r.period)
		}
		less := [2]float64{c.about + 0.6*(c.level[0]-c.about), c.about + 0.6*(c.level[1]-c.about)}
		if outside(c.x, &less) >= n {
			t.Errorf("%s does not leave %v in 20 hours either", c.name, less)
		}
	}
	// Where the rig trips before, there is no such level, and the closure says so.
	g := r.rig()
	g.Limits.Output = &[2]float64{r.point.Output + 0.9*(s.Output[0]-r.point.Output), r.point.Output + 6}
	p, err := newProblem(r.model(t), g)
	if err != nil {
		t.Fatal(err)
	}
	if s := p.stopLevels(l.LTI(), l.FirstClosure.ExpectedSD, l.Promise.Recoverable); s.Output != nil || !strings.Contains(s.Note, "the trips allow") {
		t.Errorf("%+v", s)
	}
}

// Input trips lie inside the limits of the input and on both sides of the operating point, by six deviations or, where
// these do not fit, as far as a fiftieth of the range allows: an input held within its limits never passes them.
func TestInputTrip(t *testing.T) {
	for _, r := range testRigs() {
		l := designed(t, r.name)
		p, err := newProblem(r.model(t), r.rig())
		if err != nil {
			t.Fatal(err)
		}
		near(t, r.name, l.FirstClosure.Trip.Input[1]-r.point.Input, r.point.Input-l.FirstClosure.Trip.Input[0], 1e-6)
		inset := (r.input[1] - r.input[0]) / 50
		for _, sd := range []float64{(r.input[1] - r.input[0]) / 9, 10 * (r.input[1] - r.input[0])} {
			got := p.inputTrip(l.LTI(), sd)
			want := [2]float64{r.point.Input + p.input[0], r.point.Input + p.input[1]}
			near(t, r.name+" low", got[0], want[0]+inset, 1e-9)
			near(t, r.name+" high", got[1], want[1]-inset, 1e-9)
		}
	}
	// An operating point within two fiftieths of a limit: half of what is left.
	r := testRigs()[1]
	g := r.rig()
	g.Limits.Input = &[2]float64{-0.2, 20}
	p, err := newProblem(r.model(t), g)
	if err != nil {
		t.Fatal(err)
	}
	if got := p.inputTrip(designed(t, r.name).LTI(), 10); got != [2]float64{-0.1, 20 - 20.2/50} {
		t.Errorf("near a limit: %v", got)
	}
}

// A stopgap law that ran at another period is not run, and without one the closure goes back to v = 0.
func TestNoStopgap(t *testing.T) {
	r := testRigs()[1]
	if h := designed(t, r.name).FirstClosure.HandOver; h != nil {
		t.Errorf("a hand-over from no law: %+v", h)
	}
	g := r.withStopgap(t)
	g.Log.ControllerPeriod = r.period / 2
	p, err := newProblem(r.model(t), g)
	if err != nil {
		t.Fatal(err)
	}
	if _, why := p.stopgap(); !strings.Contains(why, "the stopgap law ran every") {
		t.Errorf("%q", why)
	}
}
