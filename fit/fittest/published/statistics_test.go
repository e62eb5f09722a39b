package published

import (
	"encoding/csv"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"testing"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/design"
	"steadyrig/fit"
	"steadyrig/fit/fittest"
	"steadyrig/fit/lti"
)

func record(s fittest.Set) []fit.Record { return []fit.Record{{U: s.U, Y: s.Y}} }

// arx fits without a constant, from row first on, and returns the residuals of its rows.
func arx(t *testing.T, recs []fit.Record, na, nb, delay, first int) (*fit.ARX, [][]float64) {
	t.Helper()
	m, err := fit.FitARX(recs, fit.ARXOptions{NA: na, NB: nb, Delay: delay, First: first, NoConstant: true})
	if err != nil {
		t.Fatal(err)
	}
	e := m.Residuals(recs)
	return m, [][]float64{e[0][m.First-m.Order:]}
}

func se(cov mat.Symmetric, i int) float64 { return math.Sqrt(cov.At(i, i)) }

func corr(cov mat.Symmetric, i, j int) float64 { return cov.At(i, j) / (se(cov, i) * se(cov, j)) }

// Laws whose quantiles stand behind intervals and tests. 1e-10: the quantiles are found by bisection or by Newton's method
// on incomplete beta and gamma functions.
func TestPublishedLaws(t *testing.T) {
	s := open(t, "Laws of statistics")
	var v []value
	for _, c := range []struct{ p, df, want float64 }{
		{0.95, 1, 3.84145882069412}, {0.95, 2, 5.99146454710798}, {0.95, 5, 11.0704976935164}, {0.95, 10, 18.3070380532751},
		{0.95, 20, 31.4104328442309}, {0.95, 30, 43.7729718257422}, {0.99, 1, 6.63489660102121}, {0.99, 4, 13.2767041359876},
		{0.99, 20, 37.5662347866251}, {0.05, 10, 3.94029913611906}, {0.05, 20, 10.8508113941826},
	} {
		v = append(v, rel(fmt.Sprintf("%g quantile, %g degrees of freedom", c.p, c.df), distuv.ChiSquared{K: c.df}.Quantile(c.p), c.want, 1e-10))
	}
	s.check("B01", "chi-square", "Abramowitz & Stegun, Handbook of Mathematical Functions, 1964, table 26.8", recomputed, v...)

	v = nil
	for _, c := range []struct{ p, d1, d2, want float64 }{
		{0.95, 1, 10, 4.9646027437307}, {0.95, 2, 10, 4.1028210151304}, {0.95, 3, 20, 3.0983912121408}, {0.95, 2, 30, 3.3158295010135},
		{0.95, 4, 994, 2.3808848233541}, {0.95, 2, 1996, 3.0002329740559}, {0.99, 5, 12, 5.0643431111429},
	} {
		v = append(v, rel(fmt.Sprintf("%g quantile, %g and %g", c.p, c.d1, c.d2), distuv.F{D1: c.d1, D2: c.d2}.Quantile(c.p), c.want, 1e-10))
		// The F test of nested fits gives that quantile its probability back.
		_, p := fit.FTest(1+c.want*c.d1/c.d2, 1, int(c.d1), int(c.d2))
		v = append(v, rel("probability of more, by FTest", p, 1-c.p, 1e-10))
	}
	s.check("B02", "F", "Abramowitz & Stegun, table 26.9", recomputed, v...)

	v = nil
	for _, c := range []struct{ p, want float64 }{{0.95, 1.6448536269514727}, {0.975, 1.9599639845400542}, {0.995, 2.5758293035489008}, {0.9995, 3.2905267314918948}} {
		v = append(v, rel(fmt.Sprintf("%g quantile", c.p), distuv.UnitNormal.Quantile(c.p), c.want, 1e-12))
	}
	s.check("B04", "normal", "Abramowitz & Stegun, table 26.5", recomputed, v...)

	v = nil
	for _, c := range []struct{ n, want float64 }{{4, 0.631596850136}, {8, 0.348163655131}, {14, 0.205816665187}, {32, 0.092114059947}} {
		v = append(v, rel(fmt.Sprintf("0.95 limit, %g segments", c.n), fit.CoherenceThreshold(c.n, 0.95), c.want, 1e-11))
	}
	s.check("B13", "coherence of unrelated signals", "Carter, Knapp & Nuttall, IEEE Trans. Audio Electroacoustics 21 (1973) 337-344", closed, v...)

	// The fewest and most hits of n whose tails are each at most 0.0005.
	v = nil
	for _, c := range []struct {
		n      int
		p      float64
		lo, hi int
	}{{100, 0.95, 87, 100}, {200, 0.95, 179, 198}, {400, 0.95, 364, 393}, {500, 0.95, 458, 489}, {1000, 0.95, 926, 971}, {2000, 0.95, 1867, 1931}, {1000, 0.90, 868, 930}, {1000, 0.99, 978, 998}} {
		b := distuv.Binomial{N: float64(c.n), P: c.p}
		lo, hi := 0, c.n
		for b.CDF(float64(lo)) <= 0.0005 {
			lo++
		}
		for b.Survival(float64(hi-1)) <= 0.0005 {
			hi--
		}
		v = append(v, said(fmt.Sprintf("%d runs at %g", c.n, c.p), fmt.Sprintf("%d to %d", lo, hi), fmt.Sprintf("%d to %d", c.lo, c.hi)))
	}
	s.check("B22", "limits of coverage counts", "binomial law", recomputed, v...)

	s.check("B23", "bounds on a share", "Clopper & Pearson, Biometrika 26 (1934) 404-413", closed,
		rel("none of 59, upper at 0.95", design.ClopperPearsonUpper(0, 59, 0.95), 0.049507609888227, 1e-12),
		rel("none of 10, upper at 0.95", design.ClopperPearsonUpper(0, 10, 0.95), 0.258865550893052, 1e-12),
		rel("950 of 1000, lower at 0.975", design.ClopperPearsonLower(950, 1000, 0.975), 0.934609512085, 1e-10),
		rel("950 of 1000, upper at 0.975", design.ClopperPearsonUpper(950, 1000, 0.975), 0.962664602395, 1e-10))
}

