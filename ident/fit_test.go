package ident

import (
	"bytes"
	"context"
	"errors"
	"math"
	"slices"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/demorig"
)

func rigNamed(t testing.TB, name string) demorig.Rig {
	t.Helper()
	r, ok := demorig.ByName(name)
	if !ok {
		t.Fatalf("no rig %q", name)
	}
	return r
}

// rounded returns x on a grid of a ten-thousandth of its range.
func rounded(x []float64) []float64 {
	lo, hi := slices.Min(x), slices.Max(x)
	step := (hi - lo) / 1e4
	out := make([]float64, len(x))
	for k, v := range x {
		out[k] = math.Round(v/step) * step
	}
	return out
}

// A log of a fixed linear law without power from outside determines the law
// only (Söderström & Stoica 1989, ch. 10; check values C05, C08), also where its
// columns are rounded.
func TestQuietLogIsRefused(t *testing.T) {
	for _, r := range demorig.All() {
		r.Dither, r.Step = 0, 0
		e, rig := experiment(t, r, 1)
		s := e.Segments[0]
		coarse := *e
		coarse.Segments = []data.Segment{{Line: s.Line, U: rounded(s.U), Y: rounded(s.Y), R: s.R}}
		for _, e := range []*data.Experiment{e, &coarse} {
			m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
			var refused *RefusedError
			if !errors.As(err, &refused) {
				t.Fatalf("%s: error %v, want a refusal", r.Name, err)
			}
			if m.Verdict != Refused || !strings.Contains(refused.What, "nothing from outside") || !strings.Contains(refused.Do, "probe") {
				t.Errorf("%s: verdict %q: %v", r.Name, m.Verdict, refused)
			}
			if a, err := Audit(context.Background(), []*data.Experiment{e}, rig); !errors.As(err, &refused) || a.Verdict != Refused || !a.Outside.Quiet {
				t.Errorf("%s: audit says %v", r.Name, err)
			}
			var b bytes.Buffer
			if err := m.Write(&b); err != nil {
				t.Fatal(err)
			}
			if _, err := ReadModel(&b, "model.json"); err != nil {
				t.Errorf("%s: the refused model does not read back: %v", r.Name, err)
			}
		}
	}
}

// Without an operating point in the rig file it is found with the plant: where
// the output was on the mean, and the input that holds it there.
func TestOperatingPointIsFound(t *testing.T) {
	r := rigNamed(t, "hover")
	e, rig := experiment(t, r, 6)
	rig.OperatingPoint = nil
	m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
	if err != nil {
		t.Fatal(err)
	}
	// 5.2 mm at 1.42 A, and -5.8 mm/A from there on.
	want := r.U0 + (m.OperatingPoint.Output-r.Y0)/r.Truth.DC()
	if math.Abs(m.OperatingPoint.Output-r.Y0) > 0.05 {
		t.Errorf("output rests at %g, want about %g", m.OperatingPoint.Output, r.Y0)
	}
	// The disturbance's mean over 8000 rows has a deviation of 1e-4 A, the
	// stiffest part of the error is that of the gain.
	if math.Abs(m.OperatingPoint.Input-want) > 2e-3 {
		t.Errorf("input rests at %g, want %g for an output of %g", m.OperatingPoint.Input, want, m.OperatingPoint.Output)
	}
}

// The same probe that was not logged is as good for the direct method.
func TestUnloggedProbeIsFitted(t *testing.T) {
	r := rigNamed(t, "slider")
	e, rig := experiment(t, r, 2)
	with, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
	if err != nil {
		t.Fatal(err)
	}
	e.Segments[0].D = nil
	without, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
	if err != nil {
		t.Fatal(err)
	}
	for i, p := range with.Poles {
		if p != without.Poles[i] {
			t.Errorf("pole %d is %v with the probe logged, %v without", i, p, without.Poles[i])
		}
	}
}

