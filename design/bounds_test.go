package design

import (
	"math"
	"math/cmplx"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"

	"steadyrig/data"
	"steadyrig/fit/lti"
)

func near(t *testing.T, what string, got, want, relative float64) {
	t.Helper()
	if !(math.Abs(got-want) <= relative*math.Abs(want)) {
		t.Errorf("%s: got %.12g, want %.12g within %g", what, got, want, relative)
	}
}

// Åström (2000), Limitations on control system performance, Eur. J. Control 6: least peak of S with delay.
func TestLeastPeakDelay(t *testing.T) {
	near(t, "p tau 0.1", LeastPeakDelay(1, 0.1), 1.10517091807565, 1e-12)
	near(t, "p tau 0.3", LeastPeakDelay(3, 0.1), 1.349858807576, 1e-12)
	near(t, "p tau 0.5", LeastPeakDelay(0.5, 1), 1.64872127070013, 1e-12)
	near(t, "p tau ln 2", LeastPeakDelay(1, 0.693147180559945), 2, 1e-12)
	// The sampled bound with d samples is |z|^d exactly for one real pole, and tends to e^{p tau}.
	for _, d := range []int{1, 3, 30} {
		z := math.Exp(0.3 / float64(d))
		near(t, "sampled", leastPeak(d, []complex128{complex(z, 0)}, nil), math.Exp(0.3), 1e-10)
		near(t, "sampled, by matrices", leastPeakPick(d, []complex128{complex(z, 0)}, nil), math.Exp(0.3), 1e-10)
	}
}

// The delay of p tau = 0.3 approximated by Padé's zeros of order 1 to 4, as mirrored poles are: the values of the
// Nevanlinna-Pick problem (Pick matrices of 80 digits), with the complex zeros of orders 2 to 4. The Möbius map
// s = (1 - w)/(1 + w), w = 1/z, keeps the problem as it is; the zero at infinity goes to the circle and costs nothing.
func TestLeastPeakPick(t *testing.T) {
	toZ := func(s complex128) complex128 { return (1 + s) / (1 - s) }
	for order, want := range map[int]float64{1: 23. / 17, 2: 1.3498542274052, 3: 1.349858810515, 4: 1.349858807575} {
		var zeros []complex128
		for _, s := range lti.Pade(0.3, order).Zeros() {
			zeros = append(zeros, toZ(s/4)) // time scaled by 4, pole and zeros alike
		}
		// 1e-8: order 4 has a Gram matrix with condition 1e6.
		near(t, "Padé zeros, by matrices", leastPeakPick(0, []complex128{toZ(0.25)}, zeros), want, 1e-8)
		near(t, "Padé zeros", leastPeak(0, []complex128{toZ(0.25)}, zeros), want, 1e-12)
	}
}

// Two real poles and d = 2 by hand: with B the Blaschke product, g0 = 1/B(0) = z1 z2 and g1 = g0 sum(z - 1/z), the
// norm of the Toeplitz matrix [[g0, 0], [g1, g0]] is z1 z2 e^{asinh(sum/2)}: less than (z1 z2)^2.
func TestLeastPeakTwoPoles(t *testing.T) {
	z1, z2 := 1.3, 1.7
	sum := z1 - 1/z1 + z2 - 1/z2
	near(t, "d = 1", leastPeak(1, []complex128{complex(z1, 0), complex(z2, 0)}, nil), z1*z2, 1e-12)
	got := leastPeak(2, []complex128{complex(z1, 0), complex(z2, 0)}, nil)
	near(t, "d = 2", got, z1*z2*math.Exp(math.Asinh(sum/2)), 1e-12)
	if !(got < z1*z2*z1*z2) {
		t.Errorf("d = 2: %v is not below the product", got)
	}
	pair := []complex128{complex(1.1, 0.6), complex(1.1, -0.6)}
	near(t, "pair", leastPeak(1, pair, nil), 1.1*1.1+0.36, 1e-12)
}

// Freudenberg & Looze (1985), IEEE Trans. Automatic Control 30, 555-565.
func TestLeastPeakZero(t *testing.T) {
	for ratio, want := range map[float64]float64{2: 3, 3: 2, 5: 1.5, 6: 1.4} {
		near(t, "formula", LeastPeakZero(2, 2*ratio), want, 1e-12)
		// The same from the sampled bound in a Möbius map.
		toZ := func(s float64) complex128 { return complex((1+s)/(1-s), 0) }
		near(t, "Pick", leastPeakPick(0, []complex128{toZ(0.1)}, []complex128{toZ(0.1 * ratio)}), want, 1e-10)
	}
}

