package lti

import (
	"math"
	"math/cmplx"
	"testing"

	"gonum.org/v1/gonum/mat"
)

func diag(v ...float64) *mat.Dense {
	m := mat.NewDense(len(v), len(v), nil)
	for i, x := range v {
		m.Set(i, i, x)
	}
	return m
}

func column(v ...float64) *mat.Dense { return mat.NewDense(len(v), 1, v) }

func scaled(k float64, rows [][]float64) [][]float64 {
	out := make([][]float64, len(rows))
	for i, r := range rows {
		for _, v := range r {
			out[i] = append(out[i], k*v)
		}
	}
	return out
}

func wantPoles(t *testing.T, got []complex128, want []complex128, tol float64) {
	t.Helper()
	if len(got) != len(want) {
		t.Fatalf("poles %v, want %v", got, want)
	}
	for i, w := range want {
		if !(cmplx.Abs(got[i]-w) <= tol) {
			t.Errorf("poles %v, want %v", got, want)
			return
		}
	}
}

// Benner, Laub & Mehrmann, A collection of benchmark examples for the numerical solution of algebraic Riccati equations
// I: continuous-time case, TU Chemnitz SPC 95_22, 1995 (CAREX; numbers from 2.1 on from memory), and closed forms.
func TestCARE(t *testing.T) {
	sqrt := math.Sqrt
	q24 := [][]float64{{9, 6}, {6, 4}}
	x23 := func(e float64) [][]float64 {
		q := sqrt(1 + e*e)
		return [][]float64{{(1 + q) / (e * e), 1 / (2 + q)}, {1 / (2 + q), (1 - e*e/((2+q)*(2+q))) / 4}}
	}
	x24 := func(e float64) [][]float64 {
		return [][]float64{{sqrt(1+2*e) / e, 1}, {1, sqrt(1 + 2*e)}}
	}
	x25 := func(e float64) [][]float64 {
		x1 := (2*(1+e) + sqrt(2*(1+e)*(1+e)+2) + sqrt(2)*e) / 2
		x2 := x1 / (x1 - (1 + e))
		return [][]float64{{x1, x2}, {x2, x1}}
	}
	one := diag(1)
	for _, c := range []struct {
		name       string
		a, b, q, r *mat.Dense
		want       [][]float64
		tol        float64
	}{
		{"CAREX 1.1", dense([]float64{0, 1}, []float64{0, 0}), column(0, 1), diag(1, 2), one, [][]float64{{2, 1}, {1, 2}}, 1e-12},
		{"CAREX 1.2", dense([]float64{4, 3}, []float64{-4.5, -3.5}), column(1, -1), dense(q24[0], q24[1]), one,
			scaled(1+sqrt(2), q24), 1e-12},
		{"CAREX 2.1, e 1", diag(1, -2), column(1, 0), dense([]float64{1, 1}, []float64{1, 1}), one, x23(1), 1e-12},
		{"CAREX 2.1, e 1e-6", diag(1, -2), column(1e-6, 0), dense([]float64{1, 1}, []float64{1, 1}), one, x23(1e-6), 1e-10},
		{"CAREX 2.3, e 1", dense([]float64{0, 1}, []float64{0, 0}), column(0, 1), diag(1, 1), one, x24(1), 1e-12},
		{"CAREX 2.3, e 1e-3", dense([]float64{0, 1e-3}, []float64{0, 0}), column(0, 1), diag(1, 1), one, x24(1e-3), 1e-10},
		{"CAREX 2.4, e 1", dense([]float64{2, 1}, []float64{1, 2}), diag(1, 1), diag(1, 1), diag(1, 1), x25(1), 1e-12},
		// Costs near zero put the closed-loop poles within 1e-3 of their mirror images.
		{"CAREX 2.4, e 1e-3", dense([]float64{1.001, 1}, []float64{1, 1.001}), diag(1, 1), diag(1e-6, 1e-6), diag(1, 1), x25(1e-3), 1e-10},
		// Q = [[4e - 11, 2e - 5], [2e - 5, 2e - 2]], e = 1.
		{"CAREX 2.5, e 1", dense([]float64{2, 1}, []float64{4, 1}), column(1, 1), dense([]float64{4 - 11, 2 - 5}, []float64{2 - 5, 2 - 2}), one,
			[][]float64{{2, 1}, {1, 1}}, 1e-10},
		// LQR of x'' = p2 x + u (Anderson & Moore): X22 = sqrt(2 X12 + q2), X11 = X22 (X12 - p2).
		{"pendulum p2 1", dense([]float64{0, 1}, []float64{1, 0}), column(0, 1), diag(1, 0), one,
			[][]float64{{3.10754794806007, 2.41421356237310}, {2.41421356237310, 2.19736822693562}}, 1e-12},
		{"pendulum p2 9", dense([]float64{0, 1}, []float64{9, 0}), column(0, 1), diag(1, 0), one,
			[][]float64{{math.Sqrt(2*(9+sqrt(82))) * sqrt(82), 9 + sqrt(82)}, {9 + sqrt(82), math.Sqrt(2 * (9 + sqrt(82)))}}, 1e-12},
		{"pendulum p2 20.601", dense([]float64{0, 1}, []float64{20.601, 0}), column(0, 1), diag(1, 1), one,
			[][]float64{{188.416557552460, 41.2262563862852}, {41.2262563862852, 9.13523468623387}}, 1e-12},
		// Least energy mirrors the poles (Kwakernaak & Sivan, Linear Optimal Control Systems, 1972, sec. 3.8).
		{"least energy", dense([]float64{0, 1}, []float64{9, 0}), column(0, 1), diag(0, 0), one,
			[][]float64{{54, 18}, {18, 6}}, 1e-11},
	} {
		t.Run(c.name, func(t *testing.T) {
			x, k, err := CARE(c.a, c.b, c.q, c.r)
			if err != nil {
				t.Fatal(err)
			}
			wantMatrix(t, x, c.want, c.tol)
			for _, p := range eigenvalues(closed(c.a, c.b, k)) {
				if real(p) >= 0 {
					t.Errorf("closed-loop pole %v", p)
				}
			}
		})
	}
	// Gains and closed-loop poles of the same.
	for _, c := range []struct {
		name    string
		a, b, q *mat.Dense
		k       []float64
		poles   []complex128
		tol     float64
	}{
		// A double pole scatters by the root of the rounding.
		{"CAREX 1.1", dense([]float64{0, 1}, []float64{0, 0}), column(0, 1), diag(1, 2), []float64{1, 2}, []complex128{-1, -1}, 1e-6},
		{"CAREX 1.2", dense([]float64{4, 3}, []float64{-4.5, -3.5}), column(1, -1), dense(q24[0], q24[1]),
			[]float64{7.24264068711929, 4.82842712474619}, []complex128{complex(-sqrt(2), 0), -0.5}, 1e-10},
		{"CAREX 2.1, e 1e-6", diag(1, -2), column(1e-6, 0), dense([]float64{1, 1}, []float64{1, 1}),
			[]float64{2000000.0000005, 0.333333333333278e-6}, []complex128{-2, -1}, 1e-6},
		{"pendulum p2 20.601", dense([]float64{0, 1}, []float64{20.601, 0}), column(0, 1), diag(1, 1),
			[]float64{41.2262563862852, 9.13523468623387}, []complex128{-5.05533837696, -4.07989630927}, 1e-10},
		{"least energy", dense([]float64{0, 1}, []float64{9, 0}), column(0, 1), diag(0, 0), []float64{18, 6}, []complex128{-3, -3}, 1e-6},
	} {
		_, k, err := CARE(c.a, c.b, c.q, one)
		if err != nil {
			t.Fatal(c.name, err)
		}
		wantMatrix(t, k, [][]float64{c.k}, 1e-12)
		p := eigenvalues(closed(c.a, c.b, k))
		sortRoots(p)
		wantPoles(t, p, c.poles, c.tol)
	}
	// CAREX 2.5 with e = 0: Hamiltonian eigenvalues on the axis.
	if x, _, err := CARE(dense([]float64{3, 1}, []float64{4, 2}), column(1, 1), dense([]float64{-11, -5}, []float64{-5, -2}), one); err == nil {
		t.Errorf("eigenvalues on the axis: no refusal, x = %v", mat.Formatted(x))
	}
	// A mode that no input reaches and that is unstable.
	if _, _, err := CARE(diag(1, 2), column(1, 0), diag(1, 1), one); err == nil {
		t.Error("unreachable unstable mode: no refusal")
	}
}

