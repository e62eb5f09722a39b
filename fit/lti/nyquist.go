package lti

import (
	"errors"
	"fmt"
	"math"
	"math/cmplx"
	"slices"
)

// Nyquist is the count of Nyquist's criterion (Nyquist, Regeneration theory, Bell Syst. Tech. J. 11 (1932) 126-147):
// Closed = Open + Clockwise, with poles on the axis passed on their unstable side, so that they are not in Open.
type Nyquist struct {
	Clockwise int // encirclements of -1 by l
	Open      int // open-loop poles with Re > 0, or |z| > 1
	Closed    int // closed-loop poles there
}

var errThrough = errors.New("the loop passes through -1")

// onAxis is the distance, relative to the size of the pole, within which it counts as on the axis. Poles that come
// out of exact coefficients (integrators) are exact; everything farther away is passed on its true side.
const onAxis = 1e-10

// NyquistCount counts the unstable closed-loop poles under negative feedback of the loop gain l, a function of s
// (period 0) or of z (period > 0, s). poles are all its open-loop poles in the same plane, with multiplicity. l may
// contain a delay; it must be real on the real axis and, when continuous, proper, with |l| < 1 at high frequencies
// or without a delay. The error says that the loop passes through -1 or does not settle.
func NyquistCount(l func(x complex128) complex128, poles []complex128, period float64) (Nyquist, error) {
	f := func(s complex128) complex128 { return 1 + l(s) }
	var end float64
	at := poles
	if period > 0 {
		// The unit circle is the imaginary axis of s = ln z, once round is -i pi to i pi.
		f = func(s complex128) complex128 { return 1 + l(cmplx.Exp(s)) }
		end = math.Pi
		at = nil
		for _, p := range poles {
			if p != 0 {
				at = append(at, cmplx.Log(p))
			}
		}
	} else {
		r := 1.0
		for _, p := range poles {
			r = math.Max(r, 10*cmplx.Abs(p))
		}
		var err error
		if end, err = farRadius(l, r); err != nil {
			return Nyquist{}, err
		}
	}
	var n Nyquist
	for _, p := range at {
		if real(p) > axisWidth(p) {
			n.Open++
		}
	}
	turn, err := turnUpAxis(f, at, end)
	if err != nil {
		return n, err
	}
	turns := turn / math.Pi
	k := math.Round(turns)
	if !(math.Abs(turns-k) < 0.05) {
		return n, fmt.Errorf("counting encirclements: 1 + L does not start and end on the real axis (%.3g half turns)", turns)
	}
	n.Clockwise = -int(k)
	n.Closed = n.Open + n.Clockwise
	return n, nil
}

func axisWidth(p complex128) float64 { return onAxis * math.Max(cmplx.Abs(p), 1e-3) }

// farRadius returns a frequency from which on the loop gain stays away from -1.
func farRadius(l func(complex128) complex128, r float64) (float64, error) {
	for range 40 {
		if cmplx.Abs(l(complex(0, r))) < 0.03 {
			return r, nil
		}
		r *= 3
	}
	a, b := l(complex(0, r)), l(complex(0, 1.7*r))
	if cmplx.Abs(a) < 0.97 && cmplx.Abs(b) < 0.97 || cmplx.Abs(a-b) < 1e-6*cmplx.Abs(1+a) {
		return r, nil
	}
	return 0, fmt.Errorf("counting encirclements: the loop gain does not settle at high frequencies (|L| = %.3g)", cmplx.Abs(a))
}

