package fit

const (
	badRecord    = "fit: input and output of a record differ in length"
	badOrder     = "fit: negative order or delay"
	noParameters = "fit: no parameters to estimate"
)

// Record is one stretch of a log without a gap: U[k] and Y[k] are the input and the output of sample k, in the log's
// units. The plant's first response to U[k] is Y[k+1] or later. Records are fitted together, each with its own
// constant; nothing is carried over from one to the next. The estimators never change the slices.
type Record struct{ U, Y []float64 }

func checkRecords(recs []Record) {
	for _, r := range recs {
		if len(r.U) != len(r.Y) {
			panic(badRecord)
		}
	}
}
