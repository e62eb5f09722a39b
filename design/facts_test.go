package design

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Published facts about loops, through the functions that judge loops here. Where a number was computed anew and not
// read in the source, the comment says so.

func response(g lti.TF) func(float64) complex128 {
	return func(w float64) complex128 { return g.At(complex(0, w)) }
}

// Skogestad & Postlethwaite (2005), Multivariable Feedback Control, sec. 2.4: a peak of |T| of Mt lets the gain fall to
// 1 - 1/Mt. L = K/(s-1) attains that: |T| is largest at zero, K/(K-1), and the gain may fall to 1/K. The phase may turn by
// 2 asin(1/(2 Mt)) at the least.
func TestMarginsByComplementarySensitivity(t *testing.T) {
	for _, c := range []struct{ mt, down, phase float64 }{
		{1.25, 0.2, 47.1563569564037}, {1.5, 0.333333333333, 38.9424412689814}, {2, 0.5, 28.9550243718598},
	} {
		k := c.mt / (c.mt - 1)
		m := lti.LoopMargins(response(lti.TF{Num: lti.Poly{k}, Den: lti.Poly{-1, 1}}), 1e-4, 1e4, 1)
		near(t, "peak of T", m.PeakT, c.mt, 1e-7) // its peak is at zero, the grid begins at 1e-4
		near(t, "gain down", m.GainDown, c.down, 1e-11)
		if got := m.Phase * 180 / math.Pi; !(got >= c.phase) {
			t.Errorf("Mt %v: phase margin %v, at least %v is guaranteed", c.mt, got, c.phase)
		}
	}
}

// Kalman (1964), Safonov & Athans (1977), IEEE Trans. Automatic Control 22, 173-179: state feedback by least squares on
// 1/(s-1), weight q on the state, has |1 + L| >= 1 everywhere, the gain may at least halve and the phase turn by 60
// degrees, with q = 0 attaining both. Phases and gains: closed form, computed anew.
func TestMarginsOfLeastSquaresFeedback(t *testing.T) {
	for _, c := range []struct{ q, phase, down float64 }{
		{0, 60, 0.5}, {1, 65.5301994792978, 0.414213562373095}, {3, 70.5287793655093, 1. / 3}, {8, 75.5224878140701, 0.25},
	} {
		one := mat.NewDense(1, 1, []float64{1})
		_, k, err := lti.CARE(one, one, mat.NewDense(1, 1, []float64{c.q}), one)
		if err != nil {
			t.Fatal(err)
		}
		near(t, "gain", k.At(0, 0), 1+math.Sqrt(1+c.q), 1e-12)
		m := lti.LoopMargins(response(lti.TF{Num: lti.Poly{k.At(0, 0)}, Den: lti.Poly{-1, 1}}), 1e-4, 1e4, 1)
		near(t, "phase", m.Phase*180/math.Pi, c.phase, 1e-10)
		near(t, "gain down", m.GainDown, c.down, 1e-10)
		if !(m.PeakS <= 1+1e-9) || !m.StableNominal || !math.IsInf(m.GainUp, 1) {
			t.Errorf("q %v: %+v", c.q, m)
		}
	}
}

// The sampled law has less: min |1 + L| is at least sqrt(r/(r + b^2 X)), not 1 (Shaked (1986), IEEE Trans. Automatic
// Control 31; Anderson & Moore (1990)). x+ = 1.25 x + 0.5 u; values computed anew. With q = 0 |1 + L| is 1/a everywhere:
// no loop has a lower peak of |S| than a, which is the limit of the sampled loop.
func TestMarginsOfSampledLeastSquaresFeedback(t *testing.T) {
	const a, b = 1.25, 0.5
	one := mat.NewDense(1, 1, []float64{1})
	for _, c := range []struct{ q, bound, least, down, up float64 }{
		{1, 0.698347647979310, 0.715383020799, 0.390388203202, 3.51349382882}, {0, 0.8, 0.8, 0, 0},
	} {
		x, k, err := lti.DARE(mat.NewDense(1, 1, []float64{a}), mat.NewDense(1, 1, []float64{b}), mat.NewDense(1, 1, []float64{c.q}), one)
		if err != nil {
			t.Fatal(err)
		}
		l := lti.DTF{Num: lti.Poly{0, b * k.At(0, 0)}, Den: lti.Poly{1, -a}, Period: 1}
		m := lti.LoopMargins(l.At, 1e-4, math.Pi, 1)
		near(t, "bound", math.Sqrt(1/(1+b*b*x.At(0, 0))), c.bound, 1e-11)
		near(t, "least |1 + L|", 1/m.PeakS, c.least, 1e-9)
		if c.up > 0 {
			near(t, "gain up", m.GainUp, c.up, 1e-9)
			near(t, "gain down", m.GainDown, c.down, 1e-9)
		} else {
			near(t, "least peak of S", leastPeak(1, []complex128{a}, nil), m.PeakS, 1e-9)
		}
	}
}

