package ident

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"math/cmplx"
	"runtime"
	"slices"

	"gonum.org/v1/gonum/mat"

	"steadyrig/data"
	"steadyrig/fit"
)

// Options of Fit. The zero value is ready.
type Options struct {
	Seed     uint64                // of the replays of a short log
	Workers  int                   // structures fitted at once; 0: one a core
	Progress func(done, total int) // called as structures are done; total 0: unknown
}

// Thresholds of the verdict.
const (
	soundMemories = 20   // predictor memories below which intervals are optimistic
	doubtful      = 1e-3 // probability below which a residual test speaks against the model
	wide          = 0.5  // half width of the unstable pole's interval over its value
	slowLog       = 0.3  // unstable pole times sample period from which a log is too slow
	tie           = 2    // BIC units within which two structures are not told apart
	chooseRows    = 50000
	// rowsPerParameter is what a fit has to have at the least.
	rowsPerParameter = 10
	residualLags     = 25
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
	m.Evidence.OutsideShare = 0
	out := outside(exps)
	m.Evidence.OutsideShare = out.Share
	if out.Quiet {
		return m.refuse(refuseQuiet(out))
	}
	if err := refuseShifted(checkLaw(exps, rig), rig); err != nil {
		return m.refuse(err)
	}

	if err := refuseDeaf(recs); err != nil {
		return m.refuse(err)
	}

	sc := scopeOf(rig, period)
	p, err := fit.NewPredictor(recs, period, math.Max(sc.delay[1], sc.base))
	if err != nil {
		return m.refuse(&RefusedError{What: err.Error(), Do: "log a longer run"})
	}
	some, sp := recs, p
	if p.Rows() > chooseRows {
		some = spreadOver(recs, chooseRows)
		if sp, err = fit.NewPredictor(some, period, math.Max(sc.delay[1], sc.base)); err != nil {
			return m, err
		}
	}
	c, err := newChooser(sp, some, sc, opt.Workers)
	if err != nil {
		return m.refuse(&RefusedError{What: "no long model could be fitted: " + err.Error(), Do: "log a run in which input and output move"})
	}
	ranked, err := c.choose(ctx, opt.Progress)
	if err != nil {
		return m, err
	}
	if len(ranked) == 0 {
		return m.refuse(&RefusedError{What: "no plant of 1 to 5 poles could be fitted to the log", Do: "look at the log with audit"})
	}
	if err := c.pairing(ctx, some, ranked, opt.Workers); err != nil {
		return m.refuse(err)
	}

	if ranked, err = settleIntegrators(sp, ranked); err != nil {
		return m, err
	}
	best := ranked[0]
	if need := rowsPerParameter * best.fit.Free(); p.Rows() < need {
		return m.refuse(&RefusedError{
			What: fmt.Sprintf("%d rows are too few for a plant of %s: %d are needed at the least", p.Rows(), best.structure, need),
			Do:   "log a longer run",
		})
	}
	f, err := p.Fit(best.fit, finalTol, finalSteps)
	if err != nil {
		return m, fmt.Errorf("fitting %s: %w", best.structure, err)
	}
	if err := p.Covariance(f); err != nil {
		return m.refuse(&RefusedError{What: "the log does not tell the plant's parameters apart", Do: "log a run with a stronger probe"})
	}
	m.describe(p, f, rig)
	if err := m.calibrate(ctx, exps, rig, p, recs, f, opt); err != nil {
		return m, err
	}
	if err := m.loosen(p, f, ranked); err != nil {
		return m, err
	}
	m.Evidence.Structures = structures(ranked)
	m.Evidence.Methods = methods(some, outsideSignals(exps, some), f, m.Poles)
	if err := m.tests(p, recs, f); err != nil {
		return m, err
	}
	m.judge(ranked, out, f)
	if err := m.finite(); err != nil {
		return newModel(exps, rig).refuse(&RefusedError{What: "the log does not determine the plant: " + err.Error(), Do: "log a longer run or a stronger probe"})
	}
	return m, nil
}

