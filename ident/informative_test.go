package ident

import (
	"context"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/dsp/fourier"
	"gonum.org/v1/gonum/floats"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
	"steadyrig/fit/fittest"
)

// logged runs a rig under signals and returns its log, dither and reference
// with it where withSignals says so.
func logged(t testing.TB, r demorig.Rig, s demorig.Signals, withSignals bool) []*data.Experiment {
	t.Helper()
	trace, err := r.Simulate(s)
	if err != nil {
		t.Fatal(err)
	}
	seg := data.Segment{U: trace.U, Y: trace.Y}
	if withSignals {
		seg.R, seg.D = s.Reference, s.Dither
	}
	return []*data.Experiment{{Period: r.Period, Rows: len(trace.U), Used: len(trace.U), Segments: []data.Segment{seg}}}
}

// expected is what informative says of a log with the truth for a glance.
func expected(t testing.TB, exps []*data.Experiment, m *fit.Prediction) *Informative {
	t.Helper()
	recs, _, err := records(exps)
	if err != nil {
		t.Fatal(err)
	}
	inf := informative(recs, m, outside(exps).law)
	if inf == nil {
		t.Fatal("the truth's parameters are not told apart")
	}
	return inf
}

// rightmost is the Cramér-Rao deviation of the rightmost pole on a log.
func rightmost(t testing.TB, exps []*data.Experiment, m *fit.Prediction) float64 {
	t.Helper()
	b := bound(t, exps[0], m, &Model{}).Poles
	return b[len(b)-1].ReSD
}

// At the truth the prediction is the Cramér-Rao deviation, which bound computes in
// the time domain from the estimator's own derivatives. The two differ by how
// far products of probe and noise are from their mean of zero, some percent on
// these logs. Where the probe is not logged, a law of twelve lags does not foresee
// all that a long hold of the probe lets one foresee.
func TestExpectedDeviationIsTheBound(t *testing.T) {
	check := func(name string, exps []*data.Experiment, m *fit.Prediction, within float64) {
		t.Helper()
		inf := expected(t, exps, m)
		if ratio := inf.Pole.SD / rightmost(t, exps, m); !(math.Abs(math.Log(ratio)) < within) {
			t.Errorf("%s: deviation %.3g expected, %.3f of the bound", name, inf.Pole.SD, ratio)
		}
		power, information := 0.0, inf.Noise
		for i, b := range inf.Bands {
			power += b.Power
			information += b.Information
			if i > 0 && b.From != inf.Bands[i-1].To {
				t.Errorf("%s: band %d starts at %v, the one before ends at %v", name, i, b.From, inf.Bands[i-1].To)
			}
		}
		if math.Abs(power-1) > 1e-9 || math.Abs(information-1) > 1e-9 {
			t.Errorf("%s: shares add up to %v and %v", name, power, information)
		}
		if inf.Noise < 0 || inf.Noise > 0.03 {
			t.Errorf("%s: %v of it rests on the shape of the disturbance", name, inf.Noise)
		}
	}
	for _, r := range demorig.All() {
		s := r.Signals(r.Rows, 11)
		check(r.Name, logged(t, r, s, true), truth(t, r), 0.03)
		check(r.Name+", probe not logged", logged(t, r, s, false), truth(t, r), 0.1)
	}
	for _, r := range fittest.Rigs() {
		c := r.Truth()
		m := &fit.Prediction{
			Shape: fit.Shape{Poles: r.Plant.Den.Degree(), Zeros: r.Plant.Num.Degree()},
			Num:   r.Plant.Num, Den: r.Plant.Den, D: []float64{1}, C: c.C, Variance: c.Variance, Period: r.Period, Const: []float64{0},
		}
		u, y, d := r.RecordWithDither(4000, 11, 1)
		check(r.Name, []*data.Experiment{{Period: r.Period, Segments: []data.Segment{{U: u, Y: y, D: d}}}}, m, 0.06)
	}
}

