package fit

import (
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// moved returns x plus a step in its parameters, noise zeros and colour poles
// reflected into the unit circle, where the likelihood is the same.
func (s *search) moved(x point, step []float64) point {
	y := x.clone()
	add(&y, step, s.shape)
	lo, hi := s.DelayRange[0]*s.w0, s.DelayRange[1]*s.w0
	y.tau = math.Min(hi, math.Max(lo, y.tau))
	y.c, y.d = reflect(y.c), reflect(y.d)
	return y
}

// add moves y by a step in its parameters.
func add(y *point, step []float64, shape Shape) {
	k := 0
	next := func() float64 { k++; return step[k-1] }
	for i := range y.num {
		y.num[i] += next()
	}
	n := shape.Poles
	for i := 1; i <= n; i++ {
		y.den[n-i] += next()
	}
	if shape.FreeDelay {
		y.tau += next()
	}
	for i := 1; i < len(y.d); i++ {
		y.d[i] += next()
	}
	for i := 1; i < len(y.c); i++ {
		y.c[i] += next()
	}
}

// closest is how near to the unit circle a noise zero may come.
const closest = 1e-6

// reflect takes a monic polynomial in powers of δ, highest first, and mirrors
// its roots z = 1 + δ that lie outside the unit circle.
func reflect(c []float64) []float64 {
	n := len(c) - 1
	if n == 0 || holdsNonFinite(c) {
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
		if holdsNonFinite(g) {
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
			if s.stopped != nil {
				return x, rss, it, false
			}
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
	m := &Prediction{Shape: s.shape, Period: s.Period, RSS: s.rss * s.sy * s.sy, LogDet: s.logDet + s.apriori, Rows: s.rows, Steps: steps, Converged: converged, Delay: x.tau / s.w0}
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
		m.Const = append(m.Const, s.work[i].all.x[0]*s.sy)
	}
	m.Constants = len(s.shares)
	m.Levels, m.Variance = s.levels(m)
	return m
}

// constants counts the constants of each log.
func (p *Predictor) constants() []int {
	n := make([]int, len(p.logs))
	for _, share := range p.shares {
		n[p.recs[share[0]].Log]++
	}
	return n
}

// levels returns the variance of e of each log, parameters and constants
// accounted for, and their geometric mean by rows.
func (s *search) levels(m *Prediction) (levels []float64, mean float64) {
	constants := s.constants()
	if len(s.logs) == 1 {
		v := m.RSS / float64(max(1, s.rows-s.shape.Free()-constants[0]))
		return []float64{v}, v
	}
	levels = make([]float64, len(s.logs))
	for i, n := range s.logs {
		if n == 0 {
			continue
		}
		part := float64(n) / float64(s.rows)
		levels[i] = s.sums[i] * s.sy * s.sy / math.Max(1, float64(n-constants[i])-part*float64(s.shape.Free()))
		mean += part * math.Log(levels[i])
	}
	return levels, math.Exp(mean)
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
