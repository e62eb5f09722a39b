package design

import (
	"context"
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"steadyrig/data"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// Verify judges given loops, the tool's own or the user's, against a model and a rig file: bounds, zeros that would
// cancel an unstable pole, margins and the promise. The result is a copy with those parts made anew. As with Design,
// a refusal comes with the result. Errors without a result: loops that do not fit the rig file.
func Verify(ctx context.Context, model *ident.Model, rig *data.Rig, loops *Loops, opt Options) (*Loops, error) {
	p, err := newProblem(model, rig)
	if err != nil {
		return nil, err
	}
	if loops.Inner == nil {
		panic(noInner)
	}
	if math.Abs(loops.SamplePeriod-p.period) > 1e-9*p.period {
		return nil, fmt.Errorf("the loops run at a sample period of %g s, the rig file's [loop] at %g s: make them agree", loops.SamplePeriod, p.period)
	}
	l := p.newLoops()
	given := *loops
	l.Inner, l.Outer, l.Prefilter = given.Inner, given.Outer, given.Prefilter
	l.InnerForm, l.OuterForm, l.Forms = given.InnerForm, given.OuterForm, given.Forms
	l.OuterLimits = given.OuterLimits
	if given.InputLimits != nil {
		l.InputLimits = given.InputLimits
	}
	if !given.pointMissing {
		l.OperatingPoint = given.OperatingPoint
	}
	if given.InputRate > 0 {
		l.InputRate = given.InputRate
	}
	law := l.LTI()
	if err := law.Validate(); err != nil {
		return nil, fmt.Errorf("the loops cannot run: %w", err)
	}
	l.Bounds = p.bounds(p.drawTFs(boundDraws, streamBounds, opt.Seed))
	hidden := p.cancellations(law)
	if l.Margins, err = p.margins(law, model.TF()); err != nil {
		return nil, err
	}
	if l.Promise, err = p.prove(ctx, law, opt, 1); err != nil {
		return nil, err
	}
	p.firstClosure(l)
	p.conclude(l)
	switch {
	case model.Verdict == ident.Refused:
		return l.refuse(&ident.RefusedError{What: "the fit refused this model, so it cannot clear any loops", Do: "take a log as the fit's refusal says, and fit again"})
	case hidden != nil:
		return l.refuse(hidden)
	case !l.Promise.kept():
		r := l.Promise.broken(&p.spec)
		if far := outOfReach(l.Bounds); far != nil {
			r = &ident.RefusedError{What: r.What + "; " + far.What, Do: far.Do}
		}
		return l.refuse(r)
	}
	return l, nil
}

// cancellations returns the refusal of a law with a zero of K1 or of 1 + K2 in the region of a pole that may be
// unstable, or a zero of K1 at the integrator of K2.
func (p *problem) cancellations(law *lti.Law) *ident.RefusedError {
	check := func(name string, roots []complex128, regions []region) *ident.RefusedError {
		for _, z := range roots {
			if cmplx.Abs(z) < 1e-6 {
				continue // a zero at z = 0 is a sample of delay taken back, far from any pole
			}
			s := cmplx.Log(z) / complex(p.period, 0)
			r := cancelled(regions, s)
			if r == nil {
				continue
			}
			text := fmt.Sprintf("a zero of %s at %s (z = %s) lies in the region of the plant's pole at %s", name, rateText(s), rateText(z), r.pole)
			if r.center == 0 {
				return &ident.RefusedError{What: fmt.Sprintf("a zero of %s at %s (z = %s) cancels the integrator of the outer loop: a steady error remains", name, rateText(s), rateText(z)),
					Do: "move the zero away from z = 1"}
			}
			if pole := real(r.center); pole > 0 {
				text += fmt.Sprintf(": a cancelled unstable mode does not show in the step response and grows by e every %.3g s, tenfold every %.3g s", 1/pole, math.Ln10/pole)
			}
			return &ident.RefusedError{What: text, Do: "move the zero well away; an unstable pole has to be moved by feedback, never cancelled"}
		}
		return nil
	}
	poles := p.regions[:len(p.regions)-1]
	if r := check("the inner controller", law.Inner.Zeros(), poles); r != nil {
		return r
	}
	if law.Outer == nil {
		return nil
	}
	plus := lti.DTF{Num: law.Outer.Num.Add(law.Outer.Den), Den: law.Outer.Den, Period: law.Outer.Period}
	if r := check("1 + K2, K2 the outer controller,", plus.Zeros(), poles); r != nil {
		return r
	}
	integrates := slices.ContainsFunc(law.Outer.Poles(), func(z complex128) bool { return cmplx.Abs(z-1) < onCircle })
	if integrates {
		return check("the inner controller", law.Inner.Zeros(), p.regions[len(p.regions)-1:])
	}
	return nil
}

func rateText(z complex128) string {
	if imag(z) == 0 {
		return fmt.Sprintf("%.4g", real(z))
	}
	return fmt.Sprintf("%.4g%+.4gi", real(z), imag(z))
}
