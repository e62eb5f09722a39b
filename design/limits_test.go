package design

import (
	"fmt"
	"math"
	"math/rand/v2"
	"regexp"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/optimize/convex/lp"

	"steadyrig/data"
	"steadyrig/fit/lti"
)

// outOfReachRigs ask too much, each of one key of the spec.
func outOfReachRigs() map[string]testRig {
	with := func(i int, change func(r *testRig)) testRig {
		r := testRigs()[i]
		change(&r)
		return r
	}
	return map[string]testRig{
		"peak_sensitivity, delay":     with(2, func(r *testRig) { r.truth.Delay = 45 }),
		"peak_sensitivity, two poles": with(3, func(r *testRig) { r.compute, r.spec.PeakSensitivity = 0.25, 1.3 }),
		"peak_sensitivity, sampling":  with(1, func(r *testRig) { r.period, r.spec.Settling, r.sensor = 0.4, 20, 0.001 }),
		"peak_sensitivity, zero": with(1, func(r *testRig) {
			r.truth = fromRoots(-2, []complex128{4}, []complex128{2.2, -2.6, -9}, 0)
			r.spec.Settling = 8
		}),
		"input_noise":         with(1, func(r *testRig) { r.sensor, r.spec.InputNoise = 0.03, 0.02 }),
		"step, input":         with(1, func(r *testRig) { r.spec.Step, r.output = 20, nil }),
		"step, reach":         with(0, func(r *testRig) { r.spec.Step, r.output, r.compute, r.sensor = 10, nil, 0.015, 0.02 }),
		"step, trip":          with(1, func(r *testRig) { r.spec.Step, r.spec.Overshoot = 5, 0.6 }),
		"kick":                with(1, func(r *testRig) { r.spec.Kick = 13 }),
		"settling, dead time": with(2, func(r *testRig) { r.spec.Settling, r.truth.Delay = 6, 10 }),
		"settling, zero": with(3, func(r *testRig) {
			r.truth = fromRoots(-260, []complex128{2}, []complex128{-1, -2, -18}, 0)
			r.output, r.spec.Settling = &[2]float64{-0.5, 4.5}, 0.15
		}),
		"kick_peak": with(2, func(r *testRig) { r.spec.Kick, r.spec.KickPeak = 10, 0.2 }),
	}
}

var nearestText = regexp.MustCompile(`nearest spec within reach is (\w+) = ([-+.\de]+)`)

// ask sets one key of a spec and returns what it was.
func ask(t *testing.T, s *data.Spec, key string, v float64) (before float64) {
	t.Helper()
	for name, field := range map[string]*float64{
		"peak_sensitivity": &s.PeakSensitivity, "input_noise": &s.InputNoise, "step": &s.Step, "settling": &s.Settling,
		"kick": &s.Kick, "kick_peak": &s.KickPeak,
	} {
		if name == key {
			before, *field = *field, v
			return before
		}
	}
	t.Fatalf("no key %q in the spec", key)
	return 0
}

// The spec that a refusal names is within reach, and one that asks five percent more is not: it is the nearest.
func TestNearestSpec(t *testing.T) {
	if testing.Short() {
		t.Skip("several seconds")
	}
	for name, r := range outOfReachRigs() {
		m, rig := r.model(t), r.rig()
		bounds, err := Bounds(m, rig)
		if err != nil {
			t.Fatalf("%s: %v", name, err)
		}
		refusal := outOfReach(bounds)
		if refusal == nil {
			t.Errorf("%s: within reach", name)
			continue
		}
		key, _, _ := strings.Cut(name, ",")
		named := nearestText.FindAllStringSubmatch(refusal.Error(), -1)
		if len(named) == 0 {
			t.Errorf("%s: names no spec: %v", name, refusal)
			continue
		}
		found := false
		for _, n := range named {
			v, err := strconv.ParseFloat(n[2], 64)
			if err != nil {
				t.Fatal(err)
			}
			found = found || n[1] == key
			if before := ask(t, rig.Spec, n[1], v); before > v == (n[1] == "peak_sensitivity" || n[1] == "input_noise" || n[1] == "settling" || n[1] == "kick_peak") {
				t.Errorf("%s: %s = %v is harder than the %v that was asked", name, n[1], v, before)
			}
		}
		if !found {
			t.Errorf("%s: names another key: %v", name, refusal)
		}
		reach := func() error {
			bounds, err := Bounds(m, rig)
			if err != nil {
				t.Fatal(err)
			}
			if r := outOfReach(bounds); r != nil {
				return r
			}
			return nil
		}
		if err := reach(); err != nil {
			t.Errorf("%s: the nearest spec is not within reach: %v, after %v", name, err, refusal)
		}
		for _, n := range named {
			v, _ := strconv.ParseFloat(n[2], 64)
			harder := 1.05 * v
			if n[1] == "peak_sensitivity" || n[1] == "input_noise" || n[1] == "settling" || n[1] == "kick_peak" {
				harder = v / 1.05
			}
			ask(t, rig.Spec, n[1], harder)
			if reach() == nil {
				t.Errorf("%s: %s = %v is within reach as well, nearest was said to be %v", name, n[1], harder, v)
			}
			ask(t, rig.Spec, n[1], v)
		}
	}
}

