package ident

import (
	"cmp"
	"context"
	"math"
	"math/cmplx"
	"slices"

	"steadyrig/data"
	"steadyrig/fit"
)

// Limits of the search for a structure, where the rig file gives no hint.
const (
	MaxPoles        = 6
	MaxColour       = 2
	MaxIntegrators  = 2
	maxDelaySamples = 8 // of a delay without a hint
	firstPoles      = 4 // of the structures that the search starts from
	shortRows       = 4000
)

// How hard a structure is fitted while it is only compared with others, and
// how hard the winner.
const (
	glanceStarts = 6
	glanceSteps  = 4
	startRows    = 3000
	hopeless     = 10   // reaches behind, from where no step more is spent
	glanceReach  = 60   // in BIC on the glance's rows: odds of exp(30)
	sameOptimum  = 1e-7 // relative difference of two sums of squares
	worthALook   = 0.5  // least gain in the criterion for which a structure is fitted again
	compareTol   = 1e-5
	compareStep  = 25
	finalTol     = 1e-11
	finalSteps   = 200
)

// structure is a candidate: numbers of poles and zeros of the plant, poles of
// the disturbance's own, whether the delay is free, and how many of the poles
// are integrators.
type structure struct {
	poles, zeros, colour int
	delay                bool
	integrators          int
}

func (s structure) shape() fit.Shape {
	return fit.Shape{Poles: s.poles, Zeros: s.zeros, Colour: s.colour, FreeDelay: s.delay, Integrators: s.integrators}
}

// scope bounds a search.
type scope struct {
	minPoles, maxPoles int
	minZeros, maxZeros int
	base               float64 // s: the delay of structures that do not estimate it
	delay              [2]float64
	freeDelay          bool // may be estimated
	mustDelay          bool // has to be
}

// scopeOf reads the hints of a rig file.
func scopeOf(rig *data.Rig, period float64) scope {
	sc := scope{minPoles: 1, maxPoles: MaxPoles, maxZeros: MaxPoles - 1, delay: [2]float64{0, maxDelaySamples * period}, freeDelay: true}
	if k := rig.Model.Order; k != nil {
		sc.minPoles, sc.maxPoles = *k, *k
	}
	if k := rig.Model.Zeros; k != nil {
		sc.minZeros, sc.maxZeros = *k, *k
	}
	if d := rig.Model.Delay; d != nil {
		sc.delay = *d
		sc.base = math.Max(0, d[0])
		sc.freeDelay = d[1] > d[0]
		sc.mustDelay = sc.freeDelay && d[0] > 0
	}
	return sc
}

func (sc scope) allows(s structure) bool {
	return s.poles >= sc.minPoles && s.poles <= sc.maxPoles &&
		s.zeros >= sc.minZeros && s.zeros <= sc.maxZeros && s.zeros < s.poles &&
		s.colour >= 0 && s.colour <= MaxColour &&
		s.integrators >= 0 && s.integrators <= min(MaxIntegrators, s.poles) &&
		(!s.delay || sc.freeDelay) && (s.delay || !sc.mustDelay)
}

// candidate is a structure with its best fit so far; fit is nil where none was
// found. passing: it was seen on the glance's rows only and set aside there.
type candidate struct {
	structure
	fit     *fit.Prediction
	bic     float64
	passing bool
}

// chooser searches structures on one set of records.
type chooser struct {
	p *fit.Predictor
	// glance is p on fewer rows, where starts are compared.
	glance  *fit.Predictor
	best    float64 // least criterion on the glance's rows
	reach   float64 // beyond it, where a structure is set aside
	scope   scope
	seeds   [][]fit.Seed // by source, then by order - 1
	tried   map[structure]*candidate
	workers int
}

