package design

import (
	"context"
	"fmt"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"
	"sync/atomic"

	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// PromisedShare is the share of the plants that the data allow which must meet the spec, by its lower bound.
const PromisedShare = 0.995

// conditions says what the runs behind a promise are.
func (p *problem) conditions() string {
	noise := "sensor noise and disturbances are not in these runs, as they could not be told apart"
	if p.noise.split {
		noise = "overshoot and settling are those of runs without noise, and in one more run per plant sensor noise and disturbance act, as split from the model's, and no trip may"
	}
	return "the spec's step in both directions, and its kick, from rest at the operating point, in the sampled loop with its delay, limits, rate and trips acting; " +
		noise + "; quantisation is left out, and the model's structure is taken as true"
}

// DefaultPlants is the number of fresh plants in a proof.
const DefaultPlants = 2000

// proofSettlings is the length of a proof's runs in settling times; hidden modes are also caught by eigenvalues.
const proofSettlings = 6

// Reasons for which a plant misses the spec.
const (
	missUnstable  = "stability"
	missInner     = "stability of the inner loop alone"
	missTrip      = "trip limits during the step"
	missOvershoot = "overshoot"
	missSettling  = "settling"
	missPeakS     = "peak_sensitivity"
	missNoise     = "input_noise"
	missKick      = "kick_peak"
	missNoisy     = "trip limits during the step, with noise"
)

var missOrder = []string{missUnstable, missInner, missTrip, missOvershoot, missSettling, missPeakS, missNoise, missKick, missNoisy}

// outcome is what one plant does in the loops.
type outcome struct {
	unstable                                  int
	stable                                    bool
	misses                                    []string
	overshoot, settling, peakS, noise, kickPk float64
}

// lawGrid is a law at the frequencies of a problem.
func (p *problem) lawGrid(law *lti.Law) *gridLoop {
	g := &gridLoop{d: make([]complex128, len(p.z1)), k: make([]complex128, len(p.z1))}
	for j, x := range p.z1 {
		g.d[j], g.k[j] = lawAt(law, x)
	}
	return g
}

// lawAt returns d and k of the characteristic function d A + k B at z^-1 = x.
func lawAt(law *lti.Law, x complex128) (d, k complex128) {
	d, k = law.Inner.Den.Eval(x), law.Inner.Num.Eval(x)
	if law.Outer != nil {
		n2, d2 := law.Outer.Num.Eval(x), law.Outer.Den.Eval(x)
		d, k = d*d2, k*(n2+d2)
	}
	return d, k
}

// refinePeakS refines the peak of |S| between the neighbours of its largest grid value.
func (p *problem) refinePeakS(pl *plant, law *lti.Law, g *gridLoop) float64 {
	at, best := 0, -1.0
	for j := range g.d {
		da := g.d[j] * pl.a[j]
		if v := cmplx.Abs(da / (da + g.k[j]*pl.b[j])); v > best {
			at, best = j, v
		}
	}
	s := func(w float64) float64 {
		x := cmplx.Exp(complex(0, -w*p.period))
		d, k := lawAt(law, x)
		da := d * lti.Poly(pl.den).Eval(x)
		b := lti.Poly(pl.num).Eval(x) * cmplx.Exp(complex(0, -w*p.period*float64(pl.lag)))
		return cmplx.Abs(da / (da + k*b))
	}
	lo, hi := p.omega[max(at-1, 0)], p.omega[min(at+1, len(p.omega)-1)]
	for range 30 { // golden section by thirds: the peak is smooth between grid points
		a, b := lo+(hi-lo)/3, hi-(hi-lo)/3
		if s(a) > s(b) {
			hi = b
		} else {
			lo = a
		}
	}
	return math.Max(best, s((lo+hi)/2))
}

// prover keeps what one worker reuses between plants.
type prover struct {
	p     *problem
	law   *lti.Law
	grid  *gridLoop // both loops
	alone *gridLoop // the inner loop alone
	sim   lti.Simulator
	trace lti.Trace
	ref   []float64

	sensor, disturbance []float64
}

func (p *problem) newProver(law *lti.Law) *prover {
	inner := *law
	inner.Outer, inner.Prefilter = nil, nil
	return &prover{p: p, law: law, grid: p.lawGrid(law), alone: p.lawGrid(&inner)}
}

// another returns a prover for another worker.
func (v *prover) another() *prover { return &prover{p: v.p, law: v.law, grid: v.grid, alone: v.alone} }

// run simulates the saturating loop; amount is a reference step, or with kick a step at the plant input.
func (v *prover) run(g lti.TF, steps int, amount float64, kick bool, offset float64) error {
	r := lti.Run{Plant: g, Period: v.p.period, ComputeDelay: v.p.compute, Law: v.law, Steps: steps, OutputOffset: offset}
	if o := v.p.output; o != nil {
		r.Trip = [2]float64{v.law.Y0 + o[0], v.law.Y0 + o[1]}
	}
	v.ref = slices.Grow(v.ref[:0], steps)[:steps]
	for k := range v.ref {
		v.ref[k] = amount
		if !kick {
			v.ref[k] += v.law.Y0
		}
	}
	if kick {
		r.InputDisturbance = v.ref
	} else {
		r.Reference = v.ref
	}
	return v.sim.Simulate(&v.trace, r)
}

// lostSteps is how far, in steps of the spec, an output without trip limits may go before its plant is lost.
const lostSteps = 1000

// survives reports whether a plant comes through a reference step under sensor noise and disturbance without a trip.
func (v *prover) survives(g lti.TF, step float64, rnd *rand.Rand) (bool, error) {
	p, n := v.p, v.p.steps(g)
	v.sensor, v.disturbance = slices.Grow(v.sensor[:0], n)[:n], slices.Grow(v.disturbance[:0], n)[:n]
	p.noise.draw(rnd, p.period, v.sensor, v.disturbance)
	v.ref = slices.Grow(v.ref[:0], n)[:n]
	for k := range v.ref {
		v.ref[k] = v.law.Y0 + step
	}
	trip := [2]float64{-lostSteps * p.spec.step, lostSteps * p.spec.step}
	if p.output != nil {
		trip = *p.output
	}
	err := v.sim.Simulate(&v.trace, lti.Run{
		Plant: g, Period: p.period, ComputeDelay: p.compute, Law: v.law, Steps: n, Reference: v.ref,
		Noise: v.sensor, InputDisturbance: v.disturbance, Trip: [2]float64{v.law.Y0 + trip[0], v.law.Y0 + trip[1]},
	})
	return err == nil && v.trace.Tripped < 0, err
}

// steps is the length of the runs about a plant.
func (p *problem) steps(g lti.TF) int {
	n := int(math.Ceil((g.Delay + p.compute + proofSettlings*p.spec.settling) / p.period))
	return min(max(n, 50), 10000)
}

// eigenStates is the number of plant states, delay included, up to which stability is judged by eigenvalues of the
// interconnection. Beyond it they would take most of the time, and the argument principle decides, on the
// characteristic function of all blocks, hidden modes included; the nominal plant's margins use eigenvalues anyway.
const eigenStates = 24

// holds reports whether both loops, and the inner one alone, are stable about a plant.
func (v *prover) holds(g lti.TF, pl *plant) (both, alone bool, err error) {
	if pl.lag+len(pl.den) > eigenStates {
		if f := v.law.Prefilter; f != nil {
			for _, z := range f.Poles() {
				if !(cmplx.Abs(z) < 1-stableWithin) {
					return false, false, nil
				}
			}
		}
		return v.p.frequency(pl, v.grid).outside == 0, v.p.frequency(pl, v.alone).outside == 0, nil
	}
	t, err := lti.NewTwoLoops(g, v.p.compute, v.law)
	if err != nil {
		return false, false, err
	}
	both, alone = stable(t), true
	if v.law.Outer != nil {
		t.Outer, t.Prefilter = lti.DTF{}, lti.DTF{}
		alone = stable(t)
	}
	return both, alone, nil
}

// judge runs one plant through the whole spec.
func (v *prover) judge(g lti.TF) (outcome, error) {
	p, s := v.p, &v.p.spec
	var o outcome
	pl, err := p.newPlant(g)
	if err != nil {
		// A plant that cannot be sampled is one that nothing holds.
		return outcome{unstable: g.UnstablePoles(0), misses: []string{missUnstable}}, nil
	}
	o.unstable = pl.unstable
	miss := func(what string) { o.misses = append(o.misses, what) }
	both, alone, err := v.holds(g, &pl)
	if err != nil {
		return o, err
	}
	if !both {
		miss(missUnstable)
	}
	if !alone {
		miss(missInner)
	}
	if o.stable = both && alone; !o.stable {
		return o, nil
	}
	o.peakS = p.refinePeakS(&pl, v.law, v.grid)
	o.noise = p.frequency(&pl, v.grid).noise
	n := p.steps(g)
	for _, sign := range []float64{1, -1} {
		if err := v.run(g, n, sign*s.step, false, 0); err != nil {
			return o, err
		}
		if v.trace.Tripped >= 0 {
			miss(missTrip)
			o.stable = false
			return o, nil
		}
		last := -1
		for k, y := range v.trace.YTrue {
			x := sign * (y - v.law.Y0) / s.step
			o.overshoot = math.Max(o.overshoot, x-1)
			if !(math.Abs(x-1) <= s.band) {
				last = k
			}
		}
		o.settling = math.Max(o.settling, float64(last+1)*p.period)
		if s.kick > 0 {
			if err := v.run(g, n, sign*s.kick, true, 0); err != nil {
				return o, err
			}
			for _, y := range v.trace.YTrue {
				o.kickPk = math.Max(o.kickPk, math.Abs(y-v.law.Y0))
			}
			if v.trace.Tripped >= 0 {
				miss(missTrip)
				o.stable = false
				return o, nil
			}
		}
	}
	const rounding = 1e-9
	if o.overshoot > s.overshoot+rounding {
		miss(missOvershoot)
	}
	if o.settling > s.settling*(1+rounding) {
		miss(missSettling)
	}
	if !(o.peakS <= s.peakS) {
		miss(missPeakS)
	}
	if !(o.noise <= s.noise) {
		miss(missNoise)
	}
	if s.kick > 0 && s.kickPeak > 0 && o.kickPk > s.kickPeak {
		miss(missKick)
	}
	return o, nil
}

// figure returns a plant's figure behind a miss, and what was asked.
func (o *outcome) figure(what string, s *demands) (got, asked float64) {
	switch what {
	case missOvershoot:
		return o.overshoot, s.overshoot
	case missSettling:
		return o.settling, s.settling
	case missPeakS:
		return o.peakS, s.peakS
	case missNoise:
		return o.noise, s.noise
	case missKick:
		return o.kickPk, s.kickPeak
	}
	return 0, 0
}

// prove counts over fresh plants drawn with the seed. attempt is 1 for the first proof, which spends the whole 5 %
// of error, and 2 for the second, which has half of that.
func (p *problem) prove(ctx context.Context, law *lti.Law, opt Options, attempt int) (*Promise, error) {
	n := opt.Plants
	if n == 0 {
		n = DefaultPlants
	}
	draws := p.model.Draw(n, stream(opt.Seed, streamProof, attempt))
	noiseSeed := stream(opt.Seed, streamNoise, attempt)
	results := make([]outcome, n)
	first := p.newProver(law)
	const batch = 25
	var done atomic.Int64
	if err := ident.Each(ctx, (n+batch-1)/batch, opt.Workers, func(i int) error {
		v := first.another()
		from, to := i*batch, min((i+1)*batch, n)
		for k := from; k < to; k++ {
			if err := ctx.Err(); err != nil {
				return err
			}
			o, err := v.judge(draws[k])
			if err != nil {
				return fmt.Errorf("plant %d of the proof: %w", k, err)
			}
			if o.stable && p.noise.split {
				step := p.spec.step
				if k%2 == 1 {
					step = -step
				}
				ok, err := v.survives(draws[k], step, rand.New(rand.NewPCG(noiseSeed, uint64(k))))
				if err != nil {
					return fmt.Errorf("plant %d of the proof: %w", k, err)
				}
				if !ok {
					o.misses = append(o.misses, missNoisy)
				}
			}
			results[k] = o
		}
		if opt.Progress != nil {
			opt.Progress(int(done.Add(int64(to-from))), n)
		}
		return nil
	}); err != nil {
		return nil, err
	}
	nominal, err := first.judge(p.model.TF())
	if err != nil {
		return nil, err
	}
	out := p.count(nominal, results)
	out.Conditions = p.conditions()
	out.Attempts, out.Confidence = attempt, 1-0.05/float64(attempt)
	out.LowerBound = ClopperPearsonLower(out.MeetSpec, n, out.Confidence)
	if out.Stable > 0 && nominal.stable {
		some := append([]lti.TF{p.model.TF()}, draws[:min(n, extentPlants)]...)
		if out.LargestStep, out.Recoverable, err = first.extents(ctx, some, opt.Workers); err != nil {
			return nil, err
		}
	}
	return out, nil
}

// count sums up outcomes in the order of the draws.
func (p *problem) count(nominal outcome, results []outcome) *Promise {
	out := &Promise{Plants: len(results), UnstablePoles: []PoleCount{}, Misses: []MissReason{}}
	spread := func(s *Spread, f func(*outcome) float64) {
		s.Nominal = f(&nominal)
		for i := range results {
			if results[i].stable {
				s.Worst = math.Max(s.Worst, f(&results[i]))
			}
		}
	}
	spread(&out.Overshoot, func(o *outcome) float64 { return o.overshoot })
	spread(&out.Settling, func(o *outcome) float64 { return o.settling })
	spread(&out.PeakS, func(o *outcome) float64 { return o.peakS })
	spread(&out.InputNoise, func(o *outcome) float64 { return o.noise })
	if p.spec.kick > 0 {
		out.KickPeak = new(Spread)
		spread(out.KickPeak, func(o *outcome) float64 { return o.kickPk })
	}
	misses, worst, poles := map[string]int{}, map[string]float64{}, map[int]int{}
	for i := range results {
		o := &results[i]
		poles[o.unstable]++
		if o.stable {
			out.Stable++
		}
		if len(o.misses) == 0 {
			out.MeetSpec++
		}
		for _, m := range o.misses {
			misses[m]++
			got, _ := o.figure(m, &p.spec)
			worst[m] = math.Max(worst[m], got)
		}
	}
	for u := 0; len(poles) > 0; u++ {
		if c, ok := poles[u]; ok {
			out.UnstablePoles = append(out.UnstablePoles, PoleCount{u, c})
			delete(poles, u)
		}
	}
	for _, m := range missOrder {
		if misses[m] > 0 {
			_, asked := nominal.figure(m, &p.spec)
			out.Misses = append(out.Misses, MissReason{m, misses[m], worst[m], asked})
		}
	}
	return out
}

// extentPlants is the number of drawn plants, beside the nominal one, on which the largest step and offset are
// searched.
const extentPlants = 16

// extents finds the largest reference step and the largest offset along the least stable mode, in either direction,
// from which the loop settles again, on the worst of the plants.
func (v *prover) extents(ctx context.Context, plants []lti.TF, workers int) (step, offset float64, err error) {
	p := v.p
	steps, offsets := make([]float64, len(plants)), make([]float64, len(plants))
	if err := ident.Each(ctx, len(plants), workers, func(i int) error {
		v, g := v.another(), plants[i]
		n := 2 * p.steps(g)
		steps[i] = p.largest(func(a float64) bool {
			return v.run(g, n, a, false, 0) == nil && v.calm(a)
		})
		offsets[i] = p.largest(func(a float64) bool {
			return v.run(g, n, 0, false, a) == nil && v.calm(0)
		})
		return nil
	}); err != nil {
		return 0, 0, err
	}
	return slices.Min(steps), slices.Min(offsets), nil
}

// calm reports whether the last run stayed inside the trips and has come to rest at its target.
func (v *prover) calm(target float64) bool {
	t := &v.trace
	if t.Tripped >= 0 {
		return false
	}
	tol := 0.1*math.Abs(target) + 0.05*v.p.spec.step
	for _, y := range t.YTrue[len(t.YTrue)*3/4:] {
		if !(math.Abs(y-v.law.Y0-target) <= tol) {
			return false
		}
	}
	return true
}

// largest bisects for the largest amount that works in both directions, up to the trip limits or a thousand steps.
func (p *problem) largest(works func(float64) bool) float64 {
	most := lostSteps * p.spec.step
	if p.output != nil {
		most = math.Min(-p.output[0], p.output[1])
	}
	both := func(a float64) bool { return works(a) && works(-a) }
	if both(most) {
		return most
	}
	lo, hi := 0.0, most
	// Double up first: where far more than the spec is asked, the first guesses are near the spec.
	for a := p.spec.step / 4; a < most; a *= 2 {
		if !both(a) {
			hi = a
			break
		}
		lo = a
	}
	for range 9 {
		if mid := (lo + hi) / 2; both(mid) {
			lo = mid
		} else {
			hi = mid
		}
	}
	return lo
}
