package lti

import (
	"math"
	"math/rand/v2"
	"testing"
)

// A clamped integrator I = min(2, max(-2, I + 0.125 e)), e = +1 for 100 steps, then -1: it reaches 2 at step 16, falls at
// once on reversal and is back at 0 after 16 further steps, where an unclamped one stands at 12.5 and needs 100
// (arithmetic, exact in binary).
func TestHeldOutputsStopWindup(t *testing.T) {
	integrator := DTF{Num: Poly{0.125}, Den: Poly{1, -1}, Period: 1}
	one := Gain(1, 1)
	for _, c := range []struct {
		name string
		law  Law
		read func(s *LawState, r float64) float64
	}{
		{"inner", Law{Inner: integrator, InputLimits: [2]float64{-2, 2}}, func(s *LawState, r float64) float64 { return s.Step(r, 0) }},
		{"inner about an operating point", Law{Inner: integrator, U0: 5, Y0: 3, InputLimits: [2]float64{3, 7}},
			func(s *LawState, r float64) float64 { return s.Step(3+r, 3) - 5 }},
		{"outer", Law{Inner: one, Outer: &integrator, OuterLimits: [2]float64{-2, 2}}, func(s *LawState, r float64) float64 {
			s.Step(r, 0)
			return s.Inner()
		}},
	} {
		s := c.law.Start()
		for k := 1; k <= 132; k++ {
			e := 1.0
			want := math.Min(2, 0.125*float64(k))
			if k > 100 {
				e = -1
				want = math.Max(-2, 2-0.125*float64(k-100))
			}
			if got := c.read(s, e); got != want {
				t.Fatalf("%s, step %d: %g, want %g", c.name, k, got, want)
			}
		}
	}
}

// Every element of a step in turn, worked by hand: Prefilter 1/2 (r[k] + r[k-1]), Outer gain 2, Inner gain 3, about
// U0 = 10, Y0 = 1; y in steps of 0.25, u in steps of 0.5.
func TestLawByHand(t *testing.T) {
	outer, pre := Gain(2, 0.1), DTF{Num: Poly{0.5, 0.5}, Den: Poly{1}, Period: 0.1}
	law := Law{Inner: Gain(3, 0.1), Outer: &outer, Prefilter: &pre, U0: 10, Y0: 1, InputLimits: [2]float64{3.2, 18.3},
		OuterLimits: [2]float64{-1.5, 2}, InputRate: 40, InputStep: 0.5, OutputStep: 0.25}
	s := law.Start()
	for k, c := range []struct{ r, y, dither, read, v, u float64 }{
		// f = 0.2, v = 0.4, u = 10 + 3*0.4 = 11.2 -> 11
		{1.4, 1.1, 0, 1, 0.4, 11},
		// f = 0.4, dy = 0.25, v = 0.3, u = 10 + 3*0.05 = 10.15, + 0.3 = 10.45 -> 10.5
		{1.4, 1.2, 0.3, 1.25, 0.3, 10.5},
		// f = 1.2, dy = 0.25, v = 1.9, u = 14.95, but the rate allows 4 from 10.45 (before rounding): 14.45 -> 14.5
		{3, 1.2, 0, 1.25, 1.9, 14.5},
		// f = 2, v = min(3.5, 2), u = 10 + 3*1.75 = 15.25 -> 15.5 (half away from 0)
		{3, 1.2, 0, 1.25, 2, 15.5},
		// y = -1: f = 2, v = 2, u = 22, rate 19.25, limit 18.3 -> 18.5 is beyond it, so 18
		{3, -1, 0, -1, 2, 18},
		// y = 3: v = 2 (2 - 2) = 0, u = 10 - 6 = 4, rate 14.3 -> 14.5
		{3, 3, 0, 3, 0, 14.5},
	} {
		u := s.StepProbe(c.r, c.y, c.dither)
		if s.Read() != c.read || !near(s.Inner(), c.v, 1e-14) || u != c.u {
			t.Errorf("step %d: read %g, v %g, u %g; want %g, %g, %g", k, s.Read(), s.Inner(), u, c.read, c.v, c.u)
		}
	}
	s.Reset()
	if u := s.Step(1.4, 1.1); u != 11 {
		t.Errorf("after a reset: %g, want 11", u)
	}
}