// Stein (2003), Respect the unstable, IEEE Control Systems Mag. 23(4): the X-29's floor.
func TestLeastPeakBandwidth(t *testing.T) {
	near(t, "X-29", LeastPeakBandwidth(6, 40), 1.60197765128236, 1e-12)
}

// Glover (1986); Havre & Skogestad (2003): the floor of |K S|, and controllers that attain it at all frequencies.
func TestLeastEffort(t *testing.T) {
	first := lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-1, 1}}
	near(t, "1/(s-1)", LeastEffort(first), 2, 1e-12)
	p := 3.0
	second := lti.TF{Num: lti.Poly{p * p}, Den: lti.Poly{-p * p, 0, 1}}
	near(t, "p^2/(s^2-p^2)", LeastEffort(second), 4, 1e-12)
	for _, w := range []float64{0.01, 0.5, 3, 40} {
		s := complex(0, w)
		near(t, "K = 2", cmplx.Abs(2/(1+2*first.At(s))), 2, 1e-12)
		k := 4 * (s + complex(p, 0)) / (s + complex(3*p, 0))
		near(t, "K = 4(s+p)/(s+3p)", cmplx.Abs(k/(1+k*second.At(s))), 4, 1e-12)
	}
	if !math.IsNaN(LeastEffort(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{2, -2, 1}})) {
		t.Error("a complex pair has no such floor here")
	}
}

// Youla, Bongiorno & Lu (1974), Automatica 10, 159-173.
func TestStronglyStabilisable(t *testing.T) {
	for _, c := range []struct {
		name         string
		zeros, poles []complex128
		want         bool
	}{
		{"1/(s-1)", nil, []complex128{1}, true},
		{"(s-5)/((s-1)(s+10))", []complex128{5}, []complex128{1, -10}, true},
		{"(s-1)/((s-5)(s+10))", []complex128{1}, []complex128{5, -10}, false},
		{"(s-1)/((s-5)(s-6)(s+10))", []complex128{1}, []complex128{5, 6, -10}, true},
	} {
		if got := StronglyStabilisable(fromRoots(3, c.zeros, c.poles, 0)); got != c.want {
			t.Errorf("%s: %v", c.name, got)
		}
	}
	r := testRigs()[1]
	r.truth = fromRoots(5, []complex128{1}, []complex128{3, -10}, 0)
	r.spec.PeakSensitivity, r.spec.InputNoise = 9, 9
	if _, err := Design(t.Context(), r.model(t), r.rig(), Options{}); err == nil || !strings.Contains(err.Error(), "parity") {
		t.Errorf("%v", err)
	}
}

// Kwakernaak & Sivan (1972), Linear Optimal Control Systems.
func TestLeastEnergy(t *testing.T) { near(t, "p 2, b 4", LeastEnergy(2, 4, 1), 0.25, 1e-12) }

// Hu & Lin (2001); Stein (2003): the controllable set, in formula and in the simulated saturating loop, whose gain
// K > p/b has the whole set as its region of attraction. The sampled plant x+ = a x + b u with a = 1.25, b = 0.5 has
// the set |x| < b U/(a - 1) = 2 too.
func TestReach(t *testing.T) {
	from, to := Reach(2, 4, -1, 1, 0)
	near(t, "low end", from, -2, 1e-12)
	near(t, "high end", to, 2, 1e-12)
	from, to = Reach(2, -4, -1, 3, 0.1)
	near(t, "unequal, negative gain, delay: low end", from, -2*math.Exp(-0.2), 1e-12)
	near(t, "unequal, negative gain, delay: high end", to, 6*math.Exp(-0.2), 1e-12)

	a := math.Log(1.25)
	for _, c := range []struct {
		p, b, period float64
	}{{2, 4, 0.01}, {a, 2 * a, 1}} {
		law := &lti.Law{Inner: lti.Gain(1.3*c.p/c.b, c.period), InputLimits: [2]float64{-1, 1}}
		plant := lti.TF{Num: lti.Poly{c.b}, Den: lti.Poly{-c.p, 1}}
		_, edge := Reach(c.p, c.b, -1, 1, 0)
		for _, side := range []float64{-1, 1} {
			for _, share := range []float64{0.99, 1.01} {
				tr, err := lti.Run{Plant: plant, Period: c.period, Law: law, Steps: 4000, OutputOffset: side * share * edge}.Simulate()
				if err != nil {
					t.Fatal(err)
				}
				back := math.Abs(tr.YTrue[len(tr.YTrue)-1]) < 0.1
				if back != (share < 1) {
					t.Errorf("p %v, offset %v of the edge: came back %v", c.p, side*share, back)
				}
			}
		}
	}
}

