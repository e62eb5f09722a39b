package main

import (
	"context"
	"errors"
	"fmt"

	"github.com/spf13/cobra"

	"steadyrig/cmd/steadyrig/history"
	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

const loopsFile = "loops.json"

func newDesign(a *app) *cobra.Command {
	var s settings
	cmd := &cobra.Command{
		Use:   "design RIG.toml MODEL.json",
		Short: "Design an inner and an outer loop, and prove them",
		Long: `design says first what physics allows, then tunes an inner loop that stabilises
and an outer loop that meets the spec, for the worst of plants drawn from the
model, and counts on fresh draws how many keep the promise. Of the forms that
do, the simplest is taken; --inner and --outer ask for one. Without settling
in [spec] it is chosen where faster steps begin to cost more than they gain.
It writes loops.json, or the file that --out names.`,
		Example: "  steadyrig design rig.toml model.json\n  steadyrig design rig.toml model.json --inner observer-based --outer PI",
		Args:    wants(2, 2, "a rig file and a model"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if err := s.checkForms(); err != nil {
				return err
			}
			if err := a.checkTarget(&s, loopsFile); err != nil {
				return err
			}
			rig, model, sum, err := a.rigAndModel(args, &s)
			if err != nil {
				return err
			}
			loops, refusal := a.design(cmd.Context(), model, rig, &s, sum, a.limits(&s))
			err = a.deliverLoops(&s, loopsFile, loops, refusal, func(p *page) { showDesign(p, loops, rig.Units) })
			if loops != nil && err == refusal {
				a.record(&s, args[0], history.OfLoops(loops))
			}
			return err
		},
	}
	s.add(cmd, "write the loops here instead of to loops.json")
	s.addSeed(cmd)
	s.addForms(cmd)
	s.addHistory(cmd)
	return cmd
}

func newVerify(a *app) *cobra.Command {
	var s settings
	var own data.Controllers
	cmd := &cobra.Command{
		Use:   "verify RIG.toml MODEL.json [LOOPS.json]",
		Short: "Prove a pair of loops, the tool's or your own",
		Long: `verify judges loops against a model: bounds, hidden modes and zeros that would
cancel an unstable pole, margins, and the promise over the plants that the data
allow. The loops are those of LOOPS.json or, without it, of [loops] in the rig
file; --inner, --outer and --prefilter replace single ones. --out writes them
with margins and promise made anew.

A controller is a rational expression in s or in z, or lists of coefficients:

  2.4*(s + 30)/(0.002*s + 1)        (2.4 - 2.2 z^-1)/(1 - 0.4 z^-1)
  [2.4, 72] / [0.002, 1] in s       falling powers of s
  [2.4, -2.2] / [1, -0.4] in z^-1   rising powers of 1/z ("in z": falling of z)

One in s is brought to the sample period by the mapping that changes the closed
loop least.`,
		Example: `  steadyrig verify rig.toml model.json loops.json
  steadyrig verify rig.toml model.json --inner "2.4*(s+30)/(0.002*s+1)" \
      --outer "0.5 + 2/s"`,
		Args: wants(2, 3, "a rig file and a model, and loops or --inner"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if err := a.checkTarget(&s, ""); err != nil {
				return err
			}
			rig, model, sum, err := a.rigAndModel(args, &s)
			if err != nil {
				return err
			}
			given, err := a.loopsToVerify(rig, args[2:], &own, &s)
			if err != nil {
				return err
			}
			bar := a.progress("verify", s.quiet)
			loops, refusal := design.Verify(cmd.Context(), model, rig, given, design.Options{Seed: s.seed, Progress: bar.step})
			bar.wipe()
			if err := a.finishLoops(cmd.Context(), loops, refusal, sum); err != nil {
				return err
			}
			if given.ModelSHA256 != "" && given.ModelSHA256 != sum {
				a.warn(&s, []string{"the loops were designed for another model than " + args[1]})
			}
			return a.deliverLoops(&s, "", loops, refusal, func(p *page) { showLoops(p, loops, rig.Units) })
		},
	}
	s.add(cmd, "write the loops with margins and promise made anew here")
	s.addSeed(cmd)
	f := cmd.Flags()
	f.StringVar(&own.Inner, "inner", "", "your inner `controller`, in s or z")
	f.StringVar(&own.Outer, "outer", "", "your outer `controller`; \"none\": no outer loop")
	f.StringVar(&own.Prefilter, "prefilter", "", "your `prefilter` of the reference; 1: none")
	return cmd
}

// noLoop is what --outer takes for no outer loop.
const noLoop = "none"

// loopsToVerify reads the loops of a file or, without one, of the rig file, each controller replaced by that of its
// flag.
func (a *app) loopsToVerify(rig *data.Rig, files []string, flags *data.Controllers, s *settings) (*design.Loops, error) {
	if err := rig.NeedDesign(); err != nil {
		return nil, inputError(err)
	}
	loops := design.NewLoops(rig.Loop.SamplePeriod)
	var written data.Controllers // in the rig file
	switch {
	case len(files) > 0:
		var err error
		if loops, _, err = load(a, files[0], design.ReadLoops); err != nil {
			return nil, err
		}
		if rig.Loops != nil {
			a.warn(s, []string{fmt.Sprintf("the loops are those of %s: [loops] of the rig file is not looked at", files[0])})
		}
	case rig.Loops != nil:
		written = *rig.Loops
		loops.OuterLimits = written.OuterLimits
	}
	for _, c := range []struct{ name, flag, text string }{
		{"inner", flags.Inner, written.Inner}, {"outer", flags.Outer, written.Outer}, {"prefilter", flags.Prefilter, written.Prefilter},
	} {
		text, fail := c.flag, func(err error) error { return callErrorf("--%s, %w", c.name, err) }
		if text == "" {
			text = c.text
			fail = func(err error) error {
				key := "loops." + c.name
				return inputError(&data.ParseError{File: rig.File(), Line: rig.Line(key), Err: fmt.Errorf("%s, %w", key, err)})
			}
		}
		if text == "" {
			continue
		}
		var block *design.Block
		if text != noLoop || c.name != "outer" {
			var err error
			if block, err = design.ParseController(text); err != nil {
				return nil, fail(err)
			}
		}
		if err := loops.Set(c.name, block); err != nil {
			return nil, fail(err)
		}
	}
	if loops.Inner == nil {
		return nil, callErrorf("no loops to verify: name a LOOPS.json, write [loops] in the rig file, or give --inner; see steadyrig verify --help")
	}
	return loops, nil
}

// limits prints what physics allows as soon as it is known, nil under --json.
func (a *app) limits(s *settings) func([]design.Bound) {
	if s.json {
		return nil
	}
	return func(b []design.Bound) {
		p := a.page()
		showBounds(p, b)
		p.line("")
	}
}

// design designs loops and calls limits, if any, before it tunes them. A refusal comes with the loops; any other error
// without them.
func (a *app) design(ctx context.Context, model *ident.Model, rig *data.Rig, s *settings, modelSum string, limits func([]design.Bound)) (*design.Loops, error) {
	bar := a.progress("design", s.quiet)
	defer bar.wipe()
	opt := s.design()
	opt.Progress, opt.Limits = bar.step, limits
	loops, refusal := design.Design(ctx, model, rig, opt)
	if err := a.finishLoops(ctx, loops, refusal, modelSum); err != nil {
		return nil, err
	}
	return loops, refusal
}

// finishLoops stamps loops, or returns the error that stands in their way.
func (a *app) finishLoops(ctx context.Context, loops *design.Loops, err error, modelSum string) error {
	var refused *ident.RefusedError
	switch {
	case err != nil && ctx.Err() != nil:
		return ctx.Err()
	case err != nil && loops == nil && errors.As(err, &refused):
		return err
	case err != nil && !errors.As(err, &refused):
		return inputError(err) // what design and verify cannot work with comes from their files
	}
	loops.Tool, loops.Made, loops.ModelSHA256 = a.tool, a.made(), modelSum
	return nil
}

// deliverLoops shows loops, and ends the command with the refusal if there was one.
func (a *app) deliverLoops(s *settings, usual string, loops *design.Loops, refusal error, show func(*page)) error {
	if loops == nil {
		return refusal
	}
	content, err := encoded("the loops", loops, loops.Write)
	if err != nil {
		return err
	}
	a.warn(s, warningsBeside(loops.Warnings, refusal))
	if err := a.deliver(s, usual, content, show); err != nil {
		return err
	}
	return refusal
}

// refusedLoops is what loops.json holds where no design was tried.
func refusedLoops(rig *data.Rig, why string) *design.Loops {
	l := &design.Loops{
		Schema: design.LoopsSchema, Rig: rig.Name, Law: design.LawText, Bounds: []design.Bound{},
		Verdict: design.Refused, Warnings: []string{why},
	}
	if rig.Loop != nil {
		l.SamplePeriod, l.ComputeDelay = rig.Loop.SamplePeriod, rig.Loop.ComputeDelay
	}
	if o := rig.OperatingPoint; o != nil {
		l.OperatingPoint = design.OperatingPoint(*o)
	}
	return l
}
