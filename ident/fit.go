package ident

import (
	"context"
	"errors"
	"fmt"
	"math"
	"runtime"
	"slices"

	"gonum.org/v1/gonum/mat"

	"steadyrig/data"
	"steadyrig/fit"
)

// Options of Fit. The zero value is ready.
type Options struct {
	Seed     uint64                // of the draws of a short log
	Workers  int                   // structures fitted at once; 0: one a core
	Progress func(done, total int) // called as structures are done and rows gone through, from several goroutines; total 0: unknown
	Referee  bool                  // the other methods see all rows of a long log, too, and not some of them

	known *Model // whose structure Refit takes
}

// interrupt returns what a fit asks now and then: it reports that rows go by, and
// ends with ctx.
func (o Options) interrupt(ctx context.Context) func() error {
	return func() error {
		if o.Progress != nil {
			o.Progress(0, 0)
		}
		return ctx.Err()
	}
}

// Thresholds of the verdict.
const (
	soundRows     = 30   // rows a parameter below which intervals are optimistic
	soundMemories = 20   // predictor memories below which intervals are optimistic
	doubtful      = 1e-3 // probability below which a residual test speaks against the model
	wide          = 0.5  // half width of the unstable pole's interval over its value
	slowLog       = 0.3  // unstable pole times sample period from which a log is too slow
	tie           = 2    // BIC units within which two structures are not told apart
	chooseRows    = 50000
	// rowsPerParameter is what a fit has to have at the least.
	rowsPerParameter = 10
	residualLags     = 25
	triedStructures  = 3     // before a log is said to tell no parameters apart
	farBehind        = 4     // in BIC, from where no structure stands in for the best
	sandwichRows     = 50000 // up to which the covariance is made right for a structure that misses something
)

// Fit finds the plant in the logs of one rig: structure, parameters and their
// uncertainty, with the evidence for them. With a RefusedError the model still
// says what is known. Logs of different sample periods are not fitted together.
func Fit(ctx context.Context, exps []*data.Experiment, rig *data.Rig, opt Options) (*Model, error) {
	if opt.Workers == 0 {
		opt.Workers = runtime.GOMAXPROCS(0)
	}
	m := newModel(exps, rig)
	recs, period, err := records(exps)
	if err != nil {
		return m, err
	}
	m.Noise.SamplePeriod = period
	var out Outside
	var law *LawCheck
	var deaf error
	if err := Each(ctx, 3, opt.Workers, func(i int) error {
		switch i {
		case 0:
			out = outside(exps)
		case 1:
			law = checkLaw(exps, rig)
		case 2:
			deaf = refuseDeaf(recs)
		}
		return nil
	}); err != nil {
		return m, err
	}
	m.Evidence.OutsideShare = out.Share
	for _, e := range exps {
		q := &m.Evidence.Resolution
		q.Input, q.Output = math.Max(q.Input, e.InputStep), math.Max(q.Output, e.OutputStep)
	}
	if out.Quiet {
		return m.refuse(refuseQuiet(out))
	}
	if err := refuseShifted(law, rig); err != nil {
		return m.refuse(err)
	}
	if deaf != nil {
		return m.refuse(deaf)
	}

	sc := scopeOf(rig, period).with(opt.known)
	s, err := search(ctx, recs, period, sc, opt)
	var refused *RefusedError
	if errors.As(err, &refused) {
		return m.refuse(err)
	} else if err != nil {
		return m, err
	}
	recs, some, p, sp, ranked := s.recs, s.some, s.p, s.sp, s.ranked
	m.Evidence.LeftOut = leftOut(exps, s.wrong)
	exps = marked(exps, recs)
	if len(ranked) == 0 {
		return m.refuse(&RefusedError{What: fmt.Sprintf("no plant of 1 to %d poles could be fitted to the log", MaxPoles), Do: "look at the log with audit"})
	}
	if err := s.chooser.pairing(ctx, some, ranked, opt.Workers); err != nil {
		return m.refuse(err)
	}

	tried, finalists := ranked, triedStructures
	if opt.known != nil {
		ranked, finalists = notBetter(ranked), 1
	} else if ranked, err = settleIntegrators(sp, ranked); err != nil {
		return m, err
	}
	best := ranked[0]
	if need := rowsPerParameter * best.fit.Free(); p.Rows() < need {
		return m.refuse(&RefusedError{
			What: fmt.Sprintf("%d rows are too few for a plant of %s: %d are needed at the least", p.Rows(), best.structure, need),
			Do:   "log a longer run",
		})
	}
	f, ranked, err := finish(ctx, p, ranked, finalists)
	if errors.As(err, &refused) {
		return m.refuse(err)
	} else if err != nil {
		return m, err
	}
	if err := m.tests(p, recs, f); err != nil {
		return m, err
	}
	if err := m.covariance(p, f); err != nil {
		return m, err
	}
	m.describe(p, f, rig)
	m.conditions(p, some, f, rig)
	if err := m.loosen(p, f, ranked); err != nil {
		return m, err
	}
	if err := m.sample(ctx, p, f, ranked, opt); err != nil {
		return m, err
	}
	m.weighIntegrators(ranked)
	if m.Evidence.Structures = structures(ranked); opt.known != nil {
		m.Evidence.Structures = against(tried)
	}
	seen, err := s.seen(f, outsideSignals(exps), opt.Referee)
	if err != nil {
		return m, err
	}
	if err := Each(ctx, 2, opt.Workers, func(i int) (err error) {
		if i == 0 {
			m.FrequencyResponse = m.Responses(bandDraws, opt.Seed)
			return nil
		}
		m.Evidence.Methods, err = methods(ctx, seen, f, m, opt.Workers)
		return err
	}); err != nil {
		return m, err
	}
	if err := m.compare(ctx, exps, rig, p, f, opt); err != nil {
		return m, err
	}
	m.judge(ranked, out, f)
	if opt.known != nil {
		m.fitted = &refitted{p: p, f: f, some: some, sp: sp}
		m.outgrown(tried)
	}
	m.doubt(exps)
	if err := m.finite(); err != nil {
		return newModel(exps, rig).refuse(&RefusedError{What: "the log does not determine the plant: " + err.Error(), Do: "log a longer run or a stronger probe"})
	}
	return m, nil
}

