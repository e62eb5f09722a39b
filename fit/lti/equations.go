package lti

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/mat"
)

// DiscreteLyapunov solves x = a x aᵀ + q for a with all eigenvalues inside the unit circle and symmetric q: the state
// covariance of x+ = a x + w, cov w = q. Smith's doubling (Smith, Matrix equation XA + BX = C, SIAM J. Appl. Math. 16
// (1968) 198-201).
func DiscreteLyapunov(a, q mat.Matrix) (*mat.SymDense, error) {
	n, _ := a.Dims()
	for _, e := range eigenvalues(a) {
		if !(cmplx.Abs(e) < 1) {
			return nil, fmt.Errorf("solving a Lyapunov equation: eigenvalue %.6g is not inside the unit circle", e)
		}
	}
	x, p := mat.DenseCopyOf(q), mat.DenseCopyOf(a)
	for range 200 {
		var t, u, pp mat.Dense
		t.Mul(p, x)
		u.Mul(&t, p.T())
		x.Add(x, &u)
		if mat.Norm(&u, 1) <= 1e-17*mat.Norm(x, 1) {
			return symmetric(x, n), nil
		}
		pp.Mul(p, p)
		p = &pp
	}
	return nil, errors.New("solving a Lyapunov equation: no convergence")
}

// Lyapunov solves a x + x aᵀ + q = 0 for a with all eigenvalues left of the imaginary axis and symmetric q: the
// state covariance of x' = a x + w under white noise of intensity q. By Smith's transform
// (r I - a) x (r I - a)ᵀ = (r I + a) x (r I + a)ᵀ + 2 r q to the discrete equation (ibid.).
func Lyapunov(a, q mat.Matrix) (*mat.SymDense, error) {
	n, _ := a.Dims()
	lo, hi := math.Inf(1), 0.0
	for _, e := range eigenvalues(a) {
		if !(real(e) < 0) {
			return nil, fmt.Errorf("solving a Lyapunov equation: eigenvalue %.6g is not left of the imaginary axis", e)
		}
		lo, hi = math.Min(lo, cmplx.Abs(e)), math.Max(hi, cmplx.Abs(e))
	}
	r := math.Sqrt(lo * hi)
	minus, plus := mat.NewDense(n, n, nil), mat.NewDense(n, n, nil)
	minus.Scale(-1, a)
	plus.Copy(a)
	for i := range n {
		minus.Set(i, i, r+minus.At(i, i))
		plus.Set(i, i, r+plus.At(i, i))
	}
	var ad, t, tt, qd mat.Dense
	if err := ad.Solve(minus, plus); err != nil {
		return nil, fmt.Errorf("solving a Lyapunov equation: %w", err)
	}
	if err := t.Solve(minus, q); err != nil {
		return nil, fmt.Errorf("solving a Lyapunov equation: %w", err)
	}
	if err := tt.Solve(minus, t.T()); err != nil {
		return nil, fmt.Errorf("solving a Lyapunov equation: %w", err)
	}
	qd.Scale(2*r, &tt)
	return DiscreteLyapunov(&ad, &qd)
}

func symmetric(x *mat.Dense, n int) *mat.SymDense {
	s := mat.NewSymDense(n, nil)
	for i := range n {
		for j := i; j < n; j++ {
			s.SetSym(i, j, (x.At(i, j)+x.At(j, i))/2)
		}
	}
	return s
}

// OutputCovariance returns the covariance of the outputs of a stable discrete block whose inputs are white with
// covariance w (inputs×inputs).
func OutputCovariance(g SS, w mat.Matrix) (*mat.SymDense, error) {
	if g.Period == 0 {
		panic("lti: output covariance of a continuous block")
	}
	p, _ := g.D.Dims()
	quad := func(m, w mat.Matrix) *mat.Dense {
		var t, r mat.Dense
		t.Mul(m, w)
		r.Mul(&t, m.T())
		return &r
	}
	y := quad(g.D, w)
	if g.Order() > 0 {
		x, err := DiscreteLyapunov(g.A, quad(g.B, w))
		if err != nil {
			return nil, err
		}
		y.Add(y, quad(g.C, x))
	}
	return symmetric(y, p), nil
}