// What a refusal says to change at the rig is enough, by itself, for the spec as it was asked; half as much is not.
func TestAdvisedChangeOfTheRig(t *testing.T) {
	if testing.Short() {
		t.Skip("several seconds")
	}
	number := `([-+.\de]+)`
	delay, period := regexp.MustCompile("a delay below "+number), regexp.MustCompile("a sample period below "+number)
	sensor, input := regexp.MustCompile("sensor noise below "+number), regexp.MustCompile("an input range of at least "+number+" to "+number)
	seen := map[string]int{}
	for name, r := range outOfReachRigs() {
		bounds, err := Bounds(r.model(t), r.rig())
		if err != nil {
			t.Fatal(err)
		}
		refusal := outOfReach(bounds)
		if refusal == nil {
			t.Fatalf("%s: within reach", name)
		}
		value := func(re *regexp.Regexp, i int) (float64, bool) {
			m := re.FindStringSubmatch(refusal.Do)
			if m == nil {
				return 0, false
			}
			v, err := strconv.ParseFloat(m[i], 64)
			if err != nil {
				t.Fatal(err)
			}
			return v, true
		}
		try := func(what string, enough, less func(r *testRig)) {
			seen[what]++
			for _, c := range []struct {
				change func(r *testRig)
				want   bool
			}{{enough, true}, {less, false}} {
				s := r
				c.change(&s)
				bounds, err := Bounds(s.model(t), s.rig())
				if err != nil {
					t.Fatal(err)
				}
				// In whole samples the least kick peak is a sawtooth of the delay: less may do as well.
				if out := outOfReach(bounds); (out == nil) != c.want && (c.want || name != "kick_peak") {
					t.Errorf("%s, %s: enough %v, want %v: %v; advice %q", name, what, out == nil, c.want, out, refusal.Do)
				}
			}
		}
		if v, ok := value(delay, 1); ok {
			f := v / (r.truth.Delay + r.compute)
			scale := func(f float64) func(*testRig) { return func(s *testRig) { s.truth.Delay *= f; s.compute *= f } }
			try("delay", scale(f), scale(f+0.4*(1-f)))
		}
		if v, ok := value(period, 1); ok {
			try("sample period", func(s *testRig) { s.period = v }, func(s *testRig) { s.period = v + 0.4*(r.period-v) })
		}
		if v, ok := value(sensor, 1); ok {
			try("sensor", func(s *testRig) { s.sensor = v }, func(s *testRig) { s.sensor = v + 0.4*(r.sensor-v) })
		}
		if lo, ok := value(input, 1); ok {
			hi, _ := value(input, 2)
			try("input range", func(s *testRig) { s.input = [2]float64{lo, hi} }, func(s *testRig) {
				s.input = [2]float64{lo + 0.4*(r.input[0]-lo), hi + 0.4*(r.input[1]-hi)}
			})
		}
		if !strings.Contains(refusal.Do, "at the rig: ") {
			t.Errorf("%s: nothing to change: %q", name, refusal.Do)
		}
	}
	for _, what := range []string{"delay", "sample period", "sensor", "input range"} {
		if seen[what] == 0 {
			t.Errorf("no refusal advised of the %s: the test has lost its point", what)
		}
	}
	t.Log(seen)
}

