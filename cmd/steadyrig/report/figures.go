package report

import (
	"fmt"
	"math"
	"slices"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"

	"steadyrig/cmd/steadyrig/words"
	"steadyrig/data"
	"steadyrig/design"
	"steadyrig/ident"
)

// How much is drawn.
const (
	stretches    = 420 // of a curve, each drawn by its lowest and highest point
	closeUpRows  = 150 // of the one-step prediction
	drawnSteps   = 24  // plants in step responses
	drawnSpectra = 200 // plants behind the bands of sensitivity
	shownLogs    = 3
)

// axis names an axis with its unit.
func axis(name, unit string) string {
	if unit == "" {
		return name
	}
	return name + ", " + unit
}

// timeOf lays the rows of a segment on the time axis.
func timeOf(s data.Segment, period float64) []float64 {
	t := make([]float64, len(s.Y))
	for k := range t {
		t[k] = s.Start + float64(k)*period
	}
	return t
}

// logFigures draws the output and the input of one log.
func logFigures(e *data.Experiment, rig *data.Rig) []figure {
	u := rig.Units
	start := e.Segments[0].Start
	y, in := newPlot("time, s", axis("output", u.Output)), newPlot("time, s", axis("input", u.Input))
	var yKeys, inKeys []key
	for i, s := range e.Pieces() {
		t := timeOf(s, e.Period)
		for k := range t {
			t[k] -= start
		}
		if s.R != nil && (slices.Max(s.R) > slices.Min(s.R) || i > 0) {
			tx, ty := thinned(t, s.R, stretches)
			addLine(y, tx, ty, otherLine)
			if len(yKeys) == 0 {
				yKeys = append(yKeys, key{Stroke: otherLine, Label: "reference"})
			}
		}
		tx, ty := thinned(t, s.Y, stretches)
		addLine(y, tx, ty, thinLine)
		tx, ty = thinned(t, s.U, stretches)
		addLine(in, tx, ty, thinLine)
	}
	yKeys = append([]key{{Stroke: thinLine, Label: "output, as logged"}}, yKeys...)
	inKeys = append(inKeys, key{Stroke: thinLine, Label: "input, as logged"})
	note := fmt.Sprintf("%d of %d rows used, one every %s.", e.Used, e.Rows, words.Seconds(e.Period))
	if lim := rig.Limits.Input; lim != nil {
		span := in.Y.Max - in.Y.Min
		near := false
		for _, v := range lim {
			if v > in.Y.Min-span && v < in.Y.Max+span {
				addLevel(in, in.X.Min, in.X.Max, v, limitLine)
				near = true
			}
		}
		if near {
			inKeys = append(inKeys, key{Stroke: limitLine, Label: "limits of the input"})
		}
	}
	room(&y.Y)
	room(&in.Y)
	return []figure{
		{drawn(y, "Output of log "+e.File+" over time"), "Output of " + e.File, yKeys, note},
		{drawn(in, "Input of log "+e.File+" over time"), "Input of " + e.File, inKeys, ""},
	}
}

// stairs lays a figure of each band over its frequencies; from(i) is where band i begins and to(i) where it ends.
func stairs(n int, from, to, value func(i int) float64) (x, y []float64) {
	for i := range n {
		left := from(i)
		if left == 0 {
			left = to(i) / 2 // a log axis has no zero
		}
		x, y = append(x, left, to(i)), append(y, value(i), value(i))
	}
	return x, y
}

// coherenceFigure draws how much of input and output moves with what acts from outside, by band.
func coherenceFigure(c *ident.Coherence) figure {
	p := newPlot("frequency, rad/s", "coherence")
	logAxis(&p.X)
	over := func(value func(b ident.CoherenceBand) float64) (x, y []float64) {
		return stairs(len(c.Bands), func(i int) float64 { return c.Bands[i].From }, func(i int) float64 { return c.Bands[i].To }, func(i int) float64 { return value(c.Bands[i]) })
	}
	x, chance := over(func(b ident.CoherenceBand) float64 { return math.Max(b.Input.ByChance, b.Output.ByChance) })
	shade := faint(stone, 0x30)
	addBand(p, x, make([]float64, len(x)), chance, shade)
	_, in := over(func(b ident.CoherenceBand) float64 { return b.Input.Coherence })
	addLine(p, x, in, otherLine)
	_, out := over(func(b ident.CoherenceBand) float64 { return b.Output.Coherence })
	addLine(p, x, out, mainLine)
	p.X.Min, p.X.Max, p.Y.Min, p.Y.Max = x[0], x[len(x)-1], 0, 1.05
	return figure{drawn(p, "Coherence of input and output with what acts from outside, by band of frequencies"), "Coherence with " + words.CoherenceWith(c),
		[]key{{Stroke: mainLine, Label: "of the output"}, {Stroke: otherLine, Label: "of the input"}, {Band: &shade, Label: "no more than chance"}},
		words.CoherenceMeans(c)}
}

