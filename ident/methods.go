package ident

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/mat"

	"steadyrig/data"
	"steadyrig/fit"
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

// spreadSignals takes the same rows of the signals of all records as spreadOver
// takes of the records.
func spreadSignals(signals [][][]float64, rows int) [][][]float64 {
	var out [][][]float64
	for j := 0; signals != nil && j < len(signals[0]); j++ {
		var recs []fit.Record
		for _, s := range signals {
			recs = append(recs, fit.Record{U: s[j], Y: s[j]})
		}
		for b, part := range spreadOver(recs, rows) {
			if j == 0 {
				out = append(out, nil)
			}
			out[b] = append(out[b], part.U)
		}
	}
	return out
}

// methods estimates the poles by other ways than maximum likelihood and says
// whether they find the same unstable poles. p holds recs, f is the estimate
// from them or from more of the same log.
func methods(p *fit.Predictor, recs []fit.Record, signals [][][]float64, f *fit.Prediction, poles []Root) []Method {
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
	if signals != nil && f.Converged {
		list = append(list, byOutside(p, signals, f, poles))
	}
	return list
}

// byOutside estimates the plant through the signals from outside alone and tests
// whether it differs from the final one by more than chance.
func byOutside(p *fit.Predictor, signals [][][]float64, f *fit.Prediction, poles []Root) Method {
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
	for _, z := range r.Den.Roots() {
		m.Poles = append(m.Poles, [2]float64{real(z), imag(z)})
	}
	d, err := p.Compare(f, r)
	if err != nil {
		m.Note = "could not be compared: " + err.Error()
		return m
	}
	_, apart := agreement(m.Poles, poles, unstableDeviation(r))
	m.Probability, m.Note = &d.Probability, apart
	if m.Agrees = d.Probability >= doubtful; !m.Agrees {
		m.Note = fmt.Sprintf("the plant differs by more than chance (probability %.2g): the noise shape is wrong, or what is logged from outside answers to the output; %s", d.Probability, apart)
	}
	return m
}

// unstableDeviation is the deviation of the outermost pole in the right half
// plane, in rad/s; 0 where there is none.
func unstableDeviation(r *fit.Refined) float64 {
	n, nz := r.Poles, len(r.Num)
	den := uncertain{p: r.Den, cov: mat.NewSymDense(n+1, nil)}
	for i := range n {
		for j := i; j < n; j++ {
			den.cov.SetSym(i, j, r.Cov.At(nz+n-1-i, nz+n-1-j))
		}
	}
	var sd, size float64
	for _, z := range den.roots() {
		if a := math.Hypot(z.Re, z.Im); a > size && z.Re > 0 {
			size, sd = a, math.Hypot(z.ReSD, z.ImSD)
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
