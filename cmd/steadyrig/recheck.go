package main

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"io"
	"os"
	"strings"

	"github.com/spf13/cobra"

	"steadyrig/cmd/steadyrig/history"
	"steadyrig/cmd/steadyrig/report"
	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

const recheckFile = "recheck.json"

// A recheckJob is a recheck on its way.
type recheckJob struct {
	rig      *data.Rig
	model    *ident.Model // the earlier one
	modelSum string
	loops    *design.Loops // the present ones; nil: none given
	loopsSum string
	exps     []*data.Experiment

	after  *ident.Model // of the new logs, in the earlier structure
	judged *ident.Model // by which the loops are judged: after, or where another structure fits clearly better, that
	pooled *ident.Model // nil: not asked for, or the rig moved
	result *design.Recheck

	loopsTo, modelTo, reportTo string // "": not written
	pool                       bool
}

func newRecheck(a *app) *cobra.Command {
	var s settings
	var j recheckJob
	cmd := &cobra.Command{
		Use:   "recheck RIG.toml MODEL.json [LOOPS.json] LOG.csv...",
		Short: "After a change: what moved, and do the present loops still hold",
		Long: `recheck holds logs taken after a change of the rig against the earlier model:
what moved, by how much, whether it is more than chance, and whether the
present loops still hold the plants that the new logs allow. It says one of

  keep    the loops hold and keep the spec, moved or not (exit status 0)
  retune  they hold but do not keep the spec; a new pair is written (3)
  stop    they may not hold: do not close them (3)

Without loops it speaks of the model: keep, or retune to fit and design anew.
It writes recheck.json, or the file that --out names, and beside it a page
recheck.html; with a new pair also recheck-loops.json and the model behind it,
recheck-model.json. With --pool, where nothing moved, recheck-model.json is
the earlier model tightened by the new logs.`,
		Example: `  steadyrig recheck rig.toml model.json loops.json after.csv
  steadyrig recheck rig.toml model.json after1.csv after2.csv --pool`,
		Args: wants(3, -1, "a rig file, a model, the present loops if there are any, and one or more logs"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if err := j.chooseFiles(a, &s); err != nil {
				return err
			}
			if err := a.readRecheck(&j, args, &s); err != nil {
				return err
			}
			return a.recheck(cmd.Context(), &j, args[0], &s)
		},
	}
	s.add(cmd, "write the findings here instead of to recheck.json")
	s.addSeed(cmd)
	s.addHistory(cmd)
	f := cmd.Flags()
	f.StringVar(&j.loopsTo, "loops", "", "write the retuned loops here, also on keep")
	f.StringVar(&j.modelTo, "model", "", "write the new model here, also on keep")
	f.StringVar(&j.reportTo, "report", "", "write the page here")
	f.BoolVar(&j.pool, "pool", false, "where nothing moved, write the earlier model tightened by the new logs")
	return cmd
}

// beside names what is written beside the findings, when it is.
func beside(out, end string) string {
	if out == "" {
		return ""
	}
	return strings.TrimSuffix(out, ".json") + end
}

// chooseFiles checks that all files that may be written can be, before any work.
func (j *recheckJob) chooseFiles(a *app, s *settings) error {
	out := a.target(s, recheckFile)
	if j.reportTo == "" {
		j.reportTo = beside(out, ".html")
	}
	seen := map[string]bool{}
	for _, path := range []string{out, j.reportTo, j.loopsFile(out), j.modelFile(out)} {
		if path == "" {
			continue
		}
		if seen[path] {
			return callErrorf("%s: two results would be written there; choose another name", path)
		}
		seen[path] = true
		if err := checkFree(path, s.force); err != nil {
			return err
		}
	}
	return nil
}

func (j *recheckJob) loopsFile(out string) string {
	if j.loopsTo != "" {
		return j.loopsTo
	}
	return beside(out, "-loops.json")
}

func (j *recheckJob) modelFile(out string) string {
	if j.modelTo != "" {
		return j.modelTo
	}
	return beside(out, "-model.json")
}

