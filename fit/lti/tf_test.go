package lti

import (
	"math"
	"math/cmplx"
	"testing"
)

func TestTFValues(t *testing.T) {
	g := TF{Num: Poly{2, 1}, Den: Poly{-3, 2, 1}, Delay: 0.2} // (s+2)/((s-1)(s+3))
	if got := g.DC(); got != -2.0/3 {
		t.Errorf("DC %g", got)
	}
	if got := g.RelDegree(); got != 1 {
		t.Errorf("relative degree %d", got)
	}
	s := complex(0, 2.0)
	if got, want := g.At(s), (s+2)/((s-1)*(s+3))*cmplx.Exp(-0.2*s); cmplx.Abs(got-want) > 1e-15 {
		t.Errorf("value %v, want %v", got, want)
	}
	if a, b := g.UnstablePoles(0), g.UnstablePoles(1.5); a != 1 || b != 0 {
		t.Errorf("%d unstable poles, %d beyond 1.5", a, b)
	}
	z := g.ZPK()
	if len(z.Zeros) != 1 || !near(real(z.Zeros[0]), -2, 1e-15) || !near(real(z.Poles[1]), 1, 1e-15) || z.Gain != 1 {
		t.Errorf("zpk %v", z)
	}
	back := z.TF()
	wantPoly(t, "num", back.Num, g.Num, 1e-14)
	wantPoly(t, "den", back.Den, g.Den, 1e-14)
	if !math.IsInf((TF{Num: Poly{1}, Den: Poly{0, 1}}).DC(), 1) {
		t.Error("DC of an integrator is finite")
	}
}

// Tustin 1947: 1/(s-2) at h = 0.1 is (1/18)(z+1)/(z-11/9). Prewarping: Franklin, Powell & Workman, Digital Control of
// Dynamic Systems: (2/h) tan(3 h/2) = 3.02270436116590.
func TestTustin(t *testing.T) {
	g := Tustin(TF{Num: Poly{1}, Den: Poly{-2, 1}}, 0.1)
	wantPoly(t, "num", g.Num, Poly{1.0 / 18, 1.0 / 18}, 1e-15)
	wantPoly(t, "den", g.Den, Poly{1, -11.0 / 9}, 1e-15)

	c := TF{Num: Poly{9, 0.3, 1}, Den: Poly{9, 3, 1}}
	p := Prewarped(c, 0.1, 3)
	if got, want := p.At(3), c.At(3i); cmplx.Abs(got-want) > 1e-13 {
		t.Errorf("prewarped at its frequency: %v, want %v", got, want)
	}
	// Plain Tustin has at w the value of c at the warped frequency.
	if got, want := Tustin(c, 0.1).At(3), c.At(complex(0, 3.02270436116590)); cmplx.Abs(got-want) > 1e-13 {
		t.Errorf("Tustin: %v, want %v", got, want)
	}
	if got := Tustin(TF{Num: Poly{1, 1}, Den: Poly{0, 1}}, 0.1).Poles(); cmplx.Abs(got[0]-1) > 1e-15 {
		t.Errorf("integrator's pole at %v", got)
	}
}

func TestDTF(t *testing.T) {
	// y[k] = 1.5 y[k-1] - 0.5 y[k-2] + x[k-1] + 2 x[k-3]: by hand 0 1 1.5 3.75 4.875 for a unit pulse.
	g := DTF{Num: Poly{0, 1, 0, 2}, Den: Poly{1, -1.5, 0.5}, Period: 0.1}
	wantPoly(t, "pulse response", g.Filter(nil, []float64{1, 0, 0, 0, 0}), Poly{0, 1, 1.5, 3.75, 4.875}, 0)
	if p := g.Poles(); len(p) != 3 || p[0] != 0 || cmplx.Abs(p[1]-0.5) > 1e-15 || cmplx.Abs(p[2]-1) > 1e-15 {
		t.Errorf("poles %v, want 0, 0.5, 1", p)
	}
	if z := g.Zeros(); len(z) != 2 || cmplx.Abs(z[1]-complex(0, math.Sqrt2)) > 1e-14 {
		t.Errorf("zeros %v, want ±1.414i", z)
	}
	x := []float64{1, -2, 3, 0.5}
	want := g.Filter(nil, x)
	wantPoly(t, "in place", g.Filter(x, x), want, 0)
	for _, w := range []float64{0.2, 3, 30} {
		z := cmplx.Exp(complex(0, w*0.1))
		v := (z*z + 2) / (z * (z - 1) * (z - 0.5))
		if got := g.At(w); cmplx.Abs(got-v) > 1e-13*cmplx.Abs(v) {
			t.Errorf("At(%g) = %v, want %v", w, got, v)
		}
		if got := g.SS().At(w); cmplx.Abs(got-v) > 1e-13*cmplx.Abs(v) {
			t.Errorf("SS.At(%g) = %v, want %v", w, got, v)
		}
	}
	back := g.SS().DTF()
	wantPoly(t, "den by way of SS", back.Den, Poly{1, -1.5, 0.5, 0}, 1e-14)
	wantPoly(t, "num by way of SS", back.Num, Poly{0, 1, 0, 2}, 1e-14)
}
