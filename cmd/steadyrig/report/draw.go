package report

import (
	"bytes"
	"fmt"
	"html/template"
	"image/color"
	"math"
	"regexp"
	"strconv"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/font"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgsvg"
)

// Size of a drawing. The text in it stays readable when a phone shrinks it to 350 pixels.
const (
	drawWidth  = 400 * vg.Length(1)
	drawHeight = 235 * vg.Length(1)
)

// Colours, told apart by lightness too; every line has its own pattern beside its colour.
var (
	ink    = color.NRGBA{0x22, 0x2b, 0x33, 0xff}
	petrol = color.NRGBA{0x0f, 0x5f, 0x6b, 0xff}
	rust   = color.NRGBA{0xb0, 0x4a, 0x1c, 0xff}
	stone  = color.NRGBA{0x7c, 0x7a, 0x73, 0xff}
	rule   = color.NRGBA{0xe4, 0xe1, 0xd9, 0xff}
)

func faint(c color.NRGBA, alpha uint8) color.NRGBA {
	c.A = alpha
	return c
}

// A stroke is how a line is drawn.
type stroke struct {
	colour color.NRGBA
	width  float64
	dashes []float64
}

func (s stroke) style() draw.LineStyle {
	ls := draw.LineStyle{Color: s.colour, Width: vg.Points(s.width)}
	for _, d := range s.dashes {
		ls.Dashes = append(ls.Dashes, vg.Points(d))
	}
	return ls
}

// The strokes of the report.
var (
	mainLine   = stroke{petrol, 1.4, nil}
	otherLine  = stroke{rust, 1.3, []float64{5, 2.5}}
	drawnLine  = stroke{faint(petrol, 0x48), 0.7, nil}
	askedLine  = stroke{ink, 1.0, []float64{1.5, 2.5}}
	limitLine  = stroke{rust, 1.1, []float64{8, 3, 1.5, 3}}
	thinLine   = stroke{petrol, 0.7, nil}
	bandColour = faint(petrol, 0x38)
)

// A key says in words what a stroke in a drawing stands for.
type key struct {
	Stroke stroke
	Band   *color.NRGBA // a filled band instead of a line
	Label  string
}

// Sample draws the stroke for the caption.
func (k key) Sample() template.HTML {
	if k.Band != nil {
		return template.HTML(fmt.Sprintf(`<svg class="sample" viewBox="0 0 26 10" aria-hidden="true"><rect y="1" width="26" height="8" fill="%s" fill-opacity="%.2f"/></svg>`,
			hex(*k.Band), float64(k.Band.A)/255))
	}
	dash := ""
	for i, d := range k.Stroke.dashes {
		if i > 0 {
			dash += " "
		}
		dash += strconv.FormatFloat(d, 'g', -1, 64)
	}
	return template.HTML(fmt.Sprintf(`<svg class="sample" viewBox="0 0 26 10" aria-hidden="true"><path d="M0 5H26" fill="none" stroke="%s" stroke-opacity="%.2f" stroke-width="%.1f" stroke-dasharray="%s"/></svg>`,
		hex(k.Stroke.colour), float64(k.Stroke.colour.A)/255, 1.3*k.Stroke.width, dash))
}

func hex(c color.NRGBA) string { return fmt.Sprintf("#%02x%02x%02x", c.R, c.G, c.B) }

// A figure is a drawing with its caption. Alt tells those who cannot see it what it shows.
type figure struct {
	Drawing template.HTML
	Title   string
	Keys    []key
	Note    string
}

