package ident

import (
	"cmp"
	"fmt"
	"math"
	"slices"

	"steadyrig/fit"
)

// integratorSpan is how far a free pole may lie from zero, over its interval, in
// units of the mean speed of the other poles, for an exact integrator to stand
// in for it.
const integratorSpan = 0.2

// settleIntegrators moves structures with exact integrators behind the best
// one without where the log is too poor to tell an integrator from a pole that
// matters: loops designed for exact integrators would rest on nothing.
func settleIntegrators(p *fit.Predictor, ranked []*candidate) ([]*candidate, error) {
	best := ranked[0]
	if best.integrators == 0 {
		return ranked, nil
	}
	at := slices.IndexFunc(ranked, func(c *candidate) bool { return c.integrators == 0 })
	if at < 0 {
		return ranked, nil
	}
	free := ranked[at]
	same := slices.IndexFunc(ranked, func(c *candidate) bool {
		s := best.structure
		s.integrators = 0
		return c.structure == s
	})
	if same >= 0 {
		free = ranked[same]
	}
	f, err := p.Fit(free.fit, compareTol, compareStep)
	if err != nil {
		return nil, fmt.Errorf("fitting %s: %w", free.structure, err)
	}
	if p.Covariance(f) == nil {
		var m Model
		m.plant(f)
		m.derive()
		slow := bySpeed(m.Poles)
		mean, others := 1.0, slow[min(best.integrators, len(slow)):]
		for _, r := range others {
			mean *= math.Hypot(r.Re, r.Im)
		}
		if len(others) > 0 {
			mean = math.Pow(mean, 1/float64(len(others)))
		} else {
			mean = fastest / f.Period
		}
		reach := 0.0
		for _, r := range slow[:min(best.integrators, len(slow))] {
			reach = math.Max(reach, math.Max(math.Max(-r.Re95.Lo, r.Re95.Hi), r.Im95.Hi))
		}
		if reach < integratorSpan*mean {
			return ranked, nil
		}
	}
	rest := slices.DeleteFunc(slices.Clone(ranked), func(c *candidate) bool { return c == free })
	return append([]*candidate{free}, rest...), nil
}

// fastest is the speed, per sample, that poles are set against where a plant
// has integrators only.
const fastest = 0.2

// bySpeed sorts roots by modulus.
func bySpeed(roots []Root) []Root {
	out := slices.Clone(roots)
	slices.SortStableFunc(out, func(a, b Root) int { return cmp.Compare(math.Hypot(a.Re, a.Im), math.Hypot(b.Re, b.Im)) })
	return out
}

// loosen gives integrators the intervals of free poles. That a pole is exactly
// zero was chosen, not measured: what the log says about it is the interval of
// the same structure with the pole free, joined with zero, and the probability that
// the free pole is unstable, times the weight exp(-ΔBIC/2) of that structure
// against the chosen one (Schwarz 1978). The covariance, from which plants are
// drawn, becomes that of the free structure, too.
func (m *Model) loosen(p *fit.Predictor, f *fit.Prediction, ranked []*candidate) error {
	if f.Integrators == 0 {
		return nil
	}
	start := copyOf(f)
	start.Integrators = 0
	// Off the double pole, where the roots have no slope.
	for _, c := range ranked {
		if c.poles == f.Poles && c.zeros == f.Zeros && c.colour == f.Shape.Colour && c.delay == f.FreeDelay && c.integrators == 0 {
			start = c.fit
		}
	}
	free, err := p.Fit(start, finalTol, finalSteps)
	if err != nil {
		return fmt.Errorf("fitting integrators as free poles: %w", err)
	}
	if err := m.covariance(p, free); err != nil {
		return nil // the chosen structure stands, its poles at zero without a width
	}
	var other Model
	other.plant(free)
	other.derive()
	// Plants drawn from the model move about zero as the free poles may.
	m.Plant.Covariance = other.Plant.Covariance
	weight := 1 / (1 + math.Exp((free.BIC()-f.BIC())/2))
	// Integrators are the slowest poles of the free structure.
	slow := bySpeed(other.Poles)[:f.Integrators]
	slices.SortStableFunc(slow, func(a, b Root) int { return cmp.Or(cmp.Compare(a.Re, b.Re), cmp.Compare(a.Im, b.Im)) })
	k := 0
	for i := range m.Poles {
		if m.Poles[i].Re != 0 || m.Poles[i].Im != 0 || k == len(slow) {
			continue
		}
		r := slow[k]
		k++
		join := func(iv Interval) Interval { return Interval{math.Min(iv.Lo, 0), math.Max(iv.Hi, 0)} }
		m.Poles[i] = Root{
			ReSD: r.ReSD, ImSD: r.ImSD, Re95: join(r.Re95), Im95: join(r.Im95), Re95All: join(r.Re95All), Im95All: join(r.Im95All),
			ProbabilityUnstable: r.ProbabilityUnstable * weight,
		}
	}
	return nil
}

// weighIntegrators takes into account that a slow free pole may be an integrator
// after all: what structures of as many poles with more integrators weigh,
// exp(-ΔBIC/2) each (Kass & Raftery 1995), is taken from the probability that
// the slowest free poles are unstable.
func (m *Model) weighIntegrators(ranked []*candidate) {
	held, most := ranked[0].integrators, ranked[0].integrators
	var total, freer float64
	for _, c := range ranked {
		if c.poles != ranked[0].poles {
			continue
		}
		w := math.Exp((ranked[0].bic - c.bic) / 2)
		if total += w; c.integrators <= held {
			freer += w
		} else if w >= leastWeight {
			most = max(most, c.integrators)
		}
	}
	for _, r := range bySpeed(m.Poles)[held:most] {
		i := slices.IndexFunc(m.Poles, func(p Root) bool { return p.Re == r.Re && p.Im == r.Im })
		m.Poles[i].ProbabilityUnstable = r.ProbabilityUnstable * freer / total
	}
}
