package fit

import (
	"cmp"
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// Seed is a place to start a search from: where the plant's poles may lie, and
// perhaps what the noise zeros may be.
type Seed struct {
	Poles []complex128 // rad/s
	Noise []complex128 // zeros of C in the z-plane; nil: unknown
}

// Reduce returns for each order 1 … maxOrder a seed from a long ARX model: its
// predictor, a stable system driven by input and output, is cut to low order
// through the singular values of its Hankel matrix, and the plant's poles are
// those of the predictor with its own output fed back. The ratio of scales
// weighs output against input; that of their deviations is usual.
//
// The reduction is Ho and Kalman's, on the predictor as in Chiuso, The role of
// vector autoregressive modeling in predictor-based subspace identification,
// Automatica 43 (2007) 1034-1048, without its weighting by the data.
func (m *ARX) Reduce(maxOrder int, scaleU, scaleY, period float64) []Seed {
	length := max(len(m.A), len(m.B)) - 1
	rows := max(2, (length+1)/2)
	cols := max(1, length+1-rows)
	markov := func(k int) (y, u float64) { // impulse response of the predictor at lag k
		if k < len(m.A) {
			y = -m.A[k] * scaleY
		}
		if k < len(m.B) {
			u = m.B[k] * scaleU
		}
		return y, u
	}
	h := mat.NewDense(rows, 2*cols, nil)
	for i := range rows {
		for j := range cols {
			y, u := markov(i + j + 1)
			h.Set(i, 2*j, y)
			h.Set(i, 2*j+1, u)
		}
	}
	var svd mat.SVD
	if !svd.Factorize(h, mat.SVDThin) {
		return nil
	}
	var left, right mat.Dense
	svd.UTo(&left)
	svd.VTo(&right)
	sv := svd.Values(nil)
	var seeds []Seed
	for n := 1; n <= maxOrder && n < rows && n <= len(sv); n++ {
		if !(sv[n-1] > 1e-12*sv[0]) {
			break
		}
		upper, lower := left.Slice(0, rows-1, 0, n), left.Slice(1, rows, 0, n)
		var f mat.Dense
		if f.Solve(upper, lower) != nil {
			continue
		}
		// In the basis of the left singular vectors C is their first row, and
		// the input column is S V'.
		closed := mat.DenseCopyOf(&f)
		for i := range n {
			k := sv[i] * right.At(0, i) / scaleY
			for j := range n {
				closed.Set(i, j, closed.At(i, j)+k*left.At(0, j))
			}
		}
		s := Seed{Noise: eigenvalues(&f)}
		for _, z := range eigenvalues(closed) {
			s.Poles = append(s.Poles, continuous(z, period))
		}
		if len(s.Poles) == n && len(s.Noise) == n {
			s.Poles = paired(s.Poles)
			seeds = append(seeds, s)
		}
	}
	return seeds
}

func eigenvalues(a mat.Matrix) []complex128 {
	var e mat.Eigen
	if !e.Factorize(a, mat.EigenNone) {
		return nil
	}
	return e.Values(nil)
}

// continuous returns a pole in the s-plane whose sample is near z. A z on the
// negative real axis has no real counterpart; a fast one stands in for it.
func continuous(z complex128, period float64) complex128 {
	const fast = 3 // decay within a sample of what stands in
	if cmplx.Abs(z) < math.Exp(-fast) {
		return complex(-fast/period, 0)
	}
	if math.Abs(imag(z)) < 1e-12*cmplx.Abs(z) {
		if real(z) < 0 {
			return complex(-fast/period, 0)
		}
		return complex(math.Log(real(z))/period, 0)
	}
	return cmplx.Log(z) / complex(period, 0)
}

// paired drops the imaginary part of roots that have no conjugate.
func paired(r []complex128) []complex128 {
	for i, a := range r {
		if imag(a) == 0 {
			continue
		}
		found := false
		for j, b := range r {
			if i != j && cmplx.Abs(a-cmplx.Conj(b)) < 1e-9*cmplx.Abs(a) {
				found = true
			}
		}
		if !found {
			r[i] = complex(real(a), 0)
		}
	}
	return r
}

// NoiseRatios are the start values for the ratio of input disturbance to
// sensor noise that Start tries, as variances relative to equal power at the
// output of the sampled plant's numerator.
var NoiseRatios = []float64{1e-4, 1e-2, 1}

// Start turns a seed into a full model of the given shape with the delay
// given: the numerator by linear least squares with poles and noise fixed. A
// seed without noise zeros, or with ratio > 0, gets those of white sensor
// noise plus a white disturbance at the input whose variance is ratio times
// as large relative to the numerators; the plant's unstable factor then
// appears mirrored, as it must. Extra colour poles start at colour.
// The slowest poles give way to integrators. It returns nil where no finite
// model results.
func (p *Predictor) Start(shape Shape, seed Seed, delay, ratio float64, colour []complex128) *Prediction {
	poles := append([]complex128(nil), seed.Poles...)
	if len(poles) != shape.Poles || len(colour) != shape.Colour {
		panic(badShape)
	}
	if shape.Integrators > 0 {
		slices.SortStableFunc(poles, func(a, b complex128) int { return cmp.Compare(cmplx.Abs(a), cmplx.Abs(b)) })
		clear(poles[:shape.Integrators])
		poles = paired(poles)
	}
	den := lti.FromRoots(poles)
	s := p.newSearch(shape, timeScale(den, p.Period))
	defer s.done()
	m := &Prediction{Shape: shape, Num: make(lti.Poly, shape.Zeros+1), Den: den, Delay: delay, Period: p.Period}
	m.Num[0] = 1
	m.D = delayPoly(colour)
	var noise []complex128
	switch {
	case ratio > 0 || seed.Noise == nil:
		noise = p.whiteNoiseZeros(den, delay, ratio)
	default:
		noise = append(noise, seed.Noise...)
	}
	for len(noise) < shape.Poles+shape.Colour {
		// A colour pole that starts with its own zero changes nothing yet.
		noise = append(noise, 0)
		if k := len(noise) - 1 - shape.Poles; k >= 0 && k < len(colour) {
			noise[len(noise)-1] = colour[k] * 0.8
		}
	}
	if len(noise) > shape.Poles+shape.Colour {
		noise = noise[:shape.Poles+shape.Colour]
	}
	m.C = delayPoly(noise)
	x := s.scaled(m)
	for i := range x.num {
		x.num[i] = 0
	}
	// The errors are linear in the numerator: one undamped step is exact.
	_, q, ok := s.errorsAt(x)
	if !ok {
		return nil
	}
	h, g := s.normal(q, shape.Zeros+1)
	b := make([]float64, shape.Zeros+1)
	if !solveScaled(b, h, g, 1e-12) {
		return nil
	}
	for i := range b {
		x.num[i] = -b[i]
	}
	if _, _, ok := s.errorsAt(x); !ok {
		return nil
	}
	return s.result(x, 0, false)
}

// whiteNoiseZeros returns the zeros inside the unit circle of the spectral
// factor of A A* + ratio B B*, B the numerator of 1/den with unit sum of
// squares like A's.
func (p *Predictor) whiteNoiseZeros(den lti.Poly, delay, ratio float64) []complex128 {
	n := len(den) - 1
	w0 := timeScale(den, p.Period)
	scaled := make(lti.Poly, n+1)
	for i := range scaled {
		scaled[i] = den[i] * math.Pow(w0, float64(i-n))
	}
	d := lti.SampleDeltaValues(lti.Poly{1}, scaled, math.Max(0, delay)*w0, p.Period*w0)
	a := lti.Shift(nil, d.A)
	b := lti.ShiftInput(d.B0, d.B1)[1:]
	norm := func(x []float64) float64 {
		var s float64
		for _, v := range x {
			s += v * v
		}
		return s
	}
	k := ratio * norm(d.A[n:]) / norm([]float64{sum(b)})
	// Correlations of A and B: r[j] multiplies z^j + z^-j.
	r := make(lti.Poly, 2*n+1)
	for j := -n; j <= n; j++ {
		var v float64
		for i := range n + 1 {
			if i+j >= 0 && i+j <= n {
				v += a[i] * a[i+j]
				if i < len(b) && i+j < len(b) {
					v += k * b[i] * b[i+j]
				}
			}
		}
		r[n+j] = v
	}
	var inside []complex128
	for _, z := range r.Roots() {
		if cmplx.Abs(z) < 1 {
			inside = append(inside, z)
		}
	}
	if ratio == 0 || len(inside) != n {
		// Exact for sensor noise alone, and the fallback: mirror A's roots.
		inside = inside[:0]
		for _, s := range den.Roots() {
			z := cmplx.Exp(s * complex(p.Period, 0))
			if cmplx.Abs(z) > 1 {
				z = 1 / cmplx.Conj(z)
			}
			inside = append(inside, z)
		}
	}
	return inside
}

func sum(x []float64) float64 {
	var s float64
	for _, v := range x {
		s += v
	}
	return s
}
