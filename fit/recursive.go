package fit

import (
	"errors"
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Recursive runs the one-step predictor of a fixed model over rows as they come
// and keeps the sums that tell how the plant has moved since. Each row costs the
// same, and nothing of it is kept but the sums.
//
// Near the model the prediction errors are linear in its parameters, e + J δ, so
// that the sums of J'J and J'e over a stretch of rows hold all that the stretch
// says about δ (the local approach: Benveniste, Basseville & Moustakides, The
// asymptotic local approach to change detection and model validation, IEEE Trans.
// Automatic Control 32 (1987) 583-592; recursive prediction errors: Ljung, System
// Identification, 2nd ed., Prentice Hall 1999, sec. 11.4). Plant, noise shape and
// the stretch's own constant are all free: a move of the operating point or of the
// disturbance is none of the plant.
type Recursive struct {
	shape              Shape
	ad, bd, a, b, c, d []float64 // powers of q^-1
	whole              int
	u0, y0             float64
	cols               []column
	unit               []float64 // of the parameters
	past               int
	w                  workspace // past rows, then a chunk
	step               []float64 // 1/C of the constant since the start
	scratch            []float64
	rows               int // since the start
	settle             int
	columns            []float64 // of a chunk, one after another, the constant's last
	sums               Sums
}

// RecursiveChunk is the largest number of rows that Recursive takes at once.
const RecursiveChunk = 512

const (
	badAdvance = "fit: a recursive predictor takes no delay below zero"
	badChunk   = "fit: input and output differ in length, or are longer than a chunk"
	badSums    = "fit: sums of different models"
)

// startLeft is what is left of the errors of an unknown past, of those right at the start, when rows begin to count.
const startLeft = 1e-3

// NewRecursive prepares the predictor of m, whose Cov it does not need, about the
// operating point u0, y0. It panics for a delay below zero.
func NewRecursive(m *Prediction, u0, y0 float64) *Recursive {
	if m.Delay < 0 {
		panic(badAdvance)
	}
	s := &search{Predictor: &Predictor{Period: m.Period, su: 1, sy: 1}, shape: m.Shape, w0: timeScale(m.Den, m.Period)}
	s.h = m.Period * s.w0
	x := s.scaled(m)
	q := shifted{delta: lti.SampleDelta(x.num, x.den, x.tau, s.h), d: lti.Shift(nil, x.d), c: lti.Shift(nil, x.c)}
	q.whole = q.delta.Whole
	q.a, q.b = lti.Shift(nil, q.delta.A), lti.ShiftInput(q.delta.B0, q.delta.B1)
	r := &Recursive{
		shape: m.Shape, ad: lti.Poly(q.a).Mul(q.d), bd: lti.Poly(q.b).Mul(q.d), a: q.a, b: q.b, c: q.c, d: q.d, whole: q.whole,
		u0: u0, y0: y0, cols: s.columns(q), unit: s.units(),
	}
	var slow float64
	for _, z := range delayRoots(q.c) {
		slow = math.Max(slow, cmplx.Abs(z))
	}
	r.past = len(r.ad) + len(r.bd) + r.whole
	r.settle = r.past
	if slow > 0 {
		r.settle += int(math.Ceil(math.Log(startLeft) / math.Log(slow)))
	}
	for _, x := range r.signals() {
		*x = make([]float64, r.past+RecursiveChunk)
	}
	r.scratch = make([]float64, r.past+RecursiveChunk)
	r.columns = make([]float64, (len(r.cols)+1)*RecursiveChunk)
	r.sums = r.empty()
	return r
}

// signals are those whose past the next rows need.
func (r *Recursive) signals() []*[]float64 {
	w := &r.w
	return []*[]float64{&w.y, &w.u, &w.e, &w.yf, &w.uf, &w.vf, &w.ef, &r.step}
}

// Settle is the number of rows after a start that tell the past only.
func (r *Recursive) Settle() int { return r.settle }

// Restart forgets the past: the next row does not follow the last one.
func (r *Recursive) Restart() { r.rows = 0 }

// Add takes the rows that follow and returns the prediction errors of those that
// count, the last ones, in the output's units; they stand until the next call.
// u[k] acts from y[k] on. It panics for rows of unequal number, or more than
// RecursiveChunk of them.
func (r *Recursive) Add(u, y []float64) []float64 {
	n, w, p := len(u), &r.w, r.past
	if len(y) != n || n > RecursiveChunk {
		panic(badChunk)
	}
	if n == 0 {
		return nil
	}
	if r.rows == 0 { // as if it had rested where the first row is
		for _, x := range r.signals() {
			clear((*x)[:p])
		}
		for k := range p {
			w.y[k], w.u[k] = y[0]-r.y0, u[0]-r.u0
		}
	}
	for k := range n {
		w.y[p+k], w.u[p+k] = y[k]-r.y0, u[k]-r.u0
	}
	in := r.scratch[:p+n]
	over := func(dst []float64, c []float64) { divide(dst[:p+n], in, c, p) }
	equation := func(a, b []float64) {
		fir(in[p:], w.y, a, p, 1, false)
		fir(in[p:], w.u, b, p-r.whole, -1, true)
	}
	equation(r.ad, r.bd)
	over(w.e, r.c)
	copy(in[p:], w.e[p:])
	over(w.ef, r.c)
	fir(in[p:], w.y, r.d, p, 1, false)
	over(w.yf, r.c)
	fir(in[p:], w.u, r.d, p, 1, false)
	over(w.uf, r.c)
	if len(r.d) > 1 {
		equation(r.a, r.b)
		over(w.vf, r.c)
	}
	for k := p; k < p+n; k++ {
		in[k] = 1
	}
	over(r.step, r.c)

	from := p + max(0, min(n, r.settle-r.rows))
	r.rows += n
	r.take(from, p+n)
	errs := r.scratch[:copy(r.scratch, w.e[from:p+n])]
	for _, x := range r.signals() {
		copy(*x, (*x)[n:p+n])
	}
	return errs
}

// take adds rows [from, to) of the workspace to the sums.
func (r *Recursive) take(from, to int) {
	col := func(i int) []float64 { return r.columns[i*RecursiveChunk:][:to-from] }
	for i := range r.cols {
		r.cols[i].at(col(i), &r.w.filtered, from)
	}
	floats.ScaleTo(col(len(r.cols)), -1, r.step[from:to])
	e, s := r.w.e[from:to], &r.sums
	for i := range s.size {
		for j := i; j < s.size; j++ {
			s.jj[i*s.size+j] += floats.Dot(col(i), col(j))
		}
		s.je[i] += floats.Dot(col(i), e)
	}
	s.ee += floats.Dot(e, e)
	s.Rows += to - from
}

// Take returns the sums of the rows that counted since the last call.
func (r *Recursive) Take() Sums {
	s := r.sums
	r.sums = r.empty()
	return s
}

func (r *Recursive) empty() Sums {
	n := len(r.cols) + 1
	return Sums{shape: r.shape, unit: r.unit, size: n, jj: make([]float64, n*n), je: make([]float64, n)}
}

// Sums is all that a stretch of rows says of how a plant has moved.
type Sums struct {
	Rows   int
	shape  Shape
	unit   []float64
	size   int       // of the normal equations, the constant last
	jj, je []float64 // upper triangle, row by row
	ee     float64
}

// Forget returns keep times s, the rows of which then count so much less, and t:
// with a keep below one the sums of an estimate that forgets exponentially (Ljung
// 1999, sec. 11.2). The zero Sums is that of no rows. It panics for sums of
// different models.
func (s Sums) Forget(keep float64, t Sums) Sums {
	if s.size == 0 {
		return t
	}
	if s.size != t.size {
		panic(badSums)
	}
	out := t
	out.Rows = int(math.Round(keep*float64(s.Rows))) + t.Rows
	out.ee = keep*s.ee + t.ee
	out.jj, out.je = floats.AddScaledTo(make([]float64, len(t.jj)), t.jj, keep, s.jj), floats.AddScaledTo(make([]float64, len(t.je)), t.je, keep, s.je)
	return out
}

// Drift is how a model has moved by least squares over the rows of Sums: of
// b_0 … b_m, a_1 … a_n, the delay where it is free, D and C in powers of δ, as in
// Prediction.Cov. What integrators hold at zero has not moved.
type Drift struct {
	Moved    []float64
	Cov      *mat.SymDense // by the curvature: right where the errors are white
	Variance float64       // of the errors with the model moved
}

// leastTold is the reciprocal of the condition of the equilibrated normal equations from which rounding decides.
const leastTold = 1e-11

// Drift solves for the move, the constant a free one of these rows. It returns
// ErrSingular where the rows do not tell the parameters apart.
func (s Sums) Drift() (*Drift, error) {
	var index []int
	for i := range s.size {
		if i == s.size-1 || !s.shape.fixed(i) {
			index = append(index, i)
		}
	}
	n := len(index)
	if s.Rows <= n {
		return nil, ErrSingular
	}
	at := func(i, j int) float64 { return s.jj[index[i]*s.size+index[j]] }
	h, scale, g := mat.NewSymDense(n, nil), make([]float64, n), mat.NewVecDense(n, nil)
	for i := range index {
		scale[i] = 1 / math.Sqrt(at(i, i))
		g.SetVec(i, -s.je[index[i]]*scale[i])
	}
	for i := range n {
		for j := i; j < n; j++ {
			h.SetSym(i, j, at(i, j)*scale[i]*scale[j])
		}
	}
	var chol mat.Cholesky
	if holdsNonFinite(scale) || !chol.Factorize(h) || !(chol.Cond() < 1/leastTold) {
		return nil, ErrSingular
	}
	var x mat.VecDense
	var inv mat.SymDense
	if err := errors.Join(chol.SolveVecTo(&x, g), chol.InverseTo(&inv)); err != nil {
		return nil, ErrSingular
	}
	d := &Drift{Moved: make([]float64, s.size-1), Cov: mat.NewSymDense(s.size-1, nil)}
	d.Variance = math.Max(0, s.ee-mat.Dot(&x, g)) / float64(s.Rows-n)
	for i, k := range index[:n-1] {
		d.Moved[k] = x.AtVec(i) * scale[i] * s.unit[k]
		for j, l := range index[:n-1] {
			if l >= k {
				d.Cov.SetSym(k, l, d.Variance*inv.At(i, j)*scale[i]*scale[j]*s.unit[k]*s.unit[l])
			}
		}
	}
	return d, nil
}

// Moved returns m after a step in its parameters, in the order of Cov: noise
// zeros and colour poles inside the unit circle, the delay not below zero.
func (m *Prediction) Moved(step []float64) *Prediction {
	x := point{
		num: append(lti.Poly(nil), m.Num...), den: append(lti.Poly(nil), m.Den...), tau: m.Delay,
		d: unshifted(m.D, m.Colour), c: unshifted(m.C, m.Poles+m.Colour),
	}
	add(&x, step, m.Shape)
	return &Prediction{
		Shape: m.Shape, Num: x.num, Den: x.den, Delay: math.Max(0, x.tau),
		D: lti.Shift(nil, reflect(x.d)), C: lti.Shift(nil, reflect(x.c)), Period: m.Period,
	}
}
