package data

import (
	"errors"
	"fmt"
	"go/ast"
	"go/parser"
	"go/token"
	"math"
	"math/rand/v2"
	"slices"
	"strconv"
	"strings"
	"testing"
)

// A flaw's figures are checked against how the log was spoilt; row k of a plainLog is line k+2.

func TestFlawGap(t *testing.T) {
	p := newPlainLog(600)
	for k := 200; k < 600; k++ {
		p.t[k] += 0.30 // 30 rows lost
	}
	for k := 400; k < 600; k++ {
		p.t[k] += 0.01 // one row lost
	}
	exp := mustRead(t, p.csv(), plainRig())
	want := Flaw{FlawGap, "t", 2, 202, "31 rows missing, longest step 0.31 s", "a new segment starts after each; nothing is interpolated"}
	if got := findFlaw(t, exp, FlawGap); got != want || len(exp.Flaws) != 1 {
		t.Errorf("got  %+v\nwant %+v\nof %q", got, want, flawNames(exp))
	}
	if len(exp.Segments) != 3 || exp.Segments[1].Line != 202 || exp.Segments[1].Start != p.t[200] || exp.Used != 600 || exp.Period != 0.01 {
		t.Errorf("%d segments, %d rows used, period %v", len(exp.Segments), exp.Used, exp.Period)
	}
	if !slices.Equal(exp.Segments[1].Y, p.y[200:400]) {
		t.Error("the second segment is not rows 200 to 399")
	}
}

func TestFlawJitter(t *testing.T) {
	p := newPlainLog(500)
	rnd := rand.New(rand.NewPCG(2, 2))
	for k := range p.t {
		p.t[k] += 0.001 * (rnd.Float64() - 0.5)
	}
	exp := mustRead(t, p.csv(), plainRig())
	f := findFlaw(t, exp, FlawJitter)
	// Two uniform stamps of 10 % width: steps have a deviation of 10 % / sqrt(6).
	if !strings.Contains(f.Detail, "standard deviation 4.") || f.Effect != "rows taken as evenly spaced" || len(exp.Segments) != 1 || exp.Period != 0.01 {
		t.Errorf("%+v, %d segments, period %v", f, len(exp.Segments), exp.Period)
	}

	for k := range p.t {
		p.t[k] = float64(k)/100 + 0.004*(rnd.Float64()-0.5)
	}
	exp = mustRead(t, p.csv(), plainRig())
	if f := findFlaw(t, exp, FlawJitter); !strings.Contains(f.Effect, "blurred") || len(exp.Segments) != 1 {
		t.Errorf("%+v, %d segments", f, len(exp.Segments))
	}
}

// Rows that a late logger stamps together are no gap; neither is one late stamp.
func TestFlawLateStamps(t *testing.T) {
	p := newPlainLog(500)
	p.t[100] += 0.007
	for k := 200; k < 205; k++ {
		p.t[k] = p.t[205] - 0.0001*float64(205-k)
	}
	exp := mustRead(t, p.csv(), plainRig())
	if f := findFlaw(t, exp, FlawJitter); len(exp.Segments) != 1 || exp.Used != 500 || exp.Period != 0.01 || f.Line != 102 || len(exp.Flaws) != 1 {
		t.Errorf("%+v, %d segments, %d used, period %v, flaws %q", f, len(exp.Segments), exp.Used, exp.Period, flawNames(exp))
	}
}

// Stamps rounded so coarsely that steps differ, but not so that they repeat: the mean step is the period.
func TestRoundedStamps(t *testing.T) {
	p := newPlainLog(3000)
	for k := range p.t {
		p.t[k] = math.Round(float64(k)/300*1e4) / 1e4
	}
	exp := mustRead(t, p.csv(), plainRig())
	// The stamps at both ends are rounded by 5e-5 s at most, 1e-4 s over 2999 steps.
	if math.Abs(exp.Period-1.0/300) > 1e-4/2999 || len(exp.Segments) != 1 {
		t.Errorf("period %v, %d segments", exp.Period, len(exp.Segments))
	}
}

