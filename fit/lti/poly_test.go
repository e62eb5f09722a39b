package lti

import (
	"math"
	"math/cmplx"
	"slices"
	"testing"
)

func TestPolyArithmetic(t *testing.T) {
	p, q := Poly{1, 2, 3}, Poly{-1, 1}
	wantPoly(t, "product", p.Mul(q), Poly{-1, -1, -1, 3}, 0)
	wantPoly(t, "sum", p.Add(q), Poly{0, 3, 3}, 0)
	wantPoly(t, "difference", p.Sub(q), Poly{2, 1, 3}, 0)
	wantPoly(t, "derivative", p.Deriv(), Poly{2, 6}, 0)
	wantPoly(t, "mirror", p.Mirror(), Poly{1, -2, 3}, 0)
	wantPoly(t, "shift", p.shift(2), Poly{17, 14, 3}, 0)
	if d := (Poly{0, 1, 0, 0}).Degree(); d != 1 {
		t.Errorf("degree %d, want 1", d)
	}
	if got := p.Eval(2i); got != complex(-11, 4) {
		t.Errorf("value at 2i: %v", got)
	}
}

func TestRoots(t *testing.T) {
	for _, c := range []struct {
		name string
		p    Poly
		want []complex128
		tol  float64
	}{
		{"linear", Poly{-3, 2}, []complex128{1.5}, 0},
		{"zero roots", Poly{0, 0, 6, -5, 1}, []complex128{0, 0, 2, 3}, 1e-15},
		{"quadratic that cancels", Poly{1, -1e8, 1}, []complex128{1e-8, 1e8}, 1e-16},
		{"quadratic that cancels on the left", Poly{1, 1e8, 1}, []complex128{-1e8, -1e-8}, 1e-16},
		{"pair", Poly{13, -4, 1}, []complex128{complex(2, -3), complex(2, 3)}, 1e-15},
		{"quartic", FromRoots([]complex128{complex(-1, 2), complex(-1, -2), 5, -7}),
			[]complex128{-7, complex(-1, -2), complex(-1, 2), 5}, 1e-13},
		// (x-1)^4 + 1e-12: all roots at distance 1e-3 = eps^(1/4) from 1 (Wilkinson, Rounding Errors in Algebraic
		// Processes, 1963); here the perturbed polynomial itself, about its centre.
		{"quadruple root about its centre", Poly{1e-12, 0, 0, 0, 1}, []complex128{complex(-1, -1) * complex(1e-3*math.Sqrt2/2, 0),
			complex(-1, 1) * complex(1e-3*math.Sqrt2/2, 0), complex(1, -1) * complex(1e-3*math.Sqrt2/2, 0),
			complex(1, 1) * complex(1e-3*math.Sqrt2/2, 0)}, 1e-16},
	} {
		t.Run(c.name, func(t *testing.T) {
			got := c.p.Roots()
			if len(got) != len(c.want) {
				t.Fatalf("got %v, want %v", got, c.want)
			}
			// Order among equal real parts is decided by rounding; match each wanted root.
			for _, w := range c.want {
				i := slices.IndexFunc(got, func(g complex128) bool { return cmplx.Abs(g-w) <= c.tol*math.Max(1, cmplx.Abs(w)) })
				if i < 0 {
					t.Fatalf("no root at %v among %v", w, got)
				}
				got = slices.Delete(got, i, i+1)
			}
		})
	}
}

func TestRootsConjugateAndSorted(t *testing.T) {
	r := FromRoots([]complex128{complex(-1, 2), complex(-1, -2), complex(0.5, 1e-3), complex(0.5, -1e-3), -40, 3}).Roots()
	for i, x := range r {
		if imag(x) != 0 && !slices.Contains(r, cmplx.Conj(x)) {
			t.Errorf("%v without its exact conjugate", x)
		}
		if i > 0 && real(x) < real(r[i-1]) {
			t.Errorf("not sorted: %v", r)
		}
	}
}

// Wilkinson's polynomial with the coefficient of x^19 changed by -2^-23 (Wilkinson, The perfidious polynomial, 1984).
// Companion eigenvalues in double carry errors up to 1.4e-3 there: the test holds that, no more.
func TestWilkinson(t *testing.T) {
	p := Poly{1}
	for k := 1; k <= 20; k++ {
		p = p.Mul(Poly{-float64(k), 1})
	}
	p[19] -= math.Ldexp(1, -23)
	r := p.Roots()
	for _, want := range []complex128{1, 2, 3, 4.000000000261, 4.999999927552, 6.000006943952, 6.999697233936, 8.00726760345,
		8.917250248517, 20.84690810148, complex(10.09526614513, 0.6435009038636), complex(16.73073746609, 2.81262489427),
		complex(19.50243940049, 1.940330346664)} {
		near := slices.ContainsFunc(r, func(x complex128) bool { return cmplx.Abs(x-want) < 2e-2 })
		if !near {
			t.Errorf("no root near %v", want)
		}
	}
}

// Golub & Van Loan, Matrix Computations, 3rd ed. 1996, sec. 11.3: coefficients; phases evaluated with mpmath.
func TestPade(t *testing.T) {
	wantPoly(t, "order 1", Pade(1, 1).Den, Poly{1, 0.5}, 1e-16)
	wantPoly(t, "order 2", Pade(1, 2).Den, Poly{1, 0.5, 1.0 / 12}, 1e-16)
	wantPoly(t, "order 3", Pade(1, 3).Den, Poly{1, 0.5, 0.1, 1.0 / 120}, 1e-16)
	wantPoly(t, "order 4", Pade(1, 4).Den, Poly{1, 0.5, 3.0 / 28, 1.0 / 84, 1.0 / 1680}, 1e-16)
	wantPoly(t, "numerator", Pade(2, 3).Num, Poly{1, -1, 0.4, -8.0 / 120}, 1e-16)
	for _, c := range []struct {
		n     int
		wt    float64
		phase float64
	}{
		{1, 0.5, -0.489957326253728}, {1, 1, -0.927295218001612}, {1, 2, -1.5707963267949},
		{2, 0.5, -0.499957242921645}, {2, 1, -0.99869344336026}, {2, 2, -1.96558744649466},
		{3, 0.5, -0.499999923246009}, {3, 1, -0.999990460039654}, {3, 2, -1.99891769392254},
	} {
		v := Pade(0.1, c.n).At(complex(0, c.wt/0.1))
		if !near(cmplx.Phase(v), c.phase, 1e-13) || !near(cmplx.Abs(v), 1, 1e-14) {
			t.Errorf("order %d at %g: %g rad, size %g; want %g rad", c.n, c.wt, cmplx.Phase(v), cmplx.Abs(v), c.phase)
		}
	}
}

// Division undone by multiplication, a dividend of lower degree included; integers, so exactly.
func TestDiv(t *testing.T) {
	for _, c := range []struct{ quo, q, rem Poly }{
		{Poly{2, -1, 3}, Poly{4, 0, 1}, Poly{5, -6}},
		{Poly{7}, Poly{-3, 1}, Poly{2}},
		{nil, Poly{1, 2, 3, 1}, Poly{4, 5, 6}},
		{Poly{1, 1}, Poly{1}, nil},
	} {
		quo, rem := c.quo.Mul(c.q).Add(c.rem).Div(c.q)
		if !slices.Equal(quo.Trim(), c.quo.Trim()) || len(rem) != len(c.q)-1 || !slices.Equal(rem, c.rem) {
			t.Errorf("by %v: quotient %v, remainder %v; want %v, %v", c.q, quo, rem, c.quo, c.rem)
		}
	}
}
