package ident

import (
	"context"
	"math"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
)

// An invented structure of six poles, one pair driven unstable, two light pairs
// besides, is found as such without hints.
func TestSixPoles(t *testing.T) {
	if testing.Short() {
		t.Skip("searches up to six poles")
	}
	roots := []complex128{complex(0.4, 6), complex(0.4, -6), complex(-0.6, 15), complex(-0.6, -15), complex(-0.9, 31), complex(-0.9, -31)}
	den := lti.FromRoots(roots)
	// Collocated modes: zeros between the pairs.
	num := lti.FromRoots([]complex128{complex(-0.5, 10), complex(-0.5, -10), complex(-0.7, 23), complex(-0.7, -23), -40}).Scale(2)
	r := demorig.Rig{
		Name: "six poles", Truth: lti.TF{Num: num, Den: den}, Input: "V", Output: "mm", Period: 0.02,
		Stopgap: lti.Gain(1.2, 0.02), Rows: 2500, SensorNoise: 0.02, Resolution: 0.0005,
		Dither: 1, DitherHold: 2, InputLimits: [2]float64{-60, 60}, Trip: [2]float64{-50, 50},
		Spec: demorig.Spec{Step: 1, Overshoot: 0.2, Settling: 5, Band: 0.02, PeakSensitivity: 2},
	}
	e, rig := experiment(t, r, 1)
	m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
	if err != nil {
		t.Fatal(err)
	}
	if len(m.Poles) != 6 || len(m.Zeros) != 5 {
		t.Fatalf("%d poles, %d zeros; verdict %s %q", len(m.Poles), len(m.Zeros), m.Verdict, m.Warnings)
	}
	for _, want := range sorted(roots) {
		near := math.Inf(1)
		for _, p := range m.Poles {
			if d := math.Hypot(p.Re-real(want), p.Im-imag(want)); d < near {
				near = d
			}
		}
		if !(near < 0.2) {
			t.Errorf("pole %.3g missed by %.2g rad/s", want, near)
		}
	}
}