func TestFlawCoarseStamps(t *testing.T) {
	p := newPlainLog(1000)
	for k := range p.t {
		p.t[k] = math.Floor(float64(k)/100*10) / 10
	}
	_, err := ReadLog(strings.NewReader(p.csv()), "log.csv", plainRig())
	want := `log.csv: 900 of 999 stamps in column "t" repeat the one before: their resolution is coarser than the period; give [log] sample_period`
	if got := message(err); got != want {
		t.Errorf("got  %s\nwant %s", got, want)
	}
	g := plainRig()
	g.Log.SamplePeriod = 0.01
	exp := mustRead(t, p.csv(), g)
	if f := findFlaw(t, exp, FlawCoarse); f.Detail != "stamps move by 0.1 s, rows come every 0.01 s" || len(exp.Segments) != 1 || exp.Period != 0.01 || exp.Used != 1000 {
		t.Errorf("%+v, %d segments, period %v", f, len(exp.Segments), exp.Period)
	}
	g.Log.SamplePeriod = 0.02
	_, err = ReadLog(strings.NewReader(p.csv()), "log.csv", g)
	if err == nil || !strings.Contains(err.Error(), "but [log] sample_period is 0.02 s (rig.toml line 7)") {
		t.Errorf("got %v", err)
	}
}

// Equal rows under one coarse stamp are different samples.
func TestCoarseStampsKeepEqualRows(t *testing.T) {
	p := newPlainLog(1000)
	for k := range p.t {
		p.t[k] = math.Floor(float64(k)/100*10) / 10
		p.u[k], p.y[k] = float64(k/2%7), math.Round(5*p.y[k])
	}
	g := plainRig()
	g.Log.SamplePeriod = 0.01
	if exp := mustRead(t, p.csv(), g); exp.Rows != 1000 || exp.Used != 1000 {
		t.Errorf("%d of %d rows used", exp.Used, exp.Rows)
	}
}

func TestFlawRepeatedStamp(t *testing.T) {
	p := newPlainLog(300)
	same := spoil(p.csv(), 102, func(s string) string { return s + "\n" + s })
	exp := mustRead(t, same, plainRig())
	want := Flaw{FlawRepeat, "t", 1, 103, "rows that repeat the row before in every column used", "each taken once"}
	if got := findFlaw(t, exp, FlawRepeat); got != want || len(exp.Segments) != 1 || !slices.Equal(exp.Segments[0].Y, p.y) {
		t.Errorf("got  %+v\nwant %+v\nin %d segments", got, want, len(exp.Segments))
	}
	if exp.Rows != 301 || exp.Used != 300 {
		t.Errorf("%d of %d rows used, want 300 of 301", exp.Used, exp.Rows)
	}

	other := spoil(p.csv(), 102, func(s string) string { return s + "\n" + text(p.t[100]) + ",7,7,0" })
	exp = mustRead(t, other, plainRig())
	want = Flaw{FlawRepeat, "t", 1, 103, "rows with the stamp of the row before but other values", "a new segment starts there"}
	if got := findFlaw(t, exp, FlawRepeat); got != want || len(exp.Segments) != 2 {
		t.Errorf("got  %+v\nwant %+v\nin %d segments", got, want, len(exp.Segments))
	}
}

// The lines of what follows a row taken once must still be right.
func TestLinesAfterRepeatedRow(t *testing.T) {
	p := newPlainLog(400)
	for k := 200; k < 400; k++ {
		p.t[k]++
	}
	exp := mustRead(t, spoil(p.csv(), 52, func(s string) string { return s + "\n" + s }), plainRig())
	if f := findFlaw(t, exp, FlawGap); f.Line != 203 || exp.Segments[1].Line != 203 {
		t.Errorf("gap on line %d, segment on line %d, want 203", f.Line, exp.Segments[1].Line)
	}
}

func TestFlawBackwardStamp(t *testing.T) {
	p := newPlainLog(300)
	for k := 150; k < 300; k++ {
		p.t[k] -= 1
	}
	exp := mustRead(t, p.csv(), plainRig())
	want := Flaw{FlawBackward, "t", 1, 152, "the clock was set back, rows are out of order, or logs were put together", "a new segment starts there"}
	if got := findFlaw(t, exp, FlawBackward); got != want || len(exp.Segments) != 2 {
		t.Errorf("got  %+v\nwant %+v\nin %d segments", got, want, len(exp.Segments))
	}
}

func TestFlawRowsSwapped(t *testing.T) {
	p := newPlainLog(300)
	p.t[150], p.t[151] = p.t[151], p.t[150]
	exp := mustRead(t, p.csv(), plainRig())
	if f := findFlaw(t, exp, FlawBackward); f.Count != 1 || f.Line != 153 || len(exp.Segments) != 2 || exp.Used != 298 {
		t.Errorf("%+v, %d segments, %d used", f, len(exp.Segments), exp.Used)
	}
}

func TestFlawRepeatedHeader(t *testing.T) {
	p := newPlainLog(300)
	exp := mustRead(t, spoil(p.csv(), 152, func(s string) string { return "t,u,y,r\n" + s }), plainRig())
	want := Flaw{FlawHeader, "", 1, 152, "the header stands among the rows: logs put together", "a new segment starts after it"}
	if got := findFlaw(t, exp, FlawHeader); got != want || len(exp.Segments) != 2 || exp.Segments[1].Line != 153 {
		t.Errorf("got  %+v\nwant %+v\nin %d segments", got, want, len(exp.Segments))
	}
}

