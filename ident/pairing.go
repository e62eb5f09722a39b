package ident

import (
	"context"
	"fmt"
	"math"
	"slices"

	"steadyrig/fit"
)

// pairingGain is the gain in BIC from which the other pairing is believed: odds
// of 20 to 1. Two far zeros imitate an advance of one row, so that the wrong
// pairing loses little but their two parameters.
const pairingGain = 6

// pairing refuses logs whose output answers to the input of the next row: then
// a plant of the same poles, with no more zeros, fits clearly better with the
// input moved up by one row.
//
// Moved up, the input of a well paired log gives away the output that it
// answers to, u = -K y, so a model that can undo the move by other means would
// win. Those means are a relative degree of one, another pole, a zero in the
// right half-plane; they are left out. And such an answer within the row shows
// by itself, as a direct term from input to output against the plant's gain.
func (c *chooser) pairing(ctx context.Context, recs []fit.Record, ranked []*candidate, workers int) error {
	best := ranked[0]
	if best.fit.Delay > c.p.Period || c.scope.base > 0 {
		return nil
	}
	if c.answersWithinRow(recs, lead(best.fit)) {
		return nil
	}
	moved := make([]fit.Record, len(recs))
	for i, r := range recs {
		n := len(r.Y)
		moved[i] = r.Rows(0, n-1)
		moved[i].U = r.U[1:]
	}
	p, err := fit.NewPredictor(moved, c.p.Period, c.scope.delay[1])
	if err != nil {
		return nil
	}
	sc := c.scope
	sc.freeDelay, sc.mustDelay, sc.base, sc.delay = false, false, 0, [2]float64{}
	late, err := newChooser(p, moved, sc, workers)
	if err != nil {
		return nil
	}
	late.reach = math.Inf(1) // the best here may be one that does not count
	var list []structure
	for n := max(2, sc.minPoles, best.poles-1); n <= best.poles; n++ {
		for m := sc.minZeros; m <= min(n-2, best.zeros, sc.maxZeros); m++ {
			list = append(list, structure{poles: n, zeros: m, colour: best.colour, integrators: min(best.integrators, n)})
		}
	}
	if err := late.try(ctx, list, nil, nil); err != nil {
		return err
	}
	for _, cand := range late.ranked() {
		// Criteria per row, since a row is lost.
		gain := (best.bic/float64(c.p.Rows()) - cand.bic/float64(p.Rows())) * float64(p.Rows())
		if slices.ContainsFunc(cand.fit.Num.Roots(), func(z complex128) bool { return real(z) > 0 }) {
			continue
		}
		if gain > pairingGain && math.Signbit(lead(cand.fit)) == math.Signbit(lead(best.fit)) {
			return &RefusedError{
				What: fmt.Sprintf("the columns are paired one row off: the output answers to the input of the row after (BIC %.0f better)", gain),
				Do:   `the input is logged a row late: set input_row = "before" in [log], or shift the column`,
			}
		}
	}
	return nil
}

// directOrder is the order of the long model in which the direct term is
// looked for, directSure by how many deviations it must show.
const (
	directOrder = 16
	directSure  = 3
)

// answersWithinRow reports whether the output of a row and the input of the
// same row have a direct relation of the sign of feedback, opposite to gain.
func (c *chooser) answersWithinRow(recs []fit.Record, gain float64) bool {
	m, _ := fit.FitARX(recs, fit.ARXOptions{NA: directOrder, NB: directOrder, Delay: 0})
	if m == nil {
		return false
	}
	t := m.B[0] / math.Sqrt(m.Cov.At(directOrder, directOrder))
	return t < -directSure && gain > 0 || t > directSure && gain < 0
}
