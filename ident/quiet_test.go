package ident

import (
	"math"
	"os"
	"strconv"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/demorig"
)

// turnedAway makes the checks that Fit makes before it fits anything.
func turnedAway(e *data.Experiment, rig *data.Rig) error {
	exps := []*data.Experiment{e}
	if out := outside(exps); out.Quiet {
		return refuseQuiet(out)
	}
	if err := refuseShifted(checkLaw(exps, rig), rig); err != nil {
		return err
	}
	recs, _, err := records(exps)
	if err != nil {
		return err
	}
	return refuseDeaf(recs)
}

// onGrid returns x rounded to multiples of share of its standard deviation, as
// a converter does; share 0 leaves it.
func onGrid(x []float64, share float64) []float64 {
	if share == 0 {
		return x
	}
	step := share * math.Sqrt(about(x)/float64(len(x)))
	out := make([]float64, len(x))
	for k, v := range x {
		out[k] = math.Round(v/step) * step
	}
	return out
}

// inDigits returns x as a file with so many significant digits has it.
func inDigits(x []float64, digits int) []float64 {
	out := make([]float64, len(x))
	for k, v := range x {
		out[k], _ = strconv.ParseFloat(strconv.FormatFloat(v, 'g', digits, 64), 64)
	}
	return out
}

// written are the ways in which a log of the tests below is written.
var written = []struct {
	name    string
	rewrite func(s *data.Segment)
}{
	{"as simulated", func(s *data.Segment) {}},
	{"output rounded to 1 % of its deviation", func(s *data.Segment) { s.Y = onGrid(s.Y, 0.01) }},
	{"output rounded to 5 %", func(s *data.Segment) { s.Y = onGrid(s.Y, 0.05) }},
	{"output rounded to 25 %", func(s *data.Segment) { s.Y = onGrid(s.Y, 0.25) }},
	{"both rounded to 5 %", func(s *data.Segment) { s.U, s.Y = onGrid(s.U, 0.05), onGrid(s.Y, 0.05) }},
	{"both rounded to 25 %", func(s *data.Segment) { s.U, s.Y = onGrid(s.U, 0.25), onGrid(s.Y, 0.25) }},
	{"input in 3 digits", func(s *data.Segment) { s.U = inDigits(s.U, 3) }},
	{"input in 2 digits", func(s *data.Segment) { s.U = inDigits(s.U, 2) }},
}

// A log without probe and reference steps holds the law only (Söderström &
// Stoica, System Identification, Prentice Hall 1989, ch. 10), however coarsely
// it was written after the law ran: every one is refused. With them none is,
// whether they are logged or not.
func TestQuietLogsAreRefusedAndGoodOnesAreNot(t *testing.T) {
	if testing.Short() {
		t.Skip("looks at 120 logs")
	}
	logs := 1
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		logs, _ = strconv.Atoi(v)
	}
	quiet, kept, good, lost := 0, 0, 0, 0
	for _, r := range demorig.All() {
		still := r
		still.Dither, still.Step = 0, 0
		for seed := range uint64(logs) {
			e, rig := experiment(t, r, 4000+seed)
			silent, silentRig := experiment(t, still, 4000+seed)
			for _, w := range written {
				s := silent.Segments[0]
				w.rewrite(&s)
				quiet++
				if err := turnedAway(&data.Experiment{Period: r.Period, Segments: []data.Segment{s}}, silentRig); err == nil {
					kept++
					t.Errorf("%s, seed %d, quiet, %s: not refused", r.Name, 4000+seed, w.name)
				}
				s = e.Segments[0]
				w.rewrite(&s)
				unlogged := s
				unlogged.R, unlogged.D = nil, nil
				for _, s := range []data.Segment{s, unlogged} {
					good++
					if err := turnedAway(&data.Experiment{Period: r.Period, Segments: []data.Segment{s}}, rig); err != nil {
						lost++
						t.Logf("%s, seed %d, probed (logged: %v), %s: refused: %v", r.Name, 4000+seed, s.R != nil, w.name, err)
					}
				}
			}
		}
	}
	t.Logf("%d of %d quiet logs refused, %d of %d probed ones", quiet-kept, quiet, lost, good)
	if 100*lost >= good {
		t.Errorf("%d of %d probed logs refused, want fewer than one in a hundred", lost, good)
	}
}
