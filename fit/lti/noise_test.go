package lti

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"
)

// ARX(1,1) in closed loop, u = -K y: var y = lam/(1 - (a - b K)²), var u = K² var y (Gustavsson, Ljung & Söderström,
// Automatica 13 (1977) 59-75; algebra), a 1.25, b 0.5, K 2, lam 0.25.
func TestNoiseCovarianceARX(t *testing.T) {
	const h, a, b, k = 0.1, 1.25, 0.5, 2
	p := math.Log(a) / h
	plant := TF{Num: Poly{b * p / (a - 1)}, Den: Poly{-p, 1}}
	g, err := NoisyPlant(plant, DTF{Num: Poly{1}, Den: Poly{1}, Period: h})
	if err != nil {
		t.Fatal(err)
	}
	cov, err := TwoLoops{Plant: g, Inner: Gain(k, h)}.NoiseCovariance(0.5)
	if err != nil {
		t.Fatal(err)
	}
	want := 0.25 / (1 - 0.0625)
	if !near(cov.At(ToOutput, ToOutput), want, 1e-14) || !near(cov.At(ToInput, ToInput), k*k*want, 1e-13) {
		t.Errorf("variances %g, %g; want %g, %g", cov.At(ToOutput, ToOutput), cov.At(ToInput, ToInput), want, k*k*want)
	}
	// White noise on the sensor alone: x+ = (a - bK) x - bK n.
	loops, err := NewTwoLoops(plant, 0, &Law{Inner: Gain(k, h)})
	if err != nil {
		t.Fatal(err)
	}
	if cov, err = loops.NoiseCovariance(0.5); err != nil {
		t.Fatal(err)
	}
	vx := 0.25 / (1 - 0.0625)
	if !near(cov.At(ToOutput, ToOutput), vx, 1e-14) || !near(cov.At(ToInput, ToInput), k*k*(vx+0.25), 1e-13) {
		t.Errorf("sensor noise: %g, %g", cov.At(ToOutput, ToOutput), cov.At(ToInput, ToInput))
	}
}

var noisy = []struct {
	name  string
	plant TF
	h     float64
	shape DTF
}{
	{"pendulum with lag, colour", TF{Num: Poly{180}, Den: Poly{-9, 0, 1}.Mul(Poly{20, 1}), Delay: 0.013}, 0.02,
		DTF{Num: FromRoots([]complex128{0.9, 0.8, 0.5, -0.3}).reversed(), Den: Poly{1, -0.95}}},
	{"no colour", TF{Num: Poly{9}, Den: Poly{-9, 0, 1}}, 0.02, DTF{Num: FromRoots([]complex128{0.9, 0.7}).reversed(), Den: Poly{1}}},
	{"white equation error", TF{Num: Poly{9}, Den: Poly{-9, 0, 1}}, 0.02, DTF{Num: Poly{1}, Den: Poly{1}}},
	{"short numerator, two colour poles", TF{Num: Poly{9, 1}, Den: Poly{-9, 0, 1}, Delay: 0.04}, 0.02,
		DTF{Num: Poly{1, -0.5}, Den: FromRoots([]complex128{complex(0.8, 0.3), complex(0.8, -0.3)}).reversed()}},
	{"fast sampling", TF{Num: Poly{180}, Den: Poly{-9, 0, 1}.Mul(Poly{20, 1})}, 0.0005,
		DTF{Num: FromRoots([]complex128{0.99, 0.998, 0.95}).reversed(), Den: Poly{1}}},
}

// y from u and from e against B/A and C/(A D) evaluated as products over poles.
func TestNoisyPlant(t *testing.T) {
	for _, c := range noisy {
		c.shape.Period = c.h
		g, err := NoisyPlant(c.plant, c.shape)
		if err != nil {
			t.Fatal(err)
		}
		for _, w := range []float64{0.05, 1, 7, 100} {
			q := cmplx.Exp(complex(0, -w*c.h))
			a := complex(1, 0)
			for _, p := range c.plant.Poles() {
				a *= 1 - q*cmplx.Exp(p*complex(c.h, 0))
			}
			want := c.shape.At(w) / a
			got := pick(g, 0, 1).At(w)
			// c.shape.At loses eps/|C|.
			tol := 1e-13 + 1e-15/cmplx.Abs(c.shape.Num.Eval(q)) + 1e-15/cmplx.Abs(a)
			if e := cmplx.Abs(got-want) / cmplx.Abs(want); !(e < 10*tol) {
				t.Errorf("%s at %g: from e %v, want %v (%.1e)", c.name, w, got, want, e)
			}
			z, err := ZOH(c.plant, c.h)
			if err != nil {
				t.Fatal(err)
			}
			if v := z.At(w); cmplx.Abs(pick(g, 0, 0).At(w)-v) > 1e-11*cmplx.Abs(v) {
				t.Errorf("%s at %g: from u %v, want %v", c.name, w, pick(g, 0, 0).At(w), v)
			}
		}
		if n := len(g.Poles()); n != c.plant.Den.Degree()+tapsOf(t, c.plant, c.h)+c.shape.Den.Degree() {
			t.Errorf("%s: %d states: the noise must share the plant's", c.name, n)
		}
	}
}

