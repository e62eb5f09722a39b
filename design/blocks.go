package design

import (
	"math/cmplx"
	"slices"

	"steadyrig/fit/lti"
)

// block is a controller block while it is tuned: as designed, num[i] and den[i] multiplying s^i (nil where it was
// designed as it runs), and as it runs.
type block struct {
	num, den lti.Poly
	z        lti.DTF
}

// continuous maps a design in s by Tustin's rule.
func continuous(num, den lti.Poly, period float64) block {
	return block{num, den, lti.Tustin(lti.TF{Num: num, Den: den}, period)}
}

func (k block) order() int { return len(k.z.Den) - 1 }

// file returns the block as loops.json holds it.
func (k block) file() *Block {
	b := &Block{Discrete: Rational{slices.Clone(k.z.Num), slices.Clone(k.z.Den)}}
	if k.den == nil {
		return b
	}
	descending := func(p lti.Poly) []float64 {
		q := slices.Clone(p.Trim())
		slices.Reverse(q)
		return q
	}
	b.Continuous = &Rational{descending(k.num), descending(k.den)}
	if len(b.Continuous.Numerator) == 0 {
		b.Continuous.Numerator = []float64{0}
	}
	return b
}

// zeros returns the zeros in rad/s. Those of a block that was designed as it runs are taken back through the hold;
// one at z = 0 is a sample of delay taken back, far from any pole.
func (k block) zeros() []complex128 {
	if k.den != nil {
		return roots(k.num)
	}
	var out []complex128
	for _, z := range k.z.Zeros() {
		if cmplx.Abs(z) > 1e-6 {
			out = append(out, cmplx.Log(z)/complex(k.z.Period, 0))
		}
	}
	return out
}

func roots(p lti.Poly) []complex128 {
	if p = p.Trim(); len(p) < 2 {
		return nil
	}
	return p.Roots()
}

// zerosAllowed reports whether no zero of K1 or 1 + K2 lies where it would cancel a pole that may be unstable, and
// none of K1 at the integrator.
func (p *problem) zerosAllowed(k1 block, k2 *block) bool {
	for _, z := range k1.zeros() {
		if cancelled(p.regions, z) != nil {
			return false
		}
	}
	if k2 == nil {
		return true
	}
	for _, z := range roots(k2.num.Add(k2.den)) {
		if cancelled(p.regions[:len(p.regions)-1], z) != nil {
			return false
		}
	}
	return true
}
