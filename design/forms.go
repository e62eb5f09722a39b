package design

import (
	"fmt"
	"math"
	"slices"
	"strings"

	"steadyrig/fit/lti"
)

// Inner forms.
const (
	formGain     = "gain"
	formLead     = "lead"
	formRollOff  = "lead with roll-off"
	formSecond   = "second order"
	formObserver = "observer-based"
)

// Outer forms.
const (
	formI      = "I"
	formPI     = "PI"
	formPILag  = "PI with lag"
	formPILead = "PI with lead"
	formPID    = "PID with roll-off"
)

// InnerForms returns the forms of the inner controller, simplest first:
//
//	gain                k
//	lead                (k0 + k1 s)/(1 + s/w)
//	lead with roll-off  (k0 + k1 s)/(1 + 2 0.8 s/w + (s/w)^2)
//	second order        (k0 + k1 s + k2 s^2)/(1 + 2 d s/w + (s/w)^2)
//	observer-based      state feedback from an estimator of the nominal sampled plant with its delay
//
// Coefficients have either sign; a lead with k0 and k1 of opposite sign is one too.
func InnerForms() []string {
	return []string{formGain, formLead, formRollOff, formSecond, formObserver}
}

// OuterForms returns the forms of the outer controller, simplest first; each has a first-order prefilter:
//
//	I                  k/s
//	PI                 k (1 + a s)/s
//	PI with lag        k (1 + a s)(1 + b s)/(s (1 + t s)), t > b
//	PI with lead       the same with t < b
//	PID with roll-off  k (1 + a s + c s^2)/(s (1 + 2 0.8 t s + (t s)^2))
func OuterForms() []string { return []string{formI, formPI, formPILag, formPILead, formPID} }

// Check reports a form that there is not.
func (o Options) Check() error {
	_, _, err := o.forms()
	return err
}

// forms returns the forms to try: of each loop all, or the one that is asked for.
func (o Options) forms() (inner, outer []string, err error) {
	inner, outer = InnerForms(), OuterForms()
	for _, loop := range []struct {
		what, name string
		forms      *[]string
	}{{"inner", o.Inner, &inner}, {"outer", o.Outer, &outer}} {
		switch {
		case loop.name == "":
		case !slices.Contains(*loop.forms, loop.name):
			return nil, nil, fmt.Errorf("there is no %s form %q: choose one of %s", loop.what, loop.name, strings.Join(*loop.forms, ", "))
		default:
			*loop.forms = []string{loop.name}
		}
	}
	return inner, outer, nil
}

// furthestRollOff is the highest roll-off in units of the crossover rate: further out it buys next to no margin and
// lets through what the model does not know.
const furthestRollOff = 12

// rollOffDamping of the second-order roll-offs.
const rollOffDamping = 0.8

// fastest is the highest rate of a controller's roll-off: beyond 2/T Tustin's rule would put the pole at negative z, a
// controller that rings.
func (p *problem) fastest() float64 { return 1.9 / p.period }

// furthestLead is the largest lead of the prefilter over its lag.
const furthestLead = 10

// innerScale makes the parameters of an inner controller numbers near one.
type innerScale struct {
	rate, gain float64
	negative   bool
}

// innerBlock builds an inner controller from its parameters: x[0] = ln of the gain at scale.rate relative to
// scale.gain; x[1] = the angle between stiffness (0) and damping (pi/2), so that no sign is fixed beforehand;
// x[2] = ln of the roll-off rate relative to scale.rate; of the second order also x[3] = the angle by which the
// numerator leans to s^2, x[4] = ln of the roll-off's damping. For those of an observer-based one see observer. False
// where there is none.
func (p *problem) innerBlock(form string, x []float64, scale innerScale) (block, bool) {
	if form == formObserver {
		return p.observer(x)
	}
	k := scale.gain * math.Exp(x[0])
	if form == formGain {
		if scale.negative {
			k = -k
		}
		return continuous(lti.Poly{k}, lti.Poly{1}, p.period), true
	}
	num := lti.Poly{k * math.Cos(x[1]), k * math.Sin(x[1]) / scale.rate}
	wf := math.Min(scale.rate*math.Min(math.Exp(x[2]), furthestRollOff), p.fastest())
	den := lti.Poly{1, 1 / wf}
	switch form {
	case formRollOff:
		den = lti.Poly{1, 2 * rollOffDamping / wf, 1 / (wf * wf)}
	case formSecond:
		sin, cos := math.Sincos(x[3])
		num = lti.Poly{cos * num[0], cos * num[1], k * sin / (scale.rate * scale.rate)}
		den = lti.Poly{1, 2 * math.Exp(math.Min(x[4], 1)) / wf, 1 / (wf * wf)}
	}
	return continuous(num, den, p.period), true
}

