package lti

import (
	"math"
	"math/cmplx"
	"testing"

	"gonum.org/v1/gonum/mat"
)

// near fails for NaN too.
func near(got, want, tol float64) bool { return math.Abs(got-want) <= tol }

func wantMatrix(t *testing.T, got mat.Matrix, want [][]float64, tol float64) {
	t.Helper()
	for i, row := range want {
		for j, v := range row {
			if g := got.At(i, j); !near(g, v, tol*math.Max(1, math.Abs(v))) {
				t.Errorf("entry (%d,%d): got %.15g, want %.15g", i, j, g, v)
			}
		}
	}
}

func wantPoly(t *testing.T, name string, got, want Poly, tol float64) {
	t.Helper()
	if len(got) != len(want) {
		t.Fatalf("%s: got %v, want %v", name, got, want)
	}
	for i, v := range want {
		if !near(got[i], v, tol*math.Max(1, math.Abs(v))) {
			t.Errorf("%s[%d]: got %.16g, want %.16g", name, i, got[i], v)
		}
	}
}

// Zero-order-hold closed forms: Åström & Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, table 2.1; digits of
// the closed forms evaluated with mpmath.
func TestZOHClosedForms(t *testing.T) {
	for _, c := range []struct {
		name     string
		g        TF
		h        float64
		num, den Poly // powers of z^-1
	}{
		{"3/(s-2)", TF{Num: Poly{3}, Den: Poly{-2, 1}}, 0.1,
			Poly{0, 0.332104137240255}, Poly{1, -1.22140275816017}},
		{"1/(s+1)", TF{Num: Poly{1}, Den: Poly{1, 1}}, 0.5,
			Poly{0, 0.393469340287367}, Poly{1, -0.606530659712633}},
		{"1/s^2", TF{Num: Poly{1}, Den: Poly{0, 0, 1}}, 0.1,
			Poly{0, 0.005, 0.005}, Poly{1, -2, 1}},
		{"oscillator", TF{Num: Poly{9}, Den: Poly{9, 0, 1}}, 0.1,
			Poly{0, 0.0446635108743940, 0.0446635108743940}, Poly{1, -1.91067297825121, 1}},
		{"inverted pendulum", TF{Num: Poly{9}, Den: Poly{-9, 0, 1}}, 0.1,
			Poly{0, 0.0453385141288605, 0.0453385141288605}, Poly{1, -2.09067702825772, 1}},
		{"damped second order", TF{Num: Poly{4}, Den: Poly{4, 1.2, 1}}, 0.2,
			Poly{0, 0.0730012634923610, 0.0673620789405785}, Poly{1, -1.64626451863361, 0.786627861066553}},
		// Fractional delay, sec. 2.3.
		{"delay 0.3", TF{Num: Poly{1}, Den: Poly{1, 1}, Delay: 0.3}, 1,
			Poly{0, 0.503414696208591, 0.128705862619967}, Poly{1, -0.367879441171442}},
		{"unstable, delay 0.05", TF{Num: Poly{1}, Den: Poly{-1, 1}, Delay: 0.05}, 0.2,
			Poly{0, 0.161834242728283, 0.0595685154318867}, Poly{1, -1.22140275816017}},
		{"unstable, delay 2.25 periods", TF{Num: Poly{1}, Den: Poly{-1, 1}, Delay: 0.45}, 0.2,
			Poly{0, 0, 0, 0.161834242728283, 0.0595685154318867}, Poly{1, -1.22140275816017}},
		{"whole delay in rounding's reach, from below", TF{Num: Poly{1}, Den: Poly{1, 1}, Delay: 0.3}, 0.1, // 0.3/0.1 < 3
			Poly{0, 0, 0, 0, 1 - math.Exp(-0.1)}, Poly{1, -math.Exp(-0.1)}},
		{"whole delay in rounding's reach", TF{Num: Poly{1}, Den: Poly{1, 1}, Delay: 3 * 0.1}, 0.1,
			Poly{0, 0, 0, 0, 1 - math.Exp(-0.1)}, Poly{1, -math.Exp(-0.1)}},
	} {
		t.Run(c.name, func(t *testing.T) {
			const tol = 1e-14 // the printed digits
			g, err := ZOHTF(c.g, c.h)
			if err != nil {
				t.Fatal(err)
			}
			wantPoly(t, "num", g.Num, c.num, tol)
			wantPoly(t, "den", g.Den, c.den, tol)
			ss, err := ZOH(c.g, c.h)
			if err != nil {
				t.Fatal(err)
			}
			if n := max(len(c.num), len(c.den)) - 1; ss.Order() != n {
				t.Errorf("%d states, want %d", ss.Order(), n)
			}
			for _, w := range []float64{0.01, 0.3, 1, 2.5} {
				q := cmplx.Exp(complex(0, -w*c.h))
				want := c.num.Eval(q) / c.den.Eval(q)
				// The closed forms' printed digits are the limit, magnified by the smallest denominator.
				if got := ss.At(w); cmplx.Abs(got-want) > 1e-14*(1+cmplx.Abs(want)/cmplx.Abs(c.den.Eval(q))) {
					t.Errorf("response at %g: got %v, want %v", w, got, want)
				}
			}
		})
	}
}