// finish fits the best structure whose parameters the log tells apart to the
// end, and puts it first. It looks at the first few.
func finish(ctx context.Context, p *fit.Predictor, ranked []*candidate, few int) (*fit.Prediction, []*candidate, error) {
	for i, c := range ranked[:min(few, len(ranked))] {
		if c.bic > ranked[0].bic+farBehind {
			break
		}
		f, err := p.Fit(c.fit, finalTol, finalSteps)
		if err == nil {
			err = p.Covariance(f)
		}
		if err == nil {
			rest := slices.Delete(slices.Clone(ranked), i, i+1)
			return f, append([]*candidate{c}, rest...), nil
		}
		if ctx.Err() != nil {
			return nil, nil, ctx.Err()
		}
	}
	return nil, nil, &RefusedError{What: "the log does not tell the plant's parameters apart", Do: "log a run with a stronger probe"}
}

func newModel(exps []*data.Experiment, rig *data.Rig) *Model {
	m := &Model{
		Schema: Schema, Rig: rig.Name, Verdict: Refused, Warnings: []string{}, Poles: []Root{}, Zeros: []Root{},
		Plant:    Plant{Numerator: []float64{}, Denominator: []float64{}, Parameters: []string{}, Covariance: [][]float64{}},
		Noise:    Noise{Numerator: []float64{}, Denominator: []float64{}},
		Evidence: Evidence{Structures: []Structure{}, Methods: []Method{}, LeftOut: []LeftOut{}},
	}
	m.clipped(exps)
	for _, e := range exps {
		m.Logs = append(m.Logs, LogUse{File: e.File, SHA256: e.SHA256, Rows: e.Rows, Used: e.Used, Segments: len(e.Segments)})
	}
	return m
}

// refuse marks the model and passes the reason on.
func (m *Model) refuse(err error) (*Model, error) {
	m.Verdict = Refused
	m.Warnings = append(m.Warnings, err.Error())
	return m, err
}

