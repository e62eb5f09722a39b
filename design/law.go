package design

import (
	"math"

	"steadyrig/fit/lti"
)

const noInner = "design: loops without an inner controller"

// LTI returns the law as the simulator runs it. It panics where there is no inner controller.
func (l *Loops) LTI() *lti.Law {
	if l.Inner == nil {
		panic(noInner)
	}
	law := &lti.Law{
		Inner: l.Inner.lti(l.SamplePeriod), U0: l.OperatingPoint.Input, Y0: l.OperatingPoint.Output, InputRate: l.InputRate,
	}
	if l.Outer != nil {
		g := l.Outer.lti(l.SamplePeriod)
		law.Outer = &g
	}
	if !l.Prefilter.IsOne() {
		g := l.Prefilter.lti(l.SamplePeriod)
		law.Prefilter = &g
	}
	if l.InputLimits != nil {
		law.InputLimits = *l.InputLimits
	}
	if l.OuterLimits != nil {
		law.OuterLimits = *l.OuterLimits
	}
	return law
}

func (b *Block) lti(period float64) lti.DTF {
	return lti.DTF{
		Num: append(lti.Poly(nil), b.Discrete.Numerator...), Den: append(lti.Poly(nil), b.Discrete.Denominator...), Period: period,
	}
}

// authorityShare is the most of the input's range, on either side, that a steady v at its limit may take.
const authorityShare = 0.6

// outerLimits chooses the limits of v: wide enough for the step and the kick, as wide as leaves authority to
// stabilise. A candidate must leave the input some of its range at rest, keep the output inside the trips, and the
// inner loop alone must come through steps of v from rest to either limit and from one limit to the other on every
// tuning plant. short says that v needs more than that for the spec.
func (p *problem) outerLimits(law *lti.Law, plants []plant, need float64) (limits [2]float64, short bool) {
	inner := lti.Law{Inner: law.Inner, U0: law.U0, Y0: law.Y0, InputLimits: law.InputLimits, InputRate: law.InputRate}
	side := [2]float64{math.Inf(1), math.Inf(1)}
	take := func(cap float64, sign float64) {
		// cap > 0 is for v of the given sign.
		i := 0
		if sign > 0 {
			i = 1
		}
		side[i] = math.Min(side[i], cap)
	}
	for i := range plants {
		pl := &plants[i]
		k0 := law.Inner.DC()
		a, b := real(pl.a[0]), real(pl.b[0])
		perU, perY := k0*a/(a+k0*b), k0*b/(a+k0*b)
		for _, sign := range []float64{-1, 1} {
			u, y := sign*perU, sign*perY
			if u > 0 {
				take(authorityShare*p.input[1]/u, sign)
			} else if u < 0 {
				take(authorityShare*p.input[0]/u, sign)
			}
			if p.output != nil {
				if y > 0 {
					take(0.9*p.output[1]/y, sign)
				} else if y < 0 {
					take(0.9*p.output[0]/y, sign)
				}
			}
		}
	}
	for i := range side {
		side[i] = math.Min(side[i], 20*need)
	}
	var sim lti.Simulator
	var trace lti.Trace
	comesThrough := func(limits [2]float64) bool {
		for i := range plants {
			g := plants[i].tf
			g.Delay = math.Max(0, g.Delay-p.compute)
			n := p.steps(g)
			ref := make([]float64, n)
			for _, order := range [][2]int{{0, 1}, {1, 0}} {
				for k := range ref {
					ref[k] = inner.Y0 + limits[order[k*2/n]]
				}
				run := lti.Run{Plant: g, Period: p.period, ComputeDelay: p.compute, Law: &inner, Steps: n, Reference: ref}
				if p.output != nil {
					run.Trip = [2]float64{inner.Y0 + 1.5*p.output[0], inner.Y0 + 1.5*p.output[1]}
				}
				if sim.Simulate(&trace, run) != nil || trace.Tripped >= 0 {
					return false
				}
				end := trace.YTrue[n-1] - trace.YTrue[n-1-n/8]
				if !(math.Abs(end) < 0.05*(limits[1]-limits[0])*math.Max(1, math.Abs(innerGain(&plants[i], law)))) {
					return false
				}
			}
		}
		return true
	}
	for share := 1.0; share > 0.01; share *= 0.8 {
		limits = [2]float64{-share * side[0], share * side[1]}
		if comesThrough(limits) {
			break
		}
	}
	least := 1.1 * need
	if limits[0] > -least || limits[1] < least {
		short = true
		limits[0], limits[1] = math.Min(limits[0], -least), math.Max(limits[1], least)
	}
	return limits, short
}

func innerGain(pl *plant, law *lti.Law) float64 {
	k0, a, b := law.Inner.DC(), real(pl.a[0]), real(pl.b[0])
	return k0 * b / (a + k0*b)
}
