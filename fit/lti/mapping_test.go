package lti

import (
	"math"
	"math/cmplx"
	"testing"
)

// Closed forms of each mapping, worked out by hand from its definition (Franklin, Powell & Workman, ch. 6).
func TestMappingsInClosedForm(t *testing.T) {
	const h = 0.1
	e := math.Exp(-2 * h)
	lag := TF{Num: Poly{3}, Den: Poly{2, 1}} // 3/(s+2)
	check := func(name string, got DTF, err error, num, den Poly) {
		t.Helper()
		if err != nil {
			t.Fatal(err)
		}
		wantPoly(t, name+" num", got.Num, num, 1e-14)
		wantPoly(t, name+" den", got.Den, den, 1e-14)
	}
	k := 1.5 * (1 - e) / 2
	check("matched lag", Matched(lag, h), nil, Poly{k, k}, Poly{1, -e})
	d, err := StepInvariant(lag, h)
	check("step-invariant lag", d, err, Poly{0, 1.5 * (1 - e)}, Poly{1, -e})
	// A unit ramp drives 3/(s+2) to 1.5 (t - (1 - e^{-2t})/2).
	d, err = RampInvariant(lag, h)
	check("ramp-invariant lag", d, err, Poly{1.5 * (1 - (1-e)/(2*h)), 1.5 * ((1-e)/(2*h) - e)}, Poly{1, -e})
	// An integrator: the trapezium rule under ramps, the rectangle rule under steps.
	integrator := TF{Num: Poly{4}, Den: Poly{0, 1}}
	d, err = RampInvariant(integrator, h)
	check("ramp-invariant integrator", d, err, Poly{0.2, 0.2}, Poly{1, -1})
	d, err = StepInvariant(integrator, h)
	check("step-invariant integrator", d, err, Poly{0, 0.4}, Poly{1, -1})
	check("matched integrator", Matched(integrator, h), nil, Poly{0.2, 0.2}, Poly{1, -1})
	// A lead keeps its sign and its steady gain, and its zero to the left of -1/h stays where e^{sh} puts it.
	lead := TF{Num: Poly{-6, -2}, Den: Poly{20, 1}}
	z, p := math.Exp(-3*h), math.Exp(-20*h)
	g := -0.3 * (1 - p) / (1 - z)
	check("matched lead", Matched(lead, h), nil, Poly{g, -g * z}, Poly{1, -p})
}

// The definitions themselves, on a controller with everything: samples of the responses to a step and to a ramp, by
// partial fractions, and the gain of PI-like controllers near s = 0.
func TestMappingsAnswerAsTheyShould(t *testing.T) {
	const h = 0.02
	// (s^2 + 5 s + 40)/(s (s + 8)(0.01 s + 1)) + 2: partial fractions 5/s, 64/((−8)(0.92)) at −8, and at −100.
	parts := map[float64]float64{} // pole -> residue
	num := TF{Num: Poly{40, 5, 1}, Den: Poly{0, 1}.Mul(Poly{8, 1}).Mul(Poly{1, 0.01})}
	for _, s := range num.Poles() {
		parts[real(s)] = real(num.Num.Eval(s) / num.Den.Deriv().Eval(s))
	}
	g := TF{Num: num.Num.Add(num.Den.Scale(2)), Den: num.Den}
	step, ramp := make([]float64, 60), make([]float64, 60)
	ones, rising := make([]float64, 60), make([]float64, 60)
	for k := range step {
		x := h * float64(k)
		ones[k], rising[k] = 1, x
		step[k], ramp[k] = 2, 2*x
		for s, r := range parts {
			if s == 0 {
				step[k], ramp[k] = step[k]+r*x, ramp[k]+r*x*x/2
				continue
			}
			step[k] += r * math.Expm1(s*x) / s
			ramp[k] += r * (math.Expm1(s*x)/s - x) / s
		}
	}
	d, err := StepInvariant(g, h)
	if err != nil {
		t.Fatal(err)
	}
	wantPoly(t, "step", d.Filter(nil, ones), step, 1e-12)
	if d, err = RampInvariant(g, h); err != nil {
		t.Fatal(err)
	}
	wantPoly(t, "ramp", d.Filter(nil, rising), ramp, 1e-12)
	d = Matched(g, h)
	for i, s := range g.Poles() {
		if z := d.Poles()[i]; cmplx.Abs(z-cmplx.Exp(s*h)) > 1e-12 {
			t.Errorf("matched pole %v, want %v", z, cmplx.Exp(s*h))
		}
	}
	const w = 1e-4 // near s = 0 the integrator decides
	if got, want := d.At(w), g.At(complex(0, w)); cmplx.Abs(got-want) > 1e-4*cmplx.Abs(want) {
		t.Errorf("matched at %g rad/s: %v, want %v", w, got, want)
	}
	// A hidden unstable pole stays, and stays hidden.
	hidden := TF{Num: Poly{-1, 1}.Mul(Poly{3, 1}), Den: Poly{-1, 1}.Mul(Poly{9, 1})}
	for name, d := range map[string]DTF{"matched": Matched(hidden, h), "ramp": must(RampInvariant(hidden, h)), "step": must(StepInvariant(hidden, h)), "Tustin": Tustin(hidden, h)} {
		z, p := d.Zeros(), d.Poles()
		if at := p[len(p)-1]; real(at) < 1.02 || cmplx.Abs(z[len(z)-1]-at) > 1e-9 {
			t.Errorf("%s: poles %v, zeros %v", name, p, z)
		}
	}
}

func must(d DTF, err error) DTF {
	if err != nil {
		panic(err)
	}
	return d
}
