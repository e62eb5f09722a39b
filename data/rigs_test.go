package data_test

import (
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/demorig"
	"steadyrig/fit/fittest/spoilt"
	"steadyrig/fit/lti"
)

// Logs of the demo rigs, whose truth is known: what acts on them, and how their logs were made.

// logsPerRig is how many logs a statement about rigs is tried on: few in every test run, STEADYRIG_STUDY of them in a
// study.
func logsPerRig(t *testing.T, few int) int {
	t.Helper()
	study := os.Getenv("STEADYRIG_STUDY")
	if study == "" {
		if testing.Short() {
			return 1
		}
		return few
	}
	n, err := strconv.Atoi(study)
	if err != nil {
		t.Fatalf("STEADYRIG_STUDY is no number: %v", err)
	}
	return n
}

func mustRun(t *testing.T, r demorig.Rig, s demorig.Signals) lti.Trace {
	t.Helper()
	trace, err := r.Simulate(s)
	if err != nil {
		t.Fatal(err)
	}
	return trace
}

func mustRead(t *testing.T, r demorig.Rig, s demorig.Signals, trace lti.Trace, seed uint64) *data.Experiment {
	t.Helper()
	e, _, err := r.Read(s, trace, seed)
	if err != nil {
		t.Fatalf("%s, seed %d: %v", r.Name, seed, err)
	}
	return e
}

func names(flaws []data.Flaw) []string {
	var out []string
	for _, f := range flaws {
		out = append(out, f.Name)
	}
	return out
}

// byName returns a demo rig.
func byName(t *testing.T, name string) demorig.Rig {
	t.Helper()
	r, ok := demorig.ByName(name)
	if !ok {
		t.Fatalf("no rig %s", name)
	}
	return r
}

// A log without flaws is called so: none in five rigs, but for the saturation that mast really has.
func TestCleanRigs(t *testing.T) {
	for _, r := range demorig.All() {
		for seed := range uint64(logsPerRig(t, 4)) {
			s := r.Signals(r.Rows, seed)
			trace := mustRun(t, r, s)
			flat := 0
			slack := 1e-3 * (r.InputLimits[1] - r.InputLimits[0]) // as the flaw counts
			for _, u := range trace.U {
				if u <= r.InputLimits[0]+slack || u >= r.InputLimits[1]-slack {
					flat++
				}
			}
			for _, f := range mustRead(t, r, s, trace, seed).Flaws {
				if f.Name != data.FlawSaturated || f.Count != flat {
					t.Errorf("%s, seed %d: %+v", r.Name, seed, f)
				}
			}
		}
	}
}

// bent is spoilt.Bent under a rig's own signals.
func bent(t *testing.T, r demorig.Rig, rows int, seed uint64, f spoilt.Element) (demorig.Signals, lti.Trace) {
	t.Helper()
	s := r.Signals(rows, seed)
	trace, err := spoilt.Bent(r, s, f)
	if err != nil {
		t.Fatal(err)
	}
	return s, trace
}

// Without an element, bent is the rig's own simulation.
func TestBentIsTheRig(t *testing.T) {
	r := byName(t, "flap")
	s, got := bent(t, r, 500, 1, func(u, _ float64) float64 { return u })
	want := mustRun(t, r, s)
	for k := range want.U {
		if math.Abs(got.U[k]-want.U[k]) > 1e-9 || math.Abs(got.Y[k]-want.Y[k]) > 1e-9 {
			t.Fatalf("row %d: u %v, y %v; want %v, %v", k, got.U[k], got.Y[k], want.U[k], want.Y[k])
		}
	}
}

