package data

import (
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
)

// A good log spoilt at random places: the flaw must be named, by a Flaw or by an error, in 95 of 100 logs.
func TestCorruptedLogs(t *testing.T) {
	const rows, each = 2000, 12
	g := plainRig()
	limits := plainRig()
	limits.Limits = Limits{Input: &[2]float64{-4.5, 4.5}, Output: &[2]float64{-2, 2}}
	type lines []string
	somewhere := func(rnd *rand.Rand) int { return 200 + rnd.IntN(rows-400) } // line number
	cell := func(line string, column int, x string) string {
		c := strings.Split(line, ",")
		c[column] = x
		return strings.Join(c, ",")
	}
	for _, c := range []struct {
		name string // of the flaw, or words of the error
		rig  *Rig
		want string
		f    func(rnd *rand.Rand, l lines) lines
	}{
		{"rows lost", g, FlawGap, func(rnd *rand.Rand, l lines) lines {
			i := somewhere(rnd)
			return slices.Delete(l, i, i+1+rnd.IntN(50))
		}},
		{"row twice", g, FlawRepeat, func(rnd *rand.Rand, l lines) lines {
			i := somewhere(rnd)
			return slices.Insert(l, i, l[i])
		}},
		{"stamp twice", g, FlawRepeat, func(rnd *rand.Rand, l lines) lines {
			i := somewhere(rnd)
			return slices.Insert(l, i, cell(l[i], 1, "0.123"))
		}},
		{"rows swapped", g, FlawBackward, func(rnd *rand.Rand, l lines) lines {
			i := somewhere(rnd)
			l[i], l[i+3] = l[i+3], l[i]
			return l
		}},
		{"late stamps", g, FlawJitter, func(rnd *rand.Rand, l lines) lines {
			for range 20 {
				i := somewhere(rnd)
				l[i] = cell(l[i], 0, text(float64(i-1)/100+0.0002+0.004*rnd.Float64()))
			}
			return l
		}},
		{"cell lost", g, FlawMissing, func(rnd *rand.Rand, l lines) lines {
			i := somewhere(rnd)
			l[i] = cell(l[i], rnd.IntN(4), []string{"", "NaN", "null"}[rnd.IntN(3)])
			return l
		}},
		{"spike", g, FlawSpike, func(rnd *rand.Rand, l lines) lines {
			i := somewhere(rnd)
			l[i] = cell(l[i], 2, text(math.Copysign(4+10*rnd.Float64(), rnd.Float64()-0.5)))
			return l
		}},
		{"sensor stuck", g, FlawStuck, func(rnd *rand.Rand, l lines) lines {
			i := somewhere(rnd)
			y := strings.Split(l[i], ",")[2]
			for k := range 30 + rnd.IntN(100) {
				l[i+k] = cell(l[i+k], 2, y)
			}
			return l
		}},
		{"trip", limits, FlawTrip, func(rnd *rand.Rand, l lines) lines {
			for i := somewhere(rnd); i < len(l); i++ {
				l[i] = cell(cell(l[i], 2, "3.1"), 1, "0")
			}
			return l
		}},
		{"input beyond limits", limits, FlawBeyond, func(rnd *rand.Rand, l lines) lines {
			i := somewhere(rnd)
			l[i] = cell(l[i], 1, "5.2")
			return l
		}},
		{"input clipped", g, FlawSaturated, func(rnd *rand.Rand, l lines) lines {
			top := 0.3 + 0.5*rnd.Float64()
			for i := 1; i < len(l); i++ {
				var u float64
				fmt.Sscan(strings.Split(l[i], ",")[1], &u)
				l[i] = cell(l[i], 1, text(min(u, top)))
			}
			return l
		}},
		{"output on a coarse grid", g, FlawQuantised, func(rnd *rand.Rand, l lines) lines {
			step := 0.05 + 0.1*rnd.Float64()
			for i := 1; i < len(l); i++ {
				var y float64
				fmt.Sscan(strings.Split(l[i], ",")[2], &y)
				l[i] = cell(l[i], 2, fmt.Sprintf("%.5f", step*math.Round(y/step)))
			}
			return l
		}},
		{"drift", g, FlawDrift, func(rnd *rand.Rand, l lines) lines {
			slope := math.Copysign(0.0005+0.001*rnd.Float64(), rnd.Float64()-0.5)
			for i := 1; i < len(l); i++ {
				var y float64
				fmt.Sscan(strings.Split(l[i], ",")[2], &y)
				l[i] = cell(l[i], 2, text(y+slope*float64(i)))
			}
			return l
		}},
		{"header again", g, FlawHeader, func(rnd *rand.Rand, l lines) lines { return slices.Insert(l, somewhere(rnd), l[0]) }},
		{"last line cut", g, FlawCut, func(rnd *rand.Rand, l lines) lines {
			last := l[len(l)-1]
			return append(l[:len(l)-1], last[:1+rnd.IntN(strings.LastIndexByte(last, ',')-1)])
		}},
		{"text", g, "is no number", func(rnd *rand.Rand, l lines) lines {
			i := somewhere(rnd)
			l[i] = cell(l[i], 1+rnd.IntN(3), []string{"ERR", "1.2.3", "0,5", "--1", "1e", "0x1p3"}[rnd.IntN(2)])
			return l
		}},
		{"cells lost", g, "cells where 4 belong", func(rnd *rand.Rand, l lines) lines {
			i := somewhere(rnd)
			l[i] = l[i][:strings.LastIndexByte(l[i], ',')]
			return l
		}},
	} {
		named := 0
		for seed := range uint64(each) {
			rnd := rand.New(rand.NewPCG(7, seed))
			l := lines(strings.Split(strings.TrimSuffix(newPlainLog(rows).csv(), "\n"), "\n"))
			exp, err := ReadLog(strings.NewReader(strings.Join(c.f(rnd, l), "\n")), "log.csv", c.rig)
			if err != nil {
				checkParseError(t, err, "log.csv: ")
				if strings.Contains(err.Error(), c.want) {
					named++
				}
				continue
			}
			checkExperiment(t, exp)
			if slices.Contains(flawNames(exp), c.want) {
				named++
			} else {
				t.Logf("%s, seed %d: %+v", c.name, seed, exp.Flaws)
			}
		}
		if float64(named) < 0.95*each {
			t.Errorf("%s: named in %d of %d logs", c.name, named, each)
		}
	}
}
