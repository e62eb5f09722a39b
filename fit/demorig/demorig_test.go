package demorig

import (
	"math"
	"testing"
)

// Every rig must stay up over its whole log for any seed, with its input off
// the limits most of the time, or its log would not be what it says.
func TestStopgapHoldsEveryRig(t *testing.T) {
	for _, r := range All() {
		for seed := range uint64(20) {
			s := r.Signals(r.Rows, seed)
			trace, err := r.Simulate(s)
			if err != nil {
				t.Fatal(err)
			}
			if trace.Tripped >= 0 {
				t.Errorf("%s, seed %d: trips at sample %d", r.Name, seed, trace.Tripped)
				continue
			}
			var at, su, sy float64
			for k, u := range trace.U {
				if u <= r.InputLimits[0] || u >= r.InputLimits[1] {
					at++
				}
				su += (u - r.U0) * (u - r.U0)
				sy += (trace.Y[k] - r.Y0) * (trace.Y[k] - r.Y0)
			}
			if at > 0.01*float64(r.Rows) {
				t.Errorf("%s, seed %d: input at its limits in %g of %d samples", r.Name, seed, at, r.Rows)
			}
			if seed == 0 {
				t.Logf("%s: sd of u %.3g, of y %.3g", r.Name, math.Sqrt(su/float64(r.Rows)), math.Sqrt(sy/float64(r.Rows)))
			}
		}
	}
}
