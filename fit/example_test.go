package fit_test

import (
	"fmt"

	"steadyrig/fit"
	"steadyrig/fit/fittest"
)

// An unstable plant in closed loop: the order from the singular values, then the poles with their deviations.
func Example() {
	rig := fittest.Rigs()[0] // one pole at exp(2 * 0.05) = 1.105
	u, y := rig.Record(4000, 1, 1)
	recs := []fit.Record{{U: u, Y: y}}

	state, err := fit.Subspace(recs, fit.SubspaceOptions{})
	if err != nil {
		fmt.Println(err)
		return
	}
	n := len(state.Poles)
	fmt.Printf("order %d, pole %.2f\n", n, real(state.Poles[0]))

	long, err := fit.LongARX(recs)
	if err != nil {
		fmt.Println(err)
		return
	}
	m, err := fit.NullSpace(long, fit.NullSpaceOptions{NA: n, NB: n, NC: n})
	if err != nil {
		fmt.Println(err)
		return
	}
	fmt.Printf("pole %.2f, variance of the pole %.1e\n", real(m.Poles()[0]), m.Cov.At(0, 0))
	// Output:
	// order 1, pole 1.10
	// pole 1.10, variance of the pole 6.7e-06
}
