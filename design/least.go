package design

import (
	"math"
	"math/cmplx"
	"slices"
	"sort"

	"gonum.org/v1/gonum/mat"

	"steadyrig/fit/lti"
)

// LeastPeakDelay returns the least peak of |S| and of |T| for one real unstable pole p (rad/s) and a delay tau (s):
// e^{p tau}. It is 1 without an unstable pole.
//
// Source: Åström (2000), Limitations on control system performance, Eur. J. Control 6, 2-20; Skogestad &
// Postlethwaite, Multivariable Feedback Control, ch. 5.
func LeastPeakDelay(p, tau float64) float64 { return math.Exp(math.Max(0, p) * tau) }

// LeastPeakZero returns the least peak of |S| and of |T| for a real unstable pole p and a real right-half-plane
// zero z (rad/s): (z + p)/|z - p|.
//
// Source: Freudenberg & Looze (1985), IEEE Trans. Automatic Control 30, 555-565; Zames & Francis (1983).
func LeastPeakZero(p, z float64) float64 { return (z + p) / math.Abs(z-p) }

// leastPeakZeros returns the least peak of |S| and of |T| for unstable poles and right-half-plane zeros, any number of
// them, and a delay tau. By the maximum modulus |S| is at least the product of |z + p|/|z - p| over all poles at each
// zero, and |T| that over all zeros at each pole times e^{p tau}; the least peaks of S and T are equal.
//
// Source: Freudenberg & Looze (1985); Skogestad & Postlethwaite (2005), Multivariable Feedback Control, sec. 5.3.
func leastPeakZeros(poles, zeros []complex128, tau float64) float64 {
	factor := func(a, b complex128) float64 { return cmplx.Abs(a+cmplx.Conj(b)) / cmplx.Abs(a-b) }
	peak := 1.0
	for _, z := range zeros {
		s := 1.0
		for _, p := range poles {
			s *= factor(z, p)
		}
		peak = math.Max(peak, s)
	}
	for _, p := range poles {
		t := math.Exp(real(p) * tau)
		for _, z := range zeros {
			t *= factor(p, z)
		}
		peak = math.Max(peak, t)
	}
	return peak
}

// LeastUndershoot returns the least that the output moves the wrong way, as a share of its final value, when it settles
// within band from the time settling (s) on, for a plant with a real zero z > 0 (rad/s): (1 - band)/(e^{z settling} - 1).
// No controller, no second degree of freedom and no prefilter changes that: Y(z) = G(z) U(z) = 0 for every input that
// is bounded. A delay of the plant is taken off settling by the caller.
//
// Source: Middleton (1991), Trade-offs in linear control system design, Automatica 27, 281-292; Seron, Braslavsky &
// Goodwin (1997), Fundamental Limitations in Filtering and Control, sec. 1.3.
func LeastUndershoot(z, settling, band float64) float64 {
	if settling <= 0 {
		return math.Inf(1)
	}
	return (1 - band) / math.Expm1(z*settling)
}

// leastOvershoot returns the least overshoot, as a share of the step, of any loop u = K (r - y) about a sampled plant
// with a real pole z > 1 that settles within band from sample n on: its error obeys sum e[k] z^-k = 0, being 1 until
// the first effect, at least 1 - authority sum |g| while the input's limits hold it back, and then at least minus the
// overshoot, or minus the band. authority is the largest |u| per unit of step. +Inf if n is not past the first effect.
//
// Source: the sampled form of Middleton (1991), Automatica 27, 281-292; Seron, Braslavsky & Goodwin (1997), sec. 1.3.
func leastOvershoot(pl *plant, z, n, band, authority float64) float64 {
	steps := int(math.Ceil(n - 1e-9))
	if steps <= pl.lag {
		return math.Inf(1)
	}
	const far = 2             // the output could be there: an overshoot of 1
	var least, upTo []float64 // the error's least value, falling; the sum of it z^-k over the samples before
	reach, total, w := 0.0, 0.0, 1.0
	for _, g := range pl.impulse(min(steps, 4000)) {
		if reach += authority * math.Abs(g); reach > far {
			break
		}
		least, upTo = append(least, 1-reach), append(upTo, total)
		total, w = total+w*(1-reach), w/z
	}
	upTo = append(upTo, total)
	rest := func(k int) float64 { return math.Pow(z, -float64(k)) / (1 - 1/z) } // sum of z^-j from j = k on
	sum := func(over float64) float64 {
		k := sort.Search(len(least), func(i int) bool { return least[i] <= -over })
		return upTo[k] - over*(rest(k)-rest(steps)) - math.Min(over, band)*rest(steps)
	}
	lo, hi := 0.0, 1.0
	for sum(hi) > 0 && hi < 1e6 {
		hi *= 2
	}
	for range 50 {
		if mid := (lo + hi) / 2; sum(mid) > 0 {
			lo = mid
		} else {
			hi = mid
		}
	}
	return hi
}

