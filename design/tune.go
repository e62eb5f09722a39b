package design

import (
	"math"
	"math/cmplx"
	"slices"
)

// A gridLoop is a pair of controllers at the frequencies of a problem: the loop about a plant B/A has the
// characteristic function d A + k B.
type gridLoop struct{ d, k []complex128 }

// on fills the loop at the points z^-1 in w: the inner loop alone when outer is nil.
func (g *gridLoop) on(w []complex128, inner zblock, outer *zblock) {
	g.d, g.k = slices.Grow(g.d[:0], len(w))[:len(w)], slices.Grow(g.k[:0], len(w))[:len(w)]
	for j, x := range w {
		d, k := eval3(&inner.den, x), eval3(&inner.num, x)
		if outer != nil {
			n2, d2 := eval3(&outer.num, x), eval3(&outer.den, x)
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
	turn, psd := 0.0, 0.0
	var before complex128
	var last, peak float64
	for j, d := range g.d {
		da := d * pl.a[j]
		c := da + g.k[j]*pl.b[j]
		c2 := real(c)*real(c) + imag(c)*imag(c)
		if j > 0 {
			turn += cmplx.Phase(c * cmplx.Conj(before))
		}
		before = c
		peak = math.Max(peak, (real(da)*real(da)+imag(da)*imag(da))/c2)
		k := g.k[j]
		v := (real(k)*real(k) + imag(k)*imag(k)) * p.noise.sensorPSD(j, pl.a[j]) / c2
		if j > 0 {
			psd += (v + last) / 2 * (p.omega[j] - p.omega[j-1])
		}
		last = v
	}
	f.outside = int(math.Round(-turn / math.Pi))
	f.peakS = math.Sqrt(peak)
	f.noise = math.Sqrt(psd * p.period / math.Pi)
	return f
}

// outsideInner counts the inner loop's poles that decay more slowly than decayPerSettling asks.
func (p *problem) outsideInner(pl *plant, g *gridLoop) int {
	turn := 0.0
	var before complex128
	for j, d := range g.d {
		c := d*pl.ai[j] + g.k[j]*pl.bi[j]
		if j > 0 {
			turn += cmplx.Phase(c * cmplx.Conj(before))
		}
		before = c
	}
	return int(math.Round(-turn / math.Pi))
}

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
type simulator struct{ u, y []float64 }

// step runs n samples. kick: the unit step acts at the plant input and the reference rests.
func (s *simulator) step(pl *plant, inner, outer, pre zblock, n int, period, settling, band float64, kick bool) stepFigures {
	s.u, s.y = slices.Grow(s.u[:0], n)[:n], slices.Grow(s.y[:0], n)[:n]
	u, y := s.u, s.y
	f := stepFigures{settled: n}
	ref, dist := 1.0, 0.0
	if kick {
		ref, dist = 0, 1
	}
	from := int(math.Ceil(settling/period - 1e-9))
	var f1, f2, v1, v2, c1, c2 float64 // states of transposed direct form II
	last := -1
	before := 0.0
	for k := range n {
		sum := 0.0
		for i, a := range pl.den[1:] {
			if i >= k {
				break
			}
			sum -= a * y[k-1-i]
		}
		for i, b := range pl.num {
			if at := k - pl.lag - i; at >= 0 {
				sum += b * (u[at] + dist)
			} else {
				break
			}
		}
		y[k] = sum
		r := pre.num[0]*ref + f1
		f1 = pre.num[1]*ref - pre.den[1]*r + f2
		f2 = pre.num[2]*ref - pre.den[2]*r
		e := r - sum
		v := outer.num[0]*e + v1
		v1 = outer.num[1]*e - outer.den[1]*v + v2
		v2 = outer.num[2]*e - outer.den[2]*v
		e = v - sum
		w := inner.num[0]*e + c1
		c1 = inner.num[1]*e - inner.den[1]*w + c2
		c2 = inner.num[2]*e - inner.den[2]*w
		u[k] = w
		f.peak, f.low = math.Max(f.peak, sum), math.Min(f.low, sum)
		f.uMax = math.Max(f.uMax, math.Abs(w))
		f.duMax = math.Max(f.duMax, math.Abs(w-before))
		f.vMax = math.Max(f.vMax, math.Abs(v))
		before = w
		miss := math.Abs(ref - sum)
		if miss > band {
			last = k
		}
		if k >= from {
			f.after = math.Max(f.after, miss)
		} else {
			f.early = math.Max(f.early, sum)
		}
		if !(math.Abs(sum) < 1e6) {
			f.after, f.uMax, f.peak = 1e6, 1e6, 1e6
			return f
		}
	}
	f.settled = last + 1
	return f
}
