package fittest

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"

	"steadyrig/fit/lti"
)

// Rig is a plant of known truth in closed loop, with an outside signal added to the input, noise held at the input and
// white noise on the sensor: all are invented.
type Rig struct {
	Name        string
	Plant       lti.TF
	Period      float64
	Law         lti.Law
	Dither      float64 // amplitude of the random binary signal added to the input
	Hold        int     // samples for which each of its values stays
	InputNoise  float64 // standard deviations
	SensorNoise float64
	Colour      float64 // rad/s, the input noise is white noise through one pole at -Colour; 0: white
}

// lead is gain (s + zero)/(s + pole), sampled.
func lead(gain, zero, pole, period float64) lti.DTF {
	return lti.Tustin(lti.TF{Num: lti.Poly{gain * zero, gain}, Den: lti.Poly{pole, 1}}, period)
}

// Rigs returns rigs whose plants have an unstable pole or pair, an integrator, or none, over time scales from
// milliseconds to seconds; their poles are simple, their noise is white, there is no delay.
func Rigs() []Rig {
	return []Rig{
		{Name: "unstable lag", Plant: lti.TF{Num: lti.Poly{3}, Den: lti.Poly{-2, 1}}, Period: 0.05,
			Law: lti.Law{Inner: lti.Gain(2, 0.05)}, Dither: 1, Hold: 2, InputNoise: 0.3, SensorNoise: 0.05},
		{Name: "levitated body", Plant: lti.TF{Num: lti.Poly{900}, Den: lti.Poly{-900, 0, 1}}, Period: 0.002,
			Law:    lti.Law{Inner: lead(40, 20, 300, 0.002), U0: 4, Y0: 12},
			Dither: 1, Hold: 8, InputNoise: 0.2, SensorNoise: 0.005},
		{Name: "flow-driven pair", Plant: lti.TF{Num: lti.Poly{40, 10}, Den: lti.Poly{36, -1.6, 1}}, Period: 0.03,
			Law: lti.Law{Inner: lti.Gain(0.6, 0.03), U0: -1, Y0: 3}, Dither: 1, Hold: 3, InputNoise: 0.2, SensorNoise: 0.1},
		{Name: "integrator and lag", Plant: lti.TF{Num: lti.Poly{8}, Den: lti.Poly{0, 5, 1}}, Period: 0.04,
			Law: lti.Law{Inner: lti.Gain(1.5, 0.04)}, Dither: 1, Hold: 4, InputNoise: 0.3, SensorNoise: 0.03},
		{Name: "three poles, one unstable", Plant: lti.TF{Num: lti.Poly{200}, Den: lti.FromRoots([]complex128{3, -4, -20})},
			Period: 0.03, Law: lti.Law{Inner: lead(24, 6, 60, 0.03), Y0: 5}, Dither: 1, Hold: 3, InputNoise: 0.1, SensorNoise: 0.01},
		{Name: "stable", Plant: lti.TF{Num: lti.Poly{10}, Den: lti.Poly{6, 7, 1}}, Period: 0.1,
			Law: lti.Law{Inner: lti.Gain(1, 0.1)}, Dither: 1, Hold: 2, InputNoise: 0.3, SensorNoise: 0.1},
	}
}

// Kinds returns Rigs and those of every other kind of plant that is promised: two unstable poles, two integrators, a zero in
// the right half-plane, delays of whole samples and of part of one, a disturbance of its own colour.
func Kinds() []Rig {
	return append(Rigs(),
		Rig{Name: "two unstable poles", Plant: lti.TF{Num: lti.Poly{160}, Den: lti.FromRoots([]complex128{1, 2.5, -40})}, Period: 0.02,
			Law: lti.Law{Inner: lead(190, 1, 80, 0.02), U0: 1}, Dither: 1, Hold: 3, InputNoise: 0.1, SensorNoise: 0.02},
		Rig{Name: "two integrators", Plant: lti.TF{Num: lti.Poly{30}, Den: lti.Poly{0, 0, 1}}, Period: 0.03,
			Law: lti.Law{Inner: lead(2, 1.2, 20, 0.03), Y0: -2}, Dither: 1, Hold: 4, InputNoise: 0.3, SensorNoise: 0.05},
		Rig{Name: "right-half-plane zero", Plant: lti.TF{Num: lti.Poly{-60, 5}, Den: lti.FromRoots([]complex128{1, -4})}, Period: 0.05,
			Law: lti.Law{Inner: lti.Gain(-0.25, 0.05), U0: 2}, Dither: 1, Hold: 3, InputNoise: 0.3, SensorNoise: 0.1},
		Rig{Name: "delay of three samples", Plant: lti.TF{Num: lti.Poly{3}, Den: lti.Poly{-1.5, 1}, Delay: 0.15}, Period: 0.05,
			Law: lti.Law{Inner: lti.Gain(1, 0.05), Y0: 7}, Dither: 1, Hold: 3, InputNoise: 0.3, SensorNoise: 0.05},
		Rig{Name: "delay of 1.4 samples", Plant: lti.TF{Num: lti.Poly{12}, Den: lti.FromRoots([]complex128{2, -5}), Delay: 0.056}, Period: 0.04,
			Law: lti.Law{Inner: lead(16, 4, 40, 0.04)}, Dither: 1, Hold: 3, InputNoise: 0.3, SensorNoise: 0.03},
		Rig{Name: "coloured disturbance", Plant: lti.TF{Num: lti.Poly{12}, Den: lti.FromRoots([]complex128{2, -5})}, Period: 0.04,
			Law: lti.Law{Inner: lead(16, 4, 40, 0.04), U0: 3}, Dither: 1, Hold: 3, InputNoise: 0.5, SensorNoise: 0.02, Colour: 0.8},
	)
}