func newModel(exps []*data.Experiment, rig *data.Rig) *Model {
	m := &Model{
		Schema: Schema, Rig: rig.Name, Verdict: Refused, Warnings: []string{}, Poles: []Root{}, Zeros: []Root{},
		Plant:    Plant{Numerator: []float64{}, Denominator: []float64{}, Parameters: []string{}, Covariance: [][]float64{}},
		Noise:    Noise{Numerator: []float64{}, Denominator: []float64{}},
		Evidence: Evidence{Structures: []Structure{}, Methods: []Method{}},
	}
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
	for _, e := range exps {
		if math.Abs(e.Period-period) > 1e-3*period {
			return nil, 0, fmt.Errorf("%s is sampled every %.6g s, %s every %.6g s: fit logs of one period together", exps[0].File, period, e.File, e.Period)
		}
		for _, s := range e.Segments {
			recs = append(recs, fit.Record{U: s.U, Y: s.Y})
		}
	}
	return recs, period, nil
}

// spreadOver takes at most rows rows in blocks spread evenly over the records.
func spreadOver(recs []fit.Record, rows int) []fit.Record {
	const blocks = 5
	var total int
	for _, r := range recs {
		total += len(r.Y)
	}
	var out []fit.Record
	for _, r := range recs {
		share := rows * len(r.Y) / total
		k := max(1, min(blocks, share/2000))
		size := share / k
		for b := range k {
			from := 0
			if k > 1 {
				from = b * (len(r.Y) - size) / (k - 1)
			}
			to := min(from+size, len(r.Y))
			out = append(out, fit.Record{U: r.U[from:to], Y: r.Y[from:to]})
		}
	}
	return out
}

func (s structure) String() string {
	words := fmt.Sprintf("%d poles", s.poles)
	if s.poles == 1 {
		words = "1 pole"
	}
	switch s.integrators {
	case 0:
	case 1:
		words += " (1 integrator)"
	default:
		words += fmt.Sprintf(" (%d integrators)", s.integrators)
	}
	switch s.zeros {
	case 0:
	case 1:
		words += ", 1 zero"
	default:
		words += fmt.Sprintf(", %d zeros", s.zeros)
	}
	if s.delay {
		words += ", a delay"
	}
	switch s.colour {
	case 0:
	case 1:
		words += ", 1 disturbance pole"
	default:
		words += fmt.Sprintf(", %d disturbance poles", s.colour)
	}
	return words
}

// pairingGain is the gain in BIC from which the other pairing is believed: odds
// of 20 to 1. Two far zeros imitate an advance of one row, so that the wrong
// pairing loses little but their two parameters.
const pairingGain = 6

// pairing refuses logs whose output answers to the input of the next row: then
// a plant of the same poles, with no more zeros, fits clearly better with the
// input moved up by one row.
//
// Moved up, the input of a well paired log gives away the output that it
// answers to, u = -K y, so a model that can undo the move by other means would
// win. Those means are a relative degree of one, another pole, a zero in the
// right half-plane; they are left out. And such an answer within the row shows
// by itself, as a direct term from input to output against the plant's gain.
func (c *chooser) pairing(ctx context.Context, recs []fit.Record, ranked []*candidate, workers int) error {
	best := ranked[0]
	if best.fit.Delay > c.p.Period || c.scope.base > 0 {
		return nil
	}
	if c.answersWithinRow(recs, lead(best.fit)) {
		return nil
	}
	moved := make([]fit.Record, len(recs))
	for i, r := range recs {
		n := len(r.Y)
		moved[i] = fit.Record{U: r.U[1:], Y: r.Y[:n-1]}
	}
	p, err := fit.NewPredictor(moved, c.p.Period, c.scope.delay[1])
	if err != nil {
		return nil
	}
	sc := c.scope
	sc.freeDelay, sc.mustDelay, sc.base, sc.delay = false, false, 0, [2]float64{}
	late, err := newChooser(p, moved, sc, workers)
	if err != nil {
		return nil
	}
	var list []structure
	for n := max(2, sc.minPoles, best.poles-1); n <= best.poles; n++ {
		for m := sc.minZeros; m <= min(n-2, best.zeros, sc.maxZeros); m++ {
			list = append(list, structure{poles: n, zeros: m, colour: best.colour, integrators: min(best.integrators, n)})
		}
	}
	if err := late.try(ctx, list, nil, nil); err != nil {
		return err
	}
	for _, cand := range late.ranked() {
		// Criteria per row, since a row is lost.
		gain := (best.bic/float64(c.p.Rows()) - cand.bic/float64(p.Rows())) * float64(p.Rows())
		if slices.ContainsFunc(cand.fit.Num.Roots(), func(z complex128) bool { return real(z) > 0 }) {
			continue
		}
		if gain > pairingGain && math.Signbit(lead(cand.fit)) == math.Signbit(lead(best.fit)) {
			return &RefusedError{
				What: fmt.Sprintf("the columns are paired one row off: the output answers to the input of the row after (BIC %.0f better)", gain),
				Do:   `the input is logged a row late: set input_row = "before" in [log], or shift the column`,
			}
		}
	}
	return nil
}