// The limit of the sampled loop is never below those of the continuous one, so that these refuse nothing that a sampled
// loop could do: random plants with one or two unstable poles, a right-half-plane zero, a delay.
func TestSampledLimitIsTheStrictest(t *testing.T) {
	rnd := rand.New(rand.NewPCG(1, 1))
	p := &problem{spec: demands{step: 1, settling: 1, band: 0.02}, input: [2]float64{-1, 1}}
	for trial := range 300 {
		rate := math.Exp(rnd.NormFloat64())
		p.period = math.Exp(rnd.NormFloat64()-3) / rate
		poles := []complex128{complex(rate, 0), complex(-rate*math.Exp(rnd.NormFloat64()), 0)}
		switch rnd.IntN(3) {
		case 0:
			poles = append(poles, complex(rate*math.Exp(rnd.NormFloat64()), 0))
		case 1:
			w := complex(0, rate*math.Exp(rnd.NormFloat64()))
			poles = append(poles, poles[0]+w, poles[0]-w)[1:]
		}
		delay := p.period * math.Max(0, 4*rnd.Float64()-1)
		g := fromRoots(1, []complex128{complex(rate*math.Exp(2*rnd.NormFloat64()), 0)}, poles, delay)
		pl, err := p.newPlant(g)
		if err != nil {
			t.Fatal(err)
		}
		l := p.limitsOf(&pl)
		for _, name := range []string{BoundDelay, BoundZero, BoundBandwidth} {
			// 1e-4: near 1e4 the matrices of Pick's problem lose digits.
			if v := l[name]; !(l[BoundSampled] >= v*(1-1e-4)) && v < 1e4 {
				t.Errorf("trial %d: sampled %v, %s %v: %+v, period %v", trial, l[BoundSampled], name, v, g, p.period)
			}
		}
	}
}

// Freudenberg & Looze (1985) for one pole and one zero, with e^{p tau}; two poles before one zero multiply.
func TestLeastPeakZeros(t *testing.T) {
	near(t, "one of each", leastPeakZeros([]complex128{1}, []complex128{3}, 0), 2, 1e-12)
	near(t, "and delay", leastPeakZeros([]complex128{1}, []complex128{3}, 0.1), 2*math.Exp(0.1), 1e-12)
	near(t, "two poles", leastPeakZeros([]complex128{1, 2}, []complex128{5}, 0), 1.5*7./3, 1e-12)
	near(t, "two zeros", leastPeakZeros([]complex128{1}, []complex128{3, 5}, 0), 2*1.5, 1e-12)
	pair := []complex128{complex(1, 2), complex(1, -2)}
	near(t, "pair", leastPeakZeros(pair, []complex128{5}, 0), (36.+4)/(16+4), 1e-12)
}

