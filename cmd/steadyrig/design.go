package main

import (
	"context"
	"errors"

	"github.com/spf13/cobra"

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
model, and counts on fresh draws how many keep the promise. It writes
loops.json, or the file that --out names.`,
		Example: "  steadyrig design rig.toml model.json",
		Args:    wants(2, 2, "a rig file and a model"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if err := a.checkTarget(&s, loopsFile); err != nil {
				return err
			}
			rig, model, sum, err := a.rigAndModel(args, &s)
			if err != nil {
				return err
			}
			loops, refusal := a.design(cmd.Context(), model, rig, &s, sum)
			return a.deliverLoops(&s, loopsFile, loops, rig.Units, refusal)
		},
	}
	s.add(cmd, "write the loops here instead of to loops.json")
	s.addSeed(cmd)
	return cmd
}

func newVerify(a *app) *cobra.Command {
	var s settings
	cmd := &cobra.Command{
		Use:   "verify RIG.toml MODEL.json LOOPS.json",
		Short: "Prove a pair of loops, the tool's or your own",
		Long: `verify judges loops against a model: bounds, zeros that would cancel an
unstable pole, margins, and the promise over the plants that the data allow.
The loops may be your own, with discrete or continuous coefficients. --out
writes them with margins and promise made anew.`,
		Example: "  steadyrig verify rig.toml model.json loops.json",
		Args:    wants(3, 3, "a rig file, a model and loops"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if err := a.checkTarget(&s, ""); err != nil {
				return err
			}
			rig, model, sum, err := a.rigAndModel(args, &s)
			if err != nil {
				return err
			}
			given, _, err := load(a, args[2], design.ReadLoops)
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
			return a.deliverLoops(&s, "", loops, rig.Units, refusal)
		},
	}
	s.add(cmd, "write the loops with margins and promise made anew here")
	s.addSeed(cmd)
	return cmd
}

// design designs loops. A refusal comes with the loops; any other error without them.
func (a *app) design(ctx context.Context, model *ident.Model, rig *data.Rig, s *settings, modelSum string) (*design.Loops, error) {
	bar := a.progress("design", s.quiet)
	defer bar.wipe()
	loops, refusal := design.Design(ctx, model, rig, design.Options{Seed: s.seed, Progress: bar.step})
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
func (a *app) deliverLoops(s *settings, usual string, loops *design.Loops, u data.Units, refusal error) error {
	if loops == nil {
		return refusal
	}
	content, err := encoded("the loops", loops, loops.Write)
	if err != nil {
		return err
	}
	a.warn(s, warningsBeside(loops.Warnings, refusal))
	if err := a.deliver(s, usual, content, func(p *page) { showLoops(p, loops, u) }); err != nil {
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