// readRecheck reads the inputs: the third is the loops where it is named or begins like a JSON file.
func (a *app) readRecheck(j *recheckJob, args []string, s *settings) (err error) {
	if j.rig, j.model, j.modelSum, err = a.rigAndModel(args, s); err != nil {
		return err
	}
	rest := args[2:]
	if looksLikeJSON(rest[0]) {
		if j.loops, j.loopsSum, err = load(a, rest[0], design.ReadLoops); err != nil {
			return err
		}
		if err := j.rig.NeedDesign(); err != nil {
			return inputError(err)
		}
		if rest = rest[1:]; len(rest) == 0 {
			return callErrorf("no log: name one or more that were taken since, after %s", args[2])
		}
		if j.loops.Rig != "" && j.loops.Rig != j.rig.Name {
			a.warn(s, []string{fmt.Sprintf("%s is of rig %q, %s of rig %q", args[2], j.loops.Rig, args[0], j.rig.Name)})
		}
		if sum := j.loops.ModelSHA256; sum != "" && sum != j.modelSum {
			a.warn(s, []string{"the loops were designed for another model than " + args[1] + ": what moved is told from that model, the loops are judged on the new logs alone"})
		}
	}
	if j.exps, err = a.logs(j.rig, rest); err != nil {
		return err
	}
	for _, e := range j.exps {
		for _, l := range j.model.Logs {
			if e.SHA256 == l.SHA256 {
				return &data.ParseError{File: e.File, Err: fmt.Errorf("the same bytes as %s, which %s was fitted to", l.File, args[1]), Hint: "give logs that were taken since"}
			}
		}
	}
	return nil
}

// looksLikeJSON tells loops from logs.
func looksLikeJSON(path string) bool {
	if strings.HasSuffix(strings.ToLower(path), ".json") {
		return true
	}
	f, err := os.Open(path)
	if err != nil {
		return false
	}
	defer f.Close()
	head := make([]byte, 64)
	n, _ := io.ReadFull(f, head)
	return bytes.HasPrefix(bytes.TrimSpace(head[:n]), []byte("{"))
}

// compare fits the new logs in the earlier structure and tells what moved.
func (a *app) compare(ctx context.Context, j *recheckJob, s *settings) (since design.Since, err error) {
	since.Logs = j.exps
	bar := a.progress("fit", s.quiet)
	defer bar.wipe()
	opt := ident.Options{Seed: s.seed, Progress: bar.step}
	var refused *ident.RefusedError
	if j.after, err = ident.Refit(ctx, j.exps, j.rig, j.model, opt); err != nil && !(errors.As(err, &refused) && j.after != nil) {
		return since, a.inputErrorUnless(ctx, err)
	}
	j.after.Tool, j.after.Made = a.tool, a.made()
	j.judged, since.Refusal = j.after, err
	if err == nil {
		if since.Changes, err = ident.Compare(ctx, j.model, j.after, j.exps, j.rig, opt); ctx.Err() != nil {
			return since, ctx.Err()
		} else if err != nil {
			return since, inputError(err)
		}
		if !since.Changes.Structure.Fits {
			free, err := ident.Fit(ctx, j.exps, j.rig, opt)
			if err != nil && !(errors.As(err, &refused) && free != nil) {
				return since, err
			}
			free.Tool, free.Made = a.tool, a.made()
			j.judged, since.Refusal = free, err
		}
	}
	since.Model = j.judged
	return since, nil
}

