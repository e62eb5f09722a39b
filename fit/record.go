package fit

import "slices"

const (
	badRecord    = "fit: input and output of a record differ in length"
	badMissing   = "fit: missing outputs of a record are not in order, or not in it"
	notWhole     = "fit: outputs are missing, Restored fills them"
	badLogs      = "fit: a record of a log below 0, or one that resumes another log's"
	badOrder     = "fit: negative order or delay"
	noParameters = "fit: no parameters to estimate"
)

// Record is one stretch of a log without a gap: U[k] and Y[k] are the input and the output of sample k, in the log's
// units. The plant's first response to U[k] is Y[k+1] or later. Records are fitted together, each with its own
// constant; nothing is carried over from one to the next. The estimators never change the slices.
//
// Missing lists samples, in ascending order, whose output is not known: no estimate depends on what Y holds there. The
// Predictor takes each for one more unknown; regressions put straight lines in their place.
//
// A Predictor also heeds what records have in common; the other estimators do not.
type Record struct {
	U, Y    []float64
	Missing []int
	// Log is the log that the record is of, counted from 0. Errors of one log have one variance.
	Log int
	// Resumes tells that the record goes on where the one before left off, after a gap: both rest at the same point and
	// share a constant. A first record resumes nothing.
	Resumes bool
}

func checkRecords(recs []Record) {
	for _, r := range recs {
		if len(r.U) != len(r.Y) {
			panic(badRecord)
		}
		for i, k := range r.Missing {
			if k < 0 || k >= len(r.Y) || i > 0 && k <= r.Missing[i-1] {
				panic(badMissing)
			}
		}
	}
}

// checkLogs panics where records of one constant are of different logs.
func checkLogs(recs []Record) {
	for i, r := range recs {
		if r.Log < 0 || r.Resumes && i > 0 && recs[i-1].Log != r.Log {
			panic(badLogs)
		}
	}
}

// Rows returns samples [from, to) of r.
func (r Record) Rows(from, to int) Record {
	cut := r
	cut.U, cut.Y, cut.Missing = r.U[from:to], r.Y[from:to], nil
	for _, k := range r.Missing {
		if k >= from && k < to {
			cut.Missing = append(cut.Missing, k-from)
		}
	}
	return cut
}

// Filled returns r with straight lines, level at the ends, in place of its missing outputs; r itself where there are
// none.
func (r Record) Filled() Record {
	if len(r.Missing) == 0 {
		return r
	}
	y := slices.Clone(r.Y)
	for i := 0; i < len(r.Missing); {
		from := r.Missing[i]
		to := from
		for ; i < len(r.Missing) && r.Missing[i] == to; i++ {
			to++
		}
		var before, after float64
		switch {
		case from > 0 && to < len(y):
			before, after = y[from-1], y[to]
		case from > 0:
			before, after = y[from-1], y[from-1]
		case to < len(y):
			before, after = y[to], y[to]
		}
		for k := from; k < to; k++ {
			y[k] = before + (after-before)*float64(k-from+1)/float64(to-from+1)
		}
	}
	r.Y, r.Missing = y, nil
	return r
}

// firstEquation is the first sample from lead on from which so many rows, and those
// that their equations look back on, lack no output.
func (r Record) firstEquation(lead, rows int) int {
	const back = maxFitPoles + maxColour
	for _, k := range r.Missing {
		if k < lead+rows && k >= lead-back {
			lead = k + 1 + back
		}
	}
	return lead
}
