package fit

import (
	"math"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat"
)

// ExcitationOptions of ExcitationOrder.
type ExcitationOptions struct {
	Most int // the largest order looked at, 1 or more
	// Noise is the standard deviation of errors in the values, such as rounding; what stands out of it counts.
	Noise float64
	// NoConstant counts the mean as excitation, too; the default takes each record's constant out, as
	// one that is estimated with a plant does.
	NoConstant bool
}

// ExcitationOrder returns the order of persistent excitation of a signal: the largest n for which the covariance matrix
// of n values in a row is not singular (Ljung, System Identification, 2nd ed. 1999, section 13.2, lemma 13.1;
// Söderström & Stoica, System Identification, 1989, definition 5.1 and section 5.4). A signal of order n determines n coefficients of a
// weighting function. k sines have order 2k, a constant 1, a maximum-length binary sequence of period M has order M, and M - 1
// about its mean; white noise has any order.
//
// x holds one slice for each record; sums over rows, not estimates of covariances, are used, so that ends add nothing to a
// periodic signal. A direction counts in which the signal has more power than its noise, so that their sum is above 2 Noise², and above 1e-11 of
// the largest. The order is at most opt.Most,
// and less where that many rows are not there. A filter without zeros on the unit circle leaves it as it is.
func ExcitationOrder(x [][]float64, opt ExcitationOptions) int {
	if opt.Most < 1 || opt.Noise < 0 {
		panic(badOrder)
	}
	const rounding = 1e-11 // of the eigenvalues of sums of products, over the largest
	n := opt.Most
	rows := func() (sum int) {
		for _, v := range x {
			sum += max(0, len(v)-n+1)
		}
		return sum
	}
	for n > 0 && rows() < 2*n {
		n--
	}
	if n == 0 {
		return 0
	}
	total := float64(rows())
	g := mat.NewSymDense(n, nil)
	noise := opt.Noise
	for _, v := range x {
		if len(v) < n {
			continue
		}
		noise = max(noise, 1e-14*floats.Norm(v, math.Inf(1)))
		m := 0.0 // taken off at first, for the sake of digits
		if !opt.NoConstant {
			m = stat.Mean(v, nil)
		}
		at := func(k int) float64 { return v[k] - m }
		count := len(v) - n + 1
		sums := make([]float64, n)
		for j := range n {
			for k := range count {
				sums[j] += at(n - 1 - j + k)
			}
		}
		for j := range n {
			var s float64
			for k := range count {
				s += at(n-1+k) * at(n-1-j+k)
			}
			// Along a diagonal the rows move on by one.
			for i := 0; i+j < n; i++ {
				if i > 0 {
					s += at(n-1-i)*at(n-1-i-j) - at(n-1-i+count)*at(n-1-i-j+count)
				}
				c := s
				if !opt.NoConstant {
					c -= sums[i] * sums[i+j] / float64(count)
				}
				g.SetSym(i, i+j, g.At(i, i+j)+c/total)
			}
		}
	}
	least := func(k int) (least, most float64) {
		var e mat.EigenSym
		if !e.Factorize(g.SliceSym(0, k), false) {
			return 0, 0
		}
		v := e.Values(nil)
		return v[0], v[k-1]
	}
	// The least eigenvalue falls with the size of the matrix.
	lo, hi := 0, n+1
	for hi-lo > 1 {
		k := (lo + hi) / 2
		l, m := least(k)
		if l > 2*noise*noise && l > rounding*m {
			lo = k
		} else {
			hi = k
		}
	}
	return lo
}