// The least noise at the input against the linear-quadratic Gaussian law that minimises it, from Riccati equations:
// control with no weight on the state, estimation with no process noise, covariance by Lyapunov's equation. One real
// pole has the closed form (a^2 - 1)^1.5/(a b).
func TestLeastNoise(t *testing.T) {
	near(t, "a 1.25, b 0.5", leastNoise(lti.Poly{0, 0.5}, lti.Poly{1, -1.25}, []complex128{1.25}), math.Pow(1.25*1.25-1, 1.5)/(1.25*0.5), 1e-12)
	for name, g := range map[string]lti.TF{
		"lag":      fromRoots(3, nil, []complex128{2, -5}, 0),
		"pair":     fromRoots(8, []complex128{-3}, []complex128{complex(0.7, 4), complex(0.7, -4), -9}, 0),
		"two":      fromRoots(5, nil, []complex128{1, 2.5, -6}, 0),
		"delay":    fromRoots(3, nil, []complex128{2, -5}, 0.13),
		"rhp zero": fromRoots(3, []complex128{14}, []complex128{2, -5}, 0),
	} {
		const period = 0.05
		d, err := lti.ZOHTF(g, period)
		if err != nil {
			t.Fatal(err)
		}
		var poles []complex128
		for _, s := range g.Poles() {
			if real(s) > 0 {
				poles = append(poles, cmplx.Exp(s*period))
			}
		}
		got := leastNoise(d.Num, d.Den, poles)
		ss, err := lti.ZOH(g, period)
		if err != nil {
			t.Fatal(err)
		}
		n := ss.Order()
		tiny := mat.NewDense(n, n, nil)
		for i := range n {
			tiny.Set(i, i, 1e-12)
		}
		_, f, err := lti.DARE(ss.A, ss.B, tiny, mat.NewDense(1, 1, []float64{1}))
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		p, _, err := lti.DARE(ss.A.T(), ss.C.T(), tiny, mat.NewDense(1, 1, []float64{1}))
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		// Filter gain with the present measurement: M = P C'/(C P C' + 1). State (x, x_hat before the measurement):
		// u = -F (x_hat + M (y - C x_hat)), y = C x + v.
		var m mat.Dense
		m.Mul(p, ss.C.T())
		var cpc mat.Dense
		cpc.Mul(ss.C, &m)
		m.Scale(1/(cpc.At(0, 0)+1), &m)
		var mc, fm, fmc mat.Dense
		mc.Mul(&m, ss.C)
		fm.Mul(f, &m)
		fmc.Mul(f, &mc)
		// u = -F(I - M C) x_hat - F M C x - F M v.
		ku, kx := mat.NewDense(1, n, nil), mat.NewDense(1, n, nil)
		ku.Sub(&fmc, f)
		kx.Scale(-1, &fmc)
		kv := -fm.At(0, 0)
		a, b := mat.NewDense(2*n, 2*n, nil), mat.NewDense(2*n, 1, nil)
		var bu, bx, keep, amc, aik mat.Dense
		bu.Mul(ss.B, ku)
		bx.Mul(ss.B, kx)
		keep.Sub(eye(n), &mc)
		amc.Mul(ss.A, &mc)
		aik.Mul(ss.A, &keep)
		var am mat.Dense
		am.Mul(ss.A, &m)
		for i := range n {
			for j := range n {
				a.Set(i, j, ss.A.At(i, j)+bx.At(i, j))
				a.Set(i, n+j, bu.At(i, j))
				a.Set(n+i, j, amc.At(i, j)+bx.At(i, j))
				a.Set(n+i, n+j, aik.At(i, j)+bu.At(i, j))
			}
			b.Set(i, 0, ss.B.At(i, 0)*kv)
			b.Set(n+i, 0, am.At(i, 0)+ss.B.At(i, 0)*kv)
		}
		var q mat.Dense
		q.Mul(b, b.T())
		x, err := lti.DiscreteLyapunov(a, &q)
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		c := mat.NewDense(1, 2*n, nil)
		for j := range n {
			c.Set(0, j, kx.At(0, j))
			c.Set(0, n+j, ku.At(0, j))
		}
		var cx, v mat.Dense
		cx.Mul(c, x)
		v.Mul(&cx, c.T())
		// 1e-4: the weights of 1e-12 on what should have none.
		near(t, name, got, math.Sqrt(v.At(0, 0)+kv*kv), 1e-4)
	}
}

func eye(n int) *mat.Dense {
	d := mat.NewDense(n, n, nil)
	for i := range n {
		d.Set(i, i, 1)
	}
	return d
}

