package design

import (
	"math"
	"math/cmplx"
	"slices"

	"gonum.org/v1/gonum/dsp/fourier"

	"steadyrig/fit/lti"
)

// leastPeakS returns the least peak of |S| at the plant input over all controllers that stabilise the nominal sampled
// plant and keep the input's standard deviation due to sensor noise within noise (units of the input; +Inf: no limit).
// It is known to lie in [lo, hi]: no controller gets below lo, some get to hi. Both are +Inf where noise is below the
// least that physics allows.
//
// What it leaves free, and why. Seen from the plant both loops are one controller K1 (1 + K2), and any stabilising one
// counts. The reference's path is a second, free parameter (Youla, Jabr & Bongiorno (1976), Modern Wiener-Hopf design
// of optimal controllers II, IEEE Trans. Automatic Control 21, 319-338; Vidyasagar (1985), Control System Synthesis,
// sec. 5.6): on the nominal plant every response to the reference that one stabilising controller has, any other can
// have too. Overshoot, settling and input of the step, which the pair keeps, bind no feedback. An integrator costs
// nothing in the limit, as S = 0 at one frequency does not move the least peak. So the noise is what binds. The
// kick, and how fast an offset goes away, are left out, which makes the yardstick the sterner; see leastPeakHolding.
// |S| at the input does not depend on units: the scaling by ranges is the margins' affair alone.
func (p *problem) leastPeakS(noise float64) (lo, hi float64) {
	if math.IsInf(noise, 1) {
		poles, zeros := p.nominal.unstableInQ(p.period)
		least := leastPeakInQ(p.nominal.lag, poles, zeros)
		return least, least
	}
	return p.newYard().least(noise, nil)
}

// unstableInQ returns the places in q = z^-1 of the poles and zeros outside the unit circle.
func (pl *plant) unstableInQ(period float64) (poles, zeros []complex128) {
	for _, s := range pl.tf.Poles() {
		if real(s) > 0 {
			poles = append(poles, cmplx.Exp(-s*complex(period, 0)))
		}
	}
	for _, z := range (lti.DTF{Num: pl.num, Den: pl.den, Period: period}).Zeros() {
		if cmplx.Abs(z) > 1+1e-6 {
			zeros = append(zeros, 1/z)
		}
	}
	return poles, zeros
}

// leastPeakHolding is the lower end of leastPeakS for controllers that hold slow disturbances as well as a law does:
// up to the frequency of the law's own peak their |S| is no larger than the law's, give or take heldWell.
func (p *problem) leastPeakHolding(noise float64, law *lti.Law) float64 {
	y := p.newYard()
	size := func(w float64) float64 { return cmplx.Abs(p.sensitivity(&p.nominal, law, w)) }
	at, peak := 0.0, 0.0
	for _, w := range p.omega {
		if v := size(w); v > peak {
			at, peak = w, v
		}
	}
	hold := make([]float64, y.n)
	for j, w := range y.omega {
		hold[j] = math.Inf(1)
		if w < at {
			hold[j] = math.Hypot(heldWell, size(w))
		}
	}
	lo, _ := y.least(noise, hold)
	return lo
}

// heldWell is the |S| below which no further holding is asked for.
const heldWell = 0.1

// sensitivity is S of a law about a plant at omega.
func (p *problem) sensitivity(pl *plant, law *lti.Law, omega float64) complex128 {
	x := cmplx.Exp(complex(0, -omega*p.period))
	d, k := lawAt(law, x)
	da := d * lti.Poly(pl.den).Eval(x)
	b := lti.Poly(pl.num).Eval(x) * cmplx.Exp(complex(0, -omega*p.period*float64(pl.lag)))
	return da / (da + k*b)
}

// A yard is the convex problem behind leastPeakS, on a grid of the unit circle. With q = z^-1, B_p and B_z the Blaschke
// products of the plant's unstable poles and zeros and d its delay in samples, a controller stabilises if and only if
//
//	S = 0 at the poles, S = 1 at the zeros and to order d at q = 0:   1 - S = b k,  k = B_z q^d h + B_p B_z q^d f
//
// with b the plant's numerator, its unstable zeros mirrored; h is fixed by the poles and f is any analytic function of
// the disc, the Youla parameter up to an outer factor. No basis has to be chosen for it. The variance of the input
// is the mean of v |k|^2, since K S = (1 - S) A/B. Poles and zeros on the circle, which the least peak does not feel,
// and those nearer to it than the grid can tell, are passed over.
//
// The points are even in the angle of x, q = (x + a)/(1 + a x), a map of the disc onto itself (analytic functions stay
// so): close at low frequencies, and no further apart at high ones than the delay's phase allows.
type yard struct {
	n      int
	omega  []float64 // rad/s, from both halves of the circle
	b      []complex128
	k0     []complex128 // B_z q^d h
	theta  []complex128 // B_p B_z q^d
	v      []float64
	fft    *fourier.CmplxFFT
	buf, o []complex128
	r      []float64
}