// Vinnicombe (1993), IEEE Trans. Automatic Control 38, 1371-1383: what a plant's change by the nu-gap takes of the margin
// b, asin b(P2) >= asin b(P1) - asin gap, here with equality; and what b says of gain and phase (Glover, Vinnicombe &
// Papageorgiou (2000)): factors of (1+b)/(1-b) either way, 2 asin b. Values computed anew.
func TestMarginLossByNuGap(t *testing.T) {
	margin := func(k float64, p lti.TF) float64 {
		worst, _ := lti.Peak(func(w float64) complex128 {
			g := p.At(complex(0, w))
			return complex(math.Sqrt((1+k*k)*(1+real(g*cmplx.Conj(g))))/cmplx.Abs(1+complex(k, 0)*g), 0)
		}, 1e-6, 1e4)
		return 1 / worst
	}
	k := 1 + math.Sqrt2
	p1, p2 := lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-1, 1}}, lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-1.2, 1}}
	gap, _, err := lti.NuGap(p1, p2)
	if err != nil {
		t.Fatal(err)
	}
	b1, b2 := margin(k, p1), margin(k, p2)
	near(t, "margin of the first", b1, 0.382683432365, 1e-9)
	near(t, "gap", gap, 0.090535746043, 1e-9)
	near(t, "margin of the second", b2, 0.297467707791, 1e-9)
	near(t, "equality", math.Sin(math.Asin(b1)-math.Asin(gap)), b2, 1e-9)
	for _, c := range []struct{ k, rate float64 }{{k, 1}, {2, 1}, {8, 3}} {
		p := lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-c.rate, 1}}
		b := margin(c.k, p)
		m := lti.LoopMargins(func(w float64) complex128 { return complex(c.k, 0) * p.At(complex(0, w)) }, 1e-4, 1e4, 1)
		if !(m.GainUp >= (1+b)/(1-b)) || !(m.GainDown <= (1-b)/(1+b)) || !(m.Phase >= 2*math.Asin(b)) {
			t.Errorf("gain %v: b %v promises more than %+v", c.k, b, m)
		}
	}
}

// Åström (2000), Limitations on control system performance, Eur. J. Control 6: with a loop gain of slope -1 and a phase
// margin of 45 degrees a zero z asks for a crossover of z tan(pi/8) at most, a pole p for p/tan(pi/8) at least, both for
// z/p of 1/tan^2(pi/16) at least. The loops that attain these: an integrator and the all-pass parts.
func TestCrossoverInequalities(t *testing.T) {
	for _, c := range []struct {
		name      string
		num, den  lti.Poly // of the all-pass part
		crossover float64
		unstable  int
	}{
		{"zero", lti.Poly{1, -1}, lti.Poly{1, 1}, 0.414213562373095, 0},
		{"pole", lti.Poly{1, 1}, lti.Poly{-1, 1}, 2.41421356237310, 1},
		{"zero and pole", lti.Poly{25.2741423690882, -1}.Mul(lti.Poly{1, 1}), lti.Poly{25.2741423690882, 1}.Mul(lti.Poly{-1, 1}), math.Sqrt(25.2741423690882), 1},
	} {
		l := lti.TF{Num: c.num.Scale(c.crossover), Den: c.den.Mul(lti.Poly{0, 1})}
		m := lti.LoopMargins(response(l), 1e-4, 1e5, c.unstable, 0)
		near(t, c.name+": crossover", m.Crossover, c.crossover, 1e-9)
		near(t, c.name+": phase margin", m.Phase*180/math.Pi, 45, 1e-9)
		n, err := lti.NyquistCount(l.At, l.Poles(), 0)
		if err != nil || n.Closed != 0 || !m.StableNominal {
			t.Errorf("%s: %+v, %v", c.name, n, err)
		}
	}
}

