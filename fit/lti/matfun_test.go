package lti

import (
	"errors"
	"math"
	"math/cmplx"
	"testing"

	"gonum.org/v1/gonum/mat"
)

func dense(rows ...[]float64) *mat.Dense {
	m := mat.NewDense(len(rows), len(rows[0]), nil)
	for i, r := range rows {
		m.SetRow(i, r)
	}
	return m
}

func TestExpm(t *testing.T) {
	for _, c := range []struct {
		name string
		a    *mat.Dense
		want [][]float64
		tol  float64 // relative to the largest entry
	}{
		// Moler & Van Loan, SIAM Review 20 (1978), 45 (2003): Taylor without scaling fails here.
		{"Moler & Van Loan", dense([]float64{-49, 24}, []float64{-64, 31}),
			[][]float64{{-0.735758758144753, 0.551819099658098}, {-1.47151759908826, 1.10363824071557}}, 1e-12},
		// Ward, SIAM J. Numer. Anal. 14 (1977) 600-610, tests 1 and 3; digits at 50 places.
		{"Ward 1", dense([]float64{4, 2, 0}, []float64{1, 4, 1}, []float64{1, 1, 4}),
			[][]float64{{147.866622446370, 183.765138646368, 71.7970323999965},
				{127.781085523182, 183.765138646368, 91.8825693231842},
				{127.781085523182, 163.679601723181, 111.968106246372}}, 1e-12},
		{"Ward 3", dense([]float64{-131, 19, 18}, []float64{-390, 56, 54}, []float64{-387, 57, 52}),
			[][]float64{{-1.50964415879609, 0.367879439110289, 0.135335281175459},
				{-5.6325707999026, 1.47151775850231, 0.406005843526377},
				{-4.93493832609811, 1.10363831733087, 0.54134112676299}}, 1e-10},
		// Kenney & Laub 1998; Al-Mohy & Higham, SIAM J. Matrix Anal. Appl. 31 (2009) 970-989: overscaling.
		{"overscaling", dense([]float64{1, 1e6}, []float64{0, -1}),
			[][]float64{{math.E, 1175201.1936438015}, {0, 1 / math.E}}, 1e-12},
		// Nilpotent (Moler & Van Loan 1978): exact.
		{"nilpotent", dense([]float64{0, 6, 0, 0}, []float64{0, 0, 6, 0}, []float64{0, 0, 0, 6}, []float64{0, 0, 0, 0}),
			[][]float64{{1, 6, 18, 36}, {0, 1, 6, 18}, {0, 0, 1, 6}, {0, 0, 0, 1}}, 0},
		// Phi of the oscillator and the inverted pendulum, w = 3, h = 0.1 (Åström & Wittenmark, table 2.1).
		{"oscillator", dense([]float64{0, 0.1}, []float64{-0.9, 0}),
			[][]float64{{0.955336489125606, 0.0985067355537799}, {-0.886560619984019, 0.955336489125606}}, 1e-14},
		{"pendulum", dense([]float64{0, 0.1}, []float64{0.9, 0}),
			[][]float64{{1.04533851412886, 0.101506764482381}, {0.913560880341428, 1.04533851412886}}, 1e-14},
	} {
		t.Run(c.name, func(t *testing.T) {
			got := Expm(c.a)
			for i, row := range c.want {
				for j, v := range row {
					if !near(got.At(i, j), v, c.tol*math.Max(math.Abs(v), 1)) {
						t.Errorf("(%d,%d): got %.16g, want %.16g", i, j, got.At(i, j), v)
					}
				}
			}
		})
	}
}

// A chain of integrators sampled 1000 times faster than anything happens keeps the small entries h^k/k! to full
// relative accuracy.
func TestExpmGraded(t *testing.T) {
	const h = 1e-4
	e := Expm(dense([]float64{0, h, 0, 0}, []float64{0, 0, h, 0}, []float64{0, 0, 0, h}, []float64{0, 0, 0, 0}))
	for j, want := range []float64{1, h, h * h / 2, h * h * h / 6} {
		if got := e.At(0, j); !near(got/want, 1, 1e-15) {
			t.Errorf("entry %d: %g, want %g", j, got, want)
		}
	}
}

