package lti

import (
	"fmt"
	"math"
	"math/cmplx"

	"gonum.org/v1/gonum/mat"
)

// Noise that shares the plant's denominator, A y = B u + (C/D) e, with A the monic sampled denominator of the plant and
// the shape C/D stable. The unstable poles of the noise are those of the plant, in the same states, so the sum of both
// stays bounded in a stable loop where separate states would not (Forssell & Ljung, Identification of unstable systems
// using output error and Box-Jenkins model structures, IEEE Trans. Automatic Control 45 (2000) 137-141).

// injection is that noise in the states of the sampled plant:
//
//	x+ = phi x + … + k e + l s,   y = c x + … + e,   s = rest(z) e
//
// With C - A D = K D + R (division by D): k has the numerator K over A, l the numerator 1, rest = R/D.
type injection struct {
	k, l []float64
	rest chain // in z - 1; its d is 0
}

// deltaDen returns the sampled denominator in powers of z - 1.
func deltaDen(plant TF, period float64) Poly {
	poles := plant.Den.Roots()
	for i, p := range poles {
		x := p * complex(period, 0)
		// e^x - 1 without cancellation.
		s, c := math.Sincos(imag(x) / 2)
		e := math.Exp(real(x))
		poles[i] = complex(math.Expm1(real(x))-2*e*s*s, 2*e*s*c)
	}
	return FromRoots(pairUp(poles))
}

// divide returns quotient and remainder of p by d, deg d >= 0.
func divide(p, d Poly) (q, r Poly) {
	d = d.Trim()
	r = append(Poly(nil), p...)
	n := len(d) - 1
	if len(r) <= n {
		return nil, r
	}
	q = make(Poly, len(r)-n)
	for i := len(q) - 1; i >= 0; i-- {
		q[i] = r[i+n] / d[n]
		for j, v := range d {
			r[i+j] -= q[i] * v
		}
		r[i+n] = 0
	}
	return q, r[:n]
}

// delta returns numerator and denominator in powers of z - 1, of common formal degree.
func (g DTF) delta() (num, den Poly) {
	num, den = g.trimmed().normalised().inZ()
	return num.shift(1), den.shift(1)
}

// EquationShape returns the stable shape C/D of the noise model h = C/(A D), A the sampled denominator of plant, whose
// delay plays no part. h is monic. It refuses an h whose denominator does not contain A.
func EquationShape(h DTF, plant TF) (DTF, error) {
	_, den := h.delta()
	a := deltaDen(plant, h.Period)
	d, rest := divide(den, a)
	// The remainder, as a part of what was subtracted.
	size := 0.0
	for i := range rest {
		s := 0.0
		for j := range a {
			if k := i - j; k >= 0 && k < len(d) {
				s += math.Abs(a[j] * d[k])
			}
		}
		if s > 0 {
			size = math.Max(size, math.Abs(rest[i])/(s+1e-12))
		}
	}
	if len(d) == 0 || size > 1e-5 {
		return DTF{}, fmt.Errorf("splitting the noise model: its denominator does not contain the plant's (remainder %.2g)", size)
	}
	h = h.normalised()
	return DTF{Num: h.Num, Den: d.shift(-1).reversed(), Period: h.Period}.normalised(), nil
}

func (p *sampled) inject(plant TF, shape DTF) (*injection, error) {
	n := p.n()
	a := deltaDen(plant, p.period)
	num, den := shape.delta()
	m := len(den) - 1
	if len(shape.Den.Trim()) < m+1 {
		// More numerator than denominator: inZ has padded D with poles at z = 0, which the plant's order absorbs.
		den = shape.normalised().Den.Trim().reversed().shift(1)
		m = len(den) - 1
	}
	if len(num)-1 > n+m {
		return nil, fmt.Errorf("shaping the noise: numerator of degree %d on %d poles", len(num)-1, n+m)
	}
	for _, z := range rootsOf(den) {
		if !(cmplx.Abs(1+z) < 1+1e-9) {
			return nil, fmt.Errorf("shaping the noise: pole %.4g outside the unit circle that is not the plant's", 1+z)
		}
	}
	// C in powers of z has the formal degree n + m: multiply by the missing powers of z = 1 + delta.
	for len(num)-1 < n+m {
		num = num.Mul(Poly{1, 1})
	}
	k, rest := divide(num.Sub(a.Mul(den)), den)
	inj := &injection{rest: newChain(rest, den)}
	var err error
	if inj.k, err = p.output(k, a); err != nil {
		return nil, err
	}
	inj.l, err = p.output(Poly{1}, a)
	return inj, err
}

