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
	lost                                          float64 // how far from stable, in shares of the plants; 2: a zero is forbidden
	overshoot, settling, peakS, noise             float64
	input, rate, kick, trip                       float64
	alone                                         float64 // peak |S| of the inner loop alone, against aloneShare
	effort                                        float64 // share of the authority that the step takes, noise included
	peakSAt, noiseAt, overshootAt, settlingAt, vs float64 // the figures behind, in their own units; vs: largest |v|
}

func (r ratios) worst() float64 {
	if !r.stable {
		return math.Inf(1)
	}
	return max(r.overshoot, r.settling, r.peakS, r.noise, r.input, r.rate, r.kick, r.trip, r.alone)
}

// Weights in the tuner's cost beside the worst ratio: of overshoot and settling, so that it does not stand still on a
// plateau; of the peak |S|, so that once the spec is met what is left goes into margin; of the effort and of the
// input's noise, which are not worth the last hundredth of margin.
const (
	calm       = 0.02
	calmPeak   = 0.3
	calmEffort = 0.15
)

// cost is what the tuner minimises: the worst ratio, down to where it meets the spec with some margin, and a little of
// the others.
func (r ratios) cost() float64 {
	if !r.stable {
		return 1e3 * (1 + r.lost)
	}
	return math.Max(r.worst(), meets) + calm*(r.overshoot+r.settling) + calmPeak*(r.peakSAt+noiseWeight*r.noise) + calmEffort*r.effort
}

// lose counts poles outside the circle of one of the plants.
func (r *ratios) lose(outside int, plants []plant) {
	if outside != 0 {
		r.stable = false
		r.lost += 1 / float64(len(plants))
	}
}

// targets are what tuning aims at, tighter than the spec.
type targets struct {
	settling, overshoot, band float64
	peak                      float64 // share of the peak |S|'s part above 1
}

// aim says what to tune for so that a settling time is met: tighter than asked before the first proof, tighter still after
// one that failed. The band shrinks threefold as much as the time, because an output that turns just outside it settles
// much later.
func (p *problem) aim(attempt int, settling float64) targets {
	time, peak := 0.95, 0.95
	if attempt > 1 {
		time, peak = 0.88, 0.85
	}
	return targets{time * settling, time * p.spec.overshoot, (1 - 3*(1-time)) * p.spec.band, peak}
}

// runLength is the length of a tuning run, in samples: two settling times.
func (p *problem) runLength(pl *plant, t targets) int {
	n := int(math.Ceil(2*t.settling/p.period)) + pl.lag + 1
	return min(max(n, 30), 4000)
}

// judge computes the ratios of a pair of loops over plants.
func (p *problem) judge(inner, outer, pre block, plants []plant, t targets, g *gridLoop, sim *simulator) ratios {
	r := ratios{stable: true}
	if !p.zerosAllowed(inner, &outer) {
		return ratios{lost: 2}
	}
	k1, k2, f := inner.z, outer.z, pre.z
	// The inner loop alone must hold every plant.
	g.on(p.z1, k1, nil)
	for i := range plants {
		f := p.frequency(&plants[i], g)
		r.lose(f.outside, plants)
		r.alone = math.Max(r.alone, f.peakS/(aloneShare*p.spec.peakS))
	}
	if !r.stable {
		return ratios{lost: 1 + r.lost}
	}
	g.on(p.z1, k1, &k2)
	s := &p.spec
	authority := math.Min(-p.input[0], p.input[1])
	early := 0.0
	for i := range plants {
		pl := &plants[i]
		fq := p.frequency(pl, g)
		if r.lose(fq.outside, plants); !r.stable {
			continue
		}
		r.peakSAt, r.noiseAt = math.Max(r.peakSAt, fq.peakS), math.Max(r.noiseAt, fq.noise)
		n := p.runLength(pl, t)
		st := sim.step(pl, k1, k2, f, n, p.period, t.settling, s.band, false)
		r.overshootAt, early = math.Max(r.overshootAt, st.peak-1), math.Max(early, st.early)
		r.settlingAt = math.Max(r.settlingAt, float64(st.settled)*p.period)
		r.settling = math.Max(r.settling, settlingRatio(st.after/t.band))
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
			kk := sim.step(pl, k1, k2, f, n, p.period, t.settling, s.band, true)
			r.kick = math.Max(r.kick, math.Max(kk.peak, -kk.low)*s.kick/s.kickPeak)
			r.vs = math.Max(r.vs, kk.vMax*s.kick)
		}
	}
	if !r.stable {
		return ratios{lost: r.lost}
	}
	over := r.overshootAt - t.overshoot
	if over <= 0 && s.overshoot < 0.01 {
		// Next to no overshoot asked: the margin is how far below its end the output stays while it settles.
		over = early - (1 - 0.15*s.band)
	}
	r.overshoot = 1 + over/math.Max(s.overshoot, 0.05)
	r.peakS = 1 + (r.peakSAt-t.peak*(s.peakS-1)-1)/math.Max(s.peakS-1, 0.2)*0.5
	r.noise = r.noiseAt / s.noise
	r.effort = r.input + surest*r.noiseAt/authority
	return r
}

