package ident

import (
	"cmp"
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit/lti"
)

// seenAs is how often a change of the size that is printed is called, at the least.
const seenAs = 0.95

// sure is how many deviations a coefficient must lie from zero for what divides by
// it to be compared.
const sure = 5

// comparedDraws is the number of pairs of plants drawn for the intervals of changes
// where a log was short.
const comparedDraws = 4000

// number is one number of a plant, as a function of the plant near either model's.
type number struct {
	name, unit    string
	short         string // name in words that give the value, empty: name
	ratio         bool
	before, after func(lti.TF) float64
}

// side is the plant of one of two models with what that says of the parameters.
type side struct {
	g     lti.TF
	names []string
	cov   *mat.SymDense
	drawn []lti.TF // empty: the estimate is normal
}

func newSide(m *Model, names []string, info *mat.SymDense, seed uint64) side {
	s := side{g: m.TF(), names: names, cov: inverse(info)}
	if len(m.sameForm()) >= drawn/4 && m.form().integrators == 0 {
		for _, g := range m.Draw(comparedDraws, seed) {
			if len(g.Num) == len(m.Plant.Numerator) {
				s.drawn = append(s.drawn, g)
			}
		}
	}
	return s
}

// sd is the deviation of a number, by its derivatives.
func (s side) sd(of func(lti.TF) float64) float64 {
	const part = 1e-2 // of a deviation
	d := mat.NewVecDense(len(s.names), nil)
	for i, name := range s.names {
		var v [2]float64
		step := part * math.Sqrt(s.cov.At(i, i))
		for k, h := range []float64{step, -step} {
			g := lti.TF{Num: slices.Clone(s.g.Num), Den: slices.Clone(s.g.Den), Delay: s.g.Delay}
			*parameter(&g, name) += h
			v[k] = of(g)
		}
		d.SetVec(i, (v[0]-v[1])/(2*step))
	}
	return math.Sqrt(mat.Inner(d, s.cov, d))
}

// some returns the k-th of values drawn of a number with the given value and
// deviation.
func (s side) some(of func(lti.TF) float64, value, sd float64, k int, rnd *rand.Rand) float64 {
	if len(s.drawn) == 0 {
		return value + sd*rnd.NormFloat64()
	}
	return of(s.drawn[k%len(s.drawn)])
}

// polynomial is the denominator or the numerator with its covariance.
func (s side) polynomial(letter byte) uncertain {
	u := uncertain{p: s.g.Den}
	if letter == 'b' {
		u.p = s.g.Num
	}
	u.cov = mat.NewSymDense(len(u.p), nil)
	at := make([]int, len(s.names))
	probe := lti.TF{Num: make(lti.Poly, len(s.g.Num)), Den: make(lti.Poly, len(s.g.Den))}
	for i, name := range s.names {
		at[i] = -1
		if name[0] != letter {
			continue
		}
		x := parameter(&probe, name)
		*x = 1
		at[i] = slices.Index(append(slices.Clone(probe.Den), probe.Num...), 1)
		if letter == 'b' {
			at[i] = slices.Index(probe.Num, 1)
		}
		*x = 0
	}
	for i, a := range at {
		for j, b := range at[:i+1] {
			if a >= 0 && b >= 0 {
				u.cov.SetSym(a, b, s.cov.At(i, j))
			}
		}
	}
	return u
}

