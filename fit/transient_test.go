package fit

import (
	"math"
	"slices"
	"testing"

	"steadyrig/fit/lti"
)

// slowResponses runs 1/C row by row from its definition: the response to a
// constant of one, and to a past error of one i+1 rows before.
func slowResponses(c []float64, rows int) (step []float64, free [][]float64) {
	n := len(c) - 1
	respond := func(constant float64, past int) []float64 {
		e := make([]float64, n+rows)
		if past > 0 {
			e[n-past] = 1
		}
		for k := n; k < len(e); k++ {
			e[k] = constant
			for j := 1; j <= n; j++ {
				e[k] -= c[j] * e[k-j]
			}
		}
		return e[n:]
	}
	step = respond(1, 0)
	for i := range n {
		free = append(free, respond(0, i+1))
	}
	return step, free
}

// Responses and their products against the recursion itself, for zeros far
// inside the unit circle, near to it, in clusters near one, and more of them
// than registers hold.
func TestTransientIsTheRecursion(t *testing.T) {
	for _, zeros := range [][]complex128{
		{}, {0.5}, {0.97}, {-0.8, 0.3}, {complex(0.9, 0.3), complex(0.9, -0.3), 0.99},
		{0.995, 0.98, 0.97, 0.9}, {0.999, 0.99, 0.98, 0.5, -0.2}, {0.99999, 0.95, 0.9},
		{0.9, 0.8, 0.7, 0.6, 0.5, 0.4, 0.3, -0.5},
	} {
		p := lti.FromRoots(zeros)
		c := make([]float64, len(p))
		for i, v := range p {
			c[len(p)-1-i] = v
		}
		for _, rows := range []int{1, 7, 200, 1501} {
			step, free := slowResponses(c, rows)
			var r transient
			r.run(c, rows)
			differ := func(what string, got, want []float64) {
				var size float64
				for _, v := range want {
					size = math.Max(size, math.Abs(v))
				}
				for k := range want {
					// Settled rows are off by what is left of the response.
					if !(math.Abs(got[k]-want[k]) <= 1e-8*size) {
						t.Fatalf("zeros %v, %d rows: %s in row %d is %g, want %g", zeros, rows, what, k, got[k], want[k])
					}
				}
			}
			differ("step", r.steps(0, rows), step)
			for i := range free {
				differ("free response", slices.Concat(r.free[i], make([]float64, rows-len(r.free[i]))), free[i])
			}
			h := gram(lti.Unshift(c), rows)
			cols := append([][]float64{step}, free...)
			for i, a := range cols {
				for j, b := range cols {
					var want, aa, bb float64
					for k := range a {
						want += a[k] * b[k]
						aa += a[k] * a[k]
						bb += b[k] * b[k]
					}
					switch {
					case i == j && i > 0:
						want++
					case (i == 0) != (j == 0):
						want = -want
					}
					if got := h.At(i, j); !(math.Abs(got-want) <= 1e-7*math.Sqrt(aa*bb)+1e-9) {
						t.Errorf("zeros %v, %d rows: product %d, %d is %.12g, want %.12g", zeros, rows, i, j, got, want)
					}
				}
			}
		}
	}
}