func rootsOf(p Poly) []complex128 {
	if p.Degree() < 1 {
		return nil
	}
	return p.Roots()
}

// output returns the vector v with c (delta I - (phi - I))^-1 v = num(delta)/a(delta), deg num < n = deg a: the first
// n Markov parameters in powers of 1/delta match, row by row of the observability matrix.
func (p *sampled) output(num, a Poly) ([]float64, error) {
	n := p.n()
	if n == 0 {
		return nil, nil
	}
	o, h := mat.NewDense(n, n, nil), mat.NewVecDense(n, nil)
	row, next := append([]float64(nil), p.c...), make([]float64, n)
	for i := range n {
		// num/a = h[0]/delta + h[1]/delta^2 + …
		v := 0.0
		if j := n - 1 - i; j < len(num) {
			v = num[j]
		}
		for j := 1; j <= i; j++ {
			v -= a[n-j] * h.AtVec(i-j)
		}
		h.SetVec(i, v)
		o.SetRow(i, row)
		for c := range n {
			next[c] = -row[c]
			for r := range n {
				next[c] += row[r] * p.phi[r*n+c]
			}
		}
		row, next = next, row
	}
	// Equilibrate: rows fall like (p h)^i.
	for i := range n {
		s := mat.Norm(o.RowView(i), math.Inf(1))
		if s == 0 {
			return nil, fmt.Errorf("shaping the noise: a mode of the plant does not show in the output")
		}
		for j := range n {
			o.Set(i, j, o.At(i, j)/s)
		}
		h.SetVec(i, h.AtVec(i)/s)
	}
	var x mat.VecDense
	if err := ignoreCondition(x.SolveVec(o, h)); err != nil {
		return nil, fmt.Errorf("shaping the noise: a mode of the plant does not show in the output: %w", err)
	}
	return x.RawVector().Data, nil
}

// NoisyPlant returns the sampled plant with two inputs, u and e: A y = B u + (C/D) e, shape = C/D with C and D monic.
// The period is shape's. Put it into TwoLoops to get the spread of y and u that the noise causes in the loop.
func NoisyPlant(plant TF, shape DTF) (SS, error) {
	g, err := ZOH(plant, shape.Period)
	if err != nil {
		return SS{}, err
	}
	p, err := sample(plant, shape.Period)
	if err != nil {
		return SS{}, err
	}
	inj, err := p.inject(plant, shape)
	if err != nil {
		return SS{}, err
	}
	o, n, m := g.Order(), p.n(), len(inj.rest.b)
	r := SS{D: mat.NewDense(1, 2, []float64{g.D.At(0, 0), 1}), Period: shape.Period}
	if o+m == 0 {
		return r, nil
	}
	r.A, r.B, r.C = mat.NewDense(o+m, o+m, nil), mat.NewDense(o+m, 2, nil), mat.NewDense(1, o+m, nil)
	for i := range o {
		for j := range o {
			r.A.Set(i, j, g.A.At(i, j))
		}
		r.B.Set(i, 0, g.B.At(i, 0))
		r.C.Set(0, i, g.C.At(0, i))
	}
	for i := range n {
		r.B.Set(i, 1, inj.k[i])
		for j := range m {
			r.A.Set(i, o+j, inj.l[i]*inj.rest.c[j])
		}
	}
	for i := range m {
		for j := range m {
			r.A.Set(o+i, o+j, inj.rest.a[i*m+j])
		}
		r.A.Set(o+i, o+i, 1+r.A.At(o+i, o+i))
		r.B.Set(o+i, 1, inj.rest.b[i])
	}
	return r, nil
}