// noiseFigure draws the output's signal-to-noise ratio by band.
func noiseFigure(c *ident.Coherence) figure {
	p := newPlot("frequency, rad/s", "signal to noise, dB")
	logAxis(&p.X)
	x, ratio := stairs(len(c.Bands), func(i int) float64 { return c.Bands[i].From }, func(i int) float64 { return c.Bands[i].To }, func(i int) float64 {
		if r := c.Bands[i].SignalToNoise; r != nil {
			return 10 * math.Log10(*r)
		}
		return math.NaN()
	})
	addLevel(p, x[0], x[len(x)-1], 0, limitLine)
	addLine(p, x, ratio, mainLine)
	p.X.Min, p.X.Max = x[0], x[len(x)-1]
	room(&p.Y)
	return figure{drawn(p, "Power of the output that comes from outside over all other power of it, by band of frequencies"), "Signal to noise in the output",
		[]key{{Stroke: mainLine, Label: "power from outside over all other power"}, {Stroke: limitLine, Label: "as much of either"}},
		"No line where there is no more than chance."}
}

// bandFigure draws how the probe's power and what the log tells of the rightmost pole lie over the bands.
func bandFigure(i *ident.Informative) figure {
	p := newPlot("frequency, rad/s", "share, %")
	logAxis(&p.X)
	over := func(value func(b ident.Band) float64) (x, y []float64) {
		return stairs(len(i.Bands), func(k int) float64 { return i.Bands[k].From }, func(k int) float64 { return i.Bands[k].To }, func(k int) float64 { return 100 * value(i.Bands[k]) })
	}
	x, power := over(func(b ident.Band) float64 { return b.Power })
	_, tells := over(func(b ident.Band) float64 { return b.Information })
	best := i.Bands[i.Best]
	shade := faint(rust, 0x18)
	top := 1.1 * math.Max(slices.Max(power), slices.Max(tells))
	addBand(p, []float64{math.Max(best.From, x[0]), best.To}, []float64{0, 0}, []float64{top, top}, shade)
	addLine(p, x, power, mainLine)
	addLine(p, x, tells, otherLine)
	p.X.Min, p.X.Max, p.Y.Min, p.Y.Max = x[0], x[len(x)-1], 0, top
	return figure{drawn(p, "Shares of the probe's power and of what the log tells of the rightmost pole, by band of frequencies"), "Where the rightmost pole is told from",
		[]key{{Stroke: mainLine, Label: "power from outside at the input"}, {Stroke: otherLine, Label: "what the log tells of the pole"}, {Band: &shade, Label: "where more power would help most"}},
		""}
}

// fitFigures draws the one-step prediction of the longest segment, close up, and its errors over all of it.
func fitFigures(m *ident.Model, exps []*data.Experiment, u data.Units) []figure {
	var s data.Segment
	var period float64
	var file string
	for _, e := range exps {
		for _, q := range e.Pieces() {
			if len(q.Y) > len(s.Y) {
				s, period, file = q, e.Period, e.File
			}
		}
	}
	pr, err := m.OneStep(s)
	if err != nil {
		return nil
	}
	t := timeOf(s, period)[pr.From:]
	y := s.Y[pr.From:]
	from := len(t) / 2
	to := min(len(t), from+closeUpRows)
	near := newPlot("time, s", axis("output", u.Output))
	addLine(near, t[from:to], y[from:to], mainLine)
	addLine(near, t[from:to], pr.Output[from:to], otherLine)
	room(&near.Y)
	rest := newPlot("time, s", axis("error", u.Output))
	sd := m.Noise.SD
	tx, ty := thinned(t, pr.Error, stretches)
	addLine(rest, tx, ty, stroke{faint(petrol, 0xa0), 0.6, nil})
	for _, level := range []float64{-1.96 * sd, 1.96 * sd} {
		addLevel(rest, t[0], t[len(t)-1], level, limitLine)
	}
	room(&rest.Y)
	return []figure{
		{drawn(near, fmt.Sprintf("Measured output and its one-step prediction over %d rows of %s", to-from, file)), "One-step prediction, close up",
			[]key{{Stroke: mainLine, Label: "measured"}, {Stroke: otherLine, Label: "predicted from the rows before"}},
			fmt.Sprintf("%d rows of %s. In closed loop a long-range simulation of an unstable plant would diverge; one step is the fair test.", to-from, file)},
		{drawn(rest, "Errors of the one-step prediction over the log"), "What the model leaves over",
			[]key{{Stroke: thinLine, Label: "error"}, {Stroke: limitLine, Label: "95 % of errors should lie between"}},
			fmt.Sprintf("Standard deviation %s.", words.Unit(words.Number(sd), u.Output))},
	}
}

