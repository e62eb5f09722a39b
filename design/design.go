package design

import (
	"bytes"
	"cmp"
	"context"
	"crypto/sha256"
	"encoding/hex"
	"fmt"
	"math"
	"slices"
	"strings"

	"steadyrig/data"
	"steadyrig/ident"
)

// Options of Design and Verify. The zero value is ready.
type Options struct {
	Seed     uint64                // of all draws; the same seed gives the same loops, whatever Workers
	Workers  int                   // at most so many goroutines; 0: one per core
	Plants   int                   // fresh plants in the proof; 0: DefaultPlants
	Progress func(done, total int) // called during the proof, from several goroutines; nil: not called
}

// Sizes of the tuning set: so many plants at first, so many of the worst of the pool added after each round.
const (
	tuningPool   = 120
	tuningPlants = 8
	tuningAdds   = 3
	tuningRounds = 3
)

// Design finds two loops for a model: bounds first, then the inner loop, then the outer one, tuned for the worst of
// plants drawn from the model, then the promise on fresh plants. When physics or the promise says no, it returns the
// partial result, its verdict "refused", together with an *ident.RefusedError that says what and what to do. Any
// other error comes without a result: the rig file or the model cannot be worked with, or ctx ended.
func Design(ctx context.Context, model *ident.Model, rig *data.Rig, opt Options) (*Loops, error) {
	p, err := pose(model, rig)
	if p == nil {
		return nil, err
	}
	l := p.newLoops()
	if err == nil {
		err = p.sample()
	}
	if err != nil {
		return l.passOn(err)
	}
	draws := p.drawTFs(boundDraws, streamBounds, opt.Seed)
	l.Bounds = p.bounds(ctx, draws)
	if err := ctx.Err(); err != nil {
		return nil, err
	}
	if r := p.unheld(draws); r != nil {
		return l.refuse(r)
	}
	if r := outOfReach(l.Bounds); r != nil {
		return l.refuse(r)
	}
	if model.Verdict == ident.Refused {
		return l.refuse(&ident.RefusedError{What: "the fit refused this model, so no loops are designed on it", Do: "take a log as the fit's refusal says, and fit again"})
	}
	if r := contradicted(model); r != nil {
		return l.refuse(r)
	}
	pool, err := p.plants(tuningPool, stream(opt.Seed, streamTuning, 0))
	if err != nil {
		return l.refuse(&ident.RefusedError{What: "the model allows plants that cannot be sampled: " + err.Error(), Do: "take a longer log, so that the model is surer"})
	}
	tuning := append([]plant{p.nominal}, pool[:tuningPlants]...)
	aim := targets{0.95, 0.95}
	var best pair
	for attempt := 1; ; attempt++ {
		if best, tuning, err = p.tune(ctx, l, best, pool, tuning, aim, opt.Workers); err != nil {
			return l.passOn(err)
		}
		if err := p.assemble(l, best, tuning); err != nil {
			return nil, err
		}
		l.Promise, err = p.prove(ctx, l.LTI(), opt, attempt)
		if err != nil {
			return nil, err
		}
		if l.Promise.kept() || attempt == 2 {
			break
		}
		aim = targets{0.88, 0.85}
	}
	if l.Margins, err = p.allMargins(ctx, l.LTI(), opt); err != nil {
		return nil, err
	}
	p.relaxed(l)
	proven := model.Draw(l.Promise.Plants, stream(opt.Seed, streamProof, l.Promise.Attempts))
	if l.Yardstick, err = p.measure(ctx, l.LTI(), proven, opt.Workers); err != nil {
		return nil, err
	}
	p.firstClosure(l, opt.Seed)
	p.conclude(l)
	if r := l.Promise.broken(&p.spec); r != nil {
		return l.refuse(r)
	}
	return l, nil
}

// newLoops fills in what is known before any tuning.
func (p *problem) newLoops() *Loops {
	l := &Loops{
		Schema: LoopsSchema, Tool: p.model.Tool, Rig: p.rig.Name, Made: p.model.Made, ModelSHA256: modelSum(p.model),
		SamplePeriod: p.period, ComputeDelay: p.rig.Loop.ComputeDelay, OperatingPoint: p.point, Law: LawText,
		InputRate: p.rate, Verdict: Sound, Warnings: append(slices.Clone(p.doubts), p.warnings...), Bounds: []Bound{},
	}
	lim := p.limits
	l.InputLimits = &lim
	return l
}

