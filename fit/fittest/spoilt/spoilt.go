// Package spoilt makes logs with known flaws of a demo rig, for the tests of whatever reads or fits them.
package spoilt

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strconv"
	"strings"
	"time"

	"steadyrig/data"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
)

// An Element bends what the actuator is told into what acts; y is the output of the row.
type Element func(u, y float64) float64

// DeadZone lets nothing through within half of its centre.
func DeadZone(half, centre float64) Element {
	return func(u, _ float64) float64 {
		v := u - centre
		return centre + v - min(max(v, -half), half)
	}
}

// Play follows once the input has moved by half.
func Play(half, start float64) Element {
	at := start
	return func(u, _ float64) float64 {
		at = min(max(at, u-half), u+half)
		return at
	}
}

// Friction takes a force off against the motion.
func Friction(force float64) Element {
	last := 0.0
	return func(u, y float64) float64 {
		v := y - last
		last = y
		if v == 0 {
			return u
		}
		return u - math.Copysign(force, v)
	}
}

// Bent runs a rig's stopgap loop under s with an element before its plant, by lti's sampled plant and law.
func Bent(r demorig.Rig, s demorig.Signals, f Element) (lti.Trace, error) {
	plant, err := lti.ZOH(r.Truth, r.Period)
	if err != nil {
		return lti.Trace{}, err
	}
	n := plant.Order()
	law := r.Law().Start()
	x, next := make([]float64, n), make([]float64, n)
	var trace lti.Trace
	for k := range s.Reference {
		y := r.Y0
		for i := range n {
			y += plant.C.At(0, i) * x[i]
		}
		u := law.StepProbe(s.Reference[k], y+s.Noise[k], s.Dither[k])
		trace.U, trace.Y = append(trace.U, u), append(trace.Y, law.Read())
		w := f(u, y) - r.U0 + s.Disturbance[k]
		for i := range n {
			next[i] = plant.B.At(i, 0) * w
			for j := range n {
				next[i] += plant.A.At(i, j) * x[j]
			}
		}
		x, next = next, x
	}
	return trace, nil
}

// A draft is the lines of a good log, its rig file and what drew them, to be spoilt in one way.
type draft struct {
	rnd   *rand.Rand
	rig   demorig.Rig
	s     demorig.Signals
	lines []string // line 1 is a comment, line 2 the names
	file  string   // the rig file
}

const firstRow = 2 // index into draft.lines

// somewhere returns the index of a line with rows enough on both sides.
func (p *draft) somewhere() int { return firstRow + 400 + p.rnd.IntN(len(p.lines)-firstRow-1000) }

// cell sets a cell of a line; columns t, u, y, r, d.
func (p *draft) cell(line, column int, x string) {
	c := strings.Split(p.lines[line], ",")
	c[column] = x
	p.lines[line] = strings.Join(c, ",")
}

func (p *draft) number(line, column int) float64 {
	x, _ := strconv.ParseFloat(strings.Split(p.lines[line], ",")[column], 64)
	return x
}

// each changes a column from a line on.
func (p *draft) each(from, column int, f func(x float64, k int) float64) {
	for i := from; i < len(p.lines); i++ {
		p.cell(i, column, digits(f(p.number(i, column), i-firstRow)))
	}
}

func (p *draft) key(table, line string) {
	p.file = strings.Replace(p.file, "["+table+"]\n", "["+table+"]\n"+line+"\n", 1)
}

func digits(x float64) string { return strconv.FormatFloat(x, 'g', 9, 64) }

// between draws from lo to hi, evenly in its logarithm.
func (p *draft) between(lo, hi float64) float64 { return lo * math.Pow(hi/lo, p.rnd.Float64()) }

func (p *draft) sign() float64 { return math.Copysign(1, p.rnd.Float64()-0.5) }

// Sizes are those that matter to a fit; far below them none of this can be seen, nor does it harm. The input of flap moves
// by 0.55 deg (standard deviation), its output by 0.2 deg, its sensor's noise is 0.015 deg.
//
// A Way is one way to spoil a log: its signals before the run, or else the log.
type Way struct {
	Name string
	Want string // the flaw that names it, or words of the error that does; empty for the good log
	// Bent tells that the plant behind the log is no longer linear, or no longer the rig's.
	Bent bool

	before func(p *draft) Element // nil: nothing
	after  func(p *draft)
}

