package ident

import (
	"cmp"
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/mat"

	"steadyrig/data"
	"steadyrig/fit"
)

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
	if signals != nil && f.Converged {
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
