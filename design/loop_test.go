package design

import (
	"math"
	"math/rand/v2"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// bare is a model of a plant without uncertainty, under white noise of the output alone.
func bare(g lti.TF, period float64) *ident.Model {
	r := testRig{truth: g, period: period, sensor: 0.01}
	m := &ident.Model{Schema: ident.Schema, Verdict: ident.Sound}
	for i := len(g.Num) - 1; i >= 0; i-- {
		m.Plant.Numerator = append(m.Plant.Numerator, g.Num[i])
	}
	for i := len(g.Den) - 1; i >= 0; i-- {
		m.Plant.Denominator = append(m.Plant.Denominator, g.Den[i])
	}
	m.Plant.Delay = g.Delay
	d, err := lti.ZOHTF(g, period)
	if err != nil {
		panic(err)
	}
	m.Noise = ident.Noise{Numerator: d.Den, Denominator: d.Den, SD: r.sensor, SamplePeriod: period}
	for _, p := range g.Poles() {
		m.Poles = append(m.Poles, ident.Root{
			Re: real(p), Im: imag(p), Unstable: real(p) > 0, Re95: ident.Interval{Lo: real(p), Hi: real(p)},
		})
	}
	return m
}

func bareRig(period, compute, settling float64) *data.Rig {
	g := &data.Rig{
		Name: "bare", Loop: &data.Loop{SamplePeriod: period, ComputeDelay: compute},
		Spec: &data.Spec{Step: 1, Overshoot: 0.3, Settling: settling, Band: 0.05, PeakSensitivity: 3},
	}
	g.Limits.Input = &[2]float64{-100, 100}
	return g
}

func lawLoops(inner lti.DTF) *Loops {
	return &Loops{SamplePeriod: inner.Period, Inner: &Block{Discrete: Rational{inner.Num, inner.Den}}}
}

// Bode's integral of the sampled loop, evaluated on the curves that the report shows: the integral of ln|S| from 0
// to pi/T is pi/T times the sum of ln|z| over the unstable poles. Sung & Hara (1988), Int. J. Control 48, give
// S = (z - 1.25)/(z - 0.5) the value 2 pi ln 1.25 from -pi to pi; for the second loop, which is that of Freudenberg
// & Looze (1985), relative degree 2, the value pi per unstable pole of 1 rad/s holds at any sample period.
func TestBodeIntegral(t *testing.T) {
	p := math.Log(1.25)
	for _, c := range []struct {
		name      string
		plant     lti.TF
		gain      float64
		period    float64
		want, tol float64
	}{
		// x+ = 1.25 x + 0.25/p b u with b = 3p: 0.75 u.
		{"Sung & Hara", lti.TF{Num: lti.Poly{3 * p}, Den: lti.Poly{-p, 1}}, 1, 1, 1.402052283009317 / 2, 1e-2},
		{"Freudenberg & Looze", lti.TF{Num: lti.Poly{50}, Den: lti.Poly{-10, 9, 1}}, 1, 0.01, math.Pi, 1e-2},
	} {
		// A settling time of 40 periods gives frequencies down to 0.05/40 periods; 1e-2: trapezoids on that grid.
		cv, err := lawLoops(lti.Gain(c.gain, c.period)).Sensitivity(bare(c.plant, c.period), bareRig(c.period, 0, 400*c.period), 0, 1)
		if err != nil {
			t.Fatal(err)
		}
		sum := math.Log(cv.S[0]) * cv.Omega[0]
		for j := 1; j < len(cv.Omega); j++ {
			sum += (math.Log(cv.S[j]) + math.Log(cv.S[j-1])) / 2 * (cv.Omega[j] - cv.Omega[j-1])
		}
		near(t, c.name, sum, c.want, c.tol)
	}
}

// Ranges of stabilising gains by the eigenvalues that the proof uses. Sampled 1/(s-1), h = 0.1: p < K < p coth(ph/2);
// with one whole sample of delay p < K < p/(a-1), both by Jury's criterion and exact. With a delay tau of its own
// 1 < K < sqrt(1 + w^2), atan w = w tau (Silva, Datta & Bhattacharyya 2005), to which sampling adds half a period.
func TestGainRange(t *testing.T) {
	plant := lti.TF{Num: lti.Poly{1}, Den: lti.Poly{-1, 1}}
	late := func(tau float64) lti.TF { g := plant; g.Delay = tau; return g }
	for _, c := range []struct {
		name            string
		plant           lti.TF
		period, compute float64
		top, tol        float64
	}{
		{"no delay", plant, 0.1, 0, 20.0166638895501, 1e-6},
		{"a sample of computing", plant, 0.1, 0.1, 9.50833194477505, 1e-6},
		{"a sample of transport", late(0.1), 0.1, 0, 9.50833194477505, 1e-6},
		{"delay 0.1", late(0.1 - 0.0005), 0.001, 0, 15.0774318146657, 1e-3},
		{"delay 0.2", late(0.2 - 0.0005), 0.001, 0, 7.22965477329368, 1e-3},
		{"delay 0.5", late(0.5 - 0.001), 0.002, 0, 2.53655898923060, 1e-3},
		{"delay 0.8", late(0.8 - 0.002), 0.004, 0, 1.37871552915943, 1e-3},
	} {
		for _, k := range []struct {
			gain float64
			want bool
		}{{1 - c.tol, false}, {1 + c.tol, true}, {c.top * (1 - c.tol), true}, {c.top * (1 + c.tol), false}} {
			loops, err := lti.NewTwoLoops(c.plant, c.compute, &lti.Law{Inner: lti.Gain(k.gain, c.period)})
			if err != nil {
				t.Fatal(err)
			}
			if got := stable(loops); got != k.want {
				t.Errorf("%s, gain %v: stable %v, want %v", c.name, k.gain, got, k.want)
			}
			// The tuner's count on a grid must say the same, a little further from the edge.
			if math.Abs(k.gain-1) < 1e-2 {
				continue
			}
			gain := k.gain
			if k.want {
				gain *= 0.97
			} else {
				gain *= 1.03
			}
			rig := bareRig(c.period, c.compute, 20)
			p, err := newProblem(bare(c.plant, c.period), rig)
			if err != nil {
				t.Fatal(err)
			}
			var g gridLoop
			g.on(p.z1, continuous(lti.Poly{gain}, lti.Poly{1}, c.period).z, nil)
			if out := p.frequency(&p.nominal, &g).outside; (out == 0) != k.want {
				t.Errorf("%s, gain %v: %d poles outside on the grid, stable is %v", c.name, gain, out, k.want)
			}
		}
	}
}

// Skogestad & Postlethwaite (2005), sec. 2.4: what a peak of |S| guarantees.
func TestGuaranteedMargins(t *testing.T) {
	for peak, want := range map[float64][3]float64{
		1.4: {3.5, 0.583333333333, 41.8496648552766},
		1.6: {2.66666666666667, 0.615384615385, 36.4199137285660},
		1.7: {2.42857142857143, 0.629629629630, 34.2092703532876},
		2:   {2, 0.666666666667, 28.9550243718598},
	} {
		up, down, phase := GuaranteedMargins(peak)
		near(t, "up", up, want[0], 1e-11)
		near(t, "down", down, want[1], 1e-11)
		near(t, "phase", phase*180/math.Pi, want[2], 1e-11)
	}
}

// The noise of an ARMAX form made of known parts is split into these parts again, and what the formulas say of the
// closed loop agrees with its simulation under that noise.
func TestNoiseInTheLoop(t *testing.T) {
	for _, r := range testRigs()[:4] {
		m, rig := r.model(t), r.rig()
		p, err := newProblem(m, rig)
		if err != nil {
			t.Fatal(err)
		}
		if !p.noise.split {
			t.Fatalf("%s: not split", r.name)
		}
		near(t, r.name+": sensor", p.noise.sensor, r.sensor, 0.01)
		// A coloured disturbance is stood for by a mixture of lags, which need not hold the very one.
		tol := 0.02
		if r.colour > 0 {
			tol = 0.15
		}
		near(t, r.name+": disturbance", p.noise.disturbance, r.disturbance, tol)

		// A plain lead that holds the rig, without limits.
		inners, err := p.tuneInner(t.Context(), InnerForms(), []plant{p.nominal}, nil, 0)
		chosen := simplestInner(inners)
		if err != nil || chosen < 0 {
			t.Fatalf("%s: %v %d", r.name, err, chosen)
		}
		law := &lti.Law{Inner: inners[chosen].block.z}
		const n = 200000
		rnd := rand.New(rand.NewPCG(7, 7))
		noise, dist := make([]float64, n), make([]float64, n)
		for k := range n {
			noise[k], dist[k] = r.sensor*rnd.NormFloat64(), r.disturbance*rnd.NormFloat64()
			if rho := math.Exp(-r.colour * r.period); r.colour > 0 && k > 0 {
				dist[k] = rho*dist[k-1] + math.Sqrt(1-rho*rho)*dist[k]
			}
		}
		run := lti.Run{Plant: r.truth, Period: r.period, ComputeDelay: r.compute, Law: law, Steps: n, Noise: noise}
		sd := func(x []float64) float64 {
			s := 0.0
			for _, v := range x[n/20:] {
				s += v * v
			}
			return math.Sqrt(s / float64(n-n/20))
		}
		tr, err := run.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		g := p.lawGrid(law)
		// 4 %: 200 000 correlated samples (about 1 %), the grid's trapezoids and the split (1 % each).
		near(t, r.name+": sensor noise at the input", p.frequency(&p.nominal, g).noise, sd(tr.U), 0.04)
		run.InputDisturbance = dist
		if tr, err = run.Simulate(); err != nil {
			t.Fatal(err)
		}
		want := p.expectedSD(&p.nominal, g)
		near(t, r.name+": expected input", want.Input, sd(tr.U), 0.04)
		near(t, r.name+": expected output", want.Output, sd(tr.Y), 0.04)
	}
}

// The tuner's plain recursions give the same step response as the simulator that the proof uses.
func TestTunerSimulates(t *testing.T) {
	for _, r := range testRigs() {
		p, err := newProblem(r.model(t), r.rig())
		if err != nil {
			t.Fatal(err)
		}
		inner := continuous(lti.Poly{0.3, 0.2, 0.01}, lti.Poly{1, 0.08, 0.004, 3e-5, 1e-7}, r.period)
		outer := continuous(lti.Poly{0.5, 0.4, 0.1}, lti.Poly{0, 1, 0.3, 0.01}, r.period)
		pre := continuous(lti.Poly{1, 0.05}, lti.Poly{1, 0.2}, r.period)
		law := &lti.Law{Inner: inner.z, Outer: &outer.z, Prefilter: &pre.z}
		const n = 60 // the loop need not be stable, and grows
		ref := make([]float64, n)
		for k := range ref {
			ref[k] = 1
		}
		for _, kick := range []bool{false, true} {
			run := lti.Run{Plant: r.truth, Period: r.period, ComputeDelay: r.compute, Law: law, Steps: n}
			if kick {
				run.InputDisturbance = ref
			} else {
				run.Reference = ref
			}
			tr, err := run.Simulate()
			if err != nil {
				t.Fatal(err)
			}
			var sim simulator
			got := sim.step(&p.nominal, inner.z, outer.z, pre.z, n, r.period, n*r.period/2, 0.02, kick)
			size := 0.0
			for k := range n {
				size = math.Max(size, math.Abs(tr.YTrue[k]))
			}
			for k := range n {
				// 1e-6 of the largest value: the tuner's powers of z^-1 lose digits at fast sampling.
				if !(math.Abs(sim.y[k]-tr.YTrue[k]) < 1e-6*size) {
					t.Fatalf("%s, kick %v, sample %d: tuner %v, simulator %v", r.name, kick, k, sim.y[k], tr.YTrue[k])
				}
			}
			if got.peak == 0 && got.low == 0 {
				t.Errorf("%s: nothing moved", r.name)
			}
		}
	}
}
