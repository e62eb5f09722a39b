package design

import (
	"bytes"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"math"
	"slices"
	"strings"

	"steadyrig/data"
	"steadyrig/ident"
)

// Options of Design and Verify. The zero value is ready.
type Options struct {
	Seed     uint64                // of all draws; the same seed gives the same loops, whatever Workers
	Workers  int                   // at most so many goroutines; 0: one per core
	Plants   int                   // fresh plants in the proof; 0: DefaultPlants
	Inner    string                // form of the inner controller, one of InnerForms; "": the simplest that does
	Outer    string                // form of the outer controller, one of OuterForms; "": the simplest that does
	Progress func(done, total int) // called during the proof, from several goroutines; nil: not called
	Limits   func([]Bound)         // called with what physics allows before anything is tuned or tried; nil: not called
}

// Design finds two loops for a model: bounds first, then the inner loop, then the outer one, tuned for the worst of
// plants drawn from the model, then the promise on fresh plants. When physics or the promise says no, it returns the
// partial result, its verdict "refused", together with an *ident.RefusedError that says what and what to do. Any
// other error comes without a result: the rig file or the model cannot be worked with, or ctx ended.
func Design(ctx context.Context, model *ident.Model, rig *data.Rig, opt Options) (*Loops, error) {
	inner, outer, err := opt.forms()
	if err != nil {
		return nil, err
	}
	p, err := pose(model, rig)
	if p == nil {
		return nil, err
	}
	l := p.newLoops()
	if err == nil {
		err = p.sample()
	}
	if err != nil {
		return l.passOn(err)
	}
	l.Warnings = p.said() // sampling may have added to them
	draws := p.drawTFs(boundDraws, streamBounds, opt.Seed)
	l.Bounds = p.bounds(ctx, draws)
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	if opt.Limits != nil {
		opt.Limits(l.Bounds)
	}
	if r := p.unheld(draws); r != nil {
		return l.refuse(r)
	}
	if r := outOfReach(l.Bounds); r != nil {
		return l.refuse(r)
	}
	if model.Verdict == ident.Refused {
		return l.refuse(&ident.RefusedError{What: "the fit refused this model, so no loops are designed on it", Do: "take a log as the fit's refusal says, and fit again"})
	}
	if r := contradicted(model); r != nil {
		return l.refuse(r)
	}
	t := tuner{p: p, workers: opt.Workers, inner: inner, outer: outer}
	if t.pool, err = p.pool(ctx, tuningPool, stream(opt.Seed, streamTuning, 0), opt.Workers); err != nil {
		return l.passOn(err)
	}
	if least, _ := p.leastPeakS(p.spec.noise); !math.IsInf(least, 0) {
		t.yard = least
	}
	if p.assumed {
		if err := t.settle(ctx, l); err != nil {
			return l.passOn(err)
		}
	}
	aim := p.aim(1, p.spec.settling)
	var best pair
	for attempt := 1; ; attempt++ {
		if best, err = t.tune(ctx, l, best, aim); err != nil {
			return l.passOn(err)
		}
		if err := p.assemble(l, best, t.set); err != nil {
			return nil, err
		}
		l.Promise, err = p.prove(ctx, l.LTI(), opt, attempt)
		if err != nil {
			return nil, err
		}
		if l.Promise.kept() || attempt == 2 {
			break
		}
		// The plants of the proof are not looked at: what it has shown is that the tails of the tuning's are too short.
		more, err := p.pool(ctx, tuningTail, stream(opt.Seed, streamTuning, attempt), opt.Workers)
		if err != nil {
			return l.passOn(err)
		}
		t.pool, aim = append(t.pool, more...), p.aim(attempt+1, p.spec.settling)
	}
	if err := t.front(ctx, l, best); err != nil {
		return nil, err
	}
	if l.Margins, err = p.allMargins(ctx, l.LTI(), opt); err != nil {
		return nil, err
	}
	proven := model.Draw(l.Promise.Plants, stream(opt.Seed, streamProof, l.Promise.Attempts))
	if l.Yardstick, err = p.measure(ctx, l.LTI(), proven, opt.Workers); err != nil {
		return nil, err
	}
	p.relaxed(l)
	l.Choice = t.why(best, l.Margins.PlantInput.PeakSensitivity)
	p.firstClosure(l, opt.Seed)
	p.conclude(l)
	if r := l.Promise.broken(&p.spec); r != nil {
		return l.refuse(r)
	}
	return l, nil
}

