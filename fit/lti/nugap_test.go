package lti

import (
	"math"
	"testing"
)

// Zhou & Doyle, Essentials of Robust Control, 1998, gap-metric chapter (first triple, published 0.02, 0.8988, 0.8941);
// Vinnicombe, IEEE Trans. Automatic Control 38 (1993) 1371-1383 and Uncertainty and Feedback, 2001 (winding condition);
// the rest from the definition.
func TestNuGap(t *testing.T) {
	first := func(k, a float64) TF { return TF{Num: Poly{k}, Den: Poly{-a, 1}} }
	p1, p2 := TF{Num: Poly{100}, Den: Poly{1, 2}}, TF{Num: Poly{100}, Den: Poly{-1, 2}}
	p3 := TF{Num: Poly{100}, Den: Poly{1, 2, 1}}
	pend := func(k, p2 float64) TF { return TF{Num: Poly{k}, Den: Poly{-p2, 0, 1}} }
	for _, c := range []struct {
		name    string
		a, b    TF
		gap, at float64 // at < 0: not checked
		tol     float64
	}{
		{"triple 1 2", p1, p2, 200.0 / 10001, 0, 1e-12},
		{"triple 1 3", p1, p3, 0.8987694230240, 19.5447, 1e-9},
		{"triple 2 3", p2, p3, 0.8941316271119, 19.8299, 1e-9},
		{"winding fails", first(0.5, 1), first(0.5, -1), 1, -1, 0},
		{"winding holds", first(2, 1), first(2, -1), 0.8, 0, 1e-12},
		{"on the edge", first(1, 1), first(1, -1), 1, -1, 1e-12},
		{"gain error", first(1, 1), first(1.2, 1), 1.0 / 11, math.Sqrt(0.2), 1e-12},
		{"pole error", first(1, 1), first(1, 1.2), 0.0905357460425185, 0, 1e-12},
		{"gain and pole error", first(3, 2), first(4, 2.5), 0.121048815735, 4.06179, 1e-9},
		{"pendulum", pend(9, 9), pend(10.89, 10.89), 0.039433568909, 3.74175, 1e-9},
		{"pole across the axis", first(1, 0.01), first(1, -0.01), 200.0 / 10001, 0, 1e-12},
		{"integrator", first(1, 0), first(1, -1), 1 / math.Sqrt2, 0, 1e-12},
		{"sign error", first(1, 1), first(-1, 1), 1, -1, 0},
		{"spring for gravity", pend(9, 9), TF{Num: Poly{9}, Den: Poly{9, 0, 1}}, 1, -1, 0},
		{"neglected actuator", first(1, 1), TF{Num: Poly{1}, Den: Poly{-1, 1}.Mul(Poly{1, 0.05})}, 0.046048094704, 5.91238, 1e-9},
	} {
		for _, swap := range []bool{false, true} {
			a, b := c.a, c.b
			if swap { // the distance is symmetric
				a, b = b, a
			}
			gap, at, err := NuGap(a, b)
			if err != nil {
				t.Fatal(err)
			}
			if !near(gap, c.gap, c.tol) {
				t.Errorf("%s (swapped %v): %.13g, want %.13g", c.name, swap, gap, c.gap)
			}
			if c.at >= 0 && !near(at, c.at, 2e-5*(1+c.at)) { // printed digits, flat top
				t.Errorf("%s (swapped %v): at %g, want %g", c.name, swap, at, c.at)
			}
			// The map s = (2/T)(z - 1)/(z + 1) leaves the distance as it is.
			const period = 0.05
			gap, at, err = SampledNuGap(Tustin(a, period), Tustin(b, period))
			if err != nil {
				t.Fatal(err)
			}
			if !near(gap, c.gap, math.Max(c.tol, 1e-11)) {
				t.Errorf("%s, sampled (swapped %v): %.13g, want %.13g", c.name, swap, gap, c.gap)
			}
			if mapped := 2 / period * math.Tan(at*period/2); c.at >= 0 && !near(mapped, c.at, 2e-5*(1+c.at)) {
				t.Errorf("%s, sampled (swapped %v): at %g, want %g", c.name, swap, mapped, c.at)
			}
		}
	}
}

// A hair of delay must not change the verdict of the winding condition, which is then found in another way.
func TestNuGapDelay(t *testing.T) {
	first := func(k, a float64) TF { return TF{Num: Poly{k}, Den: Poly{-a, 1}} }
	for _, c := range []struct {
		name string
		a, b TF
	}{
		{"holds", first(2, 1), first(2, -1)}, {"fails", first(0.5, 1), first(0.5, -1)}, {"integrator", first(1, 0), first(1, -1)},
		{"sign", first(1, 1), first(-1, 1)}, {"pole error", first(1, 1), first(1, 1.2)},
		{"spring", TF{Num: Poly{9}, Den: Poly{-9, 0, 1}}, TF{Num: Poly{9}, Den: Poly{9, 0, 1}}},
		{"two integrators", TF{Num: Poly{9}, Den: Poly{0, 0, 1}}, TF{Num: Poly{9}, Den: Poly{-1, 0, 1}}},
	} {
		want, _, err := NuGap(c.a, c.b)
		if err != nil {
			t.Fatal(err)
		}
		for _, swap := range []bool{false, true} {
			a, b := c.a, c.b
			b.Delay = 1e-7
			if swap {
				a, b = b, a
			}
			got, _, err := NuGap(a, b)
			if err != nil {
				t.Fatal(err)
			}
			if !near(got, want, 1e-5) {
				t.Errorf("%s (swapped %v): %g with a hair of delay, %g without", c.name, swap, got, want)
			}
		}
	}
	// A delay error alone, small: the chordal distance of the integrator at the frequency where |P| = 1 is about
	// |1 - e^{-j w tau}|/2 = sin(w tau/2), here with w = 1 the maximum of sin(w tau/2) 2 w/(1+w²).
	gap, _, err := NuGap(TF{Num: Poly{1}, Den: Poly{0, 1}}, TF{Num: Poly{1}, Den: Poly{0, 1}, Delay: 0.02})
	if err != nil {
		t.Fatal(err)
	}
	want := 0.0
	for w := 0.5; w < 200; w *= 1.0005 {
		want = math.Max(want, math.Abs(math.Sin(w*0.01))*2*w/(1+w*w))
	}
	if !near(gap, want, 1e-6) {
		t.Errorf("delay error: %.9g, want %.9g", gap, want)
	}
}

// An integrator against itself a sample later, T = 1: with a = 1 - z^-1 the distance is |a| |a|/(1 + |a|^2), 4/5 at pi.
func TestSampledNuGapDelay(t *testing.T) {
	p := DTF{Num: Poly{0, 1}, Den: Poly{1, -1}, Period: 1}
	late := DTF{Num: Poly{0, 0, 1}, Den: Poly{1, -1}, Period: 1}
	gap, at, err := SampledNuGap(p, late)
	if err != nil || !near(gap, 0.8, 1e-12) || !near(at, math.Pi, 1e-5) {
		t.Errorf("%.12g at %.6g, want 0.8 at pi (%v)", gap, at, err)
	}
	// Four samples later b2* b1 + |a|^2 is e^{4iw} + 2 - 2 cos w: 1 at w = 0, 1 - sqrt2 at pi/4, so it goes round 0.
	later := DTF{Num: Poly{0, 0, 0, 0, 0, 1}, Den: Poly{1, -1}, Period: 1}
	if gap, _, err := SampledNuGap(p, later); err != nil || gap != 1 {
		t.Errorf("four samples later: %.12g, %v", gap, err)
	}
}
