package design

import (
	"math"
	"math/big"
	"math/cmplx"
	"math/rand/v2"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// hiddenRig is a rig whose trips and limits lie many e-folds away.
func hiddenRig(plant lti.TF, period float64) testRig {
	r := testRig{
		name: "hidden", truth: plant, relative: 0.003, period: period, sensor: 1e-3, disturbance: 2e-3,
		input: [2]float64{-3000, 3000}, output: &[2]float64{-800, 1000},
	}
	r.spec = data.Spec{Step: 0.1, Overshoot: 0.2, Settling: 2, Band: 0.05, PeakSensitivity: 3}
	return r
}

func parsed(t *testing.T, text string, period float64) lti.DTF {
	t.Helper()
	b, err := ParseController(text)
	if err == nil {
		err = b.complete(period)
	}
	if err != nil {
		t.Fatal(err)
	}
	return b.lti(period)
}

// The seconds that a refusal names are those of the simulator: for a unit step at the plant input the first sample past
// the level, within a fiftieth of an e-fold; for noise the time at which the standard deviation over 100 runs is the
// level. Its relative error is 1/sqrt(2 runs), of which four are allowed: 0.28 e-folds, of some ten.
func TestGrowthTimesAgreeWithSimulation(t *testing.T) {
	const period = 0.004
	for _, c := range []struct {
		name         string
		plant        lti.TF
		inner, outer string
		pole, zero   string
		signal       string
		level        float64
		moved        bool
	}{
		{name: "1 % off", plant: fromRoots(4, nil, []complex128{1}, 0), inner: "(s-1.01)/(s+1)", outer: "(s+0.5)/s", pole: "plant", zero: "inner", signal: "output", level: 800},
		{name: "exact", plant: fromRoots(4, nil, []complex128{1}, 0), inner: "(s-1)/(s+1)", pole: "plant", zero: "inner", signal: "output", level: 800},
		{name: "two poles, the other way, late", plant: fromRoots(-9, nil, []complex128{3, -4}, 0.005), inner: "-2(s-2.97)/(0.02s+1)", pole: "plant", zero: "inner", signal: "output", level: 800},
		{name: "zero of 1 + K2", plant: fromRoots(4, nil, []complex128{1}, 0), inner: "1", outer: "-1.005/s", pole: "plant", zero: "1 + outer", signal: "output", level: 800},
		{name: "pair", plant: fromRoots(20, []complex128{-6}, []complex128{complex(0.8, 5), complex(0.8, -5), -9}, 0), inner: "(s^2-1.61s+25.7)/((s+8)(s+20))", pole: "plant", zero: "inner", signal: "output", level: 800},
		{name: "unstable controller on a right-half-plane zero", plant: fromRoots(-1, []complex128{2}, []complex128{-1, -3}, 0), inner: "0.5(s+1)/(s-2)", pole: "inner", zero: "plant", signal: "input", level: 3000},
		{name: "held, though the zero is in the region", plant: fromRoots(4, nil, []complex128{1}, 0), inner: "5.75(s-0.8)/(s-20)", pole: "plant", zero: "inner", signal: "output", level: 800, moved: true},
	} {
		t.Run(c.name, func(t *testing.T) {
			r := hiddenRig(c.plant, period)
			m := r.model(t)
			for _, s := range c.plant.Zeros() {
				m.Zeros = append(m.Zeros, ident.Root{Re: real(s), Im: imag(s), ReSD: 0.01, Re95: ident.Interval{Lo: real(s) - 0.02, Hi: real(s) + 0.02}, Unstable: real(s) > 0, ProbabilityUnstable: 1})
			}
			p, err := newProblem(m, r.rig())
			if err != nil {
				t.Fatal(err)
			}
			law := &lti.Law{Inner: parsed(t, c.inner, period)}
			if c.outer != "" {
				outer := parsed(t, c.outer, period)
				law.Outer = &outer
			}
			found, refusal := p.hidden(law)
			if found == nil || found.PoleOf != c.pole || found.ZeroOf != c.zero {
				t.Fatalf("found %+v", found)
			}
			g := found.Growth
			if g == nil || g.Signal != c.signal || g.Level != c.level || g.Moved != c.moved || g.ByUnit == nil || g.ByNoise == nil {
				t.Fatalf("growth %+v", g)
			}
			t.Log(refusal)
			plant := c.plant
			if c.moved {
				plant = fromRoots(4, nil, []complex128{complex(found.Zero[0], 0)}, 0)
			}
			efold := 1 / g.Rate[0]
			n := 2 * int(math.Max(*g.ByUnit, *g.ByNoise)/period)
			shape, err := m.Colour()
			if err != nil {
				t.Fatal(err)
			}
			run := lti.Run{Plant: plant, Period: period, Law: law, Steps: n, InputDisturbance: make([]float64, n)}
			for k := range run.InputDisturbance {
				run.InputDisturbance[k] = 1
			}
			signal := func(tr *lti.Trace) []float64 {
				if c.signal == "input" {
					return tr.U
				}
				return tr.YTrue
			}
			var sim lti.Simulator
			var tr lti.Trace
			if err := sim.Simulate(&tr, run); err != nil {
				t.Fatal(err)
			}
			first := 0.0
			for k, x := range signal(&tr) {
				// In either direction: the trip that the mode goes for, whatever the sign of the step.
				if math.Abs(x) >= g.Level {
					first = float64(k) * period
					break
				}
			}
			if math.Abs(first-*g.ByUnit) > 0.02*efold+period {
				t.Errorf("unit step: after %.4g s in simulation, %.4g s said", first, *g.ByUnit)
			}
			if testing.Short() {
				return
			}
			at := int(*g.ByNoise / period)
			run.Steps, run.InputDisturbance, run.Shape = at+1, nil, &shape
			run.Innovations = make([]float64, run.Steps)
			sum, runs := 0.0, 100
			for i := range runs {
				rnd := rand.New(rand.NewPCG(11, uint64(i)))
				for k := range run.Innovations {
					run.Innovations[k] = m.Noise.SD * rnd.NormFloat64()
				}
				if err := sim.Simulate(&tr, run); err != nil {
					t.Fatal(err)
				}
				x := signal(&tr)[at]
				sum += x * x
			}
			off := math.Log(math.Sqrt(sum/float64(runs)) / g.Level)
			// The spread of a pair's output turns with its phase, by a factor of sqrt 2 at most.
			allowed := 4 / math.Sqrt(2*float64(runs))
			if g.Rate[1] != 0 {
				allowed += math.Ln2 / 2
			}
			if math.Abs(off) > allowed {
				t.Errorf("noise: %.3g e-folds off after %.4g s", off, *g.ByNoise)
			}
		})
	}
}

// What hides within one controller is told and not cancelled; slow integral action and controllers with stable common
// factors are left alone.
func TestHiddenWithinControllers(t *testing.T) {
	const period = 0.01
	m := bare(lti.TF{Num: lti.Poly{4}, Den: lti.Poly{-1, 1}}, period)
	p, err := newProblem(m, bareRig(period, 0, 2))
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct{ inner, outer, says string }{
		{"2(s-3)/(s-3)", "", "the inner controller has an unstable pole of its own"},
		{"2(s-3)/(s-3.01)", "", "the inner controller has an unstable pole of its own"},
		{"2", "0.2(s-3)/((s-3)s)", "the outer controller has an unstable pole of its own"},
		{"2", "0.2 s/s", "cancels the integrator of the outer loop"},
		{"2s/(0.05s+1)", "0.2/s", "cancels the integrator of the outer loop"},
		{"2(s+1.5)/(s-2)", "-(2s+2)/(s+4)", "the unstable pole of the inner controller at 2 rad/s (z = 1.02) lies upon a zero of 1 + K2"}, // 1 + K2 = -(s-2)/(s+4)
		{"2(s+20)/(s+20)", "0.2/s", ""},
		{"2", "0.2(s+0.003)/s", ""},
		{"2", "0.2(s+3)/s", ""},
		{"2/(s-0.5)", "", ""}, // unstable, but nothing hides it
	} {
		law := &lti.Law{Inner: parsed(t, c.inner, period)}
		if c.outer != "" {
			outer := parsed(t, c.outer, period)
			law.Outer = &outer
		}
		_, r := p.hidden(law)
		switch {
		case c.says == "" && r != nil:
			t.Errorf("%s, %s: %v", c.inner, c.outer, r)
		case c.says != "" && (r == nil || !strings.Contains(r.What, c.says)):
			t.Errorf("%s, %s: %v, want %q", c.inner, c.outer, r, c.says)
		}
	}
}

// Closed loops of order 10 with all poles within 0.01 of z = 1, the poles chosen first: the plant sampled, an outer
// controller of order two, and an inner one of order five from the Diophantine equation A D2 D1 + B (N2 + D2) N1 = P in
// powers of z - 1, solved in arithmetic of 400 bits (Åström & Wittenmark, Computer-Controlled Systems, 3rd ed. 1997,
// ch. 5). Rounding its coefficients moves the poles by less than a tenth of their distance from the circle, which the
// same arithmetic checks. The eigenvalues of the joined blocks then tell stable from unstable in every case; the roots
// of the same loop multiplied out in powers of z do not.
func TestOrderTenNearOne(t *testing.T) {
	const period = 0.001
	plant := fromRoots(20, []complex128{-4}, []complex128{3, -5, -8}, 0)
	outer := parsed(t, "0.4(s+2)/(s(0.2s+1))", period)
	sampled := lti.SampleDeltaValues(plant.Num, plant.Den, 0, period)
	d2, n2 := inDelta(outer.Den), inDelta(outer.Num)
	a := mulBig(descending(sampled.A), d2)
	b := mulBig(descending(sampled.B0), addBig(n2, d2))
	rnd := rand.New(rand.NewPCG(10, 10))
	wrong, tried, worst := 0, 0, 0.0
	const loops = 40
	for i := range loops {
		// Ten poles 1 + x, |x| <= 0.01, 0.0014 apart; in every other loop the first lies outside.
		unstable := i%2 == 1
		var x []complex128
		var inner lti.DTF
		for x = nil; x == nil; {
			x = scattered(rnd)
			if unstable {
				x[0] = complex(0.0004+0.001*rnd.Float64(), 0)
			}
			n1, d1, p := placeBig(t, a, b, x)
			inner = lti.DTF{Num: outOfDelta(n1), Den: outOfDelta(d1), Period: period}
			off := addBig(mulBig(a, inDelta(inner.Den)), mulBig(b, inDelta(inner.Num)))
			for k := range off {
				off[k].Sub(off[k], p[k])
			}
			slope := floats(p).Deriv()
			for _, v := range x {
				if !(cmplx.Abs(floats(off).Eval(v)/slope.Eval(v)) < 0.1*math.Abs(cmplx.Abs(1+v)-1)) {
					x = nil
					break
				}
			}
			tried++
		}
		law := &lti.Law{Inner: inner, Outer: &outer}
		loop, err := lti.NewTwoLoops(plant, 0, law)
		if err != nil {
			t.Fatal(err)
		}
		if got := stable(loop); got == unstable {
			t.Errorf("loop %d: stable %v, its poles 1 + %.4g", i, got, x)
		}
		for _, z := range loop.Poles() {
			off := math.Inf(1)
			for _, v := range x {
				off = math.Min(off, cmplx.Abs(z-1-v))
			}
			worst = math.Max(worst, off)
		}
		// The same blocks multiplied out.
		g, err := lti.ZOHTF(plant, period)
		if err != nil {
			t.Fatal(err)
		}
		p := g.Den.Mul(inner.Den).Mul(outer.Den).Add(g.Num.Mul(inner.Num).Mul(outer.Num.Add(outer.Den)))
		outside := false
		rev := make(lti.Poly, len(p))
		for j, v := range p {
			rev[len(p)-1-j] = v
		}
		for _, z := range rev.Roots() {
			outside = outside || cmplx.Abs(z) > 1
		}
		if outside != unstable {
			wrong++
		}
	}
	t.Logf("%d loops of %d drawn; largest error of a pole %.2g; multiplied out, %d are judged wrongly", loops, tried, worst, wrong)
	if worst > 1e-4 {
		t.Errorf("a pole is off by %.2g", worst)
	}
	if wrong < loops/4 {
		t.Errorf("the multiplied-out polynomials judge only %d of %d loops wrongly: this test shows nothing", wrong, loops)
	}
}

// scattered draws ten poles less one, in conjugate pairs, the first real.
func scattered(rnd *rand.Rand) []complex128 {
	for {
		x := []complex128{complex(-0.0008-0.009*rnd.Float64(), 0)}
		for range 300 {
			v := complex(-0.0008-0.009*rnd.Float64(), 0)
			if len(x) < 9 && rnd.IntN(3) > 0 {
				v += complex(0, 0.0007+0.008*rnd.Float64())
			}
			ok := cmplx.Abs(v) <= 0.01
			for _, w := range x {
				ok = ok && cmplx.Abs(v-w) > 0.0014
			}
			if !ok {
				continue
			}
			if x = append(x, v); imag(v) != 0 {
				x = append(x, cmplx.Conj(v))
			}
			if len(x) == 10 {
				return x
			}
		}
	}
}

// Polynomials of big numbers, rising powers of z - 1 where nothing else is said.

const bigBits = 400

func bigOf(x float64) *big.Float { return new(big.Float).SetPrec(bigBits).SetFloat64(x) }

func bigZeros(n int) []*big.Float {
	r := make([]*big.Float, n)
	for i := range r {
		r[i] = bigOf(0)
	}
	return r
}

func descending(c []float64) []*big.Float {
	r := bigZeros(len(c))
	for i, v := range c {
		r[len(c)-1-i] = bigOf(v)
	}
	return r
}

func mulBig(p, q []*big.Float) []*big.Float {
	r := bigZeros(len(p) + len(q) - 1)
	for i, a := range p {
		for j, b := range q {
			r[i+j].Add(r[i+j], new(big.Float).Mul(a, b))
		}
	}
	return r
}

func addBig(p, q []*big.Float) []*big.Float {
	r := bigZeros(max(len(p), len(q)))
	for i := range r {
		for _, s := range [][]*big.Float{p, q} {
			if i < len(s) {
				r[i].Add(r[i], s[i])
			}
		}
	}
	return r
}

// shiftBig returns p(x + a).
func shiftBig(p []*big.Float, a float64) []*big.Float {
	r := bigZeros(len(p))
	for i := range p {
		r[i].Set(p[i])
	}
	for i := range r {
		for j := len(r) - 2; j >= i; j-- {
			r[j].Add(r[j], new(big.Float).Mul(bigOf(a), r[j+1]))
		}
	}
	return r
}

// inDelta takes coefficients in rising powers of 1/z to powers of z - 1, exactly.
func inDelta(c lti.Poly) []*big.Float { return shiftBig(descending(c), 1) }

// outOfDelta is the way back, rounded.
func outOfDelta(p []*big.Float) lti.Poly {
	r := shiftBig(p, -1)
	c := make(lti.Poly, len(r))
	for i, v := range r {
		c[len(r)-1-i], _ = v.Float64()
	}
	return c
}

func floats(p []*big.Float) lti.Poly {
	r := make(lti.Poly, len(p))
	for i, v := range p {
		r[i], _ = v.Float64()
	}
	return r
}

// placeBig solves a d + b n = p, p monic with the roots x, for a monic d of degree 5 and n of degree 5 with nothing at
// its highest power.
func placeBig(t *testing.T, a, b []*big.Float, x []complex128) (n, d, p []*big.Float) {
	t.Helper()
	p = []*big.Float{bigOf(1)}
	for _, v := range x {
		switch {
		case imag(v) == 0:
			p = mulBig(p, []*big.Float{bigOf(-real(v)), bigOf(1)})
		case imag(v) > 0:
			re, im := bigOf(real(v)), bigOf(imag(v))
			square := new(big.Float).Mul(re, re)
			square.Add(square, new(big.Float).Mul(im, im))
			p = mulBig(p, []*big.Float{square, bigOf(-2 * real(v)), bigOf(1)})
		}
	}
	const m = 10
	rows := make([][]*big.Float, m)
	for i := range rows {
		rows[i] = bigZeros(m + 1)
		rows[i][m].Set(p[i])
		for k := range 5 {
			if j := i - k; j >= 0 && j < len(a) {
				rows[i][k].Set(a[j])
			}
			if j := i - k; j >= 0 && j < len(b) {
				rows[i][5+k].Set(b[j])
			}
		}
		if j := i - 5; j >= 0 && j < len(a) { // d is monic
			rows[i][m].Sub(rows[i][m], a[j])
		}
	}
	for k := range m {
		at := k
		for i := k; i < m; i++ {
			if new(big.Float).Abs(rows[i][k]).Cmp(new(big.Float).Abs(rows[at][k])) > 0 {
				at = i
			}
		}
		if rows[at][k].Sign() == 0 {
			t.Fatal("plant and outer loop share a factor")
		}
		rows[k], rows[at] = rows[at], rows[k]
		for i := range m {
			if i == k {
				continue
			}
			f := new(big.Float).Quo(rows[i][k], rows[k][k])
			for j := k; j <= m; j++ {
				rows[i][j].Sub(rows[i][j], new(big.Float).Mul(f, rows[k][j]))
			}
		}
	}
	n, d = bigZeros(6), bigZeros(6)
	for k := range 5 {
		d[k].Quo(rows[k][m], rows[k][k])
		n[k].Quo(rows[5+k][m], rows[5+k][5+k])
	}
	d[5] = bigOf(1)
	return n, d, p
}