// Middleton (1991), Automatica 27, 281-292: Y(z) = 0 at a right-half-plane zero whatever the loops, so that the output goes
// the wrong way by (1 - band)/(e^{z ts} - 1) at the least. Loops of any speed and prefilters of any lag obey it, and the
// integral of y e^{-zt} of their exact responses is zero. Values: closed form.
func TestUndershootAgainstSettling(t *testing.T) {
	near(t, "z ts 1", LeastUndershoot(1, 1, 0), 0.581976706869326, 1e-12)
	near(t, "z ts 0.5, band 0.02", LeastUndershoot(0.5, 1, 0.02), 0.98*1.541494082536798, 1e-12)
	if !math.IsInf(LeastUndershoot(1, 0, 0.02), 1) {
		t.Error("settled before it starts")
	}
	const period, zero, fine, band = 0.05, 2.0, 8, 0.05
	plant := fromRoots(-6, []complex128{zero}, []complex128{-1, -4}, 0.1)
	for _, gain := range []float64{0.5, 1, 2, 3.5} {
		for _, lag := range []float64{0, 0.3, 2} {
			k2 := lti.Tustin(lti.TF{Num: lti.Poly{gain, gain}, Den: lti.Poly{0, 1}}, period)
			law := &lti.Law{Inner: lti.Gain(0.05, period), Outer: &k2}
			if lag > 0 {
				f := lti.Tustin(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{1, lag}}, period)
				law.Prefilter = &f
			}
			ref := make([]float64, 8000)
			for k := range ref {
				ref[k] = 1
			}
			tr, err := lti.Run{Plant: plant, Period: period, Law: law, Steps: len(ref), Reference: ref, Fine: fine}.Simulate()
			if err != nil {
				t.Fatal(err)
			}
			under, last, sum, size := 0.0, 0, 0.0, 0.0
			for i, y := range tr.Fine {
				under = math.Max(under, -y)
				if math.Abs(y-1) > band {
					last = i
				}
				if i > 0 { // trapezoids
					dt, w := period/fine, math.Exp(-zero*period/fine*(float64(i)-0.5))
					sum, size = sum+w*dt*(y+tr.Fine[i-1])/2, size+w*dt*math.Abs(y)
				}
			}
			settled := float64(last+1) * period / fine
			if last > len(tr.Fine)*9/10 {
				t.Fatalf("gain %v, lag %v: never settles", gain, lag)
			}
			if bound := LeastUndershoot(zero, settled-0.1, band); !(under >= bound) {
				t.Errorf("gain %v, lag %v: settles in %v with an undershoot of %v, the least is said to be %v", gain, lag, settled, under, bound)
			}
			if !(math.Abs(sum) < 2e-4*size) { // trapezoids of an eighth of a period
				t.Errorf("gain %v, lag %v: integral of y e^(-zt) is %v of %v", gain, lag, sum, size)
			}
		}
	}
}

// The least overshoot of one loop against the best that a linear program over all inputs finds: input within its limits,
// output within the band from n on, sum (1 - y) z^-k = 0, which is what one loop adds to two. The limit is not above the
// optimum, and near it: it lets the output jump where the input's limits would not. Without that sum the optimum is zero.
func TestLeastOvershootOfOneLoop(t *testing.T) {
	const period, band, n, horizon = 0.2, 0.05, 12, 18
	p := &problem{period: period, omega: []float64{0}, z1: []complex128{1}, inner: []complex128{1}}
	for _, c := range []struct {
		name      string
		rate      float64
		delay     float64
		authority float64
	}{
		{"slow actuator", 1, 0, 4}, {"delay", 1, 0.25, 40}, {"fast pole", 2, 0.1, 8},
	} {
		g := fromRoots(1, nil, []complex128{complex(c.rate, 0)}, c.delay)
		pl, err := p.newPlant(g)
		if err != nil {
			t.Fatal(err)
		}
		z := math.Exp(c.rate * period)
		got := leastOvershoot(&pl, z, n, band, c.authority)
		one, err := leastOvershootByProgram(&pl, z, n, horizon, band, c.authority, true)
		if err != nil {
			t.Fatalf("%s: %v", c.name, err)
		}
		two, err := leastOvershootByProgram(&pl, z, n, horizon, band, c.authority, false)
		if err != nil {
			t.Fatalf("%s: %v", c.name, err)
		}
		t.Logf("%s: limit %.4f, one loop %.4f, two loops %.4f", c.name, got, one, two)
		if !(got <= one*(1+1e-6)) || !(got > 0.8*one) {
			t.Errorf("%s: limit %v, the best one loop has %v", c.name, got, one)
		}
		if !(two < 1e-6) {
			t.Errorf("%s: two loops overshoot by %v at the least", c.name, two)
		}
	}
	// Without limits of the input and of the time: z^d - 1 (the sampled form of e^{p tau} - 1).
	pl, err := p.newPlant(fromRoots(1, nil, []complex128{1}, 0.25))
	if err != nil {
		t.Fatal(err)
	}
	near(t, "z^d - 1", leastOvershoot(&pl, math.Exp(0.2), 2000, 0, 1e6), math.Expm1(0.4), 1e-5)
	if !math.IsInf(leastOvershoot(&pl, math.Exp(0.2), 2, 0.05, 1), 1) {
		t.Error("settled before the first effect")
	}
}

