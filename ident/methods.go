package ident

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/lti"
)

// outsideSignals returns the reference and the dither of each record, as many of
// them as are logged throughout; nil where there are none.
func outsideSignals(exps []*data.Experiment) [][][]float64 {
	var out [][][]float64
	reference, dither := true, true
	for _, e := range exps {
		for _, s := range e.Segments {
			reference, dither = reference && s.R != nil, dither && s.D != nil
		}
	}
	if !reference && !dither {
		return nil
	}
	for _, e := range exps {
		for _, s := range e.Segments {
			var signals [][]float64
			if reference {
				signals = append(signals, s.R)
			}
			if dither {
				signals = append(signals, s.D)
			}
			out = append(out, signals)
		}
	}
	return out
}

// seen is what the other methods work on: records without missing outputs, the
// signals from outside beside them, and how many rows there are.
type seen struct {
	p       *fit.Predictor // of recs
	recs    []fit.Record
	signals [][][]float64 // record, signal; nil: none is logged
	rows    int           // known outputs of recs
	all     int           // and of the logs
}

// seen takes the rows that structures were compared on, or all, with the outputs
// left out as f has them most probably. signals are those of all records.
func (s *searched) seen(f *fit.Prediction, signals [][][]float64, all bool) (*seen, error) {
	e := &seen{p: s.sp, recs: s.some, signals: signals, all: knownRows(s.recs)}
	switch {
	case all:
		e.p, e.recs = s.p, s.recs
	case s.parts != nil && signals != nil:
		e.signals = nil
		for _, part := range s.parts {
			var cut [][]float64
			for _, x := range signals[part.record] {
				cut = append(cut, x[part.from:part.to])
			}
			e.signals = append(e.signals, cut)
		}
	}
	e.rows = knownRows(e.recs)
	if len(s.wrong) == 0 {
		return e, nil
	}
	var err error
	if e.recs, err = e.p.Restored(f); err == nil {
		e.p, err = e.p.On(e.recs)
	}
	return e, err
}

// knownRows counts the outputs of records that are not missing.
func knownRows(recs []fit.Record) int {
	n := 0
	for _, r := range recs {
		n += len(r.Y) - len(r.Missing)
	}
	return n
}

// methods estimates the poles by other ways than maximum likelihood and says
// whether they find the poles that matter where the model has them. f is the
// estimate from what they see or from more of the same logs.
func methods(ctx context.Context, s *seen, f *fit.Prediction, m *Model, workers int) ([]Method, error) {
	own := Method{Name: "prediction", Agrees: true, Poles: [][2]float64{}, SD: []float64{}, Rows: s.all}
	for _, r := range m.Poles {
		own.Poles = append(own.Poles, [2]float64{r.Re, r.Im})
		own.SD = append(own.SD, math.Hypot(r.ReSD, r.ImSD))
	}
	matter := m.matter(f.Period)
	others := fit.Estimators()[1:] // the first has decided
	list := make([]Method, len(others))
	err := Each(ctx, len(others), workers, func(i int) error {
		e := others[i]
		if _, joint := e.(fit.OutsideMethod); joint {
			if s.signals != nil && f.Converged {
				list[i] = byOutside(s.p, s.signals, f, m)
				list[i].Rows = s.rows
			}
			return nil
		}
		method := Method{Name: e.Name(), Poles: [][2]float64{}, Rows: s.rows}
		found, err := e.Estimate(s.recs, s.signals, f)
		if err != nil {
			method.Note = "says nothing here: " + err.Error()
		} else {
			method.Poles, method.SD = inContinuousTime(found)
			v := found.Disagreement(matter.factor, matter.cov)
			method.Agrees = !(v > matter.limit())
			method.Note = fmt.Sprintf("%s, %.1f joint deviations in %s", matter.apart(method.Poles), math.Sqrt(v), counted(len(matter.factor)-1, "number"))
		}
		list[i] = method
		return nil
	})
	list = slices.DeleteFunc(list, func(m Method) bool { return m.Name == "" })
	return append([]Method{own}, list...), err
}

// byOutside estimates the plant through the signals from outside alone and tests
// whether it differs from the final one by more than chance.
func byOutside(p *fit.Predictor, signals [][][]float64, f *fit.Prediction, model *Model) Method {
	m := Method{Name: "outside", Poles: [][2]float64{}, Agrees: true}
	if p.Rows() != f.Rows {
		var err error
		if f, err = p.Fit(f, finalTol, finalSteps); err != nil {
			m.Note = "says nothing here: " + err.Error()
			return m
		}
	}
	r, err := p.Refined(f, signals)
	switch {
	case errors.As(err, new(fit.WeakInstrument)):
		m.Note = "says little here: " + err.Error()
		return m
	case err != nil:
		m.Note = "says nothing here: " + err.Error()
		return m
	}
	m.Poles, m.SD = inContinuousTime(r.Denominator(f.Period))
	d, err := p.Compare(f, r)
	if err != nil {
		m.Note = "could not be compared: " + err.Error()
		return m
	}
	apart := model.matter(f.Period).apart(m.Poles)
	m.Probability, m.Note = &d.Probability, apart
	if m.Agrees = d.Probability >= doubtful; !m.Agrees {
		m.Note = fmt.Sprintf("the plant differs by more than chance (probability %.2g): the noise shape is wrong, or what is logged from outside answers to the output; %s", d.Probability, apart)
	}
	return m
}

