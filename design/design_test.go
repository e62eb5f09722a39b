package design

import (
	"bytes"
	"context"
	"errors"
	"math"
	"strings"
	"sync"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// designs of the test rigs, each made once, when it is first asked for.
var designs = func() map[string]func() (*Loops, error) {
	out := map[string]func() (*Loops, error){}
	for _, r := range testRigs() {
		out[r.name] = sync.OnceValues(func() (*Loops, error) {
			return Design(context.Background(), r.model(new(testing.T)), r.rig(), Options{Seed: 1})
		})
	}
	return out
}()

func designed(t *testing.T, name string) *Loops {
	t.Helper()
	l, err := designs[name]()
	if err != nil {
		t.Fatal(err)
	}
	return l
}

// step simulates the spec's step, times sign, with lti.Run alone, over eight settling times.
func (r testRig) step(t *testing.T, g lti.TF, law *lti.Law, sign float64) lti.Trace {
	t.Helper()
	ref := make([]float64, int(8*r.spec.Settling/r.period))
	for k := range ref {
		ref[k] = law.Y0 + sign*r.spec.Step
	}
	run := lti.Run{Plant: g, Period: r.period, ComputeDelay: r.compute, Law: law, Steps: len(ref), Reference: ref}
	if r.output != nil {
		run.Trip = *r.output
	}
	tr, err := run.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	return tr
}

// meets simulates one plant with lti.Run alone and says whether it is held and meets overshoot and settling.
func (r testRig) meets(t *testing.T, g lti.TF, law *lti.Law) (held, spec bool) {
	t.Helper()
	held, spec = true, true
	for _, sign := range []float64{1, -1} {
		tr := r.step(t, g, law, sign)
		if tr.Tripped >= 0 {
			return false, false
		}
		for k, y := range tr.YTrue {
			x := sign * (y - law.Y0) / r.spec.Step
			if x > 1+r.spec.Overshoot || float64(k)*r.period >= r.spec.Settling && math.Abs(x-1) > r.spec.Band {
				spec = false
			}
		}
		if math.Abs(tr.YTrue[len(tr.YTrue)-1]-law.Y0-sign*r.spec.Step) > 0.01*r.spec.Step {
			held = false
		}
	}
	return held, spec
}

// Each kind of plant is designed and promised, holds its truth, and the promise agrees with direct simulations on
// plants that neither tuning nor proof has seen.
func TestDesignAndPromise(t *testing.T) {
	for _, r := range testRigs() {
		t.Run(r.name, func(t *testing.T) {
			l := designed(t, r.name)
			q := l.Promise
			if l.Verdict != Sound || q.Stable != 2000 || q.LowerBound < PromisedShare || q.Attempts != 1 {
				t.Fatalf("verdict %q, promise %+v", l.Verdict, q)
			}
			if want := ClopperPearsonLower(q.MeetSpec, 2000, 0.95); q.LowerBound != want {
				t.Errorf("bound %v, want %v", q.LowerBound, want)
			}
			law := l.LTI()
			if held, spec := r.meets(t, r.truth, law); !held || !spec {
				t.Errorf("true plant: held %v, meets the spec %v", held, spec)
			}
			miss := 0
			for _, g := range r.model(t).Draw(300, 12345) {
				held, spec := r.meets(t, g, law)
				if !held {
					t.Errorf("plant %v is lost", g)
				}
				if !spec {
					miss++
				}
			}
			// At a true share of 0.995 more than 6 of 300 miss with probability 9e-4.
			if miss > 6 {
				t.Errorf("%d of 300 plants miss overshoot or settling, promised %v", miss, q.LowerBound)
			}
			// Sign: with the law's signs the inner gain at the plant's phase crossover follows the plant's.
			k1 := law.Inner.Num[0]
			if (k1 < 0) != r.negative {
				t.Errorf("inner controller starts with %v, negative plant: %v", k1, r.negative)
			}
			// No unstable pole is cancelled.
			p, err := newProblem(r.model(t), r.rig())
			if err != nil {
				t.Fatal(err)
			}
			if _, c := p.hidden(law); c != nil {
				t.Error(c)
			}
			// The report's peak |S| and the proof's are computed on different ways.
			near(t, "peak |S|", l.Margins.PlantInput.PeakSensitivity, q.PeakS.Nominal, 1e-3)
			// Skogestad & Postlethwaite (2005), sec. 2.4: a peak of |S| guarantees gain and phase margins.
			for _, m := range []*Margins{l.Margins.PlantInput, l.Margins.InnerAlone} {
				up, down, phase := GuaranteedMargins(m.PeakSensitivity)
				if !m.Stable || m.GainUp != nil && *m.GainUp < up*(1-1e-6) || m.GainDown != nil && *m.GainDown > down*(1+1e-6) ||
					m.PhaseDeg != nil && *m.PhaseDeg < phase*180/math.Pi*(1-1e-6) {
					t.Errorf("margins %+v against guaranteed %v %v %v", m, up, down, phase)
				}
			}
			if l.Margins.PlantInput.PeakSensitivity < leastOf(l.Bounds) {
				t.Errorf("peak |S| %v below what physics allows, %v", l.Margins.PlantInput.PeakSensitivity, leastOf(l.Bounds))
			}
			if q.InputNoise.Worst > p.spec.noise || l.FirstClosure.ExpectedSD.Input < q.InputNoise.Nominal*0.98 {
				t.Errorf("input noise %+v, expected %+v", q.InputNoise, l.FirstClosure.ExpectedSD)
			}
			if !(q.LargestStep >= r.spec.Step && q.Recoverable > 0) {
				t.Errorf("largest step %v, offset %v", q.LargestStep, q.Recoverable)
			}
			var b bytes.Buffer
			if err := l.Write(&b); err != nil {
				t.Fatal(err)
			}
			if _, err := ReadLoops(&b, "loops.json"); err != nil {
				t.Error(err)
			}
		})
	}
}

func leastOf(bounds []Bound) float64 {
	least := 1.0
	for _, b := range bounds {
		if strings.HasPrefix(b.Name, "peak sensitivity") {
			least = math.Max(least, b.Value)
		}
	}
	return least
}

// A step a little smaller than the largest comes back on every one of the plants that it was found on, the nominal
// one among them; one a little larger does not on all of them, unless it is the trip limit itself.
func TestLargestStep(t *testing.T) {
	r := testRigs()[1]
	l := designed(t, r.name)
	p, err := newProblem(r.model(t), r.rig())
	if err != nil {
		t.Fatal(err)
	}
	law := l.LTI()
	v := p.newProver(law)
	plants := append([]lti.TF{r.truth}, r.model(t).Draw(extentPlants, stream(1, streamProof, 1))...)
	for _, share := range []float64{0.99, 1.03} {
		steps, offsets := true, true
		for _, g := range plants {
			for _, sign := range []float64{-1, 1} {
				a := sign * share * l.Promise.LargestStep
				inside, err := v.run(g, 2*p.steps(g), a, false, 0)
				steps = steps && err == nil && inside && v.calm(a)
				inside, err = v.run(g, 2*p.steps(g), 0, false, sign*share*l.Promise.Recoverable)
				offsets = offsets && err == nil && inside && v.calm(0)
			}
		}
		if want := share < 1; steps != want || offsets != want {
			t.Errorf("%v of the largest: step %v, offset %v come back", share, steps, offsets)
		}
	}
	// Nothing comes back from beyond the reach that physics allows.
	for _, b := range l.Bounds {
		if b.Name == BoundReachUp && !(l.Promise.Recoverable < b.Interval[1]) {
			t.Errorf("recoverable offset %v beyond the reach %v", l.Promise.Recoverable, *b.Interval)
		}
	}
}

// The same seed gives the same bytes whatever the number of workers, and another seed another proof.
func TestDesignRepeats(t *testing.T) {
	r := testRigs()[1]
	text := func(workers int, seed uint64) string {
		l, err := Design(t.Context(), r.model(t), r.rig(), Options{Seed: seed, Workers: workers, Plants: 200})
		var refused *ident.RefusedError
		if err != nil && !errors.As(err, &refused) {
			t.Fatal(err)
		}
		var b bytes.Buffer
		if err := l.Write(&b); err != nil {
			t.Fatal(err)
		}
		return b.String()
	}
	one := text(1, 3)
	if eight := text(8, 3); one != eight {
		t.Error("1 and 8 workers differ")
	}
	if one == text(1, 4) {
		t.Error("seeds 3 and 4 agree")
	}
}

// A promise that fails is tried once more with half of the error left, and then refused, with the partial result
// and what misses.
func TestPromiseFails(t *testing.T) {
	if testing.Short() {
		t.Skip("designs loops that fail")
	}
	r := testRigs()[1]
	r.relative = 0.15
	r.spec.Settling = 1
	l, err := Design(t.Context(), r.model(t), r.rig(), Options{Seed: 1, Plants: 400})
	var refused *ident.RefusedError
	if !errors.As(err, &refused) {
		t.Fatalf("error %v", err)
	}
	q := l.Promise
	if q == nil || l.Verdict != Refused || q.Attempts != 2 || q.Confidence != 0.975 || q.LowerBound != ClopperPearsonLower(q.MeetSpec, 400, 0.975) {
		t.Fatalf("verdict %q, promise %+v", l.Verdict, q)
	}
	if len(q.Misses) == 0 || !strings.Contains(refused.Error(), q.Misses[0].What) || l.Margins == nil || l.FirstClosure == nil {
		t.Errorf("error %q, misses %+v", refused, q.Misses)
	}
}

// A spec that the delay makes impossible stops before any tuning; the partial result has the bounds.
func TestDesignOutOfReach(t *testing.T) {
	r := testRigs()[2]
	r.truth.Delay = 45
	l, err := Design(t.Context(), r.model(t), r.rig(), Options{Seed: 1})
	var refused *ident.RefusedError
	if !errors.As(err, &refused) || l == nil || l.Verdict != Refused || l.Inner != nil || len(l.Bounds) == 0 || l.Promise != nil {
		t.Fatalf("error %v, loops %+v", err, l)
	}
	var b bytes.Buffer
	if err := l.Write(&b); err != nil {
		t.Fatal(err)
	}
	if _, err := ReadLoops(&b, "loops.json"); err == nil || !strings.Contains(err.Error(), "refused") {
		t.Errorf("reading it back: %v", err)
	}
}

func TestDesignRefusesRefusedModel(t *testing.T) {
	r := testRigs()[1]
	m := r.model(t)
	m.Verdict = ident.Refused
	var refused *ident.RefusedError
	if l, err := Design(t.Context(), m, r.rig(), Options{}); !errors.As(err, &refused) || l.Verdict != Refused {
		t.Errorf("%v", err)
	}
	rig := r.rig()
	rig.OperatingPoint = &data.OperatingPoint{Input: 12}
	if _, err := Design(t.Context(), r.model(t), rig, Options{}); !errors.As(err, &refused) {
		t.Errorf("operating point at a limit: %v", err)
	}
}

func TestDesignStops(t *testing.T) {
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	r := testRigs()[1]
	if l, err := Design(ctx, r.model(t), r.rig(), Options{}); l != nil || !errors.Is(err, context.Canceled) {
		t.Errorf("%v %v", l, err)
	}
}

func BenchmarkProof(b *testing.B) {
	for _, r := range testRigs() {
		m := r.model(b)
		l, err := Design(b.Context(), m, r.rig(), Options{Seed: 1})
		if err != nil {
			b.Fatal(err)
		}
		// The sensor rounds to a fifth of its noise, as those of the demo rigs do.
		g, step := r.rig(), r.sensor/5
		g.Limits.OutputResolution = &step
		p, err := newProblem(m, g)
		if err != nil {
			b.Fatal(err)
		}
		law := l.LTI()
		b.Run(r.name, func(b *testing.B) {
			for b.Loop() {
				if _, err := p.prove(b.Context(), law, Options{Seed: 1}, 1); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64(DefaultPlants*b.N)/b.Elapsed().Seconds(), "plants/s")
		})
	}
}

// A promise is conditional on the structure: where the model's own residual tests fail it is weak at most, and says so
// first; where they fail beyond doubt there is none.
func TestModelThatItsTestsReject(t *testing.T) {
	if testing.Short() {
		t.Skip("designs loops on three models")
	}
	r := testRigs()[1]
	own := designed(t, r.name)
	for _, c := range []struct {
		whiteness, cross, linearity, memories float64
		verdict, first                        string
	}{
		{0.3, 0.4, 0.2, 500, Sound, ""},
		{1e-8, 0.4, 0.2, 500, Weak, "structure that the log contradicts"},
		{0.3, 1e-8, 0.2, 500, Weak, "structure that the log contradicts"},
		{0.3, 0.4, 0.2, 12, Weak, "intervals that are optimistic"},
		{0.3, 0.4, 1e-5, 500, Weak, "motion as large as in the log, where the output moved by 0.3 "},
		{0.3, 0.4, 0, 500, Weak, "motion as large as in the log"},
		{1e-30, 0.4, 0.2, 500, Refused, ""},
		{0.3, 0, 0.2, 500, Refused, ""},
	} {
		m := r.model(t)
		m.Evidence.Residuals = ident.Residuals{Lags: 20, Whiteness: c.whiteness, CrossInput: c.cross, Linearity: c.linearity}
		m.Evidence.Memories = c.memories
		m.Evidence.ExplainedShare = 1 - m.Noise.SD*m.Noise.SD/(0.3*0.3) // of an output with a deviation of 0.3
		for name, run := range map[string]func() (*Loops, error){
			"design": func() (*Loops, error) { return Design(t.Context(), m, r.rig(), Options{Seed: 1, Plants: 700}) },
			"verify": func() (*Loops, error) {
				return Verify(t.Context(), m, r.rig(), own, Options{Seed: 1, Plants: 700})
			},
		} {
			if name == "design" && c.verdict != Refused && c.memories != 12 {
				continue // one design is enough
			}
			l, err := run()
			if l == nil || l.Verdict != c.verdict || (err != nil) != (c.verdict == Refused) {
				t.Errorf("%s, %+v: %v, %v", name, c, l, err)
				continue
			}
			if c.first != "" && !strings.Contains(l.Warnings[0], c.first) {
				t.Errorf("%s, %+v: first warning %q", name, c, l.Warnings)
			}
			if err != nil && !strings.Contains(err.Error(), "contradict it") {
				t.Errorf("%s, %+v: %v", name, c, err)
			}
		}
	}
}
