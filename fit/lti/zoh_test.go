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
