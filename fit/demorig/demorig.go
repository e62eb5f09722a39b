// Package demorig holds invented rigs whose truth is known: what the demo
// command shows, and what the studies of identification and design are run
// on. No rig here is a model of a real one.
//
// Each rig is kept up by a stopgap law with little margin while a probe, steps
// of the reference, or both move it. A log is a run of lti's simulator of the
// sampled loop.
package demorig

import (
	"bufio"
	"bytes"
	"fmt"
	"io"
	"math"
	"math/rand/v2"
	"strconv"
	"strings"

	"steadyrig/data"
	"steadyrig/fit/lti"
)

// Rig is one invented rig. Times in s, rates in rad/s, signals in the units
// named.
type Rig struct {
	Name  string
	About string // one sentence

	Truth        lti.TF // from the input to the output, deviations; its delay is the rig's own
	Input        string // unit
	Output       string // unit
	U0, Y0       float64
	Period       float64
	ComputeDelay float64 // of the loop that ran and of the loop to be built
	Stopgap      lti.DTF // u = u0 - law (y - r)
	Rows         int

	SensorNoise     float64 // standard deviation at the output, white
	Disturbance     float64 // standard deviation at the input
	DisturbancePole float64 // rad/s, 0: white
	Resolution      float64 // of the sensor

	Dither      float64 // amplitude of the binary probe at the input, 0: none
	DitherHold  int     // samples that it holds at least
	Step        float64 // amplitude of the random reference steps, 0: none
	StepHold    int     // samples between reference steps
	InputLimits [2]float64
	InputRate   float64 // 0: none
	Trip        [2]float64

	Spec Spec
}

// Spec is what the rig's loops are asked for, as in a rig file.
type Spec struct {
	Step, Overshoot, Settling, Band, PeakSensitivity, InputNoise, Kick, KickPeak float64
}

// All returns the rigs in the order in which they are shown.
func All() []Rig {
	return []Rig{
		{
			Name:  "hover",
			About: "a levitated body: one fast unstable pole, amplifier lag, a probe on the coil current",
			Truth: plant(2.6e6, nil, 36, -44, -280),
			Input: "A", Output: "mm", U0: 1.42, Y0: 5.2,
			Period:  0.001,
			Stopgap: lead(0.55, 45, 900, 0.001), Rows: 8000,
			SensorNoise: 0.003, Disturbance: 0.01, Resolution: 0.0005,
			Dither: 0.12, DitherHold: 5,
			InputLimits: [2]float64{0, 3}, Trip: [2]float64{3.2, 7.2},
			Spec: Spec{Step: 0.2, Overshoot: 0.15, Settling: 0.25, Band: 0.02, PeakSensitivity: 2.2},
		},
		{
			Name:  "mast",
			About: "a balanced mast on a slow drive: coloured disturbance, and reference steps as the only excitation",
			Truth: plant(5.5, nil, 1.5, -1.9, -9),
			Input: "V", Output: "deg", U0: 0.4, Y0: 0,
			Period:  0.04,
			Stopgap: lead(8, 1.9, 12, 0.04), Rows: 10000,
			SensorNoise: 0.01, Disturbance: 0.06, DisturbancePole: 0.25, Resolution: 0.002,
			Step: 0.35, StepHold: 75,
			InputLimits: [2]float64{-18, 18}, Trip: [2]float64{-5, 5},
			Spec: Spec{Step: 0.5, Overshoot: 0.2, Settling: 6, Band: 0.02, PeakSensitivity: 2.2},
		},
		{
			Name:  "reactor",
			About: "an exothermic process: slow, far from zero, transport delay, more coolant makes it colder",
			Truth: delayed(plant(-0.0022, nil, 0.018, -0.055), 6.8),
			Input: "%", Output: "degC", U0: 42, Y0: 78.5,
			Period:  2,
			Stopgap: lead(-1.6, 0.05, 0.6, 2), Rows: 6000,
			SensorNoise: 0.03, Disturbance: 0.15, DisturbancePole: 0.02, Resolution: 0.01,
			Dither: 4, DitherHold: 12,
			InputLimits: [2]float64{0, 100}, Trip: [2]float64{60, 95},
			Spec: Spec{Step: 2, Overshoot: 0.25, Settling: 500, Band: 0.03, PeakSensitivity: 2.2},
		},
		{
			Name:  "flap",
			About: "a flexible wing section that the flow drives unstable: a growing oscillation, a real pole, a zero",
			Truth: pair(310, []float64{-7}, complex(1.1, 10.5), -24),
			Input: "deg", Output: "deg", U0: 0.8, Y0: 2.1,
			Period:  0.01,
			Stopgap: lead(0.9, 9, 60, 0.01), Rows: 6000,
			SensorNoise: 0.015, Disturbance: 0.05, DisturbancePole: 2, Resolution: 0.002,
			Dither: 0.5, DitherHold: 4,
			InputLimits: [2]float64{-14, 16}, Trip: [2]float64{-8, 12},
			Spec: Spec{Step: 1, Overshoot: 0.2, Settling: 2.5, Band: 0.02, PeakSensitivity: 2},
		},
		{
			Name:  "slider",
			About: "a rigid carriage: double integrator with an amplifier lag, off centre",
			Truth: plant(32000, nil, 0, 0, -40),
			Input: "N", Output: "mm", U0: 3.0, Y0: 120,
			Period:  0.005,
			Stopgap: lead(0.12, 6, 90, 0.005), Rows: 6000,
			SensorNoise: 0.02, Disturbance: 0.05, Resolution: 0.005,
			Dither: 0.8, DitherHold: 6,
			InputLimits: [2]float64{-20, 26}, Trip: [2]float64{60, 180},
			Spec: Spec{Step: 5, Overshoot: 0.2, Settling: 1.5, Band: 0.02, PeakSensitivity: 2},
		},
	}
}

