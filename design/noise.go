package design

import (
	"math"
	"math/cmplx"
	"math/rand/v2"

	"gonum.org/v1/gonum/dsp/fourier"
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
	parts               []inputPart // of the disturbance
	drawn               float64     // the sensor's deviation without the rounding that a run adds by itself
}

// An inputPart is white noise at the plant input through a lag of 1/rate; rate 0: white. sd is what comes out.
type inputPart struct{ rate, sd float64 }

// splitMisfit is the largest relative misfit, root mean square over the frequencies, at which a split into sensor
// noise and input disturbance is believed.
const splitMisfit = 0.15

// splitNoise fits |A H|^2 var(e) = sensor^2 |A|^2 + disturbance^2 |B|^2 |lags|^2 with parts that are not negative. The right-hand side is the spectral factorisation read backwards: the C of an
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
	// Columns of the fit, each over the shape: white sensor noise, white input disturbance, and input disturbances
	// through lags of 1/rate. First without lags, which two numbers describe; then with all, whose mixture stands
	// for any colour that falls with the frequency.
	weight := make([]float64, n) // by a frequency's share of the logarithmic scale
	for j := 1; j < n; j++ {
		if out.shape[j] > 0 {
			weight[j] = math.Min(0.1, (p.omega[j]-p.omega[j-1])/p.omega[j])
		}
	}
	column := func(rate float64, sensor bool) []float64 {
		c := make([]float64, n)
		for j := 1; j < n; j++ {
			if weight[j] == 0 {
				continue
			}
			v := cmplx.Abs(p.nominal.b[j])
			if sensor {
				v = cmplx.Abs(p.nominal.a[j])
			} else if rate > 0 {
				rho := math.Exp(-rate * p.period)
				v *= math.Sqrt(1-rho*rho) / cmplx.Abs(1-complex(rho, 0)*p.z1[j])
			}
			c[j] = v * v / out.shape[j]
		}
		return c
	}
	columns, rates := [][]float64{column(0, true), column(0, false)}, []float64{0}
	for range 2 {
		x, misfit := nonNegative(columns, weight)
		if misfit <= splitMisfit {
			out.split, out.sensor = true, math.Sqrt(x[0])
			for i, v := range x[1:] {
				if out.disturbance += v; v > 0 {
					out.parts = append(out.parts, inputPart{rates[i], math.Sqrt(v)})
				}
			}
			out.disturbance = math.Sqrt(out.disturbance)
			break
		}
		for rate := 0.05 / p.spec.settling; rate < 1/p.period; rate *= 3 {
			columns, rates = append(columns, column(rate, false)), append(rates, rate)
		}
	}
	return out
}

// nonNegative minimises the weighted sum of (1 - sum x_i columns_i)^2 over x_i >= 0 by cyclic descent, which for a
// convex quadratic with bounds converges to the minimum (Tseng 2001, J. Optim. Theory Appl. 109, 475-494), and
// returns the root mean square of what is left.
func nonNegative(columns [][]float64, weight []float64) (x []float64, misfit float64) {
	m := len(columns)
	x = make([]float64, m)
	dot := func(a, b []float64) float64 {
		s := 0.0
		for j, w := range weight {
			s += w * a[j] * b[j]
		}
		return s
	}
	ones := make([]float64, len(weight))
	for j := range ones {
		ones[j] = 1
	}
	total := dot(ones, ones)
	if !(total > 0) {
		return x, math.Inf(1)
	}
	gram, right := make([]float64, m*m), make([]float64, m)
	for i := range m {
		right[i] = dot(columns[i], ones)
		for k := range m {
			gram[i*m+k] = dot(columns[i], columns[k])
		}
	}
	for range 3000 {
		moved := 0.0
		for i := range m {
			g := right[i]
			for k := range m {
				g -= gram[i*m+k] * x[k]
			}
			if gram[i*m+i] > 0 {
				next := math.Max(0, x[i]+g/gram[i*m+i])
				moved += math.Abs(next-x[i]) * math.Sqrt(gram[i*m+i])
				x[i] = next
			}
		}
		if moved < 1e-9*math.Sqrt(total) {
			break
		}
	}
	left := 0.0
	for j, w := range weight {
		e := 1.0
		for i := range m {
			e -= x[i] * columns[i][j]
		}
		left += w * e * e
	}
	return x, math.Sqrt(left / total)
}