const (
	yardFine   = 50      // points for the slowest and for the fastest thing on the circle
	yardPoints = 1 << 15 // at most
	yardRounds = 150
	yardGap    = 0.005 // hi/lo - 1 at which the search ends
	yardFloor  = 1e-6  // least multiplier
	yardLeap   = 4     // largest growth of a multiplier in one round
)

func (p *problem) newYard() *yard {
	pl := &p.nominal
	// slow: rate per sample of the slowest thing that S has to tell apart; fast: phase of the delay per sample.
	slow, fast := 20*p.omega[1], float64(pl.lag)
	for _, s := range pl.tf.Poles() {
		if real(s) > 0 {
			slow = math.Min(slow, real(s))
		}
	}
	slow *= p.period
	stretch := math.Min(1, math.Sqrt(fast*slow)) // d theta/d phi at theta = 0, its inverse at pi
	n := 256
	for n < yardPoints && (float64(n) < yardFine*fast/stretch || float64(n) < yardFine*stretch/slow) {
		n *= 2
	}
	y := &yard{n: n, fft: fourier.NewCmplxFFT(n), buf: make([]complex128, n), o: make([]complex128, n), r: make([]float64, n)}
	a := complex((1-stretch)/(1+stretch), 0)
	inside := func(q complex128) bool { return cmplx.Abs((q-a)/(1-a*q)) < 1-20/float64(n) }
	// What lies on the circle, or nearer to it than the grid can tell, is passed over.
	near := func(q complex128) bool { return !inside(q) }
	poles, zeros := pl.unstableInQ(p.period)
	poles, zeros = slices.DeleteFunc(poles, near), slices.DeleteFunc(zeros, near)
	var mirrored []complex128
	gain := complex(pl.num[0], 0)
	for _, z := range (lti.DTF{Num: pl.num, Den: pl.den, Period: p.period}).Zeros() {
		if cmplx.Abs(z) > 1 {
			gain *= z
			z = 1 / cmplx.Conj(z)
		}
		mirrored = append(mirrored, z)
	}
	m := newMalmquist(poles)
	h := m.one()
	m.divide(h, pl.lag, zeros)
	for _, z := range mirrored {
		m.over(h, 1, -z)
	}
	for j := range n {
		phi := 2 * math.Pi * (float64(j) + 0.5) / float64(n)
		x := cmplx.Exp(complex(0, -phi))
		q := (x + a) / (1 + a*x)
		g := cmplx.Pow(q, complex(float64(pl.lag), 0)) * blaschke(zeros, q)
		b := gain
		for _, z := range mirrored {
			b *= 1 - z*q
		}
		y.b = append(y.b, b)
		y.k0 = append(y.k0, g*m.at(h, q)/gain)
		y.theta = append(y.theta, g*blaschke(poles, q))
		t := math.Tan(phi / 2)
		w := 2 * math.Atan(stretch*math.Abs(t)) / p.period
		y.omega = append(y.omega, w)
		slope := stretch * (1 + t*t) / (1 + stretch*stretch*t*t) // d theta/d phi
		y.v = append(y.v, slope*p.sensorDensity(w, lti.Poly(pl.den).Eval(q)))
	}
	return y
}

// sensorDensity is noise.sensorPSD at a frequency off the problem's grid.
func (p *problem) sensorDensity(omega float64, a complex128) float64 {
	if p.noise.split {
		return p.noise.sensorPSD(0, a)
	}
	j, _ := slices.BinarySearch(p.omega, omega)
	j = min(max(j, 2), len(p.omega)-1)
	t := math.Log(omega/p.omega[j-1]) / math.Log(p.omega[j]/p.omega[j-1])
	return math.Pow(p.noise.shape[j-1], 1-t) * math.Pow(p.noise.shape[j], t)
}

func blaschke(roots []complex128, q complex128) complex128 {
	b := complex(1, 0)
	for _, r := range roots {
		b *= (q - r) / (1 - cmplx.Conj(r)*q)
	}
	return b
}

