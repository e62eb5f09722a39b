package main

import (
	"context"
	"errors"

	"github.com/spf13/cobra"

	"steadyrig/cmd/steadyrig/history"
	"steadyrig/data"
	"steadyrig/ident"
)

const modelFile = "model.json"

func newFit(a *app) *cobra.Command {
	var s settings
	cmd := &cobra.Command{
		Use:   "fit RIG.toml LOG.csv...",
		Short: "Fit a plant with bounds to logs",
		Long: `fit finds a continuous-time transfer function of low order in closed-loop logs,
with its delay, 95 % intervals of its poles, zeros and gain, and the evidence
for them. It writes model.json, or the file that --out names.

With --exact it adds 95 % intervals of the poles that matter which rest on no
long log and, where the probe was drawn at random, on nothing about the noise.
They need the probe or the reference in the log.

The estimate is from all rows. On logs of more than 50000 structures are
compared on so many, in stretches spread over the log, and the other methods
check the poles there; with --referee these see all rows, too.`,
		Example: "  steadyrig fit rig.toml run7.csv run8.csv",
		Args:    wants(2, -1, "a rig file and one or more logs"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if err := a.checkTarget(&s, modelFile); err != nil {
				return err
			}
			rig, exps, err := a.rigAndLogs(args)
			if err != nil {
				return err
			}
			model, refusal := a.fit(cmd.Context(), exps, rig, &s)
			if model == nil {
				return refusal
			}
			content, err := encoded("the model", model, model.Write)
			if err != nil {
				return err
			}
			a.warn(&s, warningsBeside(model.Warnings, refusal))
			if err := a.deliver(&s, modelFile, content, func(p *page) { showModel(p, model, rig.Units) }); err != nil {
				return err
			}
			a.record(&s, args[0], history.OfModel(model, rig.Units, sha256Of(content)))
			return refusal
		},
	}
	s.add(cmd, "write the model here instead of to model.json")
	s.addSeed(cmd)
	s.addExact(cmd)
	s.addHistory(cmd)
	s.addReferee(cmd)
	return cmd
}

// fit fits a model. A refusal comes with the model; any other error without one.
func (a *app) fit(ctx context.Context, exps []*data.Experiment, rig *data.Rig, s *settings) (*ident.Model, error) {
	if s.exact {
		if err := ident.CheckExact(exps, rig); err != nil {
			return nil, inputError(err)
		}
	}
	bar := a.progress("fit", s.quiet)
	defer bar.wipe()
	model, err := ident.Fit(ctx, exps, rig, ident.Options{Seed: s.seed, Progress: bar.step, Referee: s.referee})
	var refused *ident.RefusedError
	if err != nil && !(errors.As(err, &refused) && model != nil) {
		return nil, err
	}
	model.Tool, model.Made = a.tool, a.made()
	if s.exact {
		bar := a.progress("exact", s.quiet)
		defer bar.wipe()
		if err := model.AddExact(ctx, exps, rig, ident.Options{Seed: s.seed, Progress: bar.step}); err != nil {
			return nil, err
		}
	}
	return model, err
}

// warningsBeside leaves out the warning that the error itself will tell.
func warningsBeside(warnings []string, err error) []string {
	var rest []string
	for _, w := range warnings {
		if err == nil || w != err.Error() {
			rest = append(rest, w)
		}
	}
	return rest
}
