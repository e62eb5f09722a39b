package lti

import (
	"math"
	"math/cmplx"
	"testing"
)

func jw(g TF) func(float64) complex128 {
	return func(w float64) complex128 { return g.At(complex(0, w)) }
}

const degree = math.Pi / 180

// L = 1/(s (s + 2 z)): phase margin atan(2z/sqrt(sqrt(1+4z^4)-2z^2)) and crossover (any control textbook); peak of |S|
// recomputed.
func TestMarginsSecondOrder(t *testing.T) {
	for _, c := range []struct{ z, phase, crossover, ms, at float64 }{
		{0.2, 22.6022841152727, 0, 0, 0}, {0.3, 33.2724909613031, 0, 0, 0}, {0.4, 43.1175979602412, 0, 0, 0},
		{0.5, 51.8272923729878, 0.786151377757423, 1.46788982501387, 1.16877087728}, {0.7, 65.1563934749626, 0, 0, 0},
		{0.4559498107691261, 0, 0, 1.53838113287178, 0},
		{1, 0, 0, 1.15470053837925, math.Sqrt2},
		{1 / math.Sqrt2, 0, 0, 1.272019649514069, 1.272019649514069},
	} {
		m := LoopMargins(jw(TF{Num: Poly{1}, Den: Poly{0, 2 * c.z, 1}}), 1e-3, 1e3, 0, 0)
		if !m.StableNominal || !math.IsInf(m.GainUp, 1) || m.GainDown != 0 {
			t.Errorf("z %g: %+v", c.z, m)
		}
		for _, v := range []struct {
			name      string
			got, want float64
			tol       float64
		}{
			{"phase", m.Phase / degree, c.phase, 1e-11}, {"crossover", m.Crossover, c.crossover, 1e-12},
			{"peak S", m.PeakS, c.ms, 1e-9}, {"at", m.PeakSAt, c.at, 1e-6}, // flat top: sqrt of rounding
		} {
			if v.want != 0 && !near(v.got/v.want, 1, v.tol) {
				t.Errorf("z %g, %s: got %.13g, want %.13g", c.z, v.name, v.got, v.want)
			}
		}
		// Delay margin is phase margin over crossover for a single crossover.
		if !near(m.Delay, m.Phase/m.Crossover, 1e-12) {
			t.Errorf("z %g: delay margin %g, want %g", c.z, m.Delay, m.Phase/m.Crossover)
		}
	}
}

// Gain margins both ways: Routh-Hurwitz, 1 < K < 25.65 for K/((s-1)(.1s+1)(.05s+1)), limit at w = sqrt(170); and with
// dead time, 1 < K < 15.0774318146657 (L = .1) … 1.37871552915943 (L = .8) for K e^{-Ls}/(s-1) (Silva, Datta &
// Bhattacharyya, PID Controllers for Time-Delay Systems, 2005).
func TestGainRanges(t *testing.T) {
	den := Poly{-1, 1}.Mul(Poly{1, 0.1}).Mul(Poly{1, 0.05})
	for _, c := range []struct {
		name   string
		g      TF
		lo, up float64
	}{
		{"third order", TF{Num: Poly{1}, Den: den}, 1, 25.65},
		{"dead time 0.1", TF{Num: Poly{1}, Den: Poly{-1, 1}, Delay: 0.1}, 1, 15.0774318146657},
		{"dead time 0.2", TF{Num: Poly{1}, Den: Poly{-1, 1}, Delay: 0.2}, 1, 7.22965477329368},
		{"dead time 0.5", TF{Num: Poly{1}, Den: Poly{-1, 1}, Delay: 0.5}, 1, 2.53655898923060},
		{"dead time 0.8", TF{Num: Poly{1}, Den: Poly{-1, 1}, Delay: 0.8}, 1, 1.37871552915943},
	} {
		for _, x := range []float64{0.2, 0.5, 0.9} {
			k := c.lo + x*(c.up-c.lo)
			l := c.g
			l.Num = l.Num.Scale(k)
			m := LoopMargins(jw(l), 1e-3, 1e3, 1)
			if !m.StableNominal || !near(m.GainUp*k/c.up, 1, 1e-12) || !near(m.GainDown*k/c.lo, 1, 1e-12) {
				t.Errorf("%s at %g: from %.13g to %.13g, want %.13g to %.13g, stable %v", c.name, k, m.GainDown*k, m.GainUp*k,
					c.lo, c.up, m.StableNominal)
			}
		}
		for _, k := range []float64{0.98 * c.lo, 1.02 * c.up} {
			l := c.g
			l.Num = l.Num.Scale(k)
			if m := LoopMargins(jw(l), 1e-3, 1e3, 1); m.StableNominal {
				t.Errorf("%s at %g: called stable", c.name, k)
			}
		}
	}
}

