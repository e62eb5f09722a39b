package ident

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"os"
	"strconv"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
)

// known is a model of an unstable plant with coloured noise, its parts exact.
func known(t *testing.T) *Model {
	t.Helper()
	const period = 0.02
	g := lti.TF{Num: lti.Poly{40}, Den: lti.FromRoots([]complex128{3, -8})}
	sampled, err := lti.ZOHTF(g, period)
	if err != nil {
		t.Fatal(err)
	}
	return &Model{
		Schema: Schema, Verdict: Sound,
		Plant:          Plant{Numerator: []float64{40}, Denominator: reversed(g.Den), Parameters: []string{"b0", "a1"}, Covariance: [][]float64{{1, 0}, {0, 0.01}}},
		Noise:          Noise{Numerator: []float64{1, -1.2, 0.4}, Denominator: sampled.Den.Mul(lti.Poly{1, -0.7}), SD: 0.05, SamplePeriod: period},
		OperatingPoint: OperatingPoint{Input: 2, Output: 7},
		Poles:          []Root{{Re: -8}, {Re: 3, Unstable: true}},
	}
}

// The errors of the one-step prediction are the innovations that the log was made with: that is what the predictor
// of y = G u + H e is (Ljung, System Identification, 2nd ed., Prentice Hall 1999, sec. 3.2). The plant is unstable,
// so that a predictor which filters u by G diverges at once.
func TestOneStepGivesTheInnovationsBack(t *testing.T) {
	m := known(t)
	colour, err := m.Colour()
	if err != nil {
		t.Fatal(err)
	}
	if d := math.Abs(colour.Den[1] + 0.7); len(colour.Den) != 2 || d > 1e-10 {
		t.Fatalf("colour has denominator %v, want 1 - 0.7 z^-1", colour.Den)
	}
	const rows = 800
	rnd := rand.New(rand.NewPCG(1, 0))
	e, d := make([]float64, rows), make([]float64, rows)
	for k := range e {
		e[k], d[k] = 0.05*rnd.NormFloat64(), 0.3*float64(2*rnd.IntN(2)-1)
	}
	trace, err := lti.Run{
		Plant: m.TF(), Period: 0.02, Steps: rows, Dither: d, Innovations: e, Shape: &colour,
		Law: &lti.Law{Inner: lti.Tustin(lti.TF{Num: lti.Poly{2, 0.3}, Den: lti.Poly{1, 0.02}}, 0.02), U0: 2, Y0: 7},
	}.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	p, err := m.OneStep(data.Segment{U: trace.U, Y: trace.Y})
	if err != nil {
		t.Fatal(err)
	}
	var mean float64
	for _, v := range e[p.From:] {
		mean += v / float64(rows-p.From)
	}
	for k, got := range p.Error {
		row := p.From + k
		// The start from an unknown past has decayed by e^-8 of its size, near 1.
		if want := e[row] - mean; math.Abs(got-want) > 1e-3 {
			t.Fatalf("row %d: error %g, want the innovation %g", row, got, want)
		}
		if sum := p.Output[k] + p.Error[k]; math.Abs(sum-trace.Y[row]) > 1e-12 {
			t.Fatalf("row %d: prediction and error add up to %g, the log has %g", row, sum, trace.Y[row])
		}
	}
}

func TestResponsesOfKnownPlant(t *testing.T) {
	m := known(t)
	r := m.Responses(2000, 1)
	for k, w := range r.Omega {
		want := 40 / math.Hypot(w, 3) / math.Hypot(w, 8)
		if math.Abs(r.Gain.Value[k]-want) > 1e-9*want {
			t.Fatalf("gain at %g rad/s is %g, want %g", w, r.Gain.Value[k], want)
		}
		// (s - 3)(s + 8): the unstable factor turns from -180 to -90 and so takes back what the stable one loses.
		phase := -(180 - math.Atan(w/3)*180/math.Pi) - math.Atan(w/8)*180/math.Pi
		if d := math.Remainder(r.Phase.Value[k]-phase, 360); math.Abs(d) > 1e-6 {
			t.Fatalf("phase at %g rad/s is %g, want %g", w, r.Phase.Value[k], phase)
		}
		for _, b := range []Curve{r.Gain, r.Phase} {
			if !(b.Lo[k] < b.Value[k] && b.Value[k] < b.Hi[k]) {
				t.Fatalf("band [%g, %g] at %g rad/s does not hold the estimate %g", b.Lo[k], b.Hi[k], w, b.Value[k])
			}
		}
	}
	// At high frequency b0 is all that counts, with a standard deviation of 1 at 40; near 5 rad/s a1, of 0.1 beside
	// the unstable and the stable rate, moves the phase most. A band of two numbers at once lies between that of one,
	// 1.96 deviations, and that of their 95 % ellipse, sqrt(5.991).
	top := len(r.Omega) - 1
	if half := (r.Gain.Hi[top] - r.Gain.Lo[top]) / 2 / r.Gain.Value[top] * 40; half < 1.96 || half > math.Sqrt(5.991)*1.05 {
		t.Errorf("band at high frequency is ± %.3g deviations of the gain, want 1.96 to 2.45 (5 %% for the draws)", half)
	}
}

