package design

import (
	"fmt"
	"math"
	"strings"

	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// expectedSD returns the standard deviations of input and measured output in closed loop about a plant under all that the
// fit saw beside the input.
func (p *problem) expectedSD(pl *plant, g *gridLoop) SignalPair {
	var u, y, uLast, yLast float64
	for j := range g.d {
		c := g.d[j]*pl.a[j] + g.k[j]*pl.b[j]
		c2 := real(c)*real(c) + imag(c)*imag(c)
		k, d := g.k[j], g.d[j]
		uv := (real(k)*real(k) + imag(k)*imag(k)) * p.noise.shape[j] / c2
		yv := (real(d)*real(d) + imag(d)*imag(d)) * p.noise.shape[j] / c2
		if j > 0 {
			h := (p.omega[j] - p.omega[j-1]) / 2 * p.period / math.Pi
			u += h * (uv + uLast)
			y += h * (yv + yLast)
		}
		uLast, yLast = uv, yv
	}
	return SignalPair{Input: math.Sqrt(u), Output: math.Sqrt(y)}
}

// firstClosure says how to close the loops for the first time.
func (p *problem) firstClosure(l *Loops, seed uint64) {
	law := l.LTI()
	f := &FirstClosure{ExpectedSD: p.expectedSD(&p.nominal, p.lawGrid(law))}
	in := p.inputTrip(law, f.ExpectedSD.Input)
	f.Trip.Input = &in
	out := [2]float64{math.Inf(-1), math.Inf(1)}
	if p.output != nil {
		out = [2]float64{law.Y0 + p.output[0], law.Y0 + p.output[1]}
	}
	if q := l.Promise; q != nil && q.Recoverable > 0 {
		// Beyond the offset from which the loops come back, waiting only makes it worse.
		least := math.Max(1.5*p.spec.step*(1+p.spec.overshoot), 4*f.ExpectedSD.Output)
		r := math.Max(q.Recoverable, least)
		out[0], out[1] = math.Max(out[0], law.Y0-r), math.Min(out[1], law.Y0+r)
	}
	if !math.IsInf(out[0], 0) && !math.IsInf(out[1], 0) {
		f.Trip.Output = &out
	}
	recoverable := 0.0
	if l.Promise != nil {
		recoverable = l.Promise.Recoverable
	}
	f.Stop = p.stopLevels(law, f.ExpectedSD, recoverable)
	f.HandOver = p.tryHandOver(law, stream(seed, streamNoise, 0))
	f.Faults = p.faults(law, f, stream(seed, streamNoise, 0))
	ui, yo := unitOf(p.rig.Units.Input), unitOf(p.rig.Units.Output)
	handOver := "Hand over to the inner loop alone: v = 0, outer loop off, the inner controller's past filled with what was sent."
	if h := f.HandOver; h != nil {
		handOver = "Hand over to the inner loop alone, outer loop off, v held where the rule leaves it. " + h.Rule +
			fmt.Sprintf(" Simulated under noise, both loops closed at once: in the settling time before it the input moves by up to %.3g%s and the output by up to %.3g%s, in the one after it by %.3g and %.3g, later by %.3g and %.3g.",
				h.Before.Input, ui, h.Before.Output, yo, h.After.Input, h.After.Output, h.Noise.Input, h.Noise.Output)
	}
	f.Order = []string{
		"Check sign, columns and limits with the actuator off: move the output by hand and watch the input that would be sent.",
		fmt.Sprintf("Set the trips (first_closure.trip), one person at the stop; bring the rig to its operating point, input %.4g%s, output %.4g%s, under the stopgap law.", law.U0, ui, law.Y0, yo),
		handOver,
		fmt.Sprintf("Watch for a hundred settling times. With both loops the standard deviation will be near %.3g%s at the input and %.3g%s at the output; with the inner one alone the output also wanders slowly.",
			f.ExpectedSD.Input, ui, f.ExpectedSD.Output, yo),
		"Close the outer loop with its limits at a tenth of outer_limits, then widen them to the full ones.",
		fmt.Sprintf("Step the reference by a tenth of the spec's step, then by half, then by %.4g%s; compare with the report before each.", p.spec.step, yo),
	}
	f.Cautions = []string{
		"Somebody could be hurt: guards on, nobody within reach, a person at the stop, local codes and licensed practice first.",
		"Twice the expected deviation, or a tone that grows, means that the rig is not the plant of the model: stop and recheck.",
		"The promise covers the plants that the data allow, at this operating point and sample period, and no others.",
	}
	for _, x := range f.Faults {
		f.Cautions = append(f.Cautions, x.words(ui, yo, f))
	}
	if f.Stop.Note != "" {
		f.Cautions = append(f.Cautions, strings.TrimSpace(f.Stop.Note))
	}
	l.FirstClosure = f
}

// A trip on the input: as far from the operating point as noise and half as much again as the step take it, and
// inside the limits, as an input that is held within them never passes them.
const (
	tripDeviations = 6.0
	tripStep       = 1.5
	tripInside     = 0.02 // of the input's range
)

// inputTrip returns absolute levels of the input at which a first closure trips; sd is its expected deviation.
func (p *problem) inputTrip(law *lti.Law, sd float64) [2]float64 {
	v := p.newProver(law)
	moves := 0.0
	for _, step := range []float64{p.spec.step, -p.spec.step} {
		if _, err := v.run(p.model.TF(), p.steps(p.model.TF()), step, false, 0); err != nil {
			continue
		}
		for _, u := range v.trace.U {
			moves = math.Max(moves, math.Abs(u-law.U0))
		}
	}
	half, inset := tripDeviations*sd+tripStep*moves, tripInside*(p.limits[1]-p.limits[0])
	return [2]float64{
		math.Max(law.U0-half, math.Min(p.limits[0]+inset, law.U0+p.input[0]/2)),
		math.Min(law.U0+half, math.Max(p.limits[1]-inset, law.U0+p.input[1]/2)),
	}
}

func unitOf(u string) string {
	if u == "" {
		return ""
	}
	return " " + u
}

// Limits behind the warnings of conclude.
const (
	fewestDeviations = 3.0  // deviations of the input inside its limits
	betweenNoted     = 0.01 // of the step, by which the output goes further between the samples than at them
)

// conclude sets verdict and warnings from margins, noise and model.
func (p *problem) conclude(l *Loops) {
	warn := func(format string, args ...any) { l.Warnings = append(l.Warnings, fmt.Sprintf(format, args...)) }
	weak := len(p.doubts) > 0
	if p.model.Verdict == ident.Weak {
		weak = true
		warn("the model's verdict is weak, and so is what rests on it")
	}
	if !p.noise.split {
		warn("the noise could not be split into sensor noise and input disturbance: the whole prediction error counts as sensor noise in input_noise")
	}
	for _, text := range p.samplingCosts(l) {
		warn("%s", text)
	}
	if f := l.FirstClosure; f != nil {
		side := math.Min(-p.input[0], p.input[1])
		if sd := f.ExpectedSD.Input; fewestDeviations*sd > side {
			weak = true
			warn("noise and disturbance move the input by %.3g (standard deviation), a third or more of what its limits leave on the lesser side (%.3g): it will saturate; the promise counts the plants that trip by that, but its overshoot and settling are those without noise", sd, side)
		}
		if p.output != nil {
			room := math.Min(-p.output[0], p.output[1])
			if sd := f.ExpectedSD.Output; 4*sd+p.spec.step > room {
				warn("four deviations of the output (%.3g each) and the step come near the trip limits", sd)
			}
		}
	}
	held := l.Margins == nil || l.Margins.PlantInput.Stable
	if !held {
		warn("the loops do not hold the nominal plant: it is lost from any disturbance, and margins and figures of the closed loop mean nothing")
	}
	if q := l.Promise; held && q != nil && q.Overshoot.Worst > q.atSamples.Worst+betweenNoted {
		warn("between the samples the worst plant overshoots the step by %.3g of it, at the samples by %.3g: they do not show all that the output does", q.Overshoot.Worst, q.atSamples.Worst)
	}
	if q := l.Promise; q != nil && len(q.UnstablePoles) > 1 {
		warn("the drawn plants differ in their number of unstable poles: each was judged with its own")
	}
	if m := l.Margins; m != nil && m.InnerAlone != nil && m.InnerAlone.Stable && m.InnerAlone.PeakSensitivity > 3 {
		warn("the inner loop alone has a peak sensitivity of %.3g: little is left when the outer loop is clamped or off", m.InnerAlone.PeakSensitivity)
	}
	if weak && l.Verdict == Sound {
		l.Verdict = Weak
	}
}
