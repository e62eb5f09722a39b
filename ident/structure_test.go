package ident

import (
	"context"
	"math"
	"testing"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/demorig"
)

// Starts are compared on part of a long log: in one piece, or the constants of
// several hide the slow disturbance and the plant takes it in.
func TestSlowDisturbanceOfALongLog(t *testing.T) {
	if testing.Short() {
		t.Skip("fits four long logs")
	}
	for _, seed := range []uint64{6001, 6003, 3008, 3025} {
		e, rig := experiment(t, rigNamed(t, "flap"), seed)
		m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
		if err != nil {
			t.Fatal(err)
		}
		if s := m.Evidence.Structures[0]; s.Poles != 3 || s.Zeros != 1 || s.Colour != 1 {
			t.Errorf("seed %d: %d poles, %d zeros, %d disturbance poles, want 3, 1, 1", seed, s.Poles, s.Zeros, s.Colour)
		}
	}
}

// Seeds on which the search once stayed where it started: 618 rows whose long
// models give no usable poles of the right order, found from plainer
// structures; and a disturbance's pole that sat in the plant under a zero.
func TestSearchLeavesLocalOptima(t *testing.T) {
	if testing.Short() {
		t.Skip("fits four logs")
	}
	for _, c := range []struct {
		rig         string
		rows        int
		seed        uint64
		poles, zero int
	}{{"mast", 618, 1005, 3, 0}, {"mast", 618, 1049, 3, 0}, {"mast", 618, 1057, 3, 0}, {"flap", 6000, 1004, 3, 1}} {
		r := rigNamed(t, c.rig)
		r.Rows = c.rows
		e, rig := experiment(t, r, c.seed)
		m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
		if err != nil {
			t.Fatal(err)
		}
		if len(m.Poles) != c.poles || len(m.Zeros) != c.zero {
			t.Errorf("%s, seed %d: %d poles, %d zeros, want %d, %d", c.rig, c.seed, len(m.Poles), len(m.Zeros), c.poles, c.zero)
		}
	}
}

// What is set aside on the glance's rows must be nothing that would have won: the
// search that sets nothing aside is the oracle.
func TestNothingOutOfReachWouldWin(t *testing.T) {
	if testing.Short() {
		t.Skip("searches twice on logs of five rigs")
	}
	for _, r := range demorig.All() {
		r.Rows = 4500
		e, rig := experiment(t, r, 77)
		recs, period, err := records([]*data.Experiment{e})
		if err != nil {
			t.Fatal(err)
		}
		best := func(reach float64) (*candidate, int) {
			p, err := fit.NewPredictor(recs, period, maxDelaySamples*period)
			if err != nil {
				t.Fatal(err)
			}
			c, err := newChooser(p, recs, scopeOf(rig, period), 0)
			if err != nil {
				t.Fatal(err)
			}
			c.reach = reach
			ranked, err := c.choose(context.Background(), nil)
			if err != nil {
				t.Fatal(err)
			}
			return ranked[0], len(ranked)
		}
		got, few := best(glanceReach)
		want, all := best(math.Inf(1))
		if got.structure != want.structure || math.Abs(got.bic-want.bic) > 0.5 {
			t.Errorf("%s: %v at %.2f, want %v at %.2f", r.Name, got.structure, got.bic, want.structure, want.bic)
		}
		if few >= all {
			t.Errorf("%s: none of %d structures was set aside", r.Name, all)
		}
	}
}

// On these logs, of 22 among 400 of 600 rows, the lag of the actuator of mast
// is told from a delay by odds of 2 to 15 against it.
func TestALagIsNoDelay(t *testing.T) {
	if testing.Short() {
		t.Skip("fits four logs")
	}
	r, _ := demorig.ByName("mast")
	r.Rows = 600
	for _, seed := range []uint64{1302, 1317, 1323, 1325} {
		e, rig := experiment(t, r, seed)
		m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
		if err != nil {
			t.Fatal(err)
		}
		if len(m.Poles) != 3 || m.Plant.Delay != 0 {
			t.Errorf("seed %d: %d poles and a delay of %.3g s, want three poles and none", seed, len(m.Poles), m.Plant.Delay)
		}
	}
}
