package data

// A Rig is what its owner wrote in the rig file: which column of a log plays which part, the loop to be built, the
// limits of the rig and what the loop has to do. Times in s; input and output in the units of the log.
type Rig struct {
	Name           string          `toml:"name"` // the file's name without its ending where not given
	Log            LogColumns      `toml:"log"`
	Layout         Layout          `toml:"layout"`
	Units          Units           `toml:"units"`
	OperatingPoint *OperatingPoint `toml:"operating_point"` // nil: not given
	Stopgap        *Stopgap        `toml:"stopgap"`         // nil: not given
	Loop           *Loop           `toml:"loop"`            // nil: not given
	Limits         Limits          `toml:"limits"`
	Spec           *Spec           `toml:"spec"` // nil: not given
	Model          Known           `toml:"model"`
	Loops          *Controllers    `toml:"loops"` // nil: not given

	file  string         // for messages
	lines map[string]int // line of each key, "log.input" -> 5; and of each table, "log" -> 3
}

// LogColumns says which column of a log plays which part. An empty name: there is no such column.
type LogColumns struct {
	Time      string `toml:"time"`   // stamps: s, epoch (s, ms, us or ns), or ISO 8601
	Input     string `toml:"input"`  // what the actuator was told, after its limits
	Output    string `toml:"output"` // what the sensor read
	Reference string `toml:"reference"`
	Dither    string `toml:"dither"` // added at the plant input

	InputRow   string `toml:"input_row"`   // InputAfter (default) or InputBefore
	InputStamp string `toml:"input_stamp"` // InputApplied (default) or InputComputed

	SamplePeriod     float64 `toml:"sample_period"`     // s between rows; 0: from the stamps
	ControllerPeriod float64 `toml:"controller_period"` // s, of the loop that ran; 0: that of the rows

	InputTime string  `toml:"input_time"` // stamps of the input, where another clock made them than those of the output
	ClockSkew float64 `toml:"clock_skew"` // how much faster the input's clock runs; its rows are moved to undo it
}

// Settings of LogColumns.
const (
	InputAfter    = "after"    // a row's input acts from the row's output sample on
	InputBefore   = "before"   // a row's input acted until the row's output sample
	InputApplied  = "applied"  // the input is logged when it changes at the actuator
	InputComputed = "computed" // the input is logged when it is computed: delay of the loop that ran included
)

// Layout says how a log is written where that is recognised wrongly. Each key left out is recognised. Lines count from 1
// and lie among the first maxHeadLines.
type Layout struct {
	Delimiter   string `toml:"delimiter"`    // one sign, or DelimiterTab or DelimiterBlanks
	DecimalMark string `toml:"decimal_mark"` // "." or ","
	NamesLine   *int   `toml:"names_line"`   // 0: no names, the columns are c1, c2, …
	UnitsLine   *int   `toml:"units_line"`   // 0: none
	NumbersLine int    `toml:"numbers_line"` // of the first row
	Comment     string `toml:"comment"`      // what a line for people only starts with
}

// Words for Layout.Delimiter.
const (
	DelimiterTab    = "tab"
	DelimiterBlanks = "blanks" // any run of blanks and tabs
)

// delimiter returns the byte that separates cells, ' ' for DelimiterBlanks, 0 where it is to be recognised.
func (l *Layout) delimiter() byte {
	switch l.Delimiter {
	case "":
		return 0
	case DelimiterTab:
		return '\t'
	case DelimiterBlanks:
		return ' '
	}
	return l.Delimiter[0]
}

// Units are names for axes and tables, never converted.
type Units struct {
	Input  string `toml:"input"`
	Output string `toml:"output"`
}

// OperatingPoint is the input and output about which the rig was held.
type OperatingPoint struct {
	Input  float64 `toml:"input"`
	Output float64 `toml:"output"`
}

// Stopgap is the law that ran while the log was taken, u = u0 - law(z) (y - r): Numerator[i] and Denominator[i]
// multiply z^-i; Denominator[0] is not 0.
type Stopgap struct {
	Numerator   []float64 `toml:"numerator"`
	Denominator []float64 `toml:"denominator"`
}

// Loop is the controller to be built.
type Loop struct {
	SamplePeriod float64 `toml:"sample_period"` // s
	Hold         string  `toml:"hold"`          // HoldZeroOrder (default) or HoldBandLimited
	ComputeDelay float64 `toml:"compute_delay"` // s from sampling the output to the input's change
}

// Settings of Loop.Hold: how the input moves between samples.
const (
	HoldZeroOrder   = "zero-order"
	HoldBandLimited = "band-limited"
)

// Limits of the rig, in absolute values (not deviations from the operating point).
type Limits struct {
	Input     *[2]float64 `toml:"input"`      // [lo, hi]; nil: not given
	InputRate float64     `toml:"input_rate"` // units of input per s; 0: none
	Output    *[2]float64 `toml:"output"`     // [lo, hi], beyond it the rig trips; nil: none
	// Steps in which the converters send the input and read the output, units of each. 0: too fine to matter; nil: not
	// given, so what the log's columns show.
	InputResolution  *float64 `toml:"input_resolution"`
	OutputResolution *float64 `toml:"output_resolution"`
}

// Spec is what the loop has to do.
type Spec struct {
	Step            float64 `toml:"step"`             // reference step the spec is for, units of output
	Overshoot       float64 `toml:"overshoot"`        // fraction of the step
	Settling        float64 `toml:"settling"`         // s, to within Band for good; 0: left to the design
	Band            float64 `toml:"band"`             // fraction of the step
	PeakSensitivity float64 `toml:"peak_sensitivity"` // largest |S| at the plant input, both loops closed
	InputNoise      float64 `toml:"input_noise"`      // largest sd of the input due to noise; 0: a twentieth of the range
	Kick            float64 `toml:"kick"`             // step at the plant input, units of input; 0: not asked
	KickPeak        float64 `toml:"kick_peak"`        // largest move of the output under Kick; 0: not asked
}

// Known is what is known of the plant beforehand.
type Known struct {
	Order *int        `toml:"order"` // poles; nil: from the data
	Zeros *int        `toml:"zeros"` // nil: from the data
	Delay *[2]float64 `toml:"delay"` // [lo, hi] to search, s; nil: from -1 sample to a few samples
}

// Controllers are the owner's own two loops for verify, as rational expressions in s or z or as lists of coefficients.
// What they mean is for the reader of such expressions.
type Controllers struct {
	Inner       string      `toml:"inner"`
	Outer       string      `toml:"outer"`        // empty: no outer loop
	Prefilter   string      `toml:"prefilter"`    // empty: none
	OuterLimits *[2]float64 `toml:"outer_limits"` // [lo, hi] of the outer loop's output, deviation; nil: none
}

// File returns the name of the file that the rig was read from; empty for a rig made by a program.
func (g *Rig) File() string { return g.file }

// Line returns the line of a key such as "limits.input", or else of its table, or 0. For messages.
func (g *Rig) Line(key string) int {
	if n := g.lines[key]; n > 0 {
		return n
	}
	table, _ := split(key)
	return g.lines[table]
}
