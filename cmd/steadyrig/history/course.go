package history

import (
	"math"
	"slices"

	"steadyrig/ident"
)

// A Course is one number over the logs that count.
type Course struct {
	What, Unit string
	Logs       []Evidence
	List       []ident.Estimate // of each log; the value is NaN where the log has no such number
}

// Courses are those of the rightmost pole's real part and of the gain, over the last most logs.
func (t Tested) Courses(most int) []Course {
	logs := t.Evidence[max(0, len(t.Evidence)-most):]
	pole, gain := Course{What: "rightmost pole", Unit: "rad/s", Logs: logs}, Course{Logs: logs}
	kind := t.Gain()
	none := ident.Estimate{Value: math.NaN()}
	for _, e := range logs {
		p, g := none, none
		if r := e.Entry.Plant.Rightmost(); r != nil {
			p = ident.Estimate{Value: r.Re, SD: r.ReSD, Interval95: r.Re95}
		}
		if x := e.Entry.Plant.Gain; x.Like(kind) {
			g = ident.Estimate{Value: x.Value, SD: x.SD, Interval95: x.Interval95}
		}
		pole.List, gain.List = append(pole.List, p), append(gain.List, g)
	}
	list := []Course{pole}
	if kind != nil {
		gain.What, gain.Unit = kind.Name(), kind.Unit
		list = append(list, gain)
	}
	return list
}

// Gain is that of the last log that counts; nil: it has none.
func (t Tested) Gain() *Gain {
	if n := len(t.Evidence); n > 0 {
		return t.Evidence[n-1].Entry.Plant.Gain
	}
	return nil
}

// Like reports whether two gains can be set side by side.
func (g *Gain) Like(other *Gain) bool {
	return g != nil && other != nil && g.Of == other.Of && g.Unit == other.Unit
}

// Name is what the gain is called.
func (g *Gain) Name() string {
	if g.Of == "dc" {
		return "steady gain"
	}
	return "leading gain"
}

// Frame is the range that all values take with intervals of the usual width; a log that tells next to nothing does not
// flatten the others. Both ends are zero where there is no value.
func (c Course) Frame() (lo, hi float64) {
	lo, hi = math.Inf(1), math.Inf(-1)
	var half []float64
	for _, e := range c.List {
		if !math.IsNaN(e.Value) {
			lo, hi = math.Min(lo, e.Value), math.Max(hi, e.Value)
			half = append(half, (e.Interval95.Hi-e.Interval95.Lo)/2)
		}
	}
	if len(half) == 0 {
		return 0, 0
	}
	slices.Sort(half)
	room := 1.5 * half[len(half)/2]
	if !(room > 0) || math.IsInf(room, 1) {
		room = math.Max(hi-lo, 0.05*math.Max(math.Abs(lo), math.Abs(hi)))
	}
	return lo - room, hi + room
}

// ChangedAt reports for each log whether the rig changed before it.
func (c Course) ChangedAt(changes []Change) []bool {
	at := make([]bool, len(c.Logs))
	for k, e := range c.Logs {
		at[k] = slices.ContainsFunc(changes, func(c Change) bool { return c.At == e.Line })
	}
	return at
}