// A dither that no limit touches adds to u and leaves the law's own part as it was, memory included.
func TestDitherIsNoPartOfTheLaw(t *testing.T) {
	law := Law{Inner: DTF{Num: Poly{2, -1.5}, Den: Poly{1, -0.5, -0.25}, Period: 1}, U0: 4, InputLimits: [2]float64{-100, 100}}
	plain, probed := law.Start(), law.Start()
	for k := range 50 {
		y, d := math.Sin(float64(k)), math.Cos(7*float64(k))
		a, b := plain.Step(0, y), probed.StepProbe(0, y, d)
		if !near(b-d, a, 1e-12) {
			t.Fatalf("step %d: %g with the dither taken off, %g without", k, b-d, a)
		}
	}
}

// The same where a limit or rounding does act: an integrator of gain 1 with u in whole steps. Law part 0.4 + 0.3 of dither
// is sent as 1, so the law is held to have put out 0.7; then 0.7 + 0.4 + 0.3 = 1.4 is sent as 1.
func TestDitherIsTakenOffWhatActed(t *testing.T) {
	law := Law{Inner: DTF{Num: Poly{1}, Den: Poly{1, -1}, Period: 1}, InputStep: 1}
	s := law.Start()
	if u := s.StepProbe(0.4, 0, 0.3); u != 1 {
		t.Fatalf("first step %g", u)
	}
	if u := s.StepProbe(0.4, 0, 0.3); u != 1 { // 0.7 + 0.4 + 0.3 = 1.4; with the dither in its memory 1.7, sent as 2
		t.Errorf("second step %g, want 1", u)
	}
}

func TestLawValidate(t *testing.T) {
	good := func() *Law { return &Law{Inner: Gain(1, 0.1)} }
	if err := good().Validate(); err != nil {
		t.Error(err)
	}
	other := Gain(1, 0.2)
	for name, breakIt := range map[string]func(l *Law){
		"no period":       func(l *Law) { l.Inner.Period = 0 },
		"no denominator":  func(l *Law) { l.Inner.Den = nil },
		"leading zero":    func(l *Law) { l.Inner.Den = Poly{0, 1} },
		"NaN":             func(l *Law) { l.Inner.Num = Poly{math.NaN()} },
		"mixed periods":   func(l *Law) { l.Outer = &other },
		"limits reversed": func(l *Law) { l.InputLimits = [2]float64{1, -1} },
		"outer reversed":  func(l *Law) { l.OuterLimits = [2]float64{1, 1} },
		"negative rate":   func(l *Law) { l.InputRate = -1 },
		"negative step":   func(l *Law) { l.OutputStep = -1 },
	} {
		l := good()
		breakIt(l)
		if l.Validate() == nil {
			t.Errorf("%s: no error", name)
		}
	}
}

// A PI controller held at a limit stands where back-calculation with a tracking time of one period would: u = Kp e + I,
// I' = Ki e + (usat - u)/Tt has I -> usat - Kp e + Tt Ki e (Astrom & Hagglund, PID Controllers, 1995, sec. 3.5; Fertik & Ross
// 1967). Kp 2, Ki 4, Tt = h = 0.5, e = 1, usat = 1: I = 1, so an error of -0.25 is answered by u = 1 - 2/4 at once.
func TestHeldOutputsAreBackCalculation(t *testing.T) {
	const kp, ki, h = 2, 4, 0.5
	law := Law{Inner: DTF{Num: Poly{kp, ki*h - kp}, Den: Poly{1, -1}, Period: h}, InputLimits: [2]float64{-1, 1}}
	s := law.Start()
	for range 20 {
		if u := s.Step(1, 0); u != 1 {
			t.Fatalf("u = %g, want it at its limit", u)
		}
	}
	if u := s.Step(-0.25, 0); u != 0.5 {
		t.Errorf("u = %g, want 0.5", u)
	}
}