// modelSum is the checksum of the model file as the tool writes it.
func modelSum(m *ident.Model) string {
	var b bytes.Buffer
	if err := m.Write(&b); err != nil {
		return ""
	}
	sum := sha256.Sum256(b.Bytes())
	return hex.EncodeToString(sum[:])
}

// refuse marks the loops and returns both.
func (l *Loops) refuse(r *ident.RefusedError) (*Loops, error) {
	l.Verdict = Refused
	l.Warnings = append(l.Warnings, r.Error())
	return l, r
}

// passOn returns a refusal with the partial result, any other error alone.
func (l *Loops) passOn(err error) (*Loops, error) {
	if r, ok := err.(*ident.RefusedError); ok {
		return l.refuse(r)
	}
	return nil, err
}

// tune finds a pair of loops for the worst of the tuning plants. The set grows by those plants of the pool on which
// the pair does worst. start, if it holds a pair, is where a second attempt begins.
func (p *problem) tune(ctx context.Context, l *Loops, start pair, pool, tuning []plant, aim targets, workers int) (pair, []plant, error) {
	best := start
	if best.form == "" {
		var err error
		if best, err = p.firstPair(ctx, l, tuning, aim, workers); err != nil {
			return best, tuning, err
		}
	} else {
		best = p.rejudge(best, tuning, aim)
		best = p.polishBoth(ctx, best, tuning, aim, 300)
	}
	for range tuningRounds {
		if err := ctx.Err(); err != nil {
			return best, tuning, err
		}
		worse := p.worstOf(best, pool, aim)
		added := 0
		for _, i := range worse {
			if added == tuningAdds {
				break
			}
			if !slices.ContainsFunc(tuning, func(t plant) bool { return t.tf.Equal(pool[i].tf) }) {
				tuning = append(tuning, pool[i])
				added++
			}
		}
		before := best.ratios.worst()
		again := p.rejudge(best, tuning, aim)
		if w := again.ratios.worst(); w <= meets || w <= 1.01*before && before <= 1 {
			best = again
			break
		}
		best = p.polishBoth(ctx, again, tuning, aim, 350)
	}
	return best, tuning, nil
}

// firstPair tunes inner forms from the simplest on, and outer forms about each, until a pair meets the spec on the
// tuning plants.
func (p *problem) firstPair(ctx context.Context, l *Loops, tuning []plant, aim targets, workers int) (pair, error) {
	inners, chosen, err := p.tuneInner(ctx, tuning, workers)
	if err != nil {
		return pair{}, err
	}
	if chosen < 0 && !StronglyStabilisable(p.nominal.tf) {
		return pair{}, &ident.RefusedError{
			What: "no stable controller holds this plant: an odd number of its real unstable poles lies between two of its real right-half-plane zeros, infinity counted (parity interlacing), and an unstable controller is lost whenever the input saturates",
			Do:   "move the sensor or the actuator, which moves the zeros",
		}
	}
	if chosen < 0 {
		return pair{}, &ident.RefusedError{
			What: "no inner loop of the forms gain, lead, lead with roll-off holds all plants that the data allow",
			Do:   fmt.Sprintf("shorten the delay (%.4g s in all) or the sample period (%.4g s), or take a longer log, so that fewer plants are allowed", p.nominal.tf.Delay, p.period),
		}
	}
	var best pair
	var rows []FormResult
	for i, in := range inners {
		if in.sound() || i == chosen {
			rows = append(rows, FormResult{Loop: "inner", Form: in.form, Order: in.block.order, PeakSensitivity: in.peakS, InputNoise: in.noise})
		}
		if i < chosen || !in.stable || best.form != "" && best.ratios.worst() <= 1 {
			continue
		}
		tried, err := p.tuneOuter(ctx, in, tuning, aim, workers)
		if err != nil {
			return pair{}, err
		}
		last := tried[len(tried)-1]
		if last.ratios.worst() > meets {
			last = p.polishBoth(ctx, last, tuning, aim, 400)
		}
		if best.form == "" || last.cost < best.cost {
			best = last
			rows = slices.DeleteFunc(rows, func(r FormResult) bool { return r.Loop == "outer" })
			for _, t := range tried {
				demand := t.ratios.worst()
				if math.IsInf(demand, 0) {
					demand = 0
				}
				rows = append(rows, FormResult{
					Loop: "outer", Form: t.form, Order: t.outer.order, PeakSensitivity: t.ratios.peakSAt,
					InputNoise: t.ratios.noiseAt, Demand: demand, Chosen: t.form == best.form,
				})
			}
		}
	}
	for i := range rows {
		if rows[i].Loop == "inner" && rows[i].Form == best.inner.form {
			rows[i].Chosen = true
		}
	}
	slices.SortStableFunc(rows, func(a, b FormResult) int { return cmp.Compare(a.Loop, b.Loop) })
	l.Forms = rows
	if !best.ratios.stable {
		return best, &ident.RefusedError{
			What: "an inner loop was found, but no outer loop of the forms I, PI, PI with lead keeps every tuning plant stable",
			Do:   "ask for a longer settling time, or take a longer log, so that fewer plants are allowed",
		}
	}
	return best, nil
}