func TestFlawCutLastLine(t *testing.T) {
	p := newPlainLog(300)
	text := strings.TrimSuffix(p.csv(), "\n")
	exp := mustRead(t, text[:strings.LastIndexByte(text, ',')], plainRig())
	want := Flaw{FlawCut, "", 1, 301, "the file ends within a row", "the row is not used"}
	if got := findFlaw(t, exp, FlawCut); got != want || exp.Used != 299 {
		t.Errorf("got  %+v\nwant %+v\n%d rows used", got, want, exp.Used)
	}
}

func TestFlawMissing(t *testing.T) {
	for _, cell := range []string{"", "NaN", "nan", "NA", "n/a", "null", "-", "inf", "-Inf", "1.#QNAN", " "} {
		p := newPlainLog(300)
		exp := mustRead(t, spoil(p.csv(), 152, to("1.5,0.5,"+cell+",0")), plainRig())
		want := Flaw{FlawMissing, "y", 1, 152, "empty, NaN or infinite", "a segment ends there; nothing is interpolated"}
		if got := findFlaw(t, exp, FlawMissing); got != want || len(exp.Segments) != 2 || exp.Used != 299 {
			t.Errorf("%q: got  %+v\nwant %+v\nin %d segments", cell, got, want, len(exp.Segments))
		}
	}
	p := newPlainLog(300)
	exp := mustRead(t, spoil(p.csv(), 152, to(",0.5,0.1,0")), plainRig())
	if f := findFlaw(t, exp, FlawMissing); f.Column != "t" || len(exp.Segments) != 2 || exp.Used != 299 || exp.Period != 0.01 {
		t.Errorf("a missing stamp: %+v, %d segments", f, len(exp.Segments))
	}
}

func TestFlawShortSegment(t *testing.T) {
	p := newPlainLog(300)
	for k := 200; k < 300; k++ {
		p.t[k] += 1
	}
	for k := 249; k < 300; k++ {
		p.t[k] += 1
	}
	exp := mustRead(t, p.csv(), plainRig())
	want := Flaw{FlawShort, "", 1, 202, "49 rows in stretches of less than 50", "not used"}
	if got := findFlaw(t, exp, FlawShort); got != want || exp.Used != 251 {
		t.Errorf("got  %+v\nwant %+v\n%d rows used", got, want, exp.Used)
	}
}

func TestFlawIdle(t *testing.T) {
	p := newPlainLog(400)
	for k := 200; k < 400; k++ {
		p.t[k]++
		p.u[k] = 0.5
	}
	exp := mustRead(t, p.csv(), plainRig())
	want := Flaw{FlawIdle, "u", 1, 202, "200 rows in stretches in which the input never moves", "not used: the loop was not closed"}
	if got := findFlaw(t, exp, FlawIdle); got != want || exp.Used != 200 {
		t.Errorf("got  %+v\nwant %+v\n%d rows used", got, want, exp.Used)
	}
}

// A stretch in which the input rests, between others in which it moves: a trip that no limit tells.
func TestFlawRest(t *testing.T) {
	p := newPlainLog(1000)
	for k := 600; k < 800; k++ {
		p.u[k] = 0.5
	}
	exp := mustRead(t, p.csv(), plainRig())
	want := Flaw{FlawIdle, "u", 1, 602, "200 rows in stretches in which the input never moves", "not used: the loop was not closed"}
	if got := findFlaw(t, exp, FlawIdle); got != want || exp.Used != 800 || len(exp.Segments) != 2 || len(exp.Flaws) != 1 {
		t.Errorf("got  %+v\nwant %+v\n%d rows used, flaws %q", got, want, exp.Used, flawNames(exp))
	}
	// The actuator may be switched off to where its limit is.
	p = newPlainLog(1000)
	for k := 600; k < 1000; k++ {
		p.u[k] = -9
	}
	if exp := mustRead(t, p.csv(), plainRig()); exp.Used != 600 || findFlaw(t, exp, FlawIdle).Line != 602 {
		t.Errorf("off at the limit: %d rows used, flaws %q", exp.Used, flawNames(exp))
	}
	// An input that is held for many rows, or lies at its limit, rests nowhere.
	held, limited := newPlainLog(3000), newPlainLog(1000)
	for k := range held.u {
		held.u[k] = held.u[k-k%100]
	}
	for k := range limited.u {
		limited.u[k] = min(limited.u[k], 0.5)
		if k >= 600 && k < 800 {
			limited.u[k] = 0.5
		}
	}
	for name, p := range map[string]*plainLog{"held": held, "limited": limited} {
		if exp := mustRead(t, p.csv(), plainRig()); slices.Contains(flawNames(exp), FlawIdle) {
			t.Errorf("%s: %+v", name, findFlaw(t, exp, FlawIdle))
		}
	}
}

