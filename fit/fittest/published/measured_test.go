package published

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"gonum.org/v1/gonum/floats"

	"steadyrig/data"
	"steadyrig/fit"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// dataset reads a measured log as a user would have it read, or skips the test.
func dataset(t *testing.T, file, columns string) (*data.Experiment, *data.Rig) {
	t.Helper()
	b, err := os.ReadFile(filepath.Join("../../../../shared/datasets", file))
	if err != nil {
		t.Skipf("measured data are not here, skipped: %v", err)
	}
	rig, err := data.ReadRig(strings.NewReader("[log]\n"+columns+"\n"), "rig.toml")
	if err != nil {
		t.Fatal(err)
	}
	e, err := data.ReadLog(bytes.NewReader(b), filepath.Base(file), rig)
	if err != nil {
		t.Fatal(err)
	}
	return e, rig
}

// fitted fits end to end; a refusal comes back as words.
func fitted(t *testing.T, e *data.Experiment, rig *data.Rig) (*ident.Model, string) {
	t.Helper()
	m, err := ident.Fit(context.Background(), []*data.Experiment{e}, rig, ident.Options{Seed: 1})
	var refused *ident.RefusedError
	if errors.As(err, &refused) {
		what, _, _ := strings.Cut(refused.What, ",")
		what, _, _ = strings.Cut(what, ":")
		return m, "refused: " + what
	}
	if err != nil {
		t.Fatal(err)
	}
	return m, m.Verdict
}

// rightmost is the pole with the largest real part.
func rightmost(m *ident.Model) ident.Root { return m.Poles[len(m.Poles)-1] }

func structure(m *ident.Model) string {
	s := m.Evidence.Structures[0]
	return fmt.Sprintf("poles %d, zeros %d, of the disturbance %d, delay %.3g s", s.Poles, s.Zeros, s.Colour, s.Delay)
}

// inBand counts the frequencies at which g lies in the joint band of m, in gain and phase, and how many there are.
func inBand(m *ident.Model, g func(omega float64) complex128) string {
	r, in := m.FrequencyResponse, 0
	for i, w := range r.Omega {
		z := g(w)
		turn := math.Mod(cmplx.Phase(z)*180/math.Pi-r.Phase.Value[i], 360)
		turn = math.Mod(turn+540, 360) - 180 + r.Phase.Value[i]
		if gain := cmplx.Abs(z); gain >= r.Gain.Lo[i] && gain <= r.Gain.Hi[i] && turn >= r.Phase.Lo[i] && turn <= r.Phase.Hi[i] {
			in++
		}
	}
	return fmt.Sprintf("%d of %d", in, len(r.Omega))
}

// among takes part of the rows without their means.
func among(e *data.Experiment, rows int) []fit.Record {
	s := e.Segments[0]
	return []fit.Record{{U: lessMean(s.U[:rows]), Y: lessMean(s.Y[:rows])}}
}

func measured(t *testing.T) {
	if testing.Short() {
		t.Skip("measured data are fitted end to end: seconds each")
	}
}

