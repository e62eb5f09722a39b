package design

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"slices"
	"strings"

	"steadyrig/ident"
)

// Sizes of the tuning. Loops are tuned on a set of plants, which starts with the nominal one and a few draws and grows by
// those of the pool on which they do worst: the pool is as large as the proof's draws, so that its tails are as long. A
// second attempt adds a larger one.
const (
	tuningPool   = 2000
	tuningTail   = 4000
	tuningPlants = 8
	tuningAdds   = 3
	tuningRounds = 4
)

// A tuner finds pairs of loops for the worst of the plants that the data allow.
type tuner struct {
	p            *problem
	workers      int
	inner, outer []string // forms to try, simplest first
	pool, set    []plant
	yard         float64 // least peak |S| of any controllers under the same limits; 0: not known
}

// pool samples plants drawn for tuning. Those that cannot be sampled are left to the proof, where they are lost.
func (p *problem) pool(ctx context.Context, n int, seed uint64, workers int) ([]plant, error) {
	draws := p.model.Draw(n, seed)
	out := make([]plant, n)
	if err := inBatches(ctx, n, workers, func(i int) {
		if pl, err := p.newPlant(draws[i]); err == nil {
			out[i] = pl
		}
	}); err != nil {
		return nil, err
	}
	if out = slices.DeleteFunc(out, func(pl plant) bool { return pl.den == nil }); len(out) < n/2 {
		return nil, &ident.RefusedError{
			What: fmt.Sprintf("of %d plants that the model allows %d cannot be sampled", n, n-len(out)),
			Do:   "take a longer log, so that the model is surer",
		}
	}
	return out, nil
}

// inBatches calls f for 0 … n-1, each but once, on all workers.
func inBatches(ctx context.Context, n, workers int, f func(i int)) error {
	const batch = 50
	return ident.Each(ctx, (n+batch-1)/batch, workers, func(b int) error {
		for i := b * batch; i < min((b+1)*batch, n); i++ {
			f(i)
		}
		return nil
	})
}

// worstFirst returns the indices of plants in falling order of a cost.
func worstFirst(ctx context.Context, plants []plant, workers int, cost func(*plant) float64) ([]int, error) {
	costs, index := make([]float64, len(plants)), make([]int, len(plants))
	if err := inBatches(ctx, len(plants), workers, func(i int) {
		costs[i], index[i] = cost(&plants[i]), i
	}); err != nil {
		return nil, err
	}
	slices.SortStableFunc(index, func(a, b int) int { return cmp.Compare(costs[b], costs[a]) })
	return index, nil
}

// withWorst adds the first n plants of the pool in the given order that the set does not hold.
func withWorst(set, pool []plant, order []int, n int) []plant {
	for _, i := range order {
		if n == 0 {
			break
		}
		if !slices.ContainsFunc(set, func(t plant) bool { return t.tf.Equal(pool[i].tf) }) {
			set = append(slices.Clip(set), pool[i])
			n--
		}
	}
	return set
}

// tune finds a pair of loops for the worst of the plants. start, if it holds a pair, is where a second attempt begins.
func (t *tuner) tune(ctx context.Context, l *Loops, start pair, aim targets) (pair, error) {
	best := start
	if best.form == "" {
		t.set = append([]plant{t.p.nominal}, t.pool[:min(len(t.pool), tuningPlants)]...)
		var err error
		if best, err = t.firstPair(ctx, l, aim); err != nil {
			return best, err
		}
	} else {
		best = t.p.polishBoth(ctx, t.p.rejudge(best, t.set, aim), t.set, aim, 300)
	}
	for range tuningRounds {
		if err := ctx.Err(); err != nil {
			return best, err
		}
		worst, err := t.worstOf(ctx, best, aim)
		if err != nil {
			return best, err
		}
		t.set = withWorst(t.set, t.pool, worst, tuningAdds)
		before := best.ratios.worst()
		again := t.p.rejudge(best, t.set, aim)
		if w := again.ratios.worst(); w <= meets || w <= 1.01*before && before <= 1 {
			return again, nil
		}
		best = t.p.polishBoth(ctx, again, t.set, aim, 350)
	}
	return best, nil
}

// closeToYardstick is how far above the yardstick the peak |S| of the simplest form may lie.
const closeToYardstick = 0.25

// enough reports whether a pair needs no better form: it meets the spec on its plants with some margin, and comes
// close to the yardstick where there is one.
func (t *tuner) enough(s pair) bool {
	return s.ratios.worst() <= meets && (t.yard == 0 || t.nominalPeak(s) <= meets*(1+closeToYardstick)*t.yard)
}

// better reports whether a pair serves better than a simpler one: it meets the spec and the other does not; of two that
// do, it has the lower peak |S| if there is a yardstick; else it comes closer to the spec.
func (t *tuner) better(s, simpler pair) bool {
	a, b := s.ratios.worst() <= 1, simpler.ratios.worst() <= 1
	switch {
	case a != b:
		return a
	case a && t.yard > 0:
		return t.nominalPeak(s) < noticeably*t.nominalPeak(simpler)
	}
	return s.cost < simpler.cost
}

// noticeably is the part of a simpler form's peak |S| that a less simple one has to come down to.
const noticeably = 0.97

