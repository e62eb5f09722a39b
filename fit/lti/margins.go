package lti

import (
	"math"
	"math/cmplx"
	"slices"
)

// Margins says how far a loop with negative feedback is from instability.
type Margins struct {
	GainUp    float64 // smallest factor > 1 on the gain that reaches the limit of stability, +Inf: none
	GainDown  float64 // largest factor < 1 that does (an unstable plant has one), 0: none
	Phase     float64 // rad, smallest turn of either sign, +Inf: |L| never is 1
	Delay     float64 // s, smallest extra delay, +Inf: none
	Crossover float64 // rad/s, the highest frequency with |L| = 1, 0: none
	PeakS     float64 // largest |1/(1+L)|
	PeakSAt   float64 // rad/s
	PeakT     float64 // largest |L/(1+L)|
	PeakTAt   float64 // rad/s
	// StableNominal is Nyquist's verdict from the response alone. For a verdict that must hold for hidden modes too,
	// use TwoLoops.Poles.
	StableNominal bool
}

// LoopMargins evaluates the loop gain l, a function of the frequency in rad/s, on [wLo, wHi]: for a sampled loop wHi
// is pi/Period; wLo lies well below, and for a continuous loop wHi well above, all that happens. unstable counts the
// open-loop poles beyond the imaginary axis (the unit circle). axis lists the frequencies (rad/s, >= 0) of open-loop
// poles on it, each as often as its multiplicity, 0 for each integrator; integrators that are not listed are inferred
// from the slope at wLo. Poles on the axis are passed on their unstable side (so they count as stable). Between the
// points of a grid the response is followed as finely as it turns, and peaks and crossings are refined.
//
// For a sampled loop Delay means e^{-i omega Delay} on the sampled loop gain; a delay of the plant itself is sampled
// anew, which differs slightly.
func LoopMargins(l func(w float64) complex128, wLo, wHi float64, unstable int, axis ...float64) Margins {
	m := Margins{GainUp: math.Inf(1), Phase: math.Inf(1), Delay: math.Inf(1)}
	axis = slices.Sorted(slices.Values(axis))
	integrators := 0
	for len(axis) > 0 && axis[0] == 0 {
		integrators++
		axis = axis[1:]
	}
	if len(axis) > 0 {
		wLo = math.Min(wLo, axis[0]/10)
	}
	finite := func(x complex128) bool { return !cmplx.IsNaN(x) && !cmplx.IsInf(x) }
	l0 := l(0)
	if integrators == 0 {
		// Walk down to where the response has settled at its value for w = 0, if it has one.
		settled := false
		if finite(l0) {
			for w, i := wLo, 0; i < 6 && !settled; w, i = w/10, i+1 {
				if lw := l(w); cmplx.Abs(1+lw-(1+l0)) < 0.1*cmplx.Abs(1+l0) {
					settled = true
					wLo = w
				}
			}
		}
		if !settled {
			slope := math.Log(cmplx.Abs(l(wLo))/cmplx.Abs(l(wLo/2))) / math.Ln2
			integrators = max(1, int(math.Round(-slope)))
		}
	}
	// Stretches between the poles on the axis.
	var pts []point
	half := 0.0 // turn of 1 + L from the real axis at w = 0 to wHi
	add := func(lo, hi float64) {
		if hi <= lo {
			return
		}
		part := follow(l, lo, hi, coarseLoop)
		for i := 1; i < len(part); i++ {
			half += angle(1+part[i-1].l, 1+part[i].l)
		}
		m.crossings(l, part)
		pts = append(pts, part...)
	}
	if integrators == 0 {
		m.realAxis(l0)
		half += angle(1+complex(real(l0), 0), 1+l(wLo))
	} else {
		half -= float64(integrators) * math.Pi / 2
	}
	lo := wLo
	for i, w := range axis {
		switch {
		case w >= wHi*(1-skirt):
			half -= math.Pi / 2
		case i > 0 && w-axis[i-1] <= 2*skirt*w:
			half -= math.Pi
		default:
			add(lo, w*(1-skirt))
			half -= math.Pi
			lo = w * (1 + skirt)
		}
	}
	hi := wHi
	if len(axis) > 0 && axis[len(axis)-1] >= wHi*(1-skirt) {
		hi = wHi * (1 - skirt)
	}
	add(lo, hi)
	if lHi := l(hi); hi == wHi && math.Abs(imag(lHi)) <= 1e-9*cmplx.Abs(lHi) {
		m.realAxis(lHi) // a sampled loop is real at pi/Period
	}
	if integrators == 0 {
		pts = append([]point{{0, l0}}, pts...)
	}
	m.PeakS, m.PeakSAt = refinePeak(pts, func(p point) float64 { return 1 / cmplx.Abs(1+p.l) }, l)
	m.PeakT, m.PeakTAt = refinePeak(pts, func(p point) float64 {
		if !finite(p.l) {
			return 1
		}
		return cmplx.Abs(p.l / (1 + p.l))
	}, l)
	turns := half / math.Pi
	n := math.Round(turns)
	// What is left of a turn at both ends shrinks with wLo and 1/wHi; a half would be undecided.
	m.StableNominal = math.Abs(turns-n) < 0.25 && unstable == int(n)
	return m
}

// realAxis takes a point of the loop on the real axis into the gain margins.
func (m *Margins) realAxis(l complex128) {
	if k := -1 / real(l); k > 0 {
		if k >= 1 {
			m.GainUp = math.Min(m.GainUp, k)
		}
		if k <= 1 {
			m.GainDown = math.Max(m.GainDown, k)
		}
	}
}

// crossings finds where the loop crosses the negative real axis and the unit circle.
func (m *Margins) crossings(l func(float64) complex128, pts []point) {
	bisect := func(a, b point, f func(complex128) float64) point {
		fa := f(a.l)
		for range 60 {
			w := a.w + (b.w-a.w)/2
			if w <= a.w || w >= b.w {
				break
			}
			c := point{w, l(w)}
			if fc := f(c.l); (fc > 0) == (fa > 0) {
				a = c
			} else {
				b = c
			}
		}
		return b
	}
	size := func(x complex128) float64 { return cmplx.Abs(x) - 1 }
	im := func(x complex128) float64 { return imag(x) }
	for i := 1; i < len(pts); i++ {
		a, b := pts[i-1], pts[i]
		if (imag(a.l) > 0) != (imag(b.l) > 0) && min(real(a.l), real(b.l)) < 0 {
			if c := bisect(a, b, im); math.Abs(imag(c.l)) <= 1e-6*cmplx.Abs(c.l) {
				m.realAxis(c.l)
			}
		}
		if (size(a.l) > 0) != (size(b.l) > 0) {
			c := bisect(a, b, size)
			phase := cmplx.Phase(-c.l) // from -1, in (-pi, pi]
			m.Phase = math.Min(m.Phase, math.Abs(phase))
			if phase < 0 {
				phase += 2 * math.Pi
			}
			m.Delay = math.Min(m.Delay, phase/c.w)
			m.Crossover = math.Max(m.Crossover, c.w)
		}
	}
}
