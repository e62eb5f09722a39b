package design

import (
	"cmp"
	"context"
	"math"
	"math/cmplx"
	"slices"

	"steadyrig/ident"
)

// innerResult is one tuned inner controller.
type innerResult struct {
	form   string
	x      []float64
	scale  innerScale
	block  block
	cost   float64
	peakS  float64 // worst tuning plant, inner loop alone
	noise  float64 // worst tuning plant
	stable bool    // all tuning plants
	set    []plant // that it is tuned for
}

// innerNoiseShare of the input noise limit is for the inner loop; the outer loop needs the rest.
const innerNoiseShare = 0.75

// noiseWeight makes the tuner give up a little peak |S| for a quieter input even inside the noise limit: the last
// hundredth of margin is not worth an actuator that shakes.
const noiseWeight = 0.2

// leastGrip is the least steady gain from v to y that the inner loop is asked for.
const leastGrip = 0.25

// After a first tuning of the inner forms the pool is looked through so many times, and so many plants on which each
// form does worst are added.
const (
	innerTails = 2
	innerAdds  = 2
)

// closeEnough is how much of the best form's peak |S| a simpler inner form may give away.
const closeEnough = 0.08

// innerJudge is what one worker judges inner controllers with.
type innerJudge struct {
	p           *problem
	decay       bool // slow poles count
	loop, inner gridLoop
}

// hold takes the controller to be judged; false where no plant needs to be looked at.
func (v *innerJudge) hold(k block) bool {
	if !v.p.zerosAllowed(k, nil) || k.den == nil && !insideCircle(k.z.Poles()) {
		return false // an unstable controller is lost whenever the input saturates
	}
	v.loop.on(v.p.z1, k.z, nil)
	if v.decay {
		v.inner.on(v.p.inner, k.z, nil)
	}
	return true
}

func insideCircle(poles []complex128) bool {
	return !slices.ContainsFunc(poles, func(z complex128) bool { return !(cmplx.Abs(z) < 1-onCircle) })
}

// cost judges the controller on plants: the worst peak |S|, with input noise and slow poles as constraints.
func (v *innerJudge) cost(plants []plant) (cost, peakS, noise float64, stable bool) {
	outside, slow := 0, 0
	for i := range plants {
		f := v.p.frequency(&plants[i], &v.loop)
		outside += f.outside
		peakS, noise = math.Max(peakS, f.peakS), math.Max(noise, f.noise)
	}
	if outside != 0 {
		return 1e3 * (1 + math.Abs(float64(outside))/float64(len(plants))), peakS, noise, false
	}
	r := noise / (innerNoiseShare * v.p.spec.noise)
	cost = peakS + noiseWeight*r
	if r > 1 {
		cost += 10 * (r - 1)
	}
	if v.decay {
		for i := range plants {
			slow += max(0, v.p.outsideInner(&plants[i], &v.inner))
		}
		// A fraction of plants with slow poles is a fraction of the penalty: a slope for the simplex.
		cost += 5 * float64(slow) / float64(len(plants))
	}
	return cost, peakS, noise, true
}

// innerCost judges a controller on plants, with forbidden zeros and a least steady gain as constraints as well.
func (v *innerJudge) innerCost(k block, plants []plant) (cost, peakS, noise float64, stable bool) {
	if !v.hold(k) {
		return 1e6, math.Inf(1), math.Inf(1), false
	}
	cost, peakS, noise, stable = v.cost(plants)
	// The outer loop acts through the inner one's steady gain: next to nothing, or the wrong sign, would leave it
	// without grip on plants that a pure damper holds.
	if dc := innerDC(&v.p.nominal, k); stable && dc < leastGrip {
		cost += 0.5 * math.Min(1+(leastGrip-dc)/leastGrip, 20)
	}
	return cost, peakS, noise, stable
}

// rates returns the crossover rates to try: from well below the unstable poles, or the outer loop's rate, to where
// the delay or the sampling ends all hope.
func (p *problem) rates() []float64 {
	lo := 0.5 / p.spec.settling
	for _, s := range p.nominal.tf.Poles() {
		if real(s) > 0 {
			lo = math.Max(lo, 0.3*cmplx.Abs(s))
		}
	}
	hi := math.Min(0.6*math.Pi/p.period, 2/(p.nominal.tf.Delay+p.period/2))
	lo = math.Min(lo, hi/2)
	const n = 10
	out := make([]float64, n)
	for i := range out {
		out[i] = lo * math.Pow(hi/lo, float64(i)/(n-1))
	}
	return out
}

