package design

import (
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/fit/lti"
)

// stopgap returns the law that kept the rig up while the logs were taken, about the operating point, or says why it cannot
// be run here.
func (p *problem) stopgap() (law *lti.Law, why string) {
	s, log := p.rig.Stopgap, &p.rig.Log
	if s == nil {
		return nil, "the rig file gives no [stopgap]"
	}
	period := p.model.Noise.SamplePeriod
	if log.ControllerPeriod > 0 {
		period = log.ControllerPeriod
	}
	if math.Abs(period-p.period) > 1e-9*p.period {
		return nil, fmt.Sprintf("the stopgap law ran every %.4g s, the loops do every %.4g s", period, p.period)
	}
	return &lti.Law{
		Inner: lti.DTF{Num: s.Numerator, Den: s.Denominator, Period: p.period}, U0: p.point.Input, Y0: p.point.Output,
		InputLimits: p.limits, InputRate: p.rate, InputStep: p.rounds.Input, OutputStep: p.rounds.Output,
	}, ""
}

// handOverSettlings is how long, in settling times, the new law follows the stopgap law before it takes over.
const handOverSettlings = 3

func (p *problem) handOverSteps() int {
	return min(max(int(handOverSettlings*p.spec.settling/p.period), 20), longMost/4)
}

// handOver is the part of a run in which the new law takes over from another: it averages v over one settling time.
func (p *problem) handOver(before *lti.Law) lti.Run {
	return lti.Run{Before: before, HandOver: p.handOverSteps(), FollowShare: math.Min(1, p.period/p.spec.settling)}
}

// handOverRuns is the number of runs behind the figures of a hand-over and of a fault.
const handOverRuns = 21

// tryHandOver simulates the hand-over from the stopgap law at the nominal plant under noise: the largest moves of input
// and measured output from the operating point in the settling time before it, in that after it, and in the fourth
// after it, each on average over the runs. nil without a stopgap law that can be run and holds the plant.
func (p *problem) tryHandOver(law *lti.Law, seed uint64) *HandOver {
	before, why := p.stopgap()
	if why != "" {
		return nil
	}
	v := p.newProver(law)
	from, settle := p.handOverSteps(), p.handOverSteps()/handOverSettlings
	h := &HandOver{Rule: fmt.Sprintf(
		"While the stopgap law runs, let the new law follow it for %d settling times: what is sent, less u0, is the inner controller's past output; v is the average over one settling time of (y - y0) + (u - u0)/inner(1), inner(1) = %.4g, and is the outer controller's past output. In its first sample the new law sends the stopgap's last input once more; from the next on it runs alone.",
		handOverSettlings, law.Inner.DC())}
	for k := range handOverRuns {
		rnd := rand.New(rand.NewPCG(seed, uint64(k)))
		inside, err := v.shake(p.model.TF(), from+4*settle, 0, rnd, p.handOver(before))
		if err != nil || !inside {
			return nil
		}
		peak := func(x []float64, about float64) float64 {
			most := 0.0
			for _, x := range x {
				most = math.Max(most, math.Abs(x-about))
			}
			return most / handOverRuns
		}
		t := &v.trace
		h.Before.Input += peak(t.U[from-settle:from], law.U0)
		h.Before.Output += peak(t.Y[from-settle:from], law.Y0)
		h.After.Input += peak(t.U[from:from+settle], law.U0)
		h.After.Output += peak(t.Y[from:from+settle], law.Y0)
		h.Noise.Input += peak(t.U[len(t.U)-settle:], law.U0)
		h.Noise.Output += peak(t.Y[len(t.Y)-settle:], law.Y0)
	}
	return h
}

// reachedPerHour is the probability that correct running at rest reaches a stop level within an hour.
const reachedPerHour = 1e-4

// stopLevels returns the levels at which to stop a first closure at rest: n samples an hour of Gaussian signals of the
// expected deviations pass them with a probability of at most n times that of one sample (Boole's inequality). nil
// where the level would be beyond the input's limits, beyond the trips, or beyond the offset from which the loops come
// back; the note says so.
func (p *problem) stopLevels(law *lti.Law, sd SignalPair, recoverable float64) StopLevels {
	n := math.Max(1, 3600/p.period)
	z := -distuv.UnitNormal.Quantile(reachedPerHour / (2 * n))
	var s StopLevels
	if d := z * sd.Input; law.U0-d > p.limits[0] && law.U0+d < p.limits[1] {
		s.Input = &[2]float64{law.U0 - d, law.U0 + d}
	} else {
		s.Note = fmt.Sprintf("No level of the input tells a fault: in an hour correct running may move it by %.3g%s, beyond its limits. ", d, unitOf(p.rig.Units.Input))
	}
	room, what := recoverable, "the loops come back from"
	if p.output != nil && math.Min(-p.output[0], p.output[1]) < room {
		room, what = math.Min(-p.output[0], p.output[1]), "the trips allow"
	}
	if d := z * sd.Output; d < room {
		s.Output = &[2]float64{law.Y0 - d, law.Y0 + d}
	} else {
		s.Note += fmt.Sprintf("No level of the output tells a fault in time: in an hour correct running may move it by %.3g%s, %s only %.3g.", d, unitOf(p.rig.Units.Output), what, room)
	}
	return s
}

