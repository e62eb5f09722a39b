package lti

import (
	"math"
	"testing"
)

// Glover & McFarlane, IEEE Trans. Automatic Control 34 (1989) 821-830; McFarlane & Glover, Robust Controller Design Using
// Normalized Coprime Factor Plant Descriptions, 1990. First-order plants and k/(s^2 - p2) in closed form, general ones by
// Hankel norms of the factors (check values E09 to E12). The map s = (2/T)(z - 1)/(z + 1) leaves the margin as it is,
// which tests the sampled form, direct feedthrough included.
func TestCoprimeMargin(t *testing.T) {
	first := func(b, a float64) (TF, float64) {
		return TF{Num: Poly{b}, Den: Poly{-a, 1}}, 1 / math.Sqrt(1+math.Pow((a+math.Hypot(a, b))/b, 2))
	}
	second := func(k, p2 float64) (TF, float64) {
		r := math.Hypot(p2, k)
		g := (p2 + r + math.Sqrt(2*r*(p2+r))) / k
		return TF{Num: Poly{k}, Den: Poly{-p2, 0, 1}}, 1 / math.Sqrt(1+g*g)
	}
	check := func(name string, g TF, want, tol float64) {
		t.Helper()
		got, err := CoprimeMargin(g.SS())
		if err != nil || !near(got, want, tol) {
			t.Errorf("%s: %.14g, want %.14g (%v)", name, got, want, err)
		}
		for _, period := range []float64{0.02, 0.4} {
			got, err := CoprimeMargin(Tustin(g, period).SS())
			if err != nil || !near(got, want, 10*tol) {
				t.Errorf("%s, sampled every %g s: %.14g, want %.14g (%v)", name, period, got, want, err)
			}
		}
	}
	for _, c := range []struct{ b, a, want float64 }{
		{1, 1, math.Sin(math.Pi / 8)}, {1, 0, math.Sqrt2 / 2}, {1, -1, math.Cos(math.Pi / 8)}, {10, 1, 0.6710053207609464},
		{0.5, 1, 0.2297529205473612}, {2, 3, 0.2897841486884301},
	} {
		g, formula := first(c.b, c.a)
		if !near(formula, c.want, 1e-15) {
			t.Fatalf("formula for %v: %.16g", c, formula)
		}
		check("first order", g, c.want, 1e-12)
	}
	for _, c := range []struct{ k, p2, want float64 }{
		{1, 0, 1 / math.Sqrt(4+2*math.Sqrt2)}, {100, 9, 0.3618573942986542}, {10, 20.601, 0.1127373949278141},
		// The unit-gain pendulum: sin(pi/16) whatever its pole.
		{1, 1, math.Sin(math.Pi / 16)}, {9, 9, math.Sin(math.Pi / 16)}, {44.28 * 44.28, 44.28 * 44.28, math.Sin(math.Pi / 16)},
	} {
		g, formula := second(c.k, c.p2)
		if !near(formula, c.want, 1e-14) {
			t.Fatalf("formula for %v: %.16g", c, formula)
		}
		check("k/(s^2 - p2)", g, c.want, 1e-11)
	}
	den := func(p ...Poly) Poly {
		r := Poly{1}
		for _, q := range p {
			r = r.Mul(q)
		}
		return r
	}
	for _, c := range []struct {
		name string
		g    TF
		want float64
	}{
		{"1/((s-1)(0.1s+1))", TF{Num: Poly{1}, Den: den(Poly{-1, 1}, Poly{1, 0.1})}, 0.34310473197032},
		{"(s-5)/((s-1)(s+10))", TF{Num: Poly{-5, 1}, Den: den(Poly{-1, 1}, Poly{10, 1})}, 0.16431688473728},
		{"1/(s(s-2)(s+1))", TF{Num: Poly{1}, Den: den(Poly{0, 1}, Poly{-2, 1}, Poly{1, 1})}, 0.0285618065793},
		{"(s+1)/(s^2-2s+2)", TF{Num: Poly{1, 1}, Den: Poly{2, -2, 1}}, 0.25463977571189},
		{"2/(s^2-s+1)", TF{Num: Poly{2}, Den: Poly{1, -1, 1}}, 0.2682491306268},
		{"1/(s^2-.2s+1)", TF{Num: Poly{1}, Den: Poly{1, -0.2, 1}}, 0.4699616224884},
	} {
		check(c.name, c.g, c.want, 1e-10)
	}
	if got, err := CoprimeMargin(Gain(3, 0.1).SS()); got != 1 || err != nil {
		t.Errorf("a gain: %v, %v", got, err)
	}
	// x1' = x1 + u is not seen.
	hidden := newSS([]float64{1, 0, 0, -1}, []float64{1, 1}, []float64{0, 1}, 0, 0)
	if got, err := CoprimeMargin(hidden); err == nil {
		t.Errorf("an unstable mode that the output does not show: %v", got)
	}
}

