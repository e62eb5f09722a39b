package ident

import (
	"context"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
	"sync/atomic"

	"gonum.org/v1/gonum/stat"

	"steadyrig/data"
	"steadyrig/fit"
)

// Sums of an exact interval: it is of level 1 - exactLargest/exactDraws.
const (
	exactDraws   = 1000
	exactLargest = 50
	// tuneShare is the part of the rows, the first, that noise shape and instruments come from where the rest is to be tested
	// with levels that had no part in them.
	tuneShare = 0.2
	// exactRows is how many rows are used, the first ones.
	exactRows = 100000
	// leastLevels of an outside signal, levelLags over which they may not follow from each other.
	leastLevels = 20
	levelLags   = 50
)

// Claims of an Exact.
const (
	ClaimExact       = "exact"
	ClaimApproximate = "approximate"
	ClaimNone        = "none" // no intervals, Note says why
)

// Exact holds intervals of the poles that matter whose level does not rest on long records.
type Exact struct {
	Level   float64 `json:"level"`
	Draws   int     `json:"draws"`   // m: sums that are ranked
	Largest int     `json:"largest"` // q: so many largest ones reject
	Seed    uint64  `json:"seed"`
	// Claim is "exact", "approximate" or "none"; Assumption says under what.
	Claim      string      `json:"claim"`
	Assumption string      `json:"assumption"`
	Note       string      `json:"note,omitempty"` // why no more can be claimed
	Rows       int         `json:"rows"`           // tested
	Units      int         `json:"units"`          // levels or signs that were drawn anew
	Poles      []ExactPole `json:"poles"`
}

// ExactPole is a pole, or two that may meet, with the intervals of its parts. They cover at least as often as Level says,
// each for itself. An end that was not found is infinite.
type ExactPole struct {
	Re    float64   `json:"re"` // of the model, rad/s
	Im    float64   `json:"im"`
	OfTwo bool      `json:"of_two"` // Re95 is that of the larger real part of two poles that may meet
	Re95  Interval  `json:"re_95"`
	Im95  *Interval `json:"im_95,omitempty"` // of a pair
}

// Assumptions of exact intervals, in plain words.
const (
	levelsAssumed = "the levels of the logged outside signal were drawn at random, independently of each other and of the noise; the plant has the model's structure; nothing is assumed of the noise"
	signsAssumed  = "independent, symmetric residuals; outside signal independent of the noise; the plant has the model's structure"
)

// CheckExact says whether logs can have exact intervals: they need a signal from outside, logged, that moves, and the law
// that ran.
func CheckExact(exps []*data.Experiment, rig *data.Rig) error {
	exps = cutAtWrong(exps)
	signals, dither := movingSignals(exps)
	if signals == nil {
		return errors.New("exact intervals need the probe or the reference in the log, moving; name its column in [log] as dither or reference, or leave out --exact")
	}
	if _, ok := loopOf(exps, rig, dither); !ok {
		return errors.New("exact intervals need the law that ran, which the log does not show; give it as [stopgap] in the rig file, or leave out --exact")
	}
	return nil
}

// movingSignals returns the dither of each segment, or else the reference, where it is logged throughout and moves.
func movingSignals(exps []*data.Experiment) (signals [][]float64, dither bool) {
	for _, dither := range []bool{true, false} {
		var list [][]float64
		logged, moves := true, false
		for _, e := range exps {
			for _, s := range e.Segments {
				o := s.R
				if dither {
					o = s.D
				}
				logged = logged && o != nil
				moves = moves || slices.ContainsFunc(o, func(v float64) bool { return v != o[0] })
				list = append(list, o)
			}
		}
		if logged && moves {
			return list, dither
		}
	}
	return nil, false
}

