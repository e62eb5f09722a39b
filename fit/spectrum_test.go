package fit_test

import (
	"math"
	"math/cmplx"
	"testing"

	"steadyrig/fit"
	"steadyrig/fit/fittest"
)

func nearC(t *testing.T, what string, got, want complex128, rel float64) {
	t.Helper()
	if !(cmplx.Abs(got-want) <= rel*cmplx.Abs(want)) {
		t.Errorf("%s: %.12g, want %.12g within %g relative", what, got, want, rel)
	}
}

// Values of an independent signal-processing library on the same data, under the same conventions (Welch 1967).
func TestWelch(t *testing.T) {
	d := fittest.D1()
	s, err := fit.Welch([][]float64{d.U}, [][]float64{d.Y}, 1, 256)
	if err != nil {
		t.Fatal(err)
	}
	if s.Segments != 6 {
		t.Errorf("%d segments, want 6", s.Segments)
	}
	coh := s.Coherence()
	for _, c := range []struct {
		bin      int
		uu, yy   float64 // 0: not given
		uy, h    complex128
		coherent float64
	}{
		{8, 2.6585774256e+06, 1.8357611831e+08, 1.9603967452e+07 - 9.2065440619e+06i, 7.3738561321 - 3.4629587889i, 0.9611202150},
		{32, 2.7851627649e+06, 3.5039774343e+07, -9.1321165596e+06 - 3.5447965035e+06i, -3.2788448397 - 1.2727430325i, 0.9832942407},
		{64, 0, 0, 0, -0.6476725467 + 0.1083465865i, 0.9483233148},
		{128, 1.7212797569e+06, 6.1534849634e+04, 0, -0.1493483594, 0.6239233372},
	} {
		if c.uu != 0 {
			near(t, "Puu", s.XX[c.bin], c.uu, 1e-9)
			near(t, "Pyy", s.YY[c.bin], c.yy, 1e-9)
		}
		if c.uy != 0 {
			nearC(t, "Puy", s.XY[c.bin], c.uy, 1e-9)
		}
		nearC(t, "H", s.XY[c.bin]/complex(s.XX[c.bin], 0), c.h, 1e-8)
		near(t, "coherence", coh[c.bin], c.coherent, 1e-9)
		near(t, "omega", s.Omega[c.bin], 2*math.Pi*float64(c.bin)/256, 1e-15)
	}
	// Welch 1967: equivalent degrees of freedom of 6 half-overlapping Hann segments.
	near(t, "degrees of freedom", 2*s.EffectiveSegments(), 11.4690265487, 1e-11)
}

// Without power from outside, u = -2 y, the quotient is minus the inverse controller at every frequency (Söderström &
// Stoica 1989; Wellstead, Non-parametric methods of system identification, Automatica 17 (1981) 55-69).
func TestQuotientWithoutOutsidePower(t *testing.T) {
	d := fittest.D2z()
	s, err := fit.Welch([][]float64{d.U}, [][]float64{d.Y}, 1, 200)
	if err != nil {
		t.Fatal(err)
	}
	for k := 1; k < len(s.Omega); k++ {
		nearC(t, "quotient", s.XY[k]/complex(s.XX[k], 0), -0.5, 4e-16)
	}
}

// Closed loop with noise: the direct quotient misses the plant, the one by the reference does not. Values of an
// independent signal-processing library; the limit of the direct quotient is (G R - conj(K) V)/(R + |K|^2 V), R and V the
// spectra of reference and noise (Ljung 1999, section 13.3; Akaike 1967).
func TestDirectAndInstrumentalQuotient(t *testing.T) {
	d := fittest.D2()
	uy, err := fit.Welch([][]float64{d.U}, [][]float64{d.Y}, 1, 200)
	if err != nil {
		t.Fatal(err)
	}
	ry, err := fit.Welch([][]float64{d.R}, [][]float64{d.Y}, 1, 200)
	if err != nil {
		t.Fatal(err)
	}
	ru, err := fit.Welch([][]float64{d.R}, [][]float64{d.U}, 1, 200)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		bin                int
		direct, instrument complex128
	}{
		{2, -0.57103790 + 0.01621255i, -1.81499043 + 0.30011225i},
		{10, -0.56302717 - 0.19693240i, -0.70742880 - 0.64812444i},
		{50, -0.35754734 - 0.05664131i, -0.16017992 - 0.13511755i},
	} {
		nearC(t, "direct", uy.XY[c.bin]/complex(uy.XX[c.bin], 0), c.direct, 1e-7)
		nearC(t, "by reference", ry.XY[c.bin]/ru.XY[c.bin], c.instrument, 1e-7)
	}
}

// 1 - 0.05^(1/(n-1)): Carter, Knapp & Nuttall 1973.
func TestCoherenceThreshold(t *testing.T) {
	for n, want := range map[float64]float64{4: 0.631596850136, 8: 0.348163655131, 14: 0.205816665187, 32: 0.092114059947} {
		near(t, "threshold", fit.CoherenceThreshold(n, 0.95), want, 1e-11)
	}
}
