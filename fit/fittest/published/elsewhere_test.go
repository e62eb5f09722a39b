package published

import (
	"fmt"
	"os"
	"strings"
	"testing"
)

// Checks that live beside what they check, since they look into more than public functions or at more than numbers.
var elsewhere = []struct{ ids, what, file, test string }{
	{"B05", "states of the generator", "fit/fittest/sets_test.go", "TestGenerator"},
	{"", "sums of the data sets D1 to D5", "fit/fittest/sets_test.go", "TestSetsAreThePublishedOnes"},
	{"C06", "limit of the quotient of spectra in closed loop", "fit/conformance_test.go", "TestQuotientLimitInClosedLoop"},
	{"D01-D05, D08", "sampled plants in powers of z - 1", "fit/lti/delta_test.go", "TestSampleDeltaClosedForms"},
	{"D01-D05, D08", "sampled plants as state space", "fit/lti/zoh_test.go", "TestZOHClosedForms"},
	{"D21-D26, D30, D31", "Riccati equations, CAREX and pendulums", "fit/lti/equations_test.go", "TestCARE"},
	{"D27, D28, D32, D33", "discrete Riccati equations, DAREX", "fit/lti/equations_test.go", "TestDARE"},
	{"D29, D30", "badly scaled Riccati equation, pendulum", "design/facts_test.go", "TestScaledRiccati"},
	{"E01, E02", "settling and time of the peak", "design/facts_test.go", "TestTextbookSettlingAndPeakTime"},
	{"E01, E02", "overshoot and settling as the proof measures them", "design/textbook_test.go", "TestProofMeasuresTextbookSteps"},
	{"E03, E04", "margins and peak of 1/(s(s + 2z))", "fit/lti/margins_test.go", "TestMarginsSecondOrder"},
	{"E05", "margins that a peak of S guarantees", "design/loop_test.go", "TestGuaranteedMargins"},
	{"E06", "margins obey both peaks", "fit/lti/margins_test.go", "TestMarginsObeyPeaks"},
	{"E06", "margins that a peak of T guarantees", "design/facts_test.go", "TestMarginsByComplementarySensitivity"},
	{"E07", "margins of least-squares feedback", "design/facts_test.go", "TestMarginsOfLeastSquaresFeedback"},
	{"E08", "the same, sampled", "design/facts_test.go", "TestMarginsOfSampledLeastSquaresFeedback"},
	{"E09-E12", "optimal coprime margins", "fit/lti/coprime_test.go", "TestCoprimeMargin"},
	{"E13", "coprime margin of a gain", "fit/lti/coprime_test.go", "TestFeedbackMargin"},
	{"E14-E21", "nu-gap", "fit/lti/nugap_test.go", "TestNuGap"},
	{"E22, E23", "what a nu-gap takes of a margin", "design/facts_test.go", "TestMarginLossByNuGap"},
	{"E24", "unstable pole with dead time", "design/bounds_test.go", "TestLeastPeakDelay"},
	{"E24", "the same with Padé zeros, Nevanlinna-Pick", "design/bounds_test.go", "TestLeastPeakPick"},
	{"E25", "unstable pole with zero", "design/bounds_test.go", "TestLeastPeakZero"},
	{"E26-E28", "sensitivity integrals", "fit/lti/margins_test.go", "TestSensitivityIntegrals"},
	{"E28", "the same on the report's curves", "design/loop_test.go", "TestBodeIntegral"},
	{"E29", "floor by available bandwidth", "design/bounds_test.go", "TestLeastPeakBandwidth"},
	{"E30", "crossover inequalities", "design/facts_test.go", "TestCrossoverInequalities"},
	{"E31, E32", "floor of the input's effort", "design/bounds_test.go", "TestLeastEffort"},
	{"E33", "least energy", "design/bounds_test.go", "TestLeastEnergy"},
	{"E34, E35", "controllable set under saturation", "design/bounds_test.go", "TestReach"},
	{"E36", "inexact cancellation in series", "design/verify_test.go", "TestInexactCancellationInSeries"},
	{"E38, E39", "ranges of stabilising gains", "fit/lti/margins_test.go", "TestGainRanges"},
	{"E40, E41", "the same, sampled", "fit/lti/margins_test.go", "TestSampledGainRanges"},
	{"E38, E39, E41", "their ends", "design/facts_test.go", "TestEndsOfGainRanges"},
	{"E42", "interval cubic", "design/facts_test.go", "TestIntervalCubic"},
	{"F10", "parity of poles", "design/bounds_test.go", "TestStronglyStabilisable"},
	{"G07", "back-calculation", "fit/lti/law_test.go", "TestHeldOutputsAreBackCalculation"},
	{"G07", "the same with forward differences", "design/facts_test.go", "TestHeldOutputIsBackCalculation"},
	{"G08", "clamped integrator", "fit/lti/law_test.go", "TestHeldOutputsStopWindup"},
	{"", "rounding as noise of a twelfth", "fit/lti/law_test.go", "TestRoundingIsNoiseOfATwelfth"},
	{"", "triangles of a rate limit", "fit/lti/law_test.go", "TestRateLimitMakesTriangles"},
	{"H07", "coverage of sign-perturbed sums", "fit/signsums_test.go", "TestSignSumsCover"},
}

func TestPublishedElsewhere(t *testing.T) {
	s := &section{t: t, name: "Checks in other tests"}
	s.text.WriteString("| check | what | test |\n|---|---|---|\n")
	for _, c := range elsewhere {
		fmt.Fprintf(&s.text, "| %s | %s | %s, %s |\n", c.ids, c.what, c.file, c.test)
		b, err := os.ReadFile("../../../" + c.file)
		if err != nil {
			t.Fatal(err)
		}
		if !strings.Contains(string(b), "\nfunc "+c.test+"(") {
			t.Errorf("%s has no test %s", c.file, c.test)
		}
	}
	s.compare()
}