// AddExact adds exact intervals of the poles that matter to a model that Fit made of the same logs. It changes nothing
// else of the model.
func (m *Model) AddExact(ctx context.Context, exps []*data.Experiment, rig *data.Rig, opt Options) error {
	if len(m.Plant.Denominator) == 0 {
		return nil
	}
	if err := CheckExact(exps, rig); err != nil {
		return err
	}
	_, exps = firstRows(cutAtWrong(exps), exactRows)
	recs, _, err := records(exps)
	if err != nil {
		return err
	}
	e := &Exact{Level: 1 - float64(exactLargest)/exactDraws, Draws: exactDraws, Largest: exactLargest, Seed: opt.Seed, Poles: []ExactPole{}}
	sums, tuned, err := e.byLevels(ctx, exps, rig, recs, m, opt)
	if err != nil {
		e.Note = err.Error()
		if sums, tuned, err = e.bySigns(ctx, exps, rig, recs, m, opt); err != nil {
			m.Exact = e
			e.Claim, e.Assumption, e.Note = ClaimNone, "", e.Note+"; by the signs of the residuals: "+err.Error()
			return nil
		}
	}
	e.Rows, e.Units = sums.Rows, sums.Units

	list := m.asked()
	var done atomic.Int64
	step := func(n int64) {
		if opt.Progress != nil {
			opt.Progress(int(done.Add(n)), exactDraws*(1+2*len(list)))
		}
	}
	if err := Each(ctx, exactDraws, opt.Workers, func(i int) error {
		sums.Perturb(i)
		step(1)
		return nil
	}); err != nil {
		return err
	}
	start := m.start()
	ends := make([]float64, 2*len(list))
	if err := Each(ctx, len(ends), opt.Workers, func(k int) error {
		q := list[k/2]
		defer step(exactDraws)
		p, ok := sums.PoleRange(q.number, complex(q.re, q.im), tuned, start)
		out := q.step * float64(2*(k%2)-1)
		if !ok {
			ends[k] = math.Copysign(math.Inf(1), out)
			return nil
		}
		ends[k] = p.End(out)
		return nil
	}); err != nil {
		return err
	}
	for k, q := range list {
		iv := Interval{ends[2*k], ends[2*k+1]}
		if q.number == fit.PairFreq {
			e.Poles[len(e.Poles)-1].Im95 = &iv
		} else {
			e.Poles = append(e.Poles, ExactPole{Re: q.re, Im: q.im, OfTwo: q.number == fit.LargestReal, Re95: iv})
		}
	}
	m.Exact = e
	return nil
}

// question is a number that an exact interval is asked for.
type question struct {
	number       fit.PoleNumber
	re, im, step float64 // rad/s
}

// asked lists the numbers of the poles that matter: those that are or may be unstable, those at zero, or else the rightmost.
func (m *Model) asked() []question {
	var list []question
	add := func(p Root, met bool) {
		step := func(sd float64) float64 { return math.Max(sd, 1e-3*math.Hypot(p.Re, p.Im)) }
		switch {
		case p.Im != 0:
			list = append(list, question{fit.LargestReal, p.Re, p.Im, step(p.ReSD)}, question{fit.PairFreq, p.Re, p.Im, step(p.ImSD)})
		case met:
			list = append(list, question{fit.LargestReal, p.Re, 0, step(p.ReSD)})
		default:
			list = append(list, question{fit.RealPole, p.Re, 0, step(p.ReSD)})
		}
	}
	// Poles come by rising real part. Two that may have met have imaginary parts in their intervals.
	for i := 0; i < len(m.Poles); i++ {
		p := m.Poles[i]
		if p.Im < 0 || p.ProbabilityUnstable <= 0.025 && !(p.Re == 0 && p.Im == 0) {
			continue
		}
		met := p.Im == 0 && p.Im95.Hi > 0
		if met && i+1 < len(m.Poles) && m.Poles[i+1].Im == 0 {
			continue // the next one is the larger
		}
		add(p, met)
	}
	if len(list) == 0 {
		p := m.Poles[len(m.Poles)-1]
		add(p, p.Im == 0 && p.Im95.Hi > 0)
	}
	return list
}

// tune fits a plant of the model's structure, integrators free, to records: as if nothing else were known of it, the
// disturbance's colour chosen anew, or from the start that is given.
func (m *Model) tune(ctx context.Context, recs []fit.Record, start *fit.Prediction, rig *data.Rig, opt Options) (*fit.Prediction, error) {
	period := m.Noise.SamplePeriod
	sc := scopeOf(rig, period)
	p, err := fit.NewPredictor(recs, period, math.Max(sc.delay[1], sc.base))
	if err != nil {
		return nil, err
	}
	c, err := newChooser(p, recs, sc, opt.Workers)
	if err != nil {
		return nil, err
	}
	if start != nil {
		return p.Fit(start, compareTol, finalSteps)
	}
	var list []structure
	shape := m.start().Shape
	for colour := range MaxColour + 1 {
		list = append(list, structure{poles: shape.Poles, zeros: shape.Zeros, colour: colour, delay: shape.FreeDelay})
	}
	if err := c.try(ctx, list, nil, nil); err != nil {
		return nil, err
	}
	ranked := c.ranked()
	if len(ranked) == 0 {
		return nil, fit.ErrNoFit
	}
	best := ranked[0]
	return p.Fit(best.fit, compareTol, finalSteps)
}

