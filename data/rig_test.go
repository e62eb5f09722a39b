package data

import (
	"errors"
	"math"
	"os"
	"strings"
	"testing"
	"testing/iotest"
)

// hoverPuck is the rig file of the format's description.
const hoverPuck = `name = "hover puck"

[log]                          # which column of the CSV plays which part
time          = "t"
input         = "u"
output        = "y"
reference     = "r"
dither        = "d"
input_row     = "after"
input_stamp   = "applied"
sample_period = 0.001
controller_period = 0.001

[units]
input  = "A"
output = "mm"

[operating_point]
input  = 1.85
output = 6.0

[stopgap]
numerator   = [2.4, -2.2]
denominator = [1.0, -0.4]

[loop]
sample_period = 0.001
hold          = "zero-order"
compute_delay = 0.0

[limits]
input      = [0.0, 4.0]
input_rate = 800.0
output     = [4.0, 8.0]

[spec]
step              = 0.2
overshoot         = 0.10
settling          = 0.05
band              = 0.02
peak_sensitivity  = 2.0
input_noise       = 0.1
kick              = 0.5
kick_peak         = 0.4

[model]
order    = 3
zeros    = 0
delay    = [0.0, 0.002]
`

func TestReadRig(t *testing.T) {
	g, err := ReadRig(strings.NewReader(hoverPuck), "puck.toml")
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(g.NeedLog(), g.NeedDesign()); err != nil {
		t.Error(err)
	}
	if g.Name != "hover puck" || g.Log.Dither != "d" || g.Log.ControllerPeriod != 0.001 || g.Units.Output != "mm" ||
		g.OperatingPoint.Output != 6 || g.Stopgap.Numerator[1] != -2.2 || g.Loop.Hold != HoldZeroOrder ||
		*g.Limits.Input != [2]float64{0, 4} || g.Limits.InputRate != 800 || *g.Limits.Output != [2]float64{4, 8} ||
		g.Spec.KickPeak != 0.4 || g.Spec.PeakSensitivity != 2 || *g.Model.Order != 3 || *g.Model.Zeros != 0 ||
		*g.Model.Delay != [2]float64{0, 0.002} {
		t.Errorf("read %+v", g)
	}
	if got := g.Line("limits.input"); got != 32 {
		t.Errorf("limits.input on line %d, want 32", got)
	}
}

// Resolutions may be left out, zero, or positive.
func TestReadResolutions(t *testing.T) {
	if g, err := ReadRig(strings.NewReader(hoverPuck), "puck.toml"); err != nil || g.Limits.InputResolution != nil || g.Limits.OutputResolution != nil {
		t.Errorf("left out: %v, %+v", err, g)
	}
	g, err := ReadRig(strings.NewReader(change(t, "input_rate = 800.0", "input_resolution = 0\noutput_resolution = 0.002")), "puck.toml")
	if err != nil || *g.Limits.InputResolution != 0 || *g.Limits.OutputResolution != 0.002 {
		t.Errorf("given: %v, %+v", err, g)
	}
	for _, text := range []string{"input_resolution = -0.1", "output_resolution = inf", "output_resolution = nan"} {
		_, err := ReadRig(strings.NewReader(change(t, "input_rate = 800.0", text)), "puck.toml")
		key, _, _ := strings.Cut(text, " =")
		if err == nil || !strings.Contains(err.Error(), "limits."+key) || !strings.Contains(err.Error(), "give the converter's step") {
			t.Errorf("%s: %v", text, err)
		}
	}
}

func TestReadRigDefaults(t *testing.T) {
	const text = "\xef\xbb\xbf[log]\r\ninput = 'u'\r\noutput = 'y'\r\nsample_period = 1\r\n[loop]\r\nsample_period = 2\r\n"
	g, err := ReadRig(strings.NewReader(text), "rigs/reactor.toml")
	if err != nil {
		t.Fatal(err)
	}
	if g.Name != "reactor" || g.Log.InputRow != InputAfter || g.Log.InputStamp != InputApplied || g.Loop.Hold != HoldZeroOrder ||
		g.Log.SamplePeriod != 1 || g.Loop.SamplePeriod != 2 {
		t.Errorf("read %+v", g)
	}
	if err := g.NeedLog(); err != nil {
		t.Error(err)
	}
	if err := g.NeedDesign(); err == nil || !strings.Contains(err.Error(), "no input in [limits]") {
		t.Errorf("NeedDesign: %v", err)
	}
}

