package design

import (
	"context"
	"fmt"
	"math"
	"slices"

	"steadyrig/data"
	"steadyrig/ident"
)

// FrontPoint is a pair of loops of the front of speed against effort: figures of the spec's step on the worst tuning
// plant, and controllers as in Loops. Its own promise comes from `verify`, or from design with its settling asked.
type FrontPoint struct {
	Settling        float64     `json:"settling"`   // s
	Overshoot       float64     `json:"overshoot"`  // fraction of the step
	PeakInput       float64     `json:"peak_input"` // share of the lesser side of the input's range
	InputNoise      float64     `json:"input_noise"`
	PeakSensitivity float64     `json:"peak_sensitivity"`
	OuterForm       string      `json:"outer_form"`
	Inner           *Block      `json:"inner"`
	Outer           *Block      `json:"outer"`
	Prefilter       *Block      `json:"prefilter"`
	OuterLimits     *[2]float64 `json:"outer_limits"`
	Chosen          bool        `json:"chosen"`

	effort float64
}

// Assumed is what a design took for what the rig file leaves open.
type Assumed struct {
	Settling float64 `json:"settling"` // s
	Why      string  `json:"why"`
}

// Asked returns a rig file with what the loops took for what it leaves open: the rig file itself where that is nothing.
func (l *Loops) Asked(rig *data.Rig) *data.Rig {
	if l.Assumed == nil || rig.Spec == nil || rig.Spec.Settling != 0 {
		return rig
	}
	full, spec := *rig, *rig.Spec
	spec.Settling = l.Assumed.Settling
	full.Spec = &spec
	return &full
}

// A front goes so many steps to either side of the design, each a factor in settling time.
const (
	frontSteps  = 2
	frontFactor = math.Sqrt2
	frontBudget = 200 // evaluations a point
)

// frontPoint gives the figures of a pair on the tuning plants.
func (t *tuner) frontPoint(s pair) FrontPoint {
	r := &s.ratios
	return FrontPoint{
		Settling: r.settlingAt, Overshoot: math.Max(0, r.overshootAt), PeakInput: r.input, InputNoise: r.noiseAt, PeakSensitivity: r.peakSAt,
		Inner: s.inner.block.file(), Outer: s.outer.file(), Prefilter: s.pre.file(),
		OuterForm: s.form, effort: r.effort,
	}
}

// walk retunes a pair for ever faster or slower steps until the spec is missed, or most points are there. Where its outer
// form does not do, the next ones are tried.
func (t *tuner) walk(ctx context.Context, s pair, settling, factor float64, most int) (pairs []pair, times []float64) {
	for range most {
		settling *= factor
		aim := t.p.aim(1, settling)
		s = t.p.polishBoth(ctx, t.p.rejudge(s, t.set, aim), t.set, aim, frontBudget)
		for i := 1 + slices.Index(t.outer, s.form); i < len(t.outer) && !(s.ratios.worst() <= 1); i++ {
			s = t.p.polishOuter(ctx, t.p.outerStarts(t.outer[i], s.inner, aim)[0], t.set, aim)
		}
		if !(s.ratios.worst() <= 1) || ctx.Err() != nil {
			break
		}
		pairs, times = append(pairs, s), append(times, settling)
	}
	return pairs, times
}

// bothWays walks from a pair to faster and to slower ones and returns all, fastest first, with the settling times that
// they were tuned for, and the index of the pair.
func (t *tuner) bothWays(ctx context.Context, s pair, most int) (pairs []pair, times []float64, own int, err error) {
	var found [2][]pair
	var at [2][]float64
	if err := ident.Each(ctx, 2, t.workers, func(i int) error {
		found[i], at[i] = t.walk(ctx, s, t.p.spec.settling, []float64{1 / frontFactor, frontFactor}[i], most)
		return nil
	}); err != nil {
		return nil, nil, 0, err
	}
	slices.Reverse(found[0])
	slices.Reverse(at[0])
	return slices.Concat(found[0], []pair{s}, found[1]), slices.Concat(at[0], []float64{t.p.spec.settling}, at[1]), len(found[0]), nil
}

