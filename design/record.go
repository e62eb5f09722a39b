package design

import (
	"fmt"
	"math"
	"math/rand/v2"

	"steadyrig/data"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// A Test is what moves a simulated rig beside its disturbances.
type Test struct {
	Rows int // of the record
	Seed uint64
	// Step is the size of reference steps up and down, units of output; 0: the spec's. NoStep leaves them out.
	Step   float64
	NoStep bool
	Hold   int // rows between reference steps; 0: three settling times
	// Probe is the amplitude of a binary probe at the plant input, units of input; 0: none. It may change sign every
	// ProbeHold rows; 0: every 5.
	Probe     float64
	ProbeHold int
}

// defaultProbeHold is the number of rows that a probe holds where a Test does not say.
const defaultProbeHold = 5

// A Record is what a simulated rig's log holds, row by row, absolute values in the units of the log: Input[k] acts
// from Output[k] on. After a trip the slices end with the row that tripped.
type Record struct {
	Period                           float64 // s
	Input, Output, Reference, Dither []float64
	Tripped                          int // the row at which the output left its limits; -1: none did
	Warnings                         []string
}

// Simulate runs the loops on the model's own plant, with the disturbances as identified, and returns what a logger
// would have written. Draws depend on the seed only. It panics where the loops hold no inner controller.
func (l *Loops) Simulate(model *ident.Model, rig *data.Rig, t Test) (*Record, error) {
	p, err := newProblem(model, l.Asked(rig))
	if err != nil {
		return nil, err
	}
	if math.Abs(l.SamplePeriod-p.period) > 1e-9*p.period {
		return nil, fmt.Errorf("the loops run at a sample period of %g s, the rig file's [loop] at %g s: make them agree", l.SamplePeriod, p.period)
	}
	law := l.LTI()
	if l.pointMissing {
		law.U0, law.Y0 = p.point.Input, p.point.Output
	}
	if l.InputLimits == nil {
		law.InputLimits = *rig.Limits.Input
	}
	if err := law.Validate(); err != nil {
		return nil, fmt.Errorf("the loops cannot run: %w", err)
	}
	if t.Rows <= 0 {
		return nil, fmt.Errorf("a log of %d rows: want one or more", t.Rows)
	}
	if t.Step == 0 {
		t.Step = p.spec.step
	}
	if t.NoStep {
		t.Step = 0
	}
	if t.Hold <= 0 {
		t.Hold = max(1, int(3*p.spec.settling/l.SamplePeriod))
	}
	if t.ProbeHold <= 0 {
		t.ProbeHold = defaultProbeHold
	}
	rec := &Record{Period: l.SamplePeriod, Tripped: -1}
	run := lti.Run{
		Plant: model.TF(), Period: l.SamplePeriod, ComputeDelay: p.compute, Law: law, Steps: t.Rows,
		Reference: make([]float64, t.Rows), Dither: make([]float64, t.Rows),
	}
	if p.output != nil {
		run.Trip = *rig.Limits.Output
	}
	rnd := rand.New(rand.NewPCG(t.Seed, 0))
	e, probe := make([]float64, t.Rows), 1.0
	for k := range t.Rows {
		if k%t.ProbeHold == 0 {
			probe = float64(2*rnd.IntN(2) - 1)
		}
		run.Dither[k] = t.Probe * probe
		run.Reference[k] = law.Y0
		if k/t.Hold%2 == 1 {
			run.Reference[k] += t.Step
		}
		e[k] = model.Noise.SD * rnd.NormFloat64()
	}
	if model.Noise.SamplePeriod == l.SamplePeriod {
		shape, err := model.Colour()
		if err != nil {
			return nil, err
		}
		run.Innovations, run.Shape = e, &shape
	} else {
		run.Noise = e
		rec.Warnings = append(rec.Warnings, fmt.Sprintf("the noise was identified at a sample period of %g s, the loops run at %g s: it acts as white sensor noise here",
			model.Noise.SamplePeriod, l.SamplePeriod))
	}
	trace, err := run.Simulate()
	if err != nil {
		return nil, err
	}
	n := len(trace.U)
	rec.Input, rec.Output, rec.Reference, rec.Dither = trace.U, trace.Y, run.Reference[:n], run.Dither[:n]
	rec.Tripped = trace.Tripped
	return rec, nil
}
