package main

import (
	"bytes"
	"fmt"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

// defaultRows is the length of a simulated log.
const defaultRows = 5000

func newSimulate(a *app) *cobra.Command {
	var s settings
	test := design.Test{Rows: defaultRows}
	cmd := &cobra.Command{
		Use:   "simulate RIG.toml MODEL.json LOOPS.json",
		Short: "Print the log that the rig would write under the loops",
		Long: `simulate runs the loops on the model's plant in the sampled and saturating
loop, with the disturbances as identified, and prints a log with the columns
that the rig file names. The reference steps up and down by the spec's step
unless told otherwise. A log that ends at a trip comes with exit status 3.`,
		Example: "  steadyrig simulate rig.toml model.json loops.json --probe 0.1 --out sim.csv",
		Args:    wants(3, 3, "a rig file, a model and loops"),
		RunE: func(cmd *cobra.Command, args []string) error {
			if err := a.checkTarget(&s, ""); err != nil {
				return err
			}
			rig, model, _, err := a.rigAndModel(args, &s)
			if err != nil {
				return err
			}
			loops, _, err := load(a, args[2], design.ReadLoops)
			if err != nil {
				return err
			}
			test.Seed = s.seed
			test.NoStep = cmd.Flags().Changed("step") && test.Step == 0
			rec, err := loops.Simulate(model, rig, test)
			if err != nil {
				return inputError(err)
			}
			if p := rig.Log.SamplePeriod; p > 0 && p != rec.Period {
				rec.Warnings = append(rec.Warnings, "the loops do not run at the rig file's [log] sample_period: change it before this log is read")
			}
			a.warn(&s, rec.Warnings)
			text := logText(rec, rig)
			if s.out != "" {
				if err := writeFile(s.out, s.force, text); err != nil {
					return err
				}
			}
			switch {
			case s.json:
				err = printJSON(a.stdout, simulated{rig.Name, rec.Period, rec.Tripped, rec.Input, rec.Output, rec.Reference, rec.Dither})
			case s.out == "":
				_, err = a.stdout.Write(text)
			default:
				a.page().line("Wrote %s.", s.out)
			}
			if err != nil {
				return err
			}
			return tripped(rec, rig)
		},
	}
	s.add(cmd, "write the log here instead of to standard output")
	s.addSeed(cmd)
	f := cmd.Flags()
	f.IntVar(&test.Rows, "rows", defaultRows, "rows of the log")
	f.Float64Var(&test.Step, "step", 0, "size of the reference steps (default: the spec's; 0: none)")
	f.IntVar(&test.Hold, "hold", 0, "rows between reference steps (default: three settling times)")
	f.Float64Var(&test.Probe, "probe", 0, "amplitude of a binary probe at the plant input (default: none)")
	f.IntVar(&test.ProbeHold, "probe-hold", 5, "rows that the probe holds at least")
	return cmd
}

// simulated is the JSON document of simulate.
type simulated struct {
	Rig          string    `json:"rig"`
	SamplePeriod float64   `json:"sample_period"` // s
	Tripped      int       `json:"tripped"`       // row from 0 at which the output left its limits, -1: none did
	Input        []float64 `json:"input"`
	Output       []float64 `json:"output"`
	Reference    []float64 `json:"reference"`
	Dither       []float64 `json:"dither"`
}

// logText writes a record as the log that the rig file describes.
func logText(rec *design.Record, rig *data.Rig) []byte {
	named := func(name, usual string) string {
		if name == "" {
			return usual
		}
		return name
	}
	late := 0
	if rig.Log.InputRow == data.InputBefore {
		late = 1 // a row shows the input that acted until its output was read
	}
	columns := []struct {
		name string
		x    []float64
		late int
	}{
		{named(rig.Log.Input, "u"), rec.Input, late},
		{named(rig.Log.Output, "y"), rec.Output, 0},
		{named(rig.Log.Reference, "r"), rec.Reference, 0},
		{named(rig.Log.Dither, "d"), rec.Dither, late},
	}
	var b bytes.Buffer
	b.WriteString(cell(named(rig.Log.Time, "t")))
	for _, c := range columns {
		b.WriteString("," + cell(c.name))
	}
	b.WriteByte('\n')
	var row []byte
	for k := late; k < len(rec.Output); k++ {
		row = strconv.AppendFloat(row[:0], float64(k-late)*rec.Period, 'g', 10, 64)
		for _, c := range columns {
			row = strconv.AppendFloat(append(row, ','), c.x[k-c.late], 'g', 9, 64)
		}
		b.Write(append(row, '\n'))
	}
	return b.Bytes()
}

// cell quotes a name where a reader of commas would take it apart.
func cell(name string) string {
	if strings.ContainsAny(name, ",;\t\"") {
		return `"` + strings.ReplaceAll(name, `"`, `""`) + `"`
	}
	return name
}

// tripped is the refusal of a simulated run that ended at the limits of the output.
func tripped(rec *design.Record, rig *data.Rig) error {
	if rec.Tripped < 0 {
		return nil
	}
	lim := rig.Limits.Output
	return &ident.RefusedError{
		What: fmt.Sprintf("the output left its limits %s to %s at row %d, %s into the run: the log ends there",
			words.Number(lim[0]), words.Unit(words.Number(lim[1]), rig.Units.Output), rec.Tripped+1, words.Seconds(float64(rec.Tripped)*rec.Period)),
		Do: "take a smaller step or probe, or other loops",
	}
}
