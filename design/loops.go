package design

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"

	"steadyrig/fit/lti"
)

// LoopsSchema is the schema name of loops.json.
const LoopsSchema = "steadyrig/loops/1"

// LawText is the control law in words, as loops.json carries it.
const LawText = "v = outer(z) (prefilter(z) (r - y0) - (y - y0)) held within outer_limits; " +
	"u = u0 + inner(z) (v - (y - y0)) held within input_limits"

// Verdicts of a design.
const (
	Sound   = "sound"
	Weak    = "weak"
	Refused = "refused"
)

// Loops is loops.json: two loops about an operating point, what physics says about them, their margins and the
// promise over the plants that the data allow. Times in s, angular frequencies in rad/s, input and output in the
// units of the log.
type Loops struct {
	Schema         string         `json:"schema"`
	Tool           string         `json:"tool,omitempty"`
	Rig            string         `json:"rig"`
	Made           string         `json:"made,omitempty"`
	ModelSHA256    string         `json:"model_sha256"`
	SamplePeriod   float64        `json:"sample_period"`
	ComputeDelay   float64        `json:"compute_delay"` // from sampling the output to the input's change
	OperatingPoint OperatingPoint `json:"operating_point"`
	Law            string         `json:"law"`
	InnerForm      string         `json:"inner_form,omitempty"` // the form in words, e.g. "lead with roll-off"
	OuterForm      string         `json:"outer_form,omitempty"`
	Inner          *Block         `json:"inner"`                // nil only in a design refused before tuning
	Outer          *Block         `json:"outer"`                // nil: no outer loop, v = r - y0
	Prefilter      *Block         `json:"prefilter"`            // nil: 1
	InputLimits    *[2]float64    `json:"input_limits"`         // absolute; nil: none
	InputRate      float64        `json:"input_rate,omitempty"` // units of input per second; 0: no limit
	OuterLimits    *[2]float64    `json:"outer_limits"`         // deviation of v; nil: none
	Bounds         []Bound        `json:"bounds"`
	Margins        *LoopMargins   `json:"margins"`
	Yardstick      *Yardstick     `json:"yardstick"`         // nil: not measured
	Forms          []FormResult   `json:"forms,omitempty"`   // what each step of simplicity costs
	Choice         string         `json:"choice,omitempty"`  // why these forms
	Front          []FrontPoint   `json:"front,omitempty"`   // speed against effort, fastest first
	Assumed        *Assumed       `json:"assumed,omitempty"` // nil: the rig file left nothing open
	Sampling       *Sampling      `json:"sampling,omitempty"`
	Hidden         *HiddenMode    `json:"hidden_mode,omitempty"` // nil: none was found
	Promise        *Promise       `json:"promise"`
	FirstClosure   *FirstClosure  `json:"first_closure"`
	Verdict        string         `json:"verdict"`
	Warnings       []string       `json:"warnings"`

	pointMissing bool // the file that was read gives no operating point
}

// OperatingPoint is the pair about which the loops work; deviations count from it.
type OperatingPoint struct {
	Input  float64 `json:"input"`
	Output float64 `json:"output"`
}

// Block is one controller block. Continuous is what it was designed as (nil where only coefficients were given),
// Discrete what runs.
type Block struct {
	Given      string    `json:"given,omitempty"`      // as its author wrote it, see ParseController
	Continuous *Rational `json:"continuous,omitempty"` // descending powers of s
	Discrete   Rational  `json:"discrete"`             // powers of z^-1, Denominator[0] == 1

	mapped bool // Discrete was made from Continuous here
}

// Rational is a ratio of polynomials; the order of its powers is said where it is used.
type Rational struct {
	Numerator   []float64 `json:"numerator"`
	Denominator []float64 `json:"denominator"`
}

// Bound is one limit that physics sets, whatever the controller.
type Bound struct {
	Name     string      `json:"name"`
	Value    float64     `json:"value"`                 // at the nominal model
	Interval *[2]float64 `json:"interval_95,omitempty"` // over the plants that the data allow
	Limit    string      `json:"limit"`                 // "least": no design gets below Value; "most": none gets above
	Unit     string      `json:"unit,omitempty"`
	Asked    *float64    `json:"asked"`     // nil: the spec asks nothing here
	OK       bool        `json:"reachable"` // judged at the unfavourable end of the interval
	Source   string      `json:"source"`
	Advice   string      `json:"advice,omitempty"`  // nearest spec within reach and what to change, when not reachable
	Relaxed  string      `json:"relaxed,omitempty"` // why two loops with a prefilter are not held to it

	key      string   // of the spec, that asks too much
	nearest  float64  // value of key at which this bound is kept; 0: none is
	plants   []lti.TF // the drawn plants, from the unfavourable end on
	other    string   // what to change at the rig
	together string   // likewise, so that all broken bounds are kept
}

