package lti

import "math"

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