func tapsOf(t *testing.T, g TF, h float64) int {
	p, err := sample(g, h)
	if err != nil {
		t.Fatal(err)
	}
	return p.taps()
}

// The simulated innovations against the difference equation A D y = B D u + C e, run beside it on the recorded input.
func TestInnovationsDifferenceEquation(t *testing.T) {
	const n = 300
	for _, c := range noisy[:4] {
		c.shape.Period = c.h
		rng := rand.New(rand.NewPCG(11, 1))
		e := make([]float64, n)
		for i := range e {
			e[i] = 0.01 * rng.NormFloat64()
		}
		// A lead that holds both plants.
		law := &Law{Inner: Tustin(TF{Num: Poly{4, 0.9}, Den: Poly{1, 0.01}}, c.h), InputLimits: [2]float64{-3, 3}, U0: 1, Y0: 2}
		tr, err := Run{Plant: c.plant, Period: c.h, Law: law, Steps: n, Innovations: e, Shape: &c.shape}.Simulate()
		if err != nil {
			t.Fatal(err)
		}
		g, err := ZOHTF(c.plant, c.h)
		if err != nil {
			t.Fatal(err)
		}
		ad, bd := g.Den.Mul(c.shape.Den), g.Num.Mul(c.shape.Den)
		y := make([]float64, n)
		at := func(x []float64, k int) float64 {
			if k < 0 || k >= len(x) {
				return 0
			}
			return x[k]
		}
		for k := range n {
			for i, v := range c.shape.Num {
				y[k] += v * at(e, k-i)
			}
			for i, v := range bd {
				if k-i >= 0 {
					y[k] += v * (tr.U[k-i] - 1)
				}
			}
			for i, v := range ad[1:] {
				// The recorded output keeps the unstable equation from running away.
				if k-1-i >= 0 {
					y[k] -= v * (tr.Y[k-1-i] - 2)
				}
			}
			if !near(tr.Y[k]-2, y[k], 1e-11*(1+math.Abs(y[k]))) {
				t.Errorf("%s, row %d: y %.15g, the equation gives %.15g", c.name, k, tr.Y[k]-2, y[k])
				break
			}
			if !near(tr.Y[k]-tr.YTrue[k], e[k], 1e-15*(10+math.Abs(tr.Y[k]))) {
				t.Errorf("%s, row %d: y less y without its own innovation %g, want %g", c.name, k, tr.Y[k]-tr.YTrue[k], e[k])
				break
			}
		}
	}
}

// The covariance in the loop against a long simulated run.
func TestNoiseCovarianceSimulated(t *testing.T) {
	const n, sd = 200000, 0.01
	c := noisy[0]
	c.shape.Period = c.h
	c.plant.Delay = 0.005
	law := &Law{Inner: Tustin(TF{Num: Poly{6, 1.5}, Den: Poly{1, 0.01}}, c.h)}
	g, err := NoisyPlant(c.plant, c.shape)
	if err != nil {
		t.Fatal(err)
	}
	cov, err := TwoLoops{Plant: g, Inner: law.Inner}.NoiseCovariance(sd)
	if err != nil {
		t.Fatal(err)
	}
	rng := rand.New(rand.NewPCG(5, 5))
	e := make([]float64, n)
	for i := range e {
		e[i] = sd * rng.NormFloat64()
	}
	tr, err := Run{Plant: c.plant, Period: c.h, Law: law, Steps: n, Innovations: e, Shape: &c.shape}.Simulate()
	if err != nil {
		t.Fatal(err)
	}
	for _, v := range []struct {
		name string
		x    []float64
		want float64
	}{{"y", tr.Y, cov.At(ToOutput, ToOutput)}, {"u", tr.U, cov.At(ToInput, ToInput)}} {
		s := 0.0
		for _, x := range v.x {
			s += x * x
		}
		// Some 100 samples of correlation: deviation of the ratio about sqrt(2*100/n) = 3 %; four of them.
		if r := s / n / v.want; !near(r, 1, 0.12) {
			t.Errorf("variance of %s: ratio %.3f to the computed one", v.name, r)
		}
	}
}

func TestEquationShape(t *testing.T) {
	for _, c := range noisy {
		c.shape.Period = c.h
		a := deltaDen(c.plant, c.h).shift(-1).reversed()
		h := DTF{Num: c.shape.Num, Den: a.Mul(c.shape.Den), Period: c.h}
		got, err := EquationShape(h, c.plant)
		if err != nil {
			t.Fatalf("%s: %v", c.name, err)
		}
		wantPoly(t, c.name+" den", got.Den, c.shape.Den, 1e-6) // at fast sampling h.Den holds few digits
		wantPoly(t, c.name+" num", got.Num, c.shape.Num, 0)
		other := c.plant
		other.Den = Poly{-16, 0, 1}
		if _, err := EquationShape(h, other); err == nil {
			t.Errorf("%s: the denominator of another plant: no error", c.name)
		}
	}
}