func TestFlawSlowTelemetry(t *testing.T) {
	g := plainRig()
	g.Log.ControllerPeriod = 0.002
	exp := mustRead(t, strings.Replace(newPlainLog(300).csv(), "t,u,y,r", "t,u,y,r_u_Mean", 1), func() *Rig { h := *g; h.Log.Reference = ""; return &h }())
	want := Flaw{FlawTelemetry, "u", 300, 2, "a row every 0.01 s, but the loop ran every 0.002 s ([log] controller_period): the input moved 5 times a row",
		`used as if the input had been held for a row, which moves delay and fast poles; column "r_u_Mean", its mean over a row, could serve as input`}
	if got := findFlaw(t, exp, FlawTelemetry); got != want || len(exp.Flaws) != 1 {
		t.Errorf("got  %+v\nwant %+v", got, want)
	}
	for _, same := range []float64{0.01, 0.05} {
		g.Log.ControllerPeriod = same
		if exp := mustRead(t, newPlainLog(300).csv(), g); len(exp.Flaws) > 0 {
			t.Errorf("loop every %g s: %+v", same, exp.Flaws)
		}
	}
}

// Noise through a lightly damped resonance swings, too, but not at one amplitude; a swing of one amplitude whose phase
// wanders shows no line.
func TestResonanceIsNoCycle(t *testing.T) {
	for seed := range uint64(6) {
		noise, swing := newPlainLog(4000), newPlainLog(4000)
		rnd := rand.New(rand.NewPCG(8, seed))
		const damping, angle = 0.97, 0.6
		a, b, phase := 0.0, 0.0, 0.0
		for k := range noise.y {
			a, b = 2*damping*math.Cos(angle)*a-damping*damping*b+rnd.NormFloat64(), a
			noise.y[k] = a
			phase += angle + 0.08*rnd.NormFloat64()
			swing.y[k] = math.Sin(phase) + 0.1*rnd.NormFloat64()
		}
		if exp := mustRead(t, noise.csv(), plainRig()); len(exp.Flaws) > 0 {
			t.Errorf("noise, seed %d: %+v", seed, exp.Flaws)
		}
		if f := findFlaw(t, mustRead(t, swing.csv(), plainRig()), FlawCycle); !strings.HasPrefix(f.Detail, "swings at 9.") {
			t.Errorf("swing of %g Hz, seed %d: %+v", 100*angle/(2*math.Pi), seed, f)
		}
	}
}

// Every flaw says what to do about it, on lines that a console takes.
func TestRemedies(t *testing.T) {
	names := constants(t, "experiment.go", "Flaw")
	if len(names) < 28 {
		t.Fatalf("flaws %q", names)
	}
	for _, name := range names {
		if r := (Flaw{Name: name}).Remedy(); r == "" || strings.HasSuffix(r, ".") {
			t.Errorf("%s: remedy %q", name, r)
		}
	}
	if len(remedies) != len(names) {
		t.Errorf("%d remedies for %d flaws", len(remedies), len(names))
	}
}

// constants returns the texts of the constants of a file whose names start so.
func constants(t *testing.T, file, prefix string) []string {
	t.Helper()
	f, err := parser.ParseFile(token.NewFileSet(), file, nil, 0)
	if err != nil {
		t.Fatal(err)
	}
	var out []string
	ast.Inspect(f, func(n ast.Node) bool {
		if v, ok := n.(*ast.ValueSpec); ok && strings.HasPrefix(v.Names[0].Name, prefix) && len(v.Values) == 1 {
			text, err := strconv.Unquote(v.Values[0].(*ast.BasicLit).Value)
			if err != nil {
				t.Fatal(err)
			}
			out = append(out, text)
		}
		return true
	})
	return out
}

func TestNoSegmentLeft(t *testing.T) {
	p := newPlainLog(300)
	lines := strings.Split(p.csv(), "\n")
	for i := 40; i < 300; i += 40 {
		lines[i] = text(p.t[i-1]) + ",,1,0"
	}
	_, err := ReadLog(strings.NewReader(strings.Join(lines, "\n")), "log.csv", plainRig())
	want := `log.csv: too few rows on end: of 300 no stretch of 50 is left: missing value in column "u" (7, first on line 41); a fit needs 50 rows on end at the very least, and a few thousand to be good`
	if got := message(err); got != want {
		t.Errorf("got  %s\nwant %s", got, want)
	}
}