// inContinuousTime returns the poles log(1+δ)/period that a real plant can have,
// with the deviation of each.
func inContinuousTime(e *fit.PoleEstimate) (poles [][2]float64, sd []float64) {
	n := len(e.Den) - 1
	den := uncertain{p: e.Den, cov: mat.NewSymDense(n+1, nil)}
	for i := range n {
		for j := i; j < n; j++ {
			den.cov.SetSym(i, j, e.Cov.At(i, j))
		}
	}
	poles, sd = [][2]float64{}, []float64{}
	for _, r := range den.roots() {
		z := complex(1+r.Re, r.Im)
		if cmplx.Abs(z) < 1e-6 || r.Im == 0 && real(z) < 0 {
			continue
		}
		// log(1+δ) without loss for slow poles: |1+δ|² - 1 = 2 Re δ + |δ|².
		re := math.Log1p(2*r.Re+r.Re*r.Re+r.Im*r.Im) / 2
		poles = append(poles, [2]float64{re / e.Period, math.Atan2(r.Im, 1+r.Re) / e.Period})
		sd = append(sd, math.Hypot(r.ReSD, r.ImSD)/(cmplx.Abs(z)*e.Period))
	}
	for _, v := range sd {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return poles, nil
		}
	}
	return poles, sd
}

// matter is the poles on which methods have to agree: the unstable ones and
// integrators, or else the rightmost.
type matter struct {
	poles []complex128 // rad/s
	// They are a factor of the sampled denominator, in powers of δ.
	factor lti.Poly
	cov    *mat.SymDense // of its coefficients but the highest
}

func (m *Model) matter(period float64) matter {
	var list []complex128
	for _, p := range m.Poles {
		if p.ProbabilityUnstable >= 0.5 || p.Re == 0 {
			list = append(list, complex(p.Re, p.Im))
		}
	}
	if len(list) == 0 {
		right := slices.MaxFunc(m.Poles, func(a, b Root) int { return cmp.Or(cmp.Compare(a.Re, b.Re), cmp.Compare(a.Im, b.Im)) })
		list = append(list, complex(right.Re, right.Im))
		if right.Im != 0 {
			list = append(list, complex(right.Re, -right.Im))
		}
	}
	deltas := make([]complex128, len(list))
	for i, s := range list {
		h := s * complex(period/2, 0)
		deltas[i] = 2 * cmplx.Exp(h) * cmplx.Sinh(h) // exp(s period) - 1
	}
	nz, n := len(m.Plant.Numerator), len(m.Plant.Denominator)-1
	a := mat.NewSymDense(n, nil)
	for i := range n {
		for j := i; j < n; j++ {
			a.SetSym(i, j, m.Plant.Covariance[nz+i][nz+j])
		}
	}
	q := lti.FromRoots(deltas)
	factor, cov, ok := fit.Sampled(reversed(m.Plant.Denominator), a, period).Factor(q)
	if !ok { // they have met others
		factor, cov = q, mat.NewSymDense(len(list), nil)
	}
	return matter{poles: list, factor: factor, cov: cov}
}

// apartMethods is the number of joint standard deviations beyond which a method
// contradicts the model; for more numbers than one it is the ellipsoid of the
// same probability, 6e-5. A right model is compared twice; what a
// method's own deviation leaves out, its bias on a log of finite length, needs
// the room beyond the usual two.
const apartMethods = 4

// limit is what Disagreement may come to.
func (m matter) limit() float64 {
	return distuv.ChiSquared{K: float64(len(m.factor) - 1)}.Quantile(1 - 2*distuv.UnitNormal.CDF(-apartMethods))
}

// apart tells how far from each pole that matters the nearest of a method's is.
func (m matter) apart(found [][2]float64) string {
	note := ""
	for i, p := range m.poles {
		if imag(p) < 0 || i > 0 && p == m.poles[i-1] {
			continue
		}
		near := math.Inf(1)
		for _, q := range found {
			near = math.Min(near, cmplx.Abs(complex(q[0], q[1])-p))
		}
		if note != "" {
			note += ", "
		}
		note += fmt.Sprintf("pole at %.3g off by %.2g rad/s", real(p), near)
	}
	return note
}
