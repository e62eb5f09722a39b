package lti

import "math"

// Delta is a zero-order-hold sampled plant in powers of δ = q - 1 together
// with its exact derivatives, as an estimator in continuous-time parameters
// needs it:
//
//	A(q) y = q^-Whole B(q) u
//	A = Σ_j A[j] (1-q^-1)^(n-j) q^-j                          j = 0 … n, A[0] = 1
//	B = Σ_j (B0[j] + B1[j] q^-1) (1-q^-1)^(n-1-j) q^-(j+1)    j = 0 … n-1
//
// In powers of q^-1 the coefficients of a plant that is sampled fast cluster
// near the binomial ones and carry little but rounding; in powers of δ they
// keep their relative precision (Middleton & Goodwin, Digital Control and
// Estimation, Prentice Hall 1990, ch. 3).
//
// DA[k], DB0[k], DB1[k] are the derivatives for parameter k in the order
// b_0 … b_m (coefficients of s^0 … s^m), a_1 … a_n (of s^(n-1) … s^0), and at
// last the delay. Those for b_0 … b_m alone are there without Slopes.
type Delta struct {
	Whole         int
	A, B0, B1     []float64
	DA, DB0, DB1  [][]float64
	Poles, Inputs int // n, and the number m+1 of numerator coefficients
	Slopes        bool
}

// maxDeltaPoles bounds the order that Delta samples; low-order models are its
// purpose.
const maxDeltaPoles = 12

const (
	badDeltaOrder  = "lti: delta form takes 1 to 12 poles and fewer zeros than poles"
	badDeltaPeriod = "lti: sample period is not positive"
)

// SampleDelta samples num/den e^(-delay s), polynomials ascending and den
// monic in its last coefficient, with a zero-order hold of the given period.
// A delay below zero is allowed down to whole samples: it stands for an output
// that was logged late. Time should be scaled so that the poles are near one.
//
// The delay splits the hold interval in two (Åström & Wittenmark,
// Computer-Controlled Systems, 3rd ed., sec. 2.3). The derivatives are those of
// the matrix exponential along each companion entry, carried through its
// Taylor series and doublings, and through the recursion of Leverrier and
// Faddeev for the adjoint of qI - Φ.
func SampleDelta(num, den Poly, delay, period float64) Delta {
	return sampleDelta(num, den, delay, period, true)
}

// SampleDeltaValues is SampleDelta without the derivatives for denominator and
// delay, which are most of its work.
func SampleDeltaValues(num, den Poly, delay, period float64) Delta {
	return sampleDelta(num, den, delay, period, false)
}

