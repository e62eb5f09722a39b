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
	FlawClock     = "time unit"       // stamps in another unit than s, converted
	FlawJitter    = "jitter"          // stamps off their grid
	FlawCoarse    = "coarse stamps"   // stamps with a resolution above the period
	FlawGap       = "gap"             // a step of the stamps longer than a period
	FlawShortStep = "short step"      // a step of the stamps shorter than a period
	FlawRepeat    = "repeated stamp"  // a stamp equal to the one before
	FlawBackward  = "backward stamp"  // a stamp before the one before
	FlawHeader    = "repeated header" // the header again among the rows
	FlawCut       = "cut last line"   // the file ends within a row
	FlawMissing   = "missing value"   // an empty cell, NaN, infinity
	FlawBeyond    = "beyond limits"   // input past [limits] input: logged before its limits; clipped to them
	FlawRate      = "beyond rate"     // input moves faster than [limits] input_rate
	FlawSaturated = "saturation"      // input flat at a limit
	FlawTrip      = "trip"            // output left [limits] output
	FlawStuck     = "stuck sensor"    // output repeats one value far longer than usual
	FlawSpike     = "spike"           // one sample of the output far off its neighbours
	FlawQuantised = "quantisation"    // values on a grid
	FlawDrift     = "drift"           // the mean moves through the log
	FlawIdle      = "input at rest"   // a whole stretch between two breaks without a move of the input
	FlawShort     = "short segment"   // too few rows between two breaks
	FlawConstant  = "constant column" // reference or dither that never moves
)
