package lti

import (
	"math"

	"gonum.org/v1/gonum/mat"
)

// Expm returns e^a of a square matrix by scaling and squaring with the Taylor series, after diagonal balancing
// (Moler & Van Loan, Nineteen dubious ways to compute the exponential of a matrix, twenty-five years later, SIAM
// Review 45 (2003) 3-49, method 3). Unlike the rational approximation of mat.Dense.Exp it keeps the small entries of
// graded matrices (integrator chains at fast sampling) to full relative accuracy, because the series is
// unchanged by a scaling of the states and no linear system is solved.
func Expm(a mat.Matrix) *mat.Dense {
	n, c := a.Dims()
	if n != c {
		panic(badShape)
	}
	m := make([]float64, n*n)
	for i := range n {
		for j := range n {
			m[i*n+j] = a.At(i, j)
		}
	}
	return mat.NewDense(n, n, expm(m, n))
}

// expm is Expm on a row-major array, which it overwrites.
func expm(a []float64, n int) []float64 {
	d := balance(a, n)
	norm := 0.0
	for i := range n {
		s := 0.0
		for j := range n {
			s += math.Abs(a[i*n+j])
		}
		norm = math.Max(norm, s)
	}
	squarings := 0
	if norm > 0.5 && !math.IsInf(norm, 0) {
		_, squarings = math.Frexp(norm)
		squarings++
	}
	scale := math.Ldexp(1, -squarings)
	for i := range a {
		a[i] *= scale
	}
	// sum = I + a (I + a/2 (I + a/3 (...))) loses nothing; with norm < 1/2, 0.5^20/20! < 1e-24, so graded
	// entries are complete too.
	const terms = 20
	sum, tmp := make([]float64, n*n), make([]float64, n*n)
	for i := range n {
		sum[i*n+i] = 1
	}
	for k := terms; k >= 1; k-- {
		matmul(tmp, a, sum, n)
		for i := range tmp {
			tmp[i] /= float64(k)
		}
		for i := range n {
			tmp[i*n+i]++
		}
		sum, tmp = tmp, sum
	}
	for range squarings {
		matmul(tmp, sum, sum, n)
		sum, tmp = tmp, sum
	}
	for i := range n {
		for j := range n {
			sum[i*n+j] *= d[i] / d[j]
		}
	}
	return sum
}

// balance replaces a by D^-1 a D with powers of two on the diagonal D, such that rows and columns have like norms
// (Parlett & Reinsch, Balancing a matrix, Numer. Math. 13 (1969) 293-304), and returns D.
func balance(a []float64, n int) []float64 {
	d := make([]float64, n)
	for i := range d {
		d[i] = 1
	}
	for range 100 {
		done := true
		for i := range n {
			r, c := 0.0, 0.0
			for j := range n {
				if j != i {
					r += math.Abs(a[i*n+j])
					c += math.Abs(a[j*n+i])
				}
			}
			if !(r+c > 0) || math.IsInf(r+c, 0) {
				continue
			}
			// A state that nothing drives, or that drives nothing, may be scaled freely: make its coupling
			// small, or it alone sets the norm and costs needless squarings.
			const small = 0.25
			if r == 0 {
				r = math.Min(c, small*small/c)
			}
			if c == 0 {
				c = math.Min(r, small*small/r)
			}
			_, e := math.Frexp(math.Sqrt(r / c))
			f := math.Ldexp(1, e-1)
			if (c*f+r/f) >= 0.95*(c+r) || d[i]*f == 0 || math.IsInf(d[i]*f, 0) {
				continue
			}
			done = false
			d[i] *= f
			for j := range n {
				a[i*n+j] /= f
				a[j*n+i] *= f
			}
		}
		if done {
			break
		}
	}
	return d
}

func matmul(dst, a, b []float64, n int) {
	for i := range n {
		row := dst[i*n : i*n+n]
		clear(row)
		for k := range n {
			f := a[i*n+k]
			if f == 0 {
				continue
			}
			for j, v := range b[k*n : k*n+n] {
				row[j] += f * v
			}
		}
	}
}