// Four times the rows, or twice the probe, halve the deviation. That of a double
// pole goes with the root of the deviations of its factor's coefficients, and falls to a
// root of a half.
func TestExpectedDeviationScales(t *testing.T) {
	for _, r := range demorig.All() {
		m := truth(t, r)
		r.InputLimits = [2]float64{math.Inf(-1), math.Inf(1)} // so that the log is linear in the probe
		one := expected(t, logged(t, r, r.Signals(r.Rows, 5), true), m)
		long := expected(t, logged(t, r, r.Signals(4*r.Rows, 5), true), m)
		weak := r
		weak.Dither, weak.Step = r.Dither/2, r.Step/2
		half := expected(t, logged(t, weak, weak.Signals(r.Rows, 5), true), m)
		want := 0.5
		if r.Name == "slider" {
			want = math.Sqrt(0.5)
		}
		// Another stretch of the probe differs by some percent in power.
		if ratio := long.Pole.SD / one.Pole.SD; math.Abs(ratio-want) > 0.06*want {
			t.Errorf("%s: four times the rows give %.3f of the deviation", r.Name, ratio)
		}
		if ratio := one.Pole.SD / half.Pole.SD; math.Abs(ratio-want) > 0.03*want {
			t.Errorf("%s: twice the probe gives %.3f of the deviation", r.Name, ratio)
		}
		if ratio := long.Seconds / one.Seconds; math.Abs(ratio-4) > 0.02 {
			t.Errorf("%s: four times the rows give %v times the seconds", r.Name, ratio)
		}
	}
}

// The length that is asked for brings the interval that was promised for it.
func TestLengthForTenth(t *testing.T) {
	r := rigNamed(t, "hover")
	r.Dither /= 10
	m := truth(t, r)
	first := expected(t, logged(t, r, r.Signals(r.Rows/4, 5), true), m)
	rows := int(first.SecondsForTenth / r.Period)
	if first.Relative < 0.15 || rows < r.Rows/2 {
		t.Fatalf("%v in %v s is not what was to be tried", first.Relative, first.Seconds)
	}
	if then := expected(t, logged(t, r, r.Signals(rows, 6), true), m); math.Abs(then.Relative-0.1) > 0.01 {
		t.Errorf("%d rows bring half the interval to %.3f of the pole, not to a tenth", rows, then.Relative)
	}
}

// band returns n rows of noise between from and to, rad/s, of variance one.
func band(n int, period, from, to float64, seed uint64) []float64 {
	size := 1
	for size < n {
		size *= 2
	}
	fft := fourier.NewFFT(size)
	c := make([]complex128, size/2+1)
	rnd := rand.New(rand.NewPCG(seed, 2))
	for k := range c {
		w := 2 * math.Pi * float64(k) / (float64(size) * period)
		c[k] = 0
		if from < w && w < to {
			c[k] = complex(rnd.NormFloat64(), rnd.NormFloat64())
		}
	}
	x := fft.Sequence(nil, c)[:n]
	sd := math.Sqrt(about(x) / float64(n))
	for k := range x {
		x[k] /= sd
	}
	return x
}

