package lti

import (
	"gonum.org/v1/gonum/mat"
)

const (
	mixedPeriods  = "lti: blocks of different periods"
	algebraicLoop = "lti: algebraic loop: direct feedthrough all round"
)

// Connect joins blocks into one: with u the inputs and y the outputs of all blocks, stacked in order,
//
//	u = m y + n r,   z = k y,
//
// it returns the block from r to z. Its states are those of all blocks, hidden modes included, so that its
// eigenvalues decide internal stability. Shapes: m inputs×outputs, n inputs×(length of r), k (length of z)×outputs.
// It panics when I - m D is singular (an algebraic loop), or on shapes and periods that do not fit.
func Connect(blocks []SS, m, n, k mat.Matrix) SS {
	var order, ins, outs int
	for _, b := range blocks {
		p, q := b.D.Dims()
		order, ins, outs = order+b.Order(), ins+q, outs+p
		if b.Period != blocks[0].Period {
			panic(mixedPeriods)
		}
	}
	_, refs := n.Dims()
	d := mat.NewDense(outs, ins, nil)
	for i, j, b := 0, 0, 0; b < len(blocks); b++ {
		p, q := blocks[b].D.Dims()
		d.Slice(i, i+p, j, j+q).(*mat.Dense).Copy(blocks[b].D)
		i, j = i+p, j+q
	}
	// u = w (m C x + n r) with w = (I - m D)^-1.
	var w, md mat.Dense
	md.Mul(m, d)
	md.Scale(-1, &md)
	for i := range ins {
		md.Set(i, i, md.At(i, i)+1)
	}
	if err := w.Inverse(&md); err != nil {
		if c, ok := err.(mat.Condition); !ok || float64(c) > 1e15 {
			panic(algebraicLoop)
		}
	}
	var un, dun, kd mat.Dense
	un.Mul(&w, n)
	dun.Mul(d, &un)
	kd.Mul(k, &dun)
	r := SS{D: &kd, Period: blocks[0].Period}
	if order == 0 {
		return r
	}
	a, b, c := mat.NewDense(order, order, nil), mat.NewDense(order, ins, nil), mat.NewDense(outs, order, nil)
	var x, i, j int
	for _, g := range blocks {
		p, q := g.D.Dims()
		if o := g.Order(); o > 0 {
			a.Slice(x, x+o, x, x+o).(*mat.Dense).Copy(g.A)
			b.Slice(x, x+o, j, j+q).(*mat.Dense).Copy(g.B)
			c.Slice(i, i+p, x, x+o).(*mat.Dense).Copy(g.C)
			x += o
		}
		i, j = i+p, j+q
	}
	var wm, ux, bux, dux, sum mat.Dense
	wm.Mul(&w, m)
	ux.Mul(&wm, c) // u from x
	bux.Mul(b, &ux)
	a.Add(a, &bux)
	dux.Mul(d, &ux)
	sum.Add(c, &dux)
	r.A, r.B, r.C = a, mat.NewDense(order, refs, nil), new(mat.Dense)
	r.B.Mul(b, &un)
	r.C.Mul(k, &sum)
	return r
}

// Series returns b after a: y = b(a(u)).
func Series(a, b SS) SS {
	ao, ai := a.D.Dims()
	bo, bi := b.D.Dims()
	if ao != bi {
		panic(badShape)
	}
	m := mat.NewDense(ai+bi, ao+bo, nil)
	n := mat.NewDense(ai+bi, ai, nil)
	k := mat.NewDense(bo, ao+bo, nil)
	for i := range bi {
		m.Set(ai+i, i, 1)
	}
	for i := range ai {
		n.Set(i, i, 1)
	}
	for i := range bo {
		k.Set(i, ao+i, 1)
	}
	return Connect([]SS{a, b}, m, n, k)
}

// Parallel returns the sum y = a(u) + b(u).
func Parallel(a, b SS) SS {
	o, in := a.D.Dims()
	if bo, bi := b.D.Dims(); bo != o || bi != in {
		panic(badShape)
	}
	n := mat.NewDense(2*in, in, nil)
	k := mat.NewDense(o, 2*o, nil)
	for i := range in {
		n.Set(i, i, 1)
		n.Set(in+i, i, 1)
	}
	for i := range o {
		k.Set(i, i, 1)
		k.Set(i, o+i, 1)
	}
	return Connect([]SS{a, b}, mat.NewDense(2*in, 2*o, nil), n, k)
}

// Feedback returns the block from r to y of y = a(r + sign b(y)); sign is -1 for negative feedback.
func Feedback(a, b SS, sign float64) SS {
	ao, ai := a.D.Dims()
	if bo, bi := b.D.Dims(); bo != ai || bi != ao {
		panic(badShape)
	}
	m := mat.NewDense(ai+ao, ao+ai, nil)
	n := mat.NewDense(ai+ao, ai, nil)
	k := mat.NewDense(ao, ao+ai, nil)
	for i := range ai {
		m.Set(i, ao+i, sign)
		n.Set(i, i, 1)
	}
	for i := range ao {
		m.Set(ai+i, i, 1)
		k.Set(i, i, 1)
	}
	return Connect([]SS{a, b}, m, n, k)
}