// Benner, Laub & Mehrmann, ditto II: discrete-time case, SPC 95_23, 1995 (DAREX; numbers but the first from memory), and
// closed forms; the sampled pendulum recomputed with 50 digits.
func TestDARE(t *testing.T) {
	golden := (1 + math.Sqrt(5)) / 2
	ch, sh := math.Cosh(0.15), math.Sinh(0.15)
	one := diag(1)
	q := [][]float64{{9, 6}, {6, 4}}
	for _, c := range []struct {
		name       string
		a, b, q, r *mat.Dense
		want       [][]float64
		k          []float64
		poles      []complex128
		tol        float64
	}{
		{"DAREX 1.1", dense([]float64{4, 3}, []float64{-4.5, -3.5}), column(1, -1), dense(q[0], q[1]), one, scaled(golden, q),
			[]float64{1.85410196624969, 1.23606797749979}, []complex128{-0.5, 0.381966011250105}, 1e-12},
		{"singular A", dense([]float64{0, 1}, []float64{0, 0}), column(0, 1), dense([]float64{1, 2}, []float64{2, 4}), one,
			[][]float64{{1, 2}, {2, 2 + math.Sqrt(5)}}, []float64{0, 0.381966011250105}, []complex128{-0.381966011250105, 0}, 1e-12},
		{"badly scaled", dense([]float64{0, 1e6}, []float64{0, 0}), column(0, 1), diag(1, 1), one,
			[][]float64{{1, 0}, {0, 1e12 + 1}}, []float64{0, 0}, []complex128{0, 0}, 1e-12},
		{"scalar, q 1", diag(1.25), column(0.5), one, one, [][]float64{{4.2019410160110378}}, []float64{1.2807764064044151},
			[]complex128{0.60961179679779243}, 1e-13},
		{"scalar, q 0", diag(1.25), column(0.5), diag(0), one, [][]float64{{2.25}}, []float64{0.9}, []complex128{0.8}, 1e-13},
		{"sampled pendulum", dense([]float64{ch, sh / 3}, []float64{3 * sh, ch}), column((ch-1)/9, sh/3), diag(1, 1), one,
			[][]float64{{1105.9440563066668, 361.84100742418524}, {361.84100742418524, 122.61387432156286}},
			[]float64{16.77620020076007, 5.650372023741338}, []complex128{0.838713548699, 0.879239833027}, 1e-9},
	} {
		t.Run(c.name, func(t *testing.T) {
			x, k, err := DARE(c.a, c.b, c.q, c.r)
			if err != nil {
				t.Fatal(err)
			}
			wantMatrix(t, x, c.want, c.tol)
			wantMatrix(t, k, [][]float64{c.k}, c.tol)
			p := eigenvalues(closed(c.a, c.b, k))
			sortRoots(p)
			wantPoles(t, p, c.poles, 1e-9)
		})
	}
}

