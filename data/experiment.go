package data

// An Experiment is one log, ready for a fit: plain numbers in stretches of constant period.
type Experiment struct {
	File   string
	SHA256 string // of the file's bytes as given (compressed, if it came so), in hex
	Rows   int    // rows of numbers in the file
	Used   int    // rows in Segments, less those whose output is wrong

	// Period is the time between rows in s: the median step of the stamps, or [log] sample_period where there
	// are no stamps.
	Period   float64
	Segments []Segment
	Flaws    []Flaw   // in the order of the file's reading: time base, then column by column
	Columns  []string // names as in the header, or c1, c2, …
	Layout   string   // how the log is written, in words

	// Steps of the grid on which all values of the input and of the output lie; 0: on none, or on one too fine to tell.
	InputStep, OutputStep float64
}

// A Segment is a stretch of a log without a gap: rows Period apart, all numbers finite.
type Segment struct {
	Line  int     // 1-based line in the file of its first row
	Start float64 // time stamp of its first row, s; 0-based row times Period where there are no stamps

	// U[k] acts from the moment of Y[k] on, until Y[k+1]: already shifted where the rig file says input_row =
	// "before". Equal length.
	U, Y []float64
	// R is the reference in the rows of Y; D is the dither in the rows of U, shifted with it. nil when not logged.
	R, D []float64
	// Wrong lists the rows, in ascending order, whose output is no measurement (a spike, a few rows stuck) though
	// the rest of the row is good: Y holds it as logged, and a law that ran has answered to it.
	Wrong []int

	lines lineMap // of the log, for LineAt
	row   int     // of the log, the first here
}

// A Flaw is something in a log that a fit should not take silently.
type Flaw struct {
	Name   string // one of the Flaw... names
	Column string // name in the header; empty where the flaw is the log's as a whole
	Count  int    // rows (or places) concerned
	Line   int    // 1-based line of the first place; 0 where it has none
	Detail string // figures with units, one line
	Effect string // what reading did about it, or what it means for a fit; one line
}

// Names of flaws.
const (
	FlawClock     = "time unit"            // stamps in another unit than s, converted
	FlawJitter    = "jitter"               // stamps off their grid
	FlawCoarse    = "coarse stamps"        // stamps with a resolution above the period
	FlawGap       = "gap"                  // a step of the stamps longer than a period
	FlawShortStep = "short step"           // a step of the stamps shorter than a period
	FlawRepeat    = "repeated stamp"       // a stamp equal to the one before
	FlawBackward  = "backward stamp"       // a stamp before the one before
	FlawHour      = "hour jump"            // local time set ahead or back by an hour
	FlawClocks    = "two clocks"           // input and output logged by clocks that run apart
	FlawSkew      = "clock skew"           // stamps of input and output run apart, or [log] clock_skew moved the input
	FlawTelemetry = "slow telemetry"       // the loop that ran moved the input between rows
	FlawHeader    = "repeated header"      // the header again among the rows
	FlawCut       = "cut last line"        // the file ends within a row
	FlawMissing   = "missing value"        // an empty cell, NaN, infinity
	FlawBeyond    = "beyond limits"        // input past [limits] input: logged before its limits; clipped to them
	FlawRate      = "beyond rate"          // input moves faster than [limits] input_rate
	FlawSaturated = "saturation"           // input flat at a limit
	FlawTrip      = "trip"                 // output left [limits] output
	FlawStuck     = "stuck sensor"         // output repeats one value far longer than usual
	FlawSpike     = "spike"                // one sample of the output far off its neighbours
	FlawQuantised = "quantisation"         // values on a grid
	FlawFew       = "few levels"           // an output on a grid so coarse that its rounding is no noise any more
	FlawDrift     = "drift"                // the mean moves through the log
	FlawIdle      = "input at rest"        // a long stretch without a move of the input
	FlawDeadZone  = "dead zone"            // small inputs do not act
	FlawStiction  = "stiction"             // the output sticks, or the input has play
	FlawCycle     = "limit cycle"          // the loop swings by itself, at one amplitude
	FlawPeriodic  = "periodic disturbance" // a line in the spectrum of the output
	FlawAlias     = "aliasing"             // signs of motion faster than the rows can show
	FlawShort     = "short segment"        // too few rows between two breaks
	FlawConstant  = "constant column"      // reference or dither that never moves
)

// Remedy says what to do about a flaw, in the log or in the rig file; one line.
func (f Flaw) Remedy() string { return remedies[f.Name] }

var remedies = map[string]string{
	FlawClock:     "nothing; give the unit in the column's name or units row if it is another one",
	FlawJitter:    "stamp rows where they are sampled; or leave time out and give [log] sample_period",
	FlawCoarse:    "log stamps with more digits",
	FlawGap:       "give the logger a buffer or a lower rate; or leave time out and give [log] sample_period if no row is missing",
	FlawShortStep: "look at the rows there; leave time out and give [log] sample_period if they are evenly spaced all the same",
	FlawRepeat:    "look at the rows there; stamps with more digits tell apart what was sampled apart",
	FlawBackward:  "split the log there, or sort its rows",
	FlawHour:      "log in UTC or with the zone (+01:00): then the rows go on without a break",
	FlawClocks:    "sample both by one clock, or set [log] clock_skew in the rig file",
	FlawSkew:      "sample both by one clock, or set or take out [log] clock_skew in the rig file",
	FlawTelemetry: "log every sample of the loop, or the mean of the input over each row",
	FlawHeader:    "give the logs one by one",
	FlawCut:       "nothing; the logger was stopped while it wrote",
	FlawMissing:   "log a number in every row; a column that has too few can be left out of [log]",
	FlawBeyond:    "log the input after its limits, or correct [limits] input",
	FlawRate:      "log the input after its limits, or correct [limits] input_rate",
	FlawSaturated: "nothing if the column is what acted; else correct [limits] input, past which it is clipped",
	FlawTrip:      "correct or take out [limits] output to use these rows",
	FlawStuck:     "look at the sensor and its link; cut these rows out if the rig stood still there",
	FlawSpike:     "shield the sensor's line; a log without spikes loses no rows",
	FlawQuantised: "log more digits, or use a finer converter or a narrower range",
	FlawFew:       "log more digits, or use a finer converter or a narrower range; a probe that moves the output more helps, too",
	FlawDrift:     "log a shorter run, or let the rig settle first",
	FlawIdle:      "give [limits] output if the rig tripped; log with the loop closed",
	FlawDeadZone:  "put a stronger probe on the input, or bias the actuator out of the dead zone; give a log without it",
	FlawStiction:  "put a probe on the input that keeps it moving, fast and larger than the play; free what rubs",
	FlawCycle:     "log with a probe stronger than the cycle, or with a law that does not hunt; log a periodic signal as dither",
	FlawPeriodic:  "shield or filter it at its source, before sampling; log it as dither if it is a probe",
	FlawAlias:     "filter before sampling, or log faster: then it shows where it is",
	FlawShort:     "log without breaks",
	FlawConstant:  "nothing; or leave it out of [log]",
}