// leastOvershootByProgram minimises the overshoot over all inputs by the simplex method.
func leastOvershootByProgram(pl *plant, z, n float64, horizon int, band, authority float64, one bool) (float64, error) {
	g := pl.impulse(horizon)
	// Variables: u+ and u- of each sample, the overshoot; after the horizon the error rests at one value, e+ - e-.
	nv := 2*horizon + 3
	over, rest := 2*horizon, 2*horizon+1
	var rows [][]float64
	var right []float64
	atMost := func(row []float64, v float64) { rows, right = append(rows, row), append(right, v) }
	unit := func(i int) []float64 { r := make([]float64, nv); r[i] = 1; return r }
	sum, total := make([]float64, nv), 0.0
	for k := range horizon {
		y := make([]float64, nv)
		for j := range k + 1 {
			y[2*j], y[2*j+1] = g[k-j], -g[k-j]
		}
		w := math.Pow(z, -float64(k))
		total += w
		minus := make([]float64, nv)
		for i := range y {
			sum[i] += w * y[i]
			minus[i] = -y[i]
		}
		high := append([]float64(nil), y...)
		high[over] = -1
		atMost(high, 1)
		if float64(k) >= n {
			atMost(y, 1+band)
			atMost(minus, -(1 - band))
		}
		atMost(unit(2*k), authority)
		atMost(unit(2*k+1), authority)
	}
	atMost(unit(rest), band)
	low := unit(rest + 1)
	atMost(low, band)
	low = unit(rest + 1)
	low[over] = -1
	atMost(low, 0) // e >= -overshoot at rest too
	// Equalities with slacks.
	m := len(rows)
	if one {
		m++
	}
	a := mat.NewDense(m, nv+len(rows), nil)
	b := make([]float64, m)
	for i, r := range rows {
		for j, v := range r {
			a.Set(i, j, v)
		}
		a.Set(i, nv+i, 1)
		b[i] = right[i]
	}
	if one { // sum of e z^-k: total - sum y + (e+ - e-) z^-horizon/(1 - 1/z) = 0
		tail := math.Pow(z, -float64(horizon)) / (1 - 1/z)
		for j, v := range sum {
			a.Set(m-1, j, v)
		}
		a.Set(m-1, rest, -tail)
		a.Set(m-1, rest+1, tail)
		b[m-1] = total
	}
	c := make([]float64, nv+len(rows))
	c[over] = 1
	v, _, err := lp.Simplex(c, a, b, 1e-9, nil)
	return v, err
}

// What two loops make of their freedom: the response to the reference at the plant's unstable pole is F K2/(1 + K2), so
// that the sum of (1 - y) z^-k, as simulated, is (1 - that)/(1 - 1/z); for one loop it is zero.
func TestWhatTwoLoopsRelax(t *testing.T) {
	r := testRigs()[1]
	p, err := newProblem(r.model(t), r.rig())
	if err != nil {
		t.Fatal(err)
	}
	inner := lti.Tustin(lti.TF{Num: lti.Poly{4, 1.6}, Den: lti.Poly{1, 0.05}}, r.period)
	outer := lti.Tustin(lti.TF{Num: lti.Poly{0.3, 0.15}, Den: lti.Poly{0, 1}}, r.period)
	pre := lti.Tustin(lti.TF{Num: lti.Poly{1}, Den: lti.Poly{1, 0.6}}, r.period)
	z := math.Exp(2.2 * r.period)
	sum := func(law *lti.Law) float64 {
		ref := make([]float64, 2000)
		for k := range ref {
			ref[k] = 1
		}
		tr, err := lti.Run{Plant: r.truth, Period: r.period, ComputeDelay: r.compute, Law: law, Steps: len(ref), Reference: ref}.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		if end := tr.YTrue[len(ref)-1]; !(math.Abs(end) < 10) {
			t.Fatalf("not held: %v", end)
		}
		s, w := 0.0, 1.0
		for _, y := range tr.YTrue {
			s, w = s+w*(1-y), w/z
		}
		return (1 - 1/z) * s
	}
	if got := sum(&lti.Law{Inner: inner}); !(math.Abs(got) < 1e-9) {
		t.Errorf("one loop: %v", got)
	}
	l := &Loops{
		SamplePeriod: r.period, Inner: &Block{Discrete: Rational{inner.Num, inner.Den}}, Outer: &Block{Discrete: Rational{outer.Num, outer.Den}},
		Prefilter: &Block{Discrete: Rational{pre.Num, pre.Den}}, Bounds: p.bounds(t.Context(), nil),
	}
	p.relaxed(l)
	got := sum(l.LTI())
	want := fmt.Sprintf("F(p) K2(p)/(1 + K2(p)) is %.3g,", 1-got)
	found := false
	for _, b := range l.Bounds {
		if b.Name == BoundOvershoot {
			found = true
			if !strings.Contains(b.Relaxed, want) || !b.OK {
				t.Errorf("%q lacks %q", b.Relaxed, want)
			}
		}
	}
	if !found || !(math.Abs(got) > 0.1) {
		t.Errorf("bound listed: %v; the sum is %v, hardly relaxed", found, got)
	}
}

