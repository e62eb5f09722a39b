package ident

import (
	"context"
	"errors"
	"math"
	"os"
	"strconv"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/fittest/spoilt"
)

// No spoilt log gives a wrong model that is called sound. Wrong is another number of poles, or a true pole more than twice
// the half width of its 95 % interval away: four deviations, which chance takes one normal pole in 16 000 to. A rig bent
// into another plant has no true poles, so that a sound verdict alone is wrong.
//
// Every test run fits one log of six of the ways, structure given; a study STEADYRIG_STUDY logs of each, structure
// searched for.
func TestSpoiltLogsAreNeverWronglySound(t *testing.T) {
	const rows = 4500 // long enough that intervals are not drawn
	ways := spoilt.Ways()
	logs, given := 1, false
	if study := os.Getenv("STEADYRIG_STUDY"); study != "" {
		n, err := strconv.Atoi(study)
		if err != nil {
			t.Fatal(err)
		}
		logs = n
	} else if testing.Short() {
		t.Skip("fits six logs")
	} else {
		given = true
		var few []spoilt.Way
		for _, w := range ways {
			switch w.Name {
			case "spike", "trip without limits", "two clocks", "play", "input clipped", "daylight saving":
				few = append(few, w)
			}
		}
		ways = few
	}
	truth := rigNamed(t, "flap").Truth.Den.Roots()
	counts := map[string]int{}
	for _, w := range ways {
		verdicts := map[string]int{}
		for seed := range uint64(logs) {
			log, file, err := w.Make(rows, seed)
			if err != nil {
				t.Fatal(err)
			}
			rig, err := data.ReadRig(strings.NewReader(file), "rig.toml")
			if err != nil {
				t.Fatal(err)
			}
			e, err := data.ReadLog(strings.NewReader(log), "log.csv", rig)
			if err != nil {
				verdicts["not read"]++
				continue
			}
			if given {
				poles, zeros := 3, 1
				rig.Model.Order, rig.Model.Zeros = &poles, &zeros
			}
			m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
			var refused *RefusedError
			if err != nil && !errors.As(err, &refused) {
				t.Fatalf("%s, seed %d: %v", w.Name, seed, err)
			}
			verdicts[m.Verdict]++
			if m.Verdict != Sound {
				continue
			}
			if fault := faulty(m, truth, w.Bent); fault != "" {
				verdicts["wrong and sound"]++
				t.Errorf("%s, seed %d: sound, but %s; %v", w.Name, seed, fault, m.Warnings)
			}
		}
		for v, n := range verdicts {
			counts[v] += n
		}
		t.Logf("%-30s %v", w.Name, verdicts)
	}
	t.Logf("in all %v", counts)
}

// faulty says what is wrong with a model of a plant with the true poles, or nothing.
func faulty(m *Model, truth []complex128, bent bool) string {
	switch {
	case bent:
		return "the rig is not linear"
	case len(m.Poles) != len(truth):
		return strconv.Itoa(len(m.Poles)) + " poles"
	}
	for _, p := range truth {
		best := m.Poles[0]
		for _, q := range m.Poles {
			if math.Hypot(q.Re-real(p), q.Im-imag(p)) < math.Hypot(best.Re-real(p), best.Im-imag(p)) {
				best = q
			}
		}
		for _, c := range []struct {
			value, truth float64
			bound        Interval
		}{{best.Re, real(p), best.Re95}, {best.Im, imag(p), best.Im95}} {
			if half := math.Max(c.bound.Hi-c.value, c.value-c.bound.Lo); math.Abs(c.truth-c.value) > 2*half {
				return strconv.FormatFloat(c.value, 'g', 4, 64) + " for " + strconv.FormatFloat(c.truth, 'g', 4, 64)
			}
		}
	}
	return ""
}
