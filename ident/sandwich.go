package ident

import (
	"fmt"
	"slices"

	"steadyrig/fit"
)

// What the intervals rest on: the curvature of the likelihood at its peak, draws
// from the likelihood, or, where the residual tests say that the structure
// misses something, the scatter of the rows' own contributions.
const (
	ByCurvature = "curvature"
	ByDraws     = "draws"
	BySandwich  = "sandwich"
)

// misses reports whether a residual test speaks against the structure.
func (r Residuals) misses() bool {
	return min(r.Whiteness, r.CrossInput, r.Linearity) < doubtful
}

// covariance sets the covariance of an estimate. Where the structure misses
// something the curvature of the likelihood is not its inverse; the sandwich
// form then gives how the best fit of this structure would scatter over logs
// taken in the same way (Huber, The behavior of maximum likelihood estimates
// under nonstandard conditions, Proc. 5th Berkeley Symp. 1 (1967) 221-233;
// White, Maximum likelihood estimation of misspecified models, Econometrica 50
// (1982) 1-25). It says nothing of how far that best fit is from the true poles.
func (m *Model) covariance(p *fit.Predictor, f *fit.Prediction) error {
	m.Evidence.IntervalsBy = ByCurvature
	if f.Cov == nil {
		if err := p.Covariance(f); err != nil {
			return err
		}
	}
	if !m.Evidence.Residuals.misses() || f.Rows > sandwichRows {
		return nil
	}
	influence, err := p.Influence(f)
	if err != nil {
		return nil // the curvature stands, and so do the warnings
	}
	f.Cov = influence.Covariance()
	m.Evidence.IntervalsBy = BySandwich
	note := fmt.Sprintf("the intervals are about the best plant of %s for logs taken like this one, not about the true poles: the structure misses something", counted(f.Poles, "pole"))
	if !slices.Contains(m.Warnings, note) {
		m.Warnings = append(m.Warnings, note)
	}
	return nil
}
