package design

import (
	"context"
	"errors"
	"math"
	"slices"
	"testing"

	"gonum.org/v1/gonum/stat"

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
