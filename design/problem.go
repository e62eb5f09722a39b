package design

import (
	"fmt"
	"math"
	"math/cmplx"
	"strings"

	"steadyrig/data"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// A problem is what is to be solved, in deviations from the operating point, with the frequencies at which loops
// are looked at. It is read-only once made and shared by all workers.
type problem struct {
	model   *ident.Model
	rig     *data.Rig
	period  float64 // s
	compute float64 // s, added to the delay of every plant
	point   OperatingPoint
	limits  [2]float64  // of the input, absolute
	input   [2]float64  // limits as deviations, input[0] < 0 < input[1]
	output  *[2]float64 // limits as deviations, nil: none
	rate    float64     // units of input per second, 0: none
	rounds  SignalPair  // steps in which input and output are sent and read, 0: none known
	spec    demands
	noise   noise
	nominal plant
	assumed bool // no settling time is asked: that of the spec is a guess

	estimated estimated // the nominal plant, for observers

	omega []float64    // rad/s, from 0 to pi/period
	z1    []complex128 // e^{-i omega period}
	inner []complex128 // e^{-(decay + i omega) period}: the circle on which the inner loop's decay is counted

	regions  []region // where no controller zero may lie
	doubts   []string // warnings that make the verdict weak
	warnings []string
}

// demands is the spec with its defaults resolved.
type demands struct {
	step, overshoot, settling, band, peakS, noise, kick, kickPeak float64
}

// NoiseShare is the default limit on the input's standard deviation due to sensor noise, as a share of the range.
const NoiseShare = 1.0 / 20

// decayPerSettling sets the slowest decay that the inner loop may have, in units of 1/settling: an outer loop
// cannot settle faster than what the inner one leaves behind.
const decayPerSettling = 1.5

// newProblem poses and samples a problem. The error is a *ident.RefusedError where physics or the model say no.
func newProblem(model *ident.Model, rig *data.Rig) (*problem, error) {
	p, err := pose(model, rig)
	if err != nil {
		return nil, err
	}
	return p, p.sample()
}

// pose gathers what is asked, without looking at the plant: next to no work, whatever the files say. With a
// *ident.RefusedError it returns the problem as far as it got, for a partial result.
func pose(model *ident.Model, rig *data.Rig) (*problem, error) {
	if err := rig.NeedDesign(); err != nil {
		return nil, err
	}
	p := &problem{model: model, rig: rig, period: rig.Loop.SamplePeriod, limits: *rig.Limits.Input, rate: rig.Limits.InputRate}
	p.point = OperatingPoint(model.OperatingPoint)
	if o := rig.OperatingPoint; o != nil {
		p.point = OperatingPoint(*o)
	}
	if len(model.Plant.Denominator) == 0 {
		return p, &ident.RefusedError{What: "the model holds no plant: the fit was refused", Do: "take a log as the fit's refusal says, and fit again"}
	}
	for _, text := range []string{doubtful(model), nonlinear(model)} {
		if text != "" {
			p.doubts = append(p.doubts, text)
		}
	}
	p.rounds = SignalPair(model.Evidence.Resolution)
	if q := rig.Limits.InputResolution; q != nil {
		p.rounds.Input = *q
	}
	if q := rig.Limits.OutputResolution; q != nil {
		p.rounds.Output = *q
	}
	s := rig.Spec
	p.spec = demands{s.Step, s.Overshoot, s.Settling, s.Band, s.PeakSensitivity, s.InputNoise, s.Kick, s.KickPeak}
	if p.spec.noise == 0 {
		p.spec.noise = NoiseShare * (p.limits[1] - p.limits[0])
	}
	p.compute = rig.Loop.ComputeDelay
	if rig.Log.InputStamp == data.InputComputed {
		// The model's delay counts from the computed input: it holds the compute delay of the loop that ran.
		p.compute = 0
		if rig.Loop.ComputeDelay > model.Plant.Delay {
			p.compute = rig.Loop.ComputeDelay - model.Plant.Delay
		}
		p.warnings = append(p.warnings, "the log's input was stamped when computed, so the model's delay already holds the compute delay of the loop that ran: none was added; the new loop must not compute longer than the old one")
	}
	if rig.Loop.Hold == data.HoldBandLimited {
		p.warnings = append(p.warnings, "the loops were designed for an input held between samples (zero-order); a band-limited hold adds its own delay")
	}
	if p.assumed = s.Settling == 0; p.assumed {
		p.spec.settling = p.guessSettling()
	}
	return p, p.about()
}

// What the model's own residual tests may say: below residualsFail a promise is weak, below residualsContradict there
// is none to be had, as the draws differ in parameters only and the structure is wrong.
const (
	residualsFail       = 1e-6
	residualsContradict = 1e-12
	fewestMemories      = 20 // predictor memories in the log, below which intervals are optimistic
)

// doubtful says why a promise on the model cannot be more than weak; empty if nothing does.
func doubtful(m *ident.Model) string {
	e := &m.Evidence
	if e.Residuals.Lags == 0 {
		return "" // no tests were made
	}
	if q := math.Min(e.Residuals.Whiteness, e.Residuals.CrossInput); q < residualsFail {
		return fmt.Sprintf("the promise holds only for plants of a structure that the log contradicts: the residual tests leave it a probability of %.2g", q)
	}
	if e.Memories < fewestMemories {
		return fmt.Sprintf("the promise rests on intervals that are optimistic: the log is only %.0f predictor memories long, %d are the least", e.Memories, fewestMemories)
	}
	return ""
}

// linearFails is the probability below which the model's test of linearity speaks against it, as in its own verdict.
const linearFails = 1e-3

// nonlinear says about what motion a promise on a rig that answers nonlinearly speaks; empty if no test found it so.
func nonlinear(m *ident.Model) string {
	e := &m.Evidence
	if e.Residuals.Lags == 0 || !(e.Residuals.Linearity < linearFails) {
		return ""
	}
	text := fmt.Sprintf("the rig answers nonlinearly (probability %.2g), so the promise speaks only of motion as large as in the log", e.Residuals.Linearity)
	// The explained share is 1 - var(prediction error)/var(output).
	if sd := m.Noise.SD / math.Sqrt(1-e.ExplainedShare); sd > 0 && !math.IsInf(sd, 0) {
		text += fmt.Sprintf(", where the output moved by %.3g (standard deviation)", sd)
	}
	return text
}

// contradicted refuses a model whose structure its log plainly contradicts.
func contradicted(m *ident.Model) *ident.RefusedError {
	r := &m.Evidence.Residuals
	q, what := r.Whiteness, "its prediction errors are not white"
	if r.CrossInput < q {
		q, what = r.CrossInput, "past inputs explain its prediction errors"
	}
	if r.Lags == 0 || !(q < residualsContradict) {
		return nil
	}
	return &ident.RefusedError{
		What: fmt.Sprintf("the model's own residual tests contradict it: %s (probability %.2g), so its structure is wrong and plants drawn from it promise nothing", what, q),
		Do:   "fit again without the hints in [model], or on a longer log",
	}
}

// about counts the limits from the operating point.
func (p *problem) about() error {
	p.input = [2]float64{p.limits[0] - p.point.Input, p.limits[1] - p.point.Input}
	if !(p.input[0] < 0 && p.input[1] > 0) {
		return &ident.RefusedError{
			What: fmt.Sprintf("the operating point needs an input of %.4g, the limits are [%.4g, %.4g]", p.point.Input, p.limits[0], p.limits[1]),
			Do:   "nothing is left to stabilise with: correct [operating_point] or [limits] input",
		}
	}
	if o := p.rig.Limits.Output; o != nil {
		p.output = &[2]float64{o[0] - p.point.Output, o[1] - p.point.Output}
		if !(p.output[0] < 0 && p.output[1] > 0) {
			return &ident.RefusedError{
				What: fmt.Sprintf("the operating point has the output at %.4g, outside the trip limits [%.4g, %.4g]", p.point.Output, o[0], o[1]),
				Do:   "correct [operating_point] or [limits] output",
			}
		}
	}
	return nil
}

// sample prepares frequencies, nominal plant, noise and forbidden regions.
func (p *problem) sample() error {
	if err := p.tooLate(); err != nil {
		return err
	}
	if p.model.TF().DC() == 0 {
		return &ident.RefusedError{
			What: "the plant has a zero at s = 0: no steady input moves its output for good, so no step of the reference can be followed",
			Do:   "take an output that stays when the input does, a position instead of a rate, or one without a high-pass filter",
		}
	}
	p.grid(p.model.TF().Delay + p.compute)
	var err error
	if p.nominal, err = p.newPlant(p.model.TF()); err != nil {
		return err
	}
	if p.estimated, err = newEstimated(p.nominal.tf, p.period); err != nil {
		return err
	}
	p.noise = p.splitNoise()
	p.addRounding()
	p.regions = forbidden(p.model, p.spec.settling)
	return nil
}

// mostLag is the largest number of delay samples that is worked with: a loop with more is sampled for nothing, as the
// delay leaves it no bandwidth to use them.
const mostLag = 500

// hopelessPeak is a peak |S| beyond which its figure says nothing: no spec asks for more.
const hopelessPeak = 10.0

// unheld refuses a plant that no stable controller stabilises, and a model that allows more of them than a promise may
// miss. An unstable one would do, but not in a loop whose input has limits: while it is at a limit nothing holds the
// controller itself.
func (p *problem) unheld(draws []lti.TF) *ident.RefusedError {
	n := 0
	for _, g := range draws {
		if !StronglyStabilisable(g) {
			n++
		}
	}
	const why = "an odd number of real unstable poles lies between two real right-half-plane zeros, infinity counted (parity interlacing, Youla, Bongiorno & Lu (1974)), and an unstable controller is lost whenever the input is at a limit"
	nominal := StronglyStabilisable(p.model.TF())
	if nominal && float64(n) <= (1-PromisedShare)*float64(len(draws)) {
		return nil
	}
	if nominal {
		return &ident.RefusedError{
			What: fmt.Sprintf("no stable controller holds %d of %d plants that the data allow: %s", n, len(draws), why),
			Do:   "take a longer log, which tells the right-half-plane zero and the unstable pole apart, or move the sensor or the actuator, which moves the zero",
		}
	}
	return &ident.RefusedError{
		What: fmt.Sprintf("no stable controller holds this plant, poles %s, zeros %s: %s", rootsText(p.model.TF().Poles()), rootsText(p.model.TF().Zeros()), why),
		Do:   "move the sensor or the actuator, which moves the zeros",
	}
}

// rootsText lists the roots in the right half-plane, in rad/s.
func rootsText(roots []complex128) string {
	text := ""
	for _, s := range roots {
		if real(s) >= 0 && imag(s) == 0 {
			text += fmt.Sprintf(" and %.4g", real(s))
		}
	}
	return strings.TrimPrefix(text, " and ") + " rad/s"
}

// tooLate refuses a delay of too many samples before anything of that size is built.
func (p *problem) tooLate() error {
	g := p.model.TF()
	tau := g.Delay + p.compute
	if !(tau/p.period > mostLag) {
		return nil
	}
	fastest := 0.0
	for _, s := range g.Poles() {
		fastest = math.Max(fastest, real(s))
	}
	if LeastPeakDelay(fastest, tau) > math.Max(hopelessPeak, p.spec.peakS) {
		return &ident.RefusedError{
			What: fmt.Sprintf("the spec is out of reach: no peak sensitivity below %g is in reach with an unstable pole of %.4g rad/s and a delay of %.4g s in all (e^(p tau), Astrom (2000))", hopelessPeak, fastest, tau),
			Do:   fmt.Sprintf("shorten the delay to below %s s, or check that [loop] compute_delay and the model's delay are in seconds", roundDown(math.Log(p.spec.peakS)/fastest)),
		}
	}
	return &ident.RefusedError{
		What: fmt.Sprintf("the delay of %.4g s in all is %.4g samples of %.4g s, and at most %d are worked with", tau, tau/p.period, p.period, mostLag),
		Do:   fmt.Sprintf("a delay that long leaves no use for samples that short: take [loop] sample_period = %s or more, or check that the delay is in seconds", roundUp(tau/mostLag)),
	}
}

// grid lays out the frequencies: evenly in their logarithm, but never so far apart that the phase of the delay
// runs away between neighbours.
func (p *problem) grid(delay float64) {
	nyquist := math.Pi / p.period
	widest := nyquist / math.Max(40, 5*(delay/p.period+1))
	p.omega = []float64{0}
	for w := math.Min(0.05/p.spec.settling, nyquist/100); w < nyquist; w += math.Min(0.085*w, widest) {
		p.omega = append(p.omega, w)
	}
	if last := len(p.omega) - 1; nyquist-p.omega[last] < 1e-3*nyquist {
		p.omega = p.omega[:last]
	}
	p.omega = append(p.omega, nyquist)
	p.z1, p.inner = make([]complex128, len(p.omega)), make([]complex128, len(p.omega))
	r := math.Exp(decayPerSettling / p.spec.settling * p.period)
	for j, w := range p.omega {
		p.z1[j] = cmplx.Exp(complex(0, -w*p.period))
		p.inner[j] = p.z1[j] * complex(r, 0)
	}
	p.z1[len(p.z1)-1] = -1
	p.inner[len(p.z1)-1] = complex(-r, 0)
}

// plant is one sampled plant with what is needed to judge loops about it: B/A is its transfer function at each
// frequency of the problem. The delay of the computer is in it.
type plant struct {
	tf       lti.TF // with the compute delay
	lag      int    // samples from the input to its first effect
	num      []float64
	den      []float64 // den[0] = 1
	a, b     []complex128
	ai, bi   []complex128 // on the circle of the inner loop's decay
	unstable int          // poles outside the unit circle
}

// behindHold samples a plant behind the hold, without its values at the frequencies.
func (p *problem) behindHold(g lti.TF) (plant, error) {
	g.Delay += p.compute
	if g.Delay > mostLag*p.period {
		return plant{}, fmt.Errorf("a delay of %.4g s is more than %d samples", g.Delay, mostLag)
	}
	d, err := lti.ZOHTF(g, p.period)
	if err != nil {
		return plant{}, err
	}
	pl := plant{tf: g, den: d.Den}
	for pl.lag < len(d.Num)-1 && d.Num[pl.lag] == 0 {
		pl.lag++
	}
	pl.num = d.Num[pl.lag:]
	if pl.lag == 0 {
		return plant{}, fmt.Errorf("the plant answers at once (as many zeros as poles and no delay): no sampled loop can be closed about it")
	}
	pl.unstable = g.UnstablePoles(0)
	return pl, nil
}

// newPlant samples a plant behind the hold.
func (p *problem) newPlant(g lti.TF) (plant, error) {
	pl, err := p.behindHold(g)
	if err != nil {
		return pl, err
	}
	n := len(p.omega)
	buf := make([]complex128, 4*n)
	pl.a, pl.b, pl.ai, pl.bi = buf[:n], buf[n:2*n], buf[2*n:3*n], buf[3*n:]
	num, den := append(make(lti.Poly, pl.lag), pl.num...), lti.Poly(pl.den)
	for j := range p.omega {
		pl.a[j], pl.b[j] = den.Eval(p.z1[j]), num.Eval(p.z1[j])
		pl.ai[j], pl.bi[j] = den.Eval(p.inner[j]), num.Eval(p.inner[j])
	}
	return pl, nil
}

// plants samples draws of the model; draws that cannot be sampled count as lost and come back as an error.
func (p *problem) plants(n int, seed uint64) ([]plant, error) {
	draws := p.model.Draw(n, seed)
	out := make([]plant, n)
	for i, g := range draws {
		var err error
		if out[i], err = p.newPlant(g); err != nil {
			return nil, fmt.Errorf("plant %d of the draw: %w", i, err)
		}
	}
	return out, nil
}

// A region is a disc (Im != 0) or an interval of the real axis about an unstable pole, widened beyond its 95 %
// bounds: a controller zero in it would cancel the pole on some plant that the data allow, or nearly so.
type region struct {
	center complex128
	radius float64
	pole   string // for messages
}

// cancelMargin widens the regions: as a share of the pole's size.
const cancelMargin = 0.25

// forbidden returns the regions of all poles that may be unstable and, where the plant needs an outer loop's
// integrator, of s = 0. A region never reaches further left than its pole's interval.
func forbidden(model *ident.Model, settling float64) []region {
	var out []region
	for _, r := range model.Poles {
		if r.Im < 0 || !r.Unstable && r.ProbabilityUnstable < 0.025 {
			continue
		}
		out = append(out, regionOf(r))
	}
	return append(out, region{0, 0.02 / settling, "s = 0, the integrator"})
}

// regionOf returns the 95 % region of a pole or zero, widened.
func regionOf(r ident.Root) region {
	half := math.Max(2*r.ReSD, 2*r.ImSD)
	if r.Im == 0 && !math.IsInf(r.Re95.Lo, 0) && !math.IsInf(r.Re95.Hi, 0) {
		half = math.Max(r.Re95.Hi-r.Re, r.Re-r.Re95.Lo)
	}
	size := math.Hypot(r.Re, r.Im)
	if math.IsNaN(half) || math.IsInf(half, 0) {
		half = size
	}
	reg := region{complex(r.Re, r.Im), half + cancelMargin*size, fmt.Sprintf("%.4g rad/s", r.Re)}
	if r.Im != 0 {
		reg.pole = fmt.Sprintf("%.4g ± %.4gi rad/s", r.Re, r.Im)
	}
	return reg
}

// cancelled returns the region in which a zero lies, or nil.
func cancelled(regions []region, zero complex128) *region {
	zero = complex(real(zero), math.Abs(imag(zero)))
	for i := range regions {
		if cmplx.Abs(zero-regions[i].center) < regions[i].radius {
			return &regions[i]
		}
	}
	return nil
}
