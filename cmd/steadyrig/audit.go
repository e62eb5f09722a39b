package main

import (
	"context"
	"errors"

	"github.com/spf13/cobra"

	"steadyrig/data"
	"steadyrig/ident"
)

func newAudit(a *app) *cobra.Command {
	var s settings
	cmd := &cobra.Command{
		Use:   "audit RIG.toml LOG.csv...",
		Short: "Say what is wrong with logs, and what can be learnt from them",
		Long: `audit checks logs before a fit is believed: the sign of the plant, the
operating point, whether input and output of a row belong together, the loop
rate against the likely unstable pole, whether anything moves the rig from
outside and how rich that is, how much of input and output follows it by band of
frequencies, how well a fit will know that pole, which frequencies lack power
for it, what a next test with one change would bring, and flaws by column. It
names one next step. --out writes audit.json.`,
		Example: "  steadyrig audit rig.toml run7.csv",
		Args:    wants(2, -1, "a rig file and one or more logs"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if err := a.checkTarget(&s, ""); err != nil {
				return err
			}
			rig, exps, err := a.rigAndLogs(args)
			if err != nil {
				return err
			}
			report, refusal := a.audit(cmd.Context(), exps, rig)
			if report == nil {
				return refusal
			}
			content, err := document("the audit", report)
			if err != nil {
				return err
			}
			if err := a.deliver(&s, "", content, func(p *page) { showAudit(p, report, exps, rig) }); err != nil {
				return err
			}
			return refusal
		},
	}
	s.add(cmd, "write the audit here as JSON, too")
	return cmd
}

// audit audits logs. A refusal comes with the report; any other error without one.
func (a *app) audit(ctx context.Context, exps []*data.Experiment, rig *data.Rig) (*ident.AuditReport, error) {
	report, err := ident.Audit(ctx, exps, rig)
	var refused *ident.RefusedError
	switch {
	case errors.As(err, &refused) && report != nil:
	case err != nil && ctx.Err() != nil:
		return nil, ctx.Err()
	case err != nil:
		return nil, err
	}
	report.Tool, report.Made = a.tool, a.made()
	return report, err
}