// newChooser prepares the starts that do not depend on the structure: the
// poles of long ARX models of two lengths, cut to each order.
func newChooser(p *fit.Predictor, recs []fit.Record, sc scope, workers int) (*chooser, error) {
	p.DelayRange = [2]float64{math.Min(sc.base, sc.delay[0]), math.Max(sc.base, sc.delay[1])}
	c := &chooser{p: p, glance: p, best: math.Inf(1), reach: glanceReach, scope: sc, tried: make(map[structure]*candidate), workers: workers}
	var err error
	if p.Rows() > startRows+startRows/3 {
		if r := busiest(recs, startRows); len(r.Y) == startRows {
			if c.glance, err = p.On([]fit.Record{r}); err != nil {
				return nil, err
			}
		}
	}
	long, err := fit.ChooseARX(recs, fit.ChooseOptions{Delay: 1, Criterion: fit.AICc})
	if long == nil {
		return nil, err
	}
	su, sy := spread(recs)
	c.seeds = append(c.seeds, long.Reduce(sc.maxPoles, su, sy, p.Period))
	order := max(6, long.Order/3)
	if order != long.Order {
		if short, _ := fit.FitARX(recs, fit.ARXOptions{NA: order, NB: order, Delay: 1}); short != nil {
			c.seeds = append(c.seeds, short.Reduce(sc.maxPoles, su, sy, p.Period))
		}
	}
	return c, nil
}

// busiest returns the unbroken stretch of at most rows rows, of five spread over
// each record, in which the input moves most. In several pieces a constant of
// its own for each would hide a slow disturbance.
func busiest(recs []fit.Record, rows int) fit.Record {
	const places = 5
	var best fit.Record
	most := -1.0
	for _, r := range recs {
		n := min(rows, len(r.Y))
		for i := range places {
			from := i * (len(r.Y) - n) / (places - 1)
			if v := about(r.U[from : from+n]); v > most {
				best, most = r.Rows(from, from+n), v
			}
		}
	}
	best.Log, best.Resumes = 0, false
	return best
}

// spread returns the standard deviations of input and output about the means
// of their records.
func spread(recs []fit.Record) (su, sy float64) {
	var n float64
	for _, r := range recs {
		su += about(r.U)
		sy += about(r.Filled().Y)
		n += float64(len(r.U))
	}
	return math.Sqrt(su / n), math.Sqrt(sy / n)
}

// about is the sum of squares about the mean.
func about(x []float64) float64 {
	var mean, s float64
	for _, v := range x {
		mean += v
	}
	mean /= float64(len(x))
	for _, v := range x {
		s += (v - mean) * (v - mean)
	}
	return s
}

// choose searches from plain structures uphill in BIC and returns all
// candidates that could be fitted, best first. Every neighbour of the winner
// has been tried.
func (c *chooser) choose(ctx context.Context, progress func(done, total int)) ([]*candidate, error) {
	var first []structure
	for n := c.scope.minPoles; n <= min(c.scope.maxPoles, max(firstPoles, c.scope.minPoles)); n++ {
		for m := c.scope.minZeros; m <= min(n-1, c.scope.maxZeros, max(2, c.scope.minZeros)); m++ {
			for k := range 2 {
				for _, delay := range []bool{false, true} {
					s := structure{poles: n, zeros: m, colour: k, delay: delay}
					// Zeros first without what else can explain a lag.
					if c.scope.allows(s) && (m == c.scope.minZeros || k == 0 && delay == c.scope.mustDelay) {
						first = append(first, s)
					}
				}
			}
		}
	}
	// From plain to rich, so that each can start from what its plainer
	// neighbours found.
	slices.SortStableFunc(first, func(a, b structure) int { return cmp.Compare(a.size(), b.size()) })
	for len(first) > 0 {
		n := slices.IndexFunc(first, func(s structure) bool { return s.size() > first[0].size() })
		if n < 0 {
			n = len(first)
		}
		if err := c.try(ctx, first[:n], nil, progress); err != nil {
			return nil, err
		}
		first = first[n:]
	}
	return c.climb(ctx, progress)
}

// climb tries what lies around the two best until all that lies around the winner
// has been tried.
func (c *chooser) climb(ctx context.Context, progress func(done, total int)) ([]*candidate, error) {
	expanded := make(map[structure]bool)
	for range 24 {
		ranked := c.ranked()
		if len(ranked) == 0 {
			return nil, nil
		}
		// The two best that have not been looked around yet; done once the
		// winner has.
		var around []*candidate
		for _, cand := range ranked[:min(2, len(ranked))] {
			if !expanded[cand.structure] {
				around = append(around, cand)
			}
		}
		if expanded[ranked[0].structure] {
			return ranked, nil
		}
		var list []structure
		var near []*fit.Prediction
		for _, cand := range around {
			expanded[cand.structure] = true
			for _, s := range c.neighbours(cand.structure) {
				if !slices.Contains(list, s) {
					list, near = append(list, s), append(near, cand.fit)
				}
			}
		}
		if err := c.try(ctx, list, near, progress); err != nil {
			return nil, err
		}
	}
	return c.ranked(), nil
}

