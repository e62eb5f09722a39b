package lti

import (
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/mat"
)

// SS is a state-space block x' = A x + B u (Period 0) or x+ = A x + B u (Period in s), y = C x + D u.
// Shapes: A n×n, B n×m, C p×n, D p×m. A static gain has nil A, B and C. D is never nil.
type SS struct {
	A, B, C, D *mat.Dense
	Period     float64
}

// Order returns the number of states.
func (g SS) Order() int {
	if g.A == nil {
		return 0
	}
	n, _ := g.A.Dims()
	return n
}

// newSS builds a SISO block from plain arrays; a is row-major n×n.
func newSS(a, b, c []float64, d, period float64) SS {
	n := len(b)
	g := SS{D: mat.NewDense(1, 1, []float64{d}), Period: period}
	if n > 0 {
		g.A, g.B, g.C = mat.NewDense(n, n, a), mat.NewDense(n, 1, b), mat.NewDense(1, n, c)
	}
	return g
}

// chain is the controllable companion realisation of num(x)/den(x), x the derivative or the difference z - 1, with
// states scaled by powers of a rate such that no entry of the unit-rate companion matrix exceeds 1.
type chain struct {
	a, b, c []float64 // a row-major n×n
	d       float64
	rate    float64
}

func newChain(num, den Poly) chain {
	num, den = num.Trim(), den.Trim()
	n := len(den) - 1
	if n < 0 {
		panic(badPoly)
	}
	if len(num) > n+1 {
		panic(improper)
	}
	r := chain{a: make([]float64, n*n), b: make([]float64, n), c: make([]float64, n), rate: chainRate(den)}
	if n == 0 {
		if len(num) > 0 {
			r.d = num[0] / den[0]
		}
		return r
	}
	lead := den[n]
	if len(num) == n+1 {
		r.d = num[n] / lead
	}
	w := r.rate
	r.b[n-1] = w
	for i := range n {
		pw := math.Pow(w, float64(i-n)) // w is a power of two: exact
		r.a[(n-1)*n+i] = -den[i] / lead * pw * w
		if i > 0 {
			r.a[(i-1)*n+i] = w
		}
		if i < len(num) {
			r.c[i] = (num[i]/lead - r.d*den[i]/lead) * pw
		} else {
			r.c[i] = -r.d * den[i] / lead * pw
		}
	}
	return r
}

// chainRate returns a power of two near max |den[n-i]/den[n]|^(1/i), 1 when all roots are 0.
func chainRate(den Poly) float64 {
	n := len(den) - 1
	w := 0.0
	for i := 1; i <= n; i++ {
		w = math.Max(w, math.Pow(math.Abs(den[n-i]/den[n]), 1/float64(i)))
	}
	if w == 0 || math.IsInf(w, 0) || math.IsNaN(w) {
		return 1
	}
	return math.Exp2(math.Round(math.Log2(w)))
}

// eigenvector returns the right eigenvector of the chain matrix for its eigenvalue p: known in closed form, so it is
// exact for multiple eigenvalues too, where a numerical one is not.
func (r chain) eigenvector(p complex128) []complex128 {
	v := make([]complex128, len(r.b))
	x := complex(1, 0)
	for i := range v {
		v[i] = x
		x *= p / complex(r.rate, 0)
	}
	return v
}

// SS returns a controllable realisation with scaled states. g must be proper and without delay.
func (g TF) SS() SS {
	if g.Delay != 0 {
		panic(badDelay)
	}
	r := newChain(g.Num, g.Den)
	return newSS(r.a, r.b, r.c, r.d, 0)
}

// SS returns a controllable realisation, built in z - 1, which keeps poles near z = 1 well conditioned.
func (g DTF) SS() SS {
	num, den := g.trimmed().normalised().inZ()
	r := newChain(num.shift(1), den.shift(1))
	n := len(r.b)
	for i := range n {
		r.a[i*n+i]++
	}
	return newSS(r.a, r.b, r.c, r.d, g.Period)
}

// Poles returns the eigenvalues of A, sorted by real and imaginary part; in the z-plane for a discrete block.
func (g SS) Poles() []complex128 {
	n := g.Order()
	if n == 0 {
		return nil
	}
	a := g.A
	if g.Period > 0 {
		// Eigenvalues of A - I keep those near z = 1 apart.
		a = mat.DenseCopyOf(g.A)
		for i := range n {
			a.Set(i, i, a.At(i, i)-1)
		}
	}
	r := eigenvalues(a)
	if g.Period > 0 {
		for i := range r {
			r[i]++
		}
	}
	sortRoots(r)
	return r
}