func sampleDelta(num, den Poly, delay, period float64, slopes bool) Delta {
	n, m := len(den)-1, len(num)-1
	if n < 1 || n > maxDeltaPoles || m < 0 || m >= n {
		panic(badDeltaOrder)
	}
	if !(period > 0) {
		panic(badDeltaPeriod)
	}
	whole := math.Floor(delay / period)
	tau := delay - whole*period
	if tau < 0 || period-tau < 1e-12*period {
		tau, whole = 0, math.Round(delay/period)
	}

	// Augmented generator [[F, g], [0, 0]], F the companion matrix.
	size := n + 1
	gen := make(square, size*size)
	for i := range n - 1 {
		gen[i*size+i+1] = 1
	}
	for j := range n {
		gen[(n-1)*size+j] = -den[j]
	}
	gen[(n-1)*size+n] = 1

	nd := 0 // derivatives along a_1 … a_n that are carried
	params := m + 1
	if slopes {
		nd, params = n, m+1+n+1
	}
	late := newDual(gen, n, nd, period-tau) // exp(gen (h - τ)) - I
	whole1 := late                          // exp(gen h) - I
	if tau > 0 {
		whole1 = product(late, newDual(gen, n, nd, tau))
	}

	d := Delta{Whole: int(whole), Poles: n, Inputs: m + 1, Slopes: slopes}
	d.A = make([]float64, n+1)
	d.B0, d.B1 = make([]float64, n), make([]float64, n)
	d.DA, d.DB0, d.DB1 = grid(params, n+1), grid(params, n), grid(params, n)

	// Φ - I and the two input columns, each with n derivatives along a_1 … a_n.
	phi := block(whole1.v, n)
	dphi := make([]square, nd)
	gamma0, gamma1 := make([]float64, n), make([]float64, n)
	dgamma0, dgamma1 := grid(n+1, n), grid(n+1, n)
	for k := range nd {
		dphi[k] = block(whole1.d[k], n)
	}
	for i := range n {
		gamma0[i] = late.v[i*size+n]
		gamma1[i] = whole1.v[i*size+n] - gamma0[i]
		for k := range nd {
			dgamma0[k][i] = late.d[k][i*size+n]
			dgamma1[k][i] = whole1.d[k][i*size+n] - dgamma0[k][i]
		}
		// dΓ0/dτ = -exp(F (h - τ)) g, and dΓ1/dτ is its opposite.
		shift := late.v[i*size+n-1]
		if i == n-1 {
			shift++
		}
		dgamma0[n][i], dgamma1[n][i] = -shift, shift
	}

	// Leverrier-Faddeev: adj(δI - Φ) = Σ N_j δ^(n-1-j).
	adj := identity(n)
	dadj := make([]square, nd)
	for k := range dadj {
		dadj[k] = make(square, n*n)
	}
	d.A[0] = 1
	for j := range n {
		for i := range m + 1 {
			d.B0[j] += num[i] * rowDot(adj, i, gamma0)
			d.B1[j] += num[i] * rowDot(adj, i, gamma1)
			d.DB0[i][j] = rowDot(adj, i, gamma0)
			d.DB1[i][j] = rowDot(adj, i, gamma1)
			for k := range nd {
				d.DB0[m+1+k][j] += num[i] * (rowDot(dadj[k], i, gamma0) + rowDot(adj, i, dgamma0[k]))
				d.DB1[m+1+k][j] += num[i] * (rowDot(dadj[k], i, gamma1) + rowDot(adj, i, dgamma1[k]))
			}
			if slopes {
				d.DB0[params-1][j] += num[i] * rowDot(adj, i, dgamma0[n])
				d.DB1[params-1][j] += num[i] * rowDot(adj, i, dgamma1[n])
			}
		}
		next := mul(phi, adj, n)
		d.A[j+1] = -trace(next, n) / float64(j+1)
		for k := range nd {
			dnext := mul(dphi[k], adj, n)
			addMul(dnext, phi, dadj[k], n)
			d.DA[m+1+k][j+1] = -trace(dnext, n) / float64(j+1)
			for i := range n {
				dnext[i*n+i] += d.DA[m+1+k][j+1]
			}
			dadj[k] = dnext
		}
		for i := range n {
			next[i*n+i] += d.A[j+1]
		}
		adj = next
	}
	return d
}

// Shift writes into dst the coefficients in powers of q^-1 of
// Σ_j coef[j] (1-q^-1)^(len(coef)-1-j) q^-j and returns it; nil allocates.
func Shift(dst, coef []float64) []float64 {
	n := len(coef)
	if dst == nil {
		dst = make([]float64, n)
	}
	for i := range dst {
		dst[i] = 0
	}
	// Horner in (1 - q^-1), highest power first; multiplying by q^-1 moves up.
	for j, c := range coef {
		// dst <- dst (1 - q^-1) + c q^-j
		for i := j; i > 0; i-- {
			dst[i] -= dst[i-1]
		}
		dst[j] += c
	}
	return dst
}

// ShiftInput returns the coefficients in powers of q^-1 of the numerator that
// b0 and b1 make as Delta's B0 and B1 do; the first, of q^0, is zero.
func ShiftInput(b0, b1 []float64) []float64 {
	b := make([]float64, len(b0)+2)
	for i, v := range Shift(nil, b0) {
		b[i+1] += v
	}
	for i, v := range Shift(nil, b1) {
		b[i+2] += v
	}
	return b
}

// Unshift is the inverse of Shift: from powers of q^-1 to the coefficients of
// (1-q^-1)^(n-j) q^-j.
func Unshift(p []float64) []float64 {
	// With z = 1 + δ the polynomial Σ p[i] z^(n-i) is expanded at z = 1.
	n := len(p)
	c := append([]float64(nil), p...)
	for stop := n; stop > 0; stop-- {
		for i := 1; i < stop; i++ {
			c[i] += c[i-1]
		}
	}
	return c
}

