package published

import (
	"fmt"
	"math"
	"testing"

	"steadyrig/fit/lti"
)

// Rules of thumb that a practitioner expects to find true. They have no source; where there is an exact figure behind, the
// check holds that as well.
func TestPublishedPractice(t *testing.T) {
	s := open(t, "Common practice")
	const period = 1e-3
	// step is the output after a step of 1, the law in discrete form, without limits.
	step := func(plant lti.TF, law lti.Law, seconds float64) []float64 {
		n := int(seconds / period)
		run := lti.Run{Plant: plant, Period: period, Law: &law, Steps: n, Reference: make([]float64, n)}
		law.InputLimits = [2]float64{-1e300, 1e300}
		for i := range run.Reference {
			run.Reference[i] = 1
		}
		tr, err := run.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		return tr.YTrue
	}
	settled := func(y []float64, final float64) float64 { // within 2 % for good
		for k := len(y) - 1; k >= 0; k-- {
			if math.Abs(y[k]-final) > 0.02*math.Abs(final) {
				return float64(k+1) * period
			}
		}
		return 0
	}
	overshoot := func(y []float64, final float64) float64 {
		top := 0.0
		for _, v := range y {
			top = math.Max(top, v/final-1)
		}
		return top
	}
	gain := func(k float64) lti.Law { return lti.Law{Inner: lti.Gain(k, period)} }

	var v []value
	for _, sigma := range []float64{0.5, 1, 4} {
		ts := settled(step(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{0, 1}}, gain(sigma), 20/sigma), 1)
		// A sample, and half a one of hold, of 1/sigma.
		v = append(v, rel(fmt.Sprintf("pole %g rad/s, settling times sigma", -sigma), ts*sigma, 4, 0.03), abs("the same exactly, ln 50", ts*sigma, math.Log(50), 3*period*sigma))
	}
	s.check("E02", "2 % settling near 4 over the real part", "", practice, v...)

	// L = 1/(s (s + 2z)); the hold's half sample moves the overshoot by less than 2e-3.
	y := step(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{0, 2 * 0.456, 1}}, gain(1), 30)
	s.check("E01", "20 % overshoot at damping 0.456", "", practice, abs("overshoot", overshoot(y, 1), 0.20, 2e-3))

	// The plant 1/(s - 1) under 4 (s - z)/(s + 1), whose zero is to cancel the pole: the loop keeps a pole near 1 wherever
	// z lies, and the output leaves at its rate, whatever the length of the run.
	v = nil
	for _, z := range []float64{0.99, 1.01} {
		law := lti.Law{Inner: lti.Tustin(lti.TF{Num: lti.Poly{-4 * z, 4}, Den: lti.Poly{1, 1}}, period)}
		plant := lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-1, 1}}
		loops, err := lti.NewTwoLoops(plant, 0, &law)
		if err != nil {
			t.Fatal(err)
		}
		v = append(v, verdict(fmt.Sprintf("zero at %g: loop called stable", z), loops.Stable(), false))
		for _, seconds := range []float64{20, 40, 80} {
			y := step(plant, law, seconds)
			end := len(y) - 1
			rate := math.Log(math.Abs(y[end]/y[end-1000])) / (1000 * period)
			// The rightmost pole: s² + 4s - (1 + 4z) = 0 has sqrt(5 + 4z) - 2.
			v = append(v, rel(fmt.Sprintf("growth over the last second of %g s, rad/s", seconds), rate, math.Sqrt(5+4*z)-2, 0.01))
		}
	}
	s.check("E37", "a 1 % miss in cancelling an unstable pole diverges at any length", "", practice, v...)

	// 1/(s - 1) with an inner gain that puts its pole at -p, and the outer loop made for it, w (s + p)/(K s) of a closed loop
	// of w = 1 rad/s.
	v = nil
	var times []float64
	for _, p := range []float64{2, 4, 8, 16} {
		k := 1 + p
		outer := lti.Tustin(lti.TF{Num: lti.Poly{p, 1}, Den: lti.Poly{0, k}}, period)
		y := step(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-1, 1}}, lti.Law{Inner: lti.Gain(k, period), Outer: &outer}, 20)
		times = append(times, settled(y, 1))
		v = append(v, rel(fmt.Sprintf("inner pole at %g rad/s: settling, s", -p), times[len(times)-1], times[0], 0.01), abs("overshoot", overshoot(y, 1), 0, 2e-3))
	}
	s.check("", "the inner loop's pole barely matters to the final response", "", practice, v...)
}
