package fit

import (
	"errors"
	"math"
	"math/bits"
	"slices"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
)

// transient holds the responses of 1/C from a record's first equation on: S to
// a step, and G_i to a past error of one i+1 rows before.
type transient struct {
	rows    int
	settled int         // rows after which S is constant and G vanishes
	step    []float64   // S over settled rows and a block more
	free    [][]float64 // G over settled rows, and on to the end of their chunk
	pulse   []float64
}

// block is how many rows at most a sum runs over at once that would else need as
// many numbers as the record has rows.
const block = 1 << 16

// steps returns S over rows [from, to), at most a block of them.
func (r *transient) steps(from, to int) []float64 {
	at := min(from, r.settled)
	return r.step[at : at+to-from]
}

// alongStep returns the product of S with x over its first rows.
func (r *transient) alongStep(x []float64) float64 {
	var sum float64
	for from := 0; from < len(x); from += block {
		to := min(len(x), from+block)
		sum += floats.Dot(r.steps(from, to), x[from:to])
	}
	return sum
}

// addStep adds f S to the rows of x.
func (r *transient) addStep(x []float64, f float64) {
	for from := 0; from < len(x); from += block {
		to := min(len(x), from+block)
		floats.AddScaled(x[from:to], f, r.steps(from, to))
	}
}

// settleBlock is after how many rows each it is asked whether responses have
// settled.
const settleBlock = 128

// run fills the responses over rows rows: from the response g to a pulse S is
// its sum and G_i, of i = n-1 … 0, is -c_{i+1} g plus G_{i+1} a row later.
func (r *transient) run(c []float64, rows int) {
	n := len(c) - 1
	const past = maxNoise // rows before the pulse
	final := 1 / sum(c)
	grow := func(x []float64, n int) []float64 { return slices.Grow(x[:0], n)[:n] }
	r.rows = rows
	r.step = r.step[:0]
	r.pulse = grow(r.pulse, past)
	for len(r.free) < n {
		r.free = append(r.free, nil)
	}
	r.free = r.free[:n]
	clear(r.pulse)
	last := 0.0 // of S
	r.settled = 0
	for settled := false; r.settled < rows && !settled; {
		from, to := r.settled, min(rows, r.settled+settleBlock)
		r.pulse = slices.Grow(r.pulse, to-from)[:past+to]
		g := r.pulse[past:]
		clear(g[from:to])
		if from == 0 {
			g[0] = 1
		}
		divide(r.pulse, r.pulse, c, past+from)
		for k := from; k < to; k++ {
			last += g[k]
			r.step = append(r.step, last)
		}
		r.settled, settled = to, true
		for k := max(0, to-n-1); k < to; k++ {
			settled = settled && math.Abs(r.step[k]-final) <= 1e-11*math.Abs(final) && math.Abs(g[k]) <= 1e-11
		}
	}
	for k := r.settled; k < min(rows, r.settled+block); k++ {
		r.step = append(r.step, final)
	}
	g := r.pulse[past:]
	for i := n - 1; i >= 0; i-- {
		r.free[i] = grow(r.free[i], min(rows, (r.settled+chunk-1)/chunk*chunk))
		out := r.free[i]
		floats.ScaleTo(out[:r.settled], -c[i+1], g[:r.settled])
		if i < n-1 && r.settled > 0 {
			floats.Add(out[1:r.settled], r.free[i+1][:r.settled-1])
		}
		clear(out[r.settled:])
	}
}

// maxNoise is the largest degree of C.
const maxNoise = maxFitPoles + maxColour

// square is a matrix of side 1 + deg C at most, row by row.
type square [(maxNoise + 1) * (maxNoise + 1)]float64

