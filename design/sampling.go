package design

import (
	"fmt"
	"math"
	"math/cmplx"

	"steadyrig/fit/lti"
)

// Sampling says how controllers in s were brought to the sample period and what that costs, and what the period itself
// costs an unstable plant.
type Sampling struct {
	Mapping        string          `json:"mapping,omitempty"`                     // chosen; empty: no controller was in s
	Mappings       []MappingResult `json:"mappings,omitempty"`                    // all that were tried
	ContinuousPeak float64         `json:"continuous_peak_sensitivity,omitempty"` // peak |S| of the controllers in s; 0: no mapping holds the plant
	Period         *PeriodCost     `json:"period,omitempty"`                      // nil: no unstable pole
}

// MappingResult is what one mapping makes of the loop about the nominal plant.
type MappingResult struct {
	Mapping         string  `json:"mapping"`
	Stable          bool    `json:"stable"`
	PeakSensitivity float64 `json:"peak_sensitivity"` // at the plant input, sampled loop
	Mismatch        float64 `json:"mismatch"`         // largest |S sampled - S continuous| up to the Nyquist frequency
	Chosen          bool    `json:"chosen"`
}

// PeriodCost is what the sample period does to the least stable poles of the nominal plant.
type PeriodCost struct {
	PoleTimesPeriod float64 `json:"pole_times_period"`      // of the rightmost pole
	LeastPeak       float64 `json:"least_peak_sensitivity"` // that sampling and compute delay alone force on any controller
	LongestPeriod   float64 `json:"longest_period"`         // s, at which the spec's peak |S| is in reach at all; 0: at none
}

// Mappings, as they are named.
const (
	mapTustin    = "Tustin"
	mapPrewarped = "Tustin, prewarped at crossover"
	mapMatched   = "matched poles and zeros"
	mapStep      = "step-invariant"
	mapRamp      = "ramp-invariant"
)

// mapping maps a continuous controller to a period; crossover (rad/s) is that of the continuous loop.
type mapping struct {
	name string
	of   func(g lti.TF, period, crossover float64) (lti.DTF, error)
}

// mappings in the order in which ties are decided.
var mappings = []mapping{
	{mapTustin, func(g lti.TF, h, _ float64) (lti.DTF, error) { return lti.Tustin(g, h), nil }},
	{mapPrewarped, func(g lti.TF, h, w float64) (lti.DTF, error) { return lti.Prewarped(g, h, w), nil }},
	{mapMatched, func(g lti.TF, h, _ float64) (lti.DTF, error) { return lti.Matched(g, h), nil }},
	{mapStep, func(g lti.TF, h, _ float64) (lti.DTF, error) { return lti.StepInvariant(g, h) }},
	{mapRamp, func(g lti.TF, h, _ float64) (lti.DTF, error) { return lti.RampInvariant(g, h) }},
}

// continuousTF returns the block's continuous form.
func (b *Block) continuousTF() lti.TF {
	up := func(desc []float64) lti.Poly {
		p := make(lti.Poly, len(desc))
		for i, v := range desc {
			p[len(desc)-1-i] = v
		}
		return p
	}
	return lti.TF{Num: up(b.Continuous.Numerator).Trim(), Den: up(b.Continuous.Denominator).Trim()}
}

