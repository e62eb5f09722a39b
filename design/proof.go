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

// conditions says what the runs behind a promise are; long is on how many plants they go on.
func (p *problem) conditions(long int) string {
	text := "the spec's step"
	if p.spec.kick > 0 {
		text += " and kick"
	}
	text += " in both directions from rest at the operating point, without noise, in the sampled loop with its delay, limits, rate and trips acting; the output is looked at between the samples too; "
	step := func(q float64, unit string) string {
		if q > 0 {
			return fmt.Sprintf("rounded to %.3g%s", q, unitOf(unit))
		}
		return "not rounded, as no step is known"
	}
	text += fmt.Sprintf("input %s, output %s; ", step(p.rounds.Input, p.rig.Units.Input), step(p.rounds.Output, p.rig.Units.Output))
	text += "the trips also count in a step more per plant"
	text += fmt.Sprintf(" and, on %d plants, in %.4g s at rest", long, float64(p.longSteps())*p.period)
	if _, why := p.stopgap(); why == "" {
		text += " after a hand-over from the stopgap law"
	}
	if p.noise.split {
		text += ", in which sensor noise and disturbance act, as split from the model's"
	} else {
		text += ", in which the whole prediction error acts, as it could not be split into sensor noise and disturbance"
	}
	return text + "; the model's structure is taken as true"
}

// DefaultPlants is the number of fresh plants in a proof.
const DefaultPlants = 2000

// proofSettlings is the length of a proof's runs in settling times; hidden modes are caught by eigenvalues, and seen in
// the long runs.
const proofSettlings = 4

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
	missLong      = "a long run under noise"
)

var missOrder = []string{missUnstable, missInner, missTrip, missOvershoot, missSettling, missPeakS, missNoise, missKick, missNoisy, missLong}

// outcome is what one plant does in the loops.
type outcome struct {
	unstable                                  int
	stable                                    bool
	misses                                    []string
	overshoot, settling, peakS, noise, kickPk float64
	atSamples                                 float64 // the overshoot that the samples alone show
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
	s := func(w float64) float64 { return cmplx.Abs(p.sensitivity(pl, law, w)) }
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
	law   *lti.Law  // with the steps of input and output
	grid  *gridLoop // both loops
	alone *gridLoop // the inner loop alone
	sim   lti.Simulator
	trace lti.Trace
	ref   []float64
	pl    plant // that judged last

	about lti.TF // the plant that was run last, and the instants per period at which its output is looked at
	fine  int

	sensor, disturbance []float64
}

func (p *problem) newProver(law *lti.Law) *prover {
	inner, acting := *law, *law
	inner.Outer, inner.Prefilter = nil, nil
	acting.InputStep, acting.OutputStep = p.rounds.Input, p.rounds.Output
	return &prover{p: p, law: &acting, grid: p.lawGrid(law), alone: p.lawGrid(&inner)}
}

// another returns a prover for another worker.
func (v *prover) another() *prover { return &prover{p: v.p, law: v.law, grid: v.grid, alone: v.alone} }

// Instants per period at which the output is looked at: at least fewestInstants, and instantsPerTurn per turn of the
// plant's fastest mode, between which a sine hides less than 2 % of its height, 1 - cos(pi/16). Slower motion hides
// less: between instants h apart no more than h^2/8 of its second derivative.
const (
	fewestInstants  = 2
	instantsPerTurn = 16
	mostInstants    = 64
)

// instants is how many times per period the output of a plant is looked at.
func (p *problem) instants(g lti.TF) int {
	turn := 0.0
	for _, s := range g.Poles() {
		turn = math.Max(turn, cmplx.Abs(s))
	}
	n := math.Ceil(instantsPerTurn * turn * p.period / (2 * math.Pi))
	return int(math.Min(math.Max(n, fewestInstants), mostInstants))
}