// Box & Jenkins, Time Series Analysis: Forecasting and Control, 1976, series J, sec. 11.4: a coded gas rate and the CO2 in
// the off-gas, 9 s apart, open loop.
func TestPublishedGasFurnace(t *testing.T) {
	measured(t)
	e, rig := dataset(t, "box_jenkins_gas_furnace/gas-furnace.csv", `input = "InputGasRate"
output = "CO2"
sample_period = 9`)
	s := open(t, "Gas furnace")
	const source = "Box & Jenkins 1976, series J, sec. 11.4"
	seg := e.Segments[0]
	acf := func(x []float64, k int) float64 { return fit.Autocorrelation([][]float64{x}, k)[k] }
	ar, _ := autoregression(t, lessMean(seg.U), 3, false)
	s.check("C03", "summary of the series", source, remembered,
		rel("sum of the input", floats.Sum(seg.U), -16.823, 1e-12), rel("sum of the output", floats.Sum(seg.Y), 15838.7, 1e-12),
		rel("autocorrelation of the input, 1", acf(seg.U, 1), 0.952474917, 1e-8), rel("of the input, 3", acf(seg.U, 3), 0.681859777, 1e-8),
		rel("of the output, 1", acf(seg.Y, 1), 0.970756657, 1e-8), rel("of the output, 3", acf(seg.Y, 3), 0.792548375, 1e-8),
		abs("AR(3) of the input, first", -ar.A[1], 1.97, 0.01), abs("second", -ar.A[2], -1.37, 0.01), abs("third", -ar.A[3], 0.34, 0.01),
		rel("first, recomputed", -ar.A[1], 1.97497499, 1e-7))
	m, _ := arx(t, among(e, 296), 2, 3, 3, 0)
	s.check("C04", "ARX(2,3) with a delay of three rows", "least squares", recomputed,
		rel("y1", -m.A[1], 1.46995284, 1e-7), rel("deviation", se(m.Cov, 0), 0.03887683, 1e-6), rel("y2", -m.A[2], -0.56113947, 1e-7), rel("deviation", se(m.Cov, 1), 0.03011274, 1e-6),
		rel("u3", m.B[3], -0.4866012, 1e-7), rel("deviation", se(m.Cov, 2), 0.0769286, 1e-6), rel("u4", m.B[4], -0.18274657, 1e-7), rel("deviation", se(m.Cov, 3), 0.15205411, 1e-6),
		rel("u5", m.B[5], 0.38976148, 1e-7), rel("deviation", se(m.Cov, 4), 0.10186886, 1e-6), rel("residual variance", m.Variance, 0.06242970539, 1e-9))

	f, verdict1 := fitted(t, e, rig)
	// (w0 - w1 B - w2 B²) B³/(1 - d1 B) with one pole, standard errors 0.08, 0.10, 0.11 and 0.04; in continuous time it is
	// less the hold.
	const w0, w1, w2, d1 = -0.53, 0.38, 0.52, 0.55
	published := func(omega float64) complex128 {
		b := cmplx.Exp(complex(0, -omega*9))
		return (w0 - w1*b - w2*b*b) * b * b * b / (1 - d1*b) * complex(0, omega*9) / (1 - b)
	}
	pulse, err := lti.ZOHTF(f.TF(), 9)
	if err != nil {
		t.Fatal(err)
	}
	var weights []value
	for k, v := range pulse.Filter(nil, []float64{1, 0, 0, 0, 0, 0, 0, 0, 0, 0, 0})[1:] {
		// By the four figures above; each weight is good to about 0.1.
		want := []float64{0, 0, w0, d1*w0 - w1, d1*(d1*w0-w1) - w2, 0, 0, 0, 0, 0}
		for i := 5; i < len(want); i++ {
			want[i] = d1 * want[i-1]
		}
		weights = append(weights, abs(fmt.Sprintf("response to a pulse of one row, %d rows on, two standard errors", k+1), v, want[k], 0.2))
	}
	gain := f.Gain.DC
	s.check("C02", "end to end, against the transfer function with one pole", source, remembered,
		said("verdict", verdict1, "sound"), verdict("steady gain's 95 % interval holds (w0 - w1 - w2)/(1 - d1) = -3.18", gain.Interval95.Contains((w0-w1-w2)/(1-d1)), true),
		// d1 is 0.549 with an error of 0.038 where the rest is held: the gain's error is about 0.27.
		abs("steady gain, two standard errors of the published one", gain.Value, (w0-w1-w2)/(1-d1), 0.54),
		verdict("all poles stable", !rightmost(f).Unstable, true),
		verdict("residuals white at 0.01", f.Evidence.Residuals.Whiteness > 0.01, true), verdict("free of past inputs at 0.01", f.Evidence.Residuals.CrossInput > 0.01, true),
		differs("published response inside the joint band, frequencies", inBand(f, published), "100 of 100"))
	s.check("C02", "end to end, response", source, remembered, weights...)
	var left int
	for _, l := range f.Evidence.LeftOut {
		left += l.Rows
	}
	s.check("C01", "what the tool cannot say as published", source, remembered,
		differs("structure", structure(f), "poles 1 or 2, of the disturbance 2, delay 27 s less the hold"),
		differs("poles", fmt.Sprintf("%.2f, %.2f ± %.2fi rad/s", f.Poles[2].Re, f.Poles[0].Re, math.Abs(f.Poles[0].Im)), "-0.07 rad/s, from d1 = 0.55"),
		differs("outputs left out as wrong", fmt.Sprint(left), "0"),
		differs("one-step variance", fmt.Sprintf("%.3f", f.Noise.SD*f.Noise.SD), "0.056 to 0.059"))
}

