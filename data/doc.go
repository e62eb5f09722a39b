// Package data turns what a rig's owner has, a rig file and logs, into experiments: plain numbers in stretches of
// constant period, with everything that is wrong with them listed. It knows files, units and what a column is for; it
// knows nothing of models.
//
// # Reading
//
//  1. [Open] opens a file and refuses a directory.
//  2. [ReadRig] reads the rig file (TOML). [Rig.NeedLog] and [Rig.NeedDesign] say what a command needs of it and it
//     lacks.
//  3. [ReadLog] reads one log as the rig file says and returns an [Experiment]. Long logs stream: only the columns that
//     the rig file names are kept.
//  4. [Header] describes a log's columns without a rig file, for the first draft of one.
//  5. [ReadSheet] reads a table that somebody keeps of tests, to be selected, sorted and joined as a [Sheet].
//
// # How a log may be written
//
// Recognised from the first 256 kB, and said in [Experiment].Layout:
//
//	cells       separated by commas, semicolons, tabs or runs of blanks; quoted or not; a delimiter at the end of
//	            every row is ignored
//	numbers     decimal point, or decimal comma where commas do not separate cells; exponents by e, E, d or D
//	no number   an empty cell, NaN, NA, null, none, -, infinity, and what spreadsheets write for them
//	lines       end in LF, CR LF or CR; at most 128 kB long; blank ones are skipped
//	comments    lines that start with #, % or //, in any encoding
//	names       the line of text above the numbers; or a comment above them with one word a column, after an optional
//	            label that ends in ':'; or else c1, c2, …
//	units       a second line of text below the names, or brackets in a name: "u [A]" may be called "u" in the rig file
//	stamps      s; s, ms, us or ns since 1970, told by their size; ms, us, ns, min, h where the unit says so; ISO 8601
//	            with or without zone; time of day
//	packing     gzip, told by its first bytes
//	encoding    UTF-8 or any of one byte a sign; UTF-16 with a byte order mark
//
// What is recognised wrongly the rig file's [layout] puts right.
//
// Faults that leave doubt about the numbers are errors, with file, line and column: text where a number should be, a row
// with more or fewer cells, a period that is not the rig file's. All bad rows are counted, the first few shown.
//
// # Time base
//
// The period is the mean of all steps within half a period of the median step. Steps farther off start a new segment,
// unless the stamps are back on their grid within ten rows without ever running backward: then a logger was late and
// stamped some rows together. Nothing is interpolated and no row is moved. Where stamps repeat because their resolution is
// coarser than the period, [log] sample_period has to be given and is checked against the whole length. A period that
// changes by more than one per cent within the log is an error. Stamps in local time that jump by one hour lost no row, but
// start a segment all the same.
//
// Where input and output were logged by two clocks, [log] input_time names the input's own stamps, which are compared, and
// [log] clock_skew moves the rows of the input. Nothing is moved without it.
//
// # Pairing
//
// Segment.U[k] acts from the moment of Segment.Y[k] on until that of Y[k+1], whatever the log's own habit: with [log]
// input_row = "before" inputs (and dither, which is a part of them) are shifted by one row. A plant without delay and with
// one sample to answer gives Y[k+1] its first response to U[k].
//
// # Flaws
//
// What a fit should not take silently is a [Flaw], each with count, first line, figures, what was done about it, and what
// its owner can do ([Flaw.Remedy]):
//
//	time unit        stamps in another unit than s                  converted
//	jitter           steps off the period by more than 2 %          rows taken as evenly spaced
//	coarse stamps    resolution above the period                    [log] sample_period counts
//	gap              step longer than 1.5 periods                   new segment
//	short step       step shorter than half a period                new segment
//	repeated stamp   row twice: taken once; other values:           new segment
//	backward stamp   clock set back, rows swapped, logs joined      new segment
//	hour jump        local time set on or back              new segment
//	clock skew       stamps of input and output run apart   used as paired; moved by [log] clock_skew
//	two clocks       the columns themselves run apart       used as paired
//	slow telemetry   [log] controller_period below a row's  used
//	repeated header  the header among the rows                      new segment
//	cut last line    the file ends within a row                     row not used
//	missing value    no number in a column that is used             row not used
//	beyond limits    input past [limits] input                      clipped to them
//	beyond rate      input faster than [limits] input_rate          used
//	saturation       input flat at its limits, given or found       used
//	trip             output beyond [limits] output                  only rows in which the rig evidently runs are used
//	stuck sensor     output repeats a value far longer than usual   rows not used
//	spike            one output far off its neighbours              row not used
//	quantisation     values on a grid that is not fine              used
//	few levels       output on a grid as coarse as its motion       used
//	drift            a mean that runs away through the log          used
//	constant column  reference or dither that never moves           used
//	input at rest    a long stretch without a move of the input     not used
//	dead zone        small inputs do not act                        used
//	stiction         play in the input, or friction                 used
//	limit cycle      the loop swings by itself                      used
//	periodic disturbance  a line in the output's spectrum           used
//	aliasing         folded mains; power that grows up to Nyquist   used
//	short segment    less than MinSegment rows                      not used
//
// A row that is not used ends its segment; the next row starts another. Flaws that take a model to see (pairing, what the
// log can tell) are not looked for here; those from dead zone to aliasing are looked for on the
// first rows, some ten thousand, of what a long linear regression and a spectrum show.
//
// # Symbols
//
//	U, Y      input and output, in the units of the log, absolute
//	R, D      reference and dither, same units as Y and U
//	Period    s, > 0
//	Start     s, as stamped; since the log's first row where stamps count from 1970
//
// # Invariants
//
// All numbers in a segment are finite. Rows of a segment are Period apart. U, Y and, where logged, R and D have equal
// length, at least MinSegment. Used is the sum of these lengths, at most Rows. Reading the same bytes twice gives the same
// experiment. The slices of all segments share the memory of the columns: they are not to be changed.
package data