// start is the model in the estimator's form, integrators free.
func (m *Model) start() *fit.Prediction {
	f := &fit.Prediction{
		Num: reversed(m.Plant.Numerator), Den: reversed(m.Plant.Denominator), Delay: m.Plant.Delay,
		C: m.Noise.Numerator, Period: m.Noise.SamplePeriod,
	}
	n := len(f.Den) - 1
	f.Shape = fit.Shape{Poles: n, Zeros: len(f.Num) - 1, FreeDelay: slices.Contains(m.Plant.Parameters, "delay")}
	// The noise's denominator is A D.
	f.D = []float64{1}
	a := f.H().Den
	for k := 1; k < len(m.Noise.Denominator)-n; k++ {
		d := m.Noise.Denominator[k]
		for i := 1; i <= min(k, n); i++ {
			d -= a[i] * f.D[k-i]
		}
		f.D = append(f.D, d)
	}
	f.Colour = len(f.D) - 1
	return f
}

// signSums prepares the sums. Noise shape and instruments come from all rows, or from the first ones where they may not
// depend on the levels that are tested.
func (m *Model) signSums(ctx context.Context, assume fit.Assumption, exps []*data.Experiment, rig *data.Rig, recs []fit.Record, opt Options) (*fit.SignSums, *fit.Prediction, error) {
	var from []int
	signals, dither := movingSignals(exps)
	first, start := recs, m.start()
	if assume == fit.RandomLevels {
		start = nil
		from, exps = firstRows(exps, int(tuneShare*float64(rowsOf(recs))))
		first, _, _ = records(exps)
	}
	tuned, err := m.tune(ctx, first, start, rig, opt)
	if err != nil {
		return nil, nil, err
	}
	loop, ok := loopOf(exps, rig, dither)
	if !ok {
		return nil, nil, fmt.Errorf("the first rows do not show the law that ran")
	}
	o := fit.SignSumOptions{
		Assume: assume, Outside: signals, Loop: loop, From: from, Draws: exactDraws, Largest: exactLargest, Seed: opt.Seed,
	}
	n := float64(rowsOf(first))
	for _, r := range first {
		share := float64(len(r.Y)) / n
		o.Rest.U += share * stat.Mean(r.U, nil)
		o.Rest.Y += share * stat.Mean(r.Y, nil)
	}
	h := m.Noise.SamplePeriod
	o.Whole[0] = int(math.Floor(tuned.Delay/h + 1e-9))
	o.Whole[1] = o.Whole[0]
	if tuned.FreeDelay {
		sc := scopeOf(rig, h)
		o.Whole = [2]int{int(math.Floor(sc.delay[0]/h + 1e-9)), int(math.Floor(sc.delay[1]/h + 1e-9))}
	}
	sums, err := fit.NewSignSums(recs, tuned, o)
	return sums, tuned, err
}

// knownLaw is the share of the input that a law found in the log may leave.
const knownLaw = 1e-3

// loopOf finds the law that ran, u - d = law (y - r), from the rig file where the log bears it out, or else by least
// squares, the shortest that explains the input; ok is false where there is none. dither says which of d and r is
// the outside signal.
func loopOf(exps []*data.Experiment, rig *data.Rig, dither bool) (l fit.Loop, ok bool) {
	c := checkLaw(exps, rig)
	if ok = c != nil && c.Rows == 0 && !c.SignWrong && c.Unexplained < 0.9; ok {
		den := rig.Stopgap.Denominator
		for _, v := range den {
			l.U = append(l.U, -v/den[0])
		}
		for _, v := range rig.Stopgap.Numerator {
			l.Y = append(l.Y, -v/den[0])
		}
	}
	var recs []fit.Record
	var total float64
	for _, e := range exps {
		for _, s := range e.Segments {
			y, u := slices.Clone(s.Y), slices.Clone(s.U)
			for k := range y {
				if s.R != nil {
					y[k] -= s.R[k]
				}
				if s.D != nil {
					u[k] -= s.D[k]
				}
			}
			recs = append(recs, fit.Record{U: y, Y: u}) // the law's input is y, its output u
			total += about(u)
		}
	}
	for n := 1; n <= lawOrder && !ok; n++ {
		m, _ := fit.FitARX(recs, fit.ARXOptions{NA: n, NB: n + 1, Delay: 0})
		if ok = m != nil && m.RSS < knownLaw*total; ok {
			for _, v := range m.A {
				l.U = append(l.U, -v)
			}
			l.Y = m.B
		}
	}
	if !ok {
		return fit.Loop{}, false
	}
	path := l.Y
	if dither {
		path = l.U // of -1, a_1, …, since u - d follows the law
	}
	for _, v := range path {
		l.Outside = append(l.Outside, -v)
	}
	return l, true
}