const (
	cT = iota
	cU
	cY
	_
	cD
)

// Ways lists all of them, the good log first.
func Ways() []Way {
	return []Way{
		{Name: "none", Want: ""},
		{Name: "rows lost", Want: data.FlawGap, after: func(p *draft) { i := p.somewhere(); p.lines = slices.Delete(p.lines, i, i+1+p.rnd.IntN(50)) }},
		{Name: "row twice", Want: data.FlawRepeat, after: func(p *draft) { i := p.somewhere(); p.lines = slices.Insert(p.lines, i, p.lines[i]) }},
		{Name: "stamp twice", Want: data.FlawRepeat, after: func(p *draft) {
			i := p.somewhere()
			p.lines = slices.Insert(p.lines, i, p.lines[i])
			p.cell(i, cU, "0.123")
		}},
		{Name: "rows swapped", Want: data.FlawBackward, after: func(p *draft) { i := p.somewhere(); p.lines[i], p.lines[i+3] = p.lines[i+3], p.lines[i] }},
		{Name: "clock set back", Want: data.FlawBackward, after: func(p *draft) {
			back := p.between(0.1, 100)
			p.each(p.somewhere(), cT, func(t float64, _ int) float64 { return t - back })
		}},
		{Name: "clock set on by part of a row", Want: data.FlawShortStep, after: func(p *draft) {
			part := (0.6 + 0.3*p.rnd.Float64()) * p.rig.Period
			p.each(p.somewhere(), cT, func(t float64, _ int) float64 { return t - part })
		}},
		{Name: "daylight saving", Want: data.FlawHour, after: func(p *draft) {
			at, by := p.somewhere(), time.Duration(p.sign())*time.Hour
			for i := firstRow; i < len(p.lines); i++ {
				stamp := time.Date(2025, 3, 30, 1, 0, 0, 0, time.UTC).Add(time.Duration(i-firstRow) * time.Duration(1e9*p.rig.Period))
				if i >= at {
					stamp = stamp.Add(by)
				}
				p.cell(i, cT, stamp.Format("2006-01-02 15:04:05.000"))
			}
		}},
		{Name: "late stamps", Want: data.FlawJitter, after: func(p *draft) {
			for range 20 {
				i := p.somewhere()
				p.cell(i, cT, digits(p.number(i, cT)+(0.03+0.4*p.rnd.Float64())*p.rig.Period))
			}
		}},
		{Name: "coarse stamps", Want: data.FlawCoarse, after: func(p *draft) {
			p.each(firstRow, cT, func(t float64, _ int) float64 { return math.Floor(t*10+1e-6) / 10 })
		}},
		{Name: "stamps in ms", Want: data.FlawClock, after: func(p *draft) {
			p.each(firstRow, cT, func(_ float64, k int) float64 { return float64(k) * 1000 * p.rig.Period })
			p.lines[1] = strings.Replace(p.lines[1], "t,", "t [ms],", 1)
		}},
		{Name: "another period", Want: "but [log] sample_period is", after: func(p *draft) {
			f := 1 + p.sign()*p.between(0.01, 0.5)
			p.each(firstRow, cT, func(t float64, _ int) float64 { return f * t })
		}},
		{Name: "period changes", Want: "the period changes", after: func(p *draft) {
			i := p.somewhere()
			start, f := p.number(i, cT), 1+p.between(0.05, 0.4)
			p.each(i, cT, func(t float64, _ int) float64 { return start + f*(t-start) })
			p.file = strings.Replace(p.file, "sample_period = 0.01\n", "", 1)
		}},
		{Name: "two clocks", Want: data.FlawClocks, after: func(p *draft) {
			rate := p.sign() * p.between(2, 20) / float64(len(p.lines))
			was := slices.Clone(p.lines)
			for i := firstRow; i < len(p.lines); i++ {
				from := strings.Split(was[min(len(was)-1, firstRow+int(math.Round(float64(i-firstRow)/(1+rate))))], ",")
				p.cell(i, cU, from[cU])
				p.cell(i, cD, from[cD])
			}
		}},
		{Name: "slow telemetry", Want: data.FlawTelemetry, after: func(p *draft) {
			p.key("log", fmt.Sprintf("controller_period = %g", p.rig.Period/float64(2+p.rnd.IntN(20))))
		}},
		{Name: "cell lost", Want: data.FlawMissing, after: func(p *draft) {
			p.cell(p.somewhere(), p.rnd.IntN(5), []string{"", "NaN", "null", "inf"}[p.rnd.IntN(4)])
		}},
		{Name: "spike", Want: data.FlawSpike, after: func(p *draft) {
			i := p.somewhere()
			p.cell(i, cY, digits(p.number(i, cY)+p.sign()*p.between(2, 5)))
		}},
		{Name: "sensor stuck", Want: data.FlawStuck, after: func(p *draft) {
			i := p.somewhere()
			for k := range 30 + p.rnd.IntN(100) {
				p.cell(i+k, cY, digits(p.number(i, cY)))
			}
		}},
		{Name: "trip", Want: data.FlawTrip, after: func(p *draft) {
			for i := p.somewhere(); i < len(p.lines); i++ {
				p.cell(i, cY, "13.7")
				p.cell(i, cU, "0")
			}
		}},
		{Name: "trip without limits", Want: data.FlawIdle, after: func(p *draft) {
			p.file = strings.Replace(p.file, "output = [-8.0, 12.0]\n", "", 1)
			at := 3 * p.rnd.Float64()
			for i := p.somewhere(); i < len(p.lines); i++ {
				p.cell(i, cY, digits(p.number(i, cY)+5))
				p.cell(i, cU, digits(at))
			}
		}},
		{Name: "input beyond limits", Want: data.FlawBeyond, after: func(p *draft) { p.cell(p.somewhere(), cU, digits(1+p.sign()*p.between(17, 40))) }},
		{Name: "input beyond its rate", Want: data.FlawRate, after: func(p *draft) { p.key("limits", "input_rate = 60.0") }},
		{Name: "input clipped", Want: data.FlawSaturated, before: func(p *draft) Element {
			p.rig.InputLimits[1] = p.rig.U0 + p.between(0.5, 0.9)
			return nil
		}},
		{Name: "coarse output", Want: data.FlawQuantised, before: func(p *draft) Element { p.rig.Resolution = p.between(0.02, 0.1); return nil }},
		{Name: "few levels of output", Want: data.FlawFew, before: func(p *draft) Element { p.rig.Resolution = p.between(0.18, 0.3); return nil }},
		{Name: "drift", Want: data.FlawDrift, after: func(p *draft) {
			slope := p.sign() * p.between(1, 4) / float64(len(p.lines))
			p.each(firstRow, cY, func(y float64, k int) float64 { return y + slope*float64(k) })
		}},
		{Name: "dead zone", Bent: true, Want: data.FlawDeadZone, before: func(p *draft) Element { return DeadZone(p.between(0.05, 0.25), p.rig.U0) }},
		{Name: "play", Bent: true, Want: data.FlawStiction, before: func(p *draft) Element { return Play(p.between(0.05, 0.45), p.rig.U0) }},
		{Name: "friction", Bent: true, Want: data.FlawStiction, before: func(p *draft) Element { return Friction(p.between(0.2, 0.4)) }},
		{Name: "limit cycle", Bent: true, Want: data.FlawCycle, before: func(p *draft) Element {
			clear(p.s.Dither)
			return DeadZone(p.between(0.4, 0.8), p.rig.U0)
		}},
		{Name: "hum", Want: data.FlawPeriodic, before: func(p *draft) Element {
			hz, size, phase := p.between(22, 38), p.between(3, 8)*p.rig.SensorNoise, 6*p.rnd.Float64()
			for k := range p.s.Noise {
				p.s.Noise[k] += size * math.Sin(2*math.Pi*hz*float64(k)*p.rig.Period+phase)
			}
			return nil
		}},
		{Name: "folded mains", Want: data.FlawAlias, before: func(p *draft) Element {
			size, phase := p.between(1, 4)*p.rig.SensorNoise, 6*p.rnd.Float64()
			hz := []float64{60, 120, 180}[p.rnd.IntN(3)]
			for k := range p.s.Noise {
				p.s.Noise[k] += size * math.Sin(2*math.Pi*hz*float64(k)*p.rig.Period+phase)
			}
			return nil
		}},
		{Name: "input never moves", Want: "in every row", after: func(p *draft) { p.each(firstRow, cU, func(float64, int) float64 { return 0.8 }) }},
		{Name: "dither never moves", Want: data.FlawConstant, after: func(p *draft) { p.each(firstRow, cD, func(float64, int) float64 { return 0.5 }) }},
		{Name: "pieces", Want: data.FlawShort, after: func(p *draft) {
			i := p.somewhere()
			p.lines = slices.Delete(p.lines, i, i+5)
			j := i + 3 + p.rnd.IntN(data.MinSegment-3)
			p.lines = slices.Delete(p.lines, j, j+5)
		}},
		{Name: "header again", Want: data.FlawHeader, after: func(p *draft) { p.lines = slices.Insert(p.lines, p.somewhere(), p.lines[1]) }},
		{Name: "last line cut", Want: data.FlawCut, after: func(p *draft) {
			last := p.lines[len(p.lines)-1]
			p.lines[len(p.lines)-1] = last[:1+p.rnd.IntN(strings.LastIndexByte(last, ',')-1)]
		}},
		{Name: "text", Want: "is no number", after: func(p *draft) {
			p.cell(p.somewhere(), cU+p.rnd.IntN(4), []string{"ERR", "1.2.3", "--1", "1e", "0x1p3", "O.5"}[p.rnd.IntN(6)])
		}},
		{Name: "number too large", Want: "is too large", after: func(p *draft) { p.cell(p.somewhere(), cU+p.rnd.IntN(2), []string{"1e999", "-4e400"}[p.rnd.IntN(2)]) }},
		{Name: "cells lost", Want: "cells where 5 belong", after: func(p *draft) {
			i := p.somewhere()
			p.lines[i] = p.lines[i][:strings.LastIndexByte(p.lines[i], ',')]
		}},
		{Name: "decimal commas", Want: "cells where 5 belong", after: func(p *draft) {
			i := p.somewhere()
			p.cell(i, cY, "1,5")
		}},
		{Name: "column renamed", Want: "no such column", after: func(p *draft) { p.lines[1] = strings.Replace(p.lines[1], "y", "y1", 1) }},
	}
}

