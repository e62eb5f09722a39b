package ident

import (
	"math"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat"

	"steadyrig/fit"
	"steadyrig/fit/lti"
)

// linearity tests whether the rig answers linearly: whether second-order terms
// of past inputs and outputs explain part of the prediction errors. It returns
// the probability of so large an F ratio by chance, 1 where no record is long
// enough to tell.
//
// It is the score test of Luukkonen, Saikkonen & Teräsvirta (Testing linearity
// against smooth transition autoregressive models, Biometrika 75 (1988)
// 491-499) and Tsay (Nonlinearity tests for time series, Biometrika 73 (1986)
// 461-466) for a plant with an input: the errors are regressed on what the
// parameters of the linear model do to them, which takes the estimation out,
// and then on y², y u and u² as well. These stand for the first terms of a force
// that is not linear in y and u, and so act where the input does: each passes
// the plant's numerator and the predictor, B D/C. That the errors of a true
// linear model depend on no past makes the test right in closed loop too.
func linearity(p *fit.Predictor, recs []fit.Record, f *fit.Prediction) float64 {
	if p.Rows() > chooseRows {
		recs = spreadOver(recs, chooseRows)
	}
	var long []fit.Record
	for _, r := range recs {
		if len(r.Y) >= 20*p.Lead {
			long = append(long, r)
		}
	}
	if len(long) == 0 {
		return 1
	}
	q, err := p.On(long)
	if err != nil {
		return 1
	}
	errs, _, err := q.Errors(f)
	if err != nil {
		return 1
	}
	su, sy := spread(long)
	g := lti.SampleDelta(f.Num, f.Den, f.Delay, f.Period)
	b := lti.ShiftInput(g.B0, g.B1)
	filter := func(num, den, x []float64) []float64 {
		return lti.DTF{Num: num, Den: den, Period: f.Period}.Filter(nil, x)
	}
	var columns [][]float64 // of each record one below the other; the errors last
	linear := 0
	for i, r := range long {
		at := 0
		add := func(x []float64, lag int) {
			if at == len(columns) {
				columns = append(columns, nil)
			}
			v := make([]float64, len(r.Y)-q.Lead)
			for k := range v {
				v[k] = x[q.Lead+k-lag]
			}
			floats.AddConst(-stat.Mean(v, nil), v)
			columns[at] = append(columns[at], v...)
			at++
		}
		y, u, e := make([]float64, len(r.Y)), make([]float64, len(r.Y)), make([]float64, len(r.Y))
		my, mu := stat.Mean(r.Y, nil), stat.Mean(r.U, nil)
		for k := range y {
			y[k], u[k] = (r.Y[k]-my)/sy, (r.U[k]-mu)/su
		}
		copy(e[q.Lead:], errs[i])
		// What each coefficient of A, B, C and D does to the errors.
		yf, uf := filter(f.D, f.C, y), filter(f.D, f.C, u)
		for lag := 1; lag <= f.Poles; lag++ {
			add(yf, lag)
		}
		for lag := 1; lag < len(b); lag++ {
			add(uf, max(1, lag+g.Whole))
		}
		ef := filter([]float64{1}, f.C, e)
		for lag := 1; lag < len(f.C); lag++ {
			add(ef, lag)
		}
		vf := filter([]float64{1}, f.D, e)
		for lag := 1; lag < len(f.D); lag++ {
			add(vf, lag)
		}
		linear = at
		bd := []float64(lti.Poly(b).Mul(f.D))
		for _, pair := range [][2][]float64{{y, y}, {y, u}, {u, u}} {
			// B begins with a row of delay, which add looks after.
			add(filter(bd[1:], f.C, floats.MulTo(make([]float64, len(y)), pair[0], pair[1])), max(1, 1+g.Whole))
		}
		add(e, 0)
	}
	n := len(columns)
	if len(columns[0]) < 10*n {
		return 1
	}
	x := mat.NewDense(len(columns[0]), n, nil)
	for j, c := range columns {
		if size := floats.Norm(c, 2); size > 0 {
			floats.Scale(1/size, c)
		}
		x.SetCol(j, c)
	}
	var qr mat.QR
	qr.Factorize(x)
	var t mat.Dense
	qr.RTo(&t)
	last := mat.Col(nil, n-1, &t)
	all, left := floats.Norm(last[linear:n], 2), math.Abs(last[n-1])
	_, probability := fit.FTest(all*all, left*left, n-1-linear, len(columns[0])-n+1-len(long))
	if math.IsNaN(probability) {
		return 1
	}
	return probability
}
