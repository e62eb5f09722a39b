package lti

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"
)

// NuGap returns the nu-gap of two plants of one input and output and the frequency (rad/s) of the largest chordal
// distance, 1 where the winding condition fails (Vinnicombe, Frequency domain uncertainty and the graph topology, IEEE
// Trans. Automatic Control 38 (1993) 1371-1383). With equal delays the winding condition is the count of roots of
// n1(s) n2(-s) + d1(s) d2(-s) in the open right half-plane, which must be deg d2; with different ones it is the turn
// of 1 + p2(-s) p1(s) along the imaginary axis.
//
// The distance depends on the units of input and output: scale first.
func NuGap(p1, p2 TF) (gap, at float64, err error) {
	for _, p := range []TF{p1, p2} {
		if p.Num.Degree() < 0 || p.Den.Degree() < 0 || p.RelDegree() < 0 {
			return 0, 0, fmt.Errorf("measuring the distance of two plants: improper or zero plant")
		}
	}
	ok, err := winds(p1, p2)
	if err != nil {
		return 0, 0, err
	}
	// Chordal distance on the sphere from numerators and denominators, finite at poles on the axis.
	chord := func(w float64) complex128 {
		s := complex(0, w)
		n1, d1 := p1.Num.Eval(s)*cmplx.Exp(-s*complex(p1.Delay, 0)), p1.Den.Eval(s)
		n2, d2 := p2.Num.Eval(s)*cmplx.Exp(-s*complex(p2.Delay, 0)), p2.Den.Eval(s)
		den := math.Hypot(cmplx.Abs(n1), cmplx.Abs(d1)) * math.Hypot(cmplx.Abs(n2), cmplx.Abs(d2))
		return (n1*d2 - n2*d1) / complex(den, 0)
	}
	// All that happens does so near poles, zeros and crossovers of the two: the roots of n n~ ± d d~.
	lo, hi := math.Inf(1), 0.0
	for _, p := range []TF{p1, p2} {
		for _, q := range []Poly{p.Num, p.Den, p.Num.Mul(p.Num.Mirror()).Add(p.Den.Mul(p.Den.Mirror()))} {
			for _, r := range q.Roots() {
				if m := cmplx.Abs(r); m > 0 {
					lo, hi = math.Min(lo, m), math.Max(hi, m)
				}
			}
		}
		if p.Delay > 0 {
			hi = math.Max(hi, 1/p.Delay)
		}
	}
	if hi == 0 {
		lo, hi = 1, 1
	}
	if c := cmplx.Abs(chord(0)); !math.IsNaN(c) {
		gap = c
	}
	if c, w := Peak(chord, lo*1e-3, hi*1e3); c > gap {
		gap, at = c, w
	}
	if !ok {
		gap = 1
	}
	return math.Min(gap, 1), at, nil
}

// SampledNuGap is NuGap for sampled plants of one period. With x = z^-1, P = b/a in powers of x and b*, a* their values at
// 1/x, the winding condition is that b2* b1 + a2* a1 goes round 0 no more than back on the unit circle: divided by the
// spectral factors of |a|^2 + |b|^2, which have neither poles nor zeros in the disc and so do not turn, it is the inner
// product of the two graphs (ibid., sec. 3). Delays and poles on the circle need no care of their own.
func SampledNuGap(p1, p2 DTF) (gap, at float64, err error) {
	chord := func(x complex128) complex128 {
		b1, a1, b2, a2 := p1.Num.Eval(x), p1.Den.Eval(x), p2.Num.Eval(x), p2.Den.Eval(x)
		return (b1*a2 - b2*a1) / complex(hypot(a1, b1)*hypot(a2, b2), 0)
	}
	gap, at = sampledPeak(chord, p1, p2)
	inner := func(w float64) complex128 {
		x := cmplx.Exp(complex(0, -w*p1.Period))
		return cmplx.Conj(p2.Num.Eval(x))*p1.Num.Eval(x) + cmplx.Conj(p2.Den.Eval(x))*p1.Den.Eval(x)
	}
	lo, hi := sampledRange(p1, p2)
	turn, before := 0.0, 0.0
	for _, w := range Grid(lo, hi, 2+int(perDecade*math.Log10(hi/lo))) {
		from := before
		part, err := turnAlong(func(s complex128) complex128 { return inner(real(s)) },
			func(t float64) complex128 { return complex(from+t*(w-from), 0) })
		if errors.Is(err, errThrough) {
			return 1, at, nil
		}
		if err != nil {
			return 0, 0, fmt.Errorf("measuring the distance of two plants: %w", err)
		}
		turn += part
		before = w
	}
	if math.Abs(turn) > math.Pi/2 {
		return 1, at, nil
	}
	return math.Min(gap, 1), at, nil
}

// winds reports whether the winding condition holds for p1 against p2.
func winds(p1, p2 TF) (bool, error) {
	if p1.Delay == p2.Delay {
		f := p1.Num.Mul(p2.Num.Mirror()).Add(p1.Den.Mul(p2.Den.Mirror())).Trim()
		// Leading coefficients that cancel to rounding are zero: |n n~ + d d~| at infinity.
		if len(f) == 0 {
			return false, nil
		}
		right := 0
		for _, r := range f.Roots() {
			switch {
			case math.Abs(real(r)) <= 1e-9*cmplx.Abs(r) || r == 0:
				return false, nil // a root on the axis: the two are 1 apart there
			case real(r) > 0:
				right++
			}
		}
		return right == p2.Den.Degree(), nil
	}
	if p1.RelDegree()+p2.RelDegree() == 0 {
		return false, fmt.Errorf("measuring the distance of two plants: different delays and no roll-off")
	}
	// wno(1 + p2~ p1) + eta(p1) - eta(p2) - eta0(p2) = 0, the contour passing poles on the axis on their right;
	// p2~(s) = p2(-s) shares the axis poles of p2.
	var poles []complex128
	count := 0
	for _, p := range p1.Poles() {
		poles = append(poles, p)
		if real(p) > axisWidth(p) {
			count++
		}
	}
	end := 1.0
	for _, p := range p2.Poles() {
		poles = append(poles, -p)
		if real(p) >= -axisWidth(p) {
			count--
		}
	}
	for _, p := range poles {
		end = math.Max(end, 10*cmplx.Abs(p))
	}
	l := func(s complex128) complex128 { return p1.At(s) * p2.At(-s) }
	end, err := farRadius(l, end)
	if err != nil {
		return false, err
	}
	turn, err := turnUpAxis(func(s complex128) complex128 { return 1 + l(s) }, poles, end)
	if errors.Is(err, errThrough) {
		return false, nil // 1 + p2~ p1 = 0: the two are 1 apart there
	}
	if err != nil {
		return false, fmt.Errorf("measuring the distance of two plants: %w", err)
	}
	// Up the axis is clockwise round the right half-plane, so the turn counts poles less zeros; the winding number of
	// the condition counts zeros less poles.
	wno := -int(math.Round(turn / math.Pi))
	return wno+count == 0, nil
}
