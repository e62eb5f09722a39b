package ident

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"steadyrig/data"
	"steadyrig/fit"
)

// Excitation says how rich a signal is that acts from outside the loop.
type Excitation struct {
	Signal string `json:"signal"` // "reference", "dither", or "law": what the law leaves unexplained of the input
	// Order is that of persistent excitation about the signal's mean; AtLeast: it is the highest looked at. The plant's
	// input keeps the order of what moves it, whatever the loop (Ljung, System Identification, 2nd ed. 1999, section 13.2).
	Order   int  `json:"order"`
	AtLeast bool `json:"at_least"`
	// Noise is the standard deviation of the rounding that the order stands out of, in the signal's units.
	Noise float64 `json:"noise"`
}

// Coherence says, by band of frequencies, how much of input and output moves with what acts from outside the loop.
type Coherence struct {
	// Signals are those that are taken to act: "reference", "dither", both (then coherence is multiple), or "law": what the
	// law leaves unexplained of the input, where what acts is not logged.
	Signals []string `json:"signals"`
	// Segments of Seconds each were averaged, counted as if they did not overlap.
	Segments float64         `json:"segments"`
	Seconds  float64         `json:"seconds"`
	Level    float64         `json:"level"` // of by_chance
	Bands    []CoherenceBand `json:"bands"` // those of Informative, but for any that hold none of the frequencies
	Words    string          `json:"words"`
}

// CoherenceBand is a band of Coherence.
type CoherenceBand struct {
	From   float64 `json:"from"` // rad/s
	To     float64 `json:"to"`   // rad/s
	Input  Share   `json:"input"`
	Output Share   `json:"output"`
	// SignalToNoise is the power of the output that is explained over that which is not; null where the coherence
	// could be chance.
	SignalToNoise *float64 `json:"signal_to_noise"`
}

// Share is the part of a band's power that is explained from outside.
type Share struct {
	Coherence float64 `json:"coherence"` // power-weighted, bias taken off, 0 to 1
	SD        float64 `json:"sd"`        // its standard deviation
	ByChance  float64 `json:"by_chance"` // passed with probability 1 - Level where nothing acts
}

const (
	mostOrder     = 50   // of excitation that is looked at
	fewSegments   = 7    // of a log that are averaged, at the least
	coherentLevel = 0.99 // of by_chance
)

// lowest is the frequency, rad/s, below which bands are not told apart in pieces of a log.
func lowest(pieces []fit.Record, period float64) float64 {
	longest := 0
	var y [][]float64
	for _, r := range pieces {
		longest = max(longest, len(r.Y)-2*lawOrder)
		y = append(y, r.Y)
	}
	n := 8
	for n < min(longest, blockRows) {
		n *= 2
	}
	low := fewBins / float64(n)
	if length := fit.SegmentLength(y, fewSegments, blockRows); length > 0 {
		low = math.Max(low, 1/float64(length))
	}
	return 2 * math.Pi * low / period
}

// An acting signal is one from outside the loop with what of it moves: a slice for each segment, nil where it is not logged.
type acting struct {
	name string
	of   func(data.Segment) []float64
}

var loggable = []acting{
	{"reference", func(s data.Segment) []float64 { return s.R }},
	{"dither", func(s data.Segment) []float64 { return s.D }},
}

// moves reports whether the signal is logged and moves within a segment.
func (a acting) moves(exps []*data.Experiment) bool {
	for _, e := range exps {
		for _, s := range e.Segments {
			if x := a.of(s); len(x) > 0 && about(x) > 1e-20*float64(len(x))*x[0]*x[0] {
				return true
			}
		}
	}
	return false
}

// excitation tells the orders of what is logged from outside and of what stands in for it.
func excitation(exps []*data.Experiment, o Outside) []Excitation {
	var out []Excitation
	add := func(name string, x [][]float64, noise float64) {
		n := fit.ExcitationOrder(x, fit.ExcitationOptions{Most: mostOrder, Noise: noise})
		out = append(out, Excitation{Signal: name, Order: n, AtLeast: n == mostOrder, Noise: noise})
	}
	for _, a := range loggable {
		var x [][]float64
		for _, e := range exps {
			for _, s := range e.Segments {
				if v := a.of(s); len(v) > 0 {
					x = append(x, v)
				}
			}
		}
		if len(x) > 0 {
			// A level that is held was rounded once.
			add(a.name, x, math.Sqrt(rounding(exps, func(s data.Segment) []float64 { return slices.Compact(slices.Clone(a.of(s))) })))
		}
	}
	if o.law != nil && !o.logged() && !o.Quiet {
		x := o.unexplained()
		var sum, n float64
		for _, v := range x {
			sum += about(v)
			n += float64(len(v))
		}
		if o.Rounding > tooMuch { // a law that saw what is logged
			sum = 0
		}
		add("law", x, math.Sqrt(math.Min(1, o.Rounding)*sum/math.Max(n, 1)))
	}
	return out
}

