package ident

import (
	"math"
	"math/rand/v2"
	"testing"

	"steadyrig/data"
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
	r := m.Responses(300, 1)
	for k, w := range r.Omega {
		want := 40 / math.Hypot(w, 3) / math.Hypot(w, 8)
		if math.Abs(r.Gain[k]-want) > 1e-9*want {
			t.Fatalf("gain at %g rad/s is %g, want %g", w, r.Gain[k], want)
		}
		// (s - 3)(s + 8): the unstable factor turns from -180 to -90 and so takes back what the stable one loses.
		phase := -(180 - math.Atan(w/3)*180/math.Pi) - math.Atan(w/8)*180/math.Pi
		if d := math.Remainder(r.Phase[k]-phase, 360); math.Abs(d) > 1e-6 {
			t.Fatalf("phase at %g rad/s is %g, want %g", w, r.Phase[k], phase)
		}
		if !(r.GainLo[k] < r.Gain[k] && r.Gain[k] < r.GainHi[k]) {
			t.Fatalf("band [%g, %g] at %g rad/s does not hold the estimate %g", r.GainLo[k], r.GainHi[k], w, r.Gain[k])
		}
	}
	// b0 has a standard deviation of 1 at 40; at high frequency that is all: half width 1.96/40.
	top := len(r.Omega) - 1
	if half := (r.GainHi[top] - r.GainLo[top]) / 2 / r.Gain[top]; math.Abs(half-1.96/40) > 0.15*1.96/40 {
		t.Errorf("band at high frequency is ± %.3g of the gain, want 1.96/40 within 15 %% (300 draws)", half)
	}
}
