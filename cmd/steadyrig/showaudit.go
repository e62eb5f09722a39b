package main

import (
	"fmt"
	"math"

	"github.com/go-gota/gota/dataframe"
	"github.com/go-gota/gota/series"
	"gonum.org/v1/gonum/floats"
	"gonum.org/v1/gonum/stat"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/ident"
)

// showAudit prints an audit in the order in which an engineer checks a log.
func showAudit(p *page, r *ident.AuditReport, exps []*data.Experiment, rig *data.Rig) {
	p.verdict(r.Verdict, r.Rig+": "+map[string]string{
		ident.Sound:   "the log can be fitted.",
		ident.Weak:    "the log can be fitted, with care.",
		ident.Refused: "the log cannot be fitted as it is.",
	}[r.Verdict])
	u := rig.Units
	p.heading("First checks")
	p.item("sign", r.Sign.Words)
	p.item("operating point", fmt.Sprintf("input %s, output %s; about it the input moves by %s, the output by %s (standard deviations)",
		words.Unit(words.Number(r.OperatingPoint.Input), u.Input), words.Unit(words.Number(r.OperatingPoint.Output), u.Output),
		words.Unit(words.Number(r.Spread.Input), u.Input), words.Unit(words.Number(r.Spread.Output), u.Output)))
	p.item("pairing", r.Pairing.Words)
	p.item("loop rate", r.LoopRate.Words)
	p.item("from outside", r.Outside.Words)
	if text := words.Excitation(r.Excitation, u); text != "" {
		p.item("excitation", text)
	}
	p.item("signal and noise", words.SignalAndNoise(r))
	if r.Memories > 0 {
		p.item("length", words.Memories(r.Memories))
	}
	if r.Law != nil {
		p.item("stopgap law", r.Law.Words)
	}
	p.item("to expect", words.ToExpect(r))
	if i := r.Informative; i != nil && i.Lacking {
		p.item("probe power", i.Advice)
	}
	if r.NextStep != "" {
		p.item("next step", r.NextStep)
	}

	if c := r.Coherence; c != nil {
		p.heading("Coherence with " + words.CoherenceWith(c) + ", by band")
		p.table(coherencePlot(c))
		wrap(p.w, "  ", words.CoherenceNote(c))
	}
	if i := r.Informative; i != nil {
		p.heading("Where what the log tells of the rightmost pole comes from")
		p.table(dataframe.LoadRecords(append([][]string{bandHead}, words.Bands(i)...), dataframe.DetectTypes(false), dataframe.DefaultType(series.String)))
		wrap(p.w, "  ", words.BandNote(i))
		p.heading(words.NextTests(i))
		for _, n := range i.NextTests {
			h, text := words.NextTest(n)
			p.item(h, text)
		}
	}

	p.heading("Columns, rows in use")
	p.table(describe(exps, rig))
	for _, l := range r.Logs {
		p.item("log", fmt.Sprintf("%s: %d of %d rows used, %s", l.File, l.Used, l.Rows, words.Count(l.Segments, "segment")))
	}
	for _, e := range exps {
		p.item("written with", e.Layout)
	}

	p.heading(fmt.Sprintf("Flaws: %s", map[bool]string{true: "none found", false: fmt.Sprint(len(r.Flaws))}[len(r.Flaws) == 0]))
	for _, f := range r.Flaws {
		p.line("  %s", words.Flaw(f, len(r.Logs) > 1))
		wrap(p.w, "    ", words.FlawText(f))
	}
}

// coherencePlot draws coherence as bars, as wide as the page allows.
func coherencePlot(c *ident.Coherence) dataframe.DataFrame {
	const widest, number = 16, len("0.00 ")
	var rad, hz, in, out, ratio []string
	widths := make([]int, 2)
	for _, b := range c.Bands {
		r, h := words.Range(b.From, b.To)
		rad, hz, ratio = append(rad, r), append(hz, h), append(ratio, words.SignalToNoise(b))
		widths[0], widths[1] = max(widths[0], len(r)), max(widths[1], len(h))
	}
	bar := min(widest, (pageWidth-len("  ")-widths[0]-widths[1]-2*number-4*len("  ")-len("S/N, dB"))/2)
	for _, b := range c.Bands {
		in = append(in, fmt.Sprintf("%.2f %s", b.Input.Coherence, words.Bar(b.Input, bar)))
		out = append(out, fmt.Sprintf("%.2f %s", b.Output.Coherence, words.Bar(b.Output, bar)))
	}
	return columns(">rad/s", rad, ">Hz", hz, "of the input", in, "of the output", out, ">S/N, dB", ratio)
}

// bandHead names the columns of words.Bands.
var bandHead = []string{">rad/s", ">Hz", ">power", ">tells", ">could add", ">worth"}

// describe tabulates the columns in use over all logs.
func describe(exps []*data.Experiment, rig *data.Rig) dataframe.DataFrame {
	parts := []struct {
		part, column, unit string
		of                 func(data.Segment) []float64
	}{
		{"input", rig.Log.Input, rig.Units.Input, func(s data.Segment) []float64 { return s.U }},
		{"output", rig.Log.Output, rig.Units.Output, func(s data.Segment) []float64 { return s.Y }},
		{"reference", rig.Log.Reference, rig.Units.Output, func(s data.Segment) []float64 { return s.R }},
		{"dither", rig.Log.Dither, rig.Units.Input, func(s data.Segment) []float64 { return s.D }},
	}
	var part, column, unit []string
	var mean, sd, low, high []float64
	for _, q := range parts {
		var x []float64
		for _, e := range exps {
			for _, s := range e.Pieces() {
				x = append(x, q.of(s)...)
			}
		}
		if len(x) == 0 {
			continue
		}
		m, d := stat.MeanStdDev(x, nil)
		if math.Abs(m) < 1e-12*d {
			m = 0
		}
		part, column, unit = append(part, q.part), append(column, q.column), append(unit, q.unit)
		mean, sd, low, high = append(mean, m), append(sd, d), append(low, floats.Min(x)), append(high, floats.Max(x))
	}
	return dataframe.New(
		series.New(part, series.String, "part"), series.New(column, series.String, "column"), series.New(unit, series.String, "unit"),
		series.New(mean, series.Float, "mean"), series.New(sd, series.Float, "sd"),
		series.New(low, series.Float, "lowest"), series.New(high, series.Float, "highest"),
	)
}