// LoopMargins are the margins of the sampled loop at three places.
type LoopMargins struct {
	PlantInput *Margins `json:"plant_input"` // both loops closed, loop gain G K1 (1 + K2)
	InnerAlone *Margins `json:"inner_alone"` // what is left when the outer loop is clamped or off
	OuterBreak *Margins `json:"outer_break"` // loop gain K2 G K1 / (1 + G K1); looks better than the loop is

	Worst *WorstMargins `json:"worst"` // at the plant input, over drawn plants
}

// WorstMargins are the least margins over drawn plants, each from the plant that has it least; as in Margins.
type WorstMargins struct {
	Plants          int      `json:"plants"`
	Stable          int      `json:"stable"` // of these; the others have no margin
	GainUp          *float64 `json:"gain_up"`
	GainDown        *float64 `json:"gain_down"`
	PhaseDeg        *float64 `json:"phase_deg"`
	Delay           *float64 `json:"delay"` // s
	PeakSensitivity float64  `json:"peak_sensitivity"`
}

// Margins of one loop gain. GainUp and GainDown are factors.
type Margins struct {
	GainUp            *float64 `json:"gain_up"`   // nil: any increase
	GainDown          *float64 `json:"gain_down"` // nil: any reduction
	PhaseDeg          *float64 `json:"phase_deg"` // nil: the gain never crosses one
	Delay             *float64 `json:"delay"`     // s; nil: any
	Crossover         float64  `json:"crossover"` // rad/s
	PeakSensitivity   float64  `json:"peak_sensitivity"`
	PeakSensitivityAt float64  `json:"peak_sensitivity_at"` // rad/s
	PeakComplementary float64  `json:"peak_complementary"`
	Stable            bool     `json:"stable"`
}

// FormResult says what one controller form reaches on the tuning plants.
type FormResult struct {
	Loop            string  `json:"loop"` // "inner" or "outer"
	Form            string  `json:"form"`
	Order           int     `json:"order"`
	PeakSensitivity float64 `json:"peak_sensitivity"` // worst tuning plant; inner alone, or both loops for an outer form
	InputNoise      float64 `json:"input_noise"`      // worst tuning plant, standard deviation
	Demand          float64 `json:"demand,omitempty"` // outer forms: worst ratio of reached to asked; below 1 meets the spec
	Chosen          bool    `json:"chosen"`
}

// Promise is the count over fresh plants drawn from the model, none of which was used for tuning.
type Promise struct {
	Plants        int          `json:"plants"`
	Stable        int          `json:"stable"`
	MeetSpec      int          `json:"meet_spec"`
	LowerBound    float64      `json:"lower_bound_95"` // one-sided Clopper-Pearson bound on the share that meets the spec
	Confidence    float64      `json:"confidence"`     // 0.95, or 0.975 for a second attempt
	Attempts      int          `json:"attempts"`
	Overshoot     Spread       `json:"overshoot"`
	Settling      Spread       `json:"settling"` // s
	PeakS         Spread       `json:"peak_sensitivity"`
	InputNoise    Spread       `json:"input_noise"`         // standard deviation
	KickPeak      *Spread      `json:"kick_peak,omitempty"` // output units
	LargestStep   float64      `json:"largest_step"`        // output units
	Recoverable   float64      `json:"recoverable_offset"`  // output units
	UnstablePoles []PoleCount  `json:"unstable_poles"`
	Conditions    string       `json:"conditions"` // what the promise's runs hold and leave out, one sentence
	Misses        []MissReason `json:"misses"`
	Resolution    SignalPair   `json:"resolution"` // steps in which the runs round input and output; 0: not at all
	LongRuns      int          `json:"long_runs"`  // plants that ran on under noise

	atSamples Spread // the overshoot that the samples alone show
}

// Spread is a figure at the nominal model and at the worst of the drawn plants that stay stable.
type Spread struct {
	Nominal float64 `json:"nominal"`
	Worst   float64 `json:"worst"`
}