// Columns a row off either way are named, and in step they are not: on every
// demo rig.
func TestPairing(t *testing.T) {
	for i, r := range demorig.All() {
		if testing.Short() && i > 0 {
			break
		}
		e, rig := experiment(t, r, 3)
		s := e.Segments[0]
		n := len(s.Y)
		// Logged late: the input of row k is that of row k-1.
		late := *e
		late.Segments = []data.Segment{{Line: 1, U: s.U[:n-1], Y: s.Y[1:], R: s.R[1:]}}
		if s.D != nil {
			late.Segments[0].D = s.D[:n-1]
		}
		// Without the law in the rig file the plant itself has to tell.
		law := rig.Stopgap
		rig.Stopgap = nil
		_, err := Fit(context.Background(), []*data.Experiment{&late}, rig, Options{})
		rig.Stopgap = law
		var refused *RefusedError
		if r.Truth.Delay == 0 && (!errors.As(err, &refused) || !strings.Contains(refused.Error(), "one row off")) {
			t.Errorf("%s: an input logged a row late gives %v", r.Name, err)
		}
		if l := checkLaw([]*data.Experiment{&late}, rig); l == nil || l.Rows != 1 {
			t.Errorf("%s: law check of an input logged late: %+v", r.Name, l)
		}
		early := *e
		early.Segments = []data.Segment{{Line: 1, U: s.U[1:], Y: s.Y[:n-1], R: s.R[:n-1]}}
		if s.D != nil {
			early.Segments[0].D = s.D[1:]
		}
		if _, err := Fit(context.Background(), []*data.Experiment{&early}, rig, Options{}); !errors.As(err, &refused) || !strings.Contains(refused.Error(), "one row off") {
			t.Errorf("%s: an input logged a row early gives %v", r.Name, err)
		}
		if l := checkLaw([]*data.Experiment{&early}, rig); l == nil || l.Rows != -1 {
			t.Errorf("%s: law check of an input logged early: %+v", r.Name, l)
		}
		if l := checkLaw([]*data.Experiment{e}, rig); l == nil || l.Rows != 0 || l.SignWrong {
			t.Errorf("%s: law check of a log in step: %+v", r.Name, l)
		}
	}
}

// The same log gives the same bytes whatever the number of workers.
func TestFitIsDeterministic(t *testing.T) {
	e, rig := experiment(t, rigNamed(t, "slider"), 4)
	var first []byte
	for _, workers := range []int{1, 8} {
		m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{Workers: workers})
		if err != nil {
			t.Fatal(err)
		}
		var b bytes.Buffer
		if err := m.Write(&b); err != nil {
			t.Fatal(err)
		}
		if first == nil {
			first = b.Bytes()
		} else if !bytes.Equal(first, b.Bytes()) {
			t.Error("8 workers give another model than 1")
		}
		back, err := ReadModel(bytes.NewReader(first), "model.json")
		if err != nil {
			t.Fatal(err)
		}
		if back.Plant.Delay != m.Plant.Delay || back.Poles[0] != m.Poles[0] {
			t.Error("the model does not survive its file")
		}
		// The rig's sensor has steps of 0.005 mm, its input none.
		if q := back.Evidence.Resolution; math.Abs(q.Output-0.005) > 1e-6 || q.Input != 0 {
			t.Errorf("resolution %+v", q)
		}
	}
}

// The covariance of draws is that of the model.
func TestDraw(t *testing.T) {
	m := &Model{Plant: Plant{
		Numerator: []float64{2, 5}, Denominator: []float64{1, 3, -4}, Delay: 1,
		Parameters: []string{"b0", "b1", "a1", "a2", "delay"},
		Covariance: [][]float64{
			{4, 1, 0.5, 0, 0.01}, {1, 1, 0, 0.2, 0}, {0.5, 0, 1, 0.3, 0}, {0, 0.2, 0.3, 2, 0}, {0.01, 0, 0, 0, 1e-4},
		},
	}}
	const n = 20000
	var sum [5]float64
	var cross [5][5]float64
	mean := []float64{5, 2, 3, -4, 1}
	for _, g := range m.Draw(n, 7) {
		v := []float64{g.Num[0], g.Num[1], g.Den[1], g.Den[0], g.Delay}
		for i := range v {
			v[i] -= mean[i]
			sum[i] += v[i]
		}
		for i := range v {
			for j := range v {
				cross[i][j] += v[i] * v[j] / n
			}
		}
	}
	for i := range 5 {
		sd := math.Sqrt(m.Plant.Covariance[i][i])
		// Five deviations of a mean and of a second moment of n normal draws.
		if math.Abs(sum[i]/n) > 5*sd/math.Sqrt(n) {
			t.Errorf("mean of %s is off by %g", m.Plant.Parameters[i], sum[i]/n)
		}
		for j := range 5 {
			sdj := math.Sqrt(m.Plant.Covariance[j][j])
			if d := math.Abs(cross[i][j] - m.Plant.Covariance[i][j]); d > 5*math.Sqrt(2.0/n)*sd*sdj {
				t.Errorf("covariance of %s and %s is %g, want %g", m.Plant.Parameters[i], m.Plant.Parameters[j], cross[i][j], m.Plant.Covariance[i][j])
			}
		}
	}
}