// Routh-Hurwitz on K/((s-1)(0.1s+1)(0.05s+1)): at K = 25.65 the poles are -29 and ±i sqrt(170); the gain range ends there.
// With a delay tau a gain alone holds 1/(s-p) only while p tau < 1 (Silva, Datta & Bhattacharyya (2005)), and with one
// whole sample of delay only while p h < ln 2 (Jury): the limit of |S| is then 2 for a sampled loop with that delay alone.
func TestEndsOfGainRanges(t *testing.T) {
	den := lti.Poly{-1, 1}.Mul(lti.Poly{1, 0.1}).Mul(lti.Poly{1, 0.05})
	poles := den.Add(lti.Poly{25.65}).Roots()
	want := []complex128{-29, complex(0, 13.0384048104053), complex(0, -13.0384048104053)}
	for _, w := range want {
		at := math.Inf(1)
		for _, p := range poles {
			at = math.Min(at, cmplx.Abs(p-w))
		}
		if at > 1e-9 {
			t.Errorf("no pole at %v: %v", w, poles)
		}
	}
	holds := func(g lti.TF, period float64) bool {
		for _, k := range []float64{1.002, 1.006, 1.01, 1.02, 1.04, 1.08, 1.2, 1.5, 2, 3, 5, 10} {
			loops, err := lti.NewTwoLoops(g, 0, &lti.Law{Inner: lti.Gain(k, period)})
			if err != nil {
				t.Fatal(err)
			}
			if stable(loops) {
				return true
			}
		}
		return false
	}
	late := func(tau float64) lti.TF { return lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-1, 1}, Delay: tau} }
	// The hold adds half a sample of delay, 0.02.
	if !holds(late(0.95-0.02), 0.04) || holds(late(1.02-0.02), 0.04) {
		t.Error("p tau = 0.95 is held by a gain, 1.02 is not")
	}
	if h := 0.99 * math.Ln2; !holds(late(h), h) {
		t.Error("a sample of delay, p h just below ln 2: not held")
	}
	if h := 1.01 * math.Ln2; holds(late(h), h) {
		t.Error("a sample of delay, p h just above ln 2: held")
	}
	near(t, "|S| of one sample of delay at p h = ln 2", LeastPeakDelay(1, math.Ln2), 2, 1e-12)
}

// Anderson, Jury & Mansour (1987), IEEE Trans. Automatic Control 32, after Kharitonov (1978): all cubics s^3 + a2 s^2 +
// a1 s + a0 of a box are stable if and only if min a2 min a1 > max a0. a2 in [2, 3], a1 in [3, 5], a0 in [1, 5.9] are, with
// a worst real part of -0.00720192; up to 6.1 they are not, +0.00708528 (computed anew).
func TestIntervalCubic(t *testing.T) {
	worst := func(top float64) float64 {
		rnd := rand.New(rand.NewPCG(1, 1))
		w := math.Inf(-1)
		look := func(a2, a1, a0 float64) {
			for _, p := range (lti.Poly{a0, a1, a2, 1}).Roots() {
				w = math.Max(w, real(p))
			}
		}
		for range 2000 {
			look(2+rnd.Float64(), 3+2*rnd.Float64(), 1+(top-1)*rnd.Float64())
		}
		for _, a2 := range []float64{2, 3} {
			for _, a1 := range []float64{3, 5} {
				for _, a0 := range []float64{1, top} {
					look(a2, a1, a0)
				}
			}
		}
		return w
	}
	near(t, "stable box", worst(5.9), -0.00720192, 1e-5)
	near(t, "unstable box", worst(6.1), 0.00708528, 1e-5)
	// As loops: a0 is the gain about 1/(s^3 + a2 s^2 + a1 s), and the upper gain margin at the worst corner is 6/a0.
	m := lti.LoopMargins(response(lti.TF{Num: lti.Poly{5.9}, Den: lti.Poly{0, 3, 2, 1}}), 1e-4, 1e4, 0, 0)
	near(t, "gain margin", m.GainUp, 6/5.9, 1e-9)
}

// Back-calculation (Åström & Hägglund (1995); Fertik & Ross (1967)): u = Kp e + I, I' = Ki e + (usat - u)/Tt ends, for a
// constant error, at I = usat - Kp e + Tt Ki e and u = usat + Tt Ki e before the limit. A law here takes in what really
// acted at each sample, which is that with forward differences and Tt = T: Kp 2, Ki 4, e 1, limit 1.
func TestHeldOutputIsBackCalculation(t *testing.T) {
	const period, kp, ki = 0.01, 2.0, 4.0
	law := lti.Law{Inner: lti.DTF{Num: lti.Poly{kp, ki*period - kp}, Den: lti.Poly{1, -1}, Period: period}, InputLimits: [2]float64{-1, 1}}
	integral := 0.0
	s := law.Start()
	for k := range 50 {
		u := kp + integral
		got := s.Step(1, 0)
		if got != math.Min(1, u) {
			t.Fatalf("step %d: %v, by hand %v", k, got, math.Min(1, u))
		}
		integral += period*ki + math.Min(1, u) - u
	}
	near(t, "the integral's end", integral, 1-kp+period*ki, 1e-12)
	// With the error gone the law puts out the integral.
	near(t, "output without error", s.Step(0, 0), 1-kp+period*ki, 1e-12)
}

