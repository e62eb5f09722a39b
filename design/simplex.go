package design

import (
	"cmp"
	"context"
	"math"
	"slices"
)

// simplexTolerance ends a search when the simplex's costs differ by less.
const simplexTolerance = 1e-4

// minimise runs a Nelder-Mead simplex of the given size from x0 with about budget evaluations and returns the best
// point seen, which is soon when ctx ends. It draws nothing and so gives the same result every time. A simplex that has shrunk is set up once
// more about its best point, which gets it out of most false minima. Written here because gonum's optimize pulls
// half of golang.org/x/tools into the module for the sake of its multivariate distributions.
//
// Source: Nelder & Mead (1965), A simplex method for function minimization, Computer J. 7, 308-313, with the
// dimension-dependent coefficients of Gao & Han (2012), Comput. Optim. Appl. 51, 259-277.
func minimise(ctx context.Context, f func([]float64) float64, x0 []float64, size float64, budget int) ([]float64, float64) {
	n := len(x0)
	type vertex struct {
		x []float64
		f float64
	}
	count := 0
	eval := func(x []float64) vertex {
		count++
		v := f(x)
		if math.IsNaN(v) || v > 1e9 {
			v = 1e9
		}
		return vertex{x, v}
	}
	d := float64(n)
	expand, contract, shrink := 1+2/d, 0.75-1/(2*d), 1-1/d
	if n == 1 {
		expand, contract, shrink = 2, 0.5, 0.5
	}
	best := eval(slices.Clone(x0))
	for round := 0; round < 2 && count < budget && ctx.Err() == nil; round++ {
		s := []vertex{best}
		for i := range n {
			x := slices.Clone(best.x)
			x[i] += size
			s = append(s, eval(x))
		}
		along := func(center, from []float64, t float64) []float64 {
			x := make([]float64, n)
			for i := range x {
				x[i] = center[i] + t*(from[i]-center[i])
			}
			return x
		}
		for count < budget && ctx.Err() == nil {
			slices.SortStableFunc(s, func(a, b vertex) int { return cmp.Compare(a.f, b.f) })
			if s[n].f-s[0].f < simplexTolerance {
				break
			}
			center := make([]float64, n)
			for _, v := range s[:n] {
				for i := range center {
					center[i] += v.x[i] / d
				}
			}
			worst := s[n]
			r := eval(along(center, worst.x, -1))
			switch {
			case r.f < s[0].f:
				if e := eval(along(center, worst.x, -expand)); e.f < r.f {
					r = e
				}
				s[n] = r
			case r.f < s[max(n-1, 0)].f:
				s[n] = r
			default:
				t := contract
				if r.f < worst.f {
					t, worst = -contract, r
				}
				if c := eval(along(center, s[n].x, t)); c.f < worst.f {
					s[n] = c
					continue
				}
				for i := 1; i <= n; i++ {
					s[i] = eval(along(s[0].x, s[i].x, shrink))
				}
			}
		}
		slices.SortStableFunc(s, func(a, b vertex) int { return cmp.Compare(a.f, b.f) })
		best = s[0]
		size /= 3
	}
	return best.x, best.f
}