// Regressions, criteria, tests and spectra on the deterministic sets of fittest, whose values others computed from the
// same integers: in exact rational arithmetic, or by a statistics or a signal-processing library.
func TestPublishedStatistics(t *testing.T) {
	s := open(t, "Statistics")
	d1, d2, d3 := record(fittest.D1()), record(fittest.D2()), record(fittest.D3())
	const exact = "data set D1, rational arithmetic"

	m, e := arx(t, d1, 2, 2, 1, 0)
	s.check("B06", "ARX(2,2) on D1", exact, recomputed,
		rel("a1", -m.A[1], 1.505396543036128, 1e-10), rel("a2", -m.A[2], -0.6909083067385771, 1e-10),
		rel("b1", m.B[1], 1.000931822409103, 1e-10), rel("b2", m.B[2], 0.490280910432716, 1e-10),
		rel("deviation of a1", se(m.Cov, 0), 0.006232741766484, 1e-10), rel("deviation of a2", se(m.Cov, 1), 0.0060947990315351, 1e-10),
		rel("deviation of b1", se(m.Cov, 2), 0.0093314916403173, 1e-10), rel("deviation of b2", se(m.Cov, 3), 0.010699120070327, 1e-10),
		rel("residual sum of squares", m.RSS, 89609302.0486137684, 1e-12), rel("residual variance", m.Variance, 90150.20326822311, 1e-12),
		abs("correlation of a1, a2", corr(m.Cov, 0, 1), -0.92716385, 1e-8), abs("correlation of a1, b2", -corr(m.Cov, 0, 3), -0.49579595, 1e-8))

	var v []value
	for _, c := range []struct {
		lags int
		q, p float64
	}{{10, 14.109509, 0.028437}, {20, 18.820691, 0.278071}, {25, 29.138709, 0.110711}} {
		q, p := fit.LjungBox(e, c.lags, 4)
		v = append(v, abs(fmt.Sprintf("Q(%d)", c.lags), q, c.q, 1e-6), abs("probability", p, c.p, 1e-6))
	}
	bp, _ := fit.BoxPierce(e, 20, 4)
	s.check("B09", "whiteness of B06's residuals", "Ljung & Box, Biometrika 65 (1978) 297-303; Box & Pierce 1970", recomputed,
		append(v, abs("Box and Pierce's Q(20)", bp, 18.600934, 1e-6))...)

	low, el := arx(t, d1, 1, 1, 1, 2)
	q, p := fit.LjungBox(el, 20, 2)
	s.check("B07", "ARX(1,1) on D1, an order too low", exact, recomputed,
		rel("a", -low.A[1], 0.9052985326828285, 1e-10), rel("b", low.B[1], 0.8550472043067398, 1e-10),
		rel("deviation of a", se(low.Cov, 0), 0.011636946455165, 1e-10), rel("deviation of b", se(low.Cov, 1), 0.047353303954751, 1e-10),
		rel("residual variance", low.Variance, 2346528.938256521, 1e-10), abs("Q(20)", q, 831.518098, 1e-6),
		verdict("rejected at 1e-6", p < 1e-6, true))

	const rss = 89609302.0486137684
	s.check("B10", "criteria of B06", "Akaike 1969, 1974; Schwarz 1978; Hurvich & Tsai 1989", recomputed,
		rel("AIC", fit.AIC.Value(rss, 998, 4), 11390.405980924, 1e-12), rel("BIC", fit.BIC.Value(rss, 998, 4), 11410.02899403, 1e-12),
		rel("AICc", fit.AICc.Value(rss, 998, 4), 11390.446262898, 1e-12), rel("final prediction error", fit.FPE(rss, 998, 4), 90511.526728216, 1e-12))

	type order struct{ rss, aic, bic float64 } // 0: not given
	type ftest struct {
		order, df int
		f, p      float64
	}
	var orders, tests []value
	for _, c := range []struct {
		name string
		recs []fit.Record
		want []order
		best int
		ftest
	}{
		{"D1", d1, []order{{2334797459.843112, 14612.7739509, 14622.5814454}, {89444501.18061474, 11367.7601082, 11387.3750973},
			{89397635.34215001, 11371.2381018, 11400.6605853}, {89360818.4733405, 11374.8278319, 11414.05781}}, 2, ftest{3, 990, 0.259498922441, 0.7714904958}},
		{"D3", d3, []order{{aic: 52168.2528313}, {aic: 45392.5820876}, {aic: 45396.512526}}, 2, ftest{3, 3991, 0.0347288723675, 0.96586755}},
		{"D2", d2, []order{{aic: 22660.420166}, {aic: 22663.095118}, {aic: 22662.7121488}}, 1, ftest{2, 1993, 0.661416366481, 0.51623305}},
	} {
		best := map[fit.Criterion]int{}
		for _, crit := range []fit.Criterion{fit.AIC, fit.BIC, fit.AICc} {
			opt := fit.ChooseOptions{MaxOrder: len(c.want), Delay: 1, Criterion: crit, NoConstant: true}
			scores, err := fit.ARXOrders(c.recs, opt)
			if err != nil {
				t.Fatal(err)
			}
			for i, w := range c.want {
				if w.rss != 0 && crit == fit.AIC {
					orders = append(orders, rel(fmt.Sprintf("%s, order %d: residual sum of squares", c.name, i+1), scores[i].RSS, w.rss, 1e-12))
				}
				if crit == fit.AIC {
					orders = append(orders, rel(fmt.Sprintf("%s, order %d: AIC", c.name, i+1), scores[i].Score, w.aic, 1e-11))
				} else if crit == fit.BIC && w.bic != 0 {
					orders = append(orders, rel(fmt.Sprintf("%s, order %d: BIC", c.name, i+1), scores[i].Score, w.bic, 1e-11))
				}
			}
			chosen, err := fit.ChooseARX(c.recs, opt)
			if err != nil {
				t.Fatal(err)
			}
			best[crit] = chosen.Order
			if crit == fit.AIC {
				f, p := fit.FTest(scores[c.order-2].RSS, scores[c.order-1].RSS, 2, c.df)
				name := fmt.Sprintf("%s, order %d against %d", c.name, c.order, c.order-1)
				tests = append(tests, rel("F of "+name, f, c.f, 1e-8), rel("probability", p, c.p, 1e-8))
			}
		}
		orders = append(orders, said(c.name+": order by AIC, BIC, AICc", fmt.Sprintf("%d, %d, %d", best[fit.AIC], best[fit.BIC], best[fit.AICc]), fmt.Sprintf("%d, %d, %d", c.best, c.best, c.best)))
	}
	s.check("B08", "order on one common sample", "Akaike 1974; Schwarz 1978; rational arithmetic", recomputed, orders...)
	s.check("B11", "order by F test", "theory of linear models", recomputed, tests...)

	d := fittest.D1()
	w, err := fit.Welch([][]float64{d.U}, [][]float64{d.Y}, 1, 256)
	if err != nil {
		t.Fatal(err)
	}
	coh := w.Coherence()
	v = nil
	for _, c := range []struct {
		bin      int
		uu, yy   float64 // 0: not given
		uy, h    complex128
		coherent float64
	}{
		{8, 2.6585774256e+06, 1.8357611831e+08, 1.9603967452e+07 - 9.2065440619e+06i, 7.3738561321 - 3.4629587889i, 0.9611202150},
		{32, 2.7851627649e+06, 3.5039774343e+07, -9.1321165596e+06 - 3.5447965035e+06i, -3.2788448397 - 1.2727430325i, 0.9832942407},
		{64, 0, 0, 0, -0.6476725467 + 0.1083465865i, 0.9483233148},
		{128, 1.7212797569e+06, 6.1534849634e+04, 0, -0.1493483594, 0.6239233372},
	} {
		bin := func(name string) string { return fmt.Sprintf("bin %d: %s", c.bin, name) }
		if c.uu != 0 {
			v = append(v, rel(bin("spectrum of u"), w.XX[c.bin], c.uu, 1e-9), rel(bin("spectrum of y"), w.YY[c.bin], c.yy, 1e-9))
		}
		if c.uy != 0 {
			v = append(v, rel(bin("cross spectrum, real"), real(w.XY[c.bin]), real(c.uy), 1e-9), rel(bin("imaginary"), imag(w.XY[c.bin]), imag(c.uy), 1e-9))
		}
		h := w.XY[c.bin] / complex(w.XX[c.bin], 0)
		v = append(v, rel(bin("coherence"), coh[c.bin], c.coherent, 1e-9), rel(bin("quotient, real"), real(h), real(c.h), 1e-8),
			abs(bin("imaginary"), imag(h), imag(c.h), 1e-9))
	}
	s.check("B12", "spectra of D1", "Welch, IEEE Trans. Audio Electroacoustics 15 (1967) 70-73", recomputed, v...)
	s.check("B16", "degrees of freedom of six segments", "Welch 1967", closed,
		said("segments", strconv.Itoa(w.Segments), "6"), rel("degrees of freedom", 2*w.EffectiveSegments(), 11.4690265487, 1e-11))

	cov, err := lti.DiscreteLyapunov(mat.NewDense(2, 2, []float64{1.5, -0.6875, 1, 0}), mat.NewDense(2, 2, []float64{1, 0, 0, 0}))
	if err != nil {
		t.Fatal(err)
	}
	s.check("B24", "moments of an AR(2)", "Box & Jenkins, Time Series Analysis, 1976, ch. 3", closed,
		rel("variance over that of the noise", cov.At(0, 0), 9.0352941176470588, 1e-13), rel("lag-1 correlation", cov.At(0, 1)/cov.At(0, 0), 0.8888888888888889, 1e-13))

	// White 1958: what is far from normal here is why a record that runs away is not to be fitted by normal intervals. The
	// quartile of n draws of a standard Cauchy scatters by sqrt(3/16/n) 2 pi, 0.043 for 4 000; four of them.
	const trials, rows, a = 4000, 100, 1.1
	scaled := make([]float64, trials)
	for k := range scaled {
		rnd := rand.New(rand.NewPCG(1958, uint64(k)))
		r := fit.Record{U: make([]float64, rows+1), Y: make([]float64, rows+1)}
		for i := range rows {
			r.Y[i+1] = a*r.Y[i] + rnd.NormFloat64()
		}
		m, err := fit.FitARX([]fit.Record{r}, fit.ARXOptions{NA: 1, NoConstant: true})
		if err != nil {
			t.Fatal(err)
		}
		scaled[k] = math.Pow(a, rows) * (-m.A[1] - a) / (a*a - 1)
	}
	slices.Sort(scaled)
	s.check("H06", "explosive AR(1), 4 000 records of 100 rows", "White, Ann. Math. Statist. 29 (1958) 1188-1197", closed,
		abs("lower quartile", scaled[trials/4], -1, 0.17), abs("upper quartile", scaled[3*trials/4], 1, 0.17))
}

