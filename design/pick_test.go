package design

import (
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/mat"
)

// leastPeakOracle is leastPeak in other ways. About one pole T = z^-d times the Blaschke product of the zeros times a
// stable factor, and T = 1 at the pole; S and T have equal least peaks.
func leastPeakOracle(d int, poles, zeros []complex128) float64 {
	switch len(poles) {
	case 0:
		return 1
	case 1:
		z := poles[0]
		peak := math.Pow(cmplx.Abs(z), float64(d))
		for _, q := range zeros {
			peak *= cmplx.Abs((1 - cmplx.Conj(q)*z) / (z - q))
		}
		return peak
	}
	return leastPeakPick(d, poles, zeros)
}

// leastPeakPick is leastPeak by Gram matrices, an oracle for short delays and zeros that are not far out.
//
// S = B g, B the Blaschke product of the poles in w = 1/z; S = 1 to order d at w = 0 and at the zeros fixes the
// first d Taylor coefficients of g and its values there. The least norm of such a g is that of the adjoint of
// multiplication by g on the span of w^0 … w^(d-1) and the Szegő kernels at the zeros (Nevanlinna-Pick and
// Carathéodory-Fejér in one: Sarason (1967), Trans. AMS 127, 179-203).
func leastPeakPick(d int, poles, zeros []complex128) float64 {
	blaschke := func(w complex128) complex128 {
		b := complex(1, 0)
		for _, z := range poles {
			a := 1 / z
			b *= (w - a) / (1 - cmplx.Conj(a)*w)
		}
		return b
	}
	// Taylor coefficients of 1/B = prod (1 - conj(a) w)/(w - a).
	num, den := []complex128{1}, []complex128{1}
	for _, z := range poles {
		a := 1 / z
		num = mulC(num, []complex128{1, -cmplx.Conj(a)})
		den = mulC(den, []complex128{-a, 1})
	}
	g := make([]complex128, d)
	for i := range g {
		if i < len(num) {
			g[i] = num[i]
		}
		for j := 1; j <= i && j < len(den); j++ {
			g[i] -= den[j] * g[i-j]
		}
		g[i] = complex(real(g[i]/den[0]), 0) // poles come in pairs
	}
	n := d + len(zeros)
	gram, x := make([]complex128, n*n), make([]complex128, n*n) // gram[i,j] = <e_j, e_i>
	for j := range n {
		for i := range n {
			switch {
			case i < d && j < d:
				if i == j {
					gram[i*n+j] = 1
				}
				if i <= j {
					x[i*n+j] = cmplx.Conj(g[j-i])
				}
			case i < d: // <k_b, w^i> = conj(b)^i
				gram[i*n+j] = cmplx.Pow(cmplx.Conj(1/zeros[j-d]), complex(float64(i), 0))
			case j < d:
				gram[i*n+j] = cmplx.Pow(1/zeros[i-d], complex(float64(j), 0))
			default:
				gram[i*n+j] = 1 / (1 - cmplx.Conj(1/zeros[j-d])/zeros[i-d])
			}
		}
		if j >= d {
			x[j*n+j] = cmplx.Conj(1 / blaschke(1/zeros[j-d]))
		}
	}
	return operatorNorm(x, gram, n)
}

func mulC(p, q []complex128) []complex128 {
	r := make([]complex128, len(p)+len(q)-1)
	for i, a := range p {
		for j, b := range q {
			r[i+j] += a * b
		}
	}
	return r
}

// operatorNorm returns the norm of the operator with matrix x in a basis with the given Gram matrix. A complex
// matrix is handled as a real one of twice the size, which doubles each singular value.
func operatorNorm(x, gram []complex128, n int) float64 {
	isComplex := func(v complex128) bool { return imag(v) != 0 }
	size := n
	if slices.ContainsFunc(x, isComplex) || slices.ContainsFunc(gram, isComplex) {
		size = 2 * n
	}
	realOf := func(c []complex128) *mat.Dense {
		r := mat.NewDense(size, size, nil)
		for i := range n {
			for j := range n {
				v := c[i*n+j]
				r.Set(i, j, real(v))
				if size > n {
					r.Set(n+i, n+j, real(v))
					r.Set(i, n+j, -imag(v))
					r.Set(n+i, j, imag(v))
				}
			}
		}
		return r
	}
	gr := realOf(gram)
	sym := mat.NewSymDense(size, nil)
	for i := range size {
		for j := i; j < size; j++ {
			sym.SetSym(i, j, (gr.At(i, j)+gr.At(j, i))/2)
		}
	}
	var eig mat.EigenSym
	if !eig.Factorize(sym, true) {
		return math.NaN()
	}
	values := eig.Values(nil)
	var vec mat.Dense
	eig.VectorsTo(&vec)
	// Directions that hardly exist (a zero far out is nearly one more sample of delay) are left out: the result is
	// then a little low, never high.
	keep := 0
	for keep < size && values[keep] < 1e-10*values[size-1] {
		keep++
	}
	m := size - keep
	half, inv := mat.NewDense(size, m, nil), mat.NewDense(size, m, nil)
	for c := range m {
		s := math.Sqrt(values[keep+c])
		for r := range size {
			half.Set(r, c, vec.At(r, keep+c)*s)
			inv.Set(r, c, vec.At(r, keep+c)/s)
		}
	}
	var t, op mat.Dense
	t.Mul(realOf(x), inv)
	op.Mul(half.T(), &t)
	var svd mat.SVD
	if !svd.Factorize(&op, mat.SVDNone) {
		return math.NaN()
	}
	return svd.Values(nil)[0]
}