// Fast sampling, p h near 1e-3, where discrete poles crowd at z = 1: 48/((s-3)(s+2)(s+8)) at h = 0.0005. Reference: the
// partial-fraction closed form evaluated with 60 digits.
func TestZOHFastSampling(t *testing.T) {
	const h = 0.0005
	g := TF{Num: Poly{48}, Den: FromRoots([]complex128{3, -2, -8})}
	ss, err := ZOH(g, h)
	if err != nil {
		t.Fatal(err)
	}
	response, err := ZOHResponse(g, h)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		w    float64
		want complex128
	}{
		{0.01, complex(-0.999976902962291457, 0.00291907756327773379)},
		{1, complex(-0.812252273847308114, 0.221741529226542744)},
		{10, complex(-0.0192388648968463134, 0.0294816921556634908)},
		{1000, complex(1.14302654455671243e-8, 4.61084491534388018e-8)},
		{6000, complex(2.53766844199093637e-10, 1.80586690471270861e-11)},
	} {
		// phi - I of order 1e-3 in a matrix of ones: 1e-13, and a few digits more where three poles act as one.
		for name, got := range map[string]complex128{"SS.At": ss.At(c.w), "ZOHResponse": response(c.w)} {
			if e := cmplx.Abs(got-c.want) / cmplx.Abs(c.want); !(e < 1e-12) {
				t.Errorf("%s at %g: got %v, want %v (%.1e)", name, c.w, got, c.want, e)
			}
		}
	}
	for i, want := range []complex128{-8, -2, 3} {
		if got := cmplx.Log(ss.Poles()[i]) / h; !(cmplx.Abs(got-want) < 1e-9) {
			t.Errorf("pole %d back in s: %v, want %v", i, got, want)
		}
	}
	d, err := ZOHTF(g, h)
	if err != nil {
		t.Fatal(err)
	}
	for i, want := range []float64{0, 9.99125786988837873e-10, 3.99300935326892511e-9, 9.97378845972077399e-10} {
		// h[k] are cubic, 1e-13; the sum with 1, -3, 3, -1 loses a digit.
		if !near(d.Num[i], want, 1e-12*math.Abs(want)) {
			t.Errorf("num[%d]: got %.17g, want %.17g", i, d.Num[i], want)
		}
	}
	wantPoly(t, "den", d.Den, Poly{1, -2.9965096147400774648, 2.9930157266109783751, -0.99650611786041489656}, 4e-16)
}

// Zeros of the sampled integrator chain (Åström, Hagander & Sternby, Zeros of sampled systems, Automatica 20 (1984)
// 31-38): z+1; z²+4z+1; z³+11z²+11z+1; z⁴+26z³+66z²+26z+1.
func TestSamplingZeros(t *testing.T) {
	for n, want := range map[int][]complex128{
		2: {-1}, 3: {-3.7320508075689, -0.26794919243112}, 4: {-9.8989794855664, -1, -0.10102051443364},
		5: {-23.203854477756, -2.3224738869404, -0.43057534709997, -0.043096288203265},
	} {
		den := make(Poly, n+1)
		den[n] = 1
		g, err := ZOHTF(TF{Num: Poly{1}, Den: den}, 0.01)
		if err != nil {
			t.Fatal(err)
		}
		wantPoles(t, g.Zeros(), want, 1e-9)
	}
}

func TestZOHRefuses(t *testing.T) {
	for name, f := range map[string]func() error{
		"period":   func() error { _, err := ZOH(TF{Num: Poly{1}, Den: Poly{1, 1}}, 0); return err },
		"delay":    func() error { _, err := ZOH(TF{Num: Poly{1}, Den: Poly{1, 1}, Delay: -1}, 1); return err },
		"improper": func() error { _, err := ZOH(TF{Num: Poly{0, 0, 1}, Den: Poly{1, 1}}, 1); return err },
		"NaN":      func() error { _, err := ZOH(TF{Num: Poly{math.NaN()}, Den: Poly{1, 1}}, 1); return err },
		"zero":     func() error { _, err := ZOH(TF{Num: Poly{1}, Den: Poly{0}}, 1); return err },
		"overflow": func() error { _, err := ZOH(TF{Num: Poly{1}, Den: Poly{-1e4, 1}}, 1); return err },
		"long":     func() error { _, err := ZOH(TF{Num: Poly{1}, Den: Poly{1, 1}, Delay: 1e9}, 1); return err },
	} {
		if f() == nil {
			t.Errorf("%s: no error", name)
		}
	}
}

// A biproper plant with a fractional delay answers at once with the delayed input, and the same in all three forms.
func TestZOHBiproper(t *testing.T) {
	g := TF{Num: Poly{4, 2}, Den: Poly{-1, 1}, Delay: 0.25} // 2 + 6/(s-1)
	const h = 0.1
	d, err := ZOHTF(g, h)
	if err != nil {
		t.Fatal(err)
	}
	// By hand: u[k] acts from 0.25 on, i.e. from 0.05 after sample 2: y[3] = 2 + 6 (e^{0.05} - 1).
	y := d.Filter(nil, []float64{1, 1, 1, 1, 1})
	want := []float64{0, 0, 0, 2 + 6*math.Expm1(0.05), 2 + 6*math.Expm1(0.15)}
	wantPoly(t, "step response", y, want, 1e-14)
	ss, err := ZOH(g, h)
	if err != nil {
		t.Fatal(err)
	}
	response, err := ZOHResponse(g, h)
	if err != nil {
		t.Fatal(err)
	}
	for _, w := range []float64{0.1, 3, 25} {
		if v := d.At(w); cmplx.Abs(ss.At(w)-v) > 1e-13*cmplx.Abs(v) || cmplx.Abs(response(w)-v) > 1e-13*cmplx.Abs(v) {
			t.Errorf("at %g: %v, %v, %v", w, v, ss.At(w), response(w))
		}
	}
}
