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

func repeat(v float64, n int) []float64 {
	x := make([]float64, n)
	for i := range x {
		x[i] = v
	}
	return x
}

// Row convention and fractional delay: a unit step through 1/(s+1) at h = 1 with 0.3 s of delay, half of it the
// computer's: y[1] = 1 - e^{-0.7} (G0 = 0.503414696208591 of Åström & Wittenmark, sec. 2.3), and between the samples
// 1 - e^{-(t-0.3)} in closed form.
func TestSimulateDelay(t *testing.T) {
	r := Run{Plant: TF{Num: Poly{1}, Den: Poly{1, 1}, Delay: 0.1}, Period: 1, ComputeDelay: 0.2, Law: proportional(0, 1), Steps: 6,
		Dither: repeat(1, 6), Fine: 10}
	tr, err := r.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	if tr.Y[0] != 0 || !near(tr.Y[1], 0.503414696208591, 1e-14) || tr.U[0] != 1 {
		t.Errorf("y %v, u %v", tr.Y[:2], tr.U[:1])
	}
	for i, y := range tr.Fine {
		at := float64(i)/10 - 0.3
		if want := -math.Expm1(-math.Max(at, 0)); !near(y, want, 1e-14) {
			t.Errorf("at %g s: %.16g, want %.16g", float64(i)/10, y, want)
		}
	}
	for k, y := range tr.YTrue {
		if y != tr.Fine[10*k] && !near(y, tr.Fine[10*k], 1e-15) {
			t.Errorf("sample %d: %g, between the samples %g", k, y, tr.Fine[10*k])
		}
	}
	// A whole sample more: everything one row later.
	r.Plant.Delay = 1.1
	late, err := r.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	for k := 1; k < 6; k++ {
		if !near(late.Y[k], tr.Y[k-1], 1e-14) {
			t.Errorf("row %d: %g, want %g", k, late.Y[k], tr.Y[k-1])
		}
	}
}

// The closed loop against its difference equation, written out: x+ = a x + b (u + d), u = -k (x + n), y = x + o.
func TestSimulateSignals(t *testing.T) {
	const h, n, k = 0.1, 40, 1.7
	a, b := math.Exp(0.2), (math.Exp(0.2)-1)/2
	rng := rand.New(rand.NewPCG(3, 3))
	draw := func() []float64 {
		x := make([]float64, n)
		for i := range x {
			x[i] = rng.NormFloat64()
		}
		return x
	}
	r := Run{Plant: TF{Num: Poly{1}, Den: Poly{-2, 1}}, Period: h, Law: proportional(k, h), Steps: n, Reference: draw(), Dither: draw(),
		InputDisturbance: draw(), OutputDisturbance: draw(), Noise: draw(), OutputOffset: 0.5}
	r.Law.U0, r.Law.Y0 = 2, -3
	tr, err := r.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	x := 0.5
	for i := range n {
		yTrue := -3 + x + r.OutputDisturbance[i]
		y := yTrue + r.Noise[i]
		u := 2 + k*((r.Reference[i]+3)-(y+3)) + r.Dither[i]
		for _, v := range []struct {
			name      string
			got, want float64
		}{{"y true", tr.YTrue[i], yTrue}, {"y", tr.Y[i], y}, {"u", tr.U[i], u}, {"r", tr.R[i], r.Reference[i]}, {"v", tr.V[i], r.Reference[i] + 3}} {
			if !near(v.got, v.want, 1e-12) {
				t.Fatalf("row %d, %s: %g, want %g", i, v.name, v.got, v.want)
			}
		}
		x = a*x + b*(u-2+r.InputDisturbance[i])
	}
}

// The start along the unstable mode, free running: e^{pt} for the fastest of real poles, e^{st} cos wt for a pair, a
// constant for a double integrator, always from the asked offset.
func TestOutputOffset(t *testing.T) {
	const h, n = 0.01, 100
	for _, c := range []struct {
		name string
		g    TF
		y    func(t float64) float64
	}{
		{"real", TF{Num: Poly{9, 1}, Den: FromRoots([]complex128{3, 1, -20})}, func(t float64) float64 { return math.Exp(3 * t) }},
		{"pair with a zero", TF{Num: Poly{2, 1}, Den: FromRoots([]complex128{complex(0.5, 7), complex(0.5, -7), -4})},
			func(t float64) float64 { return math.Exp(0.5*t) * math.Cos(7*t) }},
		{"double integrator with lag", TF{Num: Poly{5}, Den: Poly{0, 0, 1, 0.1}, Delay: 0.013}, func(float64) float64 { return 1 }},
		{"double unstable pole", TF{Num: Poly{5}, Den: Poly{4, -4, 1}}, func(t float64) float64 { return math.Exp(2 * t) }},
		{"integrator and stable", TF{Num: Poly{5}, Den: Poly{0, 2, 1}}, func(float64) float64 { return 1 }},
	} {
		tr, err := Run{Plant: c.g, Period: h, Law: proportional(0, h), Steps: n, OutputOffset: -0.3}.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		for k, y := range tr.YTrue {
			if want := -0.3 * c.y(float64(k)*h); !near(y, want, 1e-11*(1+math.Abs(want))) {
				t.Errorf("%s, step %d: %.15g, want %.15g", c.name, k, y, want)
				break
			}
		}
	}
	hidden := TF{Num: Poly{-3, 1}, Den: FromRoots([]complex128{3, -1})}
	if _, err := (Run{Plant: hidden, Period: h, Law: proportional(0, h), Steps: 1, OutputOffset: 1}).Simulate(); err == nil {
		t.Error("mode that does not show in the output: no error")
	}
}