// logged reports whether what is logged is most of what acts from outside.
func (o Outside) logged() bool { return o.Logged != nil && *o.Logged >= mostLogged }

// unexplained is what the law leaves of the input, a slice for each piece.
func (o Outside) unexplained() [][]float64 {
	flipped := make([]fit.Record, len(o.pieces))
	for i, r := range o.pieces {
		flipped[i] = fit.Record{U: r.Y, Y: r.U}
	}
	return o.law.Residuals(flipped)
}

// coherence estimates how much of input and output moves with what acts from outside; nil where nothing acts or the log is too
// short to tell. What stands in for a signal that is held for lawOrder rows or more has some of the output's noise in it, since
// past outputs then foretell the signal better than its own past does.
func coherence(exps []*data.Experiment, o Outside, period float64) *Coherence {
	if o.Quiet || o.law == nil {
		return nil
	}
	c := &Coherence{Level: coherentLevel}
	var x [][][]float64
	var u, y [][]float64
	if o.logged() {
		var act []acting
		for _, a := range loggable {
			if a.moves(exps) {
				act = append(act, a)
				c.Signals = append(c.Signals, a.name)
			}
		}
		x = make([][][]float64, len(act))
		for _, e := range exps {
			for _, s := range e.Segments {
				whole := true
				for _, a := range act {
					whole = whole && a.of(s) != nil
				}
				if !whole {
					continue
				}
				for i, a := range act {
					x[i] = append(x[i], a.of(s))
				}
				u, y = append(u, s.U), append(y, fit.Record{U: s.U, Y: s.Y, Missing: s.Wrong}.Filled().Y)
			}
		}
	} else {
		c.Signals, x = []string{"law"}, make([][][]float64, 1)
		for i, e := range o.unexplained() {
			if len(e) > 0 {
				from := len(o.pieces[i].Y) - len(e)
				x[0], u, y = append(x[0], e), append(u, o.pieces[i].U[from:]), append(y, o.pieces[i].Y[from:])
			}
		}
	}
	length := fit.SegmentLength(y, fewSegments, blockRows)
	if length == 0 || len(x) == 0 {
		return nil
	}
	in, err := fit.Explain(x, u, period, length)
	if err != nil {
		return nil
	}
	out, err := fit.Explain(x, y, period, length)
	if err != nil {
		return nil
	}
	c.Segments, c.Seconds = out.Segments, float64(length)*period
	for _, b := range bandsBetween(lowest(o.pieces, period), math.Pi/period) {
		i, ok := in.Between(b.From, b.To, coherentLevel)
		j, also := out.Between(b.From, b.To, coherentLevel)
		if !ok || !also {
			continue
		}
		band := CoherenceBand{From: b.From, To: b.To, Input: share(i), Output: share(j)}
		if j.Coherence > j.ByChance {
			ratio := (j.Total - j.Noise) / math.Max(j.Noise, 1e-12*j.Total) // a log without noise
			band.SignalToNoise = &ratio
		}
		c.Bands = append(c.Bands, band)
	}
	if len(c.Bands) == 0 {
		return nil
	}
	c.say()
	return c
}

func share(b fit.ExplainedBand) Share {
	return Share{Coherence: math.Min(1, math.Max(0, b.Coherence)), SD: b.SD, ByChance: b.ByChance}
}

// say tells where the output follows what acts from outside.
func (c *Coherence) say() {
	// Neighbouring bands in which f holds, as one range each.
	where := func(f func(CoherenceBand) bool) string {
		var ranges []Band
		for i, b := range c.Bands {
			switch n := len(ranges); {
			case !f(b):
			case n > 0 && i > 0 && ranges[n-1].To == b.From:
				ranges[n-1].To = b.To
			default:
				ranges = append(ranges, Band{From: b.From, To: b.To})
			}
		}
		var list []string
		for _, r := range ranges {
			list = append(list, "between "+r.words())
		}
		return strings.Join(list, ", and ")
	}
	above := where(func(b CoherenceBand) bool { return b.SignalToNoise != nil && *b.SignalToNoise > 1 })
	chance := where(func(b CoherenceBand) bool { return b.SignalToNoise == nil })
	switch {
	case above == "" && chance == "":
		c.Words = "in the output noise has more power than what comes from outside, in every band"
	case above == "":
		c.Words = "in the output noise has more power than what comes from outside, in every band; nothing from outside is seen there " + chance
	case chance == "":
		c.Words = "in the output what comes from outside has more power than noise " + above
	default:
		c.Words = fmt.Sprintf("in the output what comes from outside has more power than noise %s; nothing of it is seen %s", above, chance)
	}
	if c.Signals[0] == "law" {
		c.Words += "; what the law leaves unexplained of the input stands in for what acts from outside, most of which is not logged: a rough measure"
	}
}