// leastKickPeak returns the least that the output moves after a unit step at the plant's input: the first answer to it
// comes after twice the delay, and until then the plant is alone.
func leastKickPeak(pl *plant) float64 {
	peak, y := 0.0, 0.0
	for _, g := range pl.impulse(2 * pl.lag) {
		y += g
		peak = math.Max(peak, math.Abs(y))
	}
	return peak
}

// impulse returns the first n samples of the plant's response to one sample of input.
func (pl *plant) impulse(n int) []float64 {
	g := make([]float64, n)
	if n > pl.lag {
		g[pl.lag] = 1
		lti.DTF{Num: pl.num, Den: pl.den}.Filter(g[pl.lag:], g[pl.lag:])
	}
	return g
}

// LeastPeakBandwidth returns the least peak of |S| when S may differ from 1 only up to the rate wa (rad/s):
// exp(pi sum(p)/wa) with sum(p) the sum of the real parts of the unstable poles. In a sampled loop wa is at most
// the Nyquist frequency, and the bound is the product of the unstable |z|.
//
// Source: Stein (2003), Respect the unstable, IEEE Control Systems Mag. 23(4), 12-25; sampled: Sung & Hara (1988),
// Int. J. Control 48, 2429-2439.
func LeastPeakBandwidth(sum, wa float64) float64 { return math.Exp(math.Pi * math.Max(0, sum) / wa) }

// LeastEffort returns the least peak of |K S|, input per output, for a plant with one real unstable pole: the
// reciprocal of |G| at the pole, the pole mirrored into the left half-plane and the delay kept.
//
// Source: Glover (1986), IEEE Trans. Automatic Control 31, 1138-1144; Havre & Skogestad (2003), Int. J. Control 76.
// Several unstable poles or none: NaN.
func LeastEffort(g lti.TF) float64 {
	poles := g.Poles()
	p, rest := math.NaN(), make([]complex128, 0, len(poles))
	for _, s := range poles {
		switch {
		case real(s) <= 0:
			rest = append(rest, s)
		case imag(s) != 0 || !math.IsNaN(p):
			return math.NaN()
		default:
			p = real(s)
		}
	}
	if math.IsNaN(p) {
		return math.NaN()
	}
	den := g.Den.Trim()
	at := lti.FromRoots(append(rest, complex(-p, 0))).Scale(den[len(den)-1])
	x := complex(p, 0)
	return cmplx.Abs(at.Eval(x)/g.Num.Eval(x)) * math.Exp(p*g.Delay)
}

// LeastEnergy returns the least integral of u^2 that brings x' = p x + b u from x0 to rest: 2 p x0^2/b^2.
//
// Source: Kwakernaak & Sivan (1972), Linear Optimal Control Systems, sec. 3.4.
func LeastEnergy(p, b, x0 float64) float64 { return 2 * math.Max(0, p) * x0 * x0 / (b * b) }

// Reach returns the open interval of x from which x' = p x + b u, p > 0, b != 0, can be brought back with
// lo <= u <= hi, lo < 0 < hi, after a delay tau: the ends are -b hi/p and -b lo/p times e^{-p tau}, in order.
//
// Source: Hu & Lin (2001), Control Systems with Actuator Saturation; Stein (2003).
func Reach(p, b, lo, hi, tau float64) (from, to float64) {
	k := b / p * math.Exp(-p*tau)
	return math.Min(-k*lo, -k*hi), math.Max(-k*lo, -k*hi)
}

// StronglyStabilisable reports whether a stable controller stabilises the plant: between every two real zeros in the
// closed right half-plane, infinity counted for a strictly proper plant, lies an even number of real poles. The delay
// is left out of account.
//
// Source: Youla, Bongiorno & Lu (1974), Automatica 10, 159-173 (parity interlacing).
func StronglyStabilisable(g lti.TF) bool {
	var zeros []float64
	for _, z := range g.Zeros() {
		if imag(z) == 0 && real(z) >= 0 {
			zeros = append(zeros, real(z))
		}
	}
	slices.Sort(zeros)
	if g.RelDegree() > 0 {
		zeros = append(zeros, math.Inf(1))
	}
	for i := 1; i < len(zeros); i++ {
		between := 0
		for _, p := range g.Poles() {
			if imag(p) == 0 && real(p) > zeros[i-1] && real(p) < zeros[i] {
				between++
			}
		}
		if between%2 == 1 {
			return false
		}
	}
	return true
}