// A probe far above or below where the pole is told, or steps of the reference
// too rare, lack power in a band, and that band is named: by the Cramér-Rao bound
// of logs in which power was really added, no other band gains clearly more with
// as much power as it may get, nor with the same power where that may be had.
func TestBandThatLacksPower(t *testing.T) {
	for _, c := range []struct {
		rig      string
		from, to float64 // of the dither, rad/s
		hold     int     // rows between steps of the reference
	}{{"hover", 500, 1000, 0}, {"hover", 5, 10, 0}, {"mast", 0, 0, 2000}, {"reactor", 0.3, 0.8, 0}, {"flap", 50, 100, 0}} {
		r := rigNamed(t, c.rig)
		m := truth(t, r)
		if c.hold > 0 {
			r.StepHold = c.hold
		}
		s := r.Signals(r.Rows, 3)
		if c.to > 0 {
			s.Dither = band(r.Rows, r.Period, c.from, c.to, 1)
			for k := range s.Dither {
				s.Dither[k] *= r.Dither
			}
		}
		e := logged(t, r, s, true)
		inf := expected(t, e, m)
		now := rightmost(t, e, m)
		if !inf.Lacking || !strings.Contains(inf.Advice, "lacks power") {
			t.Errorf("%v: nothing lacks power: %s", c, inf.Advice)
		}
		power, _ := fromOutside(t, r, s)
		// worth is by how much longer logs would do as well as one with so much more power in a band.
		worth := func(b Band, added float64) float64 {
			more, only := s, s
			only.Reference = make([]float64, r.Rows)
			for k := range only.Reference {
				only.Reference[k] = r.Y0
			}
			only.Dither = band(r.Rows, r.Period, b.From, b.To, 9)
			floats.Scale(0.01, only.Dither) // within the limits of the input
			input, output := fromOutside(t, r, only)
			size := math.Sqrt(added * power / input)
			// As much of the output as moves already, where that is why it is less.
			if ratio := size * size * output * float64(r.Rows) / about(e[0].Segments[0].Y); ratio > 1.3 || b.Added < 1 && added == b.Added && ratio < 0.7 {
				t.Errorf("%v: %.3g as much power between %s moves the output by %.3g of its variance", c, added, b.words(), ratio)
			}
			more.Dither = append([]float64(nil), s.Dither...)
			for k, d := range only.Dither {
				more.Dither[k] += size * d
			}
			return math.Pow(now/rightmost(t, logged(t, r, more, true), m), 2)
		}
		best := inf.Bands[inf.Best]
		named := worth(best, best.Added)
		// Where the pole may lie at zero its deviation does not go with the length as that of a simple pole does.
		if ratio := named / best.Worth; !inf.AtRest && math.Abs(math.Log(ratio)) > math.Log(1.5) {
			t.Errorf("%v: %s; in truth it is worth %.3g", c, inf.Advice, named)
		}
		for i, b := range inf.Bands {
			if i == 0 || i == inf.Best {
				continue
			}
			if w := worth(b, b.Added); w > 1.5*named {
				t.Errorf("%v: %s; %.3g as much between %s is worth %.3g, there %.3g", c, inf.Advice, b.Added, b.words(), w, named)
			} else if b.Added < best.Added {
				continue
			}
			if w := worth(b, best.Added); w > 1.1*named {
				t.Errorf("%v: %s; the same between %s is worth %.3g, there %.3g", c, inf.Advice, b.words(), w, named)
			}
		}
	}
}

// fromOutside are the variances of input and output in a run without noise.
func fromOutside(t testing.TB, r demorig.Rig, s demorig.Signals) (input, output float64) {
	t.Helper()
	r.Resolution = 0
	s.Noise, s.Disturbance = make([]float64, len(s.Dither)), make([]float64, len(s.Dither))
	trace, err := r.Simulate(s)
	if err != nil {
		t.Fatal(err)
	}
	n := float64(len(trace.U))
	return about(trace.U) / n, about(trace.Y) / n
}

