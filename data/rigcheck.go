package data

import (
	"fmt"
	"math"
	"strings"
)

// Validate reports the first value that is not finite, out of its range, or at odds with another one, as a
// *ParseError. It does not ask for what a command needs: see NeedLog and NeedDesign.
func (g *Rig) Validate() error {
	for _, check := range []func() error{g.checkLog, g.checkLayout, g.checkLimits, g.checkOperatingPoint, g.checkStopgap, g.checkLoop, g.checkSpec, g.checkModel, g.checkLoops} {
		if err := check(); err != nil {
			return err
		}
	}
	return nil
}

// fault returns a ParseError at the line of key.
func (g *Rig) fault(key, hint, format string, args ...any) error {
	return &ParseError{File: g.name(), Line: g.Line(key), Err: fmt.Errorf(format, args...), Hint: hint}
}

func (g *Rig) name() string {
	if g.file == "" {
		return "rig file"
	}
	return g.file
}

// positive wants 0 < x < Inf; a zero that means "not given" is the caller's to skip.
func (g *Rig) positive(key string, x float64) error {
	if !(x > 0) || math.IsInf(x, 0) {
		return g.fault(key, "give a finite number above 0", "%s is %s", key, number(x))
	}
	return nil
}

// optional wants x positive where the file gives the key, or a program sets it.
func (g *Rig) optional(key string, x float64) error {
	if _, given := g.lines[key]; x == 0 && !given {
		return nil
	}
	return g.positive(key, x)
}

// pair wants lo < hi, both finite.
func (g *Rig) pair(key string, p *[2]float64) error {
	if p == nil {
		return nil
	}
	for _, x := range p {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return g.fault(key, "give finite numbers", "%s is [%s, %s]", key, number(p[0]), number(p[1]))
		}
	}
	if !(p[0] < p[1]) {
		return g.fault(key, "write [lowest, highest]", "%s is [%s, %s]", key, number(p[0]), number(p[1]))
	}
	return nil
}

// choice wants one of two words; empty is the default.
func (g *Rig) choice(key, got, a, b string) error {
	if got == "" || got == a || got == b {
		return nil
	}
	return g.fault(key, fmt.Sprintf("write %q or %q", a, b), "%s is %s", key, quote(got))
}

func (g *Rig) checkLog() error {
	log := &g.Log
	part := map[string]string{}
	for _, c := range []struct{ key, column string }{
		{"log.time", log.Time}, {"log.input", log.Input}, {"log.output", log.Output},
		{"log.reference", log.Reference}, {"log.dither", log.Dither}, {"log.input_time", log.InputTime},
	} {
		if c.column == "" {
			if g.lines[c.key] > 0 {
				return g.fault(c.key, "name a column of the log or take the key out", "%s is empty", c.key)
			}
			continue
		}
		if other := part[c.column]; other != "" {
			return g.fault(c.key, "each part needs a column of its own", "%s and %s are both column %s", other, c.key, quote(c.column))
		}
		part[c.column] = c.key
	}
	if err := g.choice("log.input_row", log.InputRow, InputAfter, InputBefore); err != nil {
		return err
	}
	if err := g.choice("log.input_stamp", log.InputStamp, InputApplied, InputComputed); err != nil {
		return err
	}
	if err := g.optional("log.sample_period", log.SamplePeriod); err != nil {
		return err
	}
	if err := g.optional("log.controller_period", log.ControllerPeriod); err != nil {
		return err
	}
	if log.InputTime != "" && log.Time == "" {
		return g.fault("log.input_time", "name the column of the output's stamps, too", "log.input_time without log.time")
	}
	if !(math.Abs(log.ClockSkew) <= maxSkew) {
		return g.fault("log.clock_skew", fmt.Sprintf("a fraction: write 1.2e-4 where the input's clock runs fast by 120 parts in a million; at most %g", maxSkew),
			"log.clock_skew is %s", number(log.ClockSkew))
	}
	return nil
}