// mostPick is the largest delay in samples for which several poles are looked at together: the work grows with its
// cube.
const mostPick = 40

// leastPeak returns the least peak |S| over all stabilising controllers of a sampled plant with d >= 1 samples
// from the input to its first effect, its poles and zeros outside the unit circle given in z. One real pole and no
// zero: |z|^d exactly. For d > 1 and several poles it is less than the product of their |z|^d, which is the value
// for d = 1 only.
func leastPeak(d int, poles, zeros []complex128) float64 {
	switch len(poles) {
	case 0:
		return 1
	case 1:
		// T = z^-d times the Blaschke product of the zeros times a stable factor, and T = 1 at the pole; S and T
		// have equal least peaks.
		z := poles[0]
		peak := math.Pow(cmplx.Abs(z), float64(d))
		for _, q := range zeros {
			peak *= cmplx.Abs((1 - cmplx.Conj(q)*z) / (z - q))
		}
		return peak
	}
	if d > mostPick {
		// Less delay, or one pole and no zero, has a lower limit, which holds all the same.
		peak := leastPeakPick(mostPick, poles, zeros)
		for _, z := range poles {
			peak = math.Max(peak, math.Pow(cmplx.Abs(z), float64(d)))
		}
		return peak
	}
	return leastPeakPick(d, poles, zeros)
}

// leastPeakPick is leastPeak for any number of poles above none.
//
// S = B g, B the Blaschke product of the poles in w = 1/z; S = 1 to order d at w = 0 and at the zeros fixes the
// first d Taylor coefficients of g and its values there. The least norm of such a g is that of the adjoint of
// multiplication by g on the span of w^0 … w^(d-1) and the Szegő kernels at the zeros (Nevanlinna-Pick and
// Carathéodory-Fejér in one: Sarason (1967), Trans. AMS 127, 179-203).
func leastPeakPick(d int, poles, zeros []complex128) float64 {
	blaschke := func(w complex128) complex128 {
		b := complex(1, 0)
		for _, z := range poles {
			a := 1 / z
			b *= (w - a) / (1 - cmplx.Conj(a)*w)
		}
		return b
	}
	// Taylor coefficients of 1/B = prod (1 - conj(a) w)/(w - a).
	num, den := []complex128{1}, []complex128{1}
	for _, z := range poles {
		a := 1 / z
		num = mulC(num, []complex128{1, -cmplx.Conj(a)})
		den = mulC(den, []complex128{-a, 1})
	}
	g := make([]complex128, d)
	for i := range g {
		if i < len(num) {
			g[i] = num[i]
		}
		for j := 1; j <= i && j < len(den); j++ {
			g[i] -= den[j] * g[i-j]
		}
		g[i] = complex(real(g[i]/den[0]), 0) // poles come in pairs
	}
	n := d + len(zeros)
	gram, x := make([]complex128, n*n), make([]complex128, n*n) // gram[i,j] = <e_j, e_i>
	for j := range n {
		for i := range n {
			switch {
			case i < d && j < d:
				if i == j {
					gram[i*n+j] = 1
				}
				if i <= j {
					x[i*n+j] = cmplx.Conj(g[j-i])
				}
			case i < d: // <k_b, w^i> = conj(b)^i
				gram[i*n+j] = cmplx.Pow(cmplx.Conj(1/zeros[j-d]), complex(float64(i), 0))
			case j < d:
				gram[i*n+j] = cmplx.Pow(1/zeros[i-d], complex(float64(j), 0))
			default:
				gram[i*n+j] = 1 / (1 - cmplx.Conj(1/zeros[j-d])/zeros[i-d])
			}
		}
		if j >= d {
			x[j*n+j] = cmplx.Conj(1 / blaschke(1/zeros[j-d]))
		}
	}
	return operatorNorm(x, gram, n)
}

func mulC(p, q []complex128) []complex128 {
	r := make([]complex128, len(p)+len(q)-1)
	for i, a := range p {
		for j, b := range q {
			r[i+j] += a * b
		}
	}
	return r
}

