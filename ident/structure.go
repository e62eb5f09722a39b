package ident

import (
	"cmp"
	"context"
	"math"
	"math/cmplx"
	"slices"

	"golang.org/x/sync/errgroup"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/lti"
)

// Limits of the search for a structure, where the rig file gives no hint.
const (
	MaxPoles        = 5
	MaxColour       = 2
	MaxIntegrators  = 2
	maxDelaySamples = 8 // of a delay without a hint
	firstPoles      = 4 // of the structures that the search starts from
	shortRows       = 1500
)

// How hard a structure is fitted while it is only compared with others, and
// how hard the winner.
const (
	glanceStarts = 4
	glanceSteps  = 4
	sameOptimum  = 1e-7 // relative difference of two sums of squares
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
// found.
type candidate struct {
	structure
	fit *fit.Prediction
	bic float64
}

// chooser searches structures on one set of records.
type chooser struct {
	p       *fit.Predictor
	scope   scope
	seeds   [][]fit.Seed // by source, then by order - 1
	tried   map[structure]*candidate
	workers int
}

// newChooser prepares the starts that do not depend on the structure: the
// poles of long ARX models of two lengths, cut to each order.
func newChooser(p *fit.Predictor, recs []fit.Record, sc scope, workers int) (*chooser, error) {
	p.DelayRange = [2]float64{math.Min(sc.base, sc.delay[0]), math.Max(sc.base, sc.delay[1])}
	c := &chooser{p: p, scope: sc, tried: make(map[structure]*candidate), workers: workers}
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

// spread returns the standard deviations of input and output about the means
// of their records.
func spread(recs []fit.Record) (su, sy float64) {
	var n float64
	for _, r := range recs {
		su += about(r.U)
		sy += about(r.Y)
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
	if err := c.try(ctx, first, nil, progress); err != nil {
		return nil, err
	}
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
		for _, cand := range around {
			expanded[cand.structure] = true
			var next []structure
			for _, s := range c.neighbours(cand.structure) {
				if _, done := c.tried[s]; !done {
					next = append(next, s)
				}
			}
			if err := c.try(ctx, next, cand.fit, progress); err != nil {
				return nil, err
			}
		}
	}
	return c.ranked(), nil
}

// ranked lists the fitted candidates, best first.
func (c *chooser) ranked() []*candidate {
	var list []*candidate
	for _, cand := range c.tried {
		if cand.fit != nil {
			list = append(list, cand)
		}
	}
	slices.SortFunc(list, func(a, b *candidate) int {
		return cmp.Or(cmp.Compare(a.bic, b.bic), cmp.Compare(a.poles, b.poles), cmp.Compare(a.zeros, b.zeros), cmp.Compare(a.colour, b.colour), cmp.Compare(a.integrators, b.integrators))
	})
	return list
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

// try fits structures at once, each from its own starts and from what can be
// made of a neighbour's fit.
func (c *chooser) try(ctx context.Context, list []structure, near *fit.Prediction, progress func(done, total int)) error {
	results := make([]*candidate, len(list))
	g, ctx := errgroup.WithContext(ctx)
	g.SetLimit(max(1, c.workers))
	for i, s := range list {
		g.Go(func() error {
			if err := ctx.Err(); err != nil {
				return err
			}
			results[i] = c.fit(s, near)
			return nil
		})
	}
	if err := g.Wait(); err != nil {
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

// fit finds the best fit of one structure in rounds: all starts as they are,
// the best few after some steps, the best two to the end.
func (c *chooser) fit(s structure, near *fit.Prediction) *candidate {
	cand := &candidate{structure: s, bic: math.Inf(1)}
	starts := c.starts(s)
	if near != nil {
		starts = append(starts, c.moved(near, s)...)
	}
	round := func(list []*fit.Prediction, keep, steps int) []*fit.Prediction {
		var out []*fit.Prediction
		for _, m := range list {
			if m == nil {
				continue
			}
			if steps > 0 && m.Converged {
				out = append(out, m)
			} else if f, err := c.p.Fit(m, compareTol, steps); err == nil {
				out = append(out, f)
			}
		}
		slices.SortStableFunc(out, func(a, b *fit.Prediction) int { return cmp.Compare(a.Objective(), b.Objective()) })
		return out[:min(keep, len(out))]
	}
	list := round(starts, glanceStarts, 0)
	list = round(list, 2, glanceSteps)
	if len(list) == 2 && list[1].Objective()-list[0].Objective() < sameOptimum*list[0].Objective() {
		list = list[:1]
	}
	if list = round(list, 1, compareStep); len(list) > 0 {
		cand.fit, cand.bic = list[0], c.criterion(list[0])
	}
	return cand
}

// A plant's pole and zero within dipole of the plant's mean speed nearly
// cancel. Such a pair is more often a disturbance's pole, or the zero on the
// unit circle of a noise that was differenced once too often, where the
// approximation behind BIC fails, than a plant's: it must bring dipolePenalty
// more, odds of 150 to 1.
const (
	dipole        = 0.1
	dipolePenalty = 10
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

// criterion is BIC with three amendments.
//
// On a short log BIC drops the slow colour of a disturbance, for which the
// plant's slow poles pay with errors beyond their intervals; the two parameters
// of a first colour pole cost there what they cost under AIC.
//
// A plant's pole under a zero, and a noise zero on the unit circle
// without a plant pole beside it that it could be the mirror of, mean that the
// approximation behind BIC fails; they cost dipolePenalty each.
func (c *chooser) criterion(f *fit.Prediction) float64 {
	v := f.BIC()
	if f.Rows < shortRows && f.Shape.Colour > 0 {
		v -= 2 * (math.Log(float64(f.Rows)) - 2)
	}
	if cancels(f) {
		v += dipolePenalty
	}
	if pinned(f) {
		v += dipolePenalty
	}
	return v
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

// colourStart is where an added colour pole starts, per sample.
var colourStart = []complex128{0.985, 0.9}

// starts makes full models of the seeds of the structure's order.
func (c *chooser) starts(s structure) []*fit.Prediction {
	var out []*fit.Prediction
	colour := colourStart[:s.colour]
	for source, seeds := range c.seeds {
		if s.poles > len(seeds) {
			continue
		}
		seed := seeds[s.poles-1]
		ratios := []float64{-1, fit.NoiseRatios[source%len(fit.NoiseRatios)]}
		for _, ratio := range ratios {
			sd := seed
			if ratio > 0 {
				sd.Noise = nil
			}
			if !s.delay {
				out = append(out, c.p.Start(s.shape(), sd, c.scope.base, ratio, colour))
				continue
			}
			out = append(out, c.bestDelay(s, sd, ratio, colour)...)
		}
	}
	return out
}

// bestDelay starts at every half sample of the range and keeps the best two,
// which are not neighbours on that grid.
func (c *chooser) bestDelay(s structure, sd fit.Seed, ratio float64, colour []complex128) []*fit.Prediction {
	var all []*fit.Prediction
	h := c.p.Period
	for d := c.scope.delay[0] + 0.25*h; d < c.scope.delay[1]; d += 0.5 * h {
		if m := c.p.Start(s.shape(), sd, d, ratio, colour); m != nil {
			all = append(all, m)
		}
	}
	slices.SortStableFunc(all, func(a, b *fit.Prediction) int { return cmp.Compare(a.Objective(), b.Objective()) })
	var best []*fit.Prediction
	for _, m := range all {
		if len(best) < 2 && (len(best) == 0 || math.Abs(m.Delay-best[0].Delay) > 0.75*h) {
			best = append(best, m)
		}
	}
	return best
}

// moved makes starts for a structure from a neighbour's fit: poles and zeros
// are added far away or dropped from there, colour is added slow.
func (c *chooser) moved(m *fit.Prediction, s structure) []*fit.Prediction {
	h := c.p.Period
	start := copyOf(m)
	start.Shape = s.shape()
	start.Delay = math.Min(c.scope.delay[1], math.Max(c.scope.delay[0], start.Delay))
	if !s.delay {
		start.Delay = c.scope.base
	}
	for start.Den.Degree() > s.poles {
		dropPole(start, h)
	}
	for len(start.Num)-1 > s.zeros {
		dropZero(start)
	}
	list := []*fit.Prediction{start}
	for start.Den.Degree() < s.poles {
		var grown []*fit.Prediction
		for _, p := range []float64{-0.5 / h, -0.1 / h} {
			for _, b := range list {
				g := copyOf(b)
				addPole(g, p, h)
				grown = append(grown, g)
			}
		}
		list, start = grown, grown[0]
	}
	for _, b := range list {
		for len(b.Num)-1 < s.zeros {
			// A zero too far away to matter: the numerator keeps its values
			// at low frequency.
			b.Num = append(b.Num, b.Num[len(b.Num)-1]*h/20)
		}
	}
	for len(list[0].D)-1 < s.colour {
		var grown []*fit.Prediction
		for _, d := range []float64{0.995, 0.9} {
			for _, b := range list {
				g := copyOf(b)
				g.D = []float64(lti.Poly(g.D).Mul(lti.Poly{1, -d}))
				g.C = []float64(lti.Poly(g.C).Mul(lti.Poly{1, -d * 0.9}))
				grown = append(grown, g)
			}
		}
		list = grown
	}
	for len(list[0].D)-1 > s.colour {
		for _, b := range list {
			dropColour(b)
		}
	}
	if s.delay && !m.FreeDelay {
		var grown []*fit.Prediction
		for _, d := range []float64{0.25, 0.75, 1.5} {
			for _, b := range list {
				g := copyOf(b)
				g.Delay = math.Min(c.scope.delay[1], b.Delay+d*h)
				grown = append(grown, g)
			}
		}
		list = grown
	}
	return list
}

func copyOf(m *fit.Prediction) *fit.Prediction {
	k := *m
	k.Num, k.Den = append(lti.Poly(nil), m.Num...), append(lti.Poly(nil), m.Den...)
	k.D, k.C = append([]float64(nil), m.D...), append([]float64(nil), m.C...)
	k.Cov, k.Const = nil, nil
	return &k
}

// addPole multiplies the plant by 1/(1 - s/p) and leaves the noise as it is.
func addPole(m *fit.Prediction, p, h float64) {
	m.Den = m.Den.Mul(lti.Poly{-p, 1})
	m.Num = m.Num.Scale(-p)
	m.C = []float64(lti.Poly(m.C).Mul(lti.Poly{1, -math.Exp(p * h)}))
}

// dropPole takes out the fastest real pole, or the fastest pair but for its
// real part, and the noise zero next to it.
func dropPole(m *fit.Prediction, h float64) {
	poles := m.Den.Roots()
	fast := slices.MaxFunc(poles, func(a, b complex128) int { return cmp.Compare(weight(a), weight(b)) })
	var rest []complex128
	gone := false
	for _, p := range poles {
		switch {
		case !gone && p == fast:
			gone = true
		case imag(fast) != 0 && p == cmplx.Conj(fast):
			rest = append(rest, complex(real(p), 0))
		default:
			rest = append(rest, p)
		}
	}
	size := cmplx.Abs(fast)
	if size > 0 {
		m.Num = m.Num.Scale(1 / size)
		if imag(fast) != 0 && real(fast) != 0 {
			m.Num = m.Num.Scale(math.Abs(real(fast)) / size)
		}
	}
	m.Den = lti.FromRoots(rest)
	z := cmplx.Exp(fast * complex(h, 0))
	m.C = withoutNearest(m.C, z)
}

// weight orders poles by speed, real ones before pairs of the same speed.
func weight(p complex128) float64 {
	if imag(p) != 0 {
		return cmplx.Abs(p) * 0.999
	}
	return cmplx.Abs(p)
}

// dropZero takes out the farthest real zero, or the real part of the farthest
// pair, and keeps the values at low frequency.
func dropZero(m *fit.Prediction) {
	m.Num = m.Num[:len(m.Num)-1]
	if m.Num[len(m.Num)-1] == 0 {
		m.Num[len(m.Num)-1] = 1e-9
	}
}

func dropColour(m *fit.Prediction) {
	roots := zRoots(m.D)
	slices.SortFunc(roots, func(a, b complex128) int { return cmp.Compare(cmplx.Abs(a), cmplx.Abs(b)) })
	last := roots[len(roots)-1]
	roots = roots[:len(roots)-1]
	if imag(last) != 0 {
		for i := range roots {
			roots[i] = complex(real(roots[i]), 0)
		}
	}
	m.D = fromZRoots(roots)
	m.C = withoutNearest(m.C, last)
}

// withoutNearest drops the root nearest to z, in the z-plane, of a polynomial
// in powers of z^-1.
func withoutNearest(p []float64, z complex128) []float64 {
	roots := zRoots(p)
	if len(roots) == 0 {
		return p
	}
	i := slices.IndexFunc(roots, func(r complex128) bool {
		return cmplx.Abs(r-z) == slices.MinFunc(distances(roots, z), cmp.Compare)
	})
	near := roots[i]
	roots = slices.Delete(roots, i, i+1)
	if imag(near) != 0 {
		for j, r := range roots {
			if r == cmplx.Conj(near) {
				roots[j] = complex(real(r), 0)
				break
			}
		}
	}
	return fromZRoots(roots)
}

func distances(roots []complex128, z complex128) []float64 {
	d := make([]float64, len(roots))
	for i, r := range roots {
		d[i] = cmplx.Abs(r - z)
	}
	return d
}

// zRoots returns the roots in the z-plane of a monic polynomial in powers of
// z^-1, from its powers of δ, where roots near one are well apart.
func zRoots(p []float64) []complex128 {
	c := lti.Unshift(p)
	asc := make(lti.Poly, len(c))
	for i, v := range c {
		asc[len(c)-1-i] = v
	}
	roots := asc.Roots()
	for i := range roots {
		roots[i]++
	}
	return roots
}

func fromZRoots(roots []complex128) []float64 {
	return reversed(lti.FromRoots(roots))
}