// Limits narrower than the log are named as the cause, not the length of the log.
func TestLimitsNarrowerThanTheLog(t *testing.T) {
	g := plainRig()
	g.Limits.Input = &[2]float64{0.1, 0.2}
	_, err := ReadLog(strings.NewReader(newPlainLog(300).csv()), "log.csv", g)
	if got := message(err); !errors.Is(err, ErrTooShort) || !strings.Contains(got, `of 300 the input (column "u") is beyond [limits] input [0.1, 0.2]; correct [limits] input (rig.toml`) {
		t.Errorf("input: %s", got)
	}
	g = plainRig()
	g.Limits.Output = &[2]float64{5, 6}
	_, err = ReadLog(strings.NewReader(newPlainLog(300).csv()), "log.csv", g)
	if got := message(err); !errors.Is(err, ErrTooShort) || !strings.Contains(got, `(column "y") is beyond [limits] output [5, 6]; correct [limits] output (rig.toml`) {
		t.Errorf("output: %s", got)
	}
}

func TestPeriodMismatch(t *testing.T) {
	g := plainRig()
	g.Log.SamplePeriod = 0.001
	_, err := ReadLog(strings.NewReader(newPlainLog(300).csv()), "log.csv", g)
	want := `log.csv: the stamps in column "t" are 0.01 s apart, but [log] sample_period is 0.001 s (rig.toml line 7); correct it, or take it out to go by the stamps`
	if got := message(err); got != want {
		t.Errorf("got  %s\nwant %s", got, want)
	}
	g.Log.SamplePeriod = 0.010001 // within tolerance: what the rig file says counts
	if exp := mustRead(t, newPlainLog(300).csv(), g); exp.Period != 0.010001 {
		t.Errorf("period %v", exp.Period)
	}
}

func TestPeriodChanges(t *testing.T) {
	p := newPlainLog(600)
	for k := 300; k < 600; k++ {
		p.t[k] = p.t[299] + float64(k-299)*0.012
	}
	_, err := ReadLog(strings.NewReader(p.csv()), "log.csv", plainRig())
	if err == nil || !strings.Contains(err.Error(), "the period changes: 0.01 s near this line") {
		t.Errorf("got %v", err)
	}
}

func TestStampsWithoutPeriod(t *testing.T) {
	p := newPlainLog(300)
	rnd := rand.New(rand.NewPCG(3, 3))
	for k := 1; k < len(p.t); k++ {
		p.t[k] = p.t[k-1] + math.Exp(3*rnd.NormFloat64())
	}
	_, err := ReadLog(strings.NewReader(p.csv()), "log.csv", plainRig())
	if err == nil || !strings.Contains(err.Error(), `the stamps in column "t" have no common period`) {
		t.Errorf("got %v", err)
	}
}

func TestTimeStandsStill(t *testing.T) {
	p := newPlainLog(100)
	for k := range p.t {
		p.t[k] = 3
	}
	_, err := ReadLog(strings.NewReader(p.csv()), "log.csv", plainRig())
	want := `log.csv: line 2: column "t" (time) does not run: 3 at first and 3 at last; name the column of the stamps, or give [log] sample_period without time`
	if got := message(err); got != want {
		t.Errorf("got  %s\nwant %s", got, want)
	}
}

func TestFlawSaturated(t *testing.T) {
	p := newPlainLog(1000)
	low, high := 0, 0
	first := -1
	for k, u := range p.u {
		p.u[k] = min(1, max(-1.5, u))
		if p.u[k] == 1 {
			high++
		}
		if p.u[k] == -1.5 {
			low++
		}
		if first < 0 && p.u[k] != u {
			first = k
		}
	}
	detail := fmt.Sprintf("%.2g %% of the rows flat: %d at -1.5, %d at 1", float64(low+high)/10, low, high)
	for name, limits := range map[string]*[2]float64{"given": {-1.5, 1}, "found": nil} {
		g := plainRig()
		g.Limits.Input = limits
		exp := mustRead(t, p.csv(), g)
		if f := findFlaw(t, exp, FlawSaturated); f.Count != low+high || f.Line != first+2 || f.Detail != detail || exp.Used != 1000 || len(exp.Flaws) != 1 {
			t.Errorf("limits %s: %+v, want %s from line %d; flaws %q", name, f, detail, first+2, flawNames(exp))
		}
	}
}

// An input that often reaches its extremes without staying there is not saturated.
func TestPeaksAreNotSaturation(t *testing.T) {
	p := newPlainLog(2000)
	for k := range p.u {
		p.u[k] = math.Abs(float64(k%60)-30) + 0.001*float64(k%7)
	}
	if exp := mustRead(t, p.csv(), plainRig()); slices.Contains(flawNames(exp), FlawSaturated) {
		t.Errorf("%+v", findFlaw(t, exp, FlawSaturated))
	}
}

