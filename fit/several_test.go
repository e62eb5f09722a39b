package fit

import (
	"math"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// pieces are a log of the pendulum, cut in three of which the last rests
// elsewhere, and one of three times the noise.
func pieces() []Record {
	quiet, _ := pendulum(3, 600)
	loud, _ := pendulum(4, 300)
	for k := range loud.Y {
		loud.U[k], loud.Y[k] = 3*loud.U[k]+5, 3*loud.Y[k]-2
	}
	cut := func(from, to int, resumes bool) Record {
		return Record{U: quiet.U[from:to], Y: quiet.Y[from:to], Log: 1, Resumes: resumes}
	}
	return []Record{loud, cut(0, 150, false), cut(200, 350, true), cut(400, 600, false)}
}

// The sums of squares, gradient and information of records in two logs against
// plain arithmetic: errors by the recursion C e = A D y - B D u - κ from
// start-up errors on, all unknowns of the records as columns of one dense
// Jacobian by differences, each row weighted by its log's deviation, with a minus
// where it is taken out.
func TestLogsAndSharedConstants(t *testing.T) {
	p, err := NewPredictor(pieces(), 0.05, 0.2)
	if err != nil {
		t.Fatal(err)
	}
	s, x := p.begin(&Prediction{
		Shape: Shape{Poles: 2, Colour: 1, FreeDelay: true},
		Num:   lti.Poly{8}, Den: lti.Poly{-8, 0.3, 1}, Delay: 0.01,
		D: []float64{1, -0.9}, C: delayPoly([]complex128{0.8, 0.7 + 0.1i, 0.7 - 0.1i}),
	})
	objective, q, ok := s.errorsAt(x)
	if !ok {
		t.Fatal("no errors at the start")
	}
	h, g := s.information(x, q)
	params, nc := s.shape.size(), len(x.c)-1
	constant := []int{0, 1, 1, 2} // of each record
	// The rows that a resumed record warms up in are taken out again, with
	// start-up errors of their own.
	type run struct {
		record, rows int
		sign         float64
	}
	var runs []run
	var rows [2]float64
	for i, r := range p.recs {
		runs = append(runs, run{i, len(r.Y), 1})
		rows[r.Log] += float64(len(r.Y) - p.Lead)
	}
	runs = append(runs, run{2, p.Lead + warmUp, -1})
	rows[1] -= warmUp
	locals := 3 + nc*len(runs)

	// residuals returns errors and start-up errors of all runs, with the log and
	// the sign of each.
	residuals := func(step, local []float64) (r []float64, logs []int, signs []float64) {
		q, ok := s.sampled(s.moved(x, step))
		if !ok {
			t.Fatal("no polynomials")
		}
		ad, bd := lti.Poly(q.a).Mul(q.d), lti.Poly(q.b).Mul(q.d)
		for i, run := range runs {
			rec := p.recs[run.record]
			e := make([]float64, run.rows)
			for j := range nc {
				e[p.Lead-1-j] = local[3+nc*i+j]
			}
			for k := p.Lead; k < len(e); k++ {
				e[k] = -local[constant[run.record]]
				for j, v := range ad {
					e[k] += v * rec.Y[k-j]
				}
				for j, v := range bd {
					e[k] -= v * rec.U[k-j-q.whole]
				}
				for j := 1; j <= nc; j++ {
					e[k] -= q.c[j] * e[k-j]
				}
			}
			for _, v := range e[p.Lead-nc:] {
				r, logs, signs = append(r, v), append(logs, rec.Log), append(signs, run.sign)
			}
		}
		return r, logs, signs
	}
	zero, none := make([]float64, params), make([]float64, locals)
	r0, logs, signs := residuals(zero, none)
	// Errors are linear in the records' unknowns.
	columns := mat.NewDense(len(r0), locals, nil)
	for j := range locals {
		unit := make([]float64, locals)
		unit[j] = 1
		r, _, _ := residuals(zero, unit)
		for k := range r {
			columns.Set(k, j, r[k]-r0[k])
		}
	}
	sign := mat.NewDiagDense(len(signs), signs)
	var signed, normal mat.Dense
	var right, local mat.VecDense
	signed.Mul(sign, columns)
	normal.Mul(columns.T(), &signed)
	right.MulVec(signed.T(), mat.NewVecDense(len(r0), r0))
	if err := local.SolveVec(&normal, &right); err != nil {
		t.Fatal(err)
	}
	local.ScaleVec(-1, &local)
	r, _, _ := residuals(zero, local.RawVector().Data)
	sums := make([]float64, 2)
	for k, v := range r {
		sums[logs[k]] += signs[k] * v * v
	}
	n := rows[0] + rows[1]
	mean := math.Exp((rows[0]*math.Log(sums[0]/rows[0]) + rows[1]*math.Log(sums[1]/rows[1])) / n)
	// No constant mixes the logs, so that weights do not move the unknowns.
	for i := range sums {
		if !(math.Abs(s.sums[i]/sums[i]-1) < 1e-9) {
			t.Errorf("log %d: sum of squares %.12g, want %.12g", i, s.sums[i], sums[i])
		}
	}
	if want := n * mean * math.Exp(s.logDet/n); !(math.Abs(objective/want-1) < 1e-9) {
		t.Errorf("objective %.12g, want %.12g", objective, want)
	}
	if !(sums[0]/rows[0] > 5*sums[1]/rows[1]) {
		t.Fatalf("variances %g and %g: the logs do not differ", sums[0]/rows[0], sums[1]/rows[1])
	}

	jacobian := mat.NewDense(len(r0), params+locals, nil)
	const eps = 1e-6
	for j := range params {
		step := make([]float64, params)
		step[j] = eps
		up, _, _ := residuals(step, local.RawVector().Data)
		step[j] = -eps
		down, _, _ := residuals(step, local.RawVector().Data)
		for k := range up {
			jacobian.Set(k, j, (up[k]-down[k])/(2*eps))
		}
	}
	for k := range r0 {
		for j := range locals {
			jacobian.Set(k, params+j, columns.At(k, j))
		}
		w := math.Sqrt(mean / (sums[logs[k]] / rows[logs[k]]))
		for j := range params + locals {
			jacobian.Set(k, j, w*jacobian.At(k, j))
		}
	}
	var all mat.Dense
	signed.Reset()
	signed.Mul(sign, jacobian)
	all.Mul(jacobian.T(), &signed)
	cross, own := all.Slice(params, params+locals, 0, params), all.Slice(params, params+locals, params, params+locals)
	var gone, taken mat.Dense
	if err := gone.Solve(own, cross); err != nil {
		t.Fatal(err)
	}
	taken.Mul(cross.T(), &gone)
	for i := range params {
		for j := range params {
			want := all.At(i, j) - taken.At(i, j)
			// Differences of eps lose nine digits of the products.
			if size := math.Sqrt(all.At(i, i) * all.At(j, j)); !(math.Abs(h.At(i, j)-want) < 1e-6*size) {
				t.Errorf("information [%d][%d] is %.9g, want %.9g", i, j, h.At(i, j), want)
			}
		}
		step := make([]float64, params)
		step[i] = eps
		up, _, _ := s.errorsAt(s.moved(x, step))
		step[i] = -eps
		down, _, _ := s.errorsAt(s.moved(x, step))
		want := (up - down) / (2 * eps) / 2 / (objective / (n * mean))
		if !(math.Abs(g[i]-want) <= 2e-5*(math.Abs(want)+math.Abs(g[i]))+1e-6) {
			t.Errorf("parameter %d: gradient %.10g, differences give %.10g", i, g[i], want)
		}
	}
}

// A log in other units of both columns is the same log: the plant, its
// covariance and the other log's variance do not change, its own variance by
// the square of the unit.
func TestUnitsOfOneLog(t *testing.T) {
	recs := pieces()
	_, g := pendulum(3, 100)
	z := complex(math.Exp(-0.15), 0)
	var lead int
	fitted := func() *Prediction {
		p, err := NewPredictor(recs, 0.05, 0.2)
		if err != nil {
			t.Fatal(err)
		}
		lead = p.Lead
		f, err := p.Fit(&Prediction{Shape: Shape{Poles: 2}, Num: g.Num, Den: g.Den, D: []float64{1}, C: delayPoly([]complex128{z, z})}, 1e-13, 200)
		if err != nil {
			t.Fatal(err)
		}
		if err := p.Covariance(f); err != nil {
			t.Fatal(err)
		}
		return f
	}
	before := fitted()
	for k := range recs[0].Y {
		recs[0].U[k], recs[0].Y[k] = 100*recs[0].U[k], 100*recs[0].Y[k]
	}
	after := fitted()
	same := func(what string, got, want float64) {
		t.Helper()
		if !(math.Abs(got/want-1) < 1e-5) {
			t.Errorf("%s is %.9g, want %.9g", what, got, want)
		}
	}
	same("b0", after.Num[0], before.Num[0])
	same("a2", after.Den[0], before.Den[0])
	same("variance of the log itself", after.Levels[0], 1e4*before.Levels[0])
	same("variance of the other", after.Levels[1], before.Levels[1])
	for i := range 3 {
		same("covariance", after.Cov.At(i, i), before.Cov.At(i, i))
	}
	same("BIC", after.BIC()-before.BIC(), float64(300-lead)*math.Log(1e4))
}