// change returns hoverPuck with old replaced by new, which must be there.
func change(t *testing.T, old, new string) string {
	t.Helper()
	if strings.Count(hoverPuck, old) != 1 {
		t.Fatalf("%q is not there once", old)
	}
	return strings.Replace(hoverPuck, old, new, 1)
}

func TestReadRigDefects(t *testing.T) {
	for _, c := range []struct{ name, old, new, want string }{
		{"unknown key", `input         = "u"`, `inptu = "u"`, `rig.toml: line 5: unknown key "inptu" in [log]; did you mean "input"?`},
		{"unknown key, camel case", `input_noise       = 0.1`, `inputNoise = 0.1`, `rig.toml: line 42: unknown key "inputNoise" in [spec]; did you mean "input_noise"?`},
		{"key in the wrong table", "band              = 0.02\n", "band = 0.02\nhold = \"zero-order\"\n", `rig.toml: line 41: unknown key "hold" in [spec]; "hold" belongs in [loop]`},
		{"unknown table", `[limits]`, `[limit]`, `rig.toml: line 31: unknown key "limit"; did you mean [limits]?`},
		{"key like none", `name = "hover puck"`, `colour = "red"`,
			`rig.toml: line 1: unknown key "colour"; the top of a rig file knows name, log, layout, units, operating_point, stopgap, loop, limits, spec, model, loops`},
		{"key below a key", "order    = 3", "order.max = 3", `rig.toml: line 47: unknown key "order.max" in [model]; no key of a rig file lies that deep`},
		{"outer output", `dither        = "d"`, `outer_output = "x"`,
			`rig.toml: line 8: outer_output (a second sensor for the outer loop) is not supported: one input and one output are; take it out, and check that nothing else is left uncontrolled`},
		{"number as text", "sample_period = 0.001\ncontroller", "sample_period = \"0.001\"\ncontroller", `rig.toml: line 11: log.sample_period is the text "0.001"; write a number without quotes`},
		{"text as number", `output        = "y"`, `output = 2`, `rig.toml: line 6: log.output is the number 2; write text in double quotes`},
		{"text without quotes", `output        = "y"`, `output = y`, `rig.toml: line 6, column 10: expected value but found "y" instead; text stands in double quotes`},
		{"decimal comma", `step              = 0.2`, `step = 0,2`, `rig.toml: line 37, column 9: expected a top-level item to end with a newline, comment, or EOF, but got ',' instead; TOML writes the decimal mark as a point`},
		{"high order", `order    = 3`, `order = 9`, `rig.toml: line 47: model.order is 9; give a number of poles from 1 to 8: a fit takes no more`},
		{"broken order", `order    = 3`, `order = 2.5`, `rig.toml: line 47: model.order is the number 2.5; write a whole number`},
		{"one limit", `input      = [0.0, 4.0]`, `input = 4`, `rig.toml: line 32: limits.input is the number 4; write [lowest, highest]`},
		{"three limits", `input      = [0.0, 4.0]`, `input = [1, 2, 3]`, `rig.toml: line 32: limits.input is a list of 3 numbers; write [lowest, highest]`},
		{"limit as text", `input      = [0.0, 4.0]`, `input = [1, "x"]`, `rig.toml: line 32: limits.input is a list with the text "x" in it; write [lowest, highest]`},
		{"list of tables", "[model]", "[[model]]", `rig.toml: line 46: model must be a table; write [model] on a line of its own, once, and its keys below`},
		{"key twice", `output        = "y"`, `input = "y"`, `rig.toml: line 6, column 1: Key 'log.input' has already been defined`},
		{"limits reversed", `[0.0, 4.0]`, `[4.0, 0.0]`, `rig.toml: line 32: limits.input is [4, 0]; write [lowest, highest]`},
		{"limits infinite", `[0.0, 4.0]`, `[0.0, inf]`, `rig.toml: line 32: limits.input is [0, +Inf]; give finite numbers`},
		{"period zero", "controller_period = 0.001", "controller_period = 0", `rig.toml: line 12: log.controller_period is 0; give a finite number above 0`},
		{"period negative", "[loop]\nsample_period = 0.001", "[loop]\nsample_period = -0.001", `rig.toml: line 27: loop.sample_period is -0.001; give a finite number above 0`},
		{"period nan", "[loop]\nsample_period = 0.001", "[loop]\nsample_period = nan", `rig.toml: line 27: loop.sample_period is NaN; give a finite number above 0`},
		{"loop without period", "[loop]\nsample_period = 0.001", "[loop]", `rig.toml: line 26: [loop] has no sample_period; add it or take the table out`},
		{"spec without band", "band              = 0.02\n", "", `rig.toml: line 36: [spec] has no band; add it or take the table out`},
		{"spec without settling", "settling          = 0.05\n", "", ``},
		{"settling zero", "settling          = 0.05", "settling = 0", `rig.toml: line 39: spec.settling is 0; give a finite number above 0`},
		{"kick without peak", "kick_peak         = 0.4\n", "", `rig.toml: line 36: [spec] has only one of kick and kick_peak; kick says how hard the push is, kick_peak how far it may move the output: give both or neither`},
		{"overshoot in percent", `overshoot         = 0.10`, `overshoot = 10`, `rig.toml: line 38: spec.overshoot is 10; a fraction of the step, 0 to 1: write 0.10 for 10 %`},
		{"band in percent", `band              = 0.02`, `band = 2`, `rig.toml: line 40: spec.band is 2; a fraction of the step, below 1: write 0.02 for 2 %`},
		{"peak below one", `peak_sensitivity  = 2.0`, `peak_sensitivity = 0.9`, `rig.toml: line 41: spec.peak_sensitivity is 0.9; a factor above 1, as a loop has to have a peak: 1.4 is calm, 2 is usual`},
		{"unknown hold", `"zero-order"`, `"linear"`, `rig.toml: line 28: loop.hold is "linear"; write "zero-order" or "band-limited"`},
		{"unknown row", `"after"`, `"late"`, `rig.toml: line 9: log.input_row is "late"; write "after" or "before"`},
		{"two parts of one column", `output        = "y"`, `output = "u"`, `rig.toml: line 6: log.input and log.output are both column "u"; each part needs a column of its own`},
		{"unknown key of the layout", "[units]", "[layout]\ndelimeter = \";\"\n[units]", `rig.toml: line 15: unknown key "delimeter" in [layout]; did you mean "delimiter"?`},
		{"delimiter of two signs", "[units]", "[layout]\ndelimiter = \"::\"\n[units]", `rig.toml: line 15: layout.delimiter is "::"; write one sign that is part of no number, "tab" or "blanks"`},
		{"delimiter of a number", "[units]", "[layout]\ndelimiter = \".\"\n[units]", `rig.toml: line 15: layout.delimiter is "."; write one sign that is part of no number, "tab" or "blanks"`},
		{"delimiter empty", "[units]", "[layout]\ndelimiter = \"\"\n[units]", `rig.toml: line 15: layout.delimiter is ""; write one sign that is part of no number, "tab" or "blanks"`},
		{"comma for two", "[units]", "[layout]\ndelimiter = \",\"\ndecimal_mark = \",\"\n[units]", `rig.toml: line 16: layout.decimal_mark and layout.delimiter are ","; one sign cannot be both`},
		{"decimal mark of another kind", "[units]", "[layout]\ndecimal_mark = \"'\"\n[units]", `rig.toml: line 15: layout.decimal_mark is "'"; write "." or ","`},
		{"units above the names", "[units]", "[layout]\nnames_line = 3\nunits_line = 2\n[units]", `rig.toml: line 16: layout.units_line is 2; names come first, then units, then numbers`},
		{"rows far below", "[units]", "[layout]\nnumbers_line = 501\n[units]", `rig.toml: line 15: layout.numbers_line is 501; lines count from 1, and these lie among the first 500`},
		{"comments that are numbers", "[units]", "[layout]\ncomment = \"-\"\n[units]", `rig.toml: line 15: layout.comment is "-"; rows start like that`},
		{"two clocks without the first", "time          = \"t\"", "input_time = \"tu\"", `rig.toml: line 4: log.input_time without log.time; name the column of the output's stamps, too`},
		{"one column of stamps twice", "dither        = \"d\"", "input_time = \"t\"", `rig.toml: line 8: log.time and log.input_time are both column "t"; each part needs a column of its own`},
		{"skew in parts in a million", "dither        = \"d\"", "clock_skew = 120", `rig.toml: line 8: log.clock_skew is 120; a fraction: write 1.2e-4 where the input's clock runs fast by 120 parts in a million; at most 0.02`},
		{"operating point outside", `output = 6.0`, `output = 9`, `rig.toml: line 20: operating_point.output 9 lies outside limits.output [4, 8]; limits and operating point are absolute values`},
		{"stopgap without present", `denominator = [1.0, -0.4]`, `denominator = [0, 1]`, `rig.toml: line 24: stopgap.denominator starts with 0; powers of z^-1, the present output's coefficient first`},
		{"zeros as many as poles", `zeros    = 0`, `zeros = 3`, `rig.toml: line 48: model.zeros 3 is not below model.order 3; a rig that answers no faster than its input has fewer zeros than poles`},
		{"step beyond limits", `step              = 0.2`, `step = 5`, `rig.toml: line 37: spec.step 5 is wider than limits.output [4, 8]; the step has to fit between the limits`},
	} {
		t.Run(c.name, func(t *testing.T) {
			_, err := ReadRig(strings.NewReader(change(t, c.old, c.new)), "rig.toml")
			if got := message(err); got != c.want {
				t.Errorf("got  %s\nwant %s", got, c.want)
			}
			var e *ParseError
			if c.want != "" && !errors.As(err, &e) {
				t.Errorf("%T is no *ParseError", err)
			}
		})
	}
}