// A delay that makes the asked peak sensitivity impossible is refused, with the nearest spec; that one is in reach.
func TestOutOfReach(t *testing.T) {
	var r testRig
	for _, c := range testRigs() {
		if c.name == "exothermic" {
			r = c
		}
	}
	r.truth.Delay = 45 // p tau = 0.9 and the sampling on top: e^0.9 = 2.46 > 2.2
	m, rig := r.model(t), r.rig()
	bounds, err := Bounds(m, rig)
	if err != nil {
		t.Fatal(err)
	}
	refusal := outOfReach(bounds)
	if refusal == nil {
		t.Fatal("accepted")
	}
	msg := refusal.Error()
	for _, want := range []string{BoundSampled, "asked 2.2", "more in the file", "nearest spec within reach is peak_sensitivity = ", "delay"} {
		if !strings.Contains(msg, want) {
			t.Errorf("%q lacks %q", msg, want)
		}
	}
	for _, b := range bounds {
		if b.Name == BoundDelay {
			near(t, "e^(p tau)", b.Value, math.Exp(0.9), 1e-9)
		}
		if b.Name == BoundSampled && !(b.Value > math.Exp(0.9)) {
			t.Errorf("sampling cannot help: %v", b.Value)
		}
	}
	// One number is named, the same in every bound, and it satisfies all.
	_, after, _ := strings.Cut(msg, "peak_sensitivity = ")
	text := strings.TrimRight(strings.Fields(after)[0], ";")
	if n := strings.Count(msg, "peak_sensitivity = "); n != 1 {
		t.Errorf("%d values of one key: %s", n, msg)
	}
	for _, b := range bounds {
		if !b.OK && !strings.Contains(b.Advice, "peak_sensitivity = "+text+";") {
			t.Errorf("%s: %q, want %s", b.Name, b.Advice, text)
		}
	}
	nearest, err := strconv.ParseFloat(text, 64)
	if err != nil {
		t.Fatal(err)
	}
	rig.Spec.PeakSensitivity = nearest
	if bounds, err = Bounds(m, rig); err != nil || outOfReach(bounds) != nil {
		t.Errorf("the nearest spec, peak_sensitivity = %v, is not within reach: %v %v", nearest, err, outOfReach(bounds))
	}
	// Far beyond any spec a figure says nothing.
	rig.Loop.ComputeDelay = 900
	if bounds, err = Bounds(m, rig); err != nil {
		t.Fatal(err)
	}
	if msg = outOfReach(bounds).Error(); !strings.Contains(msg, "no peak sensitivity below 10 is in reach") || strings.Contains(msg, "e+") {
		t.Error(msg)
	}
}

func TestBoundsOfActuator(t *testing.T) {
	find := func(bounds []Bound, name string) Bound {
		for _, b := range bounds {
			if b.Name == name {
				return b
			}
		}
		t.Fatalf("no bound %q in %+v", name, bounds)
		return Bound{}
	}
	r := testRigs()[1] // balanced
	rig := r.rig()
	rig.Spec.Kick = 13 // more than the 12 there are
	bounds, err := Bounds(r.model(t), rig)
	if err != nil {
		t.Fatal(err)
	}
	if b := find(bounds, BoundKickInput); b.OK || !strings.Contains(b.Advice, "kick = ") {
		t.Errorf("kick: %+v", b)
	}
	// b u/p with the residue 4/(2.2 + 2.6) of the pole 2.2, U = 12, 5 ms of delay, less three deviations of noise
	// and of white input disturbance of 0.05, of which the mode of factor a a sample takes (a - 1)/(a + 1) in variance.
	a := math.Exp(2.2 * 0.03)
	taken := math.Hypot(find(bounds, BoundNoise).Value, 0.05*math.Sqrt((a-1)/(a+1)))
	want := 4 / 4.8 / 2.2 * (12 - 3*taken) * math.Exp(-2.2*0.005)
	// 1e-4: the split of the noise into its parts is fitted.
	near(t, "reach", find(bounds, BoundReachUp).Value, want, 1e-4)
	near(t, "reach", find(bounds, BoundReachDown).Value, want, 1e-4)
	rig.Spec.Kick, rig.Spec.Step = 0, 5.5
	rig.Limits.Input = &[2]float64{-12, 5}
	if bounds, err = Bounds(r.model(t), rig); err != nil {
		t.Fatal(err)
	}
	for _, name := range []string{BoundStepInput, BoundTrip} {
		if b := find(bounds, name); b.OK || !strings.Contains(b.Advice, "step = ") {
			t.Errorf("%s: %+v", name, b)
		}
	}
	if _, err := Bounds(r.model(t), &data.Rig{}); err == nil {
		t.Error("a rig without [loop] was accepted")
	}
}
