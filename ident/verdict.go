package ident

import (
	"cmp"
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"steadyrig/fit"
)

// tests looks at what the model leaves unexplained, on the rows of the fit, and
// at how much it explains on rows kept out of one.
func (m *Model) tests(p *fit.Predictor, recs []fit.Record, f *fit.Prediction) error {
	e, _, err := p.Errors(f)
	if err != nil {
		return err
	}
	lags := min(residualLags, p.Rows()/20)
	m.Evidence.Residuals.Lags = lags
	filled, err := p.Restored(f)
	if err != nil {
		return err
	}
	m.Evidence.Residuals.Linearity = linearity(p, filled, f)
	if lags < 2 {
		return nil
	}
	fitted := min(f.Poles+f.Colour, lags-1)
	pairs := p.Inputs()
	for i := range pairs {
		pairs[i].Y = e[i]
	}
	level(pairs, f)
	// White errors stay white where the rows of a gap are left out. A constant
	// taken out of a few rows leaves them correlated: only longer stretches are
	// tested where there are several.
	m.Evidence.Residuals.Whiteness = 1
	var whole [][]float64
	for _, r := range pairs {
		if n := len(whole) - 1; r.Resumes {
			whole[n] = append(whole[n], r.Y...)
		} else {
			whole = append(whole, slices.Clip(r.Y))
		}
	}
	if len(whole) > 1 {
		whole = slices.DeleteFunc(whole, func(x []float64) bool { return len(x) < 20*lags })
	}
	if len(whole) > 0 {
		_, m.Evidence.Residuals.Whiteness = fit.LjungBox(whole, lags, fitted)
	} else {
		m.Evidence.Residuals.Lags = 0 // not tested
	}
	if _, prob, err := fit.PastInputs(pairs, lags); err == nil {
		m.Evidence.Residuals.CrossInput = prob
	} else {
		m.Evidence.Residuals.CrossInput = 1
	}
	m.Evidence.Memories = float64(p.Rows()) / memory(decaying(f))
	if p.Rows() > chooseRows {
		recs = spreadOver(recs, chooseRows)
	}
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
		first = append(first, r.Rows(0, cut))
		rest = append(rest, r.Rows(cut, len(r.Y)))
	}
	a, err := p.On(first)
	if err != nil {
		return 0
	}
	part, err := a.Fit(f, compareTol, compareStep)
	if err != nil {
		return 0
	}
	b, err := p.On(rest)
	if err != nil {
		return 0
	}
	e, _, err := b.Errors(part)
	if err != nil {
		return 0
	}
	var ee, yy float64
	for i, x := range e {
		for _, v := range x {
			ee += v * v
		}
		y := rest[min(i, len(rest)-1)].Filled().Y
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
	if need := soundRows * f.Free(); f.Rows < need {
		weak("%d rows are few for %d parameters: intervals are optimistic below %d rows", f.Rows, f.Free(), need)
	}
	var left int
	for _, l := range m.Evidence.LeftOut {
		left += l.Rows
	}
	if share := float64(left) / float64(left+f.Rows); share > wrongShare {
		weak("%.2g %% of the outputs are wrong and were left out: mend the sensor or its wiring", 100*share)
	}
	if m.Evidence.Memories < soundMemories {
		weak("the log is only %.0f predictor memories long, intervals are optimistic below %d: log a longer run", m.Evidence.Memories, soundMemories)
	}
	if m.Evidence.Residuals.Lags == 0 {
		weak("the log is in pieces too short to test what the model leaves over")
	}
	if text := m.Evidence.Agreement.against(); text != "" {
		weak("%s", text)
	}
	if p := m.Evidence.Residuals.Whiteness; p < doubtful {
		weak("the prediction errors are not white (probability %.2g): the structure misses something", p)
	}
	if p := m.Evidence.Residuals.CrossInput; p < doubtful {
		weak("past inputs still explain part of the prediction errors (probability %.2g): the plant misses something", p)
	}
	if p := m.Evidence.Residuals.Linearity; p < doubtful {
		weak("the rig answers nonlinearly: squares of past inputs and outputs explain part of the prediction errors (probability %.2g); the intervals are about the best linear fit to motion of this size: log a run with less motion", p)
	}
	for _, c := range ranked[1:] {
		if d := c.bic - ranked[0].bic; d >= 0 && d < tie {
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
		switch {
		case method.Agrees || len(method.Poles) == 0:
		case method.Probability != nil:
			weak("by the method %q %s", method.Name, method.Note)
		default:
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
