package fit

import (
	"math"
	"slices"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// chunk is how many rows of the Jacobian are held at a time.
const chunk = 1024

// information returns J'J and J'e over the shared parameters at x, whose
// errors are in the workspaces, with each record's own unknowns and shared
// constants eliminated, rows weighted by their log.
func (s *search) information(x point, q shifted) (*mat.SymDense, []float64) {
	q.delta = lti.SampleDelta(x.num, x.den, x.tau, s.h)
	h, grad := s.normal(q, s.shape.size())
	s.addDeterminant(x, q, h, grad)
	s.prior.add(x, s.shape, s.rss/float64(s.rows), h, grad)
	return h, grad
}

// normal returns J'J and J'e over the first p shared parameters by the sum of
// squares alone. Missing outputs are eliminated first: the errors are orthogonal to
// their echoes, the columns are made so by what these take of their products.
//
// A column of J is the derivative of the equation error filtered by 1/C from
// rest at the first equation. Lagged copies of one filtered signal differ from
// that by a free response of 1/C only, which is taken off.
func (s *search) normal(q shifted, p int) (*mat.SymDense, []float64) {
	h := mat.NewSymDense(p, nil)
	grad := make([]float64, p)
	cols := s.columns(q)[:p]
	nc := len(q.c) - 1
	all := p + nc + 1
	if len(s.buf) < p*chunk {
		s.buf = make([]float64, p*chunk)
	}
	jj, je, past := make([]float64, all*all), make([]float64, all), make([]float64, p*nc)
	// What is left of a shared constant once its records gave up their own
	// unknowns: products with the shared parameters, then with itself.
	shared := make([]float64, p+1)
	// add adds the first rows of a record, as its errors stand. The first kept
	// parameters are not eliminated.
	add := func(w *workspace, t0, rows, kept int, weight float64) {
		clear(jj)
		clear(je)
		var heard *mat.Dense
		if len(w.missing) > 0 && rows == len(w.e)-t0 {
			heard = mat.NewDense(len(w.missing), all, nil)
		}
		s.rest()
		for s.view.to < t0 {
			s.advance(w, q, t0, min(t0, s.view.to+chunk))
		}
		for k := range p {
			for i := 1; i <= nc; i++ {
				var v [1]float64
				cols[k].at(v[:], &s.view.filtered, t0-i-s.view.from)
				past[k*nc+i-1] = v[0]
			}
		}
		for from := 0; from < rows; from += chunk {
			if from%block == 0 && s.stop() {
				return
			}
			m := min(chunk, rows-from)
			col := func(k int) []float64 {
				switch {
				case k < p:
					return s.buf[k*chunk : k*chunk+m]
				case k == p:
					return w.steps(from, from+m)
				}
				return w.free[k-p-1][from : from+m]
			}
			s.advance(w, q, t0, t0+from+m)
			for k := range p {
				cols[k].at(col(k), &s.view.filtered, t0+from-s.view.from)
			}
			e := w.e[t0+from : t0+from+m]
			live := all
			if from >= w.settled {
				live = p + 1
			}
			for k := range live {
				ck := col(k)
				je[k] += floats.Dot(ck, e)
				for l := k; l < live; l++ {
					jj[k*all+l] += floats.Dot(ck, col(l))
				}
				if heard != nil {
					w.along(heard, k, ck, from)
				}
			}
		}
		if heard != nil {
			if taken, ok := w.taken(heard, heard); ok {
				floats.Sub(jj, taken.RawMatrix().Data)
			}
		}
		// Take off the free responses.
		for k := range all {
			for l := range k {
				jj[k*all+l] = jj[l*all+k]
			}
		}
		for k := range p {
			for i := range nc {
				f := past[k*nc+i]
				floats.AddScaled(jj[k*all:(k+1)*all], -f, jj[(p+1+i)*all:(p+2+i)*all])
				je[k] -= f * je[p+1+i]
			}
		}
		for l := range p {
			for i := range nc {
				for k := range p {
					jj[k*all+l] -= past[l*nc+i] * jj[k*all+p+1+i]
				}
			}
		}
		// Eliminate the constant and the start-up errors, whose prior counts
		// as one more equation each. The constant's column is -S. One that
		// other records share is kept until the last of them.
		q := all - kept
		hl := mat.NewSymDense(q, nil)
		cross := mat.NewDense(q, kept, nil)
		sign := func(k int) float64 {
			if k == p {
				return -1
			}
			return 1
		}
		for a := range q {
			for b := a; b < q; b++ {
				v := jj[(kept+a)*all+kept+b] * sign(kept+a) * sign(kept+b)
				if a == b && kept+a > p {
					v++
				}
				hl.SetSym(a, b, v)
			}
			for k := range kept {
				cross.Set(a, k, jj[k*all+kept+a]*sign(kept+a)*sign(k))
			}
		}
		var chol mat.Cholesky
		var sol mat.Dense
		ok := chol.Factorize(hl)
		if ok {
			ok = chol.SolveTo(&sol, cross) == nil
		}
		for k := range p {
			grad[k] += weight * je[k]
		}
		for k := range kept {
			for l := k; l < kept; l++ {
				v := jj[k*all+l] * sign(k) * sign(l)
				if ok {
					for a := range q {
						v -= cross.At(a, k) * sol.At(a, l)
					}
				}
				if l == p {
					shared[k] += weight * v
				} else {
					h.SetSym(k, l, h.At(k, l)+weight*v)
				}
			}
		}
	}
	for i := range s.work {
		w, t0 := &s.work[i], s.start(i)
		share, kept := s.shareOf(i), p
		if len(share) > 1 {
			kept++
		}
		weight := s.weight(s.recs[i].Log)
		add(w, t0, len(w.e)-t0, kept, weight)
		if warm := s.warm[i]; warm > 0 {
			e := slices.Clone(w.e[s.pad : t0+warm])
			w.restart(t0, warm)
			add(w, t0, warm, kept, -weight)
			copy(w.e[s.pad:], e)
		}
		if kept > p && i == share[len(share)-1] {
			for k := range p {
				for l := k; l < p; l++ {
					h.SetSym(k, l, h.At(k, l)-shared[k]*shared[l]/shared[p])
				}
			}
			clear(shared)
		}
	}
	return h, grad
}

// shareOf lists the records that share a record's constant.
func (s *search) shareOf(record int) []int {
	i := slices.IndexFunc(s.shares, func(share []int) bool { return share[len(share)-1] >= record })
	return s.shares[i]
}

// addDeterminant adds S/(2N) times the slope of log det(I + G'G), which
// depends on C alone, or with missing outputs on A and D as well, to the
// gradient: the objective's own, but for its positive factor. Differences over a thousandth of a deviation are good
// enough for a term that vanishes as the log grows.
func (s *search) addDeterminant(x point, q shifted, h *mat.SymDense, grad []float64) {
	first := len(grad) - (len(x.c) - 1)
	if s.anyMissing() {
		first = s.shape.Zeros + 1
	}
	scale := s.rss / (2 * float64(s.rows))
	for k := first; k < len(grad); k++ {
		if s.shape.fixed(k) {
			continue
		}
		step := 1e-3 * math.Sqrt(s.rss/float64(s.rows)/h.At(k, k))
		if !(step > 0) || math.IsInf(step, 0) {
			continue
		}
		a, d, c := s.raised(x, q, k, step)
		var ad, cz []float64
		if s.anyMissing() {
			ad, cz = lti.Poly(lti.Shift(nil, a)).Mul(lti.Shift(nil, d)), lti.Shift(nil, c)
		}
		var up, last float64
		for i, r := range s.recs {
			rows := len(r.Y) - s.first[i]
			switch {
			case len(r.Missing) > 0:
				s.probe.run(cz, rows)
				s.probeGaps.missing = s.work[i].missing
				last = s.probeGaps.determinant(gram(c, rows), &s.probe, ad, cz) - startUp(c, s.warm[i])
			case !s.alike(i):
				last = startUp(c, rows) - startUp(c, s.warm[i])
			}
			up += last
		}
		if d := scale * (up - s.logDet) / step; !holdsNonFinite([]float64{d}) {
			grad[k] += d
		}
	}
}

// raised returns A, D and C, powers of δ, with shared parameter k raised by step.
func (s *search) raised(x point, q shifted, k int, step float64) (a, d, c []float64) {
	a, d, c = q.delta.A, x.d, x.c
	switch fromEnd := s.shape.size() - k; {
	case fromEnd < len(c):
		c = slices.Clone(c)
		c[len(c)-fromEnd] += step
	case fromEnd < len(c)+len(d)-1:
		d = slices.Clone(d)
		d[len(d)+len(c)-1-fromEnd] += step
	case k <= s.shape.Zeros+s.shape.Poles:
		a = slices.Clone(a)
		floats.AddScaled(a, step, q.delta.DA[k])
	}
	return a, d, c
}

func (p *Predictor) anyMissing() bool {
	return slices.ContainsFunc(p.recs, func(r Record) bool { return len(r.Missing) > 0 })
}

// column is one derivative of the equation error, as lags of the filtered
// signals: Σ y[i] yf[k-i] + Σ u[i] uf[k-whole-i] + Σ v[i] vf[k-i] + Σ e[i] ef[k-i].
type column struct {
	y, u, v, e []float64
	whole      int
}

func (c *column) at(dst []float64, w *filtered, from int) {
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
// D, C; without the slopes of q the first of them only are right.
func (s *search) columns(q shifted) []column {
	var cols []column
	params := s.shape.Zeros + 1 + s.shape.Poles
	for k := range q.delta.DB0 {
		if k == params && !s.shape.FreeDelay {
			break
		}
		c := column{whole: q.whole, u: lti.ShiftInput(q.delta.DB0[k], q.delta.DB1[k])}
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
