package design

import (
	"cmp"
	"context"
	"errors"
	"math"
	"math/cmplx"
	"slices"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// stableFactor returns the roots inside the unit circle of weight a(z) a(1/z) + b(z) b(1/z), num and den in powers of
// z^-1.
func stableFactor(num, den lti.Poly, weight float64) []complex128 {
	n := max(len(num), len(den))
	sum := make(lti.Poly, 2*n-1)
	for i := range n {
		for j := range n {
			if i < len(den) && j < len(den) {
				sum[n-1+i-j] += weight * den[i] * den[j]
			}
			if i < len(num) && j < len(num) {
				sum[n-1+i-j] += num[i] * num[j]
			}
		}
	}
	for len(sum) > 1 && sum[0] == 0 { // a delay adds none
		sum = sum[1 : len(sum)-1]
	}
	var in []complex128
	for _, z := range sum.Roots() {
		if cmplx.Abs(z) < 1 {
			in = append(in, z)
		}
	}
	return in
}

// The loop about an observer has the poles of the feedback and those of the estimator, both the stable roots of
// weight a a* + b b* for the sampled plant b/a (Kalman's equation; Åström & Wittenmark, Computer-Controlled Systems, 3rd
// ed., secs. 11.4 and 12.5), and nothing of the delay but poles at z = 0. The roots are those of polynomials, no Riccati
// equation is in them.
func TestObserverPoles(t *testing.T) {
	for name, g := range map[string]lti.TF{
		"lag":              fromRoots(4, nil, []complex128{2.2, -2.6}, 0),
		"delay":            fromRoots(4, nil, []complex128{2.2, -2.6}, 0.06),
		"part of a sample": fromRoots(4, nil, []complex128{2.2, -2.6}, 0.041),
		"pair and zero":    fromRoots(9, []complex128{-5}, []complex128{complex(0.8, 9), complex(0.8, -9), -18}, 0.03),
		"integrators":      fromRoots(90, nil, []complex128{0, 0, -30}, 0.05),
		"undamped":         fromRoots(20, nil, []complex128{1, complex(0, 4), complex(0, -4)}, 0),
	} {
		const period = 0.03
		p, err := newProblem(bare(g, period), bareRig(period, 0, 5))
		if err != nil {
			t.Fatal(err)
		}
		d, err := lti.ZOHTF(g, period)
		if err != nil {
			t.Fatal(err)
		}
		x := []float64{math.Log(3), math.Log(7), 0}
		k, ok := p.observer(x)
		if !ok {
			t.Fatalf("%s: no controller", name)
		}
		if want := len(d.Den) - 1; k.order() > want+len(d.Num) {
			t.Errorf("%s: order %d", name, k.order())
		}
		two, err := lti.NewTwoLoops(g, 0, &lti.Law{Inner: k.z})
		if err != nil {
			t.Fatal(err)
		}
		var got, want []complex128
		for _, z := range two.Poles() {
			if cmplx.Abs(z) > 0.05 { // the delay's poles at zero scatter as roots of their multiplicity do
				got = append(got, z)
			}
		}
		for _, at := range x[:2] {
			gain := cmplx.Abs(g.At(complex(0, math.Exp(at))))
			for _, z := range stableFactor(d.Num, d.Den, gain*gain) {
				if cmplx.Abs(z) > 0.05 {
					want = append(want, z)
				}
			}
		}
		order := func(a, b complex128) int {
			if math.Abs(real(a)-real(b)) > 1e-5 {
				return cmp.Compare(real(a), real(b))
			}
			return cmp.Compare(imag(a), imag(b))
		}
		slices.SortFunc(got, order)
		slices.SortFunc(want, order)
		if len(got) != len(want) {
			t.Errorf("%s: %d poles %v, want %d %v", name, len(got), got, len(want), want)
			continue
		}
		for i := range got {
			if cmplx.Abs(got[i]-want[i]) > 1e-5 {
				t.Errorf("%s: pole %v, want %v", name, got[i], want[i])
			}
		}
		// With a decay asked no pole is slower (Anderson & Moore 1971).
		const decay = 1.3
		if k, ok = p.observer([]float64{math.Log(3), math.Log(7), decay}); !ok {
			t.Fatalf("%s: no controller with decay", name)
		}
		if two, err = lti.NewTwoLoops(g, 0, &lti.Law{Inner: k.z}); err != nil {
			t.Fatal(err)
		}
		for _, z := range two.Poles() {
			if cmplx.Abs(z) > math.Exp(-decay*period)+1e-6 {
				t.Errorf("%s: pole %v decays more slowly than %v 1/s", name, z, decay)
			}
		}
	}
}

// Each form has the order and the shape that InnerForms and OuterForms say, each holds the simpler one that it extends.
func TestFormsNest(t *testing.T) {
	p, err := newProblem(testRigs()[1].model(t), testRigs()[1].rig())
	if err != nil {
		t.Fatal(err)
	}
	scale := innerScale{rate: 3, gain: 0.5}
	build := func(form string, x ...float64) lti.DTF {
		k, ok := p.innerBlock(form, x, scale)
		if !ok {
			t.Fatal(form)
		}
		return k.z
	}
	same := func(what string, a, b lti.DTF) {
		for _, w := range []float64{0.1, 2, 20} {
			if va, vb := a.At(w), b.At(w); cmplx.Abs(va-vb) > 1e-9*cmplx.Abs(va) {
				t.Errorf("%s at %v rad/s: %v and %v", what, w, va, vb)
			}
		}
	}
	same("second order, lead with roll-off", build(formSecond, 0.2, 0.7, 1.1, 0, math.Log(rollOffDamping)), build(formRollOff, 0.2, 0.7, 1.1))
	outer := func(form string, x ...float64) lti.DTF { k, _ := p.outerBlocks(form, x, 1, 5); return k.z }
	pi := outer(formPI, -2, 0, 0.3, -1)
	same("PI with a lag that is none", outer(formPILag, -2, 0, 0.3, -1, -3, -40), pi)
	same("PI with a lead that is none", outer(formPILead, -2, 0, 0.3, -1, -3, -40), pi)
	for form, want := range map[string]int{formI: 1, formPI: 1, formPILag: 2, formPILead: 2, formPID: 3} {
		x := []float64{-2, 0.5, 0.3, -1, -3, -3}
		k, f := p.outerBlocks(form, x, 1, 5)
		if k.order() != want || f.order() != 1 {
			t.Errorf("%s: orders %d and %d, want %d and 1", form, k.order(), f.order(), want)
		}
		integrates := slices.ContainsFunc(k.z.Poles(), func(z complex128) bool { return cmplx.Abs(z-1) < onCircle })
		if !integrates || math.Abs(f.z.DC()-1) > 1e-12 {
			t.Errorf("%s: integrates %v, prefilter's steady gain %v", form, integrates, f.z.DC())
		}
	}
}

// A form that is asked for is taken, one that there is not is answered with those that there are, and one that cannot
// hold the plant is refused.
func TestFormsAskedFor(t *testing.T) {
	r := testRigs()[1]
	l, err := Design(t.Context(), r.model(t), r.rig(), Options{Seed: 1, Inner: formObserver, Outer: formPILag, Plants: 700})
	if err != nil || l.InnerForm != formObserver || l.OuterForm != formPILag || len(l.Forms) != 2 || l.Inner.Continuous != nil {
		t.Errorf("%v, forms %q %q", err, l.InnerForm, l.OuterForm)
	}
	var refused *ident.RefusedError
	for _, opt := range []Options{{Inner: "PI"}, {Outer: "gain"}} {
		l, err := Design(t.Context(), r.model(t), r.rig(), opt)
		if l != nil || err == nil || errors.As(err, &refused) || !strings.Contains(err.Error(), "choose one of ") {
			t.Errorf("%+v: %v", opt, err)
		}
	}
	// Two integrators under a gain swing for ever.
	r = testRigs()[4]
	if l, err = Design(t.Context(), r.model(t), r.rig(), Options{Seed: 1, Inner: formGain}); !errors.As(err, &refused) || l.Verdict != Refused ||
		!strings.Contains(refused.What, "form asked for, gain,") {
		t.Errorf("gain on two integrators: %v", err)
	}
}

// An unstable pole beside an undamped pair is more than a lead can hold: the designer goes on to what can.
func TestPlantThatNeedsMore(t *testing.T) {
	if testing.Short() {
		t.Skip("a design of some seconds")
	}
	r := testRigs()[1]
	r.truth = fromRoots(60, nil, []complex128{1.5, complex(0, 5), complex(0, -5)}, 0)
	r.input = [2]float64{-40, 40}
	r.spec = data.Spec{Step: 0.5, Overshoot: 0.3, Settling: 8, Band: 0.03, PeakSensitivity: 3}
	l, err := Design(t.Context(), r.model(t), r.rig(), Options{Seed: 1, Plants: 700})
	if err != nil {
		t.Fatal(err)
	}
	if held, spec := r.meets(t, r.truth, l.LTI()); !held || !spec || !slices.Contains([]string{formSecond, formObserver}, l.InnerForm) {
		t.Errorf("%s: held %v, spec %v", l.InnerForm, held, spec)
	}
}

// Every point of the front does on the true plant, by lti alone, what it says of the worst plant; none is both slower and
// costlier than another; one is the design.
func TestFront(t *testing.T) {
	for _, r := range testRigs() {
		l := designed(t, r.name)
		chosen := 0
		for i, f := range l.Front {
			if i > 0 && f.Settling < l.Front[i-1].Settling {
				t.Errorf("%s: not in order of settling", r.name)
			}
			if f.Chosen {
				chosen++
				if !slices.Equal(f.Outer.Discrete.Numerator, l.Outer.Discrete.Numerator) {
					t.Errorf("%s: chosen, but not the design", r.name)
				}
			} else if i > 0 && f.PeakInput > l.Front[i-1].PeakInput && f.InputNoise > l.Front[i-1].InputNoise {
				t.Errorf("%s: point %d is slower and costs more", r.name, i)
			}
			one := *l
			one.Inner, one.Outer, one.Prefilter, one.OuterLimits = f.Inner, f.Outer, f.Prefilter, f.OuterLimits
			law := one.LTI()
			tr := r.step(t, r.truth, law, 1)
			input, last := 0.0, 0
			for k, y := range tr.YTrue {
				input = math.Max(input, math.Abs(tr.U[k]-law.U0))
				if math.Abs((y-law.Y0)/r.spec.Step-1) > r.spec.Band {
					last = k + 1
				}
			}
			authority := math.Min(r.input[1]-r.point.Input, r.point.Input-r.input[0])
			if settling := float64(last) * r.period; tr.Tripped >= 0 || settling > f.Settling+r.period/2 || input/authority > f.PeakInput*(1+1e-6) {
				t.Errorf("%s: settles in %v s with %v of the input, the point says %v and %v", r.name, settling, input/authority, f.Settling, f.PeakInput)
			}
		}
		if chosen != 1 || len(l.Front) < 2 {
			t.Errorf("%s: %d points, %d chosen", r.name, len(l.Front), chosen)
		}
	}
}

// The knee is where the curve runs as the chord does. With effort 0.1 + s^-2 over s from 1/16 to 16 the chord falls by
// ln(256.1/0.1039)/ln 256 = 1.41 in logarithms and the curve by 2/(1 + 0.1 s^2), so s = 2.05. Where there is nothing to
// trade the point of least effort is taken.
func TestKnee(t *testing.T) {
	var points []FrontPoint
	for i := range 9 {
		s := math.Pow(2, float64(i-4))
		points = append(points, FrontPoint{Settling: s, effort: 0.1 + math.Pow(s, -2)})
	}
	if at := knee(points); points[at].Settling != 2 {
		t.Errorf("knee at %v", points[at].Settling)
	}
	for i := range points {
		points[i].effort = 1 + points[i].Settling
	}
	if at := knee(points); at != 0 {
		t.Errorf("effort that grows with time: %d", at)
	}
}

// Without a settling time one is chosen, said, promised and kept by whoever verifies the loops.
func TestNoSettlingAsked(t *testing.T) {
	if testing.Short() {
		t.Skip("a design of some seconds")
	}
	r := testRigs()[1]
	rig := r.rig()
	rig.Spec.Settling = 0
	m := r.model(t)
	l, err := Design(t.Context(), m, rig, Options{Seed: 1})
	if err != nil {
		t.Fatal(err)
	}
	a := l.Assumed
	if a == nil || !(a.Settling > 0) || l.Promise.Settling.Worst > a.Settling || len(l.Front) < 2 {
		t.Fatalf("assumed %+v, promise %+v", a, l.Promise)
	}
	for _, b := range l.Bounds {
		if b.Name == BoundDeadTime && b.Asked != nil {
			t.Errorf("%s asks %v, nobody did", b.Name, *b.Asked)
		}
	}
	if rig.Spec.Settling != 0 {
		t.Error("the rig file was written into")
	}
	again, err := Verify(t.Context(), m, rig, l, Options{Seed: 1})
	if err != nil || again.Promise.MeetSpec != l.Promise.MeetSpec || again.Assumed == nil {
		t.Errorf("verify: %v", err)
	}
	own := *l
	own.Assumed = nil
	if _, err := Verify(t.Context(), m, rig, &own, Options{Seed: 1}); err == nil || !strings.Contains(err.Error(), "settling") {
		t.Errorf("loops that do not say what for: %v", err)
	}
}

// The set that loops are tuned on ends with the plants of the pool that are hardest for them: whatever the pool, no
// plant of it is worse than those of the set by more than the tuner's aim allows.
func TestTailsAreTuned(t *testing.T) {
	r := testRigs()[4]
	r.relative = 0.03
	p, err := newProblem(r.model(t), r.rig())
	if err != nil {
		t.Fatal(err)
	}
	ctx := context.Background()
	tn := tuner{p: p, inner: []string{formLead}, outer: []string{formPI}}
	if tn.pool, err = p.pool(ctx, 1000, 5, 0); err != nil {
		t.Fatal(err)
	}
	best, err := tn.tune(ctx, new(Loops), pair{}, p.aim(1, p.spec.settling))
	if err != nil {
		t.Fatal(err)
	}
	if in, all := best.ratios.worst(), p.rejudge(best, tn.pool, p.aim(1, p.spec.settling)).ratios; !all.stable || all.worst() > math.Max(1, in) {
		t.Errorf("worst of the set %v, of the pool %+v", in, all)
	}
}
