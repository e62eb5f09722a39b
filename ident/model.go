package ident

import (
	"bytes"
	"encoding/json"
	"fmt"
	"io"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"
	"strconv"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Schema names the version of the model file that this package reads and writes.
const Schema = "steadyrig/model/1"

// Verdicts on a model. A refused model is still written, so that what was
// found out is not lost.
const (
	Sound   = "sound"
	Weak    = "weak"
	Refused = "refused"
)

// Confidence is the two-sided level of every interval in a Model.
const Confidence = 0.95

// Model is a fitted plant with what the logs say about its uncertainty. Its
// JSON form is the file model.json.
type Model struct {
	Schema         string         `json:"schema"`
	Tool           string         `json:"tool"`
	Rig            string         `json:"rig"`
	Units          Units          `json:"units"` // those of the numbers here, empty where the rig file names none
	Made           string         `json:"made"`  // RFC 3339
	Logs           []LogUse       `json:"logs"`
	Verdict        string         `json:"verdict"`
	Warnings       []string       `json:"warnings"`
	OperatingPoint OperatingPoint `json:"operating_point"`
	Plant          Plant          `json:"plant"`
	Poles          []Root         `json:"poles"`
	Zeros          []Root         `json:"zeros"`
	Gain           Gain           `json:"gain"`
	Noise          Noise          `json:"noise"`
	// FrequencyResponse is that of Plant with its joint band, null where there
	// is no plant.
	FrequencyResponse *Responses `json:"frequency_response"`
	Evidence          Evidence   `json:"evidence"`
	Exact             *Exact     `json:"exact,omitempty"` // null where not asked for

	fitted *refitted // what Refit found the model with
}

// LogUse says which rows of which log a model rests on.
type LogUse struct {
	File     string `json:"file"`
	SHA256   string `json:"sha256"`
	Rows     int    `json:"rows"`     // rows in the file
	Used     int    `json:"used"`     // rows in the fit
	Segments int    `json:"segments"` // unbroken stretches
}

// OperatingPoint is where input and output rest, in the units of the log.
type OperatingPoint struct {
	Input  float64 `json:"input"`
	Output float64 `json:"output"`
}

// Plant is the transfer function from input to output deviations.
type Plant struct {
	Numerator   []float64 `json:"numerator"`   // descending powers of s
	Denominator []float64 `json:"denominator"` // descending powers of s, leading 1
	Delay       float64   `json:"delay"`       // s, from the logged input to the output
	Delay95     *Interval `json:"delay_95"`    // null where the delay is held
	// Parameters names the rows of Covariance: "b0", "b1", … multiply s^0,
	// s^1, … in the numerator, "a1" … "an" multiply s^(n-1) … s^0 in the
	// denominator, "delay" is in s.
	Parameters []string    `json:"parameters"`
	Covariance [][]float64 `json:"covariance"`
	// Draws are plants drawn from the likelihood of a log too short for a
	// normal distribution to describe what it allows; else empty.
	Draws []DrawnPlant `json:"draws,omitempty"`
}

// DrawnPlant is a plant that the log allows, in the form of Plant.
type DrawnPlant struct {
	Numerator   []float64 `json:"numerator"`
	Denominator []float64 `json:"denominator"`
	Delay       float64   `json:"delay"`
}

func (d DrawnPlant) tf() lti.TF {
	return lti.TF{Num: reversed(d.Numerator), Den: reversed(d.Denominator), Delay: d.Delay}
}

// parameterNames lists the names of b_0 … b_m, a_1 … a_n.
func parameterNames(zeros, poles int) []string {
	var names []string
	for i := range zeros + 1 {
		names = append(names, fmt.Sprintf("b%d", i))
	}
	for i := 1; i <= poles; i++ {
		names = append(names, fmt.Sprintf("a%d", i))
	}
	return names
}

// parameter points at the named parameter of a plant.
func parameter(g *lti.TF, name string) *float64 {
	if name == "delay" {
		return &g.Delay
	}
	index, err := strconv.Atoi(name[1:])
	if err != nil {
		panic(badParameter + name)
	}
	if name[0] == 'b' {
		return &g.Num[index]
	}
	return &g.Den[len(g.Den)-1-index]
}

const badParameter = "ident: no such parameter: "

// Root is a pole or a zero in rad/s with its bounds. A complex pair is two
// Roots. For a zero Unstable means that it lies in the right half-plane.
type Root struct {
	Re                  float64  `json:"re"`
	Im                  float64  `json:"im"`
	ReSD                float64  `json:"re_sd"`
	ImSD                float64  `json:"im_sd"`
	Re95                Interval `json:"re_95"`
	Im95                Interval `json:"im_95"`
	Re95All             Interval `json:"re_95_all"` // holds for all poles, or all zeros, at once
	Im95All             Interval `json:"im_95_all"`
	Unstable            bool     `json:"unstable"`
	ProbabilityUnstable float64  `json:"probability_unstable"`
}

// Interval is [Lo, Hi]; an infinite end is written as null.
type Interval struct{ Lo, Hi float64 }

// Contains reports whether x lies in the interval, ends included.
func (iv Interval) Contains(x float64) bool { return iv.Lo <= x && x <= iv.Hi }

// MarshalJSON writes [lo, hi], with null for an end that is open.
func (iv Interval) MarshalJSON() ([]byte, error) {
	end := func(x float64) string {
		if math.IsInf(x, 0) || math.IsNaN(x) {
			return "null"
		}
		b, _ := json.Marshal(x)
		return string(b)
	}
	return []byte("[" + end(iv.Lo) + "," + end(iv.Hi) + "]"), nil
}

// UnmarshalJSON reads what MarshalJSON writes.
func (iv *Interval) UnmarshalJSON(b []byte) error {
	var ends []*float64
	if err := json.Unmarshal(b, &ends); err != nil {
		return err
	}
	if len(ends) != 2 {
		return fmt.Errorf("interval has %d ends, want 2", len(ends))
	}
	iv.Lo, iv.Hi = math.Inf(-1), math.Inf(1)
	if ends[0] != nil {
		iv.Lo = *ends[0]
	}
	if ends[1] != nil {
		iv.Hi = *ends[1]
	}
	return nil
}

// Gain holds the steady-state gain, nil where the plant integrates, and the
// leading numerator coefficient, which the plant tends to over s^(m-n) at high
// frequency.
type Gain struct {
	DC            *Estimate `json:"dc"`
	HighFrequency *Estimate `json:"high_frequency"`
}

// Estimate is a number with its standard deviation and interval.
type Estimate struct {
	Value      float64  `json:"value"`
	SD         float64  `json:"sd"`
	Interval95 Interval `json:"interval_95"`
}

// Noise is the disturbance as the fit sees it: y = G u + H e, H monic with a
// stable inverse, in powers of z^-1. SD is that of the one-step prediction
// error e, in units of the output; it is not the sensor's.
type Noise struct {
	Numerator    []float64 `json:"numerator"`
	Denominator  []float64 `json:"denominator"`
	SD           float64   `json:"sd"`
	SamplePeriod float64   `json:"sample_period"`
}

// Evidence is what a reader needs to believe the model, or not to.
type Evidence struct {
	Structures     []Structure `json:"structures"`
	Methods        []Method    `json:"methods"`
	Residuals      Residuals   `json:"residuals"`
	ExplainedShare float64     `json:"explained_share"` // on rows not used in the fit
	OutsideShare   float64     `json:"outside_share"`   // of the input's variance, not explained by past outputs and inputs
	Memories       float64     `json:"memories"`        // length of the logs in predictor memories
	IntervalsBy    string      `json:"intervals_by"`    // curvature, draws or sandwich
	// Agreement is left out for a single log.
	Agreement *Agreement `json:"agreement,omitempty"`
	// Resolution is the step of the grid on which the values of the input and of the output lie in the logs, the coarsest
	// of several; 0: none was found.
	Resolution OperatingPoint `json:"resolution"`
	// Rest and InputBands are what a later log is held against; Rest is null where
	// the plant has none.
	Rest       *Rest       `json:"rest"`
	InputBands []InputBand `json:"input_bands"`
	// LeftOut counts outputs that were taken for unknown because they are wrong.
	LeftOut []LeftOut `json:"left_out"`
}

// Structure is one candidate and how far it lost, in units of BIC.
type Structure struct {
	Poles  int     `json:"poles"`
	Zeros  int     `json:"zeros"`
	Colour int     `json:"colour"` // poles of the disturbance's own
	Delay  float64 `json:"delay"`  // s
	// Integrators is how many of the poles are held at zero.
	Integrators int     `json:"integrators"`
	BIC         float64 `json:"bic"` // above the winner's
	Chosen      bool    `json:"chosen"`
	Verdict     string  `json:"verdict"`
}

// Method is one way of estimating the same poles, named by what it assumes:
// "prediction", "state", "long", "outside".
type Method struct {
	Name   string       `json:"name"`
	Poles  [][2]float64 `json:"poles"` // re, im in rad/s
	SD     []float64    `json:"sd"`    // of each pole by the method's own account, rad/s; null: it gives none
	Agrees bool         `json:"agrees"`
	Rows   int          `json:"rows"` // of the logs that the method saw; 0 in files of older versions
	// Probability is that of so large a difference from the final plant by
	// chance; nil where it was not tested.
	Probability *float64 `json:"probability_by_chance,omitempty"`
	Note        string   `json:"note,omitempty"`
}

// Residuals are the tests on what the model leaves unexplained. The
// probabilities are those of a statistic as large by chance.
type Residuals struct {
	Lags       int     `json:"lags"` // 0: whiteness could not be tested
	Whiteness  float64 `json:"whiteness_probability"`
	CrossInput float64 `json:"input_probability"`
	Linearity  float64 `json:"linearity_probability"` // 1 also where the log is too short to tell
}

// RefusedError says that the data cannot carry what was asked. What says what
// is wrong, Do what to do about it.
type RefusedError struct{ What, Do string }

func (e *RefusedError) Error() string {
	if e.Do == "" {
		return e.What
	}
	return e.What + "; " + e.Do
}

// TF returns the plant with its delay. Polynomials of lti ascend.
func (m *Model) TF() lti.TF {
	return lti.TF{Num: reversed(m.Plant.Numerator), Den: reversed(m.Plant.Denominator), Delay: m.Plant.Delay}
}

// NoiseShape returns H of y = G u + H e.
func (m *Model) NoiseShape() lti.DTF {
	return lti.DTF{
		Num:    append(lti.Poly(nil), m.Noise.Numerator...),
		Den:    append(lti.Poly(nil), m.Noise.Denominator...),
		Period: m.Noise.SamplePeriod,
	}
}

// Draw returns n plants from the joint distribution of the estimate: the normal
// one of its covariance, or that of the stored draws of a short log. Draw k
// depends on seed and k only. A drawn delay below zero is taken as zero, since
// no plant answers before its input.
func (m *Model) Draw(n int, seed uint64) []lti.TF {
	clouds := m.clouds()
	normal := &cloud{names: m.Plant.Parameters, root: rootOf(m.Plant.Covariance)}
	plants := make([]lti.TF, n)
	for k := range plants {
		rnd := rand.New(rand.NewPCG(seed, uint64(k)))
		g := m.TF()
		if len(clouds) > 0 {
			d := m.Plant.Draws[rnd.IntN(len(m.Plant.Draws))].tf()
			g = clouds[len(d.Num)-1].near(d, rnd)
		} else {
			for i, d := range normal.spread(rnd) {
				*parameter(&g, normal.names[i]) += d
			}
		}
		g.Delay = math.Max(0, g.Delay)
		plants[k] = g
	}
	return plants
}

// rootOf returns a lower triangular root of a covariance, which is equilibrated
// first because its parameters differ by many orders of magnitude; directions
// that carry no variance get none.
func rootOf(cov [][]float64) *mat.Dense {
	p := len(cov)
	sd := make([]float64, p)
	for i := range sd {
		sd[i] = math.Sqrt(math.Max(0, cov[i][i]))
	}
	root := mat.NewDense(max(p, 1), max(p, 1), nil)
	for i := range p {
		for j := 0; j <= i; j++ {
			if sd[i] == 0 || sd[j] == 0 {
				continue
			}
			s := cov[i][j] / (sd[i] * sd[j])
			for k := range j {
				s -= root.At(i, k) * root.At(j, k)
			}
			switch {
			case i == j:
				root.Set(i, i, math.Sqrt(math.Max(0, s)))
			case root.At(j, j) > 1e-9:
				root.Set(i, j, s/root.At(j, j))
			}
		}
	}
	for i := range p {
		for j := 0; j <= i; j++ {
			root.Set(i, j, root.At(i, j)*sd[i])
		}
	}
	return root
}

// Write writes the model as JSON, indented.
func (m *Model) Write(w io.Writer) error {
	b, err := json.MarshalIndent(m, "", "  ")
	if err != nil {
		return fmt.Errorf("writing the model: %w", err)
	}
	_, err = w.Write(append(b, '\n'))
	return err
}

// What a model file may hold; looking at it costs the cube of an order.
const (
	largestFile  = 16 << 20 // bytes
	largestOrder = 50       // of plant and noise
)

// ReadModel reads a model file and checks that its parts fit together. name
// is the file's, for messages.
func ReadModel(r io.Reader, name string) (*Model, error) {
	b, err := io.ReadAll(io.LimitReader(r, largestFile+1))
	if err != nil {
		return nil, fmt.Errorf("reading %q: %w", name, err)
	}
	if len(b) > largestFile {
		return nil, fmt.Errorf("%s: longer than %d MB: is this a model file?", name, largestFile>>20)
	}
	m := new(Model)
	if err := json.Unmarshal(b, m); err != nil {
		if at, ok := jsonOffset(err); ok {
			return nil, fmt.Errorf("%s:%d: %w", name, 1+bytes.Count(b[:min(at, len(b))], []byte("\n")), err)
		}
		return nil, fmt.Errorf("%s: %w", name, err)
	}
	if err := m.validate(); err != nil {
		return nil, fmt.Errorf("%s: %w", name, err)
	}
	return m, nil
}

func jsonOffset(err error) (int, bool) {
	switch e := err.(type) {
	case *json.SyntaxError:
		return int(e.Offset), true
	case *json.UnmarshalTypeError:
		return int(e.Offset), true
	}
	return 0, false
}

// validate reports the first way in which the model contradicts itself.
func (m *Model) validate() error {
	if m.Schema != Schema {
		return fmt.Errorf("schema is %q, want %q: is this a model file?", m.Schema, Schema)
	}
	switch m.Verdict {
	case Sound, Weak, Refused:
	default:
		return fmt.Errorf("verdict is %q, want sound, weak or refused", m.Verdict)
	}
	num, den := m.Plant.Numerator, m.Plant.Denominator
	if m.Verdict == Refused && len(den) == 0 {
		return nil
	}
	if len(num) == 0 || len(den) < 2 || den[0] != 1 || len(num) >= len(den) {
		return fmt.Errorf("plant has a numerator of %d and a denominator of %d coefficients, want a denominator that starts with 1 and is longer than the numerator", len(num), len(den))
	}
	if n := max(len(den), len(m.Noise.Numerator), len(m.Noise.Denominator)) - 1; n > largestOrder {
		return fmt.Errorf("plant or noise is of order %d, want %d at the most", n, largestOrder)
	}
	for _, v := range append(append([]float64{m.Plant.Delay, m.Noise.SD, m.Noise.SamplePeriod}, num...), den...) {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return fmt.Errorf("plant or noise holds %v, want finite numbers", v)
		}
	}
	if !(m.Noise.SamplePeriod > 0) {
		return fmt.Errorf("noise sample_period is %v s, want a positive one", m.Noise.SamplePeriod)
	}
	if m.Noise.SD < 0 {
		return fmt.Errorf("noise sd is %v, want 0 or more", m.Noise.SD)
	}
	if m.Plant.Delay < 0 {
		return fmt.Errorf("plant delay is %v s, want 0 or more", m.Plant.Delay)
	}
	if q := m.Evidence.Resolution; q.Input < 0 || q.Output < 0 {
		return fmt.Errorf("resolution of input and output is %v and %v, want 0 or more", q.Input, q.Output)
	}
	if !slices.ContainsFunc(num, func(v float64) bool { return v != 0 }) {
		return fmt.Errorf("plant numerator is zero")
	}
	if len(m.Noise.Denominator) == 0 || len(m.Noise.Numerator) == 0 || m.Noise.Denominator[0] != 1 || m.Noise.Numerator[0] != 1 {
		return fmt.Errorf("noise shape is not monic")
	}
	if len(m.Plant.Covariance) != len(m.Plant.Parameters) {
		return fmt.Errorf("covariance has %d rows for %d parameters", len(m.Plant.Covariance), len(m.Plant.Parameters))
	}
	for i, row := range m.Plant.Covariance {
		if len(row) != len(m.Plant.Parameters) {
			return fmt.Errorf("covariance row %d has %d columns for %d parameters", i+1, len(row), len(m.Plant.Parameters))
		}
	}
	for i, row := range m.Plant.Covariance {
		for j, v := range row {
			other := m.Plant.Covariance[j][i]
			limit := math.Sqrt(math.Max(0, m.Plant.Covariance[i][i]) * math.Max(0, m.Plant.Covariance[j][j]))
			if math.IsNaN(v) || math.IsInf(v, 0) || row[i] < 0 || math.Abs(v-other) > 1e-6*limit || math.Abs(v) > limit*(1+1e-6) {
				return fmt.Errorf("covariance of %s and %s is %v, which no covariance can be", m.Plant.Parameters[i], m.Plant.Parameters[j], v)
			}
		}
	}
	for i, d := range m.Plant.Draws {
		if len(d.Denominator) != len(den) || len(d.Numerator) == 0 || len(d.Numerator) >= len(den) || d.Denominator[0] != 1 || !(d.Delay >= 0) {
			return fmt.Errorf("draw %d of the plant is no plant of %d poles", i+1, len(den)-1)
		}
	}
	if err := m.checkRoots("poles", m.Poles, m.Plant.Denominator); err != nil {
		return err
	}
	if err := m.checkRoots("zeros", m.Zeros, num); err != nil {
		return err
	}
	if r := m.FrequencyResponse; r != nil {
		for _, x := range [][]float64{r.Gain.Lo, r.Gain.Value, r.Gain.Hi, r.Phase.Lo, r.Phase.Value, r.Phase.Hi} {
			if len(x) != len(r.Omega) {
				return fmt.Errorf("frequency_response has %d values for %d frequencies", len(x), len(r.Omega))
			}
		}
	}
	known := append(parameterNames(len(num)-1, len(den)-1), "delay")
	for i, name := range m.Plant.Parameters {
		if !slices.Contains(known, name) || slices.Contains(m.Plant.Parameters[:i], name) {
			return fmt.Errorf("parameter %q is none of b0 to b%d, a1 to a%d and delay, each once", name, len(num)-1, len(den)-1)
		}
	}
	return nil
}