// innerStarts evaluates a lattice of controllers of one form on the nominal plant and returns the best few that
// differ in crossover.
func (p *problem) innerStarts(form string, decay bool) []innerResult {
	nominal := []plant{p.nominal}
	judge := innerJudge{p: p, decay: decay}
	var out []innerResult
	best := func(scale innerScale, lattice func(try func(x ...float64))) {
		best := innerResult{cost: math.Inf(1)}
		lattice(func(x ...float64) {
			k, ok := p.innerBlock(form, x, scale)
			if !ok {
				return
			}
			if cost, _, _, stable := judge.innerCost(k, nominal); cost < best.cost {
				best = innerResult{form: form, x: x, scale: scale, block: k, cost: cost, stable: stable}
			}
		})
		if !math.IsInf(best.cost, 0) {
			out = append(out, best)
		}
	}
	for _, rate := range p.rates() {
		if form == formObserver {
			best(innerScale{}, func(try func(x ...float64)) { p.observerLattice(math.Log(rate), try) })
			continue
		}
		at := cmplx.Abs(p.nominal.tf.At(complex(0, rate)))
		if !(at > 0) || math.IsInf(at, 0) {
			continue
		}
		best(innerScale{rate, 1 / at, false}, func(try func(x ...float64)) { innerLattice(form, try) })
		if form == formGain {
			best(innerScale{rate, 1 / at, true}, func(try func(x ...float64)) { innerLattice(form, try) })
		}
	}
	slices.SortStableFunc(out, func(a, b innerResult) int { return cmp.Compare(a.cost, b.cost) })
	return out[:min(len(out), 3)]
}

// tuneInner tunes the forms for the worst of the plants and returns them in their order. The tails that matter are
// those of the controllers found, so the pool is looked through after a first tuning and what each form does worst on
// is added to the plants that it is tuned for.
func (p *problem) tuneInner(ctx context.Context, forms []string, plants, pool []plant, workers int) ([]innerResult, error) {
	var results []innerResult
	for _, decay := range []bool{true, false} {
		starts := make([][]innerResult, len(forms))
		if err := ident.Each(ctx, len(forms), workers, func(i int) error {
			starts[i] = p.innerStarts(forms[i], decay)
			return nil
		}); err != nil {
			return nil, err
		}
		results = slices.Concat(starts...)
		polish := func(budget int) error {
			return ident.Each(ctx, len(results), workers, func(i int) error {
				results[i] = p.polishInner(ctx, results[i], decay, budget)
				return nil
			})
		}
		for i := range results {
			results[i].set = plants
		}
		if err := polish(120); err != nil {
			return nil, err
		}
		results = bestOfForms(forms, results)
		for range innerTails {
			for i, k := range results {
				worst, err := p.worstOfInner(ctx, k.block, pool, decay, workers)
				if err != nil {
					return nil, err
				}
				results[i].set = withWorst(k.set, pool, worst, innerAdds)
			}
			if err := polish(40); err != nil {
				return nil, err
			}
		}
		if slices.ContainsFunc(results, func(r innerResult) bool { return r.sound() }) {
			break // else: no form decays fast enough on all plants, so do without that demand
		}
	}
	return results, nil
}

// bestOfForms returns the best result of each form that has one.
func bestOfForms(forms []string, all []innerResult) []innerResult {
	var out []innerResult
	for _, form := range forms {
		best := innerResult{form: form, cost: math.Inf(1)}
		for _, r := range all {
			if r.form == form && r.cost < best.cost {
				best = r
			}
		}
		if !math.IsInf(best.cost, 0) {
			out = append(out, best)
		}
	}
	return out
}

// simplestInner returns the index of the simplest form whose worst peak |S| comes close to the best, -1 if none holds
// all plants.
func simplestInner(results []innerResult) int {
	least := math.Inf(1)
	for _, r := range results {
		if r.stable {
			least = math.Min(least, r.cost)
		}
	}
	return slices.IndexFunc(results, func(r innerResult) bool { return r.stable && r.cost <= least*(1+closeEnough) })
}

// sound reports whether a result holds all tuning plants within the noise limit and without slow poles: anything else
// costs far more than the peak itself.
func (r *innerResult) sound() bool { return r.stable && r.cost < r.peakS+2*noiseWeight }

// polishInner tunes a controller further for its plants by about budget evaluations, and as many more for each two
// parameters.
func (p *problem) polishInner(ctx context.Context, s innerResult, decay bool, budget int) innerResult {
	judge := innerJudge{p: p, decay: decay}
	x, _ := minimise(ctx, func(x []float64) float64 {
		k, ok := p.innerBlock(s.form, x, s.scale)
		if !ok {
			return math.Inf(1)
		}
		cost, _, _, _ := judge.innerCost(k, s.set)
		return cost
	}, s.x, 0.3, budget+budget*len(s.x)/2)
	s.x = x
	s.block, _ = p.innerBlock(s.form, x, s.scale)
	s.cost, s.peakS, s.noise, s.stable = judge.innerCost(s.block, s.set)
	return s
}

// worstOfInner returns the indices of the pool in order of how badly an inner controller does on them alone.
func (p *problem) worstOfInner(ctx context.Context, k block, pool []plant, decay bool, workers int) ([]int, error) {
	judge := innerJudge{p: p, decay: decay}
	judge.hold(k) // it is only read from here on
	return worstFirst(ctx, pool, workers, func(pl *plant) float64 {
		cost, _, _, _ := judge.cost([]plant{*pl})
		return cost
	})
}
