package design

import (
	"math"
	"slices"

	"steadyrig/fit/lti"
)

// A gridLoop is a pair of controllers at the frequencies of a problem: the loop about a plant B/A has the
// characteristic function d A + k B.
type gridLoop struct{ d, k []complex128 }

// on fills the loop at the points z^-1 in w: the inner loop alone when outer is nil.
func (g *gridLoop) on(w []complex128, inner lti.DTF, outer *lti.DTF) {
	g.d, g.k = slices.Grow(g.d[:0], len(w))[:len(w)], slices.Grow(g.k[:0], len(w))[:len(w)]
	for j, x := range w {
		d, k := inner.Den.Eval(x), inner.Num.Eval(x)
		if outer != nil {
			n2, d2 := outer.Num.Eval(x), outer.Den.Eval(x)
			d, k = d*d2, k*(n2+d2)
		}
		g.d[j], g.k[j] = d, k
	}
}

// frequencyFigures of one plant in a loop: closed-loop poles outside the circle (by the argument principle on the
// grid; verdicts use eigenvalues instead), peak |S| at the plant input, standard deviation of the input due to the
// sensor's noise.
type frequencyFigures struct {
	outside      int
	peakS, noise float64
}

func (p *problem) frequency(pl *plant, g *gridLoop) frequencyFigures {
	var f frequencyFigures
	var t turning
	var psd, last, peak float64
	for j, d := range g.d {
		da := d * pl.a[j]
		c := da + g.k[j]*pl.b[j]
		c2 := real(c)*real(c) + imag(c)*imag(c)
		t.to(c)
		if s := (real(da)*real(da) + imag(da)*imag(da)) / c2; s > peak {
			peak = s
		}
		k := g.k[j]
		v := (real(k)*real(k) + imag(k)*imag(k)) * p.noise.sensorPSD(j, pl.a[j]) / c2
		if j > 0 {
			psd += (v + last) / 2 * (p.omega[j] - p.omega[j-1])
		}
		last = v
	}
	f.outside = t.outside()
	f.peakS = math.Sqrt(peak)
	f.noise = math.Sqrt(psd * p.period / math.Pi)
	return f
}

// outsideInner counts the inner loop's poles that decay more slowly than decayPerSettling asks.
func (p *problem) outsideInner(pl *plant, g *gridLoop) int {
	var t turning
	for j, d := range g.d {
		t.to(d*pl.ai[j] + g.k[j]*pl.bi[j])
	}
	return t.outside()
}

// turning counts how a point turns about zero, in quarters of a turn, going the shorter way each time.
type turning struct {
	last     complex128
	quadrant int
	quarters int
}

func (t *turning) to(c complex128) {
	q := 0
	switch re, im := real(c), imag(c); {
	case re <= 0 && im > 0:
		q = 1
	case re < 0:
		q = 2
	case im < 0:
		q = 3
	}
	if t.last != 0 {
		switch (q - t.quadrant) & 3 {
		case 1:
			t.quarters++
		case 2:
			if real(t.last)*imag(c) > imag(t.last)*real(c) {
				t.quarters += 2
			} else {
				t.quarters -= 2
			}
		case 3:
			t.quarters--
		}
	}
	t.last, t.quadrant = c, q
}

// outside is the number of roots outside the circle of a polynomial in z^-1 that was followed from z = 1 to z = -1: each
// turns it back by half a turn.
func (t *turning) outside() int { return -t.quarters / 2 }

// stepFigures of the linear, noise-free sampled loop after a unit step of the reference (or of the plant input).
type stepFigures struct {
	peak    float64 // largest output
	low     float64 // smallest output
	early   float64 // largest output before the settling time
	after   float64 // largest |1 - y| from the settling time on
	settled int     // samples until |1 - y| stays within the band; the length of the run if never
	uMax    float64 // largest |u|
	duMax   float64 // largest |u[k] - u[k-1]|
	vMax    float64 // largest |v|
}

// simulator is the tuner's loop: the same recursions as lti.Run without limits, on plain arrays.
type simulator struct{ u, y, inner []float64 }

// step runs n samples. kick: the unit step acts at the plant input and the reference rests. The outer controller is
// of order 3 at most, the prefilter of order 1.
func (s *simulator) step(pl *plant, inner, outer, pre lti.DTF, n int, period, settling, band float64, kick bool) stepFigures {
	s.u, s.y = slices.Grow(s.u[:0], n)[:n], slices.Grow(s.y[:0], n)[:n]
	u, y := s.u, s.y
	var peak, low, early, after, uMax, duMax, vMax float64
	ref, dist := 1.0, 0.0
	if kick {
		ref, dist = 0, 1
	}
	from := int(math.Ceil(settling/period - 1e-9))
	// Coefficients, and states of transposed direct form II.
	var pn, pd [2]float64
	var on, od [4]float64
	copy(pn[:], pre.Num)
	copy(pd[:], pre.Den)
	copy(on[:], outer.Num)
	copy(od[:], outer.Den)
	order := len(inner.Den) - 1
	s.inner = slices.Grow(s.inner[:0], order+1)[:order+1]
	c, num, den := s.inner, inner.Num[:order+1], inner.Den[:order+1]
	clear(c)
	var f1, v1, v2, v3 float64
	last := -1
	before := 0.0
	for k := range n {
		sum := 0.0
		past := y[max(0, k+1-len(pl.den)):k]
		for i, a := range pl.den[1 : 1+len(past)] {
			sum -= a * past[len(past)-1-i]
		}
		for i, b := range pl.num {
			if at := k - pl.lag - i; at >= 0 {
				sum += b * (u[at] + dist)
			} else {
				break
			}
		}
		y[k] = sum
		r := pn[0]*ref + f1
		f1 = pn[1]*ref - pd[1]*r
		e := r - sum
		v := on[0]*e + v1
		v1 = on[1]*e - od[1]*v + v2
		v2 = on[2]*e - od[2]*v + v3
		v3 = on[3]*e - od[3]*v
		e = v - sum
		w := num[0]*e + c[0]
		for i := 1; i <= order; i++ {
			c[i-1] = num[i]*e - den[i]*w + c[i]
		}
		u[k] = w
		peak, low = max(peak, sum), min(low, sum)
		uMax = max(uMax, w, -w)
		duMax = max(duMax, w-before, before-w)
		vMax = max(vMax, v, -v)
		before = w
		miss := math.Abs(ref - sum)
		if miss > band {
			last = k
		}
		if k >= from {
			after = max(after, miss)
		} else {
			early = max(early, sum)
		}
		if !(math.Abs(sum) < 1e6) {
			after, uMax, peak, last = 1e6, 1e6, 1e6, n-1
			break
		}
	}
	return stepFigures{peak, low, early, after, last + 1, uMax, duMax, vMax}
}