// ByName finds a rig.
func ByName(name string) (Rig, bool) {
	for _, r := range All() {
		if r.Name == name {
			return r, true
		}
	}
	return Rig{}, false
}

// plant is k Π(s - z) / Π(s - p), real poles and zeros.
func plant(k float64, zeros []float64, poles ...float64) lti.TF {
	return zpk(k, zeros, roots(poles))
}

// pair has a complex pair and real poles.
func pair(k float64, zeros []float64, p complex128, poles ...float64) lti.TF {
	return zpk(k, zeros, append(roots(poles), p, complex(real(p), -imag(p))))
}

func zpk(k float64, zeros []float64, poles []complex128) lti.TF {
	return lti.TF{Num: lti.FromRoots(roots(zeros)).Scale(k), Den: lti.FromRoots(poles)}
}

func roots(r []float64) []complex128 {
	c := make([]complex128, len(r))
	for i, v := range r {
		c[i] = complex(v, 0)
	}
	return c
}

func delayed(g lti.TF, tau float64) lti.TF {
	g.Delay = tau
	return g
}

// lead is k (1 + s/zero)/(1 + s/pole), sampled.
func lead(k, zero, pole, period float64) lti.DTF {
	return lti.Tustin(lti.TF{Num: lti.Poly{k, k / zero}, Den: lti.Poly{1, 1 / pole}}, period)
}

// Law returns the stopgap law about the operating point.
func (r Rig) Law() *lti.Law {
	return &lti.Law{
		Inner: r.Stopgap, U0: r.U0, Y0: r.Y0,
		InputLimits: r.InputLimits, InputRate: r.InputRate, OutputStep: r.Resolution,
	}
}

// Signals are what acts on a rig during a log.
type Signals struct {
	Reference, Dither, Noise, Disturbance []float64
}

// Signals draws what acts on the rig during rows samples, from the seed alone.
func (r Rig) Signals(rows int, seed uint64) Signals {
	rnd := rand.New(rand.NewPCG(seed, 0))
	s := Signals{
		Reference: make([]float64, rows), Dither: make([]float64, rows),
		Noise: make([]float64, rows), Disturbance: make([]float64, rows),
	}
	level := func() float64 { return float64(2*rnd.IntN(2) - 1) }
	dither, step := level(), 0.0
	keep := math.Exp(-r.DisturbancePole * r.Period)
	if r.DisturbancePole == 0 {
		keep = 0
	}
	d := rnd.NormFloat64()
	for k := range rows {
		if r.DitherHold > 0 && k%r.DitherHold == 0 {
			dither = level()
		}
		if r.StepHold > 0 && k%r.StepHold == 0 {
			step = 2*rnd.Float64() - 1
		}
		s.Dither[k] = r.Dither * dither
		s.Reference[k] = r.Y0 + r.Step*step
		s.Noise[k] = r.SensorNoise * rnd.NormFloat64()
		s.Disturbance[k] = r.Disturbance * d
		d = keep*d + math.Sqrt(1-keep*keep)*rnd.NormFloat64()
	}
	return s
}

// Simulate returns the log of one run of the stopgap loop under s. Its input is
// that sent to the actuator, after its limits.
func (r Rig) Simulate(s Signals) (lti.Trace, error) {
	run := lti.Run{
		Plant: r.Truth, Period: r.Period, ComputeDelay: r.ComputeDelay, Law: r.Law(), Steps: len(s.Reference),
		Reference: s.Reference, Dither: s.Dither, InputDisturbance: s.Disturbance, Noise: s.Noise, Trip: r.Trip,
	}
	return run.Simulate()
}

