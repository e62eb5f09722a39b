package design

import (
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"
	"testing"

	"gonum.org/v1/gonum/stat"

	"steadyrig/data"
	"steadyrig/ident"
)

// Without steps and probe, input and output of a record spread as the integral of their spectra says (FirstClosure,
// which knows no simulator): white noise through a stable loop, standard theory, e.g. Åström & Wittenmark,
// Computer-Controlled Systems, 3rd ed., ch. 10.
func TestRecordSpreadsAsItsSpectraSay(t *testing.T) {
	r := testRigs()[1]
	model, rig := r.model(t), r.rig()
	l, err := Design(context.Background(), model, rig, Options{Plants: 40})
	if refused := (*ident.RefusedError)(nil); err != nil && !errors.As(err, &refused) {
		t.Fatal(err) // forty plants are too few for a promise; the loops are there
	}
	const rows = 60000
	rec, err := l.Simulate(model, rig, Test{Rows: rows, Seed: 1, NoStep: true})
	if err != nil {
		t.Fatal(err)
	}
	if rec.Tripped >= 0 || len(rec.Output) != rows {
		t.Fatalf("%d rows, tripped at %d", len(rec.Output), rec.Tripped)
	}
	check := func(name string, got, want float64) {
		// A standard deviation from rows/100 independent stretches (the loop forgets within a hundred rows, three
		// seconds): relative error 1/sqrt(2·600) = 3 %; four of that.
		if math.Abs(got/want-1) > 0.12 {
			t.Errorf("%s spreads by %.4g, its spectrum says %.4g", name, got, want)
		}
	}
	check("input", stat.StdDev(rec.Input[2000:], nil), l.FirstClosure.ExpectedSD.Input)
	check("output", stat.StdDev(rec.Output[2000:], nil), l.FirstClosure.ExpectedSD.Output)

	again, err := l.Simulate(model, rig, Test{Rows: rows, Seed: 1, NoStep: true})
	if err != nil {
		t.Fatal(err)
	}
	other, err := l.Simulate(model, rig, Test{Rows: rows, Seed: 2, NoStep: true})
	if err != nil {
		t.Fatal(err)
	}
	if !slices.Equal(rec.Output, again.Output) || slices.Equal(rec.Output, other.Output) {
		t.Error("records must depend on the seed, and on nothing else")
	}
}

// A probe that takes all of the actuator for seconds ends the record at the row that tripped. (A step alone does not:
// the outer limits keep it inside.)
func TestRecordEndsAtTheTrip(t *testing.T) {
	r := testRigs()[1]
	model, rig := r.model(t), r.rig()
	l, err := Design(context.Background(), model, rig, Options{Plants: 40})
	if refused := (*ident.RefusedError)(nil); err != nil && !errors.As(err, &refused) {
		t.Fatal(err)
	}
	rec, err := l.Simulate(model, rig, Test{Rows: 4000, Seed: 1, Probe: 24, ProbeHold: 200})
	if err != nil {
		t.Fatal(err)
	}
	last := len(rec.Output) - 1
	if rec.Tripped != last || last < 10 || last == 3999 {
		t.Fatalf("tripped at row %d of %d", rec.Tripped, len(rec.Output))
	}
	if y := rec.Output[last]; y > -6 && y < 6 {
		t.Errorf("the last row reads %g, inside the limits ±6", y)
	}
}

// Loops of the user's own may leave out what the rig file says: operating point and limits. The record is the same.
func TestRecordTakesWhatTheRigFileSays(t *testing.T) {
	r := testRigs()[2] // far from zero
	model, rig := r.model(t), r.rig()
	rig.OperatingPoint = &data.OperatingPoint{Input: r.point.Input, Output: r.point.Output}
	text := func(more string) string {
		return fmt.Sprintf(`{"schema": %q, "sample_period": %g, "inner": {"discrete": {"numerator": [-10], "denominator": [1]}}%s}`, LoopsSchema, r.period, more)
	}
	var records []*Record
	for _, more := range []string{"", `, "operating_point": {"input": 40, "output": 80}, "input_limits": [0, 100]`} {
		l, err := ReadLoops(strings.NewReader(text(more)), "own.json")
		if err != nil {
			t.Fatal(err)
		}
		rec, err := l.Simulate(model, rig, Test{Rows: 200, Seed: 1, Probe: 80, ProbeHold: 3})
		if err != nil {
			t.Fatal(err)
		}
		records = append(records, rec)
	}
	a, b := records[0], records[1]
	if !slices.Equal(a.Input, b.Input) || !slices.Equal(a.Output, b.Output) {
		t.Error("the record depends on whether the loops or the rig file give operating point and limits")
	}
	if lo, hi := slices.Min(a.Input), slices.Max(a.Input); lo != 0 || hi != 100 {
		t.Errorf("a probe of the whole range moves the input from %g to %g, want its limits 0 and 100", lo, hi)
	}
}
