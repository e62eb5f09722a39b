package published

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"slices"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
	"steadyrig/ident"
)

func dense(rows ...[]float64) *mat.Dense {
	m := mat.NewDense(len(rows), len(rows[0]), nil)
	for i, r := range rows {
		m.SetRow(i, r)
	}
	return m
}

// entries compares a matrix, each entry relative to its own size or to 1, whichever is greater.
func entries(name string, got mat.Matrix, want [][]float64, tol float64) (v []value) {
	for i, row := range want {
		for j, x := range row {
			v = append(v, abs(fmt.Sprintf("%s (%d, %d)", name, i+1, j+1), got.At(i, j), x, tol*math.Max(1, math.Abs(x))))
		}
	}
	return v
}

func roots(name string, got, want []complex128, tol float64) (v []value) {
	if len(got) != len(want) {
		return []value{said(name+": how many", fmt.Sprint(len(got)), fmt.Sprint(len(want)))}
	}
	for i, w := range want {
		v = append(v, rel(fmt.Sprintf("%s %d, real", name, i+1), real(got[i]), real(w), tol))
		if imag(w) != 0 {
			v = append(v, rel("imaginary", imag(got[i]), imag(w), tol))
		}
	}
	return v
}

func TestPublishedSystems(t *testing.T) {
	s := open(t, "Systems")
	const table = "Åström & Wittenmark, Computer-Controlled Systems, 1997, table 2.1"
	zoh := func(g lti.TF, h float64) lti.DTF {
		d, err := lti.ZOHTF(g, h)
		if err != nil {
			t.Fatal(err)
		}
		return d
	}
	hold := func(id, what, source string, g lti.TF, h float64, num, den lti.Poly) {
		d := zoh(g, h)
		var v []value
		if len(d.Num) != len(num) || len(d.Den) != len(den) {
			t.Errorf("%s: %v over %v", what, d.Num, d.Den)
			return
		}
		for i, x := range num {
			if x != 0 {
				v = append(v, rel(fmt.Sprintf("numerator, z^-%d", i), d.Num[i], x, 1e-13))
			}
		}
		for i, x := range den[1:] {
			v = append(v, rel(fmt.Sprintf("denominator, z^-%d", i+1), d.Den[i+1], x, 1e-14))
		}
		s.check(id, what, source, closed, v...)
	}
	hold("D01", "hold, 3/(s-2), h 0.1", table, lti.TF{Num: lti.Poly{3}, Den: lti.Poly{-2, 1}}, 0.1, lti.Poly{0, 0.332104137240255}, lti.Poly{1, -1.22140275816017})
	hold("D01", "hold, 1/(s+1), h 0.5", table, lti.TF{Num: lti.Poly{1}, Den: lti.Poly{1, 1}}, 0.5, lti.Poly{0, 0.393469340287367}, lti.Poly{1, -0.606530659712633})
	hold("D02", "hold, 1/s², h 0.1", table, lti.TF{Num: lti.Poly{1}, Den: lti.Poly{0, 0, 1}}, 0.1, lti.Poly{0, 0.005, 0.005}, lti.Poly{1, -2, 1})
	hold("D03", "hold, 9/(s²+9), h 0.1", table, lti.TF{Num: lti.Poly{9}, Den: lti.Poly{9, 0, 1}}, 0.1, lti.Poly{0, 0.0446635108743940, 0.0446635108743940}, lti.Poly{1, -1.91067297825121, 1})
	hold("D04", "hold, 9/(s²-9), h 0.1", table, lti.TF{Num: lti.Poly{9}, Den: lti.Poly{-9, 0, 1}}, 0.1, lti.Poly{0, 0.0453385141288605, 0.0453385141288605}, lti.Poly{1, -2.09067702825772, 1})
	hold("D05", "hold, 4/(s²+1.2s+4), h 0.2", table, lti.TF{Num: lti.Poly{4}, Den: lti.Poly{4, 1.2, 1}}, 0.2, lti.Poly{0, 0.0730012634923610, 0.0673620789405785}, lti.Poly{1, -1.64626451863361, 0.786627861066553})
	hold("D08", "hold and delay 0.3, 1/(s+1), h 1", "Åström & Wittenmark 1997, sec. 2.3", lti.TF{Num: lti.Poly{1}, Den: lti.Poly{1, 1}, Delay: 0.3}, 1, lti.Poly{0, 0.503414696208591, 0.128705862619967}, lti.Poly{1, -0.367879441171442})
	hold("D08", "hold and delay 0.05, 1/(s-1), h 0.2", "Åström & Wittenmark 1997, sec. 2.3", lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-1, 1}, Delay: 0.05}, 0.2, lti.Poly{0, 0.161834242728283, 0.0595685154318867}, lti.Poly{1, -1.22140275816017})

	d := lti.Tustin(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-2, 1}}, 0.1)
	s.check("D06", "Tustin's transform of 1/(s-2), h 0.1", "Tustin 1947", closed, rel("gain", d.Num[0], 0.0555555555555556, 1e-13), rel("pole", -d.Den[1], 1.22222222222222, 1e-14))
	// Tustin's transform of c has at w the value of c at the warped frequency: 1/s gives it back.
	warped := 1 / lti.Tustin(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{0, 1}}, 0.1).At(3)
	s.check("D07", "prewarping, 3 rad/s at h 0.1", "Franklin, Powell & Workman, Digital Control of Dynamic Systems", closed, rel("warped frequency", imag(warped), 3.02270436116590, 1e-13))

	for _, c := range []struct {
		n    int
		want []complex128
	}{{2, []complex128{-1}}, {3, []complex128{-3.7320508075689, -0.26794919243112}}, {4, []complex128{-9.8989794855664, -1, -0.10102051443364}},
		{5, []complex128{-23.203854477756, -2.3224738869404, -0.43057534709997, -0.043096288203265}}} {
		den := make(lti.Poly, c.n+1)
		den[c.n] = 1
		s.check("D09", fmt.Sprintf("zeros of %d sampled integrators", c.n), "Åström, Hagander & Sternby, Automatica 20 (1984) 31-38", recomputed,
			roots("zero", zoh(lti.TF{Num: lti.Poly{1}, Den: den}, 0.01).Zeros(), c.want, 1e-10)...)
	}

	var coefs, phases []value
	for n, want := range map[int][]float64{1: {1. / 2}, 2: {1. / 2, 1. / 12}, 3: {1. / 2, 1. / 10, 1. / 120}, 4: {1. / 2, 3. / 28, 1. / 84, 1. / 1680}} {
		for k, x := range want {
			coefs = append(coefs, rel(fmt.Sprintf("order %d, coefficient %d", n, k+1), lti.Pade(1, n).Den[k+1], x, 1e-15))
		}
	}
	slices.SortFunc(coefs, func(a, b value) int { return cmp.Compare(a.what, b.what) })
	for _, c := range []struct {
		n         int
		wt, phase float64
	}{{1, 0.5, -0.489957326253728}, {1, 2, -1.5707963267949}, {2, 0.5, -0.499957242921645}, {2, 1, -0.99869344336026}, {3, 1, -0.999990460039654}, {3, 2, -1.99891769392254}} {
		x := lti.Pade(0.1, c.n).At(complex(0, c.wt/0.1))
		phases = append(phases, rel(fmt.Sprintf("order %d at %g, rad", c.n, c.wt), cmplx.Phase(x), c.phase, 1e-13), rel("size", cmplx.Abs(x), 1, 1e-14))
	}
	s.check("D10", "Padé coefficients", "Golub & Van Loan, Matrix Computations, 1996, sec. 11.3", closed, coefs...)
	s.check("D11", "Padé phases", "Golub & Van Loan 1996, sec. 11.3", closed, phases...)

	for _, c := range []struct {
		id, what, source, status string
		a                        *mat.Dense
		want                     [][]float64
		tol                      float64
	}{
		{"D12", "exponential of [-49 24; -64 31]", "Moler & Van Loan, SIAM Review 45 (2003) 3-49", closed, dense([]float64{-49, 24}, []float64{-64, 31}),
			[][]float64{{-0.735758758144753, 0.551819099658098}, {-1.47151759908826, 1.10363824071557}}, 1e-12},
		{"D13", "exponential, test 1", "Ward, SIAM J. Numer. Anal. 14 (1977) 600-610", recomputed, dense([]float64{4, 2, 0}, []float64{1, 4, 1}, []float64{1, 1, 4}),
			[][]float64{{147.866622446370, 183.765138646368, 71.7970323999965}, {127.781085523182, 183.765138646368, 91.8825693231842}, {127.781085523182, 163.679601723181, 111.968106246372}}, 1e-13},
		// Eigenvectors of condition 1e3 times entries of 4e2: 1e-10 is what double precision gives.
		{"D14", "exponential, test 3", "Ward 1977; his printed digits, from memory, are off by 2e-12", recomputed, dense([]float64{-131, 19, 18}, []float64{-390, 56, 54}, []float64{-387, 57, 52}),
			[][]float64{{-1.50964415879609, 0.367879439110289, 0.135335281175459}, {-5.6325707999026, 1.47151775850231, 0.406005843526377}, {-4.93493832609811, 1.10363831733087, 0.54134112676299}}, 1e-10},
		{"D15", "exponential that invites overscaling", "Al-Mohy & Higham, SIAM J. Matrix Anal. 31 (2009) 970-989", closed, dense([]float64{1, 1e6}, []float64{0, -1}),
			[][]float64{{math.E, 1175201.1936438015}, {0, 0.367879441171442}}, 1e-12},
		{"D16", "exponential, nilpotent", "Moler & Van Loan 2003", closed, dense([]float64{0, 6, 0, 0}, []float64{0, 0, 6, 0}, []float64{0, 0, 0, 6}, []float64{0, 0, 0, 0}), [][]float64{{1, 6, 18, 36}}, 0},
	} {
		s.check(c.id, c.what, c.source, c.status, entries("entry", lti.Expm(c.a), c.want, c.tol)...)
	}

	logm := func(a *mat.Dense) *mat.Dense {
		l, err := lti.Logm(a)
		if err != nil {
			t.Fatal(err)
		}
		return l
	}
	sin, cos := math.Sincos(1)
	logs := entries("pendulum", logm(dense([]float64{math.Cosh(0.3), math.Sinh(0.3) / 3}, []float64{3 * math.Sinh(0.3), math.Cosh(0.3)})), [][]float64{{0, 0.1}, {0.9, 0}}, 1e-14)
	logs = append(logs, entries("turn by 1 rad", logm(dense([]float64{cos, sin}, []float64{-sin, cos})), [][]float64{{0, 1}, {-1, 0}}, 1e-14)...)
	s.check("D17", "logarithms", "Higham, Functions of Matrices, 2008, ch. 11", closed,
		append(logs, entries("double integrator", logm(dense([]float64{1, 0.1}, []float64{0, 1})), [][]float64{{0, 0.1}, {0, 0}}, 1e-15)...)...)

	_, refusal := lti.InverseZOH(lti.DTF{Num: lti.Poly{0, 1}, Den: lti.Poly{1, 0.5}, Period: 0.01})
	back, err := lti.InverseZOH(lti.DTF{Num: lti.Poly{0, 0.5}, Den: lti.Poly{1, -1.25}, Period: 0.01})
	if err != nil {
		t.Fatal(err)
	}
	_, nolog := lti.Logm(dense([]float64{-0.5, 0}, []float64{0, 2}))
	s.check("D18", "poles without a continuous counterpart", "Higham 2008, sec. 1.4; Culver, Proc. AMS 17 (1966) 1146-1151", closed,
		verdict("z = -0.5 refused", refusal != nil, true), verdict("its logarithm refused", errors.Is(nolog, lti.ErrNoLog), true), rel("z = 1.25 at h 0.01, rad/s", real(back.Poles()[0]), 22.3143551314210, 1e-12))

	// In double precision a companion matrix's eigenvalues are off by up to 1.4e-3 here; the list's 1e-9 takes more digits.
	p := lti.Poly{1}
	for k := 1; k <= 20; k++ {
		p = p.Mul(lti.Poly{-float64(k), 1})
	}
	p[19] -= math.Ldexp(1, -23)
	var v []value
	for _, w := range []complex128{1, 2, 3, 4.000000000261, 4.999999927552, 6.000006943952, 6.999697233936, 8.00726760345, 8.917250248517, 20.84690810148,
		10.09526614513 + 0.6435009038636i, 11.79363388108 + 1.652329728161i, 13.99235813724 + 2.51883006963i, 16.73073746609 + 2.81262489427i, 19.50243940049 + 1.940330346664i} {
		near := slices.MinFunc(p.Roots(), func(a, b complex128) int { return cmp.Compare(cmplx.Abs(a-w), cmplx.Abs(b-w)) })
		v = append(v, abs(fmt.Sprintf("distance of the nearest root to %.12g", w), cmplx.Abs(near-w), 0, 2e-3))
	}
	s.check("D19", "Wilkinson's polynomial, x^19 changed by 2^-23", "Wilkinson, The perfidious polynomial, 1984", recomputed, v...)

	// The roots of x⁴ + 1e-12, about the centre, and of the same expanded about zero, where the constant term 1 + 1e-12 is
	// itself rounded to 1e-16, a ten thousandth of what moves the roots.
	v = nil
	for _, c := range []struct {
		name   string
		p      lti.Poly
		centre complex128
		tol    float64
	}{{"about the centre", lti.Poly{1e-12, 0, 0, 0, 1}, 0, 1e-12}, {"expanded", lti.Poly{1 + 1e-12, -4, 6, -4, 1}, 1, 1e-3}} {
		for i, x := range c.p.Roots() {
			v = append(v, rel(fmt.Sprintf("%s, distance of root %d", c.name, i+1), cmplx.Abs(x-c.centre), 1e-3, c.tol))
		}
	}
	s.check("D20", "quadruple root moved by 1e-12", "Wilkinson, Rounding Errors in Algebraic Processes, 1963", closed, v...)

	lyapunov := func(a, q *mat.Dense) *mat.SymDense {
		x, err := lti.Lyapunov(a, q)
		if err != nil {
			t.Fatal(err)
		}
		return x
	}
	const w, z = 2, 0.3
	companion := func(w, z float64) *mat.Dense { return dense([]float64{0, 1}, []float64{-w * w, -2 * z * w}) }
	x := lyapunov(companion(w, z), dense([]float64{0, 0}, []float64{0, w * w * w * w}))
	s.check("D34", "gramians and H2 norms", "Newton, Gould & Kaiser, Analytical Design of Linear Feedback Controls, 1957", closed,
		append(entries("gramian", x, [][]float64{{w / (4 * z), 0}, {0, w * w * w / (4 * z)}}, 1e-14), rel("norm, w 2, z 0.3", math.Sqrt(x.At(0, 0)), 1.290994448735806, 1e-14),
			rel("norm of 1/(s+2)", math.Sqrt(lyapunov(dense([]float64{-2}), dense([]float64{1})).At(0, 0)), 0.5, 1e-14))...)

	// Hankel singular values: roots of the eigenvalues of the product of both gramians.
	hankel := func(a, b, c *mat.Dense) []float64 {
		var bb, cc, prod mat.Dense
		bb.Mul(b, b.T())
		cc.Mul(c.T(), c)
		prod.Mul(lyapunov(a, &bb), lyapunov(mat.DenseCopyOf(a.T()), &cc))
		var eig mat.Eigen
		if !eig.Factorize(&prod, mat.EigenNone) {
			t.Fatal("no eigenvalues")
		}
		var h []float64
		for _, l := range eig.Values(nil) {
			h = append(h, math.Sqrt(real(l)))
		}
		slices.SortFunc(h, func(a, b float64) int { return cmp.Compare(b, a) })
		return h
	}
	v = nil
	for _, c := range []struct{ z, up, low float64 }{{1, 0.603553390593274, 0.103553390593274}, {.5, 0.809016994374947, 0.309016994374947}, {.1, 2.76246890528022, 2.26246890528022}} {
		h := hankel(companion(2, c.z), dense([]float64{0}, []float64{4}), dense([]float64{1, 0}))
		v = append(v, rel(fmt.Sprintf("damping %g, greater", c.z), h[0], c.up, 1e-13), rel("lesser", h[1], c.low, 1e-12))
	}
	s.check("D35", "Hankel singular values, second order", "Glover, Int. J. Control 39 (1984) 1115-1193", closed, v...)
	h := hankel(dense([]float64{-1, 0, 0}, []float64{0, -2, 0}, []float64{0, 0, -3}), dense([]float64{1}, []float64{1}, []float64{1}), dense([]float64{1, 1, 1}))
	s.check("D36", "Hankel singular values of three lags", "Glover 1984; Moore, IEEE Trans. Automatic Control 26 (1981) 17-32", recomputed,
		rel("first", h[0], 0.87511505930476864, 1e-13), rel("second", h[1], 0.040904948481866414, 1e-12), rel("third", h[2], 0.00064665888003161472, 1e-9))

	v = nil
	for _, c := range []struct{ z, want float64 }{{.1, 5.02518907629606}, {.2, 2.55155181539914}, {.3, 1.74714139453653}, {.5, 1.15470053837925}, {1e-4, 5000.000025}} {
		g := lti.TF{Num: lti.Poly{1}, Den: lti.Poly{1, 2 * c.z, 1}}
		top, at := lti.Peak(func(w float64) complex128 { return g.At(complex(0, w)) }, 1e-2, 137)
		v = append(v, rel(fmt.Sprintf("peak, damping %g", c.z), top, c.want, 1e-9), rel("at, rad/s", at, math.Sqrt(1-2*c.z*c.z), 1e-6))
	}
	s.check("D37", "greatest gain of a second-order lag", "textbooks; Bruinsma & Steinbuch, Systems & Control Letters 14 (1990) 287-293", closed, v...)

	const step = 0.05
	noise := func(a, q *mat.Dense) *mat.SymDense { _, c := lti.SampledNoise(a, q, step); return c }
	q2 := dense([]float64{0, 0}, []float64{0, 1})
	v = []value{rel("scalar pole 3", noise(dense([]float64{3}), dense([]float64{1})).At(0, 0), 0.0583098012626672, 1e-13)}
	pend := noise(dense([]float64{0, 1}, []float64{9, 0}), q2)
	chain := noise(dense([]float64{0, 1}, []float64{0, 0}), q2)
	s.check("D38", "noise gathered over a sample", "Van Loan, IEEE Trans. Automatic Control 23 (1978) 395-404", closed, append(v,
		rel("pendulum (1, 1)", pend.At(0, 0), 4.18545689550242e-5, 1e-13), rel("(1, 2)", pend.At(0, 1), 0.00125940317024612, 1e-13), rel("(2, 2)", pend.At(1, 1), 0.0503766911205952, 1e-13),
		rel("double integrator (1, 1)", chain.At(0, 0), step*step*step/3, 1e-14), rel("(1, 2)", chain.At(0, 1), step*step/2, 1e-14), rel("(2, 2)", chain.At(1, 1), step, 1e-14))...)

	x, k, err := lti.DARE(dense([]float64{1.25}), dense([]float64{1}), dense([]float64{1}), dense([]float64{1}))
	if err != nil {
		t.Fatal(err)
	}
	s.check("D39", "steady Kalman filter of an unstable pole", "algebra", closed,
		rel("variance", x.At(0, 0), 2.050246281515435, 1e-14), rel("gain", k.At(0, 0), 0.840197025212348, 1e-14), rel("pole of the error", 1.25-k.At(0, 0), 0.409802974787652, 1e-13))
}

