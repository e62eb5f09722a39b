package ident

import (
	"bytes"
	"context"
	"encoding/json"
	"errors"
	"math/rand/v2"
	"strings"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/demorig"
)

// An output that has nothing to do with the input gives no plant.
func TestDeafLogIsRefused(t *testing.T) {
	_, rig := experiment(t, rigNamed(t, "slider"), 1)
	rig.Stopgap = nil
	rnd := rand.New(rand.NewPCG(21, 21))
	s := data.Segment{U: make([]float64, 3000), Y: make([]float64, 3000)}
	for k := range s.U {
		s.U[k], s.Y[k] = rnd.NormFloat64(), rnd.NormFloat64()
		if k > 0 {
			s.Y[k] += 0.9 * s.Y[k-1]
		}
	}
	e := &data.Experiment{File: "noise.csv", Rows: 3000, Used: 3000, Period: 0.005, Segments: []data.Segment{s}}
	var refused *RefusedError
	if _, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{}); !errors.As(err, &refused) || !strings.Contains(refused.What, "does not answer") {
		t.Errorf("fit says %v", err)
	}
	if a, err := Audit(context.Background(), []*data.Experiment{e}, rig); !errors.As(err, &refused) || a.Verdict != Refused {
		t.Errorf("audit says %v", err)
	}
}

// Fifty-eight rows carry no plant of any order.
func TestTinyLogIsRefused(t *testing.T) {
	r := rigNamed(t, "hover")
	r.Rows = 58
	e, rig := experiment(t, r, 2)
	var refused *RefusedError
	if m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{}); !errors.As(err, &refused) {
		t.Errorf("fit says %v, verdict %s", err, m.Verdict)
	}
}

// On a short log poles near zero are not taken for exact integrators unless
// their interval is small against the rest of the plant: loops for exact
// integrators would rest on a choice, not on the log. The body of hover has
// none, which 100 rows of its log do not show to BIC; the slider has two.
func TestIntegratorsNeedEvidence(t *testing.T) {
	if testing.Short() {
		t.Skip("fits nine logs")
	}
	held := func(r demorig.Rig, seed uint64) (n int, verdict string) {
		e, rig := experiment(t, r, seed)
		m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
		var refused *RefusedError
		if err != nil && !errors.As(err, &refused) {
			t.Fatal(err)
		}
		for _, p := range m.Poles {
			if p.Re == 0 && p.Im == 0 {
				n++
			}
		}
		return n, m.Verdict
	}
	hover := rigNamed(t, "hover")
	for _, rows := range []int{95, 110} {
		hover.Rows = rows
		for seed := range uint64(4) {
			n, verdict := held(hover, 30+seed)
			if n > 0 {
				t.Errorf("hover, %d rows, seed %d: %d integrators", rows, 30+seed, n)
			}
			if verdict == Sound {
				t.Errorf("hover, %d rows, seed %d: called sound", rows, 30+seed)
			}
		}
	}
	if n, _ := held(rigNamed(t, "slider"), 30); n != 2 {
		t.Errorf("slider: %d integrators on a long log of a rigid body", n)
	}
}

// The dither's column may be in step while the input's is not.
func TestShiftedInputBesideDitherInStep(t *testing.T) {
	r := rigNamed(t, "hover")
	e, rig := experiment(t, r, 5)
	s := e.Segments[0]
	n := len(s.Y)
	e.Segments = []data.Segment{{Line: 1, U: s.U[1:], Y: s.Y[:n-1], R: s.R[:n-1], D: s.D[:n-1]}}
	var refused *RefusedError
	if _, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{}); !errors.As(err, &refused) || !strings.Contains(refused.Error(), "one row early") {
		t.Errorf("fit says %v", err)
	}
	if refused != nil && !strings.Contains(refused.Do, "down by a row") {
		t.Errorf("advice %q for a rig file that says \"after\" already", refused.Do)
	}
}

// A model file that contradicts itself is refused with the contradiction.
func TestReadModelRefuses(t *testing.T) {
	e, rig := experiment(t, rigNamed(t, "slider"), 6)
	m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
	if err != nil {
		t.Fatal(err)
	}
	var whole bytes.Buffer
	if err := m.Write(&whole); err != nil {
		t.Fatal(err)
	}
	for _, test := range []struct {
		name, want string
		spoil      func(m *Model)
	}{
		{"schema", "schema is", func(m *Model) { m.Schema = "other/1" }},
		{"verdict", "verdict is", func(m *Model) { m.Verdict = "fine" }},
		{"improper", "longer than the numerator", func(m *Model) { m.Plant.Numerator = []float64{1, 2, 3, 4} }},
		{"no leading one", "starts with 1", func(m *Model) { m.Plant.Denominator[0] = 2 }},
		{"zero numerator", "numerator is zero", func(m *Model) { m.Plant.Numerator = []float64{0} }},
		{"negative delay", "delay is -1", func(m *Model) { m.Plant.Delay = -1 }},
		{"negative variance", "no covariance", func(m *Model) { m.Plant.Covariance[0][0] = -1 }},
		{"lopsided covariance", "no covariance", func(m *Model) { m.Plant.Covariance[0][1] *= 2 }},
		{"too few covariances", "covariance has", func(m *Model) { m.Plant.Covariance = m.Plant.Covariance[:1] }},
		{"other poles", "where the plant has none", func(m *Model) { m.Poles[0].Re = -7 }},
		{"missing pole", "are listed", func(m *Model) { m.Poles = m.Poles[1:] }},
		{"unknown parameter", "none of", func(m *Model) { m.Plant.Parameters[0] = "c0" }},
		{"short response", "values for", func(m *Model) { m.FrequencyResponse.Phase.Hi = m.FrequencyResponse.Phase.Hi[1:] }},
		{"resolution", "resolution of input and output", func(m *Model) { m.Evidence.Resolution.Output = -1 }},
		{"noise", "monic", func(m *Model) { m.Noise.Numerator[0] = 2 }},
	} {
		spoilt := new(Model)
		if err := json.Unmarshal(whole.Bytes(), spoilt); err != nil {
			t.Fatal(err)
		}
		test.spoil(spoilt)
		var b bytes.Buffer
		if err := spoilt.Write(&b); err != nil {
			t.Fatal(err)
		}
		_, err := ReadModel(&b, "m.json")
		if err == nil || !strings.HasPrefix(err.Error(), "m.json") || !strings.Contains(err.Error(), test.want) {
			t.Errorf("%s: error %v, want m.json and %q", test.name, err, test.want)
		}
	}
	if _, err := ReadModel(strings.NewReader("{\n\"schema\": 5}"), "m.json"); err == nil || !strings.Contains(err.Error(), "m.json:2") {
		t.Errorf("a wrong type gives %v, want its line", err)
	}
}
