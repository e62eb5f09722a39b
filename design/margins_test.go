package design

import (
	"math"
	"testing"

	"steadyrig/fit/lti"
)

// Of a proportional loop about k/(s - 1), sampled, the gain may fall to p/(K k) and rise to p coth(p T/2)/(K k)
// (checkvalues E40, Jury's criterion): over draws of k the worst are those of the largest and the smallest.
func TestWorstMargins(t *testing.T) {
	const period, gain = 0.05, 3.0
	plant := lti.TF{Num: lti.Poly{4}, Den: lti.Poly{-1, 1}}
	r := testRig{name: "margins", truth: plant, relative: 0.1, period: period, sensor: 1e-3, disturbance: 1e-3, input: [2]float64{-50, 50}}
	r.spec.Step, r.spec.Overshoot, r.spec.Settling, r.spec.Band, r.spec.PeakSensitivity = 0.1, 0.2, 2, 0.05, 3
	p, err := newProblem(r.model(t), r.rig())
	if err != nil {
		t.Fatal(err)
	}
	draws := p.drawTFs(marginDraws, streamMargins, 1)
	up, down := math.Inf(1), 0.0
	for _, g := range draws {
		k, pole := g.Num[0], -g.Den[0]
		up = math.Min(up, pole/math.Tanh(pole*period/2)/(gain*k))
		down = math.Max(down, pole/(gain*k))
	}
	for _, workers := range []int{1, 8} {
		m, err := p.allMargins(t.Context(), &lti.Law{Inner: lti.Gain(gain, period)}, Options{Seed: 1, Workers: workers})
		if err != nil {
			t.Fatal(err)
		}
		w := m.Worst
		if w.Plants != marginDraws || w.Stable != marginDraws {
			t.Fatalf("%+v", w)
		}
		near(t, "gain up", *w.GainUp, up, 1e-6)
		near(t, "gain down", *w.GainDown, down, 1e-6)
		if !(w.PeakSensitivity > m.PlantInput.PeakSensitivity && *w.PhaseDeg < *m.PlantInput.PhaseDeg && *w.Delay < *m.PlantInput.Delay) {
			t.Errorf("worst %+v, nominal %+v", w, m.PlantInput)
		}
	}
	// Beyond the limit of some of them: those have no margin, and are counted.
	const much = 9.6
	lost := 0
	for _, g := range draws {
		k, pole := g.Num[0], -g.Den[0]
		if much*k >= pole/math.Tanh(pole*period/2) {
			lost++
		}
	}
	m, err := p.allMargins(t.Context(), &lti.Law{Inner: lti.Gain(much, period)}, Options{Seed: 1})
	if err != nil || lost == 0 || lost == marginDraws || m.Worst.Stable != marginDraws-lost {
		t.Errorf("%d of %d lost, want %d: %v", marginDraws-m.Worst.Stable, marginDraws, lost, err)
	}
}