// poleFigure draws poles and zeros with their intervals.
func poleFigure(m *ident.Model) figure {
	p := rootPlot(rooted{m, mainLine, otherLine})
	shade := faint(rust, 0x18)
	return figure{drawn(p, "Poles and zeros of the plant with their 95 % intervals; "+words.Unstable(m.Poles)), "Poles × and zeros ○ of the plant",
		[]key{{Stroke: stroke{faint(petrol, 0xa0), 3.2, nil}, Label: "95 % interval of a pole"}, {Band: &shade, Label: "unstable half-plane"}},
		"An interval narrower than its mark does not show; the table has the numbers."}
}

// A rooted model is drawn by its poles and zeros, in the colours of two strokes.
type rooted struct {
	m            *ident.Model
	poles, zeros stroke
}

// rootPlot draws poles and zeros of models with their intervals.
func rootPlot(models ...rooted) *plot.Plot {
	p := newPlot("real part, rad/s", "imaginary part, rad/s")
	lo, hi, top := 0.0, 0.0, 0.0
	for _, c := range models {
		for _, r := range append(slices.Clone(c.m.Poles), c.m.Zeros...) {
			lo, hi, top = math.Min(lo, r.Re), math.Max(hi, r.Re), math.Max(top, math.Abs(r.Im))
			for _, v := range []float64{r.Re95.Lo, r.Re95.Hi} {
				if finite(v) && math.Abs(v) < 3*math.Max(hi-lo, math.Abs(r.Re)) {
					lo, hi = math.Min(lo, v), math.Max(hi, v)
				}
			}
			if finite(r.Im95.Hi) && r.Im != 0 {
				top = math.Max(top, math.Min(r.Im95.Hi, 3*r.Im))
			}
		}
	}
	width := hi - lo
	if width == 0 {
		width = 1
	}
	lo, hi = lo-0.08*width, math.Max(hi+0.08*width, 0.12*width)
	if top == 0 {
		top = 0.3 * width
	}
	top *= 1.25
	addBand(p, []float64{0, hi}, []float64{-top, -top}, []float64{top, top}, faint(rust, 0x18))
	addLine(p, []float64{0, 0}, []float64{-top, top}, stroke{ink, 0.8, nil})
	addLevel(p, lo, hi, 0, stroke{stone, 0.6, nil})
	within := func(v float64) float64 { return math.Max(lo, math.Min(hi, v)) }
	add := func(roots []ident.Root, shape draw.GlyphDrawer, s stroke) {
		var at plotter.XYs
		for _, r := range roots {
			at = append(at, plotter.XY{X: r.Re, Y: r.Im})
			bar := stroke{faint(s.colour, 0xa0), 3.2, nil}
			if a, b := within(r.Re95.Lo), within(r.Re95.Hi); b > a {
				addLine(p, []float64{a, b}, []float64{r.Im, r.Im}, bar)
			}
			if r.Im != 0 && finite(r.Im95.Lo) && finite(r.Im95.Hi) {
				addLine(p, []float64{r.Re, r.Re}, []float64{math.Max(-top, r.Im95.Lo), math.Min(top, r.Im95.Hi)}, bar)
			}
		}
		if len(at) == 0 {
			return
		}
		sc, err := plotter.NewScatter(at)
		if err != nil {
			panic("report: " + err.Error())
		}
		sc.GlyphStyle = draw.GlyphStyle{Color: s.colour, Radius: vg.Points(4.5), Shape: shape}
		p.Add(sc)
	}
	for _, c := range models {
		add(c.m.Poles, mark{}, c.poles)
		add(c.m.Zeros, mark{round: true}, c.zeros)
	}
	p.X.Min, p.X.Max, p.Y.Min, p.Y.Max = lo, hi, -top, top
	return p
}

