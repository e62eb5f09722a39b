package ident

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
)

// experiment reads the log of a demo rig as a user would.
func experiment(t testing.TB, r demorig.Rig, seed uint64) (*data.Experiment, *data.Rig) {
	t.Helper()
	e, rig, err := r.Experiment(seed)
	if err != nil {
		t.Fatal(err)
	}
	return e, rig
}

// truth returns the rig's true model in the estimator's form: the plant, and
// C from the spectral factor of sensor noise and disturbance.
func truth(t testing.TB, r demorig.Rig) *fit.Prediction {
	t.Helper()
	n := r.Truth.Den.Degree()
	m := &fit.Prediction{
		Shape: fit.Shape{Poles: n, Zeros: r.Truth.Num.Degree(), FreeDelay: r.Truth.Delay > 0},
		Num:   r.Truth.Num, Den: r.Truth.Den, Delay: r.Truth.Delay, D: []float64{1}, Period: r.Period,
	}
	if r.DisturbancePole > 0 {
		m.Colour = 1
		m.D = []float64{1, -math.Exp(-r.DisturbancePole * r.Period)}
	}
	g, err := lti.ZOHTF(lti.TF{Num: m.Num, Den: m.Den, Delay: math.Mod(m.Delay, r.Period)}, r.Period)
	if err != nil {
		t.Fatal(err)
	}
	ad := []float64(g.Den.Mul(m.D))
	keep := -m.D[len(m.D)-1]
	if m.Colour == 0 {
		keep = 0
	}
	sensor := r.SensorNoise*r.SensorNoise + r.Resolution*r.Resolution/12
	input := r.Disturbance * r.Disturbance * (1 - keep*keep)
	size := max(len(ad), len(g.Num))
	auto := make(lti.Poly, 2*size-1)
	for _, part := range []struct {
		p []float64
		v float64
	}{{ad, sensor}, {g.Num, input}} {
		for i, x := range part.p {
			for j, y := range part.p {
				auto[size-1+i-j] += part.v * x * y
			}
		}
	}
	// Roots from powers of z - 1, in which those near one are apart.
	var inside []complex128
	for _, z := range auto.Roots() {
		if cmplx.Abs(z) < 1 {
			inside = append(inside, z)
		}
	}
	slices.SortFunc(inside, func(a, b complex128) int { return cmp.Compare(cmplx.Abs(b), cmplx.Abs(a)) })
	inside = inside[:n+m.Colour]
	m.C = fromZRoots(inside)
	var cc float64
	for _, v := range m.C {
		cc += v * v
	}
	m.Variance = auto[size-1] / cc
	m.Const = []float64{0} // where the rig rests is not asked here
	return m
}

// bound returns the Cramér-Rao bound on the log of e, with every parameter that
// the fit m left free: a model of the poles and gains that the truth has and of
// the deviations that an efficient estimate has.
func bound(t testing.TB, e *data.Experiment, truth *fit.Prediction, m *Model) *Model {
	t.Helper()
	recs, period, err := records([]*data.Experiment{e})
	if err != nil {
		t.Fatal(err)
	}
	p, err := fit.NewPredictor(recs, period, math.Max(maxDelaySamples*period, truth.Delay))
	if err != nil {
		t.Fatal(err)
	}
	at := *truth
	at.FreeDelay = at.FreeDelay || slices.Contains(m.Plant.Parameters, "delay")
	at.Integrators = integrators(m)
	at.Zeros = max(at.Zeros, len(m.Zeros))
	at.Num = make(lti.Poly, at.Zeros+1) // zeros too many lie at infinity
	copy(at.Num, truth.Num)
	if errors.Is(p.Covariance(&at), fit.ErrSingular) && at.Zeros > truth.Zeros {
		// At the truth a zero too many is not told apart from the delay.
		at.Zeros, at.Num = truth.Zeros, truth.Num
	}
	if err := p.Covariance(&at); err != nil {
		t.Fatal(err)
	}
	limit := &Model{}
	limit.describe(p, &at, &data.Rig{})
	return limit
}

// integrators counts the poles of m that are held at zero.
func integrators(m *Model) (n int) {
	for _, p := range m.Poles {
		if p.Re == 0 && p.Im == 0 {
			n++
		}
	}
	return n
}

