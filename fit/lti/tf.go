package lti

import (
	"math"
	"math/cmplx"
	"slices"
)

// TF is a continuous transfer function Num(s)/Den(s) e^{-s Delay}: Num[i] and Den[i] multiply s^i, Delay is in s.
type TF struct {
	Num, Den Poly
	Delay    float64
}

// At returns the value at s, delay included.
func (g TF) At(s complex128) complex128 {
	v := g.Num.Eval(s) / g.Den.Eval(s)
	if g.Delay != 0 {
		v *= cmplx.Exp(-s * complex(g.Delay, 0))
	}
	return v
}

// Poles returns the roots of the denominator, sorted by real and imaginary part.
func (g TF) Poles() []complex128 { return g.Den.Roots() }

// Zeros returns the roots of the numerator, none for a zero numerator.
func (g TF) Zeros() []complex128 {
	if g.Num.Degree() < 0 {
		return nil
	}
	return g.Num.Roots()
}

// DC returns the value at s = 0: ±Inf with an integrator, NaN for 0/0.
func (g TF) DC() float64 { return g.Num.At(0) / g.Den.At(0) }

// RelDegree returns the number of poles less that of zeros.
func (g TF) RelDegree() int { return g.Den.Degree() - g.Num.Degree() }

// Mul returns the series connection g h; delays add.
func (g TF) Mul(h TF) TF {
	return TF{Num: g.Num.Mul(h.Num), Den: g.Den.Mul(h.Den), Delay: g.Delay + h.Delay}
}

// UnstablePoles counts the poles with real part > tol, rad/s.
func (g TF) UnstablePoles(tol float64) int {
	n := 0
	for _, p := range g.Poles() {
		if real(p) > tol {
			n++
		}
	}
	return n
}

// ZPK is Gain prod(s - Zeros) / prod(s - Poles) e^{-s Delay}; complex ones in conjugate pairs.
type ZPK struct {
	Zeros, Poles []complex128
	Gain, Delay  float64
}

// ZPK returns zeros, poles and the ratio of the leading coefficients.
func (g TF) ZPK() ZPK {
	num, den := g.Num.Trim(), g.Den.Trim()
	if len(den) == 0 {
		panic(badPoly)
	}
	z := ZPK{Zeros: g.Zeros(), Poles: g.Poles(), Delay: g.Delay}
	if len(num) > 0 {
		z.Gain = num[len(num)-1] / den[len(den)-1]
	}
	return z
}

// TF returns the transfer function with a monic denominator.
func (g ZPK) TF() TF {
	return TF{Num: FromRoots(g.Zeros).Scale(g.Gain), Den: FromRoots(g.Poles), Delay: g.Delay}
}

// Pade returns the diagonal Padé approximation of order n of e^{-s tau}, for drawing and for rational bounds only
// (Golub & Van Loan, Matrix Computations, 3rd ed. 1996, sec. 11.3). tau in s; n in [1, 10].
func Pade(tau float64, n int) TF {
	if n < 1 || n > 10 {
		panic("lti: order of a Padé approximation not in 1 to 10")
	}
	g := TF{Num: make(Poly, n+1), Den: make(Poly, n+1)}
	c := 1.0
	for k := 0; ; k++ {
		g.Den[k] = c
		g.Num[k] = c
		if k%2 == 1 {
			g.Num[k] = -c
		}
		if k == n {
			return g
		}
		c *= tau * float64(n-k) / float64((2*n-k)*(k+1))
	}
}

// DTF is a discrete transfer function in powers of the delay z^-1: Num[i] and Den[i] multiply z^-i, Den[0] = 1,
// Period in s. Its coefficients hold poles near z = 1 only to about eps/(product of the distances to the other
// poles): at fast sampling compute with SS or the delta form, and use a DTF as what a controller runs.
type DTF struct {
	Num, Den Poly
	Period   float64
}

// Gain returns the constant k as a DTF.
func Gain(k, period float64) DTF { return DTF{Num: Poly{k}, Den: Poly{1}, Period: period} }

// normalised returns the DTF with Den[0] = 1.
func (g DTF) normalised() DTF {
	if len(g.Den) == 0 || g.Den[0] == 0 {
		panic("lti: discrete denominator starts with 0")
	}
	if g.Den[0] == 1 {
		return g
	}
	k := 1 / g.Den[0]
	g.Num, g.Den = g.Num.Scale(k), g.Den.Scale(k)
	g.Den[0] = 1
	return g
}