// turnUpAxis returns the turn of f, in rad, from s = 0 to s = i end, past poles on the axis on their right.
func turnUpAxis(f func(complex128) complex128, poles []complex128, end float64) (float64, error) {
	// Distinct poles on the axis.
	var on []float64
	for _, p := range poles {
		if w := imag(p); math.Abs(real(p)) <= axisWidth(p) && w >= 0 && w <= end*(1+1e-9) {
			if !slices.ContainsFunc(on, func(x float64) bool { return math.Abs(x-w) <= 1e-8*(1+w) }) {
				on = append(on, w)
			}
		}
	}
	slices.Sort(on)
	// The way around each is so near that f is large all along it and nothing else lies within.
	around := make([]float64, len(on))
	for i, x := range on {
		r := end
		for _, p := range poles {
			if d := cmplx.Abs(p - complex(0, x)); d > 1e-8*(1+x) {
				r = math.Min(r, d)
			}
		}
		for r *= 1e-2; ; r /= 10 {
			if r < 1e-12*(1+x) {
				return 0, fmt.Errorf("counting encirclements: the loop gain stays finite at its pole on the axis at %.4g", x)
			}
			least := math.Inf(1)
			for k := -2; k <= 2; k++ {
				if s := complex(0, x) + cmplx.Rect(r, float64(k)*math.Pi/4); real(s) >= 0 {
					least = math.Min(least, cmplx.Abs(f(s)))
				}
			}
			if least > 100 {
				break
			}
		}
		around[i] = r
	}
	// Frequencies at which to look in any case: the whole range by decades, and around each pole in units of its
	// distance from the axis.
	low := end
	for _, p := range poles {
		if m := cmplx.Abs(p); m > 0 {
			low = math.Min(low, m)
		}
	}
	seeds := Grid(1e-4*low, end, 2+int(perDecade*math.Log10(1e4*end/low)))
	for _, p := range poles {
		for _, k := range []float64{-10, -3, -1, -0.3, 0, 0.3, 1, 3, 10} {
			seeds = append(seeds, math.Abs(imag(p))+k*math.Abs(real(p)))
		}
	}
	slices.Sort(seeds)
	total := 0.0
	var fail error
	along := func(path func(t float64) complex128) {
		turn, err := turnAlong(f, path)
		total += turn
		if err != nil {
			fail = err
		}
	}
	axis := func(a, b float64) {
		prev := a
		for _, w := range append(slices.Clone(seeds), b) {
			if w > prev && w <= b {
				from, to := prev, w
				along(func(t float64) complex128 { return complex(0, from+t*(to-from)) })
				prev = w
			}
			if w > b {
				break
			}
		}
		if prev < b {
			along(func(t float64) complex128 { return complex(0, prev+t*(b-prev)) })
		}
	}
	from := 0.0
	for i, x := range on {
		radius := around[i]
		first, last := -math.Pi/2, math.Pi/2
		if x == 0 {
			first = 0
		} else {
			axis(from, x-radius)
		}
		if x >= end*(1-1e-9) {
			last = 0
		}
		// In pieces: round a multiple pole f turns by whole circles, which the ends alone would not show.
		const pieces = 24
		for j := range pieces {
			along(func(t float64) complex128 {
				return complex(0, x) + cmplx.Rect(radius, first+(float64(j)+t)/pieces*(last-first))
			})
		}
		from = x + radius
	}
	if from < end {
		axis(from, end)
	}
	return total, fail
}

// turnAlong returns the turn of f along path(t), t in [0, 1], halving until no step turns or grows much.
func turnAlong(f func(complex128) complex128, path func(t float64) complex128) (float64, error) {
	var fail error
	var rec func(a, b float64, fa, fb complex128, depth int) float64
	rec = func(a, b float64, fa, fb complex128, depth int) float64 {
		step := angle(fa, fb)
		if math.Abs(step) <= turn && math.Abs(math.Log(cmplx.Abs(fa)/cmplx.Abs(fb))) <= 1 {
			return step
		}
		if depth == 0 || fa == 0 || fb == 0 || math.IsNaN(step) {
			if fail == nil {
				fail = fmt.Errorf("counting encirclements: %w near %.4g", errThrough, path((a+b)/2))
			}
			return 0
		}
		c := a + (b-a)/2
		fc := f(path(c))
		return rec(a, c, fa, fc, depth-1) + rec(c, b, fc, fb, depth-1)
	}
	total := rec(0, 1, f(path(0)), f(path(1)), 45)
	return total, fail
}