// CARE returns the stabilising solution x of aᵀx + x a - x b r^-1 bᵀ x + q = 0 and the gain k = r^-1 bᵀ x, such that
// a - b k has all eigenvalues left of the imaginary axis. The stable subspace of the Hamiltonian comes from its matrix
// sign function (Roberts, Linear model reduction and solution of the algebraic Riccati equation by use of the sign
// function, Int. J. Control 32 (1980) 677-687; Byers, Solving the algebraic Riccati equation with the matrix sign
// function, Linear Algebra Appl. 85 (1987) 267-279), polished by Newton's method (Kleinman, IEEE Trans. Automatic
// Control 13 (1968) 114-115). It refuses Hamiltonians with eigenvalues on the imaginary axis. q need not be definite.
func CARE(a, b, q, r mat.Matrix) (x *mat.SymDense, k *mat.Dense, err error) {
	n, _ := a.Dims()
	g, err := inputWeight(b, r)
	if err != nil {
		return nil, nil, err
	}
	h := mat.NewDense(2*n, 2*n, nil)
	block := func(i, j int) *mat.Dense { return h.Slice(i*n, i*n+n, j*n, j*n+n).(*mat.Dense) }
	block(0, 0).Copy(a)
	block(0, 1).Scale(-1, g)
	block(1, 0).Scale(-1, q)
	block(1, 1).Scale(-1, a.T())
	xx, err := stableGraph(h, n)
	if err != nil {
		return nil, nil, fmt.Errorf("solving a Riccati equation: %w", err)
	}
	gain := func(x mat.Matrix) (*mat.Dense, error) {
		var t, k mat.Dense
		t.Mul(b.T(), x)
		err := k.Solve(r, &t)
		return &k, ignoreCondition(err)
	}
	step := func(x *mat.SymDense, k *mat.Dense) (*mat.SymDense, error) {
		ac, qc := closed(a, b, k), costOf(q, r, k)
		return Lyapunov(ac.T(), qc)
	}
	return polish(xx, gain, step)
}

// DARE returns the stabilising solution x of x = aᵀx a - aᵀx b (r + bᵀx b)^-1 bᵀx a + q and the gain
// k = (r + bᵀx b)^-1 bᵀx a, such that a - b k has all eigenvalues inside the unit circle. a may be singular. The
// symplectic pencil is mapped to a Hamiltonian one by (z - 1)/(z + 1), then as in CARE, with Newton steps after Hewer,
// IEEE Trans. Automatic Control 16 (1971) 382-384.
func DARE(a, b, q, r mat.Matrix) (x *mat.SymDense, k *mat.Dense, err error) {
	n, _ := a.Dims()
	g, err := inputWeight(b, r)
	if err != nil {
		return nil, nil, err
	}
	// z [I g; 0 aᵀ] v = [a 0; -q I] v.
	l, m := mat.NewDense(2*n, 2*n, nil), mat.NewDense(2*n, 2*n, nil)
	for i := range n {
		l.Set(i, i, 1)
		m.Set(n+i, n+i, 1)
	}
	l.Slice(0, n, n, 2*n).(*mat.Dense).Copy(g)
	l.Slice(n, 2*n, n, 2*n).(*mat.Dense).Copy(a.T())
	m.Slice(0, n, 0, n).(*mat.Dense).Copy(a)
	m.Slice(n, 2*n, 0, n).(*mat.Dense).Scale(-1, q)
	var sum, diff, h mat.Dense
	sum.Add(m, l)
	diff.Sub(m, l)
	if err := ignoreCondition(h.Solve(&sum, &diff)); err != nil {
		return nil, nil, fmt.Errorf("solving a Riccati equation: a closed-loop pole at z = -1: %w", err)
	}
	xx, err := stableGraph(&h, n)
	if err != nil {
		return nil, nil, fmt.Errorf("solving a Riccati equation: %w", err)
	}
	gain := func(x mat.Matrix) (*mat.Dense, error) {
		var t, rr, ta, k mat.Dense
		t.Mul(b.T(), x)
		rr.Mul(&t, b)
		rr.Add(&rr, r)
		ta.Mul(&t, a)
		err := k.Solve(&rr, &ta)
		return &k, ignoreCondition(err)
	}
	step := func(x *mat.SymDense, k *mat.Dense) (*mat.SymDense, error) {
		ac, qc := closed(a, b, k), costOf(q, r, k)
		return DiscreteLyapunov(ac.T(), qc)
	}
	return polish(xx, gain, step)
}

// inputWeight returns b r^-1 bᵀ.
func inputWeight(b, r mat.Matrix) (*mat.Dense, error) {
	var t, g mat.Dense
	if err := ignoreCondition(t.Solve(r, b.T())); err != nil {
		return nil, fmt.Errorf("solving a Riccati equation: singular input weight: %w", err)
	}
	g.Mul(b, &t)
	return &g, nil
}

func ignoreCondition(err error) error {
	if c, ok := err.(mat.Condition); ok && !math.IsInf(float64(c), 1) {
		return nil
	}
	return err
}

func closed(a, b, k mat.Matrix) *mat.Dense {
	var bk, ac mat.Dense
	bk.Mul(b, k)
	ac.Sub(a, &bk)
	return &ac
}