// Jury: 1/(s-p) sampled with a proportional gain, p < K < p coth(ph/2), and with one whole sample of delay
// p < K < p/(a-1).
func TestSampledGainRanges(t *testing.T) {
	const p, h = 1, 0.1
	for _, c := range []struct{ delay, up float64 }{{0, 20.0166638895501}, {h, 9.50833194477505}} {
		g := TF{Num: Poly{1}, Den: Poly{-p, 1}, Delay: c.delay}
		for _, k := range []float64{2, 5, 0.999 * c.up, 1.001 * c.up, 0.999, 1.001} {
			loops, err := NewTwoLoops(g, 0, &Law{Inner: Gain(k, h)})
			if err != nil {
				t.Fatal(err)
			}
			want := k > p && k < c.up
			if got := loops.Stable(); got != want {
				t.Errorf("delay %g, gain %g: eigenvalues say stable %v", c.delay, k, got)
			}
			m := LoopMargins(loops.LoopAtInput, 1e-3, math.Pi/h, 1)
			if m.StableNominal != want {
				t.Errorf("delay %g, gain %g: margins say stable %v", c.delay, k, m.StableNominal)
			}
			if want && (!near(m.GainUp*k/c.up, 1, 1e-12) || !near(m.GainDown*k/p, 1, 1e-12)) {
				t.Errorf("delay %g, gain %g: from %.13g to %.13g, want 1 to %.13g", c.delay, k, m.GainDown*k, m.GainUp*k, c.up)
			}
		}
	}
}

// What |S| and |T| guarantee, with equality at the real axis (Skogestad & Postlethwaite, Multivariable Feedback Control,
// sec. 2.4): any loop must obey it.
func TestMarginsObeyPeaks(t *testing.T) {
	for _, c := range []struct {
		name     string
		l        TF
		unstable int
		axis     []float64
	}{
		{"unstable", TF{Num: Poly{5}, Den: Poly{-1, 1}.Mul(Poly{1, 0.1})}, 1, nil},
		{"unstable with delay", TF{Num: Poly{1.57}, Den: Poly{-1, 1}, Delay: 0.3}, 1, nil},
		{"integrators with lead", TF{Num: Poly{1, 2.5}, Den: Poly{0, 0, 1, 0.1}}, 0, []float64{0, 0}},
		{"conditionally stable", TF{Num: Poly{8, 8, 2}, Den: Poly{0, 0, 0, 1, 0.01}}, 0, []float64{0, 0, 0}},
	} {
		m := LoopMargins(jw(c.l), 1e-3, 1e4, c.unstable, c.axis...)
		if !m.StableNominal {
			t.Errorf("%s: not stable: %+v", c.name, m)
		}
		const eps = 1e-9
		s, tt := m.PeakS, m.PeakT
		if m.GainUp < math.Max(s/(s-1), 1+1/tt)-eps || m.GainDown > math.Min(s/(s+1), 1-1/tt)+eps ||
			m.Phase < math.Max(2*math.Asin(1/(2*s)), 2*math.Asin(1/(2*tt)))-eps {
			t.Errorf("%s: %+v", c.name, m)
		}
	}
	// The best purely proportional gain for e^{-.3s}/(s-1) has |S| up to 1.9684 (Åström, Limitations on control system
	// performance, Eur. J. Control 6 (2000) 2-20, and recomputation), above the floor e^{0.3}.
	best := math.Inf(1)
	for k := 1.4; k < 1.75; k += 0.005 {
		m := LoopMargins(jw(TF{Num: Poly{k}, Den: Poly{-1, 1}, Delay: 0.3}), 1e-3, 1e3, 1)
		best = math.Min(best, m.PeakS)
	}
	if !near(best, 1.9684, 5e-4) { // grid of gains
		t.Errorf("best peak %.5f", best)
	}
}

// 1/(2z sqrt(1-z²)): any control textbook; a grid misses the last one (Bruinsma & Steinbuch, Systems & Control Letters 14
// (1990) 287-293, on why).
func TestPeak(t *testing.T) {
	for _, c := range []struct{ z, want float64 }{
		{0.1, 5.02518907629606}, {0.2, 2.55155181539914}, {0.3, 1.74714139453653}, {0.5, 1.15470053837925}, {1e-4, 5000.000025},
	} {
		g := TF{Num: Poly{1}, Den: Poly{1, 2 * c.z, 1}}
		got, at := Peak(jw(g), 1e-2, 137)
		if !near(got/c.want, 1, 1e-9) || !near(at, math.Sqrt(1-2*c.z*c.z), 1e-6) {
			t.Errorf("z %g: %.12g at %g, want %.12g", c.z, got, at, c.want)
		}
	}
	// A resonance so narrow that no point of the grid shows how high it is, far down the skirt of a broad one: exactly at
	// s = 10i the value is 30i/2e-4i/(-99 + 2i).
	g := TF{Num: Poly{100, 3, 1}, Den: Poly{1, 0.2, 1}.Mul(Poly{100, 2e-5, 1})}
	if got, at := Peak(jw(g), 1e-2, 137); !near(got*math.Hypot(99, 2)/1.5e5, 1, 1e-6) || !near(at, 10, 1e-5) {
		t.Errorf("narrow and far down: %g at %g", got, at)
	}
	// As a peak of |S|: closed loop with that damping, L = (1 - …)/… such that 1 + L = (s²+2zs+1)/(s+1)².
	const z = 1e-4
	l := TF{Num: Poly{0, 2*z - 2}, Den: Poly{1, 2, 1}}
	m := LoopMargins(jw(l), 1e-2, 100, 0)
	if want := 2.0 / (2 * z); !near(m.PeakS/want, 1, 1e-6) || !m.StableNominal { // |s+1|² = 2 at the resonance
		t.Errorf("narrow peak: %+v", m)
	}
}

