package lti

import (
	"fmt"
	"math"
	"slices"
)

// Law is the controller exactly as it runs: two loops about an operating point,
//
//	v = Outer (Prefilter (r - Y0) - (y - Y0))   held within OuterLimits
//	u = U0 + Inner (v - (y - Y0))               held within InputLimits, InputRate, sent in steps of InputStep
//
// Anti-windup, for both loops: the past outputs that enter the recursion of a controller are the held ones, so that
// a controller's memory is always that of what really acted. Order within a step: y is read (quantised), r is
// prefiltered, v is computed and clamped, u is computed, rate limited, clamped and quantised.
type Law struct {
	Inner     DTF
	Outer     *DTF // nil: no outer loop, v = Prefilter (r - Y0)
	Prefilter *DTF // nil: 1
	U0, Y0    float64
	// InputLimits are absolute, OuterLimits a deviation of v. Both zero: no limit.
	InputLimits, OuterLimits [2]float64
	InputRate                float64 // units of input per s, 0: no limit
	InputStep, OutputStep    float64 // quantisation of u as sent and of y as read, 0: none
}

// Validate reports the first number that the law cannot run with.
func (l *Law) Validate() error {
	period := l.Inner.Period
	check := func(name string, g *DTF) error {
		if g == nil {
			return nil
		}
		if len(g.Den) == 0 || g.Den[0] == 0 {
			return fmt.Errorf("%s: denominator must start with a number other than 0", name)
		}
		if g.Period != period {
			return fmt.Errorf("%s: period %g s, but the inner loop runs at %g s", name, g.Period, period)
		}
		for _, p := range []Poly{g.Num, g.Den} {
			for _, v := range p {
				if math.IsNaN(v) || math.IsInf(v, 0) {
					return fmt.Errorf("%s: coefficient %g is not finite", name, v)
				}
			}
		}
		return nil
	}
	if !(period > 0) {
		return fmt.Errorf("inner: period %g s is not positive", period)
	}
	for _, e := range []error{check("inner", &l.Inner), check("outer", l.Outer), check("prefilter", l.Prefilter)} {
		if e != nil {
			return e
		}
	}
	for _, v := range []struct {
		name string
		lim  [2]float64
	}{{"input limits", l.InputLimits}, {"outer limits", l.OuterLimits}} {
		if v.lim != [2]float64{} && !(v.lim[0] < v.lim[1]) {
			return fmt.Errorf("%s: %g is not below %g", v.name, v.lim[0], v.lim[1])
		}
	}
	for _, v := range []struct {
		name string
		x    float64
	}{{"input rate", l.InputRate}, {"input step", l.InputStep}, {"output step", l.OutputStep}} {
		if !(v.x >= 0) {
			return fmt.Errorf("%s: %g is negative", v.name, v.x)
		}
	}
	return nil
}

// recursion is a controller in direct form I: past inputs and past held outputs, newest first.
type recursion struct {
	b, a []float64 // b[i] multiplies x[k-i]; a[i-1] multiplies y[k-i], i >= 1
	x, y []float64
}

func newRecursion(g *DTF) recursion {
	if g == nil {
		return recursion{b: []float64{1}, x: make([]float64, 1)}
	}
	n := g.normalised()
	b := append([]float64(nil), n.Num...)
	if len(b) == 0 {
		b = []float64{0}
	}
	a := append([]float64(nil), n.Den[1:]...)
	return recursion{b: b, a: a, x: make([]float64, len(b)), y: make([]float64, len(a))}
}

// next takes the newest input and returns the output; hold must follow with the output that acted.
func (r *recursion) next(x float64) float64 {
	s := 0.0
	past := r.x[:len(r.b)]
	for i := len(past) - 1; i > 0; i-- {
		past[i] = past[i-1]
		s += r.b[i] * past[i]
	}
	past[0] = x
	s += r.b[0] * x
	acted := r.y[:len(r.a)]
	for i, a := range r.a {
		s -= a * acted[i]
	}
	return s
}

func (r *recursion) hold(y float64) {
	if len(r.y) == 0 {
		return
	}
	for i := len(r.y) - 1; i > 0; i-- {
		r.y[i] = r.y[i-1]
	}
	r.y[0] = y
}

func (r *recursion) reset() {
	clear(r.x)
	clear(r.y)
}

// LawState is a running Law.
type LawState struct {
	law          Law
	inner, outer recursion
	prefilter    recursion
	rate         float64 // largest change of u per step, +Inf: none
	lo, hi       float64 // input limits
	outLo, outHi float64
	last         float64 // u before quantisation, the base of the rate limit
	v, yRead     float64
}

