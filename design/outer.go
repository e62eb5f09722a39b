package design

import (
	"cmp"
	"context"
	"math"
	"slices"

	"steadyrig/ident"
)

// pair is a tuned pair of loops.
type pair struct {
	form       string // of the outer loop
	x          []float64
	sign       float64
	inner      innerResult
	outer, pre block
	ratios     ratios
	cost       float64
}

// ratios are reached over asked for the worst plant, one per demand: below 1 meets the spec.
type ratios struct {
	stable                                        bool
	overshoot, settling, peakS, noise             float64
	input, rate, kick, trip                       float64
	alone                                         float64 // peak |S| of the inner loop alone, against aloneShare
	peakSAt, noiseAt, overshootAt, settlingAt, vs float64 // the figures behind, in their own units; vs: largest |v|
}

func (r ratios) worst() float64 {
	if !r.stable {
		return math.Inf(1)
	}
	return max(r.overshoot, r.settling, r.peakS, r.noise, r.input, r.rate, r.kick, r.trip, r.alone)
}

// cost is what the tuner minimises: the worst ratio, with a little of the others so that it does not stand still on
// a plateau.
func (r ratios) cost() float64 {
	if !r.stable {
		return 1e3
	}
	return r.worst() + 0.03*(r.overshoot+r.settling+r.peakS+r.noise+r.input)
}

// runLength is the length of a tuning run, in samples: three settling times.
func (p *problem) runLength(pl *plant) int {
	n := int(math.Ceil(3*p.spec.settling/p.period)) + pl.lag + 1
	return min(max(n, 30), 4000)
}

// targets tighten the spec for tuning: 1 aims at the spec itself.
type targets struct{ time, peak float64 }

// judge computes the ratios of a pair of loops over plants.
func (p *problem) judge(inner, outer, pre block, plants []plant, t targets, g *gridLoop, sim *simulator) ratios {
	r := ratios{stable: true}
	if !p.zerosAllowed(inner, &outer) {
		return ratios{}
	}
	k1, k2, f := inner.tustin(p.period), outer.tustin(p.period), pre.tustin(p.period)
	// The inner loop alone must hold every plant.
	g.on(p.z1, k1, nil)
	for i := range plants {
		f := p.frequency(&plants[i], g)
		if f.outside != 0 {
			return ratios{}
		}
		r.alone = math.Max(r.alone, f.peakS/(aloneShare*p.spec.peakS))
	}
	g.on(p.z1, k1, &k2)
	s := &p.spec
	authority := math.Min(-p.input[0], p.input[1])
	early := 0.0
	for i := range plants {
		pl := &plants[i]
		fq := p.frequency(pl, g)
		if fq.outside != 0 {
			return ratios{}
		}
		r.peakSAt, r.noiseAt = math.Max(r.peakSAt, fq.peakS), math.Max(r.noiseAt, fq.noise)
		n := p.runLength(pl)
		st := sim.step(pl, k1, k2, f, n, p.period, s.settling*t.time, s.band, false)
		r.overshootAt, early = math.Max(r.overshootAt, st.peak-1), math.Max(early, st.early)
		r.settlingAt = math.Max(r.settlingAt, float64(st.settled)*p.period)
		r.settling = math.Max(r.settling, settlingRatio(st.after/s.band))
		r.input = math.Max(r.input, st.uMax*s.step/authority)
		r.vs = math.Max(r.vs, st.vMax*s.step)
		if p.rate > 0 {
			r.rate = math.Max(r.rate, st.duMax*s.step/(p.rate*p.period))
		}
		if p.output != nil {
			room := math.Min(-p.output[0], p.output[1])
			r.trip = math.Max(r.trip, math.Max(st.peak, -st.low)*s.step/room)
		}
		if s.kick > 0 && s.kickPeak > 0 {
			kk := sim.step(pl, k1, k2, f, n, p.period, s.settling, s.band, true)
			r.kick = math.Max(r.kick, math.Max(kk.peak, -kk.low)*s.kick/s.kickPeak)
			r.vs = math.Max(r.vs, kk.vMax*s.kick)
		}
	}
	over := r.overshootAt - s.overshoot*t.time
	if over <= 0 && s.overshoot < 0.01 {
		// Next to no overshoot asked: the margin is how far below its end the output stays while it settles.
		over = early - (1 - 0.15*s.band)
	}
	r.overshoot = 1 + over/math.Max(s.overshoot, 0.05)
	r.peakS = 1 + (r.peakSAt-t.peak*(s.peakS-1)-1)/math.Max(s.peakS-1, 0.2)*0.5
	r.noise = r.noiseAt / s.noise
	return r
}

// settlingRatio turns the largest error after the settling time, in bands, into a number that grows slowly, so that
// the tuner sees a slope from far away and a margin when near.
func settlingRatio(after float64) float64 {
	return 1 + 0.3*math.Log(math.Max(after, 0.05))
}

// aloneShare of the spec's peak |S| is the most that the inner loop alone may have: nobody asks for it, but it is what
// holds the rig while the outer loop is clamped.
const aloneShare = 1.25

// meets is the tuner's aim: some margin to the spec on the tuning plants.
const meets = 0.97

