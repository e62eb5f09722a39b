package lti

import (
	"cmp"
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/mat"
)

// Panic messages for mistakes of the caller.
const (
	badRoots  = "lti: complex roots not in conjugate pairs"
	badPoly   = "lti: zero or empty polynomial"
	badMonic  = "lti: divisor is not monic"
	badDelay  = "lti: transfer function has a delay"
	improper  = "lti: improper transfer function"
	badPeriod = "lti: period not positive"
	badShape  = "lti: matrix shapes do not fit"
)

// Poly is a polynomial with real coefficients: p[i] multiplies x^i.
// Trailing zeros (high powers) are allowed; the nil Poly is zero.
type Poly []float64

// Trim returns p without zero coefficients of the highest powers. It shares p's memory.
func (p Poly) Trim() Poly {
	n := len(p)
	for n > 0 && p[n-1] == 0 {
		n--
	}
	return p[:n]
}

// Degree returns the degree, -1 for the zero polynomial.
func (p Poly) Degree() int { return len(p.Trim()) - 1 }

// Eval returns p(x) by Horner's rule.
func (p Poly) Eval(x complex128) complex128 {
	var s complex128
	for i := len(p) - 1; i >= 0; i-- {
		s = s*x + complex(p[i], 0)
	}
	return s
}

// At returns p(x) at a real x.
func (p Poly) At(x float64) float64 {
	s := 0.0
	for i := len(p) - 1; i >= 0; i-- {
		s = s*x + p[i]
	}
	return s
}

// Mul returns p q.
func (p Poly) Mul(q Poly) Poly {
	p, q = p.Trim(), q.Trim()
	if len(p) == 0 || len(q) == 0 {
		return nil
	}
	r := make(Poly, len(p)+len(q)-1)
	for i, a := range p {
		for j, b := range q {
			r[i+j] += a * b
		}
	}
	return r
}

// Add returns p + q.
func (p Poly) Add(q Poly) Poly {
	r := make(Poly, max(len(p), len(q)))
	copy(r, p)
	for i, b := range q {
		r[i] += b
	}
	return r
}

// Sub returns p - q.
func (p Poly) Sub(q Poly) Poly { return p.Add(q.Scale(-1)) }

// Scale returns k p.
func (p Poly) Scale(k float64) Poly {
	r := make(Poly, len(p))
	for i, a := range p {
		r[i] = k * a
	}
	return r
}

// Div divides p by q, whose highest coefficient is 1, by synthetic division: p = quo q + rem, rem having as many
// coefficients as q has roots.
func (p Poly) Div(q Poly) (quo, rem Poly) {
	k := len(q) - 1
	if k < 0 || q[k] != 1 {
		panic(badMonic)
	}
	r := append(make(Poly, 0, max(len(p), k)), p...)
	for len(r) < k {
		r = append(r, 0)
	}
	for i := len(r) - 1; i >= k; i-- {
		for j, v := range q[:k] {
			r[i-k+j] -= r[i] * v
		}
	}
	return r[k:], r[:k:k]
}

// Deriv returns the derivative of p.
func (p Poly) Deriv() Poly {
	if len(p) < 2 {
		return nil
	}
	r := make(Poly, len(p)-1)
	for i := range r {
		r[i] = float64(i+1) * p[i+1]
	}
	return r
}

// Mirror returns p(-x).
func (p Poly) Mirror() Poly {
	r := slices.Clone(p)
	for i := 1; i < len(r); i += 2 {
		r[i] = -r[i]
	}
	return r
}

// shift returns the polynomial q with q(x) = p(x + a), by repeated synthetic division.
func (p Poly) shift(a float64) Poly {
	r := slices.Clone(p)
	for i := range r {
		for j := len(r) - 2; j >= i; j-- {
			r[j] += a * r[j+1]
		}
	}
	return r
}

// reversed returns the coefficients in the opposite order.
func (p Poly) reversed() Poly {
	r := slices.Clone(p)
	slices.Reverse(r)
	return r
}

// Roots returns the roots of p, sorted by real and then imaginary part: the eigenvalues of the balanced companion
// matrix (Edelman & Murakami, Polynomial roots from companion matrix eigenvalues, Math. Comp. 64 (1995) 763-776).
// Complex roots come in exactly conjugate pairs. A root of multiplicity m is accurate to about eps^(1/m).
// It panics for the zero polynomial.
func (p Poly) Roots() []complex128 {
	p = p.Trim()
	if len(p) == 0 {
		panic(badPoly)
	}
	var roots []complex128
	for p[0] == 0 {
		roots = append(roots, 0)
		p = p[1:]
	}
	n := len(p) - 1
	switch n {
	case 0:
	case 1:
		roots = append(roots, complex(-p[0]/p[1], 0))
	case 2:
		roots = append(roots, quadratic(p)...)
	default:
		c := mat.NewDense(n, n, nil)
		for i := range n {
			c.Set(n-1, i, -p[i]/p[n])
			if i > 0 {
				c.Set(i-1, i, 1)
			}
		}
		roots = append(roots, eigenvalues(c)...)
	}
	sortRoots(roots)
	return roots
}

// quadratic returns the two roots of p[0] + p[1] x + p[2] x^2 without cancellation.
func quadratic(p Poly) []complex128 {
	h, q := -p[1]/p[2]/2, p[0]/p[2]
	// fma: the discriminant of nearly equal roots keeps its digits.
	d := math.FMA(h, h, -q)
	if d < 0 {
		w := math.Sqrt(-d)
		return []complex128{complex(h, -w), complex(h, w)}
	}
	x := h + math.Copysign(math.Sqrt(d), h)
	if x == 0 {
		return []complex128{0, 0}
	}
	return []complex128{complex(x, 0), complex(q/x, 0)}
}

func sortRoots(r []complex128) {
	slices.SortFunc(r, func(a, b complex128) int {
		return cmp.Or(cmp.Compare(real(a), real(b)), cmp.Compare(imag(a), imag(b)))
	})
}

// eigenvalues returns the eigenvalues of a square matrix, unsorted.
func eigenvalues(a mat.Matrix) []complex128 {
	n, _ := a.Dims()
	nan := make([]complex128, n)
	for i := range nan {
		nan[i] = cmplx.NaN()
	}
	for i := range n {
		for j := range n {
			if v := a.At(i, j); math.IsNaN(v) || math.IsInf(v, 0) {
				return nan
			}
		}
	}
	var e mat.Eigen
	if !e.Factorize(a, mat.EigenNone) {
		return nan
	}
	return e.Values(nil)
}

// FromRoots returns the monic polynomial with the given roots. Complex roots must come in conjugate pairs, in any
// order; the member with positive imaginary part speaks for the pair.
func FromRoots(r []complex128) Poly {
	p := Poly{1}
	pairs := 0
	for _, x := range r {
		switch im := imag(x); {
		case im > 0:
			pairs++
			p = p.Mul(Poly{real(x)*real(x) + im*im, -2 * real(x), 1})
		case im < 0:
			pairs--
		default:
			p = p.Mul(Poly{-real(x), 1})
		}
	}
	if pairs != 0 {
		panic(badRoots)
	}
	return p
}