// Start returns the law at rest at its operating point. It panics where Validate reports an error.
func (l *Law) Start() *LawState {
	if err := l.Validate(); err != nil {
		panic("lti: invalid law: " + err.Error())
	}
	s := &LawState{
		law: *l, inner: newRecursion(&l.Inner), outer: newRecursion(l.Outer), prefilter: newRecursion(l.Prefilter),
		rate: math.Inf(1), lo: math.Inf(-1), hi: math.Inf(1), outLo: math.Inf(-1), outHi: math.Inf(1),
	}
	if l.InputLimits != [2]float64{} {
		s.lo, s.hi = l.InputLimits[0], l.InputLimits[1]
	}
	if l.OuterLimits != [2]float64{} {
		s.outLo, s.outHi = l.OuterLimits[0], l.OuterLimits[1]
	}
	if l.InputRate > 0 {
		s.rate = l.InputRate * l.Inner.Period
	}
	s.Reset()
	return s
}

// Reset returns to rest at the operating point.
func (s *LawState) Reset() {
	s.inner.reset()
	s.outer.reset()
	s.prefilter.reset()
	s.last, s.v, s.yRead = s.law.U0, 0, s.law.Y0
}

// read returns the output as the sensor gives it.
func (s *LawState) read(y float64) float64 {
	if q := s.law.OutputStep; q > 0 {
		y = math.Round(y/q) * q
	}
	s.yRead = y
	return y
}

// Step takes the reference and the output as measured, both absolute, and returns the input to send.
func (s *LawState) Step(r, y float64) float64 { return s.StepProbe(r, y, 0) }

// StepProbe is Step with a dither added to u before its limits. The dither is no part of the law: what enters the
// inner recursion is the input that acted less the dither.
func (s *LawState) StepProbe(r, y, dither float64) float64 {
	l := &s.law
	dy := s.read(y) - l.Y0
	f := s.prefilter.next(r - l.Y0)
	s.prefilter.hold(f)
	v := f
	if l.Outer != nil {
		v = s.outer.next(f - dy)
	}
	v = held(v, s.outLo, s.outHi)
	if l.Outer != nil {
		s.outer.hold(v)
	}
	s.v = v
	want := s.inner.next(v - dy)
	u := l.U0 + want + dither
	u = held(u, s.last-s.rate, s.last+s.rate)
	u = held(u, s.lo, s.hi)
	s.last = u
	sent := u
	if q := l.InputStep; q > 0 {
		sent = math.Round(u/q) * q
		if sent > s.hi {
			sent = math.Floor(s.hi/q) * q
		}
		if sent < s.lo {
			sent = math.Ceil(s.lo/q) * q
		}
	}
	if sent == l.U0+want+dither {
		s.inner.hold(want) // nothing held it back: no rounding either
	} else {
		s.inner.hold(sent - dither - l.U0)
	}
	return sent
}

// Follow takes one sample in which another law sent u, and keeps the memory ready to take over without a bump. The
// inner controller is held to have put out what was sent, by the same rule that keeps it from winding up. v moves by
// the given share of the way to what a steady inner controller needs to send u at y, (y - Y0) + (u - U0)/Inner(1), and
// the outer controller is held to have put it out: a share of 1/n averages over n samples. Without an outer loop v is
// the reference's, and cannot follow.
func (s *LawState) Follow(r, y, u, share float64) {
	l := &s.law
	dy := s.read(y) - l.Y0
	f := s.prefilter.next(r - l.Y0)
	s.prefilter.hold(f)
	if l.Outer == nil {
		s.v = held(f, s.outLo, s.outHi)
	} else {
		if k := l.Inner.DC(); k != 0 {
			s.v = held(s.v+share*(dy+(u-l.U0)/k-s.v), s.outLo, s.outHi)
		}
		s.outer.next(f - dy)
		s.outer.hold(s.v)
	}
	s.inner.next(s.v - dy)
	s.inner.hold(u - l.U0)
	s.last = u
}

// held returns x within [lo, hi]; NaN passes.
func held(x, lo, hi float64) float64 {
	if x < lo {
		return lo
	}
	if x > hi {
		return hi
	}
	return x
}

// Inner is the input of the inner loop v of the last step, a deviation, after its clamp.
func (s *LawState) Inner() float64 { return s.v }

// Read is the output as read in the last step, quantised.
func (s *LawState) Read() float64 { return s.yRead }

func (g *DTF) clone() *DTF {
	if g == nil {
		return nil
	}
	return &DTF{Num: append(Poly(nil), g.Num...), Den: append(Poly(nil), g.Den...), Period: g.Period}
}

func (g *DTF) same(h *DTF) bool {
	if g == nil || h == nil {
		return g == h
	}
	return g.Period == h.Period && slices.Equal(g.Num, h.Num) && slices.Equal(g.Den, h.Den)
}

// clone and same let a Simulator notice a law that was changed in place.
func (l *Law) clone() Law {
	c := *l
	c.Inner, c.Outer, c.Prefilter = *l.Inner.clone(), l.Outer.clone(), l.Prefilter.clone()
	return c
}

func (l *Law) same(m *Law) bool {
	return l.Inner.same(&m.Inner) && l.Outer.same(m.Outer) && l.Prefilter.same(m.Prefilter) && l.U0 == m.U0 &&
		l.Y0 == m.Y0 && l.InputLimits == m.InputLimits && l.OuterLimits == m.OuterLimits &&
		l.InputRate == m.InputRate && l.InputStep == m.InputStep && l.OutputStep == m.OutputStep
}