// Elements from a twentieth to a third of what the input moves by are named for what they are.
func TestBentActuators(t *testing.T) {
	const rows = 6000
	for _, c := range []struct {
		rig  string
		move float64 // of the input, standard deviation in a log without the element, about
	}{{"hover", 0.15}, {"mast", 4}, {"flap", 1}, {"slider", 1}} {
		r := byName(t, c.rig)
		for _, e := range []struct {
			name, want string
			f          func(size float64) spoilt.Element
		}{
			{"dead zone", data.FlawDeadZone, func(size float64) spoilt.Element { return spoilt.DeadZone(size, r.U0) }},
			{"play", data.FlawStiction, func(size float64) spoilt.Element { return spoilt.Play(size, r.U0) }},
			{"friction", data.FlawStiction, func(size float64) spoilt.Element { return spoilt.Friction(size) }},
		} {
			logs, named := logsPerRig(t, 1), 0
			var missed []uint64
			for seed := range uint64(logs) {
				size := c.move * (0.1 + 0.2*rand.New(rand.NewPCG(seed, 3)).Float64())
				s, trace := bent(t, r, rows, seed, e.f(size))
				if slices.Contains(names(mustRead(t, r, s, trace, seed).Flaws), e.want) {
					named++
				} else {
					missed = append(missed, seed)
				}
			}
			t.Logf("%s, %s: named in %d of %d logs, missed %v", c.rig, e.name, named, logs, missed)
			if float64(named) < 0.95*float64(logs) {
				t.Errorf("%s, %s: named in %d of %d logs", c.rig, e.name, named, logs)
			}
		}
	}
}

// A loop without probe hunts about play and dead zones; noise through the same loop does not look so.
func TestHuntingLoops(t *testing.T) {
	const rows = 6000
	for _, c := range []struct {
		name, rig string
		f         func(r demorig.Rig) spoilt.Element
		hunts     bool
	}{
		{"dead zone", "flap", func(r demorig.Rig) spoilt.Element { return spoilt.DeadZone(0.5, r.U0) }, true},
		{"play", "flap", func(r demorig.Rig) spoilt.Element { return spoilt.Play(0.5, r.U0) }, true},
		{"play", "slider", func(r demorig.Rig) spoilt.Element { return spoilt.Play(0.4, r.U0) }, true},
		{"noise", "hover", func(demorig.Rig) spoilt.Element { return spoilt.DeadZone(0, 0) }, false},
		{"noise", "mast", func(demorig.Rig) spoilt.Element { return spoilt.DeadZone(0, 0) }, false},
		{"noise", "flap", func(demorig.Rig) spoilt.Element { return spoilt.DeadZone(0, 0) }, false},
		{"noise", "slider", func(demorig.Rig) spoilt.Element { return spoilt.DeadZone(0, 0) }, false},
	} {
		r := byName(t, c.rig)
		r.Dither, r.Step = 0, 0
		logs, named := logsPerRig(t, 1), 0
		for seed := range uint64(logs) {
			s, trace := bent(t, r, rows, seed, c.f(r))
			if slices.Contains(names(mustRead(t, r, s, trace, seed).Flaws), data.FlawCycle) {
				named++
			}
		}
		t.Logf("%s of %s: called a limit cycle in %d of %d logs", c.name, c.rig, named, logs)
		if c.hunts && float64(named) < 0.95*float64(logs) || !c.hunts && named > 0 {
			t.Errorf("%s of %s: called a limit cycle in %d of %d logs", c.name, c.rig, named, logs)
		}
	}
}

// A hum of three deviations of the sensor's noise is named by its frequency; one above half of the rows' rate by where it
// shows: 60 Hz at 40 Hz in 100 rows a second.
func TestHum(t *testing.T) {
	for _, c := range []struct {
		rig        string
		hz         float64
		want, says string
	}{
		{"hover", 50, data.FlawPeriodic, "at 50 Hz: mains, 50 Hz"},
		{"hover", 123.4, data.FlawPeriodic, "at 123 Hz: no logged signal has it"},
		{"flap", 60, data.FlawAlias, "at 40 Hz: 60 Hz mains shows there in rows 0.01 s apart"},
	} {
		r := byName(t, c.rig)
		for seed := range uint64(logsPerRig(t, 1)) {
			s := r.Signals(r.Rows, seed)
			for k := range s.Noise {
				s.Noise[k] += 3 * r.SensorNoise * math.Sin(2*math.Pi*c.hz*float64(k)*r.Period+float64(seed))
			}
			found := false
			for _, f := range mustRead(t, r, s, mustRun(t, r, s), seed).Flaws {
				found = found || f.Name == c.want && strings.Contains(f.Detail, c.says)
			}
			if !found {
				t.Errorf("%s, %g Hz, seed %d: not named", c.rig, c.hz, seed)
			}
		}
	}
}