// ranked lists the fitted candidates, best first.
func (c *chooser) ranked() []*candidate {
	var list []*candidate
	for _, cand := range c.tried {
		if cand.fit != nil && !cand.passing {
			list = append(list, cand)
		}
	}
	sortCandidates(list)
	return list
}

func sortCandidates(list []*candidate) {
	slices.SortFunc(list, func(a, b *candidate) int {
		return cmp.Or(cmp.Compare(a.bic, b.bic), cmp.Compare(a.poles, b.poles), cmp.Compare(a.zeros, b.zeros), cmp.Compare(a.colour, b.colour), cmp.Compare(a.integrators, b.integrators), cmp.Compare(a.size(), b.size()))
	})
}

// neighbours are the structures one step away, and those that trade a pole
// for a delay or a zero.
func (c *chooser) neighbours(s structure) []structure {
	var out []structure
	add := func(d structure, delay bool) {
		n := structure{s.poles + d.poles, s.zeros + d.zeros, s.colour + d.colour, delay, min(s.integrators+d.integrators, s.poles+d.poles)}
		if c.scope.allows(n) && n != s {
			out = append(out, n)
		}
	}
	for _, d := range []structure{
		{poles: 1}, {poles: -1}, {zeros: 1}, {zeros: -1}, {poles: 1, zeros: 1}, {poles: -1, zeros: -1},
		{colour: 1}, {colour: -1},
		// A light mode: a pair of poles between pairs of zeros.
		{poles: 2}, {poles: 2, zeros: 2}, {poles: -2, zeros: -2},
		// A disturbance's own pole that sat in the plant, under a zero.
		{poles: -1, zeros: -1, colour: 1}, {poles: 1, zeros: 1, colour: -1},
		{integrators: 1}, {integrators: 2}, {integrators: -1}, {integrators: -2},
	} {
		add(d, s.delay)
	}
	for _, d := range []structure{{}, {poles: -1}, {poles: 1}, {zeros: -1}, {poles: -1, zeros: -1}} {
		add(d, !s.delay)
	}
	return out
}

// size counts what a structure has.
func (s structure) size() int {
	n := s.poles + s.zeros + s.colour + s.integrators
	if s.delay {
		n++
	}
	return n
}

// nearby returns the best fits of tried structures at most nearSteps away.
func (c *chooser) nearby(s structure) []*fit.Prediction {
	var list []*candidate
	for _, k := range c.tried {
		if k.fit != nil && s.distance(k.structure) <= nearSteps {
			list = append(list, k)
		}
	}
	sortCandidates(list)
	var out []*fit.Prediction
	for _, k := range list[:min(nearFits, len(list))] {
		out = append(out, k.fit)
	}
	return out
}

// Starts from other structures: how many, and how far those may be.
const (
	nearFits  = 2
	nearSteps = 2
)

// distance is by how many poles, zeros, colour poles and delays two structures
// differ.
func (s structure) distance(o structure) int {
	d := max(s.poles-o.poles, o.poles-s.poles) + max(s.zeros-o.zeros, o.zeros-s.zeros) + max(s.colour-o.colour, o.colour-s.colour)
	if s.delay != o.delay {
		d++
	}
	return d
}

