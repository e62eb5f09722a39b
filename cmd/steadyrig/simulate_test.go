package main

import (
	"bytes"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/design"
)

// A simulated log reads back as what acted, whichever row the rig file has the input in, and whatever the columns are
// called.
func TestLogTextReadsBack(t *testing.T) {
	const n = 200
	rec := &design.Record{Period: 0.01, Tripped: -1}
	for k := range n {
		x := float64(k*k%97) / 8
		rec.Input, rec.Output = append(rec.Input, x), append(rec.Output, 2+float64(k%13)/4)
		rec.Reference, rec.Dither = append(rec.Reference, float64(k%7)), append(rec.Dither, float64(k%2))
	}
	for _, row := range []string{data.InputAfter, data.InputBefore} {
		text := strings.NewReplacer(`"u"`, `"coil, A"`, "[log]", "[log]\nreference = \"r\"\ndither = \"d\"\ninput_row = \""+row+"\"").Replace(smallRig)
		rig, err := data.ReadRig(strings.NewReader(text), "rig.toml")
		if err != nil {
			t.Fatal(err)
		}
		exp, err := data.ReadLog(bytes.NewReader(logText(rec, rig)), "log.csv", rig)
		if err != nil {
			t.Fatal(err)
		}
		if len(exp.Segments) != 1 {
			t.Fatalf("%s: %d segments", row, len(exp.Segments))
		}
		s := exp.Segments[0]
		// The first row of a log whose rows show the past input is the second one that was simulated, and the input of
		// its last row is not known.
		from := 0
		if row == data.InputBefore {
			from = 1
		}
		if len(s.Y) < n-2 {
			t.Fatalf("%s: %d rows of %d", row, len(s.Y), n)
		}
		for k := range s.Y {
			if s.U[k] != rec.Input[from+k] || s.Y[k] != rec.Output[from+k] || s.R[k] != rec.Reference[from+k] || s.D[k] != rec.Dither[from+k] {
				t.Fatalf("%s: row %d reads u %g, y %g, r %g, d %g; simulated were %g, %g, %g, %g", row, k,
					s.U[k], s.Y[k], s.R[k], s.D[k], rec.Input[from+k], rec.Output[from+k], rec.Reference[from+k], rec.Dither[from+k])
			}
		}
	}
}