// methodFigure sets the rightmost pole that is or may be unstable, by each method, beside the interval of the final
// estimate; ok is false where there is no such pole or no other method.
func methodFigure(m *ident.Model) (f figure, ok bool) {
	var pole *ident.Root
	for i, r := range m.Poles {
		if may := r.Unstable || r.Re95.Contains(0); r.Im >= 0 && may && (pole == nil || r.Re95.Hi > pole.Re95.Hi) {
			pole = &m.Poles[i]
		}
	}
	if pole == nil || len(m.Evidence.Methods) < 2 || !finite(pole.Re95.Lo) || !finite(pole.Re95.Hi) {
		return figure{}, false
	}
	p := newPlot("real part, rad/s", "")
	n := len(m.Evidence.Methods)
	var names []plot.Tick
	addBand(p, []float64{pole.Re95.Lo, pole.Re95.Hi}, []float64{0.4, 0.4}, []float64{float64(n) + 0.6, float64(n) + 0.6}, bandColour)
	addLine(p, []float64{pole.Re, pole.Re}, []float64{0.4, float64(n) + 0.6}, mainLine)
	var at plotter.XYs
	for i, e := range m.Evidence.Methods {
		level := float64(n - i)
		names = append(names, plot.Tick{Value: level, Label: e.Name})
		best, far := 0.0, math.Inf(1)
		for _, q := range e.Poles {
			if d := math.Hypot(q[0]-pole.Re, math.Abs(q[1])-pole.Im); d < far {
				best, far = q[0], d
			}
		}
		if !math.IsInf(far, 1) {
			at = append(at, plotter.XY{X: best, Y: level})
		}
	}
	sc, err := plotter.NewScatter(at)
	if err != nil {
		return figure{}, false
	}
	sc.GlyphStyle = draw.GlyphStyle{Color: ink, Radius: vg.Points(4), Shape: draw.CircleGlyph{}}
	p.Add(sc)
	p.Y.Tick.Marker = plot.ConstantTicks(names)
	p.Y.Min, p.Y.Max = 0.4, float64(n)+0.6
	room(&p.X)
	band := bandColour
	interval, estimate := "95 % interval of the final estimate", "final estimate"
	if words.AtZero(*pole) {
		interval, estimate = "95 % interval of a free pole in place of the integrator", "integrator, held at zero"
	}
	return figure{drawn(p, "The rightmost pole as each method of estimation has it"), "The rightmost pole by each method",
		[]key{{Band: &band, Label: interval}, {Stroke: mainLine, Label: estimate}},
		"Methods that take different things for granted should agree. Agreement clears the noise model; order, hold and pairing would bias all alike."}, true
}

// responseFigures draws gain and phase of the plant with their bands.
func responseFigures(m *ident.Model, u data.Units) []figure {
	r := m.FrequencyResponse
	if r == nil {
		return nil
	}
	g := newPlot("frequency, rad/s", axis("gain", words.Ratio(u.Output, u.Input)))
	logAxis(&g.X)
	logAxis(&g.Y)
	ph := newPlot("frequency, rad/s", "phase, degrees")
	logAxis(&ph.X)
	addBand(g, r.Omega, r.Gain.Lo, r.Gain.Hi, bandColour)
	addLine(g, r.Omega, r.Gain.Value, mainLine)
	addBand(ph, r.Omega, r.Phase.Lo, r.Phase.Hi, bandColour)
	addLine(ph, r.Omega, r.Phase.Value, mainLine)
	if span := ph.Y.Max - ph.Y.Min; span > 20 && span < 1000 {
		ph.Y.Tick.Marker = degreeTicks{}
	}
	room(&ph.Y)
	band := bandColour
	keys := []key{{Stroke: mainLine, Label: "estimate"}, {Band: &band, Label: fmt.Sprintf("%.0f %% joint band, from %d drawn plants", 100*r.Level, r.Drawn)}}
	note := fmt.Sprintf("From the logged input to the output, up to the Nyquist frequency of the log. With %.0f %% confidence the whole true response lies inside, gain and phase, at all frequencies at once, if the structure is right.", 100*r.Level)
	return []figure{
		{drawn(g, "Gain of the plant over frequency, with its band"), "Frequency response: gain", keys, note},
		{drawn(ph, "Phase of the plant over frequency, with its band"), "Frequency response: phase", keys, "The same band as that of the gain."},
	}
}