func message(err error) string {
	if err == nil {
		return ""
	}
	return err.Error()
}

func TestReadRigUnsupported(t *testing.T) {
	_, err := ReadRig(strings.NewReader("[log]\nouter_output = 'x'\n"), "rig.toml")
	if !errors.Is(err, ErrUnsupported) {
		t.Errorf("%v is not ErrUnsupported", err)
	}
}

func TestReadRigNotARig(t *testing.T) {
	for _, c := range []struct{ name, text, want string }{
		{"a log", "t,u,y\n0,1,2\n", "rig.toml: line 1, column 2: expected '.' or '=', but got ',' instead; this does not look like a rig file; give the rig file first, then the logs"},
		{"gz", "\x1f\x8b\x08\x00", "rig.toml: compressed, so no rig file; give the rig file first, then the logs"},
		{"table as key", "log = 3\n", "rig.toml: line 1: log must be a table; write [log] on a line of its own, once, and its keys below"},
		{"hostile nesting", "\na=" + strings.Repeat("{a=", 20000), "rig.toml: line 2: longer than 2048 bytes, so no rig file; give the rig file first, then the logs"},
		{"huge", strings.Repeat("#", maxRigFile+1), "rig.toml: longer than 64 kB, so no rig file; give the rig file first, then the logs"},
	} {
		t.Run(c.name, func(t *testing.T) {
			if _, err := ReadRig(strings.NewReader(c.text), "rig.toml"); message(err) != c.want {
				t.Errorf("got  %v\nwant %s", err, c.want)
			}
		})
	}
	if _, err := ReadRig(iotest.ErrReader(os.ErrClosed), "rig.toml"); !errors.Is(err, os.ErrClosed) {
		t.Errorf("a broken reader gives %v", err)
	}
}