// why says why a pair was chosen, of whose nominal peak |S| it is told.
func (t *tuner) why(s pair, peak float64) string {
	asked := len(t.inner) == 1 || len(t.outer) == 1
	over := 100 * (peak/t.yard - 1)
	figures := fmt.Sprintf("%.3g on the nominal plant, %.0f %% above the %.3g that no loops get below under the same limit of input noise", peak, over, t.yard)
	switch {
	case !(s.ratios.worst() <= 1):
		return "no pair of the forms tried meets the spec on all tuning plants: this one comes closest"
	case t.yard == 0 && asked:
		return "the form asked for"
	case t.yard == 0:
		return "the simplest pair that meets the spec on all tuning plants"
	case asked:
		return "the form asked for: its peak |S| is " + figures
	case over <= 100*closeToYardstick:
		return fmt.Sprintf("the simplest pair that meets the spec on all tuning plants with a peak |S| within %.0f %% of the least: %s", 100*closeToYardstick, figures)
	}
	return fmt.Sprintf("no pair of the forms tried meets the spec with a peak |S| within %.0f %% of the least, and this one is the best of them: %s", 100*closeToYardstick, figures)
}

func (t *tuner) nominalPeak(s pair) float64 {
	var g gridLoop
	g.on(t.p.z1, s.inner.block.z, &s.outer.z)
	return t.p.frequency(&t.p.nominal, &g).peakS
}

// firstPair tunes inner forms and, from the simplest on, outer forms about each, until a pair is good enough.
func (t *tuner) firstPair(ctx context.Context, l *Loops, aim targets) (pair, error) {
	p := t.p
	inners, err := p.tuneInner(ctx, t.inner, t.set, t.pool, t.workers)
	if err != nil {
		return pair{}, err
	}
	from := simplestInner(inners)
	if from < 0 {
		return pair{}, t.noInner()
	}
	if t.yard > 0 {
		from = slices.IndexFunc(inners, func(r innerResult) bool { return r.stable })
	}
	var best pair
	var inner, outer []FormResult
	for i, in := range inners {
		if in.sound() || i == from {
			inner = append(inner, FormResult{Loop: "inner", Form: in.form, Order: in.block.order(), PeakSensitivity: in.peakS, InputNoise: in.noise})
		}
		if i < from || !in.stable || best.form != "" && (t.enough(best) || t.yard == 0 && best.ratios.worst() <= 1) {
			continue
		}
		tried, err := t.tuneOuter(ctx, in, aim)
		if err != nil {
			return pair{}, err
		}
		last := tried[len(tried)-1]
		if !t.enough(last) {
			last = p.polishBoth(ctx, last, in.set, aim, 400)
		}
		if best.form == "" || t.enough(last) || t.better(last, best) {
			best, outer = last, nil
			for _, s := range tried {
				demand := s.ratios.worst()
				if math.IsInf(demand, 0) {
					demand = 0
				}
				outer = append(outer, FormResult{
					Loop: "outer", Form: s.form, Order: s.outer.order(), PeakSensitivity: s.ratios.peakSAt,
					InputNoise: s.ratios.noiseAt, Demand: demand, Chosen: s.form == best.form,
				})
			}
		}
	}
	for i := range inner {
		inner[i].Chosen = inner[i].Form == best.inner.form
	}
	t.set, l.Forms = best.inner.set, append(inner, outer...)
	if !best.ratios.stable {
		return best, &ident.RefusedError{
			What: "an inner loop was found, but no outer loop of the forms " + strings.Join(t.outer, ", ") + " keeps every tuning plant stable",
			Do:   "ask for a longer settling time, or take a longer log, so that fewer plants are allowed",
		}
	}
	return best, nil
}

// noInner is the refusal where no inner form holds the plants.
func (t *tuner) noInner() *ident.RefusedError {
	if len(t.inner) == 1 {
		return &ident.RefusedError{
			What: fmt.Sprintf("no inner loop of the form asked for, %s, holds all plants that the data allow", t.inner[0]),
			Do:   "ask for another of " + strings.Join(InnerForms(), ", ") + ", or for none and take the simplest that does",
		}
	}
	if !StronglyStabilisable(t.p.nominal.tf) {
		return &ident.RefusedError{
			What: "no stable controller holds this plant: an odd number of its real unstable poles lies between two of its real right-half-plane zeros, infinity counted (parity interlacing), and an unstable controller is lost whenever the input saturates",
			Do:   "move the sensor or the actuator, which moves the zeros",
		}
	}
	return &ident.RefusedError{
		What: "no inner loop of the forms " + strings.Join(t.inner, ", ") + " holds all plants that the data allow",
		Do:   fmt.Sprintf("shorten the delay (%.4g s in all) or the sample period (%.4g s), or take a longer log, so that fewer plants are allowed", t.p.nominal.tf.Delay, t.p.period),
	}
}

// rejudge recomputes a pair's figures on other plants or for other targets.
func (p *problem) rejudge(s pair, plants []plant, aim targets) pair {
	var g gridLoop
	var sim simulator
	s.ratios = p.judge(s.inner.block, s.outer, s.pre, plants, aim, &g, &sim)
	s.cost = s.ratios.cost()
	return s
}

// worstOf returns the indices of the pool in order of how badly the pair does on them.
func (t *tuner) worstOf(ctx context.Context, s pair, aim targets) ([]int, error) {
	return worstFirst(ctx, t.pool, t.workers, func(pl *plant) float64 {
		return t.p.rejudge(s, []plant{*pl}, aim).ratios.worst()
	})
}
