package ident

import (
	"bytes"
	"context"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"gonum.org/v1/gonum/stat"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/lti"
)

// On a log long enough for a normal likelihood the walk must give back its mean
// and covariance: an oracle that does not know the walk.
func TestDrawsAreNormalOnALongLog(t *testing.T) {
	r := rigNamed(t, "hover")
	r.Rows = 20000
	e, _ := experiment(t, r, 3)
	recs, period, err := records([]*data.Experiment{e})
	if err != nil {
		t.Fatal(err)
	}
	p, err := fit.NewPredictor(recs, period, maxDelaySamples*period)
	if err != nil {
		t.Fatal(err)
	}
	f, err := p.Fit(truth(t, r), finalTol, finalSteps)
	if err != nil {
		t.Fatal(err)
	}
	if err := p.Covariance(f); err != nil {
		t.Fatal(err)
	}
	const n = 1000
	draws, err := p.Sample(f, n, rand.New(rand.NewPCG(1, 1)))
	if err != nil {
		t.Fatal(err)
	}
	at := func(d *fit.Prediction, i int) float64 {
		if i <= f.Zeros {
			return d.Num[i]
		}
		return d.Den[f.Poles-(i-f.Zeros)]
	}
	for i := range f.Zeros + 1 + f.Poles {
		x := make([]float64, n)
		for k, d := range draws {
			x[k] = (at(d, i) - at(f, i)) / math.Sqrt(f.Cov.At(i, i))
		}
		mean, sd := stat.MeanStdDev(x, nil)
		// Draws are correlated over some ten of them: a hundred count.
		if math.Abs(mean) > 0.4 || sd < 0.75 || sd > 1.25 {
			t.Errorf("parameter %d: draws have mean %.2f and deviation %.2f in units of the normal ones", i, mean, sd)
		}
	}
}

// What a short log's model says of poles, what it stores, and what is drawn from
// that after writing and reading it agree.
func TestDrawsOfAShortLog(t *testing.T) {
	r := rigNamed(t, "reactor")
	r.Rows = 600
	e, rig := experiment(t, r, 5)
	m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{Seed: 9})
	if err != nil {
		t.Fatal(err)
	}
	if len(m.Plant.Draws) < drawn/2 {
		t.Fatalf("%d draws", len(m.Plant.Draws))
	}
	var b bytes.Buffer
	if err := m.Write(&b); err != nil {
		t.Fatal(err)
	}
	m, err = ReadModel(&b, "m.json")
	if err != nil {
		t.Fatal(err)
	}
	const n = 4000
	top := func(g lti.TF) float64 { // the unstable pole
		r := sorted(g.Den.Roots())
		return real(r[len(r)-1])
	}
	x := make([]float64, n)
	for k, g := range m.Draw(n, 1) {
		x[k] = top(g)
	}
	slices.Sort(x)
	p := m.Poles[len(m.Poles)-1]
	width := p.Re95.Hi - p.Re95.Lo
	if lo, hi := quantile(x, 0.025), quantile(x, 0.975); math.Abs(lo-p.Re95.Lo) > 0.1*width || math.Abs(hi-p.Re95.Hi) > 0.1*width {
		t.Errorf("plants drawn again have the unstable pole in %.4g to %.4g, the model says %.4g to %.4g", lo, hi, p.Re95.Lo, p.Re95.Hi)
	}
	// Twice, and with other numbers of workers, the same bits.
	again, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{Seed: 9, Workers: 1})
	if err != nil {
		t.Fatal(err)
	}
	for i, d := range again.Plant.Draws {
		if !slices.Equal(d.Denominator, m.Plant.Draws[i].Denominator) {
			t.Fatalf("draw %d differs with one worker", i)
		}
	}
}

// A plant drawn near stored ones keeps their mean and covariance.
func TestNearKeepsMeanAndCovariance(t *testing.T) {
	rnd := rand.New(rand.NewPCG(4, 4))
	m := &Model{Plant: Plant{Numerator: []float64{1}, Denominator: []float64{1, 0, 0}, Parameters: []string{"b0", "a1", "a2"}}}
	for range 500 {
		a := rnd.ExpFloat64() // far from normal
		m.Plant.Draws = append(m.Plant.Draws, DrawnPlant{[]float64{1e6 + 10*a + rnd.NormFloat64()}, []float64{1, a, -2 * a}, 0.25})
	}
	want := m.clouds()[0]
	got := newCloud(m.Draw(20000, 3), want.names)
	for i := range want.names {
		sd := math.Sqrt(want.cov[i][i])
		// Of 20 000 draws the mean has a hundredth of a deviation, the variance
		// of an exponential a fiftieth of itself.
		if math.Abs(got.mean[i]-want.mean[i]) > 0.04*sd+1e-12 || math.Abs(got.cov[i][i]-want.cov[i][i]) > 0.1*want.cov[i][i]+1e-12 {
			t.Errorf("%s: mean %.4g, variance %.4g, stored %.4g, %.4g", want.names[i], got.mean[i], got.cov[i][i], want.mean[i], want.cov[i][i])
		}
	}
	if got.cov[1][2] > -1.5*got.cov[1][1] {
		t.Errorf("covariance of a1 and a2 %.3g, want -2 times the variance %.3g", got.cov[1][2], got.cov[1][1])
	}
}