// operatorNorm returns the norm of the operator with matrix x in a basis with the given Gram matrix. A complex
// matrix is handled as a real one of twice the size, which doubles each singular value.
func operatorNorm(x, gram []complex128, n int) float64 {
	isComplex := func(v complex128) bool { return imag(v) != 0 }
	size := n
	if slices.ContainsFunc(x, isComplex) || slices.ContainsFunc(gram, isComplex) {
		size = 2 * n
	}
	realOf := func(c []complex128) *mat.Dense {
		r := mat.NewDense(size, size, nil)
		for i := range n {
			for j := range n {
				v := c[i*n+j]
				r.Set(i, j, real(v))
				if size > n {
					r.Set(n+i, n+j, real(v))
					r.Set(i, n+j, -imag(v))
					r.Set(n+i, j, imag(v))
				}
			}
		}
		return r
	}
	gr := realOf(gram)
	sym := mat.NewSymDense(size, nil)
	for i := range size {
		for j := i; j < size; j++ {
			sym.SetSym(i, j, (gr.At(i, j)+gr.At(j, i))/2)
		}
	}
	var eig mat.EigenSym
	if !eig.Factorize(sym, true) {
		return math.NaN()
	}
	values := eig.Values(nil)
	var vec mat.Dense
	eig.VectorsTo(&vec)
	// Directions that hardly exist (a zero far out is nearly one more sample of delay) are left out: the result is
	// then a little low, never high.
	keep := 0
	for keep < size && values[keep] < 1e-10*values[size-1] {
		keep++
	}
	m := size - keep
	half, inv := mat.NewDense(size, m, nil), mat.NewDense(size, m, nil)
	for c := range m {
		s := math.Sqrt(values[keep+c])
		for r := range size {
			half.Set(r, c, vec.At(r, keep+c)*s)
			inv.Set(r, c, vec.At(r, keep+c)/s)
		}
	}
	var t, op mat.Dense
	t.Mul(realOf(x), inv)
	op.Mul(half.T(), &t)
	var svd mat.SVD
	if !svd.Factorize(&op, mat.SVDNone) {
		return math.NaN()
	}
	return svd.Values(nil)[0]
}

// leastNoise returns the least standard deviation of the input, over all stabilising controllers of a sampled
// plant, per unit standard deviation of white noise on the measured output. den and num are in powers of z^-1.
//
// K S = B g, with B as in leastPeak; T = 1 at the unstable poles fixes g there, and the least H2 norm of such a g
// is by Szegő kernels (the same argument as for the least peak: Havre & Skogestad (2003); for one pole in
// continuous time it is the least-energy law with its pole mirrored, Kwakernaak & Sivan (1972)).
func leastNoise(num, den lti.Poly, poles []complex128) float64 {
	n := len(poles)
	if n == 0 {
		return 0
	}
	// The stable factor of den: divide the unstable ones out.
	rest := den
	for _, z := range poles {
		if imag(z) == 0 {
			rest = divide(rest, lti.Poly{1, -real(z)})
		} else if imag(z) > 0 {
			rest = divide(rest, lti.Poly{1, -2 * real(z), real(z)*real(z) + imag(z)*imag(z)})
		}
	}
	m, c := make([]complex128, n*n), make([]complex128, n)
	for i, z := range poles {
		w := 1 / z
		k := complex(1, 0)
		for _, y := range poles {
			a := 1 / y
			k *= -a / (1 - cmplx.Conj(a)*w)
		}
		c[i] = rest.Eval(w) / (num.Eval(w) * k)
		for j, y := range poles {
			m[i*n+j] = 1 / (1 - cmplx.Conj(1/y)*w)
		}
	}
	x := append([]complex128(nil), c...)
	if !lti.SolveComplex(m, x) {
		return math.NaN()
	}
	sum := 0.0
	for i := range x {
		sum += real(cmplx.Conj(c[i]) * x[i])
	}
	return math.Sqrt(math.Max(0, sum))
}

// divide returns the quotient of p by a divisor in powers of z^-1 with leading 1; the remainder is dropped.
func divide(p, by lti.Poly) lti.Poly {
	r := append(lti.Poly(nil), p...)
	n := len(p) - len(by) + 1
	if n < 1 {
		return lti.Poly{1}
	}
	for i := range n {
		for j := 1; j < len(by); j++ {
			if i+j < len(r) {
				r[i+j] -= r[i] * by[j]
			}
		}
	}
	return r[:n]
}