// Poles of rigs by their physics: what a fitted pole is held against.
func TestPublishedPlants(t *testing.T) {
	s := open(t, "Plants and numbers")
	const g = 9.80665
	rightmost := func(den lti.Poly) float64 {
		p := lti.TF{Num: lti.Poly{1}, Den: den}.Poles()
		return real(p[len(p)-1])
	}
	s.check("F01", "point-mass pendulum of 0.5 m", "mechanics", closed, rel("pole, rad/s", rightmost(lti.Poly{-g / 0.5, 0, 1}), 4.428690551393267, 1e-14))
	s.check("F02", "rod of 1 m on a pivot", "mechanics", closed, rel("pole, rad/s", rightmost(lti.Poly{-1.5 * g, 0, 1}), 3.835358523006682, 1e-14))
	s.check("F03", "cart with a point mass", "Ogata, Modern Control Engineering", closed, rel("pole, rad/s", rightmost(lti.Poly{-2.1 * 9.81 / (2 * 0.5), 0, 1}), 4.538832448989498, 1e-14))
	const i = 0.2 * 0.3 * 0.3 / 3
	s.check("F04", "cart with a rod", "mechanics", closed, rel("pole, rad/s", rightmost(lti.Poly{-1.2 * 0.2 * g * 0.3 / (i*1.2 + 0.2*0.3*0.3), 0, 1}), 5.293297648914144, 1e-14))
	s.check("F05", "levitated body, gap 10 and 5 mm", "Woodson & Melcher, Electromechanical Dynamics, 1968", closed,
		rel("pole at 10 mm, rad/s", rightmost(lti.Poly{-2 * g / 0.010, 0, 1}), 44.28690551393267, 1e-14), rel("at 5 mm", rightmost(lti.Poly{-2 * g / 0.005, 0, 1}), 62.63114241333939, 1e-14))

	// A stirred tank with a first-order exothermic reaction: c' = q (cf - c) - r c, T' = q (Tf - T) + heat r c + cool (Tc - T),
	// r = k0 e^(-er/T). A steady state is where the second vanishes with c = cf q/(q + r).
	type tank struct{ q, cf, tf, k0, er, heat, cool, tc float64 }
	poles := func(k tank, lo, hi float64) (float64, []complex128) {
		rate := func(T float64) (r, c float64) { r = k.k0 * math.Exp(-k.er/T); return r, k.cf * k.q / (k.q + r) }
		balance := func(T float64) float64 { r, c := rate(T); return k.q*(k.tf-T) + k.heat*r*c + k.cool*(k.tc-T) }
		for range 200 {
			if mid := (lo + hi) / 2; (balance(mid) > 0) == (balance(lo) > 0) {
				lo = mid
			} else {
				hi = mid
			}
		}
		r, c := rate(lo)
		slope := r * k.er / (lo * lo) * c
		a := dense([]float64{-k.q - r, -slope}, []float64{k.heat * r, -k.q + k.heat*slope - k.cool})
		return lo, lti.SS{A: a}.Poles()
	}
	for _, c := range []struct {
		id, what, source, status string
		tank
		lo, hi, temp float64
		want         []complex128
	}{
		{"F06", "exothermic tank, lower state, per minute", "Seborg, Edgar & Mellichamp, Process Dynamics and Control", recomputed, tank{1, 1, 350, 7.2e10, 8750, 5e4 / 239, 5e4 / 23900, 300}, 315, 335, 324.4754434316, []complex128{-1.0489046964 - 0.538824962574i, -1.0489046964 + 0.538824962574i}},
		{"F06", "exothermic tank, middle state", "ditto", recomputed, tank{1, 1, 350, 7.2e10, 8750, 5e4 / 239, 5e4 / 23900, 300}, 340, 360, 350.00552869021, []complex128{-0.454227367628, 2.83444312953}},
		{"F06", "exothermic tank, upper state", "ditto", recomputed, tank{1, 1, 350, 7.2e10, 8750, 5e4 / 239, 5e4 / 23900, 300}, 362, 380, 369.70491342256, []complex128{1.35732577852 - 1.5402000144i, 1.35732577852 + 1.5402000144i}},
		{"F07", "second tank, lower state, per hour", "Bequette, Process Dynamics, 1998: 311.2, 339.1, 368.1 K", remembered, tank{1, 10, 298, 34930800, 11843 / 1.987, 5960. / 500, 150. / 500, 298}, 300, 320, 311.170998408, []complex128{-0.895551677721, -0.518217577479}},
		{"F07", "second tank, middle state", "ditto", remembered, tank{1, 10, 298, 34930800, 11843 / 1.987, 5960. / 500, 150. / 500, 298}, 330, 350, 339.097123748, []complex128{-0.836883344765, 0.493912620379}},
		{"F07", "second tank, upper state", "ditto", remembered, tank{1, 10, 298, 34930800, 11843 / 1.987, 5960. / 500, 150. / 500, 298}, 360, 380, 368.062852397, []complex128{-0.765970365148 - 0.957601236186i, -0.765970365148 + 0.957601236186i}},
	} {
		temp, p := poles(c.tank, c.lo, c.hi)
		s.check(c.id, c.what, c.source, c.status, append([]value{rel("temperature, K", temp, c.temp, 1e-11)}, roots("pole", p, c.want, 1e-9)...)...)
	}
	var back ident.Interval
	for _, x := range []float64{0.1, 1. / 3, math.MaxFloat64, math.Ldexp(1, -52), math.SmallestNonzeroFloat64} {
		b, err := ident.Interval{Lo: -x, Hi: x}.MarshalJSON()
		if err == nil {
			err = back.UnmarshalJSON(b)
		}
		if err != nil || back.Lo != -x || back.Hi != x {
			t.Errorf("%v is written as %s and read as %v, %v", x, b, back, err)
		}
	}
	s.check("G06", "numbers in files, 17 digits", "IEEE 754; C99, 5.2.4.2.2", closed, verdict("an interval is read as it was written, to the last bit", !t.Failed(), true))
	s.check("F08", "short period with relaxed stability", "McRuer, Ashkenas & Graham, Aircraft Dynamics and Automatic Control, 1973", closed,
		append(roots("-1, -1, 6: pole", lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-5, 2, 1}}.Poles(), []complex128{-3.449489742783178, 1.449489742783178}, 1e-14),
			roots("-1, -0.5, 20: pole", lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-19.5, 1.5, 1}}.Poles(), []complex128{-5.229118216792229, 3.729118216792229}, 1e-14)...)...)
}
