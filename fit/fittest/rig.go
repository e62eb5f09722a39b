package fittest

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Rig is a plant of known truth in closed loop, with an outside signal added to the input, white noise held at the
// input and white noise on the sensor: all are invented.
type Rig struct {
	Name        string
	Plant       lti.TF // no delay
	Period      float64
	Law         lti.Law
	Dither      float64 // amplitude of the random binary signal added to the input
	Hold        int     // samples for which each of its values stays
	InputNoise  float64 // standard deviations
	SensorNoise float64
}

// Rigs returns rigs whose plants have one or two unstable poles, an integrator, or none, over time scales from
// milliseconds to seconds.
func Rigs() []Rig {
	lead := func(gain, zero, pole, period float64) lti.DTF {
		return lti.Tustin(lti.TF{Num: lti.Poly{gain * zero, gain}, Den: lti.Poly{pole, 1}}, period)
	}
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
	level := 0.0
	for k := range n {
		if k%r.Hold == 0 {
			level = r.Dither * float64(2*rnd.IntN(2)-1)
		}
		dither[k] = level
		input[k] = r.InputNoise * rnd.NormFloat64()
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

// Truth is the sampled rig as A y = B u + C e in powers of z^-1, deviations from the operating point.
type Truth struct {
	A, B, C  []float64
	Variance float64 // of e
}

// Truth returns the innovations form: with input noise w and sensor noise v, A y = B u + B w + A v, and C e has the
// spectrum of the last two terms, the zeros of C inside the unit circle.
func (r Rig) Truth() Truth {
	g, err := lti.ZOHTF(r.Plant, r.Period)
	if err != nil {
		panic(err)
	}
	n := len(r.Plant.Den) - 1
	t := Truth{A: pad(g.Den, n), B: pad(g.Num, n)}
	t.C, t.Variance = spectralFactor(n, [][]float64{scaled(t.B, r.InputNoise), scaled(t.A, r.SensorNoise)})
	return t
}

func pad(p []float64, n int) []float64 {
	out := make([]float64, n+1)
	copy(out, p)
	return out
}

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

// PoleBounds returns for each of Poles the Cramér-Rao bound of its estimate from this record, the root of the mean
// square of its distance from the truth, when A, the n coefficients of B with at least one sample of delay, C and a
// constant are unknown: the information matrix is that of the prediction errors' gradient at the truth (Ljung, System
// Identification, 2nd ed. 1999, section 9.4).
func (r Rig) PoleBounds(u, y []float64) []float64 {
	t := r.Truth()
	n := len(t.A) - 1
	rows := len(y)
	du, dy := make([]float64, rows), make([]float64, rows)
	for k := range rows {
		du[k], dy[k] = (u[k] - r.Law.U0), (y[k] - r.Law.Y0)
	}
	uc, yc := divide(du, t.C), divide(dy, t.C)
	e := make([]float64, rows)
	for k := range e {
		for i := 0; i <= n && i <= k; i++ {
			e[k] += t.A[i]*yc[k-i] - t.B[i]*uc[k-i]
		}
	}
	ec := divide(e, t.C)
	grad := mat.NewDense(rows-n, 3*n+1, nil)
	for k := n; k < rows; k++ {
		row := grad.RawRowView(k - n)
		for i := 1; i <= n; i++ {
			row[i-1], row[n+i-1], row[2*n+i-1] = yc[k-i], uc[k-i], ec[k-i]
		}
		row[3*n] = 1
	}
	var qr mat.QR
	qr.Factorize(grad)
	var rr, inv mat.Dense
	qr.RTo(&rr)
	if err := inv.Inverse(rr.Slice(0, 3*n+1, 0, 3*n+1)); err != nil {
		if _, ok := err.(mat.Condition); !ok {
			panic(err)
		}
	}
	poles := r.Poles()
	bounds := make([]float64, len(poles))
	for j, z := range poles {
		// dz/da_i = -z^(n-i) / prod (z - other poles).
		d := complex(-1, 0)
		for k, other := range poles {
			if k != j {
				d /= z - other
			}
		}
		g := make([]complex128, n)
		for i := n - 1; i >= 0; i-- {
			g[i] = d
			d *= z
		}
		sum := 0.0
		for c := range 3*n + 1 {
			var v complex128
			for i := range n {
				v += g[i] * complex(inv.At(i, c), 0)
			}
			sum += real(v)*real(v) + imag(v)*imag(v)
		}
		bounds[j] = math.Sqrt(t.Variance * sum)
	}
	return bounds
}

// divide filters x by 1/c from rest.
func divide(x, c []float64) []float64 {
	out := make([]float64, len(x))
	for k, v := range x {
		for i := 1; i < len(c) && i <= k; i++ {
			v -= c[i] * out[k-i]
		}
		out[k] = v
	}
	return out
}
