package data_test

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"steadyrig/data"
	"steadyrig/fit/demorig"
)

// A spoilt log: the lines of a good one, its rig file and what drew it, changed in one way.
type spoilt struct {
	rnd   *rand.Rand
	rig   demorig.Rig
	s     demorig.Signals
	lines []string // line 1 is a comment, line 2 the names
	file  string   // the rig file
}

const firstRow = 2 // index into spoilt.lines

// somewhere returns the index of a line with rows enough on both sides.
func (p *spoilt) somewhere() int { return firstRow + 400 + p.rnd.IntN(len(p.lines)-firstRow-1000) }

// cell sets a cell of a line; columns t, u, y, r, d.
func (p *spoilt) cell(line, column int, x string) {
	c := strings.Split(p.lines[line], ",")
	c[column] = x
	p.lines[line] = strings.Join(c, ",")
}

func (p *spoilt) number(line, column int) float64 {
	x, _ := strconv.ParseFloat(strings.Split(p.lines[line], ",")[column], 64)
	return x
}

// each changes a column from a line on.
func (p *spoilt) each(from, column int, f func(x float64, k int) float64) {
	for i := from; i < len(p.lines); i++ {
		p.cell(i, column, digits(f(p.number(i, column), i-firstRow)))
	}
}

func (p *spoilt) key(table, line string) {
	p.file = strings.Replace(p.file, "["+table+"]\n", "["+table+"]\n"+line+"\n", 1)
}

func digits(x float64) string { return strconv.FormatFloat(x, 'g', 9, 64) }

// between draws from lo to hi, evenly in its logarithm.
func (p *spoilt) between(lo, hi float64) float64 { return lo * math.Pow(hi/lo, p.rnd.Float64()) }

func (p *spoilt) sign() float64 { return math.Copysign(1, p.rnd.Float64()-0.5) }

// Sizes are those that matter to a fit; far below them none of this can be seen, nor does it harm. The input of flap moves
// by 0.55 deg (standard deviation), its output by 0.2 deg, its sensor's noise is 0.015 deg.
//
// A corruption is one way to spoil a log of flap: its signals before the run, or else the log. want is the flaw that
// names it, or words of the error that does.
type corruption struct {
	name, want string
	before     func(p *spoilt) element // nil: nothing
	after      func(p *spoilt)
}

const (
	cT = iota
	cU
	cY
	_
	cD
)