// Ljung, System Identification, 1987: a hair dryer, heater voltage to air temperature, 0.08 s apart, open loop.
func TestPublishedDryer(t *testing.T) {
	measured(t)
	e, rig := dataset(t, "daisy_dryer/dryer.dat", `input = "c1"
output = "c2"
sample_period = 0.08`)
	s := open(t, "Hair dryer")
	m, _ := arx(t, among(e, 300), 2, 2, 3, 0)
	s.check("", "ARX(2,2) with a delay of three rows, first 300 rows", "Ljung, System Identification, 1987", remembered,
		abs("a1", m.A[1], -1.274, 1e-3), abs("a2", m.A[2], 0.3935, 1e-3), abs("b1", m.B[3], 0.0666, 1e-4), abs("b2", m.B[4], 0.0445, 1e-4),
		abs("a1, recomputed", m.A[1], -1.27374, 1e-5), abs("deviation", se(m.Cov, 0), 0.0209, 1e-4), abs("b1", m.B[3], 0.06662, 1e-5), abs("deviation", se(m.Cov, 2), 0.00214, 1e-5),
		rel("residual variance", m.Variance, 1.7084e-3, 1e-4))
	all, _ := arx(t, among(e, 1000), 2, 2, 3, 0)
	s.check("", "the same, all rows", "least squares", recomputed, abs("a1", all.A[1], -1.28873, 1e-5), abs("a2", all.A[2], 0.40666, 1e-5), abs("b1", all.B[3], 0.06552, 1e-5),
		abs("b2", all.B[4], 0.04383, 1e-5), abs("deviation of a1", se(all.Cov, 0), 0.01088, 1e-5), rel("residual variance", all.Variance, 1.6400e-3, 1e-4))

	f, v := fitted(t, e, rig)
	arxModel := lti.DTF{Num: all.B, Den: all.A, Period: 0.08}
	far := 0.0
	for w := 0.1; w < 10; w *= 1.2 {
		g, err := lti.ZOHTF(f.TF(), 0.08)
		if err != nil {
			t.Fatal(err)
		}
		far = math.Max(far, cmplx.Abs(g.At(w)-arxModel.At(w))/math.Abs(arxModel.DC()))
	}
	s.check("", "end to end", "Ljung 1987", remembered,
		verdict("all poles stable", !rightmost(f).Unstable, true),
		verdict("steady gain's interval holds that of the published model, 0.930", f.Gain.DC.Interval95.Contains(0.1111/0.1195), true),
		verdict("delay of 1 to 3 rows", f.Plant.Delay > 0.08 && f.Plant.Delay < 0.24, true),
		abs("greatest distance from the ARX response up to 10 rad/s, over its steady gain", far, 0, 0.05),
		verdict("residuals white at 0.01", f.Evidence.Residuals.Whiteness > 0.01, true), verdict("free of past inputs at 0.01", f.Evidence.Residuals.CrossInput > 0.01, true),
		differs("structure", structure(f), "poles 2, zeros 1, delay 0.16 s"),
		differs("verdict", fmt.Sprintf("%s: a noise zero on the unit circle makes the log %.0f memories long", v, f.Evidence.Memories), "no test speaks against it"))
}

