package fit_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/fit"
)

// never is a clip that no value reaches.
const never = 1e9

// Two-sided run lengths of Lucas & Crosier, Fast initial response for CUSUM quality-control schemes, Technometrics 24 (1982)
// 199-205, tab. 1, as Montgomery, Introduction to Statistical Quality Control, tab. 9.3, prints them: reference 0.5, three
// digits. The two sides add up by their rates (Kemp, The use of cumulative sums for sampling inspection schemes, Appl.
// Statist. 11 (1962) 16-31).
func TestRunLengthsArePublished(t *testing.T) {
	shifts := []float64{0, 0.25, 0.5, 0.75, 1, 1.5, 2, 2.5, 3, 4}
	for limit, want := range map[float64][]float64{
		4: {168, 74.2, 26.6, 13.3, 8.38, 4.75, 3.34, 2.62, 2.19, 1.71},
		5: {465, 139, 38.0, 17.0, 10.4, 5.75, 4.01, 3.11, 2.57, 2.01},
	} {
		for i, shift := range shifts {
			got := 1 / (1/fit.CUSUMRunLength(0.5, limit, never, shift) + 1/fit.CUSUMRunLength(0.5, limit, never, -shift))
			// Half a unit of the third digit.
			if half := 0.5 * math.Pow(10, math.Floor(math.Log10(want[i]))-2); math.Abs(got-want[i]) > 1.01*half {
				t.Errorf("limit %g, shift %g: %.4g, published %g", limit, shift, got, want[i])
			}
		}
	}
}

// Siegmund's approximation, Sequential Analysis, Springer 1985, sec. 10.3: with b = limit + 1.166 and d = shift - reference the
// run length is (exp(-2 d b) + 2 d b - 1)/(2 d²). Its error at a reference of 0.5 is 1 to 3 %, less for smaller ones.
func TestRunLengthsNearSiegmund(t *testing.T) {
	for _, c := range []struct{ reference, limit, within float64 }{{0.5, 5, 0.03}, {0.5, 10, 0.03}, {0.25, 8, 0.02}, {0.25, 14, 0.02}} {
		b, d := c.limit+1.166, -c.reference
		want := (math.Exp(-2*d*b) + 2*d*b - 1) / (2 * d * d)
		if got := fit.CUSUMRunLength(c.reference, c.limit, never, 0); math.Abs(got/want-1) > c.within {
			t.Errorf("reference %g, limit %g: %.5g, by the approximation %.5g", c.reference, c.limit, got, want)
		}
	}
}

func TestLimitHasItsRunLength(t *testing.T) {
	for _, want := range []float64{5, 100, 1e4, 1e7} {
		limit := fit.CUSUMLimit(want, 0.5, 4)
		if got := fit.CUSUMRunLength(0.5, limit, 4, 0); math.Abs(got/want-1) > 1e-3*math.Max(1, limit) {
			t.Errorf("limit %.5g for a run length of %g has %.6g", limit, want, got)
		}
	}
}

// The scores of estimates about an unknown mean, with variances off by an unknown factor, are independent and standard
// normal when both are drawn from their priors. Alarms of the sums of them then come at the rate of the limit: a Poisson
// number of 400 lies within 325 to 480 but for a probability of 1e-4.
func TestSelfStartingRate(t *testing.T) {
	const (
		runs, length = 400, 1000
		runLength    = 2000.0 // of a side
		freedom      = 10.0
		clip         = 4.0
	)
	expected := runs * length / runLength * 2
	if expected != 400 {
		t.Fatal("the limits below are for 400")
	}
	limit := fit.CUSUMLimit(runLength, 0.5, clip)
	alarms := 0
	var n, sum, squares, lag, beyond, early float64
	for run := range runs {
		rnd := rand.New(rand.NewPCG(42, uint64(run)))
		factor := freedom / distuv.ChiSquared{K: freedom, Src: rand.NewPCG(43, uint64(run))}.Rand()
		s := fit.Standardised{Variance: 1, Factor: 1, Freedom: freedom, Clip: clip}
		c := fit.CUSUM{Reference: 0.5, Limit: limit, Clip: clip}
		mean := math.Sqrt(factor) * rnd.NormFloat64()
		last := 0.0
		for k := range length {
			v := 0.5 + rnd.Float64()
			z, ok := s.Next(mean+math.Sqrt(v*factor)*rnd.NormFloat64(), v)
			if !ok {
				t.Fatal("nothing to hold the first value against")
			}
			n, sum, squares, lag = n+1, sum+z, squares+z*z, lag+z*last
			if k < 3 { // when all hangs on the prior
				early += z * z / (3 * runs)
			}
			if math.Abs(z) > 3 {
				beyond++
			}
			last = z
			if c.Add(z) != 0 {
				alarms++
			}
		}
	}
	sd := 1 / math.Sqrt(n)
	for _, c := range []struct {
		what            string
		got, want, four float64
	}{
		{"mean", sum / n, 0, 4 * sd},
		{"mean square", squares / n, 1, 4 * sd * math.Sqrt2},
		{"product of neighbours", lag / n, 0, 4 * sd},
		{"mean square of the first three", early, 1, 4 * math.Sqrt(2.0/(3*runs))},
		{"share beyond 3", beyond / n, 0.0026998, 4 * sd * math.Sqrt(0.0027)},
	} {
		if math.Abs(c.got-c.want) > c.four {
			t.Errorf("%s %.5f, want %.5f within %.5f", c.what, c.got, c.want, c.four)
		}
	}
	if alarms < 325 || alarms > 480 {
		t.Errorf("%d alarms where 400 are expected", alarms)
	}
	t.Logf("%d alarms where 400 are expected", alarms)
}

// One stray value raises no alarm, a lasting move does, on its side.
func TestCUSUMTellsSides(t *testing.T) {
	for _, sign := range []float64{1, -1} {
		c := fit.CUSUM{Reference: 0.5, Limit: 5, Clip: 4}
		if c.Add(sign*50) != 0 {
			t.Error("one stray value raises an alarm")
		}
		for range 10 {
			c.Add(0)
		}
		alarm, n := 0, 0
		for alarm == 0 {
			n++
			alarm = c.Add(2 * sign)
		}
		if alarm != int(sign) || n != 4 {
			t.Errorf("move by %g: alarm %d after %d values", 2*sign, alarm, n)
		}
	}
}

func TestStandardisedStartsFromNothing(t *testing.T) {
	s := fit.Standardised{Variance: math.Inf(1), Factor: 1, Freedom: 1e6, Clip: 4}
	if _, ok := s.Next(7, 1); ok || s.Mean != 7 || s.Variance != 1 {
		t.Errorf("the first value is held against something: %+v", s)
	}
	if z, ok := s.Next(9, 1); !ok || math.Abs(z-math.Sqrt2) > 1e-4 || math.Abs(s.Mean-8) > 1e-12 {
		t.Errorf("score %.5f, mean %g; want 1.41421, 8", z, s.Mean)
	}
}