var corruptions = []corruption{
	{name: "none", want: ""},
	{name: "rows lost", want: data.FlawGap, after: func(p *spoilt) { i := p.somewhere(); p.lines = slices.Delete(p.lines, i, i+1+p.rnd.IntN(50)) }},
	{name: "row twice", want: data.FlawRepeat, after: func(p *spoilt) { i := p.somewhere(); p.lines = slices.Insert(p.lines, i, p.lines[i]) }},
	{name: "stamp twice", want: data.FlawRepeat, after: func(p *spoilt) {
		i := p.somewhere()
		p.lines = slices.Insert(p.lines, i, p.lines[i])
		p.cell(i, cU, "0.123")
	}},
	{name: "rows swapped", want: data.FlawBackward, after: func(p *spoilt) { i := p.somewhere(); p.lines[i], p.lines[i+3] = p.lines[i+3], p.lines[i] }},
	{name: "clock set back", want: data.FlawBackward, after: func(p *spoilt) {
		back := p.between(0.1, 100)
		p.each(p.somewhere(), cT, func(t float64, _ int) float64 { return t - back })
	}},
	{name: "clock set on by part of a row", want: data.FlawShortStep, after: func(p *spoilt) {
		part := (0.6 + 0.3*p.rnd.Float64()) * p.rig.Period
		p.each(p.somewhere(), cT, func(t float64, _ int) float64 { return t - part })
	}},
	{name: "daylight saving", want: data.FlawHour, after: func(p *spoilt) {
		at, by := p.somewhere(), time.Duration(p.sign())*time.Hour
		for i := firstRow; i < len(p.lines); i++ {
			stamp := time.Date(2025, 3, 30, 1, 0, 0, 0, time.UTC).Add(time.Duration(i-firstRow) * time.Duration(1e9*p.rig.Period))
			if i >= at {
				stamp = stamp.Add(by)
			}
			p.cell(i, cT, stamp.Format("2006-01-02 15:04:05.000"))
		}
	}},
	{name: "late stamps", want: data.FlawJitter, after: func(p *spoilt) {
		for range 20 {
			i := p.somewhere()
			p.cell(i, cT, digits(p.number(i, cT)+(0.03+0.4*p.rnd.Float64())*p.rig.Period))
		}
	}},
	{name: "coarse stamps", want: data.FlawCoarse, after: func(p *spoilt) {
		p.each(firstRow, cT, func(t float64, _ int) float64 { return math.Floor(t*10+1e-6) / 10 })
	}},
	{name: "stamps in ms", want: data.FlawClock, after: func(p *spoilt) {
		p.each(firstRow, cT, func(_ float64, k int) float64 { return float64(k) * 1000 * p.rig.Period })
		p.lines[1] = strings.Replace(p.lines[1], "t,", "t [ms],", 1)
	}},
	{name: "another period", want: "but [log] sample_period is", after: func(p *spoilt) {
		f := 1 + p.sign()*p.between(0.01, 0.5)
		p.each(firstRow, cT, func(t float64, _ int) float64 { return f * t })
	}},
	{name: "period changes", want: "the period changes", after: func(p *spoilt) {
		i := p.somewhere()
		start, f := p.number(i, cT), 1+p.between(0.05, 0.4)
		p.each(i, cT, func(t float64, _ int) float64 { return start + f*(t-start) })
		p.file = strings.Replace(p.file, "sample_period = 0.01\n", "", 1)
	}},
	{name: "two clocks", want: data.FlawClocks, after: func(p *spoilt) {
		rate := p.sign() * p.between(2, 20) / float64(len(p.lines))
		was := slices.Clone(p.lines)
		for i := firstRow; i < len(p.lines); i++ {
			from := strings.Split(was[min(len(was)-1, firstRow+int(math.Round(float64(i-firstRow)/(1+rate))))], ",")
			p.cell(i, cU, from[cU])
			p.cell(i, cD, from[cD])
		}
	}},
	{name: "slow telemetry", want: data.FlawTelemetry, after: func(p *spoilt) {
		p.key("log", fmt.Sprintf("controller_period = %g", p.rig.Period/float64(2+p.rnd.IntN(20))))
	}},
	{name: "cell lost", want: data.FlawMissing, after: func(p *spoilt) {
		p.cell(p.somewhere(), p.rnd.IntN(5), []string{"", "NaN", "null", "inf"}[p.rnd.IntN(4)])
	}},
	{name: "spike", want: data.FlawSpike, after: func(p *spoilt) {
		i := p.somewhere()
		p.cell(i, cY, digits(p.number(i, cY)+p.sign()*p.between(2, 5)))
	}},
	{name: "sensor stuck", want: data.FlawStuck, after: func(p *spoilt) {
		i := p.somewhere()
		for k := range 30 + p.rnd.IntN(100) {
			p.cell(i+k, cY, digits(p.number(i, cY)))
		}
	}},
	{name: "trip", want: data.FlawTrip, after: func(p *spoilt) {
		for i := p.somewhere(); i < len(p.lines); i++ {
			p.cell(i, cY, "13.7")
			p.cell(i, cU, "0")
		}
	}},
	{name: "trip without limits", want: data.FlawIdle, after: func(p *spoilt) {
		p.file = strings.Replace(p.file, "output = [-8.0, 12.0]\n", "", 1)
		at := 3 * p.rnd.Float64()
		for i := p.somewhere(); i < len(p.lines); i++ {
			p.cell(i, cY, digits(p.number(i, cY)+5))
			p.cell(i, cU, digits(at))
		}
	}},
	{name: "input beyond limits", want: data.FlawBeyond, after: func(p *spoilt) { p.cell(p.somewhere(), cU, digits(1+p.sign()*p.between(17, 40))) }},
	{name: "input beyond its rate", want: data.FlawRate, after: func(p *spoilt) { p.key("limits", "input_rate = 60.0") }},
	{name: "input clipped", want: data.FlawSaturated, before: func(p *spoilt) element {
		p.rig.InputLimits[1] = p.rig.U0 + p.between(0.5, 0.9)
		return nil
	}},
	{name: "coarse output", want: data.FlawQuantised, before: func(p *spoilt) element { p.rig.Resolution = p.between(0.05, 0.3); return nil }},
	{name: "drift", want: data.FlawDrift, after: func(p *spoilt) {
		slope := p.sign() * p.between(1, 4) / float64(len(p.lines))
		p.each(firstRow, cY, func(y float64, k int) float64 { return y + slope*float64(k) })
	}},
	{name: "dead zone", want: data.FlawDeadZone, before: func(p *spoilt) element { return deadZone(p.between(0.05, 0.25), p.rig.U0) }},
	{name: "play", want: data.FlawStiction, before: func(p *spoilt) element { return play(p.between(0.05, 0.45), p.rig.U0) }},
	{name: "friction", want: data.FlawStiction, before: func(p *spoilt) element { return friction(p.between(0.2, 0.4)) }},
	{name: "limit cycle", want: data.FlawCycle, before: func(p *spoilt) element {
		clear(p.s.Dither)
		return deadZone(p.between(0.4, 0.8), p.rig.U0)
	}},
	{name: "hum", want: data.FlawPeriodic, before: func(p *spoilt) element {
		hz, size, phase := p.between(15, 45), p.between(2, 6)*p.rig.SensorNoise, 6*p.rnd.Float64()
		for k := range p.s.Noise {
			p.s.Noise[k] += size * math.Sin(2*math.Pi*hz*float64(k)*p.rig.Period+phase)
		}
		return nil
	}},
	{name: "folded mains", want: data.FlawAlias, before: func(p *spoilt) element {
		size, phase := p.between(1, 4)*p.rig.SensorNoise, 6*p.rnd.Float64()
		hz := []float64{60, 120, 180}[p.rnd.IntN(3)]
		for k := range p.s.Noise {
			p.s.Noise[k] += size * math.Sin(2*math.Pi*hz*float64(k)*p.rig.Period+phase)
		}
		return nil
	}},
	{name: "input never moves", want: "in every row", after: func(p *spoilt) { p.each(firstRow, cU, func(float64, int) float64 { return 0.8 }) }},
	{name: "dither never moves", want: data.FlawConstant, after: func(p *spoilt) { p.each(firstRow, cD, func(float64, int) float64 { return 0.5 }) }},
	{name: "pieces", want: data.FlawShort, after: func(p *spoilt) {
		i := p.somewhere()
		p.lines = slices.Delete(p.lines, i, i+5)
		j := i + 3 + p.rnd.IntN(data.MinSegment-3)
		p.lines = slices.Delete(p.lines, j, j+5)
	}},
	{name: "header again", want: data.FlawHeader, after: func(p *spoilt) { p.lines = slices.Insert(p.lines, p.somewhere(), p.lines[1]) }},
	{name: "last line cut", want: data.FlawCut, after: func(p *spoilt) {
		last := p.lines[len(p.lines)-1]
		p.lines[len(p.lines)-1] = last[:1+p.rnd.IntN(strings.LastIndexByte(last, ',')-1)]
	}},
	{name: "text", want: "is no number", after: func(p *spoilt) {
		p.cell(p.somewhere(), cU+p.rnd.IntN(4), []string{"ERR", "1.2.3", "--1", "1e", "0x1p3", "O.5"}[p.rnd.IntN(6)])
	}},
	{name: "number too large", want: "is too large", after: func(p *spoilt) { p.cell(p.somewhere(), cU+p.rnd.IntN(2), []string{"1e999", "-4e400"}[p.rnd.IntN(2)]) }},
	{name: "cells lost", want: "cells where 5 belong", after: func(p *spoilt) {
		i := p.somewhere()
		p.lines[i] = p.lines[i][:strings.LastIndexByte(p.lines[i], ',')]
	}},
	{name: "decimal commas", want: "cells where 5 belong", after: func(p *spoilt) {
		i := p.somewhere()
		p.cell(i, cY, "1,5")
	}},
	{name: "column renamed", want: "no such column", after: func(p *spoilt) { p.lines[1] = strings.Replace(p.lines[1], "y", "y1", 1) }},
}