// front writes the front about the design into the loops.
func (t *tuner) front(ctx context.Context, l *Loops, design pair) error {
	pairs, _, own, err := t.bothWays(ctx, design, frontSteps)
	if err != nil {
		return err
	}
	l.Front = nil
	for i, s := range pairs {
		f := t.frontPoint(s)
		law := Loops{
			SamplePeriod: l.SamplePeriod, OperatingPoint: l.OperatingPoint, InputLimits: l.InputLimits, InputRate: l.InputRate,
			Inner: f.Inner, Outer: f.Outer, Prefilter: f.Prefilter,
		}
		limits, _ := t.p.outerLimits(law.LTI(), t.set[:min(len(t.set), limitPlants)], s.ratios.vs)
		f.OuterLimits, f.Chosen = &limits, i == own
		l.Front = append(l.Front, f)
	}
	l.Front = undominated(l.Front)
	return nil
}

// undominated leaves out points that are neither faster nor take less effort than another; the design stays.
func undominated(all []FrontPoint) []FrontPoint {
	var out []FrontPoint
	for i, f := range all {
		worse := false
		for j, g := range all {
			worse = worse || j != i && g.Settling <= f.Settling && g.effort <= f.effort
		}
		if !worse || f.Chosen {
			out = append(out, f)
		}
	}
	slices.SortStableFunc(out, func(a, b FrontPoint) int {
		if a.Settling < b.Settling {
			return -1
		}
		return 1
	})
	return out
}

// Without a settling time asked it is looked for from that of a guess, so many steps to either side, after at most so
// many doublings.
const (
	searchSteps     = 5
	searchDoublings = 3
)

// guessSettling is where the search for a settling time begins: a few times what the fastest unstable mode or, without
// one, delay and sampling take.
func (p *problem) guessSettling() float64 {
	g := p.model.TF()
	fastest := 0.0
	for _, s := range g.Poles() {
		if real(s) > 0 {
			fastest = math.Max(fastest, math.Hypot(real(s), imag(s)))
		}
	}
	late := g.Delay + p.compute + p.period
	if fastest > 0 {
		return math.Max(10/fastest, 20*late)
	}
	return 100 * late
}

// settle chooses the settling time where none is asked: the knee of the front, where the effort begins to rise faster
// than the time falls. The problem is then posed for it.
func (t *tuner) settle(ctx context.Context, l *Loops) error {
	p := t.p
	var best pair
	for try := 0; ; try++ {
		var err error
		if best, err = t.tune(ctx, l, pair{}, p.aim(1, p.spec.settling)); err != nil && try == searchDoublings {
			return err
		}
		if err == nil && best.ratios.worst() <= 1 || try == searchDoublings {
			break
		}
		if err := t.repose(ctx, 2*p.spec.settling); err != nil {
			return err
		}
	}
	pairs, times, _, err := t.bothWays(ctx, best, searchSteps)
	if err != nil {
		return err
	}
	var points []FrontPoint
	for i, s := range pairs {
		f := t.frontPoint(s)
		f.Settling = times[i]
		points = append(points, f)
	}
	settling := points[knee(points)].Settling
	l.Assumed = &Assumed{Settling: settling, Why: fmt.Sprintf(
		"no settling in [spec]: of %d settling times from %.3g to %.3g s this is the knee, beyond which a faster step takes more effort than it saves time",
		len(points), points[0].Settling, points[len(points)-1].Settling)}
	return t.repose(ctx, settling)
}

// repose samples the problem and the pool for another settling time.
func (t *tuner) repose(ctx context.Context, settling float64) error {
	p := t.p
	p.spec.settling = settling
	if err := p.sample(); err != nil {
		return err
	}
	return inBatches(ctx, len(t.pool), t.workers, func(i int) {
		g := t.pool[i].tf
		g.Delay -= p.compute
		if pl, err := p.newPlant(g); err == nil {
			t.pool[i] = pl
		}
	})
}

// knee returns the index of the point furthest below the chord from the first to the last, both axes logarithmic and
// scaled to it: the points are in the order of their settling times.
//
// Source: Das (1999), On characterizing the "knee" of the Pareto curve, Structural Optimization 18, 107-115.
func knee(points []FrontPoint) int {
	first, last := points[0], points[len(points)-1]
	x, y := math.Log(last.Settling/first.Settling), math.Log(first.effort/last.effort)
	best, at := 0.0, len(points)-1
	if !(x > 0 && y > 0) {
		for i, f := range points { // no trade: the fastest of those of least effort
			if f.effort < points[at].effort {
				at = i
			}
		}
		return at
	}
	for i, f := range points {
		below := 1 - math.Log(f.Settling/first.Settling)/x - math.Log(f.effort/last.effort)/y
		if below > best {
			best, at = below, i
		}
	}
	return at
}