// Series that ship with the statistics library of the live check; its Debian package puts them here.
func statsmodels(t *testing.T, name string) []float64 {
	t.Helper()
	f, err := os.Open("/usr/lib/python3/dist-packages/statsmodels/datasets/" + name + "/" + name + ".csv")
	if err != nil {
		t.Skipf("the series of python3-statsmodels are not here, skipped: %v", err)
	}
	defer f.Close()
	rows, err := csv.NewReader(f).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var x []float64
	for _, r := range rows[1:] {
		v, err := strconv.ParseFloat(r[1], 64)
		if err != nil {
			t.Fatal(err)
		}
		x = append(x, v)
	}
	return x
}

func lessMean(x []float64) []float64 {
	x = slices.Clone(x)
	floats.AddConst(-floats.Sum(x)/float64(len(x)), x)
	return x
}

// autoregression fits y on its own past, with a constant or without.
func autoregression(t *testing.T, y []float64, order int, constant bool) (*fit.ARX, []float64) {
	t.Helper()
	recs := []fit.Record{{U: make([]float64, len(y)), Y: y}}
	m, err := fit.FitARX(recs, fit.ARXOptions{NA: order, NoConstant: !constant})
	if err != nil {
		t.Fatal(err)
	}
	return m, m.Residuals(recs)[0]
}