// records lists the segments of all logs for the estimators.
func records(exps []*data.Experiment) ([]fit.Record, float64, error) {
	var recs []fit.Record
	period := exps[0].Period
	for i, e := range exps {
		if math.Abs(e.Period-period) > 1e-3*period {
			return nil, 0, fmt.Errorf("%s is sampled every %.6g s, %s every %.6g s: fit logs of one period together", exps[0].File, period, e.File, e.Period)
		}
		for k, s := range e.Segments {
			recs = append(recs, fit.Record{U: s.U, Y: s.Y, Missing: s.Wrong, Log: i, Resumes: k > 0 && resumes(e, k)})
		}
	}
	return recs, period, nil
}

// stretch is samples [from, to) of a record. resumes: it shares the constant of
// the stretch before.
type stretch struct {
	record, from, to int
	resumes          bool
}

// stretches takes about so many rows in blocks spread evenly over the records;
// of short records some are taken whole, others not at all. Of a log of more
// than chooseRows rows a block lies where, in its share of the record, the input
// moves most: the probe may have acted for a part of it only.
func stretches(recs []fit.Record, rows int) []stretch {
	const blocks, block = 5, 2000
	var total int
	for _, r := range recs {
		total += len(r.Y)
	}
	var out []stretch
	due := 0.0       // rows not yet taken of those passed
	resumed := false // the constant of the record before is among those taken
	for i, r := range recs {
		resumed = resumed && r.Resumes
		due += float64(rows) * float64(len(r.Y)) / float64(total)
		if due < float64(min(block, len(r.Y))) && len(recs) > 1 {
			continue
		}
		share := min(int(due), len(r.Y))
		due = 0
		k := max(1, min(blocks, share/block))
		size := share / k
		for b := range k {
			from := 0
			if k > 1 {
				from = b * (len(r.Y) - size) / (k - 1)
			}
			if total > chooseRows {
				from = liveliest(r.U, b*len(r.U)/k, (b+1)*len(r.U)/k, size)
			}
			out = append(out, stretch{i, from, min(from+size, len(r.Y)), resumed && k == 1})
		}
		resumed = true
	}
	return out
}

// liveliest returns where in [from, to) of u so many rows start, to half of them,
// in which it moves most.
func liveliest(u []float64, from, to, rows int) int {
	at, most := from, -1.0
	for k := from; k+rows <= to; k += max(1, rows/2) {
		if v := about(u[k : k+rows]); v > most {
			at, most = k, v
		}
	}
	return at
}

// taken cuts records to stretches.
func taken(recs []fit.Record, list []stretch) []fit.Record {
	var out []fit.Record
	for _, s := range list {
		cut := recs[s.record].Rows(s.from, s.to)
		cut.Resumes = s.resumes
		out = append(out, cut)
	}
	return out
}

func spreadOver(recs []fit.Record, rows int) []fit.Record { return taken(recs, stretches(recs, rows)) }

func (s structure) String() string {
	words := counted(s.poles, "pole")
	if s.integrators > 0 {
		words += " (" + counted(s.integrators, "integrator") + ")"
	}
	if s.zeros > 0 {
		words += ", " + counted(s.zeros, "zero")
	}
	if s.delay {
		words += ", a delay"
	}
	if s.colour > 0 {
		words += ", " + counted(s.colour, "disturbance pole")
	}
	return words
}

// counted says how many of a thing there are.
func counted(n int, thing string) string {
	if n == 1 {
		return "1 " + thing
	}
	return fmt.Sprintf("%d %ss", n, thing)
}

// lead is the leading numerator coefficient.
func lead(f *fit.Prediction) float64 { return f.Num[len(f.Num)-1] }

// plant fills in the transfer function with its covariance.
func (m *Model) plant(f *fit.Prediction) {
	m.Plant = Plant{Numerator: reversed(f.Num), Denominator: reversed(f.Den), Delay: f.Delay}
	m.Plant.Parameters = parameterNames(f.Zeros, f.Poles)
	if f.FreeDelay {
		m.Plant.Parameters = append(m.Plant.Parameters, "delay")
		sd := math.Sqrt(f.Cov.At(f.Zeros+1+f.Poles, f.Zeros+1+f.Poles))
		m.Plant.Delay95 = &Interval{f.Delay - z95*sd, f.Delay + z95*sd}
	}
	m.Plant.Covariance = make([][]float64, len(m.Plant.Parameters))
	for i := range m.Plant.Covariance {
		m.Plant.Covariance[i] = make([]float64, len(m.Plant.Parameters))
		for j := range m.Plant.Covariance[i] {
			m.Plant.Covariance[i][j] = f.Cov.At(i, j)
		}
	}
}