// Record simulates n samples of trial k: U[k] acts from Y[k] on. The same seed and trial give the same record.
func (r Rig) Record(n int, seed, trial uint64) (u, y []float64) {
	u, y, _ = r.RecordWithDither(n, seed, trial)
	return u, y
}

// RecordWithDither is Record with the outside signal beside it.
func (r Rig) RecordWithDither(n int, seed, trial uint64) (u, y, dither []float64) {
	rnd := rand.New(rand.NewPCG(seed, trial))
	dither = make([]float64, n)
	input, sensor := make([]float64, n), make([]float64, n)
	level, keep := 0.0, 0.0
	if r.Colour > 0 {
		keep = math.Exp(-r.Colour * r.Period)
	}
	for k := range n {
		if k%r.Hold == 0 {
			level = r.Dither * float64(2*rnd.IntN(2)-1)
		}
		dither[k] = level
		input[k] = math.Sqrt(1-keep*keep) * r.InputNoise * rnd.NormFloat64()
		if k > 0 {
			input[k] += keep * input[k-1]
		}
		sensor[k] = r.SensorNoise * rnd.NormFloat64()
	}
	law := r.Law
	t, err := lti.Run{Plant: r.Plant, Period: r.Period, Law: &law, Steps: n, Dither: dither, InputDisturbance: input,
		Noise: sensor}.Simulate()
	if err != nil {
		panic(err)
	}
	return t.U, t.Y, dither
}

// Truth is the sampled rig as A D y = B D u + C e in powers of z^-1, deviations from the operating point. D is 1 unless the
// disturbance has a colour. B has as many coefficients as A, and one more for each sample of delay, counted up.
type Truth struct {
	A, B, C, D []float64
	Variance   float64 // of e
}

// Truth returns the innovations form: with input noise w/D and sensor noise v, A D y = B D u + B w + A D v, and C e has the
// spectrum of the last two terms, the zeros of C inside the unit circle.
func (r Rig) Truth() Truth {
	n := len(r.Plant.Den) - 1
	s := r.Sampled()
	t := Truth{A: lti.Shift(nil, s.A), D: []float64{1}}
	b := lti.ShiftInput(s.B0, s.B1)
	t.B = append(make([]float64, s.Whole), b[:n+1]...)
	if r.late() > s.Whole {
		t.B = append(t.B, b[n+1])
	}
	w := r.InputNoise
	if r.Colour > 0 {
		keep := math.Exp(-r.Colour * r.Period)
		t.D, w = append(t.D, -keep), w*math.Sqrt(1-keep*keep)
	}
	ad := lti.Poly(t.A).Mul(t.D)
	t.C, t.Variance = spectralFactor(len(ad)-1, [][]float64{scaled(b, w), scaled(ad, r.SensorNoise)})
	return t
}

// Sampled is the plant with its derivatives.
func (r Rig) Sampled() lti.Delta {
	return lti.SampleDelta(r.Plant.Num, r.Plant.Den, r.Plant.Delay, r.Period)
}

// late is the delay in samples, counted up.
func (r Rig) late() int { return int(math.Ceil(r.Plant.Delay/r.Period - 1e-9)) }

func scaled(p []float64, k float64) []float64 {
	out := make([]float64, len(p))
	for i, v := range p {
		out[i] = k * v
	}
	return out
}

// spectralFactor returns the monic polynomial c of degree n with zeros inside the unit circle, and the variance, with
// variance c(z) c(1/z) equal to the sum of p(z) p(1/z).
func spectralFactor(n int, terms [][]float64) (c []float64, variance float64) {
	cov := make([]float64, n+1) // coefficient of z^j and z^-j
	for _, p := range terms {
		for j := range cov {
			for i := 0; i+j < len(p); i++ {
				cov[j] += p[i] * p[i+j]
			}
		}
	}
	laurent := make(lti.Poly, 2*n+1) // times z^n
	for j, v := range cov {
		laurent[n+j], laurent[n-j] = v, v
	}
	roots := laurent.Roots()
	slices.SortStableFunc(roots, func(a, b complex128) int {
		switch x, y := cmplx.Abs(a), cmplx.Abs(b); {
		case x < y:
			return -1
		case x > y:
			return 1
		}
		return 0
	})
	// A pair at one radius near n cannot be split: roots come in pairs z, 1/conj(z).
	asc := lti.FromRoots(roots[:n])
	c = make([]float64, n+1)
	sum := 0.0
	for i := range c {
		c[i] = asc[n-i]
		sum += c[i] * c[i]
	}
	return c, cov[0] / sum
}

// Poles returns the sampled plant's poles in the z-plane: exp(p Period) for each p.
func (r Rig) Poles() []complex128 {
	p := r.Plant.Poles()
	for i, v := range p {
		p[i] = cmplx.Exp(v * complex(r.Period, 0))
	}
	return p
}

// Factors returns the factors of the sampled plant's denominator by which an estimate is graded, in powers of δ = z - 1: one
// for each real pole, and one of degree two for each complex pair and each two equal poles, whose sum and product are
// regular where the poles themselves are not.
func (r Rig) Factors() []lti.Poly {
	var out []lti.Poly
	poles := r.Plant.Poles()
	for i := 0; i < len(poles); i++ {
		pair := []complex128{poles[i]}
		if i+1 < len(poles) && (imag(poles[i]) != 0 || poles[i] == poles[i+1]) {
			i++
			pair = append(pair, poles[i])
		}
		for j, s := range pair {
			h := s * complex(r.Period, 0)
			pair[j] = cmplx.Exp(h/2) * (cmplx.Exp(h/2) - cmplx.Exp(-h/2))
		}
		out = append(out, lti.FromRoots(pair))
	}
	return out
}
