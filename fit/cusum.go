package fit

import (
	"math"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"
)

// CUSUM adds up standard normal values on both sides, less Reference each, and
// raises an alarm where a sum passes Limit (Page, Continuous inspection schemes,
// Biometrika 41 (1954) 100-115). It then starts anew. Values are held within
// ±Clip, so that a single stray one raises no alarm where Clip - Reference is
// below Limit (Hawkins & Olwell, Cumulative Sum Charts and Charting for Quality
// Improvement, Springer 1998, sec. 3.6 on winsorised sums).
type CUSUM struct {
	Reference, Limit, Clip float64

	up, down float64
}

// Add takes a value and returns +1 or -1 where the mean has moved up or down, else 0.
func (c *CUSUM) Add(z float64) (alarm int) {
	z = math.Max(-c.Clip, math.Min(c.Clip, z))
	c.up, c.down = math.Max(0, c.up+z-c.Reference), math.Max(0, c.down-z-c.Reference)
	switch {
	case math.Max(c.up, c.down) <= c.Limit:
		return 0
	case c.up > c.down:
		alarm = 1
	default:
		alarm = -1
	}
	c.Restart()
	return alarm
}

// Restart sets both sums to zero.
func (c *CUSUM) Restart() { c.up, c.down = 0, 0 }

// Level is the larger sum over the limit: an alarm comes above 1.
func (c *CUSUM) Level() float64 { return math.Max(c.up, c.down) / c.Limit }

// cusumStates is the number of states of the chain. Its error is of second order in their width and is taken off by a
// second chain of half as many.
const cusumStates = 120

const badCUSUM = "fit: a CUSUM needs a positive limit, and a run length above one"

// CUSUMRunLength returns the mean number of values, independent and normal with
// the given mean and unit deviation, that one side of a CUSUM takes from zero to
// its alarm, by the Markov chain of Brook & Evans, An approach to the probability
// distribution of cusum run length, Biometrika 59 (1972) 539-549.
func CUSUMRunLength(reference, limit, clip, mean float64) float64 {
	if !(limit > 0) {
		panic(badCUSUM)
	}
	fine := cusumChain(reference, limit, clip, mean, cusumStates)
	coarse := cusumChain(reference, limit, clip, mean, cusumStates/2)
	// In logarithms, where a long run length is smooth in the width.
	return math.Exp((4*math.Log(fine) - math.Log(coarse)) / 3)
}

// cusumChain is the run length with the sum on n states of one width, the first
// of half of it about zero (their sec. 2).
func cusumChain(reference, limit, clip, mean float64, n int) float64 {
	width := 2 * limit / float64(2*n-1)
	// below is the probability that a value less the reference is at most x.
	below := func(x float64) float64 {
		switch x += reference; {
		case x >= clip:
			return 1
		case x < -clip:
			return 0
		}
		return distuv.UnitNormal.CDF(x - mean)
	}
	stay, ones := mat.NewDense(n, n, nil), mat.NewVecDense(n, nil)
	for i := range n {
		ones.SetVec(i, 1)
		at := float64(i) * width
		last := 0.0
		for j := range n {
			next := below((float64(j)+0.5)*width - at)
			stay.Set(i, j, -(next - last))
			last = next
		}
		stay.Set(i, i, 1+stay.At(i, i))
	}
	var x mat.VecDense
	if err := x.SolveVec(stay, ones); err != nil && math.IsNaN(x.AtVec(0)) {
		return math.Inf(1)
	}
	return x.AtVec(0)
}

// CUSUMLimit returns the limit at which one side of a CUSUM runs for so many
// values on average while their mean is zero. It panics for one or less.
func CUSUMLimit(runLength, reference, clip float64) float64 {
	if !(runLength > 1) {
		panic(badCUSUM)
	}
	lo, hi := 1e-3, 1.0
	for hi < 64 && CUSUMRunLength(reference, hi, clip, 0) < runLength {
		lo, hi = hi, 2*hi
	}
	for hi-lo > 1e-4*hi {
		if mid := (lo + hi) / 2; CUSUMRunLength(reference, mid, clip, 0) < runLength {
			lo = mid
		} else {
			hi = mid
		}
	}
	return hi
}

// Standardised turns estimates of one quantity, each with its variance, into
// independent standard normal values as long as the quantity stays where it is,
// wherever that is and whatever factor the variances are off by: each is held
// against the mean of those before it, on Student's scale, and taken to the normal
// one (Hawkins, Self-starting CUSUM charts for location and scale, The Statistician
// 36 (1987) 299-315). What was known before the first is its prior: with mean and
// factor normal and inverse gamma the values keep that law exactly (DeGroot, Optimal
// Statistical Decisions, McGraw-Hill 1970, sec. 9.6).
type Standardised struct {
	Mean     float64 // of those so far
	Variance float64 // of Mean, before the factor; +Inf: nothing is known
	Factor   float64 // by which variances are off, as far as is known
	Freedom  float64 // number of values that Factor is worth
	Clip     float64 // normal scores are held within ±Clip, and so is what a value moves
}

// Next takes an estimate with its variance and returns its normal score. ok is
// false where there is nothing to hold it against: it then is the mean.
func (s *Standardised) Next(x, variance float64) (z float64, ok bool) {
	if math.IsInf(s.Variance, 1) {
		s.Mean, s.Variance = x, variance
		return 0, false
	}
	scale := math.Sqrt(s.Factor * (variance + s.Variance))
	t := distuv.StudentsT{Sigma: 1, Nu: s.Freedom}
	off := (x - s.Mean) / scale
	z = -distuv.UnitNormal.Quantile(t.Survival(math.Abs(off)))
	if !(z < s.Clip) {
		z, off = s.Clip, math.Copysign(-t.Quantile(distuv.UnitNormal.CDF(-s.Clip)), off)
	}
	z = math.Copysign(z, off)
	s.Mean += s.Variance / (s.Variance + variance) * off * scale
	s.Variance = 1 / (1/s.Variance + 1/variance)
	s.Factor *= (s.Freedom + off*off) / (s.Freedom + 1)
	s.Freedom++
	return z, true
}

// Forget drops the mean: the next value starts a new one.
func (s *Standardised) Forget() { s.Variance = math.Inf(1) }