func (a *app) recheck(ctx context.Context, j *recheckJob, rigPath string, s *settings) error {
	since, err := a.compare(ctx, j, s)
	if err != nil {
		return err
	}
	bar := a.progress("verify", s.quiet)
	j.result, err = design.NewRecheck(ctx, j.model, since, j.rig, j.loops, design.Options{Seed: s.seed, Progress: bar.step})
	bar.wipe()
	if err != nil {
		return a.inputErrorUnless(ctx, err)
	}
	r := j.result
	r.Tool, r.Made, r.ModelSHA256, r.LoopsSHA256 = a.tool, a.made(), j.modelSum, j.loopsSum
	modelText, err := encoded("the model", j.judged, j.judged.Write)
	if err != nil {
		return err
	}
	if r.Present != nil {
		bar := a.progress("retune", s.quiet)
		err := r.AddRetune(ctx, j.judged, j.rig, j.loops, design.Options{Seed: s.seed, Progress: bar.step})
		bar.wipe()
		if err != nil {
			return a.inputErrorUnless(ctx, err)
		}
		r.Retuned.Tool, r.Retuned.Made, r.Retuned.ModelSHA256 = a.tool, a.made(), sha256Of(modelText)
	}
	files, err := j.files(a, s, modelText)
	if err != nil {
		return err
	}
	content, err := document("the findings", r)
	if err != nil {
		return err
	}
	if err := ctx.Err(); err != nil {
		return err
	}
	for _, f := range files {
		if err := writeFile(f.name, s.force, f.content); err != nil {
			return err
		}
	}
	refusal := r.Err()
	a.warn(s, r.Warnings)
	if err := a.deliver(s, recheckFile, content, func(p *page) { showRecheck(p, r, j.asked()) }); err != nil {
		return err
	}
	if !s.json {
		for _, f := range files {
			a.page().line("Wrote %s.", f.name)
		}
	}
	a.record(s, rigPath, j.entry())
	return refusal
}

// entry is the recheck's line in the history of the rig.
func (j *recheckJob) entry() history.Entry {
	r := j.result
	e := history.OfModel(j.judged, j.rig.Units, j.modelSum)
	e.Kind, e.Verdict = history.Recheck, r.Verdict
	if r.Probability != nil {
		e.Changed = &history.Changed{Moved: r.Moved, Probability: *r.Probability}
	}
	return e
}

// inputErrorUnless marks what the design cannot work with as the input's fault; a refusal and an end of the context stay
// what they are.
func (a *app) inputErrorUnless(ctx context.Context, err error) error {
	var refused *ident.RefusedError
	switch {
	case ctx.Err() != nil:
		return ctx.Err()
	case errors.As(err, &refused):
		return err
	}
	return inputError(err)
}

// files are what is written beside the findings.
func (j *recheckJob) files(a *app, s *settings, modelText []byte) ([]file, error) {
	var files []file
	r, out := j.result, a.target(s, recheckFile)
	if j.reportTo != "" {
		page, err := rendered(func(w io.Writer) error {
			return report.WriteRecheck(w, report.RecheckInput{
				Rig: j.rig, Before: j.model, After: j.judged, Loops: j.loops, Recheck: r,
				Command: a.command(), Tool: a.tool, Made: a.now, Seed: s.seed,
			})
		})
		if err != nil {
			return nil, err
		}
		files = append(files, file{j.reportTo, page})
	}
	if j.pool {
		switch {
		case r.Probability == nil || r.Moved || j.judged != j.after:
			r.Warnings = append(r.Warnings, "nothing was pooled: only logs of a rig that has not moved, in the structure of the earlier model, are")
		default:
			var err error
			if j.pooled, err = ident.Pool(j.model, j.after); err != nil {
				return nil, &ident.RefusedError{What: err.Error(), Do: "fit all logs together"}
			}
			j.pooled.Tool, j.pooled.Made, r.PooledPoles = a.tool, a.made(), j.pooled.Poles
			if modelText, err = encoded("the model", j.pooled, j.pooled.Write); err != nil {
				return nil, err
			}
		}
	}
	pair := r.Offers()
	if to := j.loopsFile(out); to != "" && r.Retuned != nil && r.Retuned.Inner != nil && (pair || j.loopsTo != "") {
		text, err := encoded("the loops", r.Retuned, r.Retuned.Write)
		if err != nil {
			return nil, err
		}
		files = append(files, file{to, text})
	}
	anew := j.loops == nil && r.Verdict == design.Retune
	if to := j.modelFile(out); to != "" && (pair || anew || j.pooled != nil || j.modelTo != "") {
		files = append(files, file{to, modelText})
	}
	return files, nil
}

// asked is the rig file with what the loops were designed for where it leaves that open.
func (j *recheckJob) asked() *data.Rig {
	if j.loops == nil {
		return j.rig
	}
	return j.loops.Asked(j.rig)
}
