package ident

import (
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
)

// A damage makes outputs of a rig's run wrong as a bad sensor would: the law
// reads them and answers. It returns the signals of the run and which rows are
// wrong.
type damage func(t testing.TB, r demorig.Rig, seed uint64) (demorig.Signals, []int)

// run simulates r under s.
func run(t testing.TB, r demorig.Rig, s demorig.Signals) lti.Trace {
	t.Helper()
	trace, err := r.Simulate(s)
	if err != nil {
		t.Fatal(err)
	}
	if trace.Tripped >= 0 {
		t.Fatalf("%s trips in row %d", r.Name, trace.Tripped)
	}
	return trace
}

// spikes hits each row with the given probability, by 5 to 50 deviations of the
// sensor's noise, up or down.
func spikes(share float64) damage {
	return func(t testing.TB, r demorig.Rig, seed uint64) (demorig.Signals, []int) {
		s := r.Signals(r.Rows, seed)
		rnd := rand.New(rand.NewPCG(seed, 77))
		var hit []int
		for k := range s.Noise {
			if rnd.Float64() < share {
				s.Noise[k] += math.Copysign(5*math.Pow(10, rnd.Float64()), rnd.Float64()-0.5) * r.SensorNoise
				hit = append(hit, k)
			}
		}
		return s, hit
	}
}

// stuck holds the output for 5 to 20 rows, so many times in a log.
func stuck(times int) damage {
	return func(t testing.TB, r demorig.Rig, seed uint64) (demorig.Signals, []int) {
		s := r.Signals(r.Rows, seed)
		rnd := rand.New(rand.NewPCG(seed, 78))
		var hit []int
		for i := range times {
			from := (2*i+1)*r.Rows/(2*times) + rnd.IntN(r.Rows/(4*times))
			// The run up to a row does not depend on what the sensor shows later.
			head := demorig.Signals{Reference: s.Reference[:from+21], Dither: s.Dither[:from+21], Noise: s.Noise[:from+21], Disturbance: s.Disturbance[:from+21]}
			for k := from + 1; k < from+5+rnd.IntN(16); k++ {
				trace := run(t, r, head)
				s.Noise[k] = trace.Y[from] - trace.YTrue[k]
				hit = append(hit, k)
			}
		}
		return s, hit
	}
}

// damaged reads the log of a run with damage.
func damaged(t testing.TB, r demorig.Rig, seed uint64, d damage) (*data.Experiment, *data.Rig, []int) {
	t.Helper()
	s, hit := d(t, r, seed)
	e, rig, err := r.Read(s, run(t, r, s), seed)
	if err != nil {
		t.Fatal(err)
	}
	return e, rig, hit
}

// fitted fits the true structure to a log, starting from the truth, with or
// without looking for wrong outputs. Without, the log is cut where reading saw
// them.
func fitted(t testing.TB, r demorig.Rig, e *data.Experiment, look bool) (*Model, *searched) {
	t.Helper()
	whole := *e
	if !look {
		whole.Segments = e.Pieces()
	}
	recs, period, err := records([]*data.Experiment{&whole})
	if err != nil {
		t.Fatal(err)
	}
	at := truth(t, r)
	s := &searched{recs: recs}
	fitRecords := func() {
		if s.p, err = fit.NewPredictor(s.recs, period, math.Max(maxDelaySamples*period, at.Delay)); err != nil {
			t.Fatal(err)
		}
		f, err := s.p.Fit(at, finalTol, finalSteps)
		if err != nil {
			t.Fatal(err)
		}
		s.ranked = []*candidate{{fit: f}}
	}
	fitRecords()
	if look {
		s.leaveOut(s.look())
		fitRecords()
	}
	m := &Model{}
	if err := s.p.Covariance(s.ranked[0].fit); err != nil {
		t.Fatal(err)
	}
	m.describe(s.p, s.ranked[0].fit, &data.Rig{})
	return m, s
}

// poleScore is about the poles of one way of fitting, over logs.
type poleScore struct {
	logs, right int // number of poles
	of, in      int // poles with the right number, inside their interval
	squares     []float64
	crb         []float64
	worst       []float64 // deviations
}