// numbers are the changes of the plant: its gain, each pole and zero, the delay. Two
// roots that are a pair in one of the models or may have met are compared by what
// is regular there.
func (t *jointTest) numbers(before, after *Model, rig *data.Rig, seed uint64) []Change {
	b, a := newSide(before, t.at, t.before.Info, seed), newSide(after, t.at, t.after.Info, seed+1)
	form := before.form()
	var list []number
	ratio := cmp.Or(rig.Units.Output, before.Units.Output, "output") + "/" + cmp.Or(rig.Units.Input, before.Units.Input, "input")
	both := func(name, unit string, ratio bool, of func(lti.TF) float64) {
		list = append(list, number{name: name, unit: unit, ratio: ratio, before: of, after: of})
	}
	last := func(s side) bool { // a steady gain is well defined
		u := s.polynomial('a')
		return math.Abs(u.p[0]) > sure*math.Sqrt(u.cov.At(0, 0))
	}
	if form.integrators == 0 && last(b) && last(a) {
		both("gain", ratio, true, lti.TF.DC)
	} else {
		both("gain at high frequency", fmt.Sprintf("%s s^-%d", ratio, form.poles-form.zeros), true, func(g lti.TF) float64 { return g.Num[len(g.Num)-1] })
	}
	list = append(list, matched("pole", b, a, 'a')...)
	lead := func(s side) bool {
		u := s.polynomial('b')
		n := len(u.p) - 1
		return math.Abs(u.p[n]) > sure*math.Sqrt(u.cov.At(n, n))
	}
	if form.zeros > 0 && lead(b) && lead(a) {
		list = append(list, matched("zero", b, a, 'b')...)
	}
	if slices.Contains(t.at, "delay") {
		both("delay", "s", false, func(g lti.TF) float64 { return g.Delay })
	}
	out := make([]Change, 0, len(list))
	for _, n := range list {
		if x, ok := n.change(b, a, seed); ok {
			out = append(out, x)
		}
	}
	return out
}

// change tests one number.
func (n number) change(b, a side, seed uint64) (Change, bool) {
	x := Change{Name: n.name, Unit: n.unit, Before: n.before(b.g), After: n.after(a.g), plant: true, short: n.short}
	x.Ratio = n.ratio && x.Before*x.After > 0
	of1, of2 := n.before, n.after
	if x.Ratio {
		of1 = func(g lti.TF) float64 { return math.Log(math.Abs(n.before(g))) }
		of2 = func(g lti.TF) float64 { return math.Log(math.Abs(n.after(g))) }
	}
	v1, v2, sd1, sd2 := of1(b.g), of2(a.g), b.sd(of1), a.sd(of2)
	sd := math.Hypot(sd1, sd2)
	if !(sd > 0) || math.IsInf(sd, 0) {
		return x, false
	}
	d := v2 - v1
	iv := Interval{d - z95*sd, d + z95*sd}
	x.ProbabilityByChance = twoSided(d / sd)
	if len(b.drawn)+len(a.drawn) > 0 {
		rnd := rand.New(rand.NewPCG(seed, 2))
		draws := make([]float64, comparedDraws)
		for k := range draws {
			draws[k] = a.some(of2, v2, sd2, k, rnd) - b.some(of1, v1, sd1, k, rnd)
		}
		slices.Sort(draws)
		iv = central(draws, Confidence, iv)
		below, _ := slices.BinarySearch(draws, 0)
		side := float64(min(below, len(draws)-below)+1) / float64(len(draws)+1)
		x.ProbabilityByChance = math.Min(1, math.Max(x.ProbabilityByChance, 2*side))
	}
	if x.Ratio {
		iv = Interval{math.Exp(iv.Lo), math.Exp(iv.Hi)}
	}
	x.Interval95 = iv
	return x, !math.IsNaN(iv.Lo + iv.Hi)
}

func twoSided(z float64) float64 { return 2 * distuv.UnitNormal.Survival(math.Abs(z)) }

// cluster is one root, or two that are compared together.
type cluster []complex128

func (c cluster) middle() complex128 {
	var s complex128
	for _, r := range c {
		s += r
	}
	return s / complex(float64(len(c)), 0)
}

// kindOf says what kind of pole or zero c is.
func kindOf(kind string, c cluster) string {
	switch {
	case !(real(c.middle()) > 0):
		return kind
	case kind == "zero":
		return "right-half-plane zero"
	}
	return "unstable pole"
}

// name tells c from the plant's other roots.
func (c cluster) name(kind string) string {
	if len(c) > 1 {
		return fmt.Sprintf("%s pair near %.3g rad/s", kindOf(kind, c), math.Sqrt(cmplx.Abs(c[0]*c[1])))
	}
	return fmt.Sprintf("%s near %.3g rad/s", kindOf(kind, c), real(c[0]))
}

