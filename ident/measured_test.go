package ident

import (
	"bytes"
	"cmp"
	"context"
	"errors"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"gonum.org/v1/gonum/floats"

	"steadyrig/data"
)

// shared returns a file of the measured data sets, or skips the test.
func shared(t *testing.T, name string) []byte {
	t.Helper()
	b, err := os.ReadFile(filepath.Join("..", "..", "shared", "datasets", name))
	if err != nil {
		t.Skipf("measured data not here: %v", err)
	}
	return b
}

// Measured logs of a levitated steel ball, coil current to gap, open-loop
// unstable, in closed loop with the reference logged (J. de J. Santana Ramírez,
// Universidad Autónoma de Querétaro, levitador-benchmark, 2026, MIT licence).
// Only rows with a gap of 1 to 10 mm are used: there the ball flies.
//
// For an inductance k0 + k/(1 + y/a) the poles at constant current are
// ±sqrt(2 g/(a + y0)) whatever the mass; with the files' a = 5.2 mm that is 44
// rad/s at 4.85 mm. The files' note has 24 to 41 rad/s from long models of the
// multi-step run, 29 to 40 from the chirp, and calls the runs without steps not
// identifiable. The rig is nonlinear over its 4 to 6 mm and the log slow for it
// (e^{ph} = 1.55), so the check is that the pole is unstable beyond doubt, within
// a third of that, and that no fit calls itself sound.
//
// Run with -v it prints the table of DEVELOPERS.md.
func TestMeasuredLevitation(t *testing.T) {
	if testing.Short() {
		t.Skip("searches up to five poles")
	}
	lines := []string{"| run | rows | physics | note | structure found | unstable pole, 95 % | state / long / outside | explained | white / input / linear | verdict |", "|---|---|---|---|---|---|---|---|---|---|"}
	for _, c := range []struct {
		name, file, note string
		rows             int // of the longest flight
		quiet            bool
		long             bool // only with STEADYRIG_STUDY
	}{
		{name: "steps", file: "dataset_multiescalon_20251217_210203.txt", note: "24 to 41", rows: 3277},
		{name: "chirp", file: "dataset_chirp_20251217_210058.txt", note: "29 to 40", rows: 1513, long: true},
		{name: "constant", file: "dataset_constante_20251217_205611.txt", note: "not identifiable", rows: 2486, quiet: true},
	} {
		raw := shared(t, "maglev_levitador/"+c.file)
		if c.long && os.Getenv("STEADYRIG_STUDY") == "" {
			continue
		}
		rig, err := data.ReadRig(strings.NewReader(`name = "levitated ball"
[log]
time = "t"
input = "i"
output = "y"
reference = "yd"
sample_period = 0.01
[units]
input = "A"
output = "m"
[limits]
output = [0.001, 0.010]
`), "ball.toml")
		if err != nil {
			t.Fatal(err)
		}
		e, err := data.ReadLog(bytes.NewReader(raw), c.file, rig)
		if err != nil {
			t.Fatal(err)
		}
		rows := 0
		for _, s := range e.Segments {
			rows = max(rows, len(s.Y))
		}
		if rows != c.rows {
			t.Errorf("%s: longest flight of %d rows, want %d", c.file, rows, c.rows)
		}
		m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
		exps := []*data.Experiment{e}
		line := fmt.Sprintf("| %s | %d |", c.name, e.Used)
		if c.quiet {
			var refused *RefusedError
			if !errors.As(err, &refused) || !strings.Contains(refused.What, "nothing from outside") {
				t.Errorf("%s: error %v, want a refusal for want of power from outside", c.name, err)
			}
			lines = append(lines, line+fmt.Sprintf(" | %s | | | | | | refused: %v |", c.note, err))
			continue
		}
		if err != nil {
			t.Fatal(err)
		}
		// The mean gap is that of the whole flight, by the files' a of 5.2 mm.
		recs, _, _ := records(exps)
		var gap, n float64
		for _, r := range recs {
			gap, n = gap+floats.Sum(r.Y), n+float64(len(r.Y))
		}
		physical := math.Sqrt(2 * 9.81 / (5.2e-3 + gap/n))
		p := m.Poles[len(m.Poles)-1]
		if p.Im != 0 || p.ProbabilityUnstable < 0.999 || p.Re < physical*2/3 || p.Re > physical*4/3 {
			t.Errorf("%s: unstable pole %+v, want a real one within a third of %g rad/s", c.name, p, physical)
		}
		if m.Verdict == Sound || m.Evidence.Residuals.Linearity > doubtful {
			t.Errorf("%s: verdict %s, linearity %g, of a nonlinear rig on a slow log", c.name, m.Verdict, m.Evidence.Residuals.Linearity)
		}
		var others []string
		for _, method := range m.Evidence.Methods[1:] {
			if len(method.Poles) == 0 {
				t.Logf("%s: %s %s", c.name, method.Name, method.Note)
				others = append(others, "–")
				continue
			}
			right := slices.MaxFunc(method.Poles, func(a, b [2]float64) int { return cmp.Compare(a[0], b[0]) })
			others = append(others, fmt.Sprintf("%.1f", right[0]))
		}
		s := m.Evidence.Structures[0]
		res := m.Evidence.Residuals
		lines = append(lines, line+fmt.Sprintf(" %.1f | %s | %d poles, %d zeros, %d disturbance poles | %.1f, %.1f to %.1f | %s | %.2f %% | %.2g / %.2g / %.2g | %s |",
			physical, c.note, s.Poles, s.Zeros, s.Colour, p.Re, p.Re95.Lo, p.Re95.Hi, strings.Join(others, " / "), 100*m.Evidence.ExplainedShare, res.Whiteness, res.CrossInput, res.Linearity, m.Verdict))
		a, err := Audit(context.Background(), exps, rig)
		if err != nil {
			t.Fatal(err)
		}
		if !a.Sign.Known || a.Sign.Positive {
			t.Errorf("%s: sign %+v: more current lifts the ball, which lowers its distance", c.name, a.Sign)
		}
	}
	t.Log("unstable pole, rad/s\n" + strings.Join(lines, "\n"))
}
