package main

import (
	"bytes"
	"context"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"strings"

	"github.com/spf13/cobra"

	"steadyrig/cmd/steadyrig/history"
	"steadyrig/cmd/steadyrig/report"
	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/fit/demorig"
	"steadyrig/ident"
)

// Files of a run.
const (
	rigFile    = "rig.toml"
	logFile    = "log.csv"
	auditFile  = "audit.json"
	reportFile = "report.html"
)

func newRun(a *app) *cobra.Command {
	var s settings
	cmd := &cobra.Command{
		Use:   "run RIG.toml LOG.csv...",
		Short: "Do the whole job: audit, fit, design, proof, report",
		Long: `run audits and fits the logs, designs and proves two loops, and writes
rig.toml, audit.json, model.json, loops.json and report.html into one folder.`,
		Example: "  steadyrig run rig.toml run7.csv run8.csv --dir study",
		Args:    wants(2, -1, "a rig file and one or more logs"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if err := s.checkForms(); err != nil {
				return err
			}
			text, err := a.text(args[0])
			if err != nil {
				return err
			}
			rig, err := data.ReadRig(bytes.NewReader(text), args[0])
			if err != nil {
				return err
			}
			if err := rig.NeedDesign(); err != nil {
				return err
			}
			j := job{files: []file{{rigFile, text}}, rig: rig}
			if err := j.chooseFolder(a, &s); err != nil {
				return err
			}
			if j.exps, err = a.logs(rig, args[1:]); err != nil {
				return err
			}
			return a.whole(cmd.Context(), &j, &s)
		},
	}
	s.addFolder(cmd)
	s.addSeed(cmd)
	s.addForms(cmd)
	s.addExact(cmd)
	s.addReferee(cmd)
	return cmd
}

func newDemo(a *app) *cobra.Command {
	var s settings
	var name string
	var list bool
	cmd := &cobra.Command{
		Use:   "demo",
		Short: "Do the whole job on an invented rig",
		Long: `demo writes the rig file and a simulated closed-loop log of an invented rig
into a folder, then does all that run does. No rig here is a model of a real
one.`,
		Example: "  steadyrig demo\n  steadyrig demo --rig reactor --dir reactor",
		Args:    wants(0, 0, "no arguments (name a rig with --rig)"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if list {
				return a.listRigs(&s)
			}
			if err := s.checkForms(); err != nil {
				return err
			}
			demo, ok := demorig.ByName(name)
			if !ok {
				var names []string
				for _, r := range demorig.All() {
					names = append(names, r.Name)
				}
				return callErrorf("there is no built-in rig %q; choose %s", name, strings.Join(names, ", "))
			}
			rig, err := data.ReadRig(strings.NewReader(demo.File()), rigFile)
			if err != nil {
				return fmt.Errorf("reading the built-in rig: %v", err)
			}
			j := job{rig: rig, about: "An invented rig, no model of a real one. It is " + demo.About + "."}
			if err := j.chooseFolder(a, &s, logFile); err != nil {
				return err
			}
			log, err := rendered(func(w io.Writer) error { return demo.WriteCSV(w, s.seed) })
			if err != nil {
				return err
			}
			exp, err := data.ReadLog(bytes.NewReader(log), logFile, rig)
			if err != nil {
				return fmt.Errorf("reading the simulated log: %v", err)
			}
			j.exps = []*data.Experiment{exp}
			j.files = []file{{rigFile, []byte(demo.File())}, {logFile, log}}
			return a.whole(cmd.Context(), &j, &s)
		},
	}
	s.addFolder(cmd)
	s.addSeed(cmd)
	s.addForms(cmd)
	cmd.Flags().StringVar(&name, "rig", demorig.All()[0].Name, "built-in rig")
	cmd.Flags().BoolVar(&list, "list", false, "list the built-in rigs and stop")
	return cmd
}

// addFolder adds the flags of a command that writes a folder.
func (s *settings) addFolder(cmd *cobra.Command) {
	s.add(cmd, "the same as --dir")
	cmd.Flags().StringVar(&s.dir, "dir", "", "folder to write (default: named by rig and time)")
	s.addHistory(cmd)
}

func (a *app) listRigs(s *settings) error {
	type entry struct {
		Name         string  `json:"name"`
		About        string  `json:"about"`
		SamplePeriod float64 `json:"sample_period"`
		Rows         int     `json:"rows"`
	}
	var list []entry
	for _, r := range demorig.All() {
		list = append(list, entry{r.Name, r.About, r.Period, r.Rows})
	}
	if s.json {
		return printJSON(a.stdout, list)
	}
	for _, r := range list {
		wrap(a.stdout, fmt.Sprintf("%-9s", r.Name), fmt.Sprintf("%s; %d rows every %s", r.About, r.Rows, words.Seconds(r.SamplePeriod)))
	}
	return nil
}

// text reads an input file whole.
func (a *app) text(path string) ([]byte, error) {
	text, _, err := load(a, path, func(r io.Reader, _ string) ([]byte, error) { return io.ReadAll(r) })
	return text, err
}

// A job is a run on its way: what goes in, and what has come out so far.
type job struct {
	rig   *data.Rig
	exps  []*data.Experiment
	about string // of the rig, where it is a built-in one
	dir   string
	files []file

	audit *ident.AuditReport
	model *ident.Model
	loops *design.Loops
}

// chooseFolder settles where the files go, and that they may.
func (j *job) chooseFolder(a *app, s *settings, more ...string) error {
	names := append([]string{rigFile, auditFile, modelFile, loopsFile, reportFile}, more...)
	switch {
	case s.dir != "" && s.out != "":
		return callErrorf("--out and --dir both name the folder: give one of them; see --help")
	case s.dir != "":
		j.dir = s.dir
	case s.out != "":
		j.dir = s.out
	default:
		base := folderName(j.rig.Name) + "-" + a.now.Format("20060102-150405")
		j.dir = base
		for k := 2; ; k++ {
			if _, err := os.Lstat(j.dir); err != nil {
				break
			}
			j.dir = fmt.Sprintf("%s-%d", base, k)
		}
	}
	return checkFolder(j.dir, s.force, names...)
}

