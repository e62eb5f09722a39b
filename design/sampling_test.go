package design

import (
	"math"
	"math/cmplx"
	"strings"
	"testing"

	"steadyrig/fit/lti"
)

// The mapping that is taken is the one with the least |S - Sc|, computed here from transfer functions alone; its peak and
// that in continuous time are those of the curves. The continuous proportional loop has its peak p/(k - p) at rest.
func TestMappingIsTheBest(t *testing.T) {
	balanced := fromRoots(4, nil, []complex128{2.2, -2.6}, 0)
	levitated := fromRoots(2.6e6, nil, []complex128{36, -44, -280}, 0)
	chosen := map[string]bool{}
	for _, c := range []struct {
		plant        lti.TF
		period       float64
		inner, outer string
	}{
		{balanced, 0.005, "6(0.5s+1)/(0.05s+1)", "0.05/s"},
		{balanced, 0.05, "6(0.5s+1)/(0.05s+1)", "0.05/s"},
		{balanced, 0.12, "6(0.5s+1)/(0.05s+1)", ""},
		{balanced, 0.1, "6(0.5s+1)/(0.01s+1)", "0.1(s+1)/s"},
		{balanced, 0.03, "6(0.5s+1)/(0.05s+1)*(s^2+2s+900)/(s^2+60s+900)", ""},
		{levitated, 0.001, "(0.008s+0.3)/(0.0005s+1)", "6/s"},
	} {
		plant := c.plant
		m := bare(plant, c.period)
		p, err := newProblem(m, bareRig(c.period, 0, 5))
		if err != nil {
			t.Fatal(err)
		}
		l := NewLoops(c.period)
		var k1, k2 *Block
		for name, text := range map[string]string{"inner": c.inner, "outer": c.outer} {
			if text == "" {
				continue
			}
			b, err := ParseController(text)
			if err == nil {
				err = l.Set(name, b)
			}
			if err != nil {
				t.Fatal(err)
			}
			if name == "inner" {
				k1 = b
			} else {
				k2 = b
			}
		}
		before := *l.Inner
		s, err := p.mapControllers(l)
		if err != nil {
			t.Fatal(err)
		}
		if before.Discrete.Numerator[0] == 0 || len(s.Mappings) != 5 {
			t.Fatalf("%+v", s)
		}
		g, err := lti.ZOHTF(plant, c.period)
		if err != nil {
			t.Fatal(err)
		}
		mismatch := func(inner, outer lti.DTF) float64 {
			worst := 0.0
			for w := 0.02; w < math.Pi/c.period; w *= 1.01 {
				x := complex(0, w)
				k := k1.continuousTF().At(x)
				d := inner.At(w)
				if k2 != nil {
					k *= 1 + k2.continuousTF().At(x)
					d *= 1 + outer.At(w)
				}
				worst = math.Max(worst, cmplx.Abs(1/(1+g.At(w)*d)-1/(1+plant.At(x)*k)))
			}
			return worst
		}
		outer := lti.DTF{Num: lti.Poly{0}, Den: lti.Poly{1}, Period: c.period}
		if l.Outer != nil {
			outer = l.Outer.lti(c.period)
		}
		for _, r := range s.Mappings {
			if !r.Chosen {
				continue
			}
			chosen[r.Mapping] = true
			near(t, "mismatch", r.Mismatch, mismatch(l.Inner.lti(c.period), outer), 0.01)
			for _, o := range s.Mappings {
				if o.Stable && o.Mismatch < r.Mismatch || !r.Stable && o.Stable {
					t.Errorf("period %g: %s is better than the chosen %s: %+v", c.period, o.Mapping, r.Mapping, s.Mappings)
				}
			}
		}
		t.Logf("period %g: %+v", c.period, s)
	}
	if len(chosen) < 2 {
		t.Errorf("always the same mapping is taken: %v", chosen)
	}
	// S = (s - 1)/(s - 1 + k): at rest 1/(k - 1), which sampling at 1 ms hardly changes.
	m := bare(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-1, 1}}, 0.001)
	p, err := newProblem(m, bareRig(0.001, 0, 5))
	if err != nil {
		t.Fatal(err)
	}
	l := NewLoops(0.001)
	if err := l.Set("inner", &Block{Continuous: &Rational{[]float64{1.25}, []float64{1e-4, 1}}}); err != nil {
		t.Fatal(err)
	}
	s, err := p.mapControllers(l)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "continuous peak", s.ContinuousPeak, 4, 1e-3)
	if text := s.warning(); text != "" {
		t.Error(text)
	}
	s.ContinuousPeak = 2
	if text := s.warning(); !strings.Contains(text, "from 2 to 4") {
		t.Errorf("a mapping that doubles the peak: %q", text)
	}
	// Given in z, nothing is mapped.
	if s, err := p.mapControllers(lawLoops(lti.Gain(2, 0.001))); s != nil || err != nil {
		t.Errorf("%+v, %v", s, err)
	}
}

