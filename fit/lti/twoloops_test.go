package lti

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"
)

func TestInterconnections(t *testing.T) {
	a := TF{Num: Poly{2, 1}, Den: Poly{-3, 2, 1}}
	b := TF{Num: Poly{1, 3}, Den: Poly{4, 1}} // biproper
	for _, w := range []float64{0, 0.3, 2, 40} {
		s := complex(0, w)
		va, vb := a.At(s), b.At(s)
		for _, c := range []struct {
			name string
			g    SS
			want complex128
		}{
			{"series", Series(a.SS(), b.SS()), va * vb},
			{"parallel", Parallel(a.SS(), b.SS()), va + vb},
			{"negative feedback", Feedback(a.SS(), b.SS(), -1), va / (1 + va*vb)},
			{"positive feedback", Feedback(b.SS(), a.SS(), 1), vb / (1 - va*vb)},
			{"static gain in series", Series(TF{Num: Poly{3}, Den: Poly{2}}.SS(), a.SS()), 1.5 * va},
			{"static gains", Feedback(TF{Num: Poly{3}, Den: Poly{1}}.SS(), TF{Num: Poly{2}, Den: Poly{1}}.SS(), -1), 3.0 / 7},
		} {
			if got := c.g.At(w); cmplx.Abs(got-c.want) > 1e-14*(1+cmplx.Abs(c.want)) {
				t.Errorf("%s at %g: got %v, want %v", c.name, w, got, c.want)
			}
		}
	}
	// A block that feeds itself at once: y = 2 (r + y/4) = 4 r.
	one := mat.NewDense(1, 1, []float64{1})
	if got := Connect([]SS{{D: mat.NewDense(1, 1, []float64{2})}}, mat.NewDense(1, 1, []float64{0.25}), one, one); got.D.At(0, 0) != 4 {
		t.Errorf("self-loop: %g, want 4", got.D.At(0, 0))
	}
	tf := Series(a.SS(), b.SS()).TF()
	wantPoly(t, "den", tf.Den, a.Den.Mul(b.Den), 1e-13)
	wantPoly(t, "num", tf.Num.Trim()[:3], a.Num.Mul(b.Num), 1e-13)
	defer func() {
		if recover() == nil {
			t.Error("algebraic loop: no panic")
		}
	}()
	Feedback(TF{Num: Poly{1}, Den: Poly{1}}.SS(), TF{Num: Poly{1}, Den: Poly{1}}.SS(), 1)
}

// Inexact cancellation of an unstable pole, L = 4 (s-1.01)/((s-1)(s+1)): closed-loop poles -2 ± sqrt(9.04) (root locus);
// exact cancellation keeps +1 as a hidden mode, which the product of the transfer functions does not show.
func TestHiddenUnstableMode(t *testing.T) {
	plant := TF{Num: Poly{1}, Den: Poly{-1, 1}}
	for _, c := range []struct {
		zero float64
		want []complex128
	}{
		{1.01, []complex128{-5.006659275674582, 1.006659275674582}},
		{1, []complex128{-5, 1}},
	} {
		k := TF{Num: Poly{-4 * c.zero, 4}, Den: Poly{1, 1}}
		wantPoles(t, Feedback(Series(k.SS(), plant.SS()), TF{Num: Poly{1}, Den: Poly{1}}.SS(), -1).Poles(), c.want, 1e-13)
	}
	// The same in the sampled two-loop form: the inner controller's zero on the plant's sampled pole.
	const h = 0.01
	g, err := ZOH(plant, h)
	if err != nil {
		t.Fatal(err)
	}
	loops := TwoLoops{Plant: g, Inner: DTF{Num: Poly{40, -40 * math.Exp(h)}, Den: Poly{1, -0.9}, Period: h}}
	if p := loops.Poles(); loops.Stable() || cmplx.Abs(p[len(p)-1]-complex(math.Exp(h), 0)) > 1e-12 {
		t.Errorf("poles %v, want the hidden %g among them", p, math.Exp(h))
	}
}

