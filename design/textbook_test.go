package design

import (
	"math"
	"testing"

	"steadyrig/fit/lti"
)

// What the proof measures on a step against what every control textbook says of
// w0^2/(s^2 + 2 z w0 s + w0^2): overshoot exp(-pi z/sqrt(1 - z^2)), 20 % at
// z = 0.456 (check value E01); and of a first-order loop: within 2 % after
// ln 50 = 3.912 time constants (check value E02; four is common practice).
// The hold acts as half a sample of delay, which takes w0 T/2 off the damping:
// with w0 T = 1e-3 the overshoot moves by less than 2e-3, and settling is known
// to a sample.
func TestProofMeasuresTextbookSteps(t *testing.T) {
	const period = 1e-3
	unity := lti.Gain(1, period)
	judge := func(g lti.TF, band, settling float64) outcome {
		rig := bareRig(period, 0, settling)
		rig.Spec.Band, rig.Spec.Overshoot = band, 0.9
		p, err := newProblem(bare(g, period), rig)
		if err != nil {
			t.Fatal(err)
		}
		law := lawLoops(unity).LTI()
		law.InputLimits = [2]float64{-100, 100}
		v := p.newProver(law)
		o, err := v.judge(g)
		if err != nil {
			t.Fatal(err)
		}
		return o
	}
	for _, c := range []struct{ z, overshoot float64 }{
		{0.4559498107691261, 0.20}, {0.6901067305598217, 0.05}, {0.5911550337988975, 0.10}, {0.5, 0.16303353482158},
	} {
		// L = 1/(s (s + 2 z)) under unity feedback.
		o := judge(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{0, 2 * c.z, 1}}, 0.02, 20)
		if !o.stable || math.Abs(o.overshoot-c.overshoot) > 2e-3 {
			t.Errorf("damping %.4g: overshoot %.5g, want %.5g (stable %v)", c.z, o.overshoot, c.overshoot, o.stable)
		}
	}
	// L = 1/s: one time constant of 1 s.
	if o := judge(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{0, 1}}, 0.02, 10); math.Abs(o.settling-math.Log(50)) > 5*period {
		t.Errorf("first order settles in %.5g s, want ln 50 = %.5g", o.settling, math.Log(50))
	}
}
