package design

import (
	"cmp"
	"fmt"
	"math"
	"math/cmplx"
	"slices"
	"testing"

	"steadyrig/data"
	"steadyrig/fit/lti"
	"steadyrig/ident"
)

// An invented rig with its truth, its noise and what is asked of it.
type testRig struct {
	name                string
	truth               lti.TF
	relative            float64 // standard deviation of each coefficient of the model, as a share of its scale
	period, compute     float64
	sensor, disturbance float64 // standard deviations
	colour              float64 // rad/s, pole of the disturbance; 0: white
	point               OperatingPoint
	input               [2]float64
	output              *[2]float64
	spec                data.Spec
	negative            bool
}

func fromRoots(gain float64, zeros, poles []complex128, delay float64) lti.TF {
	return lti.TF{Num: lti.FromRoots(zeros).Scale(gain), Den: lti.FromRoots(poles), Delay: delay}
}

// testRigs are of the kinds that the designer must carry. All are invented.
func testRigs() []testRig {
	return []testRig{
		{
			name: "levitated", truth: fromRoots(9e5, nil, []complex128{30, -35, -220}, 0), relative: 0.01,
			period: 0.001, compute: 0.0002, sensor: 0.002, disturbance: 0.01, point: OperatingPoint{1.2, 5},
			input: [2]float64{0, 3}, output: &[2]float64{3, 7},
			spec: data.Spec{Step: 0.15, Overshoot: 0.15, Settling: 0.3, Band: 0.02, PeakSensitivity: 2.2},
		},
		{
			name: "balanced", truth: fromRoots(4, nil, []complex128{2.2, -2.6}, 0), relative: 0.02,
			period: 0.03, compute: 0.005, sensor: 0.01, disturbance: 0.05, point: OperatingPoint{0, 0},
			input: [2]float64{-12, 12}, output: &[2]float64{-6, 6},
			spec: data.Spec{Step: 0.5, Overshoot: 0.2, Settling: 5, Band: 0.02, PeakSensitivity: 2},
		},
		{
			name: "exothermic", truth: fromRoots(-0.003, nil, []complex128{0.02, -0.06}, 5), relative: 0.02,
			period: 2, sensor: 0.03, disturbance: 0.1, point: OperatingPoint{40, 80},
			input: [2]float64{0, 100}, output: &[2]float64{60, 100},
			spec:     data.Spec{Step: 2, Overshoot: 0.25, Settling: 450, Band: 0.03, PeakSensitivity: 2.2},
			negative: true,
		},
		{
			name: "flow-driven", truth: fromRoots(260, []complex128{-5}, []complex128{complex(0.8, 9), complex(0.8, -9), -18}, 0), relative: 0.01,
			period: 0.01, compute: 0.002, sensor: 0.01, disturbance: 0.05, colour: 3, point: OperatingPoint{1, 2},
			input: [2]float64{-12, 15}, output: &[2]float64{-8, 12},
			spec: data.Spec{Step: 1, Overshoot: 0.2, Settling: 2.5, Band: 0.02, PeakSensitivity: 2},
		},
		{
			name: "rigid", truth: fromRoots(9000, nil, []complex128{0, 0, -30}, 0), relative: 0.01,
			period: 0.005, compute: 0.001, sensor: 0.02, disturbance: 0.05, point: OperatingPoint{2, 100},
			input: [2]float64{-20, 24}, output: &[2]float64{50, 150},
			spec: data.Spec{Step: 5, Overshoot: 0.2, Settling: 1.6, Band: 0.02, PeakSensitivity: 2},
		},
	}
}

func (r testRig) rig() *data.Rig {
	spec, in := r.spec, r.input
	g := &data.Rig{Name: r.name, Loop: &data.Loop{SamplePeriod: r.period, ComputeDelay: r.compute}, Spec: &spec}
	g.Limits.Input, g.Limits.Output = &in, r.output
	return g
}