// At returns the frequency response of a SISO block at omega, rad/s.
func (g SS) At(omega float64) complex128 {
	if g.Period == 0 {
		return g.at(complex(0, omega), 0)
	}
	// z - 1 without cancellation at low frequencies.
	s, c := math.Sincos(omega * g.Period / 2)
	return g.at(complex(-2*s*s, 2*s*c), 1)
}

// AtPoint returns C (x I - A)^-1 B + D of a SISO block at a point x of the s- or z-plane.
func (g SS) AtPoint(x complex128) complex128 { return g.at(x, 0) }

// at returns C ((x + shift) I - A)^-1 B + D.
func (g SS) at(x complex128, shift float64) complex128 {
	if r, c := g.D.Dims(); r != 1 || c != 1 {
		panic("lti: frequency response of a block with several inputs or outputs")
	}
	n := g.Order()
	d := complex(g.D.At(0, 0), 0)
	if n == 0 {
		return d
	}
	m, b := make([]complex128, n*n), make([]complex128, n)
	raw := g.A.RawMatrix()
	for i := range n {
		for j := range n {
			m[i*n+j] = complex(-raw.Data[i*raw.Stride+j], 0)
		}
		m[i*n+i] = x + complex(shift-raw.Data[i*raw.Stride+i], 0)
		b[i] = complex(g.B.At(i, 0), 0)
	}
	if !SolveComplex(m, b) {
		return cmplx.Inf()
	}
	for i := range n {
		d += complex(g.C.At(0, i), 0) * b[i]
	}
	return d
}

// SolveComplex solves m x = b in place (row-major, Gaussian elimination with partial pivoting); gonum has no complex
// solver. False for an exactly singular matrix.
func SolveComplex(m, b []complex128) bool {
	n := len(b)
	for k := range n {
		p, best := k, 0.0
		for i := k; i < n; i++ {
			if v := math.Abs(real(m[i*n+k])) + math.Abs(imag(m[i*n+k])); v > best {
				p, best = i, v
			}
		}
		if best == 0 {
			return false
		}
		if p != k {
			for j := k; j < n; j++ {
				m[k*n+j], m[p*n+j] = m[p*n+j], m[k*n+j]
			}
			b[k], b[p] = b[p], b[k]
		}
		inv := 1 / m[k*n+k]
		for i := k + 1; i < n; i++ {
			f := m[i*n+k] * inv
			if f == 0 {
				continue
			}
			for j := k + 1; j < n; j++ {
				m[i*n+j] -= f * m[k*n+j]
			}
			b[i] -= f * b[k]
		}
	}
	for k := n - 1; k >= 0; k-- {
		for j := k + 1; j < n; j++ {
			b[k] -= m[k*n+j] * b[j]
		}
		b[k] /= m[k*n+k]
	}
	return true
}

// TF returns the transfer function of a continuous SISO block.
func (g SS) TF() TF {
	if g.Period != 0 {
		panic("lti: TF of a discrete block")
	}
	den := FromRoots(pairUp(g.Poles()))
	return TF{Num: g.numerator(den), Den: den}
}

// DTF returns the transfer function of a discrete SISO block, with the accuracy that a DTF allows.
func (g SS) DTF() DTF {
	if g.Period == 0 {
		panic("lti: DTF of a continuous block")
	}
	den := FromRoots(pairUp(g.Poles()))
	return DTF{Num: g.numerator(den).reversed(), Den: den.reversed(), Period: g.Period}
}

// numerator returns the numerator over den, the characteristic polynomial, from the Markov parameters: with
// C A^k B = h[k+1] and D = h[0], the coefficient of x^(n-k) is the sum of den[n-k+j] h[j], j = 0 … k.
func (g SS) numerator(den Poly) Poly {
	n := g.Order()
	h := make([]float64, n+1)
	h[0] = g.D.At(0, 0)
	if n > 0 {
		x := mat.VecDenseCopyOf(g.B.ColView(0))
		for k := 1; k <= n; k++ {
			h[k] = mat.Dot(g.C.RowView(0), x)
			next := mat.NewVecDense(n, nil)
			next.MulVec(g.A, x)
			x = next
		}
	}
	num := make(Poly, n+1)
	for k := 0; k <= n; k++ {
		for j := 0; j <= k; j++ {
			num[n-k] += den[n-k+j] * h[j]
		}
	}
	return num
}

// pairUp makes the conjugate of each root exact.
func pairUp(r []complex128) []complex128 {
	out := make([]complex128, 0, len(r))
	for _, x := range r {
		switch {
		case imag(x) > 0:
			out = append(out, x, cmplx.Conj(x))
		case imag(x) == 0:
			out = append(out, x)
		}
	}
	return out
}
