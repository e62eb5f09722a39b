package ident

import (
	"cmp"
	"math"
	"math/cmplx"
	"math/rand/v2"
	"slices"

	"gonum.org/v1/gonum/mat"
	"gonum.org/v1/gonum/stat/distuv"

	"steadyrig/fit/lti"
)

// z95 is the two-sided 95 % quantile of the normal distribution.
const z95 = 1.959963984540054

// apart is how many standard deviations of the discriminant two roots must be
// from meeting before each counts as simple.
const apart = 3

// uncertain is a polynomial, ascending, with the covariance of its
// coefficients in the same order.
type uncertain struct {
	p   lti.Poly
	cov *mat.SymDense
}

// variance returns the variance of Σ w[i] p[i].
func (u uncertain) variance(w []float64) float64 {
	var v float64
	for i, a := range w {
		for j, b := range w {
			v += a * b * u.cov.At(i, j)
		}
	}
	return math.Max(0, v)
}

// roots returns the roots with their intervals, right half-plane last.
//
// A simple root moves by -δp(r)/p'(r), which gives deviations and normal
// intervals. That formula divides by the distance to the next root. Two roots
// that are not clearly apart are therefore taken as a quadratic factor
// s² + a s + b, which is regular where they meet: its 95 % region is an ellipse,
// and the interval of a root is what that root takes on over the ellipse of
// radius 1.96 deviations, the profile of the likelihood for one number.
func (u uncertain) roots() []Root {
	r := u.p.Roots()
	used := make([]bool, len(r))
	// As many numbers as roots: Šidák, Rectangular confidence regions for the
	// means of multivariate normal distributions, J. Amer. Statist. Assoc. 62
	// (1967) 626-633, whatever their correlation.
	all := distuv.UnitNormal.Quantile((1 + math.Pow(Confidence, 1/float64(max(1, len(r))))) / 2)
	var out []Root
	for i, a := range r {
		if used[i] {
			continue
		}
		partner := -1
		best := math.Inf(1)
		for j, b := range r {
			if j == i || used[j] || !pairs(a, b) {
				continue
			}
			if d := u.meeting(a, b); d < apart && d < best {
				partner, best = j, d
			}
		}
		if partner >= 0 {
			used[i], used[partner] = true, true
			lo, hi := u.quadratic(a, r[partner], all)
			out = append(out, lo, hi)
			continue
		}
		used[i] = true
		out = append(out, u.simple(a, all))
	}
	slices.SortStableFunc(out, func(a, b Root) int { return cmp.Or(cmp.Compare(a.Re, b.Re), cmp.Compare(a.Im, b.Im)) })
	return out
}

// pairs reports whether (s-a)(s-b) is real.
func pairs(a, b complex128) bool {
	return imag(a) == 0 && imag(b) == 0 || a == cmplx.Conj(b)
}

// gradient returns how a simple root moves with each coefficient: by
// -δp(r)/p'(r).
func (u uncertain) gradient(r complex128) (re, im []float64) {
	slope := u.p.Deriv().Eval(r)
	power := complex(1, 0)
	for range u.p {
		g := -power / slope
		re, im = append(re, real(g)), append(im, imag(g))
		power *= r
	}
	return re, im
}

// simple treats a root that is clearly apart from all others.
func (u uncertain) simple(r complex128, all float64) Root {
	re, im := u.gradient(r)
	root := Root{Re: real(r), Im: imag(r), ReSD: math.Sqrt(u.variance(re))}
	if root.Im != 0 {
		root.ImSD = math.Sqrt(u.variance(im))
	}
	around := func(x, half float64) Interval { return Interval{x - half, x + half} }
	root.Re95, root.Re95All = around(root.Re, z95*root.ReSD), around(root.Re, all*root.ReSD)
	root.Im95, root.Im95All = around(root.Im, z95*root.ImSD), around(root.Im, all*root.ImSD)
	root.Unstable = root.Re > 0
	root.ProbabilityUnstable = positive(root.Re, root.ReSD)
	return root
}

func positive(mean, sd float64) float64 {
	if sd == 0 {
		if mean > 0 {
			return 1
		}
		return 0
	}
	return distuv.UnitNormal.CDF(mean / sd)
}

