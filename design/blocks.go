package design

import (
	"math"
	"slices"

	"steadyrig/fit/lti"
)

// block is a controller block of order 0 to 2 while it is tuned: num[i], den[i] multiply s^i.
type block struct {
	order    int
	num, den [3]float64
}

var one = block{0, [3]float64{1}, [3]float64{1}}

// zblock is a block as it runs: num[i], den[i] multiply z^-i, den[0] = 1.
type zblock struct{ num, den [3]float64 }

// tustin maps a block by s = (2/T)(1 - z^-1)/(1 + z^-1); the closed form of lti.Tustin for orders up to 2.
func (b block) tustin(period float64) zblock {
	c := 2 / period
	var z zblock
	sub := func(p [3]float64) [3]float64 {
		switch b.order {
		case 0:
			return [3]float64{p[0]}
		case 1:
			return [3]float64{p[0] + p[1]*c, p[0] - p[1]*c}
		}
		x, y, w := p[0], p[1]*c, p[2]*c*c
		return [3]float64{x + y + w, 2*x - 2*w, x - y + w}
	}
	z.num, z.den = sub(b.num), sub(b.den)
	k := 1 / z.den[0]
	for i := range z.num {
		z.num[i] *= k
		z.den[i] *= k
	}
	z.den[0] = 1
	return z
}

// file returns the block as loops.json holds it.
func (b block) file(period float64) *Block {
	z := b.tustin(period)
	n := b.order + 1
	desc := func(p [3]float64) []float64 {
		q := slices.Clone(p[:n])
		slices.Reverse(q)
		return q
	}
	num := leadingNonzero(desc(b.num))
	if len(num) == 0 {
		num = []float64{0}
	}
	return &Block{
		Continuous: &Rational{num, desc(b.den)},
		Discrete:   Rational{slices.Clone(z.num[:n]), slices.Clone(z.den[:n])},
	}
}

func eval3(p *[3]float64, x complex128) complex128 {
	return complex(p[0], 0) + x*(complex(p[1], 0)+x*complex(p[2], 0))
}

// zeros returns the roots of a polynomial in s of degree at most 2.
func zeros(p [3]float64) []complex128 {
	q := lti.Poly(p[:]).Trim()
	if len(q) < 2 {
		return nil
	}
	return q.Roots()
}

// onePlus returns the numerator of 1 + K2.
func onePlus(k block) [3]float64 {
	return [3]float64{k.num[0] + k.den[0], k.num[1] + k.den[1], k.num[2] + k.den[2]}
}

// Inner forms, simplest first.
const (
	formGain    = "gain"
	formLead    = "lead"
	formRollOff = "lead with roll-off"
)

// furthestRollOff is the highest roll-off in units of the crossover rate: further out it buys next to no margin and
// lets through what the model does not know.
const furthestRollOff = 12

// rollOffDamping of the second-order roll-off.
const rollOffDamping = 0.8

// innerBlock builds an inner controller from its parameters: x[0] = ln of the gain at scale.rate relative to
// scale.gain; x[1] = the angle between stiffness (0) and damping (pi/2), so that no sign is fixed beforehand;
// x[2] = ln of the roll-off rate relative to scale.rate.
func innerBlock(form string, x []float64, scale innerScale, period float64) block {
	k := scale.gain * math.Exp(x[0])
	if form == formGain {
		if scale.negative {
			k = -k
		}
		return block{0, [3]float64{k}, [3]float64{1}}
	}
	k0, k1 := k*math.Cos(x[1]), k*math.Sin(x[1])/scale.rate
	// Beyond 2/T Tustin's rule would put the pole at negative z: a controller that rings.
	wf := math.Min(scale.rate*math.Min(math.Exp(x[2]), furthestRollOff), 1.9/period)
	if form == formLead {
		return block{1, [3]float64{k0, k1}, [3]float64{1, 1 / wf}}
	}
	return block{2, [3]float64{k0, k1}, [3]float64{1, 2 * rollOffDamping / wf, 1 / (wf * wf)}}
}

// innerScale makes the parameters of an inner controller numbers near one.
type innerScale struct {
	rate, gain float64
	negative   bool
}

// Outer forms, simplest first.
const (
	formI      = "I"
	formPI     = "PI"
	formPILead = "PI with lead"
)

// outerSize is the number of parameters of each outer form, the prefilter's two included.
var outerSize = map[string]int{formI: 3, formPI: 4, formPILead: 6}

// outerBlocks builds outer controller and prefilter: x[0] = ln of the prefilter's lag, x[1] = its lead as a share
// of that lag, x[2] = ln of the integral gain, x[3] = ln of the PI's zero time, x[4] = ln of the lead's time,
// x[5] = ln of the ratio of that time to its lag. Times in units of scale, the settling time.
func outerBlocks(form string, x []float64, sign, scale float64) (k, f block) {
	lag := scale * math.Exp(x[0])
	f = block{1, [3]float64{1, lag * math.Min(math.Max(x[1], 0), 3)}, [3]float64{1, lag}}
	ki := sign / scale * math.Exp(x[2])
	switch form {
	case formI:
		k = block{1, [3]float64{ki, 0}, [3]float64{0, 1}}
	case formPI:
		a := scale * math.Exp(x[3])
		k = block{1, [3]float64{ki, ki * a}, [3]float64{0, 1}}
	case formPILead:
		a, b := scale*math.Exp(x[3]), scale*math.Exp(x[4])
		t := b / (1 + math.Exp(x[5]))
		k = block{2, [3]float64{ki, ki * (a + b), ki * a * b}, [3]float64{0, 1, t}}
	}
	return k, f
}

// zerosAllowed reports whether no zero of K1 or 1 + K2 lies where it would cancel a pole that may be unstable, and
// none of K1 at the integrator.
func (p *problem) zerosAllowed(k1 block, k2 *block) bool {
	for _, z := range zeros(k1.num) {
		if cancelled(p.regions, z) != nil {
			return false
		}
	}
	if k2 == nil {
		return true
	}
	for _, z := range zeros(onePlus(*k2)) {
		if cancelled(p.regions[:len(p.regions)-1], z) != nil {
			return false
		}
	}
	return true
}