func (g *Rig) checkLayout() error {
	l := &g.Layout
	const numeric = `0123456789+-.eE"`
	switch d := l.Delimiter; {
	case d == "" && g.lines["layout.delimiter"] > 0, d != "" && d != DelimiterTab && d != DelimiterBlanks && (len(d) > 1 || d < "\t" || d > "~" || strings.Contains(numeric+"\n\r", d)):
		return g.fault("layout.delimiter", `write one sign that is part of no number, "tab" or "blanks"`, "layout.delimiter is %s", quote(d))
	case l.DecimalMark != "" && l.DecimalMark == d:
		return g.fault("layout.decimal_mark", "one sign cannot be both", "layout.decimal_mark and layout.delimiter are %s", quote(d))
	case l.Comment != "" && strings.Contains(numeric+" \t", l.Comment[:1]):
		return g.fault("layout.comment", "rows start like that", "layout.comment is %s", quote(l.Comment))
	}
	if err := g.choice("layout.decimal_mark", l.DecimalMark, ".", ","); err != nil {
		return err
	}
	line := func(p *int) int {
		if p == nil {
			return 0
		}
		return *p
	}
	above := 0
	for _, c := range []struct {
		key  string
		line int
	}{{"layout.names_line", line(l.NamesLine)}, {"layout.units_line", line(l.UnitsLine)}, {"layout.numbers_line", l.NumbersLine}} {
		switch {
		case c.line < 0 || c.line > maxHeadLines:
			return g.fault(c.key, fmt.Sprintf("lines count from 1, and these lie among the first %d", maxHeadLines), "%s is %d", c.key, c.line)
		case c.line > 0 && c.line <= above:
			return g.fault(c.key, "names come first, then units, then numbers", "%s is %d", c.key, c.line)
		}
		above = max(above, c.line)
	}
	return nil
}

func (g *Rig) checkLimits() error {
	if err := g.pair("limits.input", g.Limits.Input); err != nil {
		return err
	}
	if err := g.pair("limits.output", g.Limits.Output); err != nil {
		return err
	}
	for _, c := range []struct {
		key  string
		step *float64
	}{{"limits.input_resolution", g.Limits.InputResolution}, {"limits.output_resolution", g.Limits.OutputResolution}} {
		if c.step != nil && (!(*c.step >= 0) || math.IsInf(*c.step, 0)) {
			return g.fault(c.key, "give the converter's step, or 0 where it is too fine to matter", "%s is %s", c.key, number(*c.step))
		}
	}
	return g.optional("limits.input_rate", g.Limits.InputRate)
}

func (g *Rig) checkOperatingPoint() error {
	p := g.OperatingPoint
	if p == nil {
		return nil
	}
	for _, c := range []struct {
		key    string
		x      float64
		limits *[2]float64
		name   string
	}{
		{"operating_point.input", p.Input, g.Limits.Input, "limits.input"},
		{"operating_point.output", p.Output, g.Limits.Output, "limits.output"},
	} {
		if math.IsNaN(c.x) || math.IsInf(c.x, 0) {
			return g.fault(c.key, "give a finite number", "%s is %s", c.key, number(c.x))
		}
		if l := c.limits; l != nil && !(l[0] < c.x && c.x < l[1]) {
			return g.fault(c.key, "limits and operating point are absolute values", "%s %s lies outside %s [%s, %s]",
				c.key, number(c.x), c.name, number(l[0]), number(l[1]))
		}
	}
	return nil
}

func (g *Rig) checkStopgap() error {
	s := g.Stopgap
	if s == nil {
		return nil
	}
	for _, c := range []struct {
		key  string
		list []float64
	}{{"stopgap.numerator", s.Numerator}, {"stopgap.denominator", s.Denominator}} {
		if len(c.list) == 0 {
			return g.fault(c.key, "write a list of numbers, [c0, c1, …]", "%s is empty", c.key)
		}
		for _, x := range c.list {
			if math.IsNaN(x) || math.IsInf(x, 0) {
				return g.fault(c.key, "give finite numbers", "%s has %s in it", c.key, number(x))
			}
		}
	}
	if s.Denominator[0] == 0 {
		return g.fault("stopgap.denominator", "powers of z^-1, the present output's coefficient first", "stopgap.denominator starts with 0")
	}
	return nil
}

func (g *Rig) checkLoop() error {
	l := g.Loop
	if l == nil {
		return nil
	}
	if err := g.positive("loop.sample_period", l.SamplePeriod); err != nil {
		return err
	}
	if err := g.choice("loop.hold", l.Hold, HoldZeroOrder, HoldBandLimited); err != nil {
		return err
	}
	if !(l.ComputeDelay >= 0) || math.IsInf(l.ComputeDelay, 0) {
		return g.fault("loop.compute_delay", "give 0 or a finite number above 0, in s", "loop.compute_delay is %s", number(l.ComputeDelay))
	}
	return nil
}