func rowsOf(recs []fit.Record) int {
	n := 0
	for _, r := range recs {
		n += len(r.Y)
	}
	return n
}

// firstRows cuts logs to their first rows, and says how many are left of each segment; those of which none is are left out.
func firstRows(exps []*data.Experiment, rows int) (kept []int, out []*data.Experiment) {
	for _, e := range exps {
		cut := *e
		cut.Segments = nil
		for _, s := range e.Segments {
			k := min(rows, len(s.Y))
			rows -= k
			kept = append(kept, k)
			if k == 0 {
				continue
			}
			s.U, s.Y, s.R, s.D = s.U[:k], s.Y[:k], s.R[:min(k, len(s.R))], s.D[:min(k, len(s.D))]
			cut.Segments = append(cut.Segments, s)
		}
		if cut.Segments != nil {
			out = append(out, &cut)
		}
	}
	return kept, out
}

// byLevels prepares sums with levels of the outside signal drawn anew, which hold whatever the noise. The error says why
// the levels are no draws, or that the first rows are too few to tune on.
func (e *Exact) byLevels(ctx context.Context, exps []*data.Experiment, rig *data.Rig, recs []fit.Record, m *Model, opt Options) (*fit.SignSums, *fit.Prediction, error) {
	signals, _ := movingSignals(exps)
	if err := checkLevels(signals, opt.Seed); err != nil {
		return nil, nil, err
	}
	sums, tuned, err := m.signSums(ctx, fit.RandomLevels, exps, rig, recs, opt)
	if err != nil {
		return nil, nil, fmt.Errorf("the first fifth of the rows does not do to prepare a test of the rest: %w", err)
	}
	e.Claim, e.Assumption = ClaimExact, levelsAssumed
	return sums, tuned, nil
}

// checkLevels looks whether the levels of an outside signal can be independent draws of one law. Their statistic of
// whiteness is ranked among those of the same levels in other orders, so that such draws are turned down once in
// 1/doubtful logs.
func checkLevels(signals [][]float64, seed uint64) error {
	_, starts := fit.Levels(signals)
	var all []float64
	for i, at := range starts {
		for _, k := range at {
			all = append(all, signals[i][k])
		}
	}
	if len(all) < leastLevels {
		return fmt.Errorf("the outside signal has only %s", counted(len(all), "level"))
	}
	whiteness := func() float64 {
		var levels [][]float64
		k := 0
		for _, at := range starts {
			levels = append(levels, all[k:k+len(at)])
			k += len(at)
		}
		q, _ := fit.LjungBox(levels, min(levelLags, len(all)/4), 0)
		return q
	}
	q := whiteness()
	rnd := rand.New(rand.NewPCG(seed, exactDraws))
	for range int(1/doubtful) - 1 {
		rnd.Shuffle(len(all), func(a, b int) { all[a], all[b] = all[b], all[a] })
		if whiteness() >= q {
			return nil
		}
	}
	return errors.New("the levels of the outside signal follow from each other: they are no independent draws")
}

// bySigns prepares sums with signs of residuals drawn anew. The noise shape is that of the same rows, so no more than an
// approximation is claimed.
func (e *Exact) bySigns(ctx context.Context, exps []*data.Experiment, rig *data.Rig, recs []fit.Record, m *Model, opt Options) (*fit.SignSums, *fit.Prediction, error) {
	e.Claim, e.Assumption = ClaimApproximate, signsAssumed
	return m.signSums(ctx, fit.SymmetricResiduals, exps, rig, recs, opt)
}
