package design

import (
	"math"
	"testing"

	"steadyrig/fit/lti"
)

// Of the designs of all test rigs: no pair beats the optimal margin, the demands of the yardstick only add up, and where
// the theorem is claimed no drawn plant is lost. Vinnicombe's inequality asin b(P, C) >= asin b(P0, C) - asin nu-gap(P0, P)
// (IEEE Trans. Automatic Control 38 (1993) 1371-1383) binds margins and gaps of drawn plants together.
func TestMeasure(t *testing.T) {
	if testing.Short() {
		t.Skip("measures five designs")
	}
	theorems := 0
	for _, r := range testRigs() {
		l := designed(t, r.name)
		y := l.Yardstick
		if y.Best == nil || !(y.Margin > 0 && y.Margin <= *y.Best && y.MarginInner > 0 && y.MarginInner <= *y.Best) {
			t.Errorf("%s: margins %.6g and %.6g, optimal %v", r.name, y.Margin, y.MarginInner, y.Best)
		}
		before := 1.0
		for _, s := range y.Steps {
			if !(s.Least >= before) {
				t.Errorf("%s: %v", r.name, y.Steps)
			}
			before = s.Least
		}
		if !(before <= y.Pair && y.Reached != nil && y.Least <= *y.Reached && y.Excess == y.Pair/y.Least-1) {
			t.Errorf("%s: %+v", r.name, y)
		}
		if y.Stabilised == Theorem {
			theorems++
			if l.Promise.Stable != y.Plants {
				t.Errorf("%s: a theorem, and %d of %d plants held", r.name, l.Promise.Stable, y.Plants)
			}
		}
		p, err := newProblem(r.model(t), r.rig())
		if err != nil {
			t.Fatal(err)
		}
		law := l.LTI()
		scale := y.InputRange / y.OutputRange
		both := law.Inner.Mul(lti.DTF{Num: law.Outer.Num.Add(law.Outer.Den), Den: law.Outer.Den})
		both.Num = both.Num.Scale(1 / scale)
		for _, g := range p.drawTFs(40, streamBounds, 7) {
			pl, err := p.newPlant(g)
			if err != nil {
				t.Fatal(err)
			}
			gap, _, err := lti.SampledNuGap(p.nominal.scaled(scale, p.period), pl.scaled(scale, p.period))
			// The grid misses a little of a peak between its points.
			if onGrid := p.gapOnGrid(&pl, scale); err != nil || !(onGrid <= gap*(1+1e-9) && onGrid >= 0.98*gap) {
				t.Errorf("%s: nu-gap %.6g, on the grid %.6g (%v)", r.name, gap, onGrid, err)
			}
			b, _ := lti.FeedbackMargin(pl.scaled(scale, p.period), both)
			if !(math.Asin(b) >= math.Asin(y.Margin)-math.Asin(gap)-1e-9) {
				t.Errorf("%s: margin %.6g of a plant %.6g away, %.6g of the nominal one", r.name, b, gap, y.Margin)
			}
		}
		// A sign error is as far off as can be.
		wrong := r.truth
		wrong.Num = wrong.Num.Scale(-1)
		pl, err := p.newPlant(wrong)
		if err != nil {
			t.Fatal(err)
		}
		if gap := p.gapOnGrid(&pl, scale); !(gap > 0.95) {
			t.Errorf("%s: wrong sign, nu-gap %v", r.name, gap)
		}
	}
	if theorems == 0 || theorems == len(testRigs()) {
		t.Errorf("the theorem applies to %d of %d rigs: one branch is not tested", theorems, len(testRigs()))
	}
}