// Higham, Functions of Matrices, SIAM 2008, ch. 11.
func TestLogm(t *testing.T) {
	const h = 0.1
	s, c := math.Sincos(1)
	for _, k := range []struct {
		name string
		a    *mat.Dense
		want [][]float64
	}{
		{"pendulum", dense([]float64{math.Cosh(0.3), math.Sinh(0.3) / 3}, []float64{3 * math.Sinh(0.3), math.Cosh(0.3)}),
			[][]float64{{0, h}, {9 * h, 0}}},
		{"rotation by 1 rad", dense([]float64{c, s}, []float64{-s, c}), [][]float64{{0, 1}, {-1, 0}}},
		{"double integrator", dense([]float64{1, h}, []float64{0, 1}), [][]float64{{0, h}, {0, 0}}},
		{"far from I", dense([]float64{math.Exp(5), 0}, []float64{0, math.Exp(-7)}), [][]float64{{5, 0}, {0, -7}}},
	} {
		t.Run(k.name, func(t *testing.T) {
			got, err := Logm(k.a)
			if err != nil {
				t.Fatal(err)
			}
			wantMatrix(t, got, k.want, 1e-13)
		})
	}
	ward := dense([]float64{4, 2, 0}, []float64{1, 4, 1}, []float64{1, 1, 4})
	got, err := Logm(Expm(ward))
	if err != nil {
		t.Fatal(err)
	}
	wantMatrix(t, got, [][]float64{{4, 2, 0}, {1, 4, 1}, {1, 1, 4}}, 1e-12)
	if _, err := Logm(dense([]float64{-0.5, 0}, []float64{0, 2})); !errors.Is(err, ErrNoLog) {
		t.Errorf("negative eigenvalue: error %v", err)
	}
	if _, err := Logm(dense([]float64{0, 1}, []float64{0, 2})); !errors.Is(err, ErrNoLog) {
		t.Errorf("zero eigenvalue: error %v", err)
	}
}

// There and back through the hold, unstable, multiple, undamped and delayed plants; the pole at 1.25 (Ts = 0.01) lies
// at ln(1.25)/0.01 (Culver, Proc. AMS 17 (1966) 1146-1151, on the existence of a real logarithm).
func TestInverseZOH(t *testing.T) {
	for _, c := range []struct {
		name string
		g    TF
		h    float64
		tol  float64 // what the coefficients of z^-1 can hold: eps/(p h)^n
	}{
		{"unstable", TF{Num: Poly{3}, Den: Poly{-2, 1}}, 0.1, 1e-13},
		{"pendulum with lag", TF{Num: Poly{60, 5}, Den: Poly{-180, -9, 20, 1}}, 0.05, 1e-10},
		{"double integrator", TF{Num: Poly{2}, Den: Poly{0, 0, 1}}, 0.1, 1e-11},
		{"undamped pair", TF{Num: Poly{1, 2}, Den: Poly{9, 0, 1}}, 0.1, 1e-12},
		{"two samples of delay", TF{Num: Poly{1}, Den: Poly{-1, 1}, Delay: 0.2}, 0.1, 1e-13},
		{"biproper", TF{Num: Poly{1, 2}, Den: Poly{3, 1}}, 0.1, 1e-13},
	} {
		t.Run(c.name, func(t *testing.T) {
			d, err := ZOHTF(c.g, c.h)
			if err != nil {
				t.Fatal(err)
			}
			got, err := InverseZOH(d)
			if err != nil {
				t.Fatal(err)
			}
			wantPoly(t, "den", got.Den, c.g.Den, c.tol)
			want := make(Poly, len(got.Num))
			copy(want, c.g.Num)
			wantPoly(t, "num", got.Num, want, c.tol)
			if !near(got.Delay, c.g.Delay, 1e-15) {
				t.Errorf("delay %g, want %g", got.Delay, c.g.Delay)
			}
		})
	}
	g, err := InverseZOH(DTF{Num: Poly{0, 0.5}, Den: Poly{1, -1.25}, Period: 0.01})
	if err != nil {
		t.Fatal(err)
	}
	if p := g.Poles()[0]; cmplx.Abs(p-22.3143551314210) > 1e-11 {
		t.Errorf("pole %v", p)
	}
	for _, d := range []DTF{
		{Num: Poly{0, 1}, Den: Poly{1, 0.5}, Period: 0.01},           // z = -0.5
		{Num: Poly{0, 1, 2, 3}, Den: Poly{1, -0.5}, Period: 0.01},    // z = 0, not a mere delay
		{Num: Poly{0, 1}, Den: Poly{1, 0.5, 0.0625}, Period: 0.01},   // z = -0.25 twice
		{Num: Poly{0, 1}, Den: Poly{1, -1.5, -1, 0.5}, Period: 0.01}, // mixed
	} {
		if _, err := InverseZOH(d); err == nil {
			t.Errorf("poles %v: no refusal", d.Poles())
		}
	}
}
