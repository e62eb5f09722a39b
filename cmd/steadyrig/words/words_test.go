package words

import (
	"math"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

func TestNumbers(t *testing.T) {
	inf := math.Inf(1)
	for _, c := range []struct{ got, want string }{
		{Number(0), "0"},
		{Number(36.1234), "36.12"},
		{Number(-0.00012345), "-0.0001234"},
		{Number(2.6132e6), "2.613e6"},
		{Number(448599.4), "448599"},
		{Number(1.5e-9), "1.5e-9"},
		{Number(math.NaN()), "unknown"},
		{Number(inf), "no limit"},
		{Brief(12.1834), "12.2"},
		{Brief(0.56071), "0.561"},
		{Brief(1234), "1234"},
		{Unit("3", ""), "3"},
		{Unit("3", "mm"), "3 mm"},
		{Interval(ident.Interval{Lo: 35.7512, Hi: 36.4934}), "35.75 to 36.49"},
		{Interval(ident.Interval{Lo: -0.02722, Hi: 0.8229}), "-0.03 to 0.82"},
		{Interval(ident.Interval{Lo: -inf, Hi: 2}), "below 2"},
		{Interval(ident.Interval{Lo: 2, Hi: inf}), "above 2"},
		{Interval(ident.Interval{Lo: -inf, Hi: inf}), "not bounded"},
		{Interval(ident.Interval{Lo: 3, Hi: 3}), "3 to 3"},
		{Interval(ident.Interval{Lo: 2.586e6, Hi: 2.64e6}), "2.586e6 to 2.64e6"},
		{Interval(ident.Interval{Lo: 1.23e-9, Hi: 1.31e-9}), "1.23e-9 to 1.31e-9"},
		{Share(0.99850), "99.85 %"},
		{Probability(0.99999), "> 0.999"},
		{Probability(0.00001), "< 0.001"},
		{Probability(0.9234), "0.923"},
		{Seconds(0), "0 s"},
		{Seconds(30.28e-6), "30.28 µs"},
		{Seconds(0.0121), "12.1 ms"},
		{Seconds(6.789), "6.789 s"},
		{Count(1, "plant"), "1 plant"},
		{Count(2, "plant"), "2 plants"},
		{Polynomial([]float64{1, -288.4, 0, -1}, "s"), "s³ - 288.4 s² - 1"},
		{Polynomial([]float64{-312.7, 2185}, "s"), "-312.7 s + 2185"},
		{Polynomial([]float64{0.5}, "s"), "0.5"},
		{Fraction(design.Rational{Numerator: []float64{-2.5, 1}, Denominator: []float64{1, -0.5, 0.25}}, "z"), "(-2.5 + 1 z⁻¹) / (1 - 0.5 z⁻¹ + 0.25 z⁻²)"},
		{Ratio("mm", "A"), "mm/A"},
		{Ratio("", "A"), "1/A"},
		{Ratio("mm", ""), "mm"},
		{Ratio("", ""), ""},
	} {
		if c.got != c.want {
			t.Errorf("%q, want %q", c.got, c.want)
		}
	}
}

func TestUnstable(t *testing.T) {
	real36 := ident.Root{Re: 36, Re95: ident.Interval{Lo: 35, Hi: 37}, Unstable: true, ProbabilityUnstable: 1}
	up := ident.Root{Re: 1.1, Im: 10, Re95: ident.Interval{Lo: 1, Hi: 1.2}, Unstable: true, ProbabilityUnstable: 1}
	down := up
	down.Im = -10
	open := ident.Root{Re: 0.3, Re95: ident.Interval{Lo: -0.2, Hi: 0.8}, Unstable: true, ProbabilityUnstable: 0.9}
	stable := ident.Root{Re: -4, Re95: ident.Interval{Lo: -5, Hi: -3}}
	zero := ident.Root{Re95: ident.Interval{Lo: -0.5, Hi: 0.5}}
	for _, c := range []struct {
		poles []ident.Root
		want  string
	}{
		{[]ident.Root{stable}, "no unstable pole was found"},
		{[]ident.Root{stable, real36}, "unstable pole at 36 rad/s (95 %: 35.0 to 37.0), doubling in 19.25 ms"},
		{[]ident.Root{down, up}, "unstable pole pair at 1.1 ± 10i rad/s (real part 95 %: 1.00 to 1.20)"},
		{[]ident.Root{open}, "perhaps unstable at 0.3 rad/s (95 %: -0.2 to 0.8), probability 0.900"},
		{[]ident.Root{open, real36}, "unstable pole at 36 rad/s (95 %: 35.0 to 37.0), doubling in 19.25 ms; perhaps unstable at 0.3 rad/s (95 %: -0.2 to 0.8), probability 0.900"},
		{[]ident.Root{zero, zero, stable}, "2 poles at zero: the rig drifts, it does not grow by itself"},
		{[]ident.Root{zero, real36}, "unstable pole at 36 rad/s (95 %: 35.0 to 37.0), doubling in 19.25 ms; 1 pole at zero"},
	} {
		if got := Unstable(c.poles); got != c.want {
			t.Errorf("%q, want %q", got, c.want)
		}
	}
}

// A pole that a structure holds at zero was not measured: no probability is told of it, and the interval is said to be
// another pole's. Without such a pole a gain that is missing is one that the data do not give.
func TestIntegrators(t *testing.T) {
	zero := ident.Root{Re95: ident.Interval{Lo: -0.03, Hi: 0.82}, ProbabilityUnstable: 0.0003}
	slow := ident.Root{Re: 0.1, Re95: ident.Interval{Lo: -0.03, Hi: 0.82}, Unstable: true, ProbabilityUnstable: 0.9}
	for _, c := range []struct {
		root          ident.Root
		verdict, prob string
		notes         int
		gain          string
	}{
		{zero, "at zero (integrator)", "–", 1, "none: the plant integrates"},
		{slow, "open", "0.900", 0, "not determined: the interval of the slowest pole holds zero"},
	} {
		if verdict, prob := Unstableness(c.root); verdict != c.verdict || prob != c.prob {
			t.Errorf("%q, %q, want %q, %q", verdict, prob, c.verdict, c.prob)
		}
		poles := []ident.Root{c.root}
		if notes := PoleNotes(poles); len(notes) != c.notes {
			t.Errorf("notes %q, want %d", notes, c.notes)
		}
		if got := SteadyGain(&ident.Model{Poles: poles}, "mm/N"); got != c.gain {
			t.Errorf("%q, want %q", got, c.gain)
		}
	}
}

// Coefficients come with their intervals, in the order that Plant documents for its covariance; what was not estimated
// comes without one.
func TestPlant(t *testing.T) {
	m := &ident.Model{Evidence: ident.Evidence{Residuals: ident.Residuals{Whiteness: 1, CrossInput: 0.5, Linearity: 0.25}}, Plant: ident.Plant{
		Numerator: []float64{-312.7, 2185}, Denominator: []float64{1, 22.15, 0, -2714}, Delay: 0.002,
		Parameters: []string{"b0", "b1", "a1", "a2", "a3"},
		Covariance: [][]float64{{100, 0, 0, 0, 0}, {0, 1, 0, 0, 0}, {0, 0, 0.01, 0, 0}, {0, 0, 0, 0, 0}, {0, 0, 0, 0, 25}},
	}}
	for _, c := range []struct{ got, want string }{
		{Numerator(m), "-(312.7 ± 2.0) s + (2185 ± 20)"},
		{Denominator(m), "s³ + (22.15 ± 0.20) s² - (2714.0 ± 9.8)"},
		{Delay(m), "held at 2 ms"},
		{Residuals(m), "white: not tested, the log is in pieces too short; free of the input: 0.500, linear: 0.250 (probability of more by chance)"},
		{Memories(46.34), "46.3 memories of the predictor"},
		{PolynomialWithin([]float64{-448613, 2.2e-3}, []float64{7940, 6.7e-6}, "s"), "-(4.486 ± 0.079)e5 s + (2.2000 ± 0.0067)e-3"},
		{PolynomialWithin([]float64{0.5}, []float64{3000}, "s"), "(0.0 ± 3.0)e3"},
		{PolynomialWithin([]float64{-31997}, []float64{115}, "s"), "-31997 ± 115"},
		{PlantUnits(data.Units{Input: "A", Output: "mm"}), "s in rad/s, y in mm, u in A"},
		{Basis(m), ""},
		{Estimate(&ident.Estimate{Value: 3, Interval95: ident.Interval{Lo: 3, Hi: 3}}, "mm"), "3 mm"},
	} {
		if c.got != c.want {
			t.Errorf("%q, want %q", c.got, c.want)
		}
	}
	m.Plant.Parameters[4], m.Plant.Covariance[4][4] = "delay", 1e-8
	m.Plant.Draws = make([]ident.DrawnPlant, 1000)
	m.Poles, m.Evidence.IntervalsBy = make([]ident.Root, 3), ident.ByDraws
	if got, want := Delay(m), "2 ms ± 196 µs"; got != want {
		t.Errorf("%q, want %q", got, want)
	}
	if got, want := Basis(m), "those of 1000 plants drawn from the likelihood of a short log, over all structures of 3 poles that it leaves open"; got != want {
		t.Errorf("%q, want %q", got, want)
	}
}

func TestFlawsAndMisses(t *testing.T) {
	for _, c := range []struct {
		flaw  ident.Flaw
		named bool
		want  string
	}{
		{ident.Flaw{Name: "missing value", Column: "y", Count: 12, Line: 103}, false, "missing value in y, 12 times, first on line 103"},
		{ident.Flaw{Name: "missing value", Column: "y", Count: 1, Line: 103, File: "b.csv"}, true, "missing value in y of b.csv, on line 103"},
		{ident.Flaw{Name: "gap"}, false, "gap"},
	} {
		if got := Flaw(c.flaw, c.named); got != c.want {
			t.Errorf("%q, want %q", got, c.want)
		}
	}
	u := data.Units{Input: "A", Output: "mm"}
	for what, want := range map[string]string{
		"overshoot": "20 %, 10 %", "settling": "200 ms, 100 ms", "peak_sensitivity": "0.2, 0.1", "input_noise": "0.2 A, 0.1 A", "kick_peak": "0.2 mm, 0.1 mm",
		"trip limits during the step": ", ",
	} {
		worst, asked := Miss(design.MissReason{What: what, Worst: 0.2, Asked: 0.1}, u)
		if got := strings.Join([]string{worst, asked}, ", "); got != want {
			t.Errorf("%s: %q, want %q", what, got, want)
		}
	}
	if got := Agrees(ident.Method{Name: "long", Note: "it could not be computed"}); got != "–" {
		t.Errorf("a method without poles agrees: %q", got)
	}
	p := 0.00002
	if got := ByChance(ident.Method{Probability: &p}) + ", " + ByChance(ident.Method{}); got != "< 0.001, –" {
		t.Errorf("probabilities by chance: %q", got)
	}
}

// Of a method the interval is that of the pole that is shown, and a dash where
// it brings no deviation.
func TestWithin(t *testing.T) {
	for _, c := range []struct {
		method ident.Method
		want   string
	}{
		{ident.Method{Poles: [][2]float64{{-44, 0}, {36, 0}}, SD: []float64{9, 1}}, "± 1.96"},
		{ident.Method{Poles: [][2]float64{{36, 0}, {-44, 0}}, SD: []float64{1, 9}}, "± 1.96"},
		{ident.Method{Poles: [][2]float64{{36, 0}}}, "–"},
		{ident.Method{}, "–"},
	} {
		if got := Within(c.method); got != c.want {
			t.Errorf("%+v: %q, want %q", c.method, got, c.want)
		}
	}
}

// Far above the yardstick the reason is said, and outside the margins there is no theorem.
func TestYardstick(t *testing.T) {
	reached, best := 1.101, 0.2873
	y := &design.Yardstick{
		Least: 1.096, Reached: &reached, Pair: 1.463, Excess: 0.3349, InputRange: 3, OutputRange: 4,
		Steps: []design.YardstickStep{
			{Demand: design.DemandStable, Least: 1.058}, {Demand: design.DemandNoise, Least: 1.096},
			{Demand: design.DemandQuiet, Least: 1.17}, {Demand: design.DemandHold, Least: 1.197},
		},
		Best: &best, Margin: 0.049, MarginInner: 0.052, LargestGap: 0.061, Plants: 2000, Stabilised: design.Count,
	}
	text := func() (s string) {
		for _, l := range Yardstick(y, data.Units{Input: "A", Output: "mm"}) {
			s += l[0] + ": " + l[1] + "\n"
		}
		return s
	}
	for _, want := range []string{
		"least peak |S|: 1.096 for any", "(1.101 is reached), 1.058 without", "these loops: 1.463, 33 % above",
		"why: with no more input noise than theirs the least is 1.17, with their hold on slow disturbances too 1.197",
		"0.049 of at most 0.2873, inner loop alone 0.052; input counted by 3 A, output by 4 mm", "count on draws and no theorem",
	} {
		if !strings.Contains(text(), want) {
			t.Errorf("%q is not in\n%s", want, text())
		}
	}
	y.Excess, y.Reached, y.Best, y.Stabilised = 0.2, nil, nil, design.Theorem
	for _, not := range []string{"why", "reached", "at most", "count on"} {
		if strings.Contains(text(), not) {
			t.Errorf("%q is in\n%s", not, text())
		}
	}
}