// PoleCount says how many of the drawn plants have so many unstable poles.
type PoleCount struct {
	Unstable int `json:"unstable"`
	Plants   int `json:"plants"`
}

// MissReason counts the drawn plants that miss one part of the spec. A plant may miss several.
type MissReason struct {
	What   string  `json:"what"`
	Plants int     `json:"plants"`
	Worst  float64 `json:"worst"`
	Asked  float64 `json:"asked"`
}

// FirstClosure is how to close the loops for the first time.
type FirstClosure struct {
	Order      []string   `json:"order"`
	ExpectedSD SignalPair `json:"expected_sd"`
	Trip       TripLevels `json:"trip"`
	Stop       StopLevels `json:"stop"`
	HandOver   *HandOver  `json:"hand_over"` // nil: no stopgap law that could be run
	Faults     []Fault    `json:"faults"`
	Cautions   []string   `json:"cautions"`
}

// StopLevels are absolute levels that correct running at rest reaches in an hour with a probability of 1e-4 at most;
// nil where there is none of use, and Note says why.
type StopLevels struct {
	Input  *[2]float64 `json:"input"`
	Output *[2]float64 `json:"output"`
	Note   string      `json:"note,omitempty"`
}

// HandOver is how the loops take over from the stopgap law, and how far input and measured output then move from the
// operating point: the mean over runs of the largest move within a settling time, the last one of the stopgap law, the
// one after the hand-over, and one long after.
type HandOver struct {
	Rule   string     `json:"rule"`
	Before SignalPair `json:"before"`
	After  SignalPair `json:"after"`
	Noise  SignalPair `json:"noise_alone"`
}

// Fault is what a fault in a first closure looks like, computed at the nominal plant: where it grows, the time in which
// that goes by e and the median times from rest to the stop and trip levels (nil: not reached); where the loops stay
// stable, how many times the expected deviations input and output show.
type Fault struct {
	What   string      `json:"what"`
	Stable bool        `json:"stable"`
	Growth *float64    `json:"growth_time"` // s
	ToStop *float64    `json:"to_stop"`     // s
	ToTrip *float64    `json:"to_trip"`     // s
	Moves  *SignalPair `json:"moves"`
}

// SignalPair is one figure for the input and one for the output.
type SignalPair struct {
	Input  float64 `json:"input"`
	Output float64 `json:"output"`
}

// TripLevels are absolute levels; nil where nothing bounds the signal.
type TripLevels struct {
	Input  *[2]float64 `json:"input"`
	Output *[2]float64 `json:"output"`
}

// IsOne reports whether the block passes its input unchanged.
func (b *Block) IsOne() bool {
	return b == nil || b.Continuous == nil && len(b.Discrete.Numerator) == 1 && len(b.Discrete.Denominator) == 1 &&
		b.Discrete.Numerator[0] == 1 && b.Discrete.Denominator[0] == 1
}

// MarshalJSON writes a block that passes its input unchanged as the number 1.
func (b Block) MarshalJSON() ([]byte, error) {
	if b.IsOne() {
		return []byte("1"), nil
	}
	type plain Block
	return json.Marshal(plain(b))
}

// UnmarshalJSON reads an object, or the number 1.
func (b *Block) UnmarshalJSON(text []byte) error {
	if string(bytes.TrimSpace(text)) == "1" {
		*b = Block{Discrete: Rational{[]float64{1}, []float64{1}}}
		return nil
	}
	type plain Block
	return json.Unmarshal(text, (*plain)(b))
}

// LoopsError says what is wrong in a loops file and what to do about it, in one line.
type LoopsError struct {
	File, Field string
	Err         error
}

func (e *LoopsError) Error() string {
	if e.Field == "" {
		return fmt.Sprintf("reading %q: %v", e.File, e.Err)
	}
	return fmt.Sprintf("reading %q: field %q: %v", e.File, e.Field, e.Err)
}

func (e *LoopsError) Unwrap() error { return e.Err }

// What a loops file may hold; looking at it costs the cube of an order.
const (
	largestFile  = 16 << 20 // bytes
	largestOrder = 100      // of one controller
)

