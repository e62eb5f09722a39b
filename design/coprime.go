package design

import (
	"context"
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// Yardstick compares the pair of loops with what any controller could reach about the nominal plant. |S| at the plant
// input has no unit; of the margins the input counts in units of InputRange and the output in units of OutputRange.
type Yardstick struct {
	InputNoise float64 `json:"input_noise"` // what the spec allows, standard deviation
	// No controller that stabilises the nominal plant within InputNoise has a smaller peak of |S|, and some have one of
	// Reached, which is null where the search for it did not end. The reference's path is free, see Steps.
	Least   float64         `json:"least_peak_sensitivity"`
	Reached *float64        `json:"reached_peak_sensitivity"`
	Pair    float64         `json:"pair_peak_sensitivity"` // nominal plant, both loops
	Excess  float64         `json:"excess"`                // Pair/Least - 1
	Steps   []YardstickStep `json:"steps"`                 // what makes the least larger, one demand after another

	InputRange   float64  `json:"input_range"`
	OutputRange  float64  `json:"output_range"`           // between the trips; without them trialSteps steps of the spec
	Best         *float64 `json:"optimal_coprime_margin"` // the largest that any controller has; null with long delays
	Margin       float64  `json:"coprime_margin"`         // of the pair, b(P, C) at the plant input
	MarginInner  float64  `json:"coprime_margin_inner"`   // of the inner loop alone
	LargestGap   float64  `json:"largest_nu_gap"`         // from the nominal plant to the drawn ones
	Plants       int      `json:"plants"`                 // drawn
	Stabilised   string   `json:"stabilised_by"`          // Theorem or Count
	GapFrequency float64  `json:"largest_nu_gap_at"`      // rad/s
}

// YardstickStep is the least peak of |S| under one demand more than the step before.
type YardstickStep struct {
	Demand string  `json:"demand"` // one of Demand…
	Least  float64 `json:"least_peak_sensitivity"`
}

// The demands of Yardstick.Steps, in order.
const (
	DemandStable = "stability"                            // the limit of physics
	DemandNoise  = "input noise asked"                    // Yardstick.Least
	DemandQuiet  = "the pair's own input noise"           // a pair need not use what the spec allows
	DemandHold   = "the pair's hold on slow disturbances" // |S| no larger than the pair's up to its own peak
)

// Why the drawn plants are stabilised.
const (
	// Theorem: they lie nearer to the nominal plant than the margins of both loops and of the inner one alone, and any
	// plant that near is stabilised (Vinnicombe (1993), IEEE Trans. Automatic Control 38, 1371-1383).
	Theorem = "theorem"
	// Count: some lie further off; that they are stabilised was found by looking at each.
	Count = "count"
)

// trialSteps is the output's range in steps of the spec where no trip limits give it.
const trialSteps = 10

// mostStates is the largest number of states, delay included, for which the Riccati equations are solved.
const mostStates = 60

// measure compares a law with what any controller could reach, over the plants drawn for the proof.
func (p *problem) measure(ctx context.Context, law *lti.Law, draws []lti.TF, workers int) (*Yardstick, error) {
	y := &Yardstick{InputNoise: p.spec.noise, InputRange: p.limits[1] - p.limits[0], OutputRange: p.outputRange(), Plants: len(draws)}
	g := p.lawGrid(law)
	own := p.frequency(&p.nominal, g).noise
	y.Pair = p.refinePeakS(&p.nominal, law, g)
	var reached float64
	quiet := math.Min(y.InputNoise, own*(1+1e-3)) // not to be shut out by rounding
	steps := []YardstickStep{{Demand: DemandStable}, {Demand: DemandNoise}, {Demand: DemandQuiet}, {Demand: DemandHold}}
	if err := ident.Each(ctx, len(steps), workers, func(i int) error {
		least := &steps[i].Least
		switch steps[i].Demand {
		case DemandStable:
			*least, _ = p.leastPeakS(math.Inf(1))
		case DemandNoise:
			*least, reached = p.leastPeakS(y.InputNoise)
		case DemandQuiet:
			*least, _ = p.leastPeakS(quiet)
		case DemandHold:
			*least = p.leastPeakHolding(quiet, law)
		}
		return nil
	}); err != nil {
		return nil, err
	}
	for i := 1; i < len(steps); i++ { // each is known from below only
		steps[i].Least = math.Max(steps[i].Least, steps[i-1].Least)
	}
	y.Steps, y.Least, y.Excess = steps, steps[1].Least, y.Pair/steps[1].Least-1
	if !math.IsInf(reached, 1) {
		y.Reached = &reached
	}
	return y, p.measureGaps(ctx, y, law, draws, workers)
}

// measureGaps fills in the margins and the largest nu-gap.
func (p *problem) measureGaps(ctx context.Context, y *Yardstick, law *lti.Law, draws []lti.TF, workers int) error {
	scale := y.InputRange / y.OutputRange
	tf := p.nominal.tf
	tf.Num = tf.Num.Scale(scale)
	if len(p.nominal.den)-1+p.nominal.lag <= mostStates {
		ss, err := lti.ZOH(tf, p.period)
		if err != nil {
			return fmt.Errorf("measuring the loops: %w", err)
		}
		// The equations have no solution where a mode is hidden; then there is no figure.
		if best, err := lti.CoprimeMargin(ss); err == nil {
			y.Best = &best
		}
	}
	nominal := p.nominal.scaled(scale, p.period)
	inner, both := controllers(law, scale)
	y.Margin, _ = lti.FeedbackMargin(nominal, both)
	y.MarginInner, _ = lti.FeedbackMargin(nominal, inner)

	gaps := make([]float64, len(draws))
	if err := inBatches(ctx, len(draws), workers, func(i int) {
		gaps[i] = 1 // a plant that cannot be sampled is as far off as any
		if pl, err := p.newPlant(draws[i]); err == nil {
			gaps[i] = p.gapOnGrid(&pl, scale)
		}
	}); err != nil {
		return err
	}
	// The grid finds which plant is furthest, the peak itself is refined.
	for i, far := range gaps {
		if far >= slices.Max(gaps)*(1-1e-3) {
			pl, err := p.newPlant(draws[i])
			if err != nil {
				y.LargestGap = 1
				continue
			}
			gap, at, err := lti.SampledNuGap(nominal, pl.scaled(scale, p.period))
			if err != nil {
				return fmt.Errorf("measuring the loops: %w", err)
			}
			if gap = math.Max(gap, far); gap > y.LargestGap {
				y.LargestGap, y.GapFrequency = gap, at
			}
		}
	}
	y.Stabilised = Count
	if y.LargestGap < math.Min(y.Margin, y.MarginInner) {
		y.Stabilised = Theorem
	}
	return nil
}

// outputRange is the output's range between the trips, or else in steps of the spec.
func (p *problem) outputRange() float64 {
	if p.output != nil {
		return p.output[1] - p.output[0]
	}
	return trialSteps * p.spec.step
}

// controllers returns K1 and K1 (1 + K2), what the plant times scale sees of a law.
func controllers(law *lti.Law, scale float64) (inner, both lti.DTF) {
	inner = lti.DTF{Num: law.Inner.Num.Scale(1 / scale), Den: law.Inner.Den, Period: law.Inner.Period}
	both = inner
	if law.Outer != nil {
		both.Num, both.Den = both.Num.Mul(law.Outer.Num.Add(law.Outer.Den)), both.Den.Mul(law.Outer.Den)
	}
	return inner, both
}

// scaled returns the sampled plant times scale.
func (pl *plant) scaled(scale, period float64) lti.DTF {
	num := append(make(lti.Poly, pl.lag), lti.Poly(pl.num).Scale(scale)...)
	return lti.DTF{Num: num, Den: pl.den, Period: period}
}

// gapOnGrid is lti.SampledNuGap between the nominal plant and another at the problem's frequencies.
func (p *problem) gapOnGrid(pl *plant, scale float64) float64 {
	gap, turn := 0.0, 0.0
	var before complex128
	k := complex(scale, 0)
	for j := range p.omega {
		a1, b1, a2, b2 := p.nominal.a[j], k*p.nominal.b[j], pl.a[j], k*pl.b[j]
		inner := cmplx.Conj(b2)*b1 + cmplx.Conj(a2)*a1
		if j > 0 {
			turn += cmplx.Phase(inner * cmplx.Conj(before))
		}
		before = inner
		size := math.Hypot(cmplx.Abs(a1), cmplx.Abs(b1)) * math.Hypot(cmplx.Abs(a2), cmplx.Abs(b2))
		gap = math.Max(gap, cmplx.Abs(b1*a2-b2*a1)/size)
	}
	if math.Abs(turn) > math.Pi/2 {
		return 1
	}
	return gap
}