// square is a small square matrix, row by row.
type square []float64

// dual is a matrix and its derivatives.
type dual struct {
	v square
	d []square
}

// newDual returns exp(gen t) - I and its derivatives along the first nd of the n
// companion entries a_1 … a_n, which sit at row n-1, columns n-1 … 0, with
// opposite sign.
func newDual(gen square, n, nd int, t float64) dual {
	size := n + 1
	var norm float64
	for i := range size {
		var row float64
		for j := range size {
			row += math.Abs(gen[i*size+j])
		}
		norm = math.Max(norm, row*t)
	}
	halvings := 0
	for norm > 0.5 && halvings < 60 {
		norm /= 2
		halvings++
	}
	step := math.Ldexp(t, -halvings)
	x := make(square, size*size)
	for i, v := range gen {
		x[i] = v * step
	}
	e := dual{v: make(square, size*size), d: make([]square, nd)}
	term := dual{v: identity(size), d: make([]square, nd)}
	for k := range nd {
		e.d[k] = make(square, size*size)
		term.d[k] = make(square, size*size)
	}
	// Taylor series; the terms shrink at least like norm^i / i!, their
	// derivatives like norm^(i-1) / (i-1)!.
	left := 1.0
	for i := 1; i <= 17 && left > 1e-18; i++ {
		f := 1 / float64(i)
		if i > 1 {
			left *= norm / float64(i-1)
		}
		for k := range nd {
			next := mul(term.d[k], x, size)
			// term · dx, dx has the single entry (n-1, n-1-k) = -step.
			col := n - 1 - k
			for r := range size {
				next[r*size+col] -= term.v[r*size+n-1] * step
			}
			scale(next, f)
			term.d[k] = next
			add(e.d[k], next)
		}
		term.v = mul(term.v, x, size)
		scale(term.v, f)
		add(e.v, term.v)
	}
	for range halvings {
		e = product(e, e)
	}
	return e
}

// product returns (I + a)(I + b) - I with derivatives.
func product(a, b dual) dual {
	size := int(math.Round(math.Sqrt(float64(len(a.v)))))
	p := dual{v: mul(a.v, b.v, size), d: make([]square, len(a.d))}
	add(p.v, a.v)
	add(p.v, b.v)
	for k := range p.d {
		p.d[k] = mul(a.d[k], b.v, size)
		addMul(p.d[k], a.v, b.d[k], size)
		add(p.d[k], a.d[k])
		add(p.d[k], b.d[k])
	}
	return p
}

func identity(n int) square {
	m := make(square, n*n)
	for i := range n {
		m[i*n+i] = 1
	}
	return m
}

func block(m square, n int) square {
	b := make(square, n*n)
	for i := range n {
		copy(b[i*n:(i+1)*n], m[i*(n+1):])
	}
	return b
}

func mul(a, b square, n int) square {
	c := make(square, n*n)
	addMul(c, a, b, n)
	return c
}

func addMul(c, a, b square, n int) {
	for i := range n {
		row := c[i*n : (i+1)*n]
		for k := range n {
			f := a[i*n+k]
			if f == 0 {
				continue
			}
			for j, v := range b[k*n : (k+1)*n] {
				row[j] += f * v
			}
		}
	}
}

func add(a, b square) {
	for i, v := range b {
		a[i] += v
	}
}

func scale(a square, f float64) {
	for i := range a {
		a[i] *= f
	}
}

func trace(a square, n int) float64 {
	var t float64
	for i := range n {
		t += a[i*n+i]
	}
	return t
}

func rowDot(a square, i int, x []float64) float64 {
	n := len(x)
	var s float64
	for j, v := range a[i*n : (i+1)*n] {
		s += v * x[j]
	}
	return s
}

func grid(rows, cols int) [][]float64 {
	flat := make([]float64, rows*cols)
	g := make([][]float64, rows)
	for i := range g {
		g[i] = flat[i*cols : (i+1)*cols]
	}
	return g
}
