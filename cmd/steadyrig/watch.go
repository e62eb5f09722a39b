package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"time"

	"github.com/spf13/cobra"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

func newWatch(a *app) *cobra.Command {
	var s settings
	var follow bool
	window, rare := time.Duration(0), 100*time.Hour
	cmd := &cobra.Command{
		Use:   "watch RIG.toml MODEL.json [LOOPS.json] LOG.csv",
		Short: "Watch gain and unstable pole drift through a log, or as it is written",
		Long: `watch runs through a log in windows and says in each how far gain and rightmost
pole are from the model. It raises an alarm when one of them has moved, at a
level at which an unchanged rig raises a false one in --false-alarm-every of
log on average. A window that cannot tell, because nothing from outside moved
the rig, the sensor stuck or rows are missing, says so. LOOPS.json are the loops
that should be running; without it the rig file's stopgap law is looked for.

--follow waits for more where the log ends, until ctrl-C; LOG may be - for
standard input. Memory does not grow with the log. Exit status 3: an alarm was
raised; take a log then and compare it with the model.`,
		Example: "  steadyrig watch rig.toml model.json loops.json log.csv --false-alarm-every 24h",
		Args:    wants(3, 4, "a rig file, a model, loops or none, and one log"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if err := a.checkTarget(&s, ""); err != nil {
				return err
			}
			rig, model, _, err := a.rigAndModel(args, &s)
			if err != nil {
				return err
			}
			opt := ident.WatchOptions{FalseAlarmEvery: rare.Seconds(), Window: window.Seconds()}
			for _, f := range []string{"window", "false-alarm-every"} {
				if v, _ := cmd.Flags().GetDuration(f); cmd.Flags().Changed(f) && v <= 0 {
					return callErrorf("--%s is %s; give a time above zero", f, v)
				}
			}
			var loops *design.Loops
			if len(args) == 4 {
				if loops, err = a.loopsOf(args[2], rig, model, &s); err != nil {
					return err
				}
				opt.Law = loops.LTI()
			}
			w, err := ident.NewWatch(model, rig, opt)
			if err != nil {
				return inputError(err)
			}
			return a.watch(cmd.Context(), w, rig, model, loops, args[len(args)-1], follow, &s)
		},
	}
	s.add(cmd, "write the result here as JSON, too")
	f := cmd.Flags()
	f.BoolVar(&follow, "follow", false, "wait for more where the log ends, until ctrl-C")
	f.DurationVar(&window, "window", 0, "length of a window, like 20s (default: by the model)")
	f.DurationVar(&rare, "false-alarm-every", rare, "how much log an unchanged rig runs between two false alarms, on average")
	return cmd
}

// loopsOf reads the loops that should be running on the rig.
func (a *app) loopsOf(path string, rig *data.Rig, model *ident.Model, s *settings) (*design.Loops, error) {
	loops, _, err := load(a, path, design.ReadLoops)
	if err != nil {
		return nil, err
	}
	if loops.Rig != rig.Name {
		a.warn(s, []string{fmt.Sprintf("%s is of rig %q, the rig file of %q", path, loops.Rig, rig.Name)})
	}
	if p := model.Noise.SamplePeriod; math.Abs(loops.SamplePeriod-p) > samePeriod*p {
		return nil, callErrorf("%s: the loops run every %s, the model's log came every %s: watch a log of the model's period without loops", path, words.Seconds(loops.SamplePeriod), words.Seconds(p))
	}
	return loops, nil
}