// A vibration between half and the whole of the rows' rate shows below half of it.
func TestFoldedVibration(t *testing.T) {
	for _, r := range demorig.All() {
		for seed := range uint64(logsPerRig(t, 1)) {
			s := r.Signals(r.Rows, seed)
			rnd := rand.New(rand.NewPCG(seed, 5))
			// A resonance at 0.53 of the rows' rate, a tenth as wide, as strong as three times the sensor's noise.
			angle, keep := 2*math.Pi*0.53, math.Exp(-0.1*math.Pi)
			var x, v float64
			for k := range s.Noise {
				x, v = keep*(math.Cos(angle)*x-math.Sin(angle)*v), keep*(math.Sin(angle)*x+math.Cos(angle)*v)
				x += math.Sqrt(1-keep*keep) * rnd.NormFloat64()
				v += math.Sqrt(1-keep*keep) * rnd.NormFloat64()
				s.Noise[k] += 3 * r.SensorNoise * x
			}
			if got := names(mustRead(t, r, s, mustRun(t, r, s), seed).Flaws); !slices.Contains(got, data.FlawAlias) {
				t.Errorf("%s, seed %d: %q", r.Name, seed, got)
			}
		}
	}
}

// skewed lets the input's clock run fast by the part rate: row k of input and dither is what was at row k/(1+rate).
func skewed(s demorig.Signals, trace lti.Trace, rate float64) (demorig.Signals, lti.Trace) {
	u, d := make([]float64, len(trace.U)), make([]float64, len(trace.U))
	for k := range u {
		from := min(int(math.Round(float64(k)/(1+rate))), len(u)-1)
		u[k], d[k] = trace.U[from], s.Dither[from]
	}
	trace.U, s.Dither = u, d
	return s, trace
}

// The slip that the columns show is the one that was put in, to within the half row at each end that whole rows leave
// open; with [log] clock_skew the input is back in its rows.
func TestTwoClocks(t *testing.T) {
	for _, r := range demorig.All() {
		for _, rows := range []float64{-3, 8} {
			for seed := range uint64(logsPerRig(t, 1)) {
				s := r.Signals(r.Rows, seed)
				before := mustRun(t, r, s)
				rate := rows / float64(r.Rows)
				logged, trace := skewed(s, before, rate)
				e := mustRead(t, r, logged, trace, seed)
				i := slices.Index(names(e.Flaws), data.FlawClocks)
				if i < 0 {
					t.Errorf("%s, %g rows, seed %d: not named", r.Name, rows, seed)
					continue
				}
				const says = "[log] clock_skew = "
				_, text, _ := strings.Cut(e.Flaws[i].Effect, says)
				text, _, _ = strings.Cut(text, " ")
				got, err := strconv.ParseFloat(text, 64)
				if err != nil || math.Abs(got-rate)*float64(r.Rows) > 1 {
					t.Errorf("%s, %g rows, seed %d: %s", r.Name, rows, seed, e.Flaws[i].Effect)
				}

				log, file := writeLog(t, r, logged, trace, seed)
				rig, err := data.ReadRig(strings.NewReader(strings.Replace(file, "[log]\n", "[log]\nclock_skew = "+text+"\n", 1)), "rig.toml")
				if err != nil {
					t.Fatal(err)
				}
				if e, err = data.ReadLog(strings.NewReader(log), "log.csv", rig); err != nil {
					t.Fatal(err)
				}
				// A slip that is wrong by a row at the end of the log is wrong by half a row on average.
				at, off := 0, 0
				for _, seg := range e.Segments {
					k := seg.Line - 3 // a comment and the names stand above
					for j, u := range seg.U {
						at++
						if math.Abs(u-before.U[k+j]) > 1e-6*(1+math.Abs(u)) {
							off++
						}
					}
				}
				if float64(off) > 0.5*float64(at) || e.Used < r.Rows*9/10 || len(e.Segments) != 1+int(math.Abs(rows)) {
					t.Errorf("%s, %g rows, seed %d: %d of %d inputs in another row, %d segments, %d rows used", r.Name, rows, seed, off, at, len(e.Segments), e.Used)
				}
				for _, f := range e.Flaws {
					if f.Name == data.FlawClocks {
						t.Errorf("%s, %g rows, seed %d: undone, and still %s", r.Name, rows, seed, f.Detail)
					}
				}
			}
		}
	}
}

func writeLog(t *testing.T, r demorig.Rig, s demorig.Signals, trace lti.Trace, seed uint64) (log, file string) {
	t.Helper()
	var b strings.Builder
	if err := r.WriteTrace(&b, s, trace, seed); err != nil {
		t.Fatal(err)
	}
	return b.String(), r.File()
}