// newPlot makes an empty plot with named axes.
func newPlot(x, y string) *plot.Plot {
	p := plot.New()
	p.BackgroundColor = nil
	for _, a := range []*plot.Axis{&p.X, &p.Y} {
		a.Color, a.LineStyle.Color, a.Tick.LineStyle.Color = stone, stone, stone
		a.LineStyle.Width, a.Tick.LineStyle.Width = vg.Points(0.6), vg.Points(0.6)
		a.Tick.Length = vg.Points(3)
		a.Padding = 0
		for _, s := range []*font.Font{&a.Label.TextStyle.Font, &a.Tick.Label.Font} {
			s.Variant, s.Size = "Sans", vg.Points(11.5)
		}
		a.Label.TextStyle.Color, a.Tick.Label.Color = ink, ink
		a.Tick.Marker = niceTicks{}
	}
	p.X.Label.Text, p.Y.Label.Text = x, y
	grid := plotter.NewGrid()
	for _, s := range []*draw.LineStyle{&grid.Horizontal, &grid.Vertical} {
		s.Color, s.Width, s.Dashes = rule, vg.Points(0.5), nil
	}
	p.Add(grid)
	return p
}

// niceTicks sets some six ticks at round numbers, with no more digits than tell them apart.
type niceTicks struct{}

func (niceTicks) Ticks(lo, hi float64) []plot.Tick {
	if !(hi > lo) {
		return []plot.Tick{{Value: lo, Label: strconv.FormatFloat(lo, 'g', 4, 64)}}
	}
	step := math.Pow(10, math.Floor(math.Log10((hi-lo)/4)))
	for _, f := range []float64{5, 2} {
		if (hi-lo)/(step*f) >= 4 {
			step *= f
			break
		}
	}
	var ticks []plot.Tick
	big := math.Max(math.Abs(lo), math.Abs(hi))
	decimals := max(0, -int(math.Floor(math.Log10(step)+1e-9)))
	for k := math.Ceil(lo/step - 1e-9); k*step <= hi+1e-9*step; k++ {
		v := k * step
		label := strconv.FormatFloat(v, 'f', decimals, 64)
		if big >= 1e6 || big < 1e-3 {
			label = strconv.FormatFloat(v, 'g', 3, 64)
		}
		if k == 0 {
			label, v = "0", 0
		}
		ticks = append(ticks, plot.Tick{Value: v, Label: label})
	}
	return ticks
}

// decadeTicks labels decades, and 2 and 5 as well where there are few of them.
type decadeTicks struct{}

func (decadeTicks) Ticks(lo, hi float64) []plot.Tick {
	few := hi/lo < 60
	var ticks []plot.Tick
	for d := math.Floor(math.Log10(lo)); d <= math.Ceil(math.Log10(hi)); d++ {
		for f := 1.0; f < 10; f++ {
			v := f * math.Pow(10, d)
			if v < lo*(1-1e-9) || v > hi*(1+1e-9) {
				continue
			}
			label := ""
			if f == 1 || few && (f == 2 || f == 5) {
				label = strconv.FormatFloat(v, 'g', 4, 64)
				if d >= 5 || d <= -5 {
					label = strconv.FormatFloat(v, 'e', 0, 64)
				}
			}
			ticks = append(ticks, plot.Tick{Value: v, Label: label})
		}
	}
	return ticks
}

func logAxis(a *plot.Axis) {
	a.Scale, a.Tick.Marker = plot.LogScale{}, decadeTicks{}
}

// addLine adds a line, broken where a value is not finite.
func addLine(p *plot.Plot, x, y []float64, s stroke) {
	var run plotter.XYs
	flush := func() {
		if len(run) > 1 {
			l, err := plotter.NewLine(run)
			if err != nil {
				panic("report: " + err.Error()) // all values were checked
			}
			l.LineStyle = s.style()
			p.Add(l)
		}
		run = nil
	}
	for i := range x {
		if finite(x[i]) && finite(y[i]) {
			run = append(run, plotter.XY{X: x[i], Y: y[i]})
		} else {
			flush()
		}
	}
	flush()
}