// Before the fit the audit names the deviation that the fit then reports, and the
// Cramér-Rao deviation, but for what a glance differs from the truth. The double
// pole of slider has no regular bound. STEADYRIG_STUDY logs a rig, one in four
// of them fitted as well.
func TestExpectedIntervalOfAudits(t *testing.T) {
	if testing.Short() {
		t.Skip("audits five logs")
	}
	logs, rows := 1, 0
	study := os.Getenv("STEADYRIG_STUDY")
	if study != "" {
		logs, _ = strconv.Atoi(study)
	}
	if v := os.Getenv("STEADYRIG_ROWS"); v != "" {
		rows, _ = strconv.Atoi(v)
	}
	for _, r := range demorig.All() {
		if name := os.Getenv("STEADYRIG_RIG"); name != "" && name != r.Name {
			continue
		}
		if rows > 0 {
			r.Rows = rows
		}
		m := truth(t, r)
		var overBound, overFit []float64
		silent := 0
		for seed := uint64(1000); seed < 1000+uint64(logs); seed++ {
			e, rig := experiment(t, r, seed)
			exps := []*data.Experiment{e}
			a, err := Audit(context.Background(), exps, rig)
			if err != nil || a.Informative == nil {
				silent++
				continue
			}
			if r.Name != "slider" {
				overBound = append(overBound, a.Informative.Pole.SD/rightmost(t, exps, m))
			}
			if study == "" || seed%4 != 0 {
				continue
			}
			f, err := Fit(context.Background(), exps, rig, Options{})
			if err != nil {
				t.Fatal(err)
			}
			p := f.Poles[len(f.Poles)-1]
			overFit = append(overFit, a.Informative.Pole.SD/p.ReSD)
			if rows == 0 && (a.Verdict != f.Verdict || a.Informative.Lacking) {
				t.Errorf("%s, seed %d: the audit says %s, the fit %s; %s", r.Name, seed, a.Verdict, f.Verdict, a.Informative.Advice)
			}
		}
		for what, x := range map[string][]float64{"the bound": overBound, "the fit's": overFit} {
			if len(x) == 0 {
				continue
			}
			slices.Sort(x)
			t.Logf("%-8s %d rows, %d logs, %d silent: deviation expected over %s %.3f to %.3f, half of them above %.3f", r.Name, r.Rows, logs, silent, what, x[0], x[len(x)-1], x[len(x)/2])
			if rows == 0 && (x[0] < 1/1.5 || x[len(x)-1] > 1.5) {
				t.Errorf("%s: over %s beyond a factor of 1.5: %.3f", r.Name, what, x)
			}
		}
	}
}

// The audit of a log that tells the pole too vaguely is weak, and its next step
// says where to put the probe and how long a log would do; a probe that is
// hardly there leaves the telling to the disturbance, which is weak as well; that of a
// good log with too rare steps says where they lack. On such logs a glance may go
// astray, so that the audit is held against its own figures.
func TestAuditOnInformation(t *testing.T) {
	if testing.Short() {
		t.Skip("audits five logs")
	}
	audit := func(r demorig.Rig, seed uint64) *AuditReport {
		e, rig := experiment(t, r, seed)
		a, err := Audit(context.Background(), []*data.Experiment{e}, rig)
		if err != nil {
			t.Fatal(err)
		}
		if a.Informative == nil {
			t.Fatalf("%s, seed %d: nothing is said of information", r.Name, seed)
		}
		return a
	}
	r := rigNamed(t, "reactor")
	r.SensorNoise, r.Rows, r.DitherHold, r.Dither = 0.3, 600, 1, 2
	vague := 0
	for seed := uint64(1); seed <= 4; seed++ {
		a := audit(r, seed)
		if a.Memories < soundMemories {
			continue
		}
		limit := wide
		if a.Informative.Pole.Interval95.Contains(0) {
			limit = integratorSpan
		}
		switch weak := a.Informative.Relative > limit; {
		case weak:
			vague++
			if a.Verdict != Weak || !strings.Contains(a.NextStep, "rad/s") || !strings.Contains(a.NextStep, "times as long") {
				t.Errorf("seed %d: %s; %s: %s", seed, a.Informative.Words, a.Verdict, a.NextStep)
			}
		case a.Verdict != Sound && a.Informative.Noise < 0.5:
			t.Errorf("seed %d: %s; %s: %s", seed, a.Informative.Words, a.Verdict, a.NextStep)
		}
	}
	if vague == 0 {
		t.Error("no log is vague")
	}
	r = rigNamed(t, "mast")
	r.StepHold = 2000
	a := audit(r, 4)
	if a.Verdict != Sound || !a.Informative.Lacking || !strings.Contains(a.NextStep, a.Informative.NextTests[0].Words) || a.Informative.NextTests[0].What != "dither" {
		t.Errorf("rare steps: %s, %s", a.Verdict, a.NextStep)
	}
}
