package fit

import (
	"fmt"
	"math"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/stat/distuv"
)

const badLag = "fit: number of lags below one"

// Autocorrelation returns r_0 = 1, r_1 ... r_maxLag of the records together, the mean of each removed:
// r_k = sum e_t e_{t-k} / sum e_t^2 over all pairs within a record. Without variance it is NaN.
func Autocorrelation(e [][]float64, maxLag int) []float64 {
	r, _ := autocovariances(e, maxLag)
	floats.Scale(1/r[0], r)
	return r
}

// autocovariances returns the sums of products at each lag, and how many products there are.
func autocovariances(e [][]float64, maxLag int) (sums []float64, pairs []int) {
	if maxLag < 0 {
		panic(badLag)
	}
	sums, pairs = make([]float64, maxLag+1), make([]int, maxLag+1)
	for _, x := range e {
		if len(x) == 0 {
			continue
		}
		v := about{x: x, mean: mean(x)}
		for from := 0; from < len(x); from += block {
			to := min(len(x), from+block)
			rows := v.rows(from, min(len(x), to+maxLag))
			for k := 0; k <= maxLag && from+k < len(x); k++ {
				n := min(to, len(x)-k) - from
				sums[k] += floats.Dot(rows[k:k+n], rows[:n])
				pairs[k] += n
			}
		}
	}
	return sums, pairs
}

// LjungBox tests residuals for whiteness over lags 1 ... lags: q = n (n+2) sum r_k^2/(n-k), n-k being the number of
// pairs of values at lag k, the mean of each record removed. p is the probability of so large a q if the residuals are
// white, by the chi-squared law with lags - fitted degrees of freedom, fitted being the number of parameters estimated.
// Ljung & Box, On a measure of lack of fit in time series models, Biometrika 65 (1978) 297-303. It panics unless
// lags > fitted >= 0.
func LjungBox(e [][]float64, lags, fitted int) (q, p float64) {
	sums, pairs := autocovariances(e, checkedLags(lags, fitted))
	n := float64(pairs[0])
	for k := 1; k <= lags; k++ {
		if pairs[k] > 0 {
			r := sums[k] / sums[0]
			q += n * (n + 2) * r * r / float64(pairs[k])
		}
	}
	return q, distuv.ChiSquared{K: float64(lags - fitted)}.Survival(q)
}

// BoxPierce is LjungBox with q = n sum r_k^2, for comparison with older results. Box & Pierce, Distribution of residual
// autocorrelations, J. Amer. Statist. Assoc. 65 (1970) 1509-1526.
func BoxPierce(e [][]float64, lags, fitted int) (q, p float64) {
	sums, pairs := autocovariances(e, checkedLags(lags, fitted))
	for k := 1; k <= lags; k++ {
		r := sums[k] / sums[0]
		q += float64(pairs[0]) * r * r
	}
	return q, distuv.ChiSquared{K: float64(lags - fitted)}.Survival(q)
}

func checkedLags(lags, fitted int) int {
	if lags < 1 || fitted < 0 || fitted >= lags {
		panic(badLag)
	}
	return lags
}

// CrossCorrelation returns the correlations of residual e_t = Y[t] with the input u_{t-k} = U[t-k], k = 0 ... maxLag,
// over all records, their means removed. If the residuals are white and the model true, each value with k >= 1 has
// standard deviation about 1/sqrt(n), in closed loop too; less where u_{t-k} was a regressor of a least-squares fit. k = 0
// and negative k say nothing in closed loop, where the input answers to the residual.
func CrossCorrelation(recs []Record, maxLag int) []float64 {
	checkRecords(recs)
	if maxLag < 0 {
		panic(badLag)
	}
	c := make([]float64, maxLag+1)
	var ee, uu float64
	for _, r := range recs {
		if len(r.Y) == 0 {
			continue
		}
		u, e := lessMean(r.U), lessMean(r.Y)
		ee += floats.Dot(e, e)
		uu += floats.Dot(u, u)
		for k := 0; k <= maxLag && k < len(u); k++ {
			c[k] += floats.Dot(e[k:], u[:len(u)-k])
		}
	}
	floats.Scale(1/math.Sqrt(ee*uu), c)
	return c
}

// PastInputs tests whether past inputs still explain residuals: e_t = Y[t] is regressed on u_{t-1} ... u_{t-lags} with a
// constant for each record, and f is the F ratio of that regression. p is the probability of so large an f if the
// residuals are white and independent of all past inputs, which holds for a true model in closed loop as well. It uses
// no present or future input. Where the model's parameters were estimated on the same records the test rejects a true
// model less often than it says, the more so the more parameters. The error is Condition where the input is not
// exciting enough for so many lags.
func PastInputs(recs []Record, lags int) (f, p float64, err error) {
	checkRecords(recs)
	if lags < 1 {
		panic(badLag)
	}
	all, order := ARXOptions{NB: lags, Delay: 1}.lags()
	g := newRegression(signals(recs), all, order, false)
	t, err := g.reduce()
	if err != nil {
		return 0, 0, fmt.Errorf("residuals against past inputs: %w", err)
	}
	if c := t.cond(lags); c > ConditionLimit {
		return 0, 0, fmt.Errorf("residuals against past inputs: %w", Condition(c))
	}
	f, p = FTest(t.rss(0), t.rss(lags), lags, g.rows-lags-g.constants())
	return f, p, nil
}

// FTest compares two nested least-squares fits to the same rows. rss1, with df degrees of freedom, belongs to the larger
// model, which has extra parameters more than that of rss0. f is their F ratio, p the probability of so large an f if
// the smaller model is true. Without any residual f and p are NaN.
func FTest(rss0, rss1 float64, extra, df int) (f, p float64) {
	if extra < 1 || df < 1 {
		panic("fit: F test without degrees of freedom")
	}
	f = (rss0 - rss1) / float64(extra) / (rss1 / float64(df))
	if math.IsNaN(f) {
		return f, f
	}
	return f, distuv.F{D1: float64(extra), D2: float64(df)}.Survival(math.Max(f, 0))
}
