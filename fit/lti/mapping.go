package lti

import (
	"math"
	"math/cmplx"
)

// Mappings of a continuous controller to a sample period, beside Tustin and Prewarped. All keep the order, and what is
// cancelled in g stays cancelled and there. Sources: Franklin, Powell & Workman, Digital Control of Dynamic Systems,
// 3rd ed. 1998, ch. 6; Åström & Wittenmark, Computer-Controlled Systems, 3rd ed. 1997, sec. 8.2. g must have no delay,
// be proper and not zero; period in s.

// Matched maps poles and zeros by z = e^{s period} and zeros at infinity to z = -1. The gain is that of g as s goes to 0,
// with a pole or zero at 0 divided out as often as there are, (z - 1)/period for s.
func Matched(g TF, period float64) DTF {
	checkMapped(g, period)
	k := g.ZPK()
	far := len(k.Poles) - len(k.Zeros)
	gain := complex(k.Gain, 0)
	// 1 - e^{r period} stands for -r: its share of the gain near s = 0.
	image := func(roots []complex128) (moved []complex128, share complex128) {
		share = 1
		for _, r := range roots {
			z := cmplx.Exp(r * complex(period, 0))
			moved = append(moved, z)
			if r == 0 {
				share *= complex(period, 0)
			} else {
				share *= (1 - z) / -r
			}
		}
		return moved, share
	}
	zeros, a := image(k.Zeros)
	poles, b := image(k.Poles)
	gain *= b / a / complex(math.Pow(2, float64(far)), 0)
	for range far {
		zeros = append(zeros, -1)
	}
	return DTF{
		Num: FromRoots(pairUp(zeros)).Scale(real(gain)).reversed(), Den: FromRoots(pairUp(poles)).reversed(), Period: period,
	}
}

// StepInvariant answers steps as g does at the samples: the zero-order-hold equivalent.
func StepInvariant(g TF, period float64) (DTF, error) {
	checkMapped(g, period)
	return ZOHTF(g, period)
}

// RampInvariant answers ramps as g does at the samples: the first-order-hold ("triangle") equivalent,
// (z-1)^2/(period z) Z{g/s^2} = (z-1)/period ZOH(g/s).
func RampInvariant(g TF, period float64) (DTF, error) {
	checkMapped(g, period)
	itself, err := ZOHTF(g, period)
	if err != nil {
		return DTF{}, err
	}
	integral, err := ZOHTF(TF{Num: g.Num, Den: g.Den.Mul(Poly{0, 1})}, period)
	if err != nil {
		return DTF{}, err
	}
	return DTF{Num: integral.Num[1:].Scale(1 / period), Den: itself.Den, Period: period}, nil
}

func checkMapped(g TF, period float64) {
	switch {
	case !(period > 0):
		panic(badPeriod)
	case g.Delay != 0:
		panic(badDelay)
	case g.Den.Degree() < 0 || g.Num.Degree() < 0:
		panic(badPoly)
	case g.RelDegree() < 0:
		panic(improper)
	}
}