// A badly scaled equation of the DARE collection (Benner, Laub & Mehrmann (1995), SPC 95_23; number from memory): A = [[0,
// e], [0, 0]], B = [0; 1], Q = I, R = 1 has X = diag(1, 1 + e^2), K = 0; and the least-squares law for x” = 9 x + u.
func TestScaledRiccati(t *testing.T) {
	const e = 1e6
	eye2, one := mat.NewDense(2, 2, []float64{1, 0, 0, 1}), mat.NewDense(1, 1, []float64{1})
	x, k, err := lti.DARE(mat.NewDense(2, 2, []float64{0, e, 0, 0}), mat.NewDense(2, 1, []float64{0, 1}), eye2, one)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "X22", x.At(1, 1), 1000000000001, 1e-12)
	near(t, "X11", x.At(0, 0), 1, 1e-9)
	if math.Abs(k.At(0, 0)) > 1e-9 || math.Abs(k.At(0, 1)) > 1e-9 || math.Abs(x.At(0, 1)) > 1e-6 {
		t.Errorf("K %v, X12 %v", mat.Formatted(k), x.At(0, 1))
	}
	// q = (1, 0): X12 = 9 + sqrt(82), X22 = sqrt(2 X12), X11 = X22 (X12 - 9) (algebra after Anderson & Moore).
	x, k, err = lti.CARE(mat.NewDense(2, 2, []float64{0, 1, 9, 0}), mat.NewDense(2, 1, []float64{0, 1}), mat.NewDense(2, 2, []float64{1, 0, 0, 0}), one)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "X11", x.At(0, 0), 54.4158355872124, 1e-12)
	near(t, "K1", k.At(0, 0), 18.0553851381374, 1e-12)
	near(t, "K2", k.At(0, 1), 6.00922376653381, 1e-12)
	// Least energy is its Q = 0: x(0) = 1 on x' = p x + b u costs 2 p/b^2 (Kwakernaak & Sivan (1972)).
	x, _, err = lti.CARE(mat.NewDense(1, 1, []float64{2}), mat.NewDense(1, 1, []float64{4}), mat.NewDense(1, 1, nil), one)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "least energy", LeastEnergy(2, 4, 1), x.At(0, 0), 1e-12)
}

// A first-order loop is within 2 % after ln 50 = 3.91202300542815 time constants and a second-order one under the
// envelope exp(-s t)/sqrt(1 - z^2); its peak comes at pi/(w0 sqrt(1 - z^2)) (any control textbook).
func TestTextbookSettlingAndPeakTime(t *testing.T) {
	const period = 1e-3
	step := func(g lti.TF, n int) []float64 {
		d, err := lti.ZOHTF(g, period)
		if err != nil {
			t.Fatal(err)
		}
		u := make([]float64, n)
		for i := range u {
			u[i] = 1
		}
		return d.Filter(nil, u)
	}
	y := step(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{1, 1}}, 6000)
	last := 0
	for k, v := range y {
		if math.Abs(v-1) > 0.02 {
			last = k
		}
	}
	near(t, "ln 50", float64(last+1)*period, 3.91202300542815, 3e-4)
	for _, c := range []struct{ z, overshoot float64 }{{0.4559498107691261, 0.2}, {0.7, 0.04598791026}, {0.4037127519434207, 0.25}} {
		root := math.Sqrt(1 - c.z*c.z)
		at, peak := 0, 0.0
		for k, v := range step(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{1, 2 * c.z, 1}}, 20000) {
			if v > peak {
				at, peak = k, v
			}
			if tt := float64(k) * period; math.Abs(v-1) > math.Exp(-c.z*tt)/root+1e-9 {
				t.Fatalf("z %v: %v at %v s is outside the envelope", c.z, v, tt)
			}
		}
		near(t, "overshoot", peak-1, c.overshoot, 1e-5)
		near(t, "peak time", float64(at)*period, math.Pi/root, 1e-3)
	}
}
