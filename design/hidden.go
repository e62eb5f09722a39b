package design

import (
	"cmp"
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// HiddenMode is a pole of the plant or of a controller outside the unit circle, or on it, with a zero elsewhere in the
// loop that cancels it on a plant that the data allow, or nearly so. What it does hardly shows in the response to a
// reference step, and grows. Poles, zeros and rates in rad/s, of z through ln(z)/period.
type HiddenMode struct {
	PoleOf string     `json:"pole_of"` // "plant", "inner", "outer"
	ZeroOf string     `json:"zero_of"` // these, or "1 + outer"
	Pole   [2]float64 `json:"pole"`    // re, im
	Zero   [2]float64 `json:"zero"`
	// Growth of the closed loop's mode; nil where no mode of the loop grows there.
	Growth *Growth `json:"growth"`
}

// Growth is what a growing mode of the linear sampled loop does before anything holds it.
type Growth struct {
	Rate [2]float64 `json:"rate"` // re, im
	// Moved says that the loop is stable about the nominal plant and that these are figures of the plant with its pole
	// at the zero.
	Moved bool `json:"moved"`
	// Signal is the one of "output" and "input" that gets to Level first, a deviation: the lesser trip level of the
	// output, or the spec's step where none is given; the input's lesser limit.
	Signal string  `json:"signal"`
	Level  float64 `json:"level"`
	// Seconds from rest until a step of one unit of input, added at the plant input, has driven the signal there, and
	// until the standard deviation of what the identified noise does is as large; nil: it does not.
	ByUnit  *float64 `json:"by_unit_step"`
	ByNoise *float64 `json:"by_noise"`
}

// pairings are the zeros that can hide a pole, by where the pole is: in the series of 1 + K2, K1 and the plant, closed by
// negative feedback, any later or earlier zero. K2's own zeros hide its poles from 1 + K2 as well.
var pairings = []struct{ pole, zero string }{
	{"plant", "inner"}, {"plant", "1 + outer"},
	{"inner", "inner"}, {"inner", "1 + outer"}, {"inner", "plant"},
	{"outer", "outer"}, {"outer", "inner"}, {"outer", "plant"},
}

// A root is a pole or zero with the disc in which it counts as met; in the s-plane.
type root struct {
	at     complex128
	radius float64
	text   string // for messages; empty: rateText of at
}

// hidden finds the first pair of a pole that may be unstable and a zero upon it, nil if there is none.
func (p *problem) hidden(law *lti.Law) (*HiddenMode, *ident.RefusedError) {
	poles, zeros := p.unstableRoots(law)
	for _, pair := range pairings {
		for _, pole := range poles[pair.pole] {
			for _, zero := range zeros[pair.zero] {
				r := reach(pole, zero, pair.pole == pair.zero, integratorShare/p.spec.settling)
				if !(cmplx.Abs(folded(pole.at)-folded(zero.at)) < r) {
					continue
				}
				m := &HiddenMode{
					PoleOf: pair.pole, ZeroOf: pair.zero,
					Pole: [2]float64{real(pole.at), imag(pole.at)}, Zero: [2]float64{real(zero.at), imag(zero.at)},
				}
				m.Growth = p.growth(law, pair.pole, pole.at, zero.at, 1.5*r)
				return m, p.tell(m, pole, zero)
			}
		}
	}
	return nil, nil
}

// integratorShare: rates below this share of 1/settling count as those of an integrator.
const integratorShare = 0.02

// ownShare is how close to its pole, as a share of its size, a zero of an exactly known pole hides it.
const ownShare = 0.01

// reach is the distance within which a pole and a zero count as met: the disc of the plant's one; of poles without a
// disc, which a controller has, a hundredth of their size, and of an integrator slow, which is slow against the settling
// time. own: both belong to one controller.
func reach(pole, zero root, own bool, slow float64) float64 {
	switch size := cmplx.Abs(pole.at); {
	case size < slow && own:
		return ownShare * slow // a slow zero beside an integrator is how slow integral action looks
	case size < slow:
		return slow // the disc of a plant's zero would forbid integrators that are none of its business
	default:
		return max(pole.radius, zero.radius, ownShare*size)
	}
}

// folded is the member of a pair with positive imaginary part.
func folded(s complex128) complex128 { return complex(real(s), math.Abs(imag(s))) }

// unstableRoots lists, by block, the poles that may lie outside the unit circle or on it, and all zeros.
func (p *problem) unstableRoots(law *lti.Law) (poles, zeros map[string][]root) {
	poles, zeros = map[string][]root{}, map[string][]root{}
	for _, r := range p.regions[:len(p.regions)-1] {
		poles["plant"] = append(poles["plant"], root{r.center, r.radius, r.pole})
	}
	for _, r := range p.model.Zeros {
		if r.Im >= 0 {
			zeros["plant"] = append(zeros["plant"], root{at: complex(r.Re, r.Im), radius: regionOf(r).radius})
		}
	}
	rate := func(z complex128) complex128 { return cmplx.Log(z) / complex(p.period, 0) }
	for _, z := range (lti.DTF{Num: p.nominal.num, Den: lti.Poly{1}}).Zeros() {
		if real(z) < 0 && cmplx.Abs(z) > 1 { // no zero of the plant itself: sampling makes them
			s := rate(z)
			zeros["plant"] = append(zeros["plant"], root{at: s, radius: cancelMargin * real(s)})
		}
	}
	controller := func(name string, g lti.DTF) {
		for _, z := range g.Poles() {
			if cmplx.Abs(z) > 1-onCircle && imag(z) >= 0 {
				poles[name] = append(poles[name], root{at: rate(z)})
			}
		}
		for _, z := range g.Zeros() {
			if cmplx.Abs(z) > 1e-6 && imag(z) >= 0 { // a zero at z = 0 is a sample of delay taken back, far from any pole
				zeros[name] = append(zeros[name], root{at: rate(z)})
			}
		}
	}
	controller("inner", law.Inner)
	if o := law.Outer; o != nil {
		controller("outer", *o)
		controller("1 + outer", lti.DTF{Num: o.Num.Add(o.Den), Den: lti.Poly{1}, Period: o.Period})
	}
	return poles, zeros
}

// growth follows the mode of the closed loop that hides within reach of a pole, about the nominal plant; where none
// grows there, and the pole is the plant's, about the plant with its pole at the zero. nil where nothing grows.
func (p *problem) growth(law *lti.Law, poleOf string, pole, zero complex128, reach float64) *Growth {
	g := p.model.TF()
	if out := p.growthAbout(g, law, pole, reach); out != nil || poleOf != "plant" {
		return out
	}
	out := p.growthAbout(moved(g, pole, zero), law, zero, reach)
	if out != nil {
		out.Moved = true
	}
	return out
}

// moved returns g with the pole nearest to from, and its conjugate, at to.
func moved(g lti.TF, from, to complex128) lti.TF {
	poles := g.Poles()
	nearest := slices.MinFunc(poles, func(a, b complex128) int { return cmp.Compare(cmplx.Abs(a-from), cmplx.Abs(b-from)) })
	var rest []complex128
	for _, s := range poles {
		if s != nearest && s != cmplx.Conj(nearest) {
			rest = append(rest, s)
		}
	}
	rest = append(rest, to)
	if imag(to) != 0 {
		rest = append(rest, cmplx.Conj(to))
	}
	for len(rest) < len(poles) { // of a double real pole, or of a pair that met the axis, one stays
		rest = append(rest, complex(real(nearest), 0))
	}
	lead := g.Den[g.Den.Degree()]
	return lti.TF{Num: g.Num, Den: lti.FromRoots(rest).Scale(lead), Delay: g.Delay}
}

// growthAbout computes the growth of the growing mode of the closed loop about a plant that is nearest to near (rad/s),
// nil if there is none within reach. It is an eigenvalue of the realised and joined blocks, so that a mode that no transfer function shows is
// there; its share in a signal is its residue (c w)(v* b)/(v* w), with right and left eigenvectors w, v.
func (p *problem) growthAbout(g lti.TF, law *lti.Law, near complex128, reach float64) *Growth {
	t, err := lti.NewTwoLoops(g, p.compute, law)
	if err != nil {
		return nil
	}
	noisy := false
	if shape, err := p.model.Colour(); err == nil && p.model.Noise.SamplePeriod == p.period && p.model.Noise.SD > 0 {
		late := g
		late.Delay += p.compute
		if n, err := lti.NoisyPlant(late, shape); err == nil {
			t.Plant, noisy = n, true
		}
	}
	closed := t.Closed()
	n := closed.Order()
	x := mat.DenseCopyOf(closed.A)
	for i := range n {
		x.Set(i, i, x.At(i, i)-1) // eigenvalues of A - I keep those near z = 1 apart
	}
	var e mat.Eigen
	if n == 0 || !e.Factorize(x, mat.EigenBoth) {
		return nil
	}
	best, least := -1, reach
	values := e.Values(nil)
	for i, d := range values {
		if !(cmplx.Abs(1+d) > 1+stableWithin) || imag(d) < 0 {
			continue
		}
		s := cmplx.Log(1+d) / complex(p.period, 0)
		if off := cmplx.Abs(folded(s) - folded(near)); off < least {
			best, least = i, off
		}
	}
	if best < 0 {
		return nil
	}
	z := 1 + values[best]
	rate := cmplx.Log(z) / complex(p.period, 0)
	out := &Growth{Rate: [2]float64{real(rate), imag(rate)}}
	var right, left mat.CDense
	e.VectorsTo(&right)
	e.LeftVectorsTo(&left)
	residue := func(from, to int) complex128 {
		var cw, vb, vw complex128
		for i := range n {
			w, v := right.At(i, best), cmplx.Conj(left.At(i, best))
			cw += complex(closed.C.At(to, i), 0) * w
			vb += v * complex(closed.B.At(i, from), 0)
			vw += v * w
		}
		return cw * vb / vw
	}
	steady := p.steady(closed)
	noise := lti.FromPlantNoise
	level := map[string]float64{"output": p.spec.step, "input": math.Min(-p.input[0], p.input[1])}
	if p.output != nil {
		level["output"] = math.Min(-p.output[0], p.output[1])
	}
	for _, signal := range []string{"output", "input"} {
		to := map[string]int{"output": lti.ToOutput, "input": lti.ToInput}[signal]
		unit := p.reached(z, residue(lti.FromDisturbance, to)/(z-1), steady[to], level[signal])
		var chance *float64
		if noisy {
			r := residue(noise, to) * complex(p.model.Noise.SD, 0)
			// The variance of sum r z^(k-1-i) e_i is |r|^2 (|z|^2k - 1)/(|z|^2 - 1); of a pair twice that.
			sd := cmplx.Abs(r)
			if imag(z) != 0 {
				sd *= math.Sqrt2
			}
			a := cmplx.Abs(z)
			q := level[signal] / sd
			chance = p.seconds(math.Log1p(q*q*(a*a-1)) / (2 * math.Log(a)))
		}
		if out.Signal == "" || earlier(unit, out.ByUnit) {
			out.Signal, out.Level, out.ByUnit, out.ByNoise = signal, level[signal], unit, chance
		}
	}
	return out
}

// steady returns the value at rest of output and input per step at the plant input, growing modes apart: the transfer
// functions at z = 1. Zero where a pole lies there.
func (p *problem) steady(closed lti.SS) (s [2]float64) {
	n := closed.Order()
	m, b := mat.NewDense(n, n, nil), mat.NewVecDense(n, nil)
	for i := range n {
		for j := range n {
			m.Set(i, j, -closed.A.At(i, j))
		}
		m.Set(i, i, 1+m.At(i, i))
		b.SetVec(i, closed.B.At(i, lti.FromDisturbance))
	}
	var x mat.VecDense
	if x.SolveVec(m, b) != nil {
		return s
	}
	for _, to := range []int{lti.ToOutput, lti.ToInput} {
		s[to] = mat.Dot(closed.C.RowView(to), &x) + closed.D.At(to, lti.FromDisturbance)
	}
	return s
}

// reached returns the seconds until a step in the direction that gets there first takes a signal to level: from rest the
// signal is steady + share z^k, of a pair steady + 2 Re(share z^k). nil where the mode does not show.
func (p *problem) reached(z, share complex128, steady, level float64) *float64 {
	size, rest := cmplx.Abs(share), level-math.Copysign(steady, steady*real(share))
	if imag(z) != 0 {
		size, rest = 2*size, level-math.Abs(steady)
	}
	if !(size > 1e-12*level) {
		return nil
	}
	k := math.Max(0, math.Log(rest/size)/math.Log(cmplx.Abs(z))) // the envelope is there
	if math.IsNaN(k) {
		k = 0 // at rest it is there already
	}
	if imag(z) != 0 {
		for turn, j := 2*math.Pi/math.Abs(cmplx.Phase(z)), 0.0; j <= turn; j++ {
			if math.Abs(steady+2*real(share*cmplx.Pow(z, complex(k+j, 0)))) >= level {
				k += j
				break
			}
		}
	}
	return p.seconds(k)
}

// seconds is a time of so many samples; nil: never.
func (p *problem) seconds(samples float64) *float64 {
	if !(samples <= math.MaxFloat64) {
		return nil
	}
	t := samples * p.period
	return &t
}

func earlier(a, b *float64) bool { return a != nil && (b == nil || *a < *b) }

// blockWords are the blocks in sentences.
var blockWords = map[string]string{
	"plant": "the plant", "inner": "the inner controller", "outer": "the outer controller", "1 + outer": "1 + K2, K2 the outer controller,",
}

// tell writes the refusal for a hidden mode.
func (p *problem) tell(m *HiddenMode, pole, zero root) *ident.RefusedError {
	at := func(s complex128) string {
		return fmt.Sprintf("%s rad/s (z = %s)", rateText(s), rateText(cmplx.Exp(s*complex(p.period, 0))))
	}
	where := pole.text
	if where == "" {
		where = at(pole.at)
	}
	integrator := cmplx.Abs(pole.at) < integratorShare/p.spec.settling
	var r ident.RefusedError
	switch {
	case m.PoleOf == "outer" && integrator:
		r.What = fmt.Sprintf("a zero of %s at %s cancels the integrator of the outer loop: a steady error remains, and v drifts", blockWords[m.ZeroOf], at(zero.at))
		r.Do = "move the zero away from z = 1"
		if m.ZeroOf == "outer" {
			r.Do = "take both out of the outer controller"
		}
	case m.PoleOf == m.ZeroOf:
		r.What = fmt.Sprintf("%s has an unstable pole of its own at %s with a zero upon it, which hides it and does not stop it", blockWords[m.PoleOf], at(pole.at))
		r.Do = "take both out"
	case m.PoleOf == "plant":
		r.What = fmt.Sprintf("a zero of %s at %s lies in the region of the plant's pole at %s", blockWords[m.ZeroOf], at(zero.at), where)
		r.Do = "move the zero well away; an unstable pole has to be moved by feedback, never cancelled"
	default:
		r.What = fmt.Sprintf("the unstable pole of %s at %s lies upon a zero of %s at %s", blockWords[m.PoleOf], where, blockWords[m.ZeroOf], at(zero.at))
		r.Do = "use a controller without unstable poles, or move this one well away"
	}
	r.What += p.growthText(m)
	return &r
}

// growthText says how the mode grows, beginning with a colon; empty where it does not.
func (p *problem) growthText(m *HiddenMode) string {
	g := m.Growth
	if g == nil {
		return ""
	}
	text := ": the output's response to a reference step hardly shows that mode, and it grows"
	if g.Moved {
		text = ": if the plant's pole lay on that zero, its mode would not show in the response to a reference step and would grow"
	}
	text += fmt.Sprintf(" by e every %.3g s, tenfold every %.3g s", 1/g.Rate[0], math.Ln10/g.Rate[0])
	unit, first := p.rig.Units.Input, ""
	if unit == "" {
		unit = "unit"
	}
	to := fmt.Sprintf("the %s to its limit, %.3g%s off", g.Signal, g.Level, unitOf(p.rig.Units.Input))
	if g.Signal == "output" {
		to = fmt.Sprintf("the output to its trip level, %.3g%s off", g.Level, unitOf(p.rig.Units.Output))
		if p.output == nil {
			to = fmt.Sprintf("the output the spec's step of %.3g%s off", g.Level, unitOf(p.rig.Units.Output))
		}
	}
	switch {
	case g.ByUnit == nil:
	case *g.ByUnit < p.period:
		first = fmt.Sprintf("; a step of one %s at the plant input drives %s at once", unit, to)
	default:
		first = fmt.Sprintf("; after %.3g s a step of one %s at the plant input has driven %s", *g.ByUnit, unit, to)
	}
	if g.ByNoise != nil {
		if first == "" {
			return text + fmt.Sprintf("; after %.3g s noise has driven %s", *g.ByNoise, to)
		}
		first += fmt.Sprintf("; noise alone takes %.3g s", *g.ByNoise)
	}
	return text + first
}