// mapControllers gives every block of l that has its continuous form alone the discrete form of the mapping under
// which the sampled loop is most like the continuous one: the least of the largest |S - Sc| up to the Nyquist
// frequency, S that of the sampled loop about the nominal plant, Sc that of the same plant and controllers in
// continuous time, delay included. Only mappings that hold the nominal plant count; where none does, the first is taken.
// A controller is judged in its loop and not by itself, since an error counts where S does: Keller & Anderson (1992), A
// new approach to the discretization of continuous-time controllers, IEEE Trans. Automatic Control 37, 214-223. Since
// |S| <= |Sc| + |S - Sc|, the mismatch bounds what the mapping adds to the peak.
func (p *problem) mapControllers(l *Loops) (*Sampling, error) {
	if !l.mapped() {
		return nil, nil
	}
	g := p.model.TF()
	late := g
	late.Delay += p.compute
	at := func(b *Block, w float64) complex128 {
		switch {
		case b == nil:
			return 0
		case b.mapped:
			return b.continuousTF().At(complex(0, w))
		}
		return b.lti(p.period).At(w)
	}
	loop := func(w float64) complex128 { return late.At(complex(0, w)) * at(l.Inner, w) * (1 + at(l.Outer, w)) }
	sc := func(w float64) complex128 { return 1 / (1 + loop(w)) }
	omega := p.omega[1:] // an integrator has no value at 0
	crossover := 0.0
	for _, w := range omega[:len(omega)-1] {
		if cmplx.Abs(loop(w)) >= 1 {
			crossover = w
		}
	}
	out := &Sampling{}
	nyquist := math.Pi / p.period
	out.ContinuousPeak, _ = lti.Peak(sc, omega[0], nyquist)
	best := -1
	var laws []*lti.Law
	for _, m := range mappings {
		if m.name == mapPrewarped && !(crossover > 0) {
			continue
		}
		law, err := p.mapBy(m, l, crossover)
		if err != nil {
			continue // a pole that this mapping cannot carry
		}
		t, err := lti.NewTwoLoops(g, p.compute, law)
		if err != nil {
			return nil, err
		}
		s := func(w float64) complex128 { return 1 / (1 + t.LoopAtInput(w)) }
		r := MappingResult{Mapping: m.name, Stable: stable(t)}
		r.PeakSensitivity, _ = lti.Peak(s, omega[0], nyquist)
		r.Mismatch, _ = lti.Peak(func(w float64) complex128 { return s(w) - sc(w) }, omega[0], nyquist)
		if !(r.Mismatch <= math.MaxFloat64) || !(r.PeakSensitivity <= math.MaxFloat64) {
			continue
		}
		if r.Stable && (best < 0 || r.Mismatch < out.Mappings[best].Mismatch) {
			best = len(laws)
		}
		out.Mappings, laws = append(out.Mappings, r), append(laws, law)
	}
	switch {
	case len(laws) == 0:
		return nil, fmt.Errorf("no mapping brings the controllers in s to a sample period of %g s: give them in z", p.period)
	case best < 0:
		best, out.ContinuousPeak = 0, 0
	}
	law := laws[best]
	out.Mappings[best].Chosen = true
	out.Mapping = out.Mappings[best].Mapping
	for name, d := range map[string]*lti.DTF{"inner": &law.Inner, "outer": law.Outer, "prefilter": law.Prefilter} {
		b := l.block(name)
		if *b != nil && (*b).mapped {
			c := **b
			c.Discrete = Rational{d.Num, d.Den}
			*b = &c
		}
	}
	return out, nil
}

// mapped reports whether a block of the loops has its continuous form alone.
func (l *Loops) mapped() bool {
	for _, b := range []*Block{l.Inner, l.Outer, l.Prefilter} {
		if b != nil && b.mapped {
			return true
		}
	}
	return false
}

// mapBy returns the law with the blocks in s mapped.
func (p *problem) mapBy(m mapping, l *Loops, crossover float64) (*lti.Law, error) {
	law := l.LTI()
	for _, c := range []struct {
		block *Block
		at    *lti.DTF
	}{{l.Inner, &law.Inner}, {l.Outer, law.Outer}, {l.Prefilter, law.Prefilter}} {
		if c.block == nil || !c.block.mapped {
			continue
		}
		d, err := m.of(c.block.continuousTF(), p.period, crossover)
		if err != nil {
			return nil, err
		}
		*c.at = d
	}
	return law, law.Validate()
}