// outerStarts evaluates a lattice of outer controllers on the nominal plant about one inner controller.
func (p *problem) outerStarts(form string, inner innerResult, t targets) []pair {
	var g gridLoop
	var sim simulator
	var out []pair
	nominal := []plant{p.nominal}
	dc := innerDC(&p.nominal, inner.block)
	sign := 1.0
	if dc < 0 {
		sign = -1
	}
	level := math.Min(math.Max(math.Abs(dc), 0.02), 50)
	try := func(x []float64) {
		k, f := outerBlocks(form, x, sign, p.spec.settling)
		r := p.judge(inner.block, k, f, nominal, t, &g, &sim)
		out = append(out, pair{form: form, x: x, sign: sign, inner: inner, outer: k, pre: f, ratios: r, cost: r.cost()})
	}
	for _, lag := range []float64{0.03, 0.1, 0.25} {
		for _, ki := range []float64{0.1, 0.3, 0.8, 2, 5, 12} {
			x := []float64{math.Log(lag), 0, math.Log(ki / level)}
			if form == formI {
				try(x)
				continue
			}
			for _, a := range []float64{0.03, 0.1, 0.25} {
				y := append(slices.Clone(x), math.Log(a))
				if form == formPI {
					try(y)
					continue
				}
				for _, b := range []float64{0.02, 0.07} {
					try(append(slices.Clone(y), math.Log(b), math.Log(3)))
				}
			}
		}
	}
	slices.SortStableFunc(out, func(a, b pair) int { return cmp.Compare(a.cost, b.cost) })
	return out[:min(len(out), 3)]
}

// innerDC is the steady gain of the inner loop from v to y.
func innerDC(pl *plant, k block) float64 {
	// With B/A the plant at z = 1 and k0 the controller: k0 B/(A + k0 B); right for integrators too, where A = 0.
	k0 := k.num[0] / k.den[0]
	return k0 * real(pl.b[0]) / (real(pl.a[0]) + k0*real(pl.b[0]))
}

// tuneOuter tunes the outer forms about an inner controller, simplest first, and stops at the first that meets the
// spec on all plants with some margin. It returns all that were tried, the chosen one last.
func (p *problem) tuneOuter(ctx context.Context, inner innerResult, plants []plant, t targets, workers int) ([]pair, error) {
	var tried []pair
	for _, form := range []string{formI, formPI, formPILead} {
		starts := p.outerStarts(form, inner, t)
		done := make([]pair, len(starts))
		if err := ident.Each(ctx, len(starts), workers, func(i int) error {
			done[i] = p.polishOuter(ctx, starts[i], plants, t)
			return nil
		}); err != nil {
			return nil, err
		}
		best := done[0]
		for _, d := range done[1:] {
			if d.cost < best.cost {
				best = d
			}
		}
		tried = append(tried, best)
		if best.ratios.worst() <= meets {
			break
		}
	}
	slices.SortStableFunc(tried, func(a, b pair) int {
		// The chosen one goes last; the others keep their order.
		return cmp.Compare(rank(a, tried), rank(b, tried))
	})
	return tried, nil
}

// rank is 1 for the best of the tried pairs, 0 for the others.
func rank(a pair, all []pair) int {
	for _, b := range all {
		if b.cost < a.cost {
			return 0
		}
	}
	return 1
}

func (p *problem) polishOuter(ctx context.Context, s pair, plants []plant, t targets) pair {
	var g gridLoop
	var sim simulator
	eval := func(x []float64) ratios {
		k, f := outerBlocks(s.form, x, s.sign, p.spec.settling)
		return p.judge(s.inner.block, k, f, plants, t, &g, &sim)
	}
	x, _ := minimise(ctx, func(x []float64) float64 { return eval(x).cost() }, s.x, 0.3, 60*len(s.x))
	s.x = x
	s.outer, s.pre = outerBlocks(s.form, x, s.sign, p.spec.settling)
	s.ratios = eval(x)
	s.cost = s.ratios.cost()
	return s
}

// polishBoth tunes inner and outer controller together, from a pair that does not meet the spec.
func (p *problem) polishBoth(ctx context.Context, s pair, plants []plant, t targets, budget int) pair {
	var g gridLoop
	var sim simulator
	n := len(s.inner.x)
	eval := func(x []float64) (block, block, block, ratios) {
		k1 := innerBlock(s.inner.form, x[:n], s.inner.scale, p.period)
		k2, f := outerBlocks(s.form, x[n:], s.sign, p.spec.settling)
		return k1, k2, f, p.judge(k1, k2, f, plants, t, &g, &sim)
	}
	x0 := append(slices.Clone(s.inner.x), s.x...)
	x, _ := minimise(ctx, func(x []float64) float64 {
		_, _, _, r := eval(x)
		return r.cost()
	}, x0, 0.2, budget)
	k1, k2, f, r := eval(x)
	if r.cost() >= s.cost {
		return s
	}
	s.inner.x, s.x = x[:n:n], x[n:]
	s.inner.block, s.outer, s.pre, s.ratios, s.cost = k1, k2, f, r, r.cost()
	return s
}