// add scores the poles of m against the bound of the log clean.
func (c *poleScore) add(t testing.TB, r demorig.Rig, m *Model, clean *data.Experiment) {
	t.Helper()
	at, poles := r.Truth.Den.Roots(), m.Poles
	c.logs++
	limit := bound(t, clean, truth(t, r), m).Poles
	if c.squares == nil {
		c.squares, c.crb = make([]float64, len(at)), make([]float64, len(at))
	}
	for i, p := range at {
		c.squares[i] += math.Pow(poles[i].Re-real(p), 2)
		c.crb[i] += limit[i].ReSD * limit[i].ReSD
		if imag(p) < 0 {
			continue // a pair counts once
		}
		c.of++
		if poles[i].Re95.Contains(real(p)) && (imag(p) == 0 || poles[i].Im95.Contains(imag(p))) {
			c.in++
		}
	}
}

func (c *poleScore) String() string {
	s := fmt.Sprintf("%d of %d poles in their 95 %% intervals, error over bound", c.in, c.of)
	for i := range c.squares {
		s += fmt.Sprintf(" %.2f", math.Sqrt(c.squares[i]/c.crb[i]))
	}
	return s
}

// studiedLogs returns the number of logs a rig that STEADYRIG_STUDY asks for, or
// short, and the rigs, those of STEADYRIG_RIG or else all.
func studiedLogs(t testing.TB, short int) (int, []demorig.Rig) {
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		short, _ = strconv.Atoi(v)
	}
	if v := os.Getenv("STEADYRIG_RIG"); v != "" {
		return short, []demorig.Rig{rigNamed(t, v)}
	}
	return short, demorig.All()
}

// TestStudyOfWrongOutputs fits logs with wrong outputs, left out and left in, and
// compares with the bound of the same logs without damage.
func TestStudyOfWrongOutputs(t *testing.T) {
	if testing.Short() {
		t.Skip("fits a dozen logs")
	}
	logs, rigs := studiedLogs(t, 1)
	short := logs == 1
	for _, d := range []struct {
		name string
		make damage
	}{{"no damage", spikes(0)}, {"spikes, 0.1 % of the rows", spikes(0.001)}, {"spikes, 1 % of the rows", spikes(0.01)}, {"stuck 12 times", stuck(12)}} {
		var total poleScore
		for _, r := range rigs {
			if short {
				r.Rows = 1500
			}
			var out, in poleScore
			wrong, found, lost := 0, 0, 0
			for seed := uint64(500); seed < uint64(500+logs); seed++ {
				e, _, hit := damaged(t, r, seed, d.make)
				clean, _ := experiment(t, r, seed)
				m, s := fitted(t, r, e, true)
				out.add(t, r, m, clean)
				total.add(t, r, m, clean)
				m, _ = fitted(t, r, e, false)
				in.add(t, r, m, clean)
				wrong += len(hit)
				lost += len(s.recs[0].Missing)
				for _, k := range s.recs[0].Missing {
					if slices.Contains(hit, k) {
						found++
					}
				}
			}
			t.Logf("%-8s %-26s %d rows wrong, %d found, %d others left out; left out: %v; left in: %v", r.Name, d.name, wrong, found, lost-found, &out, &in)
		}
		// 3.3 deviations below 95 %: by chance once in two thousand. The kinds of
		// damage share their noise, so that each is held to that by itself.
		t.Logf("%s: %d of %d poles in their 95 %% intervals", d.name, total.in, total.of)
		if n := float64(total.of); float64(total.in) < 0.95*n-3.3*math.Sqrt(0.95*0.05*n) {
			t.Errorf("%s: %d of %d poles in their 95 %% intervals", d.name, total.in, total.of)
		}
	}
}