func (g *Rig) checkSpec() error {
	s := g.Spec
	if s == nil {
		return nil
	}
	for _, c := range []struct {
		key string
		x   float64
	}{{"spec.step", s.Step}, {"spec.band", s.Band}} {
		if err := g.positive(c.key, c.x); err != nil {
			return err
		}
	}
	for _, c := range []struct {
		key string
		x   float64
	}{{"spec.settling", s.Settling}, {"spec.input_noise", s.InputNoise}, {"spec.kick", s.Kick}, {"spec.kick_peak", s.KickPeak}} {
		if err := g.optional(c.key, c.x); err != nil {
			return err
		}
	}
	if !(s.Overshoot >= 0 && s.Overshoot <= 1) {
		return g.fault("spec.overshoot", "a fraction of the step, 0 to 1: write 0.10 for 10 %", "spec.overshoot is %s", number(s.Overshoot))
	}
	if s.Band >= 1 {
		return g.fault("spec.band", "a fraction of the step, below 1: write 0.02 for 2 %", "spec.band is %s", number(s.Band))
	}
	if !(s.PeakSensitivity > 1) || math.IsInf(s.PeakSensitivity, 0) {
		return g.fault("spec.peak_sensitivity", "a factor above 1, as a loop has to have a peak: 1.4 is calm, 2 is usual", "spec.peak_sensitivity is %s", number(s.PeakSensitivity))
	}
	if o := g.Limits.Output; o != nil && s.Step >= o[1]-o[0] {
		return g.fault("spec.step", "the step has to fit between the limits", "spec.step %s is wider than limits.output [%s, %s]",
			number(s.Step), number(o[0]), number(o[1]))
	}
	if i := g.Limits.Input; i != nil && s.InputNoise >= i[1]-i[0] {
		return g.fault("spec.input_noise", "a standard deviation, in units of input", "spec.input_noise %s is wider than limits.input [%s, %s]",
			number(s.InputNoise), number(i[0]), number(i[1]))
	}
	return nil
}

// maxOrder is the most poles that a fit takes.
const maxOrder = 8

func (g *Rig) checkModel() error {
	m := &g.Model
	if m.Order != nil && (*m.Order < 1 || *m.Order > maxOrder) {
		return g.fault("model.order", fmt.Sprintf("give a number of poles from 1 to %d: a fit takes no more", maxOrder), "model.order is %d", *m.Order)
	}
	if m.Zeros != nil && (*m.Zeros < 0 || *m.Zeros >= maxOrder) {
		return g.fault("model.zeros", "give a number of zeros below that of poles", "model.zeros is %d", *m.Zeros)
	}
	if m.Order != nil && m.Zeros != nil && *m.Zeros >= *m.Order {
		return g.fault("model.zeros", "a rig that answers no faster than its input has fewer zeros than poles",
			"model.zeros %d is not below model.order %d", *m.Zeros, *m.Order)
	}
	if d := m.Delay; d != nil && d[0] == d[1] && !math.IsInf(d[0], 0) {
		return nil // a delay that is known exactly
	}
	return g.pair("model.delay", m.Delay)
}

func (g *Rig) checkLoops() error {
	l := g.Loops
	if l == nil || l.OuterLimits == nil {
		return nil
	}
	if o := l.OuterLimits; o[0] >= 0 || o[1] <= 0 {
		return g.fault("loops.outer_limits", "give [lowest, highest], deviations on both sides of 0", "loops.outer_limits is [%s, %s]", number(o[0]), number(o[1]))
	}
	return g.pair("loops.outer_limits", l.OuterLimits)
}

// NeedLog reports what `fit` and `audit` need and the rig file lacks: the columns of input and output, and stamps
// or a sample period.
func (g *Rig) NeedLog() error {
	switch log := &g.Log; {
	case log.Input == "" && log.Output == "" && g.lines["log"] == 0:
		return g.fault("log", `it says which column plays which part: time = "t", input = "u", output = "y"`, "no [log]")
	case log.Input == "":
		return g.fault("log", `name the column of the input: input = "u"`, "[log] has no input")
	case log.Output == "":
		return g.fault("log", `name the column of the output: output = "y"`, "[log] has no output")
	case log.Time == "" && log.SamplePeriod == 0:
		return g.fault("log", "name the column of the stamps, or give the period in s", "[log] has neither time nor sample_period")
	}
	return nil
}

// NeedDesign reports what `design` and `verify` need beyond NeedLog and the rig file lacks: [loop], [limits] input
// and [spec].
func (g *Rig) NeedDesign() error {
	switch {
	case g.Loop == nil:
		return g.fault("", "give the period of the controller to be built: [loop] sample_period = 0.001", "no [loop]")
	case g.Limits.Input == nil:
		return g.fault("limits", "say what the actuator can do, absolute: input = [lowest, highest]", "no input in [limits]")
	case g.Spec == nil:
		return g.fault("", "say what the loop has to do: step, overshoot, band, peak_sensitivity, and settling unless it is to be chosen", "no [spec]")
	}
	return nil
}