// warning says what the mapping costs, where it costs much; empty otherwise.
func (s *Sampling) warning() string {
	for _, m := range s.Mappings {
		if m.Chosen && m.Stable && m.PeakSensitivity > dearMapping*s.ContinuousPeak {
			return fmt.Sprintf("sampling takes the peak sensitivity of the controllers in s from %.3g to %.3g, mapped by the best of %d rules (%s): design them in z, or shorten the sample period",
				s.ContinuousPeak, m.PeakSensitivity, len(s.Mappings), m.Mapping)
		}
	}
	return ""
}

// dearMapping is the rise of the peak |S| by sampling that is warned of.
const dearMapping = 1.15

// slowestSampling is the product of unstable pole and sample period from which a period is called long. Common practice:
// four samples or more while the mode grows by e.
const slowestSampling = 0.25

// periodCost returns what the period does to the nominal plant, nil without an unstable pole. The least peaks are those
// of a sampled loop with d samples from the output to the first effect of the input it causes, see leastPeak: for one
// pole e^(p T d), Åström (2000) in its sampled form.
func (p *problem) periodCost() *PeriodCost {
	var unstable []complex128
	rightmost := 0.0
	for _, s := range p.nominal.tf.Poles() {
		if real(s) > 0 {
			unstable = append(unstable, s)
			rightmost = math.Max(rightmost, real(s))
		}
	}
	if len(unstable) == 0 {
		return nil
	}
	peak := func(d int, period float64) float64 {
		z := make([]complex128, len(unstable))
		for i, s := range unstable {
			z[i] = cmplx.Exp(s * complex(period, 0))
		}
		return leastPeak(d, z, nil)
	}
	c := &PeriodCost{
		PoleTimesPeriod: rightmost * p.period, LeastPeak: peak(1+int(p.compute/p.period+1e-9), p.period),
	}
	// With a delay tau in all, d samples pass where tau/d < T <= tau/(d-1).
	tau := p.nominal.tf.Delay
	for d := 1; d <= mostLag && c.LongestPeriod == 0; d++ {
		lo, hi := tau/float64(d), tau/float64(d-1)
		if d == 1 {
			hi = math.Max(2*lo, 1/rightmost)
			for peak(d, hi) < p.spec.peakS {
				hi *= 2
			}
		}
		if !(peak(d, math.Max(lo, 1e-6*hi)) <= p.spec.peakS) {
			continue
		}
		for range 50 {
			if mid := (lo + hi) / 2; peak(d, mid) <= p.spec.peakS {
				lo = mid
			} else {
				hi = mid
			}
		}
		c.LongestPeriod = lo
	}
	return c
}

// samplingCosts adds what the period costs to the loops and returns the warnings on sampling.
func (p *problem) samplingCosts(l *Loops) (warnings []string) {
	cost := p.periodCost()
	if l.Sampling == nil && cost == nil {
		return nil
	}
	if l.Sampling == nil {
		l.Sampling = &Sampling{}
	}
	l.Sampling.Period = cost
	for _, text := range []string{l.Sampling.warning(), cost.warning(p.spec.peakS)} {
		if text != "" {
			warnings = append(warnings, text)
		}
	}
	return warnings
}

// warning says that the period is long, with the numbers; empty where it is not.
func (c *PeriodCost) warning(peakS float64) string {
	if c == nil || c.PoleTimesPeriod <= slowestSampling {
		return ""
	}
	text := fmt.Sprintf("the sample period is long for the unstable pole: pole times period is %.2g, common practice asks for less than %.2g; sampling and compute delay alone force a peak sensitivity of %.3g on any controller (e^(p T d), Astrom (2000))",
		c.PoleTimesPeriod, slowestSampling, c.LeastPeak)
	if c.LongestPeriod == 0 {
		return text + fmt.Sprintf(", and with this delay no period keeps peak_sensitivity = %.3g", peakS)
	}
	return text + fmt.Sprintf(", and none keeps peak_sensitivity = %.3g at a period above %.3g s", peakS, c.LongestPeriod)
}