// nearest takes the roots that lie nearest to those of c.
func (c cluster) nearest(roots []complex128) cluster {
	left := slices.Clone(roots)
	out := make(cluster, len(c))
	for i, r := range c {
		at := 0
		for j, v := range left {
			if cmplx.Abs(v-r) < cmplx.Abs(left[at]-r) {
				at = j
			}
		}
		out[i] = left[at]
		left = slices.Delete(left, at, at+1)
	}
	return out
}

// clusters groups roots: conjugate pairs, and real ones that may have met; not those
// at zero, which are integrators.
func clusters(u uncertain) (list []cluster) {
	roots := sortedRoots(u.p)
	used := make([]bool, len(roots))
	for i, r := range roots {
		if used[i] || r == 0 {
			continue
		}
		partner, best := -1, float64(apart)
		for j := i + 1; j < len(roots); j++ {
			if used[j] || roots[j] == 0 || !pairs(r, roots[j]) {
				continue
			}
			d := u.meeting(r, roots[j])
			if imag(r) != 0 {
				d = 0
			}
			if d < best {
				partner, best = j, d
			}
		}
		c := cluster{r}
		if partner >= 0 {
			used[partner] = true
			c = append(c, roots[partner])
		}
		list = append(list, c)
	}
	return list
}

// sortedRoots lists roots by real, then imaginary part.
func sortedRoots(p lti.Poly) []complex128 {
	r := p.Roots()
	slices.SortFunc(r, func(a, b complex128) int { return cmp.Or(cmp.Compare(real(a), real(b)), cmp.Compare(imag(a), imag(b))) })
	return r
}

func twos(list []cluster) (n int) {
	for _, c := range list {
		n += len(c) - 1
	}
	return n
}

// join makes a pair of the two single roots that lie nearest to each other for
// their size; false where there are no two.
func join(list []cluster) ([]cluster, bool) {
	at, with, best := -1, -1, math.Inf(1)
	for i, c := range list {
		for j, d := range list[:i] {
			if len(c) > 1 || len(d) > 1 {
				continue
			}
			if x := cmplx.Abs(c[0]-d[0]) / (cmplx.Abs(c[0]) + cmplx.Abs(d[0])); x < best {
				at, with, best = i, j, x
			}
		}
	}
	if at < 0 {
		return list, false
	}
	out := slices.Clone(list)
	out[with] = cluster{list[with][0], list[at][0]}
	return slices.Delete(out, at, at+1), true
}

// matched pairs the roots of two models and lists what is compared of them.
func matched(kind string, b, a side, letter byte) []number {
	ub, ua := b.polynomial(letter), a.polynomial(letter)
	cb, ca := clusters(ub), clusters(ua)
	for ok := true; ok && twos(cb) != twos(ca); {
		if twos(cb) < twos(ca) {
			cb, ok = join(cb)
		} else {
			ca, ok = join(ca)
		}
	}
	if len(cb) != len(ca) {
		return nil
	}
	polynomial := func(g lti.TF) lti.Poly {
		if letter == 'b' {
			return g.Num
		}
		return g.Den
	}
	near := func(c cluster) func(g lti.TF) cluster {
		return func(g lti.TF) cluster { return c.nearest(polynomial(g).Roots()) }
	}
	var out []number
	for _, c := range cb {
		// The nearest of as many roots that is left.
		at, best := -1, math.Inf(1)
		for j, d := range ca {
			if x := cmplx.Abs(c.middle() - d.middle()); len(d) == len(c) && x < best {
				at, best = j, x
			}
		}
		if at < 0 {
			return out
		}
		d := ca[at]
		ca = slices.Delete(slices.Clone(ca), at, at+1)
		of1, of2 := near(c), near(d)
		add := func(short, name, unit string, what func(cluster) float64) {
			out = append(out, number{name: name, short: short, unit: unit, before: func(g lti.TF) float64 { return what(of1(g)) }, after: func(g lti.TF) float64 { return what(of2(g)) }})
		}
		short, name := kindOf(kind, c), c.name(kind)
		clear := func(u uncertain, c cluster) bool {
			return imag(c[0]) != 0 && u.meeting(c[0], c[1]) >= apart
		}
		switch {
		case len(c) == 1:
			add(short, name, "rad/s", func(c cluster) float64 { return real(c[0]) })
		case clear(ub, c) && clear(ua, d):
			add(short+" pair's frequency", name+", frequency", "rad/s", func(c cluster) float64 { return cmplx.Abs(c[0]) })
			add(short+" pair's damping ratio", name+", damping ratio", "", func(c cluster) float64 { return -real(c[0]) / cmplx.Abs(c[0]) })
		default:
			add("sum of two "+short+"s", name+", sum", "rad/s", func(c cluster) float64 { return real(c[0] + c[1]) })
			add("product of two "+short+"s", name+", product", "(rad/s)^2", func(c cluster) float64 { return real(c[0] * c[1]) })
		}
	}
	return out
}

