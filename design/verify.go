package design

import (
	"context"
	"errors"
	"fmt"
	"math"
	"math/cmplx"

	"steadyrig/data"
	"steadyrig/ident"
)

// Verify judges given loops, the tool's own or the user's, against a model and a rig file: bounds, hidden modes,
// margins and the promise. Controllers in s are brought to the sample period first, by the best mapping. The result is a
// copy with those parts made anew. As with Design, a refusal comes with the result. Errors without a result: loops that
// do not fit the rig file.
func Verify(ctx context.Context, model *ident.Model, rig *data.Rig, loops *Loops, opt Options) (*Loops, error) {
	if loops.Inner == nil {
		panic(noInner)
	}
	rig = loops.Asked(rig)
	if rig.Spec != nil && rig.Spec.Settling == 0 {
		return nil, fmt.Errorf("[spec] has no settling, and the loops do not say which they were designed for: give one to judge them by")
	}
	p, err := pose(model, rig)
	if p == nil {
		return nil, err
	}
	if err != nil {
		return p.newLoops().passOn(err)
	}
	if math.Abs(loops.SamplePeriod-p.period) > 1e-9*p.period {
		return nil, fmt.Errorf("the loops run at a sample period of %g s, the rig file's [loop] at %g s: make them agree", loops.SamplePeriod, p.period)
	}
	if err := p.adopt(loops); err != nil {
		return nil, err
	}
	l := p.newLoops()
	l.Inner, l.Outer, l.Prefilter, l.OuterLimits, l.Assumed = loops.Inner, loops.Outer, loops.Prefilter, loops.OuterLimits, loops.Assumed
	if err := p.sample(); err != nil {
		return l.passOn(err)
	}
	l.Warnings = p.said()
	if l.Sampling, err = p.mapControllers(l); err != nil {
		return nil, err
	}
	law := l.LTI()
	if err := law.Validate(); err != nil {
		return nil, fmt.Errorf("the loops cannot run: %w", err)
	}
	l.Bounds = p.bounds(ctx, p.drawTFs(boundDraws, streamBounds, opt.Seed))
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	var hidden *ident.RefusedError
	l.Hidden, hidden = p.hidden(law)
	if l.Margins, err = p.allMargins(ctx, law, opt); err != nil {
		return nil, err
	}
	if l.Promise, err = p.prove(ctx, law, opt, 1); err != nil {
		return nil, err
	}
	if l.Margins.PlantInput.Stable {
		if l.Yardstick, err = p.measure(ctx, law, model.Draw(l.Promise.Plants, stream(opt.Seed, streamProof, 1)), opt.Workers); err != nil {
			return nil, err
		}
		p.firstClosure(l, opt.Seed) // loops that do not hold the plant are not to be closed at all
	}
	p.conclude(l)
	switch {
	case model.Verdict == ident.Refused:
		return l.refuse(&ident.RefusedError{What: "the fit refused this model, so it cannot clear any loops", Do: "take a log as the fit's refusal says, and fit again"})
	case contradicted(model) != nil:
		return l.refuse(contradicted(model))
	case hidden != nil:
		return l.refuse(hidden)
	case !l.Promise.kept():
		r := l.Promise.broken(&p.spec)
		if do := p.whyLost(l); do != "" {
			r.Do = do
		}
		if far := outOfReach(l.Bounds); far != nil {
			r = &ident.RefusedError{What: r.What + "; " + far.What, Do: far.Do}
		}
		return l.refuse(r)
	}
	return l, nil
}

// whyLost says what to do about loops that do not hold the nominal plant: a longer log would not help. Empty where
// they do.
func (p *problem) whyLost(l *Loops) string {
	if l.Margins.PlantInput.Stable && l.Margins.InnerAlone.Stable {
		return ""
	}
	if f := l.LTI().Prefilter; f != nil {
		for _, z := range f.Poles() {
			if !(cmplx.Abs(z) < 1-stableWithin) {
				return fmt.Sprintf("do not close these loops: the prefilter has a pole at z = %s, and stands in no loop that could hold it", rateText(z))
			}
		}
	}
	turned := *l.LTI()
	turned.Inner.Num = turned.Inner.Num.Scale(-1)
	both, _, err := p.newProver(&turned).holds(p.model.TF(), &p.nominal)
	switch {
	case err == nil && both:
		return "do not close these loops: the inner controller has the wrong sign, as with its numerator's sign turned round the nominal plant is held; see the law in the file"
	case l.Margins.PlantInput.Stable:
		return "do not close these loops: the inner loop alone does not hold the nominal plant, and is all there is while the outer one is clamped or off; make the inner controller stabilise by itself"
	}
	return "do not close these loops: they do not hold even the nominal plant; check coefficients, powers of z^-1 and sample period against the law in the file, or let design find the loops"
}

// Beyond these a difference of operating points is said, and makes the verdict weak.
const (
	pointNoted = 0.01 // of the step, and of the input's range
	pointWeak  = 1.0  // of the step
)

// adopt takes operating point, input limits and rate of given loops, as far as the rig has them: an actuator has the
// rig file's limits, whatever the loops say, and trips stay where they are when the operating point moves.
func (p *problem) adopt(l *Loops) error {
	if lim := l.InputLimits; lim != nil {
		own := p.limits
		p.limits = [2]float64{math.Max(lim[0], own[0]), math.Min(lim[1], own[1])}
		if !(p.limits[0] < p.limits[1]) {
			return fmt.Errorf("the loops' input_limits %s and [limits] input %s of the rig file have nothing in common: correct the one that is wrong", pairText(*lim), pairText(own))
		}
		if lim[0] < own[0] || lim[1] > own[1] {
			p.warnings = append(p.warnings, fmt.Sprintf("the loops' input_limits %s are wider than [limits] input %s of the rig file: judged with %s, which the controller has to know too",
				pairText(*lim), pairText(own), pairText(p.limits)))
		}
	}
	if rate := l.InputRate; rate > 0 && p.rate > 0 && rate > p.rate {
		p.warnings = append(p.warnings, fmt.Sprintf("the loops' input_rate %.4g is above [limits] input_rate %.4g of the rig file: judged with the lower one, which the controller has to know too", rate, p.rate))
	} else if rate > 0 {
		p.rate = rate
	}
	if !l.pointMissing {
		own := p.point
		p.point = l.OperatingPoint
		du, dy := math.Abs(p.point.Input-own.Input), math.Abs(p.point.Output-own.Output)
		text := fmt.Sprintf("the loops work about input %.4g, output %.4g, the rig file and the model about %.4g, %.4g: away from its point the plant may be another",
			p.point.Input, p.point.Output, own.Input, own.Output)
		switch full := p.rig.Limits.Input[1] - p.rig.Limits.Input[0]; {
		case dy > pointWeak*p.spec.step || du > NoiseShare*full:
			p.doubts = append(p.doubts, text)
		case dy > pointNoted*p.spec.step || du > pointNoted*full:
			p.warnings = append(p.warnings, text)
		}
	}
	if err := p.about(); err != nil {
		var r *ident.RefusedError
		if errors.As(err, &r) {
			return fmt.Errorf("the loops do not fit the rig file: %s: correct their operating_point or input_limits", r.What)
		}
		return err
	}
	return nil
}

func pairText(v [2]float64) string { return fmt.Sprintf("[%.4g, %.4g]", v[0], v[1]) }

func rateText(z complex128) string {
	if imag(z) == 0 {
		return fmt.Sprintf("%.4g", real(z))
	}
	return fmt.Sprintf("%.4g%+.4gi", real(z), imag(z))
}