// A malmquist is the space of the functions e_1 … e_n, e_k = norm_k/(1 - conj(a_k) q) times the Blaschke product of the
// poles before a_k: what remains of an analytic function when B_p times another is taken off. Multiplication by q is a
// triangular matrix there with the poles on its diagonal, the compressed shift (Sarason (1967), Generalized interpolation
// in H-infinity, Trans. AMS 127, 179-203; Nikolski (1986), Treatise on the Shift Operator, Springer). To be 1 at the
// poles, multiple ones with their derivatives, thus becomes a linear equation in which nothing is divided by the
// distance of two poles.
type malmquist struct {
	poles []complex128
	norm  []float64
	shift []complex128 // n×n, row-major, lower triangular
}

func newMalmquist(poles []complex128) *malmquist {
	n := len(poles)
	m := &malmquist{poles, make([]float64, n), make([]complex128, n*n)}
	for k, a := range poles {
		m.norm[k] = math.Sqrt(1 - real(a)*real(a) - imag(a)*imag(a))
	}
	for k, a := range poles {
		m.shift[k*n+k] = a
		between := complex(m.norm[k], 0)
		for i := k + 1; i < n; i++ {
			m.shift[i*n+k] = between * complex(m.norm[i], 0)
			between *= -cmplx.Conj(poles[i])
		}
	}
	return m
}

// one returns the coefficients of the constant 1.
func (m *malmquist) one() []complex128 {
	c := make([]complex128, len(m.poles))
	before := complex(1, 0)
	for k, a := range m.poles {
		c[k] = cmplx.Conj(complex(m.norm[k], 0) * before)
		before *= -a
	}
	return c
}

// over replaces c by c/(x + y q).
func (m *malmquist) over(c []complex128, x, y complex128) {
	n := len(c)
	for k := range n {
		for i := range k {
			c[k] -= y * m.shift[k*n+i] * c[i]
		}
		c[k] /= x + y*m.shift[k*n+k]
	}
}

// times replaces c by (x + y q) c.
func (m *malmquist) times(c []complex128, x, y complex128) {
	n := len(c)
	for k := n - 1; k >= 0; k-- {
		sum := x * c[k]
		for i := range k + 1 {
			sum += y * m.shift[k*n+i] * c[i]
		}
		c[k] = sum
	}
}

// divide replaces c by c/(q^d B_z(q)).
func (m *malmquist) divide(c []complex128, d int, zeros []complex128) {
	for range d {
		m.over(c, 0, 1)
	}
	for _, z := range zeros {
		m.times(c, 1, -cmplx.Conj(z))
		m.over(c, -z, 1)
	}
}

// at returns the function at q.
func (m *malmquist) at(c []complex128, q complex128) complex128 {
	sum, before := complex(0, 0), complex(1, 0)
	for k, a := range m.poles {
		sum += c[k] * complex(m.norm[k], 0) * before / (1 - cmplx.Conj(a)*q)
		before *= (q - a) / (1 - cmplx.Conj(a)*q)
	}
	return sum
}

// filter multiplies the coefficients of x^k, k = 0, 1 … n/2-1, and those of all the others by factors, in place.
func (y *yard) filter(f []complex128, constant, analytic, other float64) {
	y.fft.Sequence(y.buf, f)
	for k := range y.buf {
		c := other
		switch {
		case k == 0:
			c = constant
		case k < y.n/2:
			c = analytic
		}
		y.buf[k] *= complex(c/float64(y.n), 0)
	}
	y.fft.Coefficients(f, y.buf)
}

// quadratic fills k so that the mean of w |S|^2 + l v |k|^2, S = 1 - b k, is least, and returns that mean: with o the
// spectral factor of r = w |b|^2 + l v (from the cepstrum; Oppenheim & Schafer (1975), Digital Signal Processing, ch. 7)
// it is that of w l v/r and of the part of conj(theta) o (w conj(b)/r - k0) that no analytic f can reach (Wiener).
func (y *yard) quadratic(k []complex128, w []float64, l float64) float64 {
	for j, v := range y.v {
		b := y.b[j]
		y.r[j] = w[j]*(real(b)*real(b)+imag(b)*imag(b)) + l*v
		y.o[j] = complex(math.Log(y.r[j])/2, 0)
	}
	y.filter(y.o, 1, 2, 0)
	for j, b := range y.b {
		y.o[j] = cmplx.Exp(y.o[j])
		k[j] = cmplx.Conj(y.theta[j]) * y.o[j] * (complex(w[j]/y.r[j], 0)*cmplx.Conj(b) - y.k0[j])
	}
	y.filter(k, 0, 0, 1)
	sum := 0.0
	for j, b := range y.b {
		sum += w[j]*l*y.v[j]/y.r[j] + real(k[j])*real(k[j]) + imag(k[j])*imag(k[j])
		k[j] = complex(w[j]/y.r[j], 0)*cmplx.Conj(b) - y.theta[j]*k[j]/y.o[j]
	}
	return sum / float64(y.n)
}