// outside is the first sample at which a signal leaves a level, or never.
func outside(x []float64, level *[2]float64) int {
	if level == nil {
		return math.MaxInt
	}
	if k := slices.IndexFunc(x, func(v float64) bool { return !(v >= level[0] && v <= level[1]) }); k >= 0 {
		return k
	}
	return math.MaxInt
}

// tryFault computes what a fault in the loops looks like on the traces: the nominal plant g with the fault in it, or
// the law, closed from rest under the identified noise.
func (p *problem) tryFault(what string, g lti.TF, law *lti.Law, f *FirstClosure, seed uint64) (Fault, error) {
	out := Fault{What: what}
	t, err := lti.NewTwoLoops(g, p.compute, law)
	if err != nil {
		return out, err
	}
	largest := 0.0
	for _, z := range t.Poles() {
		largest = math.Max(largest, cmplx.Abs(z))
	}
	if out.Stable = stable(t); out.Stable {
		pl, err := p.newPlant(g)
		if err != nil {
			return out, err
		}
		sd := p.expectedSD(&pl, p.lawGrid(law))
		out.Moves = &SignalPair{Input: sd.Input / f.ExpectedSD.Input, Output: sd.Output / f.ExpectedSD.Output}
		return out, nil
	}
	growth := p.period / math.Log(largest)
	out.Growth = &growth
	v := p.newProver(law)
	var stops, trips []float64
	for k := range handOverRuns {
		if _, err := v.shake(g, p.longSteps(), 0, rand.New(rand.NewPCG(seed, uint64(k))), lti.Run{}); err != nil {
			return out, err
		}
		if at := min(outside(v.trace.U, f.Stop.Input), outside(v.trace.Y, f.Stop.Output)); at < math.MaxInt {
			stops = append(stops, float64(at)*p.period)
		}
		if at := outside(v.trace.Y, f.Trip.Output); at < math.MaxInt {
			trips = append(trips, float64(at)*p.period)
		}
	}
	// The median over all runs; one that half of the runs do not reach has none.
	median := func(x []float64) *float64 {
		if slices.Sort(x); len(x) <= handOverRuns/2 {
			return nil
		}
		return &x[handOverRuns/2]
	}
	out.ToStop, out.ToTrip = median(stops), median(trips)
	return out, nil
}

// faults tries the two that first closures are lost by: the sign of the loop turned round, and columns a row off, which
// is a sample more of delay.
func (p *problem) faults(law *lti.Law, f *FirstClosure, seed uint64) []Fault {
	turned, late := *law, p.model.TF()
	turned.Inner.Num = turned.Inner.Num.Scale(-1)
	late.Delay += p.period
	out := []Fault{}
	for _, c := range []struct {
		what string
		g    lti.TF
		law  *lti.Law
	}{{faultSign, p.model.TF(), &turned}, {faultRow, late, law}} {
		if x, err := p.tryFault(c.what, c.g, c.law, f, seed); err == nil {
			out = append(out, x)
		}
	}
	return out
}

// Faults of a first closure.
const (
	faultSign = "the wrong sign"
	faultRow  = "columns a row off (a sample more of delay)"
)

// faultSeen is the ratio of deviations from which a trace shows a fault.
const faultSeen = 1.3

// words says in a sentence what a fault looks like; ui and yo are the units with a space before.
func (x *Fault) words(ui, yo string, f *FirstClosure) string {
	if x.Stable {
		text := fmt.Sprintf("With %s the loops would stay up, with deviations %.2f times the expected ones at the input and %.2f times at the output",
			x.What, x.Moves.Input, x.Moves.Output)
		if math.Max(x.Moves.Input, x.Moves.Output) < faultSeen {
			return text + ": the traces hardly show it, so check it with the actuator off."
		}
		return text + "."
	}
	text := fmt.Sprintf("With %s everything grows, by e every %.3g s until the input is at a limit", x.What, *x.Growth)
	if x.ToTrip != nil {
		text += fmt.Sprintf("; from rest the output is at its trip after %.3g s", *x.ToTrip)
	}
	if x.ToStop == nil {
		return text + ". Hit the stop as soon as it is seen, do not wait for it to turn."
	}
	var levels []string
	for _, c := range []struct {
		name, unit string
		level      *[2]float64
	}{{"input", ui, f.Stop.Input}, {"output", yo, f.Stop.Output}} {
		if c.level != nil {
			levels = append(levels, fmt.Sprintf("%s outside %.4g to %.4g%s", c.name, c.level[0], c.level[1], c.unit))
		}
	}
	return text + fmt.Sprintf(". Stop at %s, which it passes after %.3g s and correct running at rest does not reach; do not wait for it to turn.",
		joinOr(levels), *x.ToStop)
}

func joinOr(x []string) string {
	if len(x) == 2 {
		return x[0] + " or " + x[1]
	}
	return x[0]
}