func TestFlawBeyondLimits(t *testing.T) {
	p := newPlainLog(1000)
	p.u[300], p.u[700] = 5, -7
	g := plainRig()
	g.Limits.Input = &[2]float64{-4, 4}
	exp := mustRead(t, p.csv(), g)
	want := Flaw{FlawBeyond, "u", 2, 302, "up to 3 past [limits] input [-4, 4]: logged before its limits, or the limits are wrong",
		"clipped to the limits, past which the actuator was not told to go"}
	s := exp.Segments[0]
	if got := findFlaw(t, exp, FlawBeyond); got != want || exp.Used != 1000 || len(exp.Segments) != 1 || s.U[300] != 4 || s.U[700] != -4 || !slices.Equal(s.U[301:700], p.u[301:700]) {
		t.Errorf("got  %+v\nwant %+v\n%d rows used", got, want, exp.Used)
	}
}

func TestFlawBeyondRate(t *testing.T) {
	p := newPlainLog(200)
	for k := range p.u {
		p.u[k] = math.Sin(float64(k) / 10) // 10 per s at most
	}
	p.u[100]++
	g := plainRig()
	g.Limits.InputRate = 20
	exp := mustRead(t, p.csv(), g)
	if f := findFlaw(t, exp, FlawRate); f.Count != 2 || f.Line != 102 || exp.Used != 200 {
		t.Errorf("%+v", f)
	}
}

func TestFlawTrip(t *testing.T) {
	p := newPlainLog(1000)
	for k := 600; k < 1000; k++ {
		p.y[k] = 9 - 0.001*float64(k)
		p.u[k] = 0
	}
	for k := 900; k < 1000; k++ {
		p.y[k] = 0.1 * float64(k%7) // lying between the limits, actuator off
	}
	g := plainRig()
	g.Limits.Output = &[2]float64{-2, 2}
	exp := mustRead(t, p.csv(), g)
	want := Flaw{FlawTrip, "y", 1, 602, "output beyond [limits] output [-2, 2]", "400 rows not used: beyond, or the rig is not running"}
	if got := findFlaw(t, exp, FlawTrip); got != want || exp.Used != 600 || len(exp.Segments) != 1 {
		t.Errorf("got  %+v\nwant %+v\n%d rows used", got, want, exp.Used)
	}
}

// After a trip the output may pass through its limits, and may lie between them with the actuator off.
func TestNoRestart(t *testing.T) {
	for _, c := range []struct {
		name   string
		from   int
		moving bool
	}{{"too short", 1000 - runningRows + 1, true}, {"actuator off", 700, false}} {
		p := newPlainLog(1000)
		for k := 600; k < 1000; k++ {
			if !c.moving {
				p.u[k] = 0
			}
			if k < c.from {
				p.y[k] = 9 + 0.01*float64(k)
			}
		}
		g := plainRig()
		g.Limits.Output = &[2]float64{-2, 2}
		if exp := mustRead(t, p.csv(), g); exp.Used != 600 {
			t.Errorf("%s: %d rows used, want 600", c.name, exp.Used)
		}
	}
}

// A log that starts before the rig does: lying within the limits, picked up, running.
func TestStartUpIsNotUsed(t *testing.T) {
	p := newPlainLog(1000)
	for k := range 300 {
		p.u[k] = 0
		if k >= 200 {
			p.y[k] = 5 + 0.01*float64(k)
		}
	}
	g := plainRig()
	g.Limits.Output = &[2]float64{-2, 2}
	exp := mustRead(t, p.csv(), g)
	if f := findFlaw(t, exp, FlawTrip); f.Line != 202 || len(exp.Segments) != 1 || exp.Segments[0].Line != 302 || exp.Used != 700 {
		t.Errorf("%+v, %d segments, %d used", f, len(exp.Segments), exp.Used)
	}
}

func TestFlawTripAndRestart(t *testing.T) {
	p := newPlainLog(1000)
	for k := 300; k < 400; k++ {
		p.y[k] = 5 + 0.01*float64(k)
	}
	g := plainRig()
	g.Limits.Output = &[2]float64{-2, 2}
	exp := mustRead(t, p.csv(), g)
	want := Flaw{FlawTrip, "y", 1, 302, "output beyond [limits] output [-2, 2]", "100 rows not used: beyond, or the rig is not running; used after 1 restart (200 rows on end within limits, input moving)"}
	if got := findFlaw(t, exp, FlawTrip); got != want || exp.Used != 900 || len(exp.Segments) != 2 {
		t.Errorf("got  %+v\nwant %+v\n%d rows used", got, want, exp.Used)
	}
}

