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

// leastPeak returns the least peak |S| over all stabilising controllers of a sampled plant with d >= 1 samples
// from the input to its first effect, its poles and zeros outside the unit circle given in z. One real pole and no
// zero: |z|^d exactly. For d > 1 and several poles it is less than the product of their |z|^d, which is the value
// for d = 1 only.
//
// The least norm of a T = q^d B_z h, q = 1/z, that is 1 at the poles is that of the inverse of q^d B_z on their span
// (see malmquist), and S = 1 - T has the same least norm (Sarason (1967), Trans. AMS 127, 179-203).
func leastPeak(d int, poles, zeros []complex128) float64 {
	return leastPeakInQ(d, inverses(poles), inverses(zeros))
}

// leastPeakInQ is leastPeak with poles and zeros given in q = 1/z.
func leastPeakInQ(d int, poles, zeros []complex128) float64 {
	n := len(poles)
	if n == 0 {
		return 1
	}
	m := newMalmquist(poles)
	// A complex matrix is handled as a real one of twice the size, which doubles each singular value.
	inverse := mat.NewDense(2*n, 2*n, nil)
	for i := range n {
		c := make([]complex128, n)
		c[i] = 1
		m.divide(c, d, zeros)
		for k, v := range c {
			inverse.Set(k, i, real(v))
			inverse.Set(n+k, n+i, real(v))
			inverse.Set(k, n+i, -imag(v))
			inverse.Set(n+k, i, imag(v))
		}
	}
	var svd mat.SVD
	if !svd.Factorize(inverse, mat.SVDNone) {
		return math.NaN()
	}
	return svd.Values(nil)[0]
}

func inverses(z []complex128) []complex128 {
	q := make([]complex128, len(z))
	for i, v := range z {
		q[i] = 1 / v
	}
	return q
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