// checkRoots holds listed roots against their polynomial, in descending powers.
func (m *Model) checkRoots(name string, list []Root, p []float64) error {
	want := reversed(p).Roots()
	if len(list) != len(want) {
		return fmt.Errorf("%d %s are listed, the plant has %d", len(list), name, len(want))
	}
	var size float64
	for _, r := range want {
		size = math.Max(size, cmplx.Abs(r))
	}
	for _, r := range list {
		at := complex(r.Re, r.Im)
		near := math.Inf(1)
		for _, w := range want {
			near = math.Min(near, cmplx.Abs(w-at))
		}
		// Rounding moves the roots of a double pair by its square root.
		if !(near <= 1e-4*size) {
			return fmt.Errorf("%s list %.6g%+.6gi rad/s, where the plant has none", name, r.Re, r.Im)
		}
	}
	return nil
}

// finite reports the first number of a fitted model that is none.
func (m *Model) finite() error {
	check := func(what string, v ...float64) error {
		for _, x := range v {
			if math.IsNaN(x) || math.IsInf(x, 0) {
				return fmt.Errorf("%s came out as %v", what, x)
			}
		}
		return nil
	}
	for _, list := range [][]Root{m.Poles, m.Zeros} {
		for _, r := range list {
			if err := check("a pole or zero", r.Re, r.Im, r.ReSD, r.ImSD, r.ProbabilityUnstable); err != nil {
				return err
			}
		}
	}
	for _, row := range m.Plant.Covariance {
		if err := check("the covariance", row...); err != nil {
			return err
		}
	}
	e := m.Evidence
	return check("the evidence", m.OperatingPoint.Input, m.OperatingPoint.Output, m.Noise.SD, m.Plant.Delay,
		e.ExplainedShare, e.OutsideShare, e.Memories, e.Residuals.Whiteness, e.Residuals.CrossInput, e.Residuals.Linearity,
		e.Resolution.Input, e.Resolution.Output)
}

func reversed(p []float64) lti.Poly {
	q := make(lti.Poly, len(p))
	for i, v := range p {
		q[len(p)-1-i] = v
	}
	return q
}