func TestPublishedSeries(t *testing.T) {
	sun, nile := statsmodels(t, "sunspots"), statsmodels(t, "nile")
	s := open(t, "Series")
	r := fit.Autocorrelation([][]float64{sun}, 5)
	raw := [][]float64{sun}
	q := func(x [][]float64, lags int) float64 { q, _ := fit.LjungBox(x, lags, 0); return q }
	s.check("B17", "sunspots 1700-2008", "Wolf's numbers; Ljung & Box 1978", recomputed,
		abs("autocorrelation 1", r[1], 0.82020129, 1e-7), abs("autocorrelation 5", r[5], -0.42523943, 1e-7),
		rel("Q(1)", q(raw, 1), 209.898364, 1e-7), rel("Q(5)", q(raw, 5), 355.263817, 1e-7), rel("Q(10)", q(raw, 10), 627.382673, 1e-7))

	m, e := autoregression(t, sun, 2, true)
	m9, e9 := autoregression(t, sun, 9, true)
	s.check("B18", "AR(2) and AR(9) of the sunspots", "least squares", recomputed,
		rel("first coefficient", -m.A[1], 1.39180525, 1e-8), rel("second", -m.A[2], -0.69028693, 1e-8), rel("constant", m.Const[0], 14.90714834, 1e-8),
		rel("deviation of the first", se(m.Cov, 0), 0.04152445, 1e-6), rel("residual variance", m.Variance, 278.1544412241, 1e-9),
		rel("Q(20)", q([][]float64{e}, 20), 53.937083, 1e-6), rel("AR(9), ninth coefficient", -m9.A[9], 0.253491032, 1e-8),
		rel("its residual variance", m9.Variance, 228.8542507673, 1e-9), rel("its Q(20)", q([][]float64{e9}, 20), 19.033230, 1e-6))

	yule, _ := autoregression(t, lessMean(sun[49:225]), 2, false)
	s.check("B19", "sunspots 1749-1924", "Yule, Phil. Trans. A 226 (1927) 267-298", remembered,
		abs("first coefficient, an older edition of the data", -yule.A[1], 1.34254, 0.02), abs("second", -yule.A[2], -0.65504, 0.02),
		rel("first coefficient, this edition", -yule.A[1], 1.33605173, 1e-8), rel("second", -yule.A[2], -0.64997390, 1e-8))

	box, _ := autoregression(t, sun[70:170], 2, true)
	s.check("B20", "sunspots 1770-1869, series E", "Box & Jenkins 1976, ch. 7", remembered,
		abs("first coefficient, an older edition of the data", -box.A[1], 1.42, 0.03), abs("second", -box.A[2], -0.73, 0.03),
		rel("first coefficient, this edition", -box.A[1], 1.40322155, 1e-8), rel("second", -box.A[2], -0.7098519, 1e-7))

	// Local level: the steady gain is that of the filter with variances 15099 and 1469.1.
	x, k, err := lti.DARE(mat.NewDense(1, 1, []float64{1}), mat.NewDense(1, 1, []float64{1}), mat.NewDense(1, 1, []float64{1469.1 / 15099}), mat.NewDense(1, 1, []float64{1}))
	if err != nil {
		t.Fatal(err)
	}
	s.check("B21", "flow of the Nile 1871-1970", "Durbin & Koopman, Time Series Analysis by State Space Methods, 2012, sec. 2.2", remembered,
		rel("steady gain", k.At(0, 0), 0.267048012570930, 1e-13), rel("the same from the variance", x.At(0, 0)/(1+x.At(0, 0)), 0.267048012570930, 1e-13),
		rel("Q(1)", q([][]float64{nile}, 1), 25.593832, 1e-7))
}