// factor returns the monic C and the variance with |C|^2 var = sensor^2 |A|^2 + disturbance^2 |B|^2 on the circle:
// the noise of an ARMAX form with white sensor noise and input disturbance (a: with the
// disturbance's own pole).
func factor(a, b lti.Poly, sensor, disturbance float64) (lti.Poly, float64) {
	n := max(len(a), len(b))
	auto := func(p lti.Poly, k int) float64 {
		s := 0.0
		for i := 0; i+k < len(p); i++ {
			s += p[i] * p[i+k]
		}
		return s
	}
	r := make(lti.Poly, 2*n-1)
	for k := range n {
		v := sensor*sensor*auto(a, k) + disturbance*disturbance*auto(b, k)
		r[n-1+k], r[n-1-k] = v, v
	}
	for len(r) > 1 && r[0] == 0 {
		r = r[1 : len(r)-1]
	}
	var in []complex128
	for _, z := range r.Roots() {
		if cmplx.Abs(z) < 1 {
			in = append(in, z)
		}
	}
	c := lti.FromRoots(in)
	slices.Reverse(c)
	s0, c0 := sensor*sensor*auto(a, 0)+disturbance*disturbance*auto(b, 0), auto(c, 0)
	return c, s0 / c0
}

// model returns what a good fit of the rig would say.
func (r testRig) model(t testing.TB) *ident.Model {
	t.Helper()
	rev := func(p lti.Poly) []float64 {
		q := slices.Clone(p)
		slices.Reverse(q)
		return q
	}
	m := &ident.Model{
		Schema: ident.Schema, Rig: r.name, Verdict: ident.Sound, OperatingPoint: ident.OperatingPoint(r.point),
		Plant: ident.Plant{Numerator: rev(r.truth.Num), Denominator: rev(r.truth.Den), Delay: r.truth.Delay},
	}
	n := len(r.truth.Den) - 1
	rate := 0.0 // scale of a coefficient that is zero
	for i := 1; i <= n; i++ {
		rate = math.Max(rate, math.Pow(math.Abs(r.truth.Den[n-i]), 1/float64(i)))
	}
	var sd []float64
	for i, b := range r.truth.Num {
		m.Plant.Parameters = append(m.Plant.Parameters, fmt.Sprintf("b%d", i))
		sd = append(sd, r.relative*math.Abs(b))
	}
	for i := 1; i <= n; i++ {
		m.Plant.Parameters = append(m.Plant.Parameters, fmt.Sprintf("a%d", i))
		v := math.Abs(r.truth.Den[n-i])
		if v == 0 {
			v = math.Pow(rate/20, float64(i-1)) * rate // the double integrator's small coefficients
			v *= 0.05
		}
		sd = append(sd, r.relative*v)
	}
	if r.truth.Delay > 0 {
		m.Plant.Parameters = append(m.Plant.Parameters, "delay")
		sd = append(sd, r.relative*r.truth.Delay)
	}
	m.Plant.Covariance = make([][]float64, len(sd))
	for i := range sd {
		m.Plant.Covariance[i] = make([]float64, len(sd))
		m.Plant.Covariance[i][i] = sd[i] * sd[i]
	}
	d, err := lti.ZOHTF(r.truth, r.period)
	if err != nil {
		t.Fatal(err)
	}
	den, strength := d.Den, r.disturbance
	if r.colour > 0 {
		rho := math.Exp(-r.colour * r.period)
		den, strength = den.Mul(lti.Poly{1, -rho}), strength*math.Sqrt(1-rho*rho)
	}
	c, variance := factor(den, d.Num, r.sensor, strength)
	m.Noise = ident.Noise{Numerator: c, Denominator: den, SD: math.Sqrt(variance), SamplePeriod: r.period}
	// Spread of the poles over draws.
	draws := m.Draw(400, 99)
	for _, p := range r.truth.Poles() {
		var re, im, re2, im2, unstable float64
		for _, g := range draws {
			q := slices.MinFunc(g.Poles(), func(a, b complex128) int { return cmp.Compare(cmplx.Abs(a-p), cmplx.Abs(b-p)) })
			re, im = re+real(q), im+imag(q)
			re2, im2 = re2+real(q)*real(q), im2+imag(q)*imag(q)
			if real(q) > 0 {
				unstable++
			}
		}
		k := float64(len(draws))
		reSD, imSD := math.Sqrt(math.Max(0, re2/k-re*re/k/k)), math.Sqrt(math.Max(0, im2/k-im*im/k/k))
		m.Poles = append(m.Poles, ident.Root{
			Re: real(p), Im: imag(p), ReSD: reSD, ImSD: imSD, Unstable: unstable/k > 0.5, ProbabilityUnstable: unstable / k,
			Re95: ident.Interval{Lo: real(p) - 2*reSD, Hi: real(p) + 2*reSD}, Im95: ident.Interval{Lo: imag(p) - 2*imSD, Hi: imag(p) + 2*imSD},
		})
	}
	return m
}