// The closed block against the formulas of the two-loop law, with and without its parts.
func TestTwoLoopsClosed(t *testing.T) {
	const h = 0.02
	g := TF{Num: Poly{9}, Den: Poly{-9, 0.5, 1}, Delay: 0.025}
	inner := Tustin(TF{Num: Poly{30, 6}, Den: Poly{1, 0.02}}, h)
	outer := Tustin(TF{Num: Poly{0.4, 0.3}, Den: Poly{0, 1}}, h)
	pre := Tustin(TF{Num: Poly{1}, Den: Poly{1, 0.1}}, h)
	for _, c := range []struct {
		name       string
		outer, pre *DTF
	}{{"all", &outer, &pre}, {"no prefilter", &outer, nil}, {"inner alone", nil, nil}, {"inner and prefilter", nil, &pre}} {
		loops, err := NewTwoLoops(g, 0.005, &Law{Inner: inner, Outer: c.outer, Prefilter: c.pre})
		if err != nil {
			t.Fatal(err)
		}
		whole := g
		whole.Delay = 0.03 // the plant's and the computer's
		sampled, err := ZOHTF(whole, h)
		if err != nil {
			t.Fatal(err)
		}
		if p, q := loops.Plant.At(4), sampled.At(4); cmplx.Abs(p-q) > 1e-11*cmplx.Abs(q) {
			t.Errorf("%s: plant %v, want %v", c.name, p, q)
		}
		closed := loops.Closed()
		for _, w := range []float64{0.3, 4, 60} {
			p, k1 := loops.Plant.At(w), inner.At(w)
			if q := loops.Response(w); cmplx.Abs(p-q) > 1e-12*cmplx.Abs(p) {
				t.Errorf("plant %v or %v", p, q)
			}
			k2, f := complex128(0), complex128(1)
			if c.outer != nil {
				k2 = c.outer.At(w)
			}
			if c.pre != nil {
				f = c.pre.At(w)
			}
			l := p * k1 * (1 + k2)
			if got := loops.LoopAtInput(w); cmplx.Abs(got-l) > 1e-12*cmplx.Abs(l) {
				t.Errorf("%s: loop gain %v, want %v", c.name, got, l)
			}
			toV := f // v from r, before feedback
			if c.outer != nil {
				toV = k2 * f
				if got, want := loops.OuterBreak(w), k2*p*k1/(1+p*k1); cmplx.Abs(got-want) > 1e-12*cmplx.Abs(want) {
					t.Errorf("%s: outer break %v, want %v", c.name, got, want)
				}
			}
			s := 1 / (1 + l)
			y := [3]complex128{p * k1 * toV * s, p * s, -l * s}
			want := [3][3]complex128{
				ToOutput: y,
				ToInput:  {k1 * toV * s, -l * s, -k1 * (1 + k2) * s},
			}
			for j := range 3 {
				n := complex128(0)
				if j == FromNoise {
					n = 1
				}
				want[ToInnerReference][j] = -k2 * (y[j] + n)
				if j == FromReference {
					want[ToInnerReference][j] += toV
				}
			}
			for i := range 3 {
				for j := range 3 {
					got := pick(closed, i, j).At(w)
					if v := want[i][j]; cmplx.Abs(got-v) > 1e-11*(1+cmplx.Abs(v)) {
						t.Errorf("%s at %g, to %d from %d: got %v, want %v", c.name, w, i, j, got, v)
					}
				}
			}
		}
	}
}

// pick returns one input and one output of a block.
func pick(g SS, out, in int) SS {
	n := g.Order()
	d := mat.NewDense(1, 1, []float64{g.D.At(out, in)})
	return SS{A: g.A, B: mat.DenseCopyOf(g.B.Slice(0, n, in, in+1)), C: mat.DenseCopyOf(g.C.Slice(out, out+1, 0, n)), D: d, Period: g.Period}
}

