package lti

import (
	"fmt"
	"math"
	"math/cmplx"
)

// snap is the part of a period within which a delay counts as whole: rounding of tau/period, not a modelling choice.
const snap = 1e-12

// sampled is a plant behind a zero-order hold, without the chain of whole delays:
//
//	x[k+1] = phi x[k] + g0 w[k-delay] + g1 w[k-delay-1],   y[k] = c x[k] + d0 w[k-delay] + d1 w[k-delay-1]
type sampled struct {
	chain
	period, frac float64 // frac: the delay's part of a period, s
	delay        int     // whole periods
	phi, g0, g1  []float64
	d0, d1       float64
}

func (p *sampled) n() int { return len(p.b) }

// taps is the number of past inputs that the plant remembers.
func (p *sampled) taps() int {
	if p.frac > 0 {
		return p.delay + 1
	}
	return p.delay
}

func sample(g TF, period float64) (*sampled, error) {
	if !(period > 0) || math.IsInf(period, 0) {
		return nil, fmt.Errorf("sampling a plant: period %g s is not positive", period)
	}
	if !(g.Delay >= 0) || math.IsInf(g.Delay, 0) {
		return nil, fmt.Errorf("sampling a plant: delay %g s is negative", g.Delay)
	}
	for _, p := range []Poly{g.Num, g.Den} {
		for _, v := range p {
			if math.IsNaN(v) || math.IsInf(v, 0) {
				return nil, fmt.Errorf("sampling a plant: coefficient %g is not finite", v)
			}
		}
	}
	if g.Den.Degree() < 0 {
		return nil, fmt.Errorf("sampling a plant: denominator is zero")
	}
	if g.RelDegree() < 0 && g.Num.Degree() >= 0 {
		return nil, fmt.Errorf("sampling a plant: %d zeros on %d poles, more zeros than poles", g.Num.Degree(), g.Den.Degree())
	}
	p := &sampled{chain: newChain(g.Num, g.Den), period: period}
	q := g.Delay / period
	if q > 1e6 {
		return nil, fmt.Errorf("sampling a plant: delay %g s is more than a million periods of %g s", g.Delay, period)
	}
	whole := math.Floor(q)
	switch f := q - whole; {
	case f <= snap*math.Max(1, q):
	case 1-f <= snap*math.Max(1, q):
		whole++
	default:
		p.frac = g.Delay - whole*period
	}
	p.delay = int(whole)
	if p.frac > 0 {
		p.d1 = p.d
		phi1, gam1 := p.hold(period - p.frac)
		_, gam2 := p.hold(p.frac)
		p.phi, _ = p.hold(period)
		p.g0 = gam1
		p.g1 = make([]float64, p.n())
		matvec(p.g1, phi1, gam2)
	} else {
		p.d0 = p.d
		p.phi, p.g0 = p.hold(period)
		p.g1 = make([]float64, p.n())
	}
	for _, v := range p.phi {
		if math.IsNaN(v) || math.IsInf(v, 0) {
			return nil, fmt.Errorf("sampling a plant: a pole grows beyond all numbers within one period of %g s", period)
		}
	}
	return p, nil
}

// hold returns e^{A t} and its integral times B (Van Loan, Computing integrals involving the matrix exponential,
// IEEE Trans. Automatic Control 23 (1978) 395-404).
func (p *sampled) hold(t float64) (phi, gamma []float64) {
	n := p.n()
	m := n + 1
	a := make([]float64, m*m)
	for i := range n {
		for j := range n {
			a[i*m+j] = p.a[i*n+j] * t
		}
		a[i*m+n] = p.b[i] * t
	}
	e := expm(a, m)
	phi, gamma = make([]float64, n*n), make([]float64, n)
	for i := range n {
		copy(phi[i*n:], e[i*m:i*m+n])
		gamma[i] = e[i*m+n]
	}
	return phi, gamma
}

func matvec(dst, a, x []float64) {
	n := len(x)
	for i := range dst {
		s := 0.0
		for j, v := range a[i*n : i*n+n] {
			s += v * x[j]
		}
		dst[i] = s
	}
}