// The plant is alone after a kick for twice its delay: no law, however fast, keeps the output lower.
func TestLeastKickPeak(t *testing.T) {
	const period = 0.05
	g := fromRoots(2, nil, []complex128{1, -3}, 0.12)
	p := &problem{period: period}
	pl, err := p.newPlant(g)
	if err != nil {
		t.Fatal(err)
	}
	// 0.12 s is 3 samples to the first effect; until the sixth the output is the step response after 0.12 s, in closed
	// form: 2 (e^t/4 + e^{-3t}/12 - 1/3).
	x := 5*period - 0.12
	want := 2 * (math.Exp(x)/4 + math.Exp(-3*x)/12 - 1./3)
	near(t, "open loop", leastKickPeak(&pl), want, 1e-9)
	kick := make([]float64, 400)
	for k := range kick {
		kick[k] = 1
	}
	for _, gain := range []float64{1.6, 3, 6, 30} {
		tr, err := lti.Run{Plant: g, Period: period, Law: &lti.Law{Inner: lti.Gain(gain, period)}, Steps: len(kick), InputDisturbance: kick}.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		peak := 0.0
		for k, y := range tr.YTrue {
			peak = math.Max(peak, math.Abs(y))
			if k == 2*pl.lag-1 {
				near(t, "until the first answer", peak, want, 1e-9)
			}
		}
		if !(peak >= want) {
			t.Errorf("gain %v: %v", gain, peak)
		}
	}
}

// What a disturbance takes of a mode's authority, by summing its covariances; a constant takes what it is.
func TestDisturbanceOnMode(t *testing.T) {
	const period, a = 0.1, 1.2
	for _, rate := range []float64{0, 0.3, 4} {
		rho := 0.0
		if rate > 0 {
			rho = math.Exp(-rate * period)
		}
		v := 0.0
		for j := range 300 {
			for k := range 300 {
				v += math.Pow(a, -float64(j+k)) * math.Pow(rho, math.Abs(float64(j-k)))
			}
		}
		q := noise{parts: []inputPart{{rate, 0.7}}}
		near(t, "by sums", q.onMode(a, period), 0.7*(1-1/a)*math.Sqrt(v), 1e-9)
	}
	q := noise{parts: []inputPart{{1e-9, 3}, {1e-9, 4}}}
	near(t, "constants", q.onMode(a, period), 5, 1e-6)
}

// Where zero and pole may change places, some plants that the data allow have no stable controller: a promise over all
// is out of the question, and that is the reason given (Youla, Bongiorno & Lu (1974)).
func TestSomePlantsHaveNoStableController(t *testing.T) {
	r := testRigs()[1]
	r.truth = fromRoots(5, []complex128{3.2}, []complex128{3, -10}, 0)
	r.relative = 0.05
	r.spec.PeakSensitivity, r.spec.InputNoise = 9, 9
	l, err := Design(t.Context(), r.model(t), r.rig(), Options{Seed: 1})
	if err == nil || l == nil || l.Verdict != Refused || !strings.Contains(err.Error(), "plants that the data allow: an odd number") {
		t.Errorf("%v", err)
	}
	r.truth = fromRoots(5, []complex128{1}, []complex128{3, -10}, 0)
	if _, err = Design(t.Context(), r.model(t), r.rig(), Options{Seed: 1}); err == nil || !strings.Contains(err.Error(), "poles 3 rad/s, zeros 1 rad/s") {
		t.Errorf("%v", err)
	}
}
