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
}

// innerNoiseShare of the input noise limit is for the inner loop; the outer loop needs the rest.
const innerNoiseShare = 0.75

// noiseWeight makes the tuner give up a little peak |S| for a quieter input even inside the noise limit: the last
// hundredth of margin is not worth an actuator that shakes.
const noiseWeight = 0.2

// leastGrip is the least steady gain from v to y that the inner loop is asked for.
const leastGrip = 0.25

// closeEnough is how much of the best form's peak |S| a simpler inner form may give away.
const closeEnough = 0.08

// innerCost judges an inner controller on plants: the worst peak |S|, with input noise, slow poles and forbidden
// zeros as constraints.
func (p *problem) innerCost(k block, plants []plant, g *gridLoop, decay bool) (cost, peakS, noise float64, stable bool) {
	if !p.zerosAllowed(k, nil) {
		return 1e6, math.Inf(1), math.Inf(1), false
	}
	z := k.tustin(p.period)
	g.on(p.z1, z, nil)
	outside := 0
	for i := range plants {
		f := p.frequency(&plants[i], g)
		outside += f.outside
		peakS, noise = math.Max(peakS, f.peakS), math.Max(noise, f.noise)
	}
	if outside != 0 {
		return 1e3 * (1 + math.Abs(float64(outside))/float64(len(plants))), peakS, noise, false
	}
	r := noise / (innerNoiseShare * p.spec.noise)
	cost = peakS + noiseWeight*r
	if r > 1 {
		cost += 10 * (r - 1)
	}
	// The outer loop acts through the inner one's steady gain: next to nothing, or the wrong sign, would leave it
	// without grip on plants that a pure damper holds.
	if dc := innerDC(&p.nominal, k); dc < leastGrip {
		cost += 0.5 * math.Min(1+(leastGrip-dc)/leastGrip, 20)
	}
	if decay {
		g.on(p.inner, z, nil)
		for i := range plants {
			// A fraction of plants with slow poles is a fraction of the penalty: a slope for the simplex.
			cost += 5 * float64(max(0, p.outsideInner(&plants[i], g))) / float64(len(plants))
		}
	}
	return cost, peakS, noise, true
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
	var g gridLoop
	var out []innerResult
	for _, rate := range p.rates() {
		best := innerResult{cost: math.Inf(1)}
		try := func(x []float64, scale innerScale) {
			k := innerBlock(form, x, scale, p.period)
			cost, _, _, stable := p.innerCost(k, nominal, &g, decay)
			if cost < best.cost {
				best = innerResult{form: form, x: x, scale: scale, block: k, cost: cost, stable: stable}
			}
		}
		at := cmplx.Abs(p.nominal.tf.At(complex(0, rate)))
		if !(at > 0) || math.IsInf(at, 0) {
			continue
		}
		for _, m := range []float64{0.7, 1, 1.4, 2, 3, 4.5} {
			if form == formGain {
				try([]float64{math.Log(m)}, innerScale{rate, 1 / at, false})
				try([]float64{math.Log(m)}, innerScale{rate, 1 / at, true})
				continue
			}
			for angle := -180; angle < 180; angle += 15 {
				for _, off := range []float64{2, 4, 7, 12} {
					th := float64(angle) * math.Pi / 180
					try([]float64{math.Log(m), th, math.Log(off)}, innerScale{rate, 1 / at, false})
				}
			}
		}
		if !math.IsInf(best.cost, 0) {
			out = append(out, best)
		}
	}
	slices.SortStableFunc(out, func(a, b innerResult) int { return cmp.Compare(a.cost, b.cost) })
	return out[:min(len(out), 4)]
}

// tuneInner tunes every form on the plants and returns them, simplest first, with the index of the chosen one: the
// simplest whose worst peak |S| comes close to the best, within the noise limit.
func (p *problem) tuneInner(ctx context.Context, plants []plant, workers int) ([]innerResult, int, error) {
	var results []innerResult
	for _, decay := range []bool{true, false} {
		results = results[:0]
		var jobs []innerResult
		for _, form := range []string{formGain, formLead, formRollOff} {
			if err := ctx.Err(); err != nil {
				return nil, 0, err
			}
			jobs = append(jobs, p.innerStarts(form, decay)...)
		}
		done := make([]innerResult, len(jobs))
		if err := ident.Each(ctx, len(jobs), workers, func(i int) error {
			done[i] = p.polishInner(ctx, jobs[i], plants, decay)
			return nil
		}); err != nil {
			return nil, 0, err
		}
		any := false
		for _, form := range []string{formGain, formLead, formRollOff} {
			best := innerResult{form: form, cost: math.Inf(1)}
			for _, r := range done {
				if r.form == form && r.cost < best.cost {
					best = r
				}
			}
			if !math.IsInf(best.cost, 0) {
				results = append(results, best)
				any = any || best.sound()
			}
		}
		if any {
			break // else: no form decays fast enough on all plants, so do without that demand
		}
	}
	chosen, least := -1, math.Inf(1)
	for _, r := range results {
		if r.stable {
			least = math.Min(least, r.cost)
		}
	}
	for i, r := range results {
		if r.stable && r.cost <= least*(1+closeEnough) {
			chosen = i
			break
		}
	}
	return results, chosen, nil
}

// sound reports whether a result holds all tuning plants within the noise limit and without slow poles: anything else
// costs far more than the peak itself.
func (r *innerResult) sound() bool { return r.stable && r.cost < r.peakS+2*noiseWeight }

func (p *problem) polishInner(ctx context.Context, s innerResult, plants []plant, decay bool) innerResult {
	var g gridLoop
	x, _ := minimise(ctx, func(x []float64) float64 {
		cost, _, _, _ := p.innerCost(innerBlock(s.form, x, s.scale, p.period), plants, &g, decay)
		return cost
	}, s.x, 0.3, 120+80*len(s.x))
	s.x, s.block = x, innerBlock(s.form, x, s.scale, p.period)
	s.cost, s.peakS, s.noise, s.stable = p.innerCost(s.block, plants, &g, decay)
	return s
}
