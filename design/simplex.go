package design

import (
	"context"
	"math"

	"gonum.org/v1/gonum/optimize"
)

// simplexTolerance ends a search when the cost has not fallen by more over some simplexStill steps a dimension.
const (
	simplexTolerance = 1e-4
	simplexStill     = 6
)

// minimise runs a Nelder-Mead simplex of the given size from x0 with about budget evaluations and returns the best
// point seen, which is soon when ctx ends. It draws nothing and so gives the same result every time. A simplex that
// has shrunk is set up once more about its best point, which gets it out of most false minima.
//
// Source: Nelder & Mead (1965), A simplex method for function minimization, Computer J. 7, 308-313, with the
// dimension-dependent coefficients of Gao & Han (2012), Comput. Optim. Appl. 51, 259-277.
func minimise(ctx context.Context, f func([]float64) float64, x0 []float64, size float64, budget int) ([]float64, float64) {
	x, best, left := x0, math.Inf(1), budget
	problem := optimize.Problem{Func: func(x []float64) float64 {
		v := f(x)
		if math.IsNaN(v) || v > 1e9 {
			return 1e9
		}
		return v
	}, Status: func() (optimize.Status, error) {
		if ctx.Err() != nil {
			return optimize.RuntimeLimit, nil
		}
		return optimize.NotTerminated, nil
	}}
	for range 2 {
		r, err := optimize.Minimize(problem, x, &optimize.Settings{
			FuncEvaluations: left,
			Converger:       &optimize.FunctionConverge{Absolute: simplexTolerance, Iterations: simplexStill * len(x0)},
		}, &optimize.NelderMead{SimplexSize: size})
		if r == nil || err != nil {
			break
		}
		if r.F < best {
			x, best = r.X, r.F
		}
		size /= 3
		if left -= r.FuncEvaluations; left <= 0 || ctx.Err() != nil {
			break
		}
	}
	return x, best
}