// ZOH returns the exact sampled equivalent of g behind a zero-order hold: y[k] is the output at k period, the input
// is u[k] from that instant to the next. A delay of any length is exact (Åström & Wittenmark, Computer-Controlled
// Systems, 3rd ed. 1997, sec. 2.3): the states are those of g, then u[k-1], u[k-2], … as far as the delay reaches.
func ZOH(g TF, period float64) (SS, error) {
	p, err := sample(g, period)
	if err != nil {
		return SS{}, err
	}
	n, t := p.n(), p.taps()
	m := n + t
	a, b, c := make([]float64, m*m), make([]float64, m), make([]float64, m)
	d := 0.0
	for i := range n {
		copy(a[i*m:], p.phi[i*n:i*n+n])
	}
	copy(c, p.c)
	// put adds the effect of the input lag samples ago on state (or on the output).
	put := func(lag int, g []float64, dd float64) {
		if lag == 0 {
			copy(b, g)
			d += dd
			return
		}
		if lag > t { // a whole delay: g1 is zero
			return
		}
		for i := range n {
			a[i*m+n+lag-1] += g[i]
		}
		c[n+lag-1] += dd
	}
	put(p.delay, p.g0, p.d0)
	put(p.delay+1, p.g1, p.d1)
	for i := range t {
		if i == 0 {
			b[n] = 1
		} else {
			a[(n+i)*m+n+i-1] = 1
		}
	}
	return newSS(a, b, c, d, period), nil
}

// ZOHTF returns the sampled equivalent in powers of z^-1, poles e^{p period}. See DTF for what its coefficients can
// hold at fast sampling.
func ZOHTF(g TF, period float64) (DTF, error) {
	p, err := sample(g, period)
	if err != nil {
		return DTF{}, err
	}
	poles := g.Den.Roots()
	for i, s := range poles {
		poles[i] = cmplx.Exp(s * complex(period, 0))
	}
	den := FromRoots(pairUp(poles)).reversed()
	n := p.n()
	// Response to one unit held over one period, less its whole delay.
	length := n + 1
	if p.frac > 0 {
		length++
	}
	h := make([]float64, length)
	h[0] = p.d0
	x, next := append([]float64(nil), p.g0...), make([]float64, n)
	for k := 1; k < length; k++ {
		for i, v := range x {
			h[k] += p.c[i] * v
		}
		matvec(next, p.phi, x)
		x, next = next, x
		if k == 1 {
			h[k] += p.d1
			for i, v := range p.g1 {
				x[i] += v
			}
		}
	}
	num := make(Poly, p.delay+length)
	for k := range length {
		for j := 0; j <= min(k, n); j++ {
			num[p.delay+k] += den[j] * h[k-j]
		}
	}
	return DTF{Num: num, Den: den, Period: period}, nil
}

// ZOHResponse returns the frequency response of ZOH(g, period) as a function of omega, rad/s: evaluated in powers of
// z - 1, which keeps its digits at fast sampling, and without the states of the delay. It may be called concurrently.
func ZOHResponse(g TF, period float64) (func(omega float64) complex128, error) {
	p, err := sample(g, period)
	if err != nil {
		return nil, err
	}
	den := deltaDen(g, period)
	num0 := p.deltaNum(p.g0, den).Add(den.Scale(p.d0))
	var num1 Poly
	if p.frac > 0 {
		num1 = p.deltaNum(p.g1, den).Add(den.Scale(p.d1))
	}
	return func(omega float64) complex128 {
		sin, cos := math.Sincos(omega * period / 2)
		d := complex(-2*sin*sin, 2*sin*cos) // z - 1 without cancellation
		num := num0.Eval(d)
		if num1 != nil {
			num += num1.Eval(d) * cmplx.Conj(1+d) // z^-1
		}
		v := num / den.Eval(d)
		if p.delay > 0 {
			sin, cos := math.Sincos(omega * period * float64(p.delay))
			v *= complex(cos, -sin)
		}
		return v
	}, nil
}

// deltaNum returns the numerator of c (delta I - (phi - I))^-1 v over den, in powers of delta.
func (p *sampled) deltaNum(v []float64, den Poly) Poly {
	n := p.n()
	num, markov := make(Poly, n), make([]float64, n)
	x, next := append([]float64(nil), v...), make([]float64, n)
	for i := range n {
		for k, c := range p.c {
			markov[i] += c * x[k]
		}
		matvec(next, p.phi, x)
		for k := range x {
			next[k] -= x[k]
		}
		x, next = next, x
		for j := 0; j <= i; j++ {
			num[n-1-i] += den[n-j] * markov[i-j]
		}
	}
	return num
}