// noiseLevel compares the deviations of the one-step prediction errors. The variance
// of the logarithm of such a deviation over n rows is (k - 1)/(4n), k the kurtosis of
// the errors (Kendall & Stuart, The Advanced Theory of Statistics 1, 1977, sec. 10.15).
func noiseLevel(before, after *Model, rig *data.Rig) []Change {
	rows := 0
	for _, l := range before.Logs {
		rows += l.Used
	}
	if !samePeriods(before, after) || !(before.Noise.SD > 0 && after.Noise.SD > 0) || rows == 0 {
		return nil
	}
	errs, _, err := after.fitted.p.Errors(after.fitted.f)
	if err != nil {
		return nil
	}
	var n, squares, fourths float64
	for _, e := range errs {
		for _, v := range e {
			n++
			squares += v * v
			fourths += v * v * v * v
		}
	}
	kurtosis := fourths * n / (squares * squares)
	sd := math.Sqrt((kurtosis - 1) / 4 * (1/float64(rows) + 1/n))
	d := math.Log(after.Noise.SD / before.Noise.SD)
	return []Change{{
		Name: "noise level", Unit: cmp.Or(rig.Units.Output, before.Units.Output), Before: before.Noise.SD, After: after.Noise.SD, Ratio: true,
		Interval95: Interval{math.Exp(d - z95*sd), math.Exp(d + z95*sd)}, ProbabilityByChance: twoSided(d / sd),
	}}
}

// offset compares the input at which the plant rests at the earlier model's output.
func offset(before, after *Model, rig *data.Rig) []Change {
	r, s := before.Evidence.Rest, after.Evidence.Rest
	if r == nil || s == nil {
		return nil
	}
	input, sd := s.Input, math.Hypot(r.InputSD, s.InputSD)
	if away := r.Output - s.Output; away != 0 && after.form().integrators == 0 {
		g := after.Gain.DC
		if g == nil {
			return nil
		}
		input += away / g.Value
		sd = math.Hypot(sd, away/g.Value*g.SD/g.Value)
	}
	d := input - r.Input
	if !(sd > 0) {
		return nil
	}
	return []Change{{
		Name: "input at rest", Unit: cmp.Or(rig.Units.Input, before.Units.Input), Before: r.Input, After: input,
		Interval95: Interval{d - z95*sd, d + z95*sd}, ProbabilityByChance: twoSided(d / sd),
	}}
}

// Where the input stays flat.
const (
	fewestFlat = 5    // rows at its end value
	flatGrid   = 1e-3 // of the range, steps in which values are counted where they lie on no coarser grid
	flatSteps  = 10   // below the end, which are counted beside it
	mostFlat   = 0.2  // share of the rows at both ends, from where on the input switches between them
)

