package design

import (
	"context"
	"math"
	"math/cmplx"

	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// onCircle is the distance from the unit circle within which an open-loop pole counts as lying on it.
const onCircle = 1e-9

// openPoles counts the open-loop poles outside the unit circle and lists the frequencies of those on it.
func openPoles(period float64, plant lti.TF, blocks ...*lti.DTF) (unstable int, axis []float64) {
	take := func(radius, rate float64) {
		switch {
		case radius > 1+onCircle:
			unstable++
		case radius > 1-onCircle && rate >= 0:
			axis = append(axis, rate)
		}
	}
	for _, s := range plant.Poles() {
		take(math.Exp(real(s)*period), imag(s))
	}
	for _, b := range blocks {
		if b == nil {
			continue
		}
		for _, z := range b.Poles() {
			take(cmplx.Abs(z), cmplx.Phase(z)/period)
		}
	}
	return unstable, axis
}

// margins computes the margins of a law about one plant, at the three places.
func (p *problem) margins(law *lti.Law, g lti.TF) (*LoopMargins, error) {
	t, err := lti.NewTwoLoops(g, p.compute, law)
	if err != nil {
		return nil, err
	}
	lo, hi := p.omega[1], math.Pi/p.period
	g.Delay += p.compute
	figures := func(l func(float64) complex128, stable bool, blocks ...*lti.DTF) *Margins {
		n, axis := openPoles(p.period, g, blocks...)
		return marginsFile(lti.LoopMargins(l, lo, hi, n, axis...), stable)
	}
	inner := t
	inner.Outer, inner.Prefilter = lti.DTF{}, lti.DTF{}
	m := &LoopMargins{
		PlantInput: figures(t.LoopAtInput, stable(t), &law.Inner, law.Outer),
		InnerAlone: figures(t.InnerLoop, stable(inner), &law.Inner),
	}
	if law.Outer != nil {
		// The loop opened at v: its open-loop poles are those of the closed inner loop and of the outer controller.
		n, axis := 0, []float64(nil)
		for _, z := range inner.Poles() {
			if cmplx.Abs(z) > 1+onCircle {
				n++
			}
		}
		for _, z := range law.Outer.Poles() {
			switch r := cmplx.Abs(z); {
			case r > 1+onCircle:
				n++
			case r > 1-onCircle && cmplx.Phase(z) >= 0:
				axis = append(axis, cmplx.Phase(z)/p.period)
			}
		}
		m.OuterBreak = marginsFile(lti.LoopMargins(t.OuterBreak, lo, hi, n, axis...), stable(t))
	}
	return m, nil
}

// marginDraws is the number of drawn plants over which the worst margins are taken.
const marginDraws = 200

// allMargins computes the margins about the nominal plant, and the worst over drawn plants.
func (p *problem) allMargins(ctx context.Context, law *lti.Law, opt Options) (*LoopMargins, error) {
	m, err := p.margins(law, p.model.TF())
	if err != nil {
		return nil, err
	}
	m.Worst, err = p.worstMargins(ctx, law, p.drawTFs(marginDraws, streamMargins, opt.Seed), opt.Workers)
	return m, err
}

// worstMargins takes each margin at the plant input, both loops closed, from the drawn plant on which it is least. Plants
// that the loops do not hold have none; they are counted.
func (p *problem) worstMargins(ctx context.Context, law *lti.Law, draws []lti.TF, workers int) (*WorstMargins, error) {
	each := make([]*Margins, len(draws))
	first := p.newProver(law)
	if err := ident.Each(ctx, len(draws), workers, func(i int) error {
		g := draws[i]
		pl, err := p.newPlant(g)
		if err != nil {
			return nil // nothing holds what cannot be sampled
		}
		if both, _, err := first.another().holds(g, &pl); err != nil || !both {
			return err
		}
		t, err := lti.NewTwoLoops(g, p.compute, law)
		if err != nil {
			return err
		}
		n, axis := openPoles(p.period, pl.tf, &law.Inner, law.Outer)
		each[i] = marginsFile(lti.LoopMargins(t.LoopAtInput, p.omega[1], math.Pi/p.period, n, axis...), true)
		return nil
	}); err != nil {
		return nil, err
	}
	w := &WorstMargins{Plants: len(draws)}
	lesser := func(a **float64, b *float64, sign float64) {
		if b != nil && (*a == nil || sign*(*b) < sign*(**a)) {
			*a = b
		}
	}
	for _, m := range each {
		if m == nil {
			continue
		}
		w.Stable++
		lesser(&w.GainUp, m.GainUp, 1)
		lesser(&w.GainDown, m.GainDown, -1)
		lesser(&w.PhaseDeg, m.PhaseDeg, 1)
		lesser(&w.Delay, m.Delay, 1)
		w.PeakSensitivity = math.Max(w.PeakSensitivity, m.PeakSensitivity)
	}
	return w, nil
}

// stableWithin is how far inside the unit circle a closed-loop pole has to lie to count as stable: a mode that
// neither grows nor decays is one that the loop does not hold.
const stableWithin = 1e-10

func stable(t lti.TwoLoops) bool {
	for _, z := range t.Poles() {
		if !(cmplx.Abs(z) < 1-stableWithin) {
			return false
		}
	}
	return true
}

func marginsFile(m lti.Margins, stable bool) *Margins {
	finite := func(v float64) *float64 {
		if math.IsInf(v, 0) || math.IsNaN(v) {
			return nil
		}
		return &v
	}
	out := &Margins{
		GainUp: finite(m.GainUp), Delay: finite(m.Delay), PhaseDeg: finite(m.Phase * 180 / math.Pi), Crossover: m.Crossover,
		PeakSensitivity: m.PeakS, PeakSensitivityAt: m.PeakSAt, PeakComplementary: m.PeakT, Stable: stable,
	}
	if m.GainDown > 0 {
		out.GainDown = finite(m.GainDown)
	}
	return out
}

// GuaranteedMargins returns what a peak of |S| guarantees: the gain may rise by the factor up or fall by the factor
// down, and the phase may turn by phase (rad). peak > 1.
//
// Source: Skogestad & Postlethwaite (2005), Multivariable Feedback Control, sec. 2.4.
func GuaranteedMargins(peak float64) (up, down, phase float64) {
	return peak / (peak - 1), peak / (peak + 1), 2 * math.Asin(1/(2*peak))
}
