package ident

import (
	"math"
	"testing"
)

// Where two structures weigh the same, a free pole that one of them holds at
// zero is unstable with half the probability; the fast pole keeps its own.
func TestProbabilityOfAPoleThatMayBeAnIntegrator(t *testing.T) {
	m := &Model{Poles: []Root{{Re: -40}, {}, {Re: 0.6, ProbabilityUnstable: 0.98}, {Re: 3, ProbabilityUnstable: 0.9}}}
	at := func(integrators int, bic float64) *candidate {
		return &candidate{structure: structure{poles: 4, integrators: integrators}, bic: bic}
	}
	m.weighIntegrators([]*candidate{at(1, 100), at(2, 100), {structure: structure{poles: 3, integrators: 2}, bic: 100}})
	for i, want := range []float64{0, 0, 0.49, 0.9} {
		if got := m.Poles[i].ProbabilityUnstable; math.Abs(got-want) > 1e-12 {
			t.Errorf("pole %d: probability %v, want %v", i, got, want)
		}
	}
	// One far behind changes nothing.
	m.weighIntegrators([]*candidate{at(1, 100), at(2, 160)})
	if got := m.Poles[2].ProbabilityUnstable; got != 0.49 {
		t.Errorf("probability %v", got)
	}
}
