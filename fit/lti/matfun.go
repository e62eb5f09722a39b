package lti

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/mat"
)

// ErrNoLog says that a matrix has no real primary logarithm.
var ErrNoLog = errors.New("an eigenvalue on the closed negative real axis has no real logarithm")

// Logm returns the principal logarithm of a square matrix: inverse scaling and squaring with square roots by the
// product form of the Denman-Beavers iteration (Higham, Functions of Matrices, SIAM 2008, ch. 11 and eq. 6.29) and the
// logarithm near I as the Gauss-Legendre form of its Padé approximant (ibid., theorem 11.6).
func Logm(a mat.Matrix) (*mat.Dense, error) {
	n, c := a.Dims()
	if n != c {
		panic(badShape)
	}
	for _, e := range eigenvalues(a) {
		if cmplx.IsNaN(e) {
			return nil, errors.New("taking a matrix logarithm: entries that are no numbers")
		}
		if math.Abs(imag(e)) <= 1e-14*cmplx.Abs(e) && real(e) <= 0 {
			return nil, fmt.Errorf("taking a matrix logarithm: eigenvalue %.4g: %w", real(e), ErrNoLog)
		}
	}
	x := mat.DenseCopyOf(a)
	eye := unit(n)
	roots := 0
	for ; ; roots++ {
		var e mat.Dense
		e.Sub(x, eye)
		if mat.Norm(&e, 1) < 0.25 {
			x = &e
			break
		}
		if roots == 60 {
			return nil, errors.New("taking a matrix logarithm: square roots do not converge")
		}
		r, err := sqrtm(x)
		if err != nil {
			return nil, err
		}
		x = r
	}
	// log(I + x) = sum of w_j x (I + t_j x)^-1, 8 nodes: relative error below 1e-18 for |x| < 1/4.
	var sum mat.Dense
	sum.Scale(0, x)
	for j, t := range legendreNodes {
		var d, term mat.Dense
		d.Scale(t, x)
		d.Add(&d, eye)
		if err := term.Solve(&d, x); err != nil {
			return nil, fmt.Errorf("taking a matrix logarithm: %w", err)
		}
		term.Scale(legendreWeights[j], &term)
		sum.Add(&sum, &term)
	}
	sum.Scale(math.Ldexp(1, roots), &sum)
	return &sum, nil
}

// Nodes and weights of the Gauss-Legendre rule on [0, 1], from Newton's method on the Legendre polynomial of degree 8.
var legendreNodes, legendreWeights = legendre(8)

func legendre(n int) (x, w []float64) {
	x, w = make([]float64, n), make([]float64, n)
	for i := range n {
		t := math.Cos(math.Pi * (float64(i) + 0.75) / (float64(n) + 0.5))
		var dp float64
		for range 50 {
			p0, p1 := 1.0, t
			for k := 2; k <= n; k++ {
				p0, p1 = p1, (float64(2*k-1)*t*p1-float64(k-1)*p0)/float64(k)
			}
			dp = float64(n) * (t*p1 - p0) / (t*t - 1)
			step := p1 / dp
			t -= step
			if math.Abs(step) < 1e-16 {
				break
			}
		}
		x[i], w[i] = (1-t)/2, 1/((1-t*t)*dp*dp)
	}
	return x, w
}

// sqrtm returns the principal square root: M = (I + (M + M^-1)/2)/2, X = X (I + M^-1)/2 from M = X = a
// (Cheng, Higham, Kenney & Laub, Approximating the logarithm of a matrix to specified accuracy, SIAM J. Matrix Anal.
// Appl. 22 (2001) 1112-1125).
func sqrtm(a *mat.Dense) (*mat.Dense, error) {
	n, _ := a.Dims()
	eye := unit(n)
	m, x := mat.DenseCopyOf(a), mat.DenseCopyOf(a)
	prev := math.Inf(1)
	for range 100 {
		var inv, t, next mat.Dense
		if err := inv.Inverse(m); err != nil {
			if _, ok := err.(mat.Condition); !ok {
				return nil, fmt.Errorf("taking a matrix square root: %w", err)
			}
		}
		t.Add(eye, &inv)
		t.Scale(0.5, &t)
		next.Mul(x, &t)
		x = mat.DenseCopyOf(&next)
		m.Add(m, &inv)
		m.Scale(0.25, m)
		for i := range n {
			m.Set(i, i, m.At(i, i)+0.5)
		}
		var e mat.Dense
		e.Sub(m, eye)
		d := mat.Norm(&e, 1)
		if d == 0 || d < 1e-12 && d >= prev/2 {
			return x, nil
		}
		prev = d
	}
	return nil, errors.New("taking a matrix square root: no convergence")
}

func unit(n int) *mat.Dense {
	m := mat.NewDense(n, n, nil)
	for i := range n {
		m.Set(i, i, 1)
	}
	return m
}

// InverseZOH returns the continuous plant whose zero-order-hold equivalent is g. Whole periods of delay come back as
// Delay; a fractional delay has no finite counterpart here. It refuses poles at 0 or on the negative real axis, which
// no real plant of the same order has. Of the plants with the same samples it returns the one with |Im| < pi/Period.
func InverseZOH(g DTF) (TF, error) {
	if !(g.Period > 0) {
		panic(badPeriod)
	}
	g = g.trimmed().normalised()
	delay := 0
	for delay < len(g.Num)-len(g.Den) && delay+1 < len(g.Num) && g.Num[delay+1] == 0 && g.Num[0] == 0 {
		delay++
	}
	g.Num = g.Num[delay:]
	for _, z := range g.Poles() {
		if imag(z) == 0 && real(z) <= 0 {
			return TF{}, fmt.Errorf("finding the plant behind a hold: no real plant has the sampled pole %.4g", real(z))
		}
	}
	ss := g.SS()
	n := ss.Order()
	if n == 0 {
		return TF{Num: Poly{ss.D.At(0, 0)}, Den: Poly{1}, Delay: float64(delay) * g.Period}, nil
	}
	m := mat.NewDense(n+1, n+1, nil)
	m.Slice(0, n, 0, n).(*mat.Dense).Copy(ss.A)
	m.Slice(0, n, n, n+1).(*mat.Dense).Copy(ss.B)
	m.Set(n, n, 1)
	l, err := Logm(m)
	if err != nil {
		return TF{}, fmt.Errorf("finding the plant behind a hold: %w", err)
	}
	l.Scale(1/g.Period, l)
	c := SS{A: mat.DenseCopyOf(l.Slice(0, n, 0, n)), B: mat.DenseCopyOf(l.Slice(0, n, n, n+1)), C: ss.C, D: ss.D}
	tf := c.TF()
	tf.Delay = float64(delay) * g.Period
	return tf, nil
}
