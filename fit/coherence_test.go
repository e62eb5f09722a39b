package fit_test

import (
	"math"
	"math/cmplx"
	"math/rand/v2"
	"testing"

	"gonum.org/v1/gonum/dsp/fourier"
	"gonum.org/v1/gonum/floats"

	"steadyrig/fit"
	"steadyrig/fit/fittest"
	"steadyrig/fit/lti"
)

var octaves = [][2]float64{{0.05, 0.1}, {0.1, 0.2}, {0.2, 0.4}, {0.4, 0.8}, {0.8, 1}} // of the Nyquist frequency

// In closed loop A y = B u + C e under u = -K y + d the input is (A d - K C e) and the output (B d + C e) over A + B K, so that
// spectra and cross spectra with d are known. That of random levels held for h rows is a² |1 + z^-1 + … + z^-(h-1)|²/h. What
// Welch's segments tend to is these under the window's own spectrum: covariances times that of the window.
//
// Errors over SD are about normal, so that their mean over 40 logs is within 4.5/√40 but for a probability of 7e-6, with 60 of
// them 4e-4; their mean square is a chi-square of 40 degrees over 40 and lies in 0.41 to 1.95 but for 1e-4 of each.
func TestCoherenceInClosedLoop(t *testing.T) {
	const rows, logs, length, fine = 6000, 40, 512, 16 * 512
	rigs := fittest.Rigs()
	if testing.Short() {
		rigs = rigs[:2]
	}
	window := make([]float64, length)
	for k := range window {
		window[k] = 1 - math.Cos(2*math.Pi*float64(k)/length)
	}
	taper := make([]float64, length)
	for l := range taper {
		taper[l] = floats.Dot(window[:length-l], window[l:]) / floats.Dot(window, window)
	}
	fft := fourier.NewCmplxFFT(fine)
	tend := func(s []complex128) []complex128 {
		cov := fft.Sequence(nil, s)
		for l := range cov {
			w := 0.0
			if m := min(l, fine-l); m < length {
				w = taper[m] / fine
			}
			cov[l] *= complex(w, 0)
		}
		return fft.Coefficients(nil, cov)
	}
	square := func(z complex128) float64 { return real(z)*real(z) + imag(z)*imag(z) }
	for _, r := range rigs {
		r.Hold = 2
		truth := r.Truth()
		xx := make([]complex128, fine)
		var xy, yy [2][]complex128 // of input and output
		for i := range xy {
			xy[i], yy[i] = make([]complex128, fine), make([]complex128, fine)
		}
		for k := range fine {
			x := cmplx.Exp(complex(0, -2*math.Pi*float64(k)/fine))
			at := func(p []float64) complex128 {
				var v complex128
				for i := len(p) - 1; i >= 0; i-- {
					v = v*x + complex(p[i], 0)
				}
				return v
			}
			a, b, c := at(truth.A), at(truth.B), at(truth.C)
			law := at(r.Law.Inner.Num) / at(r.Law.Inner.Den)
			dither := r.Dither * r.Dither * square(1+x) / 2
			xx[k] = complex(dither, 0)
			for i, part := range [][2]complex128{{a, -law * c}, {b, c}} {
				xy[i][k] = part[0] / (a + b*law) * xx[k]
				yy[i][k] = complex((square(part[0])*dither+square(part[1])*truth.Variance)/square(a+b*law), 0)
			}
		}
		xx = tend(xx)
		for i := range xy {
			xy[i], yy[i] = tend(xy[i]), tend(yy[i])
		}
		// share of the power from outside between two fractions of Nyquist.
		share := func(i int, from, to float64) float64 {
			var explained, all float64
			for k := 1; k < length/2; k++ {
				if w := float64(k) / (length / 2); w >= from && w < to {
					explained += square(xy[i][16*k]) / real(xx[16*k])
					all += real(yy[i][16*k])
				}
			}
			return explained / all
		}
		top := math.Pi / r.Period
		mean, meanSquare := make([]float64, 2*len(octaves)), make([]float64, 2*len(octaves))
		for log := range uint64(logs) {
			u, y, d := r.RecordWithDither(rows, 77, log)
			for i, x := range [][]float64{u, y} {
				e, err := fit.Explain([][][]float64{{d}}, [][]float64{x}, r.Period, length)
				if err != nil {
					t.Fatal(err)
				}
				for j, o := range octaves {
					b, ok := e.Between(o[0]*top, o[1]*top, 0.95)
					if !ok {
						t.Fatalf("%s: nothing between %v of Nyquist", r.Name, o)
					}
					z := (b.Coherence - share(i, o[0], o[1])) / b.SD
					mean[2*j+i] += z / logs
					meanSquare[2*j+i] += z * z / logs
				}
			}
		}
		for j, o := range octaves {
			for i, name := range []string{"input", "output"} {
				want := share(i, o[0], o[1])
				m, s := mean[2*j+i], meanSquare[2*j+i]
				t.Logf("%-25s %v of Nyquist, %-6s coherence %.4f, errors over SD: mean %+.2f, root mean square %.2f", r.Name, o, name, want, m, math.Sqrt(s))
				if !(math.Abs(m) < 4.5/math.Sqrt(logs)) || !(s > 0.41 && s < 1.95) {
					t.Errorf("%s, %v of Nyquist, %s: errors of coherence %.4f over SD: mean %+.2f, mean square %.2f", r.Name, o, name, want, m, s)
				}
			}
		}
	}
}

