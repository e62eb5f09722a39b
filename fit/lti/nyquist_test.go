package lti

import (
	"math"
	"math/rand/v2"
	"testing"
)

// The closed loop's characteristic polynomial, counted by its roots, is the oracle for rational loops; the delay cases
// follow from the gain ranges of TestGainRanges.
func TestNyquistCount(t *testing.T) {
	lag := Poly{1, 0.1}
	for _, c := range []struct {
		name string
		l    TF
		want int
	}{
		{"unstable, held", TF{Num: Poly{3}, Den: Poly{-1, 1}}, 0},
		{"unstable, too little", TF{Num: Poly{0.5}, Den: Poly{-1, 1}}, 1},
		{"unstable, wrong sign", TF{Num: Poly{-3}, Den: Poly{-1, 1}}, 1},
		{"third order, held", TF{Num: Poly{20}, Den: Poly{-1, 1}.Mul(lag).Mul(Poly{1, 0.05})}, 0},
		{"third order, too much", TF{Num: Poly{27}, Den: Poly{-1, 1}.Mul(lag).Mul(Poly{1, 0.05})}, 2},
		{"integrator", TF{Num: Poly{1}, Den: Poly{0, 1}}, 0},
		{"integrator, wrong sign", TF{Num: Poly{-1}, Den: Poly{0, 1}}, 1},
		{"double integrator, lead", TF{Num: Poly{1, 1}, Den: Poly{0, 0, 1}.Mul(lag)}, 0},
		{"double integrator, lag only", TF{Num: Poly{1}, Den: Poly{0, 0, 1}.Mul(lag)}, 2},
		{"triple integrator, two zeros", TF{Num: Poly{8, 8, 2}, Den: Poly{0, 0, 0, 1, 0.01}}, 0},
		{"undamped pair, held", TF{Num: Poly{0, 3}, Den: Poly{9, 0, 1}}, 0},
		{"undamped pair, driven", TF{Num: Poly{0, -3}, Den: Poly{9, 0, 1}}, 2},
		{"two undamped pairs, mixed zeros", TF{Num: Poly{0, 4, 0, 1}, Den: Poly{1, 0, 1}.Mul(Poly{9, 0, 1})}, 0},
		{"double undamped pair", TF{Num: Poly{0.1}, Den: Poly{1, 0, 1}.Mul(Poly{1, 0, 1})}, 2},
		{"lightly damped, driven", TF{Num: Poly{0, -0.01}, Den: Poly{9, 1e-5, 1}}, 2},
		{"biproper", TF{Num: Poly{1, 2}, Den: Poly{-3, 1}}, 1},
		{"biproper, negative", TF{Num: Poly{1, -2}, Den: Poly{-3, 1}}, 0},
		{"inexact cancellation", TF{Num: Poly{-4.04, 4}, Den: Poly{-1, 0, 1}}, 1},
	} {
		t.Run(c.name, func(t *testing.T) {
			roots := 0
			for _, r := range c.l.Num.Add(c.l.Den).Roots() {
				if real(r) > 0 {
					roots++
				}
			}
			if roots != c.want {
				t.Fatalf("the oracle has %d unstable roots, the table %d", roots, c.want)
			}
			poles := c.l.Poles()
			if c.name == "double undamped pair" { // known, where the roots in double are 1e-8 off the axis
				poles = []complex128{1i, 1i, -1i, -1i}
			}
			n, err := NyquistCount(c.l.At, poles, 0)
			if err != nil {
				t.Fatal(err)
			}
			if n.Closed != c.want {
				t.Errorf("closed loop: %d unstable poles, want %d (%+v)", n.Closed, c.want, n)
			}
		})
	}
	for _, c := range []struct {
		delay, k float64
		want     int
	}{{0.1, 15, 0}, {0.1, 15.2, 2}, {0.8, 1.37, 0}, {0.8, 1.39, 2}, {0.5, 0.9, 1}} {
		l := TF{Num: Poly{c.k}, Den: Poly{-1, 1}, Delay: c.delay}
		n, err := NyquistCount(l.At, l.Poles(), 0)
		if err != nil {
			t.Fatal(err)
		}
		if n.Closed != c.want {
			t.Errorf("delay %g, gain %g: %d unstable poles, want %d", c.delay, c.k, n.Closed, c.want)
		}
	}
	if _, err := NyquistCount(TF{Num: Poly{1}, Den: Poly{-1, 1}}.At, []complex128{1}, 0); err == nil {
		t.Error("loop through -1 at w = 0: no error")
	}
	if n, err := NyquistCount(TF{Num: Poly{2, 2}, Den: Poly{1, 1}, Delay: 1}.At, []complex128{-1}, 0); err == nil {
		t.Errorf("gain 2 and delay for ever: no error, %+v", n)
	}
}

