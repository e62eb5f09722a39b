package lti

import (
	"math"
	"math/cmplx"
	"slices"
)

// Grid returns n frequencies from lo to hi rad/s, both included, evenly spaced in their logarithm. n >= 2.
func Grid(lo, hi float64, n int) []float64 {
	if !(lo > 0) || !(hi > lo) || n < 2 {
		panic("lti: frequency grid is empty")
	}
	w := make([]float64, n)
	l := math.Log(hi / lo)
	for i := range w {
		w[i] = lo * math.Exp(l*float64(i)/float64(n-1))
	}
	w[n-1] = hi
	return w
}

// How finely a frequency response is followed.
const (
	perDecade  = 30    // points to begin with
	turn       = 0.3   // rad between neighbours of 1 + L, and of L where it matters
	growth     = 0.3   // change of ln |1 + L| where it is small enough to matter
	maxPoints  = 20000 // a bound on the work, never met by a rational loop with some damping
	narrowest  = 1e-13 // relative width at which halving stops
	skirt      = 1e-9  // relative distance kept from a pole on the axis
	goldenRate = 0.6180339887498949
)

type point struct {
	w float64
	l complex128
}

// follow samples l on [lo, hi] and halves every interval that is coarse, in the logarithm of w.
func follow(l func(float64) complex128, lo, hi float64, coarse func(a, b complex128) bool) []point {
	n := max(3, 1+int(math.Ceil(perDecade*math.Log10(hi/lo))))
	var out []point
	var halve func(a, b point)
	halve = func(a, b point) {
		if len(out) > maxPoints || b.w-a.w < narrowest*b.w || !coarse(a.l, b.l) {
			return
		}
		w := math.Sqrt(a.w * b.w)
		m := point{w, l(w)}
		halve(a, m)
		out = append(out, m)
		halve(m, b)
	}
	var prev point
	for i, w := range Grid(lo, hi, n) {
		p := point{w, l(w)}
		if i > 0 {
			halve(prev, p)
		}
		out = append(out, p)
		prev = p
	}
	return out
}

func angle(a, b complex128) float64 { return cmplx.Phase(b * cmplx.Conj(a)) }

func coarseLoop(a, b complex128) bool {
	if math.Abs(angle(1+a, 1+b)) > turn {
		return true
	}
	la, lb := cmplx.Abs(a), cmplx.Abs(b)
	if max(la, lb) > 0.01 && math.Abs(angle(a, b)) > turn {
		return true
	}
	sa, sb := cmplx.Abs(1+a), cmplx.Abs(1+b)
	return min(sa, sb) < 10 && math.Abs(math.Log(sa/sb)) > growth
}

func coarseValue(a, b complex128) bool {
	return math.Abs(angle(a, b)) > turn || math.Abs(math.Log(cmplx.Abs(a)/cmplx.Abs(b))) > growth
}

// Peak returns the largest |f| on [lo, hi] rad/s and where it is. Narrow resonances are found by the turn of their
// phase, however narrow, unless a like narrow zero lies between the same two of 30 points a decade.
func Peak(f func(w float64) complex128, lo, hi float64) (value, at float64) {
	pts := follow(f, lo, hi, coarseValue)
	return refinePeak(pts, func(p point) float64 { return cmplx.Abs(p.l) }, f)
}

// refinePeak returns the largest size on the points, refined by golden-section search around the highest local maxima.
func refinePeak(pts []point, size func(point) float64, l func(float64) complex128) (value, at float64) {
	type top struct {
		v float64
		i int
	}
	var tops []top
	v := make([]float64, len(pts))
	for i, p := range pts {
		v[i] = size(p)
		if math.IsNaN(v[i]) {
			v[i] = math.Inf(1)
		}
	}
	for i := range v {
		if (i == 0 || v[i] >= v[i-1]) && (i == len(v)-1 || v[i] >= v[i+1]) {
			tops = append(tops, top{v[i], i})
		}
	}
	slices.SortStableFunc(tops, func(a, b top) int {
		switch {
		case a.v > b.v:
			return -1
		case a.v < b.v:
			return 1
		}
		return 0
	})
	if len(tops) > 3 {
		tops = tops[:3]
	}
	value = math.Inf(-1)
	for _, t := range tops {
		if t.v > value {
			value, at = t.v, pts[t.i].w
		}
		if math.IsInf(t.v, 1) {
			return t.v, pts[t.i].w
		}
		if t.v < 0.7*tops[0].v { // neighbours differ by less than that: no higher between them
			break
		}
		a, b := pts[max(t.i-1, 0)].w, pts[min(t.i+1, len(pts)-1)].w
		x1, x2 := b-goldenRate*(b-a), a+goldenRate*(b-a)
		f1, f2 := size(point{x1, l(x1)}), size(point{x2, l(x2)})
		for range 32 { // to 2e-7 of the interval: a maximum is flat, its height is then exact to rounding
			if f1 > f2 {
				b, x2, f2 = x2, x1, f1
				x1 = b - goldenRate*(b-a)
				f1 = size(point{x1, l(x1)})
			} else {
				a, x1, f1 = x1, x2, f2
				x2 = a + goldenRate*(b-a)
				f2 = size(point{x2, l(x2)})
			}
		}
		if f1 > value {
			value, at = f1, x1
		}
		if f2 > value {
			value, at = f2, x2
		}
	}
	return value, at
}
