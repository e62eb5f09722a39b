package fit

import (
	"errors"
	"math"
	"math/cmplx"
	"sync"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Shape fixes the structure of a prediction-error model.
type Shape struct {
	Poles  int // of the plant, 1 or more
	Zeros  int // of the plant, fewer than Poles
	Colour int // poles of the disturbance's own, 0 to 2
	// Integrators is how many of the plant's poles are held at zero.
	Integrators int
	// FreeDelay estimates the delay too; else it stays where the start puts it.
	FreeDelay bool
}

// Free returns the number of free parameters that structures of this shape
// share over all records: numerator, denominator, delay, colour, noise zeros.
func (s Shape) Free() int { return s.size() - s.Integrators }

// size counts the fixed coefficients of integrators as well.
func (s Shape) size() int {
	n := s.Zeros + 1 + s.Poles + s.Colour + s.Poles + s.Colour
	if s.FreeDelay {
		n++
	}
	return n
}

// fixed reports whether parameter k is one that integrators hold at zero.
func (s Shape) fixed(k int) bool {
	end := s.Zeros + 1 + s.Poles
	return k < end && k >= end-s.Integrators
}

// Prediction is a plant in continuous time with its noise shape,
//
//	A(q) D(q) y = B(q) D(q) u + κ + C(q) e,
//
// A and B the zero-order-hold samples of Num/Den e^(-Delay s), κ a constant
// for each record. Plant and noise share A, so that the predictor is stable
// for an unstable plant as soon as C is (Forssell & Ljung, Identification of
// unstable systems using output error and Box-Jenkins model structures, IEEE
// Trans. Automatic Control 45 (2000) 137-141).
type Prediction struct {
	Shape
	Num, Den lti.Poly  // ascending powers of s; Den ends in 1
	Delay    float64   // s
	D, C     []float64 // powers of z^-1, monic
	Period   float64   // s

	Const    []float64 // κ of each record, output units
	RSS      float64   // of the prediction errors, start-up errors included
	LogDet   float64   // of the start-up errors' information, the rest of the exact likelihood
	Rows     int       // equations used
	Variance float64   // of e
	// Cov is the covariance of b_0 … b_m, a_1 … a_n, the delay where it is
	// free, and then the coefficients of D and C in powers of δ = q - 1.
	Cov       *mat.SymDense
	Condition float64 // of the equilibrated information matrix
	Converged bool
	Steps     int
}

// TF returns the plant.
func (p *Prediction) TF() lti.TF { return lti.TF{Num: p.Num, Den: p.Den, Delay: p.Delay} }

// BIC is Schwarz's criterion over the rows of the fit, by the exact likelihood.
func (p *Prediction) BIC() float64 {
	return BIC.Value(p.Objective(), p.Rows, p.Free()+len(p.Const))
}

// Objective is what a fit makes least: the sum of squares times the part of the
// exact likelihood that start-up errors bring, in the output's units squared.
func (p *Prediction) Objective() float64 { return p.RSS * math.Exp(p.LogDet/float64(p.Rows)) }

// H returns the noise shape C/(A D), as y = G u + H e.
func (p *Prediction) H() lti.DTF {
	d := lti.SampleDelta(p.Num, p.Den, p.Delay, p.Period)
	return lti.DTF{Num: append(lti.Poly(nil), p.C...), Den: lti.Poly(lti.Shift(nil, d.A)).Mul(p.D), Period: p.Period}
}

// ErrNoFit says that no step from the start improved on it in finite numbers.
var ErrNoFit = errors.New("fit: prediction errors are not finite at the start")

// Predictor holds records ready for many fits of different shapes on the same
// equations, so that their criteria compare.
type Predictor struct {
	Period float64 // s
	Lead   int     // rows of each record that serve as past only
	// DelayRange bounds a free delay, s.
	DelayRange [2]float64

	recs   []Record // means removed, scaled to unit deviation
	padded []Record // the same behind pad zeros
	meanU  []float64
	meanY  []float64
	su, sy float64
	rows   int
	pad    int
	spare  sync.Pool // of []workspace, for searches to come
}

// maxFitPoles and maxColour bound the shapes that a Predictor takes.
const (
	maxFitPoles = 8
	maxColour   = 2
)

const (
	badShape = "fit: shape needs 1 to 8 poles, fewer zeros than poles, at most 2 colour poles, no more integrators than poles"
	badDelay = "fit: delay lies before the output or past the lead of the predictor"
)

// NewPredictor prepares records sampled every period seconds for fits with
// delays up to maxDelay seconds. Records too short to have any equation are
// left out; an error says if none is left.
func NewPredictor(recs []Record, period, maxDelay float64) (*Predictor, error) {
	checkRecords(recs)
	p := &Predictor{Period: period, DelayRange: [2]float64{-period, maxDelay}}
	p.Lead = maxFitPoles + 2 + maxColour + int(math.Ceil(maxDelay/period))
	p.pad = p.Lead + maxFitPoles + maxColour + 4
	var uu, yy, n float64
	for _, r := range recs {
		if len(r.Y) < 2*p.Lead+8 {
			continue
		}
		mu, my := floats.Sum(r.U)/float64(len(r.U)), floats.Sum(r.Y)/float64(len(r.Y))
		c := Record{U: make([]float64, len(r.U)), Y: make([]float64, len(r.Y))}
		for i := range r.U {
			c.U[i], c.Y[i] = r.U[i]-mu, r.Y[i]-my
			uu += c.U[i] * c.U[i]
			yy += c.Y[i] * c.Y[i]
		}
		n += float64(len(r.U))
		p.recs = append(p.recs, c)
		p.meanU, p.meanY = append(p.meanU, mu), append(p.meanY, my)
		p.rows += len(r.Y) - p.Lead
	}
	if len(p.recs) == 0 {
		return nil, errors.New("fit: no record is long enough")
	}
	p.su, p.sy = math.Sqrt(uu/n), math.Sqrt(yy/n)
	if p.su == 0 || p.sy == 0 {
		return nil, errors.New("fit: input or output does not move")
	}
	for _, r := range p.recs {
		floats.Scale(1/p.su, r.U)
		floats.Scale(1/p.sy, r.Y)
		zeros := make([]float64, p.pad)
		p.padded = append(p.padded, Record{U: append(zeros[:p.pad:p.pad], r.U...), Y: append(zeros[:p.pad:p.pad], r.Y...)})
	}
	return p, nil
}

// Rows returns the number of equations of every fit.
func (p *Predictor) Rows() int { return p.rows }

// point is a model in scaled units: time in 1/w0, signals by their deviation.
type point struct {
	num, den lti.Poly
	tau      float64   // scaled time
	d, c     []float64 // powers of δ, leading 1
}

func (x point) clone() point {
	return point{
		num: append(lti.Poly(nil), x.num...), den: append(lti.Poly(nil), x.den...), tau: x.tau,
		d: append([]float64(nil), x.d...), c: append([]float64(nil), x.c...),
	}
}

// search is one fit: shape, scale of time, and workspaces.
type search struct {
	*Predictor
	shape Shape
	w0, h float64 // rad/s; scaled period
	work  []workspace

	rss, logDet float64   // parts of the objective at the last point looked at
	probe       transient // for differences
}

// workspace holds the signals of one record; each starts with pad zeros.
type workspace struct {
	y, u       []float64 // padded data
	e          []float64 // prediction errors
	yf, uf     []float64 // D y / C, D u / C
	vf, ef     []float64 // (A y - B u) / C, e / C
	dy, du, av []float64
	transient
	logDet float64   // of I + G'G
	local  []float64 // κ, ε_1 … ε_nC
}

func (p *Predictor) newSearch(shape Shape, w0 float64) *search {
	if shape.Poles < 1 || shape.Poles > maxFitPoles || shape.Zeros < 0 || shape.Zeros >= shape.Poles || shape.Colour < 0 || shape.Colour > maxColour || shape.Integrators < 0 || shape.Integrators > shape.Poles {
		panic(badShape)
	}
	s := &search{Predictor: p, shape: shape, w0: w0, h: p.Period * w0}
	if w, ok := p.spare.Get().([]workspace); ok {
		s.work = w
		return s
	}
	s.work = make([]workspace, len(p.recs))
	for i, r := range p.recs {
		n := p.pad + len(r.Y)
		buf := make([]float64, 8*n)
		w := &s.work[i]
		for _, x := range []*[]float64{&w.e, &w.yf, &w.uf, &w.vf, &w.ef, &w.dy, &w.du, &w.av} {
			*x, buf = buf[:n:n], buf[n:]
		}
		w.y, w.u = p.padded[i].Y, p.padded[i].U
	}
	return s
}

// done hands the workspaces back.
func (s *search) done() { s.spare.Put(s.work) }

// shifted holds a model's polynomials in powers of q^-1.
type shifted struct {
	whole      int
	a, b, d, c []float64
	delta      lti.Delta
}

// sampled returns the polynomials of x, and false where they are not finite or
// the delay is out of range.
func (s *search) sampled(x point) (shifted, bool) {
	delay := x.tau
	if !bounded(x.num...) || !bounded(x.den...) || !bounded(x.c...) || !bounded(x.d...) {
		return shifted{}, false
	}
	if !(delay >= s.DelayRange[0]*s.w0-1e-9*s.h && delay <= s.DelayRange[1]*s.w0+1e-9*s.h) {
		return shifted{}, false
	}
	q := shifted{delta: lti.SampleDelta(x.num, x.den, delay, s.h)}
	q.whole = q.delta.Whole
	q.a = lti.Shift(nil, q.delta.A)
	q.b = inputPowers(nil, q.delta.B0, q.delta.B1)
	q.d, q.c = lti.Shift(nil, x.d), lti.Shift(nil, x.c)
	return q, bounded(q.a...) && bounded(q.b...)
}

// inputPowers returns B in powers of q^-1; its first entry is zero.
func inputPowers(dst, b0, b1 []float64) []float64 {
	n := len(b0)
	if dst == nil {
		dst = make([]float64, n+2)
	}
	for i := range dst {
		dst[i] = 0
	}
	var tmp [maxFitPoles]float64
	for i, v := range lti.Shift(tmp[:n], b0) {
		dst[i+1] += v
	}
	for i, v := range lti.Shift(tmp[:n], b1) {
		dst[i+2] += v
	}
	return dst
}

// errorsAt fills the prediction errors of x into the workspaces, with the
// constants and start-up errors that make their sum of squares least, and
// returns the objective: with N rows the sum of squares S times
// det(I + G'G)^(1/N), N times the log of which is -2 log likelihood but for a constant.
//
// The first deg C errors before a record's first equation are unknowns with
// the prior of all other errors; without them the transient of a slow noise
// zero swamps the sum. Integrated out they leave their sum of squares in S and
// the determinant (Box & Jenkins, Time Series Analysis, 1976, app. A7.4), which
// holds noise zeros off the unit circle: without it a short log moves them onto
// it and takes its own slow drift for a start-up error.
func (s *search) errorsAt(x point) (float64, shifted, bool) {
	q, ok := s.sampled(x)
	if !ok {
		return math.Inf(1), q, false
	}
	ad := lti.Poly(q.a).Mul(q.d)
	bd := lti.Poly(q.b).Mul(q.d)
	s.rss, s.logDet = 0, 0
	for i := range s.work {
		w := &s.work[i]
		t0 := s.pad + s.Lead
		fir(w.e[t0:], w.y, ad, t0, 1, false)
		fir(w.e[t0:], w.u, bd, t0-q.whole, -1, true)
		for k := s.pad; k < t0; k++ {
			w.e[k] = 0
		}
		divide(w.e, w.e, q.c, t0)
		w.run(q.c, len(w.e)-t0)
		rss, ok := w.solveLocal(t0)
		if !ok || !(rss < math.Inf(1)) {
			return math.Inf(1), q, false
		}
		s.rss += rss
		s.logDet += w.logDet
	}
	return s.rss * math.Exp(s.logDet/float64(s.rows)), q, true
}

// fir adds f Σ coef[i] x[k-i], k = from, from+1, …, to dst, or sets dst to it.
// Where k runs past the end of x (a negative delay) the last value stands.
func fir(dst, x, coef []float64, from int, f float64, add bool) {
	if !add {
		for k := range dst {
			dst[k] = 0
		}
	}
	for i, c := range coef {
		if c == 0 {
			continue
		}
		c *= f
		src := x[max(0, from-i):]
		out := dst
		if from-i < 0 {
			out = dst[i-from:]
		}
		m := min(len(src), len(out))
		floats.AddScaled(out[:m], c, src[:m])
		for k := m; k < len(out); k++ {
			out[k] += c * x[len(x)-1]
		}
	}
}

// divide writes src/C into dst from row from on, taking the rows before as
// they stand. dst and src may be the same.
func divide(dst, src, c []float64, from int) {
	switch len(c) - 1 {
	case 0:
		copy(dst[from:], src[from:])
	case 1:
		c1, p1 := c[1], dst[from-1]
		for k := from; k < len(src); k++ {
			p1 = src[k] - c1*p1
			dst[k] = p1
		}
	case 2:
		c1, c2, p1, p2 := c[1], c[2], dst[from-1], dst[from-2]
		for k := from; k < len(src); k++ {
			v := (src[k] - c2*p2) - c1*p1
			p2, p1 = p1, v
			dst[k] = v
		}
	case 3:
		c1, c2, c3, p1, p2, p3 := c[1], c[2], c[3], dst[from-1], dst[from-2], dst[from-3]
		for k := from; k < len(src); k++ {
			v := (src[k] - c3*p3 - c2*p2) - c1*p1
			p3, p2, p1 = p2, p1, v
			dst[k] = v
		}
	default:
		n := len(c) - 1
		for k := from; k < len(src); k++ {
			v := src[k]
			past := dst[k-n : k]
			for i := n; i >= 1; i-- {
				v -= c[i] * past[n-i]
			}
			dst[k] = v
		}
	}
}

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
	if w.logDet = logDet(h, 1); !bounded(w.logDet) {
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
	return bounded(x...)
}

// chunk is how many rows of the Jacobian are held at a time.
const chunk = 1024

// information returns J'J and J'e over the shared parameters at x, whose
// errors are in the workspaces, with each record's own unknowns eliminated.
//
// A column of J is the derivative of the equation error filtered by 1/C from
// rest at the first equation. Lagged copies of one filtered signal differ from
// that by a free response of 1/C only, which is taken off.
func (s *search) information(x point, q shifted) (*mat.SymDense, []float64) {
	p := s.shape.size()
	h := mat.NewSymDense(p, nil)
	grad := make([]float64, p)
	cols := s.columns(q)
	for i := range s.work {
		w := &s.work[i]
		t0 := s.pad + s.Lead
		s.filtered(w, q, t0)
		nc := len(q.c) - 1
		all := p + nc + 1
		jj := make([]float64, all*all)
		je := make([]float64, all)
		buf := make([]float64, p*chunk)
		past := make([]float64, p*nc)
		for k := range p {
			for i := 1; i <= nc; i++ {
				var v [1]float64
				cols[k].at(v[:], w, t0-i)
				past[k*nc+i-1] = v[0]
			}
		}
		rows := len(w.e) - t0
		for from := 0; from < rows; from += chunk {
			m := min(chunk, rows-from)
			moving := min(max(w.settled-from, 0), m)
			col := func(k int) []float64 {
				switch {
				case k < p:
					return buf[k*chunk : k*chunk+m]
				case k == p:
					return w.step[from : from+m]
				}
				return w.free[k-p-1][from : from+m]
			}
			for k := range p {
				out := col(k)
				cols[k].at(out, w, t0+from)
				for i := range nc {
					floats.AddScaled(out[:moving], -past[k*nc+i], w.free[i][from:from+moving])
				}
			}
			e := w.e[t0+from : t0+from+m]
			live := all
			if moving == 0 {
				live = p + 1
			}
			for k := range live {
				ck := col(k)
				je[k] += floats.Dot(ck, e)
				for l := k; l < live; l++ {
					jj[k*all+l] += floats.Dot(ck, col(l))
				}
			}
		}
		// Eliminate the constant and the start-up errors, whose prior counts
		// as one more equation each. The constant's column is -S.
		q := nc + 1
		hl := mat.NewSymDense(q, nil)
		cross := mat.NewDense(q, p, nil)
		sign := func(k int) float64 {
			if k == p {
				return -1
			}
			return 1
		}
		for a := range q {
			for b := a; b < q; b++ {
				v := jj[(p+a)*all+p+b] * sign(p+a) * sign(p+b)
				if a == b && a > 0 {
					v++
				}
				hl.SetSym(a, b, v)
			}
			for k := range p {
				cross.Set(a, k, jj[k*all+p+a]*sign(p+a))
			}
		}
		var chol mat.Cholesky
		var sol mat.Dense
		ok := chol.Factorize(hl)
		if ok {
			ok = chol.SolveTo(&sol, cross) == nil
		}
		for k := range p {
			grad[k] += je[k]
			for l := k; l < p; l++ {
				v := jj[k*all+l]
				if ok {
					for a := range q {
						v -= cross.At(a, k) * sol.At(a, l)
					}
				}
				h.SetSym(k, l, h.At(k, l)+v)
			}
		}
	}
	s.addDeterminant(x, q, h, grad)
	return h, grad
}

// addDeterminant adds S/(2N) times the slope of log det(I + G'G), which
// depends on C alone, to the gradient: the objective's own, but for its
// positive factor. Differences over a thousandth of a deviation are good
// enough for a term that vanishes as the log grows.
func (s *search) addDeterminant(x point, q shifted, h *mat.SymDense, grad []float64) {
	nc := len(q.c) - 1
	first := len(grad) - nc
	scale := s.rss / (2 * float64(s.rows))
	for j := 1; j <= nc; j++ {
		k := first + j - 1
		step := 1e-3 * math.Sqrt(s.rss/float64(s.rows)/h.At(k, k))
		if !(step > 0) || math.IsInf(step, 0) {
			continue
		}
		c := append([]float64(nil), x.c...)
		c[j] += step
		z := lti.Shift(nil, c)
		var up float64
		for i := range s.recs {
			s.probe.run(z, len(s.recs[i].Y)-s.Lead)
			up += logDet(s.probe.information(), 1)
		}
		if d := scale * (up - s.logDet) / step; bounded(d) {
			grad[k] += d
		}
	}
}

// column is one derivative of the equation error, as lags of the filtered
// signals: Σ y[i] yf[k-i] + Σ u[i] uf[k-whole-i] + Σ v[i] vf[k-i] + Σ e[i] ef[k-i].
type column struct {
	y, u, v, e []float64
	whole      int
}

func (c *column) at(dst []float64, w *workspace, from int) {
	for k := range dst {
		dst[k] = 0
	}
	for _, part := range []struct {
		x, coef []float64
		from    int
	}{{w.yf, c.y, from}, {w.uf, c.u, from - c.whole}, {w.vf, c.v, from}, {w.ef, c.e, from}} {
		if len(part.coef) > 0 {
			fir(dst, part.x, part.coef, part.from, 1, true)
		}
	}
}

// columns lists the derivatives in the order b_0 … b_m, a_1 … a_n, delay,
// D, C.
func (s *search) columns(q shifted) []column {
	var cols []column
	params := s.shape.Zeros + 1 + s.shape.Poles
	for k := range params + 1 {
		if k == params && !s.shape.FreeDelay {
			break
		}
		c := column{whole: q.whole, u: inputPowers(nil, q.delta.DB0[k], q.delta.DB1[k])}
		floats.Scale(-1, c.u)
		if k > s.shape.Zeros && k < params {
			c.y = lti.Shift(nil, q.delta.DA[k])
		}
		cols = append(cols, c)
	}
	unit := func(n, j int, f float64) []float64 {
		coef := make([]float64, n+1)
		coef[j] = f
		return lti.Shift(nil, coef)
	}
	nd, nc := len(q.d)-1, len(q.c)-1
	for j := 1; j <= nd; j++ {
		cols = append(cols, column{v: unit(nd, j, 1)})
	}
	for j := 1; j <= nc; j++ {
		cols = append(cols, column{e: unit(nc, j, -1)})
	}
	return cols
}

// filtered fills the filtered signals of a record from its errors.
func (s *search) filtered(w *workspace, q shifted, t0 int) {
	if len(q.d) > 1 {
		fir(w.dy[s.pad:], w.y, q.d, s.pad, 1, false)
		fir(w.du[s.pad:], w.u, q.d, s.pad, 1, false)
		// The first rows lack their past: the signals start there.
		for k := s.pad; k < s.pad+len(q.d)-1; k++ {
			w.dy[k], w.du[k] = 0, 0
		}
		first := s.pad + len(q.a) + len(q.b) + max(q.whole, 0)
		fir(w.av[first:], w.y, q.a, first, 1, false)
		fir(w.av[first:], w.u, q.b, first-q.whole, -1, true)
		clear(w.vf[:first])
		divide(w.vf, w.av, q.c, first)
		divide(w.yf, w.dy, q.c, s.pad)
		divide(w.uf, w.du, q.c, s.pad)
	} else {
		divide(w.yf, w.y, q.c, s.pad)
		divide(w.uf, w.u, q.c, s.pad)
	}
	start := t0 - (len(q.c) - 1)
	clear(w.ef[:start])
	divide(w.ef, w.e, q.c, start)
}

// moved returns x plus a step in its parameters, noise zeros and colour poles
// reflected into the unit circle, where the likelihood is the same.
func (s *search) moved(x point, step []float64) point {
	y := x.clone()
	k := 0
	next := func() float64 { k++; return step[k-1] }
	for i := range y.num {
		y.num[i] += next()
	}
	n := s.shape.Poles
	for i := 1; i <= n; i++ {
		y.den[n-i] += next()
	}
	if s.shape.FreeDelay {
		lo, hi := s.DelayRange[0]*s.w0, s.DelayRange[1]*s.w0
		y.tau = math.Min(hi, math.Max(lo, y.tau+next()))
	}
	for i := 1; i < len(y.d); i++ {
		y.d[i] += next()
	}
	for i := 1; i < len(y.c); i++ {
		y.c[i] += next()
	}
	y.c, y.d = reflect(y.c), reflect(y.d)
	return y
}

// closest is how near to the unit circle a noise zero may come.
const closest = 1e-6

// reflect takes a monic polynomial in powers of δ, highest first, and mirrors
// its roots z = 1 + δ that lie outside the unit circle.
func reflect(c []float64) []float64 {
	n := len(c) - 1
	if n == 0 || !bounded(c...) {
		return c
	}
	asc := make(lti.Poly, n+1)
	for i, v := range c {
		asc[n-i] = v
	}
	roots := asc.Roots()
	changed := false
	for i, r := range roots {
		z := 1 + r
		size := cmplx.Abs(z)
		if size <= 1-closest {
			continue
		}
		changed = true
		if size > 1 {
			z = 1 / cmplx.Conj(z)
			size = 1 / size
		}
		if size > 1-closest {
			z *= complex((1-closest)/size, 0)
		}
		roots[i] = z - 1
	}
	if !changed {
		return c
	}
	asc = lti.FromRoots(roots)
	out := make([]float64, n+1)
	for i := range out {
		out[i] = asc[n-i]
	}
	return out
}

// hold keeps the coefficients of integrators where they are: rows and columns
// of a unit matrix, no gradient.
func (s *search) hold(h *mat.SymDense, g []float64) {
	n := h.SymmetricDim()
	for i := range n {
		if !s.shape.fixed(i) {
			continue
		}
		for j := range n {
			h.SetSym(i, j, 0)
		}
		h.SetSym(i, i, 1)
		if g != nil {
			g[i] = 0
		}
	}
}

// minimise runs Levenberg's and Marquardt's method from x until the relative
// gain of a step falls below tol, and returns the point and its sum of squares.
func (s *search) minimise(x point, tol float64, limit int) (point, float64, int, bool) {
	rss, q, ok := s.errorsAt(x)
	if !ok {
		return x, rss, 0, false
	}
	damping := 1e-3
	p := s.shape.size()
	step := make([]float64, p)
	for it := 1; it <= limit; it++ {
		h, g := s.information(x, q)
		if !bounded(g...) {
			return x, rss, it, false
		}
		s.hold(h, g)
		better := false
		for range 12 {
			if !solveScaled(step, h, g, damping) {
				damping = math.Max(damping*10, 1e-8)
				continue
			}
			floats.Scale(-1, step)
			y := s.moved(x, step)
			trial, qy, ok := s.errorsAt(y)
			if ok && trial < rss {
				gain := (rss - trial) / rss
				x, q, rss, better = y, qy, trial, true
				damping = math.Max(damping/10, 1e-12)
				if gain < tol {
					return x, rss, it, true
				}
				break
			}
			damping = math.Max(damping*8, 1e-8)
			if damping > 1e8 {
				break
			}
		}
		if !better {
			// The workspaces hold a rejected trial; restore those of x.
			s.errorsAt(x)
			return x, rss, it, true
		}
	}
	return x, rss, limit, false
}

// Fit refines a start by maximum likelihood. The start's polynomials set the
// shape's sizes, its Delay the fixed or first delay. tol is the relative gain
// at which to stop; below 1e-9 the estimate no longer moves in any digit that
// matters. limit bounds the number of steps.
func (p *Predictor) Fit(start *Prediction, tol float64, limit int) (*Prediction, error) {
	s, x := p.begin(start)
	defer s.done()
	x, objective, steps, converged := s.minimise(x, tol, limit)
	if !(objective < math.Inf(1)) {
		return nil, ErrNoFit
	}
	return s.result(x, steps, converged), nil
}

// begin scales a start for a search.
func (p *Predictor) begin(start *Prediction) (*search, point) {
	if start.Delay < p.DelayRange[0]-1e-9*p.Period || start.Delay > p.DelayRange[1]+1e-9*p.Period {
		panic(badDelay)
	}
	s := p.newSearch(start.Shape, timeScale(start.Den, p.Period))
	return s, s.scaled(start)
}

// timeScale returns the geometric mean of the poles' moduli, those near zero
// raised to a hundredth of the largest, in rad/s.
func timeScale(den lti.Poly, period float64) float64 {
	var largest float64
	roots := den.Roots()
	for _, r := range roots {
		largest = math.Max(largest, cmplx.Abs(r))
	}
	if !(largest > 0) || math.IsInf(largest, 0) {
		return 0.05 / period
	}
	var sum float64
	for _, r := range roots {
		sum += math.Log(math.Max(cmplx.Abs(r), largest/100))
	}
	return math.Exp(sum / float64(len(roots)))
}

// scaled takes a model to scaled units.
func (s *search) scaled(m *Prediction) point {
	n := s.shape.Poles
	x := point{num: make(lti.Poly, s.shape.Zeros+1), den: make(lti.Poly, n+1), tau: m.Delay * s.w0}
	for i := range x.num {
		if i < len(m.Num) {
			x.num[i] = m.Num[i] * s.su / s.sy * math.Pow(s.w0, float64(i-n))
		}
	}
	for i := range x.den {
		x.den[i] = m.Den[i] * math.Pow(s.w0, float64(i-n))
	}
	for i := range s.shape.Integrators {
		x.den[i] = 0
	}
	x.d, x.c = unshifted(m.D, s.shape.Colour), reflect(unshifted(m.C, n+s.shape.Colour))
	return x
}

// unshifted returns a monic polynomial in powers of z^-1, padded to degree n,
// in powers of δ.
func unshifted(p []float64, n int) []float64 {
	q := make([]float64, n+1)
	q[0] = 1
	copy(q, p)
	return lti.Unshift(q)
}

// result takes a point back to the log's units, with its covariance.
func (s *search) result(x point, steps int, converged bool) *Prediction {
	n := s.shape.Poles
	m := &Prediction{Shape: s.shape, Period: s.Period, RSS: s.rss * s.sy * s.sy, LogDet: s.logDet, Rows: s.rows, Steps: steps, Converged: converged, Delay: x.tau / s.w0}
	unit := s.units()
	m.Num, m.Den = make(lti.Poly, len(x.num)), make(lti.Poly, n+1)
	for i := range x.num {
		m.Num[i] = x.num[i] * unit[i]
	}
	m.Den[n] = 1
	for i := 1; i <= n; i++ {
		m.Den[n-i] = x.den[n-i] * unit[len(x.num)+i-1]
	}
	m.D, m.C = lti.Shift(nil, x.d), lti.Shift(nil, x.c)
	for i := range s.work {
		m.Const = append(m.Const, s.work[i].local[0]*s.sy)
	}
	m.Variance = m.RSS / float64(max(1, s.rows-s.shape.Free()-len(s.work)))
	return m
}

// units returns what one scaled unit of each shared parameter is.
func (s *search) units() []float64 {
	n := s.shape.Poles
	var u []float64
	for i := range s.shape.Zeros + 1 {
		u = append(u, s.sy/s.su*math.Pow(s.w0, float64(n-i)))
	}
	for i := 1; i <= n; i++ {
		u = append(u, math.Pow(s.w0, float64(i)))
	}
	if s.shape.FreeDelay {
		u = append(u, 1/s.w0)
	}
	for len(u) < s.shape.size() {
		u = append(u, 1)
	}
	return u
}

// Covariance adds the covariance of the estimate, the inverse of the
// information at the optimum times the variance of e. It returns an error
// where the information is singular: the data do not tell all parameters
// apart.
func (p *Predictor) Covariance(m *Prediction) error {
	s, x := p.begin(m)
	defer s.done()
	_, q, ok := s.errorsAt(x)
	if !ok {
		return ErrNoFit
	}
	h, _ := s.information(x, q)
	n := s.shape.size()
	s.hold(h, nil)
	sd := make([]float64, n)
	for i := range sd {
		sd[i] = math.Sqrt(h.At(i, i))
	}
	for i := range n {
		for j := i; j < n; j++ {
			h.SetSym(i, j, h.At(i, j)/(sd[i]*sd[j]))
		}
	}
	var chol mat.Cholesky
	if !chol.Factorize(h) {
		return ErrSingular
	}
	m.Condition = math.Sqrt(chol.Cond())
	inv := mat.NewSymDense(n, nil)
	if err := chol.InverseTo(inv); err != nil {
		var cond mat.Condition
		if !errors.As(err, &cond) {
			return ErrSingular
		}
	}
	unit := s.units()
	variance := m.Variance / (s.sy * s.sy)
	m.Cov = mat.NewSymDense(n, nil)
	for i := range n {
		for j := i; j < n; j++ {
			v := inv.At(i, j) * variance * unit[i] * unit[j] / (sd[i] * sd[j])
			if s.shape.fixed(i) || s.shape.fixed(j) {
				v = 0
			}
			m.Cov.SetSym(i, j, v)
		}
	}
	return nil
}

// ErrSingular says that the data do not tell all parameters apart.
var ErrSingular = errors.New("fit: information matrix is singular")

// Errors returns the one-step prediction errors of m, record by record, in the
// output's units, with the constants and start-up errors that fit best.
// before[n][i] is the start-up error i+1 rows before the first of record n.
func (p *Predictor) Errors(m *Prediction) (errs, before [][]float64, err error) {
	s, x := p.begin(m)
	defer s.done()
	if _, _, ok := s.errorsAt(x); !ok {
		return nil, nil, ErrNoFit
	}
	for i := range s.work {
		e := append([]float64(nil), s.work[i].e[s.pad+s.Lead:]...)
		floats.Scale(s.sy, e)
		errs = append(errs, e)
		e = append([]float64(nil), s.work[i].local[1:]...)
		floats.Scale(s.sy, e)
		before = append(before, e)
	}
	return errs, before, nil
}

// Rest returns the input, in the log's units, at which the plant of m rests
// with the output at y, by the constant of the given record. It is not finite
// for a plant with a zero at the origin.
func (p *Predictor) Rest(m *Prediction, record int, y float64) float64 {
	d := lti.SampleDelta(m.Num, m.Den, m.Delay, m.Period)
	n := d.Poles
	colour := sum(m.D)
	// At rest only the last power of δ counts.
	a, b := d.A[n], d.B0[n-1]+d.B1[n-1]
	return p.meanU[record] + (a*(y-p.meanY[record])-m.Const[record]/colour)/b
}

// Means returns the mean output of each record.
func (p *Predictor) Means() []float64 { return append([]float64(nil), p.meanY...) }

// Inputs returns the input of each row of Errors, for tests of what is left.
func (p *Predictor) Inputs() [][]float64 {
	var out [][]float64
	for i, r := range p.recs {
		u := append([]float64(nil), r.U[p.Lead:]...)
		floats.Scale(p.su, u)
		floats.AddConst(p.meanU[i], u)
		out = append(out, u)
	}
	return out
}

// bounded reports whether all of x are finite numbers.
func bounded(x ...float64) bool {
	for _, v := range x {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return false
		}
	}
	return true
}