func costOf(q, r, k mat.Matrix) *mat.Dense {
	var t, c mat.Dense
	t.Mul(k.T(), r)
	c.Mul(&t, k)
	c.Add(&c, q)
	return &c
}

// polish takes Newton steps as long as they shrink.
func polish(x *mat.SymDense, gain func(mat.Matrix) (*mat.Dense, error),
	step func(*mat.SymDense, *mat.Dense) (*mat.SymDense, error)) (*mat.SymDense, *mat.Dense, error) {
	k, err := gain(x)
	if err != nil {
		return nil, nil, fmt.Errorf("solving a Riccati equation: %w", err)
	}
	last := math.Inf(1)
	for range 30 {
		next, err := step(x, k)
		if err != nil {
			return nil, nil, fmt.Errorf("solving a Riccati equation: the solution does not stabilise: %w", err)
		}
		var d mat.Dense
		d.Sub(next, x)
		change := mat.Norm(&d, 1) / math.Max(mat.Norm(next, 1), math.SmallestNonzeroFloat64)
		if change >= last/2 {
			break
		}
		x, last = next, change
		if k, err = gain(x); err != nil {
			return nil, nil, fmt.Errorf("solving a Riccati equation: %w", err)
		}
	}
	if last > 1e-6 {
		return nil, nil, errors.New("solving a Riccati equation: no convergence, eigenvalues too near the stability limit")
	}
	return x, k, nil
}

// stableGraph returns x with [I; x] a basis of the subspace of the 2n×2n matrix h that belongs to its eigenvalues left
// of the imaginary axis.
func stableGraph(h *mat.Dense, n int) (*mat.SymDense, error) {
	scale := 0.0
	for _, e := range eigenvalues(h) {
		scale = math.Max(scale, cmplx.Abs(e))
	}
	for _, e := range eigenvalues(h) {
		if !(math.Abs(real(e)) > 1e-9*scale) {
			return nil, fmt.Errorf("eigenvalue %.4g on the limit of stability, no stabilising solution", e)
		}
	}
	s := mat.DenseCopyOf(h)
	for i := 0; ; i++ {
		if i == 100 {
			return nil, errors.New("no convergence of the sign function")
		}
		var inv, d mat.Dense
		if err := ignoreCondition(inv.Inverse(s)); err != nil {
			return nil, fmt.Errorf("eigenvalue on the limit of stability: %w", err)
		}
		// Byers' scaling by the determinant.
		logDet, _ := mat.LogDet(s)
		c := math.Exp(-logDet / float64(2*n))
		if i > 12 {
			c = 1
		}
		var next mat.Dense
		next.Scale(c/2, s)
		inv.Scale(1/(2*c), &inv)
		next.Add(&next, &inv)
		d.Sub(&next, s)
		s = mat.DenseCopyOf(&next)
		if mat.Norm(&d, 1) <= 1e-13*mat.Norm(s, 1) {
			break
		}
	}
	// (S + I) [I; x] = 0.
	left, right := mat.NewDense(2*n, n, nil), mat.NewDense(2*n, n, nil)
	for i := range 2 * n {
		for j := range n {
			left.Set(i, j, s.At(i, n+j))
			right.Set(i, j, -s.At(i, j))
		}
	}
	for i := range n {
		left.Set(n+i, i, left.At(n+i, i)+1)
		right.Set(i, i, right.At(i, i)-1)
	}
	var x mat.Dense
	if err := ignoreCondition(x.Solve(left, right)); err != nil {
		return nil, fmt.Errorf("a mode that no input reaches: %w", err)
	}
	return symmetric(&x, n), nil
}

// SampledNoise returns e^{a h} and the covariance of the state noise gathered over one period h under white noise of
// intensity q: the integral of e^{a t} q e^{aᵀt} over [0, h] (Van Loan, IEEE Trans. Automatic Control 23 (1978)
// 395-404).
func SampledNoise(a, q mat.Matrix, h float64) (phi *mat.Dense, cov *mat.SymDense) {
	n, _ := a.Dims()
	m := mat.NewDense(2*n, 2*n, nil)
	m.Slice(0, n, 0, n).(*mat.Dense).Scale(-h, a)
	m.Slice(0, n, n, 2*n).(*mat.Dense).Scale(h, q)
	m.Slice(n, 2*n, n, 2*n).(*mat.Dense).Scale(h, a.T())
	e := Expm(m)
	phi = mat.DenseCopyOf(e.Slice(n, 2*n, n, 2*n).T())
	var c mat.Dense
	c.Mul(phi, e.Slice(0, n, n, 2*n))
	return phi, symmetric(&c, n)
}
