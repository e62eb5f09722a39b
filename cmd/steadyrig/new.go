package main

import (
	"encoding/json"
	"fmt"
	"io"
	"path/filepath"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
)

func newNew(a *app) *cobra.Command {
	var s settings
	cmd := &cobra.Command{
		Use:   "new LOG.csv",
		Short: "Write the first draft of a rig file from a log's header",
		Long: `new looks at the head of a log, guesses which column plays which part and
prints a commented rig file. Each guess is marked; what only you know is left
to fill in.`,
		Example: "  steadyrig new run7.csv --out rig.toml",
		Args:    wants(1, 1, "one log"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if s.out != "" {
				if err := checkFree(s.out, s.force); err != nil {
					return err
				}
			}
			head, _, err := load(a, args[0], data.Header)
			if err != nil {
				return err
			}
			text := draftRig(head, rigName(args[0]))
			for _, part := range []struct{ name, column string }{{"input", head.Input}, {"output", head.Output}} {
				if part.column == "" && !s.quiet {
					fmt.Fprintf(a.stderr, "steadyrig: warning: no column looks like the %s: fill it in under [log]\n", part.name)
				}
			}
			if s.out != "" {
				if err := writeFile(s.out, s.force, []byte(text)); err != nil {
					return err
				}
			}
			switch {
			case s.json:
				return printJSON(a.stdout, draft{
					Log: head.File, Layout: head.Layout, SamplePeriod: head.Period,
					Guesses: map[string]string{"time": head.Time, "input": head.Input, "output": head.Output, "reference": head.Reference, "dither": head.Dither},
					RigFile: text,
				})
			case s.out == "":
				_, err = io.WriteString(a.stdout, text)
			case !s.quiet:
				_, err = fmt.Fprintf(a.stdout, "Wrote %s. Check the lines marked \"guess\", then: steadyrig audit %s %s\n", s.out, shellWord(s.out), shellWord(args[0]))
			}
			return err
		},
	}
	s.add(cmd, "write the rig file here instead of to standard output")
	return cmd
}

// draft is the JSON document of new.
type draft struct {
	Log          string            `json:"log"`
	Layout       string            `json:"layout"`
	SamplePeriod float64           `json:"sample_period"` // s, 0: unknown
	Guesses      map[string]string `json:"guesses"`       // column by part, empty: none
	RigFile      string            `json:"rig_file"`
}

// rigName makes a rig's name of its log's.
func rigName(path string) string {
	name := filepath.Base(path)
	for ext := filepath.Ext(name); ext != "" && ext != name; ext = filepath.Ext(name) {
		name = strings.TrimSuffix(name, ext)
	}
	if name == "-" || name == "." {
		return "rig"
	}
	return name
}