func TestFlawStuckSensor(t *testing.T) {
	p := newPlainLog(2000)
	for k := 500; k < 560; k++ {
		p.y[k] = p.y[499]
	}
	exp := mustRead(t, p.csv(), plainRig())
	f := findFlaw(t, exp, FlawStuck)
	if f.Column != "y" || f.Count != 1 || f.Line != 501 || f.Effect != "61 rows not used" || exp.Used != 1939 || len(exp.Flaws) != 1 || len(exp.Segments) != 2 {
		t.Errorf("%+v; %d rows used, flaws %q", f, exp.Used, flawNames(exp))
	}
	// A short stretch ends no segment.
	p = newPlainLog(2000)
	for k := 500; k < 530; k++ {
		p.y[k] = p.y[499]
	}
	exp = mustRead(t, p.csv(), plainRig())
	if w := exp.Segments[0].Wrong; len(exp.Segments) != 1 || exp.Used != 1969 || len(w) != 31 || w[0] != 499 || w[30] != 529 {
		t.Errorf("a short stretch: %d segments, %d rows used, wrong %v", len(exp.Segments), exp.Used, w)
	}
}

// A calm output on a coarse grid repeats itself without being stuck.
func TestCalmOutputIsNotStuck(t *testing.T) {
	rnd := rand.New(rand.NewPCG(4, 4))
	p := newPlainLog(20_000)
	y := 0.0
	for k := range p.y {
		y = 0.99*y + 0.05*rnd.NormFloat64()
		p.y[k] = math.Round(y*5) / 5
	}
	exp := mustRead(t, p.csv(), plainRig())
	if names := flawNames(exp); slices.Contains(names, FlawStuck) || slices.Contains(names, FlawSpike) {
		t.Errorf("flaws %q", names)
	}
	if f := findFlaw(t, exp, FlawQuantised); !strings.HasPrefix(f.Detail, "step 0.2,") {
		t.Errorf("%+v", f)
	}
}

func TestFlawSpike(t *testing.T) {
	p := newPlainLog(2000)
	p.y[700] = 9
	p.y[1200] = -9
	exp := mustRead(t, p.csv(), plainRig())
	want := Flaw{FlawSpike, "y", 2, 702, "single samples more than 15 robust standard deviations off their neighbours, the first 9",
		"the output of these rows is not used"}
	if got := findFlaw(t, exp, FlawSpike); got != want || exp.Used != 1998 || len(exp.Segments) != 1 || len(exp.Flaws) != 1 {
		t.Errorf("got  %+v\nwant %+v\n%d rows used, flaws %q", got, want, exp.Used, flawNames(exp))
	}
	s := exp.Segments[0]
	if !slices.Equal(s.Wrong, []int{700, 1200}) || s.Y[700] != 9 || s.LineAt(1200) != 1202 {
		t.Errorf("wrong rows %v, the first %g, the last on line %d", s.Wrong, s.Y[700], s.LineAt(1200))
	}
	if pieces := exp.Pieces(); len(pieces) != 3 || pieces[1].Line != 703 || len(pieces[1].Y) != 499 || pieces[2].Start != p.t[1201] || len(pieces[2].R) != 799 {
		t.Errorf("pieces %+v", pieces)
	}
}

// What moves violently but steadily has no spikes.
func TestViolentOutputHasNoSpikes(t *testing.T) {
	p := newPlainLog(4000)
	for k := 2000; k < 2400; k++ {
		p.y[k] += 20 * math.Sin(2*math.Pi*float64(k)/2.5) * math.Sin(math.Pi*float64(k-2000)/400)
	}
	for k := 3000; k < 3500; k++ { // a step there and back
		p.y[k] += 10
	}
	exp := mustRead(t, p.csv(), plainRig())
	if names := flawNames(exp); slices.Contains(names, FlawSpike) {
		t.Errorf("flaws %+v", findFlaw(t, exp, FlawSpike))
	}
}

func TestFlawQuantised(t *testing.T) {
	p := newPlainLog(2000)
	for k, y := range p.y {
		p.y[k] = math.Round(math.Round(y/0.0488)*0.0488*1e4) / 1e4 // a converter's step, printed with 4 decimals
	}
	exp := mustRead(t, p.csv(), plainRig())
	f := findFlaw(t, exp, FlawQuantised)
	if f.Column != "y" || !strings.HasPrefix(f.Detail, "step 0.0488") || !strings.HasPrefix(f.Effect, "used; it adds noise of standard deviation 0.0140") {
		t.Errorf("%+v", f)
	}
	// The input of that log lies on no grid.
	if math.Abs(exp.OutputStep-0.0488) > 1e-4 || exp.InputStep != 0 {
		t.Errorf("steps of output %v and input %v, want 0.0488 and none", exp.OutputStep, exp.InputStep)
	}
}