// WriteCSV writes a log of the rig: time, input, output, and what is logged of
// reference and probe.
func (r Rig) WriteCSV(w io.Writer, seed uint64) error {
	s := r.Signals(r.Rows, seed)
	trace, err := r.Simulate(s)
	if err != nil {
		return fmt.Errorf("simulating %s: %w", r.Name, err)
	}
	return r.WriteTrace(w, s, trace, seed)
}

// WriteTrace writes the log of a run of the rig under s, which was drawn from
// seed.
func (r Rig) WriteTrace(w io.Writer, s Signals, trace lti.Trace, seed uint64) error {
	b := bufio.NewWriter(w)
	fmt.Fprintf(b, "# simulated log of the invented rig %s, seed %d\n", r.Name, seed)
	b.WriteString("t,u,y,r")
	if r.Dither > 0 {
		b.WriteString(",d")
	}
	b.WriteByte('\n')
	var line []byte
	for k := range trace.U {
		line = strconv.AppendFloat(line[:0], float64(k)*r.Period, 'g', 9, 64)
		for _, v := range []float64{trace.U[k], trace.Y[k], s.Reference[k]} {
			line = strconv.AppendFloat(append(line, ','), v, 'g', 8, 64)
		}
		if r.Dither > 0 {
			line = strconv.AppendFloat(append(line, ','), s.Dither[k], 'g', 8, 64)
		}
		b.Write(append(line, '\n'))
	}
	return b.Flush()
}

// Experiment writes rig file and log and reads them as a user would.
func (r Rig) Experiment(seed uint64) (*data.Experiment, *data.Rig, error) {
	s := r.Signals(r.Rows, seed)
	trace, err := r.Simulate(s)
	if err != nil {
		return nil, nil, fmt.Errorf("simulating %s: %w", r.Name, err)
	}
	return r.Read(s, trace, seed)
}

// Read is Experiment for a run of the rig under s, which was drawn from seed.
func (r Rig) Read(s Signals, trace lti.Trace, seed uint64) (*data.Experiment, *data.Rig, error) {
	rig, err := data.ReadRig(strings.NewReader(r.File()), r.Name+".toml")
	if err != nil {
		return nil, nil, err
	}
	var log bytes.Buffer
	if err := r.WriteTrace(&log, s, trace, seed); err != nil {
		return nil, nil, err
	}
	e, err := data.ReadLog(&log, r.Name+".csv", rig)
	return e, rig, err
}

// File returns the rig file.
func (r Rig) File() string {
	var b strings.Builder
	f := func(format string, args ...any) { fmt.Fprintf(&b, format, args...) }
	f("# An invented rig: %s.\n", r.About)
	f("name = %q\n\n[log]\ntime          = \"t\"\ninput         = \"u\"\noutput        = \"y\"\nreference     = \"r\"\n", r.Name)
	if r.Dither > 0 {
		f("dither        = \"d\"\n")
	}
	f("sample_period = %v\n\n[units]\ninput  = %q\noutput = %q\n\n", r.Period, r.Input, r.Output)
	f("[operating_point]\ninput  = %v\noutput = %v\n\n", r.U0, r.Y0)
	list := func(p lti.Poly) string {
		var s []string
		for _, v := range p {
			s = append(s, strconv.FormatFloat(v, 'g', 12, 64))
		}
		return "[" + strings.Join(s, ", ") + "]"
	}
	f("[stopgap]  # the law that ran: u = u0 - law(z) (y - r)\nnumerator   = %s\ndenominator = %s\n\n", list(r.Stopgap.Num), list(r.Stopgap.Den))
	f("[loop]\nsample_period = %s\nhold          = \"zero-order\"\ncompute_delay = %v\n\n", float(r.Period), float(r.ComputeDelay))
	f("[limits]\ninput  = [%s, %s]\n", float(r.InputLimits[0]), float(r.InputLimits[1]))
	if r.InputRate > 0 {
		f("input_rate = %s\n", float(r.InputRate))
	}
	f("output = [%s, %s]\n\n", float(r.Trip[0]), float(r.Trip[1]))
	f("[spec]\nstep             = %s\novershoot        = %s\nsettling         = %s\nband             = %s\npeak_sensitivity = %s\n",
		float(r.Spec.Step), float(r.Spec.Overshoot), float(r.Spec.Settling), float(r.Spec.Band), float(r.Spec.PeakSensitivity))
	if r.Spec.InputNoise > 0 {
		f("input_noise      = %s\n", float(r.Spec.InputNoise))
	}
	if r.Spec.Kick > 0 {
		f("kick             = %s\nkick_peak        = %s\n", float(r.Spec.Kick), float(r.Spec.KickPeak))
	}
	return b.String()
}

// float writes a number that TOML reads as a float.
func float(v float64) string {
	s := strconv.FormatFloat(v, 'g', -1, 64)
	if !strings.ContainsAny(s, ".e") {
		s += ".0"
	}
	return s
}