// An undamped pair on the axis, held by a lead; the same sampled.
func TestMarginsAxisPoles(t *testing.T) {
	l := TF{Num: Poly{0, 3}, Den: Poly{9, 0, 1}} // closed loop s² + 3 s + 9
	if m := LoopMargins(jw(l), 1e-2, 1e3, 0, 3); !m.StableNominal {
		t.Errorf("held pair: %+v", m)
	}
	l.Num = Poly{0, -3}
	if m := LoopMargins(jw(l), 1e-2, 1e3, 0, 3); m.StableNominal {
		t.Errorf("driven pair called stable: %+v", m)
	}
}

// Bode's integral and its sampled form as a self-test of the loop evaluation (Freudenberg & Looze, IEEE Trans. Automatic
// Control 30 (1985) 555-565, 1988; Sung & Hara, Int. J. Control 48 (1988) 2429-2439).
func TestSensitivityIntegrals(t *testing.T) {
	integral := func(l func(float64) complex128, lo, hi float64) float64 {
		// In ln w, Simpson.
		const n = 20000
		d := math.Log(hi/lo) / n
		sum := 0.0
		for i := 0; i <= n; i++ {
			w := lo * math.Exp(d*float64(i))
			f := -math.Log(cmplx.Abs(1+l(w))) * w
			switch {
			case i == 0 || i == n:
				sum += f
			case i%2 == 1:
				sum += 4 * f
			default:
				sum += 2 * f
			}
		}
		return sum * d / 3
	}
	// Tails beyond lo and hi: ln|S| is bounded below lo, and falls like 1/w² above hi.
	l := jw(TF{Num: Poly{5}, Den: Poly{-1, 1}.Mul(Poly{1, 0.1})})
	if got := integral(l, 1e-8, 1e7); !near(got, math.Pi, 2e-5) {
		t.Errorf("relative degree 2: %.8f, want pi", got)
	}
	if got := integral(jw(TF{Num: Poly{3}, Den: Poly{-1, 1}}), 1e-8, 1e7); !near(got, -math.Pi/2, 2e-5) {
		t.Errorf("relative degree 1: %.8f, want -pi/2", got)
	}
	// S = (z-1.25)/(z-.5) comes from L = .75/(z-1.25).
	d := DTF{Num: Poly{0, 0.75}, Den: Poly{1, -1.25}, Period: 1}
	if got := 2 * integral(d.At, 1e-9, math.Pi); !near(got, 1.402052283009317, 1e-8) {
		t.Errorf("sampled: %.12f", got)
	}
}

// What a proof pays per plant: a third-order plant with delay, both loops.
func BenchmarkProofPlant(b *testing.B) {
	const h = 0.001
	g := TF{Num: Poly{-900 * 250}, Den: Poly{-900, 0, 1}.Mul(Poly{250, 1}), Delay: 0.0013}
	outer := Tustin(TF{Num: Poly{2, 0.3}, Den: Poly{0, 1}}, h)
	law := &Law{Inner: Tustin(TF{Num: Poly{-2.5, -0.08}, Den: Poly{1, 0.002}}, h), Outer: &outer}
	loops, err := NewTwoLoops(g, 0, law)
	if err != nil {
		b.Fatal(err)
	}
	b.Run("sample", func(b *testing.B) {
		for b.Loop() {
			_, _ = NewTwoLoops(g, 0, law)
		}
	})
	b.Run("poles", func(b *testing.B) {
		for b.Loop() {
			loops.Poles()
		}
	})
	b.Run("margins", func(b *testing.B) {
		for b.Loop() {
			LoopMargins(loops.LoopAtInput, 0.1, math.Pi/h, 1, 0)
		}
	})
	b.Run("noise", func(b *testing.B) {
		for b.Loop() {
			_, _ = loops.NoiseCovariance(1)
		}
	})
}