// Named tells whether what reading made of the log, its flaws or its error, names what was done to it.
func (w Way) Named(e *data.Experiment, err error) bool {
	switch {
	case err != nil:
		return w.Want != "" && strings.Contains(err.Error(), w.Want)
	case w.Want == "":
		return len(e.Flaws) == 0
	}
	return slices.ContainsFunc(e.Flaws, func(f data.Flaw) bool { return f.Name == w.Want })
}

// Make spoils a log of the rig flap, of so many rows, as seed draws it: log and rig file. The same seed gives the same bytes.
func (w Way) Make(rows int, seed uint64) (log, file string, err error) {
	flap, _ := demorig.ByName("flap")
	p := &draft{rnd: rand.New(rand.NewPCG(7, seed)), rig: flap, s: flap.Signals(rows, seed), file: flap.File()}
	f := func(u, _ float64) float64 { return u }
	if w.before != nil {
		if g := w.before(p); g != nil {
			f = g
		}
	}
	trace, err := Bent(p.rig, p.s, f)
	if err != nil {
		return "", "", err
	}
	var b strings.Builder
	if err := p.rig.WriteTrace(&b, p.s, trace, seed); err != nil {
		return "", "", err
	}
	p.lines = strings.Split(strings.TrimSuffix(b.String(), "\n"), "\n")
	if w.after != nil {
		w.after(p)
	}
	return strings.Join(p.lines, "\n"), p.file, nil
}