// The error of rounding to steps of q is uniform over a step: mean 0, variance q^2/12, and not correlated with the signal
// where that is Gaussian with a deviation of q or more (Widrow 1961, Trans. AIEE 79, 555-568; Widrow & Kollar, Quantization
// Noise, 2008: what is missing is of the order of exp(-2 pi^2) of it). Limits: five deviations of the averages of 200 000
// values: of e, q/sqrt(12 n); of e^2, q^2/sqrt(180 n); of e x, q sd/sqrt(12 n).
func TestRoundingIsNoiseOfATwelfth(t *testing.T) {
	const q, sd, n = 0.25, 0.3, 200000
	for _, c := range []struct {
		name string
		law  Law
		err  func(s *LawState, x float64) float64
	}{
		{"input", Law{Inner: Gain(1, 1), InputStep: q}, func(s *LawState, x float64) float64 { return s.Step(x, 0) - x }},
		{"output", Law{Inner: Gain(1, 1), OutputStep: q}, func(s *LawState, x float64) float64 { s.Step(0, x); return s.Read() - x }},
	} {
		s, rnd := c.law.Start(), rand.New(rand.NewPCG(1, 1))
		var mean, square, cross float64
		for range n {
			x := sd * rnd.NormFloat64()
			e := c.err(s, x)
			mean, square, cross = mean+e/n, square+e*e/n, cross+e*x/n
		}
		if root := math.Sqrt(n); math.Abs(mean) > 5*q/math.Sqrt(12)/root || math.Abs(square-q*q/12) > 5*q*q/math.Sqrt(180)/root ||
			math.Abs(cross) > 5*q*sd/math.Sqrt(12)/root {
			t.Errorf("%s: mean %g, variance %g of %g, cross %g", c.name, mean, square, q*q/12, cross)
		}
	}
}

// A sine whose rate is far beyond the limit R comes out as a triangle of the same period T, which climbs for half of it:
// R T/2 from bottom to top (the fully activated rate limiter), and from rest the bottom is at 0. To within two steps R h.
func TestRateLimitMakesTriangles(t *testing.T) {
	const h, rate, period = 0.001, 3, 0.4
	law := Law{Inner: Gain(1, h), InputRate: rate}
	s := law.Start()
	top, before := 0.0, 0.0
	for k := range 4000 {
		u := s.Step(100*math.Sin(2*math.Pi*float64(k)*h/period), 0)
		if k > 0 && math.Abs(u-before) > rate*h*(1+1e-9) {
			t.Fatalf("step %d moves by %g, allowed %g", k, u-before, rate*h)
		}
		if before = u; k > 2000 {
			top = math.Max(top, u)
		}
	}
	if want := rate * period / 2; math.Abs(top-want) > 2*rate*h {
		t.Errorf("height %g, want %g", top, want)
	}
}

// A law that has followed another at rest, with the output where the reference wants it, goes on with the same input, to
// rounding: nothing moves. One that starts at its own rest jumps by what the other one had been sending.
func TestFollowAtRest(t *testing.T) {
	const h = 0.1
	pi := DTF{Num: Poly{0.4, -0.35}, Den: Poly{1, -1}, Period: h}
	pre := DTF{Num: Poly{0.2}, Den: Poly{1, -0.8}, Period: h}
	for name, inner := range map[string]DTF{
		"gain": Gain(3, h), "lead": {Num: Poly{5, -4}, Den: Poly{1, -0.3}, Period: h},
		"roll-off": {Num: Poly{1, 0.2, -0.8}, Den: Poly{1, -0.9, 0.2}, Period: h}, // with a zero at z = -1
		"late":     {Num: Poly{0, 1}, Den: Poly{1, -0.5}, Period: h},
	} {
		law := Law{Inner: inner, Outer: &pi, Prefilter: &pre, U0: 2, Y0: 7, InputLimits: [2]float64{0, 4}}
		s := law.Start()
		const u, y = 2.6, 7.1
		for range 400 {
			s.Follow(y, y, u, 0.1)
		}
		for k := range 3 {
			if got := s.Step(y, y); !near(got, u, 1e-9) {
				t.Errorf("%s, sample %d after the hand-over: %.12g, want %g", name, k, got, u)
			}
		}
		if got := law.Start().Step(y, y); math.Abs(got-u) < 0.1 {
			t.Errorf("%s: %g from rest, so following says nothing", name, got)
		}
	}
}