// The whole fit finds spikes and a stuck stretch, says which, and comes out
// sound.
func TestFitSaysWhatItLeftOut(t *testing.T) {
	if testing.Short() {
		t.Skip("fits a log")
	}
	r := rigNamed(t, "hover")
	r.Rows = 5000 // past the replays
	e, rig, hit := damaged(t, r, 31, func(t testing.TB, r demorig.Rig, seed uint64) (demorig.Signals, []int) {
		s, hit := spikes(0.005)(t, r, seed)
		trace := run(t, r, demorig.Signals{Reference: s.Reference[:1516], Dither: s.Dither[:1516], Noise: s.Noise[:1516], Disturbance: s.Disturbance[:1516]})
		// A cable that drops out: nine rows of one value.
		for k := 1500; k < 1509; k++ {
			s.Noise[k] = trace.Y[1490] + 0.3 - trace.YTrue[k]
		}
		for k := 1500; k < 1509; k++ {
			trace = run(t, r, demorig.Signals{Reference: s.Reference[:k+1], Dither: s.Dither[:k+1], Noise: s.Noise[:k+1], Disturbance: s.Disturbance[:k+1]})
			s.Noise[k] += trace.Y[1500] - trace.Y[k]
			if !slices.Contains(hit, k) {
				hit = append(hit, k)
			}
		}
		slices.Sort(hit)
		return s, hit
	})
	order, zeros := 3, 0
	rig.Model.Order, rig.Model.Zeros, rig.Model.Delay = &order, &zeros, &[2]float64{}
	m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
	if err != nil {
		t.Fatal(err)
	}
	rows, first := 0, math.MaxInt
	var why []string
	for _, l := range m.Evidence.LeftOut {
		rows, first, why = rows+l.Rows, min(first, l.Line), append(why, l.Why)
		if want := float64(l.Line-3) * r.Period; l.File != e.File || math.Abs(l.Time-want) > 1e-9 {
			t.Errorf("%+v: line %d is row %d at %g s", l, l.Line, l.Line-3, want)
		}
	}
	t.Logf("%d of %d rows wrong: %v, verdict %s %q", len(hit), r.Rows, m.Evidence.LeftOut, m.Verdict, m.Warnings)
	// Two lines stand above the rows.
	if first > hit[1]+3 || !slices.Contains(why, WhyStuck) || math.Abs(float64(rows-len(hit))) > 3+0.1*float64(len(hit)) {
		t.Errorf("%d rows wrong from row %d on; left out %v", len(hit), hit[0], m.Evidence.LeftOut)
	}
	if m.Verdict != Sound {
		t.Errorf("verdict %s %q", m.Verdict, m.Warnings)
	}
	for i, p := range r.Truth.Den.Roots() {
		if !m.Poles[i].Re95All.Contains(real(p)) {
			t.Errorf("pole %g is outside %v", real(p), m.Poles[i].Re95All)
		}
	}
}

// A model is weak where many outputs are wrong, and says so.
func TestManyWrongOutputsMakeAModelWeak(t *testing.T) {
	for rows, weak := range map[int]bool{0: false, 45: false, 60: true} {
		m := &Model{Poles: []Root{{Re: 1, Re95: Interval{0.9, 1.1}, Unstable: true, ProbabilityUnstable: 1}}}
		m.Evidence = Evidence{Memories: 100, Residuals: Residuals{Lags: 25, Whiteness: 0.5, CrossInput: 0.5, Linearity: 0.5}, LeftOut: []LeftOut{{Rows: rows}}}
		f := &fit.Prediction{Shape: fit.Shape{Poles: 1}, Rows: 1000 - rows, Period: 0.01, Converged: true}
		m.judge([]*candidate{{fit: f}}, Outside{Share: 0.3}, f)
		if said := len(m.Warnings) == 1 && strings.Contains(m.Warnings[0], "outputs are wrong"); said != weak || (m.Verdict == Weak) != weak {
			t.Errorf("%d of 1000 outputs left out: %s %q", rows, m.Verdict, m.Warnings)
		}
	}
}

// What a log without damage loses. Of a hundred logs, none loses an output with
// a probability of 1 - falseAlarm each; the test allows the number of logs that
// do to reach what happens by chance once in a thousand, from the binomial
// distribution with the 1 % that is promised: 1 of 10 (4e-3 for 2), 6 of 100,
// 12 of 500.
func TestCleanLogsLoseNothing(t *testing.T) {
	if testing.Short() {
		t.Skip("fits ten logs")
	}
	logs, rigs := studiedLogs(t, 2)
	lost, all := 0, 0
	for _, r := range rigs {
		if logs < 20 {
			r.Rows = 2000
		}
		for seed := uint64(7000); seed < uint64(7000+logs); seed++ {
			e, _ := experiment(t, r, seed)
			_, s := fitted(t, r, e, true)
			all++
			if len(s.wrong) > 0 {
				lost++
				t.Logf("%s, seed %d: %v", r.Name, seed, s.wrong)
			}
		}
	}
	t.Logf("%d of %d logs lost an output", lost, all)
	most := 0
	for n := float64(all); 1-(distuv.Binomial{N: n, P: 0.01}).CDF(float64(most)) > 1e-3; most++ {
	}
	if lost > max(1, most) {
		t.Errorf("%d of %d logs lost an output, want %d at the most", lost, all, max(1, most))
	}
}