// try fits structures at once, each from its own starts and from what can be
// made of its neighbours' fits; those tried before are looked at again from the
// fit that near has for them.
func (c *chooser) try(ctx context.Context, list []structure, near []*fit.Prediction, progress func(done, total int)) error {
	// Those that take longest go first, so that no worker is left with one.
	order := make([]int, len(list))
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int { return cmp.Compare(list[b].size(), list[a].size()) })
	starts, results := make([]*fit.Prediction, len(list)), make([]*candidate, len(list))
	if err := Each(ctx, len(list), c.workers, func(i int) error {
		i = order[i]
		if near == nil {
			starts[i] = c.look(list[i], nil)
		} else {
			starts[i] = c.look(list[i], near[i])
		}
		return nil
	}); err != nil {
		return err
	}
	for _, f := range starts {
		if f != nil {
			c.best = math.Min(c.best, c.criterion(f))
		}
	}
	if err := Each(ctx, len(list), c.workers, func(i int) error {
		i = order[i]
		results[i] = c.settle(list[i], starts[i])
		return nil
	}); err != nil {
		return err
	}
	for i, s := range list {
		c.tried[s] = results[i]
	}
	if progress != nil {
		progress(len(c.tried), 0)
	}
	return nil
}

// A plant's pole and zero within dipole of the plant's mean speed nearly
// cancel. Such a pair is more often a disturbance's pole, or the zero on the
// unit circle of a noise that was differenced once too often, where the
// approximation behind BIC fails, than a plant's: it must bring surcharge
// more, odds of 150 to 1.
const (
	dipole    = 0.1
	surcharge = 10
)

func cancels(f *fit.Prediction) bool {
	if f.Zeros == 0 {
		return false
	}
	poles := f.Den.Roots()
	mean, moving := 1.0, 0
	for _, p := range poles {
		if p != 0 {
			mean *= cmplx.Abs(p)
			moving++
		}
	}
	mean = math.Pow(mean, 1/float64(max(1, moving)))
	for _, z := range f.Num.Roots() {
		for _, p := range poles {
			if cmplx.Abs(z-p) < dipole*mean {
				return true
			}
		}
	}
	return false
}

// vanishes reports whether a plant pole decays within a row, so that all that
// is left of it is a noise zero more.
func vanishes(f *fit.Prediction) bool {
	return slices.ContainsFunc(f.Den.Roots(), func(p complex128) bool { return real(p)*f.Period < -withinRow })
}

// withinRow is how far a pole decays within a row, as a logarithm, beyond which
// the log does not show it.
const withinRow = 4

// criterion is BIC with some amendments.
//
// On a short log BIC drops the slow colour of a disturbance, for which the
// plant's slow poles pay with errors beyond their intervals; the two parameters
// of a first colour pole cost there what they cost under AIC.
//
// A plant's pole under a zero, and a noise zero on the unit circle
// without a plant pole beside it that it could be the mirror of, mean that the
// approximation behind BIC fails; they cost the surcharge each, and so
// do a plant pole that decays within a row and a free delay: every actuator and
// sensor lags, and on a short log a lag faster than the probe looks like a delay.
func (c *chooser) criterion(f *fit.Prediction) float64 {
	v := f.BIC()
	if f.Rows < shortRows && f.Shape.Colour > 0 {
		v -= 2 * (math.Log(float64(f.Rows)) - 2)
	}
	for _, doubtful := range []bool{cancels(f), pinned(f), f.FreeDelay, vanishes(f) || alternates(f)} {
		if doubtful {
			v += surcharge
		}
	}
	return v
}

// alternates reports whether a colour pole turns the sign from row to row, which
// no sampled disturbance of a continuous process does by a real pole of its own.
func alternates(f *fit.Prediction) bool {
	return slices.ContainsFunc(zRoots(f.D), func(z complex128) bool { return imag(z) == 0 && real(z) < 0 })
}

// pinned reports whether C has a zero on the unit circle, as nearly as the
// search lets it come, that no plant pole accounts for. On a short log such a
// zero beside a colour pole takes out a line of the periodogram.
func pinned(f *fit.Prediction) bool {
	return slices.ContainsFunc(zRoots(f.C), func(z complex128) bool { return cmplx.Abs(z) >= 1-circle && !mirrors(f, z) })
}

// mirrors reports whether a noise zero is that of white sensor noise behind a
// plant pole that neither grows nor decays, whose place it takes.
func mirrors(f *fit.Prediction, z complex128) bool {
	return slices.ContainsFunc(f.Den.Roots(), func(p complex128) bool {
		return cmplx.Abs(cmplx.Exp(p*complex(f.Period, 0))-z) < 0.05
	})
}

// circle is how near to the unit circle a noise zero counts as on it.
const circle = 1e-4