// outcome is what one log says about one true number.
type outcome struct {
	in           bool
	squares, crb float64 // of the error and of the bound, 0 without one
}

// factor grades the two slowest poles of m by the coefficients a and b of
// their factor s² + a s + b, which are regular where the two meet: a double
// integrator's are zero. It returns none without that many poles.
func (o *outcome) factor(m, limit *Model, right bool, product bool) {
	slow := bySpeed(m.Poles)
	if len(slow) < 2 {
		return
	}
	of := func(m *Model, p, q Root) (v, variance float64) {
		a, b, cov := m.denominator().factor(complex(p.Re, p.Im), complex(q.Re, q.Im))
		if product {
			return b, cov[1][1]
		}
		return a, cov[0][0]
	}
	v, variance := of(m, slow[0], slow[1])
	o.in = math.Abs(v) <= z95*math.Sqrt(variance)
	if right {
		l := bySpeed(limit.Poles)
		_, o.crb = of(limit, l[0], l[1])
		o.squares = v * v
	}
}

// trial is the fit of one log beside the truth.
type trial struct {
	refused, sound, right, exact, all, invented, memories bool
	numbers                                               []outcome // each pole; gain; delay; sum and product of a double integrator
	tells                                                 bool      // every bound is under a third of its pole's modulus
	note                                                  string
}

// one fits one log.
func one(t testing.TB, r demorig.Rig, truth *fit.Prediction, seed uint64) (c trial) {
	e, rig := experiment(t, r, seed)
	m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{Seed: seed, Workers: 1})
	note := func(format string, args ...any) { c.note += fmt.Sprintf("; "+format, args...) }
	poles := sorted(r.Truth.Den.Roots())
	c.numbers = make([]outcome, len(poles)+1)
	if truth.FreeDelay {
		c.numbers = append(c.numbers, outcome{})
	}
	double := r.Truth.Den[0] == 0 && r.Truth.Den[1] == 0
	if double {
		c.numbers = append(c.numbers, outcome{}, outcome{})
	}
	var refused *RefusedError
	if errors.As(err, &refused) {
		c.refused = true
		note("refused: %v", err)
		if len(m.Poles) == 0 {
			return c
		}
	} else if err != nil {
		t.Fatal(err)
	}
	c.sound = m.Verdict == Sound
	c.memories = m.Evidence.Memories >= soundMemories
	if !c.sound {
		note("weak: %q", m.Warnings)
	}
	for _, p := range m.Poles {
		if p.ProbabilityUnstable > 0.975 && !slices.ContainsFunc(poles, func(q complex128) bool {
			return real(q) > 0 && cmplx.Abs(q-complex(p.Re, p.Im)) < 0.5*cmplx.Abs(q)
		}) {
			c.invented = true
			note("unstable pole at %.3g%+.3gi", p.Re, p.Im)
		}
	}
	c.right = len(m.Poles) == len(poles)
	delay := slices.Index(m.Plant.Parameters, "delay")
	c.exact = c.right && len(m.Zeros) == r.Truth.Num.Degree() && (delay >= 0) == truth.FreeDelay
	if !c.exact {
		note("%d poles, %d zeros, delay %.3g", len(m.Poles), len(m.Zeros), m.Plant.Delay)
	}
	c.all = c.right
	c.tells = true
	like := m
	if !c.right {
		like = &Model{}
	}
	limit := bound(t, e, truth, like)
	for i, p := range poles {
		o := &c.numbers[i]
		l := limit.Poles[i]
		c.tells = c.tells && 3*math.Hypot(l.ReSD, l.ImSD) < cmplx.Abs(p)+1e-300 || p == 0
		q := Root{Re95: Interval{1, 0}, Re95All: Interval{1, 0}}
		if c.right {
			q = m.Poles[i]
			o.squares, o.crb = math.Pow(q.Re-real(p), 2), l.ReSD*l.ReSD
		} else if len(m.Poles) > 0 { // the nearest
			q = slices.MinFunc(m.Poles, func(a, b Root) int {
				return cmp.Compare(cmplx.Abs(complex(a.Re, a.Im)-p), cmplx.Abs(complex(b.Re, b.Im)-p))
			})
		}
		o.in = q.Re95.Contains(real(p)) && (imag(p) == 0 || q.Im95.Contains(imag(p)))
		c.all = c.all && q.Re95All.Contains(real(p)) && q.Im95All.Contains(imag(p))
	}
	o := &c.numbers[len(poles)]
	est, crb, true1 := m.Gain.DC, limit.Gain.DC, 0.0
	if r.Truth.Den[0] != 0 {
		true1 = r.Truth.Num[0] / r.Truth.Den[0]
	} else {
		est, crb, true1 = m.Gain.HighFrequency, limit.Gain.HighFrequency, r.Truth.Num[len(r.Truth.Num)-1]
		if !c.right || len(m.Zeros) != r.Truth.Num.Degree() {
			est = nil
		}
	}
	if est != nil {
		o.in = est.Interval95.Contains(true1)
		if crb != nil && c.right {
			o.squares, o.crb = math.Pow(est.Value-true1, 2), crb.SD*crb.SD
		}
	}
	if truth.FreeDelay && delay >= 0 {
		o := &c.numbers[len(poles)+1]
		d := m.Plant.Delay - truth.Delay
		o.in = m.Plant.Delay95.Contains(truth.Delay)
		if c.right {
			o.squares = d * d
			o.crb = limit.Plant.Covariance[len(limit.Plant.Covariance)-1][len(limit.Plant.Covariance)-1]
		}
	}
	if double {
		pair := c.numbers[len(c.numbers)-2:]
		pair[0].factor(m, limit, c.right, false)
		pair[1].factor(m, limit, c.right, true)
	}
	return c
}

