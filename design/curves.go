package design

import (
	"fmt"
	"math"
	"math/cmplx"

	"steadyrig/data"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// Responses are runs of the saturating loop after one step of the spec, noise-free: row 0 is the nominal plant, the
// others are drawn from the model. Absolute values in the units of the log.
type Responses struct {
	Time      []float64 // s
	Reference []float64
	Output    [][]float64 // between the samples too: Output[i] belongs to Time
	Input     [][]float64 // held between the samples
}

// fineness is the number of points per sample period in Responses.
const fineness = 4

// StepResponses simulates the spec's reference step on the nominal plant and on plants drawn with the seed, for two
// settling times. It panics where the loops hold no inner controller.
func (l *Loops) StepResponses(model *ident.Model, rig *data.Rig, plants int, seed uint64) (*Responses, error) {
	p, err := newProblem(model, l.Asked(rig))
	if err != nil {
		return nil, err
	}
	law := l.LTI()
	steps := min(max(int(math.Ceil(2*p.spec.settling/p.period)), 20), 5000)
	start := steps / 20
	n := steps + start
	ref := make([]float64, n)
	for k := range ref {
		ref[k] = law.Y0
		if k >= start {
			ref[k] += p.spec.step
		}
	}
	fine := fineness
	if n*fine > 8000 {
		fine = 1
	}
	out := &Responses{Time: make([]float64, n*fine), Reference: make([]float64, n*fine)}
	for i := range out.Time {
		out.Time[i] = (float64(i)/float64(fine) - float64(start)) * p.period
		out.Reference[i] = ref[i/fine]
	}
	for _, g := range append([]lti.TF{model.TF()}, model.Draw(plants, stream(seed, streamBounds, 1))...) {
		run := lti.Run{Plant: g, Period: p.period, ComputeDelay: p.compute, Law: law, Steps: n, Reference: ref, Fine: fine}
		t, err := run.Simulate()
		if err != nil {
			return nil, fmt.Errorf("simulating a step: %w", err)
		}
		y := t.Fine
		if fine == 1 {
			y = t.YTrue
		}
		u := make([]float64, n*fine)
		for i := range u {
			u[i] = t.U[min(i/fine, len(t.U)-1)]
		}
		for len(y) < n*fine { // it diverged and the run ended early
			y = append(y, math.NaN())
		}
		out.Output, out.Input = append(out.Output, y), append(out.Input, u)
	}
	return out, nil
}

// Curves are frequency responses of the sampled loop at the nominal plant with the range over drawn plants: Lo[i]
// and Hi[i] belong to Omega[i], rad/s.
type Curves struct {
	Omega                      []float64
	S, SLo, SHi                []float64 // |S| at the plant input, both loops closed
	InnerS, InnerSLo, InnerSHi []float64 // |S| of the inner loop alone
	T                          []float64 // |T| at the plant input, both loops closed
	Reference                  []float64 // |y/r|
	NoiseToInput               []float64 // |K S|, units of input per unit of output
}

// Sensitivity computes the curves on the nominal plant and on plants drawn with the seed.
func (l *Loops) Sensitivity(model *ident.Model, rig *data.Rig, plants int, seed uint64) (*Curves, error) {
	p, err := newProblem(model, l.Asked(rig))
	if err != nil {
		return nil, err
	}
	law := l.LTI()
	inner := *law
	inner.Outer, inner.Prefilter = nil, nil
	both, alone := p.lawGrid(law), p.lawGrid(&inner)
	at := func(pl *plant, g *gridLoop, j int) float64 {
		da := g.d[j] * pl.a[j]
		return cmplx.Abs(da / (da + g.k[j]*pl.b[j]))
	}
	c := new(Curves)
	drawn, err := p.plants(plants, stream(seed, streamBounds, 1))
	if err != nil {
		return nil, err
	}
	for j := 1; j < len(p.omega); j++ {
		s, in := at(&p.nominal, both, j), at(&p.nominal, alone, j)
		sLo, sHi, iLo, iHi := s, s, in, in
		for i := range drawn {
			v, w := at(&drawn[i], both, j), at(&drawn[i], alone, j)
			sLo, sHi = math.Min(sLo, v), math.Max(sHi, v)
			iLo, iHi = math.Min(iLo, w), math.Max(iHi, w)
		}
		char := both.d[j]*p.nominal.a[j] + both.k[j]*p.nominal.b[j]
		track := law.Inner.Num.Eval(p.z1[j]) * p.nominal.b[j]
		if law.Outer != nil {
			track *= law.Outer.Num.Eval(p.z1[j])
		}
		if law.Prefilter != nil {
			track *= law.Prefilter.At(p.omega[j])
		}
		c.Omega = append(c.Omega, p.omega[j])
		c.S, c.SLo, c.SHi = append(c.S, s), append(c.SLo, sLo), append(c.SHi, sHi)
		c.InnerS, c.InnerSLo, c.InnerSHi = append(c.InnerS, in), append(c.InnerSLo, iLo), append(c.InnerSHi, iHi)
		c.T = append(c.T, cmplx.Abs(both.k[j]*p.nominal.b[j]/char))
		c.Reference = append(c.Reference, cmplx.Abs(track/char))
		c.NoiseToInput = append(c.NoiseToInput, cmplx.Abs(both.k[j]*p.nominal.a[j]/char))
	}
	return c, nil
}