// directOrder is the order of the long model in which the direct term is
// looked for, directSure by how many deviations it must show.
const (
	directOrder = 16
	directSure  = 3
)

// answersWithinRow reports whether the output of a row and the input of the
// same row have a direct relation of the sign of feedback, opposite to gain.
func (c *chooser) answersWithinRow(recs []fit.Record, gain float64) bool {
	m, _ := fit.FitARX(recs, fit.ARXOptions{NA: directOrder, NB: directOrder, Delay: 0})
	if m == nil {
		return false
	}
	t := m.B[0] / math.Sqrt(m.Cov.At(directOrder, directOrder))
	return t < -directSure && gain > 0 || t > directSure && gain < 0
}

// lead is the leading numerator coefficient.
func lead(f *fit.Prediction) float64 { return f.Num[len(f.Num)-1] }

// plant fills in the transfer function with its covariance.
func (m *Model) plant(f *fit.Prediction) {
	m.Plant = Plant{Numerator: reversed(f.Num), Denominator: reversed(f.Den), Delay: f.Delay}
	for i := range f.Zeros + 1 {
		m.Plant.Parameters = append(m.Plant.Parameters, fmt.Sprintf("b%d", i))
	}
	for i := 1; i <= f.Poles; i++ {
		m.Plant.Parameters = append(m.Plant.Parameters, fmt.Sprintf("a%d", i))
	}
	if f.FreeDelay {
		m.Plant.Parameters = append(m.Plant.Parameters, "delay")
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
	m.Noise = Noise{Numerator: h.Num, Denominator: h.Den, SD: math.Sqrt(f.Variance), SamplePeriod: f.Period}
	switch o := rig.OperatingPoint; {
	case o != nil:
		m.OperatingPoint = OperatingPoint{Input: o.Input, Output: o.Output}
	default:
		var u, y float64
		means := p.Means()
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
	den := uncertain{p: reversed(m.Plant.Denominator), cov: mat.NewSymDense(n+1, nil)}
	for i := range n {
		for j := i; j < n; j++ {
			den.cov.SetSym(i, j, at(nz+n-1-i, nz+n-1-j))
		}
	}
	m.Poles = den.roots()
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

func estimate(v, sd float64) *Estimate {
	return &Estimate{Value: v, SD: sd, Interval95: Interval{v - z95*sd, v + z95*sd}}
}

// integratorSpan is how far a free pole may lie from zero, over its interval, in
// units of the mean speed of the other poles, for an exact integrator to stand
// in for it.
const integratorSpan = 0.2

// settleIntegrators moves structures with exact integrators behind the best
// one without where the log is too poor to tell an integrator from a pole that
// matters: loops designed for exact integrators would rest on nothing.
func settleIntegrators(p *fit.Predictor, ranked []*candidate) ([]*candidate, error) {
	best := ranked[0]
	if best.integrators == 0 {
		return ranked, nil
	}
	at := slices.IndexFunc(ranked, func(c *candidate) bool { return c.integrators == 0 })
	if at < 0 {
		return ranked, nil
	}
	free := ranked[at]
	same := slices.IndexFunc(ranked, func(c *candidate) bool {
		s := best.structure
		s.integrators = 0
		return c.structure == s
	})
	if same >= 0 {
		free = ranked[same]
	}
	f, err := p.Fit(free.fit, compareTol, compareStep)
	if err != nil {
		return nil, fmt.Errorf("fitting %s: %w", free.structure, err)
	}
	if p.Covariance(f) == nil {
		var m Model
		m.plant(f)
		m.derive()
		slow := bySpeed(m.Poles)
		mean, others := 1.0, slow[min(best.integrators, len(slow)):]
		for _, r := range others {
			mean *= math.Hypot(r.Re, r.Im)
		}
		if len(others) > 0 {
			mean = math.Pow(mean, 1/float64(len(others)))
		} else {
			mean = fastest / f.Period
		}
		reach := 0.0
		for _, r := range slow[:min(best.integrators, len(slow))] {
			reach = math.Max(reach, math.Max(math.Max(-r.Re95.Lo, r.Re95.Hi), r.Im95.Hi))
		}
		if reach < integratorSpan*mean {
			return ranked, nil
		}
	}
	rest := slices.DeleteFunc(slices.Clone(ranked), func(c *candidate) bool { return c == free })
	return append([]*candidate{free}, rest...), nil
}

// fastest is the speed, per sample, that poles are set against where a plant
// has integrators only.
const fastest = 0.2

// bySpeed sorts roots by modulus.
func bySpeed(roots []Root) []Root {
	out := slices.Clone(roots)
	slices.SortStableFunc(out, func(a, b Root) int { return cmp.Compare(math.Hypot(a.Re, a.Im), math.Hypot(b.Re, b.Im)) })
	return out
}

// loosen gives integrators the intervals of free poles. That a pole is exactly
// zero was chosen, not measured: what the log says about it is the interval of
// the same structure with the pole free, joined with zero, and the probability
// that the free pole is unstable, times the weight exp(-ΔBIC/2) of that
// structure against the chosen one (Schwarz 1978).
func (m *Model) loosen(p *fit.Predictor, f *fit.Prediction, ranked []*candidate) error {
	if f.Integrators == 0 {
		return nil
	}
	start := copyOf(f)
	start.Integrators = 0
	// Off the double pole, where the roots have no slope.
	for _, c := range ranked {
		if c.poles == f.Poles && c.zeros == f.Zeros && c.colour == f.Shape.Colour && c.delay == f.FreeDelay && c.integrators == 0 {
			start = c.fit
		}
	}
	free, err := p.Fit(start, finalTol, finalSteps)
	if err != nil {
		return fmt.Errorf("fitting integrators as free poles: %w", err)
	}
	if err := p.Covariance(free); err != nil {
		return nil // the chosen structure stands, its poles at zero without a width
	}
	var other Model
	other.plant(free)
	if c := m.Evidence.Calibration; c != nil {
		other.widen(c.Factor)
	}
	other.derive()
	weight := 1 / (1 + math.Exp((free.BIC()-f.BIC())/2))
	// Integrators are the slowest poles of the free structure.
	slow := bySpeed(other.Poles)[:f.Integrators]
	slices.SortStableFunc(slow, func(a, b Root) int { return cmp.Or(cmp.Compare(a.Re, b.Re), cmp.Compare(a.Im, b.Im)) })
	k := 0
	for i := range m.Poles {
		if m.Poles[i].Re != 0 || m.Poles[i].Im != 0 || k == len(slow) {
			continue
		}
		r := slow[k]
		k++
		join := func(iv Interval) Interval { return Interval{math.Min(iv.Lo, 0), math.Max(iv.Hi, 0)} }
		m.Poles[i] = Root{
			ReSD: r.ReSD, ImSD: r.ImSD, Re95: join(r.Re95), Im95: join(r.Im95), Re95All: join(r.Re95All), Im95All: join(r.Im95All),
			ProbabilityUnstable: r.ProbabilityUnstable * weight,
		}
	}
	return nil
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
		case s.BIC < tie:
			s.Verdict = "tie: the log does not tell it from the winner"
		case extra > 0:
			s.Verdict = fmt.Sprintf("%d more parameters bring a likelihood ratio of only %.1f", extra, -gain)
		default:
			s.Verdict = fmt.Sprintf("misses a likelihood ratio of %.1f", gain)
		}
		out = append(out, s)
	}
	return out
}

// outsideSignals returns the logged dither, or else the reference, of each
// record; nil where neither is logged throughout or the records are blocks of
// the log only.
func outsideSignals(exps []*data.Experiment, recs []fit.Record) [][]float64 {
	var dither, reference [][]float64
	n := 0
	for _, e := range exps {
		for _, s := range e.Segments {
			n++
			if s.D != nil {
				dither = append(dither, s.D)
			}
			if s.R != nil {
				reference = append(reference, s.R)
			}
		}
	}
	if len(recs) != n {
		return nil
	}
	if len(dither) == n {
		return dither
	}
	if len(reference) == n {
		return reference
	}
	return nil
}

// methods estimates the poles by other ways than maximum likelihood and says
// whether they find the same unstable poles.
func methods(recs []fit.Record, signals [][]float64, f *fit.Prediction, poles []Root) []Method {
	list := []Method{{Name: "prediction", Agrees: true, Poles: [][2]float64{}}}
	for _, r := range poles {
		list[0].Poles = append(list[0].Poles, [2]float64{r.Re, r.Im})
	}
	whole := max(0, int(math.Floor(f.Delay/f.Period+1e-9)))
	add := func(name string, z []complex128, sd float64, err error) {
		m := Method{Name: name, Poles: [][2]float64{}}
		if err != nil {
			m.Note = err.Error()
			list = append(list, m)
			return
		}
		for _, v := range z {
			if s, ok := inContinuousTime(v, f.Period); ok {
				m.Poles = append(m.Poles, [2]float64{real(s), imag(s)})
			}
		}
		m.Agrees, m.Note = agreement(m.Poles, poles, sd)
		list = append(list, m)
	}
	order := f.Poles + f.Shape.Colour + whole + 1
	if s, err := fit.Subspace(recs, fit.SubspaceOptions{Order: order}); err != nil {
		add("state", nil, 0, err)
	} else {
		add("state", s.Poles, 0, nil)
	}
	longer, err := fit.LongARX(recs)
	if longer == nil {
		add("long", nil, 0, err)
	} else {
		k := f.Poles + f.Shape.Colour
		// Leading coefficients of B before the delay are zero but for errors.
		if ns, err := fit.NullSpace(longer, fit.NullSpaceOptions{NA: k, NB: k + whole + 1, NC: k}); err != nil {
			add("long", nil, 0, err)
		} else {
			add("long", ns.Poles(), 0, nil)
		}
	}
	if signals != nil && !f.Converged {
		return list
	}
	if signals != nil {
		iv, err := fit.Instrument(recs, signals, fit.InstrumentOptions{NA: f.Poles, NB: f.Poles + 1, Delay: 1 + whole, Filter: f.C})
		switch {
		case err != nil:
			list = append(list, Method{Name: "outside", Poles: [][2]float64{}, Agrees: true, Note: "says nothing here: " + err.Error()})
		default:
			add("outside", iv.Poles(), unstableDeviation(iv, f.Period), nil)
			if last := &list[len(list)-1]; !last.Agrees && iv.Share < weakInstrument {
				last.Agrees, last.Note = true, "says little here: "+last.Note
			}
		}
	}
	return list
}

// weakInstrument is the share of a regressor that the outside signal must
// explain for its verdict to count.
const weakInstrument = 0.01

// unstableDeviation is the deviation of the outermost real or complex pole of
// an instrumental estimate, in rad/s.
func unstableDeviation(iv *fit.InstrumentResult, period float64) float64 {
	n := len(iv.A) - 1
	den := uncertain{p: make([]float64, n+1), cov: mat.NewSymDense(n+1, nil)}
	for i := range n + 1 {
		den.p[i] = iv.A[n-i]
	}
	for i := range n {
		for j := i; j < n; j++ {
			den.cov.SetSym(i, j, iv.Cov.At(n-1-i, n-1-j))
		}
	}
	var sd float64
	var size float64
	for _, z := range den.roots() {
		if r := math.Hypot(z.Re, z.Im); r > size && z.Re > 0 {
			size, sd = r, math.Hypot(z.ReSD, z.ImSD)/(r*period)
		}
	}
	return sd
}

// inContinuousTime returns log(z)/period where a real plant can have it.
func inContinuousTime(z complex128, period float64) (complex128, bool) {
	if cmplx.Abs(z) < 1e-6 || imag(z) == 0 && real(z) < 0 {
		return 0, false
	}
	return cmplx.Log(z) / complex(period, 0), true
}

// agreementShare is by how much of its modulus an unstable pole of a rougher
// method may differ, beyond four deviations of the two estimates; a method
// without a deviation of its own is given twice that of the final one.
const agreementShare = 0.1

// agreement compares the poles of a method with the final ones that matter: the
// unstable ones and integrators, or else the rightmost.
func agreement(found [][2]float64, poles []Root, sd float64) (bool, string) {
	var matter []Root
	for _, p := range poles {
		if p.Im >= 0 && (p.ProbabilityUnstable >= 0.5 || p.Re == 0) {
			matter = append(matter, p)
		}
	}
	if len(matter) == 0 {
		matter = append(matter, slices.MaxFunc(poles, func(a, b Root) int { return cmp.Or(cmp.Compare(a.Re, b.Re), cmp.Compare(a.Im, b.Im)) }))
	}
	agrees, note := true, ""
	for _, p := range matter {
		at := complex(p.Re, p.Im)
		near := math.Inf(1)
		for _, q := range found {
			near = math.Min(near, cmplx.Abs(complex(q[0], q[1])-at))
		}
		own := math.Hypot(p.ReSD, p.ImSD)
		other := sd
		if !(other > 0) {
			other = 2 * own
		}
		if near > agreementShare*cmplx.Abs(at)+4*math.Hypot(own, other) {
			agrees = false
		}
		if note != "" {
			note += ", "
		}
		note += fmt.Sprintf("pole at %.3g off by %.2g rad/s", real(at), near)
		if sd > 0 {
			note += fmt.Sprintf(", %.1f deviations", near/math.Hypot(own, sd))
		}
	}
	return agrees, note
}

// tests looks at what the model leaves unexplained, on the rows of the fit, and
// at how much it explains on rows kept out of one.
func (m *Model) tests(p *fit.Predictor, recs []fit.Record, f *fit.Prediction) error {
	e, _, err := p.Errors(f)
	if err != nil {
		return err
	}
	lags := min(residualLags, p.Rows()/20)
	m.Evidence.Residuals.Lags = lags
	if lags < 2 {
		return nil
	}
	fitted := min(f.Poles+f.Colour, lags-1)
	// A constant taken out of a short record leaves its errors correlated:
	// only the longer ones are tested where there are several.
	m.Evidence.Residuals.Whiteness = 1
	whole := e
	if len(e) > 1 {
		whole = slices.DeleteFunc(slices.Clone(e), func(x []float64) bool { return len(x) < 20*lags })
	}
	if len(whole) > 0 {
		_, m.Evidence.Residuals.Whiteness = fit.LjungBox(whole, lags, fitted)
	} else {
		m.Evidence.Residuals.Lags = 0 // not tested
	}
	pairs := make([]fit.Record, len(e))
	for i, u := range p.Inputs() {
		pairs[i] = fit.Record{U: u, Y: e[i]}
	}
	if _, prob, err := fit.PastInputs(pairs, lags); err == nil {
		m.Evidence.Residuals.CrossInput = prob
	} else {
		m.Evidence.Residuals.CrossInput = 1
	}
	m.Evidence.Memories = float64(p.Rows()) / memory(decaying(f))
	m.Evidence.ExplainedShare = explained(p, recs, f)
	return nil
}

// decaying lists the zeros of C, those aside that lie on the unit circle because
// a plant pole does.
func decaying(f *fit.Prediction) []complex128 {
	return slices.DeleteFunc(zRoots(f.C), func(z complex128) bool { return cmplx.Abs(z) >= 1-circle && mirrors(f, z) })
}

// memory is the time constant in samples of a predictor with the given poles,
// that of the slowest.
func memory(zeros []complex128) float64 {
	var slow float64
	for _, z := range zeros {
		slow = math.Max(slow, cmplx.Abs(z))
	}
	if slow == 0 {
		return 1
	}
	return math.Max(1, -1/math.Log(slow))
}

// explained refits the structure on the first two thirds of the records, or of
// each where there are few, and returns 1 - var(e)/var(y) on the rest.
func explained(p *fit.Predictor, recs []fit.Record, f *fit.Prediction) float64 {
	var first, rest []fit.Record
	for i, r := range recs {
		cut := 2 * len(r.Y) / 3
		if len(recs) > 5 {
			if i < 2*len(recs)/3 {
				first = append(first, r)
			} else {
				rest = append(rest, r)
			}
			continue
		}
		first = append(first, fit.Record{U: r.U[:cut], Y: r.Y[:cut]})
		rest = append(rest, fit.Record{U: r.U[cut:], Y: r.Y[cut:]})
	}
	a, err := fit.NewPredictor(first, p.Period, p.DelayRange[1])
	if err != nil {
		return 0
	}
	a.DelayRange = p.DelayRange
	part, err := a.Fit(f, compareTol, compareStep)
	if err != nil {
		return 0
	}
	b, err := fit.NewPredictor(rest, p.Period, p.DelayRange[1])
	if err != nil {
		return 0
	}
	b.DelayRange = p.DelayRange
	e, _, err := b.Errors(part)
	if err != nil {
		return 0
	}
	var ee, yy float64
	for i, x := range e {
		for _, v := range x {
			ee += v * v
		}
		y := rest[min(i, len(rest)-1)].Y
		yy += about(y) * float64(len(x)) / float64(len(y))
	}
	return 1 - ee/yy
}

// judge sets the verdict and says why it is not better.
func (m *Model) judge(ranked []*candidate, out Outside, f *fit.Prediction) {
	m.Verdict = Sound
	weak := func(format string, args ...any) {
		m.Verdict = Weak
		m.Warnings = append(m.Warnings, fmt.Sprintf(format, args...))
	}
	note := func(format string, args ...any) { m.Warnings = append(m.Warnings, fmt.Sprintf(format, args...)) }
	if out.Share < faintShare {
		weak("%s: the intervals rest on little", out.Words)
	}
	if m.Evidence.Memories < soundMemories {
		weak("the log is only %.0f predictor memories long, intervals are optimistic below %d: log a longer run", m.Evidence.Memories, soundMemories)
	}
	if m.Evidence.Residuals.Lags == 0 {
		weak("the log is in pieces too short to test what the model leaves over")
	}
	if p := m.Evidence.Residuals.Whiteness; p < doubtful {
		weak("the prediction errors are not white (probability %.2g): the structure misses something", p)
	}
	if p := m.Evidence.Residuals.CrossInput; p < doubtful {
		weak("past inputs still explain part of the prediction errors (probability %.2g): the plant misses something", p)
	}
	for _, c := range ranked[1:] {
		if c.bic-ranked[0].bic < tie {
			note("tie of structures: %s is hardly worse than the chosen %s", c.structure, ranked[0].structure)
		}
	}
	unstable := false
	for _, p := range m.Poles {
		if p.Im < 0 {
			continue
		}
		size := math.Hypot(p.Re, p.Im)
		switch {
		case p.ProbabilityUnstable > 0.025 && p.ProbabilityUnstable < 0.975:
			note("whether the pole at %.3g rad/s is unstable is open: probability %.2g", p.Re, p.ProbabilityUnstable)
		case p.Unstable:
			unstable = true
			if half := (p.Re95.Hi - p.Re95.Lo) / 2; half > wide*size {
				weak("the unstable pole is known to %.2g +- %.2g rad/s only: a stronger or longer probe is needed", p.Re, half)
			}
		}
	}
	if !unstable && f.Integrators == 0 && slices.IndexFunc(m.Poles, func(p Root) bool { return p.ProbabilityUnstable > 0.025 }) < 0 {
		note("no unstable pole was found")
	}
	for _, method := range m.Evidence.Methods {
		if !method.Agrees && len(method.Poles) > 0 {
			weak("the method %q does not find the poles that matter where the final estimate has them: %s", method.Name, method.Note)
		}
	}
	if f.FreeDelay && math.Abs(f.Delay/f.Period-1) < 0.1 {
		note("the delay is about one sample: if the rig has none, the input may be logged a row early or when it is computed")
	}
	if !f.Converged {
		weak("the search for the best fit did not settle")
	}
	worst := slices.MaxFunc(m.Poles, func(a, b Root) int { return cmp.Compare(a.Re, b.Re) })
	if ph := worst.Re * f.Period; ph > slowLog {
		weak("the unstable pole grows by a factor of %.2g within a row: what the input does between rows counts as much as the plant; log faster", math.Exp(ph))
	}
}
