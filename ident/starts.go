package ident

import (
	"cmp"
	"math"
	"math/cmplx"
	"slices"

	"steadyrig/fit"
	"steadyrig/fit/lti"
)

// look finds the best start of one structure on the glance's rows, from its own
// starts and from what can be made of its neighbours' fits; of one that was tried
// before from what can be made of near, and nil where that promises no more than
// was found.
func (c *chooser) look(s structure, near *fit.Prediction) *fit.Prediction {
	before := c.tried[s]
	var starts []*fit.Prediction
	if before != nil {
		starts = c.moved(near, s)
	} else {
		starts = c.starts(s)
		for _, near := range c.nearby(s) {
			starts = append(starts, c.moved(near, s)...)
		}
	}
	list := refined(c.glance, starts, glanceStarts, 0)
	list = refined(c.glance, list, 2, glanceSteps)
	if len(list) == 2 && list[1].Objective()-list[0].Objective() > sameOptimum*list[0].Objective() {
		list = refined(c.glance, list, 1, 2*glanceSteps)
	}
	if len(list) == 0 {
		return nil
	}
	found := list[0]
	if before != nil && before.fit != nil {
		known := refined(c.glance, []*fit.Prediction{before.fit}, 1, glanceSteps)
		if len(known) > 0 && c.criterion(found) >= c.criterion(known[0])-worthALook {
			return nil
		}
	}
	if c.outOfReach(found) && c.criterion(found) < c.best+hopeless*c.reach { // or so it seems
		if list = refined(c.glance, list[:1], 1, compareStep); len(list) > 0 {
			found = list[0]
		}
	}
	return found
}

// refined takes starts so many steps further on p's rows and returns those that
// then are best.
func refined(p *fit.Predictor, starts []*fit.Prediction, keep, steps int) []*fit.Prediction {
	var out []*fit.Prediction
	for _, m := range starts {
		if m == nil {
			continue
		}
		if f, err := p.Fit(m, compareTol, steps); err == nil {
			out = append(out, f)
		}
	}
	rank := func(f *fit.Prediction) int {
		if alternates(f) {
			return 1
		}
		return 0
	}
	slices.SortStableFunc(out, func(a, b *fit.Prediction) int {
		return cmp.Or(cmp.Compare(rank(a), rank(b)), cmp.Compare(a.Objective(), b.Objective()))
	})
	return out[:min(keep, len(out))]
}

// outOfReach reports whether a start on the glance's rows is so far behind the
// best there that no fit on all rows can make up for it.
func (c *chooser) outOfReach(f *fit.Prediction) bool { return c.criterion(f) > c.best+c.reach }

// settle fits a start on all rows, where that can matter. What was found before
// stands where it is better.
func (c *chooser) settle(s structure, start *fit.Prediction) *candidate {
	cand := c.tried[s]
	if cand == nil {
		cand = &candidate{structure: s, bic: math.Inf(1)}
	}
	switch {
	case start == nil:
	case !c.outOfReach(start):
		if list := refined(c.p, []*fit.Prediction{start}, 1, compareStep); len(list) > 0 {
			if v := c.criterion(list[0]); cand.passing || v < cand.bic {
				cand = &candidate{structure: s, fit: list[0], bic: v}
			}
		}
	case cand.fit == nil || cand.passing:
		// Worth no more than being a start for others.
		cand = &candidate{structure: s, fit: start, bic: c.criterion(start) * float64(c.p.Rows()) / float64(c.glance.Rows()), passing: true}
	}
	return cand
}

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
				out = append(out, c.glance.Start(s.shape(), sd, c.scope.base, ratio, colour))
				continue
			}
			out = append(out, c.bestDelay(s, sd, ratio, colour)...)
		}
	}
	return out
}

// bestDelay starts at a quarter of every sample of the range, and half a sample
// to either side of the best, and keeps the best two, which are not neighbours.
func (c *chooser) bestDelay(s structure, sd fit.Seed, ratio float64, colour []complex128) []*fit.Prediction {
	var all []*fit.Prediction
	h := c.p.Period
	try := func(d float64) {
		if d < c.scope.delay[0] || d >= c.scope.delay[1] {
			return
		}
		if m := c.glance.Start(s.shape(), sd, d, ratio, colour); m != nil {
			all = append(all, m)
		}
	}
	rank := func() {
		slices.SortStableFunc(all, func(a, b *fit.Prediction) int { return cmp.Compare(a.Objective(), b.Objective()) })
	}
	for d := c.scope.delay[0] + 0.25*h; d < c.scope.delay[1]; d += h {
		try(d)
	}
	rank()
	if len(all) > 0 {
		d := all[0].Delay
		try(d - 0.5*h)
		try(d + 0.5*h)
		rank()
	}
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
	var handed []*fit.Prediction
	if s.poles == len(m.Den)-2 && s.zeros == len(m.Num)-2 && s.colour == len(m.D) {
		handed = handedOver(start, h)
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
		for _, p := range []float64{-0.5 / h, -0.1 / h, -0.02 / h} {
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
		for _, d := range []float64{0.995, 0.9, 0.3} {
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
	return append(list, handed...)
}

// handedOver makes a disturbance's pole of each stable real pole of the plant,
// whose nearest zero goes with it.
func handedOver(m *fit.Prediction, h float64) []*fit.Prediction {
	var list []*fit.Prediction
	poles, zeros := m.Den.Roots(), m.Num.Roots()
	for i, p := range poles {
		if imag(p) != 0 || real(p) >= 0 {
			continue
		}
		at, near := -1, math.Inf(1)
		for j, z := range zeros {
			if d := cmplx.Abs(z - p); imag(z) == 0 && d < near {
				at, near = j, d
			}
		}
		if at < 0 {
			continue
		}
		g := copyOf(m)
		g.Den = lti.FromRoots(slices.Delete(slices.Clone(poles), i, i+1))
		g.Num = lti.FromRoots(slices.Delete(slices.Clone(zeros), at, at+1)).Scale(m.Num[len(m.Num)-1])
		g.D = []float64(lti.Poly(g.D).Mul(lti.Poly{1, -math.Exp(real(p) * h)}))
		list = append(list, g)
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

// dropZero takes out the highest power of the numerator, which keeps the values
// at low frequency.
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
