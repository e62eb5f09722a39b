package data

import (
	"fmt"
	"math"
	"os"
	"path/filepath"
	"testing"
)

// datasets is the folder of measured logs beside the module; they are not part of it.
const datasets = "../../shared/datasets"

func readMeasured(t *testing.T, path string, log LogColumns) *Experiment {
	t.Helper()
	f, err := os.Open(filepath.Join(datasets, path))
	if err != nil {
		t.Skipf("measured log is not here: %v", err)
	}
	defer f.Close()
	g := &Rig{Log: log}
	exp, err := ReadLog(f, filepath.Base(path), g)
	if err != nil {
		t.Fatal(err)
	}
	for _, w := range exp.Flaws {
		t.Logf("%s %s: %d, line %d: %s; %s", w.Name, w.Column, w.Count, w.Line, w.Detail, w.Effect)
	}
	t.Logf("%s: %d of %d rows, %d segments, period %v, columns %q, %s", exp.File, exp.Used, exp.Rows, len(exp.Segments), exp.Period, exp.Columns, exp.Layout)
	return exp
}

func TestMeasuredLevitation(t *testing.T) {
	for _, c := range []struct {
		name string
		rows int // as the file's own header says
	}{
		{"dataset_chirp_20251217_210058.txt", 3487}, {"dataset_constante_20251217_205611.txt", 2989}, {"dataset_multiescalon_20251217_210203.txt", 3487},
	} {
		exp := readMeasured(t, "maglev_levitador/"+c.name, LogColumns{Time: "t", Input: "u", Output: "y", Reference: "yd"})
		if exp.Rows != c.rows || exp.Period != 0.01 || len(exp.Columns) != 7 {
			t.Errorf("%s: %d rows, period %v, columns %q", c.name, exp.Rows, exp.Period, exp.Columns)
		}
	}
}

// The note beside the log says: uninterrupted levitation from 2.10 s to 34.86 s, 3277 samples; before that the ball lies at
// its stop and is picked up. A step of the output is that of a 10-bit converter over 50 mm: 48.876 um.
func TestMeasuredLevitationWithinLimits(t *testing.T) {
	f, err := os.Open(filepath.Join(datasets, "maglev_levitador/dataset_multiescalon_20251217_210203.txt"))
	if err != nil {
		t.Skipf("measured log is not here: %v", err)
	}
	defer f.Close()
	g := &Rig{Log: LogColumns{Time: "t", Input: "u", Output: "y", Reference: "yd"}, Limits: Limits{Output: &[2]float64{0.001, 0.010}}}
	exp, err := ReadLog(f, "multiescalon.txt", g)
	if err != nil {
		t.Fatal(err)
	}
	if s := exp.Segments[len(exp.Segments)-1]; len(exp.Segments) != 1 || s.Start != 2.10 || len(s.Y) != 3277 {
		t.Errorf("%d segments, the last from %v s, %d rows", len(exp.Segments), s.Start, len(s.Y))
	}
	var step float64
	if _, err := fmt.Sscanf(findFlaw(t, exp, FlawQuantised).Detail, "step %g,", &step); err != nil || math.Abs(step-0.05/1023) > 1e-8 {
		t.Errorf("step %v, %v", step, err)
	}
}

func TestMeasuredFurnace(t *testing.T) {
	for _, name := range []string{"gas-furnace.csv", "gas-furnace_mirror2.csv"} {
		exp := readMeasured(t, "box_jenkins_gas_furnace/"+name, LogColumns{Input: "InputGasRate", Output: "CO2", SamplePeriod: 9})
		var s spread
		for _, seg := range exp.Segments {
			for _, u := range seg.U {
				s.add(u)
			}
		}
		// Number, mean and standard deviation (divisor N) of the input: -0.05683 and 1.070952, published for series J of
		// Box & Jenkins, Time Series Analysis (1976), in a time-series manual that the data set's NOTE.md quotes.
		sd := math.Sqrt(s.s / float64(s.n))
		if s.n != 296 || math.Abs(s.mean+0.05683) > 5e-6 || math.Abs(sd-1.070952) > 5e-7 {
			t.Errorf("%s: input: N %d, mean %v, sd %v", name, s.n, s.mean, sd)
		}
	}
}

func TestMeasuredWithoutHeader(t *testing.T) {
	for _, c := range []struct {
		path          string
		log           LogColumns
		rows, columns int
	}{
		{"daisy_ballbeam/ballbeam.dat", LogColumns{Input: "c1", Output: "c2", SamplePeriod: 0.1}, 1000, 2},
		{"daisy_dryer/dryer.dat", LogColumns{Input: "c1", Output: "c2", SamplePeriod: 0.08}, 1000, 2},
		{"daisy_exchanger/exchanger.dat", LogColumns{Time: "c1", Input: "c2", Output: "c3", SamplePeriod: 1}, 4000, 3},
		{"daisy_CD_player_arm/CD_player_arm.dat", LogColumns{Input: "c1", Output: "c3", SamplePeriod: 1}, 2048, 4},
		{"daisy_robot_arm/robot_arm.dat", LogColumns{Input: "c1", Output: "c2", SamplePeriod: 1}, 1024, 2},
		{"daisy_flutter/flutter.dat", LogColumns{Input: "c1", Output: "c2", SamplePeriod: 1}, 1024, 2},
		{"daisy_heating_system/heating_system.dat", LogColumns{Time: "c1", Input: "c2", Output: "c3"}, 801, 3},
	} {
		exp := readMeasured(t, c.path, c.log)
		if exp.Rows != c.rows || len(exp.Columns) != c.columns {
			t.Errorf("%s: %d rows, %d columns", c.path, exp.Rows, len(exp.Columns))
		}
		if c.log.Time != "" && c.log.SamplePeriod == 0 && exp.Period != 2 {
			t.Errorf("%s: period %v", c.path, exp.Period)
		}
	}
}