// gram returns the information matrix of κ and ε_1 … ε_n over rows rows, in
// units of the error's variance, the prior of ε included: the sum over rows of
// the squares of (-S, G) plus one for each ε. c is in powers of δ.
//
// The state of 1/C, s_j = (1-q^-1)^(n-j) e_{k-j}, moves by
// s_1' = s_1 - Σ c_j s_j + κ and s_j' = s_j + s_{j-1}, and its last entry is
// e_{k-n}, so that the sum of that over n more rows holds the ε themselves. The
// sum over 2k rows is that over k plus as much again seen through F^k: as many
// steps as the number of rows has digits. F^k - 1 is what is carried, since
// slow zeros leave little else than 1 in F.
func gram(c []float64, rows int) *mat.SymDense {
	n := len(c) - 1
	m := n + 1
	if rows == 0 {
		return priorOnly(m)
	}
	var f, p, w square // F - 1, F^k - 1, the sum; state -κ, s_1 … s_n
	if n > 0 {
		f[m] = -1
		for j := 1; j <= n; j++ {
			f[m+j] = -c[j]
		}
	}
	for i := 2; i < m; i++ {
		f[i*m+i-1] = 1
	}
	after := func(a, b *square) (out square) { // (1 + a)(1 + b) - 1
		for i := range m * m {
			out[i] = a[i] + b[i]
		}
		for i := range m {
			for k := range m {
				if v := a[i*m+k]; v != 0 {
					for j := range m {
						out[i*m+j] += v * b[k*m+j]
					}
				}
			}
		}
		return out
	}
	for bit := bits.Len(uint(rows+n)) - 1; bit >= 0; bit-- {
		// w += (1 + p)' w (1 + p)
		var wp square
		for i := range m {
			for k := range m {
				wp[i*m+k] += w[i*m+k]
				for j := range m {
					wp[i*m+j] += w[i*m+k] * p[k*m+j]
				}
			}
		}
		for i := range m * m {
			w[i] += wp[i]
		}
		for k := range m {
			for i := range m {
				for j := range m {
					w[i*m+j] += p[k*m+i] * wp[k*m+j]
				}
			}
		}
		p = after(&p, &p)
		if (rows+n)>>bit&1 == 0 {
			continue
		}
		var row [maxNoise + 1]float64 // of F^k, that of the last entry
		copy(row[:m], p[(m-1)*m:m*m])
		row[m-1]++
		for i := range m {
			for j := range m {
				w[i*m+j] += row[i] * row[j]
			}
		}
		p = after(&p, &f)
	}
	// From s to ε: s_j = Σ_i (-1)^i (n-j over i) ε_{j+i}.
	var t square
	t[0] = 1
	for j := 1; j <= n; j++ {
		v := 1.0
		for i := 0; j+i <= n; i++ {
			t[j*m+j+i] = v
			v *= -float64(n-j-i) / float64(i+1)
		}
	}
	out := mat.NewSymDense(m, nil)
	for a := range m {
		for b := a; b < m; b++ {
			var v float64
			for i := range m {
				for j := range m {
					v += t[i*m+a] * w[i*m+j] * t[j*m+b]
				}
			}
			out.SetSym(a, b, v)
		}
	}
	return out
}

// priorOnly is gram's matrix over no rows.
func priorOnly(m int) *mat.SymDense {
	h := mat.NewSymDense(m, nil)
	for i := 1; i < m; i++ {
		h.SetSym(i, i, 1)
	}
	return h
}

// startUp is log det(I + G'G) over so many rows, not finite where G is not.
func startUp(c []float64, rows int) float64 {
	if rows == 0 {
		return 0
	}
	return logDet(gram(c, rows), 1)
}

// gather sets up the linear least squares of κ and ε over the first rows, whose
// errors without either are e.
func (w *workspace) gather(l *local, e []float64) {
	q := l.h.SymmetricDim()
	if cap(l.x) < q {
		l.x, l.g = make([]float64, q), make([]float64, q)
	}
	l.x, l.g = l.x[:q], l.g[:q]
	l.g[0] = w.alongStep(e)
	m := min(w.settled, len(e))
	for i := 1; i < q; i++ {
		l.g[i] = -floats.Dot(w.free[i-1][:m], e[:m])
	}
}

// solveShare solves for the κ that records share and for the ε of each. Of
// several records each first gives its own ε up, and what is left is one
// equation for κ.
func (s *search) solveShare(share []int) bool {
	if len(share) == 1 {
		l := &s.work[share[0]].all
		return solveScaled(l.x, l.h, l.g, 0)
	}
	var info, slope float64
	for _, i := range share {
		w := &s.work[i]
		a, b, ok := w.all.constant()
		c, d, okFirst := w.first.constant()
		if !ok || !okFirst {
			return false
		}
		info, slope = info+a-c, slope+b-d
	}
	if !(info > 0) {
		return false
	}
	s.shared += math.Log(info)
	for _, i := range share {
		w := &s.work[i]
		if !w.all.given(slope/info) || !w.first.given(slope/info) {
			return false
		}
	}
	return true
}