// Logs with physics or notes but no published numbers: the rig must come out as what it is.
func TestPublishedOtherLogs(t *testing.T) {
	measured(t)
	s := open(t, "Other logs")
	const daisy = "DaISy, B. De Moor (ed.), KU Leuven"
	e, rig := dataset(t, "daisy_ballbeam/ballbeam.dat", `input = "c1"
output = "c2"
sample_period = 0.1`)
	f, v := fitted(t, e, rig)
	at := func(f *ident.Model, w float64) float64 { return cmplx.Abs(f.TF().At(complex(0, w))) * w * w }
	holdZero := 0
	for _, p := range f.Poles {
		if p.Re95.Contains(0) {
			holdZero++
		}
	}
	s.check("", "ball on a beam, under feedback", daisy+": Van Overschee 1995; y'' = K u with K 4.5 to 4.6 m/s² (0.05 to 0.3 Hz)", recomputed,
		// 0.05 to 0.3 Hz is 0.3 to 1.9 rad/s. The note's fit left 4 % of the variance: 20 % in size, half of that is asked.
		rel("gain times w² at 1 rad/s", at(f, 1), 4.55, 0.1), rel("at 1.9 rad/s", at(f, 1.9), 4.55, 0.1),
		verdict("residuals white at 0.01", f.Evidence.Residuals.Whiteness > 0.01, true),
		differs("poles, rad/s", fmt.Sprintf("%.1f, %.1f", f.Poles[0].Re, f.Poles[1].Re), "0, 0"),
		differs("poles whose 95 % interval holds zero", fmt.Sprint(holdZero), "2"),
		differs("verdict", v, "sound"))

	e, rig = dataset(t, "daisy_heating_system/heating_system.dat", `time = "c1"
input = "c2"
output = "c3"`)
	f, v = fitted(t, e, rig)
	s.check("", "lamp that heats a plate, open loop", daisy+": no published model", practice,
		verdict("all poles stable", !rightmost(f).Unstable, true), verdict("gain positive", f.Gain.DC.Interval95.Lo > 0, true),
		verdict("residuals white at 0.01", f.Evidence.Residuals.Whiteness > 0.01, true), verdict("free of past inputs at 0.01", f.Evidence.Residuals.CrossInput > 0.01, true),
		verdict("delay below ten rows", f.Plant.Delay < 20, true), verdict("radiation seen as a rig that is not linear, at 0.001", f.Evidence.Residuals.Linearity < 1e-3, true),
		differs("verdict", v, "sound"))

	// Noise-free periodic sweeps: past inputs and outputs give the next input to all digits, as a law without any probe would.
	for _, c := range []struct{ file, columns, what, published string }{
		{"daisy_robot_arm/robot_arm.dat", "input = \"c1\"\noutput = \"c2\"\nsample_period = 0.002", "robot arm, periodic sweep, open loop", "order 4"},
		{"daisy_flutter/flutter.dat", "input = \"c1\"\noutput = \"c2\"\nsample_period = 1", "wing flutter, coloured input", "fitted by several authors"},
		{"daisy_CD_player_arm/CD_player_arm.dat", "input = \"c1\"\noutput = \"c3\"\nsample_period = 4.8828125e-4", "disc player arm, first input and output of two", "two-step model of closed-loop data, Van den Hof & Schrama 1993"},
		{"daisy_exchanger/exchanger.dat", "time = \"c1\"\ninput = \"c2\"\noutput = \"c3\"\nsample_period = 1", "heat exchanger, open loop", "non-minimum phase, mildly nonlinear"},
	} {
		e, rig := dataset(t, c.file, c.columns)
		_, v := fitted(t, e, rig)
		s.check("", c.what, daisy, memory, differs("end to end", v, c.published))
	}
}

// Fits of a minute and more.
func TestPublishedLongLogs(t *testing.T) {
	if os.Getenv("STEADYRIG_STUDY") == "" {
		t.Skip("two fits of a minute each: with STEADYRIG_STUDY only")
	}
	s := open(t, "Long logs")
	e, rig := dataset(t, "maglev_levitador/dataset_multiescalon_20251217_210203.txt", `time = "t"
input = "i"
output = "y"
reference = "yd"
sample_period = 0.01
[limits]
output = [0.001, 0.010]`)
	f, v := fitted(t, e, rig)
	p := rightmost(f)
	s.check("", "levitated ball in closed loop, steps, current to gap", "J. de J. Santana Ramírez, levitador-benchmark, 2026; physics, sqrt(2g/(a + y0))", recomputed,
		verdict("unstable beyond doubt", p.ProbabilityUnstable > 0.999, true),
		verdict("within the note's long models, 24 to 41 rad/s", p.Re > 24 && p.Re < 41, true), verdict("called sound, though nonlinear and slow for its pole", v == ident.Sound, false),
		differs("unstable pole, rad/s", fmt.Sprintf("%.0f (%.0f to %.0f)", p.Re, p.Re95.Lo, p.Re95.Hi), "44 by physics"))

	e, rig = dataset(t, "daisy_exchanger/exchanger.dat", `time = "c1"
input = "c2"
output = "c3"
sample_period = 1
input_row = "before"`)
	f, v = fitted(t, e, rig)
	s.check("", "heat exchanger, shifted by the row that the refusal names", "DaISy, B. De Moor (ed.), KU Leuven: no published model", practice,
		verdict("all poles stable", !rightmost(f).Unstable, true), verdict("residuals white at 0.01", f.Evidence.Residuals.Whiteness > 0.01, true),
		verdict("free of past inputs at 0.01", f.Evidence.Residuals.CrossInput > 0.01, true), verdict("nonlinear at 0.001, as its note says", f.Evidence.Residuals.Linearity < 1e-3, true),
		verdict("delay below three rows", f.Plant.Delay < 3, true), differs("verdict", v, "sound"), differs("structure", structure(f), "not given"))
}