// surest is the number of standard deviations of noise that count to the effort of a step.
const surest = 3

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
	outerLattice(form, level, func(x ...float64) {
		k, f := p.outerBlocks(form, x, sign, p.spec.settling)
		r := p.judge(inner.block, k, f, nominal, t, &g, &sim)
		out = append(out, pair{form: form, x: x, sign: sign, inner: inner, outer: k, pre: f, ratios: r, cost: r.cost()})
	})
	slices.SortStableFunc(out, func(a, b pair) int { return cmp.Compare(a.cost, b.cost) })
	return out[:min(len(out), 2)]
}

// innerDC is the steady gain of the inner loop from v to y.
func innerDC(pl *plant, k block) float64 {
	// With B/A the plant at z = 1 and k0 the controller: k0 B/(A + k0 B); right for integrators too, where A = 0.
	k0 := k.z.DC()
	return k0 * real(pl.b[0]) / (real(pl.a[0]) + k0*real(pl.b[0]))
}

// tuneOuter tunes outer forms about an inner controller, simplest first, and stops at the first that is good enough.
// It returns all that were tried, the best one last.
func (t *tuner) tuneOuter(ctx context.Context, inner innerResult, aim targets) ([]pair, error) {
	var tried []pair
	best := 0
	for i, form := range t.outer {
		starts := t.p.outerStarts(form, inner, aim)
		done := make([]pair, len(starts))
		if err := ident.Each(ctx, len(starts), t.workers, func(i int) error {
			done[i] = t.p.polishOuter(ctx, starts[i], inner.set, aim)
			return nil
		}); err != nil {
			return nil, err
		}
		tried = append(tried, slices.MinFunc(done, func(a, b pair) int { return cmp.Compare(a.cost, b.cost) }))
		if enough := t.enough(tried[i]); enough || t.better(tried[i], tried[best]) {
			if best = i; enough {
				break
			}
		}
	}
	last := tried[best]
	return append(slices.Delete(tried, best, best+1), last), nil
}

func (p *problem) polishOuter(ctx context.Context, s pair, plants []plant, t targets) pair {
	var g gridLoop
	var sim simulator
	eval := func(x []float64) (k, f block, r ratios) {
		k, f = p.outerBlocks(s.form, x, s.sign, p.spec.settling)
		return k, f, p.judge(s.inner.block, k, f, plants, t, &g, &sim)
	}
	s.x, _ = minimise(ctx, func(x []float64) float64 {
		_, _, r := eval(x)
		return r.cost()
	}, s.x, 0.3, 60*len(s.x))
	s.outer, s.pre, s.ratios = eval(s.x)
	s.cost = s.ratios.cost()
	return s
}

// polishBoth tunes inner and outer controller together.
func (p *problem) polishBoth(ctx context.Context, s pair, plants []plant, t targets, budget int) pair {
	var g gridLoop
	var sim simulator
	n := len(s.inner.x)
	eval := func(x []float64) (block, block, block, ratios) {
		k1, ok := p.innerBlock(s.inner.form, x[:n], s.inner.scale)
		k2, f := p.outerBlocks(s.form, x[n:], s.sign, p.spec.settling)
		if !ok {
			return k1, k2, f, ratios{lost: 2}
		}
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
