package ident

import (
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"steadyrig/data"
	"steadyrig/fit/lti"
)

const noPlant = "ident: the model holds no plant"

// Colour returns C/D of the disturbance A y = B u + (C/D) e, A and B the
// sampled plant's: the noise shape H without the plant's poles. It is stable
// where H itself is not. It errs for a plant that cannot be sampled: one that
// answers before its input.
func (m *Model) Colour() (lti.DTF, error) {
	g, err := lti.ZOHTF(m.TF(), m.Noise.SamplePeriod)
	if err != nil {
		return lti.DTF{}, fmt.Errorf("sampling the plant: %w", err)
	}
	a := g.Den
	h := m.NoiseShape()
	// H = C/(A D): long division in powers of z^-1.
	d := make(lti.Poly, max(1, len(h.Den)-len(a)+1))
	for k := range d {
		d[k] = h.Den[k]
		for i := 1; i <= k && i < len(a); i++ {
			d[k] -= a[i] * d[k-i]
		}
	}
	return lti.DTF{Num: h.Num, Den: d, Period: h.Period}, nil
}

// Predictions are one-step predictions of one segment: Output[k] is the
// prediction of row From+k from the rows before it, Error[k] what the log
// shows beyond it. Units of the output.
type Predictions struct {
	From          int
	Output, Error []float64
}

// OneStep predicts each row of a segment from those before it. The first rows,
// which the unknown past still moves, are left out; the segment's own constant
// is taken from the mean of the errors. It errs for a segment that is too short
// and for a plant that cannot be sampled, and panics where there is no plant.
func (m *Model) OneStep(s data.Segment) (*Predictions, error) {
	if len(m.Plant.Denominator) == 0 {
		panic(noPlant)
	}
	g, err := lti.ZOHTF(m.TF(), m.Noise.SamplePeriod)
	if err != nil {
		return nil, fmt.Errorf("sampling the plant: %w", err)
	}
	c, err := m.Colour()
	if err != nil {
		return nil, err
	}
	// e = (A D y - B D u)/C: each term is stable though G is not.
	fromY := lti.DTF{Num: g.Den.Mul(c.Den), Den: c.Num, Period: c.Period}
	fromU := lti.DTF{Num: g.Num.Mul(c.Den), Den: c.Num, Period: c.Period}
	from := len(fromY.Num) + len(fromU.Num) + int(8*memory(zRoots(c.Num)))
	if from >= len(s.Y)/2 {
		return nil, fmt.Errorf("predicting: %d rows are too few for a predictor that remembers %d", len(s.Y), from)
	}
	y, u := make([]float64, len(s.Y)), make([]float64, len(s.Y))
	for k := range y {
		y[k], u[k] = s.Y[k]-m.OperatingPoint.Output, s.U[k]-m.OperatingPoint.Input
	}
	e, eu := fromY.Filter(nil, y), fromU.Filter(nil, u)
	var mean float64
	for k := from; k < len(e); k++ {
		e[k] -= eu[k]
		mean += e[k] / float64(len(e)-from)
	}
	p := &Predictions{From: from}
	for k := from; k < len(e); k++ {
		p.Error = append(p.Error, e[k]-mean)
		p.Output = append(p.Output, s.Y[k]-(e[k]-mean))
	}
	return p, nil
}

// Responses are frequency responses of the plant in the units of the log: that
// of the estimate, and for each frequency the range that holds the middle 95 %
// of plants drawn from the estimate. Phases in degrees, unwrapped from the
// lowest frequency.
type Responses struct {
	Omega                   []float64 // rad/s
	Gain, GainLo, GainHi    []float64
	Phase, PhaseLo, PhaseHi []float64
	Drawn                   int
}

// responsePoints is the number of frequencies in Responses.
const responsePoints = 160

// Responses computes the plant's frequency response and its band from n drawn
// plants, from below its slowest pole to the Nyquist frequency of the log.
func (m *Model) Responses(n int, seed uint64) *Responses {
	top := math.Pi / m.Noise.SamplePeriod
	low := top / 100
	for _, r := range append(slices.Clone(m.Poles), m.Zeros...) {
		if size := math.Hypot(r.Re, r.Im); size > 1e-3*top/100 {
			low = math.Min(low, size/10)
		}
	}
	out := &Responses{Omega: lti.Grid(low, top, responsePoints), Drawn: n}
	gains, phases := make([][]float64, responsePoints), make([][]float64, responsePoints)
	draws := m.Draw(n, seed)
	for i, g := range append([]lti.TF{m.TF()}, draws...) {
		turn := 0.0
		last := 0.0
		for k, w := range out.Omega {
			h := g.At(complex(0, w))
			ph := cmplx.Phase(h) * 180 / math.Pi
			if k > 0 {
				turn += 360 * math.Round((last-ph-turn)/360)
			} else if i == 0 && ph > 90 {
				turn = -360 // a phase that lags: two integrators start at -180, not at 180
			} else if i > 0 {
				turn = 360 * math.Round((out.Phase[0]-ph)/360)
			}
			last = ph + turn
			if i == 0 {
				out.Gain, out.Phase = append(out.Gain, cmplx.Abs(h)), append(out.Phase, last)
				continue
			}
			gains[k], phases[k] = append(gains[k], cmplx.Abs(h)), append(phases[k], last)
		}
	}
	for k := range out.Omega {
		lo, hi := middle(gains[k], out.Gain[k])
		out.GainLo, out.GainHi = append(out.GainLo, lo), append(out.GainHi, hi)
		lo, hi = middle(phases[k], out.Phase[k])
		out.PhaseLo, out.PhaseHi = append(out.PhaseLo, lo), append(out.PhaseHi, hi)
	}
	return out
}

// middle returns the ends of the middle 95 % of x, or twice at where x is empty.
func middle(x []float64, at float64) (lo, hi float64) {
	if len(x) == 0 {
		return at, at
	}
	s := slices.Sorted(slices.Values(x))
	tail := (1 - Confidence) / 2 * float64(len(s)-1)
	return s[int(tail)], s[len(s)-1-int(tail)]
}