// rejudge recomputes a pair's figures on other plants or for other targets.
func (p *problem) rejudge(s pair, plants []plant, aim targets) pair {
	var g gridLoop
	var sim simulator
	s.ratios = p.judge(s.inner.block, s.outer, s.pre, plants, aim, &g, &sim)
	s.cost = s.ratios.cost()
	return s
}

// worstOf returns the indices of the pool in order of how badly the pair does on them.
func (p *problem) worstOf(s pair, pool []plant, aim targets) []int {
	var g gridLoop
	var sim simulator
	cost := make([]float64, len(pool))
	index := make([]int, len(pool))
	for i := range pool {
		cost[i] = p.judge(s.inner.block, s.outer, s.pre, pool[i:i+1], aim, &g, &sim).worst()
		index[i] = i
	}
	slices.SortStableFunc(index, func(a, b int) int { return cmp.Compare(cost[b], cost[a]) })
	return index
}

// assemble writes a pair into the loops, with the limits of v.
func (p *problem) assemble(l *Loops, s pair, tuning []plant) error {
	l.InnerForm, l.OuterForm = s.inner.form, s.form
	l.Inner, l.Outer, l.Prefilter = s.inner.block.file(p.period), s.outer.file(p.period), s.pre.file(p.period)
	l.OuterLimits = nil
	law := l.LTI()
	if err := law.Validate(); err != nil {
		return fmt.Errorf("designing loops: %w", err)
	}
	limits, short := p.outerLimits(law, tuning[:min(len(tuning), 6)], s.ratios.vs)
	l.OuterLimits = &limits
	const text = "the spec's step or kick moves v so far that the outer limits leave less authority to stabilise than is prudent: ask for a smaller step or kick, or a slower one"
	l.Warnings = slices.DeleteFunc(l.Warnings, func(w string) bool { return w == text })
	if short {
		l.Warnings = append(l.Warnings, text)
	}
	return nil
}

// kept reports whether the proof carries the promise.
func (q *Promise) kept() bool { return q.LowerBound >= PromisedShare && q.Stable == q.Plants }

// nominalMisses reports whether the nominal plant misses the spec.
func (q *Promise) nominalMisses(s *demands) bool {
	o := outcome{overshoot: q.Overshoot.Nominal, settling: q.Settling.Nominal, peakS: q.PeakS.Nominal, noise: q.InputNoise.Nominal}
	if q.KickPeak != nil {
		o.kickPk = q.KickPeak.Nominal
	}
	return slices.ContainsFunc(q.Misses, func(m MissReason) bool {
		got, asked := o.figure(m.What, s)
		return asked > 0 && got > asked
	})
}

// broken returns the refusal of a promise that failed, nil if it is kept.
func (q *Promise) broken(s *demands) *ident.RefusedError {
	if q.kept() {
		return nil
	}
	var parts []string
	for _, m := range q.Misses {
		text := fmt.Sprintf("%s missed by %d plants", m.What, m.Plants)
		if m.Asked > 0 || m.Worst > 0 {
			text += fmt.Sprintf(" (worst %.4g, asked %.4g)", m.Worst, m.Asked)
		}
		parts = append(parts, text)
	}
	do := "ask for less where it misses, or take a longer log, so that fewer plants are allowed"
	if q.nominalMisses(s) {
		do = "ask for less where it misses, or change the loops: the nominal plant misses it too, so a longer log will not help"
	}
	if q.Stable < q.Plants {
		do = "do not close these loops: take a longer log, so that fewer plants are allowed, or shorten the delay"
	}
	return &ident.RefusedError{
		What: fmt.Sprintf("the promise failed: %d of %d plants meet the spec, lower bound %.4f, wanted %.3f: %s",
			q.MeetSpec, q.Plants, q.LowerBound, PromisedShare, strings.Join(parts, "; ")),
		Do: do,
	}
}