// The margin of a sampled plant with a delay cannot be more than without, and a whole sample is one more state.
func TestCoprimeMarginDelay(t *testing.T) {
	before := 1.0
	for _, delay := range []float64{0, 0.03, 0.1, 0.25, 1} {
		g := TF{Num: Poly{1}, Den: Poly{-1, 1}, Delay: delay}
		s, err := ZOH(g, 0.05)
		if err != nil {
			t.Fatal(err)
		}
		got, err := CoprimeMargin(s)
		if err != nil || !(got > 0 && got < before) {
			t.Errorf("delay %g: %v after %v (%v)", delay, got, before, err)
		}
		before = got
	}
}

// K = 1 + sqrt2 about 1/(s - 1) has the optimal margin at every frequency, K = 2 has 1/sqrt(10) (E13). Vinnicombe's
// inequality asin b(P2, C) >= asin b(P1, C) - asin nu-gap(P1, P2) is met with equality by 1/(s - 1.2) (E22). From b = 0.3
// follow a gain that may rise or fall by (1 + b)/(1 - b) and 2 asin b of phase (Glover, Vinnicombe & Papageorgiou, 39th
// IEEE CDC, 2000; E23): the margins of the first loop, 2.4 times lower and any gain more, hold more than that.
func TestFeedbackMargin(t *testing.T) {
	const period = 0.1
	first := func(a float64) DTF { return Tustin(TF{Num: Poly{1}, Den: Poly{-a, 1}}, period) }
	p1, p2 := first(1), first(1.2)
	best := Gain(1+math.Sqrt2, period)
	b1, _ := FeedbackMargin(p1, best)
	if !near(b1, 0.38268343236509, 1e-12) {
		t.Errorf("K = 1 + sqrt2: %.14g", b1)
	}
	if b, _ := FeedbackMargin(p1, Gain(2, period)); !near(b, 1/math.Sqrt(10), 1e-12) {
		t.Errorf("K = 2: %.14g", b)
	}
	gap, _, err := SampledNuGap(p1, p2)
	if err != nil || !near(gap, 0.0905357460425185, 1e-12) {
		t.Errorf("nu-gap %.14g, %v", gap, err)
	}
	b2, _ := FeedbackMargin(p2, best)
	if !near(b2, 0.297467707791, 1e-11) || !near(math.Asin(b2), math.Asin(b1)-math.Asin(gap), 1e-11) {
		t.Errorf("about the second plant %.14g, from the first %.14g", b2, math.Sin(math.Asin(b1)-math.Asin(gap)))
	}
	m := LoopMargins(func(w float64) complex128 { return p1.At(w) * best.At(w) }, 1e-3, math.Pi/period, 1)
	up, phase := (1+b1)/(1-b1), 2*math.Asin(b1)
	if !(m.GainUp >= up && m.GainDown <= 1/up && m.Phase >= phase) {
		t.Errorf("margins %+v, guaranteed a factor %.4g and %.4g rad", m, up, phase)
	}
}
