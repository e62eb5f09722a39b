package ident

import (
	"context"
	"math"
	"testing"

	"steadyrig/data"
)

// Fitted by too small a structure, estimates of the sum of the poles scatter over
// logs as the sandwich says, not as the curvature does; a right structure keeps
// the curvature. The truth is not what they scatter about.
func TestSandwichIsTheScatterOfAWrongStructure(t *testing.T) {
	if testing.Short() {
		t.Skip("fits many logs")
	}
	r := rigNamed(t, "flap")
	r.Rows = 2500
	const logs = 40
	two, none := 2, 0
	var sum, sd [logs]float64
	if err := Each(context.Background(), logs, 0, func(i int) error {
		e, rig := experiment(t, r, 7000+uint64(i))
		rig.Model.Order, rig.Model.Zeros = &two, &none
		rig.Model.Delay = &[2]float64{0, 0}
		m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{Workers: 1})
		if err != nil {
			return err
		}
		k := len(m.Plant.Numerator) // a1, the sum of the poles, is regular wherever they lie
		sum[i], sd[i] = m.Plant.Denominator[1], math.Sqrt(m.Plant.Covariance[k][k])
		if m.Evidence.IntervalsBy != BySandwich {
			t.Errorf("log %d: intervals by %q where whiteness has %.2g, past inputs %.2g", i, m.Evidence.IntervalsBy, m.Evidence.Residuals.Whiteness, m.Evidence.Residuals.CrossInput)
		}
		if m.Verdict == Sound {
			t.Errorf("log %d is called sound", i)
		}
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	var mean, scatter, claim float64
	for i := range sum {
		mean += sum[i] / logs
		claim += sd[i] * sd[i] / logs
	}
	for i := range sum {
		scatter += (sum[i] - mean) * (sum[i] - mean) / (logs - 1)
	}
	ratio := scatter / claim
	t.Logf("mean %.3g rad/s, variance over claim %.2f", mean, ratio)
	// Chi-square with 39 degrees of freedom over 39: 0.50 to 1.72 in 998 of 1000.
	if !(ratio > 0.5 && ratio < 1.72) || math.IsNaN(ratio) {
		t.Errorf("variance of the estimates is %.2f of what the sandwich claims", ratio)
	}
}