// watch runs the log through and delivers what it showed.
func (a *app) watch(ctx context.Context, w *ident.Watch, rig *data.Rig, model *ident.Model, loops *design.Loops, path string, follow bool, s *settings) error {
	in, name, err := a.openGrowing(ctx, path, follow)
	if err != nil {
		return inputError(err)
	}
	defer in.Close()
	rows, err := data.ReadRows(in, name, rig, model.Noise.SamplePeriod, follow || path == "-")
	if err != nil {
		return inputError(err)
	}
	show := newWatchLines(a.page(), w, rig)
	if s.json {
		show.p.w = io.Discard
	}
	a.warn(s, w.Report().Warnings)
	show.start(model)
	var failed error
	for ctx.Err() == nil && failed == nil {
		var row data.Row
		if row, failed = rows.Next(); failed == nil {
			if win := w.Add(row); win != nil {
				show.window(win)
			}
		}
	}
	if errors.Is(failed, io.EOF) {
		failed = nil
	}
	report := w.Report()
	report.Tool, report.Made, report.Log.File = a.tool, a.made(), name
	if failed == nil && ctx.Err() == nil {
		if report.Log.SHA256, failed = rows.Checksum(); failed != nil {
			return inputError(failed)
		}
	}
	report.Warnings = append(report.Warnings, rowWarnings(rows)...)
	var margins *design.Margins
	if loops != nil && len(report.Now) > 0 {
		if margins, err = loops.MarginsOn(w.Plant(), rig); err != nil {
			return err
		}
	}
	content, err := document("the watch", report)
	if err != nil {
		return err
	}
	a.warn(s, report.Warnings)
	if err := a.deliver(s, "", content, func(p *page) { show.end(report, loops, margins) }); err != nil {
		return err
	}
	switch {
	case failed != nil:
		return inputError(failed)
	case ctx.Err() != nil:
		return &stopped{fmt.Sprintf("interrupted after %s of log; what it showed until then is above", words.Count(report.Log.Rows, "row"))}
	case len(report.Alarms) > 0:
		first := report.Alarms[0]
		return &ident.RefusedError{
			What: fmt.Sprintf("%s: %s", name, alarmWords(first)),
			Do:   fmt.Sprintf("take a log of this rig and compare it with the model; on an unchanged rig one alarm in %s is by chance", long(report.FalseAlarmEvery)),
		}
	}
	return nil
}

// rowWarnings say what was wrong with single rows.
func rowWarnings(rows *data.Rows) []string {
	var out []string
	if rows.Bad > 0 {
		out = append(out, fmt.Sprintf("%s not rows of numbers, taken for missing ones; %v", words.Count(rows.Bad, "line"), rows.Fault()))
	}
	if rows.Clipped > 0 {
		out = append(out, fmt.Sprintf("the input was past [limits] input in %s and was taken for the limit: log it after its limits", words.Count(rows.Clipped, "row")))
	}
	return out
}

// A stopped command was interrupted, and has left what it had.
type stopped struct{ text string }

func (e *stopped) Error() string { return e.text }
func (e *stopped) Unwrap() error { return context.Canceled }

// A growing file is read on where it ends, until it is done.
type growing struct {
	*os.File
	ctx  context.Context
	path string
	read int64
}

// pollEvery is how long a growing file is left alone where it has ended.
const pollEvery = 100 * time.Millisecond

// openGrowing opens a log; one that is followed does not end before ctx does.
func (a *app) openGrowing(ctx context.Context, path string, follow bool) (io.ReadCloser, string, error) {
	in, name, err := a.open(path)
	if err != nil {
		return nil, name, err
	}
	if f, ok := in.(*os.File); ok && follow {
		return &growing{File: f, ctx: ctx, path: path}, name, nil
	}
	return in, name, nil
}

// Read waits for the next bytes. It is io.EOF where ctx is done, and a *data.ParseError where the file was cut short or
// another one stands in its place.
func (g *growing) Read(p []byte) (int, error) {
	for {
		n, err := g.File.Read(p)
		g.read += int64(n)
		if n > 0 || err != nil && err != io.EOF {
			return n, err
		}
		if g.ctx.Err() != nil {
			return 0, io.EOF
		}
		own, err := g.File.Stat()
		if err != nil {
			return 0, err
		}
		named, err := os.Stat(g.path)
		switch {
		case own.Size() < g.read:
			return 0, &data.ParseError{File: g.path, Err: errors.New("was cut short while it was watched"), Hint: "watch it anew"}
		case err != nil || !os.SameFile(own, named):
			return 0, &data.ParseError{File: g.path, Err: errors.New("was moved away while it was watched"), Hint: "watch the file that stands in its place"}
		}
		select {
		case <-g.ctx.Done():
		case <-time.After(pollEvery):
		}
	}
}