func TestRigNeeds(t *testing.T) {
	for _, c := range []struct{ name, text, log, design string }{
		{"empty file", "", `rig.toml: no [log]; it says which column plays which part: time = "t", input = "u", output = "y"`,
			"rig.toml: no [loop]; give the period of the controller to be built: [loop] sample_period = 0.001"},
		{"no output", "[log]\ntime='t'\ninput='u'", `rig.toml: line 1: [log] has no output; name the column of the output: output = "y"`,
			"rig.toml: no [loop]; give the period of the controller to be built: [loop] sample_period = 0.001"},
		{"no input", "[log]\ntime='t'\noutput='y'\n[loop]\nsample_period=1", `rig.toml: line 1: [log] has no input; name the column of the input: input = "u"`,
			"rig.toml: no input in [limits]; say what the actuator can do, absolute: input = [lowest, highest]"},
		{"no period", "[log]\ninput='u'\noutput='y'\n[loop]\nsample_period=1\n[limits]\ninput=[0,1]",
			"rig.toml: line 1: [log] has neither time nor sample_period; name the column of the stamps, or give the period in s",
			"rig.toml: no [spec]; say what the loop has to do: step, overshoot, band, peak_sensitivity, and settling unless it is to be chosen"},
	} {
		t.Run(c.name, func(t *testing.T) {
			g, err := ReadRig(strings.NewReader(c.text), "rig.toml")
			if err != nil {
				t.Fatal(err)
			}
			if got := message(g.NeedLog()); got != c.log {
				t.Errorf("NeedLog\ngot  %s\nwant %s", got, c.log)
			}
			if got := message(g.NeedDesign()); got != c.design {
				t.Errorf("NeedDesign\ngot  %s\nwant %s", got, c.design)
			}
		})
	}
}