// Sampled loops against the eigenvalues of the interconnected blocks, poles on the circle at 1, at -1 and in pairs.
func TestNyquistCountSampled(t *testing.T) {
	const h = 0.1
	for _, c := range []struct {
		name string
		g    DTF
	}{
		{"unstable", DTF{Num: Poly{0, 0.1052}, Den: Poly{1, -1.1052}}},
		{"double integrator with lead", DTF{Num: Poly{0, 0.005, 0.005}, Den: Poly{1, -2, 1}}.Mul(DTF{Num: Poly{20, -18}, Den: Poly{1, -0.2}})},
		{"pole at -1", DTF{Num: Poly{0, 1}, Den: Poly{1, 1}}},
		{"undamped pair", DTF{Num: Poly{0, 0.1, -0.1}, Den: Poly{1, -1.2, 1}}},
		{"delay", DTF{Num: Poly{0, 0, 0, 0, 0.1052}, Den: Poly{1, -1.1052}}},
	} {
		for _, k := range []float64{-3, -1, -0.3, 0.3, 0.9, 1.1, 3, 15, 30} {
			g := c.g
			g.Period = h
			g.Num = g.Num.Scale(k)
			loops := TwoLoops{Plant: g.SS(), Inner: Gain(1, h)}
			want := 0
			for _, p := range loops.Poles() {
				if math.Hypot(real(p), imag(p)) > 1 {
					want++
				}
			}
			n, err := NyquistCount(g.SS().AtPoint, g.Poles(), h)
			if err != nil {
				t.Errorf("%s, gain %g: %v", c.name, k, err)
				continue
			}
			if n.Closed != want {
				t.Errorf("%s, gain %g: %d unstable poles, want %d (%+v)", c.name, k, n.Closed, want, n)
			}
		}
	}
}

// Random loops, a third of them with poles on the axis: Nyquist's count, the margins' verdict and the gain margins
// against the roots of the closed loop's polynomial.
func TestCountsOnRandomLoops(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 1))
	unstableRoots := func(l TF, k float64) int {
		n := 0
		for _, r := range l.Num.Scale(k).Add(l.Den).Roots() {
			if real(r) > 0 {
				n++
			}
		}
		return n
	}
	factor := func() Poly {
		switch rng.IntN(3) {
		case 0: // a pair
			w, z := math.Exp(2*rng.NormFloat64()), rng.NormFloat64()/2
			return Poly{w * w, 2 * z * w, 1}
		default:
			return Poly{math.Exp(2*rng.NormFloat64()) * float64(2*rng.IntN(2)-1), 1}
		}
	}
	held, delays := 0, 0
	for trial := range 400 {
		l := TF{Num: Poly{math.Exp(2*rng.NormFloat64()) * float64(2*rng.IntN(2)-1)}, Den: Poly{1}}
		var poles []complex128
		var axis []float64
		unstable := 0
		for range 1 + rng.IntN(3) {
			f := factor()
			l.Den = l.Den.Mul(f)
			for _, p := range f.Roots() {
				poles = append(poles, p)
				if real(p) > 0 {
					unstable++
				}
			}
		}
		switch rng.IntN(6) {
		case 0:
			l.Den = l.Den.Mul(Poly{0, 1})
			poles, axis = append(poles, 0), append(axis, 0)
		case 1:
			w := math.Exp(rng.NormFloat64())
			l.Den = l.Den.Mul(Poly{w * w, 0, 1})
			poles, axis = append(poles, complex(0, w), complex(0, -w)), append(axis, w)
		}
		for l.RelDegree() > 1 && rng.IntN(2) == 0 {
			if f := factor(); f.Degree() < l.RelDegree() {
				l.Num = l.Num.Mul(f)
			}
		}
		want := unstableRoots(l, 1)
		n, err := NyquistCount(l.At, poles, 0)
		if err != nil || n.Closed != want {
			t.Errorf("trial %d: %v, error %v, want %d unstable: %v", trial, n, err, want, l)
		}
		m := LoopMargins(jw(l), 1e-5, 1e6, unstable, axis...)
		if m.StableNominal != (want == 0) {
			t.Errorf("trial %d: called stable %v with %d unstable roots: %v", trial, m.StableNominal, want, l)
		}
		if want > 0 {
			continue
		}
		held++
		// Within the gain margins the loop is held, beyond them it is not.
		for _, c := range []struct {
			k    float64
			held bool
		}{{1 + 0.99*(math.Min(m.GainUp, 1e6)-1), true}, {m.GainUp * 1.01, false}, {m.GainDown + 0.01*(1-m.GainDown), true}, {m.GainDown * 0.99, false}} {
			if c.k <= 0 || math.IsInf(c.k, 0) {
				continue
			}
			if got := unstableRoots(l, c.k); (got == 0) != c.held {
				t.Errorf("trial %d: %d unstable roots at a gain of %g, margins %g to %g: %v", trial, got, c.k, m.GainDown, m.GainUp, l)
			}
		}
		// Likewise the delay margin.
		if l.RelDegree() == 0 || math.IsInf(m.Delay, 1) || m.Delay*m.Crossover > 1e3 {
			continue
		}
		delays++
		for _, c := range []struct {
			factor float64
			held   bool
		}{{0.99, true}, {1.01, false}} {
			d := l
			d.Delay = c.factor * m.Delay
			n, err := NyquistCount(d.At, poles, 0)
			if err != nil || (n.Closed == 0) != c.held {
				t.Errorf("trial %d: %+v (%v) at %g times the delay margin %g: %v", trial, n, err, c.factor, m.Delay, l)
			}
		}
	}
	if delays < 30 {
		t.Errorf("only %d delay margins", delays)
	}
	if held < 50 {
		t.Errorf("only %d loops were held: the test has lost its point", held)
	}
}
