package fit_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"steadyrig/fit"
)

// register is a maximum-length binary sequence of ±1 from a shift register of so many stages, fed back from the two taps.
func register(rows, stages, tap int) []float64 {
	state := make([]int, stages)
	state[0] = 1
	x := make([]float64, rows)
	for k := range x {
		x[k] = float64(2*state[stages-1] - 1)
		next := state[stages-1] ^ state[tap-1]
		copy(state[1:], state[:stages-1])
		state[0] = next
	}
	return x
}

// Söderström & Stoica, System Identification, 1989, section 5.4: a constant is of order 1, k sines of order 2k, one of them at
// the Nyquist frequency counts once, a maximum-length sequence of period M is of order M, white noise of any. About the mean a line
// at zero is gone. All of that in one record, in three, and under an invertible filter.
func TestExcitationOrder(t *testing.T) {
	const rows, most = 2000, 80
	sines := func(w ...float64) []float64 {
		x := make([]float64, rows)
		for k := range x {
			for i, f := range w {
				x[k] += math.Cos(f*float64(k) + float64(i))
			}
		}
		return x
	}
	plus := func(x []float64, c float64) []float64 {
		y := make([]float64, len(x))
		for k, v := range x {
			y[k] = v + c
		}
		return y
	}
	rnd := rand.New(rand.NewPCG(1, 1))
	white := make([]float64, rows)
	for k := range white {
		white[k] = rnd.NormFloat64()
	}
	for _, c := range []struct {
		name        string
		x           []float64
		with, about int // order with the mean, and about it
	}{
		{"zero", make([]float64, rows), 0, 0},
		{"constant", plus(make([]float64, rows), 5.1), 1, 0},
		{"one sine", sines(0.7), 2, 2},
		{"three sines", sines(0.3, 1.1, 2.2), 6, 6},
		{"three sines and a constant", plus(sines(0.3, 1.1, 2.2), 3), 7, 6},
		{"a sine and the fastest line", sines(0.4, math.Pi), 3, 3},
		{"sequence of period 7", register(rows, 3, 1), 7, 6},
		{"sequence of period 31", register(rows, 5, 2), 31, 30},
		{"white", white, most, most},
	} {
		filtered := make([]float64, rows)
		for k := range filtered {
			filtered[k] = c.x[k]
			if k > 0 {
				filtered[k] += 0.5 * c.x[k-1]
			}
		}
		for _, form := range []struct {
			name string
			x    [][]float64
		}{{"", [][]float64{c.x}}, {", three records", [][]float64{c.x[:700], c.x[700:720], c.x[720:]}}, {", filtered", [][]float64{filtered[1:]}}} {
			for _, constant := range []bool{false, true} {
				want := c.about
				if constant {
					want = c.with
				}
				if got := fit.ExcitationOrder(form.x, fit.ExcitationOptions{Most: most, NoConstant: constant}); got != want {
					t.Errorf("%s%s, mean counted %v: order %d, want %d", c.name, form.name, constant, got, want)
				}
			}
		}
	}
}

// Lines that stand out of the noise count, the noise does not. The least of the eigenvalues of noise alone is no more than the
// first, its mean square, which is twice its expectation in 4 000 rows with a probability of less than 1e-300.
func TestExcitationInNoise(t *testing.T) {
	const rows, sd = 4000, 0.01
	for seed := range uint64(20) {
		rnd := rand.New(rand.NewPCG(seed, 4))
		x, noise := make([]float64, rows), make([]float64, rows)
		for k := range x {
			noise[k] = sd * rnd.NormFloat64()
			x[k] = math.Cos(0.9*float64(k)) + 0.3*math.Cos(2*float64(k)) + noise[k]
		}
		for _, c := range []struct {
			x    []float64
			want int
		}{{x, 4}, {noise, 0}} {
			if got := fit.ExcitationOrder([][]float64{c.x}, fit.ExcitationOptions{Most: 40, Noise: sd}); got != c.want {
				t.Errorf("seed %d: order %d, want %d", seed, got, c.want)
			}
		}
	}
}