// Order 12 near z = 1: the loop is stable by construction (each mode damped in continuous time and sampled fast), the
// roots of its multiplied-out polynomial would not say so reliably, the eigenvalues of the blocks must.
func TestPolesOfFastSampledLoop(t *testing.T) {
	const h = 1e-4
	g := TF{Num: Poly{400}, Den: Poly{-9, 0, 1}.Mul(Poly{400, 40, 1})}
	inner := Tustin(TF{Num: Poly{9, 3}, Den: Poly{1, 0.002}.Mul(Poly{1, 0.001})}, h)
	outer := Tustin(TF{Num: Poly{0.3, 0.1}, Den: Poly{0, 1, 0.01}}, h)
	pre := Tustin(TF{Num: Poly{1}, Den: Poly{1, 0.5}}, h)
	loops, err := NewTwoLoops(g, 0, &Law{Inner: inner, Outer: &outer, Prefilter: &pre})
	if err != nil {
		t.Fatal(err)
	}
	// The continuous loop, whose polynomial is well conditioned: the poles must agree to the order of h.
	k1 := TF{Num: Poly{9, 3}, Den: Poly{1, 0.002}.Mul(Poly{1, 0.001})}
	k2 := TF{Num: Poly{0.3, 0.1}, Den: Poly{0, 1, 0.01}}
	char := g.Den.Mul(k1.Den).Mul(k2.Den).Add(g.Num.Mul(k1.Num).Mul(k2.Den.Add(k2.Num)))
	want := append(char.Roots(), -2)
	got := loops.Poles()
	for _, w := range want {
		if real(w) > 0 {
			t.Fatalf("the continuous loop is unstable: %v", want)
		}
		best := math.Inf(1)
		for _, z := range got {
			best = math.Min(best, cmplx.Abs(cmplx.Log(z)/h-w))
		}
		if best > 0.02*cmplx.Abs(w)+0.001 {
			t.Errorf("no sampled pole near %v (%g away)", w, best)
		}
	}
	if !loops.Stable() {
		t.Errorf("called unstable: %v", got)
	}
}

// Random unstable plants with delay under random laws: eigenvalues of the blocks, the margins' verdict and Nyquist's
// count must agree, sampled slowly and fast; and a loop called stable must come to rest in the simulator, one called
// unstable must not.
func TestVerdictsAgree(t *testing.T) {
	rng := rand.New(rand.NewPCG(1, 2))
	held, lost := 0, 0
	for trial := range 150 {
		p := math.Exp(rng.NormFloat64())
		h := 0.3 / p * math.Exp(-3*rng.Float64())
		g := TF{Num: Poly{p * p}, Den: Poly{-p * p, 0, 1}.Mul(Poly{10 * p, 1}).Scale(0.1 / p), Delay: 2 * h * rng.Float64()}
		kp, td := 4*rng.Float64(), rng.Float64()/p
		outer := Tustin(TF{Num: Poly{0.3 * p, 0.5 * rng.Float64()}, Den: Poly{0, 1}}, h)
		law := &Law{Inner: Tustin(TF{Num: Poly{kp, kp * td}, Den: Poly{1, 0.05 / p}}, h), Outer: &outer}
		loops, err := NewTwoLoops(g, 0, law)
		if err != nil {
			t.Fatal(err)
		}
		largest := 0.0
		for _, z := range loops.Poles() {
			largest = math.Max(largest, cmplx.Abs(z))
		}
		stable := loops.Stable()
		poles := append(append(loops.Plant.Poles(), law.Inner.Poles()...), 1)
		unstable := 0
		for _, z := range poles[:len(poles)-1] {
			if cmplx.Abs(z) > 1 {
				unstable++
			}
		}
		if m := LoopMargins(loops.LoopAtInput, 1e-3*p, math.Pi/h, unstable, 0); m.StableNominal != stable {
			t.Errorf("trial %d: margins say %v, eigenvalues %v (largest %.6f)", trial, m.StableNominal, stable, largest)
		}
		in, k1, k2 := loops.Plant, law.Inner.SS(), outer.SS()
		n, err := NyquistCount(func(z complex128) complex128 { return in.AtPoint(z) * k1.AtPoint(z) * (1 + k2.AtPoint(z)) }, poles, h)
		if err != nil || (n.Closed == 0) != stable {
			t.Errorf("trial %d: Nyquist counts %+v (%v), eigenvalues say %v", trial, n, err, stable)
		}
		if math.Abs(largest-1) < 0.003 {
			continue // the run below would have to be very long
		}
		tr, err := Run{Plant: g, Period: h, Law: law, Steps: 6000, OutputOffset: 1e-3, Trip: [2]float64{-1e3, 1e3}}.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		end := math.Abs(tr.YTrue[len(tr.YTrue)-1])
		if came := tr.Tripped < 0 && end < 1e-6; came != stable {
			t.Errorf("trial %d: ends at %g, tripped at %d, eigenvalues say stable %v (largest %.6f)", trial, end, tr.Tripped, stable, largest)
		}
		if stable {
			held++
		} else {
			lost++
		}
	}
	if held < 20 || lost < 20 {
		t.Errorf("%d held and %d lost: the test has lost its point", held, lost)
	}
}