// newLoops fills in what is known before any tuning.
func (p *problem) newLoops() *Loops {
	l := &Loops{
		Schema: LoopsSchema, Tool: p.model.Tool, Rig: p.rig.Name, Made: p.model.Made, ModelSHA256: modelSum(p.model),
		SamplePeriod: p.period, ComputeDelay: p.rig.Loop.ComputeDelay, OperatingPoint: p.point, Law: LawText,
		InputRate: p.rate, Verdict: Sound, Warnings: p.said(), Bounds: []Bound{},
	}
	lim := p.limits
	l.InputLimits = &lim
	return l
}

// said lists what there is to warn about so far.
func (p *problem) said() []string { return append(slices.Clone(p.doubts), p.warnings...) }

// modelSum is the checksum of the model file as the tool writes it.
func modelSum(m *ident.Model) string {
	var b bytes.Buffer
	if err := m.Write(&b); err != nil {
		return ""
	}
	sum := sha256.Sum256(b.Bytes())
	return hex.EncodeToString(sum[:])
}

// refuse marks the loops and returns both.
func (l *Loops) refuse(r *ident.RefusedError) (*Loops, error) {
	l.Verdict = Refused
	l.Warnings = append(l.Warnings, r.Error())
	return l, r
}

// passOn returns a refusal with the partial result, any other error alone.
func (l *Loops) passOn(err error) (*Loops, error) {
	if r, ok := err.(*ident.RefusedError); ok {
		return l.refuse(r)
	}
	return nil, err
}

// limitPlants is the number of tuning plants on which the limits of v are tried.
const limitPlants = 6

// assemble writes a pair into the loops, with the limits of v.
func (p *problem) assemble(l *Loops, s pair, tuning []plant) error {
	l.InnerForm, l.OuterForm = s.inner.form, s.form
	l.Inner, l.Outer, l.Prefilter = s.inner.block.file(), s.outer.file(), s.pre.file()
	l.OuterLimits = nil
	law := l.LTI()
	if err := law.Validate(); err != nil {
		return fmt.Errorf("designing loops: %w", err)
	}
	limits, short := p.outerLimits(law, tuning[:min(len(tuning), limitPlants)], s.ratios.vs)
	l.OuterLimits = &limits
	const text = "the spec's step or kick moves v so far that the outer limits leave less authority to stabilise than is prudent: ask for a smaller step or kick, or a slower one"
	l.Warnings = slices.DeleteFunc(l.Warnings, func(w string) bool { return w == text })
	if short {
		l.Warnings = append(l.Warnings, text)
	}
	return nil
}

// kept reports whether the proof carries the promise.
func (q *Promise) kept() bool { return q.LowerBound >= PromisedShare && q.Stable == q.Plants }

// nominalMisses reports whether the nominal plant misses the spec.
func (q *Promise) nominalMisses(s *demands) bool {
	o := outcome{overshoot: q.Overshoot.Nominal, settling: q.Settling.Nominal, peakS: q.PeakS.Nominal, noise: q.InputNoise.Nominal}
	if q.KickPeak != nil {
		o.kickPk = q.KickPeak.Nominal
	}
	return slices.ContainsFunc(q.Misses, func(m MissReason) bool {
		got, asked := o.figure(m.What, s)
		return asked > 0 && got > asked
	})
}

// broken returns the refusal of a promise that failed, nil if it is kept.
func (q *Promise) broken(s *demands) *ident.RefusedError {
	if q.kept() {
		return nil
	}
	var parts []string
	for _, m := range q.Misses {
		text := fmt.Sprintf("%s missed by %d plants", m.What, m.Plants)
		if m.Asked > 0 || m.Worst > 0 {
			text += fmt.Sprintf(" (worst %.4g, asked %.4g)", m.Worst, m.Asked)
		}
		parts = append(parts, text)
	}
	do := "ask for less where it misses, or take a longer log, so that fewer plants are allowed"
	if q.nominalMisses(s) {
		do = "ask for less where it misses, or change the loops: the nominal plant misses it too, so a longer log will not help"
	}
	if q.Stable < q.Plants {
		do = "do not close these loops: take a longer log, so that fewer plants are allowed, or shorten the delay"
	}
	return &ident.RefusedError{
		What: fmt.Sprintf("the promise failed: %d of %d plants meet the spec, lower bound %.4f, wanted %.3f: %s",
			q.MeetSpec, q.Plants, q.LowerBound, PromisedShare, strings.Join(parts, "; ")),
		Do: do,
	}
}