// degreeTicks sets ticks at multiples of 45 degrees, or parts of that where few fit.
type degreeTicks struct{}

func (degreeTicks) Ticks(lo, hi float64) []plot.Tick {
	step := 45.0
	for (hi-lo)/step > 8 {
		step *= 2
	}
	for (hi-lo)/step < 3 {
		step /= 3
	}
	var ticks []plot.Tick
	for k := math.Ceil(lo / step); k*step <= hi; k++ {
		ticks = append(ticks, plot.Tick{Value: k * step, Label: fmt.Sprintf("%d", int(k*step))})
	}
	return ticks
}

// sensitivityFigures draws |S| with both loops closed and of the inner loop alone.
func sensitivityFigures(c *design.Curves, asked float64) []figure {
	one := func(title, alt, note string, s, lo, hi []float64) figure {
		p := newPlot("frequency, rad/s", "|S|")
		logAxis(&p.X)
		logAxis(&p.Y)
		addBand(p, c.Omega, lo, hi, bandColour)
		addLine(p, c.Omega, s, mainLine)
		band := bandColour
		keys := []key{{Stroke: mainLine, Label: "nominal plant"}, {Band: &band, Label: fmt.Sprintf("range over %d drawn plants", drawnSpectra)}}
		if asked > 0 {
			addLevel(p, c.Omega[0], c.Omega[len(c.Omega)-1], asked, limitLine)
			keys = append(keys, key{Stroke: limitLine, Label: "largest peak asked for"})
		}
		p.Y.Min = math.Max(p.Y.Min, 1e-3*p.Y.Max)
		p.Y.Max *= 1.3
		return figure{drawn(p, alt), title, keys, note}
	}
	return []figure{
		one("Sensitivity at the plant input, both loops", "Sensitivity over frequency with both loops closed, with its range over drawn plants",
			"This is the loop whose margins count.", c.S, c.SLo, c.SHi),
		one("Sensitivity of the inner loop alone", "Sensitivity over frequency of the inner loop alone, with its range over drawn plants",
			"What is left when the outer loop is clamped or off.", c.InnerS, c.InnerSLo, c.InnerSHi),
	}
}

// stepFigures draws the spec's reference step and the input that it takes.
func stepFigures(r *design.Responses, l *design.Loops, spec *data.Spec, u data.Units) []figure {
	y, in := newPlot("time, s", axis("output", u.Output)), newPlot("time, s", axis("input", u.Input))
	drawSteps(y, r.Time, r.Output, mainLine, drawnLine)
	drawSteps(in, r.Time, r.Input, mainLine, drawnLine)
	addLine(y, r.Time, r.Reference, otherLine)
	end := r.Time[len(r.Time)-1]
	target := r.Reference[len(r.Reference)-1]
	addLevel(y, 0, end, target+spec.Overshoot*spec.Step, askedLine)
	addLevel(y, spec.Settling, end, target+spec.Band*spec.Step, askedLine)
	addLevel(y, spec.Settling, end, target-spec.Band*spec.Step, askedLine)
	plants := []key{{Stroke: mainLine, Label: "nominal plant"}, {Stroke: drawnLine, Label: fmt.Sprintf("%d drawn plants", len(r.Output)-1)}}
	yKeys := append(slices.Clone(plants), key{Stroke: otherLine, Label: "reference"}, key{Stroke: askedLine, Label: "overshoot and settling asked for"})
	inKeys := slices.Clone(plants)
	note := ""
	if lim := l.InputLimits; lim != nil {
		for _, v := range lim {
			addLevel(in, r.Time[0], end, v, limitLine)
		}
		inKeys = append(inKeys, key{Stroke: limitLine, Label: "limits of the input"})
		note = fmt.Sprintf("Limits %s to %s.", words.Number(lim[0]), words.Unit(words.Number(lim[1]), u.Input))
	}
	room(&y.Y)
	room(&in.Y)
	return []figure{
		{drawn(y, "Output after the reference step of the spec, on the nominal and on drawn plants"), "Step of the reference", yKeys,
			"In the sampled loop with its limits, without noise."},
		{drawn(in, "Input after the reference step of the spec, with the limits of the input"), "What the step takes of the actuator", inKeys, note},
	}
}
