package ident

import (
	"bytes"
	"context"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/data"
	"steadyrig/fit/demorig"
	"steadyrig/fit/lti"
)

// body is an invented levitated body: m y” = m g - k (i/y)², y the gap below
// the coil in mm, i its current in A. About gap y0 and current i0, where k
// (i0/y0)² = m g, y” = g (1 - (i/i0)² (y0/y)²), whatever the mass; linearised
// δy” = 2 g/y0 δy - 2 g/i0 δi, with poles ±sqrt(2 g/y0).
type body struct {
	gap, current, period float64 // mm, A, s
}

var levitated = body{gap: 6, current: 1.2, period: 0.002}

const gravity = 9810 // mm/s²

func (b body) pole() float64 { return math.Sqrt(2 * gravity / b.gap) }

// log simulates rows rows of the body under a lead law with a binary probe on
// its current: input held, force followed between the rows by the classical
// Runge-Kutta rule, white noise on the force and on the sensor. It returns what
// the gap's standard deviation is too, in mm.
func (b body) log(t testing.TB, probe float64, rows int, seed uint64) (e *data.Experiment, rig *data.Rig, sd float64) {
	t.Helper()
	rnd := rand.New(rand.NewPCG(seed, 17))
	law := lti.Law{Inner: lti.Tustin(lti.TF{Num: lti.Poly{-0.6, -0.6 / 45}, Den: lti.Poly{1, 1. / 600}}, b.period), U0: b.current, Y0: b.gap}
	state := law.Start()
	pull := func(y, i float64) float64 { return gravity * (1 - math.Pow(i/b.current*b.gap/y, 2)) }
	y, v := b.gap, 0.0
	level := 1.0
	var csv bytes.Buffer
	csv.WriteString("t,u,y\n")
	const steps = 8
	h := b.period / steps
	for k := range rows {
		if k%4 == 0 {
			level = float64(2*rnd.IntN(2) - 1)
		}
		read := y + 0.003*rnd.NormFloat64()
		u := state.StepProbe(b.gap, read, probe*level)
		fmt.Fprintf(&csv, "%.6g,%.9g,%.9g\n", float64(k)*b.period, u, read)
		sd += (y - b.gap) * (y - b.gap) / float64(rows)
		i := u + 0.01*rnd.NormFloat64()
		for range steps {
			v1, a1 := v, pull(y, i)
			v2, a2 := v+h/2*a1, pull(y+h/2*v1, i)
			v3, a3 := v+h/2*a2, pull(y+h/2*v2, i)
			v4, a4 := v+h*a3, pull(y+h*v3, i)
			y += h / 6 * (v1 + 2*v2 + 2*v3 + v4)
			v += h / 6 * (a1 + 2*a2 + 2*a3 + a4)
		}
		if !(y > 0.2*b.gap && y < 3*b.gap) {
			t.Fatalf("probe %g A, seed %d: the body is lost in row %d", probe, seed, k)
		}
	}
	rig, err := data.ReadRig(strings.NewReader("name = \"body\"\n[log]\ntime = \"t\"\ninput = \"u\"\noutput = \"y\"\n[units]\ninput = \"A\"\noutput = \"mm\"\n"), "body.toml")
	if err != nil {
		t.Fatal(err)
	}
	if e, err = data.ReadLog(&csv, "body.csv", rig); err != nil {
		t.Fatal(err)
	}
	return e, rig, math.Sqrt(sd)
}

// The linearised pole of a levitated body lies inside its interval, or the
// verdict says that the rig is not linear: "sound with the pole outside" may
// not happen more often than intervals of 95 % miss. Motion from a sixth of a
// per cent of the gap to a fortieth of it; the structure is searched for.
func TestNonlinearBody(t *testing.T) {
	if testing.Short() {
		t.Skip("fits logs of a levitated body")
	}
	b := levitated
	truth := b.pole()
	const rows = 6000
	type motion struct {
		probe float64 // A
		logs  int
	}
	motions := []motion{{0.02, 1}, {0.16, 1}}
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		n, _ := strconv.Atoi(v)
		motions = []motion{{0.01, n}, {0.02, n}, {0.04, n}, {0.08, n}, {0.16, n}, {0.24, n}}
	}
	outside, all := 0, 0
	for _, c := range motions {
		var inside, sound, told, wrong int
		var moved float64
		for seed := range uint64(c.logs) {
			e, rig, sd := b.log(t, c.probe, rows, seed)
			moved += sd / float64(c.logs)
			m, err := Fit(context.Background(), []*data.Experiment{e}, rig, Options{})
			if err != nil {
				t.Fatal(err)
			}
			in := slices.ContainsFunc(m.Poles, func(p Root) bool { return p.Im == 0 && p.Re95.Contains(truth) })
			if in {
				inside++
			}
			if slices.ContainsFunc(m.Warnings, func(w string) bool { return strings.Contains(w, "answers nonlinearly") }) {
				told++
				if m.Verdict == Sound {
					t.Error("sound though nonlinear")
				}
			}
			if m.Verdict == Sound {
				sound++
				if !in {
					wrong++
				}
			}
			all++
		}
		t.Logf("probe %.2f A, gap %.3f mm about %g mm: pole inside in %d of %d, called sound %d, of these with the pole outside %d, nonlinear %d", c.probe, moved, b.gap, inside, c.logs, sound, wrong, told)
		outside += wrong
		// A motion of 0.15 mm is seen without fail, one of 0.02 mm rarely.
		if c.probe >= 0.16 && told < c.logs {
			t.Errorf("probe %g A: called nonlinear in %d of %d", c.probe, told, c.logs)
		}
	}
	// More than this many of them outside, where 5 % are, has a probability
	// below 0.001.
	if p := 1 - (distuv.Binomial{N: float64(all), P: 1 - Confidence}).CDF(float64(outside)-1); p < 1e-3 {
		t.Errorf("called sound with the pole outside %d times in %d", outside, all)
	}
}

// On linear rigs the test has its size: over logs of the demo rigs the
// probability is uniform, so that it is below x in a share x of them.
func TestLinearityOfLinearRigs(t *testing.T) {
	if testing.Short() {
		t.Skip("fits forty logs")
	}
	logs := 8
	if v := os.Getenv("STEADYRIG_STUDY"); v != "" {
		logs, _ = strconv.Atoi(v)
	}
	levels := []float64{0.5, 0.1, 0.01, 0.001}
	below := make([]int, len(levels))
	for _, r := range demorig.All() {
		r.Rows = 2000
		for seed := range uint64(logs) {
			p, e, _ := predictorOf(t, r, 8000+seed)
			f, err := p.Fit(truth(t, r), compareTol, compareStep)
			if err != nil {
				t.Fatal(err)
			}
			recs, _, _ := records([]*data.Experiment{e})
			probability := linearity(p, recs, f)
			for i, level := range levels {
				if probability < level {
					below[i]++
				}
			}
		}
	}
	n := logs * len(demorig.All())
	t.Logf("of %d logs: below %g in %v", n, levels, below)
	for i, level := range levels {
		likely(t, fmt.Sprintf("linearity probability below %g", level), below[i], n, level)
	}
}