// draftRig writes the rig file.
func draftRig(h *data.LogHeader, name string) string {
	var b strings.Builder
	line := func(format string, args ...any) { fmt.Fprintf(&b, format+"\n", args...) }
	column := map[string]data.LogColumn{}
	for _, c := range h.Columns {
		if c.Part != "" {
			column[c.Part] = c
		}
	}
	part := func(name, gap, meaning string, needed bool) {
		switch c, ok := column[name]; {
		case ok:
			line("%s%s= %s  # guess (%s): %s", name, gap, tomlString(c.Name), c.Why, meaning)
		case needed:
			line("# %s%s= \"\"  # fill in: %s", name, gap, meaning)
		default:
			line("# %s%s= \"\"  # %s; leave out if not logged", name, gap, meaning)
		}
	}

	line("# Draft of a rig file, from the first %d rows of %s", h.Rows, oneLine(h.File))
	line("# (%s).", h.Layout)
	line("# Lines marked \"guess\" need your eye; take the mark off once you agree.")
	line("")
	line("name = %s", tomlString(name))
	line("")
	line("[log]  # which column of the log plays which part")
	part("time", "      ", "seconds, or ISO 8601 stamps", false)
	part("input", "     ", "what the actuator was really told, after its limits", true)
	part("output", "    ", "what the sensor read", true)
	part("reference", " ", "what the output was asked to follow", false)
	part("dither", "    ", "the probe that was added at the plant input", false)
	line("input_row   = \"after\"    # guess: a row's input acts from its output sample on; else \"before\"")
	line("input_stamp = \"applied\"  # guess: logged as it reached the actuator; else \"computed\"")
	switch {
	case h.Period > 0:
		line("sample_period = %s  # s, guess: measured from the stamps", tomlFloat(h.Period))
	default:
		line("# sample_period = 0.001  # s, fill in: it could not be measured")
	}
	line("# controller_period = 0.001  # s, of the loop that ran, where it is not that of the rows")
	line("# input_time  = \"\"           # column of the input's own stamps, where another clock made them")
	line("# clock_skew  = 0.0          # part by which the input's clock runs fast, to be undone; audit measures it")
	line("")
	line("# [layout]  # only where the line in brackets above is wrong: how the log is written")
	line("# delimiter    = \",\"  # one sign, \"tab\" or \"blanks\"")
	line("# decimal_mark = \".\"  # or \",\"")
	line("# names_line   = 1    # lines count from 1; 0: the log has none")
	line("# units_line   = 0")
	line("# numbers_line = 2    # the first row")
	line("# comment      = \"#\"  # what lines for people start with")
	line("")
	line("[units]  # names for tables and axes, never converted")
	for _, p := range []string{"input", "output"} {
		gap := strings.Repeat(" ", len("output")-len(p))
		if c := column[p]; c.Unit != "" {
			line("%s%s = %s  # guess, from the log", p, gap, tomlString(c.Unit))
		} else {
			line("# %s%s = \"\"  # fill in", p, gap)
		}
	}
	line("")
	line("# [operating_point]  # where input and output rest; estimated from the log if left out")
	for _, p := range []string{"input", "output"} {
		if c, ok := column[p]; ok {
			line("# %-6s = %s  # guess: the mean of the first rows, which went from %s to %s", p, tomlFloat(short(c.Mean)), words.Number(c.Min), words.Number(c.Max))
		}
	}
	line("")
	line("# [stopgap]  # the law that ran, if it was linear: u = u0 - law(z) (y - r), powers of z^-1")
	line("# numerator   = [2.4, -2.2]")
	line("# denominator = [1.0, -0.4]")
	line("")
	line("# The rest is for design and verify. Fill in, then take the '#' off.")
	line("")
	line("# [loop]  # the controller to be built")
	if h.Period > 0 {
		line("# sample_period = %s  # s, guess: that of the log", tomlFloat(h.Period))
	} else {
		line("# sample_period = 0.001  # s, fill in")
	}
	line("# hold          = \"zero-order\"")
	line("# compute_delay = 0.0  # s, fill in: from sampling the output to the input's change")
	line("")
	line("# [limits]  # absolute, not deviations")
	line("# input      = [0.0, 1.0]  # fill in: what the actuator can do")
	line("# input_rate = 100.0       # units of input per second; leave out if it does not matter")
	line("# output     = [0.0, 1.0]  # fill in: beyond this the rig trips")
	line("# input_resolution  = 0.001  # converter's step; 0: fine, left out: as logged")
	line("# output_resolution = 0.001  # likewise")
	line("")
	line("# [spec]  # fill in: what the loop has to do")
	line("# step             = 0.1   # size of the reference step, units of output")
	line("# overshoot        = 0.15  # fraction of the step")
	line("# settling         = 1.0   # s, to within the band for good; leave out and it is chosen")
	line("# band             = 0.02  # fraction of the step")
	line("# peak_sensitivity = 2.0   # largest |S| at the plant input, both loops closed")
	return b.String()
}

func short(x float64) float64 {
	v, _ := strconv.ParseFloat(strconv.FormatFloat(x, 'g', 4, 64), 64)
	return v
}

// tomlString writes a basic string; JSON's escapes are among TOML's.
func tomlString(s string) string {
	b, _ := json.Marshal(s)
	return string(b)
}

// tomlFloat writes a number that TOML reads as a float.
func tomlFloat(x float64) string {
	s := strconv.FormatFloat(x, 'g', -1, 64)
	if !strings.ContainsAny(s, ".e") {
		s += ".0"
	}
	return s
}