// At returns the value at z = e^{i omega Period}.
func (g DTF) At(omega float64) complex128 {
	q := cmplx.Exp(complex(0, -omega*g.Period))
	return g.Num.Eval(q) / g.Den.Eval(q)
}

// inZ returns numerator and denominator as polynomials in z of common formal degree.
func (g DTF) inZ() (num, den Poly) {
	n := max(len(g.Num), len(g.Den))
	num, den = make(Poly, n), make(Poly, n)
	for i, b := range g.Num {
		num[n-1-i] = b
	}
	for i, a := range g.Den {
		den[n-1-i] = a
	}
	return num, den
}

// Poles returns the poles in the z-plane, those of pure delays (z = 0) included.
func (g DTF) Poles() []complex128 {
	_, den := g.trimmed().inZ()
	return atZeroAndNear1(den)
}

// Zeros returns the zeros in the z-plane.
func (g DTF) Zeros() []complex128 {
	num, _ := g.trimmed().inZ()
	if num = num.Trim(); len(num) == 0 {
		return nil
	}
	return atZeroAndNear1(num)
}

// atZeroAndNear1 returns the roots of p(z): those at 0 exactly, the others computed about z = 1. p has a highest
// coefficient other than 0.
func atZeroAndNear1(p Poly) []complex128 {
	var r []complex128
	for p[0] == 0 {
		p = p[1:]
		r = append(r, 0)
	}
	for _, x := range p.Trim().shift(1).Roots() {
		r = append(r, x+1)
	}
	sortRoots(r)
	return r
}

func (g DTF) trimmed() DTF {
	g.Num, g.Den = g.Num.Trim(), g.Den.Trim()
	return g
}

// DC returns the value at z = 1: ±Inf with an integrator.
func (g DTF) DC() float64 {
	return g.Num.At(1) / g.Den.At(1)
}

// Mul returns the series connection.
func (g DTF) Mul(h DTF) DTF {
	return DTF{Num: g.Num.Mul(h.Num), Den: g.Den.Mul(h.Den), Period: g.Period}
}

// Filter returns the response to x from rest, in dst (nil allocates; dst may be x only if they are the same slice).
func (g DTF) Filter(dst, x []float64) []float64 {
	g = g.normalised()
	if dst == nil {
		dst = make([]float64, len(x))
	}
	if len(dst) != len(x) {
		panic(badShape)
	}
	// Transposed direct form II: one pass, in place.
	n := max(len(g.Num), len(g.Den)) - 1
	w := make([]float64, n+1)
	b, a := make([]float64, n+1), make([]float64, n+1)
	copy(b, g.Num)
	copy(a, g.Den)
	for k, v := range x {
		y := b[0]*v + w[0]
		for i := 1; i <= n; i++ {
			w[i-1] = w[i] + b[i]*v - a[i]*y
		}
		dst[k] = y
	}
	return dst
}

// Tustin returns the bilinear transform of g, s = (2/period)(z - 1)/(z + 1), for controllers; never for the plant
// behind a hold. g must have no delay and be proper.
func Tustin(g TF, period float64) DTF {
	return bilinear(g, period, 2/period)
}

// Prewarped is Tustin's transform with the frequency response exact at omega, in (0, pi/period).
func Prewarped(g TF, period, omega float64) DTF {
	return bilinear(g, period, omega/math.Tan(omega*period/2))
}

func bilinear(g TF, period, c float64) DTF {
	switch {
	case !(period > 0):
		panic(badPeriod)
	case g.Delay != 0:
		panic(badDelay)
	case g.Den.Degree() < 0:
		panic(badPoly)
	case g.RelDegree() < 0 && g.Num.Degree() >= 0:
		panic(improper)
	}
	n := g.Den.Degree()
	// minus[i] = (1 - q)^i, plus[i] = (1 + q)^i, exact integers.
	minus, plus := []Poly{{1}}, []Poly{{1}}
	for i := range n {
		minus = append(minus, minus[i].Mul(Poly{1, -1}))
		plus = append(plus, plus[i].Mul(Poly{1, 1}))
	}
	sub := func(p Poly) Poly {
		r := make(Poly, n+1)
		k := 1.0
		for i, a := range p.Trim() {
			for j, m := range minus[i].Mul(plus[n-i]) {
				r[j] += a * k * m
			}
			k *= c
		}
		return r
	}
	return DTF{Num: sub(g.Num), Den: sub(g.Den), Period: period}.normalised()
}

// Equal reports whether the coefficients and the delay are the same numbers.
func (g TF) Equal(h TF) bool {
	return g.Delay == h.Delay && slices.Equal(g.Num, h.Num) && slices.Equal(g.Den, h.Den)
}