// folderName makes a rig's name fit for a folder.
func folderName(rig string) string {
	name := strings.Trim(strings.Map(func(r rune) rune {
		switch {
		case r >= 'a' && r <= 'z', r >= 'A' && r <= 'Z', r >= '0' && r <= '9', r == '_', r > 127:
			return r
		}
		return '-'
	}, rig), "-")
	if name == "" {
		return "rig"
	}
	return name
}

// whole does the job. Where a step says no, those after it that need its result are left out, the files say so, and
// the first refusal is the job's.
func (a *app) whole(ctx context.Context, j *job, s *settings) error {
	var refusal error
	refuse := func(err error) {
		if refusal == nil {
			refusal = err
		}
	}
	audit, err := a.audit(ctx, j.exps, j.rig)
	if audit == nil {
		return err
	}
	refuse(err)
	model, err := a.fit(ctx, j.exps, j.rig, s)
	if model == nil {
		return err
	}
	refuse(err)
	modelText, err := encoded("the model", model, model.Write)
	if err != nil {
		return err
	}
	entries := []history.Entry{history.OfModel(model, j.rig.Units, sha256Of(modelText))}
	loops := refusedLoops(j.rig, "no design was tried: the log was refused")
	loops.Tool, loops.Made, loops.ModelSHA256 = a.tool, a.made(), sha256Of(modelText)
	if refusal == nil {
		designed, err := a.design(ctx, model, j.rig, s, sha256Of(modelText), nil)
		if designed == nil && statusOf(err) != statusRefused {
			return err
		}
		refuse(err)
		if designed != nil {
			loops = designed
			entries = append(entries, history.OfLoops(loops))
		}
	}
	j.audit, j.model, j.loops = audit, model, loops

	auditText, err := document("the audit", audit)
	if err != nil {
		return err
	}
	loopsText, err := encoded("the loops", loops, loops.Write)
	if err != nil {
		return err
	}
	page, err := rendered(func(w io.Writer) error {
		return report.Write(w, report.Input{
			Rig: j.rig, About: j.about, Logs: j.exps, Audit: audit, Model: model, Loops: loops,
			Verdict: j.verdict(), Refusal: refusal, Command: a.command(), Tool: a.tool, Made: a.now, Seed: s.seed,
		})
	})
	if err != nil {
		return err
	}
	if err := ctx.Err(); err != nil {
		return err
	}
	j.files = append(j.files, file{auditFile, auditText}, file{modelFile, modelText}, file{loopsFile, loopsText}, file{reportFile, page})
	if err := writeFolder(j.dir, s.force, j.files); err != nil {
		return err
	}
	a.record(s, filepath.Join(j.dir, rigFile), entries...)
	a.warn(s, warningsBeside(append(append([]string(nil), model.Warnings...), loops.Warnings...), refusal))
	if s.json {
		err = printJSON(a.stdout, map[string]any{"folder": j.dir, "verdict": j.verdict(), "audit": audit, "model": model, "loops": loops})
	} else {
		j.show(a.page())
	}
	if err != nil {
		return err
	}
	return refusal
}

// verdict is the worst of the three.
func (j *job) verdict() string {
	for _, v := range []string{ident.Refused, ident.Weak} {
		if j.audit.Verdict == v || j.model.Verdict == v || j.loops.Verdict == v {
			return v
		}
	}
	return ident.Sound
}

// show prints what a run came to, on a screen or two; the files have the rest.
func (j *job) show(p *page) {
	u := j.rig.Units
	meaning := words.Loops(j.loops)
	if j.loops.Inner == nil {
		meaning = j.rig.Name + ": no loops; the line at the end says why."
	}
	p.verdict(j.verdict(), meaning)
	if j.about != "" {
		wrap(p.w, "", j.about)
	}
	p.heading("Log: " + j.audit.Verdict)
	p.item("sign", j.audit.Sign.Words)
	p.item("pairing", j.audit.Pairing.Words)
	p.item("loop rate", j.audit.LoopRate.Words)
	p.item("from outside", j.audit.Outside.Words)
	if j.audit.Verdict != ident.Sound {
		p.item("next step", j.audit.NextStep)
	}
	if len(j.model.Plant.Denominator) > 0 {
		p.heading("Model: " + j.model.Verdict)
		wrap(p.w, "  ", words.Unstable(j.model.Poles))
		showPlant(p, j.model, u)
		showPoles(p, j.model)
		showExact(p, j.model)
		showRoots(p, "Zeros", j.model.Zeros, "right half-plane")
		showMethods(p, j.model)
		if text := words.Basis(j.model); text != "" {
			p.line("")
			p.item("intervals", text)
		}
	}
	if b := j.loops.Bounds; len(b) > 0 {
		p.line("")
		showLimits(p, b)
	}
	showMargins(p, j.loops)
	showPromise(p, j.loops, u)
	if c := j.loops.FirstClosure; c != nil {
		p.heading("Before the loops are closed")
		for _, text := range c.Cautions {
			wrap(p.w, "  ! ", text)
		}
		wrap(p.w, "  ", "The order of steps and the trip levels are in the report.")
	}
	p.line("\nWrote %s:", j.dir)
	var names []string
	for _, f := range j.files {
		names = append(names, f.name)
	}
	wrap(p.w, "  ", strings.Join(names, ", "))
	p.line("Read %s next.", filepath.Join(j.dir, reportFile))
}