// actuator compares the ends at which the input stays flat in the new logs with the
// limits of the rig file. Rows fall off towards the end of a range that nothing
// limits, so of those in the last step and the ten before it the last holds no more
// than an eleventh but by chance: a binomial test. An input that does not get to an
// end says nothing of it.
func actuator(exps []*data.Experiment, rig *data.Rig) []Change {
	if rig.Limits.Input == nil {
		return nil
	}
	var u []float64
	step := 0.0
	for _, e := range exps {
		step = math.Max(step, e.InputStep)
		for _, s := range e.Segments {
			u = append(u, s.U...)
		}
	}
	if len(u) == 0 {
		return nil
	}
	lo, hi := slices.Min(u), slices.Max(u)
	step = math.Max(step, flatGrid*(hi-lo))
	ends := 0
	for _, v := range u {
		if v < lo+step/2 || v > hi-step/2 {
			ends++
		}
	}
	if float64(ends) > mostFlat*float64(len(u)) {
		return nil
	}
	var out []Change
	for i, end := range []float64{lo, hi} {
		limit := rig.Limits.Input[i]
		flat, beside := 0, 0
		for _, v := range u {
			switch d := math.Abs(v - end); {
			case d < step/2:
				flat++
			case d < step/2+flatSteps*step:
				beside++
			}
		}
		if flat < fewestFlat {
			continue
		}
		p := distuv.Binomial{N: float64(flat + beside), P: 1.0 / (flatSteps + 1)}.Survival(float64(flat) - 1)
		if p > MovedLevel {
			continue // a range that nothing limits
		}
		if math.Abs(end-limit) < step {
			end, p = limit, 1
		}
		d := end - limit
		out = append(out, Change{
			Name: [2]string{"actuator's lower end", "actuator's upper end"}[i], Unit: rig.Units.Input, Before: limit, After: end,
			Interval95: Interval{d - step/2, d + step/2}, ProbabilityByChance: p,
		})
	}
	return out
}

// scaling is a plant with one of its numbers times a factor, all others as they are.
type scaling struct {
	name string
	by   func(f float64) lti.TF
}

// scalings lists those of a plant: gain, each pole and zero or pair of them, the
// leading coefficients held, and the delay.
func scalings(b side) []scaling {
	g := b.g
	list := []scaling{{"gain", func(f float64) lti.TF { return lti.TF{Num: g.Num.Scale(f), Den: g.Den, Delay: g.Delay} }}}
	roots := func(kind string, letter byte, p lti.Poly, with func(lti.Poly) lti.TF) {
		for _, c := range clusters(b.polynomial(letter)) {
			list = append(list, scaling{c.name(kind), func(f float64) lti.TF {
				all := p.Roots()
				for _, r := range c.nearest(all) {
					all[slices.Index(all, r)] *= complex(f, 0)
				}
				return with(lti.FromRoots(all).Scale(p[len(p)-1]))
			}})
		}
	}
	roots("pole", 'a', g.Den, func(p lti.Poly) lti.TF { return lti.TF{Num: g.Num, Den: p, Delay: g.Delay} })
	roots("zero", 'b', g.Num, func(p lti.Poly) lti.TF { return lti.TF{Num: p, Den: g.Den, Delay: g.Delay} })
	if slices.Contains(b.names, "delay") && g.Delay > 0 {
		list = append(list, scaling{"delay", func(f float64) lti.TF { return lti.TF{Num: g.Num, Den: g.Den, Delay: f * g.Delay} }})
	}
	return list
}

// away is what a plant's parameters differ by from another's.
func (t *jointTest) away(h, g lti.TF) *mat.VecDense {
	d := mat.NewVecDense(len(t.at), nil)
	for i, name := range t.at {
		d.SetVec(i, *parameter(&h, name)-*parameter(&g, name))
	}
	return d
}