// trip returns the absolute levels at which a run ends: those of the rig, or where it has none those at which a plant
// counts as lost.
func (v *prover) trip() [2]float64 {
	o := [2]float64{-lostSteps * v.p.spec.step, lostSteps * v.p.spec.step}
	if v.p.output != nil {
		o = *v.p.output
	}
	return [2]float64{v.law.Y0 + o[0], v.law.Y0 + o[1]}
}

// simulate runs the loop about a plant, and reports whether the output stayed inside the trips, between the samples too.
func (v *prover) simulate(r lti.Run) (inside bool, err error) {
	if v.fine == 0 || !v.about.Equal(r.Plant) {
		v.about, v.fine = r.Plant, v.p.instants(r.Plant)
	}
	r.Period, r.ComputeDelay, r.Law, r.Fine, r.Trip = v.p.period, v.p.compute, v.law, v.fine, v.trip()
	if err := v.sim.Simulate(&v.trace, r); err != nil || v.trace.Tripped >= 0 {
		return false, err
	}
	for _, y := range v.trace.Fine {
		if !(y >= r.Trip[0] && y <= r.Trip[1]) {
			return false, nil
		}
	}
	return true, nil
}

// run simulates the saturating loop without noise; amount is a reference step, or with kick a step at the plant input.
func (v *prover) run(g lti.TF, steps int, amount float64, kick bool, offset float64) (inside bool, err error) {
	r := lti.Run{Plant: g, Steps: steps, OutputOffset: offset}
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
	return v.simulate(r)
}

// lostSteps is how far, in steps of the spec, an output without trip limits may go before its plant is lost.
const lostSteps = 1000

// shake simulates the loop at a constant reference, step away from the operating point, under the identified noise.
// What handOver adds to the run is the hand-over from another law.
func (v *prover) shake(g lti.TF, steps int, step float64, rnd *rand.Rand, handOver lti.Run) (inside bool, err error) {
	p, r := v.p, handOver
	r.Plant, r.Steps = g, steps
	v.sensor = slices.Grow(v.sensor[:0], steps)[:steps]
	if p.noise.split {
		v.disturbance = slices.Grow(v.disturbance[:0], steps)[:steps]
		p.noise.draw(rnd, p.period, v.sensor, v.disturbance)
		r.Noise, r.InputDisturbance = v.sensor, v.disturbance
	} else {
		p.whole(v.sensor, rnd)
		r.Innovations = v.sensor
	}
	v.ref = slices.Grow(v.ref[:0], steps)[:steps]
	for k := range v.ref {
		v.ref[k] = v.law.Y0 + step
	}
	r.Reference = v.ref
	return v.simulate(r)
}

// Of the plants one in longEvery runs under noise for longSettlings settling times, and its output may deviate by no more
// than longExcess times what the linear loop says: a hidden mode that grows, and a limit cycle that rounding keeps
// alive, take more.
const (
	longEvery     = 50
	longSettlings = 100
	longExcess    = 1.5
	longMost      = 50000 // steps
)

func (p *problem) longSteps() int {
	return int(math.Min(math.Max(longSettlings*p.spec.settling/p.period, 1000), longMost))
}

