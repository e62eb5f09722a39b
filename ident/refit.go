package ident

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"steadyrig/data"
	"steadyrig/fit"
)

// clearly is by how much in the criterion another structure must fit better than
// that of the earlier model for it to be said: odds of 150 to 1.
const clearly = 10

// Refit fits logs in the structure of an earlier model of the same rig: its
// numbers of poles, zeros and disturbance poles, its integrators held where they
// were, its delay free or held as it was. The parameters are free and start from
// the earlier ones as well as from the log alone, so that a rig that has moved far
// is found, too. Whether the structure still fits is tested as in Fit, and by all
// its neighbours: where one fits clearly better Evidence.Structures lists it and
// the model is weak. The result is a model like any other; its errors are those of
// Fit, and one for an earlier model without a plant or in other units.
func Refit(ctx context.Context, exps []*data.Experiment, rig *data.Rig, before *Model, opt Options) (*Model, error) {
	if len(before.Plant.Denominator) == 0 {
		return nil, fmt.Errorf("the earlier model of %s holds no plant: its verdict was %s; fit the new log by itself", before.Rig, before.Verdict)
	}
	if err := sameUnits(before, rig); err != nil {
		return nil, err
	}
	opt.known = before
	return Fit(ctx, exps, rig, opt)
}

// sameUnits says where a rig file names other units than the model; units that are not
// named are taken to be the same.
func sameUnits(m *Model, rig *data.Rig) error {
	differ := func(x, y string) bool { return x != "" && y != "" && x != y }
	if a, b := m.Units, rig.Units; differ(a.Input, b.Input) || differ(a.Output, b.Output) {
		return fmt.Errorf("the earlier model is in %s and %s, [units] of the rig file says %s and %s: give log and rig file in the units of the model, or fit the new log by itself",
			a.Input, a.Output, cmp.Or(b.Input, a.Input), cmp.Or(b.Output, a.Output))
	}
	return nil
}

// form is the structure of a fitted model.
func (m *Model) form() structure {
	s := structure{poles: len(m.Plant.Denominator) - 1, zeros: len(m.Plant.Numerator) - 1, delay: slices.Contains(m.Plant.Parameters, "delay")}
	s.colour = max(0, len(m.Noise.Denominator)-1-s.poles)
	for s.integrators < s.poles && m.Plant.Denominator[s.poles-s.integrators] == 0 {
		s.integrators++
	}
	return s
}

// prediction is the model as a start for a fit at the given period.
func (m *Model) prediction(period float64) *fit.Prediction {
	s := m.form()
	f := &fit.Prediction{
		Shape: s.shape(), Num: reversed(m.Plant.Numerator), Den: reversed(m.Plant.Denominator), Delay: m.Plant.Delay,
		D: make([]float64, s.colour+1), C: make([]float64, s.poles+s.colour+1), Period: period,
	}
	f.D[0], f.C[0] = 1, 1
	colour, err := m.Colour()
	if err != nil {
		return f
	}
	copy(f.D, colour.Den)
	copy(f.C, colour.Num)
	if ratio := period / m.Noise.SamplePeriod; math.Abs(ratio-1) > samePeriod {
		f.D, f.C = paced(f.D, ratio), paced(f.C, ratio)
	}
	return f
}

// samePeriod is the relative difference up to which two sample periods are one.
const samePeriod = 1e-3

// paced moves the roots of a monic polynomial in powers of z^-1 to where they
// are with ratio times the period.
func paced(p []float64, ratio float64) []float64 {
	roots := zRoots(p)
	for i, z := range roots {
		switch size := math.Pow(cmplx.Abs(z), ratio); {
		case imag(z) == 0:
			roots[i] = complex(math.Copysign(size, real(z)), 0)
		default:
			roots[i] = cmplx.Rect(size, math.Remainder(cmplx.Phase(z)*ratio, 2*math.Pi))
		}
	}
	return fromZRoots(roots)
}