// Gramians of w²/(s² + 2 z w s + w²) are diag(w/4z, w³/4z) in phase variables (Newton, Gould & Kaiser, Analytical Design
// of Linear Feedback Controls, 1957, tables): H2 norm sqrt(w/4z); 1/(s+2): 1/2.
func TestLyapunov(t *testing.T) {
	const w, z = 2, 0.3
	x, err := Lyapunov(dense([]float64{0, 1}, []float64{-w * w, -2 * z * w}), diag(0, w*w*w*w))
	if err != nil {
		t.Fatal(err)
	}
	wantMatrix(t, x, [][]float64{{w / (4 * z), 0}, {0, w * w * w / (4 * z)}}, 1e-14)
	if got := math.Sqrt(x.At(0, 0)); !near(got, 1.290994448735806, 1e-14) {
		t.Errorf("H2 norm %.16g", got)
	}
	x, err = Lyapunov(diag(-2), diag(1))
	if err != nil || !near(x.At(0, 0), 0.25, 1e-15) {
		t.Errorf("1/(s+2): %v, %v", x, err)
	}
	if _, err := Lyapunov(diag(1), diag(1)); err == nil {
		t.Error("unstable: no refusal")
	}
	// AR(1): variance 1/(1 - a²).
	x, err = DiscreteLyapunov(diag(0.999), diag(1))
	if err != nil || !near(x.At(0, 0)*(1-0.999*0.999), 1, 1e-13) {
		t.Errorf("AR(1): %v, %v", x, err)
	}
	if _, err := DiscreteLyapunov(diag(1), diag(1)); err == nil {
		t.Error("pole on the circle: no refusal")
	}
}

// Van Loan, IEEE Trans. Automatic Control 23 (1978) 395-404; closed forms.
func TestSampledNoise(t *testing.T) {
	const h = 0.05
	for _, c := range []struct {
		name string
		a, q *mat.Dense
		want [][]float64
	}{
		{"scalar pole 3", diag(3), diag(1), [][]float64{{0.0583098012626672}}},
		{"pendulum", dense([]float64{0, 1}, []float64{9, 0}), diag(0, 1),
			[][]float64{{4.18545689550242e-5, 0.00125940317024612}, {0.00125940317024612, 0.0503766911205952}}},
		{"double integrator", dense([]float64{0, 1}, []float64{0, 0}), diag(0, 1),
			[][]float64{{h * h * h / 3, h * h / 2}, {h * h / 2, h}}},
	} {
		t.Run(c.name, func(t *testing.T) {
			_, cov := SampledNoise(c.a, c.q, h)
			for i, row := range c.want {
				for j, v := range row {
					if !near(cov.At(i, j)/v, 1, 1e-13) {
						t.Errorf("(%d,%d): got %.15g, want %.15g", i, j, cov.At(i, j), v)
					}
				}
			}
		})
	}
}