func TestTrip(t *testing.T) {
	r := Run{Plant: TF{Num: Poly{1}, Den: Poly{-2, 1}}, Period: 0.1, Law: proportional(0, 0.1), Steps: 100, OutputOffset: 0.1, Trip: [2]float64{-1, 1}, Fine: 3}
	tr, err := r.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	// 0.1 e^{0.2 k} > 1 first at k = 12 (11.51).
	if tr.Tripped != 12 || len(tr.Y) != 13 || len(tr.U) != 13 || len(tr.Fine) != 39 {
		t.Errorf("tripped at %d, %d rows", tr.Tripped, len(tr.Y))
	}
	r.Trip, r.Steps = [2]float64{}, 10000
	if tr, err = r.Simulate(); err != nil || tr.Tripped < 3000 {
		t.Errorf("runaway: tripped at %d, %v", tr.Tripped, err)
	}
	r.OutputOffset, r.Noise = 0, repeat(0, 10000)
	r.Noise[5] = math.NaN()
	if tr, err = r.Simulate(); err != nil || tr.Tripped != 5 {
		t.Errorf("NaN: tripped at %d, %v", tr.Tripped, err)
	}
}

func TestSimulateRefuses(t *testing.T) {
	for name, breakIt := range map[string]func(r *Run){
		"no law":        func(r *Run) { r.Law = nil },
		"law's period":  func(r *Run) { r.Law = proportional(1, 0.5) },
		"short noise":   func(r *Run) { r.Noise = make([]float64, r.Steps-1) },
		"steps":         func(r *Run) { r.Steps = -1 },
		"compute delay": func(r *Run) { r.ComputeDelay = -1 },
		"state":         func(r *Run) { r.Initial = []float64{1} },
		"biproper":      func(r *Run) { r.Plant, r.ComputeDelay = TF{Num: Poly{1, 1}, Den: Poly{2, 1}}, 0 },
		"law":           func(r *Run) { r.Law = &Law{Inner: r.Law.Inner, InputRate: -1} },
		"shape": func(r *Run) {
			r.Innovations, r.Shape = repeat(0, r.Steps), &DTF{Num: Poly{1}, Den: Poly{1, -1.5}, Period: r.Period}
		},
	} {
		r := everything(1)
		breakIt(&r)
		if _, err := r.Simulate(); err == nil {
			t.Errorf("%s: no error", name)
		}
	}
}

// A law changed in place between two runs of one simulator must act.
func TestSimulatorNoticesChanges(t *testing.T) {
	var s Simulator
	var tr Trace
	r := everything(2)
	if err := s.Simulate(&tr, r); err != nil {
		t.Fatal(err)
	}
	r.Law.Inner.Num[0] *= 0.9
	r.Plant.Num[0] *= 1.1
	if err := s.Simulate(&tr, r); err != nil {
		t.Fatal(err)
	}
	want, err := r.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	sameTrace(t, "after a change in place", tr, want)
}

func BenchmarkSimulator(b *testing.B) {
	r := everything(1)
	r.Fine = 0
	var s Simulator
	var tr Trace
	for b.Loop() {
		if err := s.Simulate(&tr, r); err != nil {
			b.Fatal(err)
		}
	}
	b.ReportMetric(float64(b.N)*float64(r.Steps)/b.Elapsed().Seconds()/1e6, "Msteps/s")
}

// A hand-over in a run: the law before acts alone until then, as if there were no other; the sample of the hand-over
// sends its last input once more; and the law that followed takes over. The same by the two laws stepped by hand.
func TestHandOver(t *testing.T) {
	r := everything(4)
	r.Dither, r.OutputOffset = nil, 0
	before := &Law{Inner: Tustin(TF{Num: Poly{14, 4}, Den: Poly{1, 0.03}}, r.Period), U0: 1.5, Y0: 5, InputLimits: [2]float64{-3, 8}}
	alone := r
	alone.Law = before
	want, err := alone.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	r.Before, r.HandOver, r.FollowShare = before, 150, 0.05
	got, err := r.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	if !slices.Equal(got.U[:150], want.U[:150]) || got.U[150] != got.U[149] || got.U[151] == want.U[151] {
		t.Errorf("about the hand-over: %v, the law before alone %v", got.U[148:152], want.U[148:152])
	}
	one, other := r.Law.Start(), before.Start()
	for k := range r.Steps {
		y := got.YTrue[k] + r.Noise[k]
		u := 0.0
		switch {
		case k < 150:
			u = other.Step(r.Reference[k], y)
			one.Follow(r.Reference[k], y, u, 0.05)
		case k == 150:
			u = got.U[149]
			one.Follow(r.Reference[k], y, u, 0.05)
		default:
			u = one.Step(r.Reference[k], y)
		}
		if u != got.U[k] {
			t.Fatalf("sample %d: %g, by hand %g", k, got.U[k], u)
		}
	}
	r.HandOver = 0
	if _, err := r.Simulate(); err == nil {
		t.Error("a law before that never acts: no error")
	}
}