// least solves min g with |S| <= min(g, hold), nil: g, and input noise <= limit.
//
// Any multipliers give a lower bound, since the sum of squares weighted by them can be minimised exactly (Lagrange).
// They are found by Lawson's rule: each grows as its own constraint is broken (Lawson (1961), Contributions to the theory
// of linear least maximum approximations, thesis, UCLA; Ellacott & Williams (1976), SIAM J. Numer. Anal. 13, 35-44, for
// complex functions). The upper bound is the S found, moved towards that of the least noise until it keeps the limit;
// with hold it is not one.
func (y *yard) least(limit float64, hold []float64) (lo, hi float64) {
	n := float64(y.n)
	u, w := make([]float64, y.n), make([]float64, y.n) // multipliers, in units of the bound squared and as weights of |S|^2
	for j := range u {
		u[j] = 1
	}
	k, quiet := make([]complex128, y.n), make([]complex128, y.n)
	mu := 1.0 // multiplier of the noise, likewise
	y.quadratic(quiet, w, 1)
	if y.noise(quiet) > limit {
		return math.Inf(1), math.Inf(1)
	}
	g := 1.5 // the present guess
	bound := func(j int) (b float64, free bool) {
		if hold != nil && hold[j] < g {
			return hold[j], false
		}
		return g, true
	}
	lo, hi = 1, math.Inf(1) // S = 1 at q = 0, and the maximum of |S| is on the circle
	for range yardRounds {
		open, held := 0.0, 0.0
		for j, v := range u {
			b, free := bound(j)
			w[j] = v / (b * b)
			if free {
				open += v / n
			} else {
				held += v / n
			}
		}
		least := y.quadratic(k, w, mu/(limit*limit))
		ratio := math.Sqrt(least / (open + held + mu))
		if !(ratio > 0) || math.IsInf(ratio, 1) {
			break // the weights have left the range of numbers: what is known stays
		}
		lo = math.Max(lo, g*math.Sqrt(math.Max(0, (least-held-mu)/open)))
		noise, share := y.noise(k), 0.0
		if noise > limit {
			share = y.share(k, quiet, limit)
		}
		noise /= limit * ratio
		mu = math.Max(yardFloor, mu*math.Pow(noise, lawson(noise)))
		peak, broken := 0.0, 0.0
		for j, v := range k {
			b, free := bound(j)
			if e := cmplx.Abs(1-y.b[j]*v) / (b * ratio); e > 0 {
				u[j] = math.Max(yardFloor, u[j]*math.Min(yardLeap, math.Pow(e, lawson(e))))
			}
			size := cmplx.Abs(1 - y.b[j]*(v+complex(share, 0)*(quiet[j]-v)))
			if free {
				peak = math.Max(peak, size)
			} else {
				broken = math.Max(broken, size/b-1)
			}
		}
		smooth(u)
		hi = math.Min(hi, peak)
		if hi <= lo*(1+yardGap) && broken <= yardGap {
			break
		}
		g *= math.Sqrt(ratio)
	}
	return lo, math.Max(lo, hi)
}

// lawson is the power with which a multiplier follows its constraint. Lawson's is 1; with 2 for those to be let go and
// 3 for those to be taken up it converges in a third of the steps, from 6 on it does not.
func lawson(excess float64) float64 {
	if excess > 1 {
		return 3
	}
	return 2
}

// smooth averages neighbours on the circle. A bound by multipliers that the grid does not resolve would be none.
func smooth(u []float64) {
	before, first := u[len(u)-1], u[0]
	for j, v := range u {
		after := first
		if j+1 < len(u) {
			after = u[j+1]
		}
		u[j] = (before + 2*v + after) / 4
		before = v
	}
}

// noise is the standard deviation of the input.
func (y *yard) noise(k []complex128) float64 {
	sum := 0.0
	for j, v := range k {
		sum += y.v[j] * (real(v)*real(v) + imag(v)*imag(v))
	}
	return math.Sqrt(sum / float64(y.n))
}

// share returns the least t >= 0 at which k + t (quiet - k) has the input noise limit.
func (y *yard) share(k, quiet []complex128, limit float64) float64 {
	var a, b, c float64 // of a t^2 + 2 b t + c
	for j, v := range k {
		d := quiet[j] - v
		a += y.v[j] * (real(d)*real(d) + imag(d)*imag(d))
		b += y.v[j] * (real(d)*real(v) + imag(d)*imag(v))
		c += y.v[j] * (real(v)*real(v) + imag(v)*imag(v))
	}
	c -= limit * limit * float64(y.n)
	return math.Min(1, c/(-b+math.Sqrt(math.Max(0, b*b-a*c))))
}