// draw fills sensor noise and input disturbance at a sample period; only where the noise is split.
func (q *noise) draw(rnd *rand.Rand, period float64, sensor, input []float64) {
	for k := range sensor {
		sensor[k], input[k] = q.drawn*rnd.NormFloat64(), 0
	}
	for _, part := range q.parts {
		rho := 0.0
		if part.rate > 0 {
			rho = math.Exp(-part.rate * period)
		}
		w, fresh := part.sd*rnd.NormFloat64(), part.sd*math.Sqrt(1-rho*rho)
		for k := range input {
			input[k] += w
			w = rho*w + fresh*rnd.NormFloat64()
		}
	}
}

// addRounding adds to the identified noise what the steps of input and output bring. Rounding to steps of q acts as
// white noise of variance q^2/12 where the signal moves by more than a step (Widrow 1961, Trans. AIEE 79, 555-568; the
// long runs of the proof see where it does not). What the log's own steps brought is in the identified noise already;
// runs, which round by themselves, draw without it.
func (p *problem) addRounding() {
	q := &p.noise
	logged := math.Min(p.model.Evidence.Resolution.Output, p.rounds.Output)
	fresh := (p.rounds.Output*p.rounds.Output - logged*logged) / 12
	q.drawn = math.Sqrt(math.Max(0, q.sensor*q.sensor-logged*logged/12))
	q.sensor = math.Sqrt(q.sensor*q.sensor + fresh)
	for j := range q.shape {
		a, b := cmplx.Abs(p.nominal.a[j]), cmplx.Abs(p.nominal.b[j])
		q.shape[j] += a*a*fresh + b*b*p.rounds.Input*p.rounds.Input/12
	}
}

// whole fills dst with w of A y = B u + w: Gaussian noise of density shape, all that the fit saw beside the input,
// made of sines of random amplitude at the frequencies of a Fourier transform of at least so many samples.
func (p *problem) whole(dst []float64, rnd *rand.Rand) {
	n := 2
	for n < len(dst) {
		n *= 2
	}
	half := make([]complex128, n/2+1)
	j := 1
	for i := range half {
		w := 2 * math.Pi * float64(i) / (float64(n) * p.period)
		for j < len(p.omega)-1 && p.omega[j] < w {
			j++
		}
		at := math.Min(1, (w-p.omega[j-1])/(p.omega[j]-p.omega[j-1]))
		density := p.noise.shape[j-1] + at*(p.noise.shape[j]-p.noise.shape[j-1])
		c := complex(rnd.NormFloat64(), rnd.NormFloat64()) * complex(math.Sqrt(density/float64(2*n)), 0)
		if i == 0 || i == n/2 {
			c = complex(real(c)*math.Sqrt2, 0)
		}
		half[i] = c
	}
	copy(dst, fourier.NewFFT(n).Sequence(nil, half))
}

// onMode is the standard deviation of what the disturbance takes of the input on the way of a mode x+ = a x + b (u + d),
// a > 1: whoever brings the mode back has to make up for (1 - 1/a) sum a^-k d[k], which a constant d makes d. For white
// noise through a lag, of correlation rho from sample to sample, the variance of that sum is a geometric series.
func (q *noise) onMode(a, period float64) float64 {
	v := 0.0
	for _, part := range q.parts {
		rho := 0.0
		if part.rate > 0 {
			rho = math.Exp(-part.rate * period)
		}
		v += part.sd * part.sd * (1 - 1/a) * (1 + rho/a) / ((1 + 1/a) * (1 - rho/a))
	}
	return math.Sqrt(v)
}

// sensorPSD is the variance density of the sensor's part of v at frequency j on a plant, times |A|^2.
func (q *noise) sensorPSD(j int, a complex128) float64 {
	if q.split {
		return q.sensor * q.sensor * (real(a)*real(a) + imag(a)*imag(a))
	}
	return q.shape[j]
}