// sorted orders roots as a model lists them.
func sorted(r []complex128) []complex128 {
	slices.SortFunc(r, func(a, b complex128) int { return cmp.Or(cmp.Compare(real(a), real(b)), cmp.Compare(imag(a), imag(b))) })
	return r
}

// tally sums the trials of one rig.
type tally struct {
	rig                                                           demorig.Rig
	logs, refused, sound, soundShort, right, exact, all, invented int
	tells, rightTold                                              int
	names                                                         []string
	bounded, in                                                   []int     // logs with a bound; with the truth in the interval
	squares                                                       []float64 // of error over bound, summed
}

// study fits logs of a rig, two at a time, and compares with the truth.
func study(t testing.TB, r demorig.Rig, from uint64, logs int) (*tally, []trial) {
	truth := truth(t, r)
	trials := make([]trial, logs)
	if err := Each(context.Background(), logs, 0, func(i int) error {
		trials[i] = one(t, r, truth, from+uint64(i))
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	c := &tally{rig: r, logs: logs}
	for _, p := range sorted(r.Truth.Den.Roots()) {
		c.names = append(c.names, fmt.Sprintf("%.3g", p))
		if imag(p) == 0 {
			c.names[len(c.names)-1] = fmt.Sprintf("%.3g", real(p))
		}
	}
	c.names = append(c.names, "gain")
	if truth.FreeDelay {
		c.names = append(c.names, "delay")
	}
	if r.Truth.Den[0] == 0 && r.Truth.Den[1] == 0 {
		c.names = append(c.names, "sum", "product")
	}
	n := len(c.names)
	c.bounded, c.in = make([]int, n), make([]int, n)
	c.squares = make([]float64, n)
	count := func(n *int, yes bool) {
		if yes {
			*n++
		}
	}
	for _, k := range trials {
		count(&c.refused, k.refused)
		count(&c.sound, k.sound)
		count(&c.soundShort, k.sound && !k.memories)
		count(&c.right, k.right)
		count(&c.exact, k.exact)
		count(&c.all, k.all)
		count(&c.invented, k.invented)
		count(&c.tells, k.tells)
		count(&c.rightTold, k.tells && k.right)
		for i, o := range k.numbers {
			count(&c.in[i], o.in)
			if o.crb > 0 {
				c.bounded[i]++
				c.squares[i] += o.squares / o.crb
			}
		}
	}
	return c, trials
}

// row is the tally's line of the table.
func (c *tally) row() string {
	var ratio, in []string
	for i, name := range c.names {
		v := "-"
		if c.bounded[i] > 0 {
			v = fmt.Sprintf("%.2f", math.Sqrt(c.squares[i]/float64(c.bounded[i])))
			if c.bounded[i] < c.right {
				v += fmt.Sprintf(" (of %d)", c.bounded[i]) // the others hold it exactly
			}
		}
		ratio = append(ratio, name+": "+v)
		in = append(in, fmt.Sprintf("%s: %d", name, c.in[i]))
	}
	return fmt.Sprintf("| %s | %d | %d (%d of %d) | %d | %s | %s | %d | %d | %d |",
		c.rig.Name, c.rig.Rows, c.right, c.rightTold, c.tells, c.exact, strings.Join(ratio, ", "), strings.Join(in, ", "), c.all, c.sound, c.refused)
}

// TestStudyOfDemoRigs counts how often structure and intervals are right, at the
// demo's own length, at 2 000 and at 600 rows. STEADYRIG_STUDY sets the number
// of logs a rig, STEADYRIG_ROWS one length (0: the demo's own), STEADYRIG_RIG
// one rig; the short form in every test run checks that nothing is far off.
func TestStudyOfDemoRigs(t *testing.T) {
	if testing.Short() {
		t.Skip("fits thirty logs")
	}
	logs, lengths := 2, []int{0, 2000, 600}
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		logs, _ = strconv.Atoi(v)
	}
	if v := os.Getenv("STEADYRIG_ROWS"); v != "" {
		rows, _ := strconv.Atoi(v)
		lengths = []int{rows}
	}
	for _, rows := range lengths {
		name := "own length"
		if rows > 0 {
			name = fmt.Sprintf("%d rows", rows)
		}
		t.Run(name, func(t *testing.T) { studyLength(t, rows, logs) })
	}
}

func studyLength(t *testing.T, rows, logs int) {
	var all, tells, right, whole, invented, soundShort, inside, intervals int
	t.Log("| rig | rows | poles right (of logs that can tell) | structure right | error over bound | inside their 95 % intervals | all poles at once | sound | refused |")
	for _, r := range demorig.All() {
		if name := os.Getenv("STEADYRIG_RIG"); name != "" && name != r.Name {
			continue
		}
		if rows > 0 {
			r.Rows = rows
		}
		c, trials := study(t, r, 1000, logs)
		t.Log(c.row())
		for i, k := range trials {
			if k.note != "" {
				t.Logf("    seed %d%s", 1000+i, k.note)
			}
		}
		all, tells, right, whole = all+c.logs, tells+c.tells, right+c.rightTold, whole+c.all
		invented, soundShort = invented+c.invented, soundShort+c.soundShort
		for i, n := range c.in {
			if c.bounded[i] > 0 {
				inside, intervals = inside+n, intervals+c.logs
			}
		}
	}
	pooled := float64(inside) / float64(intervals)
	t.Logf("pooled: %d of %d intervals hold the truth, %.1f %%; %d unstable poles invented, %d logs called sound though short", inside, intervals, 100*pooled, invented, soundShort)
	// At most one log in 20 may have the wrong number of poles where the bound is
	// under a third of every pole. The pooled share of intervals that hold the
	// truth is compared with what is asked, 93 % and on 600 rows 91 %, less 3.3
	// deviations as if the intervals of one log held or failed together.
	n := float64(all)
	if least := tells - max(1, tells/20); right < least {
		t.Errorf("number of poles right in %d of %d logs that can tell, want %d", right, tells, least)
	}
	asked := 0.93
	if rows > 0 && rows < 2000 {
		asked = 0.91
	} else if invented > all/100 {
		t.Errorf("%d unstable poles invented in %d logs", invented, all)
	}
	if least := asked - 3.3*math.Sqrt(asked*(1-asked)/n); pooled < least {
		t.Errorf("%.3f of intervals hold the truth, want %.3f", pooled, least)
	}
	if rows == 0 {
		// All poles of a log at once, in 95 of 100.
		if least := int(0.95*n - 3.3*math.Sqrt(0.95*0.05*n)); whole < least {
			t.Errorf("all poles inside their intervals in %d of %d logs, want %d", whole, all, least)
		}
	}
	if soundShort > 0 {
		t.Errorf("%d logs of less than %d predictor memories called sound", soundShort, soundMemories)
	}
}