// Of unrelated signals, each of a spectrum of its own, a band's coherence passes ByChance at 0.95 in one case in twenty: in 10 to 44
// of 500 logs, but for a probability of 2e-4 on each side (binomial). Ten bands are looked at.
func TestCoherenceByChance(t *testing.T) {
	if testing.Short() {
		t.Skip("looks at 1 000 logs")
	}
	const rows, logs, length = 1500, 500, 256
	draw := func(seed, k uint64, slow float64) []float64 {
		rnd := rand.New(rand.NewPCG(seed, k))
		x := make([]float64, rows)
		for i := range x {
			x[i] = rnd.NormFloat64()
		}
		return lti.DTF{Num: lti.Poly{1}, Den: lti.Poly{1, -slow}, Period: 1}.Filter(nil, x)
	}
	for q := 1; q <= 2; q++ {
		above := make([]int, len(octaves))
		var single, bins int
		for log := range uint64(logs) {
			var x [][][]float64
			for i := range q {
				x = append(x, [][]float64{draw(10+uint64(i), log, 0.5)})
			}
			e, err := fit.Explain(x, [][]float64{draw(20, log, 0.7)}, 1, length)
			if err != nil {
				t.Fatal(err)
			}
			for j, o := range octaves {
				b, _ := e.Between(o[0]*math.Pi, o[1]*math.Pi, 0.95)
				if b.Coherence > b.ByChance {
					above[j]++
				}
			}
			if q == 1 {
				for k := 10; k < length/2; k += 4 {
					bins++
					if e.Coherence[k] > fit.CoherenceThreshold(e.Segments, 0.95) {
						single++
					}
				}
			}
		}
		t.Logf("%d signals: above the level in %v of %d logs", q, above, logs)
		for j, n := range above {
			if n < 10 || n > 44 {
				t.Errorf("%d signals, %v of Nyquist: above the level in %d of %d logs", q, octaves[j], n, logs)
			}
		}
		// 500 x 30 single frequencies, as good as independent: 0.05 within five deviations, and a tenth of it for the count of
		// segments being an approximation.
		if p := float64(single) / float64(max(bins, 1)); q == 1 && math.Abs(p-0.05) > 0.005+5*math.Sqrt(0.05*0.95/float64(bins)) {
			t.Errorf("single frequencies: above the threshold in %.4f", p)
		}
	}
}

// Two signals that explain all, in any mixture, explain all; one of two that are the same adds nothing; no record but those long
// enough counts.
func TestExplainTwo(t *testing.T) {
	const n = 3000
	rnd := rand.New(rand.NewPCG(6, 1))
	a, b, y, v := make([]float64, n), make([]float64, n), make([]float64, n), make([]float64, n)
	for k := range a {
		a[k], b[k], v[k] = rnd.NormFloat64(), rnd.NormFloat64(), rnd.NormFloat64()
		b[k] += 0.5 * a[k]
		y[k] = a[k] - 2*b[k]
	}
	explain := func(y []float64, x ...[]float64) *fit.Explained {
		t.Helper()
		var of [][][]float64
		for _, s := range x {
			of = append(of, [][]float64{s[:2000], s[2000:2100], s[2100:]})
		}
		e, err := fit.Explain(of, [][]float64{y[:2000], y[2000:2100], y[2100:]}, 1, 128)
		if err != nil {
			t.Fatal(err)
		}
		return e
	}
	all, one, same := explain(y, a, b), explain(v, a), explain(v, a, a)
	for k := 1; k < len(all.Omega); k++ {
		if math.Abs(all.Coherence[k]-1) > 1e-10 {
			t.Fatalf("bin %d: coherence %v with all that made it", k, all.Coherence[k])
		}
		if math.Abs(one.Coherence[k]-same.Coherence[k]) > 1e-9 {
			t.Fatalf("bin %d: %v with a signal, %v with it twice", k, one.Coherence[k], same.Coherence[k])
		}
	}
	if _, ok := all.Between(1, 1.001, 0.95); ok {
		t.Error("a band without a frequency is told of")
	}
	if _, err := fit.Explain([][][]float64{{a[:10]}}, [][]float64{y[:10]}, 1, 64); err == nil {
		t.Error("a record shorter than a segment is taken")
	}
}

func TestSegmentLength(t *testing.T) {
	for _, c := range []struct {
		rows              []int
		count, most, want int
	}{{[]int{8000}, 7, 1 << 14, 1024}, {[]int{1 << 20}, 7, 1 << 14, 1 << 14}, {[]int{300, 300, 300, 300}, 7, 1 << 14, 128}, {[]int{7}, 1, 64, 0}, {[]int{32}, 7, 64, 8}} {
		var x [][]float64
		for _, n := range c.rows {
			x = append(x, make([]float64, n))
		}
		if got := fit.SegmentLength(x, c.count, c.most); got != c.want {
			t.Errorf("%v: %d, want %d", c, got, c.want)
		}
	}
}