// factor returns a and b of (s-r1)(s-r2) = s² + a s + b with their covariance.
func (u uncertain) factor(r1, r2 complex128) (a, b float64, cov [2][2]float64) {
	a, b = -real(r1+r2), real(r1*r2)
	q := lti.Poly{b, a, 1}
	// p = q w; a change dp is (da s + db) w + q dw, so modulo q
	// dp = (da s + db)(w1 s + w0), a linear equation for da and db.
	quotient, _ := u.p.Div(q)
	_, w := quotient.Div(q)
	w0, w1 := w[0], w[1]
	// s: da (w0 - a w1) + db w1;  1: -da b w1 + db w0.
	m11, m12, m21, m22 := w0-a*w1, w1, -b*w1, w0
	det := m11*m22 - m12*m21
	n := len(u.p)
	ga, gb := make([]float64, n), make([]float64, n)
	for i := range n {
		mono := make(lti.Poly, i+1)
		mono[i] = 1
		_, d := mono.Div(q)
		ga[i] = (m22*d[1] - m12*d[0]) / det
		gb[i] = (m11*d[0] - m21*d[1]) / det
	}
	cross := func(x, y []float64) float64 {
		var v float64
		for i := range n {
			for j := range n {
				v += x[i] * y[j] * u.cov.At(i, j)
			}
		}
		return v
	}
	cov = [2][2]float64{{cross(ga, ga), cross(ga, gb)}, {cross(ga, gb), cross(gb, gb)}}
	return a, b, cov
}

// meeting is how many standard deviations the discriminant a²/4 - b of two
// roots is from zero, where they meet.
func (u uncertain) meeting(r1, r2 complex128) float64 {
	a, b, c := u.factor(r1, r2)
	d := a*a/4 - b
	v := a*a/4*c[0][0] - a*c[0][1] + c[1][1]
	if !(v > 0) {
		return math.Inf(1)
	}
	return math.Abs(d) / math.Sqrt(v)
}

// quadratic treats two roots that may have met.
func (u uncertain) quadratic(r1, r2 complex128, all float64) (lo, hi Root) {
	a, b, c := u.factor(r1, r2)
	l11 := math.Sqrt(c[0][0])
	var l21 float64
	if l11 > 0 {
		l21 = c[0][1] / l11
	}
	l22 := math.Sqrt(math.Max(0, c[1][1]-l21*l21))
	at := func(x, y float64) (complex128, complex128) { return solve2(a+l11*x, b+l21*x+l22*y) }
	p, q := solve2(a, b)
	lo, hi = Root{Re: real(p), Im: imag(p)}, Root{Re: real(q), Im: imag(q)}
	over := func(radius float64) (low, high, im Interval) {
		low, high = Interval{lo.Re, lo.Re}, Interval{hi.Re, hi.Re}
		const turns, rings = 720, 8
		for ring := 1; ring <= rings; ring++ {
			for k := range turns {
				sin, cos := math.Sincos(2 * math.Pi * float64(k) / turns)
				r := radius * float64(ring) / rings
				p, q := at(r*cos, r*sin)
				low = Interval{math.Min(low.Lo, real(p)), math.Max(low.Hi, real(p))}
				high = Interval{math.Min(high.Lo, real(q)), math.Max(high.Hi, real(q))}
				im.Hi = math.Max(im.Hi, math.Abs(imag(q)))
			}
		}
		im.Lo = -im.Hi
		return low, high, im
	}
	lo.Re95, hi.Re95, lo.Im95 = over(z95)
	lo.Re95All, hi.Re95All, lo.Im95All = over(all)
	hi.Im95, hi.Im95All = lo.Im95, lo.Im95All
	// The share of the normal distribution of a and b with a root to the
	// right, by draws that are the same every time.
	const draws = 20000
	rnd := rand.New(rand.NewPCG(1, 1))
	for range draws {
		x, y := at(rnd.NormFloat64(), rnd.NormFloat64())
		if real(x) > 0 {
			lo.ProbabilityUnstable += 1.0 / draws
		}
		if real(y) > 0 {
			hi.ProbabilityUnstable += 1.0 / draws
		}
	}
	for _, r := range []*Root{&lo, &hi} {
		r.ReSD, r.ImSD = (r.Re95.Hi-r.Re95.Lo)/(2*z95), r.Im95.Hi/z95
		r.Unstable = r.Re > 0
	}
	return lo, hi
}

// solve2 returns the roots of s² + a s + b, that with the smaller real part or
// else the negative imaginary part first.
func solve2(a, b float64) (complex128, complex128) {
	d := a*a/4 - b
	if d < 0 {
		im := math.Sqrt(-d)
		return complex(-a/2, -im), complex(-a/2, im)
	}
	root := math.Sqrt(d)
	return complex(-a/2-root, 0), complex(-a/2+root, 0)
}