// alone finds the single numbers a change of which explains what moved: the change of
// one that brings the earlier plant nearest to the new one, by both covariances, and
// the chi-square test of what is left, one degree of freedom less. Numbers that are
// known badly by themselves may be known well if nothing else moved.
func (t *jointTest) alone(before *Model, after *Model) []Alone {
	b, g := side{g: before.TF(), names: t.at, cov: inverse(t.before.Info)}, after.TF()
	list := []Alone{}
	for _, s := range scalings(b) {
		x, sd, left := 0.0, 0.0, math.Inf(1) // x is the logarithm of the factor
		for range 20 {
			const h = 1e-4
			d, slope := t.away(g, s.by(math.Exp(x))), t.away(s.by(math.Exp(x+h)), s.by(math.Exp(x-h)))
			slope.ScaleVec(1/(2*h), slope)
			info := mat.Inner(slope, t.sum, slope)
			left, sd = mat.Inner(d, t.sum, d), 1/math.Sqrt(info)
			step := mat.Inner(slope, t.sum, d) / info
			x += math.Max(-0.5, math.Min(0.5, step))
			if math.Abs(step) < 1e-6*sd {
				break
			}
		}
		p := noncentral(left, t.freedom-1, t.allowance)
		if t.freedom > 1 && p >= MovedLevel && sd < 1 {
			list = append(list, Alone{s.name, math.Exp(x), Interval{math.Exp(x - z95*sd), math.Exp(x + z95*sd)}, p})
		}
	}
	slices.SortStableFunc(list, func(a, b Alone) int { return cmp.Compare(b.ProbabilityLeft, a.ProbabilityLeft) })
	return list
}

// visible finds the changes that the joint test calls in 95 of 100 pairs of logs. A
// change δ of the parameters gives the statistic the non-centrality δ' (Σ1 + Σ2)^-1 δ;
// what the structure misses may take its allowance off that. Of either sign, and of
// a pole with the gain held at high frequency or at rest, the less visible counts.
func (c *Comparison) visible(before *Model, t *jointTest) {
	limit := bisect(0, 1e4+10*t.allowance, func(x float64) bool { return noncentral(x, t.freedom, t.allowance) < MovedLevel })
	need := bisect(t.allowance, 4*limit+1e3, func(l float64) bool { return noncentral(limit, t.freedom, l) >= seenAs })
	need = math.Pow(math.Sqrt(need)+math.Sqrt(t.allowance), 2)
	g := before.TF()
	seen := func(h lti.TF) bool {
		d := t.away(h, g)
		return mat.Inner(d, t.sum, d) >= need
	}
	add := func(name string, changed func(factor float64) []lti.TF) {
		v := Visible{Name: name, Power: seenAs}
		all := func(x float64) bool {
			for _, f := range []float64{1 + x, 1 / (1 + x)} {
				for _, h := range changed(f) {
					if !seen(h) {
						return false
					}
				}
			}
			return true
		}
		if all(1) {
			x := bisect(0, 1, all)
			v.Size = &x
		}
		c.Visible = append(c.Visible, v)
	}
	add("gain", func(f float64) []lti.TF { return []lti.TF{{Num: g.Num.Scale(f), Den: g.Den, Delay: g.Delay}} })
	worst := slices.MaxFunc(before.Poles, func(a, b Root) int { return cmp.Or(cmp.Compare(a.Re, b.Re), cmp.Compare(a.Im, b.Im)) })
	if !(worst.Re > 0) || worst.ProbabilityUnstable < 0.975 {
		return
	}
	at := cluster{complex(worst.Re, worst.Im)}
	if worst.Im != 0 {
		at = append(at, cmplx.Conj(at[0]))
	}
	add("unstable pole", func(f float64) []lti.TF {
		roots := g.Den.Roots()
		for _, p := range at.nearest(roots) {
			roots[slices.Index(roots, p)] *= complex(f, 0)
		}
		h := lti.TF{Num: g.Num, Den: lti.FromRoots(roots), Delay: g.Delay}
		return []lti.TF{h, {Num: g.Num.Scale(math.Pow(f, float64(len(at)))), Den: h.Den, Delay: g.Delay}}
	})
}

// bisect returns the least x between lo and hi from which on f holds, where it does
// at hi.
func bisect(lo, hi float64, f func(float64) bool) float64 {
	for range 60 {
		if mid := (lo + hi) / 2; f(mid) {
			hi = mid
		} else {
			lo = mid
		}
	}
	return hi
}
