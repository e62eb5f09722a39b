package design

import (
	"math"

	"gonum.org/v1/gonum/stat/distuv"
)

const badCount = "design: count outside 0..n"

// ClopperPearsonLower returns the one-sided lower confidence bound, at the given confidence in (0, 1), on the
// probability of an event seen k times in n independent trials.
//
// Source: Clopper & Pearson (1934), The use of confidence or fiducial limits illustrated in the case of the
// binomial, Biometrika 26, 404-413; the binomial tail is an incomplete beta function, so the bound is the quantile
// 1 - confidence of Beta(k, n-k+1).
func ClopperPearsonLower(k, n int, confidence float64) float64 {
	if n <= 0 || k < 0 || k > n || !(confidence > 0 && confidence < 1) {
		panic(badCount)
	}
	if k == 0 {
		return 0
	}
	if k == n {
		return math.Pow(1-confidence, 1/float64(n))
	}
	return distuv.Beta{Alpha: float64(k), Beta: float64(n - k + 1)}.Quantile(1 - confidence)
}

// ClopperPearsonUpper is the upper counterpart of ClopperPearsonLower.
func ClopperPearsonUpper(k, n int, confidence float64) float64 {
	return 1 - ClopperPearsonLower(n-k, n, confidence)
}
