package data_test

import (
	"bytes"
	"fmt"
	"math/rand/v2"
	"os"
	"strconv"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
)

// An element bends what the actuator is told into what acts; y is the output of the row before.
type element func(u, y float64) float64

// bent runs a demo rig's stopgap loop with an element between its input and its plant, by lti's sampled plant and law.
func bent(t testing.TB, r demorig.Rig, rows int, seed uint64, f element) (demorig.Signals, lti.Trace) {
	t.Helper()
	s := r.Signals(rows, seed)
	plant, err := lti.ZOH(r.Truth, r.Period)
	if err != nil {
		t.Fatal(err)
	}
	n := plant.Order()
	law := r.Law().Start()
	x, next := make([]float64, n), make([]float64, n)
	var trace lti.Trace
	before := r.Y0
	for k := range rows {
		y := r.Y0
		for i := range n {
			y += plant.C.At(0, i) * x[i]
		}
		u := law.StepProbe(s.Reference[k], y+s.Noise[k], s.Dither[k])
		trace.U, trace.Y = append(trace.U, u), append(trace.Y, law.Read())
		w := f(u, before) - r.U0 + s.Disturbance[k]
		before = y
		for i := range n {
			next[i] = plant.B.At(i, 0) * w
			for j := range n {
				next[i] += plant.A.At(i, j) * x[j]
			}
		}
		x, next = next, x
	}
	return s, trace
}

func deadZone(half, centre float64) element {
	return func(u, _ float64) float64 { v := u - centre; return centre + v - min(max(v, -half), half) }
}

func play(half float64) element {
	at, started := 0.0, false
	return func(u, _ float64) float64 {
		if !started {
			at, started = u, true
		}
		at = min(max(at, u-half), u+half)
		return at
	}
}

func friction(force float64) element {
	last := 0.0
	return func(u, y float64) float64 {
		v := y - last
		last = y
		if v > 0 {
			return u - force
		} else if v < 0 {
			return u + force
		}
		return u
	}
}

func TestExplore2(t *testing.T) {
	if os.Getenv("EXPLORE") == "" {
		t.Skip()
	}
	seeds, _ := strconv.Atoi(os.Getenv("EXPLORE"))
	for _, r := range demorig.All() {
		if r.Name == "reactor" {
			continue
		}
		for _, scale := range []float64{0.1, 0.3, 1} {
			for name, el := range map[string]func() element{
				"dead zone": func() element { return deadZone(scale*spreadU[r.Name], r.U0) },
				"play":      func() element { return play(scale * spreadU[r.Name]) },
				"friction":  func() element { return friction(scale * spreadU[r.Name]) },
			} {
				count := map[string]int{}
				detail := ""
				for seed := range uint64(seeds) {
					s, trace := bent(t, r, 6000, seed, el())
					e, _, err := r.Read(s, trace, seed)
					if err != nil {
						count["error "+err.Error()]++
						continue
					}
					for _, f := range e.Flaws {
						count[f.Name]++
						if f.Name == data.FlawDeadZone || f.Name == data.FlawStiction || f.Name == data.FlawCycle {
							detail = f.Detail
						}
					}
				}
				t.Log(r.Name, name, scale, count, detail)
			}
		}
	}
}

var spreadU = map[string]float64{"hover": 0.15, "mast": 4, "flap": 1, "slider": 1}

func TestExplore(t *testing.T) {
	if os.Getenv("EXPLORE") == "" {
		t.Skip()
	}
	seeds, _ := strconv.Atoi(os.Getenv("EXPLORE"))
	_ = rand.Uint64
	for _, r := range demorig.All() {
		count := map[string]int{}
		for seed := range uint64(seeds) {
			e, _, err := r.Experiment(seed)
			if err != nil {
				t.Fatal(err)
			}
			for _, f := range e.Flaws {
				count[f.Name]++
				if count[f.Name] < 3 {
					t.Logf("%s %d %+v", r.Name, seed, f)
				}
			}
		}
		t.Log(r.Name, count)
	}
}

var _ = fmt.Sprint
var _ = bytes.NewReader
var _ = strings.NewReader
var _ data.Flaw