// ReadLoops reads loops.json, the tool's or the user's own. A block may be given by its continuous form alone: it
// is then mapped by Tustin's rule and a warning in the result says so; Verify chooses a mapping by checking. The file's name serves the messages.
func ReadLoops(r io.Reader, name string) (*Loops, error) {
	text, err := io.ReadAll(io.LimitReader(r, largestFile+1))
	if err != nil {
		return nil, &LoopsError{File: name, Err: err}
	}
	if len(text) > largestFile {
		return nil, &LoopsError{File: name, Err: fmt.Errorf("longer than %d MB; is this a loops file?", largestFile>>20)}
	}
	l := new(Loops)
	if err := json.Unmarshal(text, l); err != nil {
		return nil, &LoopsError{File: name, Err: jsonFault(text, err)}
	}
	var given struct {
		Point *json.RawMessage `json:"operating_point"`
	}
	_ = json.Unmarshal(text, &given) // it was read above without fault
	l.pointMissing = given.Point == nil
	if l.Prefilter.IsOne() {
		l.Prefilter = nil
	}
	if l.Verdict == Refused && l.Inner == nil {
		return nil, &LoopsError{name, "inner", errors.New("this design was refused before any loop was tuned; there is nothing to run or verify")}
	}
	if err := l.complete(name); err != nil {
		return nil, err
	}
	return l, nil
}

// NewLoops returns loops without controllers, one step every period seconds, about the operating point and within the
// limits that model and rig file have.
func NewLoops(period float64) *Loops {
	return &Loops{Schema: LoopsSchema, SamplePeriod: period, Law: LawText, pointMissing: true}
}

// Set makes b the block "inner", "outer" or "prefilter"; nil takes outer loop or prefilter away. A block with its
// continuous form alone is mapped as ReadLoops does. It panics on other names. The error says what of the block cannot
// run.
func (l *Loops) Set(name string, b *Block) error {
	if b != nil {
		c := *b
		if b = &c; b.IsOne() && name == "prefilter" {
			b = nil
		} else if err := b.complete(l.SamplePeriod); err != nil {
			return err
		}
	}
	*l.block(name) = b
	return nil
}

// block is where the loops hold the block of a name.
func (l *Loops) block(name string) **Block {
	switch name {
	case "inner":
		return &l.Inner
	case "outer":
		return &l.Outer
	case "prefilter":
		return &l.Prefilter
	}
	panic(noBlock)
}

const noBlock = "design: blocks are inner, outer and prefilter"

// jsonFault turns the decoder's errors into one line with a place.
func jsonFault(text []byte, err error) error {
	var syntax *json.SyntaxError
	var kind *json.UnmarshalTypeError
	at := int64(-1)
	switch {
	case len(bytes.TrimSpace(text)) == 0:
		return errors.New("the file is empty; give a loops.json as `design` writes it")
	case errors.As(err, &syntax):
		at = syntax.Offset
	case errors.As(err, &kind):
		at = kind.Offset
		err = fmt.Errorf("field %q wants %v, the file has %v", kind.Field, kind.Type, kind.Value)
	}
	if at < 0 || at > int64(len(text)) {
		return err
	}
	line := 1 + bytes.Count(text[:at], []byte("\n"))
	return fmt.Errorf("line %d: %w", line, err)
}

// complete validates what was read and fills in what may be left out.
func (l *Loops) complete(file string) error {
	fail := func(field, format string, args ...any) error {
		return &LoopsError{file, field, fmt.Errorf(format, args...)}
	}
	if l.Schema != LoopsSchema {
		return fail("schema", "want %q, the file has %q", LoopsSchema, l.Schema)
	}
	if !(l.SamplePeriod > 0) || math.IsInf(l.SamplePeriod, 0) {
		return fail("sample_period", "want a positive number of seconds, the file has %v", l.SamplePeriod)
	}
	if l.ComputeDelay < 0 {
		return fail("compute_delay", "want a number of seconds that is not negative, the file has %v", l.ComputeDelay)
	}
	if l.InputRate < 0 {
		return fail("input_rate", "want a positive rate or none, the file has %v", l.InputRate)
	}
	if l.Inner == nil {
		return fail("inner", "is missing; give the controller that stabilises, as numerator and denominator")
	}
	for _, b := range []struct {
		name  string
		block *Block
	}{{"inner", l.Inner}, {"outer", l.Outer}, {"prefilter", l.Prefilter}} {
		if b.block == nil {
			continue
		}
		if err := b.block.complete(l.SamplePeriod); err != nil {
			return fail(b.name, "%w", err)
		}
		if b.block.mapped {
			l.Warnings = append(l.Warnings, b.name+" was given as a continuous controller: it was mapped by Tustin's rule at the sample period")
		}
	}
	for _, lim := range []struct {
		name string
		pair *[2]float64
	}{{"input_limits", l.InputLimits}, {"outer_limits", l.OuterLimits}} {
		if lim.pair != nil && !(lim.pair[0] < lim.pair[1]) {
			return fail(lim.name, "want [low, high] with low below high, the file has %v", *lim.pair)
		}
	}
	if l.OuterLimits != nil && (l.OuterLimits[0] > 0 || l.OuterLimits[1] < 0) {
		return fail("outer_limits", "are deviations and must hold zero, the file has %v", *l.OuterLimits)
	}
	if l.InputLimits != nil && !l.pointMissing && (l.OperatingPoint.Input < l.InputLimits[0] || l.OperatingPoint.Input > l.InputLimits[1]) {
		return fail("operating_point", "its input %v lies outside input_limits %v", l.OperatingPoint.Input, *l.InputLimits)
	}
	return nil
}

