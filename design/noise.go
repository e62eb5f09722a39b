package design

import (
	"math"
	"math/cmplx"
)

// noise is what moves the output beside the input, as the fit saw it: v = H e in y = G u + v. For an unstable plant
// H has the plant's unstable poles, so v alone grows without bound; what reaches the input through a closed loop,
//
//	u = -K S v,  K S = K1 (1 + K2) A / (D A + N B)
//
// does not, because A cancels in A H = C/D. shape is |A H|^2 times the variance of e, at each frequency.
type noise struct {
	shape []float64
	// Where H fits white sensor noise plus disturbances at the plant input, its parts (standard deviations per
	// sample); else split is false and the whole of v counts as sensor noise.
	split               bool
	sensor, disturbance float64
}

// splitMisfit is the largest relative misfit, root mean square over the frequencies, at which a split into sensor
// noise and input disturbance is believed.
const splitMisfit = 0.15

// splitNoise fits |A H|^2 var(e) = sensor^2 |A|^2 + disturbance^2 |B|^2 (+ the same with a slow input disturbance)
// with parts that are not negative. The right-hand side is the spectral factorisation read backwards: the C of an
// ARMAX form is the spectral factor of that sum (Åström & Wittenmark, Computer-Controlled Systems, 3rd ed., ch. 11).
func (p *problem) splitNoise() noise {
	h, sd := p.model.NoiseShape(), p.model.Noise.SD
	n := len(p.omega)
	out := noise{shape: make([]float64, n)}
	top := math.Pi / h.Period
	for j := n - 1; j >= 0; j-- {
		w := math.Min(p.omega[j], top)
		v := cmplx.Abs(h.At(w)) * cmplx.Abs(p.nominal.a[j]) * sd
		if out.shape[j] = v * v; j < n-1 && (math.IsNaN(v) || math.IsInf(v, 0)) {
			out.shape[j] = out.shape[j+1] // a pole of H on the circle, where A is zero too
		}
	}
	if h.Period != p.period {
		p.warnings = append(p.warnings, "the noise was identified at another sample period than the loop's: its spectrum is carried over up to the lower Nyquist frequency and held from there")
	}
	// Columns of the fit: white sensor noise, white input disturbance, and input disturbances through a lag.
	lags := []float64{0, 30, 10, 3, 1, 0.3, 0.1} // rate in units of 1/settling; 0: white
	best := math.Inf(1)
	weight := make([]float64, n) // by the width of a frequency's neighbourhood on the logarithmic scale, capped
	for j := 1; j < n; j++ {
		weight[j] = math.Min(0.1, (p.omega[j]-p.omega[j-1])/p.omega[j])
	}
	for _, lag := range lags {
		var s11, s12, s22, r1, r2, total float64
		x, y := make([]float64, n), make([]float64, n)
		for j := 1; j < n; j++ {
			q := out.shape[j]
			if !(q > 0) {
				continue
			}
			a, b := cmplx.Abs(p.nominal.a[j]), cmplx.Abs(p.nominal.b[j])
			x[j], y[j] = a*a/q, b*b/q
			if lag > 0 {
				rho := math.Exp(-lag / p.spec.settling * p.period)
				c := (1 - rho) / cmplx.Abs(1-complex(rho, 0)*p.z1[j])
				y[j] *= c * c
			}
			s11 += weight[j] * x[j] * x[j]
			s12 += weight[j] * x[j] * y[j]
			s22 += weight[j] * y[j] * y[j]
			r1 += weight[j] * x[j]
			r2 += weight[j] * y[j]
			total += weight[j]
		}
		if !(total > 0 && s11 > 0 && s22 > 0) {
			break
		}
		// Two unknowns: the interior solution, or one of the two edges.
		type try struct{ a, b float64 }
		tries := []try{{r1 / s11, 0}, {0, r2 / s22}}
		if det := s11*s22 - s12*s12; det > 1e-12*s11*s22 {
			tries = append(tries, try{(r1*s22 - r2*s12) / det, (r2*s11 - r1*s12) / det})
		}
		for _, t := range tries {
			if t.a < 0 || t.b < 0 {
				continue
			}
			miss := 0.0
			for j := 1; j < n; j++ {
				e := 1 - t.a*x[j] - t.b*y[j]
				miss += weight[j] * e * e
			}
			if miss = math.Sqrt(miss / total); miss < 0.999*best {
				best = miss
				out.sensor, out.disturbance = math.Sqrt(t.a), math.Sqrt(t.b)
			}
		}
	}
	out.split = best <= splitMisfit
	if !out.split {
		out.sensor, out.disturbance = 0, 0
	}
	return out
}

// sensorPSD is the variance density of the sensor's part of v at frequency j on a plant, times |A|^2.
func (q *noise) sensorPSD(j int, a complex128) float64 {
	if q.split {
		return q.sensor * q.sensor * (real(a)*real(a) + imag(a)*imag(a))
	}
	return q.shape[j]
}
