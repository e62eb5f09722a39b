package lti

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
)

func proportional(k, period float64) *Law { return &Law{Inner: Gain(k, period)} }

// x+ = 1.25 x + 0.5 u, |u| <= 1: every stabilising gain recovers exactly the states inside b U/(a-1) = 2 (Hu & Lin,
// Control Systems with Actuator Saturation, 2001; Stein, IEEE Control Syst. Mag. 23(4) (2003) 12-25, sampled form by
// arithmetic).
func TestReachUnderSaturation(t *testing.T) {
	const h = 0.1
	a := 1.25
	p := math.Log(a) / h
	plant := TF{Num: Poly{0.5 * p / (a - 1)}, Den: Poly{-p, 1}}
	for _, c := range []struct {
		offset float64
		holds  bool
	}{{1.99, true}, {-1.99, true}, {2.01, false}, {-2.01, false}} {
		law := proportional(1.5, h)
		law.InputLimits = [2]float64{-1, 1}
		tr, err := Run{Plant: plant, Period: h, Law: law, Steps: 300, OutputOffset: c.offset}.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		if tr.YTrue[0] != c.offset {
			t.Errorf("offset %g: starts at %.17g", c.offset, tr.YTrue[0])
		}
		if end := math.Abs(tr.YTrue[len(tr.YTrue)-1]); (end < 1e-6) != c.holds {
			t.Errorf("offset %g: ends at %g, want it held: %v", c.offset, end, c.holds)
		}
	}
}

func everything(seed uint64) Run {
	const n, h = 400, 0.01
	rng := rand.New(rand.NewPCG(seed, 0))
	noise := func(sd float64) []float64 {
		x := make([]float64, n)
		for i := range x {
			x[i] = sd * rng.NormFloat64()
		}
		return x
	}
	inner := Tustin(TF{Num: Poly{30, 6}, Den: Poly{1, 0.02}}, h)
	outer := Tustin(TF{Num: Poly{0.4, 0.3}, Den: Poly{0, 1}}, h)
	pre := Tustin(TF{Num: Poly{1}, Den: Poly{1, 0.1}}, h)
	ref := make([]float64, n)
	for i := range ref {
		ref[i] = 5
		if i > 50 {
			ref[i] = 5.2
		}
	}
	return Run{
		Plant: TF{Num: Poly{9}, Den: Poly{-9, 0.5, 1}, Delay: 0.007}, Period: h, ComputeDelay: 0.006, Steps: n,
		Law: &Law{Inner: inner, Outer: &outer, Prefilter: &pre, U0: 1.5, Y0: 5, InputLimits: [2]float64{-3, 8},
			OuterLimits: [2]float64{-0.4, 0.4}, InputRate: 300, InputStep: 0.01, OutputStep: 0.001},
		Reference: ref, Dither: noise(0.1), InputDisturbance: noise(0.1), OutputDisturbance: noise(0.001), Noise: noise(0.002),
		OutputOffset: 0.05, Trip: [2]float64{0, 10}, Fine: 4,
	}
}

func sameTrace(t *testing.T, name string, a, b Trace) {
	t.Helper()
	if !slices.Equal(a.U, b.U) || !slices.Equal(a.Y, b.Y) || !slices.Equal(a.YTrue, b.YTrue) || !slices.Equal(a.R, b.R) ||
		!slices.Equal(a.V, b.V) || !slices.Equal(a.Fine, b.Fine) || a.Tripped != b.Tripped {
		t.Errorf("%s: traces differ", name)
	}
}

func TestSimulatorReuse(t *testing.T) {
	var s Simulator
	var tr Trace
	for seed := range uint64(5) {
		r := everything(seed)
		r.Plant.Num = Poly{9 + float64(seed)}
		if seed == 3 { // another order, no sub-instants
			r.Plant, r.Fine = TF{Num: Poly{3}, Den: Poly{-3, 1}}, 0
		}
		want, err := r.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		if want.Tripped >= 0 {
			t.Fatalf("seed %d trips", seed)
		}
		for range 2 {
			if err := s.Simulate(&tr, r); err != nil {
				t.Fatal(err)
			}
			sameTrace(t, "reused simulator", tr, want)
		}
	}
	r := everything(1)
	if err := s.Simulate(&tr, r); err != nil {
		t.Fatal(err)
	}
	if n := testing.AllocsPerRun(10, func() { _ = s.Simulate(&tr, r) }); n > 0 {
		t.Errorf("%g allocations a run", n)
	}
}