// complete validates one block and makes its discrete form where it has the continuous one alone.
func (b *Block) complete(period float64) (err error) {
	most := max(len(b.Discrete.Numerator), len(b.Discrete.Denominator))
	if b.Continuous != nil {
		most = max(most, len(b.Continuous.Numerator), len(b.Continuous.Denominator))
	}
	if most > largestOrder+1 {
		return fmt.Errorf("a controller of order %d; want %d at the most", most-1, largestOrder)
	}
	if len(b.Discrete.Numerator) == 0 && len(b.Discrete.Denominator) == 0 && b.Continuous != nil {
		if b.Discrete, err = b.tustin(period); err != nil {
			return err
		}
		b.mapped = true
	}
	d := b.Discrete
	if len(d.Numerator) == 0 || len(d.Denominator) == 0 {
		return errors.New("want discrete numerator and denominator in powers of z^-1, one of them is empty")
	}
	switch lead := d.Denominator[0]; lead {
	case 0:
		return errors.New("the first coefficient of the discrete denominator is zero; it multiplies the present output and must not be")
	case 1:
	default:
		d = Rational{slices.Clone(d.Numerator), slices.Clone(d.Denominator)}
		for _, p := range [][]float64{d.Numerator, d.Denominator} {
			for i := range p {
				p[i] /= lead
			}
		}
		b.Discrete = d
	}
	for _, v := range slices.Concat(d.Numerator, d.Denominator) {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return fmt.Errorf("coefficient %v, over the denominator's first one, is not a finite number", v)
		}
	}
	return nil
}

// tustin maps the block's continuous form by Tustin's rule.
func (b *Block) tustin(period float64) (Rational, error) {
	g := b.continuousTF()
	switch {
	case g.Den.Degree() < 0 || g.Num.Degree() < 0:
		return Rational{}, errors.New("the continuous numerator or denominator is empty or zero")
	case g.RelDegree() < 0:
		return Rational{}, fmt.Errorf("the continuous controller has more zeros (%d) than poles (%d): add roll-off so that it can be built", g.Num.Degree(), g.Den.Degree())
	case g.Den.Eval(complex(2/period, 0)) == 0:
		return Rational{}, fmt.Errorf("the continuous controller has a pole at 2/T = %g rad/s, which Tustin's rule cannot map: shorten the sample period or move the pole", 2/period)
	}
	d := lti.Tustin(g, period)
	return Rational{d.Num, d.Den}, nil
}

func leadingNonzero(p []float64) []float64 {
	for len(p) > 0 && p[0] == 0 {
		p = p[1:]
	}
	return p
}

// Write writes loops.json, indented, with a final newline. Numbers that JSON cannot hold are an error.
func (l *Loops) Write(w io.Writer) error {
	c := *l
	c.Schema = LoopsSchema
	if c.Law == "" {
		c.Law = LawText
	}
	if c.Bounds == nil {
		c.Bounds = []Bound{}
	}
	if c.Warnings == nil {
		c.Warnings = []string{}
	}
	if c.Prefilter == nil && c.Inner != nil {
		c.Prefilter = &Block{Discrete: Rational{[]float64{1}, []float64{1}}}
	}
	var buf bytes.Buffer
	enc := json.NewEncoder(&buf)
	enc.SetEscapeHTML(false)
	enc.SetIndent("", "  ")
	if err := enc.Encode(c); err != nil {
		return fmt.Errorf("writing loops: %w", err)
	}
	_, err := w.Write(buf.Bytes())
	return err
}