// A saturated input that was logged after its limits is what acted, and makes no
// bias. Logged before, it is clipped to what acted, and the estimate is the same
// to the digits of the log; taken as it stands it is far off.
func TestSaturatedInput(t *testing.T) {
	r := rigNamed(t, "hover")
	r.InputLimits = [2]float64{1.2, 1.7} // a tenth of the rows at a limit
	const seed = 4
	s := r.Signals(r.Rows, seed)
	trace := run(t, r, s)
	asked := trace
	asked.U = unlimited(r, s, trace)
	at := 0
	for k, u := range trace.U {
		if u != asked.U[k] {
			at++
			if u != r.InputLimits[0] && u != r.InputLimits[1] {
				t.Fatalf("row %d: %g sent, %g asked", k, u, asked.U[k])
			}
		}
	}
	if share := float64(at) / float64(r.Rows); share < 0.03 || share > 0.4 {
		t.Fatalf("input at its limits in %.2g of the rows", share)
	}
	deviations := func(trace lti.Trace, wide bool) (*data.Experiment, float64, []float64) {
		given := r
		if wide {
			given.InputLimits = [2]float64{-10, 10}
		}
		e, rig, err := given.Read(s, trace, seed)
		if err != nil {
			t.Fatal(err)
		}
		if wide != (rig.Limits.Input[1] == 10) {
			t.Fatal("limits")
		}
		m, _ := fitted(t, r, e, true)
		worst := 0.0
		var poles []float64
		for i, p := range r.Truth.Den.Roots() {
			worst = math.Max(worst, math.Abs(m.Poles[i].Re-real(p))/m.Poles[i].ReSD)
			poles = append(poles, m.Poles[i].Re)
		}
		return e, worst, poles
	}
	_, worst, after := deviations(trace, false)
	// Three poles within 3.3 deviations: by chance outside once in three hundred.
	if worst > 3.3 {
		t.Errorf("logged after its limits: a pole is %.1f deviations off", worst)
	}
	e, _, before := deviations(asked, false)
	i := slices.IndexFunc(e.Flaws, func(f data.Flaw) bool { return f.Name == data.FlawBeyond })
	if i < 0 || e.Flaws[i].Count > at || !strings.Contains(e.Flaws[i].Effect, "clipped") {
		t.Fatalf("an input logged before its limits in %d rows is not told: %+v", at, e.Flaws)
	}
	for i := range after {
		if math.Abs(after[i]-before[i]) > 1e-3*math.Abs(after[i]) {
			t.Errorf("pole %.6g logged after the limits, %.6g before", after[i], before[i])
		}
	}
	m := newModel([]*data.Experiment{e}, &data.Rig{})
	if len(m.Warnings) != 1 || !strings.Contains(m.Warnings[0], "clipped") {
		t.Errorf("the model does not warn of it: %q", m.Warnings)
	}
	_, raw, _ := deviations(asked, true)
	t.Logf("%d rows at a limit; deviations: logged after %.2f, before and taken as it stands %.2f", at, worst, raw)
	if raw < 4 {
		t.Errorf("taken as it stands the input makes no bias (%.1f deviations): the test shows nothing", raw)
	}
}

// unlimited is the input that the law asked for, before its limits: its
// recursion takes what acted.
func unlimited(r demorig.Rig, s demorig.Signals, trace lti.Trace) []float64 {
	num, den := r.Stopgap.Num, r.Stopgap.Den
	out := make([]float64, len(trace.U))
	for k := range out {
		var v float64
		for i := 0; i < len(num) && i <= k; i++ {
			v += num[i] * (s.Reference[k-i] - trace.Y[k-i])
		}
		for i := 1; i < len(den) && i <= k; i++ {
			v -= den[i] * (trace.U[k-i] - s.Dither[k-i] - r.U0)
		}
		out[k] = r.U0 + v/den[0] + s.Dither[k]
		if math.Abs(out[k]-trace.U[k]) < 1e-9 {
			out[k] = trace.U[k]
		}
	}
	return out
}

// The audit of a log with spikes and the fit agree that the log is good.
func TestAuditOfSpikes(t *testing.T) {
	r := rigNamed(t, "hover")
	r.Rows = 3000
	e, rig, _ := damaged(t, r, 500, spikes(0.01))
	if len(e.Segments) != 1 || len(e.Segments[0].Wrong) < 5 {
		t.Fatalf("%d segments, wrong %v", len(e.Segments), e.Segments[0].Wrong)
	}
	a, err := Audit(context.Background(), []*data.Experiment{e}, rig)
	if err != nil {
		t.Fatal(err)
	}
	if a.Verdict != Sound || a.Informative == nil || a.Pairing.Rows != 0 || !a.Sign.Positive {
		t.Errorf("verdict %s, %+v, %+v, %s", a.Verdict, a.Sign, a.Pairing, a.NextStep)
	}
}