// endures reports whether the plant judged last comes through a long run under noise: handed over from the stopgap law
// where that is known and holds the plant, else from rest.
func (v *prover) endures(g lti.TF, rnd *rand.Rand) (bool, error) {
	p := v.p
	from, steps := p.handOverSteps(), p.longSteps()
	handOver := lti.Run{}
	if before, why := p.stopgap(); why == "" {
		handOver = p.handOver(before)
	}
	inside, err := v.shake(g, from+steps, 0, rnd, handOver)
	if t := v.trace.Tripped; err == nil && !inside && handOver.Before != nil && t >= 0 && t < from {
		inside, err = v.shake(g, from+steps, 0, rnd, lti.Run{})
	}
	if err != nil || !inside {
		return false, err
	}
	sum := 0.0
	after := v.trace.Y[2*from:]
	for _, y := range after {
		sum += (y - v.law.Y0) * (y - v.law.Y0)
	}
	return math.Sqrt(sum/float64(len(after))) <= longExcess*p.expectedSD(&v.pl, v.grid).Output, nil
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
	var err error
	if v.pl, err = p.newPlant(g); err != nil {
		// A plant that cannot be sampled is one that nothing holds.
		return outcome{unstable: g.UnstablePoles(0), misses: []string{missUnstable}}, nil
	}
	pl := &v.pl
	o.unstable = pl.unstable
	miss := func(what string) { o.misses = append(o.misses, what) }
	both, alone, err := v.holds(g, pl)
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
	o.peakS = p.refinePeakS(pl, v.law, v.grid)
	o.noise = p.frequency(pl, v.grid).noise
	n := p.steps(g)
	for _, sign := range []float64{1, -1} {
		inside, err := v.run(g, n, sign*s.step, false, 0)
		if err != nil {
			return o, err
		}
		if !inside {
			miss(missTrip)
			o.stable = false
			return o, nil
		}
		last, per := -1, sign/s.step
		for i, y := range v.trace.Fine {
			e := per*(y-v.law.Y0) - 1
			if e > o.overshoot {
				o.overshoot = e
			}
			if !(e <= s.band && e >= -s.band) {
				last = i
			}
		}
		for _, y := range v.trace.YTrue {
			if e := per*(y-v.law.Y0) - 1; e > o.atSamples {
				o.atSamples = e
			}
		}
		o.settling = math.Max(o.settling, float64(last+1)*p.period/float64(v.fine))
		if s.kick > 0 {
			inside, err := v.run(g, n, sign*s.kick, true, 0)
			if err != nil {
				return o, err
			}
			for _, y := range v.trace.Fine {
				o.kickPk = math.Max(o.kickPk, math.Abs(y-v.law.Y0))
			}
			if !inside {
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
			if o.stable {
				step := p.spec.step
				if k%2 == 1 {
					step = -step
				}
				rnd := rand.New(rand.NewPCG(noiseSeed, uint64(k)))
				inside, err := v.shake(draws[k], p.steps(draws[k]), step, rnd, lti.Run{})
				if err == nil && !inside {
					o.misses = append(o.misses, missNoisy)
				}
				if err == nil && k%longEvery == 0 {
					if inside, err = v.endures(draws[k], rnd); err == nil && !inside {
						o.misses = append(o.misses, missLong)
					}
				}
				if err != nil {
					return fmt.Errorf("plant %d of the proof: %w", k, err)
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
	out.LongRuns, out.Resolution = (n+longEvery-1)/longEvery, p.rounds
	out.Conditions = p.conditions(out.LongRuns)
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
	spread(&out.atSamples, func(o *outcome) float64 { return o.atSamples })
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
// from which the loop settles again, on the worst of the plants. Plants that come back from what the worst so far bears
// are not looked at closer.
func (v *prover) extents(ctx context.Context, plants []lti.TF, workers int) (step, offset float64, err error) {
	var out [2]float64
	if err := ident.Each(ctx, 2, workers, func(i int) error {
		v, worst := v.another(), math.Inf(1)
		for _, g := range plants {
			n := 2 * v.p.steps(g)
			comesBack := func(a float64) bool {
				target, off := a, 0.0
				if i == 1 {
					target, off = 0, a
				}
				inside, err := v.run(g, n, target, false, off)
				return err == nil && inside && v.calm(target)
			}
			if err := ctx.Err(); err != nil {
				return err
			}
			if math.IsInf(worst, 1) || !comesBack(worst) || !comesBack(-worst) {
				worst = math.Min(worst, v.p.largest(comesBack))
			}
		}
		out[i] = worst
		return nil
	}); err != nil {
		return 0, 0, err
	}
	return out[0], out[1], nil
}

// calm reports whether the last run has come to rest at its target.
func (v *prover) calm(target float64) bool {
	t := &v.trace
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