// constant returns what is left of the equation info κ = slope without ε.
func (l *local) constant() (info, slope float64, ok bool) {
	cross := make([]float64, len(l.g)-1)
	for k := range cross {
		cross[k] = l.h.At(0, k+1)
	}
	x := l.x[1:]
	ok = solveScaled(x, l.ownErrors(), cross, 0)
	return l.h.At(0, 0) - floats.Dot(cross, x), l.g[0] - floats.Dot(l.g[1:], x), ok
}

// given solves for ε with κ known.
func (l *local) given(kappa float64) bool {
	l.x[0] = kappa
	rest := make([]float64, len(l.g)-1)
	for k := range rest {
		rest[k] = l.g[k+1] - kappa*l.h.At(0, k+1)
	}
	return solveScaled(l.x[1:], l.ownErrors(), rest, 0)
}

// ownErrors is the information about ε alone.
func (l *local) ownErrors() *mat.SymDense {
	return l.h.SliceSym(1, l.h.SymmetricDim()).(*mat.SymDense)
}

// squares is what κ and ε leave of the squares of e, prior included.
func (l *local) squares(e []float64) float64 {
	if len(e) == 0 {
		return 0
	}
	x := mat.NewVecDense(len(l.x), l.x)
	return floats.Dot(e, e) - 2*floats.Dot(l.g, l.x) + mat.Inner(x, l.h, x)
}

// apply takes κ and ε out of a record's errors and returns their sum of
// squares, prior included.
func (w *workspace) apply(t0 int) float64 {
	e, x := w.e[t0:], w.all.x
	w.addStep(e, -x[0])
	var rss float64
	for i := 1; i < len(x); i++ {
		floats.AddScaled(e[:w.settled], x[i], w.free[i-1][:w.settled])
		w.e[t0-i] = x[i]
		rss += x[i] * x[i]
	}
	return rss + floats.Dot(e, e)
}

// restart gives the first rows of a record the start-up errors that suit them
// alone.
func (w *workspace) restart(t0, rows int) {
	m := min(w.settled, rows)
	for i, g := range w.free {
		floats.AddScaled(w.e[t0:t0+m], w.first.x[i+1]-w.all.x[i+1], g[:m])
		w.e[t0-1-i] = w.first.x[i+1]
	}
}

// logDet is the log of the determinant of h without its first skip rows and
// columns, not finite where that is not positive definite.
func logDet(h *mat.SymDense, skip int) float64 {
	n := h.SymmetricDim() - skip
	if n == 0 {
		return 0
	}
	part := mat.NewSymDense(n, nil)
	for i := range n {
		for j := i; j < n; j++ {
			part.SetSym(i, j, h.At(skip+i, skip+j))
		}
	}
	var chol mat.Cholesky
	if !chol.Factorize(part) {
		return math.NaN()
	}
	return chol.LogDet()
}

// solveScaled solves (H + damping diag H) x = g for a symmetric positive
// definite H after scaling it to unit diagonal.
func solveScaled(x []float64, h *mat.SymDense, g []float64, damping float64) bool {
	n := len(g)
	sd := make([]float64, n)
	for i := range sd {
		sd[i] = math.Sqrt(h.At(i, i))
		if !(sd[i] > 0) || math.IsInf(sd[i], 0) {
			return false
		}
	}
	s := mat.NewSymDense(n, nil)
	b := mat.NewVecDense(n, nil)
	for i := range n {
		for j := i; j < n; j++ {
			s.SetSym(i, j, h.At(i, j)/(sd[i]*sd[j]))
		}
		s.SetSym(i, i, 1+damping)
		b.SetVec(i, g[i]/sd[i])
	}
	var chol mat.Cholesky
	if !chol.Factorize(s) {
		return false
	}
	y := mat.NewVecDense(n, nil)
	if err := chol.SolveVecTo(y, b); err != nil {
		var cond mat.Condition
		if !errors.As(err, &cond) {
			return false
		}
	}
	for i := range x {
		x[i] = y.AtVec(i) / sd[i]
	}
	return !holdsNonFinite(x)
}
