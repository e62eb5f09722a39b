package ident

import (
	"fmt"
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/floats"

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

// Responses are the plant's frequency response from the logged input to the
// output, with a joint band: the level is that at which the true response lies
// inside at every frequency, in gain and in phase, at once. A band that holds
// at each frequency by itself holds at all of them far less often.
type Responses struct {
	Omega []float64 `json:"omega"` // rad/s
	Gain  Curve     `json:"gain"`  // units of the output over those of the input
	Phase Curve     `json:"phase"` // degrees, unwrapped
	Level float64   `json:"level"`
	Drawn int       `json:"drawn"` // plants that the band rests on
}

// Curve is a curve with its band, at the frequencies of Responses.
type Curve struct {
	Lo    []float64 `json:"lo"`
	Value []float64 `json:"value"`
	Hi    []float64 `json:"hi"`
}

// responsePoints is the number of frequencies in Responses, bandDraws that of
// plants drawn for the band of a fitted model.
const (
	responsePoints = 100
	bandDraws      = 2000
)

// Responses computes the plant's frequency response and its joint band from n
// drawn plants, from below its slowest pole to the Nyquist frequency of the log.
//
// The band is that of quantiles at each frequency, all of the same tail, which
// is chosen so that the share Confidence of the draws lies inside everywhere
// (Montiel Olea & Plagborg-Møller, Simultaneous confidence bands: theory,
// implementation, and an application to SVARs, J. Applied Econometrics 34
// (2019) 1-17, the quantile-based band). It asks for no shape of the distribution, and
// comes out the same in gain or its logarithm.
func (m *Model) Responses(n int, seed uint64) *Responses {
	g := m.TF()
	out := &Responses{Omega: lti.Grid(m.lowest(), math.Pi/m.Noise.SamplePeriod, responsePoints), Level: Confidence, Drawn: n}
	turn := 0.0
	at := make([]complex128, responsePoints)
	for k, w := range out.Omega {
		at[k] = g.At(complex(0, w))
		ph := cmplx.Phase(at[k]) * 180 / math.Pi
		if k > 0 {
			turn = 360 * math.Round((out.Phase.Value[k-1]-ph)/360)
		} else if ph > 90 {
			turn = -360 // a phase that lags: two integrators start at -180, not at 180
		}
		out.Gain.Value = append(out.Gain.Value, cmplx.Abs(at[k]))
		out.Phase.Value = append(out.Phase.Value, ph+turn)
	}
	// Row k holds what the draws have beyond the estimate: log gain, and
	// behind those of all frequencies the phase in rad.
	beyond := make([][]float64, 2*responsePoints)
	for k := range beyond {
		beyond[k] = make([]float64, n)
	}
	var apart [responsePoints]float64
	for i, drawn := range m.Draw(n, seed) {
		for k, w := range out.Omega {
			d := cmplx.Log(drawn.At(complex(0, w)) / at[k])
			beyond[k][i], beyond[responsePoints+k][i] = real(d), imag(d)
			apart[k] += cmplx.Abs(d)
		}
	}
	// Phases are unwrapped from where the draws differ least.
	from := 0
	for k := range apart {
		if apart[k] < apart[from] {
			from = k
		}
	}
	phase := beyond[responsePoints:]
	follow := func(k, last int) {
		for i := range phase[k] {
			phase[k][i] += 2 * math.Pi * math.Round((phase[last][i]-phase[k][i])/(2*math.Pi))
		}
	}
	for k := from - 1; k >= 0; k-- {
		follow(k, k+1)
	}
	for k := from + 1; k < responsePoints; k++ {
		follow(k, k-1)
	}
	lo, hi := jointBand(beyond)
	for k := range out.Omega {
		out.Gain.Lo = append(out.Gain.Lo, out.Gain.Value[k]*math.Exp(lo[k]))
		out.Gain.Hi = append(out.Gain.Hi, out.Gain.Value[k]*math.Exp(hi[k]))
		out.Phase.Lo = append(out.Phase.Lo, out.Phase.Value[k]+lo[responsePoints+k]*180/math.Pi)
		out.Phase.Hi = append(out.Phase.Hi, out.Phase.Value[k]+hi[responsePoints+k]*180/math.Pi)
	}
	return out
}

// lowest is where Responses begins, rad/s: a hundredth of the Nyquist
// frequency, or a decade below the slowest pole or zero. One that may be zero
// counts by its reach, below which the log tells nothing.
func (m *Model) lowest() float64 {
	start := math.Pi / m.Noise.SamplePeriod / 100
	low := start
	for _, r := range append(slices.Clone(m.Poles), m.Zeros...) {
		slow := math.Hypot(r.Re, r.Im) / 10
		if r.Re95.Contains(0) && r.Im95.Contains(0) {
			slow = math.Hypot(math.Max(-r.Re95.Lo, r.Re95.Hi), r.Im95.Hi)
		}
		if slow > 1e-4*start {
			low = math.Min(low, slow)
		}
	}
	return low
}

// jointBand returns for each row of x, which holds one number a draw, the ends
// of a band in which the share Confidence of the draws lies in all rows at
// once; zeros where there are no draws.
func jointBand(x [][]float64) (lo, hi []float64) {
	lo, hi = make([]float64, len(x)), make([]float64, len(x))
	n := len(x[0])
	if n == 0 {
		return lo, hi
	}
	// How near to an end of its row each draw ever comes.
	nearest := make([]int, n)
	for i := range nearest {
		nearest[i] = n
	}
	order := make([]int, n)
	sorted := make([][]float64, len(x))
	for k, row := range x {
		sorted[k] = slices.Clone(row)
		floats.Argsort(sorted[k], order)
		for rank, i := range order {
			nearest[i] = min(nearest[i], rank, n-1-rank)
		}
	}
	slices.Sort(nearest)
	tail := nearest[int((1-Confidence)*float64(n))]
	for k, row := range sorted {
		lo[k], hi[k] = row[tail], row[n-1-tail]
	}
	return lo, hi
}
