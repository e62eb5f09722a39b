package fit

import (
	"errors"
	"math"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
)

// transient holds the responses of 1/C from a record's first equation on: S to
// a step, and G_i to a past error of one i+1 rows before.
type transient struct {
	step    []float64
	free    [][]float64
	settled int // rows after which S is constant and G vanishes
}

// run fills the responses over rows rows.
func (r *transient) run(c []float64, rows int) {
	n := len(c) - 1
	final := 1 / sum(c)
	if cap(r.step) < rows {
		r.step = make([]float64, rows)
	}
	r.step = r.step[:rows]
	for len(r.free) < n {
		r.free = append(r.free, nil)
	}
	r.free = r.free[:n]
	for i := range r.free {
		if cap(r.free[i]) < rows {
			r.free[i] = make([]float64, rows)
		}
		r.free[i] = r.free[i][:rows]
	}
	r.settled = rows
	scale := math.Abs(final)
	quiet := 0
	for k := range rows {
		v := 1.0
		for j := 1; j <= n && j <= k; j++ {
			v -= c[j] * r.step[k-j]
		}
		r.step[k] = v
		big := math.Abs(v-final) > 1e-11*scale
		for i := range n {
			var g float64
			for j := 1; j <= n; j++ {
				switch {
				case k-j >= 0:
					g -= c[j] * r.free[i][k-j]
				case j-k == i+1:
					g -= c[j]
				}
			}
			r.free[i][k] = g
			big = big || math.Abs(g) > 1e-11
		}
		if big {
			quiet = 0
		} else if quiet++; quiet > n {
			r.settled = k
			break
		}
	}
	for k := r.settled; k < rows; k++ {
		r.step[k] = final
	}
	for i := range n {
		clear(r.free[i][r.settled:])
	}
}

// solveLocal finds κ and ε of a record by linear least squares, applies them
// to its errors and returns their sum of squares, prior included.
func (w *workspace) solveLocal(t0 int) (float64, bool) {
	h := w.information()
	q := h.SymmetricDim()
	if cap(w.local) < q {
		w.local = make([]float64, q)
	}
	w.local = w.local[:q]
	e := w.e[t0:]
	g := make([]float64, q)
	g[0] = floats.Dot(w.step, e)
	for i := 1; i < q; i++ {
		g[i] = -floats.Dot(w.free[i-1][:w.settled], e[:w.settled])
	}
	if !solveScaled(w.local, h, g, 0) {
		return 0, false
	}
	if w.logDet = logDet(h, 1); holdsNonFinite([]float64{w.logDet}) {
		return 0, false
	}
	floats.AddScaled(e, -w.local[0], w.step)
	var rss float64
	for i := 1; i < q; i++ {
		floats.AddScaled(e[:w.settled], w.local[i], w.free[i-1][:w.settled])
		w.e[t0-i] = w.local[i]
		rss += w.local[i] * w.local[i]
	}
	return rss + floats.Dot(e, e), true
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

// information returns the information matrix of κ and ε_1 … ε_n in units of
// the error's variance, the prior of ε included.
func (r *transient) information() *mat.SymDense {
	q := len(r.free) + 1
	h := mat.NewSymDense(q, nil)
	h.SetSym(0, 0, floats.Dot(r.step, r.step))
	for i := 1; i < q; i++ {
		gi := r.free[i-1][:r.settled]
		h.SetSym(0, i, -floats.Dot(gi, r.step[:r.settled]))
		for j := i; j < q; j++ {
			v := floats.Dot(gi, r.free[j-1][:r.settled])
			if i == j {
				v++
			}
			h.SetSym(i, j, v)
		}
	}
	return h
}