// inside reports whether the response of g lies in the band at all its
// frequencies, phases up to whole turns.
func (r *Responses) inside(g lti.TF) bool {
	for k, w := range r.Omega {
		h := g.At(complex(0, w))
		gain, phase := cmplx.Abs(h), cmplx.Phase(h)*180/math.Pi
		middle := (r.Phase.Lo[k] + r.Phase.Hi[k]) / 2
		phase += 360 * math.Round((middle-phase)/360)
		if gain < r.Gain.Lo[k] || gain > r.Gain.Hi[k] || phase < r.Phase.Lo[k] || phase > r.Phase.Hi[k] {
			return false
		}
	}
	return true
}

// likely fails where hits in n trials are fewer or more than a true share p
// gives but once in a thousand times to either side: the exact tails of the
// binomial distribution.
func likely(t *testing.T, what string, hits, n int, p float64) {
	t.Helper()
	b := distuv.Binomial{N: float64(n), P: p}
	if below, above := b.CDF(float64(hits)), 1-b.CDF(float64(hits)-1); below < 1e-3 || above < 1e-3 {
		t.Errorf("%s: %d of %d, where the share should be %.3g (probability %.2g)", what, hits, n, p, math.Min(below, above))
	}
}

// The band holds the truth at its level where estimates are normal about it
// with the covariance that the model states: those of each demo rig at the
// Cramér-Rao bound of its log, except that of the rigid body, whose low
// frequencies are not known from a normal distribution of its coefficients.
func TestJointBandOverNormalEstimates(t *testing.T) {
	if testing.Short() {
		t.Skip("draws a hundred bands")
	}
	estimates, draws := 20, 600
	if os.Getenv("STEADYRIG_STUDY") != "" {
		estimates, draws = 200, bandDraws
	}
	var in, all int
	for _, r := range demorig.All()[:4] {
		p, _, _ := predictorOf(t, r, 1)
		f := truth(t, r)
		if err := p.Covariance(f); err != nil {
			t.Fatal(err)
		}
		var at Model
		at.plant(f)
		hits := 0
		for _, g := range at.Draw(estimates, 5) {
			m := Model{Plant: at.Plant, Noise: Noise{SamplePeriod: r.Period}}
			m.Plant.Numerator, m.Plant.Denominator, m.Plant.Delay = reversed(g.Num), reversed(g.Den), g.Delay
			m.derive()
			if m.Responses(draws, 6).inside(r.Truth) {
				hits++
			}
		}
		t.Logf("%s: the truth is inside in %d of %d", r.Name, hits, estimates)
		in, all = in+hits, all+estimates
	}
	likely(t, "truth inside the joint band", in, all, Confidence)
}

// And on logs of the demo rigs, fitted from the truth so that structure and
// optimum are right.
func TestJointBandOverLogs(t *testing.T) {
	if testing.Short() {
		t.Skip("fits ten logs")
	}
	logs := 2
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		logs, _ = strconv.Atoi(v)
	}
	var in, all int
	for _, r := range demorig.All() {
		hits := 0
		for seed := range uint64(logs) {
			m := fitFromTruth(t, r, 6000+seed)
			if m.Responses(bandDraws, seed).inside(r.Truth) {
				hits++
			}
		}
		t.Logf("%s: the truth is inside in %d of %d", r.Name, hits, logs)
		in, all = in+hits, all+logs
	}
	likely(t, "truth inside the joint band", in, all, Confidence)
}

// predictorOf prepares a log of a rig for fits of its true structure.
func predictorOf(t testing.TB, r demorig.Rig, seed uint64) (*fit.Predictor, *data.Experiment, *data.Rig) {
	t.Helper()
	e, rig := experiment(t, r, seed)
	recs, period, err := records([]*data.Experiment{e})
	if err != nil {
		t.Fatal(err)
	}
	p, err := fit.NewPredictor(recs, period, math.Max(maxDelaySamples*period, r.Truth.Delay))
	if err != nil {
		t.Fatal(err)
	}
	return p, e, rig
}

// fitFromTruth fits a log of a rig in its true structure.
func fitFromTruth(t testing.TB, r demorig.Rig, seed uint64) *Model {
	t.Helper()
	p, e, rig := predictorOf(t, r, seed)
	f, err := p.Fit(truth(t, r), finalTol, finalSteps)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Covariance(f); err != nil {
		t.Fatal(err)
	}
	m := newModel([]*data.Experiment{e}, rig)
	m.describe(p, f, rig)
	return m
}