func TestFlawDrift(t *testing.T) {
	p := newPlainLog(2000)
	for k := range p.y {
		p.y[k] += 3 * float64(k) / 2000
	}
	exp := mustRead(t, p.csv(), plainRig())
	if f := findFlaw(t, exp, FlawDrift); f.Column != "y" || !strings.HasPrefix(f.Detail, "the mean moves by 3") && !strings.HasPrefix(f.Detail, "the mean moves by 2.9") || len(exp.Flaws) != 1 {
		t.Errorf("%+v, flaws %q", f, flawNames(exp))
	}
}

// A drift far below what else moves the output is none, however sure.
func TestSmallDriftIsNone(t *testing.T) {
	p := newPlainLog(4000)
	for k := range p.y {
		p.y[k] = math.Sin(2*math.Pi*float64(k)/40) + 0.2*float64(k)/4000 // ten blocks of whole periods
	}
	if exp := mustRead(t, p.csv(), plainRig()); len(exp.Flaws) > 0 {
		t.Errorf("%+v", exp.Flaws)
	}
}

func TestFlawConstantReference(t *testing.T) {
	p := newPlainLog(200)
	for k := range p.r {
		p.r[k] = 3
	}
	exp := mustRead(t, p.csv(), plainRig())
	if f := findFlaw(t, exp, FlawConstant); f.Column != "r" || exp.Used != 200 {
		t.Errorf("%+v", f)
	}

	g := plainRig()
	g.Log.Dither = "d"
	var b strings.Builder
	b.WriteString("t,u,y,r,d\n")
	for k := range p.t {
		b.WriteString(text(p.t[k]) + "," + text(p.u[k]) + "," + text(p.y[k]) + ",3," + strconv.Itoa(k/5%2) + "\n")
	}
	if exp := mustRead(t, b.String(), g); len(exp.Flaws) > 0 {
		t.Errorf("with a dither that moves: %+v", exp.Flaws)
	}
}

func TestFlawTimeUnit(t *testing.T) {
	p := newPlainLog(200)
	var b strings.Builder
	b.WriteString("t [ms],u,y,r\n")
	for k := range p.t {
		b.WriteString(strconv.Itoa(10*k) + "," + text(p.u[k]) + "," + text(p.y[k]) + ",0\n")
	}
	exp := mustRead(t, b.String(), plainRig())
	want := Flaw{FlawClock, "t [ms]", 200, 2, "stamps in ms", "converted to s"}
	if got := findFlaw(t, exp, FlawClock); got != want || exp.Period != 0.01 {
		t.Errorf("got  %+v\nwant %+v, period %v", got, want, exp.Period)
	}
}

// Random logs without flaws must not be called flawed.
func TestNoFalseAlarm(t *testing.T) {
	for seed := range uint64(40) {
		rnd := rand.New(rand.NewPCG(5, seed))
		p := newPlainLog(3000)
		a := 0.5 + 0.49*rnd.Float64()
		y := 0.0
		for k := range p.y {
			p.y[k] = y
			p.u[k] = rnd.NormFloat64()
			y = a*y + p.u[k] + 0.1*rnd.NormFloat64()
		}
		if exp := mustRead(t, p.csv(), plainRig()); len(exp.Flaws) > 0 {
			t.Errorf("seed %d, pole %.3f: %+v", seed, a, exp.Flaws)
		}
	}
}

func TestGrid(t *testing.T) {
	for _, c := range []struct {
		name   string
		levels func() []float64
		want   float64
	}{
		{"every step", func() []float64 { return steps(100, 0.25, 1) }, 0.25},
		{"holes", func() []float64 { return steps(100, 0.25, 3) }, 0.75},
		{"three settings", func() []float64 { return []float64{0, 1, 2} }, 0},
		{"no grid", func() []float64 {
			rnd := rand.New(rand.NewPCG(6, 6))
			x := make([]float64, 500)
			for i := range x {
				x[i] = rnd.NormFloat64()
			}
			slices.Sort(x)
			return x
		}, 0},
	} {
		if got := grid(c.levels(), fewestInput); math.Abs(got-c.want) > 1e-9 {
			t.Errorf("%s: step %v, want %v", c.name, got, c.want)
		}
	}
}

func steps(n int, step float64, each int) []float64 {
	var x []float64
	for i := 0; i < n; i += each {
		x = append(x, -3+step*float64(i))
	}
	return x
}
