package fit

import (
	"cmp"
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// PoleNumber is a number about a pole, or about two that may meet.
type PoleNumber int

const (
	RealPole    PoleNumber = iota // a real pole
	LargestReal                   // real part of a pair, or the larger of two real poles
	PairFreq                      // imaginary part of a pair
)

// PoleRange projects a region on a number about a pole: a value belongs to the interval if the region holds any plant
// that has it. The region's level is that of the whole plant, so the interval covers at least as often.
type PoleRange struct {
	*Region
	number PoleNumber
	unit   []float64 // what one unit of each remaining unknown is
	center float64
	start  []float64 // the remaining unknowns at center
}

// How hard a plant in the region is looked for.
const (
	descentSteps = 40
	ratioSteps   = 10    // down the ratio of statistics, where descent did not find one
	ratioStep    = 0.05  // of its differences, in units that double the statistic
	endShare     = 0.005 // of the distance to the center, to which an end is found
	farthest     = 300   // steps out to which an end is looked for
)

// PoleRange prepares the interval of a number about the pole of start nearest to the one at near. The tuned model gives the
// weights, start only where to begin. ok is false where no plant near start is in the region.
func (s *SignSums) PoleRange(number PoleNumber, near complex128, tuned, start *Prediction) (p *PoleRange, ok bool) {
	p = &PoleRange{number: number}
	at := near / complex(s.w0, 0)
	unknowns := func(m *Prediction) (float64, []float64) {
		num, den := s.scaledPlant(m.Num, m.Den)
		value, x := splitPole(number, den, at)
		eta := append(append([]float64(nil), num...), x...)
		if s.shape.FreeDelay {
			eta = append(eta, m.Delay*s.w0)
		}
		return value, eta
	}
	value, eta := unknowns(tuned)
	p.unit = slices.Repeat([]float64{1}, len(eta))
	for i := range s.shape.Zeros + 1 {
		p.unit[i] = floats.Norm(eta[:s.shape.Zeros+1], math.Inf(1))
	}
	for i := range eta {
		eta[i] /= p.unit[i]
	}
	p.Region = &Region{SignSums: s} // for its plants alone
	focus := p.gradient(value, eta)
	p.Region = s.Region(focus)

	p.center, p.start = unknowns(start)
	for i := range p.start {
		p.start[i] /= p.unit[i]
	}
	for range s.constants {
		p.start = append(p.start, 0)
		p.unit = append(p.unit, math.Sqrt(tuned.Variance))
	}
	if eta, ok := p.find(p.center, p.start); ok {
		p.start = eta
		return p, true
	}
	// With the value free as well there are as many unknowns as sums.
	all := p.descend(append([]float64{p.center}, p.start...), func(x []float64) []float64 { return p.phi(x[0], x[1:]) })
	p.center, p.start = all[0], all[1:]
	return p, p.holds(p.phi(p.center, p.start))
}

// splitPole writes a denominator as a factor that has the number and a monic rest: the value, then the factor's other
// unknown, if any, and the rest's coefficients but the last.
func splitPole(number PoleNumber, den lti.Poly, near complex128) (float64, []float64) {
	roots := den.Roots()
	take := func(distance func(complex128) float64) complex128 {
		i := slices.Index(roots, slices.MinFunc(roots, func(a, b complex128) int { return cmp.Compare(distance(a), distance(b)) }))
		r := roots[i]
		roots = slices.Delete(roots, i, i+1)
		return r
	}
	r := take(func(z complex128) float64 { return cmplx.Abs(z - near) })
	value, x := real(r), []float64(nil)
	if number == RealPole {
		if imag(r) != 0 { // the partner becomes real, too
			other := take(func(z complex128) float64 { return cmplx.Abs(z - cmplx.Conj(r)) })
			roots = append(roots, complex(real(other), 0))
		}
	} else {
		var other complex128
		if imag(r) != 0 {
			other = take(func(z complex128) float64 { return cmplx.Abs(z - cmplx.Conj(r)) })
		} else {
			other = take(func(z complex128) float64 { return cmplx.Abs(z-r) + 1e9*math.Abs(imag(z)) })
		}
		switch {
		case number == PairFreq:
			value, x = math.Abs(imag(r)), []float64{(real(r) + real(other)) / 2}
		case imag(r) != 0:
			x = []float64{imag(r) * imag(r)}
		default:
			value = math.Max(real(r), real(other))
			x = []float64{math.Min(real(r), real(other)) - value}
		}
	}
	rest := lti.FromRoots(roots)
	return value, append(x, rest[:len(rest)-1]...)
}

// plant is the inverse of splitPole for the unknowns eta of a value.
func (p *PoleRange) plant(value float64, eta []float64) (num, den lti.Poly, tau float64) {
	x := make([]float64, len(eta))
	for i, v := range eta {
		x[i] = v * p.unit[i]
	}
	num, x = lti.Poly(x[:p.shape.Zeros+1]), x[p.shape.Zeros+1:]
	factor := lti.Poly{-value, 1}
	switch {
	case p.number == LargestReal && x[0] < 0: // two real poles, -x[0] apart
		factor, x = lti.Poly{value * (value + x[0]), -2*value - x[0], 1}, x[1:]
	case p.number == LargestReal:
		factor, x = lti.Poly{value*value + x[0], -2 * value, 1}, x[1:]
	case p.number == PairFreq:
		factor, x = lti.Poly{x[0]*x[0] + value*value, -2 * x[0], 1}, x[1:]
	}
	k := p.shape.Poles - (len(factor) - 1)
	den = factor.Mul(append(lti.Poly(x[:k:k]), 1))
	tau = p.fixed
	if p.shape.FreeDelay {
		tau = x[k]
	}
	return num, den, tau
}

// phi are the coefficients of the residuals, the delay held within its range.
func (p *PoleRange) phi(value float64, eta []float64) []float64 {
	num, den, tau := p.plant(value, eta)
	tau = math.Min(math.Max(tau, float64(p.opt.Whole[0])*p.period), (float64(p.opt.Whole[1])+1-1e-9)*p.period)
	k := len(eta) - len(p.constants)
	constants := make([]float64, len(p.constants))
	for i := range constants {
		constants[i] = eta[k+i] * p.unit[k+i]
	}
	return p.coefficients(num, den, tau, constants)
}

const slopeStep = 1e-5 // of differences, of a scaled unknown

// gradient is that of the value by b_0 … b_m, a_1 … a_n and a free delay: what a step along it does to the value and
// not to the other unknowns.
func (p *PoleRange) gradient(value float64, eta []float64) []float64 {
	theta := func(x []float64) []float64 {
		num, den, tau := p.plant(x[0], x[1:])
		t := append([]float64(nil), num...)
		for i := len(den) - 2; i >= 0; i-- {
			t = append(t, den[i])
		}
		if p.shape.FreeDelay {
			t = append(t, tau)
		}
		return t
	}
	x := append([]float64{value}, eta...)
	j := slopes(theta, x, slopeStep)
	first, g := mat.NewVecDense(len(x), nil), mat.NewVecDense(len(x), nil)
	first.SetVec(0, 1)
	if err := g.SolveVec(j.T(), first); err != nil && math.IsInf(mat.Norm(g, 1), 0) {
		return nil
	}
	return g.RawVector().Data
}

// slopes returns the derivatives of f by central differences of relative step h, a column for each unknown.
func slopes(f func([]float64) []float64, x []float64, h float64) *mat.Dense {
	var j *mat.Dense
	y := append([]float64(nil), x...)
	for k := range x {
		step := h * math.Max(1, math.Abs(x[k]))
		y[k] = x[k] + step
		up := f(y)
		y[k] = x[k] - step
		down := f(y)
		y[k] = x[k]
		if j == nil {
			j = mat.NewDense(len(up), len(x), nil)
		}
		for i := range up {
			j.Set(i, k, (up[i]-down[i])/(2*step))
		}
	}
	return j
}

// deviations returns the weighed sums of the true draw, whose squares make the statistic.
func (r *Region) deviations(phi []float64) []float64 {
	x := r.sums[0]
	var z []float64
	for k := 0; k < len(x); k += len(phi) {
		z = append(z, floats.Dot(x[k:k+len(phi)], phi))
	}
	return z
}

// descend makes the true draw's statistic least by Levenberg's and Marquardt's method.
func (p *PoleRange) descend(x []float64, phi func([]float64) []float64) []float64 {
	at := func(x []float64) []float64 { return p.deviations(phi(x)) }
	z := at(x)
	t := floats.Dot(z, z)
	damping := 1e-4
	for range descentSteps {
		h, g := normal(slopes(at, x, slopeStep), z)
		better := false
		for range 8 {
			step := make([]float64, len(x))
			if solveScaled(step, h, g, damping) {
				y := append([]float64(nil), x...)
				floats.Sub(y, step)
				zy := at(y)
				if ty := floats.Dot(zy, zy); ty < t {
					better = t-ty > 1e-6*t
					x, z, t = y, zy, ty
					damping = math.Max(damping/10, 1e-12)
					break
				}
			}
			damping = math.Max(damping*8, 1e-8)
		}
		if !better {
			break
		}
	}
	return x
}

// normal returns J'J and J'z.
func normal(j *mat.Dense, z []float64) (*mat.SymDense, []float64) {
	_, n := j.Dims()
	h := mat.NewSymDense(n, nil)
	h.SymOuterK(1, j.T())
	g := mat.NewVecDense(n, nil)
	g.MulVec(j.T(), mat.NewVecDense(len(z), z))
	return h, g.RawVector().Data
}

// find looks for a plant in the region that has the value, from eta on, and returns its unknowns. Least of the true
// statistic comes first; where that is not in the region, what counts is its ratio to the Largest-largest of the draws,
// which vary with the plant, too.
func (p *PoleRange) find(value float64, eta []float64) ([]float64, bool) {
	phi := func(eta []float64) []float64 { return p.phi(value, eta) }
	eta = p.descend(eta, phi)
	if p.holds(phi(eta)) {
		return eta, true
	}
	z := p.deviations(phi(eta))
	h, _ := normal(slopes(func(x []float64) []float64 { return p.deviations(phi(x)) }, eta, slopeStep), z)
	l, ok := root(h)
	if !ok {
		return nil, false
	}
	// One unit of the search doubles the statistic.
	var inv mat.TriDense
	if inv.InverseTri(l) != nil {
		return nil, false
	}
	size := floats.Norm(z, 2)
	moved := func(x []float64) []float64 {
		var step mat.VecDense
		step.MulVec(inv.T(), mat.NewVecDense(len(x), x))
		y := append([]float64(nil), eta...)
		floats.AddScaled(y, size, step.RawVector().Data)
		return y
	}
	ratio := func(x []float64) []float64 { return []float64{math.Log(p.ratio(phi(moved(x))))} }
	x := make([]float64, len(eta))
	least := ratio(x)[0]
	reach := 1.0
	for range ratioSteps {
		slope := slopes(ratio, x, ratioStep).RawRowView(0)
		length := floats.Norm(slope, 2)
		better := false
		for range 5 {
			y := append([]float64(nil), x...)
			floats.AddScaled(y, -reach/math.Max(length, 1e-9), slope)
			if v := ratio(y)[0]; v < least-1e-3 {
				x, least, better = y, v, true
				break
			}
			reach /= 2
		}
		if p.holds(phi(moved(x))) {
			return moved(x), true
		}
		if !better {
			break
		}
	}
	return nil, false
}

// ratio is the true draw's statistic over the Largest-largest of the others: below 1 inside the region.
func (r *Region) ratio(phi []float64) float64 {
	others := make([]float64, len(r.sums)-1)
	for i := range others {
		others[i] = r.statistic(i+1, phi)
	}
	slices.Sort(others)
	return r.statistic(0, phi) / others[len(others)-r.opt.Largest]
}

// End returns an end of the interval, in rad/s: the upper one for a positive step, else the lower one. It goes out by
// the step, in rad/s and about a deviation of the number, until no plant in the region has the value, then halves the
// gap, and gives its outer side. An end that is not found is infinite; a frequency ends at zero.
func (p *PoleRange) End(step float64) float64 {
	step /= p.w0
	in, eta := p.center, p.start
	out := math.Inf(1)
	for k := range farthest {
		v := in + step
		if p.number == PairFreq && v < 0 {
			return 0
		}
		next, ok := p.find(v, eta)
		if !ok {
			out = v
			break
		}
		in, eta = v, next
		if k > 5 {
			step *= 1.2
		}
		if math.Abs(in-p.center) > farthest*math.Max(math.Abs(p.center), 1) {
			break
		}
	}
	if math.IsInf(out, 1) {
		return math.Copysign(out, step)
	}
	for math.Abs(out-in) > endShare*math.Abs(out-p.center) {
		v := (in + out) / 2
		if next, ok := p.find(v, eta); ok {
			in, eta = v, next
		} else {
			out = v
		}
	}
	return out * p.w0
}
