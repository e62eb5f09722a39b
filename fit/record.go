package fit

const (
	badRecord    = "fit: input and output of a record differ in length"
	badLogs      = "fit: a record of a log below 0, or one that resumes another log's"
	badOrder     = "fit: negative order or delay"
	noParameters = "fit: no parameters to estimate"
)

// Record is one stretch of a log without a gap: U[k] and Y[k] are the input and the output of sample k, in the log's
// units. The plant's first response to U[k] is Y[k+1] or later. Records are fitted together, each with its own
// constant; nothing is carried over from one to the next. The estimators never change the slices.
//
// A Predictor also heeds what records have in common; the other estimators do not.
type Record struct {
	U, Y []float64
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
