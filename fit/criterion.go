package fit

import "math"

// Criterion weighs the fit of a model against the number of its parameters; the least value wins.
type Criterion int

const (
	// AICc is Akaike's criterion n ln(RSS/n) + 2p with the small-sample term 2p(p+1)/(n-p-1): no order holds the truth,
	// the best prediction is wanted. Hurvich & Tsai, Regression and time series model selection in small samples,
	// Biometrika 76 (1989) 297-307.
	AICc Criterion = iota
	// AIC is n ln(RSS/n) + 2p. Akaike, A new look at the statistical model identification, IEEE Trans. Automatic
	// Control 19 (1974) 716-723.
	AIC
	// BIC is n ln(RSS/n) + p ln n: one of the orders is true and is wanted. Schwarz, Estimating the dimension of a
	// model, Ann. Statist. 6 (1978) 461-464.
	BIC
)

// Value returns the criterion for p parameters fitted to n values with residual sum of squares rss. The constant
// n(1 + ln 2 pi) of the Gaussian log-likelihood is left out, so that values compare on the same n values only.
func (c Criterion) Value(rss float64, n, p int) float64 {
	fn, fp := float64(n), float64(p)
	v := fn * math.Log(rss/fn)
	switch c {
	case AICc:
		if n-p-1 <= 0 {
			return math.Inf(1)
		}
		return v + 2*fp + 2*fp*(fp+1)/(fn-fp-1)
	case AIC:
		return v + 2*fp
	case BIC:
		return v + fp*math.Log(fn)
	}
	panic("fit: unknown criterion")
}

// FPE is Akaike's final prediction error (RSS/n)(n+p)/(n-p), in the output's units squared. Akaike, Fitting
// autoregressive models for prediction, Ann. Inst. Statist. Math. 21 (1969) 243-247.
func FPE(rss float64, n, p int) float64 {
	return rss / float64(n) * float64(n+p) / float64(n-p)
}
