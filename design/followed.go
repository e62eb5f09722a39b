package design

import (
	"math"

	"steadyrig/data"
	"steadyrig/fit/lti"
)

// MarginsOn returns the margins at the plant input, both loops closed, about a plant that need not be the one that the
// loops were designed for: one that has moved. g's delay is that from the logged input. It panics where there is no inner
// controller; the error says why the plant cannot be sampled.
func (l *Loops) MarginsOn(g lti.TF, rig *data.Rig) (*Margins, error) {
	compute := l.ComputeDelay
	if rig.Log.InputStamp == data.InputComputed {
		compute = 0 // the logged input's delay holds it
	}
	law := l.LTI()
	t, err := lti.NewTwoLoops(g, compute, law)
	if err != nil {
		return nil, err
	}
	g.Delay += compute
	n, axis := openPoles(l.SamplePeriod, g, &law.Inner, law.Outer)
	nyquist := math.Pi / l.SamplePeriod
	return marginsFile(lti.LoopMargins(t.LoopAtInput, 1e-4*nyquist, nyquist, n, axis...), stable(t)), nil
}