// A rig made by a program has no lines; its faults must still read well.
func TestRigValidateWithoutFile(t *testing.T) {
	g := &Rig{Loop: &Loop{SamplePeriod: math.NaN()}}
	if got, want := message(g.Validate()), "rig file: loop.sample_period is NaN; give a finite number above 0"; got != want {
		t.Errorf("got %s, want %s", got, want)
	}
	g = &Rig{Log: LogColumns{SamplePeriod: -1}}
	if got, want := message(g.Validate()), "rig file: log.sample_period is -1; give a finite number above 0"; got != want {
		t.Errorf("got %s, want %s", got, want)
	}
}

func TestNearest(t *testing.T) {
	names := []string{"u", "y", "position", "current", "Sample Period"}
	for _, c := range []struct {
		word, want string
		near       bool
	}{
		{"Position", "position", true}, {"postion", "position", true}, {"curretn", "current", true},
		{"sample_period", "Sample Period", true}, {"Y", "y", true}, {"temperature", "", false}, {"x", "", false},
	} {
		got, near := nearest(c.word, names)
		if near != c.near || near && got != c.want {
			t.Errorf("nearest(%q) = %q, %v", c.word, got, near)
		}
	}
	if name, near := nearest("rfe", []string{"ref"}); !near || name != "ref" { // two letters swapped are one slip
		t.Errorf("nearest(rfe) = %q, %v", name, near)
	}
	if d := distance([]rune("curretn"), []rune("current")); d != 1 {
		t.Errorf("distance(curretn, current) = %d, want 1", d)
	}
}

// The owner's own loops are kept as written; limits must be on both sides of zero, and keys are known.
func TestReadRigLoops(t *testing.T) {
	own := hoverPuck + "\n[loops]\ninner = \"2.4*(s+30)/(0.002*s+1)\"\nouter = \"0.5 + 2/s\"\nprefilter = \"1\"\nouter_limits = [-1.5, 2]\n"
	g, err := ReadRig(strings.NewReader(own), "puck.toml")
	if err != nil {
		t.Fatal(err)
	}
	if l := g.Loops; l == nil || l.Inner != "2.4*(s+30)/(0.002*s+1)" || l.Outer != "0.5 + 2/s" || l.Prefilter != "1" || *l.OuterLimits != [2]float64{-1.5, 2} {
		t.Errorf("read %+v", g.Loops)
	}
	for _, c := range []struct{ old, new, want string }{
		{"outer =", "outre =", `unknown key "outre" in [loops]; did you mean "outer"?`},
		{"[-1.5, 2]", "[0.5, 2]", "deviations on both sides of 0"},
		{"[-1.5, 2]", "1.5", "write [lowest, highest]"},
		{`"1"`, "1", "loops.prefilter is the number 1; write text in double quotes"},
		{"prefilter =", "sample_period =", `"sample_period" belongs in [loop]`},
		{"[loops]", "[loopss]", `did you mean [loops]?`},
	} {
		_, err := ReadRig(strings.NewReader(strings.Replace(own, c.old, c.new, 1)), "puck.toml")
		if err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v, want %q", c.new, err, c.want)
		}
	}
}
