package lti

import (
	"math"
	"math/rand/v2"
	"testing"
)

// zPowers returns the sampled polynomials in powers of q^-1, whole delay left
// out.
func zPowers(d Delta) (a, b []float64) {
	return Shift(nil, d.A), ShiftInput(d.B0, d.B1)
}

// The closed forms are in Åström & Wittenmark, Computer-Controlled Systems,
// table 2.1 and sec. 2.3 (check values D01, D03, D04, D05, D08).
func TestSampleDeltaClosedForms(t *testing.T) {
	tests := []struct {
		name          string
		num, den      Poly
		delay, period float64
		a, b          []float64
	}{
		{"unstable first order", Poly{3}, Poly{-2, 1}, 0, 0.1, []float64{1, -1.22140275816017}, []float64{0, 0.332104137240255, 0}},
		{"oscillator", Poly{9}, Poly{9, 0, 1}, 0, 0.1, []float64{1, -1.91067297825121, 1}, []float64{0, 0.0446635108743940, 0.0446635108743940, 0}},
		{"pendulum", Poly{9}, Poly{-9, 0, 1}, 0, 0.1, []float64{1, -2.09067702825772, 1}, []float64{0, 0.0453385141288605, 0.0453385141288605, 0}},
		{"damped", Poly{4}, Poly{4, 1.2, 1}, 0, 0.2, []float64{1, -1.64626451863361, 0.786627861066553}, []float64{0, 0.0730012634923610, 0.0673620789405785, 0}},
		{"fractional delay", Poly{1}, Poly{1, 1}, 0.3, 1, []float64{1, -0.367879441171442}, []float64{0, 0.503414696208591, 0.128705862619967}},
		{"fractional delay, unstable", Poly{1}, Poly{-1, 1}, 0.05, 0.2, []float64{1, -1.22140275816017}, []float64{0, 0.161834242728283, 0.0595685154318867}},
		{"double integrator", Poly{1}, Poly{0, 0, 1}, 0, 0.5, []float64{1, -2, 1}, []float64{0, 0.125, 0.125, 0}},
	}
	for _, test := range tests {
		t.Run(test.name, func(t *testing.T) {
			a, b := zPowers(SampleDelta(test.num, test.den, test.delay, test.period))
			for i, want := range test.a {
				if d := math.Abs(a[i] - want); !(d <= 2e-14) {
					t.Errorf("a[%d] = %.15g, want %.15g", i, a[i], want)
				}
			}
			for i, want := range test.b {
				if d := math.Abs(b[i] - want); !(d <= 2e-15) {
					t.Errorf("b[%d] = %.15g, want %.15g", i, b[i], want)
				}
			}
		})
	}
}

// Derivatives against central differences of the coefficients themselves. The
// differences are good to about 1e-9 of the largest entry of their row.
func TestSampleDeltaDerivatives(t *testing.T) {
	rnd := rand.New(rand.NewPCG(1, 1))
	for trial := range 40 {
		n := 1 + trial%5
		m := rnd.IntN(n)
		num, den := make(Poly, m+1), make(Poly, n+1)
		for i := range num {
			num[i] = rnd.NormFloat64()
		}
		for i := range n {
			den[i] = rnd.NormFloat64()
		}
		den[n] = 1
		period := math.Exp(rnd.NormFloat64()) * 0.1
		delay := period * (float64(rnd.IntN(4)-1) + 0.1 + 0.8*rnd.Float64())
		d := SampleDelta(num, den, delay, period)
		for k := range m + 1 + n + 1 {
			at := func(eps float64) Delta {
				nu, de, tau := append(Poly(nil), num...), append(Poly(nil), den...), delay
				switch {
				case k <= m:
					nu[k] += eps
				case k <= m+n:
					de[n-(k-m)] += eps
				default:
					tau += eps * period
				}
				return SampleDelta(nu, de, tau, period)
			}
			const eps = 1e-5
			up, down := at(eps), at(-eps)
			unit := 1.0
			if k == m+n+1 {
				unit = period
			}
			check := func(name string, got, hi, lo []float64) {
				var size float64
				for i := range got {
					size = math.Max(size, math.Abs(hi[i])/unit)
					size = math.Max(size, math.Abs(got[i]))
				}
				for i := range got {
					want := (hi[i] - lo[i]) / (2 * eps * unit)
					if diff := math.Abs(got[i] - want); !(diff <= 1e-8*size) {
						t.Errorf("trial %d: %s[%d] along parameter %d = %g, differences give %g", trial, name, i, k, got[i], want)
					}
				}
			}
			check("A", d.DA[k], up.A, down.A)
			check("B0", d.DB0[k], up.B0, down.B0)
			check("B1", d.DB1[k], up.B1, down.B1)
		}
	}
}

// In powers of δ a plant sampled a thousand times faster than its poles keeps
// its relative precision: for b/(s-a), A[1] is exactly -(e^{ah} - 1).
func TestSampleDeltaKeepsPrecision(t *testing.T) {
	d := SampleDelta(Poly{1}, Poly{-1, 1}, 0, 1e-6)
	if want := -math.Expm1(1e-6); math.Abs(d.A[1]/want-1) > 4e-16 {
		t.Errorf("A[1] = %.17g, want %.17g", d.A[1], want)
	}
	// (s-1)(s-1/2): the last coefficient is the product of the two.
	d = SampleDelta(Poly{1}, Poly{0.5, -1.5, 1}, 0, 1e-6)
	if want := math.Expm1(1e-6) * math.Expm1(0.5e-6); math.Abs(d.A[2]/want-1) > 1e-9 {
		t.Errorf("A[2] = %.17g, want %.17g", d.A[2], want)
	}
}

func TestShiftRoundTrip(t *testing.T) {
	rnd := rand.New(rand.NewPCG(2, 2))
	for n := 1; n < 8; n++ {
		c := make([]float64, n)
		for i := range c {
			c[i] = rnd.NormFloat64()
		}
		back := Unshift(Shift(nil, c))
		for i := range c {
			if math.Abs(back[i]-c[i]) > 1e-12 {
				t.Errorf("n %d: coefficient %d comes back as %g, went as %g", n, i, back[i], c[i])
			}
		}
	}
}
