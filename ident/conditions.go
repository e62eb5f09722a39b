package ident

import (
	"math"
	"math/cmplx"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/lti"
)

// Units of the logs, as the rig file names them.
type Units struct {
	Input  string `json:"input"`
	Output string `json:"output"`
}

// Rest is the input at which the plant rests with the output at Output, as the
// logs have it, in the units of the log; of several logs the mean.
type Rest struct {
	Input   float64 `json:"input"`
	Output  float64 `json:"output"`
	InputSD float64 `json:"input_sd"`
}

// InputBand is the mean power spectral density of the input between two
// frequencies.
type InputBand struct {
	From    float64 `json:"from"`    // rad/s
	To      float64 `json:"to"`      // rad/s
	Density float64 `json:"density"` // one-sided, units of the input squared per Hz
}

// conditions sets what a later log is held against: units, rest and spectrum of
// the input.
func (m *Model) conditions(p *fit.Predictor, recs []fit.Record, f *fit.Prediction, rig *data.Rig) {
	m.Units = Units{rig.Units.Input, rig.Units.Output}
	m.Evidence.Rest = restOf(p, f, m.OperatingPoint.Output)
	m.Evidence.InputBands = inputBands(recs, f.Period)
}

// restOf is the input at rest with the output at y. The constant κ of
// A D y = B D u + κ + C e is as uncertain as the mean of C e over the rows, whose
// deviation is σ |C(1)|/√N for a disturbance of any colour (Anderson, The
// Statistical Analysis of Time Series, 1971, sec. 8.3); so the input at rest is off
// by σ |C(1)|/(|B(1) D(1)| √N). Logs whose constants scatter by more than that are
// taken by their scatter. nil: the plant has no rest, or a zero at the origin.
func restOf(p *fit.Predictor, f *fit.Prediction, y float64) *Rest {
	d := lti.SampleDeltaValues(f.Num, f.Den, f.Delay, f.Period)
	n := d.Poles
	one := func(c []float64) (s float64) {
		for _, v := range c {
			s += v
		}
		return s
	}
	gain := (d.B0[n-1] + d.B1[n-1]) * one(f.D)
	r := &Rest{Output: y, InputSD: math.Sqrt(f.Variance/float64(f.Rows)) * math.Abs(one(f.C)/gain)}
	records := float64(len(f.Const))
	var scatter float64
	for i := range f.Const {
		r.Input += p.Rest(f, i, y) / records
	}
	for i := range f.Const {
		u := p.Rest(f, i, y) - r.Input
		scatter += u * u / records
	}
	if f.Constants > 1 {
		r.InputSD = math.Max(r.InputSD, math.Sqrt(scatter/float64(f.Constants-1)))
	}
	if math.IsNaN(r.Input+r.InputSD) || math.IsInf(r.Input+r.InputSD, 0) {
		return nil
	}
	return r
}

// inputBands is the input's spectrum in bands; empty where the log is too short.
func inputBands(recs []fit.Record, period float64) []InputBand {
	var u [][]float64
	for _, r := range recs {
		u = append(u, r.U)
	}
	bands := []InputBand{}
	s, err := fit.Welch(u, u, period, 0)
	if err != nil {
		return bands
	}
	at := 1
	for _, b := range bandsBetween(3*s.Omega[1], math.Pi/period) {
		var sum float64
		from := at
		for ; at < len(s.Omega) && s.Omega[at] <= b.To; at++ {
			sum += s.XX[at]
		}
		if at > from {
			bands = append(bands, InputBand{b.From, b.To, sum / float64(at-from)})
		}
	}
	return bands
}

// unlike is by what factor at the most the power of the input over that of the
// noise, at one frequency against another, differs between two models' logs. Bands
// that bring less than leastBand of the output's motion in either do not count; the
// noise itself is one more part, whose power over that of the noise is always one.
func unlike(a, b *Model) float64 {
	const leastBand = 0.01
	lo, hi, bands := 1.0, 1.0, 0
	share := func(m *Model) map[[2]float64]float64 {
		g, h := m.TF(), m.NoiseShape()
		list, sum := make(map[[2]float64]float64), 0.0
		for _, q := range m.Evidence.InputBands {
			w := math.Sqrt(math.Max(q.From, q.To/10) * q.To)
			at := cmplx.Abs(g.At(complex(0, w)) / h.At(w))
			list[[2]float64{q.From, q.To}] = at * at * q.Density * (q.To - q.From)
			sum += at * at * q.Density * (q.To - q.From)
		}
		for k := range list {
			list[k] /= sum
		}
		return list
	}
	sa, sb := share(a), share(b)
	noise := func(m *Model) float64 { return m.Noise.SD * m.Noise.SD * m.Noise.SamplePeriod }
	for _, p := range a.Evidence.InputBands {
		for _, q := range b.Evidence.InputBands {
			k := [2]float64{p.From, p.To}
			if p.From != q.From || p.To != q.To || math.Max(sa[k], sb[k]) < leastBand {
				continue
			}
			bands++
			r := q.Density / noise(b) / (p.Density / noise(a))
			lo, hi = math.Min(lo, r), math.Max(hi, r)
		}
	}
	if bands == 0 {
		return math.Inf(1)
	}
	return hi / lo
}
