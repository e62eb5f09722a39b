package fittest

import (
	"math"
	"math/cmplx"
	"testing"
)

// PoleEstimator estimates the poles, in the z-plane, of a plant of known order from one record.
type PoleEstimator func(u, y []float64, order int) ([]complex128, error)

// Conformance of an estimator: over Trials records of every rig, at Rows and at four times as many rows, the root mean
// square of its poles' errors, each divided by its Cramér-Rao bound, must not exceed Limit for any pole. As the bound
// shrinks with the root of the rows, a biased estimator fails at the longer length if not at the shorter. The estimates
// of a perfect one spread: with 40 trials it exceeds 1.17 once in a hundred times.
type Conformance struct {
	Rows, Trials int
	Seed         uint64
	Limit        float64
	Rigs         []Rig // nil: Rigs()
}

// Check runs the estimator. Rig i is a subtest, from seed Seed + i, which logs what it reached.
func (c Conformance) Check(t *testing.T, estimate PoleEstimator) {
	rigs := c.Rigs
	if rigs == nil {
		rigs = Rigs()
	}
	for i, rig := range rigs {
		t.Run(rig.Name, func(t *testing.T) {
			c := c
			c.Seed += uint64(i)
			for _, rows := range []int{c.Rows, 4 * c.Rows} {
				ratio, err := c.Ratios(rig, rows, estimate)
				if err != nil {
					t.Fatalf("%d rows: %v", rows, err)
				}
				t.Logf("%d rows: error over bound %.2f", rows, ratio)
				for j, v := range ratio {
					if !(v <= c.Limit) {
						t.Errorf("%d rows: pole %.4g: error %.2f times the bound, limit %g", rows, rig.Poles()[j], v, c.Limit)
					}
				}
			}
		})
	}
}

// Ratios returns for each of the rig's poles the root mean square of error over bound.
func (c Conformance) Ratios(rig Rig, rows int, estimate PoleEstimator) ([]float64, error) {
	truth := rig.Poles()
	ratio := make([]float64, len(truth))
	for k := range c.Trials {
		u, y := rig.Record(rows, c.Seed, uint64(k))
		got, err := estimate(u, y, len(truth))
		if err != nil {
			return nil, err
		}
		bounds := rig.PoleBounds(u, y)
		for j, d := range Distances(truth, got) {
			ratio[j] += (d / bounds[j]) * (d / bounds[j]) / float64(c.Trials)
		}
	}
	for j := range ratio {
		ratio[j] = math.Sqrt(ratio[j])
	}
	return ratio, nil
}

// Distances pairs every true pole with an estimated one, nearest pairs first, and returns how far apart they are; +Inf
// for a pole without a partner.
func Distances(truth, got []complex128) []float64 {
	out := make([]float64, len(truth))
	left := append([]complex128(nil), got...)
	open := make([]bool, len(truth))
	for j := range out {
		out[j], open[j] = math.Inf(1), true
	}
	for range min(len(truth), len(got)) {
		bj, bi, best := -1, -1, math.Inf(1)
		for j, z := range truth {
			for i, g := range left {
				if d := cmplx.Abs(z - g); open[j] && d < best {
					bj, bi, best = j, i, d
				}
			}
		}
		if bj < 0 {
			break
		}
		out[bj], open[bj] = best, false
		left = append(left[:bi], left[bi+1:]...)
	}
	return out
}