// A good log spoilt in every way at random places: it is named, by a Flaw or by an error, in 95 of 100 logs and more.
// The table lists what was said of each kind, and how often.
func TestCorruptedLogs(t *testing.T) {
	const rows = 4000
	logs := logsPerRig(t, 1)
	flap := byName(t, "flap")
	all, allNamed := 0, 0
	for _, c := range corruptions {
		t.Run(c.name, func(t *testing.T) {
			said := map[string]int{}
			named := 0
			for seed := range uint64(logs) {
				p := &spoilt{rnd: rand.New(rand.NewPCG(7, seed)), rig: flap, s: flap.Signals(rows, seed), file: flap.File()}
				var f element
				if c.before != nil {
					f = c.before(p)
				}
				if f == nil {
					f = func(u, _ float64) float64 { return u }
				}
				trace := bentUnder(t, p.rig, p.s, f)
				log, _ := writeLog(t, p.rig, p.s, trace, seed)
				p.lines = strings.Split(strings.TrimSuffix(log, "\n"), "\n")
				if c.after != nil {
					c.after(p)
				}
				rig, err := data.ReadRig(strings.NewReader(p.file), "rig.toml")
				if err != nil {
					t.Fatalf("%s, seed %d: %v", c.name, seed, err)
				}
				exp, err := data.ReadLog(strings.NewReader(strings.Join(p.lines, "\n")), "log.csv", rig)
				var flaws []string
				if err != nil {
					var fault *data.ParseError
					if !errors.As(err, &fault) || strings.ContainsAny(err.Error(), "\n\r") || !strings.HasPrefix(err.Error(), "log.csv: ") {
						t.Fatalf("%s, seed %d: no error of one line: %v", c.name, seed, err)
					}
					flaws = []string{"error: " + err.Error()}
					if c.want != "" && strings.Contains(err.Error(), c.want) {
						flaws = []string{c.want}
					}
				} else {
					data.CheckExperiment(t, exp)
					flaws = names(exp.Flaws)
				}
				for _, f := range flaws {
					said[f]++
				}
				if c.want == "" && len(flaws) == 0 || slices.Contains(flaws, c.want) {
					named++
				} else {
					t.Logf("%s, seed %d: %q", c.name, seed, flaws)
				}
			}
			all += logs
			allNamed += named
			var list []string
			for f, n := range said {
				if f != c.want {
					list = append(list, fmt.Sprintf("%s %d", f, n))
				}
			}
			slices.Sort(list)
			t.Logf("%-30s %3d of %3d named; also %s", c.name, named, logs, strings.Join(list, ", "))
			if float64(named) < 0.95*float64(logs) {
				t.Errorf("%s: named in %d of %d logs", c.name, named, logs)
			}
		})
	}
	t.Logf("%d of %d named", allNamed, all)
}