// with widens the scope by the structure of a known model, nil: none.
func (sc scope) with(known *Model) scope {
	if known == nil {
		return sc
	}
	s := known.form()
	sc.minPoles, sc.maxPoles = min(sc.minPoles, s.poles), max(sc.maxPoles, s.poles)
	sc.minZeros, sc.maxZeros = min(sc.minZeros, s.zeros), max(sc.maxZeros, s.zeros)
	if s.delay {
		sc.freeDelay = true
		sc.delay = [2]float64{math.Min(sc.delay[0], known.Plant.Delay), math.Max(sc.delay[1], 2*known.Plant.Delay)}
	} else {
		sc.mustDelay, sc.base = false, known.Plant.Delay
	}
	return sc
}

// around fits the structure of a known model and all its neighbours. It comes
// first in the list that is returned, the others follow from the best on; empty
// where it could not be fitted.
func (c *chooser) around(ctx context.Context, known *Model, progress func(done, total int)) ([]*candidate, error) {
	s := known.form()
	start := known.prediction(c.p.Period)
	if err := c.try(ctx, []structure{s}, nil, progress); err != nil {
		return nil, err
	}
	for _, f := range refined(c.p, []*fit.Prediction{start}, 1, compareStep) {
		if v := c.criterion(f); c.tried[s].fit == nil || c.tried[s].passing || v < c.tried[s].bic {
			c.tried[s] = &candidate{structure: s, fit: f, bic: v}
		}
	}
	own := c.tried[s]
	if own.fit == nil {
		return nil, nil
	}
	list := c.neighbours(s)
	near := make([]*fit.Prediction, len(list))
	for i := range near {
		near[i] = own.fit
	}
	if err := c.try(ctx, list, near, progress); err != nil {
		return nil, err
	}
	ranked := c.ranked()
	if len(ranked) > 0 && ranked[0].bic < own.bic-clearly {
		var err error
		if ranked, err = c.climb(ctx, progress); err != nil {
			return nil, err
		}
	}
	rest := slices.DeleteFunc(ranked, func(k *candidate) bool { return k.structure == s })
	return append([]*candidate{c.tried[s]}, rest...), nil
}

// notBetter leaves out of a list what fits better than its first.
func notBetter(ranked []*candidate) []*candidate {
	return slices.DeleteFunc(slices.Clone(ranked), func(c *candidate) bool { return c.bic < ranked[0].bic })
}

// against lists the earlier structure and those that it was held against.
func against(tried []*candidate) []Structure {
	list := structures(tried)
	for i, c := range tried[:len(list)] {
		switch d := c.bic - tried[0].bic; {
		case i == 0:
			list[i].Verdict = "that of the earlier model"
		case d < -clearly:
			list[i].Verdict = fmt.Sprintf("fits better by %.0f in BIC", -d)
		case d < 0:
			list[i].Verdict = "hardly better than the earlier structure"
		}
	}
	return list
}

// outgrown says where another structure fits clearly better than the earlier one,
// which is the first that was tried.
func (m *Model) outgrown(tried []*candidate) {
	if len(tried) > 1 && tried[1].bic < tried[0].bic {
		m.fitted.other, m.fitted.behind = &tried[1].structure, tried[0].bic-tried[1].bic
	}
	if m.fitted.behind > clearly {
		m.Verdict = Weak
		m.Warnings = append(m.Warnings, fmt.Sprintf("the log asks for another structure than the earlier model has: %s instead of %s fits better by %.0f in BIC",
			tried[1].structure, tried[0].structure, tried[0].bic-tried[1].bic))
	}
}

// refitted is what a refit was made with.
type refitted struct {
	p *fit.Predictor
	f *fit.Prediction
	// The rows that structures were compared on.
	sp   *fit.Predictor
	some []fit.Record
	// other is the structure that fits best where that is not the earlier one, which
	// is behind by so much.
	other  *structure
	behind float64
}