// Least peak and longest period in closed form: one pole asks p T d <= ln Ms, d = 1 + the whole samples of delay; several
// poles and one sample, the sum of them (checkvalues E24, E41: e^{p tau}; 1/(s - p) is held under a whole sample of
// delay if p T < ln 2).
func TestPeriodCost(t *testing.T) {
	for _, c := range []struct {
		name                   string
		poles                  []complex128
		delay, compute, period float64
		asked                  float64
		least, longest         float64
	}{
		{"one pole", []complex128{1, -3}, 0, 0, 0.1, 2, math.Exp(0.1), math.Ln2},
		{"compute delay of a sample", []complex128{1, -3}, 0, 0.1, 0.1, 2, math.Exp(0.2), math.Ln2},
		{"part of a sample", []complex128{1, -3}, 0, 0.05, 0.1, 2, math.Exp(0.1), math.Ln2},
		{"the plant's own delay is not the computer's", []complex128{1, -3}, 0.3, 0, 0.1, 2, math.Exp(0.1), math.Ln2},
		{"long delay, two samples of it", []complex128{1, -3}, 0.2, 0, 0.01, 1.25, math.Exp(0.01), math.Log(1.25)},
		{"two samples", []complex128{1, -3}, 0.215, 0, 0.01, 1.246, math.Exp(0.01), math.Log(1.246)},
		{"many samples only", []complex128{1, -3}, 0.2, 0, 0.01, 1.2221, math.Exp(0.01), 0},
		{"no period", []complex128{1, -3}, 0.3, 0, 0.1, 1.2, math.Exp(0.1), 0},
		{"pair", []complex128{complex(0.5, 4), complex(0.5, -4), -3}, 0, 0, 0.1, 2, math.Exp(0.1), math.Ln2},
	} {
		m := bare(fromRoots(1, nil, c.poles, c.delay), c.period)
		rig := bareRig(c.period, c.compute, 5)
		rig.Spec.PeakSensitivity = c.asked
		p, err := newProblem(m, rig)
		if err != nil {
			t.Fatal(err)
		}
		got := p.periodCost()
		near(t, c.name+": least peak", got.LeastPeak, c.least, 1e-9)
		if c.name == "many samples only" {
			// p d T <= ln Ms with (d - 1) T <= tau < d T: the largest T of any d.
			for d := 1.0; d < 40 && c.longest == 0; d++ {
				if most := math.Min(math.Log(c.asked)/d, c.delay/math.Max(d-1, 1e-9)); most > c.delay/d {
					c.longest = most
				}
			}
		}
		if math.Abs(got.LongestPeriod-c.longest) > 1e-6 {
			t.Errorf("%s: longest period %.6g, want %.6g", c.name, got.LongestPeriod, c.longest)
		}
	}
	// A stable plant has no such cost; a slow loop is warned of with all three numbers.
	if p, err := newProblem(bare(fromRoots(1, nil, []complex128{-1}, 0), 0.1), bareRig(0.1, 0, 5)); err != nil || p.periodCost() != nil {
		t.Errorf("stable plant: %v", err)
	}
	c := PeriodCost{PoleTimesPeriod: 0.31, LeastPeak: 1.363, LongestPeriod: 0.42}
	for _, want := range []string{"0.31", "0.25", "1.36", "0.42 s", "peak_sensitivity = 2"} {
		if text := c.warning(2); !strings.Contains(text, want) {
			t.Errorf("%q does not say %s", text, want)
		}
	}
	if text := (&PeriodCost{PoleTimesPeriod: 0.2}).warning(2); text != "" {
		t.Errorf("a short period: %q", text)
	}
}