// describe fills in plant, poles, zeros, gains, noise and operating point.
func (m *Model) describe(p *fit.Predictor, f *fit.Prediction, rig *data.Rig) {
	m.plant(f)
	m.derive()

	h := f.H()
	m.Noise = Noise{Numerator: h.Num, Denominator: h.Den, SD: noiseSD(p, f), SamplePeriod: f.Period}
	switch o := rig.OperatingPoint; {
	case o != nil:
		m.OperatingPoint = OperatingPoint{Input: o.Input, Output: o.Output}
	default:
		var u, y float64
		_, means := p.Means()
		for i, mean := range means {
			y += mean / float64(len(means))
			u += p.Rest(f, i, mean) / float64(len(means))
		}
		m.OperatingPoint = OperatingPoint{Input: u, Output: y}
	}
}

// derive computes poles, zeros and gains with their intervals from the plant's
// coefficients and covariance.
func (m *Model) derive() {
	nz, n := len(m.Plant.Numerator), len(m.Plant.Denominator)-1
	at := func(i, j int) float64 { return m.Plant.Covariance[i][j] }
	m.Poles = m.denominator().roots()
	m.Zeros = []Root{}
	if nz > 1 {
		num := uncertain{p: reversed(m.Plant.Numerator), cov: mat.NewSymDense(nz, nil)}
		for i := range nz {
			for j := i; j < nz; j++ {
				num.cov.SetSym(i, j, at(i, j))
			}
		}
		m.Zeros = num.roots()
	}
	high := m.Plant.Numerator[0]
	m.Gain.HighFrequency = estimate(high, math.Sqrt(at(nz-1, nz-1)))
	b0, an := m.Plant.Numerator[nz-1], m.Plant.Denominator[n]
	sd := math.Sqrt(math.Max(0, at(nz+n-1, nz+n-1)))
	m.Gain.DC = nil
	if math.Abs(an) > z95*sd {
		dc := b0 / an
		v := at(0, 0)/(an*an) + dc*dc*sd*sd/(an*an) - 2*dc*at(0, nz+n-1)/(an*an)
		m.Gain.DC = estimate(dc, math.Sqrt(math.Max(0, v)))
	}
}

// denominator returns the plant's denominator with its covariance.
func (m *Model) denominator() uncertain {
	nz, n := len(m.Plant.Numerator), len(m.Plant.Denominator)-1
	den := uncertain{p: reversed(m.Plant.Denominator), cov: mat.NewSymDense(n+1, nil)}
	for i := range n {
		for j := i; j < n; j++ {
			den.cov.SetSym(i, j, m.Plant.Covariance[nz+n-1-i][nz+n-1-j])
		}
	}
	return den
}

func estimate(v, sd float64) *Estimate {
	return &Estimate{Value: v, SD: sd, Interval95: Interval{v - z95*sd, v + z95*sd}}
}

// structures lists the best candidates with why the others lost.
func structures(ranked []*candidate) []Structure {
	var out []Structure
	for i, c := range ranked[:min(8, len(ranked))] {
		s := Structure{Poles: c.poles, Zeros: c.zeros, Colour: c.colour, Delay: c.fit.Delay, Integrators: c.integrators, BIC: c.bic - ranked[0].bic, Chosen: i == 0}
		gain := float64(c.fit.Rows) * math.Log(c.fit.Objective()/ranked[0].fit.Objective())
		switch extra := c.fit.Free() - ranked[0].fit.Free(); {
		case i == 0:
			s.Verdict = "chosen"
		case s.BIC < 0:
			s.Verdict = "set aside: the log does not tell its parameters apart"
		case s.BIC < tie:
			s.Verdict = "tie: the log does not tell it from the winner"
		case extra > 0:
			s.Verdict = fmt.Sprintf("%s brought a likelihood ratio of only %.1f", counted(extra, "more parameter"), -gain)
		default:
			s.Verdict = fmt.Sprintf("misses a likelihood ratio of %.1f", gain)
		}
		out = append(out, s)
	}
	return out
}