// innerLattice calls try with the shapes that a search begins with about one crossover rate.
func innerLattice(form string, try func(x ...float64)) {
	angles := func(step int, f func(angle float64)) {
		for deg := -180; deg < 180; deg += step {
			f(float64(deg) * math.Pi / 180)
		}
	}
	for _, m := range []float64{0.7, 1, 1.4, 2, 3, 4.5} {
		m = math.Log(m)
		switch form {
		case formGain:
			try(m)
		case formLead, formRollOff:
			angles(15, func(angle float64) {
				for _, off := range []float64{2, 4, 7, 12} {
					try(m, angle, math.Log(off))
				}
			})
		case formSecond:
			angles(30, func(angle float64) {
				for _, lean := range []float64{-1, -0.5, 0, 0.5, 1} {
					for _, off := range []float64{1, 3, 9} {
						try(m, angle, math.Log(off), lean, math.Log(rollOffDamping))
					}
				}
			})
		}
	}
}

// outerBlocks builds outer controller and prefilter: x[0] = ln of the prefilter's lag, x[1] = its lead as a share
// of that lag, x[2] = ln of the integral gain, x[3] = ln of the PI's zero time, x[4] = ln of the time of the other
// zero, x[5] = ln of how far lead or lag are from none. Of a PID x[4] = ln of c/a^2, x[5] = ln of the roll-off's
// time. Times in units of scale.
func (p *problem) outerBlocks(form string, x []float64, sign, scale float64) (k, f block) {
	lag := scale * math.Exp(x[0])
	f = continuous(lti.Poly{1, lag * math.Min(math.Max(x[1], 0), furthestLead)}, lti.Poly{1, lag}, p.period)
	ki := sign / scale * math.Exp(x[2])
	num, den := lti.Poly{ki}, lti.Poly{0, 1}
	if form != formI {
		a := scale * math.Exp(x[3])
		num = append(num, ki*a)
		switch form {
		case formPILag, formPILead:
			b := scale * math.Exp(x[4])
			t := b * (1 + math.Exp(x[5]))
			if form == formPILead {
				t = b / (1 + math.Exp(x[5]))
			}
			num, den = lti.Poly{ki, ki * (a + b), ki * a * b}, lti.Poly{0, 1, t}
		case formPID:
			t := math.Max(scale*math.Exp(x[5]), 1/p.fastest())
			num, den = append(num, ki*a*a*math.Exp(x[4])), lti.Poly{0, 1, 2 * rollOffDamping * t, t * t}
		}
	}
	return continuous(num, den, p.period), f
}

// outerLattice calls try with the parameters that a search begins with, for an inner loop of the given steady gain.
func outerLattice(form string, level float64, try func(x ...float64)) {
	for _, lag := range []float64{0.03, 0.1, 0.25} {
		for _, ki := range []float64{0.1, 0.3, 0.8, 2, 5, 12} {
			lag, ki := math.Log(lag), math.Log(ki/level)
			if form == formI {
				try(lag, 0, ki)
				continue
			}
			for _, a := range []float64{0.03, 0.1, 0.25} {
				a := math.Log(a)
				switch form {
				case formPI:
					try(lag, 0, ki, a)
				case formPILag, formPILead:
					for _, b := range []float64{0.02, 0.07} {
						try(lag, 0, ki, a, math.Log(b), math.Log(3))
					}
				case formPID:
					for _, c := range []float64{0.1, 0.5} {
						try(lag, 0, ki, a, math.Log(c), math.Log(0.02))
					}
				}
			}
		}
	}
}