// addBand fills between lo and hi.
func addBand(p *plot.Plot, x, lo, hi []float64, c color.NRGBA) {
	var ring plotter.XYs
	for i := range x {
		if finite(lo[i]) && finite(hi[i]) {
			ring = append(ring, plotter.XY{X: x[i], Y: hi[i]})
		}
	}
	for i := len(x) - 1; i >= 0; i-- {
		if finite(lo[i]) && finite(hi[i]) {
			ring = append(ring, plotter.XY{X: x[i], Y: lo[i]})
		}
	}
	if len(ring) < 4 {
		return
	}
	poly, err := plotter.NewPolygon(ring)
	if err != nil {
		panic("report: " + err.Error())
	}
	poly.Color, poly.LineStyle.Width = c, 0
	p.Add(poly)
}

// addLevel draws a horizontal line from x0 to x1.
func addLevel(p *plot.Plot, x0, x1, y float64, s stroke) {
	addLine(p, []float64{x0, x1}, []float64{y, y}, s)
}

// A mark is a glyph of a pole or a zero, drawn with a pen that stays visible in small print.
type mark struct{ round bool }

func (m mark) DrawGlyph(c *draw.Canvas, sty draw.GlyphStyle, at vg.Point) {
	c.SetLineStyle(draw.LineStyle{Color: sty.Color, Width: vg.Points(1.6)})
	r := sty.Radius
	if m.round {
		var p vg.Path
		p.Move(vg.Point{X: at.X + r, Y: at.Y})
		p.Arc(at, r, 0, 2*math.Pi)
		p.Close()
		c.Stroke(p)
		return
	}
	for _, d := range []vg.Length{-r, r} {
		var p vg.Path
		p.Move(vg.Point{X: at.X - r, Y: at.Y - d})
		p.Line(vg.Point{X: at.X + r, Y: at.Y + d})
		c.Stroke(p)
	}
}

func finite(x float64) bool { return !math.IsNaN(x) && !math.IsInf(x, 0) }

// thinned keeps the lowest and the highest of each of n stretches of a curve, in their order, so that a long log stays
// small and no peak is lost.
func thinned(x, y []float64, n int) (tx, ty []float64) {
	if len(x) <= 2*n {
		return x, y
	}
	for b := range n {
		from, to := b*len(x)/n, (b+1)*len(x)/n
		lo, hi := from, from
		for i := from; i < to; i++ {
			if y[i] < y[lo] {
				lo = i
			}
			if y[i] > y[hi] {
				hi = i
			}
		}
		first, second := min(lo, hi), max(lo, hi)
		tx, ty = append(tx, x[first]), append(ty, y[first])
		if second != first {
			tx, ty = append(tx, x[second]), append(ty, y[second])
		}
	}
	return tx, ty
}

// room widens an axis a little beyond its data, and a constant one by a unit's share.
func room(a *plot.Axis) {
	d := 0.06 * (a.Max - a.Min)
	if !(d > 0) {
		d = math.Max(1e-3, 0.05*math.Abs(a.Max))
	}
	a.Min, a.Max = a.Min-d, a.Max+d
}

// decoration is what vgsvg writes and a page does not want: the font is the page's to choose.
var decoration = regexp.MustCompile(`font-family:[^;"]*;font-variant:[^;"]*;font-weight:[^;"]*;font-style:[^;"]*;?\s*`)

var opening = regexp.MustCompile(`(?s)^.*?<svg[^>]*>`)

// drawn renders a plot as inline SVG that scales with the page; alt is its text for those who cannot see it.
func drawn(p *plot.Plot, alt string) template.HTML {
	c := vgsvg.New(drawWidth, drawHeight)
	p.Draw(draw.New(c))
	var b bytes.Buffer
	if _, err := c.WriteTo(&b); err != nil {
		panic("report: " + err.Error()) // a buffer takes all
	}
	text := template.HTMLEscapeString(alt)
	head := fmt.Sprintf(`<svg viewBox="0 0 %g %g" role="img" aria-label="%s" xmlns="http://www.w3.org/2000/svg"><title>%s</title>`,
		float64(drawWidth), float64(drawHeight), text, text)
	s := opening.ReplaceAllLiteralString(b.String(), head)
	return template.HTML(decoration.ReplaceAllLiteralString(s, ""))
}
