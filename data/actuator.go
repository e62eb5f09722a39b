package data

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
)

// findActuator looks for a dead zone, for play (hysteresis) and for friction: what a linear plant would answer to the part
// of the input that each of them takes away is held against what a long linear model leaves of the output.
//
// The model is y by 20 past rows of y and u. With b its coefficients of u, a plant behind the element f answers by
// b (u - f(u)) less: the coefficient of that one more regressor is -1 behind that element and 0 without it (a test of
// extra sum of squares, as in N. R. Draper & H. Smith, Applied Regression Analysis, 3rd ed., Wiley 1998, ch. 6; the model is
// Hammerstein's, K. S. Narendra & P. G. Gallman, IEEE Trans. Automatic Control 11(3), 1966, 546-550). It is said where
// the coefficient has that sign and size (an element that takes much away has made b too small, so that it may be far
// beyond -1), takes away a good part of the error, and cannot be chance.
func (l *log) findActuator() {
	const (
		lags   = 20
		most   = 8000 // rows looked at
		fewest = 1000
		sure   = 6    // deviations: chance reaches them once in ten million logs, with some twenty tries each
		gains  = 0.01 // of the squared error, at the least: what a model of so many past rows misses is far below
	)
	var rows []int
	l.runs(func(from, to int) {
		for k := from + lags; k < to && len(rows) < most; k++ {
			rows = append(rows, k)
		}
	})
	if len(rows) < fewest {
		return
	}
	line := l.lines.at(rows[0])
	start := rows[0] - lags
	end := rows[len(rows)-1] + 1
	u, y := l.columns[l.u][start:end], l.columns[l.y][start:end]
	for i := range rows {
		rows[i] -= start
	}
	level := slices.DeleteFunc(slices.Clone(u), math.IsNaN)
	slices.Sort(level)
	middle, reach := level[len(level)/2], level[len(level)*9/10]-level[len(level)/10]
	if reach == 0 {
		return
	}
	past := newRegression(len(rows), 2*lags+1)
	for i, k := range rows {
		x := past.row(i)
		x[0] = 1
		for j := range lags {
			x[1+j], x[1+lags+j] = y[k-1-j], u[k-1-j]-middle
		}
		past.y[i] = y[k]
	}
	if !past.solve() {
		return
	}
	b := slices.Clone(past.coef[1+lags:])
	slices.Reverse(b)
	taken := make([]float64, len(u)) // u - f(u)
	z := make([]float64, len(rows))
	found := Flaw{}
	best := 0.0
	try := func(name, words string, lo, hi float64) {
		for i, k := range rows {
			z[i] = floats.Dot(b, taken[k-lags:k])
		}
		coef, t, gain := past.add(z)
		if coef < hi && coef > lo && -t > sure && gain > gains && gain > best {
			best = gain
			found = Flaw{Name: name, Column: l.column(l.u), Count: 1, Line: line,
				Detail: fmt.Sprintf("%s explains %.0f %% of what a linear model misses, %.1f standard deviations", words, 100*gain, -t),
				Effect: "used; a linear fit averages over it, and its gain and poles hold for moves of this size only"}
		}
	}
	for _, half := range []float64{0.05, 0.1, 0.2, 0.4} {
		d := half * reach
		for _, centre := range []float64{0, middle} {
			if centre == 0 && middle != 0 && (level[0] > 0 || level[len(level)-1] < 0) {
				continue
			}
			for k, v := range u {
				taken[k] = min(max(v-centre, -d), d)
			}
			try(FlawDeadZone, fmt.Sprintf("a dead zone of about ± %s around %s", number3(d), number3(centre)), -10, -0.4)
		}
		at := u[rows[0]]
		for k, v := range u { // play
			if !math.IsNaN(v) {
				at = min(max(at, v-d), v+d)
			}
			taken[k] = v - at
		}
		try(FlawStiction, fmt.Sprintf("play of about ± %s in the input", number3(d)), -10, -0.4)
	}
	for _, w := range []int{1, 2, 4, 8} { // friction acts against the motion, of which w rows tell the direction
		for k := range u {
			taken[k] = 0
			if k >= w {
				taken[k] = sign(y[k] - y[k-w])
			}
		}
		try(FlawStiction, "friction against the output's motion", -reach, -0.01*reach)
	}
	if best > 0 {
		l.flaw(found)
	}
}

func sign(x float64) float64 {
	switch {
	case x > 0:
		return 1
	case x < 0:
		return -1
	}
	return 0
}

// A regression is y on the columns of x by least squares.
type regression struct {
	n, p int
	x    []float64 // row by row
	y    []float64
	coef []float64
	left []float64 // y less what x explains
	rss  float64
	chol mat.Cholesky
}

func newRegression(n, p int) *regression {
	return &regression{n: n, p: p, x: make([]float64, n*p), y: make([]float64, n)}
}

func (r *regression) row(i int) []float64 { return r.x[i*r.p : (i+1)*r.p] }

// solve reports whether the columns of x are independent.
func (r *regression) solve() bool {
	x := mat.NewDense(r.n, r.p, r.x)
	var normal mat.SymDense
	normal.SymOuterK(1, x.T())
	if !r.chol.Factorize(&normal) || r.chol.Cond() > 1e14 {
		return false
	}
	r.coef, r.left, r.rss = r.explain(r.y)
	return true
}

// explain regresses y on x: coefficients, what is left, and its sum of squares.
func (r *regression) explain(y []float64) (coef, left []float64, rss float64) {
	x := mat.NewDense(r.n, r.p, r.x)
	var right, c, fit mat.VecDense
	right.MulVec(x.T(), mat.NewVecDense(r.n, y))
	if err := r.chol.SolveVecTo(&c, &right); err != nil {
		return nil, nil, math.NaN()
	}
	fit.MulVec(x, &c)
	left = make([]float64, r.n)
	for i := range left {
		left[i] = y[i] - fit.AtVec(i)
		rss += left[i] * left[i]
	}
	return c.RawVector().Data, left, rss
}

// add returns the coefficient of one more regressor, its t and the share of the squared error that it takes away.
func (r *regression) add(z []float64) (coef, t, gain float64) {
	_, left, square := r.explain(z)
	if !(square > 0) {
		return 0, 0, 0
	}
	product := 0.0
	for i, v := range left {
		product += v * r.left[i]
	}
	coef = product / square
	rss := r.rss - coef*product
	sd := math.Sqrt(rss / float64(r.n-r.p-1) / square)
	return coef, coef / sd, coef * product / r.rss
}
